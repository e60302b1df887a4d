"""Services: rates of return, user costs and the index of capital services."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from keelbook.blocks import F8, Block, BlockKey, Choice, merge
from keelbook.lineage.derive import Given, derive, given, in_year
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each, Sum
from keelbook.methods.user_cost import asset_base, capital_cost, endogenous_rate, revaluation, unit_user_cost
from keelbook.stages.base import CHOSEN, Book, Inputs, Result, Stage, keys, missing_input, note, outer_series
from keelbook.stages.chaining import chained, log_growth, mean_cost_shares
from keelbook.stages.deflation import by_edges, price_edges
from keelbook.stages.totals import total_of, totals

NET = BlockKey("net_stock", CHOSEN, "constant")
PRODUCTIVE = BlockKey("productive_stock", CHOSEN, "constant")
CONSUMPTION = BlockKey("consumption_of_fixed_capital", "perpetual_inventory", "current")
PRICE = BlockKey("investment_price", CHOSEN, "index")
YEAR_END = BlockKey("investment_price", "year_end", "year_end")
CAPITAL_INCOME = BlockKey("capital_income", CHOSEN, "current")
OUTPUT_CURRENT = BlockKey("value_added", CHOSEN, "current")
OUTPUT_VOLUME = BlockKey("value_added", CHOSEN, "constant")
RATES = BlockKey("rate_of_return", CHOSEN, "_Z")
COSTS = BlockKey("capital_compensation", CHOSEN, "current")

ASSET_BASE = Formula(
    name="asset_base",
    equation="B_t = P_t (W_(t-1) + W_t) / 2",
    citation="OECD, Measuring Capital (2009): average net stock at average prices of the period",
    roles=(Role("price"), Role("net_stock_previous", -1), Role("net_stock")),
    build=lambda s: Each(asset_base),
)

REVALUATION = Formula(
    name="revaluation",
    equation="H_t = (Pe_t / Pe_(t-1) - 1) B_t",
    citation="OECD, Measuring Capital (2009): holding gain of the period on the asset base",
    roles=(Role("year_end_price"), Role("year_end_price_previous", -1), Role("asset_base")),
    build=lambda s: Each(revaluation),
)

RATE_OF_RETURN = Formula(
    name="endogenous_rate_of_return",
    equation="r = (capital income - consumption of fixed capital + revaluation) / asset base, all of them totals",
    citation="OECD, Measuring Capital (2009): the rate that exhausts capital income; Oulton 2005 on its limits",
    roles=(Role("capital_income"), Role("consumption"), Role("revaluation"), Role("asset_base")),
    build=lambda s: Each(endogenous_rate),
)


def _exogenous_rate(current: F8, volume: F8, current_before: F8, volume_before: F8, real_rate: F8) -> F8:
    inflation = current / volume / (current_before / volume_before) - 1
    return np.asarray((1 + real_rate) * (1 + inflation) - 1)


EXOGENOUS_RATE = Formula(
    name="exogenous_rate_of_return",
    equation="r = (1 + real rate)(1 + general inflation) - 1, inflation of the implicit price of value added",
    citation="OECD, Measuring Capital (2009): a declared real rate where there is no market surplus",
    roles=(
        Role("value_added"),
        Role("value_added_volume"),
        Role("value_added_previous", -1),
        Role("value_added_volume_previous", -1),
    ),
    build=lambda s: Each(_exogenous_rate, (s.column("services.real_rate"),)),
)

UNALLOCATED = Formula(
    name="unallocated_income",
    equation="unallocated income = capital income - capital compensation at the exogenous rate",
    citation="OECD, Measuring Capital (2009): an exogenous rate does not exhaust capital income",
    roles=(Role("capital_income"), Role("capital_compensation")),
    build=lambda s: Each(lambda income, cost: income - cost),
)

CAPITAL_COST = Formula(
    name="capital_compensation",
    equation="c = r B + D - H",
    citation="OECD, Measuring Capital (2009): user cost of the stock of one asset, average form",
    roles=(Role("rate_of_return"), Role("asset_base"), Role("consumption"), Role("revaluation")),
    build=lambda s: Each(capital_cost),
)

CAPITAL_COST_WITHOUT_WEAR = Formula(
    name="capital_compensation_without_wear",
    equation="c = r B - H, of an asset without consumption of fixed capital",
    citation="OECD, Measuring Capital (2009): land and inventories earn a return and are revalued",
    roles=(Role("rate_of_return"), Role("asset_base"), Role("revaluation")),
    build=lambda s: Each(lambda r, base, gain: r * base - gain),
)

AVERAGE_STOCK = Formula(
    name="average_productive_stock",
    equation="average productive stock_t = (K_(t-1) + K_t) / 2",
    citation="OECD, Measuring Capital (2009): services of a period from the average stock",
    roles=(Role("productive_stock_previous", -1), Role("productive_stock")),
    build=lambda s: Each(lambda previous, current: (previous + current) / 2),
)

USER_COST = Formula(
    name="unit_user_cost",
    equation="user cost of a unit = c / average productive stock",
    citation="OECD, Measuring Capital (2009)",
    roles=(Role("capital_compensation"), Role("productive_stock")),
    build=lambda s: Each(unit_user_cost),
)


SERVICES_GROWTH = Formula(
    name="capital_services_growth",
    equation="dln S_t = sum_k (s_k,t + s_k,t-1)/2 x ln(K_k,t / K_k,t-1), s_k = c_k / sum c",
    citation="Törnqvist index of capital services: BLS technical notes; OECD, Measuring Capital (2009)",
    roles=(
        Role("productive_stock"),
        Role("productive_stock_previous", -1),
        Role("capital_compensation", counted=False),
        Role("capital_compensation_previous", -1, counted=False),
    ),
    build=lambda s: Sum(s.groups, value=log_growth, weight=mean_cost_shares, by_weight=True),
    kind="group",
)


SERVICES = Formula(
    name="capital_services_chained",
    equation="S_t = exp(sum of growth from the reference year to t), the reference year = 1",
    citation="chained index: ABS, Concepts, Sources and Methods 2020-21, annex on chain volume indexes",
    roles=(Role("growth"),),
    build=lambda s: chained(s, int(s.single("assembly.reference_year"))),
    kind="series",
)

COMPOSITION = Formula(
    name="capital_composition",
    equation="composition_t = services_t / (net stock_t / net stock in the reference year)",
    citation="services over stock, both with the reference year = 1: OECD, Measuring Productivity (2001); from memory",
    roles=(Role("capital_services"), Role("net_stock"), Role("net_stock_in_reference_year")),
    build=lambda s: Each(lambda services, stock, reference: services / (stock / reference)),
)

FORMULAS = (
    ASSET_BASE,
    REVALUATION,
    RATE_OF_RETURN,
    EXOGENOUS_RATE,
    UNALLOCATED,
    CAPITAL_COST,
    CAPITAL_COST_WITHOUT_WEAR,
    AVERAGE_STOCK,
    USER_COST,
    SERVICES_GROWTH,
    SERVICES,
    COMPOSITION,
)

DIMENSIONS = ("sector", "industry", "asset")
"""Dimensions over which totals of bases and costs are made."""

SERVICE_TOTALS = (("asset",), ("industry", "asset"), ("sector", "asset"), ("sector", "industry", "asset"))
"""What an index of services runs over: the assets of an industry, of a sector, of an area."""


@dataclass(frozen=True)
class ServicesParams:
    """exogenous_sectors: sectors whose rate is declared, all others earn the rate that exhausts their income."""

    rate_of_return: Choice
    rate_scope: Choice
    exogenous_sectors: Choice
    real_rate: Choice
    holding_gains: Choice
    productive_stock_timing: Choice
    deflation_order: Choice
    reference_year: Choice


def run(inputs: Inputs, params: ServicesParams) -> Result:
    """Return base, revaluation, rate, cost and services; what lacks an input is left out with a note."""
    whole: dict[BlockKey, Block] = {}
    for key in (NET, PRODUCTIVE, PRICE, YEAR_END):
        block = inputs.get(key)
        if block is not None:
            whole[key] = block
    missing = [
        missing_input("services", key) for key in (NET, PRODUCTIVE, PRICE, YEAR_END) if key not in whole
    ]
    if missing:
        return Result((), missing)
    consumption, income = inputs.get(CONSUMPTION), inputs.get(CAPITAL_INCOME)
    if consumption is None or income is None:
        return Result((), [missing_input("services", CONSUMPTION if consumption is None else CAPITAL_INCOME)])
    net = _priced(whole[NET].take(whole[NET].part), whole[PRICE], params)
    made = _elementary(net, whole, params)
    book = Book()
    for block in made:
        book.add([block, *totals(block, DIMENSIONS)])
    base, gains = list(book)
    scope = total_of("asset") if params.rate_scope.value == "industry" else total_of("asset", "industry")
    rates, findings = _rates(inputs, net, base, gains, consumption, income, scope, params)
    book.add(rates)
    rate = book.get(RATES)
    if rate is None:
        return Result(list(book), findings)
    costs = _costs(net, rate, base, gains, consumption, scope)
    book.add(costs)
    cost = book.get(COSTS)
    assert cost is not None
    book.add(totals(cost, DIMENSIONS, "sum_of_parts"))
    book.add(_unallocated(book, rates, income))
    productive = whole[PRODUCTIVE].take(whole[PRODUCTIVE].part)
    average = derive(
        AVERAGE_STOCK,
        BlockKey("productive_stock_average", "average", "constant"),
        productive.series,
        productive.periods,
        {"productive_stock_previous": given(productive), "productive_stock": given(productive)},
        sets=((params.productive_stock_timing,),),
        part=productive.part,
    )
    user_costs = [
        derive(
            USER_COST,
            BlockKey("user_cost", block.key.method, "current"),
            block.series,
            block.periods,
            {"capital_compensation": given(block), "productive_stock": given(average)},
            part=False,
        )
        for block in costs
    ]
    services = _services(average, cost, whole[NET], params)
    return Result([*book, average, *user_costs, *services], [*findings, *_negative(cost)])


def _priced(net: Block, prices: Block, params: ServicesParams) -> Block:
    """Return the stocks that have a price."""
    return net.take(price_edges(net.series, prices, params.deflation_order.value).key >= 0)


def _elementary(net: Block, whole: Mapping[BlockKey, Block], params: ServicesParams) -> tuple[Block, Block]:
    """Return asset base and revaluation of every asset."""
    edges = price_edges(net.series, whole[PRICE], params.deflation_order.value)
    base = derive(
        ASSET_BASE,
        BlockKey("asset_base", "average", "current"),
        net.series,
        net.periods,
        {"price": by_edges(whole[PRICE], edges), "net_stock_previous": given(net), "net_stock": given(net)},
        sets=((params.deflation_order,),),
        part=net.part,
    )
    year_end: Given = by_edges(whole[YEAR_END], edges)
    gain = derive(
        REVALUATION,
        BlockKey("revaluation", "actual", "current"),
        net.series,
        net.periods,
        {"year_end_price": year_end, "year_end_price_previous": year_end, "asset_base": given(base)},
        sets=((params.holding_gains, params.deflation_order),),
        part=net.part,
    )
    return base, gain


def _rates(
    inputs: Inputs,
    net: Block,
    base: Block,
    gains: Block,
    consumption: Block,
    income: Block,
    scope: Mapping[str, str],
    params: ServicesParams,
) -> tuple[list[Block], list[dict[str, Any]]]:
    """Return the rates of return, endogenous and exogenous, by sector and industry (or sector alone)."""
    series = outer_series(net, scope)
    declared = np.zeros(len(series), bool)
    for sector in params.exogenous_sectors.value:
        declared |= series.is_code("sector", sector)
    blocks, findings = [], []
    if (~declared).any():
        endogenous = derive(
            RATE_OF_RETURN,
            BlockKey("rate_of_return", "endogenous", "_Z"),
            series.take(~declared),
            net.periods,
            {
                "capital_income": given(income, asset="_Z"),
                "consumption": given(consumption),
                "revaluation": given(gains),
                "asset_base": given(base),
            },
            sets=((params.rate_of_return, params.rate_scope),),
            part=False,
        )
        blocks.append(endogenous)
        findings += _no_rate(endogenous)
    if declared.any():
        current, volume = inputs.get(OUTPUT_CURRENT), inputs.get(OUTPUT_VOLUME)
        if current is None or volume is None:
            findings.append(
                missing_input("services", OUTPUT_VOLUME if current is not None else OUTPUT_CURRENT)
            )
        else:
            economy = {**total_of("sector", "industry"), "asset": "_Z"}
            blocks.append(
                derive(
                    EXOGENOUS_RATE,
                    BlockKey("rate_of_return", "exogenous", "_Z"),
                    series.take(declared),
                    net.periods,
                    {
                        "value_added": given(current, **economy),
                        "value_added_volume": given(volume, **economy),
                        "value_added_previous": given(current, **economy),
                        "value_added_volume_previous": given(volume, **economy),
                    },
                    sets=((params.exogenous_sectors, params.real_rate),),
                    part=False,
                )
            )
    return blocks, findings


def _costs(
    net: Block, rate: Block, base: Block, gains: Block, consumption: Block, scope: Mapping[str, str]
) -> list[Block]:
    """Return capital compensation of every asset, under the method of its rate."""
    out = []
    series = net.series
    wears = consumption.series.locate(series.key) >= 0
    at = rate.series.locate(series.projected(scope))
    methods = np.array([d.out.method for d in rate.origin.derivations])
    method = np.where(at >= 0, methods[rate.origin.derivation[np.maximum(at, 0)]], "")
    for name in dict.fromkeys(methods):
        parts = []
        for formula, mine in ((CAPITAL_COST, wears), (CAPITAL_COST_WITHOUT_WEAR, ~wears)):
            which = mine & (method == name)
            if which.any():
                sources = {
                    "rate_of_return": given(rate, **scope),
                    "asset_base": given(base),
                    "consumption": given(consumption),
                    "revaluation": given(gains),
                }
                parts.append(
                    derive(
                        formula,
                        BlockKey("capital_compensation", str(name), "current"),
                        series.take(which),
                        net.periods,
                        {role.name: sources[role.name] for role in formula.roles},
                        part=net.part[which],
                    )
                )
        if parts:
            out.append(merge(parts))
    return out


def _unallocated(book: Book, rates: Sequence[Block], income: Block) -> list[Block]:
    """Return what an exogenous rate leaves of the capital income of its industries."""
    cost = book.get(COSTS)
    exogenous = [rate for rate in rates if rate.key.method == "exogenous"]
    if cost is None or not exogenous:
        return []
    return [
        derive(
            UNALLOCATED,
            BlockKey("unallocated_income", "exogenous", "current"),
            exogenous[0].series,
            exogenous[0].periods,
            {"capital_income": given(income, asset="_Z"), "capital_compensation": given(cost)},
            part=False,
        )
    ]


def _services(average: Block, cost: Block, net: Block, params: ServicesParams) -> list[Block]:
    """Return growth, index and composition for every industry, sector and area."""
    out: list[Block] = []
    done = np.zeros(0, np.int64)
    for dims in SERVICE_TOTALS:
        project = total_of(*dims)
        series = outer_series(average, project)
        series = series.take(~np.isin(series.key, done))
        done = np.concatenate([done, series.key])
        if not len(series):
            continue
        growth = derive(
            SERVICES_GROWTH,
            BlockKey("capital_services_growth", "tornqvist", "_Z"),
            series,
            average.periods,
            {
                "productive_stock": given(average),
                "productive_stock_previous": given(average),
                "capital_compensation": given(cost),
                "capital_compensation_previous": given(cost),
            },
            group=project,
            part=False,
        )
        services = derive(
            SERVICES,
            BlockKey("capital_services", "tornqvist", "index"),
            series,
            average.periods,
            {"growth": given(growth)},
            sets=((params.reference_year,),),
            part=False,
        )
        composition = derive(
            COMPOSITION,
            BlockKey("capital_composition", "services_over_net_stock", "index"),
            series,
            average.periods,
            {
                "capital_services": given(services),
                "net_stock": given(net),
                "net_stock_in_reference_year": in_year(net, int(params.reference_year.value)),
            },
            part=False,
        )
        out.extend([growth, services, composition])
    return out


def _negative(cost: Block) -> list[dict[str, Any]]:
    with np.errstate(invalid="ignore"):
        bad = (cost.value < 0) & cost.part
    out = []
    for n in np.flatnonzero(bad.any(axis=0)):
        t = int(np.argmax(bad[:, n]))
        out.append(
            note(
                "negative_user_cost",
                "warn",
                f"the user cost is below zero in {int(bad[:, n].sum())} years; it is kept as it is",
                cost.series.table,
                int(cost.series.key[n]),
                measure="user_cost",
                time_period=str(cost.periods[t]),
                found=f"a cost of {cost.value[t, n]:.6g}",
                expected="above zero",
                remedy="check the price index of the asset for a jump, and the capital income of the industry",
            )
        )
    return out


def _no_rate(rate: Block) -> list[dict[str, Any]]:
    return [
        note(
            "no_rate_of_return",
            "note",
            "no rate of return: there is no capital income for this industry in the years of the stocks",
            rate.series.table,
            int(rate.series.key[n]),
            measure="rate_of_return",
            remedy="deliver value added and compensation of employees for the industry",
        )
        for n in np.flatnonzero(~rate.held)
    ]


STAGE = Stage(
    name="services",
    needs=frozenset(),
    optional=frozenset(
        {NET, PRODUCTIVE, CONSUMPTION, PRICE, YEAR_END, CAPITAL_INCOME, OUTPUT_CURRENT, OUTPUT_VOLUME}
    ),
    gives=keys(
        "asset_base/average/current",
        "revaluation/actual/current",
        *(f"rate_of_return/{method}/_Z" for method in ("endogenous", "exogenous")),
        *(f"capital_compensation/{m}/current" for m in ("endogenous", "exogenous", "sum_of_parts")),
        *(f"user_cost/{method}/current" for method in ("endogenous", "exogenous")),
        "unallocated_income/exogenous/current",
        "productive_stock_average/average/constant",
        "capital_services_growth/tornqvist/_Z",
        "capital_services/tornqvist/index",
        "capital_composition/services_over_net_stock/index",
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
