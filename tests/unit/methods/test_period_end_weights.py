import numpy as np
import pytest

from keelbook.methods.profiles import efficiency_from_age_price
from keelbook.methods.weights import period_end_weights


def weights(**changes):
    given = {
        "efficiency": "linear",
        "retirement": "simultaneous",
        "life": 4,
        "rate": None,
        "b": None,
        "discount_rate": 0.0,
        "timing": "mid",
        "length": 5,
    }
    return period_end_weights(**(given | changes))


GEOMETRIC = {
    "efficiency": "cohort_geometric",
    "retirement": None,
    "life": None,
    "rate": 0.2,
    "discount_rate": None,
}

STRAIGHT_LINE = {"efficiency": None, "age_price_form": "straight_line"}

# Linear efficiency over four years without discounting: z(a) = sum of what is left = 1, .6, .3, .1, 0.
BY_HAND = {
    "start": ([1, 1, 1, 0, 0], [0.75, 0.5, 0.25, 0, 0], [0.6, 0.3, 0.1, 0, 0], [0.4, 0.3, 0.2, 0.1, 0]),
    "mid": (
        [1, 1, 1, 1, 0],
        [0.875, 0.625, 0.375, 0.125, 0],
        [0.8, 0.45, 0.2, 0.05, 0],
        [0.2, 0.35, 0.25, 0.15, 0.05],
    ),
    "end": ([1, 1, 1, 1, 0], [1, 0.75, 0.5, 0.25, 0], [1, 0.6, 0.3, 0.1, 0], [0, 0.4, 0.3, 0.2, 0.1]),
}


@pytest.mark.parametrize("timing", BY_HAND)
def test_finite_life_by_hand(timing):
    found = weights(timing=timing)
    gross, productive, net, consumption = BY_HAND[timing]
    np.testing.assert_allclose(found.gross, gross, atol=1e-15)
    np.testing.assert_allclose(found.productive, productive, atol=1e-15)
    np.testing.assert_allclose(found.net, net, atol=1e-15)
    np.testing.assert_allclose(found.consumption, consumption, atol=1e-15)
    np.testing.assert_allclose(found.retirements, [0, 0, 0, 1, 0] if timing == "start" else [0, 0, 0, 0, 1])


@pytest.mark.parametrize(
    ("timing", "net", "consumption"),
    [
        ("start", [0.8, 0.64, 0.512], [0.2, 0.16, 0.128]),
        ("mid", [0.9, 0.72, 0.576], [0.1, 0.18, 0.144]),
        ("end", [1, 0.8, 0.64], [0, 0.2, 0.16]),
    ],
)
def test_cohort_geometric_by_hand(timing, net, consumption):
    found = weights(**GEOMETRIC, timing=timing, length=3)
    np.testing.assert_allclose(found.net, net, rtol=1e-15)
    np.testing.assert_allclose(found.productive, net, rtol=1e-15)
    np.testing.assert_allclose(found.consumption, consumption, atol=1e-15)
    assert found.gross is None
    assert found.retirements is None


def test_cohort_geometric_has_a_gross_stock_if_a_life_is_declared():
    found = weights(**GEOMETRIC | {"retirement": "simultaneous"}, gross_life=2.5, length=7)
    np.testing.assert_allclose(found.gross, [1, 1, 0.5, 0])
    np.testing.assert_allclose(found.retirements, [0, 0, 0.5, 0.5])
    assert len(found.net) == 7


def test_fractional_life_mixes_the_profiles_of_its_neighbours_before_pricing():
    found = weights(life=2.5, timing="end", discount_rate=0.0)
    h = np.array([1, (0.5 + 2 / 3) / 2, (0 + 1 / 3) / 2, 0])
    np.testing.assert_allclose(found.productive, h, atol=1e-15)
    np.testing.assert_allclose(found.net, h[::-1].cumsum()[::-1] / h.sum(), atol=1e-15)


def test_geometric_decline_of_single_assets_ends_with_their_life():
    found = weights(efficiency="geometric", rate=0.19, life=2, timing="mid", discount_rate=0.0)
    np.testing.assert_allclose(found.productive, [0.9, 0.9 * 0.81, 0], rtol=1e-15)
    np.testing.assert_allclose(found.net, [(1 + 0.81 / 1.81) / 2, 0.81 / 1.81 / 2, 0], rtol=1e-15)


