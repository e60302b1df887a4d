"""Retirement: how the lives of the assets of one vintage are spread around their mean.

A spread-out distribution is a density of relative lives x = L / mean life, with mean 1 or nearly so, between two
cuts. It is made discrete in three steps, so that the masses sum to one and the mean life is kept:

1. A life between two whole numbers counts with both, the nearer one more: the mass of L goes to floor(L) and
   floor(L) + 1 in the parts 1 - f and f, f its fraction. This keeps the mean, and a fixed life is the case of
   one point.
2. A life of 0 would be an asset that was never there: its mass joins a life of 1.
3. What cuts and step 2 changed in the mean is undone by a factor exp(theta L) on the masses, theta solved; of
   all corrections it is the one that departs least from the distribution (least relative entropy). For the
   gamma and the normal it is a change of their own parameters.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np

from keelbook.methods.arrays import F8, I8, require

SMALLEST_SPREAD = 0.01
"""Relative standard deviation under which the panels of the integration would miss the distribution: such lives
are `simultaneous` for all purposes."""

SMALLEST_MASS = 1e-17
"""Mass under which a life is left out: it would lengthen every profile and change no figure."""

_NODES, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(16)


def simultaneous(mean_life: float) -> tuple[I8, F8]:
    """Return the one whole life, or the two neighbours of a fractional mean, weighted so that the mean is kept.

    Source: OECD, Measuring Capital (2001, 2009), retirement patterns (form cited from memory).
    """
    whole = int(np.floor(mean_life))
    part = mean_life - whole
    if part == 0:
        return np.array([whole], dtype=np.int64), np.array([1.0])
    return np.array([whole, whole + 1], dtype=np.int64), np.array([1 - part, part])


@dataclass(frozen=True)
class Spread:
    """A density of relative lives between `low` and `high`, not cut down to integrate to 1 there.

    `deviation` is its relative standard deviation, which sets how finely it is integrated.
    """

    density: Callable[[F8], F8]
    low: float
    high: float
    deviation: float


def linear() -> Spread:
    """Return the uniform density of lives on [0, 2 T], T the mean life: survival 1 - a / (2 T).

    Source: OECD, Measuring Capital (2001, 2009), retirement patterns (form cited from memory).
    """
    return delayed_linear(half_width=1.0)


def delayed_linear(*, half_width: float) -> Spread:
    """Return the uniform density of lives on [T (1 - c), T (1 + c)], c in (0, 1] the `half_width`.

    Source: OECD, Measuring Capital (2001, 2009), retirement patterns (form cited from memory).
    """
    c = require("half_width", half_width, low=0, high=1, open_low=True)
    return Spread(lambda x: np.full_like(x, 1 / (2 * c)), 1 - c, 1 + c, c / math.sqrt(3))


def truncated_normal(*, sd: float, low: float, high: float) -> Spread:
    """Return the normal density with mean T and standard deviation `sd` T, cut at `low` T and `high` T.

    Source: truncated normal lives as in the productivity accounts of the United States Bureau of Labor
    Statistics (from memory).
    """
    sd = require("sd", sd, low=SMALLEST_SPREAD)
    low, high = _cuts(low, high)
    height = 1 / (sd * math.sqrt(2 * math.pi))
    return Spread(lambda x: height * np.exp(-(((x - 1) / sd) ** 2) / 2), low, high, sd)


def lognormal(*, sd: float, high: float) -> Spread:
    """Return the lognormal density with mean T and standard deviation `sd` T, cut at `high` T.

    ln x is normal with variance s^2 = ln(1 + sd^2) and mean -s^2 / 2.
    Source: OECD, Measuring Capital (2001, 2009), retirement patterns (form cited from memory).
    """
    sd = require("sd", sd, low=SMALLEST_SPREAD)
    _, high = _cuts(0.0, high)
    variance = math.log1p(sd**2)
    height = 1 / math.sqrt(2 * math.pi * variance)
    return Spread(
        lambda x: height / x * np.exp(-((np.log(x) + variance / 2) ** 2) / (2 * variance)), 0.0, high, sd
    )


def weibull(*, shape: float, high: float) -> Spread:
    """Return the Weibull density with mean T, cut at `high` T: survival exp(-(lambda x)^alpha).

    alpha is the `shape`, from 1/2 on; lambda = Gamma(1 + 1/alpha).
    Source: OECD, Measuring Capital (2001, 2009), retirement patterns (form cited from memory).
    """
    alpha = require("shape", shape, low=0.5)
    _, high = _cuts(0.0, high)
    rate = math.gamma(1 + 1 / alpha)
    deviation = math.sqrt(math.gamma(1 + 2 / alpha) / rate**2 - 1)
    require("the relative standard deviation", deviation, low=SMALLEST_SPREAD)
    return Spread(
        lambda x: alpha * rate * (rate * x) ** (alpha - 1) * np.exp(-((rate * x) ** alpha)),
        0.0,
        high,
        deviation,
    )


def gamma(*, shape: float, high: float) -> Spread:
    """Return the gamma density with mean T, cut at `high` T: p^p x^(p-1) exp(-p x) / Gamma(p).

    p is the `shape`, from 1/2 on.
    Source: gamma lives as in the German accounts, with p = 9 (form cited from memory).
    """
    p = require("shape", shape, low=0.5)
    _, high = _cuts(0.0, high)
    deviation = require("the relative standard deviation", 1 / math.sqrt(p), low=SMALLEST_SPREAD)
    log_height = p * math.log(p) - math.lgamma(p)
    return Spread(lambda x: np.exp(log_height + (p - 1) * np.log(x) - p * x), 0.0, high, deviation)


def winfrey(*, exponent: float) -> Spread:
    """Return the Winfrey symmetric density on [0, 2 T]: proportional to (1 - (x - 1)^2)^m, m the `exponent`.

    Its relative standard deviation is 1 / sqrt(2 m + 3).
    Source: R. Winfrey's symmetric curves (form and exponents of S2 and S3 cited from memory; both recalled
    heights are those that integrate to 1).
    """
    m = require("exponent", exponent, low=0)
    height = math.exp(math.lgamma(m + 1.5) - math.lgamma(m + 1)) / math.sqrt(math.pi)
    deviation = require("the relative standard deviation", 1 / math.sqrt(2 * m + 3), low=SMALLEST_SPREAD)
    return Spread(lambda x: height * (x * (2 - x)) ** m, 0.0, 2.0, deviation)


def winfrey_moment(*, sd: float) -> Spread:
    """Return the Winfrey symmetric density with relative standard deviation `sd`: m = (1 / sd^2 - 3) / 2.

    The exponent follows from the moment, not from a published curve, hence a name of its own. `sd` is at most
    1 / sqrt(3), where the density is flat.
    Source: R. Winfrey's symmetric form (from memory); the exponent has no published source.
    """
    sd = require("sd", sd, low=SMALLEST_SPREAD, high=1 / math.sqrt(3))
    return winfrey(exponent=max(0.0, (1 / sd**2 - 3) / 2))


@dataclass(frozen=True)
class Distribution:
    """A retirement distribution and the names of the parameters it takes; `spread` is None for one fixed life."""

    spread: Callable[..., Spread] | None
    parameters: tuple[str, ...]


RETIREMENT: Mapping[str, Distribution] = MappingProxyType(
    {
        "simultaneous": Distribution(None, ()),
        "linear": Distribution(linear, ()),
        "delayed_linear": Distribution(delayed_linear, ("half_width",)),
        "truncated_normal": Distribution(truncated_normal, ("sd", "low", "high")),
        "lognormal": Distribution(lognormal, ("sd", "high")),
        "weibull": Distribution(weibull, ("shape", "high")),
        "gamma": Distribution(gamma, ("shape", "high")),
        "winfrey": Distribution(winfrey, ("exponent",)),
        "winfrey_moment": Distribution(winfrey_moment, ("sd",)),
    }
)
"""Every retirement distribution, by name. Its parameters are relative to the mean life (sd = 0.5: half of it)."""


def lives(distribution: str, mean_life: float, **shape: float) -> tuple[I8, F8]:
    """Return the discrete distribution of lives: whole lives in periods and their probabilities p(L).

    Args:
        distribution: a name of `RETIREMENT`.
        mean_life: mean life in periods, at least 1. A mean of exactly 1 leaves no room for a spread: all
            assets then live 1 period.
        shape: exactly the parameters of the distribution, relative to the mean life.

    Returns:
        Two (n,) arrays: lives, ascending, from 1; masses, positive, summing to 1 with sum p(L) L = mean life
        (to 1e-12 of it).

    Raises:
        ValueError: unknown distribution (the message lists those that exist); a mean life below 1 period; a
            parameter missing, out of range or of another distribution.
    """
    mean_life = require("the mean life", mean_life, low=1)
    spread = _spread(distribution, shape)
    if spread is None or mean_life == 1:
        return simultaneous(mean_life)
    which, masses = _whole_lives(spread, mean_life)
    return _with_mean(which, masses, mean_life)


def truncated_mass(distribution: str, **shape: float) -> float:
    """Return the share of the distribution that its cuts leave out, whatever the mean life.

    Raises:
        ValueError: unknown distribution; a parameter missing, out of range or of another distribution.
    """
    spread = _spread(distribution, shape)
    if spread is None:
        return 0.0
    points, weights = _quadrature(spread, np.array([]))
    return max(0.0, 1 - float(np.sum(weights * spread.density(points))))


def survival(lives: I8, masses: F8, ages: F8) -> F8:
    """Return the share S(a) of a vintage still in use: the mass of the lives longer than a.

    An asset of life L is in use at every a < L and gone at L, so the result is exact at half ages as well.

    Args:
        lives, masses: (n,) as `lives()` returns them.
        ages: exact ages in periods, any shape. A NaN age counts as survived by none.

    Returns:
        Array of the shape of `ages`, no unit, between 0 and 1.
    """
    return np.asarray((lives > np.asarray(ages)[..., None]) @ masses, dtype=np.float64)


def _cuts(low: float, high: float) -> tuple[float, float]:
    low = require("low", low, low=0)
    high = require("high", high, low=1, open_low=True)
    if low >= 1:
        raise ValueError(f"low is {low:g}, expected a number in [0, 1): the mean life lies between the cuts")
    return low, high


def _spread(distribution: str, shape: Mapping[str, float]) -> Spread | None:
    if distribution not in RETIREMENT:
        raise ValueError(
            f"unknown retirement distribution {distribution!r}, expected one of {', '.join(RETIREMENT)}"
        )
    chosen = RETIREMENT[distribution]
    if set(shape) != set(chosen.parameters):
        raise ValueError(
            f"{distribution} retirement takes {' and '.join(chosen.parameters) or 'no parameters'}; "
            f"found {' and '.join(shape) or 'none'}"
        )
    return None if chosen.spread is None else chosen.spread(**shape)


def _quadrature(spread: Spread, breaks: F8) -> tuple[F8, F8]:
    """Return points between the cuts and their weights; no panel reaches over one of the `breaks`.

    Panels are half a standard deviation wide at most, and shrink towards the cuts, where a density may rise or
    fall like a power.
    """
    low, high = spread.low, spread.high
    even = np.linspace(low, high, 2 + math.ceil(2 * (high - low) / spread.deviation))
    near = (high - low) * 0.5 ** np.arange(2, 50)
    edges = np.unique(np.concatenate([even, low + near, high - near, breaks]))
    edges = edges[(edges >= low) & (edges <= high)]
    half, middle = np.diff(edges)[:, None] / 2, (edges[1:] + edges[:-1])[:, None] / 2
    return (middle + half * _NODES).ravel(), (half * _NODE_WEIGHTS).ravel()


def _whole_lives(spread: Spread, mean_life: float) -> tuple[I8, F8]:
    """Return whole lives from 1 on and the mass that steps 1 and 2 give them."""
    longest = math.ceil(spread.high * mean_life)
    points, weights = _quadrature(spread, np.arange(longest + 1) / mean_life)
    life = points * mean_life
    mass = weights * spread.density(points)
    below = np.minimum(np.floor(life).astype(np.int64), longest - 1)
    nearer = life - below
    masses = np.asarray(np.bincount(below, mass * (1 - nearer), longest + 1), dtype=np.float64)
    masses += np.bincount(below + 1, mass * nearer, longest + 1)
    masses[1] += masses[0]
    which = np.flatnonzero(masses[1:]) + 1
    return which.astype(np.int64), masses[which]


def _with_mean(which: I8, masses: F8, mean: float) -> tuple[I8, F8]:
    """Return the masses times exp(theta L), scaled to sum to 1, with theta such that the mean is met (step 3).

    Newton steps on the logarithm of the sum of masses, which is convex in theta, inside a bracket that every
    step narrows.
    """
    distance = which - mean
    log_mass = np.log(masses)
    theta, low, high = 0.0, -math.inf, math.inf
    for _ in range(200):
        tilted = log_mass + theta * distance
        p = np.exp(tilted - tilted.max())
        p /= p.sum()
        gap = float(p @ distance)
        if abs(gap) <= 1e-14 * mean:
            break
        low, high = (theta, high) if gap < 0 else (low, theta)
        step = theta - gap / max(float(p @ distance**2) - gap**2, 1e-300)
        theta = step if low < step < high else _inside(low, high)
    kept = p > SMALLEST_MASS
    return which[kept], np.asarray(p[kept], dtype=np.float64)


def _inside(low: float, high: float) -> float:
    if math.isinf(low):
        return 2 * high - 1
    return 2 * low + 1 if math.isinf(high) else (low + high) / 2
