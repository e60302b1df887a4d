"""Corrections of single figures: what they change, what stays as received, and when they stop the run."""

from pathlib import Path
from typing import Any

import pytest
from small_assembly import entries, keelbook, line_of, rows, write

SAID: dict[str, Any] = {"reason": "misprint in the release", "author": "A. Person", "date": "2024-03-01"}
KEY: dict[str, Any] = {"measure": "value_added", "industry": "B", "time_period": "2013"}
CHANGE: dict[str, Any] = {"expected": 190, "value": 100.0, **SAID}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return an assembly in which a total is wrong (190 for 100), so that the income identity stops it."""
    return write(tmp_path / "small", value_added_B_2013="190")


def test_a_figure_is_corrected_by_its_key(folder: Path) -> None:
    assert keelbook("assemble", folder).exit_code == 5
    entries(folder, "correction", KEY | CHANGE)
    assert keelbook("assemble", folder).exit_code == 0
    line = line_of(folder, "B", "value_added", 2013)
    cell = "select cell_id from source_cell join source_file using (file_id)"
    cell += f' where file = \'sources/income.csv\' and "row" = {line} and "column" = 4'
    made = rows(folder, f"select * exclude (cell_id) from correction where cell_id = ({cell})")
    assert made == [(190.0, 100.0, SAID["reason"], SAID["author"], SAID["date"], "corrections.toml", 1)]
    assert rows(folder, f"select value from observation where cell_id = ({cell})") == [(100.0,)]
    assert rows(folder, f"select raw from source_cell where cell_id = ({cell})") == [("190",)]
    assert rows(folder, "select count(*) from correction") == [(1,)]


def test_a_trace_shows_the_correction_at_its_cell(folder: Path) -> None:
    line = line_of(folder, "B", "value_added", 2013)
    entries(folder, "correction", {"source": "income", "line": line, "column": 4} | CHANGE)
    assert keelbook("assemble", folder).exit_code == 0
    where = ("trace", folder, "value_added", "--industry", "B", "--year", "2013")
    text = keelbook(*where).stdout
    assert f'sources/income.csv, line {line}, column 4: "190"' in text
    assert (
        "corrected from 190.0 to 100.0 by A. Person on 2024-03-01: misprint in the release"
        " (corrections.toml, line 1)" in text
    )
    assert '"author": "A. Person"' in keelbook(*where, "--json").stdout
    assert "corrected from" not in keelbook(*where[:-1], "2012").stdout


@pytest.mark.parametrize("place", ["cell", "line"])
def test_text_in_a_number_column_becomes_an_observation(tmp_path: Path, place: str) -> None:
    folder = write(tmp_path / "small", mixed_income_A_2012="3x")
    assert keelbook("screen", folder).exit_code == 5
    line = line_of(folder, "A", "mixed_income", 2012)
    where = {"cell": f"D{line}"} if place == "cell" else {"line": line, "column": 4}
    entries(folder, "correction", {"source": "income", **where, "expected": "3x", "value": 3, **SAID})
    result = keelbook("assemble", folder)
    assert result.exit_code == 0
    assert "90 cells = 90 observations + 0 rejected + 0 declared missing" in result.stdout
    assert rows(folder, "select count(*) from rejected_cell") == [(0,)]
    assert rows(folder, "select old, new from correction") == [(None, 3.0)]
    assert (
        "corrected from no figure to 3.0"
        in keelbook("trace", folder, "mixed_income", "--industry", "A", "--year", "2012").stdout
    )


def test_a_refused_cell_is_found_by_its_key_too(tmp_path: Path) -> None:
    folder = write(tmp_path / "small", mixed_income_A_2012="3x")
    key = {"measure": "mixed_income", "industry": "A", "time_period": "2012"}
    entries(folder, "correction", {**key, "expected": "3x", "value": 3, **SAID})
    assert keelbook("screen", folder, "--strict").exit_code == 0


def test_a_declared_missing_figure_needs_a_status(tmp_path: Path) -> None:
    folder = write(tmp_path / "small", mixed_income_A_2012=":")
    key = {"measure": "mixed_income", "industry": "A", "time_period": "2012"}
    entries(folder, "correction", {**key, "expected": ":", "value": 3, **SAID})
    result = keelbook("screen", folder)
    assert (result.exit_code, "found: status O in sources/income.csv" in result.stderr) == (2, True)
    entries(folder, "correction", {**key, "expected": ":", "value": 3, "obs_status": "I", **SAID})
    assert "90 cells = 90 observations" in keelbook("assemble", folder).stdout
    wanted = "select obs_status, imputed_part from panel where measure = 'mixed_income' and industry = 'A'"
    assert rows(folder, f"{wanted} and time_period = '2012' and method = 'delivered'", "panel") == [
        ("I", 1.0)
    ]


def test_a_quarter_is_named_by_its_period(tmp_path: Path) -> None:
    folder = write(tmp_path / "small")
    key = {"measure": "hours_worked", "industry": "A", "time_period": "2012-Q3", "worker_group": "SAL"}
    entries(folder, "correction", {**key, "source": "hours", "expected": "503", "value": 510, **SAID})
    assert keelbook("assemble", folder).exit_code == 0
    assert rows(folder, "select period from observation join correction using (cell_id)") == [(4 * 2012 + 2,)]


REFUSED = {
    "no figure": (
        KEY | {"industry": "C"},
        "the correction means no figure",
        "no figure with C value_added 2013",
    ),
    "no cell": (
        {"source": "income", "line": 900, "column": 4},
        "the correction means no figure",
        "nothing read at line 900, column 4 of source 'income'",
    ),
    "no such cell": (
        {"source": "income", "cell": "Z2"},
        "the correction means no figure",
        "nothing read at Z2 of source 'income'",
    ),
    "several": (
        {"measure": "value_added", "time_period": "2013"},
        "the correction means 2 figures",
        "sources/income.csv, row 17, column 4; sources/income.csv, row 42, column 4",
    ),
    "another value": (KEY | {"industry": "A"}, "the old value is not the one expected", "found: 100.0 in"),
}


@pytest.mark.parametrize("case", REFUSED)
def test_a_correction_that_does_not_fit_stops_the_run(folder: Path, case: str) -> None:
    where, what, found = REFUSED[case]
    entries(folder, "correction", where | CHANGE)
    result = keelbook("assemble", folder)
    assert result.exit_code == 2
    assert f"corrections.toml, line 1: {what}" in result.stderr
    assert found in result.stderr
    assert "to do: " in result.stderr
    assert not (folder / "build" / "panel.duckdb").exists()


def test_all_that_do_not_fit_are_named_at_once_and_the_build_stays(folder: Path) -> None:
    entries(folder, "correction", KEY | CHANGE)
    assert keelbook("assemble", folder).exit_code == 0
    before = rows(folder, "select build_id from build", "panel")
    line = line_of(folder, "B", "value_added", 2013)
    entries(
        folder,
        "correction",
        KEY | CHANGE,
        {"source": "income", "line": line, "column": 4} | CHANGE,
        KEY | CHANGE | {"industry": "A", "expected": "x"},
        KEY | CHANGE | {"time_period": "1999"},
    )
    result = keelbook("assemble", folder)
    assert result.exit_code == 2
    assert result.stderr.count("two corrections of one figure") == 2
    assert "found: '100' in" in result.stderr
    assert "no figure with B value_added 1999" in result.stderr
    assert rows(folder, "select build_id from build", "panel") == before


def test_a_cell_refused_for_its_period_is_not_put_right_by_a_figure(tmp_path: Path) -> None:
    folder = write(tmp_path / "small")
    path = folder / "sources" / "income.csv"
    path.write_text(path.read_text(encoding="utf-8").replace("A,mixed_income,2012", "A,mixed_income,2O12"))
    line = line_of(folder, "A", "operating_surplus", 2012) + 1
    entries(
        folder,
        "correction",
        {"source": "income", "line": line, "column": 4, "expected": "3", "value": 3, **SAID},
    )
    result = keelbook("assemble", folder)
    assert result.exit_code == 2
    assert "the cell cannot be corrected by a figure: the period '2O12' is not a year" in result.stderr


def test_a_source_that_cannot_be_read_is_the_first_thing_said(folder: Path) -> None:
    entries(folder, "correction", KEY | CHANGE)
    (folder / "sources" / "income.csv").write_text("", encoding="utf-8")
    result = keelbook("assemble", folder)
    assert (result.exit_code, "unreadable_source" in result.stderr) == (5, True)


def test_the_file_is_part_of_what_a_build_is_made_from(folder: Path) -> None:
    entries(folder, "correction", KEY | CHANGE)
    keelbook("assemble", folder)
    first = rows(folder, "select rules_hash, source_hash, code_hash from build", "panel")[0]
    assert "Unchanged" in keelbook("assemble", folder).stdout
    entries(folder, "correction", KEY | CHANGE | {"author": "B. Person"})
    keelbook("assemble", folder)
    second = rows(folder, "select rules_hash, source_hash, code_hash from build", "panel")[0]
    assert (first[0] != second[0], first[1:] == second[1:]) == (True, True)
