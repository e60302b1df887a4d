"""Screening of levels: a figure far from its own history, a series in another unit than its neighbours."""

from collections.abc import Iterator

import numpy as np
import pandas as pd

from keelbook import findings
from keelbook.contracts.screening_rules import Jump, Magnitude
from keelbook.stages.observed import Floats, Ints, Observed, Part, dense_numbers
from keelbook.stages.screening_report import ScreeningContext, figure, report

BLOCK = 4096
"""Series whose medians are taken at a time: a block stays in the cache."""

QUARTERS = 4
AMOUNTS = ("currency", "hours", "persons")


def check_jump(observed: Observed, rule: Jump, context: ScreeningContext) -> pd.DataFrame:
    """Find figures whose log growth over a year is far from the median of their series.

    deviation = |g - median(g)| > max(threshold * median(|g - median(g)|), least_deviation), where g is the log of
    a figure over that of a year before, both above zero. A jump up and straight back is one finding, at the
    first of the two.
    """
    rows: list[int] = []
    found: list[str] = []
    expected: list[str] = []
    for part in observed.parts:
        for row, before, usual, allowed in _jumps(observed, part, rule):
            value = float(observed.value[row])
            rows.append(row)
            found.append(
                f"{figure(value)} after {figure(before)} a year before: a factor of {value / before:.3g}"
            )
            low, high = np.exp(usual - allowed), np.exp(usual + allowed)
            expected.append(
                f"a factor from {low:.3g} to {high:.3g}; usual in this series is {np.exp(usual):.3g}"
            )
    return report(
        observed,
        rule,
        context,
        np.array(rows, dtype=np.int64),
        message="a jump against the history of the series",
        found=found,
        expected=expected,
    )


def _jumps(observed: Observed, part: Part, rule: Jump) -> Iterator[tuple[int, float, float, float]]:
    """Yield row, figure a year before, median growth, and allowed deviation from it, of each jump."""
    first = observed.first_rows[part.first_series : part.first_series + part.series_count]
    chosen = observed.among("measure", rule.measures, first)
    if not chosen.any():
        return
    lag = QUARTERS if part.frequency == "Q" else 1
    series, period = observed.series[part.rows] - part.first_series, observed.period[part.rows]
    low = int(period.min())
    width = int(period.max()) - low + 1
    order: Ints | None = None
    if not chosen.all() or np.any(series[1:] < series[:-1]):
        own = np.flatnonzero(chosen[series])
        order = own[np.argsort(series[own], kind="stable")]
        series = series[order]
    edges = np.arange(0, part.series_count + BLOCK, BLOCK)
    for start, begin, end in zip(edges[:-1].tolist(), *_bounds(series, edges), strict=True):
        rows: slice | Ints = slice(begin, end) if order is None else order[begin:end]
        value = observed.value[part.rows][rows]
        position = (series[begin:end] - start) * width + (period[rows] - low)
        logs: Floats = np.full((BLOCK, width), np.nan)
        with np.errstate(invalid="ignore", divide="ignore"):
            logs.ravel()[position] = np.where(value > 0, np.log(value), np.nan)
        at, time, usual, allowed = _far_off(logs, lag, rule)
        if not len(at):
            continue
        wanted = np.full(logs.size, -1, dtype=np.int64)
        wanted[at * width + time] = np.arange(len(at))
        hit = np.flatnonzero(wanted[position] >= 0)
        numbers = np.arange(len(observed))[part.rows][rows][hit]
        for row, one in zip(numbers.tolist(), wanted[position[hit]].tolist(), strict=True):
            before = float(np.exp(logs[at[one], time[one] - lag]))
            yield row, before, float(usual[one]), float(allowed[one])


def _bounds(series: Ints, edges: Ints) -> tuple[list[int], list[int]]:
    """Return where the rows of each block of ascending series begin and end."""
    at = np.searchsorted(series, edges).tolist()
    return at[:-1], at[1:]


def _far_off(logs: Floats, lag: int, rule: Jump) -> tuple[Ints, Ints, Floats, Floats]:
    """Return series, time, median growth and allowed deviation of each jump in a table of series x times."""
    growth = logs[:, lag:] - logs[:, :-lag]
    # No deviation from the median exceeds the range: most series need no median.
    spread = np.fmax.reduce(growth, axis=1, initial=-np.inf) - np.fmin.reduce(growth, axis=1, initial=np.inf)
    kept = np.flatnonzero(spread > rule.least_deviation)
    kept = kept[np.isfinite(growth[kept]).sum(axis=1) >= rule.minimum_years * lag]
    growth = growth[kept]
    usual = np.nanmedian(growth, axis=1) if len(kept) else np.zeros(0)
    deviation = growth - usual[:, None]
    spread = np.nanmedian(np.abs(deviation), axis=1) if len(kept) else np.zeros(0)
    allowed = np.maximum(rule.threshold * spread, rule.least_deviation)
    with np.errstate(invalid="ignore"):
        far = np.abs(deviation) > allowed[:, None]
        back = far[:, lag:] & far[:, :-lag] & (deviation[:, lag:] * deviation[:, :-lag] < 0)
    far[:, lag:] &= ~back
    at, time = np.nonzero(far)
    return kept[at], time + lag, usual[at], allowed[at]


def check_magnitude(observed: Observed, rule: Magnitude, context: ScreeningContext) -> pd.DataFrame:
    """Find series that lie about 10^power above or below the others of their measure, source and area.

    The level of a series is the mean size of its figures. Totals are compared with totals only.
    """
    first = observed.first_rows
    amounts = [name for name, measure in context.measures.items() if measure.unit in AMOUNTS]
    series = np.flatnonzero(observed.among("measure", amounts, first))
    if len(series) < rule.minimum_series:
        return findings.frame()
    size = np.abs(observed.value)
    size[np.isnan(size)] = 0
    total = np.bincount(observed.series, weights=size, minlength=len(first))[series]
    count = np.bincount(observed.series, weights=size > 0, minlength=len(first))[series]
    series, total, count = series[count > 0], total[count > 0], count[count > 0]
    level = np.log10(total / count)
    names = ("source", "measure", "price_basis", "frequency", "area")
    totals = [observed.among(dim, ["_T"], first[series]) for dim in ("industry", "asset", "worker_group")]
    group = dense_numbers(
        [*(observed.codes(name)[first[series]] for name in names), *(one.astype(np.int8) for one in totals)]
    )
    rows: list[int] = []
    found: list[str] = []
    expected: list[str] = []
    order = np.argsort(group, kind="stable")
    for own in np.split(order, np.flatnonzero(np.diff(group[order])) + 1):
        if len(own) < rule.minimum_series:
            continue
        usual = float(np.median(level[own]))
        distance = np.abs(level[own] - usual)
        off = (np.abs(distance - rule.power) <= rule.tolerance) & (
            distance > rule.spread * np.median(distance)
        )
        for one in own[off].tolist():
            row = int(first[series[one]])
            rows.append(row)
            found.append(f"figures of about {10 ** level[one]:.3g}")
            expected.append(f"about {10**usual:.3g}, as the other {len(own) - 1} series of this source")
    return report(
        observed,
        rule,
        context,
        np.array(rows, dtype=np.int64),
        message="a series in another order of size than the others",
        found=found,
        expected=expected,
    )
