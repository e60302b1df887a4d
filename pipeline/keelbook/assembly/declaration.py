"""`assembly.toml`: what an assembly declares, and all that can be wrong with it before a file is opened."""

import codecs
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path, PurePosixPath
from typing import Annotated, Any, Literal

from pydantic import Field, ValidationInfo, field_validator, model_validator
from pydantic_core import PydanticCustomError

from keelbook.contracts.assets import load_asset_rules
from keelbook.contracts.codes import DIMS, CodeLists, load_code_lists
from keelbook.contracts.judgements import (
    ACCEPTANCES,
    CORRECTIONS,
    Acceptance,
    Correction,
    Entry,
    SourceSheet,
    load_acceptances,
    load_corrections,
)
from keelbook.contracts.loader import Declared, Place, fault, faults, parse_toml, validate
from keelbook.contracts.measures import Measure, PriceBasis, load_measures
from keelbook.contracts.parameters import (
    Given,
    Parameter,
    declared_parameters,
    faults_in,
    rule_files,
    set_by,
)
from keelbook.contracts.screening_rules import load_screening_rules
from keelbook.errors import DeclarationError, Problem, did_you_mean, nearest

NAME = "assembly.toml"

Dim = Literal["area", "sector", "industry", "asset", "worker_group"]
Line = Annotated[int, Field(ge=1)]
Text = Annotated[str, Field(min_length=1)]


class Csv(Declared):
    """How a CSV file is written."""

    encoding: str = "utf-8"
    delimiter: Annotated[str, Field(min_length=1, max_length=1)] = ","
    decimal: Literal[".", ","] = "."
    thousands: Literal[".", ",", " ", "'", "\N{NO-BREAK SPACE}", "\N{NARROW NO-BREAK SPACE}"] | None = None
    header_line: Line = 1

    @field_validator("encoding")
    @classmethod
    def _known(cls, name: str) -> str:
        try:
            codecs.lookup(name)
        except LookupError:
            raise fault(
                f"unknown encoding '{name}'",
                found=name,
                expected="such as utf-8, cp1252, latin-1",
                remedy=did_you_mean(name, ("utf-8", "cp1252", "latin-1")) or "correct the encoding",
            ) from None
        return name

    @model_validator(mode="after")
    def _marks_differ(self) -> "Csv":
        if self.thousands == self.decimal:
            raise fault(
                "the thousands mark is the decimal mark",
                at=("thousands",),
                found=f"'{self.thousands}'",
                expected="two different marks",
                remedy="correct one of the two",
            )
        return self


class Excel(Declared):
    """Where the block of figures is in a workbook."""

    sheet: Text
    header_rows: tuple[Line, ...]
    first_row: Line
    last_row: Line | None = None
    text_numbers: bool = False

    @model_validator(mode="after")
    def _in_order(self) -> "Excel":
        found = []
        if not self.header_rows:
            raise fault(
                "no header row",
                at=("header_rows",),
                found="[]",
                expected="one row or more",
                remedy="name the rows of the header",
            )
        first, last = self.header_rows[0], self.header_rows[-1]
        if self.header_rows != tuple(range(first, last + 1)):
            found.append(
                fault(
                    "the header rows do not follow each other",
                    at=("header_rows",),
                    found=str(list(self.header_rows)),
                    expected="consecutive rows, top to bottom",
                    remedy="name every row of the header once, from the top",
                )
            )
        elif self.first_row <= last:
            found.append(
                fault(
                    "the first row lies in the header",
                    at=("first_row",),
                    found=str(self.first_row),
                    expected=f"a row after {last}",
                    remedy="correct first_row or header_rows",
                )
            )
        if self.last_row is not None and self.last_row < self.first_row:
            found.append(
                fault(
                    "the last row comes before the first",
                    at=("last_row",),
                    found=str(self.last_row),
                    expected=f"{self.first_row} or more",
                    remedy="correct last_row or first_row",
                )
            )
        if found:
            raise faults(found)
        return self


