"""Excel sources: values by calamine; what it hides (superscripts, errors, percentages) from the sheet."""

import re
import zipfile
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from datetime import date, datetime, time, timedelta
from io import BytesIO
from pathlib import Path
from typing import TYPE_CHECKING, Any
from xml.etree import ElementTree
from xml.parsers import expat

import duckdb
import numpy as np
from python_calamine import CalamineError, CalamineWorkbook, ZipError

from keelbook.errors import nearest
from keelbook.readers.grid import Grid
from keelbook.readers.layout import Extent, Findings, lay_out
from keelbook.readers.numbers import NumberFormat
from keelbook.readers.place import Place
from keelbook.readers.staging import Staged, stage_frames

if TYPE_CHECKING:
    from keelbook.assembly.declaration import Excel, Marks, Source

_MAX_MEMBER = 1 << 30
_MAX_TOTAL = 1 << 31
_MAX_RATIO = 300
_RATIO_FROM = 1 << 24
"""A member below this size may be packed as tightly as it likes."""
_MAX_CELLS = 50_000_000
"""Rows x columns a sheet may span: its values are held as one rectangle."""

_MAIN = "{http://schemas.openxmlformats.org/spreadsheetml/2006/main}"
_RELATION = "{http://schemas.openxmlformats.org/officeDocument/2006/relationships}id"
_ADDRESS = re.compile(rb'<c r="([A-Z]{1,3})([0-9]{1,7})"')
_BUILT_IN_PERCENT = {"9", "10"}


class _UnreadableError(Exception):
    """The workbook cannot be read at all, in words."""


class _RootReached(Exception):
    """Ends a parse at the first element: a document type can only be declared before it."""


@dataclass
class _Hidden:
    """What the sheet says and calamine does not, by physical (row, column) from 1."""

    raws: dict[tuple[int, int], str] = field(default_factory=dict)
    texts: dict[tuple[int, int], str] = field(default_factory=dict)
    faults: dict[tuple[int, int], str] = field(default_factory=dict)


_BROKEN = (
    zipfile.BadZipFile, KeyError, ElementTree.ParseError, expat.ExpatError, CalamineError, ZipError, EOFError,
    NotImplementedError,
)  # fmt: skip
"""What damaged archives and parts make the libraries raise."""


def number_format(marks: "Marks") -> NumberFormat:
    """Return how figures stand in a workbook: numbers are numbers; text, where it is read, has a point."""
    return NumberFormat(missing=marks.missing, flags=marks.flags)


def stage_excel(
    con: duckdb.DuckDBPyConnection, path: Path, source: "Source", excel: "Excel", place: Place
) -> tuple[Staged | None, Findings]:
    """Stage the declared block of a worksheet: one staged row per figure cell.

    Returns:
        (what was staged, findings); nothing staged where the workbook or its layout cannot be read.
    """
    try:
        with _opened(path) as archive:
            sheets = _sheet_members(archive)
            if excel.sheet not in sheets:
                return None, [_no_sheet(place, excel.sheet, list(sheets))]
            grid = _read_grid(path, archive, excel.sheet, sheets[excel.sheet])
    except (_UnreadableError, *_BROKEN) as error:
        problem = str(error) if isinstance(error, _UnreadableError) else f"not a readable workbook: {error}"
        return None, [
            place.finding(
                "unreadable_source",
                problem,
                found=problem,
                expected="an .xlsx workbook",
                remedy=f"obtain the file again, or correct {place.declared}",
            )
        ]
    extent = Extent(excel.header_rows, excel.first_row, excel.last_row, ends_blank=True)
    cells, roles, findings = lay_out(grid, source, number_format(source.marks), extent, place)
    if cells is None:
        return None, findings
    return stage_frames(con, [cells], roles, sheet=excel.sheet), findings


def _no_sheet(place: Place, sheet: str, present: list[str]) -> dict[str, Any]:
    close = nearest(sheet, present)
    hint = f"did you mean '{close[0]}'? " if close else ""
    return place.finding(
        "layout",
        f"the workbook has no sheet '{sheet}'",
        found="sheets " + ", ".join(f"'{name}'" for name in present),
        expected=f"the sheet '{sheet}'",
        remedy=f"{hint}if the supplier renamed the sheet, correct {place.declared}",
    )


