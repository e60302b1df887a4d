"""What people decided about single figures: `corrections.toml` and `acceptances.toml` of an assembly.

Both are data with a name, a date and a reason. A correction states the old value it expects, an acceptance the
text of the finding it is about, so that neither outlives the figure it was written for.
"""

import datetime
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Generic, TypeVar

from pydantic import AfterValidator, BaseModel, Field, ValidationInfo, field_validator, model_validator
from pydantic_core import PydanticCustomError

from keelbook.contracts.codes import DIMS, CodeLists
from keelbook.contracts.loader import Declared, fault, faults, parse_toml, validate
from keelbook.contracts.measures import PriceBasis, load_measures
from keelbook.contracts.screening_rules import ScreeningRule
from keelbook.errors import DeclarationError, Problem, did_you_mean

CORRECTIONS = "corrections.toml"
ACCEPTANCES = "acceptances.toml"

_ADDRESS = re.compile("([A-Z]{1,3})([1-9][0-9]{0,6})")
_PERIOD = re.compile("[0-9]{4}(-Q[1-4])?")

Text = Annotated[str, Field(min_length=1)]
Count = Annotated[int, Field(ge=1)]


@dataclass(frozen=True)
class SourceSheet:
    """The file of a declared source, and its sheet ("" for CSV)."""

    file: str
    sheet: str


def _address(text: str) -> str:
    if not _ADDRESS.fullmatch(text):
        raise fault(
            f"'{text}' is not the address of a cell",
            found=text,
            expected="column letters and row, such as D14",
            remedy="correct the address; in a CSV file give line and column",
        )
    return text


def _period(text: str) -> str:
    if not _PERIOD.fullmatch(text):
        raise fault(
            f"'{text}' is not a period",
            found=text,
            expected="such as 2015 or 2015-Q1",
            remedy="correct time_period",
        )
    return text


def _measure(name: str) -> str:
    measures = load_measures()
    if name not in measures:
        raise fault(
            f"unknown measure '{name}'",
            found=name,
            expected="a measure of schemas/measures.toml",
            remedy=did_you_mean(name, measures) or "keelbook methods lists the measures",
        )
    return name


class Where(Declared):
    """A cell (source, and `cell` or `line` with `column`), or the key of a figure."""

    source: Text | None = None
    sheet: Text | None = None
    cell: Annotated[str, AfterValidator(_address)] | None = None
    line: Count | None = None
    column: Count | None = None
    area: Text | None = None
    sector: Text | None = None
    industry: Text | None = None
    asset: Text | None = None
    worker_group: Text | None = None
    measure: Annotated[str, AfterValidator(_measure)] | None = None
    time_period: Annotated[str, AfterValidator(_period)] | None = None

    @field_validator("source")
    @classmethod
    def _declared_source(cls, name: str | None, info: ValidationInfo) -> str | None:
        sources: Mapping[str, SourceSheet] = (info.context or {})["sources"]
        if name is not None and name not in sources:
            raise fault(
                f"unknown source '{name}'",
                found=name,
                expected="one of: " + ", ".join(sources),
                remedy=did_you_mean(name, sources) or "name a [[source]] of assembly.toml",
            )
        return name

    @field_validator("sheet")
    @classmethod
    def _its_sheet(cls, sheet: str | None, info: ValidationInfo) -> str | None:
        sources: Mapping[str, SourceSheet] = (info.context or {})["sources"]
        source = sources.get(info.data.get("source") or "")
        if sheet is not None and source is not None and sheet != source.sheet:
            raise fault(
                f"the source is not read from the sheet '{sheet}'",
                found=sheet,
                expected=source.sheet or "no sheet (a CSV file)",
                remedy="correct the sheet, or leave it out: the source has one",
            )
        return sheet

    @field_validator(*DIMS)
    @classmethod
    def _known_code(cls, code: str | None, info: ValidationInfo) -> str | None:
        lists: CodeLists = (info.context or {})["lists"]
        dim = str(info.field_name)
        if code is not None and not lists.has(dim, code):
            raise fault(
                f"unknown {dim} '{code}'",
                found=code,
                expected="one of: " + ", ".join(lists.codes(dim)),
                remedy=did_you_mean(code, lists.codes(dim)) or "correct the code",
            )
        return code

    @property
    def position(self) -> tuple[int, int] | None:
        """The row and column of the cell, counted from 1; None where no cell is named."""
        if self.cell is not None:
            return parse_address(self.cell)
        return None if self.line is None or self.column is None else (self.line, self.column)

    def key(self) -> dict[str, str]:
        """Return the parts of the key that are given, less the period."""
        given = {name: getattr(self, name) for name in (*DIMS, "measure")}
        return {name: value for name, value in given.items() if value is not None}

    def cell_faults(self) -> list[PydanticCustomError]:
        """Return what contradicts itself in the naming of a cell."""
        found = []
        by_line = [name for name in ("line", "column") if getattr(self, name) is not None]
        if self.cell is not None and by_line:
            found.append(
                fault(
                    "the cell is named twice",
                    at=(by_line[0],),
                    found="cell and " + " and ".join(by_line),
                    expected="cell, or line and column",
                    remedy="remove one of the two",
                )
            )
        elif len(by_line) == 1:
            found.append(
                fault(
                    "half of a cell's place",
                    at=(by_line[0],),
                    found=by_line[0],
                    expected="line and column",
                    remedy="add the other one",
                )
            )
        named = self.cell is not None or bool(by_line) or self.sheet is not None
        if named and self.source is None:
            found.append(
                fault(
                    "a cell without its source",
                    found="no source",
                    expected="source",
                    remedy="name the source that is read from this file",
                )
            )
        return found


