"""Every registered formula is held to its own terms: what explains a figure must also give it."""

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
import pytest

from keelbook.lineage.formula import Formula, Setting
from keelbook.lineage.primitives import Groups, Rule, Span, Sum, Term
from keelbook.stages.catalogue import FORMULAS

T, N = 14, 8
YEARS = range(2000, 2000 + T)
REFERENCE_YEAR = 2008
TOLERANCE = 1e-12

Arrays = list[np.ndarray]


class Case(NamedTuple):
    """How a formula is put to the test.

    inputs: makes one array a role. sets: parameter sets, spread over the series. linear: the contributions
    of the terms add up to the figure.
    """

    inputs: Callable[[np.random.Generator, int], Arrays]
    sets: tuple[dict[str, Any], ...] = ({},)
    linear: bool = False
    members: int | None = None


def _positive(rng: np.random.Generator, roles: int) -> Arrays:
    out = [rng.uniform(0.5, 1.5, (T, N)) for _ in range(roles)]
    out[0][:2, 1] = np.nan
    return out


def _shares(rng: np.random.Generator, roles: int) -> Arrays:
    return [rng.uniform(0.1, 0.9, (T, N)) for _ in range(roles)]


def _signed(rng: np.random.Generator, roles: int) -> Arrays:
    """Growth rates first, shares last."""
    return [*(rng.normal(0, 0.05, (T, N)) for _ in range(roles - 1)), *_shares(rng, 1)]


def _share_and_growth(rng: np.random.Generator, roles: int) -> Arrays:
    return _signed(rng, roles)[::-1]


def _quarters(rng: np.random.Generator, roles: int) -> Arrays:
    x = rng.uniform(50, 150, (4 * T, N))
    x[5, 2] = np.nan
    return [x]


def _prices(rng: np.random.Generator, roles: int) -> Arrays:
    price = rng.uniform(0.5, 1.5, (T, N))
    price[:3, 1] = np.nan
    price[-2:, 2] = np.nan
    later, before = np.full((T, N), np.nan), np.full((T, N), np.nan)
    later[:-1], before[1:] = price[1:], price[:-1]
    return [price, later, before]


def _investment(rng: np.random.Generator, roles: int) -> Arrays:
    x = rng.uniform(50, 150, (T, N))
    for n in range(N):
        x[: 1 + n % 4, n] = np.nan
    x[3, 5] = -1.0
    return [x]


def _indicator(rng: np.random.Generator, roles: int) -> Arrays:
    """Investment from different years on, and what it followed before; one series without an indicator."""
    investment, indicator = _investment(rng, 1)[0], rng.uniform(5, 15, (T, N))
    investment[3, 5] = 60.0
    indicator[0, 2] = np.nan
    indicator[:, 6] = np.nan
    return [investment, indicator]


def _start(rng: np.random.Generator, roles: int) -> Arrays:
    """Fitted investment and growth, one figure a series."""
    investment, growth = np.full((T, N), np.nan), np.full((T, N), np.nan)
    at = np.arange(N) % 4, np.arange(N)
    investment[at], growth[at] = rng.uniform(50, 150, N), rng.uniform(-0.02, 0.06, N)
    return [investment, growth]


def _vintages(rng: np.random.Generator, roles: int) -> Arrays:
    """Investment from different years on, one series with a gap, and an opening in the year before."""
    flow = rng.uniform(-20, 150, (T, N))
    opening, growth = _start(rng, 2)
    for n in range(N):
        flow[: 1 + n % 4, n] = np.nan
    flow[9, 3] = np.nan
    return [flow, 10 * opening, growth]


def _benchmark(rng: np.random.Generator, roles: int) -> Arrays:
    """A benchmark some years after the opening; one of the opening's own date; one that is not there."""
    flow, opening, growth = _vintages(rng, 3)
    flow = np.abs(flow)
    benchmark = np.full((T, N), np.nan)
    for n in range(N):
        benchmark[n % 4 + n % 3, n] = rng.uniform(500, 900)
    benchmark[:, 7] = np.nan
    return [benchmark, flow, opening, growth]