def _opened(path: Path) -> zipfile.ZipFile:
    """Open the archive after checking sizes and that no part declares a document type."""
    if path.stat().st_size == 0:
        raise _UnreadableError("the file is empty")
    if not zipfile.is_zipfile(path):
        raise _UnreadableError("the file is not an .xlsx workbook (not a zip archive)")
    archive = zipfile.ZipFile(path)
    try:
        members = archive.infolist()
        if sum(member.file_size for member in members) > _MAX_TOTAL:
            raise _UnreadableError(f"the workbook unpacks to more than {_MAX_TOTAL} bytes")
        for member in members:
            packed = max(member.compress_size, 1)
            if member.file_size > _MAX_MEMBER or (
                member.file_size > _RATIO_FROM and member.file_size / packed > _MAX_RATIO
            ):
                raise _UnreadableError(
                    f"the part {member.filename} unpacks to {member.file_size} bytes from {packed}"
                )
            if member.filename.endswith((".xml", ".rels")):
                _refuse_document_type(archive, member.filename)
    except BaseException:
        archive.close()
        raise
    return archive


def _refuse_document_type(archive: zipfile.ZipFile, name: str) -> None:
    def refuse(*_: Any) -> None:
        raise _UnreadableError(f"the part {name} declares a document type, which no workbook needs")

    def stop(*_: Any) -> None:
        raise _RootReached

    parser = expat.ParserCreate()
    parser.StartDoctypeDeclHandler = refuse
    parser.StartElementHandler = stop
    with archive.open(name) as part:
        try:
            while chunk := part.read(1 << 14):
                parser.Parse(chunk)
        except _RootReached:
            return


def _sheet_members(archive: zipfile.ZipFile) -> dict[str, str]:
    """Return sheet name -> archive member."""
    targets = {
        relation.get("Id"): relation.get("Target", "")
        for relation in ElementTree.fromstring(archive.read("xl/_rels/workbook.xml.rels"))
    }
    book = ElementTree.fromstring(archive.read("xl/workbook.xml"))
    out = {}
    for sheet in book.iter(f"{_MAIN}sheet"):
        target = targets.get(sheet.get(_RELATION), "")
        out[sheet.get("name", "")] = target.lstrip("/") if target.startswith("/") else f"xl/{target}"
    return out


def _read_grid(path: Path, archive: zipfile.ZipFile, name: str, member: str) -> Grid:
    content = archive.read(member)
    expat.ParserCreate().Parse(content, True)  # calamine reads on past damaged markup without a word
    last_row, last_column = 0, 0
    for letters, digits in set(_ADDRESS.findall(content)):
        last_row, last_column = max(last_row, int(digits)), max(last_column, _column(letters.decode()))
    if last_row * last_column > _MAX_CELLS:
        raise _UnreadableError(f"the sheet spans {last_row} rows x {last_column} columns")
    hidden = _hidden(archive, content)
    workbook = CalamineWorkbook.from_path(str(path))
    try:
        sheet = workbook.get_sheet_by_name(name)
        top, left = sheet.start or (0, 0)
        values = sheet.to_python(skip_empty_area=True)
        merged = [(a, b, c, d) for (a, b), (c, d) in sheet.merged_cell_ranges or ()]
    finally:
        workbook.close()
    rows: list[list[str]] = [[] for _ in range(top)]
    texts, faults = set(), {}
    for i, line in enumerate(values, start=top):
        row = [""] * left
        for j, value in enumerate(line, start=left):
            text, fault = _cell_text(value)
            if fault:
                faults[i, j] = fault
            elif text and isinstance(value, str):
                texts.add((i, j))
            row.append(text)
        rows.append(row)
    shift = {(i - 1, j - 1): text for (i, j), text in hidden.texts.items()}
    for (i, j), text in shift.items():
        rows.extend([] for _ in range(i + 1 - len(rows)))
        rows[i].extend([""] * (j + 1 - len(rows[i])))
        rows[i][j] = text
    return Grid(
        rows,
        range(1, len(rows) + 1),
        raws={(i - 1, j - 1): raw for (i, j), raw in hidden.raws.items()},
        faults=faults | {(i - 1, j - 1): fault for (i, j), fault in hidden.faults.items()},
        texts=frozenset(texts),
        merged=merged,
    )


