"""`assemble`: the one place where files are read, stages run in order, and a generation is published."""

import json
import os
import socket
import time
from collections.abc import Callable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pandas as pd

from keelbook import __version__, findings
from keelbook.assembly import plan
from keelbook.assembly.declaration import Assembly, load_assembly
from keelbook.assembly.identity import Identity, identify
from keelbook.blocks import Block, SeriesIndex
from keelbook.contracts.measures import load_measures
from keelbook.contracts.parameters import load_parameters
from keelbook.contracts.screening_rules import load_screening_rules
from keelbook.contracts.tables import load_tables
from keelbook.errors import Problem, StopFindings
from keelbook.frames import coded, constant
from keelbook.stages import panel
from keelbook.stages.acceptances import accept
from keelbook.stages.base import Book, Inputs, Stage
from keelbook.stages.catalogue import STAGES
from keelbook.stages.harmonise import ObservedBlock, harmonise, observed_blocks
from keelbook.stages.intake import Intake, source_paths, take_in
from keelbook.stages.screening import screen
from keelbook.stages.screening_report import ScreeningContext
from keelbook.store import generations
from keelbook.store.append import append
from keelbook.store.connect import open_new
from keelbook.store.writer import Writer

EVIDENCE_TABLES = (
    "source_file",
    "source_cell",
    "observation_series",
    "observation",
    "rejected_cell",
    "correction",
    "finding",
)


@dataclass(frozen=True)
class Report:
    """What a run did, for the summary and for machines."""

    assembly: Assembly
    identity: Identity
    folder: Path
    unchanged: bool
    findings: pd.DataFrame
    counts: pd.DataFrame
    stages: pd.DataFrame
    seconds: float


class Log:
    """One JSON line per event: the only place where times, hosts and users are kept."""

    def __init__(self, narrate: Callable[[str], None]) -> None:
        self._narrate = narrate
        self._started = time.monotonic()
        self.lines: list[str] = []
        self.say("run", host=socket.gethostname(), user=str(os.getuid()), version=__version__)

    def say(self, event: str, **facts: Any) -> None:
        stamp = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())
        self.lines.append(json.dumps({"time": stamp, "after": self.seconds, "event": event, **facts}))

    def step(self, text: str, **facts: Any) -> None:
        self._narrate(text)
        self.say(text, **facts)

    @property
    def seconds(self) -> float:
        return round(time.monotonic() - self._started, 3)


def assemble(
    folder: Path,
    out: Path | None = None,
    *,
    strict: bool = False,
    narrate: Callable[[str], None] = lambda _: None,
) -> Report:
    """Build an assembly and publish the result, or say that nothing changed.

    Raises:
        DeclarationError, SourceMissing, LockHeld: nothing was published.
        StopFindings: a `stop` finding stands (or a `warn` under `strict`); the published build is untouched and
            what was found lies in the folder `refused`.
    """
    log = Log(narrate)
    assembly = load_assembly(folder)
    target = out or folder / "build"
    paths = source_paths(assembly)
    identity = identify(assembly, paths)
    now = generations.current(target)
    if now is not None and now.name == identity.build_id:
        return _unchanged(assembly, identity, now, log, strict)
    with generations.writing(target) as work:
        evidence = open_new(work / generations.EVIDENCE, paths.values())
        tables = load_tables()
        for name in EVIDENCE_TABLES:
            evidence.execute(tables[name].create_sql())
        try:
            taken = take_in(evidence, assembly, assembly.lists, load_measures(), progress=log.step)
            append(evidence, tables["correction"], taken.corrections)
            found = [taken.findings, _screened(evidence, assembly, taken)]
            log.step("screened", findings=len(found[0]) + len(found[1]))
            judged = _judged(assembly, findings.concat(found), screening_only=True)
            _stop_if_refused(judged, strict, evidence, tables, work, target, log)
            panel_file = open_new(work / generations.PANEL)
            writer = Writer(
                panel_file, evidence, tables, assembly.lists, load_measures(), _currencies(assembly)
            )
            observations = len(taken.observations)
            observed, taken = _observed(assembly, taken), replace(taken, observations=pd.DataFrame())
            _write_observations(observed, evidence, tables, assembly)
            observed = [item.without_rows() for item in observed]
            rows = [(0, "intake", 0, observations, 0, "")]
            rows += _build(assembly, observed, writer, found, log)
            everything = _judged(assembly, findings.concat(found))
            _stop_if_refused(everything, strict, evidence, tables, work, target, log, panel_file)
            stage_rows = pd.DataFrame(rows, columns=list(tables["stage_run"].column)).astype(
                {"stage": "str", "note": "str"}
            )
            writer.insert("stage_run", stage_rows)
            writer.insert("finding", _numbered(writer.withheld(everything)))
            append(evidence, tables["finding"], _numbered(everything), assembly.lists)
            writer.insert("build", _build_row(assembly, identity))
            writer.finish()
            panel_file.close()
        finally:
            evidence.close()
        log.say("written")
        (work / generations.LOG).write_text("\n".join(log.lines) + "\n", encoding="utf-8")
        published = generations.publish(work, target, identity.build_id)
    return Report(assembly, identity, published, False, everything, taken.counts, stage_rows, log.seconds)


