"""Valuation: volumes at other prices than those of the reference year, and chained aggregates of them.

Elementary volumes Q_t are valued at average prices P of the year, of the year before or of the year after, and
stocks at historic cost from vintages at their own prices. Chained aggregates keep the prices of successive years as
weights; they do not add up, and what they differ by from the sum of their parts is stored, never spread over them.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import combinations
from typing import Any

import numpy as np

from keelbook.blocks import F8, Block, BlockKey, Choice, Edges, MethodSet, SeriesIndex, merge
from keelbook.lineage.derive import Given, derive, given, in_year
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each, Sum
from keelbook.stages import stocks
from keelbook.stages.base import (
    CHOSEN,
    Book,
    Inputs,
    Result,
    Stage,
    keys,
    missing_input,
    note,
    outer_series,
    without,
)
from keelbook.stages.chaining import chained, log_growth, mean_cost_shares
from keelbook.stages.deflation import by_edges, price_edges
from keelbook.stages.starting_stock import STOCKS, lag
from keelbook.stages.totals import total_of, totals

PRICE = BlockKey("investment_price", CHOSEN, "index")

CHAINED = ("investment", "net_stock", "consumption_of_fixed_capital")
"""Measures of which aggregates are chained."""

SHOWN = "net_stock"
"""The measure whose discrepancy is the chosen one; those of the others stand beside it under their own method."""

AT_HISTORIC_COST = ("net_stock", "gross_stock")

DIMENSIONS = ("sector", "industry", "asset")

MANUAL = "IMF, Quarterly National Accounts Manual (2017), chapter on chain-linking; from memory"

AT_AVERAGE_PRICES = Formula(
    name="at_average_prices",
    equation="current_t = P_t Q_t",
    citation="OECD, Measuring Capital (2009): average replacement cost of the period",
    roles=(Role("volume"), Role("price")),
    build=lambda s: Each(lambda volume, price: volume * price),
)

AT_PREVIOUS_PRICES = Formula(
    name="at_previous_year_prices",
    equation="previous_year_t = P_(t-1) Q_t",
    citation="SNA 2008, chapter 15: volumes at the prices of the previous year",
    roles=(Role("volume"), Role("price_previous", -1)),
    build=lambda s: Each(lambda volume, price: volume * price),
)

AT_NEXT_PRICES = Formula(
    name="at_next_year_prices",
    equation="next_year_t = P_(t+1) Q_t",
    citation="SNA 2008, chapter 15: what a Paasche volume index compares the following year with",
    roles=(Role("volume"), Role("price_next", 1)),
    build=lambda s: Each(lambda volume, price: volume * price),
)

OPENING_AT_FIRST_PRICE = Formula(
    name="opening_at_first_price",
    equation="opening at historic cost = P of the first year x opening stock",
    citation="prices before the first year are not known, so that the opening stock is taken at that year's; own rule",
    roles=(Role("opening_stock"), Role("price_next", 1)),
    build=lambda s: Each(lambda stock, price: stock * price),
    estimated=True,
    assumed=True,
)


def _historic_formula(measure: str) -> Formula:
    return Formula(
        name=f"{measure}_at_historic_cost",
        equation=f"historic_t = sum_v w(v) P_(t-v) I_(t-v) + remainder(t) x opening, weights w of the {measure}",
        citation="SNA 2008, chapter 13: vintages at the prices at which they were bought; from memory",
        roles=(Role("investment"), Role("opening_stock"), Role("growth", counted=False)),
        build=lag(measure),
        kind="series",
    )


HISTORIC = {measure: _historic_formula(measure) for measure in AT_HISTORIC_COST}


def _fisher_growth(previous: F8, before: F8, current: F8, next_before: F8) -> F8:
    return np.asarray(np.log(previous / before * (current / next_before)) / 2)


GROWTH = {
    "laspeyres": Formula(
        name="laspeyres_growth",
        equation="growth_t = ln(sum P_(t-1) Q_t / sum P_(t-1) Q_(t-1))",
        citation=f"annual overlap with prices of the previous year: {MANUAL}",
        roles=(Role("at_previous_prices"), Role("at_average_prices_before", -1)),
        build=lambda s: Each(lambda previous, before: np.log(previous / before)),
    ),
    "fisher": Formula(
        name="fisher_growth",
        equation="growth_t = ln of the geometric mean of sum P_(t-1) Q_t / sum P_(t-1) Q_(t-1) and "
        "sum P_t Q_t / sum P_t Q_(t-1)",
        citation=f"Fisher volume index: {MANUAL}",
        roles=(
            Role("at_previous_prices"),
            Role("at_average_prices_before", -1),
            Role("at_average_prices"),
            Role("at_next_prices_before", -1),
        ),
        build=lambda s: Each(_fisher_growth),
    ),
    "tornqvist": Formula(
        name="tornqvist_growth",
        equation="growth_t = sum of mean value shares of t and t-1 x ln(Q_t / Q_(t-1))",
        citation=f"Törnqvist volume index: {MANUAL}",
        roles=(
            Role("volume"),
            Role("volume_previous", -1),
            Role("at_average_prices", counted=False),
            Role("at_average_prices_before", -1, counted=False),
        ),
        build=lambda s: Sum(s.groups, value=log_growth, weight=mean_cost_shares, by_weight=True),
        kind="group",
    ),
}

VOLUME_INDEX = Formula(
    name="volume_index_chained",
    equation="index_t = exp(sum of growth from the reference year to t), the reference year = 1",
    citation=MANUAL,
    roles=(Role("growth"),),
    build=lambda s: chained(s, int(s.single("assembly.reference_year"))),
    kind="series",
)

CHAINED_VOLUME = Formula(
    name="chained_volume",
    equation="chained volume_t = index_t x value in the reference year",
    citation=MANUAL,
    roles=(Role("volume_index"), Role("volume_in_reference_year")),
    build=lambda s: Each(lambda index, value: index * value),
)

DISCREPANCY = Formula(
    name="aggregation_discrepancy",
    equation="discrepancy_t = chained volume_t - sum of the parts at reference-year prices",
    citation=f"chained volumes are not additive, and the difference is not to be removed: {MANUAL}",
    roles=(Role("chained_volume"), Role("sum_of_parts")),
    build=lambda s: Each(lambda chain, parts: chain - parts),
)

FORMULAS = (
    AT_AVERAGE_PRICES,
    AT_PREVIOUS_PRICES,
    AT_NEXT_PRICES,
    OPENING_AT_FIRST_PRICE,
    *HISTORIC.values(),
    *GROWTH.values(),
    VOLUME_INDEX,
    CHAINED_VOLUME,
    DISCREPANCY,
)

VALUED = {
    "current": (AT_AVERAGE_PRICES, "price"),
    "previous_year": (AT_PREVIOUS_PRICES, "price_previous"),
    "next_year": (AT_NEXT_PRICES, "price_next"),
}
"""Price basis -> its formula, and the role of the price in it."""

NEEDED = {
    "none": (),
    "laspeyres": ("current", "previous_year"),
    "fisher": ("current", "previous_year", "next_year"),
    "tornqvist": ("current",),
}
"""Index formula -> the price bases that it reads."""


@dataclass(frozen=True)
class ValuationParams:
    """price_bases: bases at which stocks and investment are stored; chaining: index formula of aggregates."""

    price_bases: Choice
    chaining: Choice
    deflation_order: Choice
    reference_year: Choice


def run(inputs: Inputs, params: ValuationParams) -> Result:
    """Return what is declared: other price bases, historic cost, chained aggregates with their discrepancy."""
    bases, chaining = params.price_bases.value, params.chaining.value
    if not bases and chaining == "none":
        return Result()
    prices = inputs.get(PRICE)
    if prices is None:
        return Result((), [missing_input("valuation", PRICE)])
    book, findings = Book(), []
    for measure in dict.fromkeys((*CHAINED, *STOCKS)):
        volume = inputs.get(BlockKey(measure, CHOSEN, "constant"))
        if volume is None:
            continue
        wanted = _wanted(measure, bases, chaining)
        values = {basis: _valued(inputs, volume, prices, basis, params) for basis in wanted}
        for block in values.values():
            book.add([block])
        if measure in CHAINED and chaining != "none":
            made, problems = _chain(measure, volume, values, params)
            book.add(made)
            findings += problems
    if "historic" in bases:
        for measure in AT_HISTORIC_COST:
            made, problems = _historic(inputs, measure, prices, params)
            book.add(made)
            findings += problems
    return Result(list(book), findings)


def _wanted(measure: str, bases: Sequence[str], chaining: str) -> list[str]:
    """Return the price bases of one measure. Flows are at current prices already, unless a chain reads them."""
    out = [b for b in ("current", "previous_year") if b in bases]
    if measure not in STOCKS:
        out = [b for b in out if b != "current"]
    if measure not in CHAINED:
        out = [b for b in out if b != "previous_year"]
        return out
    return list(dict.fromkeys([*out, *NEEDED[chaining]]))


def _valued(inputs: Inputs, volume: Block, prices: Block, basis: str, params: ValuationParams) -> Block:
    """Return the parts of a volume that have a price, and their totals, at the prices of a year."""
    parts = volume.take(volume.part)
    edges = price_edges(parts.series, prices, params.deflation_order.value)
    priced = edges.key >= 0
    mine = Edges(edges.blocks, edges.which[priced], edges.key[priced])
    formula, role = VALUED[basis]
    block = derive(
        formula,
        BlockKey(volume.key.measure, "revalued", basis),
        parts.series.take(priced),
        parts.periods,
        {"volume": given(volume), role: by_edges(prices, mine)},
        sets=((params.deflation_order,),),
        part=True,
    )
    whole = merge([block, *totals(block, DIMENSIONS)])
    there = inputs.get(BlockKey(volume.key.measure, CHOSEN, basis))
    return whole if there is None else replace(whole, chosen=there.series.locate(whole.series.key) < 0)


def _chain(
    measure: str, volume: Block, values: Mapping[str, Block], params: ValuationParams
) -> tuple[list[Block], list[dict[str, Any]]]:
    """Return growth, index, level and discrepancy of every total of a measure."""
    name = str(params.chaining.value)
    formula = GROWTH[name]
    inputs = {
        "at_average_prices": "current",
        "at_average_prices_before": "current",
        "at_previous_prices": "previous_year",
        "at_next_prices_before": "next_year",
    }
    sources = {role: given(values[basis]) for role, basis in inputs.items() if basis in values}
    sources |= {"volume": given(volume), "volume_previous": given(volume)}
    out = BlockKey(f"{measure}_growth", name, "_Z")
    reads = {role.name: sources[role.name] for role in formula.roles}
    made = []
    for series, project in _aggregates(volume):
        group = project if formula.kind == "group" else None
        made.append(
            derive(
                formula,
                out,
                series,
                volume.periods,
                reads,
                sets=((params.chaining,),),
                group=group,
                part=False,
            )
        )
    if not made:
        return [], []
    growth = merge(made)
    series, periods = growth.series, growth.periods
    index = derive(
        VOLUME_INDEX,
        BlockKey(f"{measure}_index", name, "index"),
        series,
        periods,
        {"growth": given(growth)},
        sets=((params.reference_year,),),
        part=False,
    )
    level = derive(
        CHAINED_VOLUME,
        BlockKey(measure, f"chained_{name}", "constant"),
        series,
        periods,
        {
            "volume_index": given(index),
            "volume_in_reference_year": in_year(volume, int(params.reference_year.value)),
        },
        chosen=False,
        part=False,
    )
    gap = derive(
        DISCREPANCY,
        BlockKey("aggregation_discrepancy", f"{measure}_{name}", "constant"),
        series,
        periods,
        {"chained_volume": given(level), "sum_of_parts": given(volume)},
        chosen=measure == SHOWN,
        part=False,
    )
    return [growth, index, level, gap], _broken(measure, volume, level)


def _aggregates(volume: Block) -> Iterable[tuple[SeriesIndex, dict[str, str]]]:
    """Yield the totals over assets, industries and sectors of a volume, with what each of them runs over."""
    known = volume.series.take(volume.part)
    for count in range(1, len(DIMENSIONS) + 1):
        for dims in combinations(DIMENSIONS, count):
            project = total_of(*dims)
            series = without(outer_series(volume, project), known)
            if len(series):
                yield series, project
                known = SeriesIndex(known.table, np.union1d(known.key, series.key))


def _broken(measure: str, volume: Block, level: Block) -> list[dict[str, Any]]:
    """Return a finding for every chained total without a figure in a year in which its parts have a sum."""
    at = volume.series.locate(level.series.key)
    out = []
    for n in np.flatnonzero(at >= 0):
        lost = np.isfinite(volume.value[:, at[n]]) & np.isnan(level.value[:, n])
        if lost.any():
            out.append(
                note(
                    "chain_broken",
                    "warn",
                    f"a chained total has no figure in {int(lost.sum())} years in which its parts have a sum",
                    level.series.table,
                    int(level.series.key[n]),
                    measure=measure,
                    time_period=str(level.periods[int(np.argmax(lost))]),
                    found="no figure",
                    expected="values above zero in both years of every link, at prices of both",
                    remedy="deliver the prices, or choose another formula: a Törnqvist index has no place for zeros",
                )
            )
    return out


# --- historic cost -------------------------------------------------------------------------------------------


def _historic(
    inputs: Inputs, measure: str, prices: Block, params: ValuationParams
) -> tuple[list[Block], list[dict[str, Any]]]:
    """Return a stock of vintages at the prices at which they were bought, and the opening it starts from.

    Stocks that were not summed from vintages alone (delivered, rescaled, from zero) are left out with a note.
    """
    stock = inputs.get(BlockKey(measure, "perpetual_inventory", "constant"))
    investment = inputs.get(BlockKey("investment", CHOSEN, "constant"))
    if stock is None or investment is None:
        return [], []
    stock = stock.take(stock.part)
    edges = price_edges(stock.series, prices, params.deflation_order.value)
    blocks: list[Block] = []
    done = np.zeros(len(stock.series), bool)
    for number, derivation in enumerate(stock.origin.derivations):
        mine = (stock.origin.derivation == number) & (edges.key >= 0)
        if derivation.formula != stocks.VINTAGES[measure].name or not mine.any():
            continue
        done |= mine
        one = stock.take(mine)
        price = by_edges(prices, Edges(edges.blocks, edges.which[mine], edges.key[mine]))
        flow = derive(
            AT_AVERAGE_PRICES,
            BlockKey("investment", f"bought_for_{measure}", "historic"),
            one.series,
            one.periods,
            {"volume": _again(inputs, one, "investment"), "price": price},
            sets=((params.deflation_order,),),
            chosen=measure == AT_HISTORIC_COST[0],
            part=False,
        )
        opening = derive(
            OPENING_AT_FIRST_PRICE,
            BlockKey(measure, "opening", "historic"),
            one.series,
            one.periods,
            {"opening_stock": _again(inputs, one, "opening_stock"), "price_next": price},
            sets=((params.deflation_order,),),
            chosen=False,
            part=False,
        )
        used, which = np.unique(one.origin.set, return_inverse=True)
        sets: list[MethodSet] = [one.origin.sets[i] for i in used]
        held = derive(
            HISTORIC[measure],
            BlockKey(measure, "perpetual_inventory", "historic"),
            one.series,
            one.periods,
            {
                "investment": given(flow),
                "opening_stock": given(opening),
                "growth": _again(inputs, one, "growth"),
            },
            sets=sets,
            which=which.astype(np.int32),
        )
        blocks += [flow, opening, held]
    found = Book(blocks).get(BlockKey(measure, "perpetual_inventory", "historic"))
    blocks += [] if found is None else totals(found, DIMENSIONS)
    whole = inputs.get(BlockKey(measure, CHOSEN, "constant"))
    if whole is None:
        return blocks, []
    parts = whole.take(whole.part)
    return blocks, _left_out(measure, parts.take(stock.series.take(done).locate(parts.series.key) < 0))


def _again(inputs: Inputs, block: Block, role: str) -> Given:
    """Return the reading by which a block of one derivation was made, for the same series."""
    derivation = block.origin.derivations[int(block.origin.derivation[0])]
    (link,) = (one for one in derivation.links if one.role == role)
    edges = block.origin.edges.get(role)
    if link.kind == "edge" and edges is not None:
        there = [inputs.get(key) for key in edges.blocks]
        first = next(b for b in there if b is not None)
        return Given(tuple(first if b is None else b for b in there), edges=edges)
    assert link.input is not None
    source = inputs.get(link.input)
    assert source is not None, f"{link.input} made {block.key}, but is not there"
    return given(source, **dict(link.project))


def _left_out(measure: str, stock: Block) -> list[dict[str, Any]]:
    if not len(stock.series):
        return []
    return [
        note(
            "no_historic_cost",
            "note",
            f"{len(stock.series)} stocks have no value at historic cost and are missing from its totals: they were "
            "delivered, have no price, start from zero, or other changes in volume hit their vintages",
            stock.series.table,
            int(stock.series.key[0]),
            measure=measure,
            remedy="deliver the stock at historic cost, if it is to be published",
        )
    ]


_VOLUMES = {
    key
    for key in stocks.STAGE.gives
    if key.price_basis in ("constant", "_Z") and key.method != "sum_of_parts"
}

STAGE = Stage(
    name="valuation",
    needs=frozenset(),
    optional=frozenset(_VOLUMES)
    | {PRICE}
    | keys(
        *(f"{m}/*/{basis}" for m in dict.fromkeys((*CHAINED, *STOCKS)) for basis in ("constant", *VALUED)),
    ),
    gives=keys(
        *(f"{m}/revalued/{basis}" for m in dict.fromkeys((*CHAINED, *STOCKS)) for basis in VALUED),
        *(f"{m}_growth/{name}/_Z" for m in CHAINED for name in GROWTH),
        *(f"{m}_index/{name}/index" for m in CHAINED for name in GROWTH),
        *(f"{m}/chained_{name}/constant" for m in CHAINED for name in GROWTH),
        *(f"aggregation_discrepancy/{m}_{name}/constant" for m in CHAINED for name in GROWTH),
        *(f"investment/bought_for_{m}/historic" for m in AT_HISTORIC_COST),
        *(
            f"{m}/{method}/historic"
            for m in AT_HISTORIC_COST
            for method in ("opening", "perpetual_inventory")
        ),
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
