import numpy as np
import pytest
from small_blocks import REFERENCE_YEAR, block, column, get, params, rules_of, run_stage

from keelbook.blocks import BlockKey
from keelbook.stages import services
from keelbook.stages.base import Book
from keelbook.stages.totals import totals

NAN = np.nan
FIRST = REFERENCE_YEAR - 1

NET = "net_stock/perpetual_inventory/constant"
PRODUCTIVE = "productive_stock/perpetual_inventory/constant"
CONSUMPTION = "consumption_of_fixed_capital/perpetual_inventory/current"
PRICE = "investment_price/rebased/index"
YEAR_END = "investment_price/year_end/year_end"
INCOME = "capital_income/hours/current"

KEYS = ("industry=A asset=N112", "industry=A asset=N113", "industry=C asset=N112")


def _run(*, net, income, productive=None, consumption=None, price=None, year_end=None, **changes):
    """Run the stage on figures by series; prices are 1 for every year unless given."""
    years = len(next(iter(net.values())))
    ones = {"asset=_T": [1.0] * years}
    elementary = [
        block(NET, net, first=FIRST),
        block(PRODUCTIVE, productive or net, first=FIRST),
        block(CONSUMPTION, consumption or dict.fromkeys(net, [0.0] * years), first=FIRST),
    ]
    with_totals = [x for one in elementary for x in (one, *totals(one, ("industry", "asset")))]
    return run_stage(
        services.STAGE,
        params("services", **changes),
        *with_totals,
        block(PRICE, price or ones, first=FIRST),
        block(YEAR_END, year_end or ones, first=FIRST, part=False),
        block(INCOME, income, first=FIRST),
    )


def test_base_revaluation_rate_and_cost_by_hand():
    book, findings = _run(
        net={"industry=A asset=N112": [90.0, 110, 130], "industry=A asset=N113": [40.0, 60, 80]},
        consumption={"industry=A asset=N112": [NAN, 5.0, 6], "industry=A asset=N113": [NAN, 9.0, 12]},
        price={"asset=N112": [1.0, 1, 2], "asset=N113": [1.0, 1, 1]},
        year_end={"asset=N112": [1.0, 1.5, 1.8], "asset=N113": [1.0, 1, 1]},
        income={"industry=A": [50.0, 40, 100]},
    )
    base = get(book, "asset_base/average/current")
    np.testing.assert_allclose(column(base, "industry=A asset=N112"), [NAN, 100, 240], rtol=1e-15)
    np.testing.assert_allclose(column(base, "industry=A asset=_T"), [NAN, 150, 310], rtol=1e-15)
    gains = get(book, "revaluation/actual/current")
    np.testing.assert_allclose(column(gains, "industry=A asset=N112"), [NAN, 50, 0.2 * 240], rtol=1e-14)
    rate = get(book, "rate_of_return/endogenous/_Z")
    expected = np.array([NAN, (40 - 14 + 50) / 150, (100 - 18 + 48) / 310])
    np.testing.assert_allclose(column(rate, "industry=A asset=_T"), expected, rtol=1e-14)
    cost = get(book, "capital_compensation/endogenous/current")
    np.testing.assert_allclose(
        column(cost, "industry=A asset=N112"),
        [NAN, expected[1] * 100 + 5 - 50, expected[2] * 240 + 6 - 48],
        rtol=1e-13,
    )
    unit = get(book, "user_cost/endogenous/current")
    np.testing.assert_allclose(
        column(unit, "industry=A asset=N113")[1], (expected[1] * 50 + 9) / 50, rtol=1e-13
    )
    assert not findings


def _some(rng, *keys, low=50.0, high=150.0, years=4):
    return {key: list(rng.uniform(low, high, years)) for key in keys}


