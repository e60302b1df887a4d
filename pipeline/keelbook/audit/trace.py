"""Trace: re-perform one figure from its stored inputs, and explain it term by term down to the source cell."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from keelbook.audit.reading import Build, Cell, Link, Series, projected, with_method
from keelbook.blocks import DIMS, F8, Choice
from keelbook.errors import DeclarationError, NotReproduced, Problem, nearest
from keelbook.lineage.formula import Formula, Setting, values_of
from keelbook.lineage.primitives import Groups, Rule
from keelbook.stages.catalogue import FORMULAS

TOLERANCE = 1e-12
"""methods.md section 9: relative to the sum of the sizes of the terms."""


@dataclass(frozen=True)
class Input:
    """One term of a figure: which figure or cell it is, and what it does in the formula."""

    role: str
    value: float
    weight: float
    contribution: float
    period: str
    series: Series | None = None
    cell: Cell | None = None


@dataclass(frozen=True)
class Traced:
    """One figure re-performed."""

    series: Series
    year: int
    stored: float
    recomputed: float
    allowed: float
    formula: str
    equation: str
    citation: str
    choices: tuple[Choice, ...]
    inputs: tuple[Input, ...]

    @property
    def reproduced(self) -> bool:
        return abs(self.stored - self.recomputed) <= self.allowed


def find(build: Build, measure: str, wanted: Mapping[str, str | None]) -> Series:
    """Return the one series that is meant.

    What is left out is resolved if there is one answer: first the chosen method, then totals of dimensions.

    Raises:
        DeclarationError: no such series (with the nearest names), or several (with the choices).
    """
    given = {name: value for name, value in wanted.items() if value is not None}
    found = build.series({"measure": measure, **given})
    if not found:
        _check_codes(build, measure, given)
        raise DeclarationError(
            Problem(
                f"no series of {measure} with {_text(given)}",
                str(build.path),
                expected="; ".join(sorted({s.label for s in build.series({"measure": measure})})[:6]),
                remedy="leave out an option to see what there is",
            )
        )
    for narrow in _narrowings(given):
        if len(found) > 1:
            found = [s for s in found if narrow(s)] or found
    if len(found) > 1:
        raise DeclarationError(
            Problem(
                f"{len(found)} series of {measure} fit",
                str(build.path),
                expected="one of: "
                + "; ".join(s.label for s in found[:8])
                + ("; ..." if len(found) > 8 else ""),
                remedy="add one of " + " ".join(f"--{name.replace('_', '-')}" for name in _differing(found)),
            )
        )
    return found[0]


def _narrowings(given: Mapping[str, str]) -> list[Any]:
    out: list[Any] = []
    if "method" not in given:
        out.append(lambda s: s.chosen)
    for dim in DIMS:
        if dim not in given and dim not in ("area", "sector"):
            out.append(lambda s, dim=dim: s.key[dim] in ("_T", "_Z"))
    if "price_basis" not in given:
        out.append(lambda s: s.key["price_basis"] in ("constant", "index", "_Z"))
    return out


def _differing(found: list[Series]) -> list[str]:
    return [name for name in found[0].key if len({s.key[name] for s in found}) > 1]


def _check_codes(build: Build, measure: str, given: Mapping[str, str]) -> None:
    problems = []
    for name, value in (("measure", measure), *given.items()):
        valid = [v for (v,) in build.rows(f'select distinct "{name}" from series')]
        if value not in valid:
            close = nearest(value, valid) or sorted(valid)[:8]
            problems.append(
                Problem(
                    f"there is no {name.replace('_', ' ')} '{value}' in this build",
                    str(build.path),
                    found=value,
                    expected="for example " + ", ".join(close),
                    remedy="correct the name",
                )
            )
    if problems:
        raise DeclarationError(problems)


def _text(given: Mapping[str, str]) -> str:
    return ", ".join(f"{name} {value}" for name, value in given.items()) or "these codes"


def trace(build: Build, series: Series, year: int) -> Traced:
    """Re-perform one figure of a series and list its terms.

    Raises:
        DeclarationError: there is no figure in that year, or the panel lacks what its inputs need.
    """
    row = year - build.periods.start
    values = build.values([series.series_id])[:, 0]
    if not 0 <= row < len(values) or np.isnan(values[row]):
        if build.is_withheld(series.series_id, year):
            raise DeclarationError(
                Problem(
                    f"{series.label} is withheld in {year}: it rests on a confidential figure",
                    str(build.path),
                    found="no evidence file beside the panel",
                    expected="evidence.duckdb of the same build",
                    remedy="trace in the build folder, if you may see confidential figures",
                )
            )
        there = [build.periods[i] for i in np.flatnonzero(np.isfinite(values))]
        raise DeclarationError(
            Problem(
                f"{series.label} has no figure in {year}",
                str(build.path),
                expected=f"a year from {there[0]} to {there[-1]}" if there else "a series with figures",
                remedy="choose another year",
            )
        )
    again = re_perform(build, series)
    name, equation, citation = build.formulas(series.formula_id)
    terms = list(again.rule.terms(again.x, (row, 0)))
    inputs = tuple(
        again.lines[t.role].as_input(build, t.row, t.column, t.value, t.weight, t.contribution) for t in terms
    )
    return Traced(
        series,
        year,
        float(values[row]),
        float(again.value[row]),
        again.allowed(row),
        name,
        equation,
        citation,
        build.choices(series.method_set),
        inputs,
    )


@dataclass(frozen=True, eq=False)
class Again:
    """A whole series computed again: its rule, the inputs lined up, and the values (T,)."""

    rule: Rule
    lines: Sequence["_Line"]
    x: Sequence[F8]
    value: F8

    def allowed(self, row: int) -> float:
        """Return how far the stored figure of a row may differ: 1e-12 of the sizes of its terms."""
        sizes = sum(abs(term.contribution) for term in self.rule.terms(self.x, (row, 0)))
        return TOLERANCE * (sizes + abs(float(self.value[row])))


def re_perform(build: Build, series: Series) -> Again:
    """Compute a series again from its stored inputs, with the formula and parameters the build records."""
    formula = FORMULAS[build.formulas(series.formula_id)[0]]
    lines = _line_up(build, series, formula)
    width = len(lines[0].columns) if formula.kind == "group" else 1
    groups = Groups(np.zeros(width, np.int32), 1)
    choices = values_of([build.choices(series.method_set)])
    rule = formula.build(Setting(choices, np.zeros(1, np.int32), build.periods, groups))
    x = [line.value for line in lines]
    return Again(rule, lines, x, rule.compute(*x)[:, 0])


def differing(build: Build, series: Series, years: Sequence[int]) -> list[tuple[int, float, float]]:
    """Return year, stored and recomputed figure of those years in which a series is not reproduced."""
    again = re_perform(build, series)
    stored = build.values([series.series_id])[:, 0]
    out = []
    for year in years:
        row = year - build.periods.start
        gap = abs(stored[row] - again.value[row])
        # The terms are only gone through where the figures are not equal to the last digits anyway.
        if not gap <= TOLERANCE * abs(again.value[row]) and not gap <= again.allowed(row):
            out.append((year, float(stored[row]), float(again.value[row])))
    return out


def must_reproduce(traced: Traced) -> None:
    """Raise NotReproduced if the stored figure is not what its inputs give."""
    if not traced.reproduced:
        raise NotReproduced(
            Problem(
                "the stored figure differs from its re-performance",
                place=f"{traced.series.label} in {traced.year}",
                found=repr(traced.stored),
                expected=repr(traced.recomputed),
                remedy="do not use this build: assemble again, and ask who changed the file",
            )
        )


def rests_on_cells(build: Build, series: Series) -> bool:
    """Return whether a series is read from source cells, which are in the evidence file."""
    return any(link.kind == "observation" for link in build.links(series.formula_id))


@dataclass(frozen=True)
class _Line:
    """One input lined up with the traced figure: values (T, M), and where each of them comes from."""

    role: str
    value: F8
    columns: tuple[Series | None, ...]
    shift: int
    fixed_row: int | None = None
    cells: tuple[tuple[Cell | None, ...], ...] = field(default=())

    def as_input(
        self, build: Build, row: int, column: int, value: float, weight: float, contribution: float
    ) -> Input:
        if self.cells:
            cell = self.cells[row][column]
            period = _period_text(cell) if cell is not None else ""
            return Input(self.role, value, weight, contribution, period, cell=cell)
        at = row + self.shift if self.fixed_row is None else self.fixed_row
        series = self.columns[column]
        return Input(self.role, value, weight, contribution, str(build.periods[at]), series=series)


def _line_up(build: Build, series: Series, formula: Formula) -> list[_Line]:
    lines: list[_Line] = []
    members: list[Series] = [series]
    for position, link in enumerate(build.links(series.formula_id)):
        if formula.kind == "group" and position == 0:
            members = _members(build, series, link)
            lines.append(_line(build, link, list(members)))
        elif link.kind == "observation":
            lines.append(_observed(build, link, series))
        elif link.kind == "edge":
            found = build.edge(series.series_id, link.role)
            number, year = found if found is not None else (-1, None)
            lines.append(_line(build, link, [_by_number(build, number)], year))
        else:
            lines.append(_line(build, link, _at(build, members, link)))
    return lines


def _members(build: Build, series: Series, link: Link) -> list[Series]:
    """Return the parts of a total: same key but for the dimensions summed over, marked as parts."""
    key = {dim: series.key[dim] for dim in DIMS if dim not in link.project}
    where = {**key, "measure": link.measure, "price_basis": link.price_basis, "part": True}
    return build.series(with_method(where, link.method))


def _at(build: Build, members: Sequence[Series], link: Link) -> list[Series | None]:
    """Return the series that one role reads for every member, found in one query."""
    wanted = [projected(member.key, link.project, link) for member in members]
    shared = {dim: wanted[0][dim] for dim in DIMS if len({key[dim] for key in wanted}) == 1}
    where = {**shared, "measure": link.measure, "price_basis": link.price_basis}
    found = {tuple(s.key[dim] for dim in DIMS): s for s in build.series(with_method(where, link.method))}
    return [found.get(tuple(key[dim] for dim in DIMS)) for key in wanted]


def _by_number(build: Build, number: int) -> Series | None:
    found = build.series({"series_id": number})
    return found[0] if found else None


def _line(build: Build, link: Link, columns: list[Series | None], year: int | None = None) -> _Line:
    values = np.full((len(build.periods), len(columns)), np.nan)
    there = [i for i, s in enumerate(columns) if s is not None]
    values[:, there] = build.values([s.series_id for s in columns if s is not None])
    if link.kind == "reference":
        year = build.facts["reference_year"]
    fixed = None if year is None else year - build.periods.start
    if fixed is not None:
        values = np.broadcast_to(values[fixed], values.shape)
    elif link.shift:
        moved = np.full_like(values, np.nan)
        if link.shift < 0:
            moved[-link.shift :] = values[: link.shift]
        else:
            moved[: -link.shift] = values[link.shift :]
        values = moved
    return _Line(link.role, values, tuple(columns), link.shift, fixed)


def _observed(build: Build, link: Link, series: Series) -> _Line:
    cells = build.cells(series)
    per_year = 4 if any(cell.frequency == "Q" for cell in cells) else 1
    first = build.periods.start * per_year
    count = len(build.periods) * per_year
    values = np.full((count, 1), np.nan)
    at: list[Cell | None] = [None] * count
    for cell in cells:
        if 0 <= cell.period - first < count:
            values[cell.period - first, 0] = cell.value
            at[cell.period - first] = cell
    return _Line(link.role, values, (None,), 0, cells=tuple((cell,) for cell in at))


def _period_text(cell: Cell) -> str:
    if cell.frequency == "Q":
        return f"{cell.period // 4}-Q{cell.period % 4 + 1}"
    return str(cell.period)
