"""How a stock may start, each way by hand; investment at the year's end, d = .1 unless said."""

import numpy as np
import pytest
from small_blocks import block, column, get, holds, rules_of
from small_stocks import GEOMETRIC, HYPERBOLIC, NAN, build

from keelbook.blocks import ESTIMATED

NET = "net_stock/perpetual_inventory/constant"
A = "industry=A asset=N112"
C = "industry=C asset=N112"


def _net(book, series=A):
    return column(get(book, NET), series)


def test_a_backcast_by_a_declared_growth_takes_investment_of_the_first_year():
    book, _ = build(
        {"N112": GEOMETRIC}, {A: [NAN, 100.0, 150, 90]}, initial_stock="backcast_growth", backcast_growth=0.02
    )
    opening = get(book, "net_stock/declared_growth/constant")
    np.testing.assert_allclose(column(opening, A)[0], 100 / 0.12, rtol=1e-12)
    assert column(opening, A, "assumed")[0] == 1
    np.testing.assert_allclose(_net(book)[1], 0.9 * 100 / 0.12 + 100, rtol=1e-12)


def test_the_row_of_the_asset_decides_over_the_global_choice():
    own = {**GEOMETRIC, "initial_stock": "backcast_growth", "initial_growth": 0.05}
    book, _ = build(
        {("N112", "A"): own, "N112": GEOMETRIC}, {A: [NAN, 100.0, 100, 90], C: [NAN, 100.0, 100, 90]}
    )
    np.testing.assert_allclose(_net(book)[1], 0.9 * 100 / 0.15 + 100, rtol=1e-12)
    np.testing.assert_allclose(_net(book, C)[1], 0.9 * 100 / 0.1 + 100, rtol=1e-12)
    growth = get(book, "trend_growth/declared_growth/_Z")
    assert holds(growth, A)
    assert not holds(growth, C)


def test_a_backcast_over_a_whole_life_has_the_declared_shape():
    """Life 3, h = 1, .8, .5: vintages 100/1.25, 100/1.25^2, 100/1.25^3 are left in the opening."""
    book, _ = build(
        {"N112": HYPERBOLIC}, {A: [NAN, 100.0, 0, 0, 0]},
        initial_stock="backcast_growth", backcast_growth=0.25,
    )  # fmt: skip
    productive = column(get(book, "productive_stock/perpetual_inventory/constant"), A)
    vintages = [64.0 * 0.8, 64, 80, 100, 0, 0, 0]
    expected = [vintages[t + 3] + 0.8 * vintages[t + 2] + 0.5 * vintages[t + 1] for t in range(4)]
    np.testing.assert_allclose(productive[1:], expected, rtol=1e-12)


INDICATOR = "investment_indicator/delivered/_Z"


def test_an_indicator_carries_investment_back():
    """Linked on two years: 210 over 21. Then 80 and 90 came before, and the trend of those starts the stock."""
    flow = {A: [NAN, NAN, NAN, 100.0, 110, 120]}
    indicator = block(INDICATOR, {"asset=N112": [NAN, 8.0, 9, 10, 11, 99]})
    book, findings = build(
        {"N112": GEOMETRIC}, flow, indicator, initial_stock="backcast_indicator", link_window=2
    )
    assert not findings
    back = get(book, "investment/backcast/constant")
    np.testing.assert_allclose(column(back, A)[1:], [80, 90, 100, 110, 120], rtol=1e-12)
    assert column(back, A, "assumed").tolist() == [0, 1, 1, 0, 0, 0]
    assert column(back, A, "status")[1:4].tolist() == [ESTIMATED, ESTIMATED, 0]
    k = 80 / 0.225
    for t, i in enumerate([80, 90, 100, 110, 120], 1):
        k = 0.9 * k + i
        assert _net(book)[t] == pytest.approx(k, rel=1e-12)
    assumed = column(get(book, NET), A, "assumed")
    assert assumed[2] == 1
    left = 0.9**3 * (0.9**2 * 80 / 0.225 + 0.9 * 80 + 90)
    assert assumed[5] == pytest.approx(left / _net(book)[5], rel=1e-6)


