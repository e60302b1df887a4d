"""What one asset costs to hold: base, depreciation, holding gains and taxes, and its capital compensation."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from keelbook.blocks import B1, F8, I4, Block, BlockKey, Choice, Edges, MethodSet, SeriesIndex
from keelbook.lineage.derive import Given, derive, given
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.primitives import Each, Either, Span, Spans
from keelbook.methods.user_cost import (
    asset_base,
    capital_cost,
    opening_base,
    opening_depreciation,
    opening_revaluation,
    revaluation,
    revaluation_at,
    tax_term,
)
from keelbook.stages.deflation import by_edges, price_edges
from keelbook.stages.starting_stock import lag

CAPITAL_MANUAL = "OECD, Measuring Capital (2009)"
HALL_JORGENSON = "R. E. Hall and D. W. Jorgenson, Tax policy and investment behavior, 1967; from memory"

ASSET_BASE = Formula(
    name="asset_base",
    equation="B_t = P_t (W_(t-1) + W_t) / 2",
    citation="OECD, Measuring Capital (2009): average net stock at average prices of the period",
    roles=(Role("price"), Role("net_stock_previous", -1), Role("net_stock")),
    build=lambda s: Each(asset_base),
)

OPENING_BASE = Formula(
    name="opening_asset_base",
    equation="B_t = Pe_(t-1) W_(t-1)",
    citation=f"{CAPITAL_MANUAL}: opening net stock at the prices of that date",
    roles=(Role("year_end_price_previous", -1), Role("net_stock_previous", -1)),
    build=lambda s: Each(opening_base),
)

REVALUATION = Formula(
    name="revaluation",
    equation="H_t = (Pe_t / Pe_(t-1) - 1) B_t",
    citation="OECD, Measuring Capital (2009): holding gain of the period on the asset base",
    roles=(Role("year_end_price"), Role("year_end_price_previous", -1), Role("asset_base")),
    build=lambda s: Each(revaluation),
)

OPENING_REVALUATION = Formula(
    name="opening_revaluation",
    equation="H_t = (Pe_t - Pe_(t-1)) W_(t-1)",
    citation=f"{CAPITAL_MANUAL}: holding gain of the period on the opening stock",
    roles=(Role("year_end_price"), Role("year_end_price_previous", -1), Role("net_stock_previous", -1)),
    build=lambda s: Each(opening_revaluation),
)


def _smoothed_change(s: Setting) -> Span:
    """ln Pe at both ends of a window over the number of years between them; shorter where prices begin."""
    longest = int(s.single("services.smoothing_periods"))

    def plan(x: F8) -> Spans:
        there = np.isfinite(x)
        rows = np.arange(len(x))[:, None]
        begin = np.maximum.accumulate(np.where(there, -1, rows), axis=0) + 1
        back = np.where(there, np.minimum(rows - begin, longest), 0)
        inside = back >= 1
        weight = 1 / np.maximum(back, 1)
        return Spans(
            np.where(inside, rows - back, -1), np.full(x.shape, 2), np.stack([-weight, weight]), back
        )

    return Span(plan, inner=np.log)


PRICE_CHANGE = Formula(
    name="smoothed_price_change",
    equation="c_t = ln(Pe_t / Pe_(t-n)) / n, n the declared number of years, or as many as there are",
    citation=f"{CAPITAL_MANUAL}: expected price changes by a moving average of past ones; from memory",
    roles=(Role("year_end_price"),),
    build=_smoothed_change,
    kind="series",
)

SMOOTHED_REVALUATION = Formula(
    name="smoothed_revaluation",
    equation="H_t = (exp(c_t) - 1) B_t, c the smoothed log change of the price",
    citation=f"{CAPITAL_MANUAL}: expected holding gains in place of those of the single year; from memory",
    roles=(Role("price_change"), Role("asset_base")),
    build=lambda s: Each(revaluation_at),
)


def _new_loss(s: Setting) -> Span:
    """1 - w(0) times investment of the period, with the weights that hold in it."""
    kernels = lag("consumption_of_fixed_capital")(s).kernels
    lost = np.array([[kernel.at(row, 1)[0] for kernel in kernels] for row in range(len(s.periods))])[
        :, s.which
    ]

    def plan(x: F8) -> Spans:
        rows = np.broadcast_to(np.arange(len(x))[:, None], x.shape)
        return Spans(np.where(np.isfinite(x), rows, -1), np.ones(x.shape, np.int64), lost[None])

    return Span(plan)


NEW_LOSS = Formula(
    name="loss_of_new_investment",
    equation="loss of new investment_t = (1 - w(0)) I_t",
    citation=f"{CAPITAL_MANUAL}: what investment of the period loses in it",
    roles=(Role("investment"),),
    build=_new_loss,
    kind="series",
)

OPENING_DEPRECIATION = Formula(
    name="depreciation_of_opening_vintages",
    equation="D_t = Pe_t (CFC_t - (1 - w(0)) I_t)",
    citation=f"{CAPITAL_MANUAL}: what the opening stock loses over the period, at year-end prices",
    roles=(Role("year_end_price"), Role("consumption"), Role("loss_of_new_investment")),
    build=lambda s: Each(lambda price, loss, new: opening_depreciation(price, loss, new, np.zeros(()))),
)


def declared_everywhere(base: F8, value: F8) -> F8:
    """Return a declared value in every period in which there is an asset base."""
    return np.asarray(value + 0 * base)


DECLARED_TAX_TERM = Formula(
    name="declared_tax_term",
    equation="T = (1 - tau A - e) / (1 - tau), declared for all assets",
    citation=HALL_JORGENSON,
    roles=(Role("asset_base", counted=False),),
    build=lambda s: Each(
        lambda base, rate, allowances, credit: declared_everywhere(base, tax_term(rate, allowances, credit)),
        tuple(s.column(f"services.{name}") for name in ("tax_rate", "tax_allowances", "tax_credit")),
    ),
)

TAX_TERM = Formula(
    name="tax_term",
    equation="T = (1 - tau A - e) / (1 - tau)",
    citation=HALL_JORGENSON,
    roles=(Role("tax_rate"), Role("tax_allowances"), Role("tax_credit")),
    build=lambda s: Each(tax_term),
)

DECLARED_PROPERTY_TAX = Formula(
    name="declared_property_tax",
    equation="x as declared for all assets",
    citation=HALL_JORGENSON,
    roles=(Role("asset_base", counted=False),),
    build=lambda s: Each(declared_everywhere, (s.column("services.property_tax"),)),
)

TAXED_BASE = Formula(
    name="taxed_asset_base",
    equation="T B",
    citation=HALL_JORGENSON,
    roles=(Role("tax_term"), Role("asset_base")),
    build=lambda s: Each(lambda term, base: term * base),
)


def _loss(wears: bool, gains: bool, x: Sequence[F8]) -> tuple[F8 | float, F8 | float]:
    return x[0] if wears else 0.0, x[-1] if gains else 0.0


def _of(wears: bool, gains: bool) -> tuple[tuple[Role, ...], str, str]:
    """Return the roles of depreciation and holding gains, their text, and the ending of a formula's name."""
    roles = (Role("consumption"),) * wears + (Role("revaluation"),) * gains
    text = {(True, True): "D - H", (True, False): "D", (False, True): "- H", (False, False): "0"}
    name = {(True, True): "", (False, True): "_without_wear", (True, False): "_without_gains"}
    return roles, text[wears, gains], name.get((wears, gains), "_without_wear_and_gains")


