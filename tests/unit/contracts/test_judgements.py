"""The loaders of corrections.toml and acceptances.toml: what is refused, where, and all at once."""

import datetime
from collections.abc import Callable
from pathlib import Path

import pytest

from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.judgements import SourceSheet, load_acceptances, load_corrections, parse_address
from keelbook.contracts.screening_rules import load_screening_rules
from keelbook.errors import DeclarationError, Problem

LISTS = load_code_lists(areas=["HV"])
SOURCES = {
    "capital": SourceSheet("sources/capital.xlsx", "Table 3"),
    "hours": SourceSheet("sources/hours.csv", ""),
}
RULES = {rule.id: rule for rule in load_screening_rules()}
CORRECTION = """\
[[correction]]
source = "capital"
cell = "D14"
expected = 12.5
value = 125
reason = "misprint"
author = "A. Person"
date = 2024-03-01
"""
ACCEPTANCE = """\
[[acceptance]]
rule = "sign_income"
source = "hours"
found = "-3"
accepted_by = "A. Person"
date = 2024-03-01
reason = "a loss"
"""


def refused(folder: Path, name: str, text: str) -> list[Problem]:
    (folder / f"{name}.toml").write_text(text, encoding="utf-8")
    load: Callable[[], object] = {
        "corrections": lambda: load_corrections(folder, LISTS, SOURCES),
        "acceptances": lambda: load_acceptances(folder, LISTS, SOURCES, RULES),
    }[name]
    with pytest.raises(DeclarationError) as caught:
        load()
    assert all(problem.file.endswith(f"{name}.toml") for problem in caught.value.problems)
    assert all(problem.remedy for problem in caught.value.problems)
    return list(caught.value.problems)


def test_an_assembly_needs_neither_file(tmp_path: Path) -> None:
    assert load_corrections(tmp_path, LISTS, SOURCES) == ()
    assert load_acceptances(tmp_path, LISTS, SOURCES, RULES) == ()


def test_entries_carry_their_lines(tmp_path: Path) -> None:
    second = '\n[[correction]]\nmeasure = "investment"\ntime_period = "2015-Q3"\nexpected = "12,5"\n'
    second += 'value = 125.0\nobs_status = "E"\nreason = "x"\nauthor = "y"\ndate = "2024-03-02"\n'
    (tmp_path / "corrections.toml").write_text(CORRECTION + second, encoding="utf-8")
    one, two = load_corrections(tmp_path, LISTS, SOURCES)
    assert (one.line, one.said.position, one.said.expected, one.said.value) == (1, (14, 4), 12.5, 125.0)
    assert (two.line, two.said.expected, two.said.date) == (10, "12,5", datetime.date(2024, 3, 2))
    assert two.said.key() == {"measure": "investment"}
    (tmp_path / "acceptances.toml").write_text("\n" + ACCEPTANCE, encoding="utf-8")
    (entry,) = load_acceptances(tmp_path, LISTS, SOURCES, RULES)
    assert (entry.line, entry.said.accepted_by) == (2, "A. Person")


@pytest.mark.parametrize(("address", "place"), [("A1", (1, 1)), ("Z9", (9, 26)), ("AB120", (120, 28))])
def test_addresses(address: str, place: tuple[int, int]) -> None:
    assert parse_address(address) == place


