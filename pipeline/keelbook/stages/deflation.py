"""Deflation: current-price investment to volumes at reference-year prices, and year-end prices."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from keelbook.blocks import Block, BlockKey, Choice, Edges, SeriesIndex
from keelbook.lineage.derive import Given, derive, given
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each, Either
from keelbook.methods.valuation import year_end_price, year_end_price_extrapolated
from keelbook.stages.base import CHOSEN, Inputs, Result, Stage, keys, missing_input, note
from keelbook.stages.totals import TOTAL, totals

DEFLATED = Formula(
    name="deflated",
    equation="volume_t = current_t / price_t",
    citation="SNA 2008, chapter 15: a value divided by its price index is a volume at reference-year prices",
    roles=(Role("current"), Role("price")),
    build=lambda s: Each(lambda current, price: current / price),
)

YEAR_END_PRICE = Formula(
    name="year_end_price",
    equation="Pe_t = sqrt(P_t P_{t+1}); in the last year P_t sqrt(P_t / P_{t-1}), status E",
    citation="OECD, Measuring Capital (2009): prices at the end of a period lie between its own and the next",
    roles=(Role("price"), Role("price_next", 1), Role("price_previous", -1)),
    build=lambda s: Either((Each(year_end_price), Each(year_end_price_extrapolated)), takes=((0, 1), (0, 2))),
)

FORMULAS = (DEFLATED, YEAR_END_PRICE)

INVESTMENT = BlockKey("investment", CHOSEN, "current")
PRICE = BlockKey("investment_price", "rebased", "index")
YEAR_END = BlockKey("investment_price", "year_end", "year_end")

SPECIFICITY = {
    "industry_asset": {},
    "asset": {"industry": TOTAL},
    "industry": {"asset": TOTAL},
    "total": {"industry": TOTAL, "asset": TOTAL},
}
"""How specific a price is -> the dimensions in which it is the total's."""


@dataclass(frozen=True)
class DeflationParams:
    """order: names of `SPECIFICITY`, the first index found is used."""

    order: Choice


def price_edges(series: SeriesIndex, prices: Block, order: Sequence[str]) -> Edges:
    """Return, for every series, the key of the most specific price there is, -1 where there is none.

    A price of the series' own sector goes before one of the whole economy (S1).
    """
    found = np.full(len(series), -1, np.int64)
    for name in order:
        for sector in ({}, {"sector": "S1"}):
            wanted = series.projected({**SPECIFICITY[name], **sector})
            hit = (found < 0) & (prices.series.locate(wanted) >= 0)
            found[hit] = wanted[hit]
    return Edges((prices.key,), np.zeros(len(series), np.int32), found)


def by_edges(block: Block, edges: Edges) -> Given:
    """Read another form of the same prices (average, year-end) through the same assignment."""
    return Given((block,), edges=Edges((block.key,), edges.which, edges.key))


def run(inputs: Inputs, params: DeflationParams) -> Result:
    """Return investment volumes of every delivered series with a price, and year-end prices."""
    prices = inputs.get(BlockKey("investment_price", CHOSEN, "index"))
    if prices is None:
        return Result((), [missing_input("deflation", BlockKey("investment_price", CHOSEN, "index"))])
    year_end = derive(
        YEAR_END_PRICE,
        YEAR_END,
        prices.series,
        prices.periods,
        {role.name: given(prices) for role in YEAR_END_PRICE.roles},
        part=False,
    )
    current = inputs.get(INVESTMENT)
    if current is None:
        return Result((year_end,), [missing_input("deflation", INVESTMENT)])
    current = current.take(current.part)
    edges = price_edges(current.series, prices, params.order.value)
    without_price = edges.key < 0
    findings = [_no_price(current, int(n)) for n in np.flatnonzero(without_price)]
    volume = derive(
        DEFLATED,
        BlockKey("investment", "deflated", "constant"),
        current.series,
        current.periods,
        {"current": given(current), "price": by_edges(prices, edges)},
        sets=((params.order,),),
        part=current.part,
    )
    delivered = inputs.get(BlockKey("investment", "delivered", "constant"))
    if delivered is not None:
        volume = volume.take(delivered.series.locate(volume.series.key) < 0)
    findings.extend(_missing_years(current, volume))
    volume = volume.take(volume.held)
    return Result((volume, *totals(volume, ("sector", "industry", "asset")), year_end), findings)


def _no_price(block: Block, n: int) -> dict[str, Any]:
    return note(
        "no_price",
        "warn",
        "no price index for this investment at any level of the declared order; its stocks are not computed",
        block.series.table,
        int(block.series.key[n]),
        measure="investment_price",
        expected="an index for the industry and asset, the asset, the industry or the total",
        remedy="deliver an index, or map the series to a code that has one",
    )


def _missing_years(current: Block, volume: Block) -> list[dict[str, Any]]:
    """Return a finding per series whose index lacks a year in which there is investment."""
    mine = current.series.locate(volume.series.key)
    lost = np.isfinite(current.value[:, mine]) & np.isnan(volume.value)
    partly = np.flatnonzero(lost.any(axis=0) & np.isfinite(volume.value).any(axis=0))
    return [
        note(
            "price_missing",
            "warn",
            "the price index has no figure in a year of investment; the volume and later stocks are not computed",
            volume.series.table,
            int(volume.series.key[n]),
            measure="investment_price",
            time_period=str(volume.periods[int(np.argmax(lost[:, n]))]),
            found="no figure",
            expected="an index above zero",
            remedy="deliver the year, or declare a less specific index",
        )
        for n in partly
    ]


STAGE = Stage(
    name="deflation",
    needs=frozenset(),
    optional=keys("investment/*/current", "investment/delivered/constant", "investment_price/*/index"),
    gives=keys("investment/deflated/constant", "investment_price/year_end/year_end"),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
