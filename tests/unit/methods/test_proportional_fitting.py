import numpy as np
import pytest

from keelbook.methods.proportional_fitting import fit

SEED = np.array([[1.0, 2.0], [3.0, 4.0]])


def fitted(seed=SEED, rows=(4.0, 6.0), columns=(5.0, 5.0), tolerance=1e-13, rounds=200):
    return fit(np.array(seed), np.array(rows), np.array(columns), tolerance=tolerance, rounds=rounds)


def test_totals_are_met_and_cross_ratios_kept():
    found = fitted()
    np.testing.assert_allclose(found.table.sum(axis=1), [4, 6], rtol=1e-12)
    np.testing.assert_allclose(found.table.sum(axis=0), [5, 5], rtol=1e-12)
    ((a, b), (c, d)) = found.table
    assert a * d / (b * c) == pytest.approx(4 / 6, rel=1e-12)
    np.testing.assert_allclose(
        found.table, found.row_factor[:, None] * SEED * found.column_factor, rtol=1e-14
    )
    assert found.row_factor.mean() == pytest.approx(1)
    assert found.residual <= 1e-13
    assert found.rounds > 1


def test_a_table_that_fits_needs_one_round():
    found = fitted(rows=(3.0, 7.0), columns=(4.0, 6.0))
    np.testing.assert_allclose(found.table, SEED, rtol=1e-15)
    assert found.rounds == 1


def test_zeros_stay_and_empty_totals_empty_their_row():
    found = fitted(
        seed=[[1.0, 0.0, 2.0], [3.0, 4.0, 1.0], [5.0, 1.0, 1.0]],
        rows=(4.0, 6.0, 0.0),
        columns=(5.0, 3.0, 2.0),
    )
    assert found.table[0, 1] == 0
    np.testing.assert_array_equal(found.table[2], 0)
    assert found.row_factor[2] == 0
    np.testing.assert_allclose(found.table.sum(axis=0), [5, 3, 2], rtol=1e-12)


def test_zeros_may_leave_no_table():
    """The first row reaches only the first column, whose total is smaller."""
    with pytest.raises(ValueError, match=r"no convergence in 3000 rounds.*zeros of the seed"):
        fitted(seed=[[1.0, 0.0], [1.0, 1.0]], rows=(6.0, 4.0), columns=(5.0, 5.0), rounds=3000)


def test_a_table_that_exists_only_at_the_limit_does_not_converge():
    """Meeting the totals takes a 0 where the seed has 1: the distance falls like 1 / rounds, never to nothing."""
    with pytest.raises(ValueError, match="row 1"):
        fitted(seed=[[1.0, 0.0], [1.0, 1.0]], rows=(5.0, 5.0), columns=(5.0, 5.0), rounds=50)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"rows": (4.0, 6.0, 1.0)}, r"shape \(2, 2\), expected \(3, 2\)"),
        ({"columns": (5.0, 6.0)}, "sum to 10 and column totals to 11"),
        ({"rows": (-4.0, 14.0)}, "row totals is negative"),
        ({"seed": [[1.0, np.nan], [1.0, 1.0]]}, "seed is negative or not a number"),
        ({"columns": (np.inf, 5.0)}, "column totals is negative or not a number"),
        ({"rows": (0.0, 0.0), "columns": (0.0, 0.0)}, "sum to 0"),
        ({"seed": [[0.0, 0.0], [1.0, 1.0]]}, "row 1 of the seed holds nothing"),
        ({"seed": [[1.0, 0.0], [1.0, 0.0]]}, "column 2 of the seed holds nothing"),
        ({"tolerance": 0.0}, "tolerance is 0"),
        ({"rounds": 2}, "no convergence in 2 rounds"),
    ],
)
def test_refusals(changes, message):
    with pytest.raises(ValueError, match=message):
        fitted(**changes)
