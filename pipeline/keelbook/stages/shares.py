"""Shares: the averages of the chosen labour and capital shares that a decomposition uses."""

from dataclasses import dataclass

import numpy as np

from keelbook.blocks import F8, BlockKey, Choice
from keelbook.lineage.derive import derive, given
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.primitives import Each, Span, Spans
from keelbook.methods.income_shares import two_period_mean
from keelbook.stages.base import CHOSEN, Inputs, Result, Stage, keys, missing_input

SHARES = ("labour_share", "capital_share")

TWO_PERIOD_MEAN = Formula(
    name="two_period_mean",
    equation="mean share_t = (share_(t-1) + share_t) / 2",
    citation="Törnqvist weights; BLS technical notes",
    roles=(Role("share_previous", -1), Role("share")),
    build=lambda s: Each(two_period_mean),
)


def _moving_mean(s: Setting) -> Span:
    years = int(s.single("shares.smoothing_years"))

    def plan(x: F8) -> Spans:
        whole = np.isfinite(x)
        for lag in range(1, years):
            before = np.zeros_like(whole)
            before[lag:] = np.isfinite(x)[:-lag]
            whole = whole & before
        start = np.arange(len(x))[:, None] - (years - 1)
        weights = np.broadcast_to(np.float64(1 / years), (years, *x.shape))
        return Spans(np.where(whole, start, -1), np.full(x.shape, years), weights)

    return Span(plan)


MOVING_MEAN = Formula(
    name="moving_mean",
    equation="smoothed share_t = mean of the shares of the last n years",
    citation="common practice, no source",
    roles=(Role("share"),),
    build=_moving_mean,
    kind="series",
)

FORMULAS = (TWO_PERIOD_MEAN, MOVING_MEAN)


@dataclass(frozen=True)
class SharesParams:
    smoothing_years: Choice


def run(inputs: Inputs, params: SharesParams) -> Result:
    """Return two-period and smoothed means of the chosen shares."""
    blocks, findings = [], []
    for measure in SHARES:
        key = BlockKey(measure, CHOSEN, "_Z")
        share = inputs.get(key)
        if share is None:
            findings.append(missing_input("shares", key))
            continue
        blocks.append(
            derive(
                TWO_PERIOD_MEAN,
                BlockKey(f"{measure}_two_period", "mean", "_Z"),
                share.series,
                share.periods,
                {"share_previous": given(share), "share": given(share)},
                part=False,
            )
        )
        blocks.append(
            derive(
                MOVING_MEAN,
                BlockKey(f"{measure}_smoothed", "mean", "_Z"),
                share.series,
                share.periods,
                {"share": given(share)},
                sets=((params.smoothing_years,),),
                part=False,
            )
        )
    return Result(blocks, findings)


STAGE = Stage(
    name="shares",
    needs=frozenset(),
    optional=keys(*(f"{m}/*/_Z" for m in SHARES)),
    gives=keys(*(f"{m}_{form}/mean/_Z" for m in SHARES for form in ("two_period", "smoothed"))),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