def _from_zero(rng: np.random.Generator, roles: int) -> Arrays:
    flow, opening, growth = _vintages(rng, 3)
    return [50 + np.abs(flow), opening / 20, growth]


def _two_benchmarks(rng: np.random.Generator, roles: int) -> Arrays:
    """Two benchmarks after the opening, a delivered change between some of them."""
    flow, opening, growth = _vintages(rng, 3)
    flow = 50 + np.abs(flow)
    benchmark, change = np.full((T, N), np.nan), np.full((T, N), np.nan)
    for n in range(N):
        benchmark[n % 4 + 1, n] = rng.uniform(700, 900)
        benchmark[n % 4 + 5, n] = rng.uniform(700, 900)
        change[n % 4 + 3, n] = rng.uniform(-40, 40)
    flow[9, 3] = 60.0
    change[:, 5] = np.nan
    return [benchmark, change, flow, opening, growth]


def _changes(rng: np.random.Generator, roles: int) -> Arrays:
    """Losses and gains of some years, an even change in others, one stock that is put to a benchmark."""
    flow, opening, growth = _vintages(rng, 3)
    change, even, target = (np.full((T, N), np.nan) for _ in range(3))
    for n in range(N):
        change[[n % 4 + 2, n % 4 + 6], n] = rng.uniform(-60, 40, 2)
    even[5:8, 2] = -7.0
    target[6, 4] = 500.0
    return [change, even, target, 50 + np.abs(flow), opening, growth]


def _growth(rng: np.random.Generator, roles: int) -> Arrays:
    x = rng.normal(0.02, 0.05, (T, N))
    for n in range(N):
        x[: 1 + n % 3, n] = np.nan
    x[-1, 4] = np.nan
    return [x]


def _gaps(rng: np.random.Generator, roles: int) -> Arrays:
    x = rng.uniform(50, 150, (T, N))
    x[:2, 1] = x[4:6, 2] = x[3:6, 3] = x[5:9, 4] = x[-1, 5] = np.nan
    x[3, 6] = x[5, 6] = np.nan
    return [x]


def _two_bases(rng: np.random.Generator, roles: int) -> Arrays:
    """An index that starts late, the earlier one that ends early, and both in their common year."""
    index, earlier = (rng.uniform(0.5, 1.5, (T, N)) for _ in range(2))
    index[:6], earlier[9:] = np.nan, np.nan
    return [index, earlier, *(np.broadcast_to(x[7], (T, N)).copy() for x in (index, earlier))]


def _costs(rng: np.random.Generator, roles: int) -> Arrays:
    """Costs of both signs, and a base."""
    return [rng.normal(0, 5, (T, N)), rng.uniform(50, 150, (T, N))]


MEMBERS = 11


def _parts(rng: np.random.Generator, roles: int) -> Arrays:
    return [rng.uniform(-50, 150, (T, MEMBERS)) for _ in range(roles)]


def _stocks_and_costs(rng: np.random.Generator, roles: int) -> Arrays:
    out = [rng.uniform(0.5, 1.5, (T, MEMBERS)) for _ in range(roles)]
    # An asset that is not held: no stock, no cost, and so no say in the index.
    out[0][4:, 0] = out[1][4:, 0] = 0.0
    out[2][4:, 0] = out[3][4:, 0] = 0.0
    return out


def _asset(timing: str, mode: str = "pooled", **parameters: Any) -> dict[str, Any]:
    """Return a parameter set; a name such as `retirement__sd` stands for `asset.retirement.sd`."""
    given = {f"asset.{name.replace('__', '.')}": value for name, value in parameters.items()}
    return {"capital.timing": timing, "capital.age_price_mode": mode, **given}


def _from_2006(**parameters: Any) -> dict[str, Any]:
    """Return parameters that hold from 2006 on."""
    return {f"asset.{name.replace('__', '.')}@2006": value for name, value in parameters.items()}


AT_ONCE = {"retirement__distribution": "simultaneous"}
NORMAL = {
    "retirement__distribution": "truncated_normal",
    "retirement__sd": 0.5,
    "retirement__low": 0.02,
    "retirement__high": 1.98,
}

