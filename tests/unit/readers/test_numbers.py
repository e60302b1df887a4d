"""The grammar of figures: what is read, what is refused, and that the database reads the same."""

import math

import duckdb
import pytest

from keelbook.readers.numbers import NumberFormat, parse_number, parse_texts, split_footnote

POINT = NumberFormat()
COMMA = NumberFormat(decimal=",", thousands=".")
MARKED = NumberFormat(missing={":": "O", "-": "M", "..": "O"}, flags={"p": "P", "e": "E", "ep": "E"})


@pytest.mark.parametrize(
    ("text", "form", "value"),
    [
        ("12.3", POINT, 12.3),
        ("-0.5", POINT, -0.5),
        ("+7", POINT, 7.0),
        (".5", POINT, 0.5),
        ("  12.3 ", POINT, 12.3),
        ("\u221212.3", POINT, -12.3),
        ("1e-05", POINT, 1e-05),
        ("0.1234567890123456789", POINT, 0.1234567890123456789),
        ("1,234", COMMA, 1.234),
        ("1.234", COMMA, 1234.0),
        ("1.234.567,8", COMMA, 1234567.8),
        ("1234567,8", COMMA, 1234567.8),
        ("-1.234,5", COMMA, -1234.5),
        ("1 234,5", NumberFormat(decimal=",", thousands=" "), 1234.5),
        ("1\u00a0234,5", NumberFormat(decimal=",", thousands=" "), 1234.5),
        ("1\u202f234,5", NumberFormat(decimal=",", thousands="\u00a0"), 1234.5),
        ("1'234.5", NumberFormat(thousands="'"), 1234.5),
        ("1\u2019234.5", NumberFormat(thousands="'"), 1234.5),
        ("45.6\u00b9", POINT, 45.6),
        ("45.6 \u207d\u00b2\u207e", POINT, 45.6),
        ("\u00b945.6", POINT, 45.6),
        ("45.6\u00b9,\u00b2", POINT, 45.6),
    ],
)
def test_a_figure_is_read_exactly(text: str, form: NumberFormat, value: float) -> None:
    assert parse_number(text, form)[0] == value
    assert parse_number(text, form).fault == ""


@pytest.mark.parametrize(
    ("text", "status", "value"),
    [
        ("12.3p", "P", 12.3),
        ("12.3 p", "P", 12.3),
        ("e 12.3", "E", 12.3),
        ("12.3ep", "E", 12.3),
        ("12.3\u00b9p", "P", 12.3),
        ("12.3p\u00b9", "P", 12.3),
        ("12.3", "", 12.3),
    ],
)
def test_a_declared_flag_beside_a_figure_is_its_status(text: str, status: str, value: float) -> None:
    parsed = parse_number(text, MARKED)
    assert (parsed.value, parsed.status, parsed.fault) == (value, status, "")


@pytest.mark.parametrize(
    ("text", "status"),
    [("", "O"), ("   ", "O"), (":", "O"), ("-", "M"), ("..", "O"), (":\u00b9", "O"), (": p", "O")],
)
def test_a_missing_mark_is_no_figure_and_no_fault(text: str, status: str) -> None:
    parsed = parse_number(text, MARKED)
    assert math.isnan(parsed.value)
    assert (parsed.status, parsed.fault) == (status, "")


def test_a_missing_mark_that_looks_like_a_figure_is_missing() -> None:
    parsed = parse_number("-999", NumberFormat(missing={"-999": "M"}))
    assert math.isnan(parsed.value)
    assert parsed.status == "M"


@pytest.mark.parametrize(
    ("text", "form", "reason"),
    [
        ("n.a.", POINT, "not a declared missing mark"),
        ("1,234", POINT, "declared decimal mark"),
        ("12.34,5", COMMA, "misplaced"),
        ("1.23", COMMA, "misplaced"),
        ("0.123", COMMA, "misplaced"),
        ("12345.678,9", COMMA, "misplaced"),
        ("1.234.56", COMMA, "misplaced"),
        ("1 234", POINT, "not a figure"),
        ("12.3x", MARKED, "'x' beside the figure"),
        ("12.3pe", MARKED, "'pe' beside the figure"),
        ("1e5", MARKED, "beside the figure"),
        ("p", MARKED, "not a declared missing mark"),
        ("12%", POINT, "percentage"),
        ("12\u00b93", POINT, "superscript"),
        ("\u00b9", POINT, "footnote mark without a figure"),
        ("45.6^1", POINT, "'^' beside"),
        ("(12.3)", POINT, "'()' beside"),
        ("5.", POINT, "not a figure"),
        ("--5", POINT, "not a figure"),
        ("\u0661\u0662", POINT, "not a declared missing mark"),
        ("nan", POINT, "not a declared missing mark"),
        ("inf", POINT, "not a declared missing mark"),
        ("1_000", POINT, "'_' beside"),
        ("1e999", POINT, "too large"),
    ],
)
def test_anything_else_is_refused_with_its_reason(text: str, form: NumberFormat, reason: str) -> None:
    parsed = parse_number(text, form)
    assert math.isnan(parsed.value)
    assert reason in parsed.fault


@pytest.mark.parametrize("form", [POINT, COMMA, MARKED, NumberFormat(decimal=",", thousands=" ")])
def test_the_database_accepts_exactly_the_plain_texts_that_python_does(form: NumberFormat) -> None:
    texts = [
        "1",
        "1.5",
        "1,5",
        "1.234",
        "1,234",
        "1.234,5",
        "0.123",
        "1 234",
        "1 234,5",
        ".5",
        ",5",
        "5.",
        "1e5",
    ]
    texts += ["-1", "+1", "--1", "12.34.567", "1.234.567", "", "nan", "1_0", " 1", "\u0661", "1\n"]
    for text in texts:
        matched = duckdb.execute("select regexp_full_match(?, ?)", [text, form.pattern]).fetchall()[0][0]
        assert matched == (form.to_float(text) is not None), text


def test_a_column_keeps_positions_and_parses_each_text_once() -> None:
    value, status, faults = parse_texts(["1", "x", ":", "2p", "x"], MARKED, ("A", "P", "O", "M", "E"))
    assert value[[0, 3]].tolist() == [1.0, 2.0]
    assert [math.isnan(value[at]) for at in (1, 2, 4)] == [True] * 3
    assert status.tolist() == [-1, -1, 2, 1, -1]
    assert sorted(faults) == [1, 4]


@pytest.mark.parametrize(
    ("text", "bare", "note"),
    [
        ("2015\u00b9", "2015", "\u00b9"),
        ("C", "C", ""),
        ("\u00b9 Mining\u00b2", "Mining", "\u00b9 \u00b2"),
        ("m2", "m2", ""),
    ],
)
def test_superscripts_at_the_ends_are_footnotes(text: str, bare: str, note: str) -> None:
    assert split_footnote(text) == (bare, note)
