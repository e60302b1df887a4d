"""Growth accounting: contributions of the inputs, the residual, its level and its readings.

Unless said otherwise functions work element by element on arrays that broadcast, take NaN to NaN and let
complex steps pass. Growth is per period, as a ratio: changes of logarithms in the log form, relative
changes in the discrete form.
Source: R. M. Solow, Technical change and the aggregate production function, Review of Economics and
Statistics 39(3), 1957, for the discrete form; the log form with two-period mean shares is the Tornqvist
approximation.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from keelbook.methods.arrays import F8, Array


def log_growth(previous: Array, current: Array) -> Array:
    """Return ln(x_t / x_{t-1})."""
    return np.asarray(np.log(current / previous))


def discrete_growth(previous: Array, current: Array) -> Array:
    """Return x_t / x_{t-1} - 1."""
    return np.asarray(current / previous - 1)


def contributions(capital_growth: Array, labour_growth: Array, capital_share: Array) -> tuple[Array, Array]:
    """Return (a dK, (1 - a) dL): the contributions of capital and of labour to output growth.

    The share belongs to the form: the two-period mean with log growth, the previous period's with discrete
    growth.
    """
    return np.asarray(capital_share * capital_growth), np.asarray((1 - capital_share) * labour_growth)


def log_residual(
    output_growth: Array, capital_growth: Array, labour_growth: Array, mean_share: Array
) -> Array:
    """Return dlnA = dlnY - a dlnK - (1 - a) dlnL, `mean_share` a the two-period mean share of capital."""
    capital, labour = contributions(capital_growth, labour_growth, mean_share)
    return np.asarray(output_growth - capital - labour)


def discrete_residual(
    output_growth: Array, capital_growth: Array, labour_growth: Array, previous_share: Array
) -> Array:
    """Return dA/A = dY/Y - a_{t-1} dK/K - (1 - a_{t-1}) dL/L, `previous_share` a_{t-1} of capital."""
    return log_residual(output_growth, capital_growth, labour_growth, previous_share)


def residual_level(growth: Array, form: str = "log") -> Array:
    """Return the level of the residual, 1 in the first year, from its growth.

    A_t = exp(sum dlnA) in the log form, the product of (1 + dA/A) in the discrete form.

    Args:
        growth: (T - 1,) or (T - 1, N), from the second year on; a NaN runs on to all later years.
        form: `log` or `discrete`.

    Returns:
        (T,) or (T, N) levels.

    Raises:
        ValueError: unknown form.
    """
    if form not in ("log", "discrete"):
        raise ValueError(f"unknown form {form!r}, expected one of log, discrete")
    growth = np.asarray(growth)
    first = np.ones_like(growth, shape=(1, *growth.shape[1:]))
    later = np.exp(np.cumsum(growth, axis=0)) if form == "log" else np.cumprod(1 + growth, axis=0)
    return np.concatenate([first, later])


def readings(growth: Array, capital_share: Array) -> tuple[Array, Array]:
    """Return (dA / (1 - a), dA / a): the residual read as labour-augmenting and as capital-augmenting change.

    The third reading, neutral, is the growth itself. A share of 0 or 1 has no such reading: the caller
    masks it.
    """
    return np.asarray(growth / (1 - capital_share)), np.asarray(growth / capital_share)


@dataclass(frozen=True)
class Aggregation:
    """What industries add to the residual of their total, in log growth; the total residual is the sum of all.

    within: (M, ...) v_i dlnA_i, each industry's own residual by its share in value added.
    output, capital, labour: R_V, R_K, R_L, what comes of moving value added, capital and labour between
    industries that differ in price, return or pay.
    """

    within: Array
    output: Array
    capital: Array
    labour: Array

    def total(self) -> Array:
        """Return sum_i v_i dlnA_i + R_V + R_K + R_L."""
        return np.asarray(np.sum(self.within, axis=0) + self.output + self.capital + self.labour)


def reallocation(
    *,
    value_share: Array,
    industry_growth: tuple[Array, Array, Array],
    industry_capital_share: Array,
    total_growth: tuple[Array, Array, Array],
    capital_share: Array,
) -> Aggregation:
    """Return the residual of a total as the residuals of its industries and the reallocation between them.

    R_V = dlnV - sum v_i dlnV_i, R_K = sum v_i s_Ki dlnK_i - s_K dlnK, R_L = sum v_i s_Li dlnL_i - s_L dlnL,
    with s_L = 1 - s_K; v and s are two-period means.

    Args:
        value_share: (M, ...) v_i of each industry in the value added of the total, summing to 1 over axis 0.
        industry_growth: log growth of (output, capital, labour), each (M, ...).
        industry_capital_share: (M, ...) s_Ki.
        total_growth: log growth of (output, capital, labour) of the total, each (...).
        capital_share: (...) s_K of the total.

    Returns:
        Aggregation, whose `total` is the residual of the total's own figures whatever the shares sum to.

    Source: D. W. Jorgenson, F. M. Gollop and B. Fraumeni, 1987 (from memory).
    """
    output, capital, labour = industry_growth
    of_capital, of_labour = contributions(capital, labour, industry_capital_share)
    total_capital, total_labour = contributions(total_growth[1], total_growth[2], capital_share)
    return Aggregation(
        within=value_share * log_residual(output, capital, labour, industry_capital_share),
        output=np.asarray(total_growth[0] - np.sum(value_share * output, axis=0)),
        capital=np.asarray(np.sum(value_share * of_capital, axis=0) - total_capital),
        labour=np.asarray(np.sum(value_share * of_labour, axis=0) - total_labour),
    )


def period_means(growth: Array, spans: Sequence[tuple[int, int]]) -> Array:
    """Return the mean growth, or mean contribution, of each span of periods.

    Means keep sums: those of the contributions and of the residual add up to that of output.

    Args:
        growth: (T,) or (T, N), log or discrete.
        spans: (first, last) row of each span, both included.

    Returns:
        (S,) or (S, N). A span with a NaN in it has none: a mean of the rest would be of other periods.

    Raises:
        ValueError: a span that is empty or reaches outside the rows.
    """
    growth = np.asarray(growth)
    wrong = [span for span in spans if not 0 <= span[0] <= span[1] < len(growth)]
    if wrong:
        raise ValueError(f"no such span of rows 0 to {len(growth) - 1}: {', '.join(map(str, wrong))}")
    return np.asarray([growth[first : last + 1].mean(axis=0) for first, last in spans])


@dataclass(frozen=True)
class Fit:
    """A straight line through logarithms, with the standard error of its slope."""

    slope: float
    intercept: float
    r2: float
    standard_error: float


def log_log_fit(y: F8, x: F8) -> Fit:
    """Return the least-squares line ln y = intercept + slope ln x.

    The standard error of the slope is sqrt(SSR / (n - 2) / sum (ln x - mean)^2): independent errors of
    equal variance. A slope fitted to growth data is context beside a measured share, never a test of it.

    Args:
        y, x: (n,) levels, all above 0; NaN is refused.

    Raises:
        ValueError: fewer than 3 points, unequal lengths, a value that is not above 0, or x or y without
            variation.
    """
    if y.shape != x.shape or y.ndim != 1 or len(y) < 3:
        raise ValueError(
            f"a fit needs two lists of the same length, 3 or more; found {y.shape} and {x.shape}"
        )
    if not (np.all(y > 0) and np.all(x > 0)):
        raise ValueError("a fit of logarithms needs values above 0")
    ln_y, ln_x = np.log(y), np.log(x)
    dev_y, dev_x = ln_y - ln_y.mean(), ln_x - ln_x.mean()
    sxx, syy = float(dev_x @ dev_x), float(dev_y @ dev_y)
    if sxx == 0 or syy == 0:
        raise ValueError("a fit needs variation in both lists")
    slope = float(dev_x @ dev_y) / sxx
    error = dev_y - slope * dev_x
    ssr = float(error @ error)
    return Fit(
        slope=slope,
        intercept=float(ln_y.mean() - slope * ln_x.mean()),
        r2=1 - ssr / syy,
        standard_error=math.sqrt(ssr / (len(y) - 2) / sxx),
    )


def split_of_rise(
    *, q0: float, q1: float, k0: float, k1: float, residual_level: float, capital_share: float
) -> Mapping[str, float]:
    """Return the part of a rise in output per hour that capital does not explain, stated in four ways.

    The same data give different answers, so each carries the name of its arithmetic:

    - `log_with_share`: 1 - a ln(k1/k0) / ln(q1/q0)
    - `percent_with_share`: 1 - a (k1/k0 - 1) / (q1/q0 - 1)
    - `linear_with_level`: 1 - (q1/A1 - q0) / (q1 - q0), the rise of output per hour once technical change
      is taken out
    - `log_with_level`: ln A1 / ln(q1/q0)

    Args:
        q0, q1: output per hour in the first and last year, > 0.
        k0, k1: capital per hour in the first and last year, > 0.
        residual_level: A1, the residual's level in the last year (1 in the first), > 0.
        capital_share: one share a for the whole span, used by the first two.

    Source: the third is R. M. Solow, 1957 (one eighth capital, seven eighths technical change); the others
    restate it.

    Raises:
        ValueError: a level that is not above 0, or output per hour that did not change.
    """
    if not min(q0, q1, k0, k1, residual_level) > 0:
        raise ValueError("levels of output, capital and the residual must be above 0")
    if q0 == q1:
        raise ValueError("output per hour did not change: there is no rise to split")
    rise = math.log(q1 / q0)
    return {
        "log_with_share": 1 - capital_share * math.log(k1 / k0) / rise,
        "percent_with_share": 1 - capital_share * (k1 / k0 - 1) / (q1 / q0 - 1),
        "linear_with_level": 1 - (q1 / residual_level - q0) / (q1 - q0),
        "log_with_level": math.log(residual_level) / rise,
    }