class _Columns(Declared):
    """Dimension -> header text of the column that holds its labels."""

    area: Text | None = None
    sector: Text | None = None
    industry: Text | None = None
    asset: Text | None = None
    worker_group: Text | None = None

    def dims(self) -> list[str]:
        """Return the dimensions that have a column."""
        return [dim for dim in DIMS if getattr(self, dim) is not None]


class Long(_Columns):
    """One figure a row: role -> header text."""

    time_period: Text
    value: Text
    measure: Text | None = None
    obs_status: Text | None = None
    conf_status: Text | None = None

    @model_validator(mode="after")
    def _each_column_once(self) -> "Long":
        texts = [(role, text) for role, text in self.model_dump().items() if text is not None]
        found = [
            fault(
                f"the column '{text}' has two roles",
                at=(role,),
                found=f"{text} as {role}",
                expected="one role a column",
                remedy="correct one of the two",
            )
            for at, (role, text) in enumerate(texts)
            if text in [other for _, other in texts[:at]]
        ]
        if found:
            raise faults(found)
        return self


class Wide(_Columns):
    """Many figures a row. `headers`: dimension -> which of the header rows (from 1) holds its labels."""

    periods: Literal["across", "down"]
    period_header: Line | None = None
    period_column: Text | None = None
    headers: dict[Dim, Line] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _periods_once(self) -> "Wide":
        needed, other = ("period_header", "period_column")[:: 1 if self.periods == "across" else -1]
        found = []
        if getattr(self, needed) is None:
            found.append(
                fault(
                    f"periods {self.periods} without '{needed}'",
                    at=("periods",),
                    found="nothing",
                    expected=needed,
                    remedy=f"add {needed}",
                )
            )
        if getattr(self, other) is not None:
            found.append(
                fault(
                    f"'{other}' contradicts periods {self.periods}",
                    at=(other,),
                    found=str(getattr(self, other)),
                    expected=needed,
                    remedy=f"remove {other}",
                )
            )
        if found:
            raise faults(found)
        return self


class Marks(Declared):
    """Texts with a meaning in cells: `missing` for a cell without a figure, `flags` glued to a number."""

    missing: dict[str, str] = Field(default_factory=lambda: {"": "O"})
    flags: dict[Text, str] = Field(default_factory=dict)

    @field_validator("missing", "flags")
    @classmethod
    def _known(cls, marks: dict[str, str], info: ValidationInfo) -> dict[str, str]:
        statuses = _lists(info).codes("obs_status")
        found = [
            fault(
                f"unknown observation status '{status}'",
                at=(mark,),
                found=status,
                expected="one of: " + ", ".join(statuses),
                remedy=did_you_mean(status, statuses) or "use a code of CL_OBS_STATUS",
            )
            for mark, status in marks.items()
            if status not in statuses
        ]
        if info.field_name == "flags":
            found += [
                fault(
                    f"the flag '{flag}' is not made of letters",
                    at=(flag,),
                    found=flag,
                    expected="letters",
                    remedy="a mark that stands alone in a cell belongs to marks.missing",
                )
                for flag in marks
                if not flag.isalpha()
            ]
        if found:
            raise faults(found)
        return {"": "O"} | marks if info.field_name == "missing" else marks