@pytest.mark.parametrize("scope", ["industry", "area"])
def test_costs_exhaust_capital_income_in_the_scope_of_the_rate(scope):
    rng = np.random.default_rng(1)
    incomes = _some(rng, "industry=A", "industry=C")
    incomes["industry=_T"] = list(np.sum([incomes["industry=A"], incomes["industry=C"]], axis=0))
    book, _ = _run(
        net=_some(rng, *KEYS),
        productive=_some(rng, *KEYS),
        consumption=_some(rng, *KEYS, low=2, high=10),
        price=_some(rng, "asset=N112", "asset=N113", low=0.9, high=1.1),
        year_end=_some(rng, "asset=N112", "asset=N113", low=0.9, high=1.1),
        income=incomes,
        rate_scope=scope,
    )
    rate = get(book, "rate_of_return/endogenous/_Z")
    cost = get(book, "capital_compensation/*/current")
    np.testing.assert_allclose(
        column(cost, "industry=_T asset=_T")[1:], incomes["industry=_T"][1:], rtol=1e-13
    )
    if scope == "industry":
        assert len(rate.series) == 2
        for industry in ("A", "C"):
            np.testing.assert_allclose(
                column(cost, f"industry={industry} asset=_T")[1:],
                incomes[f"industry={industry}"][1:],
                rtol=1e-13,
            )
    else:
        assert len(rate.series) == 1
        gap = column(cost, "industry=A asset=_T")[1:] - incomes["industry=A"][1:]
        assert np.abs(gap).min() > 1e-6


def test_the_index_of_one_asset_is_the_index_of_its_stock():
    stock = {"industry=C asset=N112": [80.0, 100, 140, 120]}
    book, _ = _run(net=stock, income={"industry=C": [9.0, 10, 11, 12]})
    average = np.array([NAN, 90, 120, 130])
    np.testing.assert_allclose(
        column(get(book, "productive_stock_average/average/constant"), "industry=C asset=N112"), average
    )
    index = get(book, "capital_services/tornqvist/index")
    np.testing.assert_allclose(column(index, "industry=C asset=_T"), average / 90, rtol=1e-14)


def test_tornqvist_growth_by_hand():
    a, b = "industry=A asset=N112", "industry=A asset=N113"
    book, _ = _run(
        net={a: [100.0, 100, 100, 100], b: [100.0, 100, 100, 100]},
        productive={a: [10.0, 10, 30, 30], b: [20.0, 20, 20, 60]},
        consumption={a: [NAN, 0.0, 10, 20], b: [NAN, 0.0, 0, 0]},
        income={"industry=A": [20.0, 20, 30, 40]},
    )
    # Half of income less consumption to each base: costs (10, 10), (20, 10), (30, 10).
    cost = get(book, "capital_compensation/endogenous/current")
    np.testing.assert_allclose(column(cost, a)[1:], [10, 20, 30], rtol=1e-14)
    growth = column(get(book, "capital_services_growth/tornqvist/_Z"), "industry=A asset=_T")
    first = (1 / 2 + 2 / 3) / 2 * np.log(20 / 10)
    second = (2 / 3 + 3 / 4) / 2 * np.log(30 / 20) + (1 / 3 + 1 / 4) / 2 * np.log(40 / 20)
    np.testing.assert_allclose(growth, [NAN, NAN, first, second], rtol=1e-14)
    index = column(get(book, "capital_services/tornqvist/index"), "industry=A asset=_T")
    np.testing.assert_allclose(index, [NAN, 1, np.exp(first), np.exp(first + second)], rtol=1e-14)


def test_composition_is_services_over_net_stock_from_the_reference_year():
    stock = {"industry=C asset=N112": [80.0, 100, 140, 120]}
    net = {"industry=C asset=N112": [100.0, 200, 300, 100]}
    book, _ = _run(net=net, productive=stock, income={"industry=C": [9.0, 10, 11, 12]})
    services_index = np.array([NAN, 90, 120, 130]) / 90
    np.testing.assert_allclose(
        column(get(book, "capital_composition/services_over_net_stock/index"), "industry=C asset=_T"),
        services_index / (np.array([NAN, 200, 300, 100]) / 200),
        rtol=1e-14,
    )


def test_the_total_index_is_made_of_the_elementary_stocks():
    book, _ = _run(
        net={k: [100.0] * 4 for k in KEYS},
        productive={KEYS[0]: [10.0, 10, 20, 20], KEYS[1]: [10.0] * 4, KEYS[2]: [10.0] * 4},
        income={"industry=A": [20.0] * 4, "industry=C": [10.0] * 4},
    )
    growth = column(get(book, "capital_services_growth/tornqvist/_Z"), "industry=_T asset=_T")
    np.testing.assert_allclose(growth[2], np.log(15 / 10) / 3, rtol=1e-14)


