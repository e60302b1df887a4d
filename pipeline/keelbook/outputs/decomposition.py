"""The stored decomposition as tables: averages over periods for every series, and one series year by year."""

from collections.abc import Mapping, Sequence
from typing import Any

from keelbook.audit.reading import Build
from keelbook.outputs.text import number, percent, table

RATES = (
    "output_growth",
    "capital_contribution",
    "labour_contribution",
    "residual_growth",
    "output_per_hour_growth",
    "deepening_contribution",
    "residual_labour_augmenting",
    "residual_capital_augmenting",
)
HEADS = ("output", "capital", "labour", "residual", "per hour", "deepening", "labour-aug.", "capital-aug.")

NOTES = (
    "Growth and contributions in % a year. output = capital + labour + residual; per hour: output per hour worked,",
    "deepening: capital share x growth of capital per hour. The residual is read as neutral as it stands, as",
    "labour-augmenting (divided by 1 - capital share) or as capital-augmenting (divided by the capital share).",
)


def forms(build: Build) -> list[str]:
    """Return the forms stored, the chosen one first."""
    rows = build.rows(
        "select method, bool_or(chosen) from series where measure = 'residual_growth' "
        "group by method order by 2 desc, 1"
    )
    return [method for method, _ in rows]


def averages(
    build: Build, form: str | None = None, first: int | None = None, last: int | None = None
) -> list[dict[str, Any]]:
    """Return one row per area, sector and industry: mean yearly growth over the years asked for.

    Args:
        form: `log` or `discrete`; the chosen form if None.
        first, last: years of growth to average over; all there are if None.
    """
    chosen = form or next(iter(forms(build)), None)
    means = ", ".join(f"avg({name})" for name in RATES)
    rows = build.rows(
        f"select area, sector, industry, min(cast(time_period as integer)), max(cast(time_period as integer)), "
        f"{means}, last(residual_level order by time_period) from decomposition "
        "where form = ? and output_growth is not null and residual_growth is not null "
        "and cast(time_period as integer) between ? and ? "
        "group by area, sector, industry order by area, sector, industry = '_T' desc, industry",
        (chosen, first or -32768, last or 32767),
    )
    names = ("area", "sector", "industry", "first", "last", *RATES, "residual_level")
    return [dict(zip(names, row, strict=True)) for row in rows]


def yearly(build: Build, key: Mapping[str, str], form: str | None = None) -> list[dict[str, Any]]:
    """Return the decomposition of one series, a row per year."""
    chosen = form or next(iter(forms(build)), None)
    names = ("time_period", "capital_share", *RATES, "residual_level")
    rows = build.rows(
        f"select {', '.join(names)} from decomposition where form = ? and area = ? and sector = ? and industry = ? "
        "order by time_period",
        (chosen, key["area"], key["sector"], key["industry"]),
    )
    return [dict(zip(names, row, strict=True)) for row in rows]


def averages_text(rows: Sequence[Mapping[str, Any]], names: Mapping[str, str]) -> list[str]:
    """Return the averages as an aligned table."""
    several = [dim for dim in ("area", "sector") if len({row[dim] for row in rows}) > 1]
    out = []
    for row in rows:
        label = names.get(row["industry"], row["industry"])
        code = " ".join([*(row[dim] for dim in several), row["industry"]])
        cells = [percent(row[name]) for name in RATES]
        out.append(
            [
                f"{code:<4} {label[:34]}",
                f"{row['first']}-{row['last']}",
                *cells,
                number(row["residual_level"], 4),
            ]
        )
    return table(("series", "years", *HEADS, "level"), out)


def yearly_text(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    """Return the yearly decomposition as an aligned table; the first row is the level's base year."""
    out = [
        [
            row["time_period"],
            *[percent(row[name]) for name in RATES],
            number(row["capital_share"], 3),
            number(row["residual_level"], 5),
        ]
        for row in rows
    ]
    return table(("year", *HEADS, "cap. share", "level"), out)
