"""The primitives in which all stage arithmetic is written.

Each has one definition of its weights, used by `compute` (whole block), by `mix` (data basis) and by `terms`
(one figure), so that an explanation cannot drift from the figure it explains.

`Lag`    weighted sum over earlier periods of the same series, plus what is left of an opening figure
`Sum`    weighted sum over series of a group; the weights may be made from further blocks
`Span`   weighted sum over a span of periods of the same series
`Each`   pointwise function of a few arguments; its weights come from complex steps through that function
`Either` the first of two pointwise rules that has all its inputs; which one it was is told by the figure's status
"""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import NamedTuple, Protocol

import numpy as np

from keelbook.blocks import F4, F8, I4, I8

Parts = Sequence[F4 | None]
"""One data-basis part (imputed, or assumed) of every input, None where it is nothing."""


class Term(NamedTuple):
    """One input of one figure: position of the role, row and column in that input, and what it does.

    An input that only makes the weights of others has weight 0 itself.
    """

    role: int
    row: int
    column: int
    value: float
    weight: float
    contribution: float


class Rule(Protocol):
    """One piece of arithmetic over arrays with periods as rows and series as columns."""

    def compute(self, *x: F8) -> F8:
        """Return the whole output block, NaN where it cannot be computed."""
        ...

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        """Return, for each kind of data basis, its part in every output figure (methods.md section 8)."""
        ...

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        """Yield the inputs of one output figure."""
        ...

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        """Return the figure from its terms alone."""
        ...


def _ratio(top: F8, bottom: F8, like: F8) -> F4:
    with np.errstate(invalid="ignore", divide="ignore"):
        part = np.where(bottom > 0, top / bottom, np.nan)
    part[np.isnan(like)] = 0.0
    return np.asarray(np.clip(part, 0.0, 1.0), np.float32)


def _weighted_parts(sizes: Sequence[F8], parts: Parts, y: F8) -> F4 | None:
    """Return sum(size x part) / sum(size); equal weights where all sizes are zero.

    An input whose part is NaN is a figure by definition: it rests on nothing, so that the others decide.
    """
    if all(p is None for p in parts):
        return None
    bottom = np.zeros_like(y)
    top = np.zeros_like(y)
    plain = np.zeros_like(y)
    count: F8 | int = len(sizes)
    for size, part in zip(sizes, parts, strict=True):
        if part is None:
            bottom += size
            continue
        by_definition = np.isnan(part)
        if by_definition.any():
            size, part = np.where(by_definition, 0, size), np.where(by_definition, np.float32(0), part)
            count = count - by_definition
        bottom += size
        top += size * part
        plain += part
    flat = bottom == 0
    if flat.any():
        top[flat], bottom[flat] = plain[flat], np.broadcast_to(count, y.shape)[flat]
    return _ratio(top, bottom, y)


# --- pointwise -----------------------------------------------------------------------------------------------

_STEP = 1e-30


@dataclass(frozen=True, eq=False)
class Each:
    """y = f(x1, x2, ..., p1, p2, ...), pointwise, with parameters p of shape (N,), one per series, or (T, N).

    `f` must be analytic in x: no abs, max or branches (use `Either`).
    """

    f: Callable[..., F8]
    parameters: tuple[F8, ...] = ()

    def compute(self, *x: F8) -> F8:
        with np.errstate(invalid="ignore", divide="ignore"):
            y = np.asarray(self.f(*x, *self.parameters), np.float64)
        return np.where(np.isfinite(y), y, np.nan)

    def _slopes(self, x: Sequence[F8], parameters: Sequence[F8]) -> list[F8]:
        """Return df/dx_i for every argument, from the same f."""
        out = []
        with np.errstate(invalid="ignore", divide="ignore"):
            for i in range(len(x)):
                stepped = [v + 1j * _STEP if j == i else v for j, v in enumerate(x)]
                y = self.f(*stepped, *parameters)
                out.append(np.imag(np.broadcast_to(y, x[i].shape)) / _STEP)
        return out

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        if all(p is None for parts in kinds for p in parts):
            return [None for _ in kinds]
        sizes = [np.abs(v * s) for v, s in zip(x, self._slopes(x, self.parameters), strict=True)]
        return [_weighted_parts(sizes, parts, y) for parts in kinds]

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        row, column = at
        point = [np.asarray(v[row, column]) for v in x]
        slopes = self._slopes(point, [p[row, column] if p.ndim > 1 else p[column] for p in self.parameters])
        for i, (v, s) in enumerate(zip(point, slopes, strict=True)):
            yield Term(i, row, column, float(v), float(s), float(v * s))

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        row, column = terms[0].row, terms[0].column
        at = [p[row, column] if p.ndim > 1 else p[column] for p in self.parameters]
        return float(self.f(*(np.float64(t.value) for t in terms), *at))


