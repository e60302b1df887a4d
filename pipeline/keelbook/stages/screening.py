"""Screening: every declared rule against the observations; it reports, it never changes a figure.

A rule (rules/screening.toml) is of a closed kind, and `CHECKS` maps each kind to the one function that
applies it. The functions select with masks over category codes, so that clean data cost a few passes; text
is written only for what is reported. A value that is NaN has no figure: it is a gap for `coverage` and never
breaks any other rule.
"""

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from keelbook import errors, findings
from keelbook.contracts.screening_rules import (
    Coverage,
    DuplicateKey,
    Identity,
    NonpositiveIndex,
    OutsidePeriod,
    Range,
    ScreeningRule,
    Sign,
    StatusMark,
    UnknownCode,
)
from keelbook.stages.observed import (
    TABLE_LIMIT,
    Floats,
    Ints,
    Observed,
    Part,
    dense_numbers,
    period_bounds,
    period_name,
    spans,
)
from keelbook.stages.screening_levels import check_jump, check_magnitude
from keelbook.stages.screening_relations import check_completeness, check_parts_total, check_price_volume
from keelbook.stages.screening_report import (
    CODED,
    LISTED,
    NOT_A_PART,
    ScreeningContext,
    base_unit,
    figure,
    last_digits,
    partition_of,
    remark,
    report,
)

LISTED_CODES = 5


def _counted(count: int, what: str) -> str:
    return f"{count} {what}" if count == 1 else f"{count} {what}s"


def _cells(observed: Observed, context: ScreeningContext, rows: Ints) -> list[str]:
    frame = observed.frame
    sheets = context.sheet_of(frame["cell_id"].to_numpy()[rows].tolist())
    places = zip(
        frame["file_id"].to_numpy()[rows].tolist(),
        sheets,
        frame["row"].to_numpy()[rows].tolist(),
        frame["column"].to_numpy()[rows].tolist(),
        strict=True,
    )
    return [
        f"{context.files[file]}" + (f", sheet '{sheet}'" if sheet else "") + f", row {row}, column {column}"
        for file, sheet, row, column in places
    ]


def check_duplicate_key(observed: Observed, rule: DuplicateKey, context: ScreeningContext) -> pd.DataFrame:
    """Find keys (area to price basis, frequency, period) that occur more than once, from whichever source."""
    seconds: list[Ints] = []
    groups: list[Ints] = []
    for part in observed.parts:
        series = observed.series[part.rows] - part.first_series
        period = observed.period[part.rows]
        low = int(period.min())
        width = int(period.max()) - low + 1
        position = series * width + (period - low)
        if _all_differ(position, part.series_count * width):
            continue
        order = np.argsort(position, kind="stable")
        starts = np.flatnonzero(np.diff(position[order], prepend=-1))
        counts = np.diff(starts, append=len(order))
        starts, counts = starts[counts > 1], counts[counts > 1]
        rows = order if isinstance(part.rows, slice) else part.rows[order]
        seconds.append(rows[starts + 1])
        shown = zip(starts[:LISTED].tolist(), counts[:LISTED].tolist(), strict=True)
        groups.extend(rows[start : start + count] for start, count in shown)
    if not groups:
        return findings.frame()
    cells = np.concatenate(groups)
    places = zip(observed.value[cells].tolist(), _cells(observed, context, cells), strict=True)
    texts = [f"{figure(value)} ({place})" for value, place in places]
    ends = np.cumsum([len(group) for group in groups]).tolist()
    return report(
        observed,
        rule,
        context,
        np.concatenate(seconds),
        message="more than one figure for the same key",
        found=["; ".join(texts[end - len(group) : end]) for group, end in zip(groups, ends, strict=True)],
        expected="one figure for each key",
    )


