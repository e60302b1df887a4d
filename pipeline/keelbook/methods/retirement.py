"""Retirement: how the lives of the assets of one vintage are spread around their mean."""

from collections.abc import Callable, Mapping
from types import MappingProxyType

import numpy as np

from keelbook.methods.arrays import F8, I8, require


def simultaneous(mean_life: float) -> tuple[I8, F8]:
    """Return the one whole life, or the two neighbours of a fractional mean, weighted so that the mean is
    kept.
    """
    whole = int(np.floor(mean_life))
    part = mean_life - whole
    if part == 0:
        return np.array([whole], dtype=np.int64), np.array([1.0])
    return np.array([whole, whole + 1], dtype=np.int64), np.array([1 - part, part])


RETIREMENT: Mapping[str, Callable[[float], tuple[I8, F8]]] = MappingProxyType({"simultaneous": simultaneous})
"""Every retirement distribution, by name: mean life -> lives and their masses."""


def lives(distribution: str, mean_life: float) -> tuple[I8, F8]:
    """Return the discrete distribution of lives: whole lives in periods and their probabilities p(L).

    Args:
        distribution: a name of `RETIREMENT`.
        mean_life: mean life in periods, at least 1.

    Returns:
        Two (n,) arrays: lives, ascending; masses, positive, summing to 1 with sum p(L) L = mean life.

    Raises:
        ValueError: unknown distribution (the message lists those that exist); a mean life below 1 period.
    """
    if distribution not in RETIREMENT:
        raise ValueError(
            f"unknown retirement distribution {distribution!r}, expected one of {', '.join(RETIREMENT)}"
        )
    return RETIREMENT[distribution](require("the mean life", mean_life, low=1))


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
