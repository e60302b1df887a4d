"""Period-end weights: what is left, at the end of a period, of investment made v periods before."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from keelbook.methods.arrays import F8, I8, require
from keelbook.methods.profiles import age_price, direct_age_price, efficiency, efficiency_form
from keelbook.methods.retirement import lives, survival

COHORT_GEOMETRIC = "cohort_geometric"
"""A geometric rate that already contains retirement, as published rates usually do."""

AGE_AT_PERIOD_END = {"start": 1.0, "mid": 0.5, "end": 0.0}
"""Timing of investment within its period -> exact age at the end of that period."""

AGE_PRICE_MODES = ("pooled", "by_life")
"""Age-price of a cohort: from its efficiency as a whole, or the mean of the prices of its single assets."""

Shape = tuple[tuple[str, float], ...]
"""Parameters of a retirement distribution by name, in a form that a cache can keep."""


@dataclass(frozen=True)
class Weights:
    """Weights over v = 0.. (0: investment of the period itself), relative to new investment; not writeable.

    `consumption` and `retirements` are the losses within the period, of `net` and of `gross`. With a
    finite life every array ends with the last loss, so the losses sum to 1 and the stocks end at 0.
    """

    gross: F8 | None
    productive: F8
    net: F8
    consumption: F8
    retirements: F8 | None


def losses(weights: F8) -> F8:
    """Return the loss in each period: (1 - w(0), w(0) - w(1), ..., w(V-1) - w(V)), the shape of `weights`.

    The first entry is the loss of new investment within its own period.
    """
    return -np.diff(weights, prepend=1.0)


def period_end_weights(
    *,
    efficiency: str | None,
    retirement: str | None,
    life: float | None,
    rate: float | None,
    b: float | None,
    discount_rate: float | None,
    timing: str,
    gross_life: float | None = None,
    length: int,
    retirement_shape: Shape = (),
    age_price_mode: str = "pooled",
    age_price_form: str | None = None,
    factor: float | None = None,
) -> Weights:
    """Return the weights of one asset class, all from the same profiles and the same timing.

    With p the survival S, the cohort efficiency h or the age-price profile z, investment at the start of the
    period gives p(v+1), at its end p(v); at mid-period S and h are taken at the exact age v + 1/2 and
    z = (z(v) + z(v+1)) / 2. Cohort geometric: (1-d)^(v+1), (1-d)^v and (1 - d/2) (1-d)^v, for h and z alike.
    h(a) = sum_L p(L) g_L(a) over the distribution of lives. z follows from h (`pooled`), or is the mean
    sum_L p(L) z_L(a) of the prices that follow from each g_L (`by_life`). With an age-price form z is the mean
    of the given prices, and h(a) is proportional to z(a) - z(a+1) / (1+rho) at the same exact ages.

    Args:
        efficiency: `cohort_geometric`, or a form of `EFFICIENCY_FORMS` combined with a retirement
            distribution; None if `age_price_form` is given.
        retirement: a distribution of `RETIREMENT`; for `cohort_geometric` only if `gross_life` is given.
        life: mean life in periods; absent for `cohort_geometric`.
        rate: depreciation rate d per period, for the geometric forms.
        b: shape of the hyperbolic form.
        discount_rate: real rate per period; not used by `cohort_geometric`, whose age-price is its
            efficiency.
        timing: `start`, `mid` or `end`.
        gross_life: mean life of the gross stock of a `cohort_geometric` asset; without it there is no gross
            stock.
        length: number of periods kept of the endless `cohort_geometric` weights; its recursion needs none
            of them.
        retirement_shape: the parameters of the retirement distribution, relative to the mean life.
        age_price_mode: `pooled` or `by_life`, where prices follow from an efficiency.
        age_price_form: a form of `AGE_PRICE_FORMS`, in place of an efficiency.
        factor: declining-balance factor of that age-price form.

    Returns:
        Weights. Finite lives: arrays of length (longest life + 1) with a last weight of 0. Cohort geometric:
        arrays of `length`, and `gross` of (longest gross life + 1). A productive weight that is negative or
        rises with age says that an age-price form and the discount rate do not go together.

    Source: methods as in OECD, Measuring Capital (2001, 2009) and the SNA; mid-year investment: half a
    year's decline.

    Raises:
        ValueError: an unknown name; a parameter missing, out of range, or given where it has no meaning.
    """
    if timing not in AGE_AT_PERIOD_END:
        raise ValueError(f"unknown timing {timing!r}, expected one of {', '.join(AGE_AT_PERIOD_END)}")
    if age_price_mode not in AGE_PRICE_MODES:
        raise ValueError(
            f"unknown age-price mode {age_price_mode!r}, expected one of {', '.join(AGE_PRICE_MODES)}"
        )
    if (efficiency is None) == (age_price_form is None):
        raise ValueError("either an efficiency or an age-price form is needed, and not both")
    if efficiency == COHORT_GEOMETRIC:
        _unused(f"{COHORT_GEOMETRIC} (its rate already contains retirement)", life=life, b=b, factor=factor)
        return _cohort_geometric(rate, timing, retirement, retirement_shape, gross_life, length)
    if gross_life is not None:
        raise ValueError(
            f"gross_life is for {COHORT_GEOMETRIC}; with {efficiency or age_price_form} the gross stock "
            "follows from life"
        )
    if age_price_form is not None:
        _unused(f"the {age_price_form} price", rate=rate, b=b)
        return _given_price(age_price_form, retirement, retirement_shape, life, factor, discount_rate, timing)
    _unused(f"the {efficiency} efficiency", factor=factor)
    return _finite_life(
        efficiency or "", retirement, retirement_shape, life, rate, b, discount_rate, timing, age_price_mode
    )


def _unused(what: str, **parameters: float | None) -> None:
    given = [name for name, value in parameters.items() if value is not None]
    if given:
        raise ValueError(f"{what} does not use {' and '.join(given)}: leave it out")


@lru_cache(maxsize=4096)
def _cohort_geometric(
    rate: float | None,
    timing: str,
    retirement: str | None,
    shape: Shape,
    gross_life: float | None,
    length: int,
) -> Weights:
    d = require("the depreciation rate", rate, low=0, high=1)
    require("the number of periods", length, low=1)
    first = {"start": 1 - d, "mid": 1 - d / 2, "end": 1.0}[timing]
    net = first * efficiency("geometric", np.arange(length, dtype=np.float64), rate=d)
    gross = None
    if gross_life is not None:
        gross = _gross(*_distribution(retirement, shape, gross_life), timing)
    return _weights(gross, net, net)


@lru_cache(maxsize=4096)
def _finite_life(
    form: str,
    retirement: str | None,
    shape: Shape,
    life: float | None,
    rate: float | None,
    b: float | None,
    discount_rate: float | None,
    timing: str,
    mode: str,
) -> Weights:
    takes_life = "life" in efficiency_form(form).parameters
    which, masses = _distribution(retirement, shape, require("the mean life", life, low=1))
    rho = require("the discount rate", discount_rate, low=-1, open_low=True)

    def of_one(one: int, ages: F8) -> F8:
        g = efficiency(form, ages, life=one if takes_life else None, rate=rate, b=b)
        return np.where(ages < one, g, 0.0)

    whole = np.arange(which[-1] + 2, dtype=np.float64)
    if mode == "pooled":
        z = age_price(_mean(of_one, which, masses, whole), rho)
    else:
        z = _mean(lambda one, ages: age_price(of_one(one, ages), rho), which, masses, whole)
    h = _mean(of_one, which, masses, whole[:-1] + AGE_AT_PERIOD_END[timing])
    return _weights(_gross(which, masses, timing), h, _net(z, timing))


@lru_cache(maxsize=4096)
def _given_price(
    form: str,
    retirement: str | None,
    shape: Shape,
    life: float | None,
    factor: float | None,
    discount_rate: float | None,
    timing: str,
) -> Weights:
    which, masses = _distribution(retirement, shape, require("the mean life", life, low=1))
    rho = require("the discount rate", discount_rate, low=-1, open_low=True)

    def price(ages: F8) -> F8:
        return _mean(lambda one, at: direct_age_price(form, at, life=one, factor=factor), which, masses, ages)

    whole = np.arange(which[-1] + 2, dtype=np.float64)
    z = price(whole)
    new = z[0] - z[1] / (1 + rho)
    if new <= 0:
        raise ValueError(
            f"with a discount rate of {rho:g} a new asset earns nothing: its price falls too slowly"
        )
    ages = whole[:-1] + AGE_AT_PERIOD_END[timing]
    h = (price(ages) - price(ages + 1) / (1 + rho)) / new
    return _weights(_gross(which, masses, timing), h, _net(z, timing))


def _mean(of_one: Callable[[int, F8], F8], which: I8, masses: F8, ages: F8) -> F8:
    """Return sum_L p(L) f_L(a) at the given ages."""
    total = np.zeros_like(ages)
    for one, mass in zip(which.tolist(), masses.tolist(), strict=True):
        total += mass * of_one(one, ages)
    return total


def _net(z: F8, timing: str) -> F8:
    return {"start": z[1:], "mid": (z[:-1] + z[1:]) / 2, "end": z[:-1]}[timing]


def _distribution(retirement: str | None, shape: Shape, mean_life: float) -> tuple[I8, F8]:
    if retirement is None:
        raise ValueError(
            "a retirement distribution is needed where a life is given, for example 'simultaneous'"
        )
    return lives(retirement, mean_life, **dict(shape))


def _gross(which: I8, masses: F8, timing: str) -> F8:
    return survival(which, masses, np.arange(which[-1] + 1, dtype=np.float64) + AGE_AT_PERIOD_END[timing])


def _weights(gross: F8 | None, productive: F8, net: F8) -> Weights:
    retirements = None if gross is None else losses(gross)
    weights = Weights(gross, productive.copy(), net.copy(), losses(net), retirements)
    for array in (weights.gross, weights.productive, weights.net, weights.consumption, weights.retirements):
        if array is not None:
            array.flags.writeable = False
    return weights
