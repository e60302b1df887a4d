"""Every declared choice of the user cost: form, holding gains, rates side by side, taxes, remedies, timing."""

import numpy as np
import pytest
from small_blocks import REFERENCE_YEAR, block, choice, column, get, params, rules_of, run_stage

from keelbook.blocks import ESTIMATED, Block, Origin
from keelbook.stages import services
from keelbook.stages.base import Book
from keelbook.stages.totals import totals

NAN = np.nan
FIRST = REFERENCE_YEAR - 1

NET = "net_stock/perpetual_inventory/constant"
PRODUCTIVE = "productive_stock/perpetual_inventory/constant"
WEAR = "consumption_of_fixed_capital/perpetual_inventory"
A, B, LAND = "industry=A asset=N112", "industry=A asset=N113", "industry=A asset=N11"
YEARS = 6


def _made_with(one: Block, **parameters: object) -> Block:
    """Return the block as if its series had been made with some asset parameters."""
    chosen = tuple(choice(name.replace("__", "."), value) for name, value in parameters.items())
    n = len(one.series)
    origin = Origin((), np.zeros(n, np.int32), ((), chosen), np.ones(n, np.int32))
    return Block(
        one.key, one.series, one.periods, one.value.copy(), origin, one.chosen.copy(), one.part.copy()
    )


GEOMETRIC = {
    "asset__efficiency": "cohort_geometric",
    "asset__rate": 0.1,
    "capital__timing": "mid",
    "capital__age_price_mode": "pooled",
    "asset__retirement__distribution": "simultaneous",
}

RNG = np.random.default_rng(11)
STOCKS = {key: list(RNG.uniform(80, 120, YEARS)) for key in (A, B, LAND)}
LOSSES = {key: list(RNG.uniform(4, 8, YEARS)) for key in (A, B)}
FLOWS = {key: list(RNG.uniform(10, 20, YEARS)) for key in (A, B)}
PRICES = {f"asset={a}": list(RNG.uniform(0.9, 1.1, YEARS)) for a in ("N112", "N113", "N11")}
ENDS = {f"asset={a}": list(RNG.uniform(0.9, 1.1, YEARS)) for a in ("N112", "N113", "N11")}
INCOME = {"industry=A": list(RNG.uniform(60, 80, YEARS))}
OUTPUT = list(RNG.uniform(190, 210, YEARS)), list(RNG.uniform(190, 210, YEARS))


def _run(*extra: Block, ends=None, income=None, **changes):
    volumes = _made_with(block(f"{WEAR}/constant", LOSSES, first=FIRST), **GEOMETRIC)
    elementary = [
        _made_with(block(NET, STOCKS, first=FIRST), asset__discount_rate=0.04),
        block(PRODUCTIVE, STOCKS, first=FIRST),
        block(f"{WEAR}/current", LOSSES, first=FIRST),
        volumes,
    ]
    return run_stage(
        services.STAGE,
        params("services", **{"discount_rate_gap": 1.0, **changes}),
        *(x for one in elementary for x in (one, *totals(one, ("industry", "asset")))),
        block("investment/deflated/constant", FLOWS, first=FIRST),
        block("investment_price/rebased/index", PRICES, first=FIRST),
        block("investment_price/year_end/year_end", ends or ENDS, first=FIRST, part=False),
        block("capital_income/hours/current", income or INCOME, first=FIRST),
        block("value_added/delivered/current", {"industry=_T": OUTPUT[0]}, first=FIRST),
        block("value_added/delivered/constant", {"industry=_T": OUTPUT[1]}, first=FIRST),
        *extra,
    )


def _figures(table: dict[str, list[float]], key: str) -> np.ndarray:
    return np.array(table[key])


def _before(x: np.ndarray) -> np.ndarray:
    return np.r_[NAN, x[:-1]]


def _general_inflation() -> np.ndarray:
    price = np.array(OUTPUT[0]) / np.array(OUTPUT[1])
    return price / _before(price) - 1


def _exhausts(book: Book) -> None:
    cost = column(get(book, "capital_compensation/*/current"), "industry=A asset=_T")[1:]
    np.testing.assert_allclose(cost, INCOME["industry=A"][1:], rtol=1e-10)


GAINS = ("actual", "smoothed", "excluded")
RATES = {"tax_rate": 0.3, "tax_allowances": 0.8, "tax_credit": 0.05, "property_tax": 0.02}


