"""Törnqvist growth and chained levels: the pieces that indices of capital and of labour share."""

import numpy as np

from keelbook.blocks import F8
from keelbook.lineage.formula import Setting
from keelbook.lineage.primitives import Groups, Span, Spans


def log_growth(quantity: F8, before: F8, *_: F8) -> F8:
    """Return ln(q_t / q_(t-1)) of every member, (T, M)."""
    return np.asarray(np.log(quantity / before))


def mean_cost_shares(_: F8, __: F8, cost: F8, cost_before: F8, *, groups: Groups) -> F8:
    """Return the two-period means of each member's part in its group's cost, (T, M)."""
    member = np.where(groups.of < 0, 0, groups.of)
    out = np.zeros_like(cost)
    for one in (cost, cost_before):
        out += one / groups.reduce(one)[:, member]
    return np.asarray(out / 2)


def chained(s: Setting, reference_year: int | None) -> Span:
    """Return the rule that cumulates log growth from a reference year, or from the year before the first."""

    def plan(x: F8) -> Spans:
        T, N = x.shape
        there = np.isfinite(x)
        begin = np.argmax(there, axis=0)
        end = T - 1 - np.argmax(there[::-1], axis=0)
        reference = (
            np.full(N, begin - 1) if reference_year is None else np.full(N, reference_year - s.periods[0])
        )
        rows = np.arange(T)[:, None]
        inside = there.any(axis=0) & (rows >= begin - 1) & (rows <= end)
        inside &= (reference >= begin - 1) & (reference <= end)
        first = np.where(inside, np.minimum(rows, reference) + 1, -1)
        length = np.abs(rows - reference)
        sign = np.where(rows > reference, 1.0, -1.0)
        return Spans(first, length, np.broadcast_to(sign, (T, T, N)))

    return Span(plan, outer=np.exp)
