"""Income shares: labour income by the adjustment made for the self-employed, and its share in a base.

Every function works element by element on arrays that broadcast, takes NaN to NaN and lets complex steps
pass. Amounts are in currency of the period. Shares are ratios and are not cut at 0 or 1: outside, they are
findings.
"""

from collections.abc import Callable, Mapping
from types import MappingProxyType

import numpy as np

from keelbook.methods.arrays import Array


def factor_cost(value_added: Array, net_taxes: Array) -> Array:
    """Return value added at factor cost, B.1g less other taxes less subsidies on production (D.29 - D.39)."""
    return np.asarray(value_added - net_taxes)


def unadjusted(d1: Array) -> Array:
    """Return compensation of employees D.1 as labour income: nothing is imputed to the self-employed."""
    return np.asarray(d1)


def by_hours(d1: Array, hours_employees: Array, hours_self: Array, relative_earnings: Array) -> Array:
    """Return D.1 + w H_s, with w the employees' hourly rate D.1 / H_e times the relative-earnings factor.

    Source: OECD, Compendium of Productivity Indicators 2019 (factor 1: compensation x hours of all persons
    / hours of employees).
    """
    return np.asarray(d1 + relative_earnings * d1 / hours_employees * hours_self)


def fixed_fraction(d1: Array, mixed: Array, fraction: Array) -> Array:
    """Return D.1 + phi MI, a fixed fraction phi of mixed income B.3 counted as labour income.

    Source: D. G. Johnson, 1954, with phi of two thirds (cited from memory).
    """
    return np.asarray(d1 + fraction * mixed)


def share(labour_income: Array, base: Array) -> Array:
    """Return the labour share: labour income / base, the base being the same for all adjustments of a set."""
    return np.asarray(labour_income / base)


def capital_share(labour_share: Array) -> Array:
    """Return 1 less the labour share."""
    return np.asarray(1 - labour_share)


def two_period_mean(previous: Array, current: Array) -> Array:
    """Return the mean of a share in two successive periods, as the logarithmic decomposition uses it."""
    return np.asarray((previous + current) / 2)


LABOUR_INCOME: Mapping[str, Callable[..., Array]] = MappingProxyType(
    {"unadjusted": unadjusted, "hours": by_hours, "fixed_fraction": fixed_fraction}
)
"""Every adjustment that needs no rate of return, by the name under which the panel keeps it."""
