"""Plain text for terminals and files: aligned tables, figures, and raw text made harmless."""

from collections.abc import Sequence


def shown(text: str) -> str:
    """Return text with control characters escaped, so that a source file cannot steer a terminal."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)


def table(header: Sequence[str], rows: Sequence[Sequence[str]], left: int = 1, indent: str = "") -> list[str]:
    """Return lines of an aligned table; the first `left` columns to the left, the rest to the right."""
    grid = [list(header), *[list(row) for row in rows]]
    widths = [max(len(row[i]) for row in grid) for i in range(len(header))]
    lines = []
    for row in grid:
        cells = [
            cell.ljust(width) if i < left else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ]
        lines.append((indent + "  ".join(cells)).rstrip())
    return lines


def number(value: float | None, digits: int = 6) -> str:
    """Return a figure with thousands marks and about `digits` significant digits; "-" for none."""
    if value is None or value != value:
        return "-"
    if value == 0:
        return "0"
    if abs(value) >= 10 ** (digits - 1):
        return f"{value:,.0f}"
    if abs(value) < 1e-4:
        return f"{value:.3g}"
    whole = len(f"{abs(value):.0f}")
    return f"{value:,.{max(digits - whole, 0)}f}"


def percent(value: float | None, digits: int = 2) -> str:
    """Return a ratio as a percentage; "-" for none."""
    return "-" if value is None or value != value else f"{100 * value:.{digits}f}"


def plural(count: int, noun: str) -> str:
    """Return "1 finding", "3 findings", "1,204 series"."""
    ending = "" if count == 1 or noun.endswith("s") else "s"
    return f"{count:,} {noun}{ending}"