def _cost_formula(wears: bool, gains: bool) -> Formula:
    roles, text, name = _of(wears, gains)
    return Formula(
        name=f"capital_compensation{name}",
        equation="c = r B" if text == "0" else f"c = r B {text}" if not wears else f"c = r B + {text}",
        citation="OECD, Measuring Capital (2009): user cost of the stock of one asset"
        + ("" if wears else "; land and inventories do not wear out")
        + ("" if gains else "; holding gains left out, with a real rate"),
        roles=(Role("rate_of_return"), Role("asset_base"), *roles),
        build=lambda s: Each(lambda r, base, *x: capital_cost(r, base, *_loss(wears, gains, x))),  # type: ignore[arg-type]
    )


def _outlay_formula(wears: bool, gains: bool) -> Formula:
    roles, text, name = _of(wears, gains)
    return Formula(
        name=f"cost_before_return{name}",
        equation=f"N = T ({text}) + x B",
        citation=HALL_JORGENSON,
        roles=(Role("tax_term"), Role("property_tax"), Role("asset_base"), *roles),
        build=lambda s: Each(
            lambda term, tax, base, *x: capital_cost(0 * base, base, *_loss(wears, gains, x), term, tax)  # type: ignore[arg-type]
        ),
    )


_FORMS = [(wears, gains) for wears in (True, False) for gains in (True, False)]

COST = {form: _cost_formula(*form) for form in _FORMS}
OUTLAY = {form: _outlay_formula(*form) for form in _FORMS}

TAXED_COST = Formula(
    name="capital_compensation_with_taxes",
    equation="c = r T B + N, N = T (D - H) + x B",
    citation=HALL_JORGENSON,
    roles=(Role("rate_of_return"), Role("taxed_base"), Role("cost_before_return")),
    build=lambda s: Each(lambda r, base, outlay: r * base + outlay),
)


def _not_negative(cost: F8) -> F8:
    return np.where(np.real(cost) < 0, np.nan, cost)


