"""Weights are derivatives taken by a complex step: they must agree with plain differences."""

import numpy as np
import pytest

from keelbook.methods import (
    benchmark,
    growth,
    income_shares,
    index_numbers,
    initial_stock,
    user_cost,
    valuation,
)

WEIGHTS = np.array([0.9, 0.5, 0.1, 0.0])
FUNCTIONS = {
    "opening_stock_geometric": (initial_stock.opening_stock_geometric, 4),
    "opening_stock_profile": (lambda i, g: initial_stock.opening_stock_profile(i, g, WEIGHTS), 2),
    "opening_vintages": (lambda g: initial_stock.opening_vintages(WEIGHTS, g, 2)[1], 1),
    "opening_remainder": (lambda g: initial_stock.opening_remainder(WEIGHTS, g, 2)[1], 1),
    "year_end_price": (valuation.year_end_price, 2),
    "year_end_price_extrapolated": (valuation.year_end_price_extrapolated, 2),
    "holding_gains": (valuation.holding_gains, 5),
    "asset_base": (user_cost.asset_base, 3),
    "revaluation": (user_cost.revaluation, 3),
    "endogenous_rate": (user_cost.endogenous_rate, 4),
    "capital_cost": (user_cost.capital_cost, 4),
    "unit_user_cost": (user_cost.unit_user_cost, 2),
    "capital_cost_with_taxes": (user_cost.capital_cost, 6),
    "opening_base": (user_cost.opening_base, 2),
    "opening_depreciation": (user_cost.opening_depreciation, 4),
    "opening_revaluation": (user_cost.opening_revaluation, 3),
    "smoothed_log_change": (lambda p, q: user_cost.smoothed_log_change(p, q, 3), 2),
    "revaluation_at": (user_cost.revaluation_at, 2),
    "general_inflation": (user_cost.general_inflation, 4),
    "exogenous_rate": (user_cost.exogenous_rate, 2),
    "tax_term": (user_cost.tax_term, 3),
    "benchmark_factor": (benchmark.benchmark_factor, 3),
    "missing_part": (initial_stock.missing_part, 2),
    "backcast_by_indicator": (lambda i, x, y: initial_stock.backcast_by_indicator(i, x, y)[-1], 3),
    "laspeyres": (index_numbers.laspeyres, 4),
    "paasche": (index_numbers.paasche, 4),
    "fisher": (index_numbers.fisher, 4),
    "tornqvist": (index_numbers.tornqvist, 4),
    "chain": (lambda x: index_numbers.chain(x)[-1], 1),
    "factor_cost": (income_shares.factor_cost, 2),
    "unadjusted": (income_shares.unadjusted, 1),
    "by_hours": (income_shares.by_hours, 4),
    "fixed_fraction": (income_shares.fixed_fraction, 3),
    "by_persons": (income_shares.by_persons, 4),
    "all_mixed": (income_shares.all_mixed, 2),
    "proportional": (lambda d1, mixed, base: income_shares.proportional(d1, mixed, 1 + base), 3),
    "asset_basis": (income_shares.asset_basis, 4),
    "reconciled": (income_shares.reconciled, 4),
    "share": (income_shares.share, 2),
    "capital_share": (income_shares.capital_share, 1),
    "two_period_mean": (income_shares.two_period_mean, 2),
    "log_growth": (growth.log_growth, 2),
    "discrete_growth": (growth.discrete_growth, 2),
    "log_residual": (growth.log_residual, 4),
    "residual_level": (lambda x: growth.residual_level(x)[-1], 1),
    "residual_level_discrete": (lambda x: growth.residual_level(x, "discrete")[-1], 1),
    "reading_labour": (lambda x, a: growth.readings(x, a)[0], 2),
    "reading_capital": (lambda x, a: growth.readings(x, a)[1], 2),
}


@pytest.mark.parametrize("name", FUNCTIONS)
def test_complex_step_equals_the_difference_quotient(name):
    function, count = FUNCTIONS[name]
    arguments = list(np.random.default_rng(len(name)).uniform(0.3, 0.8, (count, 2)))
    for position in range(count):

        def at(first_element, position=position):
            moved = [argument.astype(type(first_element)) for argument in arguments]
            moved[position][0] = first_element
            return function(*moved)

        x = float(arguments[position][0])
        exact = at(complex(x, 1e-30)).imag / 1e-30
        np.testing.assert_allclose(exact, (at(x + 1e-6) - at(x - 1e-6)) / 2e-6, rtol=1e-6, atol=1e-8)
