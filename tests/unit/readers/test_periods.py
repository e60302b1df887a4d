"""Period texts."""

import pytest

from keelbook.readers.periods import parse_period


@pytest.mark.parametrize("text", ["2015", "2015.0", " 2015 ", "2015\u00b9"])
def test_a_year(text: str) -> None:
    assert parse_period(text, "A") == 2015


@pytest.mark.parametrize("text", ["2015-Q3", "2015Q3", "2015 Q3", "2015-Q3\u00b2"])
def test_a_quarter_counts_from_year_times_four(text: str) -> None:
    assert parse_period(text, "Q") == 4 * 2015 + 2


@pytest.mark.parametrize(
    ("text", "frequency"),
    [
        ("2015p", "A"),
        ("2015.5", "A"),
        ("15", "A"),
        ("2015-Q1", "A"),
        ("2015/16", "A"),
        ("", "A"),
        ("0015", "A"),
        ("2015", "Q"),
        ("2015-Q5", "Q"),
        ("Q1 2015", "Q"),
        ("2015-Q1p", "Q"),
    ],
)
def test_anything_else_is_no_period(text: str, frequency: str) -> None:
    assert parse_period(text, frequency) is None