@pytest.mark.parametrize(
    ("old", "new", "line", "what"),
    [
        ('reason = "misprint"\n', "", 1, "'correction.0.reason' is missing"),
        ('author = "A. Person"\n', "", 1, "'correction.0.author' is missing"),
        ("date = 2024-03-01\n", "", 1, "'correction.0.date' is missing"),
        ('reason = "misprint"', 'reason = ""', 6, "'correction.0.reason' is not as it must be"),
        ('author = "A', 'autor = "A', 7, "unknown key 'autor'"),
        ("date = 2024-03-01", 'date = "March 2024"', 8, "'correction.0.date' is not as it must be"),
        ("date = 2024-03-01", 'date = "2024-02-30"', 8, "'correction.0.date' is not as it must be"),
        ("value = 125", 'value = "125"', 5, "'correction.0.value' is not as it must be"),
        ("value = 125", "value = nan", 5, "'correction.0.value' is not as it must be"),
        ("expected = 12.5", "expected = true", 4, "'correction.0.expected' is not as it must be"),
        ('source = "capital"', 'source = "captial"', 2, "unknown source 'captial'"),
        ('source = "capital"\n', "", 1, "a cell without its source"),
        ('cell = "D14"', 'cell = "14D"', 3, "'14D' is not the address of a cell"),
        ('cell = "D14"', 'cell = "D14"\nline = 3', 4, "the cell is named twice"),
        ('cell = "D14"', "line = 3", 3, "half of a cell's place"),
        ('cell = "D14"', "line = 0\ncolumn = 1", 3, "'correction.0.line' is not as it must be"),
        (
            'cell = "D14"',
            'cell = "D14"\nsheet = "Table 4"',
            4,
            "the source is not read from the sheet 'Table 4'",
        ),
        ('cell = "D14"', 'cell = "D14"\nindustry = "C"', 4, "a cell and a key"),
        ('cell = "D14"\n', "", 1, "the correction names no figure"),
        ('cell = "D14"', 'measure = "investment"', 1, "the correction names no figure"),
        ('cell = "D14"', 'measure = "invesment"', 3, "unknown measure 'invesment'"),
        ('cell = "D14"', 'industry = "C10"', 3, "unknown industry 'C10'"),
        ('cell = "D14"', 'time_period = "2015Q1"', 3, "'2015Q1' is not a period"),
        ('cell = "D14"', 'cell = "D14"\nobs_status = "X"', 4, "unknown observation status 'X'"),
    ],
)
def test_a_faulty_correction(tmp_path: Path, old: str, new: str, line: int, what: str) -> None:
    assert old in CORRECTION
    problems = refused(tmp_path, "corrections", CORRECTION.replace(old, new))
    assert (what, f"line {line}") in [(problem.what, problem.place) for problem in problems]


def test_all_faults_are_named_at_once(tmp_path: Path) -> None:
    text = CORRECTION.replace("value = 125\n", "") + CORRECTION.replace("capital", "captial").replace(
        "D14", "14"
    )
    text += CORRECTION.replace("date", "dat")
    whats = [problem.what for problem in refused(tmp_path, "corrections", text)]
    assert whats == [
        "'correction.0.value' is missing",
        "unknown source 'captial'",
        "'14' is not the address of a cell",
        "'correction.2.date' is missing",
        "unknown key 'dat'",
    ]


def test_the_same_place_twice(tmp_path: Path) -> None:
    by_line = CORRECTION.replace('cell = "D14"', "line = 14\ncolumn = 4")
    (problem,) = refused(tmp_path, "corrections", CORRECTION + by_line)
    assert (problem.what, problem.place, problem.found) == (
        "the same place twice",
        "line 9",
        "also on line 1",
    )
    (problem,) = refused(tmp_path, "acceptances", ACCEPTANCE * 2)
    assert problem.place == "line 8"
    other = ACCEPTANCE + ACCEPTANCE.replace('"-3"', '"-4"')
    (tmp_path / "acceptances.toml").write_text(other, encoding="utf-8")
    assert len(load_acceptances(tmp_path, LISTS, SOURCES, RULES)) == 2


@pytest.mark.parametrize(
    ("old", "new", "line", "what"),
    [
        ('found = "-3"\n', "", 1, "'acceptance.0.found' is missing"),
        ('accepted_by = "A. Person"', 'author = "A. Person"', 1, "'acceptance.0.accepted_by' is missing"),
        ('reason = "a loss"', 'reason = ""', 7, "'acceptance.0.reason' is not as it must be"),
        ('source = "hours"\n', "", 1, "the acceptance names no figure"),
        ('source = "hours"', 'cell = "D14"', 1, "a cell without its source"),
        ('"sign_income"', '"sign"', 2, "a finding of the rule 'sign' cannot be accepted"),
        ('"sign_income"', '"duplicate_key"', 2, "a finding of the rule 'duplicate_key' cannot be accepted"),
        ('"sign_income"', '"unknown_code"', 2, "a finding of the rule 'unknown_code' cannot be accepted"),
    ],
)
def test_a_faulty_acceptance(tmp_path: Path, old: str, new: str, line: int, what: str) -> None:
    assert old in ACCEPTANCE
    problems = refused(tmp_path, "acceptances", ACCEPTANCE.replace(old, new))
    assert (what, f"line {line}") in [(problem.what, problem.place) for problem in problems]


def test_a_stop_that_is_marked_acceptable_is(tmp_path: Path) -> None:
    text = ACCEPTANCE.replace("sign_income", "income_identity")
    (tmp_path / "acceptances.toml").write_text(text, encoding="utf-8")
    assert len(load_acceptances(tmp_path, LISTS, SOURCES, RULES)) == 1