def _all_differ(position: Ints, size: int) -> bool:
    if bool(np.all(position[1:] > position[:-1])):
        return True
    if size <= max(TABLE_LIMIT, 16 * len(position)):
        seen = np.zeros(size, dtype=np.bool_)
        seen[position] = True
        return int(np.count_nonzero(seen)) == len(position)
    ordered = np.sort(position)
    return bool(np.all(ordered[1:] != ordered[:-1]))


def check_unknown_code(observed: Observed, rule: UnknownCode, context: ScreeningContext) -> pd.DataFrame:
    """Find labels that no code list holds: one finding for each label and source, at its first cell."""
    reports = []
    for dimension in CODED:
        names = _valid_codes(dimension, context)
        codes = observed.codes(dimension)
        if not len(codes) or (
            codes.min() >= 0 and all(label in names for label in observed.labels(dimension))
        ):
            continue
        rows = np.flatnonzero(~observed.among(dimension, names))
        if not len(rows):
            continue
        number = dense_numbers([observed.codes("source")[rows], codes[rows]])
        _, first, counts = np.unique(number, return_index=True, return_counts=True)
        by_place = np.argsort(first, kind="stable")
        firsts, totals = rows[first[by_place]], counts[by_place].tolist()
        labels = observed.text(dimension, firsts)
        close = [_close_codes(label, dimension, names, context) for label in labels]
        reports.append(
            report(
                observed,
                rule,
                context,
                firsts,
                message=f"a label that is not in the code list of {dimension.replace('_', ' ')}",
                found=[
                    f"'{label}' in {_counted(count, 'cell')}, first here"
                    for label, count in zip(labels, totals, strict=True)
                ],
                expected=[_expected_code(dimension, hits, names) for hits in close],
                remedy=[
                    f'{rule.remedy}: [source.codes.{dimension}] "{label}" = "{hits[0] if hits else "CODE"}"'
                    for label, hits in zip(labels, close, strict=True)
                ],
            )
        )
    return findings.concat(reports)


def _valid_codes(dimension: str, context: ScreeningContext) -> dict[str, str]:
    if dimension == "measure":
        return {name: measure.title for name, measure in context.measures.items()}
    return {code: context.lists.name(dimension, code) for code in context.lists.codes(dimension)}


def _close_codes(
    label: str, dimension: str, names: Mapping[str, str], context: ScreeningContext
) -> list[str]:
    """Return the valid codes whose code, name or declared label is closest to `label`, best first."""
    code_of = {
        **{name: code for code, name in names.items()},
        **{given: code for given, code in context.labels.get(dimension, {}).items() if code in names},
        **{code: code for code in names},
    }
    hits = errors.nearest(label, code_of)
    return list(dict.fromkeys(code_of[hit] for hit in hits))


def _expected_code(dimension: str, close: Sequence[str], names: Mapping[str, str]) -> str:
    shown = close or list(names)[:LISTED_CODES]
    listed = ", ".join(f"{code} ({names[code]})" for code in shown)
    return f"a code of the list; nearest: {listed}" if close else f"a code of the list, such as {listed}"