def test_straight_line_prices_by_hand():
    found = weights(**STRAIGHT_LINE, timing="mid", discount_rate=0.0)
    np.testing.assert_allclose(found.net, [0.875, 0.625, 0.375, 0.125, 0], atol=1e-15)
    np.testing.assert_allclose(found.consumption, [0.125, 0.25, 0.25, 0.25, 0.125], atol=1e-15)
    # At 0 % every year of service costs a quarter; of the last, at exact age 3.5, one half is left.
    np.testing.assert_allclose(found.productive, [1, 1, 1, 0.5, 0], atol=1e-15)


def test_given_prices_lead_to_the_efficiency_behind_them():
    """Prices of a declining balance over the lives of a vintage, and back by the inverse at whole ages."""
    given = {
        "efficiency": None,
        "age_price_form": "declining_balance",
        "factor": 2,
        "life": 6.4,
        "retirement": "truncated_normal",
        "retirement_shape": (("sd", 0.5), ("low", 0.02), ("high", 1.98)),
        "discount_rate": 0.04,
    }
    found = weights(**given, timing="end")
    np.testing.assert_allclose(found.productive, efficiency_from_age_price(found.net, 0.04), atol=1e-14)
    started = weights(**given, timing="start")
    np.testing.assert_allclose(started.productive[:-1], found.productive[1:], atol=1e-14)
    np.testing.assert_allclose(started.net[:-1], found.net[1:], atol=1e-14)


def test_prices_by_life_average_the_prices_of_single_assets():
    """Lives of 2 and 3: constant efficiency without discounting gives straight lines over 2 and 3 years."""
    by_life = weights(
        efficiency="constant", life=2.5, timing="end", discount_rate=0.0, age_price_mode="by_life"
    )
    np.testing.assert_allclose(by_life.net, [1, (1 / 2 + 2 / 3) / 2, (0 + 1 / 3) / 2, 0], atol=1e-15)
    pooled = weights(efficiency="constant", life=2.5, timing="end", discount_rate=0.0)
    np.testing.assert_allclose(pooled.net, [1, 1.5 / 2.5, 0.5 / 2.5, 0], atol=1e-15)
    np.testing.assert_array_equal(by_life.productive, pooled.productive)


def test_a_cohort_geometric_may_have_a_gross_stock_of_spread_lives():
    shape = (("half_width", 0.2),)
    found = weights(
        **GEOMETRIC | {"retirement": "delayed_linear", "retirement_shape": shape},
        gross_life=10,
        timing="end",
        length=3,
    )
    np.testing.assert_allclose(found.gross[8:], [7 / 8, 5 / 8, 3 / 8, 1 / 8, 0], atol=1e-12)


def test_weights_are_shared_and_therefore_not_writeable():
    found = weights()
    for array in (found.gross, found.productive, found.net, found.consumption, found.retirements):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 2


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"timing": "middle"}, "expected one of start, mid, end"),
        ({"efficiency": "lineal"}, "unknown efficiency form 'lineal'"),
        ({"life": None}, "mean life is needed"),
        ({"discount_rate": None}, "discount rate is needed"),
        ({"retirement": None}, "retirement distribution is needed"),
        ({"b": 0.5}, "does not use b"),
        ({"gross_life": 5}, "gross stock follows from life"),
        ({"efficiency": None}, "either an efficiency or an age-price form"),
        ({"age_price_form": "straight_line"}, "and not both"),
        ({"age_price_mode": "pool"}, "expected one of pooled, by_life"),
        ({"factor": 2}, "linear efficiency does not use factor"),
        ({"retirement_shape": (("sd", 0.5),)}, "takes no parameters; found sd"),
        (STRAIGHT_LINE | {"rate": 0.1, "b": 0.5}, "straight_line price does not use rate and b"),
        (STRAIGHT_LINE | {"factor": 2}, "does not use factor"),
        (STRAIGHT_LINE | {"life": 40, "discount_rate": -0.03}, "price falls too slowly"),
        (STRAIGHT_LINE | {"age_price_form": "straight"}, "unknown age-price form"),
        (STRAIGHT_LINE | {"discount_rate": None}, "discount rate is needed"),
        (GEOMETRIC | {"factor": 2}, "does not use factor"),
        (GEOMETRIC | {"life": 5}, "does not use life"),
        (GEOMETRIC | {"b": 0.5}, "does not use b"),
        (GEOMETRIC | {"rate": None}, "depreciation rate is needed"),
        (GEOMETRIC | {"length": 0}, "number of periods is 0"),
        (GEOMETRIC | {"gross_life": 5}, "retirement distribution is needed"),
    ],
)
def test_refusals(changes, message):
    with pytest.raises(ValueError, match=message):
        weights(**changes)
