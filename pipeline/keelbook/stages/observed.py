"""The observations seen as codes: a number for each series, and periods as text."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

Ints = npt.NDArray[np.integer[Any]]
Bools = npt.NDArray[np.bool_]
Floats = npt.NDArray[np.float64]

SERIES_KEY = ("frequency", "area", "sector", "industry", "asset", "worker_group", "measure", "price_basis")
"""What names a series, whoever delivered it. Frequency leads: series of one frequency are adjacent."""

TABLE_LIMIT = 2**26
"""The largest table of flags or ranks built over possible keys; beyond it keys are sorted instead."""


@dataclass(frozen=True)
class Part:
    """The observations of one frequency: their row numbers and the range of their series numbers."""

    frequency: str
    rows: Ints | slice
    first_series: int
    series_count: int


class Observed:
    """The observations frame with its category codes and a dense number for each series, worked out once."""

    def __init__(self, frame: pd.DataFrame) -> None:
        self.frame = frame
        self.value: Floats = frame["value"].to_numpy()
        self.period: Ints = frame["period"].to_numpy()
        self._codes: dict[str, Ints] = {}

    def __len__(self) -> int:
        return len(self.frame)

    def codes(self, column: str) -> Ints:
        """Return the category codes of a column, one a row; -1 is an empty label."""
        if column not in self._codes:
            self._codes[column] = self.frame[column].cat.codes.to_numpy()
        return self._codes[column]

    def labels(self, column: str) -> list[str]:
        """Return the categories of a column, by code."""
        return [str(label) for label in self.frame[column].cat.categories]

    def text(self, column: str, rows: Ints) -> list[str]:
        """Return the labels of some rows; an empty label is ""."""
        names = np.array([*self.labels(column), ""], dtype=object)
        return [str(name) for name in names[self.codes(column)[rows]]]

    def among(self, column: str, names: Iterable[str], rows: Ints | None = None) -> Bools:
        """Return which rows (of all, or of those given) carry one of the labels."""
        wanted = set(names)
        table = np.array([label in wanted for label in self.labels(column)] + [False])
        codes = self.codes(column) if rows is None else self.codes(column)[rows]
        if not table.any():
            return np.zeros(len(codes), dtype=np.bool_)
        return np.asarray(table[codes])

    def period_text(self, rows: Ints) -> list[str]:
        """Return the periods of some rows as text: 2015 or 2015-Q1."""
        pairs = zip(self.period[rows].tolist(), self.text("frequency", rows), strict=True)
        return [period_name(period, frequency) for period, frequency in pairs]

    @cached_property
    def series(self) -> Ints:
        """The number of each row's series: 0, 1, ... without gaps, in the order of `SERIES_KEY`."""
        if not len(self):
            return np.zeros(0, dtype=np.int64)
        # Files are mostly ordered by series: number the runs of equal labels, then spread the numbers.
        changed = np.zeros(len(self), dtype=np.bool_)
        changed[0] = True
        for column in SERIES_KEY:
            codes = self.codes(column)
            np.logical_or(changed[1:], codes[1:] != codes[:-1], out=changed[1:])
        starts = np.flatnonzero(changed)
        numbers = dense_numbers([self.codes(column)[starts] for column in SERIES_KEY])
        if len(starts) == len(self):
            return numbers
        return np.repeat(numbers, np.diff(starts, append=len(self)))

    @cached_property
    def first_rows(self) -> Ints:
        """The first row of each series, by its number."""
        if not len(self):
            return np.zeros(0, dtype=np.int64)
        first = np.empty(int(self.series.max()) + 1, dtype=np.int64)
        first[self.series[::-1]] = np.arange(len(self) - 1, -1, -1)
        return first

    @cached_property
    def parts(self) -> list[Part]:
        """The observations by frequency."""
        codes = self.codes("frequency")
        if not len(codes):
            return []
        if codes.min() == codes.max():
            names = [*self.labels("frequency"), ""]
            return [Part(names[codes[0]], slice(None), 0, int(self.series.max()) + 1)]
        parts = []
        for code in np.unique(codes):
            rows = np.flatnonzero(codes == code)
            numbers = self.series[rows]
            first = int(numbers.min())
            name = [*self.labels("frequency"), ""][code]
            parts.append(Part(name, rows, first, int(numbers.max()) - first + 1))
        return parts


def dense_numbers(columns: Sequence[Ints]) -> Ints:
    """Number the distinct rows of some integer columns 0, 1, ... in their lexical order.

    Args:
        columns: equally long integer arrays, the most significant first; -1 is allowed.

    Returns:
        One number a row, int64; equal rows share a number and no number is left out.
    """
    key: Ints = np.zeros(len(columns[0]), dtype=np.int64)
    size = 1
    for codes in columns:
        if not len(codes) or codes.min() == codes.max():
            continue
        low = int(codes.min())
        span = int(codes.max()) - low + 1
        if size * span >= 2**62:
            key, size = _ranked(key, size)
        key = key * span + (codes.astype(np.int64) - low)
        size *= span
    return _ranked(key, size)[0]


def _ranked(key: Ints, size: int) -> tuple[Ints, int]:
    if size <= TABLE_LIMIT:
        seen = np.zeros(size, dtype=np.bool_)
        seen[key] = True
        rank: Ints = np.cumsum(seen, dtype=np.int64) - 1
        return rank[key], int(rank[-1]) + 1
    distinct, number = np.unique(key, return_inverse=True)
    return number, len(distinct)


def period_name(period: int, frequency: str) -> str:
    """Return a period as SDMX text: a year as it is, a quarter number (4 * year + quarter - 1) as 2015-Q1."""
    return f"{period // 4}-Q{period % 4 + 1}" if frequency == "Q" else str(period)


def period_bounds(years: tuple[int, int], frequency: str) -> tuple[int, int]:
    """Return the first and last period number of a span of years at a frequency."""
    return (4 * years[0], 4 * years[1] + 3) if frequency == "Q" else years


def spans(periods: Ints, frequency: str) -> str:
    """Return ascending periods as text, runs shortened: "1990 to 1993, 1997"."""
    runs = np.split(periods, np.flatnonzero(np.diff(periods) != 1) + 1)
    names = [(period_name(int(run[0]), frequency), period_name(int(run[-1]), frequency)) for run in runs]
    return ", ".join(first if first == last else f"{first} to {last}" for first, last in names)
