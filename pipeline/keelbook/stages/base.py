"""What a stage is: a pure function from declared inputs and frozen parameters to blocks and findings.

No path, clock, environment or database inside a stage; an input that was not declared is refused.
"""

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Generic, Literal, TypeVar

import numpy as np

from keelbook.blocks import Block, BlockKey, CodeTable, SeriesIndex, merge
from keelbook.lineage.formula import Formula

P = TypeVar("P")

CHOSEN = "*"
"""Method name in a key that stands for the chosen method of each series."""


class Book:
    """All blocks made so far, by key; blocks of one key are put side by side when read."""

    def __init__(self, blocks: Iterable[Block] = ()) -> None:
        self._parts: dict[BlockKey, list[Block]] = {}
        self.add(blocks)

    def add(self, blocks: Iterable[Block]) -> None:
        for block in blocks:
            if len(block.series):
                self._parts.setdefault(block.key, []).append(block)

    def keys(self) -> list[BlockKey]:
        return list(self._parts)

    def get(self, key: BlockKey) -> Block | None:
        """Return the block of a key, or for method `*` the chosen series of all its methods; None if none."""
        if key.method == CHOSEN:
            chosen = [
                replace(b.take(b.chosen), key=key)
                for k in self._parts
                if k.measure == key.measure and k.price_basis == key.price_basis
                for b in [self.get(k)]
                if b is not None and b.chosen.any()
            ]
            return merge(chosen) if chosen else None
        parts = self._parts.get(key)
        if not parts:
            return None
        if len(parts) > 1:
            self._parts[key] = parts = [merge(parts)]
        return parts[0]

    def __iter__(self) -> Iterator[Block]:
        for key in list(self._parts):
            block = self.get(key)
            if block is not None:
                yield block


class Inputs:
    """The part of a book that a stage declared; anything else is refused."""

    def __init__(self, book: Book, needs: frozenset[BlockKey], optional: frozenset[BlockKey]) -> None:
        self._book, self._needs, self._optional = book, needs, optional

    def get(self, key: BlockKey) -> Block | None:
        if key not in self._needs and key not in self._optional:
            raise KeyError(f"{key} was read but not declared as an input of this stage")
        return self._book.get(key)

    def need(self, key: BlockKey) -> Block:
        block = self.get(key)
        if block is None:
            raise KeyError(f"{key} is not there; the runner must not start this stage")
        return block


@dataclass(frozen=True)
class Result:
    """What a stage gives: blocks, and findings as records of the `finding` table."""

    blocks: Sequence[Block] = ()
    findings: Sequence[Mapping[str, Any]] = ()


@dataclass(frozen=True)
class Stage(Generic[P]):
    """One stage of the plan.

    scope: what may be cut apart and run on its own: single series, whole areas, or nothing.
    """

    name: str
    needs: frozenset[BlockKey]
    optional: frozenset[BlockKey]
    gives: frozenset[BlockKey]
    scope: Literal["series", "area", "all"]
    run: Callable[[Inputs, P], Result]
    formulas: tuple[Formula, ...] = ()


def keys(*names: str) -> frozenset[BlockKey]:
    """Return block keys from `measure/method/price_basis` texts."""
    return frozenset(BlockKey(*name.split("/")) for name in names)


def note(
    rule: str, severity: str, message: str, table: CodeTable, key: int | None = None, **fields: Any
) -> dict[str, Any]:
    """Return one finding record, with the codes of the series it is about."""
    labels = {} if key is None else table.labels(key)
    return {"rule": rule, "severity": severity, "level": 1, "message": message, **labels, **fields}


def missing_input(stage: str, key: BlockKey) -> dict[str, Any]:
    """Return the note of a stage that could not run because an input is not there."""
    wanted = f"{key.measure} ({key.price_basis})" if key.price_basis != "_Z" else key.measure
    return {
        "rule": "not_computed",
        "severity": "note",
        "level": 1,
        "measure": key.measure,
        "message": f"{stage}: not computed, there is no {wanted}",
        "remedy": f"deliver {wanted}, or what it is computed from",
    }


def outer_series(block: Block, project: Mapping[str, str]) -> SeriesIndex:
    """Return the series that the parts of a block add up to under a projection."""
    parts = block.series.take(block.part)
    return SeriesIndex(block.series.table, np.unique(parts.projected(project)))


def without(series: SeriesIndex, there: SeriesIndex) -> SeriesIndex:
    """Return the series that are not yet in another index."""
    return series.take(there.locate(series.key) < 0)
