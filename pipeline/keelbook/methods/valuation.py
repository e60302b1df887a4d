"""Valuation: prices at the end of a period, and what price changes add to a stock.

Every function works element by element on arrays that broadcast, takes NaN to NaN and lets complex steps
pass.
"""

import numpy as np

from keelbook.methods.arrays import Array


def year_end_price(p: Array, p_next: Array) -> Array:
    """Return Pe_t = sqrt(P_t P_{t+1}), from the average prices (reference year = 1) of two successive
    periods.
    """
    return np.asarray(np.sqrt(p * p_next))


def year_end_price_extrapolated(p: Array, p_previous: Array) -> Array:
    """Return P_T sqrt(P_T / P_{T-1}) for the last period, whose successor is not known yet.

    It is an estimate (status E), to be revised by `year_end_price` when the next period arrives.
    """
    return np.asarray(p * np.sqrt(p / p_previous))


def holding_gains(
    opening_stock: Array, closing_stock: Array, p: Array, pe: Array, pe_previous: Array
) -> Array:
    """Return HG_t = W_{t-1} (P_t - Pe_{t-1}) + W_t (Pe_t - P_t), in currency of the period.

    With it the current-price account closes: Pe_{t-1} W_{t-1} + P_t (I_t - CFC_t + OVC_t) + HG_t = Pe_t W_t.

    Args:
        opening_stock, closing_stock: W_{t-1}, W_t in volumes at reference-year prices.
        p: average price P_t of the period (reference year = 1).
        pe, pe_previous: prices at the end of the period and of the one before.
    """
    return np.asarray(opening_stock * (p - pe_previous) + closing_stock * (pe - p))