@pytest.mark.parametrize("indicator", [None, [NAN, 8.0, 9, 0, 0, 0], [NAN, NAN, NAN, 10, 11, 12]])
def test_without_a_usable_indicator_it_is_told_and_the_start_is_a_steady_state(indicator):
    flow = {A: [NAN, NAN, NAN, 100.0, 110, 121]}
    more = () if indicator is None else (block(INDICATOR, {"asset=N112": indicator}),)
    book, findings = build(
        {"N112": GEOMETRIC}, flow, *more, initial_stock="backcast_indicator", link_window=2
    )
    assert rules_of(findings) == ["no_indicator"]
    assert findings[0]["industry"] == "A"
    np.testing.assert_allclose(_net(book)[3], 0.9 * 100 / 0.2 + 100, rtol=1e-12)


RATIO = {**GEOMETRIC, "initial_stock": "capital_output_ratio", "capital_output_ratio": 2.0}


def test_a_capital_output_ratio_sets_the_net_stock_before_the_first_year():
    output = block("value_added/delivered/constant", {"industry=A": [NAN, 400.0, 410, 420]})
    book, findings = build(
        {"N112": {**RATIO, "gross_life": 3.0, "retirement.distribution": "simultaneous"}},
        {A: [NAN, 100.0, 100, 100]},
        output,
    )
    assert not findings
    opening = get(book, "net_stock/capital_output_ratio/constant")
    np.testing.assert_allclose(column(opening, A)[0], 800, rtol=1e-12)
    np.testing.assert_allclose(_net(book)[1], 0.9 * 800 + 100, rtol=1e-12)
    # The gross stock is scaled alike: 300 were there by the steady state, whose net stock is 1000.
    gross = get(book, "gross_stock/capital_output_ratio/constant")
    np.testing.assert_allclose(column(gross, A)[0], 240, rtol=1e-12)
    assert column(opening, A, "assumed")[0] == 1


@pytest.mark.parametrize(
    ("rule", "output"), [(RATIO, None), (RATIO, -5.0), ({**RATIO, "capital_output_ratio": None}, 400.0)]
)
def test_a_ratio_that_cannot_be_used_is_told(rule, output):
    rule = {name: value for name, value in rule.items() if value is not None}
    more = []
    if output is not None:
        more = [block("value_added/delivered/constant", {"industry=A": [NAN, output, 410, 420]})]
    book, findings = build({"N112": rule}, {A: [NAN, 100.0, 100, 100]}, *more)
    assert rules_of(findings) == ["no_capital_output_ratio"]
    np.testing.assert_allclose(_net(book)[1], 1000, rtol=1e-12)


def test_a_stock_from_zero_is_masked_until_little_is_missing():
    """d = 1/2, 100 a year: 200 (1 - 2^-t) is there, 2^-t of the whole is missing; .05 is met in the fifth year."""
    rule = {"efficiency": "cohort_geometric", "rate": 0.5}
    book, findings = build({"N112": rule}, {A: [NAN, *[100.0] * 8]}, initial_stock="zero", warm_up_limit=0.05)
    assert rules_of(findings) == ["warm_up"]
    assert findings[0]["time_period"] == "2015"
    t = np.arange(9)
    expected = np.where(t >= 5, 200 * (1 - 0.5**t), NAN)
    np.testing.assert_allclose(_net(book), expected, rtol=1e-12)
    loss = column(get(book, "consumption_of_fixed_capital/perpetual_inventory/constant"), A)
    np.testing.assert_allclose(loss[5:], 100 * (1 - 0.5 ** (t[5:] - 1)), rtol=1e-12)
    assert np.isnan(loss[:5]).all()
    # Nothing of it is assumed: the part that is missing is missing.
    assert not np.nan_to_num(
        column(get(book, NET), A, "assumed") if get(book, NET).assumed is not None else 0
    ).any()


def test_a_stock_from_zero_that_never_gets_warm_is_told():
    book, findings = build({"N112": GEOMETRIC}, {A: [NAN, *[100.0] * 4]}, initial_stock="zero")
    assert rules_of(findings) == ["warm_up"]
    assert findings[0]["severity"] == "warn"
    assert np.isnan(_net(book)).all()


def test_a_stock_that_rests_on_its_start_is_told_with_the_half_life():
    """5 % and growth of 3 %: 13.5 and 8.6 years (methods.md section 3)."""
    rule = {"efficiency": "cohort_geometric", "rate": 0.05}
    flow = [NAN, *(100 * 1.03 ** np.arange(5))]
    _, findings = build({"N112": rule}, {A: flow}, assumed_limit=0.6)
    assert rules_of(findings) == ["rests_on_start"]
    assert "13.5 years" in findings[0]["message"]
    assert "8.6 years" in findings[0]["message"]
    left = (0.95 / 1.03) ** 5
    assert float(findings[0]["found"]) == pytest.approx(left, abs=1e-4)
    _, findings = build({"N112": rule}, {A: flow}, assumed_limit=0.7)
    assert not findings


