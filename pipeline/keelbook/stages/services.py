"""Services: rates of return, user costs and the index of capital services."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from keelbook.blocks import B1, F8, Block, BlockKey, Choice, Edges, SeriesIndex, merge
from keelbook.lineage.derive import Given, derive, given, in_year
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each, Sum
from keelbook.methods.user_cost import endogenous_rate, unit_user_cost
from keelbook.stages import asset_costs
from keelbook.stages.asset_costs import (
    COST,
    FLOORED_COST,
    OUTLAY,
    TAXED_BASE,
    TAXED_COST,
    CostParams,
    Taxes,
    declared_everywhere,
    part_of,
)
from keelbook.stages.base import CHOSEN, Book, Inputs, Result, Stage, keys, missing_input, note, outer_series
from keelbook.stages.chaining import chained, log_growth, mean_cost_shares
from keelbook.stages.deflation import price_edges
from keelbook.stages.totals import total_of, totals

NET = BlockKey("net_stock", CHOSEN, "constant")
PRODUCTIVE = BlockKey("productive_stock", CHOSEN, "constant")
CONSUMPTION = BlockKey("consumption_of_fixed_capital", "perpetual_inventory", "current")
CONSUMPTION_VOLUME = BlockKey("consumption_of_fixed_capital", "perpetual_inventory", "constant")
CONSUMPTION_BEFORE = BlockKey("consumption_of_fixed_capital", "before_changes", "constant")
INVESTMENT_VOLUME = BlockKey("investment", CHOSEN, "constant")
PRICE = BlockKey("investment_price", CHOSEN, "index")
YEAR_END = BlockKey("investment_price", "year_end", "year_end")
CAPITAL_INCOME = BlockKey("capital_income", CHOSEN, "current")
OUTPUT_CURRENT = BlockKey("value_added", CHOSEN, "current")
OUTPUT_VOLUME = BlockKey("value_added", CHOSEN, "constant")
RATES = BlockKey("rate_of_return", CHOSEN, "_Z")
COSTS = BlockKey("capital_compensation", CHOSEN, "current")
AT_EXOGENOUS_RATE = BlockKey("capital_compensation", "exogenous", "current")
TAX_MEASURES = ("tax_term", "tax_rate", "tax_allowances", "tax_credit", "property_tax_rate")

RATE_OF_RETURN = Formula(
    name="endogenous_rate_of_return",
    equation="r = (capital income - consumption of fixed capital + revaluation) / asset base, all of them totals",
    citation="OECD, Measuring Capital (2009): the rate that exhausts capital income; Oulton 2005 on its limits",
    roles=(Role("capital_income"), Role("consumption"), Role("revaluation"), Role("asset_base")),
    build=lambda s: Each(endogenous_rate),
)

REAL_RATE_OF_RETURN = Formula(
    name="endogenous_real_rate_of_return",
    equation="r = (capital income - depreciation) / asset base, all of them totals; real: holding gains are left out",
    citation="OECD, Measuring Capital (2009): the rate that exhausts capital income, without holding gains",
    roles=(Role("capital_income"), Role("consumption"), Role("asset_base")),
    build=lambda s: Each(lambda income, loss, base: (income - loss) / base),
)

RATE_AFTER_TAX = Formula(
    name="endogenous_rate_of_return_after_tax",
    equation="r = (capital income - N) / T B, totals, N = T (D - H) + x B of each asset",
    citation=asset_costs.HALL_JORGENSON,
    roles=(Role("capital_income"), Role("cost_before_return"), Role("taxed_base")),
    build=lambda s: Each(lambda income, outlay, base: (income - outlay) / base),
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

DECLARED_RATE = Formula(
    name="exogenous_real_rate_of_return",
    equation="r = real rate as declared; holding gains are left out",
    citation="OECD, Measuring Capital (2009): a declared real rate where there is no market surplus",
    roles=(Role("asset_base", counted=False),),
    build=lambda s: Each(declared_everywhere, (s.column("services.real_rate"),)),
)

UNALLOCATED = Formula(
    name="unallocated_income",
    equation="unallocated income = capital income - capital compensation at the exogenous rate",
    citation="OECD, Measuring Capital (2009): an exogenous rate does not exhaust capital income",
    roles=(Role("capital_income"), Role("capital_compensation")),
    build=lambda s: Each(lambda income, cost: income - cost),
)

AVERAGE_STOCK = Formula(
    name="average_productive_stock",
    equation="average productive stock_t = (K_(t-1) + K_t) / 2",
    citation="OECD, Measuring Capital (2009): services of a period from the average stock",
    roles=(Role("productive_stock_previous", -1), Role("productive_stock")),
    build=lambda s: Each(lambda previous, current: (previous + current) / 2),
)

OPENING_STOCK = Formula(
    name="opening_productive_stock",
    equation="stock that yields services in t = K_(t-1)",
    citation="services of a period from the stock at its start: OECD, Measuring Capital (2009); from memory",
    roles=(Role("productive_stock_previous", -1),),
    build=lambda s: Each(lambda previous: previous * 1.0),
)

USER_COST = Formula(
    name="unit_user_cost",
    equation="user cost of a unit = c / productive stock of the same date",
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
    *asset_costs.FORMULAS,
    RATE_OF_RETURN,
    REAL_RATE_OF_RETURN,
    RATE_AFTER_TAX,
    EXOGENOUS_RATE,
    DECLARED_RATE,
    UNALLOCATED,
    AVERAGE_STOCK,
    OPENING_STOCK,
    USER_COST,
    SERVICES_GROWTH,
    SERVICES,
    COMPOSITION,
)

DIMENSIONS = ("sector", "industry", "asset")
"""Dimensions over which totals of bases and costs are made."""

SERVICE_TOTALS = (("asset",), ("industry", "asset"), ("sector", "asset"), ("sector", "industry", "asset"))
"""What an index of services runs over: the assets of an industry, of a sector, of an area."""


OF_ALL = "sum_of_parts"
"""Method of a total over series of several methods."""


@dataclass(frozen=True)
class ServicesParams(CostParams):
    """rate_of_return: `endogenous`, `exogenous`, or `both`: the first is chosen, the second stands beside it.

    exogenous_sectors: sectors whose rate is declared in any case. negative_user_cost: what is done in the scope of
    a rate (an industry, or the area) in which some asset costs less than nothing.
    """

    rate_of_return: Choice
    rate_scope: Choice
    exogenous_sectors: Choice
    real_rate: Choice
    negative_user_cost: Choice
    user_cost_floor: Choice
    discount_rate_gap: Choice
    productive_stock_timing: Choice
    reference_year: Choice


@dataclass(frozen=True)
class _Assets:
    """What the cost of every asset is made of, whatever the rate and the treatment of holding gains.

    net: elementary net stocks that have a price. wear: consumption, or depreciation of the opening vintages, with
    totals. income: capital income.
    """

    net: Block
    base: Block
    wear: Block
    actual: Block
    smoothed: Block | None
    taxes: Taxes | None
    income: Block
    scope: Mapping[str, str]


@dataclass(frozen=True)
class _Costed:
    """One pass: everything made, and the findings of its rates."""

    book: Book
    rates: list[Block]
    findings: list[dict[str, Any]]


def run(inputs: Inputs, params: ServicesParams) -> Result:
    """Return base, revaluation, rate, cost and services; what lacks an input is left out with a note."""
    whole: dict[BlockKey, Block] = {}
    wanted = [NET, PRODUCTIVE, PRICE, YEAR_END]
    for key in wanted:
        block = inputs.get(key)
        if block is not None:
            whole[key] = block
    missing = [missing_input("services", key) for key in wanted if key not in whole]
    if missing:
        return Result((), missing)
    opening = params.user_cost_form.value == "opening"
    for key in (CONSUMPTION, CAPITAL_INCOME, *((CONSUMPTION_VOLUME, INVESTMENT_VOLUME) if opening else ())):
        block = inputs.get(key)
        if block is None:
            return Result((), [missing_input("services", key)])
        whole[key] = block
    assets, common = _assets(inputs, whole, params)
    scopes = outer_series(assets.net, assets.scope)
    smooth = np.full(len(assets.net.series), params.holding_gains.value == "smoothed")
    costed = _costed(inputs, assets, smooth, np.zeros(len(scopes), bool), params)
    cost = costed.book.get(COSTS)
    if cost is None:
        return Result([*common, *costed.book], costed.findings)
    findings = _negative(cost, params)
    hit = np.isin(scopes.key, np.unique(_below_zero(cost).projected(assets.scope)))
    remedy = params.negative_user_cost.value
    if hit.any() and remedy in ("smoothed", "exogenous"):
        if remedy == "smoothed":
            smooth = smooth | np.isin(assets.net.series.projected(assets.scope), scopes.key[hit])
        costed = _costed(inputs, assets, smooth, hit & (remedy == "exogenous"), params)
    elif hit.any() and remedy == "floor":
        costed = _floored(costed, assets, cost, params)
    findings = [*costed.findings, *findings, *_negative_income(assets.income, scopes)]
    book = costed.book
    findings += _rate_gaps(book, assets, params)
    productive = whole[PRODUCTIVE].take(whole[PRODUCTIVE].part)
    average = _service_stock(productive, params)
    forms = [b for b in list(book) if b.key.measure == "capital_compensation"]
    user_costs = [_user_cost(form.take(form.part), average) for form in forms if form.part.any()]
    cost = book.get(COSTS)
    assert cost is not None
    book.add(totals(cost, DIMENSIONS, OF_ALL))
    book.add(_unallocated(book, costed.rates, assets.income, params))
    services = _services(average, cost, whole[NET], params)
    beside = book.get(AT_EXOGENOUS_RATE) if params.rate_of_return.value == "both" else None
    if beside is not None:
        services += _services(average, beside, whole[NET], params, "tornqvist_exogenous")
    return Result([*common, *book, average, *user_costs, *services], findings)


def _assets(
    inputs: Inputs, whole: Mapping[BlockKey, Block], params: ServicesParams
) -> tuple[_Assets, list[Block]]:
    """Return what costs are made of, and the blocks that came with it."""
    net = _priced(whole[NET].take(whole[NET].part), whole[PRICE], params)
    prices = asset_costs.prices_of(net, whole[PRICE], whole[YEAR_END], params.deflation_order)
    base = asset_costs.bases(net, prices, params)
    wear, blocks = whole[CONSUMPTION], [base, *totals(base, DIMENSIONS)]
    if params.user_cost_form.value == "opening":
        volume = whole[CONSUMPTION_VOLUME].take(whole[CONSUMPTION_VOLUME].part)
        before = inputs.get(CONSUMPTION_BEFORE)
        flow = whole[INVESTMENT_VOLUME]
        new, lost = asset_costs.opening_depreciations(net, volume, before, flow, prices, params)
        made = [lost, *totals(lost, DIMENSIONS)]
        wear = merge(made)
        blocks += [new, *made]
    actual = asset_costs.actual_gains(net, base, prices, params)
    smoothed = None
    if "smoothed" in (params.holding_gains.value, params.negative_user_cost.value):
        change = asset_costs.smoothed_changes(prices, params)
        smoothed = asset_costs.smoothed_gains(base, change, prices, params)
        blocks.append(change)
    taxes = None
    if params.taxes.value != "none":
        delivered = {name: inputs.get(BlockKey(name, CHOSEN, "_Z")) for name in TAX_MEASURES}
        taxes = asset_costs.taxes(base, {name: b for name, b in delivered.items() if b is not None}, params)
        blocks += taxes.blocks
    scope = total_of("asset") if params.rate_scope.value == "industry" else total_of("asset", "industry")
    income = whole[CAPITAL_INCOME]
    return _Assets(net, base, wear, actual, smoothed, taxes, income, scope), blocks


def _priced(net: Block, prices: Block, params: ServicesParams) -> Block:
    """Return the stocks that have a price."""
    return net.take(price_edges(net.series, prices, params.deflation_order.value).key >= 0)


def _costed(inputs: Inputs, assets: _Assets, smooth: B1, moved: B1, params: ServicesParams) -> _Costed:
    """Return holding gains, rates and costs.

    Args:
        smooth: (N,) elementary series whose holding gains are smoothed.
        moved: (S,) scopes of a rate that get the exogenous one as a remedy.
    """
    book = Book()
    gains = _gains(book, assets, smooth, params)
    loss = (
        {"consumption": assets.wear} if gains is None else {"consumption": assets.wear, "revaluation": gains}
    )
    if assets.taxes is not None:
        _taxed(book, assets, loss)
    sums = Book([assets.base, *totals(assets.base, DIMENSIONS), *([] if gains is None else [gains])])
    base = sums.get(assets.base.key)
    assert base is not None
    rates, findings = _rates(inputs, assets, {**loss, "asset_base": base}, book, moved, params)
    book.add(rates)
    for rate in rates:
        book.add(_costs(assets, rate, loss, book))
    if params.rate_of_return.value == "both":
        beside = book.get(AT_EXOGENOUS_RATE)
        if beside is not None:
            book.add([replace(b, chosen=np.zeros(len(b.series), bool)) for b in totals(beside, DIMENSIONS)])
    return _Costed(book, rates, findings)


def _gains(book: Book, assets: _Assets, smooth: B1, params: ServicesParams) -> Block | None:
    """Add the holding gains and their totals to the book; return the chosen ones, None where they are left out."""
    if params.holding_gains.value == "excluded" and not smooth.any():
        return None
    if assets.smoothed is None or not smooth.any():
        book.add([assets.actual, *totals(assets.actual, DIMENSIONS)])
        return book.get(assets.actual.key)
    actual = replace(assets.actual, chosen=~smooth)
    if smooth.all():
        book.add([actual, assets.smoothed, *totals(assets.smoothed, DIMENSIONS)])
        return book.get(assets.smoothed.key)
    book.add([actual, assets.smoothed.take(smooth)])
    chosen = BlockKey("revaluation", CHOSEN, "current")
    mixed = book.get(chosen)
    assert mixed is not None
    book.add(totals(mixed, DIMENSIONS, OF_ALL))
    return book.get(chosen)


def _taxed(book: Book, assets: _Assets, loss: Mapping[str, Block]) -> None:
    """Add T B and N = T (D - H) + x B of every asset, and their totals, to the book."""
    assert assets.taxes is not None
    taxes, base = assets.taxes, assets.base
    made = derive(
        TAXED_BASE,
        BlockKey("taxed_base", "after_tax", "current"),
        base.series,
        base.periods,
        {"tax_term": taxes.term, "asset_base": given(base)},
        part=base.part,
    )
    outlays = []
    for wears in (True, False):
        which = (assets.wear.series.locate(base.series.key) >= 0) == wears
        if which.any():
            formula = OUTLAY[wears, "revaluation" in loss]
            sources = {
                "tax_term": part_of(taxes.term, which),
                "property_tax": part_of(taxes.property_tax, which),
                "asset_base": given(base),
                **{name: given(block) for name, block in loss.items()},
            }
            outlays.append(
                derive(
                    formula,
                    BlockKey("cost_before_return", "after_tax", "current"),
                    base.series.take(which),
                    base.periods,
                    {role.name: sources[role.name] for role in formula.roles},
                    part=base.part[which],
                )
            )
    outlay = merge(outlays)
    book.add([made, *totals(made, DIMENSIONS), outlay, *totals(outlay, DIMENSIONS)])


def _after_tax(book: Book) -> tuple[Block | None, Block | None]:
    return tuple(  # type: ignore[return-value]
        book.get(BlockKey(name, "after_tax", "current")) for name in ("taxed_base", "cost_before_return")
    )


def _rates(
    inputs: Inputs,
    assets: _Assets,
    sums: Mapping[str, Block],
    book: Book,
    moved: B1,
    params: ServicesParams,
) -> tuple[list[Block], list[dict[str, Any]]]:
    """Return the rates of return, endogenous and exogenous, by sector and industry (or sector alone)."""
    series, periods = outer_series(assets.net, assets.scope), assets.net.periods
    declared = np.full(len(series), params.rate_of_return.value == "exogenous")
    by_sector = np.zeros(len(series), bool)
    for sector in params.exogenous_sectors.value:
        by_sector |= series.is_code("sector", sector)
    declared |= by_sector
    exogenous = np.ones_like(declared) if params.rate_of_return.value == "both" else declared | moved
    blocks, findings = [], []
    if (~declared).any():
        taxed, outlay = _after_tax(book)
        sources = {"capital_income": given(assets.income, asset="_Z")}
        sources |= {name: given(block) for name, block in sums.items()}
        formula = RATE_OF_RETURN if "revaluation" in sums else REAL_RATE_OF_RETURN
        if taxed is not None and outlay is not None:
            formula = RATE_AFTER_TAX
            sources |= {"taxed_base": given(taxed), "cost_before_return": given(outlay)}
        endogenous = derive(
            formula,
            BlockKey("rate_of_return", "endogenous", "_Z"),
            series.take(~declared),
            periods,
            {role.name: sources[role.name] for role in formula.roles},
            sets=((params.rate_of_return, params.rate_scope, params.holding_gains),),
            chosen=~moved[~declared],
            part=False,
        )
        blocks.append(endogenous)
        findings += _no_rate(endogenous)
    if not exogenous.any():
        return blocks, findings
    out = BlockKey("rate_of_return", "exogenous", "_Z")
    mine, chosen = series.take(exogenous), (declared | moved)[exogenous]
    choices = (params.rate_of_return, params.exogenous_sectors, params.real_rate, params.negative_user_cost)
    if "revaluation" not in sums:
        base = {"asset_base": given(sums["asset_base"])}
        blocks.append(
            derive(DECLARED_RATE, out, mine, periods, base, sets=(choices,), chosen=chosen, part=False)
        )
        return blocks, findings
    current, volume = inputs.get(OUTPUT_CURRENT), inputs.get(OUTPUT_VOLUME)
    if current is None or volume is None:
        findings.append(missing_input("services", OUTPUT_VOLUME if current is not None else OUTPUT_CURRENT))
        return [replace(b, chosen=np.ones_like(b.chosen)) for b in blocks], findings
    economy = {**total_of("sector", "industry"), "asset": "_Z"}
    blocks.append(
        derive(
            EXOGENOUS_RATE,
            out,
            mine,
            periods,
            {
                "value_added": given(current, **economy),
                "value_added_volume": given(volume, **economy),
                "value_added_previous": given(current, **economy),
                "value_added_volume_previous": given(volume, **economy),
            },
            sets=(choices,),
            chosen=chosen,
            part=False,
        )
    )
    return blocks, findings


def _costs(assets: _Assets, rate: Block, loss: Mapping[str, Block], book: Book) -> list[Block]:
    """Return capital compensation of every asset in the scope of one form of the rate, under its method."""
    series, out = assets.net.series, []
    at = rate.series.locate(series.projected(assets.scope))
    chosen = np.where(at >= 0, rate.chosen[np.maximum(at, 0)], False)
    wears = assets.wear.series.locate(series.key) >= 0
    taxed, outlay = _after_tax(book)
    sources = {
        "rate_of_return": given(rate, **assets.scope),
        "asset_base": given(assets.base),
        **{name: given(block) for name, block in loss.items()},
    }
    forms = [(COST[wear, "revaluation" in loss], wears == wear) for wear in (True, False)]
    if taxed is not None and outlay is not None:
        sources |= {"taxed_base": given(taxed), "cost_before_return": given(outlay)}
        forms = [(TAXED_COST, np.ones(len(series), bool))]
    for formula, mine in forms:
        which = mine & (at >= 0)
        if which.any():
            out.append(
                derive(
                    formula,
                    BlockKey("capital_compensation", rate.key.method, "current"),
                    series.take(which),
                    assets.net.periods,
                    {role.name: sources[role.name] for role in formula.roles},
                    chosen=chosen[which],
                    part=assets.net.part[which],
                )
            )
    return out


def _below_zero(cost: Block) -> SeriesIndex:
    with np.errstate(invalid="ignore"):
        return cost.series.take((cost.value < 0).any(axis=0) & cost.part)


def _floored(costed: _Costed, assets: _Assets, cost: Block, params: ServicesParams) -> _Costed:
    """Put the declared floor under the costs that are below zero; what they were is kept beside, not chosen."""
    series = _below_zero(cost)
    floored = derive(
        FLOORED_COST,
        BlockKey("capital_compensation", "floored", "current"),
        series,
        cost.periods,
        {"capital_compensation": _chosen_form(costed.book, series), "asset_base": given(assets.base)},
        sets=((params.negative_user_cost, params.user_cost_floor),),
    )
    book = Book([floored])
    for block in costed.book:
        if block.key.measure == "capital_compensation":
            block = replace(block, chosen=block.chosen & (series.locate(block.series.key) < 0))
        book.add([block])
    return replace(costed, book=book)


def _chosen_form(book: Book, series: SeriesIndex) -> Given:
    """Return a reading of the cost of each series in the form that was chosen before the floor."""
    which, key = np.zeros(len(series), np.int32), np.full(len(series), -1, np.int64)
    blocks = [b for b in book if b.key.measure == "capital_compensation"]
    for i, block in enumerate(blocks):
        mine = block.take(block.chosen).series.locate(series.key) >= 0
        which[mine], key[mine] = i, series.key[mine]
    return Given(tuple(blocks), edges=Edges(tuple(b.key for b in blocks), which, key))


def _service_stock(productive: Block, params: ServicesParams) -> Block:
    """Return the stock that yields the services of a period: mean of opening and closing, or the opening one."""
    formula = OPENING_STOCK if params.productive_stock_timing.value == "opening" else AVERAGE_STOCK
    return derive(
        formula,
        BlockKey("productive_stock_average", params.productive_stock_timing.value, "constant"),
        productive.series,
        productive.periods,
        {role.name: given(productive) for role in formula.roles},
        sets=((params.productive_stock_timing,),),
        part=productive.part,
    )


def _user_cost(cost: Block, stock: Block) -> Block:
    return derive(
        USER_COST,
        BlockKey("user_cost", cost.key.method, "current"),
        cost.series,
        cost.periods,
        {"capital_compensation": given(cost), "productive_stock": given(stock)},
        chosen=cost.chosen,
        part=False,
    )


def _unallocated(book: Book, rates: Sequence[Block], income: Block, params: ServicesParams) -> list[Block]:
    """Return what an exogenous rate, or a floor, leaves of the capital income of its industries."""
    cost = book.get(COSTS)
    assert cost is not None
    floored = book.get(BlockKey("capital_compensation", "floored", "current"))
    scope = total_of("asset") if params.rate_scope.value == "industry" else total_of("asset", "industry")
    out, under = [], np.zeros(0, np.int64)
    if floored is not None:
        under = np.unique(floored.series.projected(scope))
        series = SeriesIndex(floored.series.table, under)
        out.append(_left("floored", series, income, cost, np.ones(len(series), bool)))
    for rate in rates:
        if rate.key.method != "exogenous":
            continue
        mine = rate.chosen & ~np.isin(rate.series.key, under)
        if mine.any():
            out.append(_left("exogenous", rate.series.take(mine), income, cost, mine[mine]))
        beside = book.get(AT_EXOGENOUS_RATE)
        if params.rate_of_return.value == "both" and beside is not None and (~rate.chosen).any():
            other = rate.series.take(~rate.chosen)
            out.append(_left("exogenous", other, income, beside, np.zeros(len(other), bool)))
    return out


def _left(method: str, series: SeriesIndex, income: Block, cost: Block, chosen: B1) -> Block:
    return derive(
        UNALLOCATED,
        BlockKey("unallocated_income", method, "current"),
        series,
        income.periods,
        {"capital_income": given(income, asset="_Z"), "capital_compensation": given(cost)},
        chosen=chosen,
        part=False,
    )


def _services(
    average: Block, cost: Block, net: Block, params: ServicesParams, method: str = "tornqvist"
) -> list[Block]:
    """Return growth, index and composition for every industry, sector and area.

    method: its name; an index beside the chosen one has its own.
    """
    chosen = method == "tornqvist"
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
            BlockKey("capital_services_growth", method, "_Z"),
            series,
            average.periods,
            {
                "productive_stock": given(average),
                "productive_stock_previous": given(average),
                "capital_compensation": given(cost),
                "capital_compensation_previous": given(cost),
            },
            group=project,
            chosen=chosen,
            part=False,
        )
        services = derive(
            SERVICES,
            BlockKey("capital_services", method, "index"),
            series,
            average.periods,
            {"growth": given(growth)},
            sets=((params.reference_year,),),
            chosen=chosen,
            part=False,
        )
        composition = derive(
            COMPOSITION,
            BlockKey(
                "capital_composition",
                "services_over_net_stock" if chosen else f"{method}_over_net_stock",
                "index",
            ),
            series,
            average.periods,
            {
                "capital_services": given(services),
                "net_stock": given(net),
                "net_stock_in_reference_year": in_year(net, int(params.reference_year.value)),
            },
            chosen=chosen,
            part=False,
        )
        out.extend([growth, services, composition])
    return out


REMEDIES = {
    "none": "it is kept as it is",
    "smoothed": "holding gains are smoothed where its rate holds",
    "exogenous": "the exogenous rate is used where its rate holds",
    "floor": "the declared floor is used in these years",
}
"""What is said of a user cost below zero, by the declared remedy."""


def _negative(cost: Block, params: ServicesParams) -> list[dict[str, Any]]:
    """Return a finding for every asset that costs less than nothing before any remedy."""
    with np.errstate(invalid="ignore"):
        bad = (cost.value < 0) & cost.part
    out = []
    for n in np.flatnonzero(bad.any(axis=0)):
        t = int(np.argmax(bad[:, n]))
        out.append(
            note(
                "negative_user_cost",
                "warn",
                f"the user cost is below zero in {int(bad[:, n].sum())} years; "
                + REMEDIES[params.negative_user_cost.value],
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


def _negative_income(income: Block, scopes: SeriesIndex) -> list[dict[str, Any]]:
    """Return a finding for every scope of a rate whose capital income is below zero in some year."""
    at = income.series.locate(scopes.projected({"asset": "_Z"}))
    out = []
    for n in np.flatnonzero(at >= 0):
        value = income.value[:, at[n]]
        with np.errstate(invalid="ignore"):
            bad = value < 0
        if bad.any():
            t = int(np.argmax(bad))
            out.append(
                note(
                    "negative_capital_income",
                    "warn",
                    f"capital income is below zero in {int(bad.sum())} years; the rate of return follows it",
                    income.series.table,
                    int(income.series.key[at[n]]),
                    measure="capital_income",
                    time_period=str(income.periods[t]),
                    found=f"an income of {value[t]:.6g}",
                    expected="above zero",
                    remedy="check compensation and value added of the industry, or declare an exogenous rate",
                )
            )
    return out


def _rate_gaps(book: Book, assets: _Assets, params: ServicesParams) -> list[dict[str, Any]]:
    """Return a finding per area in which real rates of the age-price profiles are far from those that were found.

    The rate found is made real with the price changes of the assets themselves, (1 + r) / (1 + H / B) - 1, because
    an age-price profile compares values of one asset at the prices of one date.
    """
    rate = book.get(RATES)
    if rate is None:
        return []
    real = rate.value
    if params.holding_gains.value != "excluded":
        gain, base = (_in_scope(block, rate.series, assets.scope) for block in (assets.actual, assets.base))
        with np.errstate(invalid="ignore", divide="ignore"):
            real = (1 + rate.value) / (1 + gain / base) - 1
    of_set = [
        next((float(c.value) for c in one if c.name == "asset.discount_rate"), np.nan)
        for one in assets.net.origin.sets
    ]
    discount = np.array(of_set)[assets.net.origin.set]
    at = rate.series.locate(assets.net.series.projected(assets.scope))
    worst: dict[int, tuple[float, int, str]] = {}
    count: dict[int, int] = {}
    for n, area in enumerate(rate.series.digit("area").tolist()):
        found = real[np.isfinite(real[:, n]), n]
        declared = np.unique(discount[(at == n) & np.isfinite(discount)])
        if not len(found) or not len(declared):
            continue
        mean = float(found.mean())
        far = float(declared[np.argmax(np.abs(declared - mean))])
        gap = abs(far - mean)
        if gap > params.discount_rate_gap.value:
            count[area] = count.get(area, 0) + 1
            said = f"a real rate of {mean:.4f} on average, {far:g} in the age-price profiles"
            worst[area] = max(worst.get(area, (0.0, n, "")), (gap, n, said), key=lambda one: one[0])
    return [
        note(
            "discount_rate_gap",
            "note",
            f"net and productive stocks rest on another real rate than the one found, for {count[area]} rates of "
            "return; the widest gap is told",
            rate.series.table,
            int(rate.series.key[n]),
            measure="rate_of_return",
            found=said,
            expected=f"a gap of at most {params.discount_rate_gap.value:g}",
            remedy="set discount_rate of the assets near the rate found, or accept the difference",
        )
        for area, (_, n, said) in worst.items()
    ]


def _in_scope(block: Block, scopes: SeriesIndex, scope: Mapping[str, str]) -> F8:
    """Return the sums of a block over the scope of each rate, (T, S)."""
    at = scopes.locate(block.series.projected(scope))
    out = np.zeros((len(block.periods), len(scopes)))
    for n in np.flatnonzero((at >= 0) & block.part):
        out[:, at[n]] += block.value[:, n]
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


METHODS = ("endogenous", "exogenous", "floored")

STAGE = Stage(
    name="services",
    needs=frozenset(),
    optional=frozenset(
        {
            NET,
            PRODUCTIVE,
            CONSUMPTION,
            CONSUMPTION_VOLUME,
            CONSUMPTION_BEFORE,
            INVESTMENT_VOLUME,
            PRICE,
            YEAR_END,
            CAPITAL_INCOME,
            OUTPUT_CURRENT,
            OUTPUT_VOLUME,
        }
    )
    | keys(*(f"{measure}/*/_Z" for measure in TAX_MEASURES)),
    gives=keys(
        *(f"asset_base/{form}/current" for form in ("average", "opening")),
        *(f"revaluation/{form}/current" for form in ("actual", "smoothed", OF_ALL)),
        "price_change/smoothed/_Z",
        "consumption_of_fixed_capital/opening_vintages/year_end",
        "consumption_of_fixed_capital/new_investment/constant",
        *(f"tax_term/{form}/_Z" for form in ("of_rates", "declared")),
        "property_tax_rate/declared/_Z",
        *(f"{measure}/after_tax/current" for measure in ("taxed_base", "cost_before_return")),
        *(f"rate_of_return/{method}/_Z" for method in ("endogenous", "exogenous")),
        *(f"capital_compensation/{method}/current" for method in (*METHODS, OF_ALL)),
        *(f"user_cost/{method}/current" for method in METHODS),
        *(f"unallocated_income/{method}/current" for method in ("exogenous", "floored")),
        *(f"productive_stock_average/{form}/constant" for form in ("average", "opening")),
        *(f"capital_services_growth/{form}/_Z" for form in ("tornqvist", "tornqvist_exogenous")),
        *(f"capital_services/{form}/index" for form in ("tornqvist", "tornqvist_exogenous")),
        *(f"capital_composition/{form}_over_net_stock/index" for form in ("services", "tornqvist_exogenous")),
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
