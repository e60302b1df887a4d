"""What must hold for every stock, whatever the investment, the profile and the timing."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from keelbook.methods.benchmark import benchmark_factor, closing_stock, even_changes, rate_between
from keelbook.methods.initial_stock import (
    log_trend_coefficients,
    opening_remainder,
    opening_stock_geometric,
    opening_stock_profile,
    opening_vintages,
)
from keelbook.methods.perpetual_inventory import cohort_stock, cohort_stocks, geometric_stock
from keelbook.methods.profiles import age_price, efficiency, efficiency_from_age_price
from keelbook.methods.retirement import lives
from keelbook.methods.valuation import holding_gains
from keelbook.methods.weights import AGE_AT_PERIOD_END, AGE_PRICE_MODES, period_end_weights

quick = settings(max_examples=40, deadline=None)

investments = st.integers(1, 60).flatmap(
    lambda periods: arrays(np.float64, (periods, 3), elements=st.floats(0, 1e6, allow_subnormal=False))
)
timings = st.sampled_from(sorted(AGE_AT_PERIOD_END))
rates = st.floats(0.01, 0.6)


shapes = st.one_of(
    st.just(("simultaneous", ())),
    st.just(("linear", ())),
    st.floats(0.05, 1).map(lambda c: ("delayed_linear", (("half_width", c),))),
    st.floats(0.05, 0.6).map(lambda sd: ("truncated_normal", (("sd", sd), ("low", 0.02), ("high", 1.98)))),
    st.floats(0.05, 0.6).map(lambda sd: ("lognormal", (("sd", sd), ("high", 3.0)))),
    st.floats(0.8, 5).map(lambda a: ("weibull", (("shape", a), ("high", 3.0)))),
    st.floats(1, 20).map(lambda p: ("gamma", (("shape", p), ("high", 3.0)))),
    st.floats(0, 15).map(lambda m: ("winfrey", (("exponent", m),))),
    st.floats(0.1, 0.55).map(lambda sd: ("winfrey_moment", (("sd", sd),))),
)
"""Every retirement distribution with some of its parameters."""


@st.composite
def finite_weights(
    draw,
    forms=("geometric", "hyperbolic", "linear", "constant"),
    lowest_b=-3.0,
    lowest_discount=-0.02,
    retirements=shapes,
):
    """Return the weights of an asset class with a finite life, whole or fractional, fixed or spread."""
    form = draw(st.sampled_from(forms))
    retirement, shape = draw(retirements)
    return period_end_weights(
        efficiency=form,
        retirement=retirement,
        retirement_shape=shape,
        age_price_mode=draw(st.sampled_from(AGE_PRICE_MODES)),
        life=draw(st.one_of(st.integers(1, 30), st.floats(1, 30))),
        rate=draw(rates) if form == "geometric" else None,
        b=draw(st.floats(lowest_b, 1)) if form == "hyperbolic" else None,
        discount_rate=draw(st.floats(lowest_discount, 0.1)),
        timing=draw(timings),
        length=1,
    )


def cohort_geometric(rate, timing, length):
    return period_end_weights(
        efficiency="cohort_geometric",
        retirement=None,
        life=None,
        rate=rate,
        b=None,
        discount_rate=None,
        timing=timing,
        length=length,
    )


def assert_close(found, expected, size):
    """Equal within 1e-12 of the summed size of the terms, which also fits differences."""
    assert np.all(np.abs(found - expected) <= 1e-12 * size)


@quick
@given(investments, rates, timings)
def test_recursion_equals_the_sum_over_vintages(investment, rate, timing):
    weights = cohort_geometric(rate, timing, len(investment))
    recursion = geometric_stock(investment, weights.net[0], 1 - rate, None)
    assert_close(recursion, cohort_stock(investment, weights.net), investment.sum(axis=0))


@quick
@given(investments, finite_weights(), st.floats(1e-3, 1e3))
def test_stock_scales_with_investment(investment, weights, factor):
    stock = cohort_stock(investment, weights.net)
    assert_close(
        cohort_stock(factor * investment, weights.net), factor * stock, factor * investment.sum(axis=0)
    )


@quick
@given(investments, finite_weights(), rates, timings)
def test_a_later_year_leaves_earlier_years(investment, weights, rate, timing):
    size = investment.sum(axis=0)
    stacked = np.stack([weights.gross, weights.productive, weights.net])
    assert_close(cohort_stocks(investment, stacked)[:, :-1], cohort_stocks(investment[:-1], stacked), size)
    first = cohort_geometric(rate, timing, 1).net[0]
    whole = geometric_stock(investment, first, 1 - rate, None)
    np.testing.assert_array_equal(whole[:-1], geometric_stock(investment[:-1], first, 1 - rate, None))


@quick
@given(investments, finite_weights())
def test_one_product_equals_a_plain_loop_over_vintages(investment, weights):
    expected = np.zeros_like(investment)
    for v, weight in enumerate(weights.net):
        expected[v:] += weight * investment[: max(0, len(investment) - v)]
    assert_close(cohort_stock(investment, weights.net), expected, investment.sum(axis=0))


@quick
@given(investments, finite_weights(), st.floats(-0.1, 0.2))
def test_balance_closes_with_losses_taken_from_vintages(investment, weights, growth):
    """W_t = W_{t-1} + I_t - loss_t, stocks and losses each from their own weights, from an assumed start."""
    g = np.full(investment.shape[1], growth)
    first = investment[0]
    for stock_weights, loss_weights in (
        (weights.net, weights.consumption),
        (weights.gross, weights.retirements),
    ):
        opening = opening_stock_profile(first, g, stock_weights)
        since = len(investment)
        stock = cohort_stock(investment, stock_weights) + first * opening_vintages(stock_weights, g, since)
        loss = cohort_stock(investment, loss_weights) + first * opening_vintages(loss_weights, g, since)
        before = np.concatenate([opening[None], stock[:-1]])
        assert_close(stock, before + investment - loss, 4 * (opening + investment.sum(axis=0)))


@quick
@given(investments, rates, timings)
def test_balance_closes_for_the_geometric_recursion(investment, rate, timing):
    weights = cohort_geometric(rate, timing, len(investment))
    stock = geometric_stock(investment, weights.net[0], 1 - rate, None)
    before = np.concatenate([np.zeros((1, 3)), stock[:-1]])
    consumption = cohort_stock(investment, weights.consumption)
    assert_close(stock, before + investment - consumption, 4 * investment.sum(axis=0))


@quick
@given(finite_weights(), st.floats(-0.1, 0.2))
def test_steady_growth_carries_to_every_stock_of_a_finite_life(weights, growth):
    """Investment growing at g for at least the longest life makes every stock grow at g."""
    longest = len(weights.net) - 1
    investment = (1 + growth) ** np.arange(longest + 6.0)[:, None]
    for kind in (weights.gross, weights.productive, weights.net):
        stock = cohort_stock(investment, kind)[longest:]
        assert_close(stock[1:], (1 + growth) * stock[:-1], investment.sum())


@quick
@given(finite_weights(), st.floats(-0.1, 0.2))
def test_steady_state_start_is_a_fixed_point_for_finite_lives(weights, growth):
    periods = 12
    g = np.array([growth])
    investment = 100 * (1 + growth) ** np.arange(float(periods))[:, None]
    path = (1 + growth) ** np.arange(1.0, periods + 1)[:, None]
    for kind in (weights.gross, weights.productive, weights.net):
        opening = opening_stock_profile(investment[0], g, kind)
        stock = cohort_stock(investment, kind) + opening * opening_remainder(kind, g, periods)
        assert_close(stock, opening * path, 2 * (opening + investment.sum()) * path)


@quick
@given(st.floats(0.01, 1), timings, st.floats(-0.009, 0.2))
def test_steady_state_start_is_a_fixed_point_for_the_cohort_geometric(rate, timing, growth):
    periods = 12
    investment = 100 * (1 + growth) ** np.arange(float(periods))[:, None]
    first = cohort_geometric(rate, timing, 1).net[0]
    opening = opening_stock_geometric(investment[0], np.array([growth]), first, rate)
    stock = geometric_stock(investment, first, np.array([1 - rate]), opening)
    # g + d may be a thousandth of its parts, so the rounding of the sum counts that much more.
    np.testing.assert_allclose(
        stock, opening * (1 + growth) ** np.arange(1.0, periods + 1)[:, None], rtol=1e-11
    )


@quick
@given(
    investments,
    finite_weights(
        forms=("hyperbolic", "linear", "constant"),
        lowest_b=0.0,
        lowest_discount=0.0,
        retirements=st.just(("simultaneous", ())),
    ),
)
def test_net_is_at_most_productive(investment, weights):
    """For efficiency that falls ever faster, discount rates and investment of 0 or more.

    Not for geometric decline with a finite life: at mid-period its price is a mean of two ages, which can lie
    above the efficiency at the exact age between them. Not for spread lives either: those that retire early pull
    the efficiency of the vintage down at first, and what is left then falls more slowly.
    """
    productive, net = cohort_stocks(investment, np.stack([weights.productive, weights.net]))
    assert np.all(net <= productive + 1e-12 * investment.sum(axis=0))


@quick
@given(investments, finite_weights())
def test_productive_is_at_most_gross(investment, weights):
    gross, productive = cohort_stocks(investment, np.stack([weights.gross, weights.productive]))
    assert np.all(productive <= gross + 1e-12 * investment.sum(axis=0))


def test_spread_lives_can_be_worth_more_than_they_still_serve():
    """Linear efficiency over gamma lives: after a year 0.50 of the value is left and 0.45 of the service."""
    weights = period_end_weights(
        efficiency="linear",
        retirement="gamma",
        retirement_shape=(("shape", 1.0), ("high", 3.0)),
        life=3.0,
        rate=None,
        b=None,
        discount_rate=0.0,
        timing="end",
        length=1,
    )
    assert weights.net[1] > weights.productive[1]


@quick
@given(finite_weights())
def test_losses_of_a_vintage_add_up_to_what_was_invested(weights):
    for loss in (weights.consumption, weights.retirements):
        assert loss.sum() == pytest.approx(1, abs=1e-12)
    assert (weights.gross[-1], weights.productive[-1], weights.net[-1]) == (0, 0, 0)


@quick
@given(st.floats(-0.3, 0.3), st.floats(-5, 15), st.integers(2, 40))
def test_log_trend_is_exact_on_steady_growth(slope, start, n):
    log_investment = start + slope * np.arange(n)
    slope_c, intercept_c = log_trend_coefficients(n)
    assert slope_c @ log_investment == pytest.approx(slope, abs=1e-12)
    assert intercept_c @ log_investment == pytest.approx(start, abs=1e-11)


@quick
@given(st.integers(1, 40), st.floats(0, 1), st.floats(-0.05, 0.2))
def test_efficiency_survives_the_way_to_prices_and_back(life, b, discount_rate):
    h = efficiency("hyperbolic", np.arange(life + 1.0), life=life, b=b)
    back = efficiency_from_age_price(age_price(h, discount_rate), discount_rate)
    np.testing.assert_allclose(back, h, rtol=0, atol=1e-9)


@quick
@given(arrays(np.float64, (3, 5), elements=st.floats(0.1, 10)), st.floats(0, 100), st.floats(0, 100))
def test_the_account_at_current_prices_closes(prices, opening, change):
    """Pe_{t-1} W_{t-1} + P_t (W_t - W_{t-1}) + HG_t = Pe_t W_t."""
    p, pe, pe_previous = prices
    closing = opening + change
    gains = holding_gains(opening, closing, p, pe, pe_previous)
    found = pe_previous * opening + p * change + gains
    assert_close(found, pe * closing, (p + pe + pe_previous) * (opening + closing) * 2)


@quick
@given(shapes, st.floats(1, 80))
def test_every_spread_of_lives_keeps_its_mean(shape, mean_life):
    which, masses = lives(shape[0], mean_life, **dict(shape[1]))
    assert masses.sum() == pytest.approx(1, abs=1e-9)
    assert masses @ which == pytest.approx(mean_life, abs=1e-9)


@quick
@given(
    shapes,
    st.floats(1, 30),
    st.sampled_from(["hyperbolic", "linear", "constant"]),
    st.floats(0, 0.1),
    timings,
)
def test_pooled_prices_are_not_below_the_mean_of_single_prices(shape, life, form, discount_rate, timing):
    """Longer-lived assets are worth more when new and lose less: pooling gives them their weight."""
    pooled, by_life = (
        period_end_weights(
            efficiency=form,
            retirement=shape[0],
            retirement_shape=shape[1],
            life=life,
            rate=None,
            b=0.5 if form == "hyperbolic" else None,
            discount_rate=discount_rate,
            timing=timing,
            length=1,
            age_price_mode=mode,
        )
        for mode in ("pooled", "by_life")
    )
    assert np.all(by_life.net <= pooled.net + 1e-12)
    np.testing.assert_array_equal(by_life.gross, pooled.gross)


flows = st.integers(1, 12).flatmap(
    lambda periods: arrays(np.float64, (periods, 3), elements=st.floats(0, 100, allow_subnormal=False))
)


@quick
@given(arrays(np.float64, 3, elements=st.floats(1, 1000)), flows, rates, timings)
def test_the_rate_between_two_stocks_of_the_model_is_its_own(opening, investment, rate, timing):
    """With investment of 0 or more the stock falls as the rate rises, so there is no other."""
    closing = closing_stock(opening, investment, np.full(3, rate), timing)
    solved = rate_between(opening, closing, investment, timing)
    assert solved.roots.tolist() == [1, 1, 1]
    assert_close(solved.residual, 0.0, opening + investment.sum(axis=0))
    slope = closing_stock(opening, investment, np.full(3, rate - 1e-3), timing) - closing
    seen = slope > 1e-6 * closing
    np.testing.assert_allclose(solved.rate[seen], rate, atol=1e-9)


@quick
@given(flows, rates, timings)
def test_the_stock_between_two_dates_is_that_of_the_recursion(investment, rate, timing):
    opening = np.full(3, 50.0)
    first = cohort_geometric(rate, timing, 1).net[0]
    stock = geometric_stock(investment, first, 1 - rate, opening)
    assert_close(
        closing_stock(opening, investment, np.full(3, rate), timing), stock[-1], 50 + investment.sum(axis=0)
    )


@quick
@given(investments, finite_weights(), st.floats(-0.1, 0.2), st.floats(0, 3))
def test_a_benchmark_taken_from_the_model_gives_back_its_factor(investment, weights, growth, factor):
    g = np.full(investment.shape[1], growth)
    surviving = cohort_stock(investment, weights.net)[-1]
    backcast = 100 * opening_vintages(weights.net, g, len(investment))[-1]
    found = benchmark_factor(surviving + factor * backcast, surviving, backcast)
    assert np.array_equal(np.isnan(found), backcast == 0)
    left = backcast > 0
    assert_close((found * backcast)[left], (factor * backcast)[left], (surviving + factor * backcast)[left])


@quick
@given(investments, rates, timings, st.floats(-1e3, 1e3))
def test_equal_changes_lead_to_the_later_benchmark(investment, rate, timing, gap):
    first = cohort_geometric(rate, timing, 1).net[0]
    left = (1 - rate) ** np.arange(float(len(investment)))
    change = even_changes(np.array([gap]), left)
    stock = geometric_stock(investment, first, 1 - rate, None)[-1]
    # A change at the end of a period enters whole, as investment at its end does.
    added = geometric_stock(np.full_like(investment, change[0]), 1.0, 1 - rate, None)[-1]
    assert_close(stock + added, stock + gap, stock + abs(gap))