class Source(Declared):
    """One `[[source]]`: a block of one file, and how it is read."""

    name: Text
    title: str = ""
    provider: str = ""
    file: Text
    measure: str | None = None
    price_basis: PriceBasis = "_Z"
    unit_mult: int
    frequency: Literal["A", "Q"]
    annual_rate: bool = False
    area: Text | None = None
    currency: Text | None = None
    csv: Csv | None = None
    excel: Excel | None = None
    long: Long | None = None
    wide: Wide | None = None
    fixed: dict[Dim, str] = Field(default_factory=dict)
    codes: dict[Literal["measure", Dim], dict[Text, str]] = Field(default_factory=dict)
    marks: Marks = Field(default_factory=Marks)

    @field_validator("file")
    @classmethod
    def _inside(cls, file: str, info: ValidationInfo) -> str:
        base: Path = (info.context or {})["folder"]
        path = PurePosixPath(file)
        outside = path.is_absolute() or ".." in path.parts or "\\" in file or ":" in path.parts[0]
        if outside or not (base / file).resolve().is_relative_to(base.resolve()):
            raise fault(
                "the file is not inside the assembly",
                found=file,
                expected="a path below the assembly's folder, with /, without .. and escaping links",
                remedy="put the file into sources/",
            )
        return file

    @field_validator("measure")
    @classmethod
    def _known_measure(cls, name: str | None) -> str | None:
        if name is not None and name not in load_measures():
            raise _unknown_measure(name)
        return name

    @field_validator("unit_mult")
    @classmethod
    def _known_mult(cls, power: int, info: ValidationInfo) -> int:
        if not _lists(info).has("unit_mult", str(power)):
            raise fault(
                f"unknown unit_mult {power}",
                found=str(power),
                expected="an SDMX UNIT_MULT, -15 to 15",
                remedy="3 for thousands, 6 for millions, 9 for billions",
            )
        return power

    @field_validator("fixed")
    @classmethod
    def _known_fixed(cls, fixed: dict[str, str], info: ValidationInfo) -> dict[str, str]:
        found = [
            _unknown_code(_lists(info), dim, code, (dim,))
            for dim, code in fixed.items()
            if not _lists(info).has(dim, code)
        ]
        if found:
            raise faults(found)
        return fixed

    @field_validator("codes")
    @classmethod
    def _known_targets(
        cls, codes: dict[str, dict[str, str]], info: ValidationInfo
    ) -> dict[str, dict[str, str]]:
        found = []
        for name, labels in codes.items():
            for label, code in labels.items():
                if name == "measure" and code not in load_measures():
                    found.append(_unknown_measure(code, (name, label)))
                elif name != "measure" and not _lists(info).has(name, code):
                    found.append(_unknown_code(_lists(info), name, code, (name, label)))
        if found:
            raise faults(found)
        return codes

    @model_validator(mode="after")
    def _no_contradiction(self) -> "Source":
        checks: tuple[Callable[[], list[PydanticCustomError]], ...] = (
            self._one_of_each,
            self._header_faults,
            self._dim_faults,
            self._measure_faults,
        )
        found = [one for check in checks for one in check()]
        if found:
            raise faults(found)
        return self

    def columns(self) -> list[str]:
        """Return the dimensions whose labels the source gives, beside the figures or above them."""
        beside: _Columns | None = self.long or self.wide
        return (beside.dims() if beside else []) + (list(self.wide.headers) if self.wide else [])

    def measures(self) -> list[str]:
        """Return the measures the source is declared to give."""
        return [self.measure] if self.measure else list(dict.fromkeys(self.codes.get("measure", {}).values()))

    def _one_of_each(self) -> list[PydanticCustomError]:
        found = []
        for one, other, what in (("csv", "excel", "file format"), ("long", "wide", "layout")):
            given = [name for name in (one, other) if getattr(self, name) is not None]
            if len(given) != 1:
                found.append(
                    fault(
                        f"source '{self.name}' has {'two' if given else 'no'} {what}{'s' if given else ''}",
                        at=tuple(given[1:]),
                        found=" and ".join(given) or "nothing",
                        expected=f"exactly one of [source.{one}] and [source.{other}]",
                        remedy="remove one of the two" if given else "add one of the two",
                    )
                )
        in_column = self.long is not None and self.long.measure is not None
        if in_column == (self.measure is not None):
            found.append(
                fault(
                    f"source '{self.name}' {'gives its measure twice' if in_column else 'has no measure'}",
                    at=("measure",) if in_column else (),
                    found="measure and long.measure" if in_column else "nothing",
                    expected="measure, or a column of measures (long.measure)",
                    remedy="remove one of the two" if in_column else "add measure",
                )
            )
        if self.annual_rate and self.frequency == "A":
            found.append(
                fault(
                    "annual_rate is for sub-annual figures",
                    at=("annual_rate",),
                    found="frequency A",
                    expected="frequency Q",
                    remedy="remove annual_rate",
                )
            )
        return found

    def _header_faults(self) -> list[PydanticCustomError]:
        if self.wide is None:
            return []
        rows = len(self.excel.header_rows) if self.excel else 1
        named: list[tuple[Place, int]] = [
            (("wide", "headers", dim), at) for dim, at in self.wide.headers.items()
        ]
        if self.wide.period_header is not None:
            named.append((("wide", "period_header"), self.wide.period_header))
        return [
            fault(
                "there is no such header row",
                at=place,
                found=str(at),
                expected=f"from 1 to {rows} (counted within the header)",
                remedy="correct the number",
            )
            for place, at in named
            if at > rows
        ]

    def _dim_faults(self) -> list[PydanticCustomError]:
        columns = self.columns()
        given = [*columns, *self.fixed, *(["area"] if self.area else [])]
        found = [
            fault(
                f"'{dim}' is given twice",
                at=("fixed", dim) if dim in self.fixed else (dim,) if dim == "area" else (),
                found=f"{dim}: " + " and ".join(_ways(self, dim)),
                expected="one way",
                remedy="remove one of the two",
            )
            for dim in dict.fromkeys(given)
            if given.count(dim) > 1
        ]
        with_labels = [*columns, *(["measure"] if self.long and self.long.measure else [])]
        found += [
            fault(
                f"codes for '{name}', of which the source has no labels",
                at=("codes", name),
                found=name,
                expected="one of: " + ", ".join(with_labels),
                remedy=did_you_mean(name, with_labels) or f"remove [source.codes.{name}]",
            )
            for name in self.codes
            if name not in with_labels
        ]
        return found

    def _measure_faults(self) -> list[PydanticCustomError]:
        found = []
        for name in self.measures():
            measure: Measure = load_measures()[name]
            if self.price_basis not in measure.price_bases:
                found.append(
                    fault(
                        f"price basis '{self.price_basis}' is not one of {name}",
                        at=("price_basis",),
                        found=self.price_basis,
                        expected="one of: " + ", ".join(measure.price_bases),
                        remedy="correct price_basis; measures on another basis are sources of their own",
                    )
                )
            for dim, applies in measure.dims:
                has_columns = dim in self.columns()
                fixed = {str(name): code for name, code in self.fixed.items()}.get(dim)
                if applies == "none" and self.measure and (has_columns or fixed not in (None, "_Z")):
                    found.append(
                        fault(
                            f"{name} has no dimension '{dim}'",
                            at=("fixed", dim) if fixed else (),
                            found=" and ".join(_ways(self, dim)),
                            expected=f"no {dim}",
                            remedy="remove it",
                        )
                    )
                if applies == "required" and not has_columns and fixed in (None, "_T", "_Z"):
                    found.append(
                        fault(
                            f"{name} needs the dimension '{dim}'",
                            at=("fixed", dim) if fixed else (),
                            found=fixed or "nothing",
                            expected=f"a column of {dim}, or a code below _T",
                            remedy=f"add {dim}",
                        )
                    )
        return found


