"""CSV sources: the database reads large plain files, `csv` reads whatever needs care; both prove each line.

The row of a cell is the physical line on which its record starts.
"""

import codecs
import csv
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

import duckdb
import pandas as pd

from keelbook.readers.grid import Grid
from keelbook.readers.layout import Extent, Findings, find_columns, lay_out, long_roles
from keelbook.readers.numbers import NumberFormat
from keelbook.readers.place import Place
from keelbook.readers.staging import TABLE, Staged, literal, stage_frames

if TYPE_CHECKING:
    from keelbook.assembly.declaration import Csv, Marks, Source

_CHUNK_BYTES = 1 << 24
_CHUNK_RECORDS = 200_000
_WIDE_ENCODINGS = ("utf-16", "utf-16-le", "utf-16-be", "utf-32", "utf-32-le", "utf-32-be")
_SMALL_FILE = 1_000_000
"""Below this many bytes the exact route is as fast as the database."""
_SEARCHED_LINES = 50
"""Lines searched for a header that is not where it was declared."""


@dataclass(frozen=True)
class Survey:
    """What one pass over the bytes tells. `problem` says why the file cannot be read, "" if it can."""

    lines: int
    plain_newlines: bool
    windows_newlines: bool
    problem: str = ""


@dataclass(frozen=True)
class _File:
    path: Path
    csv: "Csv"
    encoding: str

    def opened(self) -> TextIO:
        """Open the file as text, newlines as they are; a byte order mark is not part of the first header."""
        encoding = "utf-8-sig" if self.encoding == "utf-8" else self.encoding
        return self.path.open(encoding=encoding, newline="")


@dataclass(frozen=True)
class _Record:
    line: int
    fields: list[str]
    raw: str


def number_format(csv: "Csv", marks: "Marks") -> NumberFormat:
    """Return how a CSV source writes figures."""
    return NumberFormat(csv.decimal, csv.thousands, marks.missing, marks.flags)


def stage_csv(
    con: duckdb.DuckDBPyConnection, path: Path, source: "Source", csv: "Csv", place: Place
) -> tuple[Staged | None, Findings]:
    """Stage a CSV source: one staged row per figure cell or unusable record.

    Returns:
        (what was staged, findings); nothing staged where the file or its header cannot be read.
    """
    file = _File(path, csv, codecs.lookup(csv.encoding).name)
    survey = survey_file(path, file.encoding)
    if survey.problem:
        return None, [_unreadable(place, survey.problem)]
    try:
        header = next(_records(file), None)
        if header is None or header.line != csv.header_line:
            line = f"line {csv.header_line}"
            return None, [
                place.finding(
                    "layout",
                    f"no header stands in {line}",
                    row=csv.header_line,
                    found="a blank line" if header else f"the end of the file, line {survey.lines}",
                    expected=f"a header in {line}",
                    remedy=f"correct header_line ({place.declared})",
                )
            ]
        if source.wide is not None:
            return _stage_wide(con, file, source, place)
        return _stage_long(con, file, source, place, header.fields, survey)
    except _BrokenRecordError as broken:
        return None, [_unreadable(place, str(broken), row=broken.line)]


def survey_file(path: Path, encoding: str) -> Survey:
    """Count the lines of a file and prove that it is text in the declared encoding."""
    decoder = codecs.getincrementaldecoder(encoding)()
    newlines = returns = pairs = offset = 0
    last = b""
    with path.open("rb") as file:
        while chunk := file.read(_CHUNK_BYTES):
            if encoding not in _WIDE_ENCODINGS and (at := chunk.find(b"\0")) >= 0:
                return Survey(
                    newlines, False, False, f"a NUL byte at byte {offset + at}: not text in {encoding}"
                )
            pending = len(decoder.getstate()[0])
            try:
                decoder.decode(chunk)
            except UnicodeDecodeError as error:
                return _undecodable(error, newlines, offset - pending, encoding)
            newlines += chunk.count(b"\n")
            if b"\r" in chunk or last.endswith(b"\r"):
                returns += chunk.count(b"\r")
                pairs += chunk.count(b"\r\n") + (last.endswith(b"\r") and chunk.startswith(b"\n"))
            offset += len(chunk)
            last = chunk
    try:
        decoder.decode(b"", final=True)
    except UnicodeDecodeError as error:
        return _undecodable(error, newlines, offset - len(error.object), encoding)
    if offset == 0:
        return Survey(0, False, False, "the file is empty")
    lines = newlines + (not last.endswith(b"\n"))
    return Survey(lines, returns == 0, returns == pairs == newlines)


def _undecodable(error: UnicodeDecodeError, newlines: int, start: int, encoding: str) -> Survey:
    at = start + error.start
    line = newlines + error.object[: error.start].count(b"\n") + 1
    byte = error.object[error.start]
    return Survey(
        newlines, False, False, f"not decodable as {encoding}: byte 0x{byte:02x} at byte {at}, line {line}"
    )


class _BrokenRecordError(Exception):
    def __init__(self, line: int, reason: str) -> None:
        self.line = line
        super().__init__(f"the record at line {line} cannot be read: {reason}")


def _unreadable(place: Place, problem: str, row: int | None = None) -> dict[str, object]:
    return place.finding(
        "unreadable_source",
        problem,
        row=row,
        found=problem,
        expected="a CSV file as declared",
        remedy=f"obtain the file again, or correct encoding and delimiter ({place.declared})",
    )


