"""Proportional fitting of a table to given row and column totals (the RAS method)."""

from dataclasses import dataclass

import numpy as np

from keelbook.methods.arrays import F8, require


@dataclass(frozen=True)
class Fitted:
    """A fitted table and how it was reached.

    table: (R, C) seed x row factor x column factor.
    row_factor, column_factor: (R,), (C,); unique but for a common scale, here a row factor of mean 1 over
    the rows in use. 0 for a row or column whose total is 0.
    rounds: passes over rows and columns.
    residual: largest distance of a row or column sum from its total, as a part of the grand total.
    """

    table: F8
    row_factor: F8
    column_factor: F8
    rounds: int
    residual: float


def fit(seed: F8, row_totals: F8, column_totals: F8, *, tolerance: float, rounds: int) -> Fitted:
    """Return the table nearest to the seed, in relative entropy, with the given totals.

    t_ij = r_i a_ij s_j, found by scaling rows and columns in turn. A 0 of the seed stays 0.

    Args:
        seed: (R, C) figures of 0 or more. NaN is refused, here and in the totals.
        row_totals, column_totals: (R,), (C,) totals of 0 or more with the same sum.
        tolerance: largest residual accepted, as a part of the grand total.
        rounds: passes allowed.

    Source: R. Stone and others; R. E. Miller and P. D. Blair, Input-Output Analysis, 2009, section 7.4.

    Raises:
        ValueError: a wrong shape; a negative figure or NaN; totals with different sums or a sum of 0; a total
            above 0 whose row or column holds zeros only; no convergence within the rounds, with the rows and
            columns that miss their totals: the zeros of the seed may leave no table with these totals.
    """
    _check(seed, row_totals, column_totals, require("the tolerance", tolerance, low=0, open_low=True))
    grand = float(row_totals.sum())
    r, s = (row_totals > 0).astype(np.float64), (column_totals > 0).astype(np.float64)
    row_miss, column_miss = row_totals, column_totals
    residual = np.inf
    for done in range(1, rounds + 1):
        # Where no table exists the factors grow without end, and the last finite ones tell where it fails.
        with np.errstate(over="ignore", invalid="ignore"):
            r = _factor(row_totals, seed @ s)
            s = _factor(column_totals, r @ seed)
            misses = r * (seed @ s) - row_totals, s * (r @ seed) - column_totals
            miss = float(max(np.abs(misses[0]).max(), np.abs(misses[1]).max())) / grand
        if not np.isfinite(miss):
            break
        (row_miss, column_miss), residual = misses, miss
        if residual <= tolerance:
            scale = r[r > 0].mean()
            r, s = r / scale, s * scale
            return Fitted(r[:, None] * seed * s, r, s, done, residual)
    worst = f"{_worst('row', row_miss)}; {_worst('column', column_miss)}"
    raise ValueError(
        f"no convergence in {rounds} rounds: sums miss their totals by up to {residual:.3g} of the grand total "
        f"({worst}); allow more rounds, or see whether the zeros of the seed leave any table with these totals"
    )


def _check(seed: F8, row_totals: F8, column_totals: F8, tolerance: float) -> None:
    if seed.ndim != 2 or seed.shape != (len(row_totals), len(column_totals)):
        raise ValueError(
            f"the seed has the shape {seed.shape}, expected {(len(row_totals), len(column_totals))} as the totals"
        )
    for name, figures in (
        ("the seed", seed),
        ("the row totals", row_totals),
        ("the column totals", column_totals),
    ):
        if not (np.all(np.isfinite(figures)) and np.all(figures >= 0)):
            raise ValueError(f"a figure of {name} is negative or not a number")
    rows, columns = float(row_totals.sum()), float(column_totals.sum())
    if rows == 0:
        raise ValueError("the totals sum to 0: there is nothing to spread")
    if abs(rows - columns) > tolerance * rows:
        raise ValueError(f"row totals sum to {rows:g} and column totals to {columns:g}: no table has both")
    for name, totals, other in (
        ("row", row_totals, seed @ (column_totals > 0)),
        ("column", column_totals, (row_totals > 0) @ seed),
    ):
        empty = np.flatnonzero((totals > 0) & (other == 0))
        if len(empty):
            raise ValueError(
                f"{name} {', '.join(str(i + 1) for i in empty)} of the seed holds nothing that could reach its "
                "total"
            )


def _factor(totals: F8, sums: F8) -> F8:
    return np.divide(totals, sums, out=np.zeros_like(sums), where=sums > 0)


def _worst(name: str, miss: F8) -> str:
    order = np.argsort(-np.abs(miss), kind="stable")[:3]
    return ", ".join(f"{name} {i + 1}: {miss[i]:+.6g}" for i in order)
