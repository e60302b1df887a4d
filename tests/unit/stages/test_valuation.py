import numpy as np
import pytest
from small_blocks import REFERENCE_YEAR, block, column, get, holds, params, rules_of, run_stage

from keelbook.blocks import Block
from keelbook.methods import index_numbers
from keelbook.stages import stocks, valuation
from keelbook.stages.base import Book
from keelbook.stages.totals import totals

NAN = np.nan
FIRST = REFERENCE_YEAR - 1
YEARS = 6
KEYS = ("industry=A asset=N112", "industry=A asset=N113", "industry=C asset=N112")
RNG = np.random.default_rng(5)
FLOWS = {key: list(RNG.uniform(20, 90, YEARS)) for key in KEYS}
NET = {key: list(RNG.uniform(300, 900, YEARS)) for key in KEYS}
PRICES = {"asset=N112": [0.7, 1.0, 1.2, 1.5, 1.4, 1.9], "asset=N113": [1.2, 1.0, 0.8, 0.7, 0.5, 0.4]}
ALL = "industry=_T asset=_T"
ALL_BASES = ("current", "previous_year", "historic")


def _whole(key: str, rows: dict[str, list[float]]) -> list[Block]:
    one = block(key, rows, first=FIRST)
    return [one, *totals(one, ("industry", "asset"))]


def _run(*extra: Block, prices=None, flows=None, **changes):
    return run_stage(
        valuation.STAGE,
        params("valuation", **{"price_bases": ALL_BASES, "chaining": "laspeyres", **changes}),
        *_whole("investment/deflated/constant", flows or FLOWS),
        *_whole("net_stock/delivered/constant", NET),
        block("investment_price/rebased/index", prices or PRICES, first=FIRST),
        *extra,
    )


def _price(key: str) -> np.ndarray:
    return np.array(PRICES[key.split()[1]])


def test_prices_of_the_year_the_one_before_and_the_one_after():
    book, _ = _run(chaining="fisher")
    q, p = np.array(NET[KEYS[1]]), _price(KEYS[1])
    for basis, price in (
        ("current", p),
        ("previous_year", np.r_[NAN, p[:-1]]),
        ("next_year", np.r_[p[1:], NAN]),
    ):
        found = get(book, f"net_stock/revalued/{basis}")
        np.testing.assert_allclose(column(found, KEYS[1]), q * price, rtol=1e-15)
        both = [column(found, KEYS[0]), column(found, KEYS[1])]
        np.testing.assert_allclose(column(found, "industry=A asset=_T"), np.sum(both, axis=0), rtol=1e-14)


def test_only_what_is_declared_is_made():
    book, _ = _run(price_bases=(), chaining="none")
    assert not book.keys()
    book, _ = _run(price_bases=("previous_year",), chaining="none")
    assert {(b.key.measure, b.key.price_basis) for b in book} == {
        ("investment", "previous_year"),
        ("net_stock", "previous_year"),
    }


def test_delivered_investment_at_current_prices_stays_the_chosen_one():
    book, _ = _run(block("investment/delivered/current", FLOWS, first=FIRST), chaining="laspeyres")
    at = get(book, "investment/revalued/current")
    elementary = np.isin(at.series.key, block("x/x/x", FLOWS).series.key)
    assert not at.chosen[elementary].any()
    assert at.chosen[~elementary].all()


@pytest.mark.parametrize("formula", ["laspeyres", "fisher", "tornqvist"])
@pytest.mark.parametrize("measure", ["investment", "net_stock"])
def test_a_chained_total_against_the_index_formula(formula, measure):
    """Independently: links of all three series by the index formula itself, chained, at the reference year's level."""
    book, findings = _run(chaining=formula)
    rows = FLOWS if measure == "investment" else NET
    q = np.array([rows[k] for k in KEYS]).T
    p = np.array([_price(k) for k in KEYS]).T
    index = index_numbers.chain(index_numbers.links(formula, q, p), REFERENCE_YEAR - FIRST)
    parts = q.sum(axis=1)
    level = index * parts[REFERENCE_YEAR - FIRST]
    np.testing.assert_allclose(column(get(book, f"{measure}_index/{formula}/index"), ALL), index, rtol=1e-12)
    chain = get(book, f"{measure}/chained_{formula}/constant")
    np.testing.assert_allclose(column(chain, ALL), level, rtol=1e-12)
    gap = get(book, f"aggregation_discrepancy/{measure}_{formula}/constant")
    np.testing.assert_allclose(column(gap, ALL), level - parts, rtol=1e-9, atol=1e-9)
    assert np.abs(column(gap, ALL)).max() > 1
    assert not chain.chosen.any()
    assert not findings


def test_an_aggregate_of_one_series_has_no_discrepancy():
    book, _ = _run(chaining="fisher")
    gap = get(book, "aggregation_discrepancy/net_stock_fisher/constant")
    assert np.abs(column(gap, "industry=C asset=_T")).max() < 1e-9
    assert not holds(gap, KEYS[0])


