"""From a staged table to arrays: texts become codes in the database, figures are read once."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import duckdb
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from keelbook.readers.numbers import NumberFormat, parse_texts

TABLE = "staged"
FIXED_COLUMNS = ("row", "column", "raw", "text", "rule", "fault")
"""Columns of a staged frame beside one per role: address, text as received, text to read, and why not."""


@dataclass(frozen=True)
class Staged:
    """One source in the temporary table `staged`, in file order; each part is an SQL expression over it.

    `roles` maps a role (time_period, measure, obs_status, conf_status or a dimension) to its column.
    `rule` and `fault` are non-empty for a cell the reader itself refuses.
    """

    roles: Mapping[str, str]
    row: str = '"row"'
    column: str = '"column"'
    raw: str = '"raw"'
    text: str = '"text"'
    rule: str = '"rule"'
    fault: str = '"fault"'
    sheet: str = ""


@dataclass(frozen=True, eq=False)
class TextColumn:
    """A column of N texts as distinct texts and codes into them."""

    labels: tuple[str, ...]
    codes: NDArray[np.int32]


@dataclass(frozen=True, eq=False)
class Reading:
    """One source, N cells in file order. `value` is NaN without a figure; `mark` is the position in the
    status list that the cell text itself carries (-1 for none); `faults` names (rule, reason) by position."""

    texts: Mapping[str, TextColumn]
    value: NDArray[np.float64]
    mark: NDArray[np.int8]
    row: NDArray[np.int32]
    column: NDArray[np.int16]
    faults: dict[int, tuple[str, str]]


def literal(text: str) -> str:
    """Return an SQL string literal."""
    return "'" + text.replace("'", "''") + "'"


def stage_frames(
    con: duckdb.DuckDBPyConnection, frames: Iterable[pd.DataFrame], roles: Sequence[str], sheet: str = ""
) -> Staged:
    """Put frames with `FIXED_COLUMNS` and one text column per role into the staging table, in order."""
    names = [*FIXED_COLUMNS, *roles]
    types = {"row": "INTEGER", "column": "SMALLINT"}
    columns = ", ".join(f'"{name}" {types.get(name, "VARCHAR")}' for name in names)
    con.execute(f"create or replace temp table {TABLE} ({columns})")
    listed = ", ".join(f'"{name}"' for name in names)
    for chunk in frames:
        con.register("staged_chunk", chunk)
        con.execute(f"insert into {TABLE} select {listed} from staged_chunk")
        con.unregister("staged_chunk")
    return Staged({role: f'"{role}"' for role in roles}, sheet=sheet)


def read_staged(
    con: duckdb.DuckDBPyConnection,
    staged: Staged,
    form: NumberFormat,
    statuses: Sequence[str],
    file_id: int,
    first_cell: int,
) -> Reading:
    """Store every staged cell in `source_cell` and return the source as arrays.

    Cell ids run from `first_cell` in file order. Plain figures are read by the database; only texts that are
    not plain come to Python. Periods, measures and labels arrive as integer codes.
    """
    con.execute(
        f'insert into source_cell (cell_id, file_id, sheet, "row", "column", raw) '
        f"select {first_cell} + rowid, {file_id}, {literal(staged.sheet)}, {staged.row}, {staged.column}, "
        f"coalesce({staged.raw}, '') from {TABLE}"
    )
    texts = {role: _text_column(con, column) for role, column in staged.roles.items()}
    figure = staged.text
    if form.thousands_mark:
        figure = f"replace({figure}, {literal(form.thousands_mark)}, '')"
    if form.decimal != ".":
        figure = f"replace({figure}, {literal(form.decimal)}, '.')"
    marks = ", ".join(literal(mark) for mark in form.marks)
    plain = (
        f"coalesce(regexp_full_match({staged.text}, {literal(form.pattern)}) "
        f"and {staged.text} not in ({marks}) and {staged.fault} = '' "
        f"and isfinite(try_cast({figure} as double)), false)"
    )
    arrays = con.execute(
        f"select case when {plain} then try_cast({figure} as double) else 'nan'::double end as value, "
        f'({staged.row})::integer as "row", ({staged.column})::smallint as "column" from {TABLE}'
    ).fetchnumpy()
    value = np.ascontiguousarray(arrays["value"])
    odd: list[tuple[int, str, str, str]] = []
    if np.isnan(value).any():
        odd = con.execute(
            f"select rowid, coalesce({staged.text}, ''), {staged.rule}, {staged.fault} from {TABLE} "
            f"where not {plain} order by rowid"
        ).fetchall()
    mark = np.full(len(value), -1, dtype=np.int8)
    faults = {at: (rule, fault) for at, _, rule, fault in odd if fault}
    unread = [(at, text) for at, text, _, fault in odd if not fault]
    if unread:
        at = np.array([place for place, _ in unread], dtype=np.int64)
        parsed = parse_texts([text for _, text in unread], form, statuses)
        value[at], mark[at] = parsed.value, parsed.status
        faults |= {int(at[place]): ("unreadable_number", fault) for place, fault in parsed.faults.items()}
    return Reading(
        texts,
        value,
        mark,
        np.ascontiguousarray(arrays["row"]),
        np.ascontiguousarray(arrays["column"]),
        faults,
    )


def _text_column(con: duckdb.DuckDBPyConnection, column: str) -> TextColumn:
    con.execute(
        f"create temp type staged_text as enum "
        f"(select distinct {column} from {TABLE} where {column} is not null order by 1)"
    )
    labels = [str(row[0]) for row in con.execute("select unnest(enum_range(null::staged_text))").fetchall()]
    codes = con.execute(
        f"select coalesce(enum_code({column}::staged_text)::integer, {len(labels)}) as code from {TABLE}"
    ).fetchnumpy()["code"]
    con.execute("drop type staged_text")
    if not len(codes) or codes.max() == len(labels):
        labels.append("")
    return TextColumn(tuple(labels), np.ascontiguousarray(codes).astype(np.int32, copy=False))
