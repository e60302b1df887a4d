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
    reallocation,
    residual_level,
)
from keelbook.methods.income_shares import (
    all_mixed,
    fixed_fraction,
    imputed_labour,
    proportional,
    reconciled,
    reconciliation_factor,
    share,
    unadjusted,
)
from keelbook.methods.index_numbers import INDEX_FORMULAS, chain, fisher, fixed_base, links
from keelbook.methods.proportional_fitting import fit
from keelbook.methods.user_cost import asset_base, capital_cost, endogenous_rate, revaluation, tax_term

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


@quick
@given(arrays(np.float64, (8, 4), elements=positive), st.floats(-10, 100), st.floats(0, 0.5))
def test_user_costs_with_taxes_exhaust_capital_income_too(figures, capital_income, tax_rate):
    p, pe, pe_previous, opening, closing, consumption, allowances, property_tax = figures
    base = asset_base(p, opening, closing)
    gain = revaluation(pe, pe_previous, base)
    T, x = tax_term(tax_rate, allowances / 10, 0.02), property_tax / 100
    rate = endogenous_rate(
        capital_income - (x * base).sum(), (T * consumption).sum(), (T * gain).sum(), (T * base).sum()
    )
    cost = capital_cost(rate, base, consumption, gain, T, x)
    size = (
        abs(capital_income)
        + (np.abs(T) * (np.abs(rate * base) + consumption + np.abs(gain)) + x * base).sum()
    )
    assert abs(cost.sum() - capital_income) <= 1e-12 * size


amounts = st.floats(0, 100)


@quick
@given(st.floats(0.1, 100), amounts, st.floats(-50, 100), st.floats(0, 1))
def test_order_of_adjustments_under_their_conditions(d1, mixed, surplus, fraction):
    """Y = D.1 + MI + B.2 with 0 <= MI < Y: unadjusted <= fixed fraction <= all mixed, and proportional <= all
    mixed exactly if B.2 >= 0.
    """
    base = d1 + mixed + surplus
    if base - mixed <= 0.01:
        return
    slack = 1e-12 * (1 + (d1 + mixed) / (base - mixed))
    shares = [
        float(share(income, base))
        for income in (unadjusted(d1), fixed_fraction(d1, mixed, fraction), all_mixed(d1, mixed))
    ]
    assert shares[0] <= shares[1] + slack
    assert shares[1] <= shares[2] + slack
    # D.1 / (Y - MI) exceeds (D.1 + MI) / Y by - MI B.2 / (Y (Y - MI)).
    found = float(share(proportional(d1, mixed, base), base)) - shares[2]
    assert found == pytest.approx(-mixed * surplus / (base * (base - mixed)), rel=1e-9, abs=1e-9)


@quick
@given(positive, positive, positive, positive, positive, positive)
def test_reconciled_parts_are_mixed_income(d1, mixed, employees, self_employed, relative, capital):
    labour = imputed_labour(d1, employees, self_employed, relative)
    of_capital = reconciliation_factor(mixed, labour, capital) * capital
    found = reconciled(d1, mixed, labour, capital)
    assert found + of_capital == pytest.approx(d1 + mixed, rel=1e-12)
    assert d1 <= found <= d1 + mixed + 1e-12 * mixed


@quick
@given(
    arrays(np.float64, (3, 4), elements=st.floats(-0.2, 0.2)),
    arrays(np.float64, (2, 4), elements=st.floats(0.05, 0.95)),
    arrays(np.float64, 3, elements=st.floats(-0.2, 0.2)),
    st.floats(0.05, 0.95),
)
def test_industries_and_reallocation_add_up_to_the_residual_of_the_total(
    growth, shares, total, capital_share
):
    value_share, industry_share = shares[0] / shares[0].sum(), shares[1]
    found = reallocation(
        value_share=value_share,
        industry_growth=tuple(growth),
        industry_capital_share=industry_share,
        total_growth=tuple(total),
        capital_share=capital_share,
    )
    assert found.total() == pytest.approx(log_residual(*total, capital_share), abs=1e-14)


@quick
@given(arrays(np.float64, 3, elements=st.floats(-0.2, 0.2)), st.floats(0.05, 0.95))
def test_industries_that_move_alike_leave_nothing_to_reallocation(growth, capital_share):
    found = reallocation(
        value_share=np.array([0.2, 0.3, 0.5]),
        industry_growth=tuple(np.full(3, g) for g in growth),
        industry_capital_share=np.full(3, capital_share),
        total_growth=tuple(growth),
        capital_share=capital_share,
    )
    np.testing.assert_allclose([found.output, found.capital, found.labour], 0, atol=1e-15)


@quick
@given(arrays(np.float64, (4, 3), elements=positive), arrays(np.float64, (4, 3), elements=positive))
def test_fitting_meets_the_totals_and_does_not_depend_on_the_scale_of_rows_and_columns(seed, target):
    rows, columns = target.sum(axis=1), target.sum(axis=0)
    columns = columns * (rows.sum() / columns.sum())
    found = fit(seed, rows, columns, tolerance=1e-13, rounds=2000)
    np.testing.assert_allclose(found.table.sum(axis=1), rows, rtol=1e-10)
    np.testing.assert_allclose(found.table.sum(axis=0), columns, rtol=1e-10)
    scaled = fit(seed * target[:, :1] * target[:1], rows, columns, tolerance=1e-13, rounds=2000)
    np.testing.assert_allclose(scaled.table, found.table, rtol=1e-9)