def check_coverage(observed: Observed, rule: Coverage, context: ScreeningContext) -> pd.DataFrame:
    """Find series with periods that have no figure.

    Those between its first and last are looked at, or with `full_period` all those of the assembly's period.
    Only the assembly's period is looked at. A quarterly series must fill whole years. A missing mark is a
    gap unless its status is one of `accepted_missing`.
    """
    accepted = [context.lists.codes("obs_status").index(status) for status in rule.accepted_missing]
    series_seen: list[Ints] = []
    texts: list[str] = []
    expectations: list[str] = []
    first_gaps: list[str] = []
    for part in observed.parts:
        low, high = period_bounds(context.period, part.frequency)
        period = observed.period[part.rows]
        series = observed.series[part.rows]
        filled = ~np.isnan(observed.value[part.rows])
        if accepted and not filled.all():
            filled |= np.isin(observed.frame["obs_status"].to_numpy()[part.rows], accepted)
        inside = (period >= low) & (period <= high)
        if not inside.all():
            period, series, filled = period[inside], series[inside], filled[inside]
        if not len(period):
            continue
        width = high - low + 1
        position = (series - part.first_series).astype(np.int64) * width + (period - low)
        there = np.zeros((part.series_count, width), dtype=np.bool_)
        there.ravel()[position] = True
        covered = there if filled.all() else np.zeros_like(there)
        covered.ravel()[position[filled]] = True
        delivered = there.any(axis=1)
        begin, end = there.argmax(axis=1), width - 1 - there[:, ::-1].argmax(axis=1)
        if rule.full_period:
            begin, end = np.zeros_like(begin), np.full_like(end, width - 1)
        elif part.frequency == "Q":
            begin, end = begin // 4 * 4, end // 4 * 4 + 3
        short = np.flatnonzero(delivered & (covered.sum(axis=1) < end - begin + 1))
        if not len(short):
            continue
        wanted = np.arange(width)
        missing = [
            wanted[first : last + 1][~covered[number, first : last + 1]] + low
            for number, first, last in zip(
                short.tolist(), begin[short].tolist(), end[short].tolist(), strict=True
            )
        ]
        rows, kept = _gap_rows(observed, part, short + part.first_series, missing, rule)
        series_seen.append(rows)
        for index in kept:
            gaps = missing[index]
            number = int(short[index])
            first, last = int(begin[number]) + low, int(end[number]) + low
            unit = "quarters" if part.frequency == "Q" else "years"
            texts.append(
                f"no figure for {spans(gaps, part.frequency)} ({len(gaps)} of {last - first + 1} {unit})"
            )
            expectations.append(
                f"a figure for each of the {unit} {period_name(first, part.frequency)} to"
                f" {period_name(last, part.frequency)}"
            )
            first_gaps.append(period_name(int(gaps[0]), part.frequency))
    if not series_seen:
        return findings.frame()
    return report(
        observed,
        rule,
        context,
        np.concatenate(series_seen),
        message="a series has gaps",
        found=texts,
        expected=expectations,
        time_period=first_gaps,
    )


def _gap_rows(
    observed: Observed, part: Part, series: Ints, missing: Sequence[Ints], rule: Coverage
) -> tuple[Ints, list[int]]:
    """Return, for each series of the rule's measures, the cell to show, and which of the series those are.

    The cell is the one marked missing in the first gap, or else the last delivered before it, or else the
    first.
    """
    wanted = np.zeros(int(series.max()) + 2, dtype=np.bool_)
    wanted[series] = True
    rows = np.arange(len(observed)) if isinstance(part.rows, slice) else part.rows
    rows = rows[wanted[np.minimum(observed.series[rows], len(wanted) - 1)]]
    rows = rows[np.lexsort((observed.period[rows], observed.series[rows]))]
    starts = np.searchsorted(observed.series[rows], series)
    ends = np.searchsorted(observed.series[rows], series, side="right")
    of_measure = observed.among("measure", rule.measures, rows[starts]) if rule.measures else starts >= 0
    kept = np.flatnonzero(of_measure).tolist()
    places: list[int] = []
    for index in kept:
        own = rows[starts[index] : ends[index]]
        before = int(np.searchsorted(observed.period[own], missing[index][0], side="right")) - 1
        places.append(int(own[max(before, 0)]))
    return np.array(places, dtype=np.int64), kept


def check_sign(observed: Observed, rule: Sign, context: ScreeningContext) -> pd.DataFrame:
    """Find negative figures of measures that cannot be negative."""
    measures = rule.measures or [name for name, measure in context.measures.items() if measure.positive]
    rows = np.flatnonzero(observed.value < 0)
    rows = rows[observed.among("measure", set(measures) - set(rule.excluding), rows)]
    return report(
        observed,
        rule,
        context,
        rows,
        message="a negative figure",
        found=lambda shown: [figure(value) for value in observed.value[shown]],
        expected="0 or more",
    )


