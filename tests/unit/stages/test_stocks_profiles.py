"""Stocks by declared prices, and by lives that are spread: what the small account of test_stocks.py leaves out."""

from dataclasses import replace

import numpy as np
import pytest
from small_blocks import block, choice, column, get, params, rules_of, run_stage

from keelbook.stages import stocks

NAN = np.nan
FLOW = [NAN, 60.0, 60, 60, 0, 0]
AT_ONCE = {"retirement": "simultaneous", "retirement.distribution": "simultaneous"}
NORMAL = {
    "retirement": "truncated_normal",
    "retirement.distribution": "truncated_normal",
    "retirement.sd": 0.5,
    "retirement.low": 0.02,
    "retirement.high": 1.98,
}


def _stocks(*rules: dict, mode: str = "pooled"):
    """Return the book and findings of one industry for each rule, all of asset N112, timing `end`."""
    names = dict(zip("AC", rules, strict=False))

    def of(asset: str, industry: str):
        return tuple(choice(f"asset.{k}", v) for k, v in names[industry].items())

    made = params("stocks", assets=of, timing="end", age_price_mode=mode)
    window, limit = choice("capital.trend_window", 2), choice("capital.assumed_limit", 1.0)
    made = replace(made, start=replace(made.start, trend_window=window, assumed_limit=limit))
    ones = block("investment_price/rebased/index", {"asset=_T": [1.0] * len(FLOW)})
    year_end = block("investment_price/year_end/year_end", {"asset=_T": [1.0] * len(FLOW)})
    flow = block("investment/deflated/constant", {f"industry={i} asset=N112": FLOW for i in names})
    return run_stage(stocks.STAGE, made, flow, ones, year_end)


def _column(book, measure: str, industry: str):
    return column(get(book, f"{measure}/perpetual_inventory/constant"), f"industry={industry} asset=N112")[1:]


def test_straight_line_prices_by_hand():
    """Life 3, no discounting, 60 a year for ever: a third is lost in each year, and no efficiency is lost till then."""
    book, findings = _stocks({"age_price": "straight_line", "life": 3.0, "discount_rate": 0.0, **AT_ONCE})
    np.testing.assert_allclose(_column(book, "net_stock", "A"), [120, 120, 120, 60, 20], rtol=1e-12)
    np.testing.assert_allclose(
        _column(book, "consumption_of_fixed_capital", "A"), [60, 60, 60, 60, 40], rtol=1e-12
    )
    np.testing.assert_allclose(_column(book, "productive_stock", "A"), [180, 180, 180, 120, 60], rtol=1e-12)
    assert not findings


def test_an_efficiency_that_rises_with_age_is_told():
    """Life 3, R = 1.5: prices 1, 1/2, 1/4, so at no interest an asset gives 1/2, 1/4 and then 1/4: no rise.

    With R = 1 the prices are 1, 2/3, 4/9: it gives 1/3, 2/9 and then 4/9.
    """
    rule = {"age_price": "declining_balance", "life": 3.0, "discount_rate": 0.0, **AT_ONCE}
    book, findings = _stocks({**rule, "declining_balance_rate": 1.5}, {**rule, "declining_balance_rate": 1.0})
    np.testing.assert_allclose(_column(book, "net_stock", "A")[0], 60 * (1 + 1 / 2 + 1 / 4), rtol=1e-12)
    np.testing.assert_allclose(
        _column(book, "productive_stock", "A")[0], 60 * (1 + 1 / 2 + 1 / 2), rtol=1e-12
    )
    assert rules_of(findings) == ["prices_against_discount_rate"]
    assert (findings[0]["industry"], findings[0]["severity"]) == ("C", "warn")
    assert findings[0]["found"] == "1.3333 after 0.6667, 2 periods after investment"


def test_a_negative_efficiency_is_told():
    """Where the shortest lives are over, prices fall more slowly than money loses at -5 % a year."""
    rule = {"age_price": "declining_balance", "declining_balance_rate": 1.0, "life": 30.0}
    _, findings = _stocks({**rule, "discount_rate": -0.05, **NORMAL})
    assert rules_of(findings) == ["prices_against_discount_rate"]
    # It goes on falling for some years: only the sign is wrong here.
    after, before = findings[0]["found"].split(", ")[0].split(" after ")
    assert float(after) < 0 < float(before)


@pytest.mark.parametrize("pattern", [AT_ONCE, NORMAL])
def test_gross_stock_of_a_cohort_rate_has_the_declared_lives(pattern):
    book, findings = _stocks(
        {"efficiency": "cohort_geometric", "rate": 0.07, "gross_life": 4.5, **pattern},
        {"efficiency": "constant", "life": 4.5, "discount_rate": 0.0, **pattern},
    )
    for measure in ("gross_stock", "retirements"):
        np.testing.assert_array_equal(_column(book, measure, "A"), _column(book, measure, "C"))
    assert not findings


def test_spread_lives_by_hand():
    """A mean of 1.5 and lives on (0, 3): lives of 1 and 2, half of each, as the mean is kept; linear from there."""
    spread = {"retirement": "x", "retirement.distribution": "delayed_linear", "retirement.half_width": 1 / 3}
    book, _ = _stocks({"efficiency": "linear", "life": 1.5, "discount_rate": 0.0, **spread})
    np.testing.assert_allclose(_column(book, "gross_stock", "A"), [90, 90, 90, 30, 0], rtol=1e-12, atol=1e-12)
    # Of lives of 2 half the efficiency is left after a year: a quarter of the vintage.
    np.testing.assert_allclose(
        _column(book, "productive_stock", "A"), [75, 75, 75, 15, 0], rtol=1e-12, atol=1e-12
    )


def test_prices_averaged_over_lives_give_less_than_prices_of_the_cohort():
    rule = {"efficiency": "constant", "life": 3.0, "discount_rate": 0.04, **NORMAL}
    pooled, by_life = (_column(_stocks(rule, mode=m)[0], "net_stock", "A") for m in ("pooled", "by_life"))
    assert (by_life < pooled).all()
    for mode in ("pooled", "by_life"):
        np.testing.assert_array_equal(
            _column(_stocks(rule, mode=mode)[0], "productive_stock", "A"),
            _column(_stocks(rule)[0], "productive_stock", "A"),
        )
