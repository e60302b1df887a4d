"""Index numbers between two periods, on a fixed base, and chained.

`x` is what the index measures and `y` what weighs it: prices with quantities give a price index, quantities
with prices the quantity index of the same name. NaN goes to NaN; complex steps pass through.
Source: ILO, IMF and others, Producer Price Index Manual, 2004 (its artificial data, chapter 19).
"""

from collections.abc import Callable, Mapping
from types import MappingProxyType

import numpy as np

from keelbook.methods.arrays import Array


def laspeyres(x_0: Array, x_1: Array, y_0: Array, y_1: Array, axis: int = 0) -> Array:
    """Return sum x_1 y_0 / sum x_0 y_0 along `axis`: weights of the earlier period (y_1 is not used)."""
    return np.asarray(np.sum(x_1 * y_0, axis=axis) / np.sum(x_0 * y_0, axis=axis))


def paasche(x_0: Array, x_1: Array, y_0: Array, y_1: Array, axis: int = 0) -> Array:
    """Return sum x_1 y_1 / sum x_0 y_1 along `axis`: weights of the later period (y_0 is not used)."""
    return laspeyres(x_0, x_1, y_1, y_0, axis)


def fisher(x_0: Array, x_1: Array, y_0: Array, y_1: Array, axis: int = 0) -> Array:
    """Return the geometric mean of `laspeyres` and `paasche` along `axis`."""
    return np.asarray(np.sqrt(laspeyres(x_0, x_1, y_0, y_1, axis) * paasche(x_0, x_1, y_0, y_1, axis)))


def tornqvist_shares(cost_0: Array, cost_1: Array, axis: int = 0) -> Array:
    """Return the two-period mean shares (c_0 / sum c_0 + c_1 / sum c_1) / 2 along `axis`, in the shape of
    the costs.
    """
    share_0 = cost_0 / np.sum(cost_0, axis=axis, keepdims=True)
    share_1 = cost_1 / np.sum(cost_1, axis=axis, keepdims=True)
    return np.asarray((share_0 + share_1) / 2)


def weighted_log_change(x_0: Array, x_1: Array, shares: Array, axis: int = 0) -> Array:
    """Return sum shares ln(x_1 / x_0) along `axis`, the logarithm of a Tornqvist index for two-period mean
    shares.

    Raises:
        ValueError: a value of x is 0 or less: leave out what was not there in both periods.
    """
    if np.any(np.real(x_0) <= 0) or np.any(np.real(x_1) <= 0):
        raise ValueError("a Tornqvist index needs values above 0 in both periods")
    return np.asarray(np.sum(shares * np.log(x_1 / x_0), axis=axis))


def tornqvist(x_0: Array, x_1: Array, y_0: Array, y_1: Array, axis: int = 0) -> Array:
    """Return exp(sum s ln(x_1 / x_0)) along `axis`, s the two-period mean shares of the values x y.

    Raises:
        ValueError: a value of x is 0 or less.
    """
    return np.asarray(
        np.exp(weighted_log_change(x_0, x_1, tornqvist_shares(x_0 * y_0, x_1 * y_1, axis), axis))
    )


INDEX_FORMULAS: Mapping[str, Callable[..., Array]] = MappingProxyType(
    {"laspeyres": laspeyres, "paasche": paasche, "fisher": fisher, "tornqvist": tornqvist}
)
"""Every bilateral index formula, by name."""


def index_formula(name: str) -> Callable[..., Array]:
    """Return the registered formula f(x_0, x_1, y_0, y_1, axis).

    Raises:
        ValueError: no formula has this name; the message lists those that exist.
    """
    if name not in INDEX_FORMULAS:
        raise ValueError(f"unknown index formula {name!r}, expected one of {', '.join(INDEX_FORMULAS)}")
    return INDEX_FORMULAS[name]


def fixed_base(formula: str, x: Array, y: Array, base: int = 0) -> Array:
    """Return the index of every period directly against period number `base`, (T,) or (T, N).

    Args:
        formula: a name of `INDEX_FORMULAS`.
        x, y: (T, M) or (T, M, N): periods x items (x series).
        base: position of the base period; the result is 1 there.

    Raises:
        ValueError: unknown formula; values that the formula refuses.
    """
    return np.asarray(index_formula(formula)(x[base][None], x, y[base][None], y, 1))


def links(formula: str, x: Array, y: Array) -> Array:
    """Return the index of every period against the one before, (T - 1,) or (T - 1, N); arguments as
    `fixed_base`.

    Raises:
        ValueError: unknown formula; values that the formula refuses.
    """
    return np.asarray(index_formula(formula)(x[:-1], x[1:], y[:-1], y[1:], 1))


def chain(links: Array, reference: int = 0) -> Array:
    """Return the level of a chained index: the running product of its links, 1 at position `reference`.

    Args:
        links: (T - 1,) or (T - 1, N) changes from one period to the next, as ratios.
        reference: position of the reference period among the T periods.

    Returns:
        (T,) or (T, N) levels.

    Raises:
        ValueError: `reference` is not one of the T positions.
    """
    links = np.asarray(links)
    if not 0 <= reference <= len(links):
        raise ValueError(f"reference position {reference} is outside 0..{len(links)}")
    level = np.concatenate([np.ones_like(links[:1], shape=(1, *links.shape[1:])), np.cumprod(links, axis=0)])
    return np.asarray(level / level[reference])
