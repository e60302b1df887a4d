"""Income: the income base, labour income by every adjustment that needs no rate of return, and the choice."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from keelbook.blocks import B1, Block, BlockKey, Choice, SeriesIndex
from keelbook.lineage.derive import Given, derive, given
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each
from keelbook.methods.income_shares import (
    by_hours,
    capital_share,
    factor_cost,
    fixed_fraction,
    share,
    unadjusted,
)
from keelbook.stages.base import CHOSEN, Book, Inputs, Result, Stage, keys, missing_input, note
from keelbook.stages.totals import TOTAL, total_of, totals

EMPLOYEES, SELF_EMPLOYED = "SAL", "SELF"
"""Codes of the partition of workers by status (rules/codes/worker_group.csv)."""

VALUE_ADDED = BlockKey("value_added", CHOSEN, "current")
NET_TAXES = BlockKey("net_taxes_on_production", CHOSEN, "current")
COMPENSATION = BlockKey("compensation_of_employees", CHOSEN, "current")
MIXED_INCOME = BlockKey("mixed_income", CHOSEN, "current")
HOURS = BlockKey("hours_worked", CHOSEN, "_Z")
BASE = BlockKey("value_added", "factor_cost", "current")

FACTOR_COST = Formula(
    name="value_added_at_factor_cost",
    equation="Y = B.1g - (D.29 - D.39)",
    citation="SNA 2008: value added at basic prices less other net taxes on production",
    roles=(Role("value_added"), Role("net_taxes")),
    build=lambda s: Each(factor_cost),
)

LABOUR_INCOME = {
    "unadjusted": Formula(
        name="labour_income_unadjusted",
        equation="labour income = D.1",
        citation="share of compensation alone; Gollin, JPE 110(2) 2002, calls it the naive share",
        roles=(Role("compensation"),),
        build=lambda s: Each(unadjusted),
    ),
    "hours": Formula(
        name="labour_income_by_hours",
        equation="labour income = D.1 + relative earnings x (D.1 / hours of employees) x hours of self-employed",
        citation="OECD, Compendium of Productivity Indicators 2019",
        roles=(Role("compensation"), Role("hours_of_employees"), Role("hours_of_self_employed")),
        build=lambda s: Each(by_hours, (s.column("income.relative_earnings"),)),
    ),
    "fixed_fraction": Formula(
        name="labour_income_fixed_fraction",
        equation="labour income = D.1 + fraction x B.3",
        citation="Johnson 1954, fraction of two thirds (from memory)",
        roles=(Role("compensation"), Role("mixed_income")),
        build=lambda s: Each(fixed_fraction, (s.column("income.mixed_income_labour_fraction"),)),
    ),
}

FROM_SHARE = Formula(
    name="labour_income_from_share",
    equation="labour income = delivered labour share x Y",
    citation="a published share stands in for its own account",
    roles=(Role("labour_share"), Role("income_base")),
    build=lambda s: Each(lambda share, base: share * base),
)

CAPITAL_INCOME = Formula(
    name="capital_income_as_rest",
    equation="capital income = Y - labour income",
    citation="labour and capital income exhaust the income base",
    roles=(Role("income_base"), Role("labour_income")),
    build=lambda s: Each(lambda base, labour: base - labour),
)

LABOUR_SHARE = Formula(
    name="labour_share",
    equation="labour share = labour income / Y",
    citation="Gollin, JPE 110(2) 2002",
    roles=(Role("labour_income"), Role("income_base")),
    build=lambda s: Each(share),
)

CAPITAL_SHARE = Formula(
    name="capital_share",
    equation="capital share = 1 - labour share",
    citation="constant returns: the two shares sum to one (Solow, REStat 39(3) 1957)",
    roles=(Role("labour_share"),),
    build=lambda s: Each(capital_share),
)

FORMULAS = (FACTOR_COST, *LABOUR_INCOME.values(), FROM_SHARE, CAPITAL_INCOME, LABOUR_SHARE, CAPITAL_SHARE)

AS_DELIVERED = "as_delivered"
"""Method of incomes and shares that follow a delivered labour share."""

OVER_INDUSTRIES = "sum_of_industries"
"""Method of a total that adds up the chosen labour income of its industries, whatever their methods."""


@dataclass(frozen=True)
class IncomeParams:
    net_taxes: Choice
    cascade: Choice
    mixed_income_labour_fraction: Choice
    relative_earnings: Choice


def run(inputs: Inputs, params: IncomeParams) -> Result:
    """Return labour income and labour and capital shares by every method the data allow, the chosen one marked."""
    value_added, compensation = inputs.get(VALUE_ADDED), inputs.get(COMPENSATION)
    delivered = inputs.get(BlockKey("labour_share", "delivered", "_Z"))
    if value_added is None or compensation is None:
        gap = [
            missing_input("income", k)
            for k, b in ((VALUE_ADDED, value_added), (COMPENSATION, compensation))
            if b is None
        ]
        return Result(_from_delivered(delivered), gap)
    base, findings = _base(inputs, value_added, params)
    blocks: list[Block] = [base]
    forms = dict(_labour_incomes(inputs, params, base, compensation))
    if delivered is not None and not delivered.chosen.all():
        forms["delivered"] = _as_delivered(delivered.take(~delivered.chosen), base, params)
    chosen = choose(base, forms, params.cascade.value)
    for name, block in forms.items():
        blocks.extend(_shares(replace(block, chosen=chosen[name]), base))
    blocks.extend(_over_industries(base, blocks))
    blocks.extend(_from_delivered(delivered))
    findings.extend(_without_choice(base, chosen))
    findings.extend(_outside(blocks))
    return Result(blocks, findings)


def _from_delivered(delivered: Block | None) -> list[Block]:
    """Return capital shares from labour shares that were delivered in place of incomes."""
    if delivered is None or not delivered.chosen.any():
        return []
    alone = delivered.take(delivered.chosen)
    return [
        derive(
            CAPITAL_SHARE,
            BlockKey("capital_share", "delivered", "_Z"),
            alone.series,
            alone.periods,
            {"labour_share": given(alone)},
            part=False,
        )
    ]


def _as_delivered(share_block: Block, base: Block, params: IncomeParams) -> Block:
    """Return labour income by a delivered share, for series that have incomes as well."""
    mine = base.take(base.series.locate(share_block.series.key) >= 0)
    block = derive(
        FROM_SHARE,
        BlockKey("labour_income", AS_DELIVERED, "current"),
        mine.series,
        mine.periods,
        {"labour_share": given(share_block), "income_base": given(mine)},
        sets=((params.cascade,),),
        chosen=False,
        part=mine.part,
    )
    return block.take(block.held)


def _base(inputs: Inputs, value_added: Block, params: IncomeParams) -> tuple[Block, list[dict[str, Any]]]:
    taxes = inputs.get(NET_TAXES)
    if taxes is None:
        return (
            replace(value_added, key=BASE, chosen=np.zeros(len(value_added.series), bool)),
            [missing_input("income", NET_TAXES)],
        )
    base = derive(
        FACTOR_COST,
        BASE,
        value_added.series,
        value_added.periods,
        {"value_added": given(value_added), "net_taxes": given(taxes)},
        sets=((params.net_taxes,),),
        chosen=False,
        part=value_added.part,
    )
    return base, []


def _labour_incomes(
    inputs: Inputs, params: IncomeParams, base: Block, compensation: Block
) -> Mapping[str, Block]:
    """Return labour income by method, for the series of the income base that have the data."""
    hours, mixed = inputs.get(HOURS), inputs.get(MIXED_INCOME)
    given_by_method: dict[str, dict[str, Given]] = {
        "unadjusted": {"compensation": given(compensation, worker_group=TOTAL)}
    }
    if hours is not None:
        given_by_method["hours"] = {
            "compensation": given(compensation, worker_group=TOTAL),
            "hours_of_employees": given(hours, worker_group=EMPLOYEES),
            "hours_of_self_employed": given(hours, worker_group=SELF_EMPLOYED),
        }
    if mixed is not None:
        given_by_method["fixed_fraction"] = {
            "compensation": given(compensation, worker_group=TOTAL),
            "mixed_income": given(mixed),
        }
    choices = {
        "unadjusted": (),
        "hours": (params.relative_earnings,),
        "fixed_fraction": (params.mixed_income_labour_fraction,),
    }
    out = {}
    for name, sources in given_by_method.items():
        block = derive(
            LABOUR_INCOME[name],
            BlockKey("labour_income", name, "current"),
            base.series,
            base.periods,
            sources,
            sets=((params.cascade, *choices[name]),),
            chosen=False,
            part=base.part,
        )
        out[name] = block.take(block.held)
    return out


def choose(base: Block, forms: Mapping[str, Block], cascade: tuple[str, ...]) -> dict[str, B1]:
    """Return for each method which of its series are chosen.

    The first method of the cascade that gives a figure for every year of the income base and keeps labour
    income between zero and the base; failing that, the first that gives any figure. A total that is the sum of
    its industries is chosen by `sum_of_industries` instead.
    """
    taken = np.isin(base.series.key, _summed_totals(base).key)
    chosen = {name: np.zeros(len(block.series), bool) for name, block in forms.items()}
    has_base = np.isfinite(base.value)
    for strict in (True, False):
        for name in cascade:
            if name not in forms:
                continue
            at = base.series.locate(forms[name].series.key)
            value, reference = forms[name].value, base.value[:, at]
            with np.errstate(invalid="ignore"):
                inside = (value >= 0) & (value <= reference)
            good = (inside | ~has_base[:, at]).all(axis=0) if strict else np.isfinite(value).any(axis=0)
            new = good & ~taken[at]
            chosen[name] |= new
            taken[at[new]] = True
    return chosen


def _summed_totals(base: Block) -> SeriesIndex:
    """Return the series of the base that are totals of industries or sectors which are there themselves."""
    parts = base.series.take(base.part)
    keys = [parts.projected(total_of(*dims)) for dims in (("industry",), ("sector",), ("industry", "sector"))]
    wanted = np.unique(np.concatenate(keys))
    wanted = wanted[~np.isin(wanted, parts.key)]
    return SeriesIndex(base.series.table, wanted[base.series.locate(wanted) >= 0])


def _shares(labour_income: Block, base: Block) -> list[Block]:
    """Return labour income, capital income and both shares of one method."""
    method, series, periods = labour_income.key.method, labour_income.series, labour_income.periods
    chosen, part = labour_income.chosen, labour_income.part
    capital_income = derive(
        CAPITAL_INCOME,
        BlockKey("capital_income", method, "current"),
        series,
        periods,
        {"income_base": given(base), "labour_income": given(labour_income)},
        chosen=chosen,
        part=part,
    )
    labour_share = derive(
        LABOUR_SHARE,
        BlockKey("labour_share", method, "_Z"),
        series,
        periods,
        {"labour_income": given(labour_income), "income_base": given(base)},
        chosen=chosen,
        part=False,
    )
    of_capital = derive(
        CAPITAL_SHARE,
        BlockKey("capital_share", method, "_Z"),
        series,
        periods,
        {"labour_share": given(labour_share)},
        chosen=chosen,
        part=False,
    )
    return [labour_income, capital_income, labour_share, of_capital]


def _over_industries(base: Block, blocks: list[Block]) -> list[Block]:
    """Return the chosen account of every total: the sum of the chosen labour incomes of its industries."""
    chosen = Book(blocks).get(BlockKey("labour_income", CHOSEN, "current"))
    if chosen is None:
        return []
    wanted = _summed_totals(base)
    out = []
    for block in totals(chosen, ("industry", "sector"), OVER_INDUSTRIES):
        kept = block.take(wanted.locate(block.series.key) >= 0)
        if len(kept.series):
            out.extend(_shares(kept, base))
    return out


def _without_choice(base: Block, chosen: Mapping[str, B1]) -> list[dict[str, Any]]:
    if any(marks.any() for marks in chosen.values()):
        return []
    return [
        note(
            "no_labour_share",
            "warn",
            "no method of the cascade gives a labour share",
            base.series.table,
            measure="labour_share",
            remedy="deliver compensation of employees, or a labour share",
        )
    ]


def _outside(blocks: list[Block]) -> list[dict[str, Any]]:
    """Return a finding per chosen labour share that leaves the range from 0 to 1; nothing is cut off."""
    out = []
    for block in blocks:
        if block.key.measure != "labour_share":
            continue
        with np.errstate(invalid="ignore"):
            bad = ((block.value < 0) | (block.value > 1)) & block.chosen
        for n in np.flatnonzero(bad.any(axis=0)):
            t = int(np.argmax(bad[:, n]))
            out.append(
                note(
                    "share_range",
                    "warn",
                    f"the chosen labour share ({block.key.method}) is outside 0 to 1 in {int(bad[:, n].sum())} years",
                    block.series.table,
                    int(block.series.key[n]),
                    measure="labour_share",
                    time_period=str(block.periods[t]),
                    found=f"{block.value[t, n]:.4f}",
                    expected="0 to 1",
                    remedy="choose another method in income.cascade, or check hours and incomes of the self-employed",
                )
            )
    return out


STAGE = Stage(
    name="income",
    needs=frozenset(),
    optional=frozenset({VALUE_ADDED, NET_TAXES, COMPENSATION, MIXED_INCOME, HOURS})
    | keys("labour_share/delivered/_Z"),
    gives=frozenset({BASE})
    | keys(
        *(
            f"{measure}/{method}/{basis}"
            for measure, basis in (
                ("labour_income", "current"),
                ("capital_income", "current"),
                ("labour_share", "_Z"),
                ("capital_share", "_Z"),
            )
            for method in (*LABOUR_INCOME, AS_DELIVERED, OVER_INDUSTRIES)
        ),
        "capital_share/delivered/_Z",
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
