"""What a report is made of: charts, tables, headline figures, and figures and units as they are written."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from markupsafe import Markup

from keelbook.outputs.charts import Curve, Value
from keelbook.outputs.published import Panel, Published


@dataclass(frozen=True)
class Cell:
    """A figure of a table: as in the panel, as written, and its status if it is not a normal value."""

    value: Value
    written: str
    status: str = ""


@dataclass(frozen=True)
class Table:
    """Figures in the unit of the caption, a row a year (or an industry)."""

    caption: str
    corner: str
    head: Sequence[str]
    rows: Sequence[tuple[str, Sequence[Cell]]]


@dataclass(frozen=True)
class Chart:
    """One chart, drawn for wide and for narrow pages."""

    wide: Markup
    narrow: Markup
    title: str = ""


@dataclass(frozen=True)
class Small:
    """A small chart among many."""

    title: str
    svg: Markup


@dataclass(frozen=True)
class Figure:
    """Charts, small charts of their parts, and the tables behind both."""

    id: str
    title: str
    lead: str
    legend: Sequence[Curve] = ()
    charts: Sequence[Chart] = ()
    smalls: Sequence[Small] = ()
    smalls_lead: str = ""
    tables: Sequence[Table] = ()
    notes: Sequence[str] = ()
    absent: Sequence[str] = ()


@dataclass(frozen=True)
class Brief:
    """One headline figure: the number, its unit, what it is."""

    number: str
    unit: str
    words: str


@dataclass(frozen=True)
class Section:
    """One area and sector: headline figures, then the figures."""

    id: str
    area: str
    sector: str
    brief: Sequence[Brief]
    figures: Sequence[Figure]
    statuses: Sequence[str]


def yearly_table(
    caption: str,
    years: Sequence[int],
    columns: Sequence[tuple[str, Published]],
    write: Callable[[Value], str],
) -> Table:
    rows = [
        (
            str(year),
            [
                Cell(s.values[i], write(s.values[i]), "" if s.statuses[i] == "A" else s.statuses[i])
                for _, s in columns
            ],
        )
        for i, year in enumerate(years)
    ]
    return Table(caption, "Year", [name for name, _ in columns], rows)


def scaled(panel: Panel, group: Sequence[Published]) -> tuple[float, str]:
    """Return the factor and the unit in which the largest figure of some series reads well."""
    largest = max((abs(v) for s in group for v in s.values if v is not None), default=0.0)
    steps = 0
    while (
        largest / 1000**steps >= 20_000
        and str(group[0].unit_mult + 3 * (steps + 1)) in panel.names["unit_mult"]
    ):
        steps += 1
    return 1000.0**-steps, unit_words(panel, group[0], 3 * steps)


def unit_words(panel: Panel, series: Published, shift: int = 0) -> str:
    power = series.unit_mult + shift
    words = panel.names["unit_mult"][str(power)].lower()
    unit = series.unit if power == 0 else f"{words} of {series.unit}"
    return f"{unit}, prices of {panel.facts['reference_year']}"


def named(panel: Panel, name: str, code: str) -> str:
    words = panel.names[name].get(code, code)
    return words if words == code or code == "_T" else f"{code} {words}"


def asset_name(panel: Panel, code: str) -> str:
    return panel.names["asset"].get(code, code)


def money(value: Value) -> str:
    return written(value, 0 if value is None or abs(value) >= 1000 else 2)


def percent(value: Value) -> str:
    return written(None if value is None else 100 * value, 2)


def level(value: Value) -> str:
    return written(value, 4)


def short(value: float) -> str:
    return written(value, 1 if abs(value) < 10_000 else 0)


def written(value: Value, digits: int) -> str:
    """Return a figure with thousands marks and a true minus; "–" for none, no sign on a zero."""
    if value is None:
        return "–"
    text = f"{value:,.{digits}f}"
    return text.replace("-", "−") if any(c in "123456789" for c in text) else text.replace("-", "")