def screen_only(
    folder: Path, *, narrate: Callable[[str], None] = lambda _: None
) -> tuple[Assembly, Intake, pd.DataFrame]:
    """Read and screen the sources of an assembly without writing anything."""
    assembly = load_assembly(folder)
    paths = source_paths(assembly)
    with duckdb.connect() as con:
        tables = load_tables()
        for name in EVIDENCE_TABLES:
            con.execute(tables[name].create_sql())
        con.execute("set enable_progress_bar = false")
        taken = take_in(con, assembly, assembly.lists, load_measures(), progress=narrate)
        found = findings.concat([taken.findings, _screened(con, assembly, taken)])
        found = _judged(assembly, found, screening_only=True)
    del paths
    return assembly, taken, found


def _unchanged(assembly: Assembly, identity: Identity, now: Path, log: Log, strict: bool) -> Report:
    from keelbook.store.connect import open_read

    with open_read(now / generations.PANEL) as con:
        found = con.execute("select * exclude (finding_id) from finding order by finding_id").df()
        stages = con.execute("select * from stage_run order by position").df()
    found = findings.frame(found)
    raise_if_refused(found, strict, now)
    return Report(assembly, identity, now, True, found, pd.DataFrame(), stages, log.seconds)


def _judged(assembly: Assembly, found: pd.DataFrame, *, screening_only: bool = False) -> pd.DataFrame:
    """Return the findings with the accepted ones marked, and one for each acceptance that no longer holds.

    With `screening_only`, acceptances of what later stages may find are left aside.
    """
    rules = load_screening_rules(assembly.folder)
    entries = assembly.acceptances
    if screening_only:
        known = {rule.id for rule in rules} | set(found["rule"])
        entries = tuple(entry for entry in entries if entry.said.rule in known)
    acceptable = {rule.id for rule in rules if rule.acceptable}
    return findings.concat(accept(found, entries, assembly.sheets(), acceptable))


def _screened(con: duckdb.DuckDBPyConnection, assembly: Assembly, taken: Intake) -> pd.DataFrame:
    def sheet_of(cells: Sequence[int]) -> list[str]:
        wanted = ", ".join(str(int(cell)) for cell in cells)
        if not wanted:
            return []
        rows = con.execute(f"select cell_id, sheet from source_cell where cell_id in ({wanted})").fetchall()
        by_cell = dict(rows)
        return [str(by_cell.get(int(cell), "")) for cell in cells]

    labels: dict[str, dict[str, str]] = {}
    for source in assembly.sources:
        for dim, codes in source.codes.items():
            labels.setdefault(dim, {}).update(codes)
    context = ScreeningContext(
        period=assembly.period,
        reference_year=assembly.reference_year,
        lists=assembly.lists,
        measures=load_measures(),
        files=dict(zip(taken.sources["file_id"].tolist(), taken.sources["file"].tolist(), strict=True)),
        sheet_of=sheet_of,
        labels=labels,
    )
    return screen(taken.observations, load_screening_rules(assembly.folder), context)


def _observed(assembly: Assembly, taken: Intake) -> list[ObservedBlock]:
    params = plan.harmonise_params(assembly, load_parameters(assembly))
    return observed_blocks(taken.observations, plan.code_table(assembly), _years(assembly), params)


def _years(assembly: Assembly) -> range:
    """Return the period axis of every block: one year is kept before the first, for opening stocks."""
    return range(assembly.period[0] - 1, assembly.period[1] + 1)


