"""`Path`: a whole series made from whole series, where no sum over earlier periods says it."""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from keelbook.blocks import F4, F8, I4
from keelbook.lineage.primitives import Parts, Term, _ratio
from keelbook.methods.arrays import Array

_STEP = 1e-30


@dataclass(frozen=True, eq=False)
class Path:
    """y = f(x1, x2, ..., which), column by column; weights by complex step through the same f.

    Arguments: (T, N) each; `which` (N,) says which parameters each column uses. f takes complex arrays, looks at
    nothing but the column itself, and decides by real parts alone. For rules that go on from their own result
    (what is left after other changes in volume) or that solve an equation along the way.
    """

    f: Callable[..., Array]
    which: I4

    def compute(self, *x: F8) -> F8:
        with np.errstate(invalid="ignore", divide="ignore"):
            y = np.asarray(self.f(*x, self.which), np.float64)
        return np.where(np.isfinite(y), y, np.nan)

    def _slopes(self, x: Sequence[F8], n: int) -> tuple[list[tuple[int, int]], F8]:
        """Return the cells (role, row) of one series that hold a figure, and dy/dx of each, (T, cells)."""
        cells = [(r, int(t)) for r, v in enumerate(x) for t in np.flatnonzero(np.isfinite(v[:, n]))]
        stepped = [np.repeat(v[:, n : n + 1].astype(np.complex128), len(cells), axis=1) for v in x]
        for column, (role, row) in enumerate(cells):
            stepped[role][row, column] += 1j * _STEP
        with np.errstate(invalid="ignore", divide="ignore"):
            y = self.f(*stepped, np.full(len(cells), self.which[n], np.int32))
        return cells, np.asarray(np.imag(y) / _STEP, np.float64)

    def mix(self, x: Sequence[F8], y: F8, kinds: Sequence[Parts]) -> list[F4 | None]:
        if all(p is None for parts in kinds for p in parts):
            return [None for _ in kinds]
        tops, bottom = [np.zeros_like(y) for _ in kinds], np.zeros_like(y)
        for n in np.flatnonzero(np.isfinite(y).any(axis=0)):
            cells, slopes = self._slopes(x, int(n))
            value = np.array([x[role][row, n] for role, row in cells])
            size = np.abs(np.nan_to_num(slopes) * value)
            bottom[:, n] = size.sum(axis=1)
            for top, parts in zip(tops, kinds, strict=True):
                given = [parts[role] for role, _ in cells]
                part = np.array(
                    [0.0 if p is None else p[row, n] for p, (_, row) in zip(given, cells, strict=True)]
                )
                top[:, n] = size @ np.nan_to_num(part)
        return [_ratio(np.where(bottom > 0, top, 0), np.where(bottom > 0, bottom, 1), y) for top in tops]

    def terms(self, x: Sequence[F8], at: tuple[int, int]) -> Iterator[Term]:
        """Yield every cell that has a slope, after one of the figure's own period (it says which figure it is)."""
        t, n = at
        cells, slopes = self._slopes(x, n)
        own = next((cell for cell in cells if cell[1] == t), None)
        for column, (role, row) in sorted(enumerate(cells), key=lambda c: c[1] != own):
            slope, value = float(slopes[t, column]), float(x[role][row, n])
            if slope != 0 or (role, row) == own:
                yield Term(role, row, n, value, slope, slope * value)

    def combine(self, x: Sequence[F8], terms: Sequence[Term]) -> float:
        t, n = terms[0].row, terms[0].column
        with np.errstate(invalid="ignore", divide="ignore"):
            return float(self.f(*(v[:, n : n + 1] for v in x), self.which[n : n + 1])[t, 0])
