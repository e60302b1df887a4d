"""`Lag`: what is left, at the end of a period, of the flows of that and earlier periods and of an opening stock."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from keelbook.blocks import B1, F4, F8, I4, I8
from keelbook.lineage.primitives import Parts, Term, _ratio
from keelbook.methods.initial_stock import missing_part, opening_stock_profile, opening_vintages
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

    def at(self, row: int, count: int) -> F8:
        """Return the weights of the flows of a period and the ones before it."""
        return self.weights(count)

    def from_vintage(self, row: int, count: int) -> F8:
        """Return the weights of the flow of a period in that period and later ones."""
        return self.weights(count)

    def remainder(self, growth: F8, count: int, opens: int = 0) -> F8:
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

    def at(self, row: int, count: int) -> F8:
        return self.weights(count)

    def from_vintage(self, row: int, count: int) -> F8:
        return self.weights(count)

    def remainder(self, growth: F8, count: int, opens: int = 0) -> F8:
        """Return the weight of the opening stock after 1..count periods, (count, N).

        The opening stock is sum_v stock(v) I (1+g)^-(v+1) of vintages that grew at g (methods.md section 3),
        so after t periods its weight is sum_v w(v+t) (1+g)^-(v+1) / sum_v stock(v) (1+g)^-(v+1).
        Weights that are all 0 (used up within the period) leave no opening stock, and 0 of it.
        """
        later = opening_vintages(self.table, growth, count)
        if not np.any(self.stock):
            return np.asarray(0 * later)
        return np.asarray(later / opening_stock_profile(np.ones_like(growth), growth, self.stock))


@dataclass(frozen=True, eq=False)
class BandKernel:
    """Weights that differ between periods: band[t, s] of the flow of row s in row t, (T, T).

    base: the kernel of the vintages in the opening stock. left[t, o]: the weight in row t of a stock that opens in
    row o, where rates change for all that is alive; None where the opening follows `base`, whatever comes later.
    """

    band: F8
    base: GeometricKernel | TableKernel
    left: F8 | None = None

    def at(self, row: int, count: int) -> F8:
        return self.band[row, row - count + 1 : row + 1][::-1]

    def from_vintage(self, row: int, count: int) -> F8:
        return self.band[row : row + count, row]

    def remainder(self, growth: F8, count: int, opens: int = 0) -> F8:
        """Return the weight of the opening stock of row `opens` after 1..count periods, (count, N)."""
        if self.left is None:
            return self.base.remainder(growth, count)
        return self.left[opens + 1 : opens + 1 + count, opens, None] * np.ones_like(growth)


def of_vintages(kernels: Sequence[GeometricKernel | TableKernel], of_row: I8) -> BandKernel:
    """Return the weights of flows of which row s has kernel of_row[s] for ever; the opening has that of row 0."""
    T = len(of_row)
    band = np.zeros((T, T))
    for s in range(T):
        band[s:, s] = kernels[of_row[s]].weights(T - s)
    return BandKernel(band, kernels[of_row[0]])


def of_periods(kernels: Sequence[GeometricKernel], of_row: I8, *, loss: bool) -> BandKernel:
    """Return the weights where the rate of row t holds for all that is alive in it: W_t = k_t W_(t-1) + w_t(0) I_t.

    kernels: of the stock. loss: the weights of what is lost, (1 - w_t(0)) I_t + (1 - k_t) W_(t-1), are returned.
    """
    T = len(of_row)
    keep, first = (np.array([getattr(kernels[i], name) for i in of_row]) for name in ("keep", "first"))
    band, left = np.zeros((T, T)), np.zeros((T, T))
    for s in range(T):
        kept = np.cumprod(keep[s + 1 :])
        before = np.concatenate(([1.0], kept[:-1]))[: len(kept)]
        later = (1 - keep[s + 1 :]) * before if loss else kept
        band[s, s] = 1 - first[s] if loss else first[s]
        band[s + 1 :, s] = first[s] * later
        left[s + 1 :, s] = later
    return BandKernel(band, kernels[of_row[0]], left)


@dataclass(frozen=True, eq=False)
class AgedKernel:
    """The weights of a stock times the age of what is left: exact age `start` in the period of investment."""

    of: GeometricKernel | TableKernel | BandKernel
    start: float

    def _ages(self, count: int) -> F8:
        return np.asarray(np.arange(count) + self.start, np.float64)

    def at(self, row: int, count: int) -> F8:
        return np.asarray(self.of.at(row, count) * self._ages(count))

    def from_vintage(self, row: int, count: int) -> F8:
        return np.asarray(self.of.from_vintage(row, count) * self._ages(count))

    def remainder(self, growth: F8, count: int, opens: int = 0) -> F8:
        """Return the weight of the opening stock after 1..count periods, (count, N).

        With q = (1 - d) / (1 + g) its vintages have the mean age start + q / (1 - q) when it opens, by geometric
        weights, and so t more after t periods; by a table of weights each vintage counts with its own age.
        """
        base = self.of.base if isinstance(self.of, BandKernel) else self.of
        if isinstance(base, TableKernel):
            return TableKernel(base.table * self._ages(len(base.table)), base.stock).remainder(growth, count)
        q = base.keep / (1 + growth)
        ages = np.arange(1, count + 1)[:, None] + self.start + q / (1 - q)
        return np.asarray(self.of.remainder(growth, count, opens) * ages)


Kernel = GeometricKernel | TableKernel | BandKernel | AgedKernel


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
        recursive = np.zeros(N, bool)
        for i, kernel in enumerate(self.kernels):
            mine = self.which == i
            if isinstance(kernel, GeometricKernel):
                recursive |= mine
            elif mine.any():
                y[:, mine] = _tabled(kernel, flow[:, mine], at_opening[mine], growth[mine], o[mine])
        if recursive.all():
            y = self._recursed(self.which, flow, at_opening, o)
        elif recursive.any():
            y[:, recursive] = self._recursed(
                self.which[recursive], flow[:, recursive], at_opening[recursive], o[recursive]
            )
        return np.where(live, y, np.nan)

    def _recursed(self, which: I4, flow: F8, opening: F8, o: I8) -> F8:
        """Return the sums of all series with geometric weights, whatever their rates, in one pass over time."""
        first, second, keep, base = (
            np.array([getattr(k, name, np.nan) for k in self.kernels])[which]
            for name in ("first", "second", "keep", "of_opening")
        )
        y = np.empty(flow.shape)
        older = np.zeros(flow.shape[1])
        for t in range(len(flow)):
            y[t] = first * flow[t] + older
            older = keep * older + second * flow[t]
        for start, columns, count in _starts(o, len(flow)):
            left = second[columns] / base[columns] * keep[columns] ** np.arange(count)[:, None]
            y[start + 1 :, columns] += left * opening[columns]
        return y

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
        flat = live & (bottom == 0)
        if flat.any():
            bottom = np.where(
                flat, self._apply(live.astype(np.float64), np.ones_like(size0), g, o, live), bottom
            )
        out: list[F4 | None] = []
        for of_flow, of_opening, *_ in kinds:
            if of_flow is None and of_opening is None:
                out.append(None)
                continue
            flow_part: F4 | F8 = np.zeros_like(size) if of_flow is None else of_flow
            opening_part: F4 | F8 = np.zeros_like(size0) if of_opening is None else of_opening[o, n]
            top = self._apply(_product(size, flow_part), _product(size0, opening_part), g, o, live)
            if flat.any():
                # Nothing is left of anything: inputs of equal size stand in.
                equal = self._apply(_product(live, flow_part), _product(1, opening_part), g, o, live)
                top = np.where(flat, equal, top)
            out.append(_ratio(top, bottom, y))
        return out

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        t, n = at
        flow, opening, growth = (v[:, n : n + 1] for v in x)
        o = int(self._start(flow, opening)[0][0])
        kernel = self.kernels[self.which[n]]
        for v, w in enumerate(kernel.at(t, t - o)):
            value = float(flow[t - v, 0])
            yield Term(0, t - v, n, value, float(w), float(w) * value)
        rest = float(kernel.remainder(growth[o], t - o, o)[-1, 0])
        value = float(opening[o, 0])
        yield Term(1, o, n, value, rest, rest * value)
        yield Term(2, o, n, float(growth[o, 0]), 0.0, 0.0)

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        return float(np.sum([t.contribution for t in terms]))


@dataclass(frozen=True, eq=False)
class WarmUp:
    """`own` from a stock of zero, masked until the stock lacks at most a part `limit` of what it would be.

    Arguments: flow, and the opening stock that is left out with its growth, as `Lag` takes them. The part is
    K_ss / (K + K_ss), K the stock from zero and K_ss what is left of the opening that was not entered; from the
    first period in which it is at most the limit, all are kept. Source: methods.md section 3.
    """

    own: Lag
    stock: Lag
    limit: float

    def _kept(self, flow: F8, left_out: F8, growth: F8) -> B1:
        missing = self.stock.compute(np.where(np.isfinite(flow), 0.0, np.nan), left_out, growth)
        held = self.stock.compute(flow, 0 * left_out, growth)
        with np.errstate(invalid="ignore", divide="ignore"):
            part = missing_part(missing, held)
        return np.logical_or.accumulate((part >= 0) & (part <= self.limit), axis=0)

    def compute(self, *x: F8) -> F8:
        flow, left_out, growth = x
        return np.where(self._kept(*x), self.own.compute(flow, 0 * left_out, growth), np.nan)

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        flow, left_out, growth = x
        from_zero = (flow, 0 * left_out, growth)
        return self.own.mix(from_zero, self.own.compute(*from_zero), kinds)

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        flow, left_out, growth = x
        for term in self.own.terms((flow, 0 * left_out, growth), at):
            if term.role == 1:
                value = float(left_out[term.row, term.column])
                yield Term(1, term.row, term.column, value, 0.0, 0.0)
            else:
                yield term

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        return self.own.combine(x, terms)


def _tabled(kernel: TableKernel | BandKernel | AgedKernel, flow: F8, opening: F8, growth: F8, o: I8) -> F8:
    """Return the sums of series that share one table of weights."""
    if isinstance(kernel, TableKernel):
        y = cohort_stock(np.ascontiguousarray(flow), kernel.weights(min(len(flow), len(kernel.table))))
    else:
        T = len(flow)
        band = np.zeros((T, T))
        for s in range(T):
            band[s:, s] = kernel.from_vintage(s, T - s)
        y = band @ flow
    for start, columns, count in _starts(o, len(flow)):
        y[start + 1 :, columns] += kernel.remainder(growth[columns], count, start) * opening[columns]
    return y


def _starts(o: I8, periods: int) -> Iterator[tuple[int, B1, int]]:
    """Yield each opening period, the series that open there, and how many periods follow."""
    for start in np.unique(o):
        if periods - int(start) > 1:
            yield int(start), o == start, periods - int(start) - 1


def _product(size: F8 | B1 | int, part: F4 | F8) -> F8:
    return np.asarray(size * part, np.float64)