@pytest.mark.parametrize("form", ["average", "opening"])
@pytest.mark.parametrize("gains", GAINS)
@pytest.mark.parametrize("taxes", ["none", "declared"])
def test_the_endogenous_rate_exhausts_capital_income_in_every_form(form, gains, taxes):
    book, _ = _run(user_cost_form=form, holding_gains=gains, taxes=taxes, **RATES)
    _exhausts(book)
    assert np.isfinite(column(get(book, "user_cost/endogenous/current"), LAND)[1:]).all()


def test_the_opening_form_by_hand():
    """B = Pe_(t-1) W_(t-1), D = Pe_t (CFC - (1 - w(0)) I) with w(0) = 1 - .1 / 2, H = (Pe_t - Pe_(t-1)) W_(t-1)."""
    book, _ = _run(user_cost_form="opening")
    pe, w = _figures(ENDS, "asset=N112"), _figures(STOCKS, A)
    base = _before(pe) * _before(w)
    np.testing.assert_allclose(column(get(book, "asset_base/opening/current"), A), base, rtol=1e-14)
    lost = pe * (_figures(LOSSES, A) - 0.05 * _figures(FLOWS, A))
    wear = get(book, "consumption_of_fixed_capital/opening_vintages/year_end")
    np.testing.assert_allclose(column(wear, A), lost, rtol=1e-13)
    gain = (pe - _before(pe)) * _before(w)
    np.testing.assert_allclose(column(get(book, "revaluation/actual/current"), A), gain, rtol=1e-12)
    rate = column(get(book, "rate_of_return/endogenous/_Z"), "industry=A asset=_T")
    cost = column(get(book, "capital_compensation/endogenous/current"), A)
    np.testing.assert_allclose(cost[1:], (rate * base + lost - gain)[1:], rtol=1e-12)


def test_smoothed_gains_are_the_mean_log_change_of_the_last_years():
    """Three years where there are three, as many as there are before."""
    book, _ = _run(holding_gains="smoothed", smoothing_periods=3)
    log = np.log(_figures(ENDS, "asset=N113"))
    change = np.array([NAN, log[1] - log[0], (log[2] - log[0]) / 2, *((log[3:] - log[:-3]) / 3)])
    np.testing.assert_allclose(
        column(get(book, "price_change/smoothed/_Z"), "industry=_T asset=N113"), change, rtol=1e-12
    )
    base = column(get(book, "asset_base/average/current"), B)
    np.testing.assert_allclose(
        column(get(book, "revaluation/*/current"), B), (np.exp(change) - 1) * base, rtol=1e-12
    )


def test_without_holding_gains_the_rate_is_real():
    book, _ = _run(holding_gains="excluded")
    base = column(get(book, "asset_base/average/current"), "industry=A asset=_T")
    lost = _figures(LOSSES, A) + _figures(LOSSES, B)
    expected = (np.array(INCOME["industry=A"]) - lost) / base
    rate = column(get(book, "rate_of_return/endogenous/_Z"), "industry=A asset=_T")
    np.testing.assert_allclose(rate, expected, rtol=1e-13)
    land = column(get(book, "capital_compensation/endogenous/current"), LAND)
    np.testing.assert_allclose(
        land, expected * column(get(book, "asset_base/average/current"), LAND), rtol=1e-13
    )
    exogenous, _ = _run(holding_gains="excluded", rate_of_return="exogenous", real_rate=0.03)
    rate = column(get(exogenous, "rate_of_return/exogenous/_Z"), "industry=A asset=_T")
    np.testing.assert_allclose(rate[1:], 0.03, rtol=1e-15)


def test_both_rates_stand_side_by_side_and_one_is_chosen():
    book, _ = _run(rate_of_return="both", real_rate=0.05)
    alone, _ = _run()
    other, _ = _run(rate_of_return="exogenous", real_rate=0.05)
    _exhausts(book)
    expected = 1.05 * (1 + _general_inflation()) - 1
    series = "industry=A asset=_T"
    np.testing.assert_allclose(column(get(book, "rate_of_return/exogenous/_Z"), series), expected, rtol=1e-11)
    for measure, basis, where in (
        ("rate_of_return", "_Z", series),
        ("capital_compensation", "current", A),
        ("user_cost", "current", B),
    ):
        mine, theirs = (get(book, f"{measure}/{m}/{basis}") for m in ("endogenous", "exogenous"))
        assert mine.chosen.all()
        assert not theirs.chosen.any()
        np.testing.assert_array_equal(
            column(mine, where), column(get(alone, f"{measure}/endogenous/{basis}"), where)
        )
        np.testing.assert_array_equal(
            column(theirs, where), column(get(other, f"{measure}/exogenous/{basis}"), where)
        )
    beside = get(book, "capital_services/tornqvist_exogenous/index")
    assert not beside.chosen.any()
    np.testing.assert_allclose(
        column(beside, series), column(get(other, "capital_services/tornqvist/index"), series), rtol=1e-12
    )
    left = column(get(book, "unallocated_income/exogenous/current"), series)
    total = column(get(other, "capital_compensation/*/current"), series)
    np.testing.assert_allclose(left, np.array(INCOME["industry=A"]) - total, rtol=1e-10)


