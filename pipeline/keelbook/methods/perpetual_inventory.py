"""Perpetual inventory: stocks, and losses from them, as weighted sums of past investment."""

import numpy as np

from keelbook.methods.arrays import F8

BLOCK_PERIODS = 20
BLOCK_SERIES = 8192
"""One block of the matrix product: few enough periods to skip the empty corner, few enough series to stay in
the cache. Fixed, because the last bit of a matrix product depends on its shape."""


def geometric_stock(
    investment: F8, first_weight: F8, keep: F8, opening: F8 | None, out: F8 | None = None
) -> F8:
    """Return the period-end stock of assets that lose a share of it per period.

    W_t = k_t W_{t-1} + w_t(0) I_t, with W_0 the opening stock (0 if None).

    Args:
        investment: (T, N) volumes, years x series.
        first_weight: scalar, (N,) or (T, N) w(0), what is left of new investment at the end of its period.
        keep: scalar, (N,) or (T, N) k = 1 - d, what is left after one more period; by period if (T, N): k_t
            then holds for all vintages alive in period t.
        opening: (N,) stock at the end of the period before the first, or None.
        out: (T, N) array to write into, not the investment itself; a new one if None.

    Returns:
        (T, N) stocks in the unit of `investment`.

    NaN: refused, as one would run through all later years. The caller fills gaps and masks the result.

    Raises:
        ValueError: NaN or infinity in an argument; `out` shares memory with the investment.
    """
    if out is not None and np.may_share_memory(out, investment):
        raise ValueError("the stock cannot be written over its own investment")
    by_period = np.ndim(keep) == 2
    with np.errstate(invalid="ignore"):
        stock = np.multiply(first_weight, investment, out=out)
        if len(stock) and opening is not None:
            stock[0] += (keep[0] if by_period else keep) * opening
        carried = np.empty(stock.shape[1:])
        for t in range(1, len(stock)):
            np.multiply(keep[t] if by_period else keep, stock[t - 1], out=carried)
            stock[t] += carried
    # Whatever is not finite stays so to the last row: the recursion only multiplies and adds.
    if len(stock) and not np.all(np.isfinite(stock[-1])):
        raise ValueError(
            "investment, weights or opening stock hold NaN or infinity: fill gaps and mask the result"
        )
    return stock


def cohort_stocks(investment: F8, weights: F8, out: F8 | None = None) -> F8:
    """Return several weighted sums of the same investment by one blocked matrix product.

    S_k,t = sum_{v=0}^{V-1} w_k(v) I_{t-v}, investment before the first period taken as 0.

    Args:
        investment: (T, N) volumes, years x series.
        weights: (K, V) weights over v, v = 0 being the period itself.
        out: (K, T, N) array to write into, not the investment itself; a new one if None.

    Returns:
        (K, T, N) in the unit of `investment`.

    NaN: refused, as one would spoil every year of its series, earlier ones included.

    Raises:
        ValueError: NaN or infinity in an argument; `out` of another shape or sharing memory with the
            investment.
    """
    with np.errstate(invalid="ignore"):
        finite = bool(np.isfinite(investment.sum()) and np.isfinite(weights.sum()))
    if not finite:
        raise ValueError("investment or weights hold NaN or infinity: fill gaps and mask the result")
    kinds, reach = weights.shape
    periods, series = investment.shape
    if out is None:
        out = np.empty((kinds, periods, series))
    elif out.shape != (kinds, periods, series) or np.may_share_memory(out, investment):
        raise ValueError(
            f"out has the shape {out.shape}, expected {(kinds, periods, series)} apart from the investment"
        )
    padded = np.concatenate([weights, np.zeros((kinds, 1))], axis=1)
    bands = []
    for low in range(0, periods, BLOCK_PERIODS):
        high = min(low + BLOCK_PERIODS, periods)
        oldest = max(0, low - reach + 1)
        age = np.arange(low, high)[:, None] - np.arange(oldest, high)[None, :]
        band = padded[:, np.where((age >= 0) & (age < reach), age, reach)]
        bands.append((low, high, oldest, band.reshape(kinds * (high - low), high - oldest)))
    for left in range(0, series, BLOCK_SERIES):
        right = min(left + BLOCK_SERIES, series)
        for low, high, oldest, band in bands:
            product = band @ investment[oldest:high, left:right]
            out[:, low:high, left:right] = product.reshape(kinds, high - low, right - left)
    return out


def cohort_stock(investment: F8, weights: F8, out: F8 | None = None) -> F8:
    """Return one weighted sum of past investment, (T, N): `cohort_stocks` with the weights (V,) of one
    kind, written into the (T, N) array `out` if given.
    """
    stock: F8 = cohort_stocks(investment, weights[None, :], None if out is None else out[None])[0]
    return stock
