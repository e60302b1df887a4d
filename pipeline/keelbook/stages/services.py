"""Services: rates of return, user costs and the index of capital services."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from keelbook.blocks import F8, Block, BlockKey, Choice
from keelbook.lineage.derive import Given, derive, given, in_year
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.primitives import Each, Groups, Span, Spans, Sum
from keelbook.methods.user_cost import asset_base, capital_cost, endogenous_rate, revaluation, unit_user_cost
from keelbook.stages.base import CHOSEN, Book, Inputs, Result, Stage, keys, missing_input, note, outer_series
from keelbook.stages.deflation import by_edges, price_edges
from keelbook.stages.totals import TOTAL, totals

NET = BlockKey("net_stock", "perpetual_inventory", "constant")
PRODUCTIVE = BlockKey("productive_stock", "perpetual_inventory", "constant")
CONSUMPTION = BlockKey("consumption_of_fixed_capital", "perpetual_inventory", "current")
PRICE = BlockKey("investment_price", CHOSEN, "index")
YEAR_END = BlockKey("investment_price", "year_end", "year_end")
CAPITAL_INCOME = BlockKey("capital_income", CHOSEN, "current")

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

CAPITAL_COST = Formula(
    name="capital_compensation",
    equation="c = r B + D - H",
    citation="OECD, Measuring Capital (2009): user cost of the stock of one asset, average form",
    roles=(Role("rate_of_return"), Role("asset_base"), Role("consumption"), Role("revaluation")),
    build=lambda s: Each(capital_cost),
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


def _log_growth(stock: F8, before: F8, *_: F8) -> F8:
    return np.asarray(np.log(stock / before))


def _mean_cost_shares(_: F8, __: F8, cost: F8, cost_before: F8, *, groups: Groups) -> F8:
    """Return the two-period means of each member's part in its group's cost, (T, M)."""
    member = np.where(groups.of < 0, 0, groups.of)
    out = np.zeros_like(cost)
    for one in (cost, cost_before):
        out += one / groups.reduce(one)[:, member]
    return np.asarray(out / 2)


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
    build=lambda s: Sum(s.groups, value=_log_growth, weight=_mean_cost_shares, by_weight=True),
    kind="group",
)


def chained(s: Setting, reference_year: int | None) -> Span:
    """Return the rule that cumulates log growth from a reference year, or from the year before the first."""

    def plan(x: F8) -> Spans:
        T, N = x.shape
        there = np.isfinite(x)
        begin = np.argmax(there, axis=0)
        end = T - 1 - np.argmax(there[::-1], axis=0)
        reference = (
            np.full(N, begin - 1) if reference_year is None else np.full(N, reference_year - s.periods[0])
        )
        rows = np.arange(T)[:, None]
        inside = there.any(axis=0) & (rows >= begin - 1) & (rows <= end)
        inside &= (reference >= begin - 1) & (reference <= end)
        first = np.where(inside, np.minimum(rows, reference) + 1, -1)
        length = np.abs(rows - reference)
        sign = np.where(rows > reference, 1.0, -1.0)
        return Spans(first, length, np.broadcast_to(sign, (T, T, N)))

    return Span(plan, outer=np.exp)


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
    CAPITAL_COST,
    AVERAGE_STOCK,
    USER_COST,
    SERVICES_GROWTH,
    SERVICES,
    COMPOSITION,
)


@dataclass(frozen=True)
class ServicesParams:
    rate_of_return: Choice
    rate_scope: Choice
    holding_gains: Choice
    productive_stock_timing: Choice
    deflation_order: Choice
    reference_year: Choice


def run(inputs: Inputs, params: ServicesParams) -> Result:
    """Return base, revaluation, rate, cost and services; what lacks an input is left out with a note."""
    blocks = {key: inputs.get(key) for key in (NET, PRODUCTIVE, CONSUMPTION, PRICE, YEAR_END, CAPITAL_INCOME)}
    missing = [key for key, block in blocks.items() if block is None]
    if missing:
        return Result((), [missing_input("services", key) for key in missing])
    whole = {key: block for key, block in blocks.items() if block is not None}
    net = whole[NET].take(whole[NET].part)
    made = _elementary(net, whole, params)
    sums = {name: totals(made[name], ("industry", "asset")) for name in ("asset_base", "revaluation")}
    book = Book([made["asset_base"], made["revaluation"], *sums["asset_base"], *sums["revaluation"]])
    base, gains = list(book)
    scope = {"asset": TOTAL} if params.rate_scope.value == "industry" else {"asset": TOTAL, "industry": TOTAL}
    rate_series = outer_series(net, scope)
    rate = derive(
        RATE_OF_RETURN,
        BlockKey("rate_of_return", "endogenous", "_Z"),
        rate_series,
        net.periods,
        {
            "capital_income": given(whole[CAPITAL_INCOME], asset="_Z"),
            "consumption": given(whole[CONSUMPTION]),
            "revaluation": given(gains),
            "asset_base": given(base),
        },
        sets=((params.rate_of_return, params.rate_scope),),
        part=False,
    )
    cost = derive(
        CAPITAL_COST,
        BlockKey("capital_compensation", "endogenous", "current"),
        net.series,
        net.periods,
        {
            "rate_of_return": given(rate, **scope),
            "asset_base": given(base),
            "consumption": given(whole[CONSUMPTION]),
            "revaluation": given(gains),
        },
        part=net.part,
    )
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
    user_cost = derive(
        USER_COST,
        BlockKey("user_cost", "endogenous", "current"),
        cost.series,
        cost.periods,
        {"capital_compensation": given(cost), "productive_stock": given(average)},
        part=False,
    )
    services = _services(average, cost, whole[NET], params)
    out = [*book, rate, cost, *totals(cost, ("industry", "asset")), average, user_cost, *services]
    return Result(out, [*_negative(cost), *_no_rate(rate, whole[CAPITAL_INCOME])])


def _elementary(net: Block, whole: Mapping[BlockKey, Block], params: ServicesParams) -> dict[str, Block]:
    edges = price_edges(net.series, whole[PRICE], params.deflation_order.value)
    sets = ((params.deflation_order,),)
    base = derive(
        ASSET_BASE,
        BlockKey("asset_base", "average", "current"),
        net.series,
        net.periods,
        {"price": by_edges(whole[PRICE], edges), "net_stock_previous": given(net), "net_stock": given(net)},
        sets=sets,
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
    return {"asset_base": base, "revaluation": gain}


def _services(average: Block, cost: Block, net: Block, params: ServicesParams) -> list[Block]:
    """Return growth, index and composition for every industry and for the total of each area and sector."""
    growths: list[Block] = []
    out: list[Block] = []
    for project in ({"asset": TOTAL}, {"asset": TOTAL, "industry": TOTAL}):
        series = outer_series(average, project)
        done = np.concatenate([g.series.key for g in growths]) if growths else np.zeros(0, np.int64)
        series = series.take(~np.isin(series.key, done))
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
        growths.append(growth)
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
        bad = cost.value < 0
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


def _no_rate(rate: Block, income: Block) -> list[dict[str, Any]]:
    out = []
    for n in np.flatnonzero(~rate.held):
        out.append(
            note(
                "no_rate_of_return",
                "note",
                "no rate of return: there is no capital income for this industry in the years of the stocks",
                rate.series.table,
                int(rate.series.key[n]),
                measure="rate_of_return",
                remedy="deliver value added and compensation of employees for the industry",
            )
        )
    return out


STAGE = Stage(
    name="services",
    needs=frozenset(),
    optional=frozenset({NET, PRODUCTIVE, CONSUMPTION, PRICE, YEAR_END, CAPITAL_INCOME}),
    gives=keys(
        "asset_base/average/current",
        "revaluation/actual/current",
        "rate_of_return/endogenous/_Z",
        "capital_compensation/endogenous/current",
        "productive_stock_average/average/constant",
        "user_cost/endogenous/current",
        "capital_services_growth/tornqvist/_Z",
        "capital_services/tornqvist/index",
        "capital_composition/services_over_net_stock/index",
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
