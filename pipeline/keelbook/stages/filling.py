"""Filling and linking: gaps inside a series by a declared method, and an index carried back over a base change."""

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from keelbook.blocks import F8, I8, NO_FIGURE, Block, BlockKey, Choice, Edges, Fills, status_of
from keelbook.lineage.derive import Given, derive, given
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.primitives import Each, Either, Span, Spans
from keelbook.stages.base import note

IMPUTED = 6
"""Position of I in rules/codes/obs_status.csv (a test holds the file to it)."""


def _neighbours(x: F8) -> tuple[I8, I8]:
    """Return the rows of the last figure at or before, and the first at or after, each cell; -1 for none."""
    rows = np.arange(len(x))[:, None]
    there = np.isfinite(x)
    before = np.maximum.accumulate(np.where(there, rows, -1), axis=0)
    last = len(x)
    after = np.minimum.accumulate(np.where(there, rows, last)[::-1], axis=0)[::-1]
    return before, np.where(after == last, -1, after)


def _bridges(longest: int) -> Callable[[F8], Spans]:
    """Return the plan that keeps every figure and bridges gaps of at most `longest` periods."""

    def plan(x: F8) -> Spans:
        before, after = _neighbours(x)
        rows = np.arange(len(x))[:, None]
        gap = after - before - 1
        inside = (before >= 0) & (after >= 0) & (gap <= longest)
        with np.errstate(invalid="ignore", divide="ignore"):
            part = np.where(after > before, (rows - before) / (after - before), 0.0)
        return Spans(
            np.where(inside, before, -1),
            np.where(after > before, 2, 1),
            np.stack([1 - part, part]),
            np.maximum(after - before, 1),
        )

    return plan


def _filled(inner: Callable[[F8], F8], outer: Callable[[F8], F8]) -> Callable[[Setting], Span]:
    return lambda s: Span(_bridges(int(s.single("harmonise.fill_longest"))), inner, outer)


def _same(x: F8) -> F8:
    return x


FILLED = {
    "linear": Formula(
        name="filled_linear",
        equation="a gap lies on the straight line between the figures before and after it",
        citation="common practice, no source",
        roles=(Role("delivered"),),
        build=_filled(_same, _same),
        kind="series",
        carries=True,
    ),
    "constant_growth": Formula(
        name="filled_constant_growth",
        equation="a gap grows at a constant rate between the figures before and after it",
        citation="common practice, no source",
        roles=(Role("delivered"),),
        build=_filled(np.log, np.exp),
        kind="series",
        carries=True,
    ),
}

LINKED = Formula(
    name="index_linked",
    equation="the index itself; before its first year the earlier index x (index / earlier index in that year)",
    citation="The Open University, chain-linking of price indices: the link factor is new over old in the overlap; "
    "growth rates do not change",
    roles=(
        Role("index"),
        Role("earlier_index"),
        Role("index_in_link_year"),
        Role("earlier_index_in_link_year"),
    ),
    build=lambda s: Either(
        (Each(_same), Each(lambda earlier, new_link, old_link: earlier * new_link / old_link)),
        takes=((0,), (1, 2, 3)),
        estimated=False,
    ),
)

FORMULAS = (*FILLED.values(), LINKED)


def fill(block: Block, method: Choice, longest: Choice) -> tuple[Block | None, list[dict[str, Any]]]:
    """Return the series of a block whose gaps can be filled, filled, and a finding for each of them.

    Filled figures have status I, are imputed in the data basis, and are recorded as edges to the two figures
    they rest on. A gap at either end of a series, or longer than declared, stays a gap.
    """
    before, after = _neighbours(block.value)
    gap = np.isnan(block.value) & (before >= 0) & (after >= 0)
    fillable = gap & (after - before - 1 <= int(longest.value))
    mine = np.asarray(fillable.any(axis=0))
    if method.value == "constant_growth":
        with np.errstate(invalid="ignore"):
            mine &= ~(block.value <= 0).any(axis=0)
    if not mine.any():
        return None, []
    source = block.take(mine)
    out = derive(
        FILLED[str(method.value)],
        BlockKey(block.key.measure, "filled", block.key.price_basis),
        source.series,
        source.periods,
        {"delivered": given(source)},
        sets=((method, longest),),
        chosen=source.chosen,
        part=source.part,
    )
    new = fillable[:, mine]
    status = status_of(source).copy()
    status[new] = IMPUTED
    status[np.isnan(out.value) & (status >= 0)] = NO_FIGURE
    imputed = np.zeros(out.value.shape, np.float32) if out.imputed is None else out.imputed.copy()
    imputed[new] = 1.0
    row, column = np.nonzero(new)
    start = block.periods.start
    fills = Fills(block.key, column, start + row, start + before[:, mine][new], start + after[:, mine][new])
    filled = replace(out, status=status, imputed=imputed, origin=replace(out.origin, fills=fills))
    findings = [_gap_filled(source, int(n), new[:, n]) for n in range(len(source.series))]
    return filled, findings


def _gap_filled(block: Block, n: int, new: Any) -> dict[str, Any]:
    years = [block.periods[int(t)] for t in np.flatnonzero(new)]
    return note(
        "gap_filled",
        "warn",
        f"figures were missing and are filled by the declared method, status I: {', '.join(map(str, years))}",
        block.series.table,
        int(block.series.key[n]),
        measure=block.key.measure,
        time_period=str(years[0]),
        found="no figure",
        expected="a figure",
        remedy="ask the supplier for the missing figures",
    )


def link(index: Block, earlier: Block) -> tuple[Block | None, list[dict[str, Any]]]:
    """Return the series of an index that an earlier index carries back, linked in their first common year."""
    columns = earlier.series.locate(index.series.key)
    old = np.where(columns >= 0, earlier.value[:, np.maximum(columns, 0)], np.nan)
    common = np.isfinite(index.value) & np.isfinite(old)
    mine = np.asarray(common.any(axis=0))
    findings = [
        note(
            "no_overlap",
            "warn",
            "the earlier index has no year in common with the index and cannot be linked to it",
            index.series.table,
            int(index.series.key[n]),
            measure=index.key.measure,
            expected="at least one year with both",
            remedy="deliver the overlap year on both bases",
        )
        for n in np.flatnonzero((columns >= 0) & ~mine)
    ]
    if not mine.any():
        return None, findings
    source = index.take(mine)
    year = index.periods.start + np.argmax(common[:, mine], axis=0)
    zeros = np.zeros(len(source.series), np.int32)

    def in_link_year(block: Block) -> Given:
        return Given((block,), edges=Edges((block.key,), zeros, source.series.key, year))

    linked = derive(
        LINKED,
        BlockKey(index.key.measure, "linked", index.key.price_basis),
        source.series,
        source.periods,
        {
            "index": given(source),
            "earlier_index": given(earlier),
            "index_in_link_year": in_link_year(source),
            "earlier_index_in_link_year": in_link_year(earlier),
        },
        chosen=source.chosen,
        part=source.part,
    )
    return linked, findings