def test_a_finite_life_tells_when_half_of_the_start_is_gone():
    """Life 3, steady 60 a year: z = 1, 1.3/2.3, .5/2.3 leaves 4/9 of what stood after one year."""
    _, findings = build({"N112": HYPERBOLIC}, {A: [NAN, 60.0, 60]}, assumed_limit=0.1)
    assert rules_of(findings) == ["rests_on_start"]
    assert "after 1 years" in findings[0]["message"]


BENCHMARK = "net_stock/delivered/constant"


def test_a_benchmark_from_the_models_own_stock_gives_the_same_stock():
    flow = {A: [NAN, 100.0, 120, 90, 80, 130]}
    own, _ = build({"N112": GEOMETRIC}, flow)
    known = _net(own).copy()
    known[[0, 1, 2, 4, 5]] = NAN
    given = block(BENCHMARK, {A: list(known)}, chosen=False)
    book, findings = build({"N112": GEOMETRIC}, flow, given, initial_stock="benchmark")
    assert not findings
    np.testing.assert_allclose(_net(book), _net(own), rtol=1e-12)


def test_a_benchmark_below_later_investment_may_be_booked_as_another_change():
    """Steady state 1000; 1000 in 2011 and 2012 too, where only 150 is known to stand: 850 are booked."""
    flow = {A: [NAN, 100.0, 100, 100, 100]}
    given = block(BENCHMARK, {A: [NAN, NAN, 150.0, NAN, NAN]}, chosen=False)
    book, findings = build(
        {"N112": GEOMETRIC}, flow, given, initial_stock="benchmark", negative_factor="rescale"
    )
    assert [(f["rule"], f["severity"]) for f in findings] == [("benchmark_too_small", "warn")]
    np.testing.assert_allclose(_net(book)[1:], [1000, 150, 235, 311.5], rtol=1e-12)
    booked = column(get(book, "other_volume_changes/of_vintages/constant"), A)
    np.testing.assert_allclose(booked[1:], [0, -850, 0, 0], rtol=1e-12, atol=1e-9)


def test_the_gap_between_two_benchmarks_is_spread_evenly():
    """Steady 1000 in 2011; 900 in 2013. Two equal changes x, of which .9 x and x are left: x = -100 / 1.9."""
    flow = {A: [NAN, 100.0, 100, 100, 100]}
    given = block(BENCHMARK, {A: [NAN, 1000.0, NAN, 900.0, NAN]}, chosen=False)
    book, findings = build({"N112": GEOMETRIC}, flow, given, initial_stock="benchmarks_spread")
    assert not findings
    x = -100 / 1.9
    np.testing.assert_allclose(_net(book)[1:], [1000, 1000 + x, 900, 910], rtol=1e-12)
    spread = column(get(book, "other_volume_changes/benchmark_gap/constant"), A)
    np.testing.assert_allclose(spread, [NAN, NAN, x, x, NAN], rtol=1e-12)


def test_the_gap_is_met_with_a_finite_life_too():
    flow = {A: [NAN, 60.0, 60, 60, 60]}
    given = block(BENCHMARK, {A: [NAN, 100.0, NAN, 130.0, NAN]}, chosen=False)
    book, findings = build({"N112": HYPERBOLIC}, flow, given, initial_stock="benchmarks_spread")
    assert not findings
    assert _net(book)[[1, 3]] == pytest.approx([100, 130], rel=1e-12)
    spread = column(get(book, "other_volume_changes/benchmark_gap/constant"), A)
    assert spread[2] == spread[3] != 0


def test_a_gap_that_is_more_than_what_stands_between_is_told():
    """Life 3 and nothing invested in 2013: what stands then is less than an even loss."""
    flow = {A: [NAN, 60.0, 60, 0, 0, 600]}
    given = block(BENCHMARK, {A: [NAN, 100.0, NAN, NAN, NAN, 400.0]}, chosen=False)
    book, findings = build({"N112": HYPERBOLIC}, flow, given, initial_stock="benchmarks_spread")
    assert rules_of(findings) == ["no_even_change"]
    assert findings[0]["industry"] == "A"
    assert _net(book)[1] == pytest.approx(100, rel=1e-12)
    assert np.isfinite(_net(book)[1:]).all()
