import pytest

from keelbook.outputs.text import number, percent, plural, shown, table


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (None, "-"),
        (float("nan"), "-"),
        (0.0, "0"),
        (1234567.8, "1,234,568"),
        (-1234567.8, "-1,234,568"),
        (1234.56789, "1,234.57"),
        (0.123456789, "0.12346"),
        (0.0000123456, "1.23e-05"),
    ],
)
def test_numbers(value, text):
    assert number(value) == text


@pytest.mark.parametrize(("value", "text"), [(None, "-"), (0.01234, "1.23"), (-0.5, "-50.00")])
def test_percentages(value, text):
    assert percent(value) == text


@pytest.mark.parametrize(
    ("count", "noun", "text"),
    [(1, "finding", "1 finding"), (3, "finding", "3 findings"), (1204, "series", "1,204 series")],
)
def test_plurals(count, noun, text):
    assert plural(count, noun) == text


def test_a_source_cannot_steer_a_terminal():
    assert shown("a\x1b[31mb\nc\u202ed") == r"a\x1b[31mb\nc\u202ed"
    assert shown("Überschuss 5 %") == "Überschuss 5 %"


def test_tables_are_aligned():
    assert table(("name", "n"), [("a", "1"), ("bcdef", "22")], indent="  ") == [
        "  name    n",
        "  a       1",
        "  bcdef  22",
    ]
