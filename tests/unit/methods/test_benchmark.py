import numpy as np
import pytest

from keelbook.methods.benchmark import (
    SERIES_AT_ONCE,
    benchmark_factor,
    closing_stock,
    even_changes,
    rate_between,
)


def test_factor_by_hand():
    found = benchmark_factor(
        np.array([100.0, 30, 50, np.nan]), np.array([40.0, 40, 50, 1]), np.array([120.0, 20, 0, 1])
    )
    np.testing.assert_allclose(found, [0.5, -0.5, np.nan, np.nan])


@pytest.mark.parametrize(("timing", "expected"), [("start", 79.8), ("mid", 86.4), ("end", 93.0)])
def test_closing_stock_and_the_rate_behind_it(timing, expected):
    # At 0.3: 49 are left of the 100, and of 20 and 30 invested 14 + 30 before their own period's decline.
    opening, investment = np.array([100.0]), np.array([[20.0], [30.0]])
    assert closing_stock(opening, investment, np.array([0.3]), timing) == pytest.approx(expected)
    solved = rate_between(opening, np.array([expected]), investment, timing)
    assert solved.rate == pytest.approx(0.3, abs=1e-14)
    assert abs(solved.residual[0]) < 1e-12
    assert solved.roots[0] == 1


def test_stocks_that_no_rate_joins():
    """More than was there and invested, less than the last investment leaves, and nothing known."""
    opening, investment = np.array([100.0, 100, 100, 0]), np.array([[10.0, 10, np.nan, 0]])
    solved = rate_between(opening, np.array([111.0, 4.5, 50, 0]), investment, "mid")
    assert np.isnan(solved.rate).all()
    assert np.isnan(solved.residual).all()
    assert solved.roots.tolist() == [0, 0, 0, 0]


def test_bounds_keep_out_other_rates():
    opening, investment = np.array([100.0]), np.array([[0.0]])
    assert rate_between(opening, np.array([70.0]), investment, "end", 0.2, 0.4).rate == pytest.approx(0.3)
    assert np.isnan(rate_between(opening, np.array([70.0]), investment, "end", 0.3, 0.4).rate[0])
    assert np.isnan(rate_between(opening, np.array([70.0]), investment, "end", 0.31, 0.4).rate[0])


def test_several_rates_are_counted_and_none_is_chosen():
    # 10 k^2 - 12 k + 3.2 = 0 for k = 0.8 and 0.4: a sale of 12 after one year, and 3.2 less than nothing left.
    several = rate_between(np.array([10.0]), np.array([-3.2]), np.array([[-12.0], [0.0]]), "end")
    assert several.roots.tolist() == [2]
    assert np.isnan(several.rate[0])


@pytest.mark.parametrize("series", [1, SERIES_AT_ONCE + 2])
def test_one_rate_is_found_with_a_sale_as_well(series):
    opening = np.full(series, 100.0)
    investment = np.array([-20.0, 5, 10])[:, None] * np.ones(series)
    expected = np.linspace(0.1, 0.4, series)
    closing = closing_stock(opening, investment, expected, "mid")
    solved = rate_between(opening, closing, investment, "mid")
    np.testing.assert_allclose(solved.rate, expected, atol=1e-13)


def test_a_root_on_a_line_of_the_grid_counts_once():
    solved = rate_between(np.array([100.0]), np.array([12.5]), np.array([[0.0], [-0.0], [-0.0]]), "end")
    assert solved.rate == pytest.approx(0.5, abs=1e-14)
    falling = rate_between(np.array([-8.0]), np.array([-1.0]), np.zeros((3, 1)), "end")
    assert (falling.roots[0], falling.rate[0]) == (1, pytest.approx(0.5, abs=1e-14))


def test_a_gap_spread_evenly():
    np.testing.assert_allclose(even_changes(np.array([30.0, -6]), np.ones(3)), [10, -2])
    changes = even_changes(np.array([7.0]), np.array([[1.0], [0.5], [0.25]]))
    left = 0.0
    for _ in range(3):
        left = 0.5 * left + changes[0]
    assert left == pytest.approx(7)


def test_refusals():
    one = np.ones(1)
    with pytest.raises(ValueError, match="unknown timing 'middle'"):
        rate_between(one, one, np.ones((1, 1)), "middle")
    with pytest.raises(ValueError, match="same date"):
        rate_between(one, one, np.ones((0, 1)), "mid")
    with pytest.raises(ValueError, match=r"upper bound is 0\.2"):
        rate_between(one, one, np.ones((1, 1)), "mid", 0.3, 0.2)
    with pytest.raises(ValueError, match=r"lower bound is -0\.1"):
        rate_between(one, one, np.ones((1, 1)), "mid", -0.1)
