import numpy as np
import pytest

from keelbook.methods.perpetual_inventory import (
    BLOCK_PERIODS,
    BLOCK_SERIES,
    cohort_stock,
    cohort_stocks,
    geometric_stock,
)


def test_geometric_stock_by_hand():
    investment = np.array([[100.0, 10], [100, 0], [0, 0]])
    stock = geometric_stock(investment, np.array([0.9, 1]), np.array([0.8, 0.5]), np.array([50.0, 0]))
    np.testing.assert_allclose(stock, [[130, 10], [194, 5], [155.2, 2.5]], rtol=1e-15)
    np.testing.assert_array_equal(investment[0], [100, 10])


def test_geometric_stock_without_an_opening_starts_from_nothing():
    stock = geometric_stock(np.array([[100.0], [0]]), np.array([0.9]), np.array([0.8]), None)
    np.testing.assert_allclose(stock[:, 0], [90, 72], rtol=1e-15)


def test_cohort_stock_by_hand():
    stock = cohort_stock(np.array([[100.0], [10], [0], [0]]), np.array([0.75, 0.25, 0]))
    np.testing.assert_allclose(stock[:, 0], [75, 32.5, 2.5, 0], rtol=1e-15)


def test_several_kinds_over_several_blocks():
    periods = 2 * BLOCK_PERIODS + 3
    investment = np.zeros((periods, 2))
    investment[0] = 1, 2
    weights = np.stack([np.linspace(1, 0, 30), np.ones(30)])
    stocks = cohort_stocks(investment, weights)
    assert stocks.shape == (2, periods, 2)
    for kind in (0, 1):
        np.testing.assert_allclose(stocks[kind, :30, 1], 2 * weights[kind], rtol=1e-15)
    assert not stocks[:, 30:].any()


def test_series_of_several_blocks_do_not_mix():
    investment = np.arange(2.0 * (BLOCK_SERIES + 5)).reshape(2, -1)
    stock = cohort_stock(investment, np.array([1.0, 0.5, 0.0]))
    np.testing.assert_allclose(stock[0], investment[0], rtol=1e-15)
    np.testing.assert_allclose(stock[1], investment[1] + 0.5 * investment[0], rtol=1e-15)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("year", [0, 4])
def test_gaps_are_refused(bad, year):
    investment = np.ones((5, 3))
    investment[year, 1] = bad
    with pytest.raises(ValueError, match="NaN or infinity"):
        cohort_stock(investment, np.array([1.0, 0.5, 0.0]))
    for keep in (0.5, 0.0):
        with pytest.raises(ValueError, match="NaN or infinity"):
            geometric_stock(investment, np.ones(3), np.full(3, keep), None)


def test_opposite_infinities_are_refused_too():
    with pytest.raises(ValueError, match="NaN or infinity"):
        cohort_stock(np.array([[np.inf], [-np.inf]]), np.array([1.0, 0.0]))


def test_a_gap_in_the_opening_stock_is_refused():
    with pytest.raises(ValueError, match="opening stock"):
        geometric_stock(np.ones((3, 1)), np.ones(1), np.full(1, 0.5), np.array([np.nan]))


def test_rates_may_differ_from_period_to_period():
    keep = np.array([[0.5], [0.8], [0.0]])
    stock = geometric_stock(np.array([[100.0], [10], [1]]), (1 + keep) / 2, keep, np.array([40.0]))
    np.testing.assert_allclose(stock[:, 0], [20 + 75, 76 + 9, 0.5], rtol=1e-15)


def test_stocks_are_written_where_asked():
    investment = np.arange(12.0).reshape(4, 3)
    weights = np.array([[1.0, 0.5, 0], [0.9, 0.2, 0]])
    for function, rest, shape in (
        (geometric_stock, (0.9, 0.8, np.ones(3)), (4, 3)),
        (cohort_stock, (weights[0],), (4, 3)),
        (cohort_stocks, (weights,), (2, 4, 3)),
    ):
        out = np.full(shape, np.nan)
        found = function(investment, *rest, out=out)
        assert np.shares_memory(found, out)
        np.testing.assert_array_equal(out, function(investment, *rest))


def test_a_stock_is_never_written_over_its_investment():
    investment = np.ones((4, 3))
    with pytest.raises(ValueError, match="over its own investment"):
        geometric_stock(investment, 0.9, 0.8, None, out=investment)
    with pytest.raises(ValueError, match="apart from the investment"):
        cohort_stock(investment, np.array([1.0, 0]), out=investment)
    with pytest.raises(ValueError, match=r"expected \(1, 4, 3\)"):
        cohort_stock(investment, np.array([1.0, 0]), out=np.ones((3, 3)))
