"""Stocks: gross, productive and net capital stocks by the perpetual inventory, and what leaves them."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from keelbook.blocks import F8, Block, BlockKey, Choice, MethodSet
from keelbook.lineage.derive import derive, given
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.lag import GeometricKernel, Kernel, Lag, TableKernel
from keelbook.lineage.primitives import Each, Span, Spans
from keelbook.methods.initial_stock import (
    log_trend_coefficients,
    opening_stock_geometric,
    opening_stock_profile,
)
from keelbook.methods.weights import COHORT_GEOMETRIC, Weights, period_end_weights
from keelbook.stages.base import CHOSEN, Inputs, Result, Stage, keys, missing_input, note
from keelbook.stages.deflation import by_edges, price_edges
from keelbook.stages.totals import totals

STOCKS = ("gross_stock", "productive_stock", "net_stock")
LOSSES = {"consumption_of_fixed_capital": "net_stock", "retirements": "gross_stock"}
"""Loss -> the stock that it is the loss of."""

_WEIGHTS_OF = {
    "gross_stock": "gross",
    "productive_stock": "productive",
    "net_stock": "net",
    "consumption_of_fixed_capital": "consumption",
    "retirements": "retirements",
}


def weights_of(choices: Mapping[str, Any], length: int) -> Weights:
    """Return the period-end weights that one set of asset parameters describes."""
    return period_end_weights(
        efficiency=choices["asset.efficiency"],
        retirement=choices.get("asset.retirement"),
        life=choices.get("asset.life"),
        rate=choices.get("asset.rate"),
        b=choices.get("asset.b"),
        discount_rate=choices.get("asset.discount_rate"),
        timing=choices["capital.timing"],
        gross_life=choices.get("asset.gross_life"),
        length=length,
    )


def kernel(measure: str, choices: Mapping[str, Any], length: int) -> Kernel:
    """Return the weights of one measure, as a recursion where the form has one."""
    weights = weights_of(choices, max(length, 3))
    own: F8 = getattr(weights, _WEIGHTS_OF[measure])
    stock: F8 = getattr(weights, _WEIGHTS_OF[LOSSES.get(measure, measure)])
    if choices["asset.efficiency"] == COHORT_GEOMETRIC and _WEIGHTS_OF[measure] not in (
        "gross",
        "retirements",
    ):
        return GeometricKernel(float(own[0]), float(own[1]), 1 - choices["asset.rate"], float(stock[0]))
    return TableKernel(own, stock)


def _lag(measure: str) -> Callable[[Setting], Lag]:
    return lambda s: Lag(tuple(kernel(measure, c, len(s.periods)) for c in s.sets), s.which)


def _cohort_formula(measure: str, symbol: str) -> Formula:
    stock = LOSSES.get(measure, measure)
    return Formula(
        name=f"{measure}_of_vintages",
        equation=f"{symbol}_t = sum_v w(v) I_(t-v) + remainder(t) x opening {stock}, weights w of the {measure}",
        citation="OECD, Measuring Capital (2009), perpetual inventory method",
        roles=(Role("investment"), Role("opening_stock"), Role("growth", counted=False)),
        build=_lag(measure),
        kind="series",
    )


VINTAGES = {
    "gross_stock": _cohort_formula("gross_stock", "G"),
    "productive_stock": _cohort_formula("productive_stock", "K"),
    "net_stock": _cohort_formula("net_stock", "W"),
    "consumption_of_fixed_capital": _cohort_formula("consumption_of_fixed_capital", "CFC"),
    "retirements": _cohort_formula("retirements", "R"),
}


def _trend(which: int, outer: Callable[[F8], F8]) -> Callable[[Setting], Span]:
    """Return the builder of one coefficient of the log-linear trend over the first years of each series."""

    def build(s: Setting) -> Span:
        window = int(s.single("capital.trend_window"))
        coefficients = log_trend_coefficients(window)[which]

        def plan(x: F8) -> Spans:
            there = np.isfinite(x)
            start = np.argmax(there, axis=0)
            first = np.full(x.shape, -1)
            n = np.arange(x.shape[1])
            usable = there.any(axis=0) & (start > 0) & (start + window <= len(x))
            rows = np.minimum(start + np.arange(window)[:, None], len(x) - 1)
            usable &= (x[rows, n] > 0).all(axis=0)
            first[start[usable] - 1, n[usable]] = start[usable]
            shape = (window, *x.shape)
            return Spans(first, np.full(x.shape, window), np.broadcast_to(coefficients[:, None, None], shape))

        return Span(plan, inner=np.log, outer=outer)

    return build


TREND_GROWTH = Formula(
    name="log_trend_growth",
    equation="g = exp(slope of ln I on t over the first years) - 1",
    citation="Nehru and Dhareshwar 1993: log-linear trend of investment",
    roles=(Role("investment"),),
    build=_trend(0, np.expm1),
    kind="series",
    estimated=True,
)

TREND_INVESTMENT = Formula(
    name="log_trend_start",
    equation="I_1 = exp(fitted value of ln I in the first year)",
    citation="Nehru and Dhareshwar 1993: the fitted first value",
    roles=(Role("investment"),),
    build=_trend(1, np.exp),
    kind="series",
    estimated=True,
)


def _steady_state(measure: str) -> Callable[[Setting], Each]:
    def build(s: Setting) -> Each:
        kernels = [kernel(measure, c, len(s.periods)) for c in s.sets]

        def opening(investment: F8, growth: F8, which: F8) -> F8:
            investment, growth, which = np.broadcast_arrays(investment, growth, which)
            out = np.full(investment.shape, np.nan, np.result_type(investment, growth))
            for i, k in enumerate(kernels):
                mine = (which == i) & np.isfinite(investment) & np.isfinite(growth)
                if not mine.any():
                    continue
                if isinstance(k, GeometricKernel):
                    mine &= growth.real + (1 - k.keep) > 0
                    rate = np.asarray(1 - k.keep)
                    out[mine] = opening_stock_geometric(
                        investment[mine], growth[mine], np.asarray(k.first), rate
                    )
                else:
                    out[mine] = opening_stock_profile(investment[mine], growth[mine], k.stock)
            return out

        return Each(opening, (s.which.astype(np.float64),))

    return build


def _opening_formula(measure: str) -> Formula:
    return Formula(
        name=f"{measure}_steady_state",
        equation="K_0 = I_1 sum_v w(v) (1+g)^-(v+1); geometric: w(0) I_1 / (g + d)",
        citation="Harberger 1978 (formula from memory); Nehru and Dhareshwar 1993 for the fitted start",
        roles=(Role("investment"), Role("growth", counted=False)),
        build=_steady_state(measure),
        estimated=True,
        assumed=True,
    )


OPENING = {measure: _opening_formula(measure) for measure in STOCKS}

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

FORMULAS = (
    TREND_GROWTH,
    TREND_INVESTMENT,
    *OPENING.values(),
    *VINTAGES.values(),
    AT_CURRENT_PRICES,
    AT_REPLACEMENT_COST,
)

BALANCE_TOLERANCE = 1e-11
"""Rounding allowed in the balance identity, relative to the size of its terms."""


@dataclass(frozen=True)
class StocksParams:
    """assets: the asset parameters of a pair (asset, industry), None where no rule covers it."""

    assets: Callable[[str, str], MethodSet | None]
    timing: Choice
    age_price_mode: Choice
    initial_stock: Choice
    trend_window: Choice
    deflation_order: Choice


def run(inputs: Inputs, params: StocksParams) -> Result:
    """Return the stocks and losses of every investment series with an asset rule, and their totals."""
    key = BlockKey("investment", CHOSEN, "constant")
    investment = inputs.get(key)
    if investment is None:
        return Result((), [missing_input("stocks", key)])
    sets, which, findings = _choices(investment, params)
    covered = which >= 0
    investment, which = investment.take(covered), which[covered]
    periods, series = investment.periods, investment.series
    method = (params.initial_stock, params.trend_window)
    start = {
        measure: derive(
            formula,
            BlockKey(measure, "log_linear_trend", basis),
            series,
            periods,
            {"investment": given(investment)},
            sets=(method,),
            part=False,
        )
        for measure, formula, basis in (
            ("trend_growth", TREND_GROWTH, "_Z"),
            ("trend_investment", TREND_INVESTMENT, "constant"),
        )
    }
    growth = start["trend_growth"]
    findings.extend(_no_start(investment, growth, sets, which))
    blocks: list[Block] = list(start.values())
    made: dict[str, Block] = {}
    for measure in (*STOCKS, *LOSSES):
        stock = LOSSES.get(measure, measure)
        defined = _defined(measure, sets)[which]
        mine = investment.take(defined)
        if not len(mine.series):
            continue
        if measure in STOCKS:
            made[f"{measure}/opening"] = derive(
                OPENING[measure],
                BlockKey(measure, "steady_state", "constant"),
                mine.series,
                periods,
                {"investment": given(start["trend_investment"]), "growth": given(growth)},
                sets=sets,
                which=which[defined],
                chosen=False,
                part=False,
            )
        made[measure] = derive(
            VINTAGES[measure],
            BlockKey(measure, "perpetual_inventory", "constant"),
            mine.series,
            periods,
            {
                "investment": given(mine),
                "opening_stock": given(made[f"{stock}/opening"]),
                "growth": given(growth),
            },
            sets=sets,
            which=which[defined],
            part=mine.part,
        )
    findings.extend(_unbalanced(investment, made))
    findings.extend(_broken_off(investment, made["net_stock"]))
    blocks.extend(made.values())
    valued, problems = _valued(inputs, made, params)
    blocks.extend(valued)
    findings.extend(problems)
    for block in [
        investment_total for investment_total in (*made.values(), *valued) if _has_totals(investment_total)
    ]:
        blocks.extend(totals(block, ("industry", "asset")))
    return Result(blocks, findings)


def _has_totals(block: Block) -> bool:
    return bool(block.part.any())


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
                    "message": "no row of rules/assets.csv covers this asset; its stocks are not computed",
                    "expected": "a row for the asset, or for a group that it belongs to",
                    "remedy": "add a row to rules/assets.csv of the assembly",
                }
            )
            continue
        chosen = (*found, params.timing, params.age_price_mode)
        of_pair[i] = sets.setdefault(chosen, len(sets))
    return tuple(sets), of_pair[pair.ravel()], findings


def _defined(measure: str, sets: tuple[MethodSet, ...]) -> Any:
    """Return for each parameter set whether the measure exists: a cohort rate has a gross stock only with a life."""
    return np.array([_set_defines(measure, {c.name: c.value for c in s}) for s in sets], bool)


def _set_defines(measure: str, choices: Mapping[str, Any]) -> bool:
    return getattr(weights_of(choices, 3), _WEIGHTS_OF[measure]) is not None


def _no_start(
    investment: Block, growth: Block, sets: tuple[MethodSet, ...], which: Any
) -> list[dict[str, Any]]:
    """Return findings for series whose steady-state start cannot be made."""
    out = []
    rate = np.array([_geometric_rate({c.name: c.value for c in s}) for s in sets])
    g = np.where(np.isfinite(growth.value), growth.value, 0).sum(axis=0)
    lost = ~growth.held
    never = ~lost & (g + rate[which] <= 0)
    for n in np.flatnonzero((lost | never) & investment.held):
        why = (
            "the trend window has fewer years than declared, or investment that is not above zero"
            if lost[n]
            else f"trend growth {g[n]:.4f} plus the rate {rate[which[n]]:.4f} is not above zero"
        )
        out.append(
            note(
                "no_starting_stock",
                "warn",
                f"no steady-state start: {why}; the stocks are not computed",
                investment.series.table,
                int(investment.series.key[n]),
                measure="net_stock",
                time_period=str(investment.periods[int(np.argmax(np.isfinite(investment.value[:, n])))]),
                expected="investment above zero in every year of the window, and growth + rate above zero",
                remedy="choose another capital.trend_window, or deliver a stock",
            )
        )
    return out


def _geometric_rate(choices: Mapping[str, Any]) -> float:
    return float(choices["asset.rate"]) if choices["asset.efficiency"] == COHORT_GEOMETRIC else np.inf


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


def _unbalanced(investment: Block, made: Mapping[str, Block]) -> list[dict[str, Any]]:
    """Test W_t = W_(t-1) + I_t - CFC_t and G_t = G_(t-1) + I_t - R_t; both sides come from vintages."""
    out = []
    for loss, stock in LOSSES.items():
        if loss not in made:
            continue
        closing, lost, opening = made[stock], made[loss], made[f"{stock}/opening"]
        flow = investment.value[:, investment.series.locate(closing.series.key)]
        before = np.where(np.isfinite(opening.value), opening.value, closing.value)[:-1]
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
    optional=keys("investment/*/constant", "investment_price/*/index", "investment_price/year_end/year_end"),
    gives=keys(
        "trend_growth/log_linear_trend/_Z",
        "trend_investment/log_linear_trend/constant",
        *(f"{m}/steady_state/constant" for m in STOCKS),
        *(f"{m}/perpetual_inventory/constant" for m in (*STOCKS, *LOSSES)),
        *(f"{m}/perpetual_inventory/year_end" for m in STOCKS),
        *(f"{m}/perpetual_inventory/current" for m in LOSSES),
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
