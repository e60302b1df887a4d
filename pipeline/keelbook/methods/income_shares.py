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


def imputed_labour(d1: Array, of_employees: Array, of_self: Array, relative_earnings: Array) -> Array:
    """Return w H_s: the self-employed at the employees' rate D.1 / H_e times the relative-earnings factor.

    Args:
        of_employees, of_self: hours worked of the two groups, or persons of both.
    """
    return np.asarray(relative_earnings * d1 / of_employees * of_self)


def by_hours(d1: Array, hours_employees: Array, hours_self: Array, relative_earnings: Array) -> Array:
    """Return D.1 + w H_s, with w the employees' hourly rate D.1 / H_e times the relative-earnings factor.

    Source: OECD, Compendium of Productivity Indicators 2019 (factor 1: compensation x hours of all persons
    / hours of employees).
    """
    return np.asarray(d1 + imputed_labour(d1, hours_employees, hours_self, relative_earnings))


def by_persons(d1: Array, employees: Array, self_employed: Array, relative_earnings: Array) -> Array:
    """Return D.1 + w N_s, as `by_hours` with persons in place of hours.

    Source: OECD, Compendium of Productivity Indicators 2019, for countries without hours of the self-employed.
    """
    return by_hours(d1, employees, self_employed, relative_earnings)


def all_mixed(d1: Array, mixed: Array) -> Array:
    """Return D.1 + MI: all mixed income B.3 counted as labour income.

    Source: D. Gollin, Journal of Political Economy 110(2), 2002, first adjustment (second-hand).
    """
    return np.asarray(d1 + mixed)


def proportional(d1: Array, mixed: Array, base: Array) -> Array:
    """Return D.1 Y / (Y - MI): mixed income split as the rest of the income base Y is.

    Its share in Y is D.1 / (Y - MI).
    Source: D. Gollin, Journal of Political Economy 110(2), 2002, second adjustment (second-hand).
    """
    return np.asarray(d1 * base / (base - mixed))


def fixed_fraction(d1: Array, mixed: Array, fraction: Array) -> Array:
    """Return D.1 + phi MI, a fixed fraction phi of mixed income B.3 counted as labour income.

    Source: D. G. Johnson, 1954, with phi of two thirds (cited from memory).
    """
    return np.asarray(d1 + fraction * mixed)


def asset_basis(d1: Array, mixed: Array, rate: Array, base_self: Array) -> Array:
    """Return D.1 + MI - r_c B_s: mixed income less a return on the assets of the self-employed.

    Args:
        rate: r_c, the rate that exhausts operating surplus B.2 over the assets outside household enterprises.
        base_self: B_s, the asset base of household enterprises, in currency of the period.

    Source: asset basis of I. B. Kravis, American Economic Review, 1959 (from memory).
    """
    return np.asarray(d1 + mixed - rate * base_self)


def reconciliation_factor(mixed: Array, labour_self: Array, capital_self: Array) -> Array:
    """Return lambda = MI / (w H_s + C_s): what scales imputed labour and capital income to mixed income.

    Args:
        labour_self: w H_s, as `imputed_labour` gives it.
        capital_self: C_s, capital costs of household enterprises at the rate of the others.
    """
    return np.asarray(mixed / (labour_self + capital_self))


def reconciled(d1: Array, mixed: Array, labour_self: Array, capital_self: Array) -> Array:
    """Return D.1 + lambda w H_s, with lambda of `reconciliation_factor`.

    It has no meaning where mixed income is 0 or less: the caller leaves such periods out.
    Source: practice of the United States Bureau of Labor Statistics (from memory).
    """
    return np.asarray(d1 + reconciliation_factor(mixed, labour_self, capital_self) * labour_self)


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
    {
        "unadjusted": unadjusted,
        "hours": by_hours,
        "persons": by_persons,
        "all_mixed": all_mixed,
        "proportional": proportional,
        "fixed_fraction": fixed_fraction,
        "asset_basis": asset_basis,
        "reconciled": reconciled,
    }
)
"""Every adjustment, by the name under which the panel keeps it; the last two need a rate of return."""
