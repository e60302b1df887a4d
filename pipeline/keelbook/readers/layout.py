"""Declared layouts: where the labels, the periods and the figures of a grid stand."""

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import pandas as pd

from keelbook.contracts.codes import DIMS
from keelbook.errors import nearest
from keelbook.readers.grid import Grid
from keelbook.readers.numbers import NumberFormat, split_footnote
from keelbook.readers.periods import expected_period, parse_period
from keelbook.readers.place import Place

if TYPE_CHECKING:
    from keelbook.assembly.declaration import Source

ROLES = ("time_period", "measure", "obs_status", "conf_status", *DIMS)
"""What a column beside the figures can say."""

Findings = list[dict[str, Any]]


@dataclass(frozen=True)
class Extent:
    """The physical rows of a block: its header rows, its first and last row of figures.

    Without a last row the block runs to the end of the grid or, if `ends_blank`, to the first row whose
    label cells are all empty.
    """

    header: tuple[int, ...]
    first: int
    last: int | None = None
    ends_blank: bool = False

    @property
    def header_text(self) -> str:
        """The header rows in words."""
        rows = f"row {self.header[0]}"
        return rows if len(self.header) == 1 else f"{rows} to {self.header[-1]}"


def header_key(text: str) -> str:
    """Return a header as it is compared: without footnote marks, runs of blanks as one."""
    return " ".join(split_footnote(text)[0].split())


def long_roles(source: "Source") -> dict[str, str]:
    """Return role -> declared header text of a long source, the figures under "value"."""
    declared = {role: getattr(source.long, role, None) for role in (*ROLES, "value")}
    return {role: text for role, text in declared.items() if text is not None}


def find_columns(
    headers: Sequence[Sequence[str]],
    wanted: Mapping[str, str],
    place: Place,
    extent: Extent,
    elsewhere: Callable[[], Iterator[tuple[int, Sequence[str]]]],
) -> tuple[dict[str, int], Findings]:
    """Find the column of each declared header.

    Args:
        headers: the texts of each header row.
        wanted: role -> header text.
        elsewhere: gives (physical row, texts) of rows to search for a header that is not where declared.

    Returns:
        role -> column (from 0) and, for every header that is not there exactly once, a `layout` finding.
    """
    width = max((len(row) for row in headers), default=0)
    columns: dict[str, list[int]] = {}
    for j in range(width):
        for key in dict.fromkeys(header_key(row[j]) for row in headers if j < len(row)):
            if key:
                columns.setdefault(key, []).append(j)
    found: dict[str, int] = {}
    findings: Findings = []
    for role, text in wanted.items():
        at = columns.get(header_key(text), [])
        if at and (len(at) == 1 or _one_merged(headers, at, header_key(text))):
            found[role] = at[0]
            continue
        fields: dict[str, Any] = {
            "row": extent.header[0],
            "expected": f"the header '{text}' in {extent.header_text}",
        }
        if at:
            findings.append(
                place.finding(
                    "layout",
                    f"the header '{text}' stands over {len(at)} columns",
                    **fields,
                    column=at[1] + 1,
                    found="columns " + ", ".join(str(j + 1) for j in at),
                    remedy=f"have the columns told apart, then correct {place.declared}",
                )
            )
            continue
        findings.append(
            place.finding(
                "layout",
                f"the header '{text}' ({role}) is not in {extent.header_text}",
                **fields,
                **_where_else(header_key(text), columns, place, elsewhere),
            )
        )
    return found, findings


def _one_merged(headers: Sequence[Sequence[str]], at: Sequence[int], key: str) -> bool:
    """Whether just one of the columns has the header in every header row (a label column beside groups)."""
    return sum(all(j < len(row) and header_key(row[j]) == key for row in headers) for j in at) == 1