@dataclass(frozen=True, eq=False)
class Either:
    """The first of several pointwise rules that gives a figure; each takes the arguments at `takes`.

    estimated: a figure of any rule but the first is an estimate (status E).
    """

    rules: tuple[Each, ...]
    takes: tuple[tuple[int, ...], ...]
    estimated: bool = True

    def branch(self, *x: F8) -> I8:
        """Return which rule gave each figure, shape of the output; -1 where none did."""
        found = np.full(x[0].shape, -1, np.int64)
        for i in reversed(range(len(self.rules))):
            found[np.isfinite(self.rules[i].compute(*(x[j] for j in self.takes[i])))] = i
        return found

    def compute(self, *x: F8) -> F8:
        y = np.full(x[0].shape, np.nan)
        for rule, take in zip(self.rules, self.takes, strict=True):
            y = np.where(np.isnan(y), rule.compute(*(x[j] for j in take)), y)
        return y

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        if all(p is None for parts in kinds for p in parts):
            return [None for _ in kinds]
        branch = self.branch(*x)
        out = [np.zeros(y.shape, np.float32) for _ in kinds]
        for i, (rule, take) in enumerate(zip(self.rules, self.takes, strict=True)):
            mixed = rule.mix([x[j] for j in take], y, [[parts[j] for j in take] for parts in kinds])
            for total, part in zip(out, mixed, strict=True):
                if part is not None:
                    total[branch == i] = part[branch == i]
        return list(out)

    def _chosen(self, x: Sequence[F8], at: tuple[int, int]) -> int:
        return int(self.branch(*x)[at])

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        i = self._chosen(x, at)
        for term in self.rules[i].terms([x[j] for j in self.takes[i]], at):
            yield term._replace(role=self.takes[i][term.role])

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        i = self._chosen(x, (terms[0].row, terms[0].column))
        return self.rules[i].combine([x[j] for j in self.takes[i]], terms)


# --- over the series of a group ------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Groups:
    """Which output every input series belongs to: `of` (M,) in 0..size-1, -1 for none."""

    of: I4
    size: int

    def reduce(self, x: F8) -> F8:
        """Sum columns by group in ascending column order, (T, M) -> (T, size); a NaN part makes a NaN total."""
        if np.all(np.diff(self.of) >= 0):
            ordered, of = x, self.of
        else:
            order = np.argsort(self.of, kind="stable")
            ordered, of = x[:, order], self.of[order]
        starts = np.flatnonzero(np.r_[True, np.diff(of) > 0]) if len(of) else np.zeros(0, np.int64)
        out = np.full((len(x), self.size), np.nan)
        if len(of):
            sums = np.add.reduceat(ordered, starts, axis=1)
            kept = of[starts] >= 0
            out[:, of[starts][kept]] = sums[:, kept]
        return out

    def members(self, group: int) -> I8:
        return np.flatnonzero(self.of == group)


def _one(*x: F8) -> F8:
    return x[0]


