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


@dataclass(frozen=True, eq=False)
class Edges:
    """For one role, the input series of every output series: a block (by position) and a key, -1 for none."""

    blocks: tuple[BlockKey, ...]
    which: I4
    key: I8


@dataclass(frozen=True, eq=False)
class Origin:
    """Where every series of a block comes from: its derivation, its parameters, its data-dependent inputs."""

    derivations: tuple[Derivation, ...]
    derivation: I4
    sets: tuple[MethodSet, ...]
    set: I4
    edges: Mapping[str, Edges] = field(default_factory=dict)


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

        edges = {role: Edges(e.blocks, e.which[which], e.key[which]) for role, e in self.origin.edges.items()}
        origin = replace(
            self.origin,
            derivation=self.origin.derivation[which],
            set=self.origin.set[which],
            edges=edges,
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
    roles = {role for b in blocks for role in b.origin.edges}
    targets: dict[str, list[BlockKey]] = {role: [] for role in roles}
    which: dict[str, list[I4]] = {role: [] for role in roles}
    keys: dict[str, list[I8]] = {role: [] for role in roles}
    for b in blocks:
        derivation.append(b.origin.derivation + np.int32(len(derivations)))
        which_set.append(b.origin.set + np.int32(len(sets)))
        derivations.extend(b.origin.derivations)
        sets.extend(b.origin.sets)
        for role in roles:
            edges = b.origin.edges.get(role)
            n = len(b.series)
            if edges is None:
                which[role].append(np.zeros(n, np.int32))
                keys[role].append(np.full(n, -1, np.int64))
            else:
                which[role].append(edges.which + np.int32(len(targets[role])))
                keys[role].append(edges.key)
                targets[role].extend(edges.blocks)
    return Origin(
        tuple(derivations),
        np.concatenate(derivation)[order],
        tuple(sets),
        np.concatenate(which_set)[order],
        {
            role: Edges(
                tuple(targets[role]), np.concatenate(which[role])[order], np.concatenate(keys[role])[order]
            )
            for role in roles
        },
    )