def _build(
    assembly: Assembly,
    observed: Sequence[ObservedBlock],
    writer: Writer,
    found: list[pd.DataFrame],
    log: Log,
) -> list[tuple[Any, ...]]:
    """Run every stage, some areas at a time, and write what they give. Returns the rows of `stage_run`."""
    parameters = load_parameters(assembly)
    params = plan.harmonise_params(assembly, parameters)
    delivered = harmonise(observed, _years(assembly), params)
    found.append(findings.frame(delivered.findings))
    tally = {"harmonise": [0, 0, len(delivered.findings)]}
    for stage in STAGES:
        tally[stage.name] = [0, 0, 0]
    log.step("harmonised")
    by_stage = plan.stage_params(assembly, parameters)
    book = Book(delivered.blocks)
    batches = _batches(list(book))
    # One batch is written while the next one is computed: a single writer, so that the order stays.
    with ThreadPoolExecutor(max_workers=1) as pool:
        written: Future[None] | None = None
        for number, (first, last) in enumerate(batches, 1):
            mine = Book(block.take(_slice(block.series, first, last)) for block in book)
            _count(tally["harmonise"], list(mine))
            for stage in STAGES:
                _run_stage(stage, mine, by_stage[stage.name], tally[stage.name], found)
            if written is not None:
                written.result()
            written = pool.submit(_write_batch, writer, mine)
            log.step(f"computed areas, batch {number} of {len(batches)}")
        if written is not None:
            written.result()
    return [
        (position, name, series, figures, count, "")
        for position, (name, (series, figures, count)) in enumerate(tally.items(), 1)
    ]


def _run_stage(
    stage: Stage[Any], book: Book, params: Any, tally: list[int], found: list[pd.DataFrame]
) -> None:
    """Run one stage on a book, add what it gives, and hold it to what it declares."""
    if not all(book.get(key) is not None for key in stage.needs):
        return
    result = stage.run(Inputs(book, stage.needs, stage.optional), params)
    given = {block.key for block in result.blocks}
    if not given <= stage.gives:
        raise RuntimeError(f"stage {stage.name} gave {given - stage.gives}, which it does not declare")
    book.add(result.blocks)
    _count(tally, result.blocks)
    tally[2] += len(result.findings)
    found.append(findings.frame(result.findings))


def _write_batch(writer: Writer, book: Book) -> None:
    """Write everything of one batch: series, figures, and the rows of the two wide tables."""
    writer.write(book)
    for name, frame in (
        ("decomposition_input", panel.inputs_of(book)),
        ("decomposition", panel.decomposition_of(book)),
    ):
        if len(frame):
            writer.insert(name, frame)


BATCH = 2000
"""Series of the largest input that are computed together: fewer cost time for each batch, more cost memory."""


def _batches(blocks: Sequence[Block]) -> list[tuple[int, int]]:
    """Return spans of areas (first, last) that hold about `BATCH` series of the largest block each."""
    sizes: dict[int, int] = {}
    for block in blocks:
        for area, count in zip(*np.unique(block.series.digit("area"), return_counts=True), strict=True):
            sizes[int(area)] = max(sizes.get(int(area), 0), int(count))
    spans: list[tuple[int, int]] = []
    held = BATCH
    for area in sorted(sizes):
        if held + sizes[area] > BATCH:
            spans.append((area, area))
            held = 0
        spans[-1] = (spans[-1][0], area)
        held += sizes[area]
    return spans


def _slice(series: SeriesIndex, first: int, last: int) -> Any:
    """Return the positions of some areas: series are sorted by area first, so they lie together."""
    digits = series.digit("area")
    return np.arange(*np.searchsorted(digits, [first, last + 1]))


def _count(tally: list[int], blocks: Sequence[Any]) -> None:
    for block in blocks:
        tally[0] += len(block.series)
        tally[1] += int(np.isfinite(block.value).sum())


