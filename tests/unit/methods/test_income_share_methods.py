import numpy as np
import pytest

from keelbook.methods.income_shares import (
    LABOUR_INCOME,
    all_mixed,
    asset_basis,
    by_hours,
    by_persons,
    capital_share,
    factor_cost,
    fixed_fraction,
    imputed_labour,
    proportional,
    reconciled,
    reconciliation_factor,
    share,
    two_period_mean,
    unadjusted,
)

D1, MIXED = np.array(60.0), np.array(20.0)


def test_each_adjustment_by_hand():
    base = factor_cost(np.array(110.0), np.array(10.0))
    assert base == 100
    assert share(unadjusted(D1), base) == pytest.approx(0.6)
    # 60 an hundred hours, twenty of the self-employed at half the rate.
    assert share(by_hours(D1, np.array(100.0), np.array(20.0), np.array(0.5)), base) == pytest.approx(0.66)
    assert share(fixed_fraction(D1, MIXED, np.array(0.75)), base) == pytest.approx(0.75)


def test_hours_with_equal_earnings_is_compensation_scaled_by_hours():
    found = by_hours(D1, np.array(80.0), np.array(20.0), np.array(1.0))
    assert found == pytest.approx(60 * 100 / 80)


def test_order_of_adjustments_when_mixed_income_is_not_negative():
    assert (
        unadjusted(D1)
        <= fixed_fraction(D1, MIXED, np.array(2 / 3))
        <= fixed_fraction(D1, MIXED, np.array(1.0))
    )


def test_shares_are_not_cut_and_keep_gaps():
    assert share(np.array(120.0), np.array(100.0)) == pytest.approx(1.2)
    np.testing.assert_allclose(two_period_mean(np.array([0.6, np.nan]), np.array([0.7, 0.7])), [0.65, np.nan])
    assert capital_share(np.array(0.65)) == pytest.approx(0.35)


def test_further_adjustments_by_hand():
    base = np.array(100.0)
    assert by_persons(D1, np.array(100.0), np.array(20.0), np.array(0.5)) == pytest.approx(66)
    assert all_mixed(D1, MIXED) == pytest.approx(80)
    assert share(proportional(D1, MIXED, base), base) == pytest.approx(60 / 80)
    # A return of 10 % on assets of 50 is no labour income.
    assert asset_basis(D1, MIXED, np.array(0.1), np.array(50.0)) == pytest.approx(75)


def test_reconciled_scales_labour_and_capital_alike():
    labour = imputed_labour(D1, np.array(100.0), np.array(40.0), np.array(1.0))
    capital = np.array(8.0)
    factor = reconciliation_factor(MIXED, labour, capital)
    assert factor == pytest.approx(20 / 32)
    assert reconciled(D1, MIXED, labour, capital) == pytest.approx(60 + 15)
    assert factor * (labour + capital) == pytest.approx(MIXED)


def test_every_adjustment_has_a_name():
    assert sorted(LABOUR_INCOME) == [
        "all_mixed",
        "asset_basis",
        "fixed_fraction",
        "hours",
        "persons",
        "proportional",
        "reconciled",
        "unadjusted",
    ]
    assert len(set(LABOUR_INCOME.values())) == len(LABOUR_INCOME)