def check_nonpositive_index(
    observed: Observed, rule: NonpositiveIndex, context: ScreeningContext
) -> pd.DataFrame:
    """Find index numbers, which their price basis tells, that are zero or negative."""
    rows = np.flatnonzero(observed.value <= 0)
    return report(
        observed,
        rule,
        context,
        rows[observed.among("price_basis", rule.price_bases, rows)],
        message="an index or price that is not above zero",
        found=lambda shown: [figure(value) for value in observed.value[shown]],
        expected="more than 0",
    )


def check_range(observed: Observed, rule: Range, context: ScreeningContext) -> pd.DataFrame:
    """Find figures, or their ratio to the measure `per` at the same key, outside [minimum, maximum].

    A ratio is taken in single units: 8 million hours over 4 thousand persons are 2000. Where the measure
    `per` has no figure, or zero, there is nothing to compare.
    """
    low = -np.inf if rule.minimum is None else rule.minimum
    high = np.inf if rule.maximum is None else rule.maximum
    mask = observed.among("measure", rule.measures)
    if rule.price_basis is not None:
        mask &= observed.among("price_basis", [rule.price_basis])
    if rule.frequency is not None:
        mask &= observed.among("frequency", [rule.frequency])
    rows = np.flatnonzero(mask)
    if rule.per is None:
        tested = observed.value[rows]
    else:
        below = np.flatnonzero(observed.among("measure", [rule.per]))
        if not len(rows) or not len(below):
            return findings.frame()
        both = np.concatenate([rows, below])
        shared = ("frequency", "area", "sector", "industry", "asset", "worker_group")
        key = dense_numbers([*(observed.codes(name)[both] for name in shared), observed.period[both]])
        divisor = np.full(int(key.max()) + 1, np.nan)
        divisor[key[len(rows) :]] = base_unit(observed, below)
        divisor[divisor == 0] = np.nan
        tested = base_unit(observed, rows) / divisor[key[: len(rows)]]
    with np.errstate(invalid="ignore"):
        out = (tested < low) | (tested > high)
    bounds = [
        text
        for text, given in (
            (f"at least {figure(low)}", rule.minimum),
            (f"at most {figure(high)}", rule.maximum),
        )
        if given is not None
    ]
    what = "a figure" if rule.per is None else f"a figure per {rule.per.replace('_', ' ')}"
    return report(
        observed,
        rule,
        context,
        rows[out],
        message=f"{what} outside the plausible range",
        found=[figure(value) for value in tested[out][:LISTED]],
        expected=" and ".join(bounds),
    )


def check_status_mark(observed: Observed, rule: StatusMark, context: ScreeningContext) -> pd.DataFrame:
    """Find observations that carry one of the statuses: one finding for each series and status."""
    statuses = context.lists.codes("obs_status")
    given = observed.frame["obs_status"].to_numpy()
    positions = [statuses.index(status) for status in rule.statuses]
    table = np.zeros(len(statuses), dtype=np.bool_)
    table[positions] = True
    rows = np.flatnonzero(table[given])
    if not len(rows):
        return findings.frame()
    number = dense_numbers([observed.series[rows], given[rows]])
    order = np.lexsort((observed.period[rows], number))
    rows, number = rows[order], number[order]
    starts = np.flatnonzero(np.diff(number, prepend=-1))
    groups = np.split(rows, starts[1:])

    def described(shown: Ints) -> list[str]:
        frequencies = observed.text("frequency", shown)
        return [
            f"{statuses[int(given[row])]} ({context.lists.name('obs_status', statuses[int(given[row])])})"
            f" in {spans(observed.period[group], frequency)}"
            for row, group, frequency in zip(shown.tolist(), groups, frequencies, strict=False)
        ]

    return report(
        observed,
        rule,
        context,
        rows[starts],
        message="figures carry a status to look at",
        found=described,
        expected=f"a status other than {', '.join(rule.statuses)}",
    )