def _records(file: _File) -> Iterator[_Record]:
    """Read the header and the records after it, each with the line it starts on; blank lines hold none."""
    with file.opened() as text:
        seen: list[str] = []

        def lines() -> Iterator[str]:
            for line in islice(text, file.csv.header_line - 1, None):
                seen.append(line)
                yield line

        reader = csv.reader(lines(), delimiter=file.csv.delimiter, strict=True)
        start = file.csv.header_line
        try:
            for fields in reader:
                if any(fields):
                    yield _Record(start, fields, "".join(seen).rstrip("\r\n"))
                start = file.csv.header_line + reader.line_num
                seen.clear()
        except csv.Error as error:
            raise _BrokenRecordError(start, str(error)) from error


def _elsewhere(file: _File) -> Iterator[tuple[int, Sequence[str]]]:
    with file.opened() as text:
        for number, line in enumerate(islice(text, _SEARCHED_LINES), start=1):
            if number != file.csv.header_line:
                yield number, next(csv.reader([line], delimiter=file.csv.delimiter), [])


def _stage_wide(
    con: duckdb.DuckDBPyConnection, file: _File, source: "Source", place: Place
) -> tuple[Staged | None, Findings]:
    records = list(_records(file))
    width = len(records[0].fields)
    whole = [record for record in records if len(record.fields) == width]
    grid = Grid([record.fields for record in whole], [record.line for record in whole])
    line = file.csv.header_line
    form = number_format(file.csv, source.marks)
    cells, roles, findings = lay_out(grid, source, form, Extent((line,), line + 1), place)
    if cells is None:
        return None, findings
    ragged = [_ragged(record, width, roles) for record in records if len(record.fields) != width]
    return stage_frames(con, [cells, pd.DataFrame(ragged)] if ragged else [cells], roles), findings


def _stage_long(
    con: duckdb.DuckDBPyConnection,
    file: _File,
    source: "Source",
    place: Place,
    header: Sequence[str],
    survey: Survey,
) -> tuple[Staged | None, Findings]:
    line = file.csv.header_line
    extent = Extent((line,), line + 1)
    columns, findings = find_columns([header], long_roles(source), place, extent, lambda: _elsewhere(file))
    if findings:
        return None, findings
    value = columns.pop("value")
    plain = file.encoding == "utf-8" and line == 1 and (survey.plain_newlines or survey.windows_newlines)
    if plain and file.path.stat().st_size >= _SMALL_FILE:
        staged = _stage_plain(con, file, len(header), survey, columns, value)
        if staged is not None:
            return staged, []
    records = islice(_records(file), 1, None)
    return stage_frames(con, _long_frames(records, len(header), columns, value), list(columns)), []


def _stage_plain(
    con: duckdb.DuckDBPyConnection,
    file: _File,
    width: int,
    survey: Survey,
    columns: Mapping[str, int],
    value: int,
) -> Staged | None:
    """Let the database read the file; None where its records do not account for every physical line."""
    names = [f"f{j}" for j in range(width)]
    typed = ", ".join(f"'{name}': 'VARCHAR'" for name in names)
    newline = "\\r\\n" if survey.windows_newlines else "\\n"
    try:
        con.execute(
            f"create or replace temp table {TABLE} as select * from read_csv({literal(str(file.path))}, "
            f"auto_detect = false, header = true, delim = {literal(file.csv.delimiter)}, quote = '\"', "
            f"escape = '\"', new_line = '{newline}', strict_mode = true, null_padding = false, "
            f"columns = {{{typed}}})"
        )
    except (duckdb.InvalidInputException, duckdb.ConversionException):
        return None
    empty = " and ".join(f"{name} is null" for name in names)
    records, blank = con.execute(f"select count(*), count(*) filter (where {empty}) from {TABLE}").fetchall()[
        0
    ]
    if blank:
        return None
    row = "rowid + 2"
    if survey.lines != 1 + records:
        # Each record takes a line at least, so equality proves one line each; else newlines stand in quotes.
        inside = " + ".join(f"coalesce(length({n}) - length(replace({n}, chr(10), '')), 0)" for n in names)
        con.execute(
            f"create or replace temp table {TABLE} as select *, 2 + rowid + coalesce(sum({inside}) over "
            f'(order by rowid rows between unbounded preceding and 1 preceding), 0) as "row", '
            f"{inside} as newlines from {TABLE} order by rowid"
        )
        newlines = con.execute(f"select coalesce(sum(newlines), 0) from {TABLE}").fetchall()[0][0]
        if survey.lines != 1 + records + newlines:
            return None
        row = '"row"'
    return Staged(
        roles={role: names[j] for role, j in columns.items()},
        row=row,
        column=str(value + 1),
        raw=names[value],
        text=names[value],
        rule="''",
        fault="''",
    )


def _long_frames(
    records: Iterator[_Record], width: int, columns: Mapping[str, int], value: int
) -> Iterator[pd.DataFrame]:
    while chunk := list(islice(records, _CHUNK_RECORDS)):
        yield pd.DataFrame(
            [
                {
                    "row": record.line,
                    "column": value + 1,
                    "raw": record.fields[value],
                    "text": record.fields[value],
                    "rule": "",
                    "fault": "",
                    **{role: record.fields[j] for role, j in columns.items()},
                }
                if len(record.fields) == width
                else _ragged(record, width, columns)
                for record in chunk
            ]
        )


def _ragged(record: _Record, width: int, roles: Iterable[str]) -> dict[str, object]:
    """One staged row for a record whose fields cannot be matched to the header."""
    return {
        "row": record.line,
        "column": 1,
        "raw": record.raw,
        "text": "",
        "rule": "ragged_row",
        "fault": f"{len(record.fields)} fields where the header has {width}",
        **dict.fromkeys(roles, ""),
    }
