"""Other changes in volume: the part of every vintage that they leave, and the even changes that close a gap.

A change of a stock hits all vintages alive alike, those of the period too, at its end (methods.md section 2): with
C_t the product of the factors so far, W_t = C_t U_t and U_t = sum_s w(t-s) I_s / C_(s-1) + what is left of the
opening. So the sum over vintages stays a convolution, of investment divided by what the changes had left before it.
"""

from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np

from keelbook.blocks import B1, F8, I4, I8
from keelbook.lineage.lag import Kernel
from keelbook.methods.arrays import Array

_STEP = 1e-30
_NEWTON = 30

ROUNDING = 1e-12
"""What is left of a stock by rounding alone when a change takes all of it."""


class _Vintages(NamedTuple):
    """opens (M,), live (T, M), flow and what is left of the opening (T, M), and the kernel of each column."""

    opens: I8
    live: B1
    flow: Array
    left: Array
    kernels: Sequence[Kernel]
    which: I4

    def from_row(self, row: int) -> F8:
        """Return the weights of the flow of a row in that row and the later ones, (T - row, M)."""
        count = len(self.flow) - row
        return np.stack([k.from_vintage(row, count) for k in self.kernels], axis=1)[:, self.which]


def _vintages(kernels: Sequence[Kernel], flow: Array, opening: Array, growth: Array, which: I4) -> _Vintages:
    T, M = flow.shape
    held = np.isfinite(opening)
    opens = np.argmax(held, axis=0)
    rows = np.arange(T)[:, None]
    live = np.logical_and.accumulate(np.isfinite(flow) | (rows <= opens), axis=0)
    live &= (rows > opens) & held.any(axis=0)
    left = np.zeros((T, M), np.result_type(flow, opening, growth))
    for i, kernel in enumerate(kernels):
        mine = which == i
        for start in np.unique(opens[mine]):
            columns = mine & (opens == start)
            if T - start > 1:
                rest = kernel.remainder(growth[start, columns], T - int(start) - 1, int(start))
                left[start + 1 :, columns] = rest * opening[start, columns]
    return _Vintages(opens, live, flow, left, kernels, which)


def _survive(v: _Vintages, change: Array, target: Array) -> tuple[Array, Array]:
    """Return C and the stocks W = C U, (T, M); NaN from the period on in which a change leaves nothing."""
    T, M = v.flow.shape
    dtype = np.result_type(v.left, change, target)
    part, stock = np.full((T, M), np.nan, dtype), np.full((T, M), np.nan, dtype)
    ahead = v.left.astype(dtype)
    before, met = np.ones(M, dtype), np.zeros(M, bool)
    for t in range(T):
        live = v.live[t]
        ahead[t:] += v.from_row(t) * np.where(live, v.flow[t] / before, 0)
        of_vintages = ahead[t]
        now = before + np.where(np.isfinite(change[t]), change[t] / of_vintages, 0)
        hit = np.isfinite(target[t]) & live & ~met
        now = np.where(hit, target[t] / of_vintages, now)
        met |= hit
        now = np.where(now.real > ROUNDING * before.real, now, np.nan)
        before = np.where(live, now, before)
        part[t] = np.where(live, now, np.where(v.opens == t, 1, np.nan))
        stock[t] = np.where(live, now * of_vintages, np.nan)
    return part, stock


def surviving(kernels: Sequence[Kernel]) -> Callable[..., Array]:
    """Return C of (change, even change, target stock, investment, opening, growth), each (T, M); C_o = 1.

    C_t = C_(t-1) + change_t / U_t, or target_t / U_t in the period of a target; W_t = C_t U_t.
    """

    def f(
        change: Array, even: Array, target: Array, flow: Array, opening: Array, growth: Array, which: I4
    ) -> Array:
        whole = np.where(np.isfinite(change), change, 0) + np.where(np.isfinite(even), even, 0)
        part, _ = _survive(_vintages(kernels, flow, opening, growth, which), whole, target)
        return part

    return f


def even_change(kernels: Sequence[Kernel]) -> Callable[..., Array]:
    """Return x_t of (benchmark, change, investment, opening, growth): the same change in every period after the
    first benchmark up to the last, with which the stock meets the last.

    The change hits all vintages alike, so the stock is not quite linear in it: solved by Newton's method on the real
    parts, and one more step carries a complex step through (implicit function).
    """

    def f(benchmark: Array, change: Array, flow: Array, opening: Array, growth: Array, which: I4) -> Array:
        T, M = flow.shape
        n, rows = np.arange(M), np.arange(T)[:, None]
        known = np.isfinite(benchmark)
        first, last = np.argmax(known, axis=0), T - 1 - np.argmax(known[::-1], axis=0)
        between = (rows > first) & (rows <= last)
        given = np.where(np.isfinite(change), change, 0)
        none = np.full((T, M), np.nan)

        def gap(x: Array, real: bool) -> Array:
            arrays = (flow, opening, growth, given, benchmark)
            a, b, c, d, e = (np.real(y) for y in arrays) if real else arrays
            _, stock = _survive(_vintages(kernels, a, b, c, which), d + between * x, none)
            return np.asarray(stock[last, n] - e[last, n])

        x, slope = np.zeros(M), np.ones(M)
        for _ in range(_NEWTON):
            at = gap(x + 1j * _STEP, real=True)
            slope = np.imag(at) / _STEP
            step = np.real(at) / slope
            x = x - step
            if not np.any(np.abs(step) > 1e-15 * np.abs(x)):
                break
        exact = x - gap(x, real=False) / slope
        found = np.where((known.sum(axis=0) > 1) & _opened(opening, first), exact, np.nan)
        return np.where(between, found, np.nan)

    return f


def _opened(opening: Array, first: I8) -> B1:
    """Return which series have an opening stock at or before their first benchmark."""
    held = np.isfinite(opening)
    return np.asarray(held.any(axis=0) & (np.argmax(held, axis=0) <= first))


def backcast(window: int) -> Callable[..., Array]:
    """Return investment of (investment, indicator): before its first period as it would be had it followed the other.

    I_t = X_t sum I / sum X over the first `window` periods of investment; NaN where one of them lacks a figure, or
    where the indicator sums to 0 or less.
    """

    def f(investment: Array, indicator: Array, which: I4) -> Array:
        T = len(investment)
        there = np.isfinite(investment)
        first = np.argmax(there, axis=0)
        rows = np.arange(T)[:, None]
        inside = (rows >= first) & (rows < first + window)
        level, linked = (np.where(inside, x, 0).sum(axis=0) for x in (indicator, investment))
        usable = there.any(axis=0) & (first + window <= T) & (np.real(level) > 0)
        ratio = np.where(usable, linked / level, np.nan)
        return np.where(rows >= first, investment, indicator * ratio)

    return f
