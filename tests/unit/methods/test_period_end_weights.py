import numpy as np
import pytest

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
