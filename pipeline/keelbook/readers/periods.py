"""Period texts: years and quarters as integers."""

import re

from keelbook.readers.numbers import split_footnote

_YEAR = re.compile(r"([1-9][0-9]{3})(?:\.0+)?")
_QUARTER = re.compile(r"([1-9][0-9]{3})[- ]?Q([1-4])")


def parse_period(text: str, frequency: str) -> int | None:
    """Return the period a text names: the year ("A"), or 4 * year + quarter - 1 ("Q"); None for neither.

    A footnote in superscript digits is not part of the period. Anything else beside it is.
    """
    bare, _ = split_footnote(text)
    if frequency == "A":
        year = _YEAR.fullmatch(bare)
        return int(year[1]) if year else None
    quarter = _QUARTER.fullmatch(bare)
    return 4 * int(quarter[1]) + int(quarter[2]) - 1 if quarter else None


def expected_period(frequency: str) -> str:
    """Return how a period of this frequency is written, for messages."""
    return "a year such as 2015" if frequency == "A" else "a quarter such as 2015-Q1"
