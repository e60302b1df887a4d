"""Retirement patterns by name: `rules/retirement.csv`, which an assembly may change or add to."""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from types import MappingProxyType

from pydantic import Field, field_validator, model_validator
from pydantic_core import PydanticCustomError

from keelbook.contracts.codes import Mark
from keelbook.contracts.loader import Declared, fault, faults, load_csv_rows
from keelbook.errors import did_you_mean
from keelbook.locate import folder
from keelbook.methods.retirement import RETIREMENT, SMALLEST_SPREAD, truncated_mass
from keelbook.methods.weights import Shape

FILE = "retirement.csv"

_SHAPES = ("half_width", "sd", "low", "high", "shape", "exponent")


class RetirementRow(Declared):
    """One row: a distribution of `RETIREMENT` and exactly the parameters it takes, relative to the mean life."""

    name: str
    distribution: str
    half_width: float | None = Field(None, gt=0, le=1)
    sd: float | None = Field(None, ge=SMALLEST_SPREAD)
    low: float | None = Field(None, ge=0, lt=1)
    high: float | None = Field(None, gt=1)
    shape: float | None = Field(None, ge=0.5)
    exponent: float | None = Field(None, ge=0)
    citation: str
    status: Mark
    line: int

    @field_validator("distribution")
    @classmethod
    def _known(cls, name: str) -> str:
        if name not in RETIREMENT:
            raise fault(
                f"unknown distribution '{name}'",
                found=name,
                expected="one of: " + ", ".join(RETIREMENT),
                remedy=did_you_mean(name, RETIREMENT) or "choose one of these",
            )
        return name

    @model_validator(mode="after")
    def _complete(self) -> "RetirementRow":
        takes = RETIREMENT[self.distribution].parameters
        found = []
        for name in _SHAPES:
            value = getattr(self, name)
            if value is not None and name not in takes:
                found.append(
                    fault(
                        f"'{name}' contradicts {self.distribution}",
                        found=f"{name} {value:g}",
                        expected=" and ".join(takes) or "no parameters",
                        remedy=f"leave {name} empty, or choose another distribution",
                    )
                )
            elif value is None and name in takes:
                found.append(
                    fault(
                        f"{self.distribution} without '{name}'",
                        found="an empty cell",
                        expected=name,
                        remedy=f"give {name}, or choose another distribution",
                    )
                )
        if not found:
            found += self._out_of_range()
        if found:
            raise faults(found)
        return self

    def _out_of_range(self) -> list[PydanticCustomError]:
        """A range may depend on the distribution, which knows it."""
        try:
            truncated_mass(self.distribution, **dict(self.shapes()))
        except ValueError as error:
            return [
                fault(
                    f"{self.distribution} cannot have these parameters",
                    found=", ".join(f"{name} {value:g}" for name, value in self.shapes()),
                    expected=str(error),
                    remedy="correct the row",
                )
            ]
        return []

    def shapes(self) -> Shape:
        """Return the parameters given, by name."""
        given = ((name, getattr(self, name)) for name in _SHAPES)
        return tuple((name, value) for name, value in given if value is not None)


@dataclass(frozen=True)
class RetirementPattern:
    """A distribution of lives with its parameters, as named in an asset rule."""

    name: str
    distribution: str
    shape: Shape
    citation: str
    status: Mark
    file: str
    line: int

    @property
    def truncated(self) -> float:
        """Return the share of the distribution that its cuts leave out."""
        return truncated_mass(self.distribution, **dict(self.shape))


def load_retirement(assembly_folder: Path | None = None) -> Mapping[str, RetirementPattern]:
    """Return every pattern by name; a row of an assembly replaces the shipped row of that name.

    Raises:
        DeclarationError: a row is not as it must be; every fault of the file with its line.
    """
    patterns = dict(_shipped())
    own = assembly_folder / "rules" / FILE if assembly_folder else None
    if own is not None and own.is_file():
        patterns |= _read(own, f"rules/{FILE}")
    return MappingProxyType(patterns)


@lru_cache(maxsize=1)
def _shipped() -> Mapping[str, RetirementPattern]:
    return _read(folder("rules") / FILE, f"keelbook/rules/{FILE}")


def _read(path: Path, label: str) -> dict[str, RetirementPattern]:
    return {
        row.name: RetirementPattern(
            row.name, row.distribution, row.shapes(), row.citation, row.status, label, row.line
        )
        for row in load_csv_rows(path, RetirementRow, key=("name",))
    }
