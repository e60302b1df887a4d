"""What is nobody's declared fault: another run, a crash, a kill, and files changed behind our back."""

import os
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import duckdb
import pytest
from click.testing import CliRunner
from filelock import FileLock

from keelbook.cli.main import main
from keelbook.store.connect import open_read
from keelbook.store.generations import write_manifest

CONTENT = "select count(*), bit_xor(hash(period, value)) from figure"


def change_a_source(folder: Path) -> None:
    path = folder / "sources" / "persons_employed.csv"
    path.write_bytes(path.read_bytes().replace(b";103.9;", b";103.7;", 1))


def test_a_second_writer_is_told_to_wait(published: Path, refused: Callable[..., Any]) -> None:
    change_a_source(published)
    with FileLock(published / "build" / ".lock"):
        refusal = refused("assemble", published, "--quiet")
    assert refusal.code == 4
    assert "another run is writing here" in refusal.text
    assert str(published / "build") in refusal.text
    assert "to do: wait for that run to end and start again" in refusal.text
    assert CliRunner().invoke(main, ["assemble", str(published), "--quiet"]).exit_code == 0


def test_readers_need_no_lock(published: Path) -> None:
    with FileLock(published / "build" / ".lock"):
        assert CliRunner().invoke(main, ["decompose", str(published)]).exit_code == 0


def test_a_fault_of_the_program_ends_with_code_1(
    published: Path, refused: Callable[..., Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*_: object) -> None:
        raise ZeroDivisionError("by design of this test")

    change_a_source(published)
    monkeypatch.setattr("keelbook.store.writer.Writer.finish", broken)
    refusal = refused("assemble", published, "--quiet")
    assert refusal.code == 1
    assert "internal error: ZeroDivisionError: by design of this test" in refusal.text
    assert "nothing was published" in refusal.text
    assert "KEELBOOK_TRACEBACK=1" in refusal.text


KILLED = """
import sys, time
from pathlib import Path
from keelbook.assembly.run import assemble
from keelbook.store import generations, writer

def wait(*_, **__):
    print("waiting", flush=True)
    time.sleep(120)

setattr({target}, "{name}", wait)
assemble(Path(sys.argv[1]))
"""


@pytest.mark.parametrize(
    ("target", "name"),
    [
        ("writer.Writer", "insert"),
        ("writer.Writer", "finish"),
        ("generations", "publish"),
        ("generations", "_link"),
    ],
)
def test_a_killed_run_leaves_the_published_build_and_the_next_run_succeeds(
    target: str, name: str, published: Path
) -> None:
    """Killed while writing, with everything written, before publishing, and just before the switch."""
    build = published / "build"
    old = os.readlink(build / "current")
    with open_read(build / "panel.duckdb") as con:
        before = con.execute(CONTENT).fetchall()
    change_a_source(published)
    code = KILLED.format(target=target, name=name)
    with subprocess.Popen(
        [sys.executable, "-c", code, str(published)], stdout=subprocess.PIPE, text=True
    ) as run:
        try:
            assert run.stdout is not None
            assert run.stdout.readline() == "waiting\n"
        finally:
            run.send_signal(signal.SIGKILL)
    assert run.returncode == -signal.SIGKILL
    assert os.readlink(build / "current") == old
    with open_read(build / "panel.duckdb") as con:
        assert con.execute(CONTENT).fetchall() == before
    result = CliRunner().invoke(main, ["assemble", str(published), "--quiet"])
    assert result.exit_code == 0, result.stderr
    assert "Read " in result.stdout
    assert not list(build.glob(".work-*"))
    new = os.readlink(build / "current")
    assert new != old
    assert {path.name for path in build.iterdir() if path.is_dir() and not path.is_symlink()} == {old, new}
    with open_read(build / "panel.duckdb") as con:
        assert con.execute("select count(*) from build").fetchall() == [(1,)]
    assert CliRunner().invoke(main, ["verify", str(published), "--figures", "1"]).exit_code == 0


@pytest.fixture
def tampered(published: Path) -> Path:
    """Return an assembly whose published net stock of 2015 was raised by one in a thousand."""
    file = (published / "build" / "panel.duckdb").resolve()
    with duckdb.connect(str(file)) as con:
        con.execute(
            "update figure set value = value * 1.001 where period = 2015 and series_id = (select series_id from series "
            "where measure = 'net_stock' and method = 'perpetual_inventory' and price_basis = 'constant' "
            "and area = 'XV' and sector = 'S11' and industry = 'C' and asset = 'N1132')"
        )
    return published


MANUFACTURING = ("net_stock", "--area", "XV", "--sector", "S11", "--industry", "C")
TRACE = (*MANUFACTURING, "--asset", "N1132", "--year", "2015")


def test_trace_notices_a_changed_figure(tampered: Path) -> None:
    result = CliRunner().invoke(main, ["trace", str(tampered), *TRACE])
    assert result.exit_code == 5
    assert "net_stock[XV S11 C N1132] (perpetual_inventory, constant) in 2015" in result.stderr
    assert "the stored figure differs from its re-performance" in result.stderr
    for part in ("found: ", "expected: ", "to do: "):
        assert part in result.stderr
    assert "Traceback" not in result.output


def test_trace_notices_a_changed_figure_on_the_way(tampered: Path) -> None:
    arguments = ["trace", str(tampered), *MANUFACTURING, "--asset", "_T", "--year", "2015"]
    result = CliRunner().invoke(main, arguments)
    assert result.exit_code == 5
    assert "net_stock[XV S11 C] (sum_of_parts, constant) in 2015" in result.stderr


def test_trace_of_an_untouched_figure_still_works(tampered: Path) -> None:
    arguments = ["trace", str(tampered), *MANUFACTURING, "--asset", "N1132", "--year", "2014"]
    assert CliRunner().invoke(main, arguments).exit_code == 0


def test_verify_names_the_changed_file(tampered: Path) -> None:
    result = CliRunner().invoke(main, ["verify", str(tampered), "--figures", "1"])
    assert result.exit_code == 5
    assert "panel.duckdb: the file is not the one that was published" in result.stderr
    assert "evidence.duckdb: the file" not in result.stderr


def test_verify_names_the_changed_figure_though_the_hashes_were_rewritten(
    demo_build: Path, published: Path
) -> None:
    """A first figure of a form, which every sample holds."""
    folder = (published / "build" / "panel.duckdb").resolve().parent
    with duckdb.connect(str(folder / "panel.duckdb")) as con:
        con.execute(
            "update figure set value = value + 1e-6 where (series_id, period) = (select (min(series_id), 1985) "
            "from series where measure = 'labour_share' and method = 'hours')"
        )
    write_manifest(folder)
    result = CliRunner().invoke(main, ["verify", str(published), "--figures", "1"])
    assert result.exit_code == 5
    assert "the file is not the one" not in result.stderr
    assert "labour_share[XV] (hours) in 1985" in result.stderr
    assert CliRunner().invoke(main, ["verify", str(demo_build), "--figures", "1"]).exit_code == 0


def test_verify_names_a_file_that_is_gone(published: Path) -> None:
    ((published / "build" / "panel.duckdb").resolve().parent / "log.jsonl").unlink()
    result = CliRunner().invoke(main, ["verify", str(published), "--figures", "1"])
    assert result.exit_code == 5
    assert "log.jsonl" in result.stderr


def test_a_place_without_a_build(tmp_path: Path) -> None:
    result = CliRunner().invoke(main, ["trace", str(tmp_path), *TRACE])
    assert result.exit_code == 2
    assert "no published build here" in result.stderr
    assert f"run: keelbook assemble {tmp_path}" in result.stderr