class _File(Declared):
    title: Text
    area: Text
    currency: Text
    reference_year: int
    period: tuple[int, int]
    note: str = ""
    source: tuple[Source, ...]
    rules: dict[str, dict[str, Given]] = Field(default_factory=dict)

    @field_validator("period")
    @classmethod
    def _in_order(cls, period: tuple[int, int], info: ValidationInfo) -> tuple[int, int]:
        reference = info.data.get("reference_year")
        if period[0] > period[1]:
            raise fault(
                "the period is reversed",
                found=f"{period[0]} to {period[1]}",
                expected="first year, last year",
                remedy=f"period = [{period[1]}, {period[0]}]",
            )
        if reference is not None and not period[0] <= reference <= period[1]:
            raise fault(
                "the reference year is outside the period",
                found=f"{reference}, period {period[0]} to {period[1]}",
                expected=f"reference_year from {period[0]} to {period[1]}",
                remedy="correct reference_year or period",
            )
        return period

    @field_validator("rules")
    @classmethod
    def _as_declared(cls, rules: dict[str, dict[str, Given]]) -> dict[str, dict[str, Given]]:
        found = [one for file, given in rules.items() for one in faults_in(file, given, (file,))]
        if found:
            raise faults(found)
        return rules

    @field_validator("source")
    @classmethod
    def _distinct(cls, sources: tuple[Source, ...]) -> tuple[Source, ...]:
        if not sources:
            raise fault(
                "no source",
                found="nothing",
                expected="a [[source]] or more",
                remedy="declare the first source",
            )
        names = [source.name for source in sources]
        found = [
            fault(
                f"the source name '{name}' twice",
                at=(at, "name"),
                found=name,
                expected="a name of its own",
                remedy="rename one of the two",
            )
            for at, name in enumerate(names)
            if name in names[:at]
        ]
        if found:
            raise faults(found)
        return sources


