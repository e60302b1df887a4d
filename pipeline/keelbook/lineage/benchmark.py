"""`BenchmarkFactor`: the factor on the starting stock with which a stock meets a benchmark, solved in closed form."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from keelbook.blocks import B1, F4, F8, I8
from keelbook.lineage.lag import Lag
from keelbook.lineage.primitives import Parts, Term, _ratio


@dataclass(frozen=True, eq=False)
class BenchmarkFactor:
    """lambda with K_b = sum_v w(v) I_(b-v) + lambda x remainder(b) x opening, at the opening's period.

    Arguments: benchmark (T, N), of which the first figure from the opening's period on counts; flow, opening and
    growth as `Lag` takes them. The opening sets the shape of what is scaled and has no term of its own.
    Source: methods as in OECD, Measuring Capital (2009), stocks from a benchmark.
    """

    lag: Lag

    def _solve(self, x: Sequence[F8]) -> tuple[I8, I8, F8, F8, B1]:
        """Return the opening rows, the benchmark rows, what is scaled, lambda, and where there is one."""
        benchmark, flow, opening, growth = x
        o, live = self.lag._start(flow, opening)
        n = np.arange(flow.shape[1])
        at, g = opening[o, n], growth[o, n]
        usable = live.copy()
        usable[o, n] = np.isfinite(at)
        usable &= np.isfinite(benchmark)
        b = np.argmax(usable, axis=0)
        kept = np.where(live, flow, 0.0)
        # A benchmark of the opening's own date is met by the opening alone.
        later = b > o
        invested = np.where(later, self.lag._apply(kept, np.zeros_like(at), g, o, live)[b, n], 0.0)
        scaled = np.where(later, self.lag._apply(np.zeros_like(kept), at, g, o, live)[b, n], at)
        with np.errstate(invalid="ignore", divide="ignore"):
            factor = (benchmark[b, n] - invested) / scaled
        return o, b, scaled, factor, np.asarray(usable.any(axis=0) & np.isfinite(factor))

    def compute(self, *x: F8) -> F8:
        o, _, _, factor, found = self._solve(x)
        y = np.full(x[0].shape, np.nan)
        n = np.flatnonzero(found)
        y[o[n], n] = factor[n]
        return y

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        if all(p is None for parts in kinds for p in parts[:2]):
            return [None for _ in kinds]
        out: list[F4 | None] = []
        for kind in kinds:
            top, bottom = np.zeros_like(y), np.zeros_like(y)
            for n in np.flatnonzero(np.isfinite(y).any(axis=0)):
                o = int(np.flatnonzero(np.isfinite(y[:, n]))[0])
                for term in self.terms(x, (o, int(n))):
                    part = kind[term.role]
                    bottom[o, n] += abs(term.contribution)
                    top[o, n] += abs(term.contribution) * (0.0 if part is None else part[term.row, n])
            out.append(_ratio(top, bottom, y))
        return out

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        _, n = at
        benchmark, flow = x[0], x[1]
        o, b, scaled, _, _ = self._solve(x)
        row, per = int(b[n]), float(scaled[n])
        yield Term(0, row, n, float(benchmark[row, n]), 1 / per, float(benchmark[row, n]) / per)
        for v, w in enumerate(self.lag.kernels[self.lag.which[n]].at(row, row - int(o[n]))):
            value = float(flow[row - v, n])
            yield Term(1, row - v, n, value, -float(w) / per, -float(w) * value / per)

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        return float(np.sum([t.contribution for t in terms]))
