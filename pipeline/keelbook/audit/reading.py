"""Reading a published build: from a place (assembly, build folder or panel file) to series and figures."""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np

from keelbook.blocks import DIMS, F8, Choice
from keelbook.errors import DeclarationError, Problem
from keelbook.store.connect import open_read
from keelbook.store.generations import EVIDENCE, PANEL

KEY = (*DIMS, "measure", "method", "price_basis")


def panel_path(place: Path) -> Path:
    """Return the panel file of an assembly folder, a build folder, a generation or a panel file.

    Raises:
        DeclarationError: there is no build there.
    """
    for candidate in (place, place / PANEL, place / "build" / PANEL):
        if candidate.is_file():
            return candidate.resolve()
    raise DeclarationError(
        Problem(
            "no published build here",
            str(place),
            found="no panel.duckdb",
            expected="an assembly that was assembled, a build folder or a panel file",
            remedy=f"run: keelbook assemble {place}",
        )
    )


@dataclass(frozen=True)
class Series:
    """One row of the `series` table."""

    series_id: int
    key: Mapping[str, str]
    unit: str
    unit_mult: int
    chosen: bool
    formula_id: int
    method_set: int

    @property
    def label(self) -> str:
        """Return the key in short: measure, then the dimensions that are not totals, then form and prices."""
        dims = [self.key[dim] for dim in DIMS if self.key[dim] not in ("_T", "_Z", "S1")]
        basis = "" if self.key["price_basis"] == "_Z" else f", {self.key['price_basis']}"
        return f"{self.key['measure']}[{' '.join(dims)}] ({self.key['method']}{basis})"


@dataclass(frozen=True)
class Link:
    """One row of the `derivation` table."""

    role: str
    measure: str
    method: str
    price_basis: str
    kind: str
    project: Mapping[str, str]
    shift: int


@dataclass(frozen=True)
class Cell:
    """One observation with the source cell it was read from."""

    period: int
    frequency: str
    value: float
    status: str
    source: str
    file: str
    sha256: str
    sheet: str
    row: int
    column: int
    raw: str
    correction: "Corrected | None" = None


@dataclass(frozen=True)
class Corrected:
    """One row of the table `correction`; `old` is None where the cell gave no figure."""

    old: float | None
    new: float
    reason: str
    author: str
    date: str
    file: str
    line: int


