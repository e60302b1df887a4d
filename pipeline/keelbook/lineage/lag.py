"""`Lag`: what is left, at the end of a period, of the flows of that and earlier periods and of an opening stock."""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from keelbook.blocks import B1, F4, F8, I4, I8
from keelbook.lineage.primitives import Parts, Term, _ratio
from keelbook.methods.initial_stock import opening_stock_profile, opening_vintages
from keelbook.methods.perpetual_inventory import cohort_stock


@dataclass(frozen=True, eq=False)
class GeometricKernel:
    """Weights w(0) = first, w(v) = second x keep^(v-1): for ever declining, so a recursion does the sum.

    of_opening: weight of the newest vintage in the opening stock, whose composition the remainder follows.
    """

    first: float
    second: float
    keep: float
    of_opening: float

    def weights(self, count: int) -> F8:
        out = np.empty(count)
        out[:1] = self.first
        out[1:] = self.second * self.keep ** np.arange(max(count - 1, 0))
        return out

    def remainder(self, growth: F8, count: int) -> F8:
        """Return the weight of the opening stock after 1..count periods, (count, N); growth cancels out."""
        ages = np.arange(count)[:, None]
        return self.second / self.of_opening * self.keep**ages * np.ones_like(growth)


@dataclass(frozen=True, eq=False)
class TableKernel:
    """Weights given age by age, zero after the last. `stock`: the stock weights the opening is made of."""

    table: F8
    stock: F8

    def weights(self, count: int) -> F8:
        out = np.zeros(count)
        n = min(count, len(self.table))
        out[:n] = self.table[:n]
        return out

    def remainder(self, growth: F8, count: int) -> F8:
        """Return the weight of the opening stock after 1..count periods, (count, N).

        The opening stock is sum_v stock(v) I (1+g)^-(v+1) of vintages that grew at g (methods.md section 3),
        so after t periods its weight is sum_v w(v+t) (1+g)^-(v+1) / sum_v stock(v) (1+g)^-(v+1).
        """
        later = opening_vintages(self.table, growth, count)
        return np.asarray(later / opening_stock_profile(np.ones_like(growth), growth, self.stock))


Kernel = GeometricKernel | TableKernel


@dataclass(frozen=True, eq=False)
class Lag:
    """y[t] = sum_{v} w(v) x[t-v] + r(t - o) x0[o], with x0 the opening figure at period o.

    Arguments: flow x (T, N), opening (T, N) with one figure per series at its period o, growth (T, N) with the
    growth rate that made the opening at the same place (a parameter: it has no term of its own).
    A gap in the flow ends the series: a year that rests on nothing is NaN, and so are all later ones.
    """

    kernels: tuple[Kernel, ...]
    which: I4

    def _start(self, flow: F8, opening: F8) -> tuple[I8, B1]:
        held = np.isfinite(opening)
        o = np.argmax(held, axis=0)
        rows = np.arange(len(flow))[:, None]
        unbroken = np.logical_and.accumulate(np.isfinite(flow) | (rows <= o), axis=0)
        return o, unbroken & (rows > o) & held.any(axis=0)

    def _apply(self, flow: F8, at_opening: F8, growth: F8, o: I8, live: B1) -> F8:
        """Return the weighted sums for a flow that is zero wherever it is not alive."""
        T, N = flow.shape
        y = np.empty((T, N))
        geometric = [isinstance(k, GeometricKernel) for k in self.kernels]
        recursive = np.asarray(geometric, bool)[self.which] if N else np.zeros(0, bool)
        if recursive.any():
            columns: slice | B1 = slice(None) if recursive.all() else recursive
            members = self.which[columns]
            first, second, keep, base = (
                np.array([getattr(k, name, np.nan) for k in self.kernels])[members]
                for name in ("first", "second", "keep", "of_opening")
            )
            x = flow[:, columns]
            out = np.empty_like(x)
            older = np.zeros(x.shape[1])
            for t in range(T):
                out[t] = first * x[t] + older
                older = keep * older + second * x[t]
            _add_opening(
                out,
                at_opening[columns],
                o[columns],
                lambda n, c: second[c] / base[c] * keep[c] ** np.arange(n)[:, None],
            )
            y[:, columns] = out
        for i, kernel in enumerate(self.kernels):
            if isinstance(kernel, TableKernel):
                columns = self.which == i
                if columns.any():
                    out = cohort_stock(
                        np.ascontiguousarray(flow[:, columns]), kernel.weights(min(T, len(kernel.table)))
                    )
                    rate = growth[columns]
                    _add_opening(
                        out,
                        at_opening[columns],
                        o[columns],
                        lambda n, c, k=kernel, g=rate: k.remainder(g[c], n),
                    )
                    y[:, columns] = out
        return np.where(live, y, np.nan)

    def compute(self, *x: F8) -> F8:
        flow, opening, growth = x
        o, live = self._start(flow, opening)
        n = np.arange(flow.shape[1])
        return self._apply(np.where(live, flow, 0.0), opening[o, n], growth[o, n], o, live)

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        flow, opening, growth = x
        if all(p is None for parts in kinds for p in parts[:2]):
            return [None for _ in kinds]
        o, live = self._start(flow, opening)
        n = np.arange(flow.shape[1])
        size, size0, g = np.abs(np.where(live, flow, 0.0)), np.abs(opening[o, n]), growth[o, n]
        positive = bool((flow[live] >= 0).all()) and bool((opening[o, n][live.any(axis=0)] >= 0).all())
        bottom = y if positive else self._apply(size, size0, g, o, live)
        out: list[F4 | None] = []
        for of_flow, of_opening, *_ in kinds:
            if of_flow is None and of_opening is None:
                out.append(None)
                continue
            flow_part = np.zeros_like(size) if of_flow is None else size * of_flow
            opening_part = np.zeros_like(size0) if of_opening is None else size0 * of_opening[o, n]
            out.append(_ratio(self._apply(flow_part, opening_part, g, o, live), bottom, y))
        return out

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        t, n = at
        flow, opening, growth = (v[:, n : n + 1] for v in x)
        o = int(self._start(flow, opening)[0][0])
        kernel = self.kernels[self.which[n]]
        for v, w in enumerate(kernel.weights(t - o)):
            value = float(flow[t - v, 0])
            yield Term(0, t - v, n, value, float(w), float(w) * value)
        rest = float(kernel.remainder(growth[o], t - o)[-1, 0])
        value = float(opening[o, 0])
        yield Term(1, o, n, value, rest, rest * value)

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        return float(np.sum([t.contribution for t in terms]))


def _add_opening(y: F8, opening: F8, o: I8, remainder: Callable[[int, B1], F8]) -> None:
    """Add what is left of each series' opening figure to the periods after it, in place."""
    for start in np.unique(o):
        columns = o == start
        count = len(y) - int(start) - 1
        if count > 0:
            y[int(start) + 1 :, columns] += remainder(count, columns) * opening[columns]