ASSETS = (
    _asset("mid", efficiency="cohort_geometric", rate=0.1, gross_life=6, **AT_ONCE),
    _asset("start", efficiency="cohort_geometric", rate=0.3, gross_life=25, **NORMAL),
    _asset("end", efficiency="cohort_geometric", rate=0.02, gross_life=9.5, **AT_ONCE),
    _asset("mid", efficiency="hyperbolic", life=5, b=0.5, discount_rate=0.04, **AT_ONCE),
    _asset("end", "by_life", efficiency="hyperbolic", life=30, b=0.75, discount_rate=0.0, **NORMAL),
    _asset("start", age_price="straight_line", life=8.25, discount_rate=0.03, **AT_ONCE),
    {
        **_asset("mid", efficiency="cohort_geometric", rate=0.1, gross_life=6, applies_to="stock", **AT_ONCE),
        **_from_2006(efficiency="cohort_geometric", rate=0.3, gross_life=4, **AT_ONCE),
    },
    {
        **_asset("end", efficiency="hyperbolic", life=7, b=0.5, discount_rate=0.04, **NORMAL),
        **_from_2006(efficiency="cohort_geometric", rate=0.2, gross_life=3, **AT_ONCE),
    },
)

TAXES = tuple(
    {
        "services.tax_rate": rate,
        "services.tax_allowances": 0.8,
        "services.tax_credit": 0.05,
        "services.property_tax": rate / 10,
    }
    for rate in (0.2, 0.35)
)

TAXES = tuple(
    {
        "services.tax_rate": rate,
        "services.tax_allowances": 0.8,
        "services.tax_credit": 0.05,
        "services.property_tax": rate / 10,
    }
    for rate in (0.2, 0.35)
)

UNITS = ({"source.unit_mult": 3, "measure.unit_mult": 6}, {"source.unit_mult": 0, "measure.unit_mult": 0})


def _annual(rule: str) -> tuple[dict[str, Any], ...]:
    return tuple({**units, "measure.annual": rule} for units in UNITS)


PLAIN = Case(_positive)
LINEAR = Case(_positive, linear=True)
OF_SHARES = Case(_shares)
VINTAGES = Case(_vintages, ASSETS, linear=True)
OPENING = Case(_start, ASSETS)
BENCHMARK = Case(_benchmark, ASSETS, linear=True)
TORNQVIST = Case(_stocks_and_costs, linear=True, members=MEMBERS)

WARM_UP = Case(_from_zero, tuple({**a, "capital.warm_up_limit": 0.6} for a in ASSETS), linear=True)
STARTS = tuple({"capital.backcast_growth": 0.03, **own} for own in ({}, {"asset.initial_growth": -0.01}))

