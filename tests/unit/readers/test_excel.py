"""Workbooks: addresses, merged headers, superscripts, odd kinds of cells, files that are no workbooks."""

import datetime
import math
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from openpyxl.cell.rich_text import CellRichText, TextBlock
from openpyxl.cell.text import InlineFont
from openpyxl.worksheet.worksheet import Worksheet

from keelbook.readers import excel

ACROSS = """
[source.excel]
sheet = "T1"
header_rows = [4, 5]
first_row = 6
[source.wide]
periods = "across"
period_header = 2
industry = "Branch"
asset = "Asset"
[source.codes.industry]
"Manufacturing" = "C"
"Construction" = "F"
"""
TEXTS = (
    ACROSS.replace('sheet = "T1"', 'sheet = "T1"\ntext_numbers = true')
    + '[source.marks]\nflags = { p = "P" }\n'
)


def superscript(text: str, mark: str) -> CellRichText:
    return CellRichText(text, TextBlock(InlineFont(vertAlign="superscript"), mark))


def save(fill: Callable[[Worksheet], None], path: Path) -> None:
    book = openpyxl.Workbook()
    sheet = book.active
    sheet.title = "T1"
    fill(sheet)
    book.save(path)


def table(change: Callable[[Worksheet], None] = lambda sheet: None) -> Callable[[Path], None]:
    """Two branches x two assets x two years from B4 on (column A and rows 1 to 3 are empty)."""

    def fill(sheet: Worksheet) -> None:
        for address, value in {
            "B4": "Branch", "C4": "Asset", "D4": "Million", "D5": 2015, "E5": 2016,
            "B6": "Manufacturing", "C6": "N111", "C7": "N112",
            "B8": "Construction", "C8": "N111", "C9": "N112",
        }.items():  # fmt: skip
            sheet[address] = value
        for at in range(8):
            sheet.cell(6 + at // 2, 4 + at % 2, at + 0.5)
        for merged in ("B4:B5", "C4:C5", "D4:E4", "B6:B7", "B8:B9"):
            sheet.merge_cells(merged)
        sheet["B11"] = "1 a footnote"
        change(sheet)

    return lambda path: save(fill, path)


def put(**cells: Any) -> Callable[[Path], None]:
    def change(sheet: Worksheet) -> None:
        for address, value in cells.items():
            sheet[address] = value

    return table(change)


def test_addresses_count_the_empty_rows_and_columns_that_are_cropped(take: Callable[..., Any]) -> None:
    taken = take(table(), ACROSS)
    assert taken.cells()[0] == (6, 4, "0.5")
    assert taken.cells()[-1] == (9, 5, "7.5")
    assert taken.values() == [at + 0.5 for at in range(8)]
    assert taken.column("row") == [6, 6, 7, 7, 8, 8, 9, 9]
    assert taken.column("column") == [4, 5] * 4
    assert taken.column("period") == [2015, 2016] * 4
    assert taken.con.execute("select distinct sheet from source_cell").fetchall() == [("T1",)]


def test_merged_labels_hold_for_every_row_they_cover(take: Callable[..., Any]) -> None:
    taken = take(table(), ACROSS)
    assert taken.column("industry") == ["C"] * 4 + ["F"] * 4
    assert taken.column("asset") == ["N111", "N111", "N112", "N112"] * 2


def test_the_block_ends_at_the_first_row_without_labels(take: Callable[..., Any]) -> None:
    assert len(take(table(), ACROSS).cells()) == 8


def test_last_row_ends_the_block(take: Callable[..., Any]) -> None:
    declared = ACROSS.replace("first_row = 6", "first_row = 6\nlast_row = 7")
    assert [row for row, _, _ in take(table(), declared).cells()] == [6, 6, 7, 7]


def test_a_superscript_is_split_off_and_stays_visible_in_the_raw_text(take: Callable[..., Any]) -> None:
    taken = take(put(D6=superscript("45.6", "1")), TEXTS)
    assert taken.values()[0] == 45.6
    assert taken.cells()[0] == (6, 4, "45.6^1")


def test_a_superscript_on_a_label_and_a_period_is_no_part_of_them(take: Callable[..., Any]) -> None:
    taken = take(put(B8=superscript("Construction", "2"), E5=superscript("2016", "3")), ACROSS)
    assert taken.column("industry")[-1] == "F"
    assert taken.column("period")[1] == 2016


def test_superscripts_in_shared_strings(take: Callable[..., Any]) -> None:
    """Office programs keep texts in a part of their own; the test library writes them in place."""

    def share(path: Path) -> None:
        put(D6="PLACE")(path)
        strings = (
            '<sst xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main"><si><t>x</t></si><si><r><t>45.6</t>'
            '</r><r><rPr><vertAlign val="superscript"/></rPr><t>1)</t></r></si></sst>'
        )
        relation = (
            '<Relationship Id="rId99" Target="/xl/sharedStrings.xml" Type="http://schemas.openxmlformats.org/'
            'officeDocument/2006/relationships/sharedStrings"/></Relationships>'
        )
        edit(path, "xl/worksheets/sheet1.xml", 't="inlineStr"><is><t>PLACE</t></is>', 't="s"><v>1</v>')
        edit(path, "xl/_rels/workbook.xml.rels", "</Relationships>", relation)
        edit(path, "xl/sharedStrings.xml", "", strings)

    taken = take(share, TEXTS)
    assert taken.values()[0] == 45.6
    assert taken.cells()[0] == (6, 4, "45.6^1)")


def edit(path: Path, member: str, old: str, new: str) -> None:
    """Replace text in one part of a workbook, or add the part."""
    with zipfile.ZipFile(path) as archive:
        parts = {name: archive.read(name) for name in archive.namelist()}
    if old:
        assert old in parts[member].decode()
    parts[member] = parts.get(member, b"").decode().replace(old, new).encode() if old else new.encode()
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in parts.items():
            archive.writestr(name, content)


def test_text_is_a_number_only_where_declared(take: Callable[..., Any]) -> None:
    strict = take(put(D6="45.6"), ACROSS)
    assert strict.rejected()[0][:3] == (6, 4, "45.6")
    assert "text_numbers" in strict.rejected()[0][3]
    assert strict.values()[0] == 1.5
    loose = take(put(D6="45.6", E6="7.5p"), TEXTS)
    assert loose.values()[:2] == [45.6, 7.5]
    assert loose.status()[:2] == ["A", "P"]


def test_an_empty_cell_and_a_declared_mark_are_missing_even_where_text_is_not_read(
    take: Callable[..., Any],
) -> None:
    taken = take(put(D6=None, E6="-"), ACROSS + '[source.marks]\nmissing = { "-" = "M" }\n')
    assert [math.isnan(value) for value in taken.values()[:3]] == [True, True, False]
    assert taken.status()[:3] == ["O", "M", "A"]
    assert taken.intake.counts.loc[0, ["cells", "observations", "missing"]].tolist() == [8, 6, 2]


@pytest.mark.parametrize(
    ("value", "style", "raw", "reason"),
    [
        (datetime.date(2020, 1, 2), "", "2020-01-02", "a date or time"),
        (datetime.time(3, 4), "", "03:04:00", "a date or time"),
        (True, "", "TRUE", "a truth value"),
        ("=1/0", "", "", "a formula without a stored result"),
        (0.25, "0%", "0.25", "a percentage"),
        (0.25, '0.0"% of"', "0.25", ""),
    ],
)
def test_cells_that_are_no_plain_number_are_refused(
    take: Callable[..., Any], value: Any, style: str, raw: str, reason: str
) -> None:
    def change(sheet: Worksheet) -> None:
        sheet["D6"] = value
        if style:
            sheet["D6"].number_format = style

    taken = take(table(change), TEXTS)
    assert taken.cells()[0] == (6, 4, raw)
    assert [reason for *_, reason in taken.rejected()] == ([] if not reason else [taken.rejected()[0][3]])
    assert not reason or taken.rejected()[0][3].startswith(reason)


def test_an_error_value_is_refused_and_not_read_as_empty(take: Callable[..., Any]) -> None:
    def change(sheet: Worksheet) -> None:
        sheet["D6"] = "#REF!"
        sheet["D6"].data_type = "e"

    taken = take(table(change), ACROSS)
    assert taken.rejected() == [(6, 4, "#REF!", "the error value #REF!")]


def test_a_figure_in_a_merged_cell_is_refused_in_every_place_it_covers(take: Callable[..., Any]) -> None:
    taken = take(table(lambda sheet: sheet.merge_cells("D6:E6")), ACROSS)
    assert [(row, column, raw) for row, column, raw, _ in taken.rejected()] == [(6, 4, "0.5"), (6, 5, "")]


@pytest.mark.parametrize("figure", [0.1 + 0.2, 1e-7, 1.2345678901234568e17, -3.0, 2 / 3])
def test_numbers_come_back_exactly(take: Callable[..., Any], figure: float) -> None:
    def exact(path: Path) -> None:
        table()(path)
        edit(path, "xl/worksheets/sheet1.xml", "<v>0.5</v>", f"<v>{figure!r}</v>")

    assert take(exact, ACROSS + '[source.marks]\nflags = { e = "E" }\n').values()[0] == figure


DOWN = """
[source.excel]
sheet = "T1"
header_rows = [3, 4]
first_row = 5
[source.wide]
periods = "down"
period_column = "Quarter"
[source.wide.headers]
industry = 1
asset = 2
"""


def down(path: Path) -> None:
    def fill(sheet: Worksheet) -> None:
        rows = [["Quarter", "C", None, "F", None], [None, "N111", "N112", "N111", "N112"]]
        rows += [["2015-Q1", 1, 2, 3, 4], ["2015-Q2", 5, 6, 7, 8]]
        for i, row in enumerate(rows, start=3):
            for j, value in enumerate(row, start=1):
                sheet.cell(i, j, value)
        for merged in ("A3:A4", "B3:C3", "D3:E3"):
            sheet.merge_cells(merged)

    save(fill, path)


def test_periods_down_with_two_merged_header_rows(take: Callable[..., Any]) -> None:
    taken = take(down, DOWN, more='frequency = "Q"')
    assert taken.values() == [float(at) for at in range(1, 9)]
    assert taken.column("industry") == ["C", "C", "F", "F"] * 2
    assert taken.column("asset") == ["N111", "N112"] * 4
    assert taken.column("period") == [4 * 2015] * 4 + [4 * 2015 + 1] * 4
    assert taken.cells()[-1] == (6, 5, "8")


def test_content_under_no_label_is_a_finding(take: Callable[..., Any]) -> None:
    def more(path: Path) -> None:
        down(path)
        book = openpyxl.load_workbook(path)
        book["T1"]["F5"] = 9
        book.save(path)

    found = take(more, DOWN, more='frequency = "Q"').finding()
    assert (found["rule"], found["row"], found["column"]) == ("layout", 3, 6)


LONG = """
[source.excel]
sheet = "T1"
header_rows = [2]
first_row = 3
[source.long]
time_period = "Year"
value = "Value"
industry = "Branch"
asset = "Asset"
obs_status = "Flag"
"""


def test_a_long_sheet(take: Callable[..., Any]) -> None:
    def fill(sheet: Worksheet) -> None:
        rows = [
            ["Branch", "Asset", "Year", "Value", "Flag"],
            ["C", "N111", 2015, 1.5, "P"],
            ["C", "N111", 2016, 2],
        ]
        for i, row in enumerate(rows, start=2):
            for j, value in enumerate(row, start=2):
                sheet.cell(i, j, value)

    taken = take(lambda path: save(fill, path), LONG)
    assert taken.cells() == [(3, 5, "1.5"), (4, 5, "2")]
    assert taken.status() == ["P", "A"]


def moved(rows: int) -> Callable[[Path], None]:
    def build(path: Path) -> None:
        table()(path)
        book = openpyxl.load_workbook(path)
        sheet = book["T1"]
        sheet.move_range("A4:E12", rows=rows)
        for merged in list(sheet.merged_cells.ranges):
            merged.shift(row_shift=rows)
        book.save(path)

    return build


def test_a_header_that_moved_by_one_row_says_where_it_is(take: Callable[..., Any]) -> None:
    found = take(moved(1), ACROSS).finding()
    assert (found["rule"], found["sheet"], found["row"]) == ("layout", "T1", 5)
    assert found["found"] == "periods found in row 6"
    both = take(moved(2), ACROSS)
    assert both.intake.findings["found"].tolist() == ["found in row 6", "found in row 6"]


def test_a_renamed_label_column_names_the_nearest(take: Callable[..., Any]) -> None:
    found = take(put(B4="Branches"), ACROSS).finding()
    assert "'Branch' (industry)" in found["message"]
    assert "did you mean 'Branches'?" in found["remedy"]


@pytest.mark.parametrize("text", ["2016p", "2016/17", None])
def test_a_period_header_that_cannot_be_read_is_a_finding_at_its_cell(
    take: Callable[..., Any], text: str | None
) -> None:
    found = take(put(E5=text), ACROSS).finding()
    assert (found["rule"], found["row"], found["column"]) == ("layout", 5, 5)


def test_a_remark_beside_the_periods_is_not_read(take: Callable[..., Any]) -> None:
    taken = take(put(F5="Remarks", F6="revised"), ACROSS)
    assert len(taken.cells()) == 8
    assert taken.rules() == []


def test_an_empty_block_is_a_finding(take: Callable[..., Any]) -> None:
    found = take(table(), ACROSS.replace("first_row = 6", "first_row = 10")).finding()
    assert (found["rule"], found["row"]) == ("layout", 10)


def test_a_missing_sheet_names_those_there_are(take: Callable[..., Any]) -> None:
    found = take(table(), ACROSS.replace('"T1"', '"T 1"')).finding()
    assert (found["rule"], found["found"]) == ("layout", "sheets 'T1'")
    assert "did you mean 'T1'?" in found["remedy"]


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "the file is empty"),
        (b"Branch,2015\nC,1\n", "not a zip archive"),
        (b"PK\x05\x06" + bytes(18), "not a readable workbook"),
    ],
)
def test_a_file_that_is_no_workbook(take: Callable[..., Any], content: bytes, words: str) -> None:
    found = take(content, ACROSS, name="data.xlsx").finding()
    assert found["rule"] == "unreadable_source"
    assert words in found["message"]


