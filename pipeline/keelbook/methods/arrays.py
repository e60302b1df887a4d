"""Array types of the arithmetic, and the one check that every parameter goes through."""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

F8 = NDArray[np.float64]
"""Real figures."""

I8 = NDArray[np.int64]
"""Whole numbers: lives."""

Array = NDArray[Any]
"""Real figures, or complex ones where a weight is taken by a complex step: such functions are analytic in
every argument (no absolute value, no maximum, no comparison that chooses a branch)."""


def require(
    name: str, value: float | None, *, low: float, high: float = math.inf, open_low: bool = False
) -> float:
    """Return `value` if it lies in [low, high] (or (low, high] with `open_low`).

    Raises:
        ValueError: the value is absent, not a finite number, or outside the range.
    """
    if value is None:
        raise ValueError(f"{name} is needed and was not given")
    inside = math.isfinite(value) and value <= high and (value > low if open_low else value >= low)
    if not inside:
        bracket = "(" if open_low else "["
        end = "infinity)" if high == math.inf else f"{high:g}]"
        raise ValueError(f"{name} is {value!r}, expected a number in {bracket}{low:g}, {end}")
    return float(value)
