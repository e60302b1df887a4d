"""Benchmarks: a stock known for some period, and what makes the perpetual inventory meet it.

NaN goes to NaN: a series without a solution gets NaN and the caller says why. Complex steps pass through
`benchmark_factor` and `even_changes`.
"""

from dataclasses import dataclass

import numpy as np

from keelbook.methods.arrays import F8, I8, Array, require

BISECTIONS = 60
"""Halvings of a bracket no wider than 1: the rate is then known to its last bit."""

GRID = 1000
"""Cells in which the signs are compared for series whose rate may not be the only one."""

SERIES_AT_ONCE = 1024
"""Such series looked at together, to bound the memory that their grids take."""

_LOST_AT_ONCE = {"start": 1.0, "mid": 0.5, "end": 0.0}
"""Timing -> the part of a period's decline that new investment suffers within its own period."""


def benchmark_factor(benchmark: Array, surviving_investment: Array, surviving_backcast: Array) -> Array:
    """Return lambda = (K_b - sum w I) / (sum w I^): what the backcast investment is to be multiplied by.

    K_b is the known stock of period b; with lambda, one convolution over both gives every period before and
    after it. A negative lambda says that the observed investment alone exceeds the benchmark: a finding, and
    the caller's declared choice.

    Args:
        benchmark: K_b at constant prices, of the same date as the weights.
        surviving_investment: sum_{s>=1} w(b-s) I_s, what is left in b of the observed investment.
        surviving_backcast: sum_{s<=0} w(b-s) I^_s, what is left in b of the backcast investment.

    Returns:
        lambda, no unit, in the common shape. NaN where nothing is left of the backcast.

    Source: SNA practice of starting from a wealth survey; equation of this program.
    """
    left = np.where(surviving_backcast == 0, np.nan, surviving_backcast)
    return np.asarray((benchmark - surviving_investment) / left)


@dataclass(frozen=True)
class SolvedRate:
    """Rates that meet two stocks: (N,) each.

    rate: NaN where there is no root between the bounds, or more than one.
    residual: closing stock at that rate less the one asked for; NaN with the rate.
    roots: how many there are; for a series with negative investment or stock, as many as a grid shows.
    """

    rate: F8
    residual: F8
    roots: I8


def closing_stock(opening: F8, investment: F8, rate: F8, timing: str) -> F8:
    """Return (1-d)^n W_0 + w(0) sum_{s=1..n} (1-d)^(n-s) I_s, w(0) = 1-d, 1-d/2, 1 for start, mid, end.

    Args:
        opening: (N,) W_0.
        investment: (n, N) volumes of the periods between the two stocks, the later stock's own included.
        rate: (N,) or anything that broadcasts against it in front, d per period.
        timing: `start`, `mid` or `end`.

    Raises:
        ValueError: unknown timing.
    """
    if timing not in _LOST_AT_ONCE:
        raise ValueError(f"unknown timing {timing!r}, expected one of {', '.join(_LOST_AT_ONCE)}")
    keep = 1 - rate
    first = 1 - _LOST_AT_ONCE[timing] * rate
    stock = opening + np.zeros_like(rate)
    for flow in investment:
        stock = keep * stock + first * flow
    return np.asarray(stock)


def rate_between(
    opening: F8, closing: F8, investment: F8, timing: str, low: float = 0.0, high: float = 1.0
) -> SolvedRate:
    """Return the geometric rate in (low, high) with which investment leads from one stock to the other.

    With an opening stock and investment of 0 or more every term of the closing stock falls as the rate rises,
    so that there is one root or none. A negative figure can bring several roots: they are counted by changes of
    sign over a grid of 1,000 cells (two within one cell remain unseen), and several roots are no answer.

    Args:
        opening, closing: (N,) stocks at constant prices, at the ends of two periods n apart.
        investment: (n, N) volumes of the n periods after the opening stock.
        timing: `start`, `mid` or `end`.
        low, high: bounds, 0 <= low < high <= 1; a root at a bound does not count.

    Raises:
        ValueError: unknown timing; bounds out of order or outside [0, 1]; no investment period.
    """
    low = require("the lower bound", low, low=0, high=1)
    high = require("the upper bound", high, low=low, high=1, open_low=True)
    if len(investment) == 0:
        raise ValueError("two benchmarks of the same date: there is no period in which a rate could work")

    def gap(rate: F8, which: I8) -> F8:
        return closing_stock(opening[which], investment[:, which], rate, timing) - closing[which]

    known = np.isfinite(opening) & np.isfinite(closing) & np.isfinite(investment).all(axis=0)
    single = known & (opening >= 0) & (investment >= 0).all(axis=0)
    roots = np.zeros(len(opening), np.int64)
    a, b = np.full(len(opening), low), np.full(len(opening), high)

    fast = np.flatnonzero(single)
    roots[fast] = (gap(a[fast], fast) > 0) & (gap(b[fast], fast) < 0)
    slow = np.flatnonzero(known & ~single)
    edges = np.linspace(low, high, GRID + 1)
    inner = (np.arange(1, GRID + 1) < GRID)[:, None]
    for some in np.array_split(slow, range(SERIES_AT_ONCE, len(slow), SERIES_AT_ONCE)):
        sign = np.sign(gap(edges[:, None] + np.zeros(len(some)), some))
        changes = (sign[:-1] * sign[1:] < 0) | ((sign[1:] == 0) & inner)
        roots[some] = changes.sum(axis=0)
        cell = changes.argmax(axis=0)
        a[some], b[some] = edges[cell], edges[cell + 1]

    one = np.flatnonzero(roots == 1)
    a, b = a[one], b[one]
    rising = gap(a, one) < 0
    for _ in range(BISECTIONS):
        middle = (a + b) / 2
        left = (gap(middle, one) > 0) == rising
        a, b = np.where(left, a, middle), np.where(left, middle, b)
    rate, residual = np.full(len(opening), np.nan), np.full(len(opening), np.nan)
    rate[one] = (a + b) / 2
    residual[one] = gap(rate[one], one)
    return SolvedRate(rate, residual, roots)


def even_changes(gap: Array, left: Array) -> Array:
    """Return the equal other volume change per period that closes a gap: gap / sum_j left(j).

    Entered at the end of each of the n periods up to the later benchmark, n such changes leave the gap in its
    stock.

    Args:
        gap: later benchmark less the stock that the earlier one leads to, volume at constant prices.
        left: (n,) or (n, N): what is left of a change j = 0..n-1 periods later, (1-d)^j for a constant rate;
            all ones if the changes are not themselves consumed.
    """
    return np.asarray(gap / np.sum(left, axis=0))
