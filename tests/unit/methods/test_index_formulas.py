import numpy as np
import pytest

from keelbook.methods.index_numbers import (
    chain,
    fixed_base,
    laspeyres,
    links,
    paasche,
    tornqvist_shares,
    weighted_log_change,
)


def test_laspeyres_and_paasche_look_at_different_periods():
    x_0, x_1 = np.array([1.0, 1.0]), np.array([2.0, 1.0])
    y_0, y_1 = np.array([1.0, 3.0]), np.array([3.0, 1.0])
    assert laspeyres(x_0, x_1, y_0, y_1) == 1.25
    assert paasche(x_0, x_1, y_0, y_1) == 1.75


def test_shares_are_two_period_means_and_sum_to_one():
    shares = tornqvist_shares(np.array([[1.0], [3.0]]), np.array([[3.0], [1.0]]))
    np.testing.assert_allclose(shares, [[0.5], [0.5]])
    change = weighted_log_change(np.array([[1.0], [1.0]]), np.array([[4.0], [9.0]]), shares)
    np.testing.assert_allclose(np.exp(change), [6])


def test_chain_of_several_series_on_a_reference_in_the_middle():
    level = chain(np.array([[2.0, 1.0], [1.5, 4.0]]), reference=1)
    np.testing.assert_allclose(level, [[0.5, 1], [1, 1], [1.5, 4]])


def test_several_series_side_by_side():
    random = np.random.default_rng(3)
    x, y = random.uniform(1, 2, (2, 4, 3, 5))
    for name in ("laspeyres", "tornqvist"):
        for function in (fixed_base, links):
            both = function(name, x, y)
            np.testing.assert_allclose(both[:, 2], function(name, x[..., 2], y[..., 2]), rtol=1e-14)


def test_refusals():
    one = np.ones((2, 2))
    with pytest.raises(ValueError, match="laspeyres, paasche, fisher, tornqvist"):
        fixed_base("törnqvist", one, one)
    with pytest.raises(ValueError, match="above 0"):
        weighted_log_change(np.array([1.0, 0.0]), np.ones(2), np.full(2, 0.5))
    with pytest.raises(ValueError, match=r"outside 0\.\.1"):
        chain(np.ones(1), reference=2)
