"""The same arithmetic by general-purpose libraries: scipy's linear filter, statsmodels' least squares."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy.optimize import brentq
from scipy.signal import lfilter

from keelbook.methods.benchmark import rate_between
from keelbook.methods.growth import log_log_fit
from keelbook.methods.initial_stock import log_trend_coefficients
from keelbook.methods.perpetual_inventory import geometric_stock


def test_geometric_stock_is_a_linear_filter():
    random = np.random.default_rng(1957)
    investment = random.uniform(0, 100, (60, 7))
    rate = random.uniform(0.01, 0.4, 7)
    opening = random.uniform(0, 1000, 7)
    stock = geometric_stock(investment, 1 - rate / 2, 1 - rate, opening)
    for i in range(7):
        keep = 1 - rate[i]
        expected, _ = lfilter([1 - rate[i] / 2], [1, -keep], investment[:, i], zi=[keep * opening[i]])
        np.testing.assert_allclose(stock[:, i], expected, rtol=1e-12)


def test_fit_of_logarithms_is_least_squares():
    random = np.random.default_rng(1928)
    x = random.uniform(1, 5, 40)
    y = 2 * x**0.3 * np.exp(random.normal(0, 0.1, 40))
    outside = sm.OLS(np.log(y), sm.add_constant(np.log(x))).fit()
    fit = log_log_fit(y, x)
    np.testing.assert_allclose([fit.intercept, fit.slope], outside.params, rtol=1e-10)
    np.testing.assert_allclose([fit.r2, fit.standard_error], [outside.rsquared, outside.bse[1]], rtol=1e-10)


def test_log_trend_is_least_squares():
    random = np.random.default_rng(1993)
    log_investment = random.normal(3, 0.2, 10)
    outside = sm.OLS(log_investment, sm.add_constant(np.arange(1.0, 11))).fit()
    slope, intercept = log_trend_coefficients(10)
    np.testing.assert_allclose(
        [slope @ log_investment, intercept @ log_investment],
        [outside.params[1], outside.fittedvalues[0]],
        rtol=1e-10,
    )


@pytest.mark.parametrize(("timing", "first"), [("start", 1.0), ("mid", 0.5), ("end", 0.0)])
def test_rate_between_benchmarks_is_the_root_that_brentq_finds(timing, first):
    random = np.random.default_rng(1935)
    opening, investment = random.uniform(50, 200, 20), random.uniform(0, 30, (19, 20))
    closing = random.uniform(20, 600, 20)
    solved = rate_between(opening, closing, investment, timing)
    for i in range(20):

        def gap(d, i=i):
            powers = (1 - d) ** np.arange(18, -1, -1)
            kept = (1 - d) ** 19 * opening[i] + (1 - first * d) * powers @ investment[:, i]
            return kept - closing[i]

        if gap(0) > 0 > gap(1):
            assert solved.rate[i] == pytest.approx(brentq(gap, 0, 1, xtol=1e-15), abs=1e-12)
            assert abs(solved.residual[i]) <= 1e-12 * (opening[i] + investment[:, i].sum())
        else:
            assert np.isnan(solved.rate[i])
    assert 10 < np.isfinite(solved.rate).sum() < 20
