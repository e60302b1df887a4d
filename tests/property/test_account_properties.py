"""What must hold for every index number, every rate of return and every decomposition."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from keelbook.methods.growth import (
    contributions,
    discrete_growth,
    discrete_residual,
    log_growth,
    log_residual,
    readings,
    residual_level,
)
from keelbook.methods.index_numbers import INDEX_FORMULAS, chain, fisher, fixed_base, links
from keelbook.methods.user_cost import asset_base, capital_cost, endogenous_rate, revaluation

quick = settings(max_examples=40, deadline=None)
positive = st.floats(0.1, 10)
panels = arrays(np.float64, (5, 4), elements=positive)


@quick
@given(panels, panels)
def test_fisher_price_times_fisher_quantity_is_the_change_in_value(price, quantity):
    p_index = fisher(price[0], price[1], quantity[0], quantity[1])
    q_index = fisher(quantity[0], quantity[1], price[0], price[1])
    assert p_index * q_index == pytest.approx((price[1] @ quantity[1]) / (price[0] @ quantity[0]), rel=1e-12)


@quick
@given(panels, panels, positive, st.sampled_from(sorted(INDEX_FORMULAS)))
def test_equal_changes_give_the_common_change(price, quantity, factor, name):
    price[1] = factor * price[0]
    assert INDEX_FORMULAS[name](price[0], price[1], quantity[0], quantity[1]) == pytest.approx(
        factor, rel=1e-12
    )


@quick
@given(panels, panels, st.integers(0, 4), st.sampled_from(sorted(INDEX_FORMULAS)))
def test_chained_index_has_its_links_and_its_reference(price, quantity, reference, name):
    steps = links(name, price, quantity)
    level = chain(steps, reference)
    assert level[reference] == 1
    np.testing.assert_allclose(level[1:] / level[:-1], steps, rtol=1e-12)
    assert fixed_base(name, price, quantity, reference)[reference] == pytest.approx(1, rel=1e-12)


@quick
@given(arrays(np.float64, (6, 4), elements=positive), st.floats(-10, 100))
def test_user_costs_at_the_endogenous_rate_exhaust_capital_income(figures, capital_income):
    p, pe, pe_previous, opening, closing, consumption = figures
    base = asset_base(p, opening, closing)
    gain = revaluation(pe, pe_previous, base)
    rate = endogenous_rate(capital_income, consumption.sum(), gain.sum(), base.sum())
    cost = capital_cost(rate, base, consumption, gain)
    size = abs(capital_income) + np.abs(rate * base).sum() + consumption.sum() + np.abs(gain).sum()
    assert abs(cost.sum() - capital_income) <= 1e-12 * size


@quick
@given(arrays(np.float64, (3, 6), elements=positive), st.floats(0.05, 0.95))
def test_contributions_and_residual_add_up_in_both_forms(levels, share):
    for change, residual in ((log_growth, log_residual), (discrete_growth, discrete_residual)):
        output, capital, labour = (change(level[:-1], level[1:]) for level in levels)
        unexplained = residual(output, capital, labour, share)
        total = sum(contributions(capital, labour, share)) + unexplained
        np.testing.assert_allclose(total, output, rtol=0, atol=1e-12 * (1 + np.abs(levels).max() * 100))
        labour_augmenting, capital_augmenting = readings(unexplained, share)
        np.testing.assert_allclose(labour_augmenting * (1 - share), unexplained, rtol=1e-12)
        np.testing.assert_allclose(capital_augmenting * share, unexplained, rtol=1e-12)


@quick
@given(arrays(np.float64, (8, 3), elements=positive))
def test_level_of_the_residual_turns_back_into_its_growth(level):
    level = level / level[0]
    for form, change in (("log", log_growth), ("discrete", discrete_growth)):
        np.testing.assert_allclose(residual_level(change(level[:-1], level[1:]), form), level, rtol=1e-11)
