"""Starting stocks: what stood at the end of the year before the first, from a steady state or a benchmark."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from keelbook.blocks import (
    B1,
    ESTIMATED,
    F8,
    I4,
    Block,
    BlockKey,
    Choice,
    Edges,
    MethodSet,
    SeriesIndex,
    merge,
    status_of,
)
from keelbook.lineage.benchmark import BenchmarkFactor
from keelbook.lineage.derive import Given, derive, given, line_up
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.lag import (
    AgedKernel,
    BandKernel,
    GeometricKernel,
    Kernel,
    Lag,
    TableKernel,
    WarmUp,
    of_periods,
    of_vintages,
)
from keelbook.lineage.path import Path
from keelbook.lineage.primitives import Each, Span, Spans
from keelbook.lineage.volume_changes import backcast, even_change
from keelbook.methods.benchmark import rate_between
from keelbook.methods.initial_stock import (
    log_trend_coefficients,
    opening_stock_geometric,
    opening_stock_profile,
)
from keelbook.methods.weights import AGE_AT_PERIOD_END, COHORT_GEOMETRIC, Weights, period_end_weights
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


LATER = "@"
"""Between the name of an asset parameter and the year from which it holds."""


def vintages_of(choices: Mapping[str, Any]) -> dict[int | None, dict[str, Any]]:
    """Return the asset parameters by the year from which they hold, None first: for what is before all of them."""
    named = [(name.partition(LATER), value) for name, value in choices.items()]
    base = {name: value for (name, _, year), value in named if not year}
    common = {name: value for name, value in base.items() if not name.startswith("asset.")}
    out: dict[int | None, dict[str, Any]] = {None: base}
    for year in sorted({int(year) for (_, _, year), _ in named if year}):
        out[year] = common | {name: value for (name, _, since), value in named if since == str(year)}
    return out


def kernel(
    measure: str, choices: Mapping[str, Any], periods: range
) -> GeometricKernel | TableKernel | BandKernel:
    """Return the weights of one measure: by age alone, or also by period where parameters hold from a year on."""
    by_year = vintages_of(choices)
    if len(by_year) == 1:
        return even_kernel(measure, choices, len(periods))
    since = [-np.inf if year is None else year for year in by_year]
    of_row = np.searchsorted(since, list(periods), side="right") - 1
    if choices.get("asset.applies_to") == "stock" and _WEIGHTS_OF[measure] not in ("gross", "retirements"):
        stock = LOSSES.get(measure, measure)
        rates = [even_kernel(stock, c, len(periods)) for c in by_year.values()]
        geometric = [k for k in rates if isinstance(k, GeometricKernel)]
        return of_periods(geometric, of_row, loss=measure in LOSSES)
    return of_vintages([even_kernel(measure, c, len(periods)) for c in by_year.values()], of_row)


def aged_kernel(choices: Mapping[str, Any], periods: range) -> AgedKernel:
    """Return the weights of the net stock times age."""
    of = kernel("net_stock", choices, periods)
    return AgedKernel(of, AGE_AT_PERIOD_END[choices["capital.timing"]])


def opening_kernel(measure: str, choices: Mapping[str, Any], periods: range) -> GeometricKernel | TableKernel:
    """Return the weights of the vintages in an opening stock: those of the period before the first."""
    found = kernel(measure, choices, periods)
    return found.base if isinstance(found, BandKernel) else found


def even_kernel(measure: str, choices: Mapping[str, Any], length: int) -> GeometricKernel | TableKernel:
    """Return the weights of one measure by age, as a recursion where the form has one."""
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


def _before_first(x: F8) -> tuple[Any, Any]:
    """Return (T, N) the row of the first figure at the row before it, -1 elsewhere; and where that is."""
    there = np.isfinite(x)
    start = np.argmax(there, axis=0)
    n = np.flatnonzero(there.any(axis=0) & (start > 0))
    first = np.full(x.shape, -1)
    first[start[n] - 1, n] = start[n]
    return first, np.ones(x.shape, np.int64)


def _first_year(s: Setting) -> Span:
    return Span(lambda x: Spans(*_before_first(x), np.ones((1, *x.shape))))


def _declared_growth(s: Setting) -> Span:
    rates = [float(c.get("asset.initial_growth", c["capital.backcast_growth"])) for c in s.sets]
    rate = np.array(rates)[s.which]
    return Span(
        lambda x: Spans(*_before_first(x), np.broadcast_to(rate, (1, *x.shape))), inner=lambda x: x * 0 + 1
    )


DECLARED_GROWTH = Formula(
    name="declared_growth",
    equation="g = the declared growth of investment before the first year",
    citation="declared for the assembly or the asset",
    roles=(Role("investment"),),
    build=_declared_growth,
    kind="series",
    estimated=True,
    assumed=True,
)

FIRST_INVESTMENT = Formula(
    name="first_year_investment",
    equation="I_1 = investment of the first year",
    citation="Harberger 1978: the stock that investment of the first year would keep growing; from memory",
    roles=(Role("investment"),),
    build=_first_year,
    kind="series",
)

BACKCAST = Formula(
    name="investment_by_indicator",
    equation="before its first year I_t = X_t sum I / sum X, the sums over the linking window",
    citation="methods as in OECD, Measuring Capital (2009): a longer series carries a shorter one back; from memory",
    roles=(Role("investment"), Role("indicator")),
    build=lambda s: Path(backcast(int(s.single("capital.link_window"))), s.which),
    kind="series",
)


def _steady_state(measure: str) -> Callable[[Setting], Each]:
    def build(s: Setting) -> Each:
        kernels = [opening_kernel(measure, c, s.periods) for c in s.sets]

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
    return lambda s: Lag(tuple(kernel(measure, c, s.periods) for c in s.sets), s.which)


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


def _ratio_factor(s: Setting) -> Each:
    ratio = np.array([float(c.get("asset.capital_output_ratio", np.nan)) for c in s.sets])[s.which]
    return Each(lambda output, stock, ratio: ratio * output / stock, (ratio,))


RATIO_FACTOR = Formula(
    name="capital_output_factor",
    equation="lambda = ratio x value added of the first year / backcast net stock",
    citation="capital-output ratio declared for the asset; Nehru and Dhareshwar 1993, second-hand",
    roles=(Role("value_added", 1), Role("backcast_stock", counted=False)),
    build=_ratio_factor,
    estimated=True,
    assumed=True,
)

FROM_NOTHING = Formula(
    name="opening_of_zero",
    equation="K_0 = 0, in place of the stock that is left out",
    citation="declared for the assembly or the asset",
    roles=(Role("left_out", counted=False),),
    build=lambda s: Each(lambda left_out: 0 * left_out),
    estimated=True,
    assumed=True,
)


def _from_zero(measure: str) -> Callable[[Setting], WarmUp]:
    stock = LOSSES.get(measure, measure)
    return lambda s: WarmUp(lag(measure)(s), lag(stock)(s), float(s.single("capital.warm_up_limit")))


FROM_ZERO = {
    measure: Formula(
        name=f"{measure}_from_zero",
        equation="sum_v w(v) I_(t-v), from the year on in which K_ss / (K + K_ss) is under the declared limit; "
        "K_ss what would be left of the stock that is left out",
        citation="OECD, Measuring Capital (2009): stocks from investment long enough; from memory",
        roles=(Role("investment"), Role("left_out"), Role("growth", counted=False)),
        build=_from_zero(measure),
        kind="series",
    )
    for measure in (*STOCKS, *LOSSES)
}


def _kernels(s: Setting) -> list[Kernel]:
    return [kernel("net_stock", c, s.periods) for c in s.sets]


EVEN_CHANGE = Formula(
    name="benchmark_gap_spread",
    equation="x_t equal in every year between two benchmarks, with which the net stock meets the later one",
    citation="SNA 2008: what neither investment nor consumption explains is another change in volume",
    roles=(
        Role("benchmark"),
        Role("other_volume_changes"),
        Role("investment"),
        Role("opening_stock"),
        Role("growth", counted=False),
    ),
    build=lambda s: Path(even_change(_kernels(s)), s.which),
    kind="series",
    estimated=True,
)

FORMULAS = (
    TREND_GROWTH,
    TREND_INVESTMENT,
    DECLARED_GROWTH,
    FIRST_INVESTMENT,
    BACKCAST,
    *OPENING.values(),
    *FACTOR.values(),
    SCALED_OPENING,
    RATIO_FACTOR,
    FROM_NOTHING,
    *FROM_ZERO.values(),
    EVEN_CHANGE,
)


@dataclass(frozen=True)
class StartParams:
    """initial_stock: how the stock before the first year is set, unless the row of the asset says otherwise."""

    initial_stock: Choice
    trend_window: Choice
    backcast_growth: Choice
    link_window: Choice
    warm_up_limit: Choice
    negative_factor: Choice
    assumed_limit: Choice


@dataclass(frozen=True)
class StartInputs:
    """What is delivered for starting stocks beside investment; benchmarks at reference-year prices by measure."""

    benchmarks: Mapping[str, Block]
    indicator: Given | None = None
    value_added: Block | None = None


@dataclass(frozen=True)
class Start:
    """Where the investment, the growth that shapes the past, and the opening of every stock are read.

    assumed: the openings that growth alone gives; they differ from `openings` where a stock is known, or left out.
    zero: which series start from nothing. rescaled: which meet a benchmark by another change in volume, because
    investment since the first year alone exceeds it. spread: which close the gap between two benchmarks so.
    """

    flow: Given
    growth: Given
    periods: range
    openings: Mapping[str, Given]
    assumed: Mapping[str, Given]
    blocks: Sequence[Block]
    findings: Sequence[dict[str, Any]]
    zero: B1
    rescaled: B1
    spread: B1

    def opening_values(self, measure: str, series: SeriesIndex) -> F8:
        """Return the openings of some series, (T, N), NaN but for the period before the first."""
        return read_values(self.openings[measure], series, self.periods)


def read_values(source: Given, series: SeriesIndex, periods: range) -> F8:
    """Return what is read for some series, (T, N), NaN where there is nothing."""
    return line_up(Role("any"), read_for(source, series), series, periods).value


def method_of(choices: Mapping[str, Any]) -> str:
    """Return how the starting stock of one parameter set is made."""
    return str(choices.get("asset.initial_stock", choices.get("capital.initial_stock")))


WITH_BENCHMARK = ("benchmark", "two_benchmarks", "benchmarks_spread")


def start(
    investment: Block,
    sets: tuple[MethodSet, ...],
    which: I4,
    inputs: StartInputs,
    params: StartParams,
) -> Start:
    """Return the starting stocks of every investment series.

    Args:
        investment: volumes, all with an asset rule.
        sets, which: the asset parameters, the method of the starting stock among them, and which each series uses.
    """
    periods, series = investment.periods, investment.series
    method = np.array([method_of({c.name: c.value for c in s}) for s in sets])[which]
    blocks: list[Block] = []
    flow, extended, findings = _flow(investment, method, inputs.indicator, params)
    blocks.extend(extended)
    declared = method == "backcast_growth"
    with_growth = tuple((*s, params.backcast_growth) for s in sets)
    growths, parts = [], {measure: list[Block]() for measure in STOCKS}
    for mine, name, of_growth, of_first, made_by, of in (
        (
            ~declared,
            "log_linear_trend",
            TREND_GROWTH,
            TREND_INVESTMENT,
            ((params.initial_stock, params.trend_window),),
            np.zeros(len(series), np.int32),
        ),
        (declared, "declared_growth", DECLARED_GROWTH, FIRST_INVESTMENT, with_growth, which),
    ):
        if not mine.any():
            continue
        taken = series.take(mine)
        growth, first = (
            derive(
                formula,
                BlockKey(measure, name, basis),
                taken,
                periods,
                {"investment": read_for(flow, taken)},
                sets=made_by,
                which=of[mine],
                part=False,
            )
            for measure, formula, basis in (
                ("trend_growth", of_growth, "_Z"),
                ("trend_investment", of_first, "constant"),
            )
        )
        growths.append(growth)
        blocks.extend((growth, first))
        for measure in STOCKS:
            here = mine & defined(measure, sets)[which]
            if here.any():
                opening = derive(
                    OPENING[measure],
                    BlockKey(measure, "declared_growth" if mine is declared else "steady_state", "constant"),
                    series.take(here),
                    periods,
                    {"investment": given(first), "growth": given(growth)},
                    sets=sets,
                    which=which[here],
                    chosen=False,
                    part=False,
                )
                parts[measure].append(opening)
                blocks.append(opening)
    growth_read = _read(*growths)
    findings += _no_start(investment, read_values(growth_read, series, periods), sets, which)
    findings += _prices_against_rate(investment, sets, which)
    assumed = {measure: _read(*made) for measure, made in parts.items() if made}
    begin = Start(
        flow, growth_read, periods, assumed, assumed, (), (),
        method == "zero", np.zeros(len(series), bool), method == "benchmarks_spread",
    )  # fmt: skip
    factors, rescaled, problems = _factors(investment, sets, which, method, inputs, begin, params)
    findings += problems
    blocks.extend(factors)
    openings = {}
    for measure, source in assumed.items():
        mine = defined(measure, sets)[which]
        over = []
        for factor in factors:
            kept = factor.series.locate(series.key)
            scaled = mine & ~rescaled & (kept >= 0)
            if scaled.any():
                over.append(
                    derive(
                        SCALED_OPENING,
                        BlockKey(measure, factor.key.method, "constant"),
                        series.take(scaled),
                        periods,
                        {"factor": given(factor), "backcast_stock": read_for(source, series.take(scaled))},
                        sets=((params.initial_stock,),),
                        chosen=False,
                        part=False,
                    )
                )
        if (mine & begin.zero).any():
            taken = series.take(mine & begin.zero)
            over.append(
                derive(
                    FROM_NOTHING,
                    BlockKey(measure, "zero", "constant"),
                    taken,
                    periods,
                    {"left_out": read_for(source, taken)},
                    sets=((params.initial_stock,),),
                    chosen=False,
                    part=False,
                )
            )
        over = [block.take(block.held) for block in over]
        blocks.extend(over)
        openings[measure] = _read(*source.blocks, *over)
    return replace(begin, openings=openings, blocks=blocks, findings=findings, rescaled=rescaled)


def _flow(
    investment: Block, method: Any, indicator: Given | None, params: StartParams
) -> tuple[Given, list[Block], list[dict[str, Any]]]:
    """Return where investment is read, with what an indicator adds before its first year."""
    series = investment.series
    wanted = method == "backcast_indicator"
    if not wanted.any():
        return given(investment), [], []
    taken = series.take(wanted)
    made = None
    if indicator is not None:
        made = derive(
            BACKCAST,
            BlockKey("investment", "backcast", "constant"),
            taken,
            investment.periods,
            {"investment": given(investment), "indicator": read_for(indicator, taken)},
            sets=((params.initial_stock, params.link_window),),
            chosen=False,
            part=False,
        )
        own = investment.value[:, wanted]
        added = np.isfinite(made.value) & (np.arange(len(own))[:, None] < _first_row(own))
        assumed = np.zeros(made.value.shape, np.float32) if made.assumed is None else made.assumed.copy()
        assumed[added] = 1
        status = status_of(made).copy()
        status[added] = ESTIMATED
        imputed = None if made.imputed is None else np.where(added, np.float32(0), made.imputed)
        made = replace(made, assumed=assumed, status=status, imputed=imputed)
        made = made.take(added.any(axis=0))
    lost = [key for key in taken.key if made is None or made.series.locate(np.array([key]))[0] < 0]
    findings = [
        note(
            "no_indicator",
            "warn",
            "no indicator carries investment back: the starting stock is a steady state of its own first years",
            series.table,
            int(key),
            measure="investment",
            expected="an indicator above zero before the first year of investment and in the "
            f"{params.link_window.value} years in which the two are linked",
            remedy="deliver investment_indicator, or choose another initial_stock for this asset",
        )
        for key in lost
    ]
    if made is None or not len(made.series):
        return given(investment), [], findings
    return _read(investment, made), [made], findings


def _first_row(x: F8) -> Any:
    return np.argmax(np.isfinite(x), axis=0)


def _read(*blocks: Block) -> Given:
    """Return where a figure of every series is read: in the last of the blocks that holds the series."""
    blocks = tuple(block for block in blocks if len(block.series))
    if len(blocks) == 1:
        return given(blocks[0])
    key = np.unique(np.concatenate([block.series.key for block in blocks]))
    which = np.zeros(len(key), np.int32)
    for i, block in enumerate(blocks):
        which[block.series.locate(key) >= 0] = i
    return Given(blocks, edges=Edges(tuple(block.key for block in blocks), which, key))


def read_for(source: Given, series: SeriesIndex) -> Given:
    """Return the same reading for some of the series."""
    if source.edges is None:
        return source
    edges = source.edges
    at = SeriesIndex(series.table, source.own if source.own is not None else edges.key).locate(series.key)
    key = np.where(at < 0, -1, edges.key[at])
    return Given(source.blocks, edges=Edges(edges.blocks, edges.which[at], key), own=series.key)


def nothing(block: Block, series: SeriesIndex) -> Given:
    """Return an input that holds no figure for any series."""
    n = len(series)
    return Given((block,), edges=Edges((block.key,), np.zeros(n, np.int32), np.full(n, -1, np.int64)))


def _factors(
    investment: Block,
    sets: tuple[MethodSet, ...],
    which: I4,
    method: Any,
    inputs: StartInputs,
    begin: Start,
    params: StartParams,
) -> tuple[list[Block], B1, list[dict[str, Any]]]:
    """Return the factors on assumed openings, the series that no factor of 0 or more can serve, and what is wrong.

    A benchmark of the net stock goes before one of the gross, and that before one of the productive stock.
    """
    series, periods = investment.series, investment.periods
    left = np.isin(method, WITH_BENCHMARK)
    rescaled = np.zeros(len(series), bool)
    out: list[Block] = []
    for measure in ("net_stock", "gross_stock", "productive_stock"):
        if measure not in inputs.benchmarks or measure not in begin.assumed:
            continue
        mine = left & (inputs.benchmarks[measure].series.locate(series.key) >= 0)
        mine &= defined(measure, sets)[which]
        if not mine.any():
            continue
        taken = series.take(mine)
        block = derive(
            FACTOR[measure],
            BlockKey("benchmark_factor", "benchmark", "_Z"),
            taken,
            periods,
            {
                "benchmark": given(inputs.benchmarks[measure]),
                "investment": read_for(begin.flow, taken),
                "backcast_stock": read_for(begin.assumed[measure], taken),
                "growth": read_for(begin.growth, taken),
            },
            sets=sets,
            which=which[mine],
            part=False,
        )
        block = block.take(block.held)
        left &= block.series.locate(series.key) < 0
        if measure == "net_stock" and params.negative_factor.value == "rescale":
            with np.errstate(invalid="ignore"):
                bad = np.asarray((block.value < 0).any(axis=0))
            rescaled |= np.isin(series.key, block.series.key[bad])
        out.append(block)
    factors = [merge(out)] if out else []
    findings = [f for block in factors for f in _negative_factor(block, series.take(rescaled))]
    by_ratio = method == "capital_output_ratio"
    declares = np.array(["asset.capital_output_ratio" in {c.name for c in s} for s in sets])[which]
    served = np.zeros(len(series), bool)
    if (by_ratio & declares).any() and inputs.value_added is not None:
        taken = series.take(by_ratio & declares)
        block = derive(
            RATIO_FACTOR,
            BlockKey("benchmark_factor", "capital_output_ratio", "_Z"),
            taken,
            periods,
            {
                "value_added": given(inputs.value_added, asset="_Z"),
                "backcast_stock": read_for(begin.assumed["net_stock"], taken),
            },
            sets=sets,
            which=which[by_ratio & declares],
            part=False,
        )
        with np.errstate(invalid="ignore"):
            block = block.take(np.asarray((block.value > 0).any(axis=0)))
        served = block.series.locate(series.key) >= 0
        if served.any():
            factors.append(block)
    findings += [_no_ratio(investment, int(n), bool(declares[n])) for n in np.flatnonzero(by_ratio & ~served)]
    return factors, rescaled, findings


def _no_ratio(investment: Block, n: int, declared: bool) -> dict[str, Any]:
    return note(
        "no_capital_output_ratio",
        "warn",
        "no capital-output ratio can be used: the starting stock is a steady state",
        investment.series.table,
        int(investment.series.key[n]),
        measure="net_stock",
        found="no volume of value added above zero in the first year" if declared else "no ratio",
        expected="capital_output_ratio in rules/assets.csv, and value added (constant) of the industry and year",
        remedy="give the ratio of the asset, deliver the value added, or choose another initial_stock",
    )


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
        if which[n] < 0:
            continue
        choices = {c.name: c.value for c in sets[which[n]]}
        if method_of(choices) != "two_benchmarks" or len(vintages_of(choices)) > 1:
            continue
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


def _negative_factor(factor: Block, rescaled: SeriesIndex) -> list[dict[str, Any]]:
    """Return a finding per series whose factor is below zero: a stop, or a note where it is booked as declared."""
    out = []
    with np.errstate(invalid="ignore"):
        bad = factor.value < 0
    for n in np.flatnonzero(bad.any(axis=0)):
        t = int(np.argmax(bad[:, n]))
        booked = int(factor.series.key[n]) in set(rescaled.key.tolist())
        out.append(
            note(
                "benchmark_too_small",
                "warn" if booked else "stop",
                "the investment since the first year alone gives more than the benchmark stock"
                + ("; all vintages are rescaled and the jump is another change in volume" if booked else ""),
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
    every = vintages_of(choices).values()
    return all(getattr(weights_of(c, 3), _WEIGHTS_OF[measure]) is not None for c in every)


ROUNDING = 1e-12
"""Rise of an efficiency that is rounding alone."""


def _prices_against_rate(investment: Block, sets: tuple[MethodSet, ...], which: I4) -> list[dict[str, Any]]:
    """Return a finding for each set whose declared prices by age imply an efficiency below zero or rising with age."""
    out = []
    for i, choices in enumerate({c.name: c.value for c in s} for s in sets):
        if not (which == i).any():
            continue
        bad, efficiency, before = np.zeros(0, np.int64), np.zeros(0), np.zeros(0)
        for own in vintages_of(choices).values():
            if "asset.age_price" in own and not len(bad):
                efficiency = weights_of(own, 1).productive
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


def _no_start(investment: Block, growth: F8, sets: tuple[MethodSet, ...], which: Any) -> list[dict[str, Any]]:
    """Return findings for series whose steady-state start cannot be made; growth (T, N)."""
    out = []
    rate = np.array([_geometric_rate({c.name: c.value for c in s}) for s in sets])
    g = np.where(np.isfinite(growth), growth, 0).sum(axis=0)
    lost = np.asarray(~np.isfinite(growth).any(axis=0))
    never = np.asarray(~lost & (g + rate[which] <= 0))
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