@dataclass(frozen=True)
class Assembly:
    """A declared production.

    `period` is its first and last year; `rule_overrides` the parameters set under `[rules]`; `corrections` and
    `acceptances` what its people decided about single figures; `lists` the code lists with its areas and its own
    codes.
    """

    folder: Path
    title: str
    area: str
    currency: str
    reference_year: int
    period: tuple[int, int]
    note: str
    sources: tuple[Source, ...]
    rule_overrides: tuple[Parameter, ...]
    corrections: tuple[Entry[Correction], ...]
    acceptances: tuple[Entry[Acceptance], ...]
    lists: CodeLists = field(repr=False)
    lines: Mapping[Place, int] = field(repr=False)

    def line_of(self, source: str) -> int:
        """Return the line of a source's `[[source]]`. Raises KeyError for an unknown name."""
        for at, one in enumerate(self.sources):
            if one.name == source:
                return self.lines["source", at]
        raise KeyError(source)

    def sheets(self) -> dict[str, SourceSheet]:
        """Return source name -> its file and sheet."""
        return _sheets(self.sources)


def load_assembly(folder: Path) -> Assembly:
    """Read and check everything an assembly declares: `assembly.toml`, its corrections, acceptances and rules.

    Whether the source files exist is not looked at.

    Raises:
        DeclarationError: every fault of every file, each with its line and the nearest valid name.
    """
    path = folder / NAME
    if not path.is_file():
        raise DeclarationError(
            Problem(
                "no assembly here",
                str(path),
                found="no such file",
                expected=NAME,
                remedy=f"check the folder, or start one: keelbook new {folder}",
            )
        )
    data, lines = parse_toml(path)
    problems: list[Problem] = []

    def collected(load: Callable[[], Any], otherwise: Any) -> Any:
        try:
            return load()
        except DeclarationError as error:
            problems.extend(error.problems)
            return otherwise

    areas = _areas(data)
    lists: CodeLists = collected(lambda: load_code_lists(folder, areas), load_code_lists(areas=areas))
    declared = collected(lambda: validate(data, lines, path, _File, {"lists": lists, "folder": folder}), None)
    collected(lambda: rule_files(folder), None)
    collected(lambda: load_asset_rules(folder, lists), None)
    screening = {rule.id: rule for rule in collected(lambda: load_screening_rules(folder), ())}
    problems += _stray_rules(folder)
    # Both name sources, and cannot be judged while these are not known.
    sheets = _sheets(declared.source) if declared else {}
    corrections = collected(lambda: load_corrections(folder, lists, sheets), ()) if declared else ()
    acceptances = (
        collected(lambda: load_acceptances(folder, lists, sheets, screening), ()) if declared else ()
    )
    if problems:
        raise DeclarationError(list(dict.fromkeys(problems)))
    overrides = tuple(
        set_by(file, name, one, NAME, lines["rules", file, name])
        for file, given in declared.rules.items()
        for name, one in given.items()
    )
    return Assembly(
        folder,
        declared.title,
        declared.area,
        declared.currency,
        declared.reference_year,
        declared.period,
        declared.note,
        declared.source,
        overrides,
        corrections,
        acceptances,
        lists,
        lines,
    )


