"""Jumps and orders of size: what fires, at its cell, and what must be left alone."""

from typing import Any

import numpy as np
import pandas as pd
import pytest
from small_observations import applied, only, place, years

from keelbook.contracts.screening_rules import Jump, load_screening_rules

JUMP: dict[str, Any] = {
    "measures": ["investment"],
    "threshold": 10,
    "least_deviation": 0.5,
    "minimum_years": 8,
}


def grown(count: int, rate: float = 0.03, swing: float = 0.02, **given: Any) -> list[dict[str, Any]]:
    """A series from 1990 that grows by `rate` less `swing`, `rate`, and `rate` plus `swing`, in turns."""
    steps = [rate + swing * (at % 3 - 1) for at in range(count - 1)]
    figures = 100 * np.exp(np.cumsum([0.0, *steps]))
    return [{"period": 1990 + at, "value": float(value), **given} for at, value in enumerate(figures)]


def jumps(rows: list[dict[str, Any]], **given: Any) -> pd.DataFrame:
    return applied(rows, "jump", **JUMP | given)


@pytest.mark.parametrize("order", [1, -1])
def test_a_misprint_is_one_finding_at_its_cell(order: int) -> None:
    rows = [*grown(20, industry="F"), *grown(20)]
    rows[25]["value"] *= 10
    finding = only(jumps(rows[::order]))
    row = 11 + 25 if order == 1 else 11 + 39 - 25
    assert (place(finding), finding.industry, finding.time_period) == (
        ("capital.xlsx", "Table 3", row, 5),
        "C",
        "1995",
    )
    assert finding.found.endswith("a year before: a factor of 10.3")
    assert finding.expected.endswith("usual in this series is 1.03")


def test_a_change_of_unit_is_one_finding_where_it_begins() -> None:
    rows = grown(20)
    for row in rows[12:]:
        row["value"] /= 1000
    finding = only(jumps(rows))
    assert (finding.time_period, finding.rule) == ("2002", "a_jump")


def test_the_deviation_is_from_the_usual_growth_and_of_a_least_size() -> None:
    rows = grown(20, rate=0.4)
    assert jumps(rows).empty
    rows[-1]["value"] = rows[-2]["value"] * np.exp(0.4 - 0.51)
    assert only(jumps(rows)).time_period == "2009"
    assert jumps(rows, least_deviation=0.55).empty


def test_a_series_that_always_jumps_has_no_jump() -> None:
    assert jumps(grown(20, swing=0.6)).empty
    assert len(jumps(grown(20, swing=0.6), threshold=0.5)) > 1


def test_the_threshold_counts_median_absolute_deviations() -> None:
    # two years of three deviate by 0.02 from the median growth: the median deviation is 0.02
    rows = grown(21)
    rows[-1]["value"] = rows[-2]["value"] * np.exp(0.03 + 0.19)
    assert jumps(rows, least_deviation=0.1).empty
    rows[-1]["value"] = rows[-2]["value"] * np.exp(0.03 + 0.26)
    assert only(jumps(rows, least_deviation=0.1)).time_period == "2010"


def test_short_series_gaps_and_figures_without_a_logarithm_are_passed_over() -> None:
    rows = grown(9)
    rows[5]["value"] *= 10
    assert len(jumps(rows)) == 1
    assert jumps(rows[:-1]).empty
    for nothing in (0.0, -5.0, np.nan):
        rows = grown(20)
        rows[10]["value"] = nothing
        assert jumps(rows).empty
    rows = [row for row in grown(30) if row["period"] not in (2000, 2001, 2002, 2003)]
    assert jumps(rows).empty


def test_other_measures_are_left_alone() -> None:
    rows = grown(20, measure="net_stock", price_basis="constant")
    rows[10]["value"] *= 10
    assert jumps(rows).empty
    both = [*rows, *grown(20)]
    both[35]["value"] *= 10
    assert list(jumps(both)["measure"]) == ["investment"]
    assert len(jumps(both, measures=["investment", "net_stock"])) == 2


def test_quarters_are_compared_with_the_same_quarter_a_year_before() -> None:
    season = [1.0, 2.0, 4.0, 0.5]
    rows = [
        {"period": 4 * 1990 + at, "value": season[at % 4] * 1.01**at, "frequency": "Q"}
        for at in range(4 * 12)
    ]
    assert jumps(rows + grown(20)).empty
    rows[21]["value"] *= 10
    finding = only(jumps(rows + grown(20)))
    assert (finding.row, finding.time_period) == (11 + 21, "1995-Q2")


def test_the_shipped_jump_rule_is_in_force() -> None:
    (rule,) = [rule for rule in load_screening_rules() if isinstance(rule, Jump)]
    given = rule.model_dump(include={"measures", "threshold", "least_deviation", "minimum_years"})
    rows = grown(20)
    assert applied(rows, "jump", **given).empty
    rows[10]["value"] *= 10
    assert len(applied(rows, "jump", **given)) == 1


MAGNITUDE: dict[str, Any] = {"power": 3, "tolerance": 0.5, "spread": 5, "minimum_series": 5}
INDUSTRIES = ("A", "B", "C", "D", "E", "F")


def sizes(*levels: float, **given: Any) -> list[dict[str, Any]]:
    pairs = zip(INDUSTRIES, levels, strict=False)
    return [row for code, level in pairs for row in years(2000, 2002, industry=code, value=level, **given)]


@pytest.mark.parametrize(("odd", "usual"), [(0.1, 89.4), (100_000.0, 110)])
def test_a_series_in_another_unit(odd: float, usual: float) -> None:
    rows = sizes(100.0, 150.0, 80.0, 120.0, 60.0, odd)
    finding = only(applied(rows, "magnitude", **MAGNITUDE))
    assert (finding.row, finding.industry) == (26, "F")
    assert finding.found == f"figures of about {odd:.3g}"
    assert finding.expected == f"about {usual}, as the other 5 series of this source"


def test_sizes_that_are_usual_or_differ_by_another_power_are_left_alone() -> None:
    assert applied(sizes(100.0, 150.0, 80.0, 120.0, 60.0, 1.0), "magnitude", **MAGNITUDE).empty
    assert applied(sizes(100.0, 150.0, 80.0, 120.0, 60.0, 1e-6), "magnitude", **MAGNITUDE).empty
    assert applied(sizes(0.1, 1.0, 10.0, 100.0, 1000.0, 10_000.0), "magnitude", **MAGNITUDE).empty
    assert applied(sizes(100.0, 150.0, 80.0, 120.0, 60.0, 0.0), "magnitude", **MAGNITUDE).empty
    assert applied(sizes(100.0, 150.0, 80.0, 0.1), "magnitude", **MAGNITUDE).empty


def test_only_series_of_one_source_measure_and_area_are_compared() -> None:
    rows = sizes(100.0, 150.0, 80.0, 120.0, 60.0)
    small: dict[str, Any] = {"industry": "F", "value": 0.1}
    assert len(applied([*rows, small], "magnitude", **MAGNITUDE)) == 1
    others: list[dict[str, Any]] = [
        {"source": "two"},
        {"area": "NX"},
        {"measure": "net_stock", "price_basis": "constant"},
        {"price_basis": "constant"},
        {"industry": "_T"},
    ]
    for other in others:
        assert applied([*rows, small | other], "magnitude", **MAGNITUDE).empty


def test_indices_and_shares_have_no_order_of_size() -> None:
    price = {"measure": "investment_price", "price_basis": "source_index"}
    assert applied(sizes(100.0, 150.0, 80.0, 120.0, 60.0, 0.1, **price), "magnitude", **MAGNITUDE).empty
