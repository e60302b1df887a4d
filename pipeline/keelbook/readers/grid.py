"""Cell texts with their physical addresses: what CSV records and a worksheet have in common."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field


@dataclass(frozen=True, eq=False)
class Grid:
    """Cell texts by row, as read.

    `lines[i]` is the physical row (from 1) of `rows[i]`; column j of a row is physical column j + 1. Cells
    whose text as received differs from the text to read (a superscript split off) are in `raws`; cells that
    cannot be a figure whatever their text (an error, a date) are in `faults` with the reason; cells that
    hold text in a file format that knows numbers are in `texts`. Keys are (i, j).
    """

    rows: Sequence[Sequence[str]]
    lines: Sequence[int]
    raws: Mapping[tuple[int, int], str] = field(default_factory=dict)
    faults: Mapping[tuple[int, int], str] = field(default_factory=dict)
    texts: frozenset[tuple[int, int]] = frozenset()
    merged: Sequence[tuple[int, int, int, int]] = ()
    """Merged ranges as (first i, first j, last i, last j), inclusive."""

    def text(self, i: int, j: int) -> str:
        """Return the text of a cell; "" beyond the end of its row."""
        row = self.rows[i]
        return row[j] if j < len(row) else ""

    def raw(self, i: int, j: int) -> str:
        """Return the text of a cell as received."""
        return self.raws.get((i, j)) or self.text(i, j)

    def filled(self) -> list[list[str]]:
        """Return the texts with the anchor of each merged range repeated over the whole range."""
        width = max((len(row) for row in self.rows), default=0)
        out = [[*row, *[""] * (width - len(row))] for row in self.rows]
        for top, left, bottom, right in self.merged:
            for i in range(top, min(bottom, len(out) - 1) + 1):
                out[i][left : right + 1] = [self.text(top, left)] * (min(right, width - 1) + 1 - left)
        return out
