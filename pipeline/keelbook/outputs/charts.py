"""Charts as SVG text: lines, stacked areas, stacked bars by year and by row. Nothing is loaded, nothing is clicked.

Every function returns one `<svg>` element with a title and a description. Figures are drawn as given: the caller has
scaled them to the unit it names. None is a gap, never zero. Text is escaped here.
"""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

from markupsafe import Markup, escape

from keelbook.outputs.text import shown

INK, MUTED, RULE = "#1b2530", "#56616d", "#dde2e7"
PALETTE = ("#17365c", "#d9942a", "#2b8c80", "#96292b", "#7fb2de", "#77741a", "#8f5fa8", "#d5a294")
"""Eight colours that stay apart under the three colour vision deficiencies; chosen for this report."""
OBSERVED, IMPUTED, ASSUMED = "#17365c", "#d9942a", "#b9c2cc"
CAPITAL, LABOUR, RESIDUAL = "#17365c", "#d9942a", "#9fb4bf"

Value = float | None


@dataclass(frozen=True)
class Curve:
    """One line, band or part: its name, its code for narrow charts, a figure per year (or row), its colour."""

    name: str
    code: str
    values: Sequence[Value]
    colour: str
    strong: bool = False


@dataclass(frozen=True)
class Text:
    """What a chart is, for its reader and for a screen reader; the id is unique on the page."""

    id: str
    title: str
    description: str
    unit: str


@dataclass(frozen=True)
class Size:
    """Outer size and right margin in units of the drawing; `names` writes full names at the lines, not codes."""

    width: int
    height: int
    right: int
    names: bool

    @property
    def letters(self) -> int:
        """How many letters of a label fit into the right margin."""
        return int((self.right - 16) / LETTER)


LETTER = 6.2
WIDE = Size(940, 350, 236, names=True)
NARROW = Size(352, 290, 66, names=False)
SMALL = Size(300, 184, 56, names=False)
NARROW_WORDS, SMALL_WORDS = Size(352, 290, 108, names=False), Size(300, 184, 104, names=False)
LEFT, TOP, BOTTOM = 48, 26, 24
LABEL_GAP = 13.5
ROW, ROW_NAME = 26, 300


@dataclass(frozen=True)
class Axis:
    """A value axis between two round figures."""

    low: float
    high: float
    step: float

    @property
    def ticks(self) -> list[float]:
        count = round((self.high - self.low) / self.step)
        return [self.low + i * self.step for i in range(count + 1)]

    def label(self, value: float) -> str:
        digits = max(0, -math.floor(math.log10(self.step) + 1e-9))
        text = f"{value:,.{digits}f}"
        return text.replace("-", "−") if float(text.replace(",", "")) else "0"


def axis(values: Iterable[Value], zero: bool, ticks: int = 5) -> Axis:
    """Return an axis of about `ticks` round steps that holds every value, and zero if asked for."""
    known = [v for v in values if v is not None] + ([0.0] if zero else [])
    low, high = (min(known), max(known)) if known else (0.0, 1.0)
    if high == low:
        low, high = (low - abs(low) / 2, high + abs(high) / 2) if low else (0.0, 1.0)
    raw = (high - low) / ticks
    power = 10.0 ** math.floor(math.log10(raw))
    step = next(power * m for m in (1, 2, 5, 10) if power * m >= raw * 0.999)
    return Axis(math.floor(low / step + 1e-9) * step, math.ceil(high / step - 1e-9) * step, step)


def stack(curves: Sequence[Curve]) -> list[list[tuple[float, float] | None]]:
    """Return (from, to) of every part: positive ones go up, negative ones down; None where any is missing."""
    out: list[list[tuple[float, float] | None]] = [[] for _ in curves]
    for values in zip(*(c.values for c in curves), strict=True):
        up = down = 0.0
        for i, value in enumerate(values):
            if value is None or None in values:
                out[i].append(None)
            elif value >= 0:
                out[i].append((up, up + value))
                up += value
            else:
                out[i].append((down, down + value))
                down += value
    return out


def stacked_extent(curves: Sequence[Curve]) -> list[Value]:
    """Return the lowest and highest figures that the stack of the parts reaches."""
    return [end for part in stack(curves) for pair in part if pair for end in pair]


def line_chart(text: Text, years: Sequence[int], curves: Sequence[Curve], scale: Axis, size: Size) -> Markup:
    """Return lines over the years, labelled at their last figure; the strong ones are thick and on top."""
    plot = _Plot(years, scale, size)
    out = [plot.grid(text.unit)]
    for curve in sorted(curves, key=lambda c: c.strong):
        width = 2.6 if curve.strong else 1.5
        for run in _runs(curve.values):
            points = [(plot.x(i), plot.y(v)) for i, v in run]
            if len(points) == 1:
                out.append(
                    f'<circle cx="{points[0][0]:.1f}" cy="{points[0][1]:.1f}" r="2" fill="{curve.colour}"/>'
                )
            else:
                path = "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in points)
                out.append(f'<path d="{path}" fill="none" stroke="{curve.colour}" stroke-width="{width}"/>')
    ends = [(c, _last(c.values)) for c in curves]
    out.append(plot.labels([(c, plot.x(at[0]), plot.y(at[1])) for c, at in ends if at is not None]))
    return _svg(text, size.width, size.height, out)


