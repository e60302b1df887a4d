import numpy as np
import pytest

from keelbook.methods.user_cost import (
    asset_base,
    capital_cost,
    endogenous_rate,
    exogenous_rate,
    general_inflation,
    opening_base,
    opening_depreciation,
    opening_revaluation,
    revaluation,
    revaluation_at,
    smoothed_log_change,
    tax_term,
    unit_user_cost,
)
from keelbook.methods.valuation import holding_gains, year_end_price, year_end_price_extrapolated


def test_prices_at_the_end_of_the_period():
    assert year_end_price(np.array(4.0), np.array(9.0)) == 6
    assert year_end_price_extrapolated(np.array(9.0), np.array(4.0)) == 13.5


def test_holding_gains_by_hand():
    # Opening 10 from 1.0 to 1.1 within the period, closing 12 from 1.1 to 1.3: 1 + 2.4.
    found = holding_gains(np.array(10.0), np.array(12.0), np.array(1.1), np.array(1.3), np.array(1.0))
    assert found == pytest.approx(3.4)


def test_two_assets_by_hand():
    base = asset_base(np.array([2.0, 1.0]), np.array([40.0, 90.0]), np.array([60.0, 110.0]))
    np.testing.assert_allclose(base, [100, 100])
    gain = revaluation(np.array([1.1, 1.0]), np.array([1.0, 1.0]), base)
    np.testing.assert_allclose(gain, [10, 0])
    consumption = np.array([20.0, 5.0])
    rate = endogenous_rate(np.array(35.0), consumption.sum(), gain.sum(), base.sum())
    assert rate == pytest.approx(0.1)
    cost = capital_cost(rate, base, consumption, gain)
    np.testing.assert_allclose(cost, [20, 15])
    np.testing.assert_allclose(unit_user_cost(cost, np.array([50.0, 100.0])), [0.4, 0.15])


def test_a_negative_user_cost_is_shown():
    assert capital_cost(np.array(0.05), np.array(100.0), np.array(1.0), np.array(30.0)) == pytest.approx(-24)


def test_opening_form_by_hand():
    # Opening stock of 100 at 1.0, prices rise to 1.1; 20 invested, of which 1 is lost, and 11 lost in all.
    pe, before, opening = np.array(1.1), np.array(1.0), np.array(100.0)
    assert opening_base(before, opening) == 100
    assert opening_revaluation(pe, before, opening) == pytest.approx(10)
    lost = opening_depreciation(pe, np.array(11.0), np.array(20.0), np.array(0.95))
    assert lost == pytest.approx(11)
    assert capital_cost(np.array(0.05), opening_base(before, opening), lost, np.array(10.0)) == pytest.approx(
        6
    )


def test_opening_form_is_the_textbook_user_cost_for_geometric_decline():
    """q_{t-1} r + d q_t - (q_t - q_{t-1}) for one unit (from memory), investment of the period left out of it."""
    r, d, q, before = 0.05, 0.1, np.array(1.3), np.array(1.2)
    opening, investment = np.array(7.0), np.array(4.0)
    consumption = d * opening + d / 2 * investment
    cost = capital_cost(
        np.array(r),
        opening_base(before, opening),
        opening_depreciation(q, consumption, investment, np.array(1 - d / 2)),
        opening_revaluation(q, before, opening),
    )
    assert unit_user_cost(cost, opening) == pytest.approx(before * r + d * q - (q - before), rel=1e-14)


def test_rates_and_prices_by_hand():
    assert exogenous_rate(np.array(0.04), np.array(0.05)) == pytest.approx(0.092)
    # Deflator from 1.2 to 1.5.
    found = general_inflation(np.array(150.0), np.array(100.0), np.array(108.0), np.array(90.0))
    assert found == pytest.approx(0.25)
    change = smoothed_log_change(np.array(8.0), np.array(1.0), 3)
    assert change == pytest.approx(np.log(2))
    assert revaluation_at(change, np.array(50.0)) == pytest.approx(50)
    with pytest.raises(ValueError, match="1 period or more"):
        smoothed_log_change(np.array(2.0), np.array(1.0), 0)


def test_smoothing_over_one_period_is_no_smoothing():
    pe, before, base = np.array(1.3), np.array(1.2), np.array(50.0)
    assert revaluation_at(smoothed_log_change(pe, before, 1), base) == pytest.approx(
        revaluation(pe, before, base)
    )


def test_taxes_by_hand():
    assert tax_term(np.array(0.25), np.array(0.8), np.array(0.05)) == pytest.approx(1)
    assert tax_term(np.array(0.5), np.array(0.6), np.array(0.1)) == pytest.approx(1.2)
    cost = capital_cost(
        np.array(0.1), np.array(100.0), np.array(8.0), np.array(3.0), np.array(1.2), np.array(0.01)
    )
    assert cost == pytest.approx(1.2 * 15 + 1)