CASES: dict[str, tuple[Case, ...]] = {
    "scaled": (Case(_positive, UNITS, linear=True),),
    "annual": tuple(Case(_quarters, _annual(rule), linear=True) for rule in ("sum", "mean", "end")),
    "rebased": (PLAIN,),
    "filled_linear": (Case(_gaps, ({"harmonise.fill_longest": 3},), linear=True),),
    "filled_constant_growth": (Case(_gaps, ({"harmonise.fill_longest": 2},)),),
    "index_linked": (Case(_two_bases),),
    "sum_of_parts": (Case(_parts, linear=True, members=MEMBERS),),
    "deflated": (PLAIN,),
    "year_end_price": (Case(_prices),),
    "log_trend_growth": tuple(Case(_investment, ({"capital.trend_window": n},)) for n in (2, 10)),
    "log_trend_start": tuple(Case(_investment, ({"capital.trend_window": n},)) for n in (2, 10)),
    "declared_growth": (Case(_investment, STARTS),),
    "first_year_investment": (Case(_investment, linear=True),),
    "investment_by_indicator": tuple(
        Case(_indicator, ({"capital.link_window": n},), linear=True) for n in (1, 4)
    ),
    "capital_output_factor": (Case(_positive, ({"asset.capital_output_ratio": 2.5},)),),
    "opening_of_zero": (LINEAR,),
    "gross_stock_from_zero": (WARM_UP,),
    "productive_stock_from_zero": (WARM_UP,),
    "net_stock_from_zero": (WARM_UP,),
    "consumption_of_fixed_capital_from_zero": (WARM_UP,),
    "retirements_from_zero": (WARM_UP,),
    "benchmark_gap_spread": (Case(_two_benchmarks, ASSETS),),
    "holding_gains": (PLAIN,),
    "net_stock_times_age": (VINTAGES,),
    "average_age": (PLAIN,),
    "surviving_part": (Case(_changes, ASSETS),),
    "investment_before_changes": (PLAIN,),
    "stock_after_changes": (PLAIN,),
    "loss_after_changes": (PLAIN,),
    "changes_of_stock": (PLAIN,),
    "gross_stock_steady_state": (OPENING,),
    "productive_stock_steady_state": (OPENING,),
    "net_stock_steady_state": (OPENING,),
    "gross_stock_of_vintages": (VINTAGES,),
    "productive_stock_of_vintages": (VINTAGES,),
    "net_stock_of_vintages": (VINTAGES,),
    "consumption_of_fixed_capital_of_vintages": (VINTAGES,),
    "retirements_of_vintages": (VINTAGES,),
    "benchmark_factor_gross_stock": (BENCHMARK,),
    "benchmark_factor_productive_stock": (BENCHMARK,),
    "benchmark_factor_net_stock": (BENCHMARK,),
    "opening_from_benchmark": (PLAIN,),
    "productive_as_net_stock": (LINEAR,),
    "at_reference_prices": (PLAIN,),
    "hours_of_groups": (LINEAR,),
    "labour_input_growth": (TORNQVIST,),
    "labour_input_chained": (Case(_growth, ({"assembly.reference_year": REFERENCE_YEAR},)),),
    "labour_composition": (PLAIN,),
    "labour_input_from_composition": (PLAIN,),
    "exogenous_rate_of_return": (
        Case(_positive, ({"services.real_rate": 0.04}, {"services.real_rate": 0.0})),
    ),
    "unallocated_income": (LINEAR,),
    **{
        f"{measure}_without_{left_out}": (PLAIN,)
        for measure in ("capital_compensation", "cost_before_return")
        for left_out in ("wear", "gains", "wear_and_gains")
    },
    "cost_before_return": (PLAIN,),
    "capital_compensation_with_taxes": (PLAIN,),
    "capital_compensation_floored": (Case(_costs, ({"services.user_cost_floor": 0.02},)),),
    "opening_asset_base": (PLAIN,),
    "opening_revaluation": (PLAIN,),
    "smoothed_price_change": (Case(_gaps, tuple({"services.smoothing_periods": 3} for _ in range(2)), True),),
    "smoothed_revaluation": (PLAIN,),
    "loss_of_new_investment": (Case(_positive, ASSETS, linear=True),),
    "depreciation_of_opening_vintages": (PLAIN,),
    "at_average_prices": (PLAIN,),
    "at_previous_year_prices": (PLAIN,),
    "at_next_year_prices": (PLAIN,),
    "opening_at_first_price": (PLAIN,),
    "net_stock_at_historic_cost": (VINTAGES,),
    "gross_stock_at_historic_cost": (VINTAGES,),
    "laspeyres_growth": (PLAIN,),
    "fisher_growth": (PLAIN,),
    "tornqvist_growth": (TORNQVIST,),
    "volume_index_chained": (Case(_growth, ({"assembly.reference_year": REFERENCE_YEAR},)),),
    "chained_volume": (PLAIN,),
    "aggregation_discrepancy": (LINEAR,),
    "tax_term": (OF_SHARES,),
    "declared_tax_term": (Case(_positive, TAXES),),
    "declared_property_tax": (Case(_positive, TAXES),),
    "taxed_asset_base": (PLAIN,),
    "endogenous_real_rate_of_return": (PLAIN,),
    "endogenous_rate_of_return_after_tax": (PLAIN,),
    "exogenous_real_rate_of_return": (Case(_positive, ({"services.real_rate": 0.04},)),),
    "opening_productive_stock": (LINEAR,),
    "at_current_prices": (PLAIN,),
    "at_replacement_cost": (PLAIN,),
    "hours_index": (PLAIN,),
    "value_added_at_factor_cost": (LINEAR,),
    "labour_income_unadjusted": (LINEAR,),
    "labour_income_by_hours": (
        Case(_positive, ({"income.relative_earnings": 1.0}, {"income.relative_earnings": 0.7})),
    ),
    "labour_income_fixed_fraction": (
        Case(
            _positive,
            ({"income.mixed_income_labour_fraction": 0.5}, {"income.mixed_income_labour_fraction": 1.0}),
            linear=True,
        ),
    ),
    "capital_income_as_rest": (LINEAR,),
    "labour_share": (PLAIN,),
    "labour_income_from_share": (PLAIN,),
    "capital_share": (OF_SHARES,),
    "asset_base": (PLAIN,),
    "revaluation": (PLAIN,),
    "endogenous_rate_of_return": (PLAIN,),
    "capital_compensation": (PLAIN,),
    "average_productive_stock": (LINEAR,),
    "unit_user_cost": (PLAIN,),
    "capital_services_growth": (TORNQVIST,),
    "capital_services_chained": (Case(_growth, ({"assembly.reference_year": REFERENCE_YEAR},)),),
    "capital_composition": (PLAIN,),
    "two_period_mean": (Case(_shares, linear=True),),
    "moving_mean": tuple(Case(_growth, ({"shares.smoothing_years": n},), linear=True) for n in (1, 5)),
    "growth_log": (PLAIN,),
    "growth_discrete": (PLAIN,),
    "growth_per_hour_log": (PLAIN,),
    "growth_per_hour_discrete": (PLAIN,),
    "capital_contribution": (Case(_share_and_growth),),
    "capital_contribution_discrete": (Case(_share_and_growth),),
    "labour_contribution": (Case(_share_and_growth),),
    "labour_contribution_discrete": (Case(_share_and_growth),),
    "residual": (Case(_signed),),
    "residual_discrete": (Case(_signed),),
    "residual_labour_augmenting": (Case(_signed),),
    "residual_capital_augmenting": (Case(_signed),),
    "residual_level_log": (Case(_growth),),
    "residual_level_discrete": (Case(_growth),),
}

