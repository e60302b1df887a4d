"""Formulas: a primitive with named inputs, an equation and its published source."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal, NamedTuple

import numpy as np

from keelbook.blocks import F8, I4, MethodSet
from keelbook.lineage.primitives import Groups, Rule


class Role(NamedTuple):
    """One input of a formula; shift -1 is the previous period, +1 the next.

    counted: takes part in the data basis. A parameter that was itself estimated is not counted.
    """

    name: str
    shift: int = 0
    counted: bool = True


class Setting(NamedTuple):
    """What a formula's rule is built from: parameters by series, the groups of a sum, the period axis."""

    sets: Sequence[Mapping[str, Any]]
    which: I4
    periods: range
    groups: Groups

    def column(self, name: str) -> F8:
        """Return one numeric parameter for every output series, shape (N,)."""
        return np.array([float(s[name]) for s in self.sets] or [0.0])[self.which]

    def single(self, name: str) -> Any:
        """Return a parameter that is the same for all series."""
        values = {s[name] for s in self.sets}
        if len(values) != 1:
            raise ValueError(f"parameter {name} differs between series: {sorted(map(str, values))}")
        return values.pop()


@dataclass(frozen=True)
class Formula:
    """One way to make a measure. `build` gives the rule for a block, or for one series of it in a trace.

    estimated: every figure gets status E. carries: takes over the status of its first input.
    assumed: every figure rests on an assumption alone, whatever it was fitted to (starting stocks).
    """

    name: str
    equation: str
    citation: str
    roles: tuple[Role, ...]
    build: Callable[[Setting], Rule]
    kind: Literal["each", "group", "series"] = "each"
    estimated: bool = False
    carries: bool = False
    assumed: bool = False


def values_of(sets: Sequence[MethodSet]) -> list[dict[str, Any]]:
    """Return the parameter values of each set by name."""
    return [{choice.name: choice.value for choice in s} for s in sets]
