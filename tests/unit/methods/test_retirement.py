import numpy as np
import pytest

from keelbook.methods.retirement import RETIREMENT, lives, survival, truncated_mass


@pytest.mark.parametrize(
    ("mean_life", "which", "masses"), [(7, [7], [1]), (7.25, [7, 8], [0.75, 0.25]), (1, [1], [1])]
)
def test_simultaneous_keeps_the_mean_life(mean_life, which, masses):
    found, mass = lives("simultaneous", mean_life)
    assert found.tolist() == which
    np.testing.assert_allclose(mass, masses)
    assert found @ mass == pytest.approx(mean_life)


def test_an_asset_is_in_use_until_its_life_is_reached():
    which, masses = lives("simultaneous", 2.25)
    ages = np.array([0, 1.5, 1.999, 2, 2.5, 3, 3.5])
    np.testing.assert_allclose(survival(which, masses, ages), [1, 1, 1, 0.25, 0.25, 0, 0])


def test_refusals():
    with pytest.raises(ValueError, match="expected one of simultaneous"):
        lives("simultanous", 7)
    with pytest.raises(ValueError, match=r"mean life is 0\.5"):
        lives("simultaneous", 0.5)


SHAPES = {
    "linear": {},
    "delayed_linear": {"half_width": 0.2},
    "truncated_normal": {"sd": 0.5, "low": 0.02, "high": 1.98},
    "lognormal": {"sd": 0.4, "high": 3},
    "weibull": {"shape": 2, "high": 3},
    "gamma": {"shape": 9, "high": 3},
    "winfrey": {"exponent": 3.7},
    "winfrey_moment": {"sd": 0.3},
}


def test_every_spread_distribution_is_tried_here():
    assert set(RETIREMENT) == {"simultaneous", *SHAPES}


def test_linear_by_hand():
    # Uniform on [0, 4]: whole lives 0 to 4 get 1/8, 1/4, 1/4, 1/4, 1/8, and the life of 0 joins the 1 before a
    # factor x^L restores the mean of 2: 3/8 x + 2/8 x^2 + 2/8 x^3 + 1/8 x^4, with -3/8 + 2/8 x^2 + 2/8 x^3 = 0.
    which, masses = lives("linear", 2)
    x = next(r.real for r in np.roots([2, 2, 0, -3]) if abs(r.imag) < 1e-12 and r.real > 0)
    expected = np.array([3 * x, 2 * x**2, 2 * x**3, x**4])
    assert which.tolist() == [1, 2, 3, 4]
    np.testing.assert_allclose(masses, expected / expected.sum(), rtol=1e-12)


def test_a_spread_that_keeps_its_mean_needs_no_correction():
    # Uniform on [8, 12]: half of a whole life's share at either end.
    which, masses = lives("delayed_linear", 10, half_width=0.2)
    assert which.tolist() == [8, 9, 10, 11, 12]
    np.testing.assert_allclose(masses, [1 / 8, 1 / 4, 1 / 4, 1 / 4, 1 / 8], rtol=1e-12)


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize("mean_life", [1.001, 1.5, 2, 7.3, 40, 150])
def test_masses_sum_to_one_and_keep_the_mean_life(name, mean_life):
    which, masses = lives(name, mean_life, **SHAPES[name])
    assert which[0] >= 1
    assert np.all(np.diff(which) > 0)
    assert np.all(masses > 0)
    assert masses.sum() == pytest.approx(1, abs=1e-9)
    assert masses @ which == pytest.approx(mean_life, abs=1e-9)


def test_a_mean_life_of_one_period_leaves_no_spread():
    which, masses = lives("linear", 1)
    assert (which.tolist(), masses.tolist()) == ([1], [1.0])


def test_mass_beyond_the_cuts():
    assert truncated_mass("simultaneous") == 0
    assert truncated_mass("linear") == pytest.approx(0, abs=1e-14)
    assert truncated_mass("weibull", shape=1, high=3) == pytest.approx(np.exp(-3), rel=1e-12)


@pytest.mark.parametrize(
    ("name", "shape", "message"),
    [
        ("linear", {"sd": 0.2}, "linear retirement takes no parameters; found sd"),
        ("truncated_normal", {"sd": 0.5, "low": 0.02}, "takes sd and low and high; found sd and low"),
        ("truncated_normal", {"sd": 0.005, "low": 0, "high": 2}, r"sd is 0\.005"),
        ("truncated_normal", {"sd": 0.5, "low": 1, "high": 2}, r"low is 1, expected a number in \[0, 1\)"),
        ("truncated_normal", {"sd": 0.5, "low": 0, "high": 1}, "high is 1"),
        ("delayed_linear", {"half_width": 1.1}, r"half_width is 1\.1"),
        ("lognormal", {"sd": float("nan"), "high": 3}, "sd is nan"),
        ("weibull", {"shape": 0.4, "high": 3}, r"shape is 0\.4"),
        ("weibull", {"shape": 200, "high": 3}, "relative standard deviation"),
        ("gamma", {"shape": 1e5, "high": 3}, "relative standard deviation"),
        ("winfrey", {"exponent": -0.5}, "exponent is"),
        ("winfrey_moment", {"sd": 0.6}, "sd is"),
    ],
)
def test_shapes_that_are_refused(name, shape, message):
    for function in (lambda **s: lives(name, 10, **s), lambda **s: truncated_mass(name, **s)):
        with pytest.raises(ValueError, match=message):
            function(**shape)
