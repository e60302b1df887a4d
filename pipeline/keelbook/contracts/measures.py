"""The measures: `schemas/measures.toml` fixes unit, price bases and dimensions of each."""

from collections.abc import Mapping
from functools import lru_cache
from types import MappingProxyType
from typing import Literal

from pydantic import Field

from keelbook.contracts.loader import Declared, load_toml
from keelbook.locate import folder

Unit = Literal["currency", "hours", "persons", "ratio", "rate", "index", "years", "log_change"]
PriceBasis = Literal[
    "current",
    "constant",
    "previous_year",
    "next_year",
    "year_end",
    "historic",
    "index",
    "source_index",
    "earlier_index",
    "_Z",
]
Applies = Literal["required", "total", "none"]
"""`required`: a code below the total; `total`: a code or `_T`; `none`: always `_Z`."""


class Dims(Declared):
    """Which codes a measure takes in the dimensions that can fail to apply."""

    industry: Applies
    asset: Applies
    worker_group: Applies


class Measure(Declared):
    """One measure."""

    title: str
    unit: Unit
    unit_mult: int
    price_bases: tuple[PriceBasis, ...] = Field(min_length=1)
    dims: Dims
    sna: str = ""
    description: str
    annual: Literal["sum", "mean", "end"]
    positive: bool

    def default(self, dim: str) -> str | None:
        """Return the code of a dimension that a source does not give; None for the area (its own default)."""
        if dim == "area":
            return None
        if dim == "sector":
            return "S1"
        return "_Z" if getattr(self.dims, dim) == "none" else "_T"


class _File(Declared):
    measure: dict[str, Measure]


@lru_cache(maxsize=1)
def load_measures() -> Mapping[str, Measure]:
    """Return measure name -> `Measure`, in the order of the file.

    Raises:
        DeclarationError: `schemas/measures.toml` is not as it must be.
    """
    return MappingProxyType(load_toml(folder("schemas") / "measures.toml", _File).measure)