def test_declared_taxes_by_hand():
    """T = (1 - .3 x .8 - .05) / .7, x = .02: c = T (r B + D - H) + x B."""
    book, _ = _run(taxes="declared", **RATES)
    term = (1 - 0.3 * 0.8 - 0.05) / 0.7
    base = get(book, "asset_base/average/current")
    gain = get(book, "revaluation/actual/current")
    rate = column(get(book, "rate_of_return/endogenous/_Z"), "industry=A asset=_T")
    cost = get(book, "capital_compensation/endogenous/current")
    by_hand = sum(
        term * (_figures(LOSSES, k) if k in LOSSES else 0) - term * column(gain, k) + 0.02 * column(base, k)
        for k in (A, B, LAND)
    )
    everything = sum(column(base, k) for k in (A, B, LAND))
    np.testing.assert_allclose(
        rate, (np.array(INCOME["industry=A"]) - by_hand) / (term * everything), rtol=1e-12
    )
    np.testing.assert_allclose(
        column(cost, A),
        term * (rate * column(base, A) + _figures(LOSSES, A) - column(gain, A)) + 0.02 * column(base, A),
        rtol=1e-12,
    )


def test_delivered_taxes_go_before_declared_ones():
    """The term of N112 is delivered, that of N113 follows from delivered rates, that of land is as declared."""
    book, _ = _run(
        block("tax_term/delivered/_Z", {"asset=N112": [1.2] * YEARS}, first=FIRST),
        block("tax_rate/delivered/_Z", {"asset=N113": [0.25] * YEARS}, first=FIRST),
        block("tax_allowances/delivered/_Z", {"asset=N113": [0.6] * YEARS}, first=FIRST),
        block("tax_credit/delivered/_Z", {"asset=N113": [0.1] * YEARS}, first=FIRST),
        block("property_tax_rate/delivered/_Z", {"industry=A asset=N112": [0.03] * YEARS}, first=FIRST),
        taxes="delivered",
        **RATES,
    )
    base = get(book, "asset_base/average/current")
    gain = get(book, "revaluation/actual/current")
    outlay = get(book, "cost_before_return/after_tax/current")
    terms = {A: 1.2, B: (1 - 0.25 * 0.6 - 0.1) / 0.75, LAND: (1 - 0.3 * 0.8 - 0.05) / 0.7}
    for key, tax in ((A, 0.03), (B, 0.02), (LAND, 0.02)):
        lost = _figures(LOSSES, key) if key in LOSSES else 0
        expected = terms[key] * (lost - column(gain, key)) + tax * column(base, key)
        np.testing.assert_allclose(column(outlay, key), expected, rtol=1e-11)
        np.testing.assert_allclose(
            column(get(book, "taxed_base/after_tax/current"), key), terms[key] * column(base, key), rtol=1e-14
        )
    _exhausts(book)


JUMP = {**{k: [1.0] * YEARS for k in ENDS}, "asset=N112": [1.0, 1.0, 1.0, 2.0, 2.0, 2.0]}


def _with_jump(**changes):
    return _run(ends=JUMP, **changes)


def _cost_of_jump(book: Book) -> np.ndarray:
    return np.asarray(column(get(book, "capital_compensation/*/current"), A))


def test_the_jump_makes_a_negative_cost_that_is_kept_without_a_remedy():
    book, findings = _with_jump()
    assert _cost_of_jump(book)[3] < 0
    assert rules_of(findings) == ["negative_user_cost"]
    assert "kept as it is" in findings[0]["message"]


def test_remedy_smoothed_gains():
    book, findings = _with_jump(negative_user_cost="smoothed", smoothing_periods=5)
    assert (_cost_of_jump(book)[1:] > 0).all()
    assert "smoothed" in findings[0]["message"]
    assert not get(book, "revaluation/actual/current").chosen[:1].any()
    _exhausts(book)


