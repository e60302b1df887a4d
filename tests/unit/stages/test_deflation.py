import numpy as np
import pytest
from small_blocks import block, column, get, holds, index, number, params, rules_of, run_stage

from keelbook.blocks import ESTIMATED, NORMAL
from keelbook.stages import deflation
from keelbook.stages.deflation import SPECIFICITY, price_edges

NAN = np.nan
ORDER = ("industry_asset", "asset", "industry", "total")
CURRENT = "investment/delivered/current"
PRICE = "investment_price/rebased/index"


def _volumes(book):
    """Return the deflated series, without the totals made of them."""
    volume = get(book, "investment/deflated/constant")
    return volume.take(volume.part)


def _deflated(*blocks, order=ORDER):
    return run_stage(deflation.STAGE, params("deflation", order=order), *blocks)


def test_a_volume_is_the_value_divided_by_the_price():
    book, findings = _deflated(
        block(CURRENT, {"industry=A asset=N112": [80.0, 100, 150]}),
        block(PRICE, {"industry=A asset=N112": [0.8, 1, 1.2]}),
    )
    volume = _volumes(book)
    np.testing.assert_allclose(column(volume, "industry=A asset=N112"), [100, 100, 125], rtol=1e-15)
    assert not findings
    assert volume.origin.sets[volume.origin.set[0]][0].name == "deflation.order"


ALL_PRICES = {
    "industry=A asset=N112": [2.0],
    "industry=_T asset=N112": [3.0],
    "industry=A asset=_T": [5.0],
    "industry=_T asset=_T": [7.0],
}


@pytest.mark.parametrize(
    ("order", "series", "divisor"),
    [
        (ORDER, "industry=A asset=N112", 2),
        (ORDER, "industry=C asset=N112", 3),
        (ORDER, "industry=A asset=N113", 5),
        (ORDER, "industry=C asset=N113", 7),
        (("total", *ORDER[:3]), "industry=A asset=N112", 7),
        (("industry", "asset", "industry_asset"), "industry=A asset=N112", 5),
        (("asset",), "industry=A asset=N112", 3),
    ],
)
def test_the_first_index_of_the_declared_order_is_used_and_recorded(order, series, divisor):
    prices = block(PRICE, ALL_PRICES)
    book, _ = _deflated(block(CURRENT, {series: [210.0]}), prices, order=order)
    volume = _volumes(book)
    assert column(volume, series)[0] == 210 / divisor
    used = {value[0]: number(s) for s, value in ALL_PRICES.items()}
    edges = volume.origin.edges["price"]
    assert edges.key[0] == used[divisor]
    assert edges.blocks[edges.which[0]].measure == "investment_price"


def test_the_order_names_are_those_a_rule_may_use():
    assert set(ORDER) == set(SPECIFICITY)


def test_a_price_of_the_own_sector_goes_before_that_of_the_whole_economy():
    prices = block(PRICE, {"asset=N112": [1.0], "sector=S13 asset=N112": [2.0], "sector=S11 asset=_T": [4.0]})
    flows = index(
        "sector=S13 industry=A asset=N112", "sector=S11 industry=A asset=N112", "industry=A asset=N112"
    )
    edges = price_edges(flows, prices, ORDER)
    # S11 has only a total of its own: the more specific index of the whole economy is nearer.
    expected = {
        "industry=A asset=N112": "asset=N112",
        "sector=S11 industry=A asset=N112": "asset=N112",
        "sector=S13 industry=A asset=N112": "sector=S13 asset=N112",
    }
    assert {int(k): int(e) for k, e in zip(flows.key, edges.key, strict=True)} == {
        number(s): number(p) for s, p in expected.items()
    }


def test_prices_of_another_area_are_not_used():
    book, findings = _deflated(
        block(CURRENT, {"industry=A asset=N112": [1.0]}), block(PRICE, {"area=XB asset=N112": [1.0]})
    )
    assert rules_of(findings) == ["no_price"]
    assert (findings[0]["industry"], findings[0]["asset"]) == ("A", "N112")
    assert all(b.key.measure != "investment" for b in book)


def test_a_year_without_a_price_is_told_and_has_no_volume():
    book, findings = _deflated(
        block(CURRENT, {"industry=A asset=N112": [10.0, 20, NAN], "industry=C asset=N113": [1.0, 1, 1]}),
        block(PRICE, {"asset=N112": [1.0, NAN, NAN], "asset=N113": [1.0, 1, 1]}),
    )
    np.testing.assert_array_equal(column(_volumes(book), "industry=A asset=N112"), [10, NAN, NAN])
    (finding,) = findings
    assert (finding["rule"], finding["severity"]) == ("price_missing", "warn")
    assert (finding["industry"], finding["asset"], finding["time_period"]) == ("A", "N112", "2011")


def test_delivered_volumes_are_not_deflated_again():
    book, _ = _deflated(
        block(CURRENT, {"industry=A asset=N112": [10.0], "industry=C asset=N112": [10.0]}),
        block("investment/delivered/constant", {"industry=A asset=N112": [7.0]}),
        block(PRICE, {"asset=N112": [2.0]}),
    )
    volume = _volumes(book)
    assert not holds(volume, "industry=A asset=N112")
    assert column(volume, "industry=C asset=N112")[0] == 5


def test_year_end_prices_lie_between_the_years_and_the_last_is_an_estimate():
    book, _ = _deflated(block(PRICE, {"asset=N112": [1.0, 4, 9]}))
    pe = get(book, "investment_price/year_end/year_end")
    # sqrt(1 x 4), sqrt(4 x 9), and 9 sqrt(9/4) where the next year is not known.
    np.testing.assert_allclose(column(pe, "asset=N112"), [2, 6, 13.5], rtol=1e-15)
    np.testing.assert_array_equal(column(pe, "asset=N112", "status"), [NORMAL, NORMAL, ESTIMATED])


@pytest.mark.parametrize(
    ("there", "missing"), [((), "investment_price (index)"), (("prices",), "investment (current)")]
)
def test_what_is_not_there_is_told(there, missing):
    blocks = [block(PRICE, {"asset=N112": [1.0]})] if there else []
    _, findings = _deflated(*blocks)
    assert rules_of(findings) == ["not_computed"]
    assert findings[0]["message"] == f"deflation: not computed, there is no {missing}"


def test_a_group_beside_its_assets_is_not_deflated():
    current = block(CURRENT, {"industry=A asset=N112": [1.0], "industry=A asset=N11": [1.0]})
    current.part[current.series.is_code("asset", "N11")] = False
    book, findings = _deflated(current, block(PRICE, {"asset=N112": [2.0], "asset=N11": [2.0]}))
    volume = _volumes(book)
    assert column(volume, "industry=A asset=N112")[0] == 0.5
    assert not holds(get(book, "investment/deflated/constant"), "industry=A asset=N11")
    assert not findings


def test_volumes_add_up_to_totals_at_reference_year_prices():
    book, _ = _deflated(
        block(CURRENT, {"industry=A asset=N112": [10.0], "industry=A asset=N113": [9.0]}),
        block(PRICE, {"asset=N112": [2.0], "asset=N113": [3.0]}),
    )
    total = get(book, "investment/*/constant")
    assert column(total, "industry=A asset=_T")[0] == 10 / 2 + 9 / 3
