"""Stocks: gross, productive and net capital stocks by the perpetual inventory, and what leaves them."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from keelbook.blocks import B1, F8, I4, Block, BlockKey, Choice, Edges, MethodSet, SeriesIndex, merge
from keelbook.lineage.derive import Given, derive, given
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.lag import Lag
from keelbook.lineage.path import Path
from keelbook.lineage.primitives import Each
from keelbook.lineage.volume_changes import surviving
from keelbook.methods.initial_stock import half_life, half_life_of_part
from keelbook.methods.valuation import holding_gains
from keelbook.stages.base import CHOSEN, Book, Inputs, Result, Stage, keys, missing_input, note
from keelbook.stages.deflation import DEFLATED, by_edges, price_edges
from keelbook.stages.starting_stock import (
    EVEN_CHANGE,
    FROM_ZERO,
    LOSSES,
    STOCKS,
    Start,
    StartInputs,
    StartParams,
    aged_kernel,
    defined,
    even_kernel,
    kernel,
    lag,
    nothing,
    read_for,
    read_values,
    solved_rates,
    start,
)
from keelbook.stages.starting_stock import FORMULAS as STARTING
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

SURVIVING = Formula(
    name="surviving_part",
    equation="C_t = C_(t-1) + change_t / U_t, U_t = sum_v w(v) I_(t-v) / C_(t-v-1) + what is left of the opening; "
    "or benchmark_t / U_t where all vintages are rescaled to a benchmark",
    citation="SNA 2008, chapter 12: other changes in the volume of assets; equation of this program",
    roles=(
        Role("other_volume_changes"),
        Role("even_change"),
        Role("benchmark"),
        Role("investment"),
        Role("opening_stock"),
        Role("growth", counted=False),
    ),
    build=lambda s: Path(surviving([kernel("net_stock", c, s.periods) for c in s.sets]), s.which),
    kind="series",
)

BEFORE_CHANGES = Formula(
    name="investment_before_changes",
    equation="investment at the scale of vintages before any other change: I_t / C_(t-1)",
    citation="equation of this program: changes that hit all vintages alike leave the sum over vintages a convolution",
    roles=(Role("investment"), Role("surviving_part", -1)),
    build=lambda s: Each(lambda flow, part: flow / part),
)

AFTER_CHANGES = Formula(
    name="stock_after_changes",
    equation="stock_t = C_t U_t",
    citation="SNA 2008, chapter 12: other changes in the volume of assets; equation of this program",
    roles=(Role("before_changes"), Role("surviving_part")),
    build=lambda s: Each(lambda stock, part: stock * part),
)

LOSS_BEFORE_CHANGES = Formula(
    name="loss_after_changes",
    equation="loss_t = C_(t-1) x loss of vintages at the scale before any other change, which comes at the year's end",
    citation="SNA 2008, chapter 12: other changes in the volume of assets; equation of this program",
    roles=(Role("before_changes"), Role("surviving_part", -1)),
    build=lambda s: Each(lambda loss, part: loss * part),
)

CHANGES_OF_STOCK = Formula(
    name="changes_of_stock",
    equation="other volume changes_t = (C_t - C_(t-1)) U_t",
    citation="SNA 2008, chapter 12: other changes in the volume of assets; equation of this program",
    roles=(Role("before_changes"), Role("surviving_part"), Role("surviving_part_previous", -1)),
    build=lambda s: Each(lambda stock, part, previous: (part - previous) * stock),
)

HOLDING_GAINS = Formula(
    name="holding_gains",
    equation="HG_t = W_(t-1) (P_t - Pe_(t-1)) + W_t (Pe_t - P_t)",
    citation="SNA 2008, chapter 12: the change in value from prices alone; flows are valued at average prices",
    roles=(
        Role("net_stock_previous", -1),
        Role("net_stock"),
        Role("price"),
        Role("year_end_price"),
        Role("year_end_price_previous", -1),
    ),
    build=lambda s: Each(holding_gains),
)

VINTAGE_AGES = Formula(
    name="net_stock_times_age",
    equation="sum_v (v + a) w(v) I_(t-v) + the same of the opening stock, a the age of new investment",
    citation="OECD, Measuring Capital (2009): the age of a stock is that of its vintages",
    roles=(Role("investment"), Role("opening_stock"), Role("growth", counted=False)),
    build=lambda s: Lag(tuple(aged_kernel(c, s.periods) for c in s.sets), s.which),
    kind="series",
)

AVERAGE_AGE = Formula(
    name="average_age",
    equation="average age_t = net stock times age / net stock",
    citation="OECD, Measuring Capital (2009): the age of a stock is that of its vintages, weighted by what is left",
    roles=(Role("vintage_ages"), Role("net_stock")),
    build=lambda s: Each(lambda aged, stock: aged / np.where(stock == 0, np.nan, stock)),
)

FORMULAS = (
    *STARTING,
    *VINTAGES.values(),
    HOLDING_GAINS,
    VINTAGE_AGES,
    AVERAGE_AGE,
    SURVIVING,
    BEFORE_CHANGES,
    AFTER_CHANGES,
    LOSS_BEFORE_CHANGES,
    CHANGES_OF_STOCK,
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
    sets, which, problems = solved_rates(
        investment, sets, which, benchmarks.get("net_stock"), params.timing, params.start.initial_stock
    )
    findings.extend(problems)
    covered = which >= 0
    if not covered.any():
        return Result([*blocks, *_totals(inputs, blocks)], findings)
    investment, which = investment.take(covered), which[covered]
    begin = start(
        investment, sets, which, _for_start(inputs, investment.series, benchmarks, params), params.start
    )
    findings.extend(begin.findings)
    blocks.extend(begin.blocks)
    changes, problems = _changes(inputs, investment, params)
    findings.extend(problems)
    if changes is not None and changes.key.method == "deflated":
        blocks.append(changes)
    work = _Work(investment, sets, which, begin, params)
    changed, extra, problems = _changed(work, changes, benchmarks)
    findings.extend(problems)
    blocks.extend(extra)
    made: dict[str, Block] = {}
    for measure in (*STOCKS, *LOSSES):
        there = defined(measure, sets)[which]
        parts = list(changed.get(measure, ()))
        plain = there & ~np.isin(investment.series.key, [k for b in parts for k in b.series.key])
        if plain.any():
            key = BlockKey(measure, "perpetual_inventory", "constant")
            parts.extend(work.of_vintages(measure, plain, begin.flow, key))
        if parts:
            made[measure] = merge(parts)
    findings.extend(_unbalanced(work, made, changes, extra))
    findings.extend(_broken_off(work, made["net_stock"]))
    findings.extend(_rests_on_start(work, made["net_stock"]))
    findings.extend(_never_warm(work, made["net_stock"]))
    blocks.extend(_ages(work, made["net_stock"], extra))
    valued, problems = _valued(inputs, made, extra, params)
    findings.extend(problems)
    findings.extend(_unbalanced_at_prices(inputs, work, valued))
    blocks.extend((*made.values(), *valued))
    return Result([*blocks, *_totals(inputs, blocks)], findings)


@dataclass(frozen=True)
class _Work:
    """What every stock of an area is made from."""

    investment: Block
    sets: tuple[MethodSet, ...]
    which: I4
    begin: Start
    params: StocksParams

    @property
    def series(self) -> SeriesIndex:
        return self.investment.series

    @property
    def flow(self) -> F8:
        """Return investment as the stocks read it, (T, N)."""
        return read_values(self.begin.flow, self.series, self.investment.periods)

    def of_vintages(
        self, measure: str, mine: B1, flow: Given, key: BlockKey, *, shown: bool = True
    ) -> list[Block]:
        """Return the sums over vintages of some series; those that start from zero in a block of their own."""
        begin, out = self.begin, []
        stock = LOSSES.get(measure, measure)
        limit = self.params.start.warm_up_limit
        for of, from_zero in ((mine & ~begin.zero, False), (mine & begin.zero, True)):
            if not of.any():
                continue
            taken = self.series.take(of)
            opening = read_for((begin.assumed if from_zero else begin.openings)[stock], taken)
            made = derive(
                (FROM_ZERO if from_zero else VINTAGES)[measure],
                key,
                taken,
                self.investment.periods,
                {
                    "investment": read_for(flow, taken),
                    ("left_out" if from_zero else "opening_stock"): opening,
                    "growth": read_for(begin.growth, taken),
                },
                sets=tuple((*s, limit) for s in self.sets) if from_zero else self.sets,
                which=self.which[of],
                chosen=shown,
                part=self.investment.part[of] if shown else False,
            )
            out.append(made)
        return out


def _for_start(
    inputs: Inputs, series: SeriesIndex, benchmarks: Mapping[str, Block], params: StocksParams
) -> StartInputs:
    """Return what is delivered for starting stocks; an indicator is found as a price is, most specific first."""
    indicator = inputs.get(BlockKey("investment_indicator", CHOSEN, "_Z"))
    read = None
    if indicator is not None:
        edges = price_edges(series, indicator, params.deflation_order.value)
        read = Given((indicator,), edges=edges, own=series.key)
    return StartInputs(benchmarks, read, inputs.get(BlockKey("value_added", CHOSEN, "constant")))


CURRENT_CHANGES = BlockKey("other_volume_changes", "delivered", "current")


def _changes(
    inputs: Inputs, investment: Block, params: StocksParams
) -> tuple[Block | None, list[dict[str, Any]]]:
    """Return the delivered other volume changes at reference-year prices, and a finding for each without a stock.

    Those delivered at current prices are deflated as investment is, where none are delivered at constant prices.
    """
    block = inputs.get(BlockKey("other_volume_changes", "delivered", "constant"))
    current, price = inputs.get(CURRENT_CHANGES), inputs.get(BlockKey("investment_price", CHOSEN, "index"))
    if block is None and current is not None and price is not None:
        block = derive(
            DEFLATED,
            BlockKey("other_volume_changes", "deflated", "constant"),
            current.series,
            current.periods,
            {
                "current": given(current),
                "price": by_edges(price, price_edges(current.series, price, params.deflation_order.value)),
            },
            sets=((params.deflation_order,),),
            part=current.part,
        )
    if block is None:
        return None, []
    stray = (investment.series.locate(block.series.key) < 0) & block.part & block.held
    findings = [
        note(
            "change_without_stock",
            "warn",
            "an other change in volume is delivered for a stock that is not built from investment; it is left out",
            block.series.table,
            int(block.series.key[n]),
            measure="other_volume_changes",
            time_period=str(block.periods[int(np.argmax(np.isfinite(block.value[:, n])))]),
            expected="investment of the same sector, industry and asset",
            remedy="deliver the change by industry and asset, as investment is",
        )
        for n in np.flatnonzero(stray)
    ]
    return block, findings


def _changed(
    work: _Work, changes: Block | None, benchmarks: Mapping[str, Block]
) -> tuple[dict[str, list[Block]], list[Block], list[dict[str, Any]]]:
    """Return stocks and losses of the series with other changes in volume, what they are made from, and findings."""
    begin, series, periods = work.begin, work.series, work.investment.periods
    hit = begin.rescaled.copy()
    blocks: list[Block] = []
    findings: list[dict[str, Any]] = []
    benchmark = benchmarks.get("net_stock")
    even = None
    if begin.spread.any() and benchmark is not None:
        known = benchmark.series.locate(series.key)
        two = begin.spread & ~begin.rescaled & (known >= 0)
        two &= np.isfinite(benchmark.value[:, np.maximum(known, 0)]).sum(axis=0) > 1
        if two.any():
            taken = series.take(two)
            even = derive(
                EVEN_CHANGE,
                BlockKey("other_volume_changes", "benchmark_gap", "constant"),
                taken,
                periods,
                {
                    "benchmark": given(benchmark),
                    "other_volume_changes": nothing(work.investment, taken)
                    if changes is None
                    else given(changes),
                    "investment": read_for(begin.flow, taken),
                    "opening_stock": read_for(begin.openings["net_stock"], taken),
                    "growth": read_for(begin.growth, taken),
                },
                sets=work.sets,
                which=work.which[two],
                chosen=False,
                part=False,
            )
            findings = [_no_even_change(even, int(n)) for n in np.flatnonzero(~even.held)]
            even = even.take(even.held)
            blocks.append(even)
            hit |= even.series.locate(series.key) >= 0
    if changes is not None:
        at = changes.series.locate(series.key)
        hit |= (at >= 0) & np.nan_to_num(changes.value[:, np.maximum(at, 0)]).any(axis=0)
    if not hit.any():
        return {}, blocks, findings
    taken = series.take(hit)
    none = nothing(work.investment, taken)
    target = none
    if benchmark is not None and begin.rescaled.any():
        key = np.where(begin.rescaled[hit], taken.key, -1)
        target = Given((benchmark,), edges=replace(_edges(none), blocks=(benchmark.key,), key=key))
    part = derive(
        SURVIVING,
        BlockKey("surviving_part", "perpetual_inventory", "_Z"),
        taken,
        periods,
        {
            "other_volume_changes": none if changes is None else given(changes),
            "even_change": none if even is None else given(even),
            "benchmark": target,
            "investment": read_for(begin.flow, taken),
            "opening_stock": read_for(begin.openings["net_stock"], taken),
            "growth": read_for(begin.growth, taken),
        },
        sets=work.sets,
        which=work.which[hit],
        part=False,
    )
    flow = derive(
        BEFORE_CHANGES,
        BlockKey("investment", "before_changes", "constant"),
        taken,
        periods,
        {"investment": read_for(begin.flow, taken), "surviving_part": given(part)},
        chosen=False,
        part=False,
    )
    blocks.extend((part, flow))
    out: dict[str, list[Block]] = {}
    for measure in (*STOCKS, *LOSSES):
        there = hit & defined(measure, work.sets)[work.which]
        if not there.any():
            continue
        before = merge(
            work.of_vintages(
                measure, there, given(flow), BlockKey(measure, "before_changes", "constant"), shown=False
            )
        )
        blocks.append(before)
        out[measure] = [
            derive(
                LOSS_BEFORE_CHANGES if measure in LOSSES else AFTER_CHANGES,
                BlockKey(measure, "perpetual_inventory", "constant"),
                before.series,
                periods,
                {"before_changes": given(before), "surviving_part": given(part)},
                sets=work.sets,
                which=work.which[there],
                part=work.investment.part[there],
            )
        ]
        if measure in CHANGE_OF:
            chosen = np.ones(len(before.series), bool)
            if measure == "net_stock":
                chosen = _missing_in(changes, before.series)
            blocks.append(
                derive(
                    CHANGES_OF_STOCK,
                    BlockKey(CHANGE_OF[measure], "of_vintages", "constant"),
                    before.series,
                    periods,
                    {
                        "before_changes": given(before),
                        "surviving_part": given(part),
                        "surviving_part_previous": given(part),
                    },
                    chosen=chosen,
                    part=work.investment.part[there],
                )
            )
    findings += _too_large(work, part, changes) + _before_benchmark(work, changes, benchmark)
    return out, blocks, findings


CHANGE_OF = {"net_stock": "other_volume_changes", "gross_stock": "gross_volume_changes"}
"""Stock -> the measure of its other changes in volume."""


def _no_even_change(even: Block, n: int) -> dict[str, Any]:
    return note(
        "no_even_change",
        "warn",
        "the gap between two benchmarks cannot be spread: in some year an even change takes more than there is, or a "
        "figure of investment is missing; the later benchmark is not met",
        even.series.table,
        int(even.series.key[n]),
        measure="net_stock",
        expected="two benchmarks from the start of the stock on, and a gap smaller than the stock between them",
        remedy="check both benchmarks, or choose another initial_stock",
    )


def _before_benchmark(work: _Work, changes: Block | None, benchmark: Block | None) -> list[dict[str, Any]]:
    """Return a finding per series whose first benchmark of the net stock comes after a change: it is missed by that."""
    if changes is None or benchmark is None:
        return []
    series = work.series
    known = read_values(given(benchmark), series, work.investment.periods)
    change = np.nan_to_num(read_values(given(changes), series, work.investment.periods))
    opening = np.isfinite(work.begin.opening_values("net_stock", series))
    rows = np.arange(len(change))[:, None]
    first, opens = np.argmax(np.isfinite(known), axis=0), np.argmax(opening, axis=0)
    early = (change != 0) & (rows > opens) & (rows <= first)
    scaled = {b.key.method: b.series for b in work.begin.blocks if b.key.measure == "benchmark_factor"}
    by_benchmark = scaled.get("benchmark")
    out = []
    for n in np.flatnonzero(early.any(axis=0) & ~work.begin.rescaled):
        if by_benchmark is None or by_benchmark.locate(series.key[[n]])[0] < 0:
            continue
        t = int(np.argmax(early[:, n]))
        out.append(
            note(
                "change_before_benchmark",
                "warn",
                "an other change in volume comes before the benchmark that sets the starting stock; what is left of "
                "the change is then missing at the benchmark",
                series.table,
                int(series.key[n]),
                measure="other_volume_changes",
                time_period=str(work.investment.periods[t]),
                found=f"{change[t, n]:.6g}",
                expected=f"no change up to the benchmark of {work.investment.periods[int(first[n])]}",
                remedy="leave the change out (the benchmark already shows it), or choose another initial_stock",
            )
        )
    return out


def _edges(source: Given) -> Edges:
    assert source.edges is not None
    return source.edges


def _too_large(work: _Work, part: Block, changes: Block | None) -> list[dict[str, Any]]:
    """Return a finding per series in which a change takes all there is, or more."""
    if changes is None:
        return []
    flow = work.flow[:, work.series.locate(part.series.key)]
    at = changes.series.locate(part.series.key)
    change = np.where(at >= 0, changes.value[:, np.maximum(at, 0)], np.nan)
    started = np.logical_or.accumulate(np.isfinite(part.value), axis=0)
    with np.errstate(invalid="ignore"):
        bad = started & np.isnan(part.value) & np.isfinite(flow) & (change < 0)
    out = []
    for n in np.flatnonzero(bad.any(axis=0)):
        t = int(np.argmax(bad[:, n]))
        out.append(
            note(
                "change_exceeds_stock",
                "stop",
                "an other change in volume takes the whole stock, or more than there is",
                part.series.table,
                int(part.series.key[n]),
                measure="other_volume_changes",
                time_period=str(part.periods[t]),
                found=f"{change[t, n]:.6g}",
                expected="a loss below the stock of the year, new investment included",
                remedy="check sign, unit and price basis of the change, and the starting stock",
            )
        )
    return out


def _rests_on_start(work: _Work, net: Block) -> list[dict[str, Any]]:
    """Return a finding per series whose last net stock is assumed by more than the declared limit."""
    if net.assumed is None:
        return []
    limit = float(work.params.start.assumed_limit.value)
    growth = read_values(work.begin.growth, net.series, net.periods)
    at = work.series.locate(net.series.key)
    out = []
    for n in np.flatnonzero(net.held):
        t = int(np.flatnonzero(np.isfinite(net.value[:, n]))[-1])
        part = float(net.assumed[t, n])
        if not part > limit:
            continue
        choices = {c.name: c.value for c in work.sets[work.which[at[n]]]}
        g = growth[np.isfinite(growth[:, n]), n]
        out.append(
            note(
                "rests_on_start",
                "note",
                f"the last net stock rests on the assumed start by {part:.0%}; {_half_lives(choices, g)}",
                net.series.table,
                int(net.series.key[n]),
                measure="net_stock",
                time_period=str(net.periods[t]),
                found=f"{part:.4f}",
                expected=f"at most {limit:g} (capital.assumed_limit)",
                remedy="deliver earlier investment or a benchmark stock, or accept the assumption",
            )
        )
    return out


def _half_lives(choices: Mapping[str, Any], growth: F8) -> str:
    """Return in how many years half of an opening stock is gone, and its part in the total has halved."""
    if choices.get("asset.efficiency") == "cohort_geometric":
        rate = float(choices["asset.rate"])
        whole = half_life(rate) if rate < 1 else 0.0
        text = f"half of a starting stock is left after {whole:.1f} years"
        if len(growth) and rate < 1 and rate + growth[0] > 0:
            text += f", its part halves every {half_life_of_part(rate, float(growth[0])):.1f} years"
        return text
    g = growth[:1] if len(growth) else np.zeros(1)
    left = even_kernel("net_stock", choices, 3).remainder(g, HORIZON)[:, 0]
    return f"less than half of a starting stock is left after {int(np.argmax(left < 0.5)) + 1} years"


HORIZON = 500
"""Years looked ahead for the half of a stock of assets with a last age."""


def _never_warm(work: _Work, net: Block) -> list[dict[str, Any]]:
    """Return a finding per series that starts from zero: which years are masked."""
    out = []
    limit = float(work.params.start.warm_up_limit.value)
    for n in np.flatnonzero(work.begin.zero):
        at = int(net.series.locate(work.series.key[[n]])[0])
        there = np.isfinite(net.value[:, at])
        first = int(np.argmax(np.isfinite(work.flow[:, n])))
        kept = int(np.argmax(there))
        if there.any() and kept <= first:
            continue
        until = f"the years before {net.periods[kept]} are masked" if there.any() else "no year is kept"
        out.append(
            note(
                "warm_up",
                "note" if there.any() else "warn",
                f"the stock starts from zero; {until}: what is left out is above the declared limit",
                work.series.table,
                int(work.series.key[n]),
                measure="net_stock",
                time_period=str(net.periods[kept if there.any() else first]),
                expected=f"at most {limit:g} of the whole is missing (capital.warm_up_limit)",
                remedy="deliver earlier investment, choose another initial_stock, or declare another limit",
            )
        )
    return out


def _totals(inputs: Inputs, blocks: Sequence[Block]) -> list[Block]:
    """Return the totals of stocks and losses, over computed and delivered series together."""
    out = []
    for measure in (*STOCKS, *LOSSES, "holding_gains"):
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
        if not any(c.name == "asset.initial_stock" for c in found):
            chosen = (*chosen, params.start.initial_stock)
        of_pair[i] = sets.setdefault(chosen, len(sets))
    return tuple(sets), of_pair[pair.ravel()], findings


def _broken_off(work: _Work, net: Block) -> list[dict[str, Any]]:
    """Return a finding per series that has investment after a year without: its stocks end at the gap."""
    flow = work.flow
    out = []
    for n in np.flatnonzero(net.held):
        last = int(np.flatnonzero(np.isfinite(net.value[:, n]))[-1])
        if not np.isfinite(flow[last + 1 :, n]).any() or np.isfinite(flow[last + 1, n]):
            continue
        out.append(
            note(
                "stock_ends",
                "warn",
                "investment has a gap; the stocks end before it",
                net.series.table,
                int(net.series.key[n]),
                measure="net_stock",
                time_period=str(net.periods[last + 1]),
                found="no investment figure",
                expected="a figure for every year",
                remedy="deliver the year, or declare how it is to be filled",
            )
        )
    return out


def _booked(
    work: _Work, stock: str, series: SeriesIndex, changes: Block | None, extra: Sequence[Block]
) -> F8:
    """Return the other changes of a stock for its balance: of the net stock as delivered, where they are."""
    periods = work.investment.periods
    total = np.zeros((len(periods), len(series)))
    for block in extra:
        if block.key.measure == CHANGE_OF[stock] and block.key.method == "of_vintages":
            total += np.nan_to_num(read_values(given(block), series, periods))
    if stock == "net_stock":
        others = [b for b in (changes, *extra) if b is not None and b.key.measure == CHANGE_OF[stock]]
        said = np.zeros_like(total)
        for block in others:
            if block.key.method != "of_vintages":
                said += np.nan_to_num(read_values(given(block), series, periods))
        rescaled = np.isin(series.key, work.series.key[work.begin.rescaled])
        total = np.where(rescaled, total, said)
    return total


def _unbalanced(
    work: _Work, made: Mapping[str, Block], changes: Block | None, extra: Sequence[Block]
) -> list[dict[str, Any]]:
    """Test W_t = W_(t-1) + I_t - CFC_t + OVC_t, and the gross stock likewise; stocks and losses come from vintages."""
    out = []
    flows = work.flow
    for loss, stock in LOSSES.items():
        if loss not in made:
            continue
        closing, lost = made[stock], made[loss]
        opening = work.begin.opening_values(stock, closing.series)
        flow = flows[:, work.series.locate(closing.series.key)]
        other = _booked(work, stock, closing.series, changes, extra)
        before = np.where(np.isfinite(opening), opening, closing.value)[:-1]
        gap = closing.value[1:] - (before + flow[1:] - lost.value[1:] + other[1:])
        size = np.abs(closing.value[1:]) + np.abs(before) + np.abs(flow[1:]) + np.abs(lost.value[1:])
        size += np.abs(other[1:])
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


def _ages(work: _Work, net: Block, extra: Sequence[Block]) -> list[Block]:
    """Return the average age of every net stock; other changes, which hit all vintages alike, leave it as it is."""
    before = {b.key: b for b in extra}
    flow = before.get(BlockKey("investment", "before_changes", "constant"))
    stock = before.get(BlockKey("net_stock", "before_changes", "constant"))
    begin, out = work.begin, list[Block]()
    changed = np.zeros(len(net.series), bool) if flow is None else flow.series.locate(net.series.key) >= 0
    for mine, invested, of in ((~changed, begin.flow, net), (changed, flow, stock)):
        if not mine.any() or invested is None or of is None:
            continue
        taken = net.series.take(mine)
        aged = derive(
            VINTAGE_AGES,
            BlockKey("vintage_ages", "perpetual_inventory", "constant"),
            taken,
            net.periods,
            {
                "investment": given(invested) if isinstance(invested, Block) else read_for(invested, taken),
                "opening_stock": read_for(begin.openings["net_stock"], taken),
                "growth": read_for(begin.growth, taken),
            },
            sets=work.sets,
            which=work.which[work.series.locate(taken.key)],
            part=False,
        )
        age = derive(
            AVERAGE_AGE,
            BlockKey("average_age", "perpetual_inventory", "constant"),
            taken,
            net.periods,
            {"vintage_ages": given(aged), "net_stock": given(of)},
            part=False,
        )
        out.extend((aged, age))
    return out


def _valued(
    inputs: Inputs, made: Mapping[str, Block], extra: Sequence[Block], params: StocksParams
) -> tuple[list[Block], list[dict[str, Any]]]:
    """Return flows at current prices, the stocks at year-end replacement cost, and what prices alone add to them."""
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
    changes = BlockKey("other_volume_changes", "of_vintages", "constant")
    for block in extra:
        if block.key == changes:
            edges = price_edges(block.series, price, params.deflation_order.value)
            out.append(
                derive(
                    AT_CURRENT_PRICES,
                    changes._replace(price_basis="current"),
                    block.series,
                    block.periods,
                    {"volume": given(block), "price": by_edges(price, edges)},
                    sets=((params.deflation_order,),),
                    chosen=_missing_in(inputs.get(CURRENT_CHANGES), block.series),
                    part=block.part,
                )
            )
    net = made["net_stock"]
    edges = price_edges(net.series, price, params.deflation_order.value)
    out.append(
        derive(
            HOLDING_GAINS,
            BlockKey("holding_gains", "perpetual_inventory", "current"),
            net.series,
            net.periods,
            {
                "net_stock_previous": given(net),
                "net_stock": given(net),
                "price": by_edges(price, edges),
                "year_end_price": by_edges(year_end, edges),
                "year_end_price_previous": by_edges(year_end, edges),
            },
            sets=((params.deflation_order,),),
            part=net.part,
        )
    )
    return out, []


def _missing_in(block: Block | None, series: SeriesIndex) -> B1:
    """Return which series a block does not hold."""
    at = np.full(len(series), -1) if block is None else block.series.locate(series.key)
    return np.asarray(at < 0)


def _unbalanced_at_prices(inputs: Inputs, work: _Work, valued: Sequence[Block]) -> list[dict[str, Any]]:
    """Test the account at current prices: opening + P (I - CFC + OVC) + HG = closing, from the stored figures."""
    price = inputs.get(BlockKey("investment_price", CHOSEN, "index"))
    by_key = {(b.key.measure, b.key.price_basis): b for b in valued}
    closing = by_key.get(("net_stock", "year_end"))
    if price is None or closing is None:
        return []
    series, periods = closing.series, closing.periods

    def read(measure: str) -> F8:
        block = by_key.get((measure, "current"))
        return np.zeros(closing.value.shape) if block is None else read_values(given(block), series, periods)

    edges = price_edges(series, price, work.params.deflation_order.value)
    prices = read_values(replace(by_edges(price, edges), own=series.key), series, periods)
    flow = read_values(work.begin.flow, series, periods) * prices
    lost, gains = read("consumption_of_fixed_capital"), read("holding_gains")
    other = np.nan_to_num(read("other_volume_changes"))
    before = closing.value[:-1]
    sides = (before, flow[1:], -lost[1:], other[1:], gains[1:], -closing.value[1:])
    gap = np.sum(sides, axis=0)
    with np.errstate(invalid="ignore"):
        bad = np.abs(gap) > BALANCE_TOLERANCE * np.sum(np.abs(sides), axis=0)
    out = []
    for n in np.flatnonzero(bad.any(axis=0)):
        t = int(np.argmax(bad[:, n])) + 1
        out.append(
            note(
                "balance_current",
                "stop",
                "the account at current prices does not close: opening stock, investment, consumption, other changes "
                "and holding gains do not give the closing stock",
                series.table,
                int(series.key[n]),
                measure="net_stock",
                time_period=str(periods[t]),
                found=f"a gap of {-gap[t - 1, n]:.6g}",
                expected="0",
                remedy="report this: the arithmetic of the stock is wrong",
            )
        )
    return out


STAGE = Stage(
    name="stocks",
    needs=frozenset(),
    optional=keys(
        "investment/*/constant",
        "investment_price/*/index",
        "investment_price/year_end/year_end",
        *(f"{m}/delivered/{basis}" for m in STOCKS for basis in ("constant", "year_end")),
        "other_volume_changes/delivered/constant",
        "other_volume_changes/delivered/current",
        "investment_indicator/*/_Z",
        "value_added/*/constant",
    ),
    gives=keys(
        "investment/backcast/constant",
        "investment/before_changes/constant",
        "surviving_part/perpetual_inventory/_Z",
        "other_volume_changes/benchmark_gap/constant",
        "other_volume_changes/of_vintages/constant",
        "other_volume_changes/of_vintages/current",
        "other_volume_changes/deflated/constant",
        "gross_volume_changes/of_vintages/constant",
        "holding_gains/perpetual_inventory/current",
        "vintage_ages/perpetual_inventory/constant",
        "average_age/perpetual_inventory/constant",
        "benchmark_factor/capital_output_ratio/_Z",
        "trend_growth/declared_growth/_Z",
        "trend_investment/declared_growth/constant",
        *(
            f"{m}/{method}/constant"
            for m in STOCKS
            for method in ("declared_growth", "zero", "capital_output_ratio")
        ),
        *(f"{m}/before_changes/constant" for m in (*STOCKS, *LOSSES)),
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
