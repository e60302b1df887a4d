"""Building again: the same inputs, nothing changed, a changed rule, another place, readers meanwhile."""

import hashlib
import json
import os
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest

from keelbook.assembly.run import assemble
from keelbook.store.connect import open_read

Run = Callable[..., "subprocess.CompletedProcess[str]"]
Copy = Callable[[str, Path], Path]


def content(file: Path) -> dict[str, pd.DataFrame]:
    """Return every table and view of a database, rows sorted by all columns."""
    with open_read(file) as con:
        names = con.execute(
            "select table_name from duckdb_tables() union select view_name from duckdb_views() where not internal"
        ).fetchall()
        return {
            name: con.execute(f'select * from "{name}" order by all').df().convert_dtypes()
            for (name,) in sorted(names)
        }


def state(folder: Path) -> dict[str, tuple[str, int]]:
    """Return hash and time of change of every file of a build folder, links as what they say."""
    out = {}
    for path in sorted(folder.rglob("*")):
        if path.is_symlink():
            out[str(path.relative_to(folder))] = (os.readlink(path), path.lstat().st_mtime_ns)
        elif path.is_file():
            digest = hashlib.sha256(path.read_bytes()).hexdigest()
            out[str(path.relative_to(folder))] = (digest, path.stat().st_mtime_ns)
    return out


def test_same_inputs_give_the_same_id_and_the_same_content(
    demo_build: Path, copy_fixture: Copy, tmp_path: Path, keelbook: Run
) -> None:
    """The second build is made in another process, with other hash seeds, in a folder of its own by --out."""
    folder, out = copy_fixture("demo", tmp_path / "again"), tmp_path / "elsewhere"
    done = keelbook("assemble", folder, "--out", out, "--json", PYTHONHASHSEED="4711")
    assert done.returncode == 0, done.stderr
    reply = json.loads(done.stdout)
    assert not (folder / "build").exists()
    assert reply["build_id"] == os.readlink(demo_build / "build" / "current") == os.readlink(out / "current")
    for file in ("panel.duckdb", "evidence.duckdb"):
        first, second = content(demo_build / "build" / file), content(out / file)
        assert list(first) == list(second)
        assert sum(map(len, first.values())) > 6000
        for name, table in first.items():
            pd.testing.assert_frame_equal(table, second[name], check_exact=True, obj=f"{file} {name}")


def test_unchanged_says_so_and_leaves_every_file_alone(demo_build: Path, keelbook: Run) -> None:
    before = state(demo_build / "build")
    done = keelbook("assemble", demo_build)
    assert done.returncode == 0, done.stderr
    assert "Unchanged  sources, rules and code are those of build" in done.stdout
    assert "Read " not in done.stdout
    assert len(done.stdout.splitlines()) <= 25
    assert state(demo_build / "build") == before
    reply = json.loads(keelbook("assemble", demo_build, "--json").stdout)
    assert reply["unchanged"] is True
    assert state(demo_build / "build") == before


@pytest.fixture
def published(demo_build: Path, tmp_path: Path) -> Path:
    """Return a copy of the assembled demo that a test may build again."""
    return Path(shutil.copytree(demo_build, tmp_path / "demo", symlinks=True))


def test_a_changed_rule_gives_another_build_beside_the_old_one_whose_readers_go_on(published: Path) -> None:
    build, sql = published / "build", "select value from panel where measure = 'net_stock' order by all"
    old_id = os.readlink(build / "current")
    old = state(build / old_id)
    declared = published / "assembly.toml"
    with declared.open("a", encoding="utf-8") as file:
        file.write('\n[rules.capital.timing]\nvalue = "end"\ncitation = "decision of the accounts unit"\n')
    line = declared.read_text(encoding="utf-8").splitlines().index("[rules.capital.timing]") + 1
    with open_read(build / "panel.duckdb") as reader:
        before = reader.execute(sql).fetchall()
        report = assemble(published)
        assert reader.execute(sql).fetchall() == before
    assert not report.unchanged
    assert report.identity.build_id != old_id
    assert os.readlink(build / "current") == report.identity.build_id
    assert state(build / old_id) == old
    with open_read(build / "panel.duckdb") as reader:
        assert reader.execute(sql).fetchall() != before
        used = reader.execute(
            "select distinct m.setting, m.file, m.line, m.citation from method_used m join series s using (series_id)"
            " where s.measure = 'net_stock' and m.name = 'capital.timing'"
        ).fetchall()
        first, opening = (
            reader.execute(
                "select value from panel where measure = 'net_stock' and price_basis = 'constant' and industry = 'C' "
                "and asset = 'N1173' and method = ? order by time_period limit 1",
                [method],
            ).fetchall()[0][0]
            for method in ("perpetual_inventory", "steady_state")
        )
        flow = reader.execute(
            "select value from panel where measure = 'investment' and price_basis = 'constant' and industry = 'C' "
            "and asset = 'N1173' and time_period = '1985'"
        ).fetchall()[0][0]
    assert [row[0] for row in used] == ["end"]
    assert used[0][1].endswith("assembly.toml")
    assert line <= used[0][2] <= line + 2
    assert used[0][3] == "decision of the accounts unit"
    # At the end of the year new investment is still whole, and a third of the software before it is gone.
    assert first == pytest.approx(opening * (1 - 0.33) + flow, rel=1e-12)


def test_one_byte_more_in_a_source_is_a_change_though_the_figures_are_the_same(published: Path) -> None:
    """The id rests on the bytes of the sources, not on what was read from them."""
    path = published / "sources" / "persons_employed.csv"
    path.write_bytes(path.read_bytes() + b"\n")
    report = assemble(published)
    assert not report.unchanged
    generations = [p for p in (published / "build").iterdir() if p.is_dir() and not p.is_symlink()]
    assert len(generations) == 2
    first, second = (content(folder / "panel.duckdb")["panel"] for folder in generations)
    pd.testing.assert_frame_equal(first, second, check_exact=True)