FLOORED_COST = Formula(
    name="capital_compensation_floored",
    equation="c, or the declared part of B where c is below zero (status E)",
    citation="a declared floor under the user cost, common practice, no source",
    roles=(Role("capital_compensation"), Role("asset_base")),
    build=lambda s: Either(
        (
            Each(_not_negative),
            Each(lambda base, floor: floor * base, (s.column("services.user_cost_floor"),)),
        ),
        takes=((0,), (1,)),
    ),
)

FORMULAS = (
    ASSET_BASE,
    OPENING_BASE,
    REVALUATION,
    OPENING_REVALUATION,
    PRICE_CHANGE,
    SMOOTHED_REVALUATION,
    NEW_LOSS,
    OPENING_DEPRECIATION,
    DECLARED_TAX_TERM,
    TAX_TERM,
    DECLARED_PROPERTY_TAX,
    TAXED_BASE,
    *COST.values(),
    *OUTLAY.values(),
    TAXED_COST,
    FLOORED_COST,
)


@dataclass(frozen=True)
class CostParams:
    """How the cost of an asset is made. user_cost_form: `average` or `opening`, what B, D and H are taken of."""

    user_cost_form: Choice
    holding_gains: Choice
    smoothing_periods: Choice
    taxes: Choice
    tax_rate: Choice
    tax_allowances: Choice
    tax_credit: Choice
    property_tax: Choice
    deflation_order: Choice


@dataclass(frozen=True)
class Prices:
    """Average and year-end prices, and which of them each net stock series uses."""

    average: Given
    year_end: Given
    year_end_block: Block


def prices_of(net: Block, average: Block, year_end: Block, order: Choice) -> Prices:
    edges = price_edges(net.series, average, order.value)
    return Prices(by_edges(average, edges), by_edges(year_end, edges), year_end)


def bases(net: Block, prices: Prices, params: CostParams) -> Block:
    """Return the asset base B of every series of the net stock."""
    opening = params.user_cost_form.value == "opening"
    inputs = {
        "price": prices.average,
        "year_end_price_previous": prices.year_end,
        "net_stock_previous": given(net),
        "net_stock": given(net),
    }
    return _made(
        OPENING_BASE if opening else ASSET_BASE,
        "asset_base",
        params.user_cost_form.value,
        net,
        inputs,
        params,
    )


def actual_gains(net: Block, base: Block, prices: Prices, params: CostParams) -> Block:
    """Return the holding gain H of the period on the base of every series."""
    inputs = {
        "year_end_price": prices.year_end,
        "year_end_price_previous": prices.year_end,
        "net_stock_previous": given(net),
        "asset_base": given(base),
    }
    formula = OPENING_REVALUATION if params.user_cost_form.value == "opening" else REVALUATION
    return _made(formula, "revaluation", "actual", net, inputs, params)


def smoothed_changes(prices: Prices, params: CostParams) -> Block:
    """Return the smoothed log change of every year-end price."""
    block = prices.year_end_block
    return derive(
        PRICE_CHANGE,
        BlockKey("price_change", "smoothed", "_Z"),
        block.series,
        block.periods,
        {"year_end_price": given(block)},
        sets=((params.smoothing_periods,),),
        part=False,
    )


def smoothed_gains(base: Block, change: Block, prices: Prices, params: CostParams) -> Block:
    """Return the holding gain of every base at the smoothed change of its price."""
    assert prices.year_end.edges is not None
    inputs = {"price_change": by_edges(change, prices.year_end.edges), "asset_base": given(base)}
    return _made(SMOOTHED_REVALUATION, "revaluation", "smoothed", base, inputs, params)


def _made(
    formula: Formula, measure: str, method: str, like: Block, inputs: Mapping[str, Given], params: CostParams
) -> Block:
    return derive(
        formula,
        BlockKey(measure, method, "current"),
        like.series,
        like.periods,
        {role.name: inputs[role.name] for role in formula.roles},
        sets=((params.user_cost_form, params.deflation_order),),
        part=like.part,
    )


def opening_depreciations(
    net: Block,
    consumption: Block,
    before_changes: Block | None,
    investment: Block,
    prices: Prices,
    params: CostParams,
) -> tuple[Block, Block]:
    """Return what new investment loses, and what the opening vintages lose at year-end prices.

    before_changes: consumption of the same vintages before other changes in volume, where there were any: it was
    made with the parameters of the asset, from which w(0) follows.
    """
    there = consumption.series.locate(net.series.key) >= 0
    series = net.series.take(there)
    sets, which = _sets_of(series, consumption, before_changes)
    new = derive(
        NEW_LOSS,
        BlockKey("consumption_of_fixed_capital", "new_investment", "constant"),
        series,
        net.periods,
        {"investment": given(investment)},
        sets=sets,
        which=which,
        chosen=False,
        part=False,
    )
    lost = derive(
        OPENING_DEPRECIATION,
        BlockKey("consumption_of_fixed_capital", "opening_vintages", "year_end"),
        series,
        net.periods,
        {
            "year_end_price": part_of(prices.year_end, there),
            "consumption": given(consumption),
            "loss_of_new_investment": given(new),
        },
        sets=((params.user_cost_form, params.deflation_order),),
        part=net.part[there],
    )
    return new, lost