BY_CASE = [(name, i) for name, cases in CASES.items() for i in range(len(cases))]


def _made(name: str, i: int) -> tuple[Formula, Rule, Arrays, np.ndarray, Case]:
    formula, case = FORMULAS[name], CASES[name][i]
    rng = np.random.default_rng(sum(name.encode()) + i)
    x = case.inputs(rng, len(formula.roles))
    assert len(x) == len(formula.roles)
    members = np.arange(N, dtype=np.int32)
    if case.members is not None:
        # Unordered groups, one of them empty, and members that belong to none.
        members = rng.permutation(np.r_[np.arange(N - 1), -1, 0, 1, 1]).astype(np.int32)
        assert len(members) == case.members
    which = (np.arange(N) % len(case.sets)).astype(np.int32)
    rule = formula.build(Setting(case.sets, which, YEARS, Groups(members, N)))
    return formula, rule, x, rule.compute(*x), case


def _cells(y: np.ndarray, count: int = 40) -> list[tuple[int, int]]:
    there = np.argwhere(np.isfinite(y))
    assert len(there), "the inputs of this case give no figure at all"
    picked = np.random.default_rng(1).permutation(len(there))[:count]
    return [(int(t), int(n)) for t, n in there[picked]]


def test_every_registered_formula_has_a_case():
    assert set(CASES) == set(FORMULAS)


@pytest.mark.parametrize(("name", "i"), BY_CASE)
def test_terms_give_the_figure(name, i):
    formula, rule, x, y, case = _made(name, i)
    assert y.shape == (T, N)
    assert y.dtype == np.float64
    for at in _cells(y):
        terms = list(rule.terms(x, at))
        size = sum(abs(t.contribution) for t in terms) + abs(y[at])
        assert abs(rule.combine(x, terms) - y[at]) <= TOLERANCE * size
        assert len({(t.role, t.row, t.column) for t in terms}) == len(terms)
        for t in terms:
            assert 0 <= t.role < len(formula.roles)
            assert t.contribution == pytest.approx(t.value * t.weight, rel=1e-14, abs=1e-300)
        if case.linear:
            assert abs(sum(t.contribution for t in terms) - y[at]) <= TOLERANCE * size


