"""Totals from parts: industries, assets, worker groups; a total that was delivered is left alone."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
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

TOTALS = {"sector": "S1", "industry": TOTAL, "asset": TOTAL, "worker_group": TOTAL}
"""Dimension -> the code that stands for all of it."""


def total_of(*dims: str) -> dict[str, str]:
    """Return the projection that sums over the named dimensions."""
    return {dim: TOTALS[dim] for dim in dims}


@dataclass(frozen=True)
class Grouping:
    """What codes belong to: an asset to a group of assets, a worker group to one partition of all workers.

    partitions: names of partitions of workers, the one that totals are made from first.
    """

    asset_parents: Mapping[str, str]
    partition_of: Mapping[str, str]
    partitions: tuple[str, ...]


def parts_of(series: SeriesIndex, dims: Sequence[str], grouping: Grouping) -> B1:
    """Return which series are parts of totals: neither a total of others that are there, nor a group of them.

    Workers are split several ways. Where the total was delivered it is the part, and its groups are detail only;
    else the groups of the first partition that is there are.

    Args:
        dims: dimensions over which totals are made.
    """
    part = np.ones(len(series), bool)
    for dim in dims:
        is_total = series.is_code(dim, TOTALS[dim])
        if dim == "worker_group":
            part &= is_total | _in_first_partition(series, is_total, grouping)
        elif is_total.any():
            with_detail = np.unique(series.take(~is_total).projected(total_of(dim)))
            part &= ~(is_total & np.isin(series.key, with_detail))
        if dim == "asset":
            part &= ~_is_group(series, grouping.asset_parents)
    return part


def _in_first_partition(series: SeriesIndex, is_total: B1, grouping: Grouping) -> B1:
    """Return which series are worker groups without a delivered total, of the first partition that is there."""
    key = series.projected(total_of("worker_group"))
    free = ~is_total & ~np.isin(key, series.key[is_total])
    codes = series.table.codes["worker_group"]
    rank = np.array([_rank(grouping, code) for code in codes])[series.digit("worker_group")]
    unique, at = np.unique(key, return_inverse=True)
    lowest = np.full(len(unique), len(grouping.partitions) + 1)
    np.minimum.at(lowest, at[free], rank[free])
    return np.asarray(free & (rank == lowest[at]))


def _rank(grouping: Grouping, code: str) -> int:
    partition = grouping.partition_of.get(code)
    return (
        grouping.partitions.index(partition) if partition in grouping.partitions else len(grouping.partitions)
    )


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
            project = total_of(*chosen)
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


def with_parts(block: Block, dims: Sequence[str], grouping: Grouping) -> Block:
    """Return the block with its `part` marks set for totals over `dims`."""
    return replace(block, part=parts_of(block.series, dims, grouping))
