import numpy as np
import pytest

from keelbook.methods.initial_stock import (
    backcast_by_indicator,
    half_life,
    half_life_of_part,
    log_trend_coefficients,
    missing_part,
    opening_remainder,
    opening_stock_geometric,
    opening_stock_profile,
    opening_vintages,
)

WEIGHTS = np.array([0.8, 0.4, 0.1, 0])


def test_profile_start_by_hand():
    # Investment of 100 in year 1 that doubled every year: 50, 25, 12.5 before.
    assert opening_stock_profile(np.array(100.0), np.array(1.0), WEIGHTS) == pytest.approx(51.25)
    np.testing.assert_allclose(
        opening_vintages(WEIGHTS, np.array([1.0]), 4)[:, 0], [0.225, 0.05, 0, 0], rtol=1e-15
    )
    remainder = opening_remainder(WEIGHTS, np.array([1.0]), 4)
    np.testing.assert_allclose(51.25 * remainder[:, 0], [22.5, 5, 0, 0], rtol=1e-14)


def test_geometric_start_is_the_endless_profile():
    endless = 0.95 * 0.9 ** np.arange(600.0)
    found = opening_stock_geometric(np.array([100.0]), np.array([0.02]), np.array([0.95]), np.array([0.1]))
    np.testing.assert_allclose(
        found, opening_stock_profile(np.array([100.0]), np.array([0.02]), endless), rtol=1e-12
    )


def test_one_window_of_two_years():
    slope, intercept = log_trend_coefficients(2)
    np.testing.assert_allclose(slope, [-1, 1])
    np.testing.assert_allclose(intercept, [1, 0], atol=1e-15)


def test_series_without_growth_have_no_figure():
    growth = np.array([0.02, np.nan])
    stock = opening_stock_profile(np.array([1.0, 1.0]), growth, WEIGHTS)
    remainder = opening_remainder(WEIGHTS, growth, 6)
    assert np.isnan(stock).tolist() == [False, True]
    assert np.isnan(remainder).all(axis=0).tolist() == [False, True]
    assert np.isfinite(remainder[:, 0]).all()


def test_no_weights_leave_nothing():
    np.testing.assert_array_equal(opening_remainder(np.zeros(2), np.array([0.02]), 3), np.zeros((3, 1)))


def test_refusals():
    with pytest.raises(ValueError, match="at least 2 years"):
        log_trend_coefficients(1)
    growth = np.array([0.02, -0.07])
    with pytest.raises(ValueError, match="no steady state"):
        opening_stock_geometric(np.ones(2), growth, np.ones(2), np.full(2, 0.07))
    for function in (opening_vintages, opening_remainder):
        with pytest.raises(ValueError, match="not above -1"):
            function(WEIGHTS, np.array([-1.0]), 3)
    with pytest.raises(ValueError, match="not above -1"):
        opening_stock_profile(np.array([1.0]), np.array([-1.5]), WEIGHTS)


@pytest.mark.parametrize(("rate", "growth"), [(0, 0), (0.02, -0.02), (1, 0.02), (0.05, -1)])
def test_no_half_life(rate, growth):
    with pytest.raises(ValueError, match=r"half-life|growth rate"):
        half_life_of_part(rate, growth)


def test_half_life_of_a_stock_that_halves_every_period():
    assert half_life(0.5) == pytest.approx(1)


def test_investment_before_the_first_year_follows_the_indicator():
    investment = np.array([[30.0, 3], [50, 5]])
    indicator, linked = np.array([[1.0], [2.0]]), np.array([[3.0], [5.0]])
    np.testing.assert_allclose(backcast_by_indicator(investment, indicator, linked), [[10, 1], [20, 2]])
    with pytest.raises(ValueError, match="2 periods of investment and 1"):
        backcast_by_indicator(investment, indicator, linked[:1])
    with pytest.raises(ValueError, match="0 or less"):
        backcast_by_indicator(investment, indicator, np.array([[3.0], [-3.0]]))


def test_what_a_stock_started_from_zero_lacks():
    np.testing.assert_allclose(missing_part(np.array([100.0, 50, 0]), np.array([0.0, 150, 20])), [1, 0.25, 0])