def _cell_text(value: object) -> tuple[str, str]:
    """Return (text, why the cell cannot be a figure). A number is written so that it reads back exactly."""
    if isinstance(value, bool):
        return str(value).upper(), "a truth value where a number is expected"
    if isinstance(value, float):
        return np.format_float_positional(value, trim="-"), ""
    if isinstance(value, int | str):
        return str(value), ""
    if isinstance(value, date | datetime | time | timedelta):
        return value.isoformat() if not isinstance(value, timedelta) else str(value), (
            "a date or time where a number is expected"
        )
    return str(value), "not a number"


def _hidden(archive: zipfile.ZipFile, content: bytes) -> _Hidden:
    """Read superscript runs, errors, percentages and formulas without a result from the sheet's own XML."""
    shared = _superscripts(archive)
    percent = _percent_styles(archive)
    hidden = _Hidden()
    if not (shared or percent or b"vertAlign" in content or b't="e"' in content or b"<f" in content):
        return hidden
    for cell in _cells(content):
        if not (reference := cell.get("r")):
            raise _UnreadableError("the sheet has cells without an address")
        at = _address(reference)
        kind = cell.get("t", "n")
        value = cell.findtext(f"{_MAIN}v") or ""
        if kind == "e":
            hidden.faults[at] = f"the error value {value}"
            hidden.texts[at] = value
        elif cell.find(f"{_MAIN}f") is not None and value == "":
            hidden.faults[at] = "a formula without a stored result"
        elif kind == "n" and value and int(cell.get("s", "0")) in percent:
            hidden.faults[at] = "a percentage where a plain number is expected"
        split = shared.get(int(value)) if kind == "s" and value else None
        if kind == "inlineStr":
            split = _split_runs(cell.find(f"{_MAIN}is"))
        if split is not None:
            hidden.texts[at], hidden.raws[at] = split
    return hidden


def _cells(content: bytes) -> Iterator[ElementTree.Element]:
    """Give the cells of a sheet one by one, without keeping the sheet."""
    for _, element in ElementTree.iterparse(BytesIO(content)):
        if element.tag == f"{_MAIN}c":
            yield element
        elif element.tag == f"{_MAIN}row":
            element.clear()


def _split_runs(item: ElementTree.Element | None) -> tuple[str, str] | None:
    """Return (text without superscript runs, text with them shown as ^1), or None where there are none."""
    if item is None:
        return None
    text = raw = ""
    found = False
    for run in item.findall(f"{_MAIN}r"):
        part = run.findtext(f"{_MAIN}t") or ""
        align = run.find(f"{_MAIN}rPr/{_MAIN}vertAlign")
        if align is not None and align.get("val") == "superscript":
            found = True
            raw += f"^{part}"
        else:
            text += part
            raw += part
    return (text, raw) if found else None


def _superscripts(archive: zipfile.ZipFile) -> Mapping[int, tuple[str, str]]:
    if "xl/sharedStrings.xml" not in archive.namelist():
        return {}
    content = archive.read("xl/sharedStrings.xml")
    if b"vertAlign" not in content:
        return {}
    items = ElementTree.fromstring(content).findall(f"{_MAIN}si")
    splits = {at: _split_runs(item) for at, item in enumerate(items)}
    return {at: split for at, split in splits.items() if split is not None}


def _percent_styles(archive: zipfile.ZipFile) -> frozenset[int]:
    if "xl/styles.xml" not in archive.namelist():
        return frozenset()
    styles = ElementTree.fromstring(archive.read("xl/styles.xml"))
    custom = {
        item.get("numFmtId", "")
        for item in styles.iter(f"{_MAIN}numFmt")
        if "%" in re.sub(r'"[^"]*"|\\.', "", item.get("formatCode", ""))
    }
    formats = styles.find(f"{_MAIN}cellXfs")
    return frozenset(
        at
        for at, style in enumerate(formats if formats is not None else ())
        if style.get("numFmtId", "0") in custom | _BUILT_IN_PERCENT
    )


def _address(reference: str) -> tuple[int, int]:
    letters = reference.rstrip("0123456789")
    return int(reference[len(letters) :]), _column(letters)


def _column(letters: str) -> int:
    number = 0
    for letter in letters:
        number = number * 26 + ord(letter) - ord("A") + 1
    return number
