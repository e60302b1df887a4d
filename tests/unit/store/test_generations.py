import hashlib
import os
import stat

import duckdb
import pytest

from keelbook.errors import LockHeld
from keelbook.store import generations
from keelbook.store.connect import open_new, open_read
from keelbook.store.generations import EVIDENCE, LOG, MANIFEST, PANEL


def _fill(work, value):
    """Write a panel that holds one number, and the other files of a generation."""
    for name in (PANEL, EVIDENCE):
        con = open_new(work / name)
        con.execute(f"create table t as select {value} as x")
        con.close()
    (work / LOG).write_text("{}\n", encoding="utf-8")


def _published(out, build_id, value):
    with generations.writing(out) as work:
        _fill(work, value)
        return generations.publish(work, out, build_id)


def _value(path):
    with open_read(path) as con:
        return con.execute("select x from t").fetchone()[0]


def test_a_generation_is_published_with_links_to_it(tmp_path):
    out = tmp_path / "build"
    assert generations.current(out) is None
    folder = _published(out, "aaa", 1)
    assert folder == out / "aaa"
    assert generations.current(out) == folder
    assert {p.name for p in folder.iterdir()} == {PANEL, EVIDENCE, LOG, MANIFEST}
    assert (out / PANEL).is_symlink()
    assert _value(out / PANEL) == _value(out / EVIDENCE) == 1
    assert sorted(p.name for p in out.iterdir()) == [".lock", "aaa", "current", EVIDENCE, PANEL]


def test_the_evidence_is_for_its_owner_alone(tmp_path):
    folder = _published(tmp_path / "build", "aaa", 1)
    assert stat.S_IMODE((folder / EVIDENCE).stat().st_mode) == 0o600


def test_both_files_change_together_and_the_old_generation_stays(tmp_path):
    out = tmp_path / "build"
    old = _published(out, "aaa", 1)
    reader = open_read(out / PANEL)
    _published(out, "bbb", 2)
    assert reader.execute("select x from t").fetchone()[0] == 1
    reader.close()
    assert _value(old / PANEL) == 1
    assert _value(out / PANEL) == _value(out / EVIDENCE) == 2
    # One link decides: the links to the files go through it, and are not touched by a switch.
    assert os.readlink(out / PANEL) == f"current/{PANEL}"
    assert os.readlink(out / "current") == "bbb"


def test_a_run_that_fails_leaves_the_published_generation_and_no_work(tmp_path):
    out = tmp_path / "build"
    _published(out, "aaa", 1)

    def fail():
        with generations.writing(out) as work:
            (work / PANEL).write_bytes(b"half")
            raise RuntimeError("half way")

    with pytest.raises(RuntimeError, match="half way"):
        fail()
    assert _value(out / PANEL) == 1
    assert not list(out.glob(".work-*"))
    _published(out, "bbb", 2)
    assert _value(out / PANEL) == 2


def test_what_a_killed_run_left_is_removed_by_the_next(tmp_path):
    out = tmp_path / "build"
    stray = out / ".work-99999"
    stray.mkdir(parents=True)
    (stray / PANEL).write_bytes(b"half")
    with generations.writing(out) as work:
        assert not stray.exists()
        assert list(work.iterdir()) == []


def test_a_database_that_was_not_closed_is_not_published(tmp_path):
    out = tmp_path / "build"
    with generations.writing(out) as work:
        _fill(work, 1)
        (work / f"{PANEL}.wal").write_bytes(b"x")
        with pytest.raises(RuntimeError, match="not closed"):
            generations.publish(work, out, "aaa")
    assert generations.current(out) is None


def test_only_one_writer_at_a_time(tmp_path):
    out = tmp_path / "build"
    with generations.writing(out) as work:
        with pytest.raises(LockHeld) as caught, generations.writing(out):
            pass
        assert work.exists(), "the work of the run that holds the lock must not be removed"
    assert caught.value.exit_code == 4
    assert str(out) in str(caught.value)
    with generations.writing(out) as work:
        assert work.exists()


def test_a_refused_run_is_kept_beside_the_published_one(tmp_path):
    out = tmp_path / "build"
    _published(out, "aaa", 1)
    for value in (7, 8):
        with generations.writing(out) as work:
            _fill(work, value)
            folder = generations.refuse(work, out)
        assert folder == out / generations.REFUSED
        assert _value(folder / EVIDENCE) == value
        assert all(stat.S_IMODE(p.stat().st_mode) == 0o600 for p in folder.iterdir())
    assert generations.current(out).name == "aaa"
    assert _value(out / PANEL) == 1


def test_publishing_the_same_build_again_replaces_it(tmp_path):
    out = tmp_path / "build"
    _published(out, "aaa", 1)
    _published(out, "aaa", 1)
    assert _value(out / PANEL) == 1


def test_the_manifest_is_that_of_sha256sum(tmp_path):
    folder = _published(tmp_path / "build", "aaa", 1)
    lines = (folder / MANIFEST).read_text(encoding="utf-8").splitlines()
    assert lines == [
        f"{hashlib.sha256((folder / name).read_bytes()).hexdigest()}  {name}"
        for name in sorted((PANEL, EVIDENCE, LOG))
    ]
    assert generations.changed_files(folder) == []


def test_changed_and_missing_files_are_named(tmp_path):
    folder = _published(tmp_path / "build", "aaa", 1)
    (folder / LOG).write_text("changed\n", encoding="utf-8")
    (folder / PANEL).unlink()
    assert generations.changed_files(folder) == [LOG, PANEL]


# --- connections ----------------------------------------------------------------------------------------------


def test_a_build_reads_only_the_files_it_was_given(tmp_path):
    given, other = tmp_path / "it's.csv", tmp_path / "other.csv"
    for path in (given, other):
        path.write_text("a\n1\n", encoding="utf-8")
    con = open_new(tmp_path / "new.duckdb", [given])
    quoted = str(given).replace("'", "''")
    assert con.execute(f"select * from read_csv('{quoted}', header = true)").fetchall() == [(1,)]
    with pytest.raises(duckdb.PermissionException):
        con.execute(f"select * from read_csv('{other}')")
    with pytest.raises(duckdb.InvalidInputException):
        con.execute("set enable_external_access = true")
    con.close()


def test_a_published_build_cannot_be_written_or_used_to_read_others(tmp_path):
    folder = _published(tmp_path / "build", "aaa", 1)
    with open_read(folder / PANEL) as con:
        with pytest.raises(duckdb.InvalidInputException):
            con.execute("insert into t values (2)")
        with pytest.raises(duckdb.PermissionException):
            con.execute(f"attach '{folder / EVIDENCE}'")
