"""User cost: the rate of return that capital income leaves, and what each asset costs to use for a period.

Every function works element by element on arrays that broadcast, takes NaN to NaN and lets complex steps
pass. A division by a base or a stock of 0 gives no figure: the caller masks such series. Terms in currency
of the period: B base, D consumption of fixed capital, H revaluation, Pi capital income.
Source: OECD, Measuring Capital (2001, 2009) and R. E. Hall and D. W. Jorgenson, 1967, for the user cost
(formulas cited from memory); average form, taxes left out.
"""

import numpy as np

from keelbook.methods.arrays import Array


def asset_base(p: Array, w_opening: Array, w_closing: Array) -> Array:
    """Return B_t = P_t (W_{t-1} + W_t) / 2: the average net stock at the average prices of the period."""
    return np.asarray(p * (w_opening + w_closing) / 2)


def revaluation(pe: Array, pe_previous: Array, base: Array) -> Array:
    """Return H_t = (Pe_t / Pe_{t-1} - 1) B_t: the price gain of the period on the base."""
    return np.asarray((pe / pe_previous - 1) * base)


def endogenous_rate(capital_income: Array, consumption: Array, revaluation: Array, base: Array) -> Array:
    """Return r = (Pi - (D - H)) / B on totals over assets: the rate with which the costs sum to capital
    income.

    Returns:
        Nominal rate of return per period, a ratio (0.05 = 5 %).
    """
    return np.asarray((capital_income - (consumption - revaluation)) / base)


def capital_cost(r: Array, base: Array, consumption: Array, revaluation: Array) -> Array:
    """Return c = r B + D - H of one asset, in currency of the period. It may be negative: that is a
    finding.
    """
    return np.asarray(r * base + consumption - revaluation)


def unit_user_cost(cost: Array, stock: Array) -> Array:
    """Return c / K: the cost of using one unit of the productive stock K of the same date."""
    return np.asarray(cost / stock)