class Build:
    """An open build. Figures withheld from the panel are read from the evidence file when it is there."""

    def __init__(self, place: Path) -> None:
        self.path = panel_path(place)
        self._con = open_read(self.path)
        evidence = self.path.with_name(EVIDENCE)
        self._evidence = open_read(evidence) if evidence.is_file() else None
        names = ("build_id", "title", "area", "currency", "reference_year", "first_year", "last_year")
        row = self._con.execute(f"select {', '.join(names)} from build").fetchall()[0]
        self.facts: Mapping[str, Any] = dict(zip(names, row, strict=True))
        self.periods = range(self.facts["first_year"] - 1, self.facts["last_year"] + 1)
        self.formulas = lru_cache(maxsize=None)(self._formula)
        self.links = lru_cache(maxsize=None)(self._links)
        self.choices = lru_cache(maxsize=None)(self._choices)
        self._withheld = self._read_withheld()

    def __enter__(self) -> "Build":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        self._con.close()
        if self._evidence is not None:
            self._evidence.close()

    @property
    def has_evidence(self) -> bool:
        return self._evidence is not None

    def rows(self, sql: str, parameters: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        """Return the rows of a query on the panel file."""
        return self._con.execute(sql, list(parameters)).fetchall()

    def frame(self, sql: str, parameters: Sequence[Any] = ()) -> Any:
        """Return a query on the panel file as a pandas frame."""
        return self._con.execute(sql, list(parameters)).df()

    def series(self, where: Mapping[str, Any]) -> list[Series]:
        """Return the series whose columns have the given values, in order of their numbers."""
        condition = " and ".join(f'"{name}" = ?' for name in where) or "true"
        columns = ", ".join(("series_id", *KEY, "unit", "unit_mult", "chosen", "formula_id", "method_set"))
        rows = self.rows(
            f"select {columns} from series where {condition} order by series_id", list(where.values())
        )
        return [
            Series(row[0], dict(zip(KEY, row[1 : len(KEY) + 1], strict=True)), *row[len(KEY) + 1 :])
            for row in rows
        ]

    def values(self, series_ids: Sequence[int]) -> F8:
        """Return the figures of some series, (T, len(series_ids)), NaN where there is none."""
        out = np.full((len(self.periods), len(series_ids)), np.nan)
        column = {number: i for i, number in enumerate(series_ids)}
        if not column:
            return out
        wanted = ", ".join(str(int(number)) for number in column)
        for number, period, value in self.rows(
            f"select series_id, period, value from figure where series_id in ({wanted})"
        ):
            figure = self._withheld.get((number, period), value) if value is None else value
            if figure is not None:
                out[period - self.periods.start, column[number]] = figure
        positions = [column[number] for number in series_ids]
        return out[:, positions]

    def is_withheld(self, series_id: int, year: int) -> bool:
        """Return whether the panel holds a figure without its value because it is confidential."""
        sql = "select count(*) from figure where series_id = ? and period = ? and conf_status > 0"
        return bool(self.rows(sql, (series_id, year))[0][0])

    def edge(self, series_id: int, role: str) -> tuple[int, int | None] | None:
        """Return the number of the series that one role of a series reads, and the year if it is a fixed one."""
        sql = "select input_series_id, input_period from edge where series_id = ? and role = ? and period is null"
        rows = self.rows(sql, (series_id, role))
        return (rows[0][0], rows[0][1]) if rows else None

    def cells(self, series: Series) -> list[Cell]:
        """Return the observations behind a delivered series, in order of time.

        Raises:
            DeclarationError: the evidence file is not beside the panel.
        """
        if self._evidence is None:
            raise DeclarationError(
                Problem(
                    "the source cells cannot be read",
                    str(self.path.with_name(EVIDENCE)),
                    found="no evidence file beside the panel",
                    expected="evidence.duckdb of the same build",
                    remedy="trace in the build folder, or a figure that is computed",
                )
            )
        names = (*DIMS, "measure", "price_basis")
        condition = " and ".join(f's."{name}" = ?' for name in names)
        rows = self._evidence.execute(
            f"""
            with wanted as (select * from observation_series s where {condition})
            select o.period, w.frequency, o.value, o.obs_status, w.source, f.file, f.sha256,
                   c.sheet, c."row", c."column", c.raw,
                   k.new is not null, k.old, k.new, k.reason, k.author, k.date, k.file, k.line
            from wanted w join observation o using (observation_series_id)
            join source_cell c using (cell_id) join source_file f using (file_id)
            left join correction k using (cell_id)
            order by o.period
            """,
            [series.key[name] for name in names],
        ).fetchall()
        statuses = self._codes("obs_status")
        return [_cell(row, statuses) for row in rows]

    @lru_cache(maxsize=8)  # noqa: B019 - a build is open for one command
    def _codes(self, name: str) -> list[str]:
        return [c for (c,) in self.rows("select code from code where list = ? order by position", (name,))]

    def _formula(self, formula_id: int) -> tuple[str, str, str]:
        sql = "select name, equation, citation from formula where formula_id = ?"
        name, equation, citation = self.rows(sql, (formula_id,))[0]
        return name, equation, citation

    def _links(self, formula_id: int) -> tuple[Link, ...]:
        rows = self.rows(
            'select "role", input_measure, input_method, input_price_basis, link, project, shift '
            "from derivation where formula_id = ? order by role_position",
            (formula_id,),
        )
        return tuple(
            Link(role, measure, method, basis, kind, _pairs(project), shift)
            for role, measure, method, basis, kind, project, shift in rows
        )

    def _choices(self, method_set: int) -> tuple[Choice, ...]:
        rows = self.rows(
            "select p.name, p.setting, p.file, p.line, p.citation from method_set m "
            "join parameter p using (parameter_id) where m.method_set = ? order by p.parameter_id",
            (method_set,),
        )
        return tuple(Choice(name, _value(text), *rest) for name, text, *rest in rows)

    def _read_withheld(self) -> dict[tuple[int, int], float]:
        if self._evidence is None:
            return {}
        rows = self._evidence.execute("select series_id, period, value from withheld_figure").fetchall()
        return {(number, period): value for number, period, value in rows}


def _cell(row: tuple[Any, ...], statuses: Sequence[str]) -> Cell:
    period, frequency, value, status, source, file, sha256, sheet, at, column, raw, corrected, *change = row
    return Cell(
        period,
        frequency,
        np.nan if value is None else value,
        statuses[status],
        source,
        file,
        sha256,
        sheet,
        at,
        column,
        raw,
        Corrected(*change) if corrected else None,
    )


def _pairs(text: str) -> dict[str, str]:
    """Return the projection written as `dim=code;dim=code`."""
    return dict(part.split("=", 1) for part in text.split(";") if part)


def _value(text: str) -> Any:
    """Return a parameter as it was: numbers and lists are written as JSON, text as it is."""
    try:
        value = json.loads(text)
    except json.JSONDecodeError:
        return text
    return tuple(value) if isinstance(value, list) else value


def projected(key: Mapping[str, str], project: Mapping[str, str], link: Link) -> dict[str, str]:
    """Return the key a role reads, for an output (or member) with the given key."""
    return {
        **{dim: project.get(dim, key[dim]) for dim in DIMS},
        "measure": link.measure,
        "price_basis": link.price_basis,
    }


def with_method(key: dict[str, Any], method: str) -> dict[str, Any]:
    """Return the condition for one method, or for the chosen series of whatever method."""
    return {**key, "chosen": True} if method == "*" else {**key, "method": method}