def test_a_laspeyres_link_counts_what_was_not_there_before():
    flows = {**FLOWS, KEYS[0]: [0.0, 0, 0, 30, 30, 30]}
    book, findings = _run(flows=flows, chaining="laspeyres")
    q = np.array([flows[k] for k in KEYS]).T
    p = np.array([_price(k) for k in KEYS]).T
    growth = column(get(book, "investment_growth/laspeyres/_Z"), ALL)
    assert growth[3] == pytest.approx(np.log((p[2] @ q[3]) / (p[2] @ q[2])), rel=1e-12)
    assert not findings


def test_a_chain_that_breaks_is_told():
    flows = {**FLOWS, KEYS[0]: [10.0, 10, 10, -200, 10, 10]}
    _, findings = _run(flows=flows, chaining="laspeyres")
    told = {(f["rule"], f["industry"], f["measure"]) for f in findings}
    assert ("chain_broken", "_T", "investment") in told
    assert ("chain_broken", "C", "investment") not in told
    assert {f["time_period"] for f in findings} == {str(FIRST + 3)}


def test_without_prices_it_says_so():
    _, findings = run_stage(
        valuation.STAGE,
        params("valuation", price_bases=ALL_BASES, chaining="laspeyres"),
        *_whole("net_stock/delivered/constant", NET),
    )
    assert rules_of(findings) == ["not_computed"]


# --- historic cost -------------------------------------------------------------------------------------------

LONG = 18
LONG_PRICES = {"asset=N1131": list(1.05 ** np.arange(-6.0, LONG - 6))}
LONG_FLOWS = {"industry=A asset=N1131": [NAN, *RNG.uniform(40, 60, LONG - 1)]}


def _built(prices: dict[str, list[float]]) -> tuple[Book, list[dict[str, object]]]:
    """Stocks by the shipped rules, then their valuation."""
    first = REFERENCE_YEAR - 7
    flow = block("investment/deflated/constant", LONG_FLOWS, first=first)
    price = block("investment_price/rebased/index", prices, first=first)
    year_end = block("investment_price/year_end/year_end", prices, first=first, part=False)
    made, _ = run_stage(stocks.STAGE, params("stocks"), flow, price, year_end)
    blocks = [*made, flow, price]
    book, findings = run_stage(
        valuation.STAGE, params("valuation", price_bases=ALL_BASES, chaining="none"), *blocks
    )
    return Book([*made, *book]), findings


def test_at_constant_prices_historic_cost_is_the_stock_itself():
    book, findings = _built({"asset=N1131": [1.0] * LONG})
    key = "industry=A asset=N1131"
    np.testing.assert_allclose(
        column(get(book, "net_stock/perpetual_inventory/historic"), key),
        column(get(book, "net_stock/perpetual_inventory/constant"), key),
        rtol=1e-13,
    )
    assert not findings


def test_historic_cost_keeps_the_price_of_each_vintage():
    """Vintages by differences: what one more unit of investment in year s adds to the stock of t, at P_s not P_t."""
    book, _ = _built(LONG_PRICES)
    key = "industry=A asset=N1131"
    price = np.array(LONG_PRICES["asset=N1131"])
    volume = column(get(book, "net_stock/perpetual_inventory/constant"), key)
    historic = column(get(book, "net_stock/perpetual_inventory/historic"), key)
    opening = column(get(book, "net_stock/opening/historic"), key)
    first = int(np.flatnonzero(np.isfinite(opening))[0])
    assert opening[first] == pytest.approx(
        column(get(book, "net_stock/steady_state/constant"), key)[first] * price[first + 1], rel=1e-14
    )
    # Geometric: W_t = (1 - d) W_(t-1) + w(0) I_t in volumes and at historic cost alike, with the same d and w(0).
    flow = np.array(LONG_FLOWS[key])
    later = np.arange(first + 2, LONG)
    a = np.stack([volume[later - 1], flow[later]], axis=1)
    kept, new = np.linalg.lstsq(a, volume[later], rcond=None)[0]
    np.testing.assert_allclose(a @ [kept, new], volume[later], rtol=1e-9)
    np.testing.assert_allclose(
        historic[later], kept * historic[later - 1] + new * flow[later] * price[later], rtol=1e-9
    )
    assert (historic[later] < price[later] * volume[later]).all()


def test_a_delivered_stock_has_no_historic_cost_and_it_is_told():
    first = REFERENCE_YEAR - 7
    flow = block("investment/deflated/constant", LONG_FLOWS, first=first)
    price = block("investment_price/rebased/index", {"asset=_T": [1.0] * LONG}, first=first)
    year_end = block(
        "investment_price/year_end/year_end", {"asset=_T": [1.0] * LONG}, first=first, part=False
    )
    land = block("net_stock/delivered/constant", {"industry=A asset=N11": [5.0] * LONG}, first=first)
    made, _ = run_stage(stocks.STAGE, params("stocks"), flow, price, year_end, land)
    _, findings = run_stage(
        valuation.STAGE, params("valuation", price_bases=ALL_BASES, chaining="none"), *made, flow, price, land
    )
    assert [(f["rule"], f["asset"]) for f in findings] == [("no_historic_cost", "N11")]
