"""Parts and total, price and volume, completeness: what fires, at its cell, and what must be left alone."""

from typing import Any

import numpy as np
import pandas as pd
import pytest
from small_observations import applied, only, place, years

TOTAL: dict[str, Any] = {
    "dimension": "industry",
    "price_bases": ["current", "_Z"],
    "rounding_units": 0.5,
    "relative_tolerance": 0.0,
}


def parts(
    total: float, *figures: float, dim: str = "industry", codes: str = "A B C", **given: Any
) -> list[dict[str, Any]]:
    named = zip(("_T", *codes.split()), (total, *figures), strict=True)
    return [{dim: code, "value": value, **given} for code, value in named]


def against_total(rows: list[dict[str, Any]], **given: Any) -> pd.DataFrame:
    return applied(rows, "parts_total", **TOTAL | given)


def test_a_total_that_its_parts_do_not_make_up() -> None:
    rows = parts(100.0, 50.3, 30.2, 19.5) + parts(101.0, 50.3, 30.2, 19.5, period=2001)
    finding = only(against_total(rows))
    assert place(finding) == ("capital.xlsx", "Table 3", 15, 5)
    assert (finding.industry, finding.time_period) == ("_T", "2001")
    assert finding.found == "101; its parts add up to 100; difference 1"
    assert finding.expected == "100 within 0.2"


def test_printed_rounding_and_a_part_of_the_total_are_allowed() -> None:
    rows = parts(100.2, 50.3, 30.2, 19.5)
    assert against_total(rows).empty
    rows[0]["value"] = 100.3
    assert len(against_total(rows)) == 1
    assert against_total(rows, relative_tolerance=0.01).empty


def test_units_are_put_on_one() -> None:
    rows = parts(100.5, 50.3, 30.2, 20.0)
    rows[2] |= {"value": 30_200.0, "unit_mult": 3, "source": "two"}
    assert against_total(rows).empty
    rows[2]["unit_mult"] = 6
    assert only(against_total(rows)).found.startswith("100.5; its parts add up to 30270.3")


def test_a_group_and_its_details_are_not_both_added() -> None:
    rows = parts(100.0, 60.0, 25.0, 35.0, 40.0, dim="asset", codes="N1132 N11321 N11322 N1131")
    assert against_total(rows, dimension="asset").empty
    # a detail of another year still makes the group a sum of it
    rows[2]["period"] = rows[3]["period"] = 2001
    assert against_total(rows, dimension="asset").empty
    assert (
        only(against_total(parts(90.0, 60.0, 40.0, dim="asset", codes="N1132 N1131"), dimension="asset")).row
        == 11
    )


def test_worker_groups_are_added_within_their_partition() -> None:
    hours: dict[str, Any] = {
        "measure": "hours_worked",
        "asset": "_Z",
        "price_basis": "_Z",
        "dim": "worker_group",
    }
    rows = parts(100.0, 80.0, 20.0, codes="SAL SELF", **hours)
    assert against_total(rows, dimension="worker_group").empty
    rows[0]["value"] = 110.0
    assert only(against_total(rows, dimension="worker_group")).worker_group == "_T"
    # one group of a partition says nothing of the total
    assert against_total(rows[:2], dimension="worker_group").empty


def test_incomplete_periods_and_other_bases_are_not_tested() -> None:
    rows = parts(100.0, 50.0, 30.0, 20.0) + parts(150.0, 50.0, 30.0, np.nan, period=2001)
    rows += parts(150.0, 50.0, 30.0, 20.0, period=2002)[:-1] + parts(
        150.0, 50.0, 30.0, 20.0, price_basis="constant"
    )
    assert against_total(rows).empty
    assert len(against_total(rows, price_bases=["constant"])) == 1


def test_without_a_total_in_the_same_key_there_is_nothing_to_compare() -> None:
    rows = parts(150.0, 50.0, 30.0, 20.0)
    assert len(against_total(rows)) == 1
    for other in ({"area": "NX"}, {"sector": "S13"}, {"asset": "N1131"}, {"frequency": "Q", "period": 8000}):
        assert against_total([rows[0] | other, *rows[1:]]).empty
    assert against_total(rows[1:]).empty
    assert against_total(rows, excluding=["investment"]).empty
    assert against_total([row | {"measure": "labour_share", "price_basis": "_Z"} for row in rows]).empty


PRICE_VOLUME: dict[str, Any] = {
    "measure": "investment",
    "price": "investment_price",
    "price_bases": ["index", "source_index"],
    "rounding_units": 0.5,
    "relative_tolerance": 0.0,
}
PRICE: dict[str, Any] = {"measure": "investment_price", "price_basis": "source_index", "unit_mult": 0}