def _sets_of(
    series: SeriesIndex, consumption: Block, before_changes: Block | None
) -> tuple[list[MethodSet], I4]:
    """Return the asset parameters of each series: those its consumption, or its part before changes, was made with."""
    found: dict[MethodSet, int] = {}
    which = np.empty(len(series), np.int32)
    blocks = [consumption] if before_changes is None else [before_changes, consumption]
    places = [block.series.locate(series.key) for block in blocks]
    for n in range(len(series)):
        block, at = next((b, place[n]) for b, place in zip(blocks, places, strict=True) if place[n] >= 0)
        which[n] = found.setdefault(block.origin.sets[block.origin.set[at]], len(found))
    return list(found), which


@dataclass(frozen=True)
class Taxes:
    """Tax term and property tax of every series, and the blocks they were made of."""

    term: Given
    property_tax: Given
    blocks: tuple[Block, ...]


def taxes(base: Block, delivered: Mapping[str, Block], params: CostParams) -> Taxes:
    """Return T and x of every base: as delivered, of delivered rates, else as declared for all.

    Args:
        delivered: measure -> block; left aside where the taxes are declared.
    """
    if params.taxes.value == "declared":
        delivered = {}
    order = params.deflation_order.value
    term, used = _delivered(base.series, delivered.get("tax_term"), order)
    made: list[Block] = []
    sources = {name: delivered.get(name) for name in ("tax_rate", "tax_allowances", "tax_credit")}
    if all(block is not None for block in sources.values()):
        edges = {name: price_edges(base.series, b, order) for name, b in sources.items() if b is not None}
        able = ~used & np.logical_and.reduce([e.key >= 0 for e in edges.values()])
        if able.any():
            made.append(
                derive(
                    TAX_TERM,
                    BlockKey("tax_term", "of_rates", "_Z"),
                    base.series.take(able),
                    base.periods,
                    {
                        name: Given(
                            (b,), edges=Edges((b.key,), edges[name].which[able], edges[name].key[able])
                        )
                        for name, b in sources.items()
                        if b is not None
                    },
                    sets=((params.taxes, params.deflation_order),),
                    part=False,
                )
            )
            used = used | able
    declared = (params.taxes, params.tax_rate, params.tax_allowances, params.tax_credit)
    made += _declared(DECLARED_TAX_TERM, "tax_term", base, ~used, declared)
    rate, rated = _delivered(base.series, delivered.get("property_tax_rate"), order)
    flat = _declared(
        DECLARED_PROPERTY_TAX, "property_tax_rate", base, ~rated, (params.taxes, params.property_tax)
    )
    return Taxes(_beside(base.series, term, made), _beside(base.series, rate, flat), (*made, *flat))


Found = tuple[Block, Edges] | None


def _delivered(series: SeriesIndex, block: Block | None, order: Sequence[str]) -> tuple[Found, B1]:
    """Return a delivered block with the series of it that each series reads, and which series have one."""
    if block is None:
        return None, np.zeros(len(series), bool)
    edges = price_edges(series, block, order)
    return (block, edges), edges.key >= 0


def _declared(formula: Formula, measure: str, base: Block, which: B1, choices: MethodSet) -> list[Block]:
    if not which.any():
        return []
    return [
        derive(
            formula,
            BlockKey(measure, "declared", "_Z"),
            base.series.take(which),
            base.periods,
            {"asset_base": given(base)},
            sets=(choices,),
            part=False,
        )
    ]


def _beside(series: SeriesIndex, found: Found, made: Sequence[Block]) -> Given:
    """Return one reading over a delivered block and blocks of the series' own keys."""
    blocks: list[Block] = []
    which, key = np.zeros(len(series), np.int32), np.full(len(series), -1, np.int64)
    if found is not None:
        blocks.append(found[0])
        key = found[1].key.copy()
    for block in made:
        mine = block.series.locate(series.key) >= 0
        which[mine], key[mine] = len(blocks), series.key[mine]
        blocks.append(block)
    return Given(tuple(blocks), edges=Edges(tuple(b.key for b in blocks), which, key))


def part_of(reading: Given, which: B1) -> Given:
    """Return a reading through edges for some of its series."""
    assert reading.edges is not None
    edges = reading.edges
    return Given(reading.blocks, edges=Edges(edges.blocks, edges.which[which], edges.key[which]))
