"""Starting stocks: the stock before the first observed year, from investment assumed to have grown
steadily.
"""

import math

import numpy as np

from keelbook.methods.arrays import F8, Array, require


def log_trend_coefficients(n: int) -> tuple[F8, F8]:
    """Return the weights that turn n logarithms into their least-squares trend.

    With t = 1..n: slope = sum_t slope_c(t) ln I_t, and the fitted ln I_1 = sum_t intercept_c(t) ln I_t. The
    growth rate is exp(slope) - 1.

    Args:
        n: years in the window, at least 2.

    Returns:
        (slope_c, intercept_c), each (n,).

    Source: V. Nehru and A. Dhareshwar, Revista de Analisis Economico 8(1), 1993: log investment regressed
    on time, its fitted first value used (read in a third party's account).

    Raises:
        ValueError: n below 2.
    """
    if n < 2:
        raise ValueError(f"a trend needs at least 2 years, the window has {n}")
    t = np.arange(1, n + 1, dtype=np.float64)
    slope = (t - t.mean()) / np.sum((t - t.mean()) ** 2)
    return slope, 1 / n + (1 - t.mean()) * slope


def opening_stock_geometric(
    first_investment: Array, growth: Array, first_weight: Array, rate: Array
) -> Array:
    """Return the steady-state stock before the first year of an asset with a constant rate of decline.

    K_0 = w(0) I_1 / (g + d), w(0) = 1 - d, 1 - d/2, 1 for investment at the start, middle, end of the period.

    Args:
        first_investment: I_1, volume of the first year (its trend value).
        growth: g per period, before the first year.
        first_weight: w(0).
        rate: d per period. All four broadcast.

    Returns:
        K_0 in the unit of `first_investment`. NaN in, NaN out. Complex steps pass through.

    Source: A. Harberger, 1978, for K_0 = I_1 / (g + d) (formula cited from memory).

    Raises:
        ValueError: g + d <= 0 anywhere: such a history has no finite sum.
    """
    total = np.asarray(growth + rate)
    if np.any(total.real <= 0):
        raise ValueError(
            f"growth plus depreciation is {float(np.nanmin(total.real)):g}, not above 0: no steady state; "
            "declare the growth rate or choose another starting stock"
        )
    return np.asarray(first_weight * first_investment / total)


def opening_stock_profile(first_investment: Array, growth: Array, weights: Array) -> Array:
    """Return the stock before the first year from a backcast over the whole profile.

    K_0 = I_1 sum_{v>=0} w(v) (1+g)^-(v+1), the backcast being I_{1-j} = I_1 (1+g)^-j.

    Args:
        first_investment: (N,) or scalar I_1.
        growth: (N,) or scalar g > -1.
        weights: (V,) period-end weights of a finite life.

    Returns:
        (N,) or scalar K_0 in the unit of `first_investment`. NaN in, NaN out. Complex steps pass through.

    Raises:
        ValueError: g <= -1 anywhere.
    """
    x = _discount(growth)
    total = np.zeros_like(x)
    for weight in weights[::-1]:
        total = x * (weight + total)
    return np.asarray(first_investment * total)


def opening_vintages(weights: F8, growth: Array, T: int) -> Array:
    """Return what the assumed vintages before the first year add in each later period, for I_1 = 1.

    sum_{v>=0} w(v+t) (1+g)^-(v+1), t = 1..T. With the weights of a stock it is that part of the stock; with
    those of consumption or retirements it is that part of the loss in period t.

    Args:
        weights: (V,) of a finite life.
        growth: (N,) g > -1.
        T: number of periods.

    Returns:
        (T, N), no unit; multiply by I_1. NaN growth gives NaN.

    Raises:
        ValueError: g <= -1 anywhere.
    """
    x = np.atleast_1d(_discount(growth))
    out = np.zeros((T, *x.shape), dtype=x.dtype)
    later = np.zeros_like(x)
    for t in range(len(weights) - 1, 0, -1):
        later = x * (weights[t] + later)
        if t <= T:
            out[t - 1] = later
    # A series without a growth rate has no figure in any period, also where its assets are all gone.
    return np.asarray(out + 0 * x)