def area_chart(text: Text, years: Sequence[int], curves: Sequence[Curve], scale: Axis, size: Size) -> Markup:
    """Return parts stacked over the years, labelled at the right edge; a gap where a part is missing."""
    plot = _Plot(years, scale, size)
    out = [plot.grid(text.unit)]
    labels = []
    for curve, pairs in zip(curves, stack(curves), strict=True):
        known: list[list[tuple[int, tuple[float, float]]]] = [[]]
        for i, pair in enumerate(pairs):
            if pair is None:
                known.append([])
            else:
                known[-1].append((i, pair))
        for run in known:
            if run:
                top = [f"{plot.x(i):.1f} {plot.y(p[1]):.1f}" for i, p in run]
                base = [f"{plot.x(i):.1f} {plot.y(p[0]):.1f}" for i, p in reversed(run)]
                out.append(
                    f'<path d="M{"L".join(top + base)}Z" fill="{curve.colour}" stroke="#fff" stroke-width="0.7"/>'
                )
        if known[-1]:
            i, (low, high) = known[-1][-1]
            if plot.y(low) - plot.y(high) > 0.5:
                labels.append((curve, plot.x(i), plot.y((low + high) / 2)))
    out.append(plot.labels(labels))
    return _svg(text, size.width, size.height, out)


def bar_chart(
    text: Text, years: Sequence[int], parts: Sequence[Curve], line: Curve, scale: Axis, size: Size
) -> Markup:
    """Return stacked bars by year, negative parts below zero, with a line through the sums."""
    plot = _Plot(years, scale, size, bars=True)
    out = [plot.grid(text.unit)]
    width = plot.step * 0.74
    labels = []
    for curve, pairs in zip(parts, stack(parts), strict=True):
        for i, pair in enumerate(pairs):
            if pair is not None and pair[0] != pair[1]:
                y0, y1 = plot.y(max(pair)), plot.y(min(pair))
                out.append(
                    f'<rect x="{plot.x(i) - width / 2:.1f}" y="{y0:.1f}" width="{width:.1f}" '
                    f'height="{y1 - y0:.2f}" fill="{curve.colour}"/>'
                )
        known = [(i, p) for i, p in enumerate(pairs) if p is not None]
        if known:
            labels.append((curve, plot.x(known[-1][0]) + width / 2, plot.y(sum(known[-1][1]) / 2)))
    out.append(plot.zero())
    for run in _runs(line.values):
        points = [(plot.x(i), plot.y(v)) for i, v in run]
        path = "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in points)
        out.append(f'<path d="{path}" fill="none" stroke="{line.colour}" stroke-width="1.8"/>')
        out += [_ring(x, y, 2.4 if size.names else 1.5, line.colour) for x, y in points]
    end = _last(line.values)
    if end is not None:
        labels.append((line, plot.x(end[0]) + width / 2, plot.y(end[1])))
    out.append(plot.labels(labels))
    return _svg(text, size.width, size.height, out)


def row_chart(
    text: Text, rows: Sequence[str], parts: Sequence[Curve], sums: Curve, scale: Axis, size: Size
) -> Markup:
    """Return one stacked bar a row, its name beside it (above it when narrow), its sum marked and written."""
    left = ROW_NAME if size.names else 8
    row = ROW if size.names else ROW + 16
    right = size.width - 52
    bottom = TOP + row * len(rows)

    def x(value: float) -> float:
        return left + (value - scale.low) / (scale.high - scale.low) * (right - left)

    out = [_words(left, 12, text.unit, "start", "u"), _words(size.width, 12, sums.name, "end", "u b")]
    for tick in scale.ticks:
        out.append(_line(x(tick), TOP - 6, x(tick), bottom, INK if abs(tick) < scale.step / 1e6 else RULE))
        out.append(_words(x(tick), bottom + 15, scale.label(tick), "middle", "t"))
    stacks = stack(parts)
    for i, name in enumerate(rows):
        y = TOP + row * i + (2 if size.names else 17)
        height = row - (9 if size.names else 26)
        if size.names:
            out.append(_words(left - 10, y + height / 2 + 4, _cut(name, 44), "end", "n"))
        else:
            out.append(_words(left, y - 4, _cut(name, 50), "start", "n halo"))
        for curve, pairs in zip(parts, stacks, strict=True):
            pair = pairs[i]
            if pair is not None and pair[0] != pair[1]:
                out.append(
                    f'<rect x="{x(min(pair)):.1f}" y="{y:.1f}" width="{x(max(pair)) - x(min(pair)):.2f}" '
                    f'height="{height:.1f}" fill="{curve.colour}"/>'
                )
        total = sums.values[i]
        if total is not None:
            middle = y + height / 2
            out.append(_ring(x(total), middle, 4, INK))
            out.append(_words(size.width, middle + 4, _signed(total), "end", "n b"))
    return _svg(text, size.width, bottom + BOTTOM, out)


