"""Screening of relations: parts and total, price and volume, and whether an industry has all it needs."""

from collections.abc import Sequence

import numpy as np
import pandas as pd

from keelbook import findings
from keelbook.contracts.screening_rules import Completeness, PartsTotal, PriceVolume
from keelbook.stages.observed import SERIES_KEY, Bools, Floats, Ints, Observed, dense_numbers, period_bounds
from keelbook.stages.screening_report import (
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

AMOUNTS = ("currency", "hours", "persons")
LISTED_INDUSTRIES = 8


def check_parts_total(observed: Observed, rule: PartsTotal, context: ScreeningContext) -> pd.DataFrame:
    """Find totals over a dimension that differ from the sum of the parts delivered beside them.

    |total - sum of parts| <= rounding_units * (sum of the last printed digits) + relative_tolerance * |total|. A
    period in which a part has no figure is not tested: `coverage` reports it.
    """
    first = observed.first_rows
    amounts = {name for name, measure in context.measures.items() if measure.unit in AMOUNTS}
    tested = observed.among("measure", amounts - set(rule.excluding), first)
    tested &= observed.among("price_basis", rule.price_bases, first)
    total = tested & observed.among(rule.dimension, ["_T"], first)
    if not total.any():
        return findings.frame()
    group = dense_numbers([observed.codes(name)[first] for name in SERIES_KEY if name != rule.dimension])
    part = tested & ~observed.among(rule.dimension, NOT_A_PART, first) & np.isin(group, group[total])
    part &= ~_with_detail(observed, rule.dimension, np.flatnonzero(part), group, context)
    codes = observed.codes(rule.dimension)[first]
    reports = []
    for labels in _partitions(observed, rule.dimension, codes[part], context):
        own = part & np.isin(codes, labels)
        count = np.bincount(group[own], minlength=int(group.max()) + 1)
        own &= count[group] > 1
        if own.any():
            whole = total & np.isin(group, group[own])
            reports.append(_compare(observed, rule, context, own, whole, group, count))
    return findings.concat(reports)


def _with_detail(
    observed: Observed, dimension: str, series: Ints, group: Ints, context: ScreeningContext
) -> Bools:
    """Return which series stand for a code of which their own group holds a detail."""
    first = observed.first_rows
    labels = observed.labels(dimension)
    codes = observed.codes(dimension)[first]
    position = {label: at for at, label in enumerate(labels)}
    out = np.zeros(len(first), dtype=np.bool_)
    for code in np.unique(codes[series]).tolist():
        label = labels[code]
        parent = context.lists.parent(dimension, label) if context.lists.has(dimension, label) else None
        while parent is not None and parent not in NOT_A_PART:
            above = series[codes[series] == position.get(parent, -2)]
            out[above] |= np.isin(group[above], group[series[codes[series] == code]])
            parent = context.lists.parent(dimension, parent)
    return out


def _partitions(
    observed: Observed, dimension: str, codes: Ints, context: ScreeningContext
) -> list[list[int]]:
    """Return the codes that add up to one total: those of one partition of workers, or all."""
    present = np.unique(codes).tolist()
    if dimension != "worker_group":
        return [present]
    labels = [*observed.labels(dimension), ""]
    by_name: dict[str, list[int]] = {}
    for code in present:
        by_name.setdefault(partition_of(labels[code], context), []).append(code)
    return list(by_name.values())


def _compare(
    observed: Observed,
    rule: PartsTotal,
    context: ScreeningContext,
    part: Bools,
    total: Bools,
    group: Ints,
    parts_of: Ints,
) -> pd.DataFrame:
    below = np.flatnonzero(part[observed.series])
    above = np.flatnonzero(total[observed.series])
    rows = np.concatenate([below, above])
    key = dense_numbers([group[observed.series[rows]], observed.period[rows]])
    size = int(key.max()) + 1
    parts, totals = key[: len(below)], key[len(below) :]
    amount, digit = base_unit(observed, rows), last_digits(observed, rows)
    added = np.bincount(parts, weights=amount[: len(below)], minlength=size)
    given, place = np.full(size, np.nan), np.full(size, -1)
    given[totals], place[totals] = amount[len(below) :], above
    rounding = np.bincount(key, weights=digit, minlength=size)
    complete = np.zeros(size, dtype=np.bool_)
    complete[totals] = np.bincount(parts, minlength=size)[totals] == parts_of[group[observed.series[above]]]
    allowed = rule.rounding_units * rounding + rule.relative_tolerance * np.abs(given)
    with np.errstate(invalid="ignore"):
        broken = np.flatnonzero(complete & (np.abs(given - added) > allowed))
    scale = 10.0 ** -observed.frame["unit_mult"].to_numpy()[place[broken]].astype(np.float64)
    shown = list(zip(broken[:LISTED].tolist(), scale.tolist(), strict=False))
    what = rule.dimension.replace("_", " ")
    return report(
        observed,
        rule,
        context,
        place[broken],
        message=f"a total is not the sum of its parts by {what}",
        found=[
            f"{figure(given[at] * by)}; its parts add up to {figure(added[at] * by)}; difference "
            f"{figure((given[at] - added[at]) * by)}"
            for at, by in shown
        ],
        expected=[f"{figure(added[at] * by)} within {figure(allowed[at] * by)}" for at, by in shown],
    )


def check_price_volume(observed: Observed, rule: PriceVolume, context: ScreeningContext) -> pd.DataFrame:
    """Find values that differ from volume x price, the price on the reference year.

    |value - volume * p| <= rounding_units * (d(value) + d(volume) * p + |volume| * (1 + p) * d(price) / price in
    the reference year) + relative_tolerance * |value|, where p is the price over its mean in the reference year
    and d the last printed digit. Series without a price in the reference year are counted in a note.
    """
    first = observed.first_rows
    of_measure = observed.among("measure", [rule.measure], first)
    sides = [of_measure & observed.among("price_basis", [basis], first) for basis in ("current", "constant")]
    priced = observed.among("measure", [rule.price], first)
    names = ("frequency", "area", "sector", "industry", "asset", "worker_group")
    if not (sides[0].any() and sides[1].any() and priced.any()):
        return findings.frame()
    group = dense_numbers([observed.codes(name)[first] for name in names])
    price = np.zeros(len(first), dtype=np.bool_)
    for basis in rule.price_bases:
        more = priced & observed.among("price_basis", [basis], first)
        price |= more & ~np.isin(group, group[price])
    common = np.isin(group, group[sides[0]]) & np.isin(group, group[sides[1]]) & np.isin(group, group[price])
    if not common.any():
        return findings.frame()
    chosen = [side & common for side in (*sides, price)]
    rows = [np.flatnonzero(side[observed.series]) for side in chosen]
    joined = np.concatenate(rows)
    group_of = group[observed.series[joined]]
    key = dense_numbers([group_of, observed.period[joined]])
    figures, digits, place = _aligned(observed, rows, key)
    group_at = np.zeros(int(key.max()) + 1, dtype=np.int64)
    group_at[key] = group_of
    base = _reference_prices(observed, rows[2], group, context)[group_at]
    value, volume, price_now = figures
    relative = price_now / base
    worked = volume * relative
    allowed = rule.relative_tolerance * np.abs(value) + rule.rounding_units * (
        digits[0] + digits[1] * relative + np.abs(volume) * (1 + relative) * digits[2] / base
    )
    with np.errstate(invalid="ignore"):
        broken = np.flatnonzero(np.abs(value - worked) > allowed)
    scale = 10.0 ** -observed.frame["unit_mult"].to_numpy()[place[broken]].astype(np.float64)
    shown = list(zip(broken[:LISTED].tolist(), scale.tolist(), strict=False))
    untested = np.unique(group_at[np.isnan(base)])
    return findings.concat(
        [
            report(
                observed,
                rule,
                context,
                place[broken],
                message=f"{rule.measure} is not its volume times its price",
                found=[
                    f"{figure(value[at] * by)}; volume {figure(volume[at] * by)} x price {figure(relative[at])} = "
                    f"{figure(worked[at] * by)}"
                    for at, by in shown
                ],
                expected=[f"{figure(worked[at] * by)} within {figure(allowed[at] * by)}" for at, by in shown],
            ),
            remark(
                rule,
                message="price times volume could not be tested",
                found=f"{len(untested)} series without a price in {context.reference_year}",
                severity="note",
            )
            if len(untested)
            else findings.frame(),
        ]
    )


def _aligned(observed: Observed, rows: Sequence[Ints], key: Ints) -> tuple[list[Floats], list[Floats], Ints]:
    """Return value, volume and price by key, the unit of their last digits, and the row of the value."""
    size = int(key.max()) + 1
    figures: list[Floats] = []
    digits: list[Floats] = []
    start = 0
    for own in rows:
        at = key[start : start + len(own)]
        start += len(own)
        for many, read in ((figures, base_unit), (digits, last_digits)):
            column = np.full(size, np.nan)
            column[at] = read(observed, own)
            many.append(column)
    place = np.full(size, -1)
    place[key[: len(rows[0])]] = rows[0]
    return figures, digits, place


def _reference_prices(observed: Observed, rows: Ints, group: Ints, context: ScreeningContext) -> Floats:
    """Return by group the mean price of the whole reference year; NaN where a figure of it is missing."""
    size = int(group.max()) + 1
    total, count, wanted = np.zeros(size), np.zeros(size), np.ones(size)
    for part in observed.parts:
        low, high = period_bounds((context.reference_year, context.reference_year), part.frequency)
        series = observed.series[rows]
        mine = (series >= part.first_series) & (series < part.first_series + part.series_count)
        wanted[group[series[mine]]] = high - low + 1
        now = mine & (observed.period[rows] >= low) & (observed.period[rows] <= high)
        total += np.bincount(group[series[now]], weights=base_unit(observed, rows[now]), minlength=size)
        count += np.bincount(group[series[now]], minlength=size)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where((count == wanted) & (total > 0), total / count, np.nan)


def check_completeness(observed: Observed, rule: Completeness, context: ScreeningContext) -> pd.DataFrame:
    """Find areas in which industries lack a measure that others have: one finding for each area.

    Industries are those for which any of the measures, or one that serves instead, is delivered; the total where
    there is no other.
    """
    first = observed.first_rows
    serving = {name: (name, *rule.instead.get(name, ())) for name in rule.measures}
    asked = first[observed.among("measure", {one for names in serving.values() for one in names}, first)]
    records = []
    for area in dict.fromkeys(observed.text("area", asked)):
        rows = asked[observed.among("area", [area], asked)]
        detailed = rows[~observed.among("industry", NOT_A_PART, rows)]
        rows = detailed if len(detailed) else rows
        industries = sorted(set(observed.text("industry", rows)))
        lacking = []
        for name, names in serving.items():
            have = set(observed.text("industry", rows[observed.among("measure", names, rows)]))
            missing = [industry for industry in industries if industry not in have]
            if missing:
                lacking.append(f"no {name} for {_listed(missing, len(industries))}")
        if lacking:
            records.append(
                {
                    "rule": rule.id,
                    "severity": rule.severity,
                    "level": rule.level,
                    "message": f"not everything is delivered for every industry: {rule.reason}",
                    "area": area,
                    "found": "; ".join(lacking),
                    "expected": "for each industry "
                    + ", ".join(" or ".join(names) for names in serving.values()),
                    "remedy": rule.remedy,
                }
            )
    return findings.frame(records)


def _listed(industries: Sequence[str], of: int) -> str:
    if len(industries) == of:
        return "any industry"
    more = f" and {len(industries) - LISTED_INDUSTRIES} more" if len(industries) > LISTED_INDUSTRIES else ""
    return ", ".join(industries[:LISTED_INDUSTRIES]) + more