def opening_remainder(weights: F8, growth: Array, T: int) -> Array:
    """Return the share of the opening stock still there at the end of period t = 1..T.

    sum_{v>=0} w(v+t) (1+g)^-(v+1) / sum_{v>=0} w(v) (1+g)^-(v+1)

    Args:
        weights: (V,) of a finite life.
        growth: (N,) g > -1.
        T: number of periods.

    Returns:
        (T, N) shares, no unit. Weights that are all 0 leave no opening stock, and 0 of it. NaN growth gives
        NaN.

    Raises:
        ValueError: g <= -1 anywhere.
    """
    left = opening_vintages(weights, growth, T)
    if not np.any(weights):
        return left
    return np.asarray(left / opening_stock_profile(np.asarray(1.0), np.atleast_1d(growth), weights))


def backcast_by_indicator(investment: Array, indicator: Array, linked: Array) -> Array:
    """Return investment before the first period as it would be if it had followed an indicator.

    I_{1-j} = X_{1-j} sum I / sum X, the sums over the window in which the two are linked.

    Args:
        investment: (W, N) volumes of the linking window.
        indicator: (B, N) or (B, 1) X in the periods before the first, oldest first.
        linked: (W, N) or (W, 1) X in the linking window.

    Returns:
        (B, N) volumes, to be put before the observed investment. NaN in, NaN out.

    Raises:
        ValueError: windows of different lengths; an indicator that sums to 0 or less in its window.
    """
    if len(investment) != len(linked):
        raise ValueError(
            f"the linking window has {len(investment)} periods of investment and {len(linked)} of the indicator"
        )
    level = np.asarray(np.sum(linked, axis=0))
    if np.any(level.real <= 0):
        raise ValueError("the indicator sums to 0 or less in the linking window: nothing can follow it")
    return np.asarray(indicator * (np.sum(investment, axis=0) / level))


def missing_part(left_out: Array, stock: Array) -> Array:
    """Return K_ss / (K + K_ss): what a stock started from zero lacks, as a part of the whole.

    Args:
        left_out: K_ss, what is left in the period of the steady-state opening stock that was not entered.
        stock: K, the stock started from zero, above 0 together with K_ss.

    Periods are masked until this is under a declared limit.
    """
    return np.asarray(left_out / (stock + left_out))


def half_life(rate: float) -> float:
    """Return the periods after which half of an opening stock is left: ln(1/2) / ln(1 - d), for d in (0, 1).

    Source: G. V. G. Stevens, Federal Reserve International Finance Discussion Paper 368, 1989, for the
    decay (1-d)^t.

    Raises:
        ValueError: d outside (0, 1).
    """
    return half_life_of_part(rate, 0.0)


def half_life_of_part(rate: float, growth: float) -> float:
    """Return the periods after which the opening stock's part in a steadily growing total has halved.

    ln(1/2) / ln((1 - d) / (1 + g)), in periods.

    Raises:
        ValueError: d outside [0, 1), g <= -1, or g + d <= 0 (the part does not shrink).
    """
    rate = require("the depreciation rate", rate, low=0, high=1)
    growth = require("the growth rate", growth, low=-1, open_low=True)
    if rate == 1 or growth + rate <= 0:
        raise ValueError(
            f"no half-life: depreciation is {rate:g} and growth plus depreciation {growth + rate:g}"
        )
    return math.log(0.5) / math.log((1 - rate) / (1 + growth))


def _discount(growth: Array) -> Array:
    growth = np.asarray(growth)
    if np.any(growth.real <= -1):
        raise ValueError(f"growth of {float(np.nanmin(growth.real)):g} per period is not above -1")
    return np.asarray(1 / (1 + growth))