def _write_observations(
    observed: Sequence[ObservedBlock], evidence: duckdb.DuckDBPyConnection, tables: Any, assembly: Assembly
) -> None:
    first = 0
    for item in observed:
        n = len(item.block.series)
        series = {
            "observation_series_id": np.arange(first, first + n, dtype=np.int32),
            "source": constant(item.source, n),
            "measure": constant(item.block.key.measure, n),
            **{
                dim: coded(item.block.series.digit(dim), codes)
                for dim, codes in item.block.series.table.codes.items()
            },
            "price_basis": constant(item.block.key.price_basis, n),
            "frequency": constant(item.frequency, n),
            "unit_mult": np.full(n, item.unit_mult, np.int8),
        }
        rows = pd.DataFrame(
            {
                "observation_series_id": item.column + np.int32(first),
                **{
                    name: item.rows[name].to_numpy()
                    for name in ("period", "value", "obs_status", "conf_status", "cell_id")
                },
            }
        )
        for name, frame in (("observation_series", pd.DataFrame(series)), ("observation", rows)):
            append(evidence, tables[name], frame, assembly.lists)
        first += n


def _refused(found: pd.DataFrame, strict: bool) -> pd.DataFrame:
    blocking = ("stop", "warn") if strict else ("stop",)
    return found[found["severity"].isin(blocking) & (found["accepted_by"] == "")]


def raise_if_refused(found: pd.DataFrame, strict: bool, where: Path) -> None:
    blocking = _refused(found, strict)
    if len(blocking):
        raise StopFindings([as_problem(row) for row in blocking.to_dict("records")])


def _stop_if_refused(
    found: pd.DataFrame,
    strict: bool,
    evidence: duckdb.DuckDBPyConnection,
    tables: Any,
    work: Path,
    out: Path,
    log: Log,
    panel_file: duckdb.DuckDBPyConnection | None = None,
) -> None:
    if not len(_refused(found, strict)):
        return
    append(evidence, tables["finding"], _numbered(found))
    evidence.close()
    if panel_file is not None:
        panel_file.close()
    log.say("refused", findings=len(found))
    (work / generations.LOG).write_text("\n".join(log.lines) + "\n", encoding="utf-8")
    generations.refuse(work, out)
    raise_if_refused(found, strict, out)


def _numbered(found: pd.DataFrame) -> pd.DataFrame:
    out = found.reset_index(drop=True)
    out.insert(0, "finding_id", np.arange(len(out), dtype=np.int64))
    return out


def as_problem(row: dict[Any, Any]) -> Problem:
    """Return a finding in the form in which every error is printed."""
    place = []
    if row["sheet"]:
        place.append(f"sheet '{row['sheet']}'")
    if not pd.isna(row["row"]) and not pd.isna(row["column"]):
        place.append(
            f"cell {_address(int(row['row']), int(row['column']))}"
            if row["sheet"]
            else f"line {row['row']}, column {row['column']}"
        )
    elif not pd.isna(row["row"]):
        place.append(f"row {row['row']}" if row["sheet"] else f"line {row['row']}")
    key = "/".join(
        row[name]
        for name in ("measure", "area", "sector", "industry", "asset", "worker_group", "time_period")
        if row[name] not in ("", "_T", "_Z")
    )
    accepted = f", accepted by {row['accepted_by']} on {row['accepted_on']}" if row["accepted_by"] else ""
    reason = f"; accepted because {row['accepted_reason']}" if accepted else ""
    return Problem(
        f"[{row['severity']} {row['rule']}{accepted}] {row['message']}{f' ({key})' if key else ''}{reason}",
        row["file"],
        ", ".join(place),
        found=row["found"],
        expected=row["expected"],
        remedy=row["remedy"],
    )


def _address(row: int, column: int) -> str:
    letters = ""
    while column:
        column, rest = divmod(column - 1, 26)
        letters = chr(65 + rest) + letters
    return f"{letters}{row}"


def _currencies(assembly: Assembly) -> dict[str, str]:
    """Return the currency of every area: that of its sources, else of the assembly."""
    out = dict.fromkeys(assembly.lists.codes("area"), assembly.currency)
    for source in assembly.sources:
        if source.currency and source.area:
            out[source.area] = source.currency
    return out


def _build_row(assembly: Assembly, identity: Identity) -> pd.DataFrame:
    return pd.DataFrame(
        [
            {
                "build_id": identity.build_id,
                "title": assembly.title,
                "area": assembly.area,
                "currency": assembly.currency,
                "reference_year": assembly.reference_year,
                "first_year": assembly.period[0],
                "last_year": assembly.period[1],
                "version": __version__,
                "source_hash": identity.sources,
                "rules_hash": identity.rules,
                "code_hash": identity.code,
            }
        ]
    )
