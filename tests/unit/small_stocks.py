"""The stage of stocks on a few series: parameters by asset and industry, prices of one."""

from dataclasses import replace
from typing import Any

import numpy as np
from small_blocks import block, choice, params, run_stage

from keelbook.blocks import Block
from keelbook.stages import stocks
from keelbook.stages.base import Book

NAN = np.nan
AT_ONCE = {"retirement": "simultaneous", "retirement.distribution": "simultaneous"}
GEOMETRIC = {"efficiency": "cohort_geometric", "rate": 0.1}
HYPERBOLIC = {"efficiency": "hyperbolic", "life": 3.0, "b": 0.5, "discount_rate": 0.0, **AT_ONCE}


def stock_params(rules: dict[Any, dict[str, Any]], timing: str = "end", **capital: Any) -> Any:
    """rules: asset -> its parameters, for every industry; or (asset, industry) -> them."""

    def of(asset: str, industry: str) -> Any:
        found = rules.get((asset, industry), rules.get(asset))
        return None if found is None else tuple(choice(f"asset.{k}", v) for k, v in found.items())

    made = params("stocks", assets=of, timing=timing)
    given = {"trend_window": 2, "assumed_limit": 1.0, **capital}
    start = replace(made.start, **{name: choice(f"capital.{name}", value) for name, value in given.items()})
    return replace(made, start=start)


def build(
    rules: dict[Any, dict[str, Any]], rows: dict[str, list[float]], *more: Block, **options: Any
) -> tuple[Book, list[dict[str, Any]]]:
    ones = [1.0] * len(next(iter(rows.values())))
    prices = (
        block("investment_price/rebased/index", {"asset=_T": ones}),
        block("investment_price/year_end/year_end", {"asset=_T": ones}),
    )
    flow = block("investment/deflated/constant", rows)
    return run_stage(stocks.STAGE, stock_params(rules, **options), flow, *prices, *more)