class Correction(Where):
    """One figure replaced by another. `expected` is the old value, or the raw text of the cell."""

    price_basis: PriceBasis | None = None
    expected: float | str
    value: float
    obs_status: Text | None = None
    reason: Text
    author: Text
    date: datetime.date

    @field_validator("obs_status")
    @classmethod
    def _known_status(cls, code: str | None, info: ValidationInfo) -> str | None:
        lists: CodeLists = (info.context or {})["lists"]
        if code is not None and not lists.has("obs_status", code):
            raise fault(
                f"unknown observation status '{code}'",
                found=code,
                expected="one of: " + ", ".join(lists.codes("obs_status")),
                remedy=did_you_mean(code, lists.codes("obs_status")) or "use a code of CL_OBS_STATUS",
            )
        return code

    @model_validator(mode="after")
    def _one_figure(self) -> "Correction":
        found = self.cell_faults()
        key = [*self.key(), *(name for name in ("price_basis", "time_period") if getattr(self, name))]
        if self.position is not None and key:
            found.append(
                fault(
                    "a cell and a key",
                    at=(key[0],),
                    found="cell and " + ", ".join(key),
                    expected="one of the two",
                    remedy="remove the key, or the cell",
                )
            )
        if not found and self.position is None and (self.measure is None or self.time_period is None):
            found.append(
                fault(
                    "the correction names no figure",
                    found=", ".join([*(["source"] if self.source else []), *key]) or "nothing",
                    expected="source and cell, source with line and column, or measure and time_period",
                    remedy="name the figure",
                )
            )
        if found:
            raise faults(found)
        return self


class Acceptance(Where):
    """One finding that somebody looked at and lets stand, as long as it reads as it did."""

    rule: Text
    found: str
    accepted_by: Text
    date: datetime.date
    reason: Text

    @field_validator("rule")
    @classmethod
    def _may_be_accepted(cls, rule: str, info: ValidationInfo) -> str:
        refused: frozenset[str] = (info.context or {})["refused"]
        if rule in refused:
            raise fault(
                f"a finding of the rule '{rule}' cannot be accepted",
                found=rule,
                expected="a rule that warns, or a stop marked acceptable in the screening rules",
                remedy="have the figure corrected, by the supplier or in corrections.toml",
            )
        return rule

    @model_validator(mode="after")
    def _one_finding(self) -> "Acceptance":
        found = self.cell_faults()
        if not found and self.source is None and self.time_period is None and not self.key():
            found.append(
                fault(
                    "the acceptance names no figure",
                    found="nothing",
                    expected="source, cell or parts of the key, as the finding shows them",
                    remedy="name what the finding is about",
                )
            )
        if found:
            raise faults(found)
        return self


W = TypeVar("W", bound=Where)


@dataclass(frozen=True)
class Entry(Generic[W]):
    """One entry with the line of its file on which it begins."""

    line: int
    said: W


class _Corrections(Declared):
    correction: tuple[Correction, ...]


class _Acceptances(Declared):
    acceptance: tuple[Acceptance, ...]


def parse_address(address: str) -> tuple[int, int]:
    """Return row and column, counted from 1, of an A1 address."""
    letters, row = _ADDRESS.fullmatch(address).groups()  # type: ignore[union-attr]
    column = 0
    for letter in letters:
        column = column * 26 + ord(letter) - ord("A") + 1
    return int(row), column


def load_corrections(
    folder: Path, lists: CodeLists, sources: Mapping[str, SourceSheet]
) -> tuple[Entry[Correction], ...]:
    """Return the corrections of an assembly, in file order; none where it has no `corrections.toml`.

    Raises:
        DeclarationError: every fault of the file with its line, also two entries for the same place.
    """
    path = folder / CORRECTIONS
    context = {"lists": lists, "sources": sources}
    return _load(path, _Corrections, "correction", context, twice="one correction of a figure")


def load_acceptances(
    folder: Path, lists: CodeLists, sources: Mapping[str, SourceSheet], rules: Mapping[str, ScreeningRule]
) -> tuple[Entry[Acceptance], ...]:
    """Return the acceptances of an assembly, in file order; none where it has no `acceptances.toml`.

    Raises:
        DeclarationError: every fault of the file with its line, also two entries for the same finding and an
            acceptance of a rule that must stop the run.
    """
    path = folder / ACCEPTANCES
    refused = frozenset(
        name for name, rule in rules.items() if rule.severity == "stop" and not rule.acceptable
    )
    context = {"lists": lists, "sources": sources, "refused": refused}
    return _load(path, _Acceptances, "acceptance", context, twice="one acceptance of a finding")


def _load(
    path: Path, model: type[BaseModel], name: str, context: Mapping[str, Any], *, twice: str
) -> tuple[Entry[Any], ...]:
    if not path.is_file():
        return ()
    data, lines = parse_toml(path)
    declared = getattr(validate(data, lines, path, model, context), name)
    entries = tuple(Entry(lines[name, at], one) for at, one in enumerate(declared))
    first: dict[tuple[Any, ...], int] = {}
    problems = []
    for entry in entries:
        said = entry.said
        about = (
            said.source,
            said.position,
            *(getattr(said, part, None) for part in (*DIMS, "measure", "price_basis", "time_period")),
            *(getattr(said, part, None) for part in ("rule", "found")),
        )
        if about in first:
            problems.append(
                Problem(
                    "the same place twice",
                    str(path),
                    f"line {entry.line}",
                    found=f"also on line {first[about]}",
                    expected=twice,
                    remedy="remove one of the two",
                )
            )
        first.setdefault(about, entry.line)
    if problems:
        raise DeclarationError(problems)
    return entries
