"""Parameters that hold from a year on: for the vintages of it and later ones, or for all that is alive."""

import numpy as np
import pytest
from small_blocks import block, column, get
from small_stocks import AT_ONCE, GEOMETRIC, NAN, build

A = "industry=A asset=N112"
FLOW = [100.0, 120, 90, 60, 110, 80]
Z3, Z2 = [1, 1.3 / 2.3, 0.5 / 2.3, 0], [1, (2 / 3) / (1 + 2 / 3), 0]
LIVES = {
    "efficiency": "hyperbolic", "life": 3.0, "b": 0.5, "discount_rate": 0.0, **AT_ONCE,
    "efficiency@2013": "hyperbolic", "life@2013": 2.0, "b@2013": 0.5, "discount_rate@2013": 0.0,
    **{f"{name}@2013": value for name, value in AT_ONCE.items()},
}  # fmt: skip


def _of(book, measure):
    return column(get(book, f"{measure}/perpetual_inventory/constant"), A)[1:]


def test_a_life_that_is_shorter_for_later_vintages():
    """Life 3 up to 2012, 2 from 2013 on: investment of the third year on lasts two years."""
    start = {"initial_stock": "backcast_growth", "backcast_growth": 0.0}
    book, findings = build({"N112": LIVES}, {A: [NAN, *FLOW]}, **start)
    assert not findings
    flow = dict(zip(range(-3, 6), [100.0] * 3 + FLOW, strict=True))

    def stock(t, of):
        return sum(x * of(s)[t - s] for s, x in flow.items() if 0 <= t - s < len(of(s)))

    def of(s):
        return Z2 if s >= 2 else Z3

    net = [stock(t, of) for t in range(6)]
    np.testing.assert_allclose(_of(book, "net_stock"), net, rtol=1e-12)
    gross = [stock(t, lambda s: [1.0] * (len(of(s)) - 1)) for t in range(6)]
    np.testing.assert_allclose(_of(book, "gross_stock"), gross, rtol=1e-12)
    lost = [flow[t] - net[t] + stock(t - 1, of) for t in range(6)]
    np.testing.assert_allclose(_of(book, "consumption_of_fixed_capital"), lost, rtol=1e-12)


RATES = {**GEOMETRIC, "efficiency@2013": "cohort_geometric", "rate@2013": 0.3}


@pytest.mark.parametrize(("timing", "half"), [("start", 1.0), ("mid", 0.5), ("end", 0.0)])
def test_a_rate_that_changes_for_all_that_is_alive(timing, half):
    rates = [0.1, 0.1, 0.3, 0.3, 0.3, 0.3]
    book, findings = build(
        {"N112": {**RATES, "applies_to": "stock"}}, {A: [NAN, *FLOW]}, timing=timing,
        initial_stock="backcast_growth", backcast_growth=0.0,
    )  # fmt: skip
    assert not findings
    k = (1 - half * 0.1) * 100 / 0.1
    net, lost = [], []
    for d, i in zip(rates, FLOW, strict=True):
        lost.append(d * k + half * d * i)
        k = (1 - d) * k + (1 - half * d) * i
        net.append(k)
    np.testing.assert_allclose(_of(book, "net_stock"), net, rtol=1e-12)
    np.testing.assert_allclose(_of(book, "productive_stock"), net, rtol=1e-12)
    np.testing.assert_allclose(_of(book, "consumption_of_fixed_capital"), lost, rtol=1e-12)


def test_a_rate_for_later_vintages_leaves_the_older_ones():
    book, _ = build({"N112": RATES}, {A: [NAN, *FLOW]}, initial_stock="backcast_growth", backcast_growth=0.0)
    old = [
        1000 * 0.9 ** (t + 1) + sum(FLOW[s] * 0.9 ** (t - s) for s in range(min(t + 1, 2))) for t in range(6)
    ]
    new = [sum(FLOW[s] * 0.7 ** (t - s) for s in range(2, t + 1)) for t in range(6)]
    np.testing.assert_allclose(_of(book, "net_stock"), np.add(old, new), rtol=1e-12)


@pytest.mark.parametrize("rule", [LIVES, RATES, {**RATES, "applies_to": "stock"}])
def test_changes_and_benchmarks_go_with_them(rule):
    """A loss in 2014 of a stock that meets its benchmark of 2012: the balance is tested by the stage itself."""
    change = block("other_volume_changes/delivered/constant", {A: [NAN] * 4 + [-20.0, NAN, NAN]})
    known = block("net_stock/delivered/constant", {A: [NAN, NAN, 330.0] + [NAN] * 4}, chosen=False)
    book, findings = build({"N112": rule}, {A: [NAN, *FLOW]}, change, known, initial_stock="benchmark")
    assert not findings
    net, lost = _of(book, "net_stock"), _of(book, "consumption_of_fixed_capital")
    assert net[1] == pytest.approx(330, rel=1e-12)
    other = np.array([0, 0, 0, -20, 0, 0])
    np.testing.assert_allclose(np.diff(net), (FLOW - lost + other)[1:], rtol=1e-11)
