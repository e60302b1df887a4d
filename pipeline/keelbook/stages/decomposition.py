"""Decomposition: growth of output into capital, labour and the residual, in log and in discrete form."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from keelbook.blocks import F8, Block, BlockKey, Choice, Edges
from keelbook.lineage.derive import Given, derive, given
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.primitives import Each, Span
from keelbook.methods.growth import discrete_growth, log_growth, log_residual
from keelbook.stages.base import CHOSEN, Inputs, Result, Stage, keys, missing_input
from keelbook.stages.chaining import chained
from keelbook.stages.totals import TOTAL

OUTPUT = BlockKey("value_added", CHOSEN, "constant")
HOURS = BlockKey("hours_worked", CHOSEN, "_Z")
SHARE = BlockKey("capital_share", CHOSEN, "_Z")
MEAN_SHARE = BlockKey("capital_share_two_period", "mean", "_Z")

CAPITAL = {
    "capital_services": BlockKey("capital_services", CHOSEN, "index"),
    "productive_stock": BlockKey("productive_stock", CHOSEN, "constant"),
    "net_stock": BlockKey("net_stock", CHOSEN, "constant"),
}
LABOUR = {"labour_input": BlockKey("labour_input", CHOSEN, "index"), "hours_worked": HOURS}
"""Name in decomposition.capital_order and .labour_order -> the block it stands for."""

FORMS: Mapping[str, Callable[[F8, F8], F8]] = {"log": log_growth, "discrete": discrete_growth}

SOLOW = "Solow, REStat 39(3) 1957, 312-320"


def _growth_formula(form: str) -> Formula:
    equation = "ln(x_t / x_(t-1))" if form == "log" else "x_t / x_(t-1) - 1"
    return Formula(
        name=f"growth_{form}",
        equation=f"growth_t = {equation}",
        citation=SOLOW,
        roles=(Role("previous", -1), Role("current")),
        build=lambda s: Each(FORMS[form]),
    )


def _ratio_growth_formula(form: str) -> Formula:
    growth = FORMS[form]
    equation = "ln(r_t / r_(t-1))" if form == "log" else "r_t / r_(t-1) - 1"
    return Formula(
        name=f"growth_per_hour_{form}",
        equation=f"growth_t = {equation}, r = x / hours",
        citation=SOLOW,
        roles=(Role("previous", -1), Role("current"), Role("hours_previous", -1), Role("hours")),
        build=lambda s: Each(lambda x0, x1, h0, h1: growth(x0 / h0, x1 / h1)),
    )


GROWTH = {form: _growth_formula(form) for form in FORMS}
GROWTH_PER_HOUR = {form: _ratio_growth_formula(form) for form in FORMS}

CAPITAL_CONTRIBUTION = Formula(
    name="capital_contribution",
    equation="contribution = capital share x growth (mean share with log, previous year's with discrete growth)",
    citation=SOLOW,
    roles=(Role("capital_share"), Role("growth")),
    build=lambda s: Each(lambda share, growth: share * growth),
)
CAPITAL_CONTRIBUTION_DISCRETE = Formula(
    name="capital_contribution_discrete",
    equation="contribution = capital share of the previous year x growth",
    citation=SOLOW,
    roles=(Role("capital_share", -1), Role("growth")),
    build=lambda s: Each(lambda share, growth: share * growth),
)
LABOUR_CONTRIBUTION = Formula(
    name="labour_contribution",
    equation="contribution = (1 - capital share) x growth of labour",
    citation=SOLOW,
    roles=(Role("capital_share"), Role("growth")),
    build=lambda s: Each(lambda share, growth: (1 - share) * growth),
)
LABOUR_CONTRIBUTION_DISCRETE = Formula(
    name="labour_contribution_discrete",
    equation="contribution = (1 - capital share of the previous year) x growth of labour",
    citation=SOLOW,
    roles=(Role("capital_share", -1), Role("growth")),
    build=lambda s: Each(lambda share, growth: (1 - share) * growth),
)
RESIDUAL = Formula(
    name="residual",
    equation="residual = growth of output - share x growth of capital - (1 - share) x growth of labour",
    citation=SOLOW,
    roles=(Role("output_growth"), Role("capital_growth"), Role("labour_growth"), Role("capital_share")),
    build=lambda s: Each(log_residual),
)
RESIDUAL_DISCRETE = Formula(
    name="residual_discrete",
    equation="dA/A = dY/Y - a_(t-1) dK/K - (1 - a_(t-1)) dL/L",
    citation=SOLOW,
    roles=(Role("output_growth"), Role("capital_growth"), Role("labour_growth"), Role("capital_share", -1)),
    build=lambda s: Each(log_residual),
)
LABOUR_AUGMENTING = Formula(
    name="residual_labour_augmenting",
    equation="residual / (1 - capital share)",
    citation="reading of the residual as progress in labour's efficiency (Harrod-neutral); from memory",
    roles=(Role("residual"), Role("capital_share")),
    build=lambda s: Each(lambda residual, share: residual / (1 - share)),
)
CAPITAL_AUGMENTING = Formula(
    name="residual_capital_augmenting",
    equation="residual / capital share",
    citation="reading of the residual as progress in capital's efficiency (Solow-neutral); from memory",
    roles=(Role("residual"), Role("capital_share")),
    build=lambda s: Each(lambda residual, share: residual / share),
)


def _level(form: str) -> Callable[[Setting], Span]:
    def build(s: Setting) -> Span:
        rule = chained(s, None)
        return rule if form == "log" else Span(rule.plan, inner=np.log1p, outer=np.exp)

    return build


LEVEL = {
    form: Formula(
        name=f"residual_level_{form}",
        equation="A_t = exp(sum of dlnA)" if form == "log" else "A_t = product of (1 + dA/A)",
        citation=f"{SOLOW}: level 1 in the first year",
        roles=(Role("residual"),),
        build=_level(form),
        kind="series",
    )
    for form in FORMS
}

FORMULAS = (
    *GROWTH.values(),
    *GROWTH_PER_HOUR.values(),
    CAPITAL_CONTRIBUTION,
    CAPITAL_CONTRIBUTION_DISCRETE,
    LABOUR_CONTRIBUTION,
    LABOUR_CONTRIBUTION_DISCRETE,
    RESIDUAL,
    RESIDUAL_DISCRETE,
    LABOUR_AUGMENTING,
    CAPITAL_AUGMENTING,
    *LEVEL.values(),
)

MEASURES = (
    "output_growth",
    "capital_growth",
    "labour_growth",
    "capital_contribution",
    "labour_contribution",
    "residual_growth",
    "residual_level",
    "residual_labour_augmenting",
    "residual_capital_augmenting",
    "output_per_hour_growth",
    "capital_deepening",
    "deepening_contribution",
)


@dataclass(frozen=True)
class DecompositionParams:
    form: Choice
    capital_order: Choice
    labour_order: Choice


def run(inputs: Inputs, params: DecompositionParams) -> Result:
    """Return growth, contributions, residual, level and readings of every series with volume output."""
    output, hours, share, mean = (inputs.get(key) for key in (OUTPUT, HOURS, SHARE, MEAN_SHARE))
    found = {OUTPUT: output, HOURS: hours, SHARE: share, MEAN_SHARE: mean}
    missing = [missing_input("decomposition", key) for key, block in found.items() if block is None]
    capital = _first(output, [inputs.get(CAPITAL[n]) for n in params.capital_order.value], {"asset": TOTAL})
    labour = _first(
        output, [inputs.get(LABOUR[n]) for n in params.labour_order.value], {"worker_group": TOTAL}
    )
    if output is None or hours is None or share is None or mean is None or capital is None or labour is None:
        if not missing:
            missing = [missing_input("decomposition", CAPITAL[params.capital_order.value[-1]])]
        return Result((), missing)
    blocks: list[Block] = []
    for form in FORMS:
        blocks.extend(_one_form(form, output, hours, capital, labour, share, mean, params))
    return Result(blocks)


def _first(output: Block | None, blocks: list[Block | None], project: Mapping[str, str]) -> Given | None:
    """Return, for every series of output, the first of several blocks that has it."""
    there = [b for b in blocks if b is not None]
    if output is None or not there:
        return None
    wanted = output.series.projected(project)
    which = np.full(len(wanted), 0, np.int32)
    key = np.full(len(wanted), -1, np.int64)
    for i, block in enumerate(there):
        new = (key < 0) & (block.series.locate(wanted) >= 0)
        which[new], key[new] = i, wanted[new]
    return Given(tuple(there), edges=Edges(tuple(b.key for b in there), which, key))


def _one_form(
    form: str, output: Block, hours: Block, capital: Given, labour: Given, share: Block, mean: Block,
    params: DecompositionParams,
) -> list[Block]:  # fmt: skip
    series, periods = output.series, output.periods
    chosen = form == params.form.value
    worked = given(hours, worker_group=TOTAL)
    weight = given(mean) if form == "log" else given(share)
    log = form == "log"

    def make(formula: Formula, measure: str, inputs: Mapping[str, Given], *parameters: Choice) -> Block:
        key = BlockKey(measure, form, "_Z")
        sets = ((params.form, *parameters),)
        return derive(formula, key, series, periods, inputs, sets=sets, chosen=chosen, part=False)

    grown = {
        name: make(GROWTH[form], f"{name}_growth", {"previous": x, "current": x}, *order)
        for name, x, order in (
            ("output", given(output), ()),
            ("capital", capital, (params.capital_order,)),
            ("labour", labour, (params.labour_order,)),
        )
    }
    per_hour = {
        measure: make(
            GROWTH_PER_HOUR[form],
            measure,
            {"previous": x, "current": x, "hours_previous": worked, "hours": worked},
        )
        for measure, x in (("output_per_hour_growth", given(output)), ("capital_deepening", capital))
    }
    by_capital = CAPITAL_CONTRIBUTION if log else CAPITAL_CONTRIBUTION_DISCRETE
    by_labour = LABOUR_CONTRIBUTION if log else LABOUR_CONTRIBUTION_DISCRETE
    contributions = [
        make(
            by_capital, "capital_contribution", {"capital_share": weight, "growth": given(grown["capital"])}
        ),
        make(by_labour, "labour_contribution", {"capital_share": weight, "growth": given(grown["labour"])}),
        make(
            by_capital,
            "deepening_contribution",
            {"capital_share": weight, "growth": given(per_hour["capital_deepening"])},
        ),
    ]
    residual = make(
        RESIDUAL if log else RESIDUAL_DISCRETE,
        "residual_growth",
        {**{f"{name}_growth": given(block) for name, block in grown.items()}, "capital_share": weight},
    )
    read = {"residual": given(residual), "capital_share": given(mean)}
    return [
        *grown.values(),
        *per_hour.values(),
        *contributions,
        residual,
        make(LEVEL[form], "residual_level", {"residual": given(residual)}),
        make(LABOUR_AUGMENTING, "residual_labour_augmenting", read),
        make(CAPITAL_AUGMENTING, "residual_capital_augmenting", read),
    ]


STAGE = Stage(
    name="decomposition",
    needs=frozenset(),
    optional=frozenset({OUTPUT, HOURS, SHARE, MEAN_SHARE, *CAPITAL.values(), *LABOUR.values()}),
    gives=keys(*(f"{measure}/{form}/_Z" for measure in MEASURES for form in FORMS)),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