@dataclass(frozen=True, eq=False)
class Sum:
    """y = sum over a group of weight x value; both may be made from several blocks by `weight` and `value`.

    by_weight: the data basis counts parts by weight alone (index numbers), not by weight x value.
    """

    groups: Groups
    value: Callable[..., F8] = _one
    weight: Callable[..., F8] | None = None
    by_weight: bool = False

    def _pieces(self, x: Sequence[F8]) -> tuple[F8, F8]:
        with np.errstate(invalid="ignore", divide="ignore"):
            value = np.asarray(self.value(*x), np.float64)
            weight = np.ones_like(value) if self.weight is None else self.weight(*x, groups=self.groups)
        # A member without weight says nothing, whatever its value (an asset not held has no growth).
        value = np.where((weight == 0) & ~np.isfinite(value), 0.0, value)
        return value, np.asarray(weight, np.float64)

    def compute(self, *x: F8) -> F8:
        if self.weight is None:
            return self.groups.reduce(self.value(*x))
        value, weight = self._pieces(x)
        return self.groups.reduce(value * weight)

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        if all(p is None for parts in kinds for p in parts):
            return [None for _ in kinds]
        value, weight = self._pieces(x)
        size = np.abs(weight) if self.by_weight else np.abs(weight * value)
        bottom = self.groups.reduce(size)
        flat = bottom == 0
        if flat.any():
            bottom = np.where(flat, self.groups.reduce(np.ones_like(size)), bottom)
        out: list[F4 | None] = []
        for parts in kinds:
            if parts[0] is None:
                out.append(None)
                continue
            top = self.groups.reduce(size * parts[0])
            if flat.any():
                plain = self.groups.reduce(np.asarray(parts[0], np.float64))
                top = np.where(flat, plain, top)
            out.append(_ratio(top, bottom, y))
        return out

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        row, group = at
        value, weight = self._pieces(x)
        for m in self.groups.members(group):
            v, w = float(value[row, m]), float(weight[row, m])
            yield Term(0, row, int(m), v, w, v * w)
        if self.weight is not None:
            for role in range(1, len(x)):
                for m in self.groups.members(group):
                    yield Term(role, row, int(m), float(x[role][row, m]), 0.0, 0.0)

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        return float(np.sum([t.contribution for t in terms]))


# --- over periods of one series ------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Span:
    """y[r] = outer(sum over input rows of coefficient x inner(x[row])), for each output row r of each series.

    rows(x): (T, N) first input row of every output figure, -1 for none; length(x): (T, N) how many rows;
    coefficient(x, t, n, k): weight of the k-th row. Written as plans so that sums over quarters, over a trend
    window and from a reference year to each year share one definition.
    """

    plan: Callable[[F8], "Spans"]
    inner: Callable[[F8], F8] = _one
    outer: Callable[[F8], F8] = _one

    def _sum(self, x: F8, z: F8) -> F8:
        spans = self.plan(x)
        y = np.full(spans.first.shape, np.nan)
        for k in range(spans.coefficients.shape[0]):
            inside = (spans.first >= 0) & (k < spans.length)
            if not inside.any():
                break
            t, n = np.nonzero(inside)
            piece = spans.coefficients[k, t, n] * z[spans.rows(k, t, n), n]
            y[t, n] = piece if k == 0 else y[t, n] + piece
        empty = (spans.first >= 0) & (spans.length == 0)
        y[empty] = 0.0
        return y

    def compute(self, *x: F8) -> F8:
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            y = self.outer(self._sum(x[0], self.inner(x[0])))
        return np.where(np.isfinite(y), y, np.nan)

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        if all(p is None for parts in kinds for p in parts):
            return [None for _ in kinds]
        spans = self.plan(x[0])
        with np.errstate(invalid="ignore", divide="ignore"):
            z = self.inner(x[0])
        sized = Span(lambda _: spans._replace(coefficients=np.abs(spans.coefficients)))
        bottom = sized._sum(x[0], np.abs(z))
        count = np.where(spans.first >= 0, spans.length, 0)
        out: list[F4 | None] = []
        for parts in kinds:
            if parts[0] is None:
                out.append(None)
                continue
            top = sized._sum(x[0], np.abs(z) * parts[0])
            flat = (bottom == 0) & (count > 0)
            if flat.any():
                plain = Span(lambda _: spans._replace(coefficients=np.ones_like(spans.coefficients)))
                top = np.where(flat, plain._sum(x[0], np.asarray(parts[0], np.float64)), top)
            out.append(_ratio(top, np.where(flat, count, bottom), y))
        return out

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        t, n = at
        spans = self.plan(x[0])
        with np.errstate(invalid="ignore", divide="ignore"):
            z = self.inner(x[0])
        for k in range(int(spans.length[t, n])):
            row = int(spans.rows(k, np.asarray(t), np.asarray(n)))
            w, v = float(spans.coefficients[k, t, n]), float(z[row, n])
            yield Term(0, row, n, v, w, w * v)

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        return float(self.outer(np.asarray(np.sum([t.contribution for t in terms]))))


class Spans(NamedTuple):
    """first (T, N) input row or -1; length (T, N); coefficients (K, T, N); step (T, N) between rows, 1 if None."""

    first: I8
    length: I8
    coefficients: F8
    step: I8 | None = None

    def rows(self, k: int, t: I8, n: I8) -> I8:
        """Return the k-th input row of the outputs at rows t and columns n."""
        step = 1 if self.step is None else self.step[t, n]
        return self.first[t, n] + k * step
