"""Every stage in order, and every formula by name."""

from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

from keelbook.lineage.formula import Formula
from keelbook.stages import (
    decomposition,
    deflation,
    filling,
    harmonise,
    income,
    labour,
    services,
    shares,
    stocks,
    totals,
    valuation,
)
from keelbook.stages.base import Stage

STAGES: tuple[Stage[Any], ...] = (
    deflation.STAGE,
    stocks.STAGE,
    valuation.STAGE,
    labour.STAGE,
    income.STAGE,
    services.STAGE,
    shares.STAGE,
    decomposition.STAGE,
)

FORMULAS: Mapping[str, Formula] = MappingProxyType(
    {
        formula.name: formula
        for formula in (
            *harmonise.FORMULAS,
            *filling.FORMULAS,
            *totals.FORMULAS,
            *(formula for stage in STAGES for formula in stage.formulas),
        )
    }
)
