"""Stocks: gross, productive and net capital stocks by the perpetual inventory, and what leaves them."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from keelbook.blocks import B1, Block, BlockKey, Choice, MethodSet
from keelbook.lineage.derive import derive, given
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each
from keelbook.stages.base import CHOSEN, Book, Inputs, Result, Stage, keys, missing_input, note
from keelbook.stages.deflation import by_edges, price_edges
from keelbook.stages.starting_stock import FORMULAS as STARTING
from keelbook.stages.starting_stock import (
    LOSSES,
    STOCKS,
    Start,
    StartParams,
    defined,
    lag,
    read_for,
    solved_rates,
    start,
)
from keelbook.stages.totals import TOTALS, totals


def _cohort_formula(measure: str, symbol: str) -> Formula:
    stock = LOSSES.get(measure, measure)
    return Formula(
        name=f"{measure}_of_vintages",
        equation=f"{symbol}_t = sum_v w(v) I_(t-v) + remainder(t) x opening {stock}, weights w of the {measure}",
        citation="OECD, Measuring Capital (2009), perpetual inventory method",
        roles=(Role("investment"), Role("opening_stock"), Role("growth", counted=False)),
        build=lag(measure),
        kind="series",
    )


VINTAGES = {
    "gross_stock": _cohort_formula("gross_stock", "G"),
    "productive_stock": _cohort_formula("productive_stock", "K"),
    "net_stock": _cohort_formula("net_stock", "W"),
    "consumption_of_fixed_capital": _cohort_formula("consumption_of_fixed_capital", "CFC"),
    "retirements": _cohort_formula("retirements", "R"),
}


AT_CURRENT_PRICES = Formula(
    name="at_current_prices",
    equation="current_t = P_t x volume_t",
    citation="SNA 2008: consumption of fixed capital is valued at the average prices of the period",
    roles=(Role("volume"), Role("price")),
    build=lambda s: Each(lambda volume, price: volume * price),
)

AT_REPLACEMENT_COST = Formula(
    name="at_replacement_cost",
    equation="year_end_t = Pe_t x volume_t",
    citation="OECD, Measuring Capital (2009): balance-sheet value at year-end prices",
    roles=(Role("volume"), Role("year_end_price")),
    build=lambda s: Each(lambda volume, price: volume * price),
)

AT_REFERENCE_PRICES = Formula(
    name="at_reference_prices",
    equation="volume_t = year-end value_t / Pe_t",
    citation="OECD, Measuring Capital (2009): balance-sheet value at year-end prices",
    roles=(Role("year_end_value"), Role("year_end_price")),
    build=lambda s: Each(lambda value, price: value / price),
)

AS_NET_STOCK = Formula(
    name="productive_as_net_stock",
    equation="productive stock = net stock, of an asset that does not wear out",
    citation="OECD, Measuring Capital (2009): land and inventories have no depreciation",
    roles=(Role("net_stock"),),
    build=lambda s: Each(lambda net: net * 1.0),
)

FORMULAS = (
    *STARTING,
    *VINTAGES.values(),
    AT_CURRENT_PRICES,
    AT_REPLACEMENT_COST,
    AT_REFERENCE_PRICES,
    AS_NET_STOCK,
)

BALANCE_TOLERANCE = 1e-11
"""Rounding allowed in the balance identity, relative to the size of its terms."""


@dataclass(frozen=True)
class StocksParams:
    """assets: the asset parameters of a pair (asset, industry), None where no rule covers it."""

    assets: Callable[[str, str], MethodSet | None]
    timing: Choice
    age_price_mode: Choice
    start: StartParams
    deflation_order: Choice


DIMENSIONS = ("sector", "industry", "asset")
"""Dimensions over which totals of stocks and losses are made."""

OF_ALL = "sum_of_parts"
"""Method of a total over series of several methods."""


def run(inputs: Inputs, params: StocksParams) -> Result:
    """Return the stocks and losses of every investment series with an asset rule, and their totals."""
    blocks, benchmarks = _delivered(inputs, params)
    key = BlockKey("investment", CHOSEN, "constant")
    investment = inputs.get(key)
    if investment is None:
        return Result([*blocks, *_totals(inputs, blocks)], [missing_input("stocks", key)])
    investment = investment.take(investment.part)
    sets, which, findings = _choices(investment, params)
    if params.start.initial_stock.value == "two_benchmarks":
        sets, which, problems = solved_rates(
            investment, sets, which, benchmarks.get("net_stock"), params.timing, params.start.initial_stock
        )
        findings.extend(problems)
    covered = which >= 0
    if not covered.any():
        return Result([*blocks, *_totals(inputs, blocks)], findings)
    investment, which = investment.take(covered), which[covered]
    begin = start(investment, sets, which, benchmarks, params.start)
    findings.extend(begin.findings)
    blocks.extend(begin.blocks)
    made: dict[str, Block] = {}
    for measure in (*STOCKS, *LOSSES):
        there = defined(measure, sets)[which]
        mine = investment.take(there)
        if len(mine.series):
            made[measure] = derive(
                VINTAGES[measure],
                BlockKey(measure, "perpetual_inventory", "constant"),
                mine.series,
                mine.periods,
                {
                    "investment": given(mine),
                    "opening_stock": read_for(begin.openings[LOSSES.get(measure, measure)], mine.series),
                    "growth": given(begin.growth),
                },
                sets=sets,
                which=which[there],
                part=mine.part,
            )
    findings.extend(_unbalanced(investment, made, begin))
    findings.extend(_broken_off(investment, made["net_stock"]))
    valued, problems = _valued(inputs, made, params)
    findings.extend(problems)
    blocks.extend((*made.values(), *valued))
    return Result([*blocks, *_totals(inputs, blocks)], findings)


def _totals(inputs: Inputs, blocks: Sequence[Block]) -> list[Block]:
    """Return the totals of stocks and losses, over computed and delivered series together."""
    out = []
    for measure in (*STOCKS, *LOSSES):
        for basis in ("constant", "year_end", "current"):
            forms = [b for b in blocks if (b.key.measure, b.key.price_basis) == (measure, basis)]
            if measure in STOCKS and basis != "current":
                delivered = inputs.get(BlockKey(measure, "delivered", basis))
                forms += [] if delivered is None else [delivered]
            forms = [b for b in forms if b.chosen.any()]
            if len(forms) == 1 and forms[0].chosen.all():
                made = totals(forms[0], DIMENSIONS)
            elif forms:
                whole = Book(forms).get(BlockKey(measure, CHOSEN, basis))
                made = totals(whole, DIMENSIONS, OF_ALL) if whole is not None else []
            else:
                continue
            if measure in ("gross_stock", "retirements"):
                made = _without_gaps(made, blocks)
            out.extend(made)
    return out


def _without_gaps(made: Sequence[Block], blocks: Sequence[Block]) -> list[Block]:
    """Return the totals of gross stocks to which every asset with a net stock adds: the others would be too small."""
    net = [b for b in blocks if b.key == BlockKey("net_stock", "perpetual_inventory", "constant")]
    gross = [b for b in blocks if b.key == BlockKey("gross_stock", "perpetual_inventory", "constant")]
    if not net or not gross:
        return list(made)
    lacking = net[0].series.take(net[0].part & (gross[0].series.locate(net[0].series.key) < 0))
    out = []
    for total in made:
        codes = {dim: TOTALS[dim] for dim in DIMENSIONS}
        summed = {d: c for d, c in codes.items() if bool(total.series.is_code(d, c).all())}
        whole = ~np.isin(total.series.key, lacking.projected(summed))
        if whole.any():
            out.append(total.take(whole))
    return out


def _delivered(inputs: Inputs, params: StocksParams) -> tuple[list[Block], dict[str, Block]]:
    """Return what follows from delivered stocks, and the delivered stocks at reference-year prices by measure.

    A stock delivered at year-end prices is put at reference-year prices; a net stock that no investment builds
    (land, inventories) is a productive stock as well.
    """
    year_end_prices = inputs.get(BlockKey("investment_price", "year_end", "year_end"))
    blocks, at_reference = [], {}
    for measure in STOCKS:
        block = inputs.get(BlockKey(measure, "delivered", "constant"))
        valued = inputs.get(BlockKey(measure, "delivered", "year_end"))
        if block is None and valued is not None and year_end_prices is not None:
            edges = price_edges(valued.series, year_end_prices, params.deflation_order.value)
            block = derive(
                AT_REFERENCE_PRICES,
                BlockKey(measure, "at_reference_prices", "constant"),
                valued.series,
                valued.periods,
                {"year_end_value": given(valued), "year_end_price": by_edges(year_end_prices, edges)},
                sets=((params.deflation_order,),),
                chosen=valued.chosen,
                part=valued.part,
            )
            blocks.append(block)
        if block is not None:
            at_reference[measure] = block
    net = at_reference.get("net_stock")
    alone = None if net is None else net.take(net.chosen & _lasting(net, params))
    if alone is not None and len(alone.series):
        blocks.append(
            derive(
                AS_NET_STOCK,
                BlockKey("productive_stock", "as_net_stock", "constant"),
                alone.series,
                alone.periods,
                {"net_stock": given(alone)},
                part=alone.part,
            )
        )
    return blocks, at_reference


def _lasting(net: Block, params: StocksParams) -> B1:
    """Return which series are of assets that no rule gives a life or a rate: they do not wear out."""
    codes = net.series.table.codes
    pairs = zip(net.series.digit("asset"), net.series.digit("industry"), strict=True)
    return np.array([params.assets(codes["asset"][a], codes["industry"][j]) is None for a, j in pairs], bool)


def _choices(
    investment: Block, params: StocksParams
) -> tuple[tuple[MethodSet, ...], Any, list[dict[str, Any]]]:
    """Return the distinct parameter sets, which of them each series uses (-1: none), and what is missing."""
    asset, industry = (investment.series.digit(d) for d in ("asset", "industry"))
    codes = investment.series.table.codes
    pairs, pair = np.unique(np.stack([asset, industry]), axis=1, return_inverse=True)
    sets: dict[MethodSet, int] = {}
    of_pair = np.full(pairs.shape[1], -1, np.int32)
    findings = []
    for i, (a, j) in enumerate(pairs.T):
        found = params.assets(codes["asset"][a], codes["industry"][j])
        if found is None:
            findings.append(
                {
                    "rule": "no_asset_rule",
                    "severity": "warn",
                    "level": 1,
                    "measure": "net_stock",
                    "asset": codes["asset"][a],
                    "industry": codes["industry"][j],
                    "message": "no row of rules/assets.csv covers this asset; its stocks are not computed, and missing "
                    "from totals",
                    "expected": "a row for the asset, or for a group that it belongs to",
                    "remedy": "add a row to rules/assets.csv of the assembly",
                }
            )
            continue
        chosen = (*found, params.timing, params.age_price_mode)
        of_pair[i] = sets.setdefault(chosen, len(sets))
    return tuple(sets), of_pair[pair.ravel()], findings


def _broken_off(investment: Block, net: Block) -> list[dict[str, Any]]:
    """Return a finding per series that has investment after a year without: its stocks end at the gap."""
    after = np.isfinite(investment.value) & np.isnan(net.value)
    started = net.held
    out = []
    for n in np.flatnonzero(after.any(axis=0) & started):
        last = int(np.flatnonzero(np.isfinite(net.value[:, n]))[-1])
        out.append(
            note(
                "stock_ends",
                "warn",
                "investment has a gap; the stocks end before it",
                investment.series.table,
                int(investment.series.key[n]),
                measure="net_stock",
                time_period=str(investment.periods[last + 1]),
                found="no investment figure",
                expected="a figure for every year",
                remedy="deliver the year, or declare how it is to be filled",
            )
        )
    return out


def _unbalanced(investment: Block, made: Mapping[str, Block], begin: Start) -> list[dict[str, Any]]:
    """Test W_t = W_(t-1) + I_t - CFC_t and G_t = G_(t-1) + I_t - R_t; both sides come from vintages."""
    out = []
    for loss, stock in LOSSES.items():
        if loss not in made:
            continue
        closing, lost = made[stock], made[loss]
        opening = begin.opening_values(stock, closing.series)
        flow = investment.value[:, investment.series.locate(closing.series.key)]
        before = np.where(np.isfinite(opening), opening, closing.value)[:-1]
        gap = closing.value[1:] - (before + flow[1:] - lost.value[1:])
        size = np.abs(closing.value[1:]) + np.abs(before) + np.abs(flow[1:]) + np.abs(lost.value[1:])
        with np.errstate(invalid="ignore"):
            bad = np.abs(gap) > BALANCE_TOLERANCE * size
        for n in np.flatnonzero(bad.any(axis=0)):
            t = int(np.argmax(bad[:, n])) + 1
            out.append(
                note(
                    "balance",
                    "stop",
                    f"{stock} does not equal opening plus investment less {loss}",
                    closing.series.table,
                    int(closing.series.key[n]),
                    measure=stock,
                    time_period=str(closing.periods[t]),
                    found=f"a gap of {gap[t - 1, n]:.6g}",
                    expected="0",
                    remedy="report this: the arithmetic of the stock is wrong",
                )
            )
    return out


def _valued(
    inputs: Inputs, made: Mapping[str, Block], params: StocksParams
) -> tuple[list[Block], list[dict[str, Any]]]:
    """Return consumption at current prices and the stocks at year-end replacement cost."""
    price = inputs.get(BlockKey("investment_price", CHOSEN, "index"))
    year_end = inputs.get(BlockKey("investment_price", "year_end", "year_end"))
    if price is None or year_end is None:
        return [], [missing_input("stocks", BlockKey("investment_price", CHOSEN, "index"))]
    out = []
    for measure in (*STOCKS, *LOSSES):
        if measure not in made:
            continue
        block = made[measure]
        edges = price_edges(block.series, price, params.deflation_order.value)
        current = measure in LOSSES
        out.append(
            derive(
                AT_CURRENT_PRICES if current else AT_REPLACEMENT_COST,
                BlockKey(measure, "perpetual_inventory", "current" if current else "year_end"),
                block.series,
                block.periods,
                {
                    "volume": given(block),
                    ("price" if current else "year_end_price"): by_edges(
                        price if current else year_end, edges
                    ),
                },
                sets=((params.deflation_order,),),
                part=block.part,
            )
        )
    return out, []


STAGE = Stage(
    name="stocks",
    needs=frozenset(),
    optional=keys(
        "investment/*/constant",
        "investment_price/*/index",
        "investment_price/year_end/year_end",
        *(f"{m}/delivered/{basis}" for m in STOCKS for basis in ("constant", "year_end")),
    ),
    gives=keys(
        "productive_stock/as_net_stock/constant",
        "benchmark_factor/benchmark/_Z",
        *(
            f"{m}/{method}/constant"
            for m in STOCKS
            for method in ("benchmark", "at_reference_prices", "sum_of_parts")
        ),
        "trend_growth/log_linear_trend/_Z",
        "trend_investment/log_linear_trend/constant",
        *(f"{m}/steady_state/constant" for m in STOCKS),
        *(f"{m}/perpetual_inventory/constant" for m in (*STOCKS, *LOSSES)),
        *(f"{m}/perpetual_inventory/year_end" for m in STOCKS),
        *(
            f"{m}/{method}/{b}"
            for m in STOCKS
            for method in ("delivered", OF_ALL)
            for b in ("constant", "year_end")
        ),
        *(f"{m}/perpetual_inventory/current" for m in LOSSES),
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
