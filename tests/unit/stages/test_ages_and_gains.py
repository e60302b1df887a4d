"""Average age of the stock, and what prices alone add to its value."""

import numpy as np
import pytest
from small_blocks import block, column, get, rules_of, run_stage
from small_stocks import GEOMETRIC, HYPERBOLIC, NAN, build, stock_params

from keelbook.stages import stocks

A = "industry=A asset=N112"
AGE = "average_age/perpetual_inventory/constant"
CHANGES = "other_volume_changes/delivered/constant"


@pytest.mark.parametrize(("timing", "young"), [("start", 1.0), ("mid", 0.5), ("end", 0.0)])
def test_a_steady_geometric_stock_keeps_its_age(timing, young):
    """q = .9 / 1.04: ages v + a with weights q^v have the mean a + q / (1 - q), in every year."""
    flow = [NAN, *(100 * 1.04 ** np.arange(5))]
    book, _ = build({"N112": GEOMETRIC}, {A: flow}, timing=timing)
    q = 0.9 / 1.04
    np.testing.assert_allclose(column(get(book, AGE), A)[1:], young + q / (1 - q), rtol=1e-12)


def _by_loops(flow, weights, change):
    """Return mean ages at year ends, after three years with 60 each; the change cuts the vintages of 2012."""
    vintages = {-3: 60.0, -2: 60.0, -1: 60.0}
    out = []
    for t, invested in enumerate(flow):
        vintages[t] = invested
        left = {s: i * weights[t - s] for s, i in vintages.items() if t - s < 3}
        out.append(sum((t - s) * x for s, x in left.items()) / sum(left.values()))
        if t == 1:
            vintages = {s: i * (1 + change / sum(left.values())) for s, i in vintages.items()}
    return out


@pytest.mark.parametrize("change", [0.0, -30.0])
def test_ages_of_a_finite_life_by_loops(change):
    """A loss of all vintages alike makes none of them older, but what comes later counts more."""
    flow = [60.0, 60, 0, 90, 30]
    book, findings = build(
        {"N112": HYPERBOLIC}, {A: [NAN, *flow]}, block(CHANGES, {A: [NAN, NAN, change, NAN, NAN, NAN]})
    )
    assert not findings
    expected = _by_loops(flow, [1, 1.3 / 2.3, 0.5 / 2.3], change)
    np.testing.assert_allclose(column(get(book, AGE), A)[1:], expected, rtol=1e-12)


PRICE = [1.0, 1.0, 1.2, 1.5, 1.1]
YEAR_END = [1.0, 1.1, 1.3, 1.4, 1.05]


def _at_prices(*more):
    prices = (
        block("investment_price/rebased/index", {"asset=N112": PRICE}),
        block("investment_price/year_end/year_end", {"asset=N112": YEAR_END}),
    )
    flow = block("investment/deflated/constant", {A: [NAN, 100.0, 100, 100, 100]})
    return run_stage(stocks.STAGE, stock_params({"N112": GEOMETRIC}), flow, *prices, *more)


def test_the_account_at_current_prices_closes():
    """1000 all along, but for a loss of 400 in 2012; flows at average prices, stocks at those of the year's end."""
    book, findings = _at_prices(block(CHANGES, {A: [NAN, NAN, -400.0, NAN, NAN]}))
    assert not findings
    gains = column(get(book, "holding_gains/perpetual_inventory/current"), A)
    assert np.isnan(gains[1])
    closing = column(get(book, "net_stock/perpetual_inventory/year_end"), A)
    np.testing.assert_allclose(closing[1:], [1100, 780, 640 * 1.4, 676 * 1.05], rtol=1e-12)
    other = column(get(book, "other_volume_changes/of_vintages/current"), A)
    assert other[2] == pytest.approx(-480, rel=1e-12)
    assert gains[2] == pytest.approx(780 - 1100 - 1.2 * (100 - 100) + 480, rel=1e-12)
    assert gains[3] == pytest.approx(640 * 1.4 - 780 - 1.5 * (100 - 60), rel=1e-12)


def test_changes_delivered_at_current_prices_are_deflated_as_investment_is():
    """480 at the prices of 2012, 1.2, are 400."""
    book, findings = _at_prices(
        block("other_volume_changes/delivered/current", {A: [NAN, NAN, -480.0, NAN, NAN]})
    )
    assert not findings
    net = column(get(book, "net_stock/perpetual_inventory/constant"), A)
    np.testing.assert_allclose(net[1:], [1000, 600, 640, 676], rtol=1e-12)
    booked = get(book, "other_volume_changes/of_vintages/current")
    assert column(booked, A)[2] == pytest.approx(-480, rel=1e-12)
    assert not booked.chosen.any()


def test_gains_of_industries_add_up():
    book, _ = _at_prices()
    gains = get(book, "holding_gains/perpetual_inventory/current")
    np.testing.assert_allclose(column(gains, "industry=_T asset=_T"), column(gains, A), rtol=1e-12)


@pytest.mark.parametrize("spoilt", ["holding_gains", "at_current_prices", "at_replacement_cost"])
def test_an_account_at_current_prices_that_does_not_close_stops_the_run(monkeypatch, spoilt):
    true = stocks.derive

    def wrong(formula, *args, **options):
        made = true(formula, *args, **options)
        if formula.name == spoilt:
            value = made.value.copy()
            value[3] *= 1.001
            object.__setattr__(made, "value", value)
        return made

    monkeypatch.setattr(stocks, "derive", wrong)
    _, findings = _at_prices()
    assert rules_of(findings) == ["balance_current"]
    assert (findings[0]["severity"], findings[0]["time_period"]) == ("stop", "2013")
