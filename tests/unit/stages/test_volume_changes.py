"""Other changes in volume, against plain loops over vintages that are cut one by one."""

import numpy as np
import pytest
from small_blocks import block, column, get, rules_of
from small_stocks import GEOMETRIC, HYPERBOLIC, NAN, build

from keelbook.stages import stocks

A = "industry=A asset=N112"
CHANGES = "other_volume_changes/delivered/constant"
Z = [1, 1.3 / 2.3, 0.5 / 2.3, 0]
WEIGHTS = {"net_stock": Z, "productive_stock": [1, 0.8, 0.5, 0], "gross_stock": [1, 1, 1, 0]}
LOST = {"consumption_of_fixed_capital": Z, "retirements": [1, 1, 1, 0]}
FLOW, CHANGE = [60.0, 60, 90, 30, 60, 75], [0.0, -40, 0, 25, 0, 0]


def _standing(vintages: dict[int, float], w: list[float], t: int) -> float:
    return sum(i * w[t - s] for s, i in vintages.items() if t - s < 4)


def _by_loops() -> dict[str, list[float]]:
    """Return every stock and loss: vintages 60 each before the first year, cut by what each change leaves."""
    vintages = {-3: 60.0, -2: 60.0, -1: 60.0}
    out: dict[str, list[float]] = {name: [] for name in (*WEIGHTS, *LOST, "gross_change")}
    for t, flow in enumerate(FLOW):
        for name, w in LOST.items():
            lost = sum(i * (w[t - s - 1] - w[t - s]) for s, i in vintages.items() if t - s < 4)
            out[name].append(lost + flow * (1 - w[0]))
        vintages[t] = flow

        before = _standing(vintages, WEIGHTS["gross_stock"], t)
        left = 1 + CHANGE[t] / _standing(vintages, Z, t)
        vintages = {s: i * left for s, i in vintages.items()}
        out["gross_change"].append(_standing(vintages, WEIGHTS["gross_stock"], t) - before)
        for name, w in WEIGHTS.items():
            out[name].append(_standing(vintages, w, t))
    return out


@pytest.fixture
def made():
    book, findings = build(
        {"N112": HYPERBOLIC}, {A: [NAN, *FLOW]}, block(CHANGES, {A: [NAN, NAN, -40.0, NAN, 25, NAN, NAN]})
    )
    assert not findings
    return book


@pytest.mark.parametrize("measure", [*WEIGHTS, *LOST])
def test_all_vintages_are_hit_alike(made, measure):
    got = column(get(made, f"{measure}/perpetual_inventory/constant"), A)
    np.testing.assert_allclose(got[1:], _by_loops()[measure], rtol=1e-12)


def test_the_change_of_the_gross_stock_is_stored(made):
    got = column(get(made, "gross_volume_changes/of_vintages/constant"), A)
    np.testing.assert_allclose(got[1:], _by_loops()["gross_change"], rtol=1e-12, atol=1e-9)
    net = get(made, "other_volume_changes/of_vintages/constant")
    np.testing.assert_allclose(column(net, A)[1:], CHANGE, rtol=1e-12, atol=1e-9)
    # Those delivered stand as the changes of the net stock; these are the same again.
    assert not net.chosen.any()


def test_a_catastrophe_in_the_geometric_by_hand():
    book, findings = build(
        {"N112": GEOMETRIC},
        {A: [NAN, 100.0, 100, 100, 100]},
        block(CHANGES, {A: [NAN, NAN, -400.0, NAN, NAN]}),
    )
    assert not findings
    net = column(get(book, "net_stock/perpetual_inventory/constant"), A)
    np.testing.assert_allclose(net[1:], [1000, 600, 640, 676], rtol=1e-12)
    lost = column(get(book, "consumption_of_fixed_capital/perpetual_inventory/constant"), A)
    np.testing.assert_allclose(lost[1:], [100, 100, 60, 64], rtol=1e-12)


def test_series_without_changes_are_left_as_they_are():
    other = "industry=C asset=N112"
    rows = {A: [NAN, 100.0, 100, 100, 100], other: [NAN, 100.0, 120, 90, 100]}
    plain, _ = build({"N112": GEOMETRIC}, rows)
    book, _ = build({"N112": GEOMETRIC}, rows, block(CHANGES, {A: [NAN, NAN, -400.0, NAN, NAN]}))
    key = "net_stock/perpetual_inventory/constant"
    np.testing.assert_array_equal(column(get(book, key), other), column(get(plain, key), other))
    total = column(get(book, key), "industry=_T asset=N112")
    np.testing.assert_allclose(total, column(get(book, key), A) + column(get(book, key), other), rtol=1e-12)


@pytest.mark.parametrize("change", [-1000.0, -1200.0])
def test_a_loss_of_all_there_is_or_more_stops_the_run(change):
    book, findings = build(
        {"N112": GEOMETRIC},
        {A: [NAN, 100.0, 100, 100, 100]},
        block(CHANGES, {A: [NAN, NAN, change, NAN, NAN]}),
    )
    (found,) = [f for f in findings if f["rule"] == "change_exceeds_stock"]
    assert (found["severity"], found["time_period"], found["industry"]) == ("stop", "2012", "A")
    net = column(get(book, "net_stock/perpetual_inventory/constant"), A)
    assert net[1] == pytest.approx(1000)
    assert np.isnan(net[2:]).all()


def test_a_change_of_a_stock_that_is_not_built_is_told():
    rows = {A: [NAN, 100.0, 100, 100]}
    _, findings = build(
        {"N112": GEOMETRIC}, rows, block(CHANGES, {"industry=C asset=N112": [NAN, NAN, -4.0, NAN]})
    )
    assert rules_of(findings) == ["change_without_stock"]
    assert findings[0]["industry"] == "C"


def test_a_change_that_the_stock_does_not_show_stops_the_run(monkeypatch):
    """The balance tests what was delivered against stocks and losses from vintages."""
    true = stocks.surviving

    def blind(kernels):
        f = true(kernels)
        return lambda change, *more: f(0.99 * change, *more)

    monkeypatch.setattr(stocks, "surviving", blind)
    _, findings = build(
        {"N112": GEOMETRIC}, {A: [NAN, 100.0, 100, 100]}, block(CHANGES, {A: [NAN, NAN, -400.0, NAN]})
    )
    assert [(f["rule"], f["time_period"]) for f in findings] == [("balance", "2012")]


@pytest.mark.parametrize(("year", "told"), [(2, True), (3, False)])
def test_a_change_before_the_benchmark_that_sets_the_start_is_told(year, told):
    change, known = [NAN] * 5, [NAN, NAN, 900.0, NAN, NAN]
    change[year] = -50.0
    _, findings = build(
        {"N112": GEOMETRIC},
        {A: [NAN, 100.0, 100, 100, 100]},
        block(CHANGES, {A: change}),
        block("net_stock/delivered/constant", {A: known}, chosen=False),
        initial_stock="benchmark",
    )
    assert rules_of(findings) == (["change_before_benchmark"] if told else [])
