"""User cost: the rate of return that capital income leaves, and what each asset costs to use for a period.

Every function works element by element on arrays that broadcast, takes NaN to NaN and lets complex steps
pass. A division by a base or a stock of 0 gives no figure: the caller masks such series. Terms in currency
of the period: B base, D consumption of fixed capital, H revaluation, Pi capital income.
Source: OECD, Measuring Capital (2001, 2009) and R. E. Hall and D. W. Jorgenson, 1967, for the user cost
(formulas cited from memory). Average form by `asset_base` and `revaluation`, opening form by
`opening_base`, `opening_depreciation` and `opening_revaluation`. With a tax term T and a property tax x the cost of an
asset is T (r B + D - H) + x B.
"""

import numpy as np

from keelbook.methods.arrays import Array


def asset_base(p: Array, w_opening: Array, w_closing: Array) -> Array:
    """Return B_t = P_t (W_{t-1} + W_t) / 2: the average net stock at the average prices of the period."""
    return np.asarray(p * (w_opening + w_closing) / 2)


def revaluation(pe: Array, pe_previous: Array, base: Array) -> Array:
    """Return H_t = (Pe_t / Pe_{t-1} - 1) B_t: the price gain of the period on the base."""
    return np.asarray((pe / pe_previous - 1) * base)


def opening_base(pe_previous: Array, w_opening: Array) -> Array:
    """Return B_t = Pe_{t-1} W_{t-1}: the opening net stock at the prices of that date."""
    return np.asarray(pe_previous * w_opening)


def opening_depreciation(pe: Array, consumption: Array, investment: Array, first_weight: Array) -> Array:
    """Return D_t = Pe_t (CFC_t - (1 - w(0)) I_t): what the opening vintages lose, at year-end prices.

    Args:
        pe: price at the end of the period.
        consumption, investment: volumes of the period at reference-year prices.
        first_weight: w(0), what is left of new investment at the end of its period.
    """
    return np.asarray(pe * (consumption - (1 - first_weight) * investment))


def opening_revaluation(pe: Array, pe_previous: Array, w_opening: Array) -> Array:
    """Return H_t = (Pe_t - Pe_{t-1}) W_{t-1}: the price gain of the period on the opening stock."""
    return np.asarray((pe - pe_previous) * w_opening)


def smoothed_log_change(pe: Array, pe_before: Array, periods: int) -> Array:
    """Return the mean log change per period over the last n `periods`: ln(Pe_t / Pe_{t-n}) / n.

    Raises:
        ValueError: fewer than 1 period.
    """
    if periods < 1:
        raise ValueError(f"a price change is smoothed over 1 period or more, found {periods}")
    return np.asarray(np.log(pe / pe_before) / periods)


def revaluation_at(log_change: Array, base: Array) -> Array:
    """Return H_t = (exp(c) - 1) B_t for a log price change c per period: `revaluation` with smoothed prices."""
    return np.asarray((np.exp(log_change) - 1) * base)


def general_inflation(
    current: Array, constant: Array, current_previous: Array, constant_previous: Array
) -> Array:
    """Return the growth of an implicit deflator: (V_t / Q_t) / (V_{t-1} / Q_{t-1}) - 1, a ratio.

    Args:
        current, current_previous: an aggregate at current prices in the period and the one before.
        constant, constant_previous: its volume.
    """
    return np.asarray((current / constant) / (current_previous / constant_previous) - 1)


def exogenous_rate(real_rate: Array, inflation: Array) -> Array:
    """Return r = (1 + rho) (1 + pi) - 1, the nominal rate of a real rate and general inflation."""
    return np.asarray((1 + real_rate) * (1 + inflation) - 1)


def tax_term(tax_rate: Array, allowances: Array, credit: Array) -> Array:
    """Return T = (1 - tau A - e) / (1 - tau).

    Args:
        tax_rate: tau on capital income, below 1.
        allowances: A, present value of depreciation allowances on one unit invested.
        credit: e, investment tax credit on one unit invested.

    Source: R. E. Hall and D. W. Jorgenson, 1967 (from memory).
    """
    return np.asarray((1 - tax_rate * allowances - credit) / (1 - tax_rate))


def endogenous_rate(capital_income: Array, consumption: Array, revaluation: Array, base: Array) -> Array:
    """Return r = (Pi - (D - H)) / B on totals over assets: the rate with which the costs sum to capital
    income.

    With taxes, r = (Pi - sum x B - (sum T D - sum T H)) / sum T B: pass capital income less property tax and
    the totals of T D, T H and T B.

    Returns:
        Nominal rate of return per period, a ratio (0.05 = 5 %); real if the revaluation is left out (0).
    """
    return np.asarray((capital_income - (consumption - revaluation)) / base)


def capital_cost(
    r: Array,
    base: Array,
    consumption: Array,
    revaluation: Array,
    tax_term: Array | float = 1.0,
    property_tax: Array | float = 0.0,
) -> Array:
    """Return c = T (r B + D - H) + x B of one asset, in currency of the period. It may be negative: that is a
    finding.
    """
    return np.asarray(tax_term * (r * base + consumption - revaluation) + property_tax * base)


def unit_user_cost(cost: Array, stock: Array) -> Array:
    """Return c / K: the cost of using one unit of the productive stock K of the same date."""
    return np.asarray(cost / stock)
