"""Blocks: one measure x method x price basis, as a year-major array of periods x series.

Series keys are single integers (mixed radix over the code tables), so that projecting a dimension is
arithmetic and finding a series is a binary search; text appears only at the edges.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

F8 = NDArray[np.float64]
F4 = NDArray[np.float32]
I8 = NDArray[np.int64]
I4 = NDArray[np.int32]
I1 = NDArray[np.int8]
B1 = NDArray[np.bool_]

DIMS = ("area", "sector", "industry", "asset", "worker_group")


class BlockKey(NamedTuple):
    """What a block holds; `_Z` where a price basis does not apply."""

    measure: str
    method: str
    price_basis: str


@dataclass(frozen=True, eq=False)
class CodeTable:
    """The codes of each dimension, in list order; position in the tuple is the code's integer."""

    codes: Mapping[str, tuple[str, ...]]

    @cached_property
    def strides(self) -> dict[str, int]:
        out, stride = {}, 1
        for dim in reversed(DIMS):
            out[dim] = stride
            stride *= len(self.codes[dim])
        return out

    @cached_property
    def _positions(self) -> dict[str, dict[str, int]]:
        return {dim: {code: i for i, code in enumerate(self.codes[dim])} for dim in DIMS}

    def position(self, dim: str, code: str) -> int:
        return self._positions[dim][code]

    def key(self, codes: Mapping[str, str]) -> int:
        """Return the integer key of one series given by its five codes."""
        return sum(self.position(dim, codes[dim]) * self.strides[dim] for dim in DIMS)

    def labels(self, key: int) -> dict[str, str]:
        """Return the five codes of one series key."""
        return {dim: self.codes[dim][key // self.strides[dim] % len(self.codes[dim])] for dim in DIMS}


@dataclass(frozen=True, eq=False)
class SeriesIndex:
    """Sorted unique series keys over one code table."""

    table: CodeTable
    key: I8

    def __len__(self) -> int:
        return len(self.key)

    def digit(self, dim: str) -> I8:
        """Return the code position of every series in one dimension, shape (N,)."""
        return self.key // self.table.strides[dim] % len(self.table.codes[dim])

    def is_code(self, dim: str, code: str) -> B1:
        return np.asarray(self.digit(dim) == self.table.position(dim, code), bool)

    def projected(self, project: Mapping[str, str]) -> I8:
        """Return the keys with the named dimensions set to the given codes; not sorted, not unique."""
        key = self.key
        for dim, code in project.items():
            shift = self.table.position(dim, code) - self.digit(dim)
            key = key + shift * self.table.strides[dim]
        return key

    def locate(self, keys: I8) -> I8:
        """Return the position of each key in this index, -1 where it is not there."""
        if not len(self.key):
            return np.full(len(keys), -1, np.int64)
        at = np.minimum(np.searchsorted(self.key, keys), len(self.key) - 1)
        return np.where(self.key[at] == keys, at, -1)

    def take(self, which: B1 | I8) -> "SeriesIndex":
        return SeriesIndex(self.table, self.key[which])


@dataclass(frozen=True)
class RoleLink:
    """How an output finds one input: the input's block, its keys, and the shift in periods.

    kind: `same` (own key after `project`), `group` (all parts whose projected key is mine), `edge` (stored
    per series), `observation` (cells in the evidence file).
    """

    role: str
    kind: str
    input: BlockKey | None
    project: tuple[tuple[str, str], ...] = ()
    shift: int = 0


@dataclass(frozen=True)
class Derivation:
    """One row group of the `derivation` table: a formula applied to named inputs."""

    formula: str
    out: BlockKey
    links: tuple[RoleLink, ...]


@dataclass(frozen=True)
class Choice:
    """One parameter as used: its value, where it is written, and who says so."""

    name: str
    value: Any
    file: str
    line: int
    citation: str


MethodSet = tuple[Choice, ...]


OWN_PERIOD = -32768


@dataclass(frozen=True, eq=False)
class Edges:
    """For one role, the input series of every output series: a block (by position) and a key, -1 for none.

    period: the period that is read for every output period, where the data decide on it; `OWN_PERIOD`, or None
    for all series: the output's own.
    """

    blocks: tuple[BlockKey, ...]
    which: I4
    key: I8
    period: I8 | None = None


@dataclass(frozen=True, eq=False)
class Fills:
    """Figures put into gaps, one entry each: column and period of the figure, and the two periods it rests on."""

    block: BlockKey
    column: I8
    period: I8
    before: I8
    after: I8

    def take(self, which: B1 | I8, count: int) -> "Fills":
        """Return the entries of some of `count` columns, renumbered."""
        new = np.full(count, -1, np.int64)
        kept = np.arange(count)[which]
        new[kept] = np.arange(len(kept))
        mine = new[self.column] >= 0
        return Fills(
            self.block, new[self.column[mine]], self.period[mine], self.before[mine], self.after[mine]
        )


@dataclass(frozen=True, eq=False)
class Origin:
    """Where every series of a block comes from: its derivation, its parameters, its data-dependent inputs."""

    derivations: tuple[Derivation, ...]
    derivation: I4
    sets: tuple[MethodSet, ...]
    set: I4
    edges: Mapping[str, Edges] = field(default_factory=dict)
    fills: Fills | None = None


@dataclass(frozen=True, eq=False)
class Block:
    """Values of one measure: `value` (T, N) with NaN where there is no figure.

    status, conf: (T, N) positions in CL_OBS_STATUS and CL_CONF_STATUS; None = A where there is a value, F.
    imputed, assumed: (T, N) parts of each figure that are not observed; None = nothing. NaN = rests on no data.
    chosen: the method the assembly uses. part: counts as a part when totals are made.
    """

    key: BlockKey
    series: SeriesIndex
    periods: range
    value: F8
    origin: Origin
    chosen: B1
    part: B1
    status: I1 | None = None
    conf: I1 | None = None
    imputed: F4 | None = None
    assumed: F4 | None = None

    def __post_init__(self) -> None:
        shape = (len(self.periods), len(self.series))
        if self.value.shape != shape:
            raise ValueError(f"{self.key}: values have shape {self.value.shape}, periods x series is {shape}")
        self.value.flags.writeable = False

    @property
    def held(self) -> B1:
        """Return which series have a figure in any period, shape (N,)."""
        return np.asarray(np.isfinite(self.value).any(axis=0))

    def take(self, which: B1 | I8) -> "Block":
        """Return the block with some of its series, in ascending key order."""

        def columns(x: Any) -> Any:
            return None if x is None else x[:, which]

        edges = {
            role: Edges(e.blocks, e.which[which], e.key[which], None if e.period is None else e.period[which])
            for role, e in self.origin.edges.items()
        }
        fills = self.origin.fills
        origin = replace(
            self.origin,
            derivation=self.origin.derivation[which],
            set=self.origin.set[which],
            edges=edges,
            fills=None if fills is None else fills.take(which, len(self.series)),
        )
        return replace(
            self,
            series=self.series.take(which),
            value=self.value[:, which],
            origin=origin,
            chosen=self.chosen[which],
            part=self.part[which],
            status=columns(self.status),
            conf=columns(self.conf),
            imputed=columns(self.imputed),
            assumed=columns(self.assumed),
        )


def merge(blocks: Sequence[Block]) -> Block:
    """Put blocks of one key and one period axis side by side; their series must not overlap."""
    if len(blocks) == 1:
        return blocks[0]
    first = blocks[0]
    if any(b.key != first.key or b.periods != first.periods for b in blocks):
        raise ValueError(f"blocks of different keys or periods cannot be merged: {[b.key for b in blocks]}")
    key = np.concatenate([b.series.key for b in blocks])
    order = np.argsort(key, kind="stable")
    if np.any(np.diff(key[order]) == 0):
        raise ValueError(f"{first.key}: a series is in two blocks")

    def beside(parts: Iterable[Any], dtype: type) -> Any:
        listed = list(parts)
        if all(p is None for p in listed):
            return None
        full = [
            np.zeros(b.value.shape, dtype) if p is None else p for b, p in zip(blocks, listed, strict=True)
        ]
        return np.concatenate(full, axis=1)[:, order]

    return Block(
        key=first.key,
        series=SeriesIndex(first.series.table, key[order]),
        periods=first.periods,
        value=np.concatenate([b.value for b in blocks], axis=1)[:, order],
        origin=_merge_origins(blocks, order),
        chosen=np.concatenate([b.chosen for b in blocks])[order],
        part=np.concatenate([b.part for b in blocks])[order],
        status=_full_status(blocks, order),
        conf=beside([b.conf for b in blocks], np.int8),
        imputed=beside([b.imputed for b in blocks], np.float32),
        assumed=beside([b.assumed for b in blocks], np.float32),
    )


def _full_status(blocks: Sequence[Block], order: I8) -> I1 | None:
    if all(b.status is None for b in blocks):
        return None
    return np.concatenate([status_of(b) for b in blocks], axis=1)[:, order]


NORMAL, ESTIMATED, PROVISIONAL = 0, 3, 11
"""Positions of A, E and P in rules/codes/obs_status.csv (a test holds the file to them)."""

NO_FIGURE = -1
"""Status position of a cell that is not a figure at all: nothing was delivered, nothing could be computed."""


def status_of(block: Block) -> I1:
    """Return the status codes of a block in full: A where there is a value, else `NO_FIGURE`."""
    if block.status is not None:
        return block.status
    return np.where(np.isnan(block.value), NO_FIGURE, NORMAL).astype(np.int8)


def _merge_origins(blocks: Sequence[Block], order: I8) -> Origin:
    derivations: list[Derivation] = []
    sets: list[MethodSet] = []
    derivation, which_set = [], []
    for b in blocks:
        derivation.append(b.origin.derivation + np.int32(len(derivations)))
        which_set.append(b.origin.set + np.int32(len(sets)))
        derivations.extend(b.origin.derivations)
        sets.extend(b.origin.sets)
    roles = {role: None for b in blocks for role in b.origin.edges}
    return Origin(
        tuple(derivations),
        np.concatenate(derivation)[order],
        tuple(sets),
        np.concatenate(which_set)[order],
        {role: _merge_edges(blocks, role, order) for role in roles},
        _merge_fills(blocks, order),
    )


def _merge_edges(blocks: Sequence[Block], role: str, order: I8) -> Edges:
    targets: list[BlockKey] = []
    which, keys, periods = [], [], []
    for b in blocks:
        n = len(b.series)
        edges = b.origin.edges.get(role) or Edges((), np.zeros(n, np.int32), np.full(n, -1, np.int64))
        which.append(edges.which + np.int32(len(targets)))
        keys.append(edges.key)
        periods.append(np.full(n, OWN_PERIOD) if edges.period is None else edges.period)
        targets.extend(edges.blocks)
    period = np.concatenate(periods)[order]
    return Edges(
        tuple(targets),
        np.concatenate(which)[order],
        np.concatenate(keys)[order],
        period if (period != OWN_PERIOD).any() else None,
    )


def _merge_fills(blocks: Sequence[Block], order: I8) -> Fills | None:
    if all(b.origin.fills is None for b in blocks):
        return None
    place = np.empty(len(order), np.int64)
    place[order] = np.arange(len(order))
    parts, first = [], 0
    for b in blocks:
        if b.origin.fills is not None:
            parts.append(replace(b.origin.fills, column=place[first + b.origin.fills.column]))
        first += len(b.series)
    return Fills(
        parts[0].block,
        *(
            np.concatenate([getattr(part, name) for part in parts])
            for name in ("column", "period", "before", "after")
        ),
    )