def _where_else(
    key: str,
    columns: Mapping[str, Sequence[int]],
    place: Place,
    elsewhere: Callable[[], Iterator[tuple[int, Sequence[str]]]],
) -> dict[str, str]:
    moved = next((line for line, texts in elsewhere() if key in map(header_key, texts)), None)
    if moved is not None:
        return {
            "found": f"found in row {moved}",
            "remedy": f"if the supplier moved the header, correct the rows declared in {place.declared}",
        }
    close = nearest(key, columns)
    shown = close or list(columns)[:8]
    hint = f"did you mean '{close[0]}'? " if close else ""
    return {
        "found": "headers " + ", ".join(f"'{name}'" for name in shown) if shown else "no header at all",
        "remedy": f"{hint}if the supplier renamed the column, correct {place.declared}",
    }


def lay_out(
    grid: Grid, source: "Source", form: NumberFormat, extent: Extent, place: Place
) -> tuple[pd.DataFrame | None, list[str], Findings]:
    """Turn a grid into one staged row per figure cell, in reading order.

    Merged label and header cells count for every cell they cover; a figure in a merged cell is refused, as
    it could belong to any of them.

    Returns:
        (staged frame, its roles, findings); no frame where the layout does not hold.
    """
    filled = grid.filled()
    index = {line: i for i, line in enumerate(grid.lines)}
    blank = [""] * max((len(row) for row in filled), default=0)
    headers = [filled[index[line]] if line in index else blank for line in extent.header]

    def elsewhere() -> Iterator[tuple[int, Sequence[str]]]:
        return ((line, filled[i]) for i, line in enumerate(grid.lines) if line not in extent.header)

    wide = source.wide
    if wide is None:
        wanted = long_roles(source)
    else:
        wanted = {dim: text for dim in DIMS if (text := getattr(wide, dim)) is not None}
        if wide.period_column is not None:
            wanted["time_period"] = wide.period_column
    beside, findings = find_columns(headers, wanted, place, extent, elsewhere)
    if findings:
        return None, [], findings
    value_columns: list[int]
    above: dict[str, list[str]] = {}
    if wide is None:
        value_columns = [beside.pop("value")]
    else:
        above = {dim: headers[at - 1] for dim, at in wide.headers.items()}
        if wide.period_header is not None:
            above["time_period"] = headers[wide.period_header - 1]
    rows = _block_rows(grid, filled, extent, list(beside.values()))
    if not rows:
        where = f"row {extent.first}"
        empty = place.finding(
            "layout",
            "the block holds no row of figures",
            row=extent.first,
            found=f"{where} has no label",
            expected=f"the first row of figures in {where}",
            remedy=f"correct {place.declared}",
        )
        return None, [], [empty]
    if wide is not None:
        others = [j for j in range(len(blank)) if j not in beside.values()]
        filled_in = [j for j in others if any(filled[i][j].strip() for i in rows)]
        if wide.period_header is not None:
            row = extent.header[wide.period_header - 1]
            value_columns, findings = _period_columns(
                above["time_period"], others, filled_in, source.frequency, place, row, elsewhere
            )
        else:
            labels = list(above.values())
            value_columns, findings = _labelled_columns(labels, others, filled_in, place, extent)
        if findings:
            return None, [], findings
    return _frame(grid, filled, source, form, rows, value_columns, beside, above), [*beside, *above], findings


def _block_rows(grid: Grid, filled: list[list[str]], extent: Extent, beside: Sequence[int]) -> list[int]:
    rows: list[int] = []
    for i, line in enumerate(grid.lines):
        if line < extent.first:
            continue
        if extent.last is not None and line > extent.last:
            break
        if extent.ends_blank and extent.last is None and not any(filled[i][j].strip() for j in beside):
            break
        rows.append(i)
    return rows


