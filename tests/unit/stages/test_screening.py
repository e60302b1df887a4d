"""Every kind of rule: a case that fires, at its cell; a clean case; and what it must leave alone."""

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from small_observations import CONTEXT, DIMENSIONS, applied, observations, only, place, rule, years

from keelbook import findings
from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.screening_rules import KINDS, load_screening_rules
from keelbook.stages import screening, screening_report
from keelbook.stages.observed import dense_numbers
from keelbook.stages.screening import CHECKS, screen


def test_every_kind_has_its_check() -> None:
    assert set(CHECKS) == set(KINDS)


@pytest.mark.parametrize("order", [[0, 1, 2, 3], [3, 1, 0, 2]])
def test_a_duplicate_names_every_cell(order: list[int]) -> None:
    rows = [*years(2000, 2002), {"period": 2001, "value": 7.5, "source": "two"}]
    rows = [rows[index] for index in order]
    finding = only(applied(rows, "duplicate_key", severity="stop"))
    at = [11 + index for index, row in enumerate(rows) if row["period"] == 2001]
    assert finding.row == at[1]
    assert finding.time_period == "2001"
    assert "7.5 (hours.csv, sheet 'Table 3', row" in finding.found
    assert "1 (capital.xlsx, sheet 'Table 3', row" in finding.found
    assert [finding.found.index(f"row {row}") for row in at] == sorted(
        finding.found.index(f"row {row}") for row in at
    )


def test_a_key_three_times_is_one_finding_and_other_keys_none() -> None:
    finding = only(
        applied([{}, {}, {}, {"period": 2001}, {"industry": "F"}], "duplicate_key", severity="stop")
    )
    assert finding.found.count("capital.xlsx") == 3


@pytest.mark.parametrize("column", [*DIMENSIONS, "measure", "price_basis", "frequency", "period"])
def test_keys_that_differ_in_one_part_are_no_duplicates(column: str) -> None:
    other: dict[str, Any] = {
        "area": "NX",
        "sector": "S13",
        "industry": "F",
        "asset": "N11",
        "worker_group": "SAL",
        "measure": "net_stock",
        "price_basis": "constant",
        "frequency": "Q",
        "period": 2001,
    }
    assert applied([{}, {column: other[column]}], "duplicate_key", severity="stop").empty


def test_duplicates_are_found_within_each_frequency() -> None:
    quarter = {"frequency": "Q", "period": 4 * 2000 + 2}
    finding = only(applied([{}, quarter, {"period": 2001}, quarter], "duplicate_key", severity="stop"))
    assert (finding.row, finding.time_period) == (14, "2000-Q3")