def check_outside_period(observed: Observed, rule: OutsidePeriod, context: ScreeningContext) -> pd.DataFrame:
    """Find observations outside the assembly's period: one finding for each source, measure and frequency."""
    outside = []
    for part in observed.parts:
        low, high = period_bounds(context.period, part.frequency)
        period = observed.period[part.rows]
        hit = np.flatnonzero((period < low) | (period > high))
        outside.append(hit if isinstance(part.rows, slice) else part.rows[hit])
    rows = np.sort(np.concatenate(outside)) if outside else np.zeros(0, dtype=np.int64)
    if not len(rows):
        return findings.frame()
    number = dense_numbers([observed.codes(name)[rows] for name in ("source", "measure", "frequency")])
    _, first, counts = np.unique(number, return_index=True, return_counts=True)
    frequencies = observed.text("frequency", rows[first])
    periods = [np.unique(observed.period[rows[number == index]]) for index in range(len(first))]
    return report(
        observed,
        rule,
        context,
        rows[first],
        message="figures outside the assembly's period",
        found=[
            f"{_counted(count, 'figure')} for {spans(inside, frequency)}"
            for count, inside, frequency in zip(counts.tolist(), periods, frequencies, strict=True)
        ],
        expected=f"{context.period[0]} to {context.period[1]}",
    )


def check_identity(observed: Observed, rule: Identity, context: ScreeningContext) -> pd.DataFrame:
    """Find totals that differ from the sum of their terms, by area, sector, industry and period.

    |total - sum of terms| <= rounding_units * (sum of the last printed digits) + relative_tolerance *
    |total|, all in single units. A term is its figure for the total of assets and worker groups; where only
    parts of one partition are delivered, their sum. Where a term has no figure the identity cannot be
    tested: a note says how often.
    """
    members = [rule.total, *rule.terms]
    rows = np.flatnonzero(observed.among("measure", members))
    rows = rows[observed.among("price_basis", [rule.price_basis], rows)]
    of = {name: observed.among("measure", [name], rows) for name in members}
    absent = [name for name in members if not of[name].any()]
    if len(absent) == len(members):
        return findings.frame()
    if absent:
        return remark(
            rule,
            message="the identity was not applied",
            found=f"no series at price basis '{rule.price_basis}' of: {', '.join(absent)}",
            severity="note",
        )
    shared = ("frequency", "area", "sector", "industry")
    key = dense_numbers([*(observed.codes(name)[rows] for name in shared), observed.period[rows]])
    count = int(key.max()) + 1
    values = base_unit(observed, rows)
    digits = last_digits(observed, rows)
    summed: dict[str, Floats] = {}
    rounding = np.zeros(count)
    for name in members:
        own = of[name]
        summed[name] = _group_figures(observed, context, rows[own], key[own], values[own], count)
        rounding += _group_figures(observed, context, rows[own], key[own], digits[own], count)
    total = summed[rule.total]
    terms = np.vstack([summed[name] for name in rule.terms])
    allowed = rule.rounding_units * rounding + rule.relative_tolerance * np.abs(total)
    with np.errstate(invalid="ignore"):
        broken = np.flatnonzero(np.abs(total - terms.sum(axis=0)) > allowed)
    place = np.full(count, -1)
    of_total = np.flatnonzero(of[rule.total])[::-1]
    place[key[of_total]] = rows[of_total]
    scale = 10.0 ** -observed.frame["unit_mult"].to_numpy()[place[broken]].astype(np.float64)

    def listed(shown: Ints) -> list[str]:
        texts = []
        for group, factor in zip(broken[: len(shown)].tolist(), scale.tolist(), strict=False):
            parts = [f"{name} {figure(summed[name][group] * factor)}" for name in rule.terms]
            difference = (total[group] - terms[:, group].sum()) * factor
            terms_text = f"terms: {', '.join(parts)}"
            texts.append(f"{figure(total[group] * factor)}; {terms_text}; difference {figure(difference)}")
        return texts

    stop = report(
        observed,
        rule,
        context,
        place[broken],
        message=f"{rule.total} is not the sum of its terms",
        found=listed,
        expected=[
            f"{figure(terms[:, group].sum() * factor)} within {figure(allowed[group] * factor)}"
            for group, factor in zip(broken[:LISTED].tolist(), scale.tolist(), strict=False)
        ],
    )
    return findings.concat([stop, _untested(observed, rule, context, total, terms, place)])


