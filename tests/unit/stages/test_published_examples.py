"""Published examples through the stages; sources in fixtures/reference/README.md."""

import csv
from pathlib import Path

import numpy as np
import pytest
from small_blocks import REFERENCE_YEAR, block, column, get, params, run_stage
from small_observations import applied

from keelbook.stages import valuation
from keelbook.stages.totals import totals

REFERENCE = Path(__file__).resolve().parents[3] / "fixtures" / "reference"
FORMULAS = {"Laspeyres": "laspeyres", "Fisher": "fisher", "Tornqvist": "tornqvist"}


def rows(name: str) -> list[dict[str, str]]:
    with (REFERENCE / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture
def manual() -> tuple[np.ndarray, np.ndarray]:
    """Return prices and quantities of the Producer Price Index Manual, (5, 6) periods x products."""
    data = rows("ppi_manual_artificial_dataset.csv")
    price, quantity = (
        np.array([float(row[name]) for row in data]).reshape(5, 6) for name in ("price", "quantity")
    )
    return price, quantity


ASSETS = ("N11", "N11K", "N112", "N11M", "N113", "N1131")
"""Codes that stand for the six products of the manual."""


def _chained_by_the_stage(formula, figures, weights):
    """Return stage figures for a total of six series that are valued at six others, with the first period = 1."""
    rows, prices = (
        {f"asset={code}": list(one) for code, one in zip(ASSETS, table.T, strict=True)}
        for table in (figures, weights)
    )
    volume = block("investment/deflated/constant", rows, first=REFERENCE_YEAR)
    return run_stage(
        valuation.STAGE,
        params("valuation", chaining=formula, price_bases=()),
        volume,
        *totals(volume, ("asset",)),
        block("investment_price/rebased/index", prices, first=REFERENCE_YEAR),
    )


@pytest.mark.parametrize("printed", ["Laspeyres", "Fisher", "Tornqvist"])
def test_the_stage_chains_the_data_of_the_manual(manual, printed):
    """Prices weighed by quantities: the chained price indices of the manual from the stage that chains volumes."""
    price, quantity = manual
    formula = FORMULAS[printed]
    book, findings = _chained_by_the_stage(formula, price, quantity)
    derived = [
        float(row["chained"])
        for row in rows("ppi_manual_index_results_derived.csv")
        if row["formula"] == printed
    ]
    index = column(get(book, f"investment_index/{formula}/index"), "asset=_T")
    np.testing.assert_allclose(index, derived, rtol=0, atol=5.1e-7)
    assert not findings


def test_a_chained_volume_times_its_price_is_the_value_of_the_manual(manual):
    """Laspeyres volume x Paasche price, and Fisher volume x Fisher price, are 10.00, 14.10, 15.28, 17.56, 20.00."""
    price, quantity = manual
    for volume, printed in (("laspeyres", "Paasche"), ("fisher", "Fisher")):
        book, _ = _chained_by_the_stage(volume, quantity, price)
        level = column(get(book, f"investment/chained_{volume}/constant"), "asset=_T")
        index = [
            float(row["chained"])
            for row in rows("ppi_manual_index_results_derived.csv")
            if row["formula"] == printed
        ]
        np.testing.assert_allclose(level * index, [10.00, 14.10, 15.28, 17.56, 20.00], rtol=0, atol=5.1e-3)


def test_screening_notices_the_one_year_whose_shares_do_not_add_up():
    """Berndt and Wood 1975: the cost shares of 1958 add up to 1.0002, all other years to 1 within 1e-5."""
    data = rows("berndt_wood_1975_klem.csv")
    of_cost = {"measure": "value_added", "asset": "_Z", "unit_mult": 0}
    delivered = [
        {"industry": code, "period": int(row["year"]), "value": float(row[name]), **of_cost}
        for row in [{**one, "total": "1"} for one in data]
        for code, name in zip(
            ("_T", "A", "B", "C", "D"), ("total", *(f"share_{x}" for x in "klem")), strict=True
        )
    ]
    rule = {"dimension": "industry", "price_bases": ["current"], "rounding_units": 0.0}
    found = applied(delivered, "parts_total", **rule, relative_tolerance=5e-5)
    assert found["time_period"].tolist() == ["1958"]
    assert "add up to 1.0002" in found["found"].iloc[0]
    assert len(data) == 25
    assert applied(delivered, "parts_total", **rule, relative_tolerance=3e-4).empty
