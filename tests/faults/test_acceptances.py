"""Acceptances of findings: what they let pass, what they cannot, and when they lapse."""

from pathlib import Path
from typing import Any

import pytest
from small_assembly import entries, keelbook, line_of, rows, write

SAID: dict[str, Any] = {
    "accepted_by": "A. Person",
    "date": "2024-03-01",
    "reason": "a loss, as the office confirmed",
}
LOSS: dict[str, Any] = {
    "rule": "sign_income",
    "measure": "mixed_income",
    "industry": "B",
    "time_period": "2013",
    "found": "-3",
    **SAID,
}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return an assembly with one warning: a negative mixed income."""
    return write(tmp_path / "small", mixed_income_B_2013="-3", value_added_B_2013="94")


def test_an_accepted_warning_stops_no_strict_run_and_is_shown(folder: Path) -> None:
    assert keelbook("assemble", folder, "--strict").exit_code == 5
    entries(folder, "acceptance", LOSS)
    result = keelbook("assemble", folder, "--strict")
    assert result.exit_code == 0
    assert "0 stop, 1 warn (1 accepted)" in result.stdout
    shown = keelbook("screen", folder, "--strict")
    assert shown.exit_code == 0
    assert "[warn sign_income, accepted by A. Person on 2024-03-01]" in shown.stdout
    assert "accepted because a loss, as the office confirmed" in shown.stdout
    stored = rows(
        folder,
        "select accepted_by, accepted_on, accepted_reason from finding where rule = 'sign_income'",
        "panel",
    )
    assert stored == [(SAID["accepted_by"], SAID["date"], SAID["reason"])]
    others = "select count(*) from finding where accepted_by <> '' and rule <> 'sign_income'"
    assert rows(folder, others, "panel") == [(0,)]
    again = keelbook("assemble", folder, "--strict")
    assert (again.exit_code, "Unchanged" in again.stdout) == (0, True)


def test_a_finding_is_named_by_its_cell_too(folder: Path) -> None:
    line = line_of(folder, "B", "mixed_income", 2013)
    place = {"rule": "sign_income", "source": "income", "line": line, "column": 4, "found": "-3", **SAID}
    entries(folder, "acceptance", place)
    assert keelbook("screen", folder, "--strict").exit_code == 0
    entries(folder, "acceptance", place | {"line": line + 1})
    assert keelbook("screen", folder, "--strict").exit_code == 5


LAPSED = {
    "another text": ({"found": "-4"}, "the finding now says something else", "found: -3"),
    "nothing there": ({"time_period": "2012"}, "there is no such finding", "found: no finding"),
    "another rule": ({"rule": "sign_investment"}, "there is no such finding", "found: no finding"),
}


@pytest.mark.parametrize("case", LAPSED)
def test_an_acceptance_lapses(folder: Path, case: str) -> None:
    change, what, found = LAPSED[case]
    entries(folder, "acceptance", LOSS | change)
    strict = keelbook("screen", folder, "--strict")
    assert strict.exit_code == 5
    assert "acceptances.toml, line 1: [warn lapsed_acceptance]" in strict.stderr
    assert what in strict.stderr
    assert found in strict.stderr
    assert "[warn sign_income]" in strict.stderr


def test_a_lapsed_acceptance_is_a_warning_of_the_build(folder: Path) -> None:
    entries(folder, "acceptance", LOSS | {"rule": "sign_incme"})
    result = keelbook("assemble", folder)
    assert result.exit_code == 0
    assert "0 stop, 2 warn," in result.stdout
    stored = "select file, \"row\", measure, found from finding where rule = 'lapsed_acceptance'"
    assert rows(folder, stored, "panel") == [("acceptances.toml", 1, "mixed_income", "no finding")]


def test_an_acceptance_lapses_when_the_figure_changes(folder: Path) -> None:
    entries(folder, "acceptance", LOSS)
    assert keelbook("screen", folder, "--strict").exit_code == 0
    path = folder / "sources" / "income.csv"
    text = path.read_text(encoding="utf-8").replace("2013,-3", "2013,-5").replace("2013,94", "2013,92")
    path.write_text(text, encoding="utf-8")
    result = keelbook("screen", folder, "--strict")
    assert (result.exit_code, "lapsed_acceptance" in result.stderr) == (5, True)


def test_one_acceptance_is_for_one_finding(tmp_path: Path) -> None:
    figures = {"mixed_income_B_2013": "-3", "value_added_B_2013": "94"}
    folder = write(tmp_path / "small", **figures, mixed_income_A_2013="-3", value_added_A_2013="94")
    broad = {name: LOSS[name] for name in LOSS if name != "industry"}
    entries(folder, "acceptance", broad)
    result = keelbook("screen", folder, "--strict")
    assert (result.exit_code, "fits several findings" in result.stderr) == (5, True)
    entries(folder, "acceptance", LOSS, LOSS | {"industry": "A"})
    assert keelbook("screen", folder, "--strict").exit_code == 0


IDENTITY: dict[str, Any] = {
    "rule": "income_identity",
    "measure": "value_added",
    "industry": "B",
    "time_period": "2013",
    "found": "110; terms: compensation_of_employees 60, operating_surplus 35, mixed_income 3,"
    " net_taxes_on_production 2; difference 10",
    **SAID,
}


def test_a_stop_is_accepted_where_its_rule_allows(tmp_path: Path) -> None:
    folder = write(tmp_path / "small", value_added_B_2013="110")
    assert keelbook("assemble", folder).exit_code == 5
    entries(folder, "acceptance", IDENTITY)
    result = keelbook("assemble", folder, "--strict")
    assert result.exit_code == 0
    assert "1 stop (1 accepted)" in result.stdout


def test_a_stop_of_another_rule_is_not_accepted(tmp_path: Path) -> None:
    folder = write(tmp_path / "small", compensation_of_employees_B_2013="-60")
    said = {"measure": "compensation_of_employees", "found": "-60", **SAID}
    for rule in ("sign", "duplicate_key", "unknown_code"):
        entries(folder, "acceptance", {"rule": rule, **said})
        result = keelbook("assemble", folder)
        assert result.exit_code == 2
        assert f"acceptances.toml, line 2: a finding of the rule '{rule}' cannot be accepted" in result.stderr


def test_a_cell_that_cannot_be_read_is_not_accepted(tmp_path: Path) -> None:
    folder = write(tmp_path / "small", mixed_income_A_2012="3x")
    line = line_of(folder, "A", "mixed_income", 2012)
    said = {
        "rule": "unreadable_number",
        "source": "income",
        "line": line,
        "column": 4,
        "found": "'3x'",
        **SAID,
    }
    entries(folder, "acceptance", said)
    result = keelbook("assemble", folder)
    assert (result.exit_code, "[stop unreadable_number]" in result.stderr) == (5, True)
    stored = folder / "build" / "refused"
    assert stored.is_dir()


def test_a_finding_of_a_later_stage_is_accepted(tmp_path: Path) -> None:
    folder = write(tmp_path / "small")
    path = folder / "sources" / "hours.csv"
    path.write_text(path.read_text(encoding="utf-8").replace("B,2014-Q4,504\n", ""), encoding="utf-8")
    key = {"measure": "hours_worked", "industry": "B"}
    gap = {"rule": "coverage", **key, "found": "no figure for 2014-Q4 (1 of 20 quarters)", **SAID}
    part = {"rule": "incomplete_year", **key, "time_period": "2014", "found": "3 quarters", **SAID}
    entries(folder, "acceptance", gap)
    assert keelbook("screen", folder, "--strict").exit_code == 0
    refused = keelbook("assemble", folder, "--strict")
    assert (refused.exit_code, "incomplete_year" in refused.stderr) == (5, True)
    entries(folder, "acceptance", gap, part)
    assert keelbook("screen", folder, "--strict").exit_code == 0
    assert keelbook("assemble", folder, "--strict").exit_code == 0
    accepted = "select rule from finding where accepted_by = 'A. Person' order by rule"
    assert rows(folder, accepted, "panel") == [("coverage",), ("incomplete_year",)]
