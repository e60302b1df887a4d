"""Age profiles against published and derived figures; sources at each test."""

import numpy as np
import pytest

from keelbook.methods.perpetual_inventory import cohort_stock
from keelbook.methods.profiles import age_price, efficiency, efficiency_from_age_price
from keelbook.methods.weights import period_end_weights

AGES = np.arange(11.0)


def test_from_efficiency_to_price_to_depreciation(figures):
    """A. Harrison, Cost of capital services and the national accounts, table 1 (seen; cut off)."""
    table = figures("harrison_2005_table1.csv")
    h = table["earnings"] / table["earnings"][0]
    np.testing.assert_allclose(h, efficiency("linear", np.arange(5.0), life=5), rtol=0, atol=1e-15)

    new = 281.620  # derived: the five earnings discounted at 5 %
    value = new * age_price(h, 0.05)
    decline = value - np.append(value[1:], 0)
    for computed, column in ((value, "value_published"), (decline, "decline_published")):
        beyond = computed - table[column]
        assert np.all((beyond > -5e-4) & (beyond < 1))
    np.testing.assert_allclose(value, table["value_computed_5pct"], rtol=0, atol=6e-4)
    np.testing.assert_allclose(decline, table["decline_computed"], rtol=0, atol=6e-4)
    np.testing.assert_allclose(decline / decline[0], table["price_row_published"], rtol=0, atol=5e-3)
    np.testing.assert_allclose(efficiency_from_age_price(value / value[0], 0.05), h, rtol=0, atol=1e-14)


def test_straight_line_consumption(figures):
    """N. Molemoeng, Statistics South Africa, SNA seminar, October 2012 (vintages seen, totals derived)."""
    table = figures("cfc_straight_line_example.csv")
    # Constant efficiency without discounting is a straight-line price; timing start charges the whole year.
    weights = period_end_weights(
        efficiency="constant",
        retirement="simultaneous",
        life=5,
        rate=None,
        b=None,
        discount_rate=0,
        timing="start",
        length=10,
    )
    investment = np.nan_to_num(table["gfcf_seen"])
    np.testing.assert_allclose((investment * weights.consumption[0])[:4], table["cfc_per_vintage_seen"][:4])
    total = cohort_stock(investment[:, None], weights.consumption)[:, 0]
    np.testing.assert_allclose(total, table["cfc_total_derived"], rtol=0, atol=1e-9)
    assert total.sum() == pytest.approx(investment.sum())


@pytest.mark.parametrize(
    ("b", "expected"),
    [
        (0.5, [1, 0.9474, 0.8889, 0.8235, 0.75, 0.6667, 0.5714, 0.4615, 0.3333, 0.1818, 0]),
        (0.75, [1, 0.9730, 0.9412, 0.9032, 0.8571, 0.8, 0.7273, 0.6316, 0.5, 0.3077, 0]),
    ],
)
def test_hyperbolic_efficiency(b, expected):
    """b of equipment, structures: ABS, Concepts, Sources, Methods 2020-21, 14.36 (seen); values derived."""
    np.testing.assert_allclose(efficiency("hyperbolic", AGES, life=10, b=b), expected, rtol=0, atol=5.1e-5)


@pytest.mark.parametrize(
    ("form", "b", "expected"),
    [
        ("constant", None, [1, 0.9167, 0.8301, 0.74, 0.6463, 0.5489, 0.4475, 0.3421, 0.2325, 0.1185, 0]),
        ("hyperbolic", 0.5, [1, 0.8615, 0.7269, 0.5974, 0.4743, 0.3594, 0.2548, 0.1630, 0.0872, 0.0312, 0]),
        ("hyperbolic", 0.75, [1, 0.8833, 0.7661, 0.6492, 0.5336, 0.4206, 0.3120, 0.2105, 0.1199, 0.0464, 0]),
    ],
)
def test_age_price_of_a_ten_year_asset_at_four_percent(form, b, expected):
    """Formula of OECD, Measuring Capital (from memory); values derived."""
    price = age_price(efficiency(form, AGES, life=10, b=b), 0.04)
    np.testing.assert_allclose(price, expected, rtol=0, atol=5.1e-5)


def test_closed_forms_of_the_age_price():
    """OECD, Measuring Capital (from memory): constant efficiency, with and without discounting."""
    one_hoss_shay = efficiency("constant", AGES, life=10)
    closed = (1 - 1.04 ** -(10 - AGES)) / (1 - 1.04**-10)
    np.testing.assert_allclose(age_price(one_hoss_shay, 0.04), closed, rtol=0, atol=1e-14)
    np.testing.assert_allclose(age_price(one_hoss_shay, 0), 1 - AGES / 10, rtol=0, atol=1e-14)


def test_geometric_price_equals_geometric_efficiency():
    """OECD, Measuring Capital (from memory); far enough out that the end of the list does not matter."""
    h = efficiency("geometric", np.arange(400.0), rate=0.15)
    np.testing.assert_allclose(age_price(h, 0.04)[:50], h[:50], rtol=1e-12)