def _period_columns(
    texts: Sequence[str],
    others: Sequence[int],
    filled_in: Sequence[int],
    frequency: str,
    place: Place,
    row: int,
    elsewhere: Callable[[], Iterator[tuple[int, Sequence[str]]]],
) -> tuple[list[int], Findings]:
    """Choose the columns under a period. A column that could be one of them but is not readable is a finding:
    one that starts like a year, one between periods, or one with content under no header beside them."""

    def is_period(text: str) -> bool:
        return parse_period(text, frequency) is not None

    periods = [j for j in others if is_period(texts[j])]
    year_like = [j for j in others if j not in periods and texts[j].strip()[:4].isdigit()]
    if not periods and not year_like:
        moved = next((line for line, row_texts in elsewhere() if sum(map(is_period, row_texts)) > 1), None)
        return [], [
            place.finding(
                "layout",
                f"no period stands in row {row}",
                row=row,
                found=f"periods found in row {moved}" if moved is not None else "no row of periods",
                expected=f"{expected_period(frequency)} in row {row}",
                remedy=f"if the supplier moved the header, correct the rows declared in {place.declared}",
            )
        ]
    doubtful = [
        j
        for j in filled_in
        if periods and j > periods[0] and j not in periods and (j < periods[-1] or not texts[j].strip())
    ]
    return periods, [
        place.finding(
            "layout",
            f"the header of column {j + 1} is not a period",
            row=row,
            column=j + 1,
            found=f"'{texts[j]}'",
            expected=expected_period(frequency),
            remedy=f"have the header corrected: flags belong to figures, not periods ({place.declared})",
        )
        for j in sorted({*year_like, *doubtful})
    ]


def _labelled_columns(
    headers: Sequence[Sequence[str]],
    others: Sequence[int],
    filled_in: Sequence[int],
    place: Place,
    extent: Extent,
) -> tuple[list[int], Findings]:
    """Choose the columns under a label; content under no label, or no labelled column, is a finding."""
    labelled = [j for j in others if any(header_key(texts[j]) for texts in headers)]
    fields: dict[str, Any] = {
        "row": extent.header[0],
        "expected": f"a label in {extent.header_text}",
        "remedy": f"have the header corrected, or correct {place.declared}",
    }
    findings = [
        place.finding("layout", f"column {j + 1} has content under no label", column=j + 1, **fields)
        for j in filled_in
        if j not in labelled
    ]
    if not labelled and not findings:
        findings = [place.finding("layout", "no column has a label", **fields)]
    return labelled, findings


def _frame(
    grid: Grid,
    filled: list[list[str]],
    source: "Source",
    form: NumberFormat,
    rows: Sequence[int],
    value_columns: Sequence[int],
    beside: Mapping[str, int],
    above: Mapping[str, list[str]],
) -> pd.DataFrame:
    shared = {
        (i, j)
        for top, left, bottom, right in grid.merged
        for i in range(top, bottom + 1)
        for j in range(left, right + 1)
    }
    strict = source.excel is not None and not source.excel.text_numbers
    at = [(i, j) for i in rows for j in value_columns]
    faults = dict(grid.faults)
    for cell in at:
        if cell in shared:
            faults[cell] = "a merged cell: one figure cannot stand for several places"
        elif strict and cell in grid.texts and grid.text(*cell).strip() not in form.marks:
            faults.setdefault(cell, "text where a number is expected (text_numbers = true would read it)")
    columns: dict[str, Any] = {
        "row": pd.Series([grid.lines[i] for i, _ in at], dtype="int32"),
        "column": pd.Series([j + 1 for _, j in at], dtype="int16"),
        "raw": [grid.raw(i, j) for i, j in at],
        "text": [grid.text(i, j) for i, j in at],
        "rule": ["unreadable_number" if cell in faults else "" for cell in at],
        "fault": [faults.get(cell, "") for cell in at],
    }
    columns |= {role: [filled[i][j] for i, _ in at] for role, j in beside.items()}
    columns |= {role: [texts[j] for _, j in at] for role, texts in above.items()}
    return pd.DataFrame(columns)
