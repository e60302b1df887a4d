"""Verify: files against their hashes, and figures against their own re-performance."""

from itertools import groupby
from pathlib import Path
from typing import Any

from keelbook.audit.reading import Build, panel_path
from keelbook.audit.trace import differing
from keelbook.errors import NotReproduced, Problem
from keelbook.store.generations import MANIFEST, changed_files


def verify(place: Path, per_form: int | None) -> dict[str, Any]:
    """Check a build; `per_form` figures of each measure, method and price basis are re-performed, None for all.

    The sample is evenly spread over series and years, so that the same build gives the same sample.

    Raises:
        NotReproduced: every file that changed and every figure that differs.
    """
    folder = panel_path(place).parent
    problems = [
        Problem(
            "the file is not the one that was published",
            str(folder / name),
            expected=f"the hash in {MANIFEST}",
            remedy="do not use this build: assemble again, and ask who changed the file",
        )
        for name in changed_files(folder)
    ]
    with Build(folder) as build:
        chosen = build.rows(
            """
            with numbered as (
                select f.series_id, f.period, row_number() over w - 1 as n, count(*) over v as size
                from figure f join series s using (series_id)
                where f.value is not null
                window w as (partition by s.measure, s.method, s.price_basis order by f.series_id, f.period),
                       v as (partition by s.measure, s.method, s.price_basis)
            )
            select series_id, period from numbered
            where ? is null or n % greatest(size // ?, 1) = 0
            order by series_id, period
            """,
            (per_form, per_form or 1),
        )
        by_number = {s.series_id: s for s in build.series({})} if chosen else {}
        for number, pairs in groupby(chosen, key=lambda pair: pair[0]):
            series = by_number[number]
            for year, stored, again in differing(build, series, [year for _, year in pairs]):
                problems.append(
                    Problem(
                        "the stored figure differs from its re-performance",
                        str(build.path),
                        f"{series.label} in {year}",
                        found=repr(stored),
                        expected=repr(again),
                        remedy="do not use this build: assemble again, and ask who changed the file",
                    )
                )
        measures = len({by_number[number].key["measure"] for number, _ in chosen})
    if problems:
        raise NotReproduced(problems)
    files = len((folder / MANIFEST).read_text(encoding="utf-8").splitlines())
    return {"files": files, "manifest": str(folder / MANIFEST), "figures": len(chosen), "measures": measures}
