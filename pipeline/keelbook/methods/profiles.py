"""Age profiles: what service one asset still gives (efficiency) and what it is still worth (age-price)."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np

from keelbook.methods.arrays import F8, require


def geometric(ages: F8, *, rate: float) -> F8:
    """Return (1 - d)^a, never truncated; `rate` d in [0, 1].

    Source: OECD, Measuring Capital (2001, 2009), age-efficiency profiles (form cited from memory).
    """
    rate = require("the depreciation rate", rate, low=0, high=1)
    return np.asarray((1 - rate) ** ages, dtype=np.float64)


def hyperbolic(ages: F8, *, life: float, b: float) -> F8:
    """Return (L - a) / (L - b a) for a < L, 0 from L on; b <= 1 (b = 0 is a straight line, b = 1 is
    constant).

    Source: Australian Bureau of Statistics, Australian System of National Accounts: Concepts, Sources and
    Methods 2020-21, paragraphs 14.36 to 14.38.
    """
    life = require("the life", life, low=0, open_low=True)
    b = require("the efficiency parameter b", b, low=-math.inf, high=1)
    alive = ages < life
    age = np.where(alive, ages, 0.0)
    return np.where(alive, (life - age) / (life - b * age), 0.0)


def linear(ages: F8, *, life: float) -> F8:
    """Return 1 - a / L for a < L, 0 from L on.

    Source: OECD, Measuring Capital (2001, 2009), age-efficiency profiles (form cited from memory).
    """
    return hyperbolic(ages, life=life, b=0.0)


def constant(ages: F8, *, life: float) -> F8:
    """Return 1 for a < L, 0 from L on.

    Source: OECD, Measuring Capital (2001, 2009), age-efficiency profiles (form cited from memory).
    """
    return hyperbolic(ages, life=life, b=1.0)


def straight_line(ages: F8, *, life: float) -> F8:
    """Return the price 1 - a / L for a < L, 0 from L on: equal consumption in every period of the life.

    Source: OECD, Measuring Capital (2001, 2009), straight-line depreciation (form cited from memory).
    """
    return linear(ages, life=life)


def declining_balance(ages: F8, *, life: float, factor: float) -> F8:
    """Return the price (1 - R / L)^a for a < L, 0 from L on, R > 0 the declining-balance `factor`.

    An asset whose life is R or less loses all in its first period. Rates published as R / L for a whole cohort
    are never cut at a life: they are the form `cohort_geometric` of the weights.
    Source: OECD, Measuring Capital (2001, 2009), declining-balance depreciation (form cited from memory).
    """
    life = require("the life", life, low=0, open_low=True)
    factor = require("the declining-balance factor", factor, low=0, open_low=True)
    return np.where(ages < life, geometric(ages, rate=min(1.0, factor / life)), 0.0)


@dataclass(frozen=True)
class Form:
    """A form of efficiency or of price and the names of the parameters it takes."""

    function: Callable[..., F8]
    parameters: tuple[str, ...]


EFFICIENCY_FORMS: Mapping[str, Form] = MappingProxyType(
    {
        "geometric": Form(geometric, ("rate",)),
        "hyperbolic": Form(hyperbolic, ("life", "b")),
        "linear": Form(linear, ("life",)),
        "constant": Form(constant, ("life",)),
    }
)
"""Every efficiency form of a single asset, by name."""

AGE_PRICE_FORMS: Mapping[str, Form] = MappingProxyType(
    {
        "straight_line": Form(straight_line, ("life",)),
        "declining_balance": Form(declining_balance, ("life", "factor")),
    }
)
"""Every form in which the price of a single asset by age is given directly, by name."""


def efficiency_form(form: str) -> Form:
    """Return the registered form.

    Raises:
        ValueError: no form has this name; the message lists those that exist.
    """
    if form not in EFFICIENCY_FORMS:
        raise ValueError(f"unknown efficiency form {form!r}, expected one of {', '.join(EFFICIENCY_FORMS)}")
    return EFFICIENCY_FORMS[form]


def efficiency(
    form: str,
    ages: F8,
    *,
    life: float | None = None,
    rate: float | None = None,
    b: float | None = None,
) -> F8:
    """Return the efficiency g(a) of one asset, relative to a new one.

    Args:
        form: a name of `EFFICIENCY_FORMS`.
        ages: exact ages in periods, any shape, all >= 0; half ages are allowed. NaN is refused.
        life: life L in periods, for the forms that end.
        rate: depreciation rate d per period, for the geometric form.
        b: shape of the hyperbolic form.

    Returns:
        Array of the shape of `ages`, no unit, between 0 and 1.

    Raises:
        ValueError: unknown form; a parameter that the form needs is missing or out of range; a parameter that
            the form does not use is given; a negative age.
    """
    return _profile(f"{form} efficiency", efficiency_form(form), ages, {"life": life, "rate": rate, "b": b})


def direct_age_price(form: str, ages: F8, *, life: float, factor: float | None = None) -> F8:
    """Return the price z(a) of one asset relative to a new one, given directly by a form.

    Args:
        form: a name of `AGE_PRICE_FORMS`.
        ages: exact ages in periods, any shape, all >= 0; half ages are allowed. NaN is refused.
        life: life L in periods.
        factor: declining-balance factor R, for that form.

    Returns:
        Array of the shape of `ages`, no unit, between 0 and 1.

    Raises:
        ValueError: unknown form (the message lists those that exist); otherwise as `efficiency`.
    """
    if form not in AGE_PRICE_FORMS:
        raise ValueError(f"unknown age-price form {form!r}, expected one of {', '.join(AGE_PRICE_FORMS)}")
    return _profile(f"{form} price", AGE_PRICE_FORMS[form], ages, {"life": life, "factor": factor})


def _profile(name: str, form: Form, ages: F8, given: Mapping[str, float | None]) -> F8:
    unused = [key for key, value in given.items() if value is not None and key not in form.parameters]
    if unused:
        raise ValueError(f"the {name} does not use {' and '.join(unused)}: leave it out")
    ages = np.asarray(ages, dtype=np.float64)
    if not np.all(ages >= 0):
        raise ValueError("an age is negative or not a number")
    return form.function(ages, **{key: given[key] for key in form.parameters})


def age_price(h: F8, discount_rate: float) -> F8:
    """Return the age-price profile z(a) that an efficiency profile implies.

    z(a) = sum_{j>=0} h(a+j) (1+rho)^-j / sum_{j>=0} h(j) (1+rho)^-j

    Args:
        h: (A + 1,) efficiency at the whole ages 0..A; it is taken as 0 after A. NaN is refused.
        discount_rate: real rate rho per period, > -1.

    Returns:
        (A + 1,) prices relative to a new asset, z(0) = 1.

    Source: OECD, Measuring Capital (2001, 2009) (formula cited from memory); worked example: A. Harrison,
    Cost of capital services and the national accounts, table 1.

    Raises:
        ValueError: discount rate <= -1; a profile with NaN or without a positive value.
    """
    discount_rate = require("the discount rate", discount_rate, low=-1, open_low=True)
    value = np.array(h, dtype=np.float64)
    for age in range(len(value) - 2, -1, -1):
        value[age] += value[age + 1] / (1 + discount_rate)
    if not (len(value) and np.isfinite(value[0]) and value[0] > 0):
        raise ValueError("the efficiency profile has no positive value, or holds one that is not a number")
    return np.asarray(value / value[0], dtype=np.float64)


def efficiency_from_age_price(z: F8, discount_rate: float) -> F8:
    """Return the efficiency profile h(a) behind an age-price profile: the inverse of `age_price`.

    h(a) is proportional to z(a) - z(a+1) / (1+rho), scaled to h(0) = 1. A negative or rising result is
    returned as it is: it says that the prices and the rate do not go together.

    Args:
        z: (A + 1,) prices at the whole ages 0..A; taken as 0 after A. NaN is refused.
        discount_rate: real rate rho per period, > -1.

    Returns:
        (A + 1,) efficiency relative to a new asset.

    Source: the formula of `age_price` solved for h.

    Raises:
        ValueError: discount rate <= -1; NaN; a new asset that earns nothing (h(0) <= 0 before scaling).
    """
    discount_rate = require("the discount rate", discount_rate, low=-1, open_low=True)
    price = np.asarray(z, dtype=np.float64)
    earned = price - np.append(price[1:], 0.0) / (1 + discount_rate)
    if not (np.all(np.isfinite(earned)) and len(earned) and earned[0] > 0):
        raise ValueError(
            "the age-price profile is not a number somewhere, or its first decline is below the discount"
        )
    return np.asarray(earned / earned[0], dtype=np.float64)