def test_remedy_exogenous_rate():
    book, findings = _with_jump(negative_user_cost="exogenous", real_rate=0.05)
    assert "exogenous" in findings[0]["message"]
    assert not get(book, "rate_of_return/endogenous/_Z").chosen.any()
    assert get(book, "rate_of_return/exogenous/_Z").chosen.all()
    left = column(get(book, "unallocated_income/exogenous/current"), "industry=A asset=_T")
    cost = column(get(book, "capital_compensation/*/current"), "industry=A asset=_T")
    np.testing.assert_allclose((left + cost)[1:], INCOME["industry=A"][1:], rtol=1e-10)


def test_remedy_floor_is_an_estimate_and_the_rest_is_kept():
    book, findings = _with_jump(negative_user_cost="floor", user_cost_floor=0.02)
    before, _ = _with_jump()
    floored = get(book, "capital_compensation/floored/current")
    base = column(get(book, "asset_base/average/current"), A)
    cost, old = _cost_of_jump(book), _cost_of_jump(before)
    assert cost[3] == pytest.approx(0.02 * base[3], rel=1e-14)
    np.testing.assert_array_equal(np.delete(cost, 3), np.delete(old, 3))
    assert column(floored, A, "status")[3] == ESTIMATED
    assert (column(floored, A, "status")[[1, 2, 4, 5]] == 0).all()
    kept = get(book, "capital_compensation/endogenous/current")
    assert column(kept, A)[3] == old[3]
    left = column(get(book, "unallocated_income/floored/current"), "industry=A asset=_T")
    assert left[3] == pytest.approx(old[3] - cost[3], rel=1e-10)
    assert abs(left[4]) < 1e-10
    assert column(get(book, "user_cost/*/current"), A)[3] > 0
    assert "floor" in findings[0]["message"]


def test_opening_timing_takes_the_stock_at_the_start():
    book, _ = _run(productive_stock_timing="opening")
    stock = column(get(book, "productive_stock_average/opening/constant"), A)
    np.testing.assert_array_equal(stock, _before(_figures(STOCKS, A)))
    cost = column(get(book, "capital_compensation/endogenous/current"), A)
    np.testing.assert_allclose(column(get(book, "user_cost/endogenous/current"), A), cost / stock, rtol=1e-15)
    growth = get(book, "capital_services_growth/tornqvist/_Z")
    assert np.isfinite(column(growth, "industry=A asset=_T")[2:]).all()


def test_a_gap_between_the_discount_rate_and_the_rate_found_is_told():
    book, findings = _run(discount_rate_gap=0.001)
    (gap,) = [f for f in findings if f["rule"] == "discount_rate_gap"]
    rate = column(get(book, "rate_of_return/endogenous/_Z"), "industry=A asset=_T")[1:]
    gain = column(get(book, "revaluation/actual/current"), "industry=A asset=_T")[1:]
    base = column(get(book, "asset_base/average/current"), "industry=A asset=_T")[1:]
    real = ((1 + rate) / (1 + gain / base) - 1).mean()
    assert gap["found"] == f"a real rate of {real:.4f} on average, 0.04 in the age-price profiles"
    _, findings = _run(discount_rate_gap=abs(real - 0.04) + 1e-6)
    assert "discount_rate_gap" not in rules_of(findings)


def test_capital_income_below_zero_is_told():
    _, findings = _run(income={"industry=A": [50.0, 50, -3, 50, 50, 50]})
    told = [f for f in findings if f["rule"] == "negative_capital_income"]
    assert [(f["industry"], f["time_period"], f["found"]) for f in told] == [
        ("A", str(FIRST + 2), "an income of -3")
    ]


def test_a_remedy_that_needs_output_says_so_without_it():
    elementary = [block(k, {A: [100.0, 100, 100]}, first=FIRST) for k in (NET, PRODUCTIVE)]
    wear = block(f"{WEAR}/current", {A: [1.0] * 3}, first=FIRST)
    book, findings = run_stage(
        services.STAGE,
        params("services", negative_user_cost="exogenous"),
        *(x for one in (*elementary, wear) for x in (one, *totals(one, ("industry", "asset")))),
        block("investment_price/rebased/index", {"asset=_T": [1.0] * 3}, first=FIRST),
        block("investment_price/year_end/year_end", {"asset=_T": [1.0] * 3}, first=FIRST, part=False),
        block("capital_income/hours/current", {"industry=A": [-20.0] * 3}, first=FIRST),
    )
    assert "not_computed" in rules_of(findings)
    assert get(book, "capital_compensation/*/current").chosen.all()