def test_a_negative_cost_is_kept_and_told():
    book, findings = _run(
        net={"industry=A asset=N112": [100.0] * 3, "industry=A asset=N113": [100.0] * 3},
        year_end={"asset=N112": [1.0, 2, 2], "asset=N113": [1.0, 1, 1]},
        price={"asset=N112": [1.0] * 3, "asset=N113": [1.0] * 3},
        income={"industry=A": [20.0] * 3},
    )
    cost = column(get(book, "capital_compensation/endogenous/current"), "industry=A asset=N112")
    assert cost[1] == pytest.approx((20 + 100) / 200 * 100 - 100)
    (finding,) = findings
    assert (finding["rule"], finding["severity"]) == ("negative_user_cost", "warn")
    assert (finding["asset"], finding["time_period"]) == ("N112", str(REFERENCE_YEAR))
    assert finding["found"] == "a cost of -40"


def test_an_industry_without_income_has_no_rate_and_it_is_told():
    book, findings = _run(net={KEYS[0]: [100.0] * 3, KEYS[2]: [100.0] * 3}, income={"industry=A": [20.0] * 3})
    assert rules_of(findings) == ["no_rate_of_return"]
    assert findings[0]["industry"] == "C"
    assert np.isnan(column(get(book, "rate_of_return/endogenous/_Z"), "industry=C asset=_T")).all()


def test_what_is_not_there_is_told():
    _, findings = run_stage(services.STAGE, params("services"), block(PRICE, {"asset=_T": [1.0]}))
    assert [f["measure"] for f in findings] == ["net_stock", "productive_stock", "investment_price"]
    assert set(rules_of(findings)) == {"not_computed"}


def test_a_declared_sector_earns_the_declared_rate_and_what_is_left_is_kept():
    """Prices of value added rise by 10 %, the real rate is 4 %: r = 1.04 x 1.1 - 1 = .144."""
    stock = {"sector=S13 industry=A asset=N112": [100.0, 100]}
    ones = {"asset=_T": [1.0, 1]}
    elementary = [block(key, stock, first=FIRST) for key in (NET, PRODUCTIVE)]
    wear = block(CONSUMPTION, {"sector=S13 industry=A asset=N112": [NAN, 5.0]}, first=FIRST)
    book, findings = run_stage(
        services.STAGE,
        params("services", exogenous_sectors=("S13",), real_rate=0.04),
        *(x for one in (*elementary, wear) for x in (one, *totals(one, ("sector", "industry", "asset")))),
        block(PRICE, ones, first=FIRST),
        block(YEAR_END, ones, first=FIRST, part=False),
        block(INCOME, {"sector=S13 industry=A": [30.0, 30]}, first=FIRST),
        block("value_added/delivered/current", {"industry=_T": [100.0, 132]}, first=FIRST),
        block("value_added/delivered/constant", {"industry=_T": [100.0, 120]}, first=FIRST),
    )
    rate = get(book, "rate_of_return/exogenous/_Z")
    assert column(rate, "sector=S13 industry=A asset=_T")[1] == pytest.approx(0.144, rel=1e-13)
    cost = get(book, "capital_compensation/exogenous/current")
    assert column(cost, "sector=S13 industry=A asset=N112")[1] == pytest.approx(19.4, rel=1e-13)
    left = get(book, "unallocated_income/exogenous/current")
    assert column(left, "sector=S13 industry=A asset=_T")[1] == pytest.approx(30 - 19.4, rel=1e-12)
    assert not findings


def test_chosen_capital_income_may_come_from_several_methods():
    blocks = Book(
        [
            block(INCOME, {"industry=A": [1.0]}),
            block("capital_income/unadjusted/current", {"industry=C": [2.0]}),
        ]
    )
    both = blocks.get(BlockKey("capital_income", "*", "current"))
    assert column(both, "industry=A")[0] == 1
    assert column(both, "industry=C")[0] == 2