@pytest.mark.parametrize(("name", "i"), BY_CASE)
def test_terms_of_one_series_alone_give_the_same_figure(name, i):
    """A trace re-performs one figure from the inputs of its series only: the others must not matter."""
    formula, rule, x, y, case = _made(name, i)
    for t, n in _cells(y, 10):
        columns = np.array([n]) if case.members is None else np.flatnonzero(_groups_of(rule) == n)
        one_set = case.sets[n % len(case.sets)]
        groups = Groups(np.zeros(len(columns), np.int32), 1)
        alone = formula.build(Setting([one_set], np.zeros(1, np.int32), YEARS, groups))
        mine = [v[:, columns] for v in x]
        again = alone.compute(*mine)[t, 0]
        size = sum(abs(term.contribution) for term in alone.terms(mine, (t, 0))) + abs(again)
        assert abs(again - y[t, n]) <= TOLERANCE * size


def _groups_of(rule: Any) -> np.ndarray:
    of: np.ndarray = rule.groups.of
    return of


@pytest.mark.parametrize(("name", "i"), BY_CASE)
def test_weights_are_slopes(name, i):
    """Against central differences of the whole block: each weight is what its cell does to the figure."""
    _, rule, x, y, _ = _made(name, i)
    for at in _cells(y, 6):
        terms = list(rule.terms(x, at))
        for term in terms:
            if term.role > 0 and term.weight == term.contribution == 0:
                continue  # an input that makes the weights of others has no weight of its own
            here = x[term.role][term.row, term.column]
            expected = term.weight * _slope_around(rule, x, terms, term)
            step = 1e-5 * max(abs(here), 1e-2)
            ends = []
            for sign in (1, -1):
                moved = [v.copy() for v in x]
                moved[term.role][term.row, term.column] += sign * step
                ends.append(rule.compute(*moved)[at])
            slope = (ends[0] - ends[1]) / (2 * step)
            assert slope == pytest.approx(expected, rel=1e-5, abs=1e-7 * (1 + abs(y[at])))


def _slope_around(rule: Any, x: Arrays, terms: list[Term], term: Term) -> float:
    """Return what stands between a cell and its term: a rule may weigh a function of what it reads.

    Weights of a sum over a group are made of its other inputs, so that only its value is stepped.
    """
    point = [np.asarray(v[term.row, term.column]) for v in x]
    with np.errstate(all="ignore"):
        if isinstance(rule, Sum):
            return _slope(lambda first: rule.value(first, *point[1:]), point[0])
        if isinstance(rule, Span):
            total = np.asarray(sum(t.contribution for t in terms))
            return _slope(rule.outer, total) * _slope(rule.inner, point[0])
    return 1.0


def _slope(f: Callable[[Any], Any], at: Any) -> float:
    return float(np.imag(f(np.complex128(at) + 1e-30j)) / 1e-30)


@pytest.mark.parametrize(("name", "i"), BY_CASE)
def test_no_figure_without_terms_and_no_cell_left_out(name, i):
    """What changes a figure is among its terms, for every rule whose inputs are all terms."""
    formula, rule, x, y, case = _made(name, i)
    counted = {r for r, role in enumerate(formula.roles) if role.counted}
    by_value = {0} if case.members is not None else counted
    for at in _cells(y, 4):
        named = {(t.role, t.row, t.column) for t in rule.terms(x, at)}
        for role in by_value:
            columns = range(x[role].shape[1]) if case.members is not None else [at[1]]
            for row in range(x[role].shape[0]):
                for column in columns:
                    moved = [v.copy() for v in x]
                    moved[role][row, column] *= 1.01
                    changed = rule.compute(*moved)[at]
                    if abs(changed - y[at]) > 1e-9 * abs(y[at]):
                        assert (role, row, column) in named
