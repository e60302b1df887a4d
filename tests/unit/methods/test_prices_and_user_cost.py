import numpy as np
import pytest

from keelbook.methods.user_cost import asset_base, capital_cost, endogenous_rate, revaluation, unit_user_cost
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