def _sheets(sources: Iterable[Source]) -> dict[str, SourceSheet]:
    return {one.name: SourceSheet(one.file, one.excel.sheet if one.excel else "") for one in sources}


def _stray_rules(folder: Path) -> list[Problem]:
    """A file that no loader reads would change nothing, silently."""
    valid = [f"{file}.toml" for file in declared_parameters()] + [
        "screening.toml",
        "assets.csv",
        "retirement.csv",
        "codes",
    ]
    rules = folder / "rules"
    found = [
        Problem(
            "not a rule file",
            str(path),
            found=path.name,
            expected="one of: " + ", ".join(valid),
            remedy=did_you_mean(path.name, valid) or "remove the file",
        )
        for path in (sorted(rules.iterdir()) if rules.is_dir() else ())
        if path.name not in valid
    ]
    meant = {
        path: nearest(path.stem, (Path(CORRECTIONS).stem, Path(ACCEPTANCES).stem), 1)
        for path in folder.glob("*.toml")
    }
    return found + [
        Problem(
            "a file that is not read",
            str(path),
            found=path.name,
            expected=f"{stems[0]}.toml",
            remedy="rename the file, or remove it",
        )
        for path, stems in sorted(meant.items())
        if stems and path.name not in (NAME, CORRECTIONS, ACCEPTANCES)
    ]


def _areas(data: Mapping[str, Any]) -> tuple[str, ...]:
    """Return the areas declared, before anything is validated."""
    raw = data.get("source")
    sources = [one for one in raw if isinstance(one, dict)] if isinstance(raw, list) else []
    areas = [data.get("area"), *(one.get("area") for one in sources)]
    for one in sources:
        codes = one.get("codes")
        labels = codes.get("area") if isinstance(codes, dict) else None
        areas += list(labels.values()) if isinstance(labels, dict) else []
    return tuple(dict.fromkeys(area for area in areas if isinstance(area, str) and area))


def _lists(info: ValidationInfo) -> CodeLists:
    lists: CodeLists = (info.context or {})["lists"]
    return lists


def _ways(source: Source, dim: str) -> list[str]:
    beside = source.long or source.wide
    ways = {
        "a column": beside is not None and dim in beside.dims(),
        "a header row": source.wide is not None and dim in source.wide.headers,
        "fixed": dim in source.fixed,
        "the source's area": dim == "area" and source.area is not None,
    }
    return [way for way, used in ways.items() if used]


def _unknown_measure(name: str, at: Place = ()) -> PydanticCustomError:
    return fault(
        f"unknown measure '{name}'",
        at=at,
        found=name,
        expected="a measure of schemas/measures.toml",
        remedy=did_you_mean(name, load_measures()) or "schemas/measures.toml lists the measures",
    )


def _unknown_code(lists: CodeLists, dim: str, code: str, at: Place) -> PydanticCustomError:
    return fault(
        f"unknown {dim} '{code}'",
        at=at,
        found=code,
        expected="one of: " + ", ".join(lists.codes(dim)),
        remedy=did_you_mean(code, lists.codes(dim)) or f"add the code in rules/codes/{dim}.csv",
    )