def value_volume_price(prices: dict[int, float], **given: Any) -> list[dict[str, Any]]:
    """Volume 100 a year, a price on 2000 = 100, and the value at prices of 2001, the reference year."""
    rows: list[dict[str, Any]] = []
    for year, price in prices.items():
        rows += [
            {"period": year, "value": 100.0 * price / 110.0, **given},
            {"period": year, "value": 100.0, "price_basis": "constant", **given},
            {"period": year, "value": price, **PRICE, **given},
        ]
    return rows


def test_a_value_that_is_not_volume_times_price() -> None:
    rows = value_volume_price({2000: 100.0, 2001: 110.0, 2002: 121.0})
    assert applied(rows, "price_volume", **PRICE_VOLUME).empty
    rows[6]["value"] = 130.0
    finding = only(applied(rows, "price_volume", **PRICE_VOLUME))
    assert (finding.row, finding.time_period) == (17, "2002")
    assert finding.found == "130; volume 100 x price 1.1 = 110"
    assert finding.expected.startswith("110 within ")


def test_the_last_digits_of_value_volume_and_price_are_allowed_for() -> None:
    rows = value_volume_price({2001: 110.0, 2002: 121.0})
    # half a unit each: 0.5 of the value, 0.5 x 1.1 of the volume, 0.5 x 100 x 2.1 / 110 of the price
    allowed = 0.5 + 0.5 * 1.1 + 0.5 * 100 * 2.1 / 110
    assert 2 < allowed < 3
    rows[3]["value"] = 112.0
    assert applied(rows, "price_volume", **PRICE_VOLUME).empty
    rows[3]["value"] = 113.0
    finding = only(applied(rows, "price_volume", **PRICE_VOLUME))
    assert finding.expected == f"110 within {allowed:.10g}"
    assert applied(rows, "price_volume", **PRICE_VOLUME | {"relative_tolerance": 0.05}).empty


def test_a_price_that_lacks_the_reference_year_is_said() -> None:
    rows = value_volume_price({2000: 100.0, 2002: 121.0})
    finding = only(applied(rows, "price_volume", severity="warn", **PRICE_VOLUME))
    assert (finding.severity, finding.found) == ("note", "1 series without a price in 2001")


@pytest.mark.parametrize("left_out", [0, 1, 2])
def test_all_three_must_be_delivered_for_one_key(left_out: int) -> None:
    rows = value_volume_price({2001: 110.0, 2002: 121.0})
    rows[3]["value"] = 500.0
    assert len(applied(rows, "price_volume", **PRICE_VOLUME)) == 1
    assert applied(
        [row for at, row in enumerate(rows) if at % 3 != left_out], "price_volume", **PRICE_VOLUME
    ).empty
    for at in (left_out, left_out + 3):
        rows[at] |= {"industry": "F"}
    assert applied(rows, "price_volume", **PRICE_VOLUME).empty


def test_quarters_are_put_on_the_mean_of_the_reference_year() -> None:
    quarter = {"frequency": "Q"}
    prices = {4 * 2001 + at: price for at, price in enumerate((108.0, 109.0, 111.0, 112.0, 121.0))}
    rows = value_volume_price(prices, **quarter)
    assert applied(rows, "price_volume", **PRICE_VOLUME).empty
    rows[12]["value"] = 150.0
    assert only(applied(rows, "price_volume", **PRICE_VOLUME)).time_period == "2002-Q1"


COMPLETE: dict[str, Any] = {
    "severity": "note",
    "measures": ["value_added", "investment"],
    "instead": {"investment": ["net_stock"]},
}


def test_an_industry_without_a_measure_is_named_in_one_note_for_its_area() -> None:
    added = {"measure": "value_added", "asset": "_Z"}
    rows: list[dict[str, Any]] = [
        {"industry": "A", **added},
        {"industry": "B", **added},
        *years(2000, 2001, industry="B"),
        {"industry": "C"},
        {"industry": "_T", **added},
        {"industry": "C", "area": "NX"},
    ]
    found = applied(rows, "completeness", **COMPLETE)
    assert list(found["area"]) == ["HV", "NX"]
    assert list(found["found"]) == [
        "no value_added for C; no investment for A",
        "no value_added for any industry",
    ]
    assert found["expected"].iloc[0] == "for each industry value_added, investment or net_stock"
    rows += [{"industry": "C", **added}, {"industry": "A", "measure": "net_stock", "price_basis": "constant"}]
    assert list(applied(rows, "completeness", **COMPLETE)["area"]) == ["NX"]


def test_where_there_are_totals_only_they_are_looked_at() -> None:
    rows: list[dict[str, Any]] = [{"industry": "_T"}]
    assert only(applied(rows, "completeness", **COMPLETE)).found == "no value_added for any industry"
    rows += [{"industry": "_T", "measure": "value_added", "asset": "_Z"}]
    assert applied(rows, "completeness", **COMPLETE).empty
    assert applied([{"measure": "gross_stock", "price_basis": "constant"}], "completeness", **COMPLETE).empty
