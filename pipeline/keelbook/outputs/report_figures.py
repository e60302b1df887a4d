"""The figures of the report: which series of the panel each shows, how it is drawn, and the table behind it."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from statistics import fmean
from typing import TypeVar

from markupsafe import Markup

from keelbook.outputs import charts
from keelbook.outputs.charts import (
    NARROW,
    NARROW_WORDS,
    SMALL,
    SMALL_WORDS,
    WIDE,
    Axis,
    Curve,
    Size,
    Text,
    Value,
)
from keelbook.outputs.published import Panel, Published
from keelbook.outputs.report_parts import (
    Brief,
    Cell,
    Chart,
    Figure,
    Section,
    Small,
    Table,
    asset_name,
    level,
    money,
    named,
    percent,
    scaled,
    short,
    unit_words,
    written,
    yearly_table,
)

PANELS = 40
"""Small charts drawn of one kind; the rest are counted."""

CONTRIBUTIONS = (
    ("capital_contribution", "Capital", charts.CAPITAL),
    ("labour_contribution", "Labour", charts.LABOUR),
    ("residual_growth", "Residual", charts.RESIDUAL),
)
OUTPUT = "output_growth"

T = TypeVar("T")


@dataclass(frozen=True)
class Place:
    """The part of a panel that one section shows, and its place among the ids of the page."""

    panel: Panel
    area: str
    sector: str
    id: str

    def series(self, measure: str, price_basis: str = "_Z", chosen: bool = True) -> list[Published]:
        """Return the series of a measure that hold a figure, the chosen ones only unless told otherwise."""
        found = self.panel.series(self.area, self.sector, measure, price_basis)
        return [s for s in found if (s.chosen or not chosen) and any(v is not None for v in s.values)]

    def industry(self, code: str) -> str:
        return named(self.panel, "industry", code)

    def reasons(self, *measures: str) -> list[str]:
        """Return why a measure is not there, as the run recorded it: first what names one of the measures."""
        rows = self.panel.rows(
            "select distinct message, measure from finding where rule = 'not_computed' and area in ('', ?) "
            "order by message",
            (self.area,),
        )
        named = [message for message, measure in rows if measure in measures]
        return (named or [message for message, _ in rows])[:5]

    def not_ready(self) -> list[str]:
        """Return why there is no decomposition: what its input lacks, else why that was not computed."""
        rows = self.panel.rows(
            "select reason, min(time_period), max(time_period) from decomposition_input "
            "where not ready and area = ? and sector = ? group by reason order by count(*) desc, reason limit 5",
            (self.area, self.sector),
        )
        if not rows:
            return self.reasons("value_added", "labour_input", "capital_services")
        return [f"decomposition: {reason} ({first}–{last})" for reason, first, last in rows]


SHORT = {"sum_of_industries": "summed", "fixed_fraction": "fraction"}
"""Labels of methods on small charts, where their full names do not fit; the tables have those."""


def section(panel: Panel, area: str, sector: str, number: int) -> Section:
    """Return the section of one area and sector of a panel."""
    place = Place(panel, area, sector, f"s{number}")
    figures = (stocks(place), shares(place), growth(place), residual(place), basis(place))
    used = {cell.status for f in figures for t in f.tables for _, cells in t.rows for cell in cells} - {""}
    names = panel.names["obs_status"]
    return Section(
        place.id,
        named(panel, "area", area),
        named(panel, "sector", sector),
        brief(place),
        figures,
        [f"{code} {names[code].lower()}" for code in names if code in used],
    )


def stocks(place: Place) -> Figure:
    """Return the net stock at reference-year prices: assets stacked where they add up to the total."""
    found = place.series("net_stock", "constant")
    lead = f"Net capital stock at the end of the year, at prices of {place.panel.facts['reference_year']}, by asset."
    draft = Figure(f"{place.id}-stocks", "Net capital stock", lead)
    if not found:
        return replace(draft, absent=place.reasons("net_stock", "investment"))
    years, found = _trimmed(place.panel.years, found)
    assets = list(dict.fromkeys(s.asset for s in found if s.asset != "_T"))
    colours = _colours(assets)
    total = [s for s in found if s.industry == "_T"]
    notes: list[str] = []

    def drawn(group: Sequence[Published], text: Text, size: Size) -> Markup:
        factor, unit = scaled(place.panel, group)
        parts = [s for s in group if s.asset != "_T"]
        stackable = adds_up(group)
        shown = parts if stackable else list(group)
        curves = [
            Curve(
                "Total" if s.asset == "_T" else asset_name(place.panel, s.asset),
                "Total" if s.asset == "_T" else s.asset,
                _times(s.values, factor),
                charts.INK if s.asset == "_T" else colours[s.asset],
                s.asset == "_T",
            )
            for s in shown
        ]
        text = replace(text, unit=unit)
        ticks = 4 if size is SMALL else 5
        if stackable:
            scale = charts.axis(charts.stacked_extent(curves), True, ticks)
            return charts.area_chart(text, years, curves, scale, size)
        scale = charts.axis([v for c in curves for v in c.values], True, ticks)
        return charts.line_chart(text, years, curves, scale, size)

    if len(total) > 1 and not adds_up(total):
        notes.append("The assets shown do not add up to a published total in every year: lines, not stacked.")
    groups = _by_industry(found)
    text = Text(f"{place.id}-stocks", f"{draft.title}, {place.area}", lead, "")
    legend = [Curve(asset_name(place.panel, a), a, (), colours[a]) for a in assets]
    return replace(
        draft,
        legend=legend,
        charts=[_both(text, lambda t, size: drawn(total, t, size))] if total else (),
        smalls=_smalls(place, groups, text, lambda code, t: drawn(groups[code], t, SMALL)),
        smalls_lead="By industry, each on its own scale." + _left_out(groups),
        tables=[
            yearly_table(
                f"{draft.title}, {place.industry(code)}, {unit_words(place.panel, group[0])}",
                years,
                [
                    ("Total" if s.asset == "_T" else f"{s.asset} {asset_name(place.panel, s.asset)}", s)
                    for s in group
                ],
                money,
            )
            for code, group in _shown({"_T": total, **groups}).items()
            if group
        ],
        notes=notes,
    )


def shares(place: Place) -> Figure:
    """Return the labour share by every method, the chosen one marked."""
    found = place.series("labour_share", chosen=False)
    lead = "Share of labour in value added by each method of attributing mixed income; the thick line is the one used."
    draft = Figure(f"{place.id}-shares", "Labour share", lead)
    if not found:
        return replace(draft, absent=place.reasons("labour_share", "compensation_of_employees"))
    years, found = _trimmed(place.panel.years, found)
    methods = list(dict.fromkeys(s.method for s in found))
    colours = _colours(methods)
    total = [s for s in found if s.industry == "_T"]
    groups = _by_industry(found)
    common = charts.axis(
        [100 * v for g in groups.values() for s in g for v in s.values if v is not None], False
    )

    def drawn(group: Sequence[Published], text: Text, scale: Axis | None, size: Size) -> Markup:
        curves = [
            Curve(
                s.method.replace("_", " ").capitalize() + (" (used)" if s.chosen else ""),
                SHORT.get(s.method, s.method.replace("_", " ")),
                _times(s.values, 100),
                colours[s.method],
                s.chosen,
            )
            for s in group
        ]
        scale = scale or charts.axis([v for c in curves for v in c.values], False)
        return charts.line_chart(text, years, curves, scale, size)

    text = Text(f"{place.id}-shares", f"{draft.title}, {place.area}", lead, "% of value added")
    return replace(
        draft,
        legend=[Curve(m.replace("_", " ").capitalize(), "", (), colours[m]) for m in methods],
        charts=[_both(text, lambda t, size: drawn(total, t, None, size), narrow=NARROW_WORDS)]
        if total
        else (),
        smalls=_smalls(place, groups, text, lambda code, t: drawn(groups[code], t, common, SMALL_WORDS)),
        smalls_lead="By industry, all on one scale." + _left_out(groups),
        tables=[
            yearly_table(
                f"{draft.title}, {place.industry(code)}, {text.unit}",
                years,
                [(s.method.replace("_", " ") + (" (used)" if s.chosen else ""), s) for s in group],
                percent,
            )
            for code, group in _shown({"_T": total, **groups}).items()
            if group
        ],
        notes=_equations(place, methods),
    )


def growth(place: Place) -> Figure:
    """Return the contributions to output growth: year by year for the total, means by industry."""
    measures = (*(name for name, _, _ in CONTRIBUTIONS), OUTPUT)
    by_key = {(s.measure, s.industry): s for name in measures for s in place.series(name)}
    industries = [c for c in place.panel.names["industry"] if all((m, c) in by_key for m in measures)]
    lead = "Growth of output and what capital, labour and the residual contributed to it."
    draft = Figure(f"{place.id}-growth", "Growth and its sources", lead)
    if not industries:
        return replace(draft, absent=place.not_ready())
    years, kept = _trimmed(place.panel.years, list(by_key.values()))
    by_key = dict(zip(by_key, kept, strict=True))
    unit = "% a year, log form" if by_key[OUTPUT, industries[0]].method == "log" else "% a year"
    parts = {
        c: [Curve(name, name, _times(by_key[m, c].values, 100), colour) for m, name, colour in CONTRIBUTIONS]
        for c in industries
    }
    output = {
        c: Curve("Output", "Output", _times(by_key[OUTPUT, c].values, 100), charts.INK, True)
        for c in industries
    }
    text = Text(f"{place.id}-growth", f"{draft.title}, {place.area}", lead, f"{unit}")

    def by_year(t: Text, size: Size) -> Markup:
        scale = charts.axis([*charts.stacked_extent(parts["_T"]), *output["_T"].values], True, 7)
        return charts.bar_chart(t, years, parts["_T"], output["_T"], scale, size)

    means = {c: mean for c in industries if (mean := _mean(years, [by_key[m, c] for m in measures]))}
    span = next((f"{mean.first}–{mean.last}" for mean in means.values()), "")
    names = [_over(place.industry(c), mean, span) for c, mean in means.items()]
    mean_parts = [
        Curve(name, name, [100 * mean.values[i] for mean in means.values()], colour)
        for i, (_, name, colour) in enumerate(CONTRIBUTIONS)
    ]
    mean_output = Curve("Output", "Output", [100 * mean.values[-1] for mean in means.values()], charts.INK)
    mean_scale = charts.axis([*charts.stacked_extent(mean_parts), *mean_output.values], True)
    mean_title = f"Mean growth by industry, {span}"

    def by_row(t: Text, size: Size) -> Markup:
        return charts.row_chart(t, names, mean_parts, mean_output, mean_scale, size)

    drawn = [_both(text, by_year, f"{place.industry('_T')}, year by year")] if "_T" in parts else []
    if len(means) > 1:
        mean_text = replace(text, id=f"{text.id}-mean", title=f"{mean_title}, {place.area}")
        drawn.append(_both(mean_text, by_row, mean_title))
    heads = [*(name for _, name, _ in CONTRIBUTIONS), "Output"]
    yearly_tables = [
        yearly_table(
            f"{draft.title}, {place.industry(c)}, {unit}",
            years,
            list(zip(heads, [by_key[m, c] for m in measures], strict=True)),
            percent,
        )
        for c in _shown(dict.fromkeys(industries))
    ]
    mean_table = Table(
        f"{mean_title}, {unit}",
        "Industry",
        heads,
        [
            (name, [Cell(v, percent(v)) for v in mean.values])
            for name, mean in zip(names, means.values(), strict=True)
        ],
    )
    return replace(
        draft,
        legend=[*(Curve(name, "", (), colour) for _, name, colour in CONTRIBUTIONS)],
        charts=drawn,
        tables=[mean_table, *yearly_tables],
        notes=["The line (the circle) is output; bars above and below zero add up to it."],
    )


def residual(place: Place) -> Figure:
    """Return the level of the residual: the total, and every industry against it."""
    found = place.series("residual_level")
    lead = "Level of the residual (output not accounted for by capital and labour), first year = 1."
    draft = Figure(f"{place.id}-residual", "Level of the residual", lead)
    if not found:
        return replace(draft, absent=place.not_ready())
    years, found = _trimmed(place.panel.years, found)
    groups = _by_industry(found)
    total = [s for s in found if s.industry == "_T"]
    grey = [Curve("Total", "total", s.values, "#a9b3bd") for s in total]
    text = Text(f"{place.id}-residual", f"{draft.title}, {place.area}", lead, "first year = 1")
    every = charts.axis([v for s in found for v in s.values], False, 4)
    own = charts.axis([v for s in total for v in s.values], False)

    def drawn(
        group: Sequence[Published], behind: Sequence[Curve], label: str, t: Text, scale: Axis, size: Size
    ) -> Markup:
        curves = [Curve(label, label, s.values, charts.PALETTE[0], True) for s in group]
        return charts.line_chart(t, years, [*behind, *curves], scale, size)

    return replace(
        draft,
        charts=[_both(text, lambda t, size: drawn(total, [], "Total", t, own, size))] if total else (),
        smalls=_smalls(place, groups, text, lambda code, t: drawn(groups[code], grey, code, t, every, SMALL)),
        smalls_lead="By industry, all on one scale; the total in grey." + _left_out(groups),
        tables=[
            yearly_table(
                f"{draft.title}, {text.unit}",
                years,
                [(place.industry(s.industry), s) for s in [*total, *(g[0] for g in _shown(groups).values())]],
                level,
            )
        ],
    )


def basis(place: Place) -> Figure:
    """Return what the net stock rests on: observed, imputed and assumed parts over time."""
    found = [s for s in place.series("net_stock", "constant") if s.industry == "_T"]
    lead = "How much of the net stock rests on observed figures, on imputed ones and on assumptions (starting stocks)."
    draft = Figure(f"{place.id}-basis", "What the stock rests on", lead)
    if not found:
        return replace(draft, absent=place.reasons("net_stock", "investment"))
    years, found = _trimmed(place.panel.years, found)
    parts = (("Observed", charts.OBSERVED), ("Imputed", charts.IMPUTED), ("Assumed", charts.ASSUMED))
    scale = Axis(0, 100, 25)
    text = Text(f"{place.id}-basis", f"{draft.title}, {place.area}", lead, "% of the net stock")

    def drawn(series: Published, t: Text, size: Size) -> Markup:
        held = (series.observed, series.imputed, series.assumed)
        curves = [
            Curve(
                name,
                name,
                [None if v is None else max(100 * v, 0.0) for v in values],
                colour,
            )
            for (name, colour), values in zip(parts, held, strict=True)
        ]
        return charts.area_chart(t, years, curves, scale, size)

    whole = [s for s in found if s.asset == "_T" or len(found) == 1]
    groups = {s.asset: [s] for s in found if s.asset != "_T" and len(found) > 2}

    def title(code: str) -> str:
        return "Total, all assets" if code == "_T" else f"{code} {asset_name(place.panel, code)}"

    return replace(
        draft,
        legend=[Curve(name, "", (), colour) for name, colour in parts],
        charts=[_both(text, lambda t, size: drawn(whole[0], t, size), narrow=NARROW_WORDS)] if whole else (),
        smalls=_smalls(place, groups, text, lambda code, t: drawn(groups[code][0], t, SMALL_WORDS), title),
        smalls_lead="By asset." + _left_out(groups),
        tables=[
            Table(
                f"{draft.title}, {title(s.asset)}, {text.unit}",
                "Year",
                [name for name, _ in parts],
                [
                    (str(year), [Cell(v, percent(v)) for v in held])
                    for year, *held in zip(years, s.observed, s.imputed, s.assumed, strict=True)
                ],
            )
            for s in [*whole, *(g[0] for g in _shown(groups).values())]
        ],
    )


def brief(place: Place) -> list[Brief]:
    """Return the headline figures that the panel has."""
    out = []
    facts = place.panel.facts
    for s in place.series("net_stock", "constant"):
        if (s.industry, s.asset) == ("_T", "_T"):
            factor, unit = scaled(place.panel, [s])
            i = _last(s.values)
            words = (
                f"net capital stock at the end of {place.panel.years[i]}, prices of {facts['reference_year']}"
            )
            observed = s.observed[i]
            if observed is not None:
                words += f"; {written(100 * observed, 1)} % of it rests on observed figures"
            out.append(Brief(short((s.values[i] or 0.0) * factor), unit.split(",")[0], words))
    for s in place.series("labour_share"):
        if s.industry == "_T":
            i = _last(s.values)
            known = [v for v in s.values if v is not None]
            out.append(
                Brief(
                    f"{100 * known[-1]:.1f}", "%",
                    f"labour share in {place.panel.years[i]} (mean of all years {100 * fmean(known):.1f} %)",
                )
            )  # fmt: skip
    measures = (*(name for name, _, _ in CONTRIBUTIONS), OUTPUT)
    total = {s.measure: s for m in measures for s in place.series(m) if s.industry == "_T"}
    mean = _mean(place.panel.years, [total[m] for m in measures]) if len(total) == len(measures) else None
    if mean is not None:
        capital, labour, rest, output = (written(100 * v, 2) for v in mean.values)
        words = f"mean growth of output {mean.first}–{mean.last}: capital {capital}, labour {labour}, residual {rest}"
        unit = "% a year, log form" if total[OUTPUT].method == "log" else "% a year"
        out.append(Brief(output, unit, words))
    return out


def adds_up(group: Sequence[Published]) -> bool:
    """Whether the assets can be stacked: none negative, and adding up to the total in every year."""
    parts = [s.values for s in group if s.asset != "_T"]
    totals = [s.values for s in group if s.asset == "_T"] or parts
    if not parts or len(totals) != 1:
        return False
    for whole, *row in zip(totals[0], *parts, strict=True):
        known = [v for v in row if v is not None]
        if whole is None and not known:
            continue
        if whole is None or len(known) < len(row) or min(known) < 0:
            return False
        if not math.isclose(math.fsum(known), whole, rel_tol=1e-9):
            return False
    return True


def _both(text: Text, draw: Callable[[Text, Size], Markup], title: str = "", narrow: Size = NARROW) -> Chart:
    ids = replace(text, id=f"{text.id}-w"), replace(text, id=f"{text.id}-n")
    return Chart(draw(ids[0], WIDE), draw(ids[1], narrow), title)


def _smalls(
    place: Place,
    groups: dict[str, list[Published]],
    text: Text,
    draw: Callable[[str, Text], Markup],
    title: Callable[[str], str] | None = None,
) -> list[Small]:
    out = []
    for i, code in enumerate(_shown(groups)):
        name = (title or place.industry)(code)
        out.append(Small(name, draw(code, replace(text, id=f"{text.id}-{i}", title=f"{text.title}, {name}"))))
    return out


def _shown(groups: dict[str, T]) -> dict[str, T]:
    return dict(list(groups.items())[:PANELS])


def _left_out(groups: dict[str, list[Published]]) -> str:
    rest = len(groups) - PANELS
    return f" The first {PANELS} are shown; {rest:,} more are in the panel." if rest > 0 else ""


def _by_industry(found: Sequence[Published]) -> dict[str, list[Published]]:
    out: dict[str, list[Published]] = {}
    for s in found:
        if s.industry != "_T":
            out.setdefault(s.industry, []).append(s)
    return out


def _trimmed(years: range, found: Sequence[Published]) -> tuple[range, list[Published]]:
    """Return the years from the first to the last figure of any series, and the series over those years."""
    held = [i for s in found for i, v in enumerate(s.values) if v is not None]
    cut = slice(min(held), max(held) + 1)
    return years[cut], [
        replace(
            s,
            values=s.values[cut],
            statuses=s.statuses[cut],
            observed=s.observed[cut],
            imputed=s.imputed[cut],
            assumed=s.assumed[cut],
        )
        for s in found
    ]


def _equations(place: Place, methods: Sequence[str]) -> list[str]:
    """Return what each method computes, in the words of the formula that made its labour income."""
    rows = place.panel.rows(
        "select distinct s.method, f.equation, f.citation from series s join formula f using (formula_id) "
        "where s.measure = 'labour_income' and s.area = ? and s.sector = ?",
        (place.area, place.sector),
    )
    known = {
        method: f"{method.replace('_', ' ').capitalize()}: {equation} ({source})."
        for method, equation, source in rows
    }
    return [known[m] for m in methods if m in known]


@dataclass(frozen=True)
class Mean:
    """Means of several series over the years in which all of them have a figure."""

    first: int
    last: int
    values: Sequence[float]


def _mean(years: Sequence[int], series: Sequence[Published]) -> Mean | None:
    rows = [
        (year, row)
        for year, row in zip(years, zip(*(s.values for s in series), strict=True), strict=True)
        if None not in row
    ]
    if not rows:
        return None
    columns = zip(*(row for _, row in rows), strict=True)
    return Mean(rows[0][0], rows[-1][0], [fmean(column) for column in columns])


def _over(name: str, mean: Mean, span: str) -> str:
    """Return a name, with the years of its mean if they are not those of the others."""
    own = f"{mean.first}–{mean.last}"
    return name if own == span else f"{name} ({own})"


def _colours(codes: Sequence[str]) -> dict[str, str]:
    """Return a colour for each code: the palette, then the same in a lighter tint, again and again."""
    count = len(charts.PALETTE)
    return {code: _tint(charts.PALETTE[i % count], 0.45 * (i // count % 2)) for i, code in enumerate(codes)}


def _tint(colour: str, white: float) -> str:
    parts = (int(colour[i : i + 2], 16) for i in (1, 3, 5))
    return "#" + "".join(f"{round(p + (255 - p) * white):02x}" for p in parts)


def _times(values: Sequence[Value], factor: float) -> list[Value]:
    return [None if v is None else v * factor for v in values]


def _last(values: Sequence[Value]) -> int:
    return max(i for i, v in enumerate(values) if v is not None)
