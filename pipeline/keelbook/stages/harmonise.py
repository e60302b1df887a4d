"""Harmonise: from observations in delivered units and frequencies to annual figures in the measure's unit."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from keelbook.blocks import (
    F4,
    F8,
    I1,
    I4,
    I8,
    NO_FIGURE,
    Block,
    BlockKey,
    Choice,
    CodeTable,
    MethodSet,
    Origin,
    SeriesIndex,
    merge,
    status_of,
)
from keelbook.contracts.measures import Measure
from keelbook.lineage.derive import Given, derive, given, in_year
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.primitives import Each, Span, Spans
from keelbook.stages.base import CHOSEN, Book, Result, note
from keelbook.stages.filling import fill, link
from keelbook.stages.totals import Grouping, total_of, totals, with_parts

QUARTERS = 4

ADDITIVE = ("currency", "hours", "persons")
STOCKS = ("gross_stock", "productive_stock", "net_stock")


def _scaled(x: F8, delivered: F8, wanted: F8) -> F8:
    return np.asarray(x * 10.0 ** (delivered - wanted))


SCALED = Formula(
    name="scaled",
    equation="y = x * 10^(delivered unit multiplier - unit multiplier of the measure)",
    citation="SDMX UNIT_MULT",
    roles=(Role("observation"),),
    build=lambda s: Each(_scaled, (s.column("source.unit_mult"), s.column("measure.unit_mult"))),
    carries=True,
)


def _annual_plan(s: Setting) -> Span:
    rule = s.single("measure.annual")
    scale = 10.0 ** (s.column("source.unit_mult") - s.column("measure.unit_mult"))
    weight = scale / QUARTERS if rule == "mean" else scale
    count = 1 if rule == "end" else QUARTERS

    def plan(x: F8) -> Spans:
        years = len(x) // QUARTERS
        whole = np.isfinite(x).reshape(years, QUARTERS, -1).all(axis=1)
        start = QUARTERS * np.arange(years)[:, None] + (QUARTERS - count)
        shape = (count, *whole.shape)
        return Spans(np.where(whole, start, -1), np.full(whole.shape, count), np.broadcast_to(weight, shape))

    return Span(plan)


ANNUAL = Formula(
    name="annual",
    equation="year = sum, mean or last of its four quarters, in the unit of the measure; all four or none",
    citation="the measure's own definition: flows add up, indices and annual rates average, stocks are the last",
    roles=(Role("observation"),),
    build=_annual_plan,
    carries=True,
)

REBASED = Formula(
    name="rebased",
    equation="y_t = x_t / x_reference, so that the reference year is 1",
    citation="ABS, Concepts, Sources and Methods 2020-21, annex on chain volume indexes: rebasing divides by the "
    "reference-year value and leaves growth rates unchanged",
    roles=(Role("index"), Role("index_in_reference_year")),
    build=lambda s: Each(lambda x, reference: x / reference),
)

FORMULAS = (SCALED, ANNUAL, REBASED)


@dataclass(frozen=True)
class HarmoniseParams:
    measures: Mapping[str, Measure]
    measures_file: str
    measure_lines: Mapping[str, int]
    reference_year: int
    grouping: Grouping
    fill_method: Choice
    fill_measures: Choice
    fill_longest: Choice
    imputed: frozenset[int]
    assumed: frozenset[int]
    sources: Mapping[str, "SourcePlace"] = field(default_factory=dict)


@dataclass(frozen=True)
class SourcePlace:
    """Where a source is declared, and whether its sub-annual figures are at annual rates."""

    file: str
    line: int
    annual_rate: bool


@dataclass(frozen=True, eq=False)
class ObservedBlock:
    """The observations of one source, measure and price basis at their own frequency.

    rows, column: the observations themselves, and the series of the block that each belongs to.
    """

    source: str
    frequency: str
    unit_mult: int
    block: Block
    rows: pd.DataFrame
    column: I4

    def without_rows(self) -> "ObservedBlock":
        """Return the block alone, so that the observations need not stay in memory."""
        return replace(self, rows=self.rows.iloc[:0], column=self.column[:0])


def observed_blocks(
    frame: pd.DataFrame, table: CodeTable, years: range, params: HarmoniseParams
) -> list[ObservedBlock]:
    """Scatter the observations of every source into blocks of periods x series.

    Args:
        frame: observations as taken in (see stages/intake.py): category codes, no unknown ones left.
        years: the assembly's period axis; observations outside it are not used.

    Returns:
        One entry per source, measure, price basis, frequency and unit multiplier. Status is `NO_FIGURE` where
        there was no cell, a missing-type code where the cell held a missing mark.

    Raises:
        ValueError: two observations for one figure (screening stops a run before that).
    """
    names = ["source", "measure", "price_basis", "frequency"]
    code = frame["unit_mult"].to_numpy().astype(np.int64) + 128
    for name in names:
        code = code * len(frame[name].cat.categories) + frame[name].cat.codes.to_numpy()
    out = []
    for value in np.unique(code):
        rows = np.flatnonzero(code == value)
        part = frame if len(rows) == len(frame) else frame.iloc[rows]
        out.append(_scatter(part, table, years, params))
    return out


def _scatter(frame: pd.DataFrame, table: CodeTable, years: range, params: HarmoniseParams) -> ObservedBlock:
    first = frame.iloc[0]
    frequency = str(first["frequency"])
    per_year = QUARTERS if frequency == "Q" else 1
    periods = range(years.start * per_year, years.stop * per_year)
    keys = np.zeros(len(frame), np.int64)
    for dim, stride in table.strides.items():
        keys += frame[dim].cat.codes.to_numpy().astype(np.int64) * stride
    unique, column = _runs(keys) if _ascending(keys) else np.unique(keys, return_inverse=True)
    period = frame["period"].to_numpy().astype(np.int64)
    inside = (period >= periods.start) & (period < periods.stop)
    rows: slice | NDArray[np.bool_] = slice(None) if inside.all() else inside
    shape = (len(periods), len(unique))
    at = (period[rows] - periods.start) * shape[1] + column[rows]
    if len(at) and np.bincount(at, minlength=shape[0] * shape[1]).max() > 1:
        raise ValueError(f"{first['source']}: two observations for one figure")

    def spread(name: str, empty: float, dtype: type) -> NDArray[Any]:
        full: NDArray[Any] = np.full(shape, empty, dtype)
        full.ravel()[at] = frame[name].to_numpy()[rows]
        return full

    status = spread("obs_status", NO_FIGURE, np.int8)
    block = Block(
        key=BlockKey(str(first["measure"]), "observed", str(first["price_basis"])),
        series=SeriesIndex(table, unique),
        periods=periods,
        value=spread("value", np.nan, np.float64),
        origin=Origin((), np.zeros(0, np.int32), (), np.zeros(0, np.int32)),
        chosen=np.zeros(len(unique), bool),
        part=np.zeros(len(unique), bool),
        status=status,
        conf=spread("conf_status", 0, np.int8) if frame["conf_status"].to_numpy().any() else None,
        imputed=_leaf(status, params.imputed),
        assumed=_leaf(status, params.assumed),
    )
    return ObservedBlock(
        str(first["source"]), frequency, int(first["unit_mult"]), block, frame, column.astype(np.int32)
    )


def _ascending(keys: I8) -> bool:
    return bool(np.all(keys[1:] >= keys[:-1]))


def _runs(keys: I8) -> tuple[I8, I8]:
    new = np.r_[True, keys[1:] != keys[:-1]] if len(keys) else np.zeros(0, bool)
    return keys[new], np.cumsum(new) - 1


def _leaf(status: I1, positions: frozenset[int]) -> F4 | None:
    hit = np.isin(status, list(positions))
    return hit.astype(np.float32) if hit.any() else None


def harmonise(observed: Sequence[ObservedBlock], years: range, params: HarmoniseParams) -> Result:
    """Return the delivered figures, annual and in the units of their measures, and totals from parts."""
    findings: list[dict[str, Any]] = []
    by_key: dict[BlockKey, list[Block]] = {}
    joined, problems = _joined(observed)
    findings.extend(problems)
    for item in joined:
        block = _annual(item, years, params)
        by_key.setdefault(block.key, []).append(block)
        findings.extend(_incomplete_years(item, block))
    delivered = {key: _with_parts(merge(parts), params) for key, parts in by_key.items()}
    blocks: list[Block] = []
    for key, block in delivered.items():
        forms, problems = _forms(_set_aside(block, delivered), delivered, params)
        blocks.extend(forms)
        findings.extend(problems)
        chosen = Book(forms).get(BlockKey(key.measure, CHOSEN, key.price_basis))
        if chosen is None:
            continue
        if key.price_basis == "source_index":
            rebased, problems = _rebase(chosen, params)
            blocks.append(rebased)
            findings.extend(problems)
        elif params.measures[key.measure].unit in ADDITIVE and key.measure not in STOCKS:
            whole = chosen if len(forms) > 1 else forms[0]
            blocks.extend(totals(whole, summed(params.measures[key.measure]), "sum_of_parts"))
    return Result(blocks, findings)


def _joined(observed: Sequence[ObservedBlock]) -> tuple[list[ObservedBlock], list[dict[str, Any]]]:
    """Return the observations with every series in one block: an old and a new file are put together in time.

    That needs one frequency and one unit; otherwise the later source's series is left out with a stop finding.
    """
    out: list[ObservedBlock] = []
    findings: list[dict[str, Any]] = []
    for item in observed:
        for at, earlier in enumerate(out):
            if earlier.block.key != item.block.key:
                continue
            again = earlier.block.series.locate(item.block.series.key) >= 0
            if not again.any():
                continue
            if (earlier.frequency, earlier.unit_mult) == (item.frequency, item.unit_mult):
                out[at] = replace(earlier, block=_beside_in_time(earlier.block, item.block.take(again)))
            else:
                findings += [_two_forms(earlier, item, int(n)) for n in np.flatnonzero(again)]
            item = replace(item, block=item.block.take(~again))
        out.append(item)
    return [item for item in out if len(item.block.series)], findings


def _beside_in_time(block: Block, more: Block) -> Block:
    """Return a block with the figures of another one where it has none; no period is in both."""
    column = block.series.locate(more.series.key)
    row, n = np.nonzero(status_of(more) != NO_FIGURE)
    parts: dict[str, Any] = {}
    for name, empty in (
        ("value", np.nan),
        ("status", NO_FIGURE),
        ("conf", 0),
        ("imputed", 0),
        ("assumed", 0),
    ):
        old, new = getattr(block, name), getattr(more, name)
        if new is None:
            continue
        full = np.full(block.value.shape, empty, new.dtype) if old is None else old.copy()
        full[row, column[n]] = new[row, n]
        parts[name] = full
    return replace(block, **parts)


def _two_forms(earlier: ObservedBlock, item: ObservedBlock, n: int) -> dict[str, Any]:
    return note(
        "series_in_two_forms",
        "stop",
        f"sources '{earlier.source}' and '{item.source}' deliver one series in different forms",
        item.block.series.table,
        int(item.block.series.key[n]),
        measure=item.block.key.measure,
        found=f"frequency {earlier.frequency}, unit multiplier {earlier.unit_mult}, and frequency "
        f"{item.frequency}, unit multiplier {item.unit_mult}",
        expected="one frequency and one unit multiplier for a series",
        remedy="deliver the series once, or declare one of the two under another measure or dimension",
    )


def _forms(
    block: Block, delivered: Mapping[BlockKey, Block], params: HarmoniseParams
) -> tuple[list[Block], list[dict[str, Any]]]:
    """Return a delivered block, its linked and its filled form; of each series, the last one is chosen."""
    forms, findings = [block], []
    earlier = delivered.get(BlockKey(block.key.measure, "delivered", "earlier_index"))
    if earlier is not None and block.key.price_basis == "source_index":
        linked, problems = link(block, earlier)
        findings.extend(problems)
        if linked is not None:
            forms = [_not_chosen(block, linked), linked]
    if params.fill_method.value != "none" and block.key.measure in params.fill_measures.value:
        for at, form in enumerate(list(forms)):
            filled, problems = fill(form.take(form.chosen), params.fill_method, params.fill_longest)
            findings.extend(problems)
            if filled is not None:
                forms[at] = _not_chosen(form, filled)
                forms.append(filled)
    return forms, findings


def _not_chosen(block: Block, instead: Block) -> Block:
    """Return the block without its choice of the series that another form stands in for."""
    return replace(block, chosen=block.chosen & (instead.series.locate(block.series.key) < 0))


def _set_aside(block: Block, delivered: Mapping[BlockKey, Block]) -> Block:
    """Return a delivered stock or share with only those series chosen that are not computed.

    A stock that investment is delivered for is a benchmark, or stands beside the one that is computed; a labour
    share that incomes are delivered for is one method of the cascade.
    """
    if block.key.measure == "labour_share":
        return _share_set_aside(block, delivered)
    if block.key.measure not in STOCKS:
        return block
    chosen = block.chosen.copy()
    for basis in ("current", "constant"):
        investment = delivered.get(BlockKey("investment", "delivered", basis))
        if investment is not None:
            chosen &= investment.series.locate(block.series.key) < 0
    return replace(block, chosen=chosen)


def _share_set_aside(block: Block, delivered: Mapping[BlockKey, Block]) -> Block:
    value_added = delivered.get(BlockKey("value_added", "delivered", "current"))
    compensation = delivered.get(BlockKey("compensation_of_employees", "delivered", "current"))
    if value_added is None or compensation is None:
        return block
    paid = compensation.series.locate(block.series.projected(total_of("worker_group"))) >= 0
    return replace(block, chosen=~(paid & (value_added.series.locate(block.series.key) >= 0)))


def _with_parts(block: Block, params: HarmoniseParams) -> Block:
    return with_parts(block, summed(params.measures[block.key.measure]), params.grouping)


def summed(measure: Measure) -> list[str]:
    """Return the dimensions over which totals of a measure are made."""
    dims = {
        "industry": measure.dims.industry,
        "asset": measure.dims.asset,
        "worker_group": measure.dims.worker_group,
    }
    return ["sector", *(dim for dim, applies in dims.items() if applies != "none")]


def _annual(item: ObservedBlock, years: range, params: HarmoniseParams) -> Block:
    measure = params.measures[item.block.key.measure]
    place = params.sources[item.source]
    line = params.measure_lines.get(item.block.key.measure, 0)
    unit = f"declared for source '{item.source}'"
    choices: MethodSet = (
        Choice("source.unit_mult", item.unit_mult, place.file, place.line, unit),
        Choice("measure.unit_mult", measure.unit_mult, params.measures_file, line, "unit of the measure"),
    )
    formula = SCALED
    if item.frequency == "Q":
        formula = ANNUAL
        if place.annual_rate:
            how = Choice("measure.annual", "mean", place.file, place.line, "figures are at annual rates")
        else:
            how = Choice("measure.annual", measure.annual, params.measures_file, line, "unit of the measure")
        choices = (*choices, how)
    key = BlockKey(item.block.key.measure, "delivered", item.block.key.price_basis)
    return derive(
        formula,
        key,
        item.block.series,
        years,
        {"observation": Given((item.block,), observation=True)},
        sets=(choices,),
        chosen=key.price_basis != "earlier_index",
    )


def _incomplete_years(item: ObservedBlock, block: Block) -> Iterator[dict[str, Any]]:
    """Yield a finding per series with years of which only some quarters were delivered."""
    if item.frequency != "Q":
        return
    there = np.isfinite(item.block.value).reshape(len(block.periods), QUARTERS, -1)
    partial = np.asarray(there.any(axis=1) & ~there.all(axis=1))
    for n in np.flatnonzero(partial.any(axis=0)):
        years = [block.periods[t] for t in np.flatnonzero(partial[:, n])]
        yield note(
            "incomplete_year",
            "warn",
            f"{item.source}: a year is made from all four quarters; refused for {_listed(years)}",
            block.series.table,
            int(block.series.key[n]),
            measure=block.key.measure,
            time_period=str(years[0]),
            found=f"{int(there[years[0] - block.periods[0], :, n].sum())} quarters",
            expected="4 quarters",
            remedy="deliver the missing quarters, or end the period a year earlier",
        )


def _listed(years: Sequence[int], most: int = 6) -> str:
    text = ", ".join(str(y) for y in years[:most])
    return text if len(years) <= most else f"{text} and {len(years) - most} more"


def _rebase(block: Block, params: HarmoniseParams) -> tuple[Block, list[dict[str, Any]]]:
    row = params.reference_year - block.periods[0]
    out = derive(
        REBASED,
        BlockKey(block.key.measure, "rebased", "index"),
        block.series,
        block.periods,
        {"index": given(block), "index_in_reference_year": in_year(block, params.reference_year)},
        part=block.part,
    )
    lost = np.flatnonzero(np.isnan(block.value[row]) & block.held)
    findings = [
        note(
            "no_reference_year",
            "warn",
            f"the index has no figure in the reference year {params.reference_year} and cannot be rebased",
            block.series.table,
            int(block.series.key[n]),
            measure=block.key.measure,
            time_period=str(params.reference_year),
            found="no figure",
            expected="a figure above zero",
            remedy="deliver the reference year, or choose another reference_year in assembly.toml",
        )
        for n in lost
    ]
    return out, findings