def test_a_damaged_workbook(take: Callable[..., Any]) -> None:
    def damage(path: Path) -> None:
        table()(path)
        edit(path, "xl/worksheets/sheet1.xml", "</row>", "</rom>")

    assert take(damage, ACROSS).finding()["rule"] == "unreadable_source"


@pytest.mark.parametrize("member", ["xl/worksheets/sheet1.xml", "xl/sharedStrings.xml", "xl/workbook.xml"])
def test_a_document_type_is_refused_in_every_part(take: Callable[..., Any], member: str) -> None:
    bomb = '<!DOCTYPE x [<!ENTITY a "aaaa"><!ENTITY b "&a;&a;">]>'

    def plant(path: Path) -> None:
        table()(path)
        with zipfile.ZipFile(path) as archive:
            here = member in archive.namelist()
            start = archive.read(member).decode().lstrip()[:9] if here else ""
        edit(path, member, start, bomb + start if here else bomb + "<sst/>")

    found = take(plant, ACROSS).finding()
    assert found["rule"] == "unreadable_source"
    assert "declares a document type" in found["message"]


def test_sizes_are_checked_before_a_workbook_is_opened(
    take: Callable[..., Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    def pad(path: Path) -> None:
        table()(path)
        edit(path, "xl/padding.bin", "", "0" * 2_000_000)

    assert take(pad, ACROSS).rules() == []
    monkeypatch.setattr(excel, "_RATIO_FROM", 1_000_000)
    assert "xl/padding.bin unpacks to 2000000 bytes" in take(pad, ACROSS).finding()["message"]
    monkeypatch.setattr(excel, "_MAX_TOTAL", 1_000_000)
    assert "more than 1000000 bytes" in take(pad, ACROSS).finding()["message"]


def test_a_stray_cell_at_the_far_end_does_not_unfold_the_sheet(take: Callable[..., Any]) -> None:
    found = take(put(XFD1048576=1), ACROSS).finding()
    assert found["rule"] == "unreadable_source"
    assert "spans 1048576 rows x 16384 columns" in found["message"]
