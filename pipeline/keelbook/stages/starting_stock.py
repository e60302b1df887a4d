"""Starting stocks: what stood at the end of the year before the first, from a steady state or a benchmark."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from keelbook.blocks import F8, I4, Block, BlockKey, Choice, Edges, MethodSet, SeriesIndex, merge
from keelbook.lineage.benchmark import BenchmarkFactor
from keelbook.lineage.derive import Given, derive, given, line_up
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.lag import GeometricKernel, Kernel, Lag, TableKernel
from keelbook.lineage.primitives import Each, Span, Spans
from keelbook.methods.benchmark import rate_between
from keelbook.methods.initial_stock import (
    log_trend_coefficients,
    opening_stock_geometric,
    opening_stock_profile,
)
from keelbook.methods.weights import COHORT_GEOMETRIC, Weights, period_end_weights
from keelbook.stages.base import note

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


_DISTRIBUTION, _SHAPE = "asset.retirement.distribution", "asset.retirement."


def weights_of(choices: Mapping[str, Any], length: int) -> Weights:
    """Return the period-end weights that one set of asset parameters describes."""
    by_price = choices.get("asset.age_price")
    return period_end_weights(
        efficiency=choices.get("asset.efficiency"),
        retirement=choices.get(_DISTRIBUTION),
        retirement_shape=tuple(
            (name.removeprefix(_SHAPE), float(value))
            for name, value in choices.items()
            if name.startswith(_SHAPE) and name != _DISTRIBUTION
        ),
        age_price_mode=choices["capital.age_price_mode"],
        age_price_form=by_price,
        factor=choices.get("asset.declining_balance_rate") if by_price else None,
        life=choices.get("asset.life"),
        rate=choices.get("asset.rate"),
        b=choices.get("asset.b"),
        discount_rate=choices.get("asset.discount_rate"),
        timing=choices["capital.timing"],
        gross_life=choices.get("asset.gross_life"),
        length=length,
    )


def _cohort_geometric(choices: Mapping[str, Any]) -> bool:
    return choices.get("asset.efficiency") == COHORT_GEOMETRIC


def kernel(measure: str, choices: Mapping[str, Any], length: int) -> Kernel:
    """Return the weights of one measure, as a recursion where the form has one."""
    weights = weights_of(choices, max(length, 3))
    own: F8 = getattr(weights, _WEIGHTS_OF[measure])
    stock: F8 = getattr(weights, _WEIGHTS_OF[LOSSES.get(measure, measure)])
    if _cohort_geometric(choices) and _WEIGHTS_OF[measure] not in ("gross", "retirements"):
        return GeometricKernel(float(own[0]), float(own[1]), 1 - choices["asset.rate"], float(stock[0]))
    return TableKernel(own, stock)


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


def lag(measure: str) -> Callable[[Setting], Lag]:
    """Return the builder of the sum over vintages of one measure."""
    return lambda s: Lag(tuple(kernel(measure, c, len(s.periods)) for c in s.sets), s.which)


def _factor_formula(measure: str) -> Formula:
    return Formula(
        name=f"benchmark_factor_{measure}",
        equation=f"lambda with benchmark {measure} = sum_v w(v) I_(b-v) + lambda x what is left of the backcast stock",
        citation="OECD, Measuring Capital (2009): stocks from a benchmark; from memory",
        roles=(
            Role("benchmark"),
            Role("investment"),
            Role("backcast_stock", counted=False),
            Role("growth", counted=False),
        ),
        build=lambda s: BenchmarkFactor(lag(measure)(s)),
        kind="series",
        estimated=True,
    )


FACTOR = {measure: _factor_formula(measure) for measure in STOCKS}

SCALED_OPENING = Formula(
    name="opening_from_benchmark",
    equation="K_0 = lambda x backcast stock",
    citation="OECD, Measuring Capital (2009): stocks from a benchmark; from memory",
    roles=(Role("factor"), Role("backcast_stock", counted=False)),
    build=lambda s: Each(lambda factor, stock: factor * stock),
    estimated=True,
)

FORMULAS = (TREND_GROWTH, TREND_INVESTMENT, *OPENING.values(), *FACTOR.values(), SCALED_OPENING)


@dataclass(frozen=True)
class StartParams:
    """initial_stock: `steady_state`; `benchmark` where one is delivered, a steady state elsewhere; or
    `two_benchmarks`, where the depreciation rate is solved too.
    """

    initial_stock: Choice
    trend_window: Choice


@dataclass(frozen=True)
class Start:
    """The growth that shapes the past, and for every stock where its opening is read."""

    growth: Block
    openings: Mapping[str, Given]
    blocks: Sequence[Block]
    findings: Sequence[dict[str, Any]]

    def opening_values(self, measure: str, series: SeriesIndex) -> F8:
        """Return the openings of some series, (T, N), NaN but for the period before the first."""
        source = read_for(self.openings[measure], series)
        return line_up(Role("opening_stock"), source, series, self.growth.periods).value


def start(
    investment: Block,
    sets: tuple[MethodSet, ...],
    which: I4,
    benchmarks: Mapping[str, Block],
    params: StartParams,
) -> Start:
    """Return the starting stocks of every investment series.

    Args:
        investment: volumes, all with an asset rule.
        sets, which: the asset parameters and which of them each series uses.
        benchmarks: delivered stocks at reference-year prices by measure.
    """
    periods, series = investment.periods, investment.series
    method = (params.initial_stock, params.trend_window)
    trend = {
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
    growth = trend["trend_growth"]
    blocks = list(trend.values())
    steady: dict[str, Block] = {}
    for measure in STOCKS:
        mine = defined(measure, sets)[which]
        if mine.any():
            steady[measure] = derive(
                OPENING[measure],
                BlockKey(measure, "steady_state", "constant"),
                series.take(mine),
                periods,
                {"investment": given(trend["trend_investment"]), "growth": given(growth)},
                sets=sets,
                which=which[mine],
                chosen=False,
                part=False,
            )
    blocks.extend(steady.values())
    findings = _no_start(investment, growth, sets, which) + _prices_against_rate(investment, sets, which)
    factor = None
    if params.initial_stock.value in ("benchmark", "two_benchmarks"):
        factor = _factors(investment, sets, which, benchmarks, steady, growth, params)
    if factor is None:
        return Start(growth, {m: given(b) for m, b in steady.items()}, blocks, findings)
    blocks.append(factor)
    findings += _negative_factor(factor)
    openings = {}
    for measure, block in steady.items():
        there = factor.series.locate(block.series.key) >= 0
        scaled = derive(
            SCALED_OPENING,
            BlockKey(measure, "benchmark", "constant"),
            block.series.take(there),
            periods,
            {"factor": given(factor), "backcast_stock": given(block)},
            sets=((params.initial_stock,),),
            chosen=False,
            part=False,
        )
        scaled = scaled.take(scaled.held)
        blocks.append(scaled)
        openings[measure] = _read(block, scaled)
    return Start(growth, openings, blocks, findings)


def _read(steady: Block, scaled: Block) -> Given:
    """Return where the opening of every series is read: its benchmark if it has one, else its steady state."""
    if not len(scaled.series):
        return given(steady)
    which = (scaled.series.locate(steady.series.key) >= 0).astype(np.int32)
    return Given((steady, scaled), edges=Edges((steady.key, scaled.key), which, steady.series.key))


def read_for(source: Given, series: SeriesIndex) -> Given:
    """Return the same reading for some of the series."""
    if source.edges is None:
        return source
    at = source.blocks[0].series.locate(series.key)
    return Given(
        source.blocks, edges=Edges(source.edges.blocks, source.edges.which[at], source.edges.key[at])
    )


def _factors(
    investment: Block,
    sets: tuple[MethodSet, ...],
    which: I4,
    benchmarks: Mapping[str, Block],
    steady: Mapping[str, Block],
    growth: Block,
    params: StartParams,
) -> Block | None:
    """Return the benchmark factor of every series with a benchmark: of its net stock if there is one."""
    left = np.ones(len(investment.series), bool)
    out = []
    for measure in ("net_stock", "gross_stock", "productive_stock"):
        if measure not in benchmarks or measure not in steady:
            continue
        keys = investment.series.key
        mine = (
            left & (benchmarks[measure].series.locate(keys) >= 0) & (steady[measure].series.locate(keys) >= 0)
        )
        if not mine.any():
            continue
        block = derive(
            FACTOR[measure],
            BlockKey("benchmark_factor", "benchmark", "_Z"),
            investment.series.take(mine),
            investment.periods,
            {
                "benchmark": given(benchmarks[measure]),
                "investment": given(investment),
                "backcast_stock": given(steady[measure]),
                "growth": given(growth),
            },
            sets=tuple((*s, params.initial_stock) for s in sets),
            which=which[mine],
            part=False,
        )
        block = block.take(block.held)
        left &= block.series.locate(keys) < 0
        out.append(block)
    return merge(out) if out else None


def solved_rates(
    investment: Block,
    sets: tuple[MethodSet, ...],
    which: I4,
    benchmark: Block | None,
    timing: Choice,
    initial_stock: Choice,
) -> tuple[tuple[MethodSet, ...], I4, list[dict[str, Any]]]:
    """Return the asset parameters with the rate that leads from the first to the last benchmark of each series.

    A series with geometric weights and two benchmarks gets a set of its own, in which the solved rate stands with
    the residual of its equation; one without a rate in (0, 1) gets none (-1), with a finding. All others keep theirs.
    """
    if benchmark is None:
        return sets, which, []
    columns = benchmark.series.locate(investment.series.key)
    out, of, findings = list(sets), which.copy(), []
    for n in np.flatnonzero(columns >= 0):
        choices = {c.name: c.value for c in sets[which[n]]}
        flow, stock = investment.value[:, n], benchmark.value[:, columns[n]]
        there = np.flatnonzero(np.isfinite(stock))
        known = [int(t) for t in there if np.isfinite(flow[int(there[0]) + 1 : t + 1]).all()]
        if not _cohort_geometric(choices) or len(known) < 2:
            continue
        first, last = known[0], known[-1]
        solved = rate_between(
            stock[[first]], stock[[last]], flow[first + 1 : last + 1, None], str(timing.value)
        )
        years = f"{benchmark.periods[first]} and {benchmark.periods[last]}"
        if np.isnan(solved.rate[0]):
            of[n] = -1
            findings.append(_no_rate_between(investment, int(n), years, int(solved.roots[0])))
            continue
        said = f"solved: leads from the benchmark of {years}, residual {solved.residual[0]:.3g}"
        rate = Choice("asset.rate", float(solved.rate[0]), initial_stock.file, initial_stock.line, said)
        kept = (c for c in sets[which[n]] if c.name not in ("asset.rate", "asset.declining_balance_rate"))
        of[n] = len(out)
        out.append((*kept, rate))
    return tuple(out), of, findings


def _no_rate_between(investment: Block, n: int, years: str, roots: int) -> dict[str, Any]:
    return note(
        "no_rate_between_benchmarks",
        "note",
        f"not computed, and missing from totals: no rate in (0,1) leads from the benchmark of {years}"
        if roots == 0
        else f"not computed, and missing from totals: {roots} rates in (0,1) lead from the benchmark of {years}",
        investment.series.table,
        int(investment.series.key[n]),
        measure="net_stock",
        found=f"{roots} rates",
        expected="one rate above 0 and below 1",
        remedy="check both benchmarks and the investment between them, or start from one benchmark alone",
    )


def _negative_factor(factor: Block) -> list[dict[str, Any]]:
    out = []
    with np.errstate(invalid="ignore"):
        bad = factor.value < 0
    for n in np.flatnonzero(bad.any(axis=0)):
        t = int(np.argmax(bad[:, n]))
        out.append(
            note(
                "benchmark_too_small",
                "stop",
                "the investment since the first year alone gives more than the benchmark stock",
                factor.series.table,
                int(factor.series.key[n]),
                measure="net_stock",
                time_period=str(factor.periods[t]),
                found=f"a factor of {factor.value[t, n]:.4f} on the stock before the first year",
                expected="0 or more",
                remedy="check the benchmark, its price basis and date, and the life or rate of the asset",
            )
        )
    return out


def defined(measure: str, sets: tuple[MethodSet, ...]) -> Any:
    """Return for each parameter set whether the measure exists: a cohort rate has a gross stock only with a life."""
    return np.array([_set_defines(measure, {c.name: c.value for c in s}) for s in sets], bool)


def _set_defines(measure: str, choices: Mapping[str, Any]) -> bool:
    return getattr(weights_of(choices, 3), _WEIGHTS_OF[measure]) is not None


ROUNDING = 1e-12
"""Rise of an efficiency that is rounding alone."""


def _prices_against_rate(investment: Block, sets: tuple[MethodSet, ...], which: I4) -> list[dict[str, Any]]:
    """Return a finding for each set whose declared prices by age imply an efficiency below zero or rising with age."""
    out = []
    for i, choices in enumerate({c.name: c.value for c in s} for s in sets):
        if "asset.age_price" not in choices or not (which == i).any():
            continue
        efficiency = weights_of(choices, 1).productive
        before = np.concatenate(([1.0], efficiency[:-1]))
        bad = np.flatnonzero((efficiency < -ROUNDING) | (efficiency > before + ROUNDING))
        if not len(bad):
            continue
        v = int(bad[0])
        out.append(
            note(
                "prices_against_discount_rate",
                "warn",
                "the declared prices by age and the discount rate imply an efficiency that is below zero or rises",
                investment.series.table,
                int(investment.series.key[int(np.argmax(which == i))]),
                measure="productive_stock",
                found=f"{efficiency[v]:.4f} after {before[v]:.4f}, {v} periods after investment",
                expected="an efficiency from 1 down to 0",
                remedy="choose another asset.age_price, retirement or discount_rate, or declare the efficiency",
            )
        )
    return out


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
    return float(choices["asset.rate"]) if _cohort_geometric(choices) else np.inf