class _Plot:
    """The rectangle of a chart over years: positions, grid, labels at the right."""

    def __init__(self, years: Sequence[int], scale: Axis, size: Size, bars: bool = False) -> None:
        self._years, self._scale, self._size = years, scale, size
        self._right = size.width - size.right
        self._bottom = size.height - BOTTOM
        slots = len(years) if bars else max(len(years) - 1, 1)
        self.step = (self._right - LEFT) / slots
        self._first = LEFT + (self.step / 2 if bars else 0)

    def x(self, position: int) -> float:
        return self._first + position * self.step

    def y(self, value: float) -> float:
        span = self._scale.high - self._scale.low
        return self._bottom - (value - self._scale.low) / span * (self._bottom - TOP)

    def grid(self, unit: str) -> str:
        out = [_words(0, 12, unit, "start", "u")]
        for tick in self._scale.ticks:
            y = self.y(tick)
            base = tick == self._scale.low
            out.append(_line(LEFT, y, self._right, y, MUTED if base else RULE))
            out.append(_words(LEFT - 6, y + 4, self._scale.label(tick), "end", "t"))
        room = 48 if self._size.names else 34
        every = next((e for e in (1, 5, 10, 20, 50) if self.step * e >= room), 100)
        for i, year in enumerate(self._years):
            if year % every == 0:
                out.append(_line(self.x(i), self._bottom, self.x(i), self._bottom + 4, MUTED))
                out.append(_words(self.x(i), self._bottom + 17, str(year), "middle", "t"))
        return "".join(out)

    def zero(self) -> str:
        return _line(LEFT, self.y(0), self._right, self.y(0), INK)

    def labels(self, ends: Sequence[tuple[Curve, float, float]]) -> str:
        """Write the name of each curve at its end, spread so that none covers another."""
        if len(ends) * LABEL_GAP > self._bottom - TOP + LABEL_GAP:
            return ""
        ordered = sorted(ends, key=lambda end: end[2])
        heights = _spread([y for _, _, y in ordered], TOP, self._bottom)
        out = []
        for (curve, x, y), at in zip(ordered, heights, strict=True):
            start = self._right + 14
            out.append(
                f'<path d="M{x + 3:.1f} {y:.1f}L{start - 3:.1f} {at:.1f}" fill="none" stroke="{curve.colour}" '
                f'stroke-width="{2.6 if curve.strong else 1.5}"/>'
            )
            name = _cut(curve.name if self._size.names else curve.code, self._size.letters)
            out.append(_words(start, at + 4, name, "start", "n b" if curve.strong else "n"))
        return "".join(out)


def _spread(heights: Sequence[float], low: float, high: float) -> list[float]:
    """Return the heights moved apart to the label gap, inside the plot, in the same order."""
    out: list[float] = []
    for y in heights:
        out.append(max(y, out[-1] + LABEL_GAP) if out else max(y, low))
    limit = high
    for i in range(len(out) - 1, -1, -1):
        out[i] = min(out[i], limit)
        limit = out[i] - LABEL_GAP
    return out


def _runs(values: Sequence[Value]) -> list[list[tuple[int, float]]]:
    """Return the stretches without a gap, as (position, figure)."""
    out: list[list[tuple[int, float]]] = [[]]
    for i, value in enumerate(values):
        if value is None:
            out.append([])
        else:
            out[-1].append((i, value))
    return [run for run in out if run]


def _last(values: Sequence[Value]) -> tuple[int, float] | None:
    runs = _runs(values)
    return runs[-1][-1] if runs else None


def _cut(text: str, length: int) -> str:
    return text if len(text) <= length else text[: length - 1].rstrip(" ,;") + "…"


def _signed(value: float) -> str:
    text = f"{value:.2f}"
    return text.replace("-", "−") if float(text) else "0.00"


def _safe(text: str) -> Markup:
    return escape(shown(text))


def _words(x: float, y: float, words: str, anchor: Literal["start", "middle", "end"], kind: str) -> str:
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}" class="{kind}">{_safe(words)}</text>'


def _line(x0: float, y0: float, x1: float, y1: float, colour: str) -> str:
    return f'<line x1="{x0:.1f}" y1="{y0:.1f}" x2="{x1:.1f}" y2="{y1:.1f}" stroke="{colour}"/>'


def _ring(x: float, y: float, radius: float, colour: str) -> str:
    return (
        f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{radius}" fill="#fff" stroke="{colour}" stroke-width="1.5"/>'
    )


def _svg(text: Text, width: float, height: float, parts: Sequence[str]) -> Markup:
    head = (
        f'<svg viewBox="0 0 {width:.0f} {height:.0f}" role="img" '
        f'aria-labelledby="{_safe(text.id)}-t {_safe(text.id)}-d">'
        f'<title id="{_safe(text.id)}-t">{_safe(text.title)}</title>'
        f'<desc id="{_safe(text.id)}-d">{_safe(text.description)} Unit: {_safe(text.unit)}.</desc>'
    )
    return Markup(head + "".join(parts) + "</svg>")
