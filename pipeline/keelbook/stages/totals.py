"""Totals from parts: industries, assets, worker groups; a total that was delivered is left alone."""

from collections.abc import Mapping, Sequence
from dataclasses import replace
from itertools import combinations

import numpy as np

from keelbook.blocks import B1, Block, BlockKey, SeriesIndex
from keelbook.lineage.derive import derive, given
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Sum
from keelbook.stages.base import outer_series, without

SUM_OF_PARTS = Formula(
    name="sum_of_parts",
    equation="total = sum of the parts",
    citation="SNA 2008: accounts are additive over industries and assets at one set of prices",
    roles=(Role("part"),),
    build=lambda s: Sum(s.groups),
    kind="group",
)

FORMULAS = (SUM_OF_PARTS,)

TOTAL = "_T"


def parts_of(series: SeriesIndex, dims: Sequence[str], parents: Mapping[str, str]) -> B1:
    """Return which series are parts of totals: neither a total of others that are there, nor a group of them.

    Args:
        dims: dimensions over which totals are made.
        parents: asset code -> the group it belongs to; a group is no part while one of its assets is there.
    """
    part = np.ones(len(series), bool)
    for dim in dims:
        is_total = series.is_code(dim, TOTAL)
        if is_total.any():
            with_detail = np.unique(series.take(~is_total).projected({dim: TOTAL}))
            part &= ~(is_total & np.isin(series.key, with_detail))
        if dim == "asset":
            part &= ~_is_group(series, parents)
    return part


def _is_group(series: SeriesIndex, parents: Mapping[str, str]) -> B1:
    group = np.zeros(len(series), bool)
    codes = series.table.codes["asset"]
    for position in np.unique(series.digit("asset")):
        parent = parents.get(codes[int(position)])
        own = series.digit("asset") == position
        while parent is not None and parent in codes:
            group |= np.isin(series.key, series.take(own).projected({"asset": parent}))
            parent = parents.get(parent)
    return group


def totals(block: Block, dims: Sequence[str], method: str | None = None) -> list[Block]:
    """Return every total over the named dimensions that the block does not hold already, one block each.

    Args:
        dims: dimensions to sum over, each alone and together.
        method: method name of the totals; that of the block if None.
    """
    key = block.key if method is None else BlockKey(block.key.measure, method, block.key.price_basis)
    out: list[Block] = []
    known = block.series
    for count in range(1, len(dims) + 1):
        for chosen in combinations(dims, count):
            project = dict.fromkeys(chosen, TOTAL)
            series = without(outer_series(block, project), known)
            if len(series):
                out.append(
                    derive(
                        SUM_OF_PARTS,
                        key,
                        series,
                        block.periods,
                        {"part": given(block)},
                        group=project,
                        part=False,
                    )
                )
                known = SeriesIndex(known.table, np.union1d(known.key, series.key))
    return out


def with_parts(block: Block, dims: Sequence[str], parents: Mapping[str, str]) -> Block:
    """Return the block with its `part` marks set for totals over `dims`."""
    return replace(block, part=parts_of(block.series, dims, parents))
