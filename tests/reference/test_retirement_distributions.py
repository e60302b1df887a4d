"""Retirement distributions against scipy.stats, and against what is recalled of the published curves."""

import math

import numpy as np
import pytest
from scipy import integrate, stats

from keelbook.methods.retirement import (
    lives,
    lognormal,
    truncated_mass,
    winfrey,
    winfrey_moment,
)

S2, S3 = 3.700, 6.902  # exponents of the Winfrey curves, from memory
WEIBULL_RATE = math.gamma(1 + 1 / 1.7)
S = math.sqrt(math.log(1.25))

OUTSIDE = {
    "linear": ({}, stats.uniform(0, 2), 0, 2),
    "delayed_linear": ({"half_width": 0.2}, stats.uniform(0.8, 0.4), 0.8, 1.2),
    "truncated_normal": ({"sd": 0.5, "low": 0.02, "high": 1.98}, stats.norm(1, 0.5), 0.02, 1.98),
    "lognormal": ({"sd": 0.5, "high": 3}, stats.lognorm(S, scale=math.exp(-S * S / 2)), 0, 3),
    "weibull": ({"shape": 1.7, "high": 3}, stats.weibull_min(1.7, scale=1 / WEIBULL_RATE), 0, 3),
    "gamma": ({"shape": 9, "high": 3}, stats.gamma(9, scale=1 / 9), 0, 3),
    "winfrey": ({"exponent": S2}, stats.beta(S2 + 1, S2 + 1, 0, 2), 0, 2),
    "winfrey_moment": ({"sd": 0.25}, stats.beta(7.5, 7.5, 0, 2), 0, 2),
}


def split_between_whole_lives(outside, low, high, mean_life):
    """p(n) = M(n+1) - 2 M(n) + M(n-1), M the integral of the distribution function cut at low and high."""
    inside = outside.cdf(high) - outside.cdf(low)

    def distribution(life):
        return np.clip((outside.cdf(life / mean_life) - outside.cdf(low)) / inside, 0, 1)

    last = math.ceil(high * mean_life)
    kinks = [low * mean_life, high * mean_life]
    step = [
        integrate.quad(
            distribution, n, n + 1, points=[k for k in kinks if n < k < n + 1] or None, epsabs=1e-13
        )[0]
        for n in range(-1, last + 1)
    ]
    p = np.diff(step)  # lives 0..last
    p[1] += p[0]
    return p[1:]


@pytest.mark.parametrize("mean_life", [3, 14.3, 50])
@pytest.mark.parametrize("name", OUTSIDE)
def test_masses_are_those_of_scipy_but_for_the_correction_of_the_mean(name, mean_life):
    shape, outside, low, high = OUTSIDE[name]
    which, masses = lives(name, mean_life, **shape)
    assert masses.sum() == pytest.approx(1, abs=1e-12)
    assert masses @ which == pytest.approx(mean_life, rel=1e-12)
    assert truncated_mass(name, **shape) == pytest.approx(1 - outside.cdf(high) + outside.cdf(low), abs=1e-12)
    expected = split_between_whole_lives(outside, low, high, mean_life)
    seen = expected[which - 1] > 1e-7
    ratio = np.log(masses[seen] / expected[which - 1][seen])
    line = np.polyfit(which[seen], ratio, 1)
    # The correction is a factor exp(theta L): the logarithm of the ratio is a straight line, as steep as the cuts and
    # lives under 1 moved the mean, and no steeper.
    np.testing.assert_allclose(ratio, np.polyval(line, which[seen]), atol=1e-5)
    moved = expected @ np.arange(1, len(expected) + 1) / expected.sum() - mean_life
    needed = -moved / (masses @ (which - mean_life) ** 2)
    assert line[0] == pytest.approx(needed, rel=0.35, abs=1e-8)


def test_a_cut_of_one_percent_and_ninety_nine_standard_deviations():
    """A normal with s.d. of half the mean, cut at 0.02 and 1.98 of it, keeps 0.9500 of its mass (from memory)."""
    assert 1 - truncated_mass("truncated_normal", sd=0.5, low=0.02, high=1.98) == pytest.approx(
        0.9500, abs=5e-5
    )


@pytest.mark.parametrize(("exponent", "height", "deviation"), [(S2, 11.911, 0.3101), (S3, 15.610, 0.2439)])
def test_winfrey_symmetric_curves(exponent, height, deviation):
    """Heights in percent per tenth of the mean life and exponents from memory; deviations derived."""
    spread = winfrey(exponent=exponent)
    found = 10 * float(spread.density(np.array([1.0]))[0])
    assert found == pytest.approx(height, abs=1e-3)
    assert spread.deviation == pytest.approx(deviation, abs=5e-5)
    again = winfrey_moment(sd=spread.deviation)
    assert 10 * float(again.density(np.array([1.0]))[0]) == pytest.approx(found, rel=1e-12)
    # Split between whole lives, a spread grows by no more than half a life.
    which, masses = lives("winfrey", 50, exponent=exponent)
    assert math.sqrt(masses @ (which - 50) ** 2) / 50 == pytest.approx(deviation, abs=5e-4)


def test_deviations_that_set_the_panels():
    for name, (shape, outside, _, _) in OUTSIDE.items():
        if name in ("lognormal", "truncated_normal"):
            assert shape["sd"] == pytest.approx(outside.std(), rel=1e-12)
    assert lognormal(sd=0.3, high=9).deviation == 0.3