def test_duplicates_among_keys_too_many_for_a_table(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(screening, "TABLE_LIMIT", 0)
    rows = [{"period": 2_000_000}, {}, {"period": 2001}, {}]
    assert only(applied(rows, "duplicate_key", severity="stop")).row == 14
    assert applied(rows[:3], "duplicate_key", severity="stop").empty


def test_more_findings_than_are_listed_are_counted(monkeypatch: pytest.MonkeyPatch) -> None:
    for module in (screening, screening_report):
        monkeypatch.setattr(module, "LISTED", 2)
    found = applied([*years(2000, 2002), *years(2000, 2002)], "duplicate_key", severity="stop")
    assert list(found["row"].fillna(0)) == [14, 15, 0]
    assert found["found"].iloc[2] == "1 more like the 2 listed"
    found = applied(years(2000, 2003, value=-1), "sign", measures=["investment"])
    assert found["found"].iloc[2] == "2 more like the 2 listed"


def test_an_unknown_label_is_one_finding_for_each_source() -> None:
    rows = [
        {},
        {"industry": "Manufacturng", "period": 2001},
        {"industry": "Manufacturng", "period": 2002},
        {"industry": "Manufacturng", "period": 2003, "source": "two"},
    ]
    found = applied(rows, "unknown_code", severity="stop")
    assert [place(finding) for finding in found.itertuples()] == [
        ("capital.xlsx", "Table 3", 12, 5),
        ("hours.csv", "Table 3", 14, 5),
    ]
    assert list(found["found"]) == [
        "'Manufacturng' in 2 cells, first here",
        "'Manufacturng' in 1 cell, first here",
    ]
    assert found["expected"].str.contains("C (Manufacturing)", regex=False).all()
    assert found["remedy"].iloc[0] == 'look: [source.codes.industry] "Manufacturng" = "C"'


@pytest.mark.parametrize(
    ("dimension", "label", "nearest"),
    [
        ("industry", "Fabricatoin", "C (Manufacturing)"),
        ("asset", "N111x", "N111 ("),
        ("measure", "investmnt", "investment ("),
        ("worker_group", "SLF", "SELF (Self-employed)"),
        ("sector", "S113", "S11 ("),
    ],
)
def test_the_nearest_codes_are_named_by_code_name_and_declared_label(
    dimension: str, label: str, nearest: str
) -> None:
    finding = only(applied([{}, {dimension: label}], "unknown_code", severity="stop"))
    assert place(finding) == ("capital.xlsx", "Table 3", 12, 5)
    assert finding[dimension] == label
    assert nearest in finding.expected


def test_a_label_near_to_nothing_gets_examples() -> None:
    finding = only(applied([{"industry": "????"}], "unknown_code", severity="stop"))
    assert "such as _T (" in finding.expected
    assert '"????" = "CODE"' in finding.remedy


def test_an_empty_label_is_unknown() -> None:
    finding = only(applied([{}, {"industry": None}], "unknown_code", severity="stop"))
    assert finding.found == "'' in 1 cell, first here"


def test_known_codes_pass() -> None:
    rows = [{}, {"industry": "_T"}, {"asset": "_Z", "worker_group": "SELF", "measure": "hours_worked"}]
    assert applied(rows, "unknown_code", severity="stop").empty


def test_gaps_are_named_at_the_last_cell_before_them() -> None:
    rows = [*years(2000, 2003, industry="F"), {"period": 2003}, {"period": 2000}]
    finding = only(applied(rows, "coverage"))
    assert place(finding) == ("capital.xlsx", "Table 3", 16, 5)
    assert (finding.industry, finding.time_period) == ("C", "2001")
    assert finding.found == "no figure for 2001 to 2002 (2 of 4 years)"
    assert finding.expected == "a figure for each of the years 2000 to 2003"


def test_a_missing_mark_is_a_gap_at_its_own_cell_unless_accepted() -> None:
    rows = years(2000, 2003)
    rows[2] |= {"value": np.nan, "status": "O"}
    finding = only(applied(rows, "coverage", accepted_missing=["M"]))
    assert (finding.row, finding.found) == (13, "no figure for 2002 (1 of 4 years)")
    rows[2]["status"] = "M"
    assert applied(rows, "coverage", accepted_missing=["M"]).empty
    assert len(applied(rows, "coverage")) == 1


def test_the_ends_count_only_against_the_full_period() -> None:
    rows = years(2001, 2002)
    assert applied(rows, "coverage").empty
    finding = only(applied(rows, "coverage", full_period=True))
    assert finding.found == "no figure for 2000, 2003 (2 of 4 years)"
    assert applied(years(2000, 2003), "coverage", full_period=True).empty


def test_periods_outside_the_assembly_are_no_gaps() -> None:
    assert applied([{"period": 1990}, *years(2000, 2003), {"period": 2010}], "coverage").empty
    assert applied([{"period": 1990}, {"period": 1995}], "coverage", full_period=True).empty


def test_quarters_must_fill_their_years() -> None:
    first = 4 * 2001
    rows = years(first, first + 5, frequency="Q") + years(2000, 2003)
    finding = only(applied(rows, "coverage"))
    assert finding.found == "no figure for 2002-Q3 to 2002-Q4 (2 of 8 quarters)"
    assert (finding.row, finding.time_period) == (16, "2002-Q3")
    assert applied(years(first, first + 7, frequency="Q"), "coverage").empty
    late = only(applied(years(first + 1, first + 3, frequency="Q"), "coverage"))
    assert (late.row, late.found) == (11, "no figure for 2001-Q1 (1 of 4 quarters)")


def test_coverage_of_some_measures_only() -> None:
    rows: list[dict[str, Any]] = [{"period": 2000}, {"period": 2002}]
    rows += [{"period": year, "measure": "net_stock"} for year in (2000, 2003)]
    found = applied(rows, "coverage", measures=["net_stock"])
    assert list(found["measure"]) == ["net_stock"]
    assert found["found"].iloc[0].startswith("no figure for 2001 to 2002")
    assert applied(rows, "coverage", measures=["gross_stock"]).empty


def test_a_negative_figure_is_found_where_the_measure_is_positive() -> None:
    hours: dict[str, Any] = {
        "measure": "hours_worked",
        "price_basis": "_Z",
        "worker_group": "SAL",
        "asset": "_Z",
    }
    rows = [{"value": -2.0}, {**hours, "value": -3.5}, {**hours, "period": 2001, "value": 0.0}]
    finding = only(applied(rows, "sign"))
    assert (finding.row, finding.measure, finding.found) == (12, "hours_worked", "-3.5")
    assert (finding.expected, finding.remedy) == ("0 or more", "look")
    assert finding.message == "a negative figure: because"
    assert only(applied(rows, "sign", measures=["investment"])).row == 11
    assert applied(rows, "sign", excluding=["hours_worked"]).empty


@pytest.mark.parametrize("value", [0.0, -1.0])
def test_an_index_of_zero_or_less(value: float) -> None:
    price: dict[str, Any] = {"measure": "investment_price", "price_basis": "source_index", "unit_mult": 0}
    rows = [{"value": value}, {**price, "value": 0.1}, {**price, "period": 2001, "value": value}]
    finding = only(applied(rows, "nonpositive_index", price_bases=["index", "source_index"]))
    assert (finding.row, finding.time_period, finding.expected) == (13, "2001", "more than 0")
    assert applied(rows[:2], "nonpositive_index", price_bases=["index", "source_index"]).empty


IDENTITY: dict[str, Any] = {
    "total": "value_added",
    "terms": ["compensation_of_employees", "operating_surplus", "mixed_income"],
    "price_basis": "current",
    "rounding_units": 0.5,
    "relative_tolerance": 0.0,
}


def incomes(total: float, *terms: float, **given: Any) -> list[dict[str, Any]]:
    names = [IDENTITY["total"], *IDENTITY["terms"]]
    return [
        {"asset": "_Z", "measure": name, "value": value, **given}
        for name, value in zip(names, (total, *terms), strict=False)
    ]


def test_a_broken_identity_points_to_its_total_and_lists_the_terms() -> None:
    rows = incomes(100.0, 60.3, 30.1, 9.6) + incomes(100.5, 60.3, 30.1, 9.6, period=2001)
    finding = only(applied(rows, "identity", severity="stop", **IDENTITY))
    assert place(finding) == ("capital.xlsx", "Table 3", 15, 5)
    assert (finding.severity, finding.measure, finding.time_period) == ("stop", "value_added", "2001")
    assert finding.found == (
        "100.5; terms: compensation_of_employees 60.3, operating_surplus 30.1, mixed_income 9.6;"
        " difference 0.5"
    )
    assert finding.expected == "100 within 0.2"


def test_the_tolerance_is_the_printed_rounding_of_each_figure_and_a_part_of_the_total() -> None:
    # four figures printed to one decimal: 4 x 0.05 = 0.2
    assert applied(incomes(100.2, 60.3, 30.1, 9.6), "identity", **IDENTITY).empty
    assert len(applied(incomes(100.3, 60.3, 30.1, 9.6), "identity", **IDENTITY)) == 1
    assert applied(
        incomes(100.3, 60.3, 30.1, 9.6), "identity", **IDENTITY | {"relative_tolerance": 0.01}
    ).empty
    # printed to a whole unit: 4 x 0.5
    assert applied(incomes(102.0, 60.0, 31.0, 9.0), "identity", **IDENTITY).empty


def test_terms_in_another_unit_are_put_on_one() -> None:
    rows = incomes(100.5, 60.3, 30.2, 10.0)
    rows[1] |= {"value": 60_300.0, "unit_mult": 3}
    assert applied(rows, "identity", **IDENTITY).empty
    rows[1]["unit_mult"] = 6
    assert only(applied(rows, "identity", **IDENTITY)).found.startswith(
        "100.5; terms: compensation_of_employees 60300,"
    )


def test_the_total_of_worker_groups_goes_before_its_parts() -> None:
    rows = incomes(100.5, 60.3, 30.2, 10.0)
    parts = [
        {**rows[1], "worker_group": "SAL", "value": 40.3},
        {**rows[1], "worker_group": "SELF", "value": 20.0},
    ]
    assert applied([*rows, *parts], "identity", **IDENTITY).empty
    assert applied([rows[0], *rows[2:], *parts], "identity", **IDENTITY).empty
    parts[1]["value"] = 30.0
    assert applied([*rows, *parts], "identity", **IDENTITY).empty
    assert only(applied([rows[0], *rows[2:], *parts], "identity", **IDENTITY)).row == 11


def test_a_total_given_twice_is_not_added_up() -> None:
    rows = incomes(100.5, 60.3, 30.2, 10.0)
    finding = only(applied([*rows, {**rows[1], "asset": "_T"}], "identity", severity="stop", **IDENTITY))
    assert (
        finding.found == "1 figure of value_added without a figure of compensation_of_employees, first here"
    )


def test_parts_of_two_partitions_are_not_added_up(tmp_path: Path) -> None:
    (tmp_path / "rules" / "codes").mkdir(parents=True)
    (tmp_path / "rules" / "codes" / "worker_group.csv").write_text(
        "code,name,parent,partition,citation,status\nHIGH,High skill,_T,skill,invented,common practice\n"
    )
    context = replace(CONTEXT, lists=load_code_lists(tmp_path))
    rows = incomes(100.5, 60.3, 30.2, 10.0)
    rows[1]["worker_group"] = "SAL"
    rules = [rule("identity", severity="stop", **IDENTITY)]
    assert screen(observations(rows), rules, context).empty
    both = [*rows, {**rows[1], "worker_group": "HIGH"}]
    assert only(screen(observations(both), rules, context)).severity == "note"
    unlisted = [*rows, {**rows[1], "worker_group": "??"}]
    assert only(screen(observations(unlisted), rules, context)).severity == "note"


def test_an_identity_without_a_term_is_a_note() -> None:
    finding = only(applied(incomes(100.0, 60.0, 40.0), "identity", severity="stop", **IDENTITY))
    assert (finding.severity, finding.found) == (
        "note",
        "no series at price basis 'current' of: mixed_income",
    )
    assert applied([{}], "identity", **IDENTITY).empty


def test_cells_that_cannot_be_tested_are_counted() -> None:
    rows = incomes(100.0, 60.0, 30.0, 10.0)
    rows += incomes(100.0, 60.0, 30.0, industry="F") + incomes(100.0, 60.0, 30.0, industry="F", period=2001)
    rows += incomes(100.0, 60.0, 30.0, np.nan, industry="A")
    finding = only(applied(rows, "identity", severity="stop", **IDENTITY))
    assert finding.severity == "note"
    assert finding.found == "3 figures of value_added without a figure of mixed_income, first here"


PER_PERSON: dict[str, Any] = {
    "measures": ["hours_worked"],
    "per": "persons_employed",
    "minimum": 366,
    "maximum": 4392,
}


def test_a_ratio_outside_its_range() -> None:
    base = {"asset": "_Z", "worker_group": "SAL", "price_basis": "_Z"}
    hours = {**base, "measure": "hours_worked"}
    persons = {**base, "measure": "persons_employed", "unit_mult": 3, "source": "two"}
    rows = [
        {**hours, "value": 8.0},
        {**hours, "value": 8000.0, "period": 2001},
        {**hours, "value": 8.0, "period": 2002},
        {**hours, "value": 8.0, "period": 2003},
        {**persons, "value": 4.0},
        {**persons, "value": 4.0, "period": 2001},
        {**persons, "value": 0.0, "period": 2002},
    ]
    finding = only(applied(rows, "range", **PER_PERSON))
    assert (finding.row, finding.found) == (12, "2000000")
    assert finding.expected == "at least 366 and at most 4392"
    assert applied(rows[:1] + rows[4:], "range", **PER_PERSON).empty
    assert applied(rows, "range", **PER_PERSON, frequency="Q").empty
    assert applied(rows[:3], "range", **PER_PERSON).empty


def test_a_figure_outside_its_range() -> None:
    share: dict[str, Any] = {"measure": "labour_share", "asset": "_Z", "price_basis": "_Z", "unit_mult": 0}
    rows = [
        {**share, "value": 1.0},
        {**share, "value": 62.0, "period": 2001},
        {**share, "value": np.nan, "period": 2002},
    ]
    finding = only(applied(rows, "range", measures=["labour_share"], maximum=1))
    assert (finding.row, finding.found, finding.expected) == (12, "62", "at most 1")
    assert applied(rows, "range", measures=["labour_share"], maximum=1, price_basis="current").empty
    assert only(applied(rows, "range", measures=["labour_share"], minimum=50.0)).row == 11


def test_a_status_is_one_finding_for_each_series() -> None:
    rows: list[dict[str, Any]] = [
        {"period": 2002, "status": "B"},
        {"period": 2000, "status": "B"},
        {"period": 2001},
        {"industry": "F", "status": "B"},
    ]
    found = applied(rows, "status_mark", statuses=["B"])
    assert list(found["row"]) == [12, 14]
    assert list(found["found"]) == ["B (Time series break) in 2000, 2002", "B (Time series break) in 2000"]
    assert applied(rows, "status_mark", statuses=["U"]).empty


def test_figures_outside_the_period_are_counted_by_source_and_measure() -> None:
    rows = [{"period": 1999, "industry": "F"}, *years(1998, 2003), {"period": 2004, "source": "two"}]
    found = applied(rows, "outside_period")
    assert list(found["row"]) == [11, 18]
    assert list(found["found"]) == ["3 figures for 1998 to 1999", "1 figure for 2004"]
    assert found["expected"].iloc[0] == "2000 to 2003"
    quarters = [{"frequency": "Q", "period": 4 * 2000 - 1}, {"frequency": "Q", "period": 4 * 2003 + 3}]
    assert only(applied(quarters, "outside_period")).found == "1 figure for 1999-Q4"
    assert applied(years(2000, 2003), "outside_period").empty


def test_the_shipped_rules_stop_first_and_leave_the_data_alone() -> None:
    rows = [*years(2000, 2002), {"period": 2002}, {"industry": "X1"}, {"period": 2010}]
    frame = observations(rows)
    before = frame.copy(deep=True)
    found = screen(frame, load_screening_rules(), CONTEXT)
    pd.testing.assert_frame_equal(frame, before)
    assert list(found["rule"]) == [
        "duplicate_key",
        "unknown_code",
        "coverage",
        "coverage",
        "no_period",
        "decomposition_inputs",
    ]
    assert list(found.columns) == list(findings.COLUMNS)
    assert {str(found[name].dtype) for name in ("row", "level")} == {"Int64"}


def test_the_shipped_rules_find_nothing_in_clean_data() -> None:
    given: list[dict[str, Any]] = [
        {},
        {"measure": "value_added", "asset": "_Z", "price_basis": "constant"},
        {"measure": "hours_worked", "asset": "_Z", "price_basis": "_Z", "worker_group": "SAL"},
        {"measure": "labour_share", "asset": "_Z", "price_basis": "_Z"},
    ]
    rows = [row for name in ("C", "F") for one in given for row in years(2000, 2003, industry=name, **one)]
    assert screen(observations(rows), load_screening_rules(), CONTEXT).empty


def test_no_observations_no_findings() -> None:
    assert screen(observations([]), load_screening_rules(), CONTEXT).empty


def test_dense_numbers_whatever_the_range() -> None:
    columns = [np.array([3, -1, 3, 2**40]), np.array([0, 2**30, 0, 5])]
    assert dense_numbers(columns).tolist() == [1, 0, 1, 2]
    wide = [np.array([0, 2**40, 0, 1])] * 3
    assert dense_numbers(wide).tolist() == [0, 2, 0, 1]