def _untested(
    observed: Observed, rule: Identity, context: ScreeningContext, total: Floats, terms: Floats, place: Ints
) -> pd.DataFrame:
    """Return one note for each set of terms that are missing where there is a total."""
    lacking = np.isnan(terms)
    groups = np.flatnonzero(lacking.any(axis=0) & ~np.isnan(total))
    if not len(groups):
        return findings.frame()
    sets, first, counts = np.unique(lacking[:, groups], axis=1, return_index=True, return_counts=True)
    texts = [
        f"{_counted(count, 'figure')} of {rule.total} without a figure of "
        + ", ".join(name for name, out in zip(rule.terms, missing, strict=True) if out)
        + ", first here"
        for missing, count in zip(sets.T, counts.tolist(), strict=True)
    ]
    return report(
        observed,
        rule,
        context,
        place[groups[first]],
        message="the identity could not be tested",
        found=texts,
        expected="a figure of every term",
        severity="note",
    )


def _group_figures(
    observed: Observed, context: ScreeningContext, rows: Ints, key: Ints, values: Floats, count: int
) -> Floats:
    """Return a measure's figure in each group: its total, or the sum of one partition's parts, or NaN."""
    whole = observed.among("asset", NOT_A_PART, rows) & observed.among("worker_group", NOT_A_PART, rows)
    totals = np.bincount(key[whole], minlength=count)
    out: Floats = np.bincount(key[whole], weights=values[whole], minlength=count).astype(np.float64)
    out[totals != 1] = np.nan
    parts = ~whole & observed.among("asset", NOT_A_PART, rows) & (totals[key] == 0)
    if not parts.any():
        return out
    groups = observed.text("worker_group", rows[parts])
    partitions = {code: partition_of(code, context) for code in set(groups)}
    names, numbers = np.unique([partitions[code] for code in groups], return_inverse=True)
    delivered = np.zeros((len(names), count), dtype=np.bool_)
    delivered[numbers, key[parts]] = True
    sums = np.bincount(key[parts], weights=values[parts], minlength=count)
    one = delivered.sum(axis=0) == 1
    out[one] = sums[one]
    return out


CHECKS: Mapping[str, Callable[[Observed, Any, ScreeningContext], pd.DataFrame]] = {
    "duplicate_key": check_duplicate_key,
    "unknown_code": check_unknown_code,
    "coverage": check_coverage,
    "sign": check_sign,
    "nonpositive_index": check_nonpositive_index,
    "identity": check_identity,
    "range": check_range,
    "status_mark": check_status_mark,
    "outside_period": check_outside_period,
    "jump": check_jump,
    "parts_total": check_parts_total,
    "price_volume": check_price_volume,
    "magnitude": check_magnitude,
    "completeness": check_completeness,
}


def screen(
    observations: pd.DataFrame, rules: Sequence[ScreeningRule], context: ScreeningContext
) -> pd.DataFrame:
    """Apply every rule to the observations and return the findings, stops first.

    Args:
        observations: the frame of intake: category columns source, area, sector, industry, asset,
            worker_group, measure, price_basis, frequency; period (year, or 4 * year + quarter - 1), value
            (NaN: declared missing), obs_status (position in its code list), unit_mult, cell_id, file_id,
            row, column.
        rules: what to apply, from `load_screening_rules`.
        context: the assembly's period, code lists, measures and the names of files and sheets.

    Returns:
        A findings frame; one finding for each rule and record, at its cell.
    """
    observed = Observed(observations)
    return findings.concat([CHECKS[rule.kind](observed, rule, context) for rule in rules])
