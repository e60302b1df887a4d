"""CSV: encodings, line numbers by both routes, broken records, headers that moved or were renamed."""

import math
from collections.abc import Callable
from typing import Any

import pytest

from keelbook.readers import csv_file

LONG = """
[source.csv]
[source.long]
time_period = "year"
value = "value"
industry = "industry"
asset = "asset"
"""
HEADER = b"industry,asset,year,value\n"
GERMAN = """
[source.csv]
encoding = "cp1252"
delimiter = ";"
decimal = ","
thousands = "."
[source.long]
time_period = "Jahr"
value = "Wert"
industry = "Branche"
asset = "Anlagegut"
[source.codes.industry]
"Baugewerbe für Gebäude" = "F"
"""


@pytest.fixture(params=["exact", "database"])
def route(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> str:
    """Run a test by both routes: small files take the exact one unless told that nothing is small."""
    if request.param == "database":
        monkeypatch.setattr(csv_file, "_SMALL_FILE", 0)
    return str(request.param)


def test_every_observation_has_its_line_column_and_raw_text(take: Callable[..., Any], route: str) -> None:
    taken = take(HEADER + b"C,N111,2015,12.50\nC,N111,2016,:\nF,N111,2015,13p\n", LONG + MARKS)
    assert taken.cells() == [(2, 4, "12.50"), (3, 4, ":"), (4, 4, "13p")]
    assert taken.values()[::2] == [12.5, 13.0]
    assert math.isnan(taken.values()[1])
    assert taken.status() == ["A", "O", "P"]
    assert taken.column("row") == [2, 3, 4]
    assert taken.column("column") == [4, 4, 4]
    assert taken.column("industry") == ["C", "C", "F"]
    assert taken.column("cell_id") == [0, 1, 2]
    assert taken.intake.counts.iloc[0].to_dict() == {
        "source": "one", "cells": 3, "observations": 2, "rejected": 0, "missing": 1,
    }  # fmt: skip


MARKS = """
[source.marks]
missing = { ":" = "O", "-999" = "M" }
flags = { p = "P" }
"""


def test_a_newline_inside_quotes_moves_the_lines_below(take: Callable[..., Any], route: str) -> None:
    header = b"industry,asset,year,value,note\n"
    body = b'C,N111,2015,1,"two\nlines"\nC,N111,2016,2,\nC,N111,2017,3,"three\n\nlines"\nC,N111,2018,4,x\n'
    taken = take(header + body, LONG)
    assert [(row, raw) for row, _, raw in taken.cells()] == [(2, "1"), (4, "2"), (5, "3"), (8, "4")]
    assert taken.column("row") == [2, 4, 5, 8]


@pytest.mark.parametrize("newline", [b"\n", b"\r\n"])
@pytest.mark.parametrize("end", [b"", b"\n"])
def test_newlines_of_either_kind_and_a_last_line_without_one(
    take: Callable[..., Any], route: str, newline: bytes, end: bytes
) -> None:
    content = (HEADER + b"C,N111,2015,1\nC,N111,2016,2" + end).replace(b"\n", newline)
    assert take(content, LONG).cells() == [(2, 4, "1"), (3, 4, "2")]


def test_blank_lines_are_counted_but_hold_no_cell(take: Callable[..., Any], route: str) -> None:
    taken = take(HEADER + b"\nC,N111,2015,1\n\n\nC,N111,2016,2\n,,,\n", LONG)
    assert taken.cells() == [(3, 4, "1"), (6, 4, "2")]


def test_mixed_newlines(take: Callable[..., Any], route: str) -> None:
    taken = take(HEADER + b"C,N111,2015,1\r\nC,N111,2016,2\nC,N111,2017,3\r\n", LONG)
    assert taken.cells() == [(2, 4, "1"), (3, 4, "2"), (4, 4, "3")]


def test_a_quoted_field_with_delimiter_and_doubled_quote(take: Callable[..., Any], route: str) -> None:
    taken = take(HEADER + b'C,N111,2015,"1"\n"a ""b"", c",N111,2016,2\n', LONG)
    assert taken.column("industry") == ["C", 'a "b", c']


def test_a_byte_order_mark_is_not_part_of_the_first_header(take: Callable[..., Any], route: str) -> None:
    assert take(b"\xef\xbb\xbf" + HEADER + b"C,N111,2015,1\n", LONG).values() == [1.0]


def test_cp1252_with_umlauts_decimal_comma_and_thousands_point(take: Callable[..., Any]) -> None:
    text = "Branche;Anlagegut;Jahr;Wert\nBaugewerbe für Gebäude;N111;2015;1.234,5\nC;N111;2015;1,234\n"
    taken = take(text.encode("cp1252"), GERMAN)
    assert taken.column("industry") == ["F", "C"]
    assert taken.values() == [1234.5, 1.234]
    assert taken.cells()[0] == (2, 4, "1.234,5")


def test_the_database_reads_thousands_and_decimals_as_declared(take: Callable[..., Any], route: str) -> None:
    declared = GERMAN.replace("cp1252", "utf-8")
    text = "Branche;Anlagegut;Jahr;Wert\nC;N111;2015;1.234,5\nC;N111;2016;-7,25\nC;N111;2017;0.123\n"
    taken = take(text.encode(), declared)
    assert taken.values() == [1234.5, -7.25]
    assert taken.rejected() == [(4, 4, "0.123", "the thousands mark '.' is misplaced")]


def test_a_missing_mark_that_casts_is_not_a_figure(take: Callable[..., Any], route: str) -> None:
    taken = take(HEADER + b"C,N111,2015,-999\n", LONG + MARKS)
    assert math.isnan(taken.values()[0])
    assert taken.status() == ["M"]


@pytest.mark.parametrize("fields", ["C,N111,2016", "C,N111,2016,2,3"])
def test_a_ragged_row_is_refused_with_its_line_and_the_rest_is_read(
    take: Callable[..., Any], route: str, fields: str
) -> None:
    taken = take(HEADER + b"C,N111,2015,1\n" + fields.encode() + b"\nC,N111,2017,3\n", LONG)
    assert taken.values() == [1.0, 3.0]
    found = taken.finding()
    assert (found["rule"], found["severity"], found["level"], found["row"]) == ("ragged_row", "stop", 0, 3)
    assert found["found"] == f"'{fields}'"
    assert taken.intake.counts.loc[0, ["cells", "observations", "rejected"]].tolist() == [3, 2, 1]


def test_text_in_a_number_column_names_the_cell_and_its_key(take: Callable[..., Any], route: str) -> None:
    taken = take(HEADER + b"C,N111,2015,see note\n", LONG)
    found = taken.finding()
    assert (found["rule"], found["row"], found["column"]) == ("unreadable_number", 2, 4)
    assert (found["industry"], found["time_period"], found["measure"]) == ("C", "2015", "investment")
    assert found["file"] == "sources/data.csv"
    assert "'see note'" in found["found"]
    assert taken.rejected() == [
        (2, 4, "see note", "text where a figure is expected, and not a declared missing mark")
    ]


def test_a_flag_on_a_period_is_refused(take: Callable[..., Any], route: str) -> None:
    taken = take(HEADER + b"C,N111,2015p,1\nC,N111,2016,2\n", LONG)
    assert taken.finding()["rule"] == "unreadable_period"
    assert taken.finding()["row"] == 2
    assert taken.values() == [2.0]


def test_a_header_that_moved_says_where_it_is(take: Callable[..., Any]) -> None:
    taken = take(b"Table 1,,,\n" + HEADER + b"C,N111,2015,1\n", LONG)
    assert set(taken.rules()) == {"layout"}
    assert len(taken.rules()) == 4
    assert set(taken.intake.findings["found"]) == {"found in row 2"}
    assert taken.cells() == []


def test_a_header_below_a_preamble_is_read_where_declared(take: Callable[..., Any], route: str) -> None:
    declared = LONG.replace("[source.csv]", "[source.csv]\nheader_line = 3")
    taken = take(b'Table 1 "draft\n\n' + HEADER + b"C,N111,2015,1\n", declared)
    assert taken.cells() == [(4, 4, "1")]


def test_a_renamed_column_names_the_nearest(take: Callable[..., Any]) -> None:
    taken = take(b"industry,asset,year,values\nC,N111,2015,1\n", LONG)
    found = taken.finding()
    assert found["rule"] == "layout"
    assert "'value' (value)" in found["message"]
    assert "did you mean 'values'?" in found["remedy"]
    assert "assembly.toml, line 8" in found["remedy"]


def test_a_header_that_stands_twice_is_not_guessed(take: Callable[..., Any]) -> None:
    found = take(b"industry,asset,year,value,value\nC,N111,2015,1,2\n", LONG).finding()
    assert (found["rule"], found["column"]) == ("layout", 5)
    assert found["found"] == "columns 4, 5"


@pytest.mark.parametrize(
    ("content", "encoding", "words"),
    [
        (b"", "utf-8", "the file is empty"),
        (HEADER + b"C,N111,2015,1\nf\xfcr,N111,2015,1\n", "utf-8", "byte 0xfc at byte 41, line 3"),
        (HEADER + b"\x81,N111,2015,1\n", "cp1252", "byte 0x81 at byte 26, line 2"),
        (HEADER + b"C,N111,2015,\xc3", "utf-8", "byte 0xc3 at byte 38, line 2"),
        (HEADER.decode().encode("utf-16-le"), "utf-8", "NUL byte at byte 1"),
        (HEADER + b'C,N111,2015,"1\nC,N111,2016,2\n', "utf-8", "the record at line 2 cannot be read"),
        (HEADER, "utf-8", "no record follows the header"),
    ],
)
def test_a_file_that_cannot_be_read_says_why(
    take: Callable[..., Any], content: bytes, encoding: str, words: str
) -> None:
    taken = take(content, LONG.replace("[source.csv]", f'[source.csv]\nencoding = "{encoding}"'))
    assert taken.finding()["rule"] == "unreadable_source"
    assert words in taken.finding()["message"]
    assert len(taken.intake.observations) == 0


def test_an_undecodable_byte_is_found_across_the_border_of_two_chunks(
    take: Callable[..., Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(csv_file, "_CHUNK_BYTES", 4)
    content = HEADER + b"C,N111,2015,1\n\xc3\xa4\xc3(,N111,2015,1\n"
    at = content.index(b"\xc3(")
    assert f"byte 0xc3 at byte {at}, line 3" in take(content, LONG).finding()["message"]


def test_a_header_line_beyond_the_file(take: Callable[..., Any]) -> None:
    found = take(HEADER, LONG.replace("[source.csv]", "[source.csv]\nheader_line = 9")).finding()
    assert (found["rule"], found["row"]) == ("layout", 9)


def test_periods_across(take: Callable[..., Any]) -> None:
    labels = 'industry = "Branch"\nasset = "Asset"\n'
    declared = '[source.csv]\n[source.wide]\nperiods = "across"\nperiod_header = 1\n' + labels
    taken = take(b"Branch,Asset,Unit,2015,2016\nC,N111,m,1,2\nF,N111,m,3,\nF,N112,m\n", declared)
    assert taken.cells() == [(2, 4, "1"), (2, 5, "2"), (3, 4, "3"), (3, 5, ""), (4, 1, "F,N112,m")]
    assert taken.column("period") == [2015, 2016, 2015, 2016]
    assert taken.column("industry") == ["C", "C", "F", "F"]
    assert taken.status() == ["A", "A", "A", "O"]
    assert taken.rules() == ["ragged_row"]


def test_chunks_join_without_a_seam(take: Callable[..., Any], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(csv_file, "_CHUNK_RECORDS", 2)
    body = b"".join(b"C,N111,%d,%d\n" % (2010 + at, at) for at in range(7))
    taken = take(HEADER + body, LONG)
    assert taken.values() == [float(at) for at in range(7)]
    assert taken.column("row") == list(range(2, 9))


@pytest.mark.parametrize(
    ("content", "by_database"),
    [
        (HEADER + b"C,N111,2015,1\n", True),
        (HEADER + b'C,"N\n111",2015,1\nC,N111,2016,1\n', True),
        (HEADER + b"C,N111,2015,1\n\n", False),
        (HEADER + b"C,N111,2015\n", False),
        (HEADER + b"C,N111,2015,1\r\n", False),
        (HEADER.replace(b",", b",\n", 1).replace(b"industry", b'"industry"') + b"C,N111,2015,1\n", False),
    ],
)
def test_the_database_is_trusted_only_where_its_records_account_for_every_line(
    take: Callable[..., Any], monkeypatch: pytest.MonkeyPatch, content: bytes, by_database: bool
) -> None:
    routes = []
    plain = csv_file._stage_plain

    def spy(*arguments: Any) -> Any:
        staged = plain(*arguments)
        routes.append(staged is not None)
        return staged

    monkeypatch.setattr(csv_file, "_SMALL_FILE", 0)
    monkeypatch.setattr(csv_file, "_stage_plain", spy)
    take(content, LONG)
    assert any(routes) == by_database
