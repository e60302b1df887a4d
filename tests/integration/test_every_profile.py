"""Every form and every retirement pattern, assembled: against plain sums over scipy's distributions, and traced."""

import math
from collections.abc import Callable, Iterator
from functools import cache
from itertools import pairwise
from typing import NamedTuple

import numpy as np
import pytest
from scipy import integrate, optimize, stats

from keelbook.assembly.run import assemble
from keelbook.audit.reading import Build
from keelbook.audit.trace import find, trace
from keelbook.contracts.retirement import load_retirement

FIRST, YEARS, WINDOW, GROWTH, RATE = 2000, 15, 5, 0.03, 0.04
ASSET, LIFE = "N11O", 7.5
AGE = {"start": 1.0, "mid": 0.5, "end": 0.0}

_S = math.sqrt(math.log(1.25))
OUTSIDE = {
    "linear": (stats.uniform(0, 2), 0, 2),
    "delayed_linear": (stats.uniform(0.8, 0.4), 0.8, 1.2),
    "truncated_normal": (stats.truncnorm(-1.96, 1.96, 1, 0.5), 0.02, 1.98),
    "normal_wide": (stats.truncnorm(-2, 2, 1, 0.5), 0, 2),
    "normal_narrow": (stats.truncnorm(-4, 4, 1, 0.25), 0, 2),
    "lognormal": (stats.lognorm(_S, scale=math.exp(-_S * _S / 2)), 0, 3),
    "weibull": (stats.weibull_min(1.7, scale=1 / math.gamma(1 + 1 / 1.7)), 0, 3),
    "gamma": (stats.gamma(9, scale=1 / 9), 0, 3),
    "winfrey_s2": (stats.beta(4.7, 4.7, 0, 2), 0, 2),
    "winfrey_s3": (stats.beta(7.902, 7.902, 0, 2), 0, 2),
    "winfrey_quarter": (stats.beta(7.5, 7.5, 0, 2), 0, 2),
}
"""Shipped pattern -> its density of lives relative to the mean, and the cuts."""


class Case(NamedTuple):
    """A row of rules/assets.csv and what it says of an asset of life L at age a < L."""

    row: str
    of_one: Callable[[float, float], float]
    retirement: str
    price: bool = False


def _hyperbolic(age: float, life: float) -> float:
    return (life - age) / (life - 0.5 * age)


CASES = {
    f"hyperbolic, {name}": Case(f"hyperbolic,,,{LIFE},,0.5,{name}", _hyperbolic, name)
    for name in ("simultaneous", *OUTSIDE)
} | {
    "geometric": Case(f"geometric,,0.1,{LIFE},,,gamma", lambda a, life: 0.9**a, "gamma"),
    "linear": Case(f"linear,,,{LIFE},,,linear", lambda a, life: 1 - a / life, "linear"),
    "constant": Case(f"constant,,,{LIFE},,,winfrey_s3", lambda a, life: 1.0, "winfrey_s3"),
    "straight line": Case(
        f",straight_line,,{LIFE},,,truncated_normal", lambda a, life: 1 - a / life, "truncated_normal", True
    ),
    "declining balance": Case(
        f",declining_balance,,{LIFE},1.5,,weibull",
        lambda a, life: (1 - min(1, 1.5 / life)) ** a,
        "weibull",
        True,
    ),
}
INDUSTRIES = dict(zip(CASES, "ABCDEFGHIJKLMNOPQRSTU", strict=False))


def test_every_shipped_pattern_is_a_case() -> None:
    assert {case.retirement for case in CASES.values()} == set(load_retirement())


# --- the same, in plain sums ----------------------------------------------------------------------------------


@cache
def _lives(retirement: str) -> dict[int, float]:
    """Return p(L), lives split between whole numbers, the mean restored by a factor exp(theta L)."""
    if retirement == "simultaneous":
        return {7: 0.5, 8: 0.5}
    density, low, high = OUTSIDE[retirement]

    def step(n: int) -> float:
        def below(life: float) -> float:
            start, inside = density.cdf(low), density.cdf(high) - density.cdf(low)
            return min(max((density.cdf(life / LIFE) - start) / inside, 0.0), 1.0)

        kinks = [k * LIFE for k in (low, high) if n < k * LIFE < n + 1]
        return float(integrate.quad(below, n, n + 1, points=kinks or None, epsabs=1e-13)[0])

    p = np.diff([step(n) for n in range(-1, math.ceil(high * LIFE) + 1)])
    p[1] += p[0]
    lives, p = np.arange(1, len(p)), np.maximum(p[1:], 0)

    def tilted(theta: float) -> np.ndarray:
        q = p * np.exp(theta * (lives - LIFE))
        return q / q.sum()

    theta = optimize.brentq(lambda x: float(tilted(x) @ lives) - LIFE, -2, 2, xtol=1e-15)
    return dict(zip(lives.tolist(), tilted(theta).tolist(), strict=True))


def _weights(case: Case, timing: str, mode: str) -> dict[str, list[float]]:
    """Return gross, productive and net weights at the end of a period, age by age in plain loops."""
    p = _lives(case.retirement)
    last = max(p) + 1

    def one(age: float, life: int) -> float:
        return case.of_one(age, life) if age < life else 0.0

    def mean(age: float) -> float:
        return sum(mass * one(age, life) for life, mass in p.items())

    def price_of(efficiency: Callable[[int], float]) -> list[float]:
        left = [
            sum(efficiency(a + j) / (1 + RATE) ** j for j in range(last + 1 - a)) for a in range(last + 1)
        ]
        return [x / left[0] for x in left]

    if case.price:
        z = [mean(a) for a in range(last + 1)]
        earned = {a: mean(a) - mean(a + 1) / (1 + RATE) for v in range(last) for a in (v + AGE[timing], v)}
        h = [earned[v + AGE[timing]] / earned[0] for v in range(last)]
    else:
        h = [mean(v + AGE[timing]) for v in range(last)]
        if mode == "pooled":
            z = price_of(mean)
        else:
            each = {life: price_of(lambda a, life=life: one(a, life)) for life in p}  # type: ignore[misc]
            z = [sum(p[life] * each[life][a] for life in p) for a in range(last + 1)]
    net = {"start": z[1:], "end": z[:-1], "mid": [(a + b) / 2 for a, b in pairwise(z)]}[timing]
    gross = [sum(mass for life, mass in p.items() if v + AGE[timing] < life) for v in range(last)]
    return {"gross_stock": gross, "productive_stock": h, "net_stock": net}


def _investment(industry: str) -> list[float]:
    """Return steady growth over the window of the trend, which then is its own past; after it anything."""
    wobble = [0, 8, -5, 3, -9, 14, 0, -20, 6, 11]
    flow = [100 * (1 + GROWTH) ** t for t in range(YEARS)]
    return [x if t < WINDOW else x + wobble[(t + ord(industry)) % 10] for t, x in enumerate(flow)]


def _stock(weights: list[float], flow: list[float], year: int) -> float:
    past = [flow[0] * (1 + GROWTH) ** -j for j in range(1, len(weights) + 1)]
    return sum(w * (flow[year - v] if v <= year else past[v - year - 1]) for v, w in enumerate(weights))


# --- assembled ------------------------------------------------------------------------------------------------

DECLARED = """\
title = "Invented"
area = "HV"
currency = "HVK"
reference_year = {first}
period = [{first}, {last}]
[[source]]
name = "investment"
file = "sources/investment.csv"
measure = "investment"
price_basis = "constant"
unit_mult = 6
frequency = "A"
[source.csv]
[source.long]
time_period = "year"
value = "value"
industry = "industry"
[source.fixed]
asset = "{asset}"
[rules.capital]
timing = {{ value = "{timing}", citation = "test" }}
age_price_mode = {{ value = "{mode}", citation = "test" }}
trend_window = {{ value = {window}, citation = "test" }}
"""


@pytest.fixture(scope="module", params=[("mid", "pooled"), ("end", "by_life"), ("start", "pooled")], ids=str)
def built(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[tuple[Build, str, str]]:
    timing, mode = request.param
    folder = tmp_path_factory.mktemp("profiles")
    (folder / "sources").mkdir()
    (folder / "rules").mkdir()
    declared = DECLARED.format(
        first=FIRST, last=FIRST + YEARS - 1, asset=ASSET, timing=timing, mode=mode, window=WINDOW
    )
    (folder / "assembly.toml").write_text(declared, encoding="utf-8")
    rows = [
        f"{industry},{FIRST + t},{value!r}"
        for industry in INDUSTRIES.values()
        for t, value in enumerate(_investment(industry))
    ]
    (folder / "sources" / "investment.csv").write_text("\n".join(["industry,year,value", *rows]) + "\n")
    rules = [
        f"{ASSET},{INDUSTRIES[name]},{case.row},{RATE},a test,common practice" for name, case in CASES.items()
    ]
    head = "asset,industry,efficiency,age_price,rate,life,declining_balance_rate,b,retirement,discount_rate"
    (folder / "rules" / "assets.csv").write_text("\n".join([f"{head},citation,status", *rules]) + "\n")
    assemble(folder)
    with Build(folder) as build:
        yield build, timing, mode


LOST = {"consumption_of_fixed_capital": "net_stock", "retirements": "gross_stock"}


@pytest.mark.parametrize("name", CASES)
def test_stocks_are_the_plain_sums_over_vintages(built: tuple[Build, str, str], name: str) -> None:
    build, timing, mode = built
    flow = _investment(INDUSTRIES[name])
    weights = _weights(CASES[name], timing, mode)
    for measure, stock in LOST.items():
        weights[measure] = [
            a - b for a, b in zip([1.0, *weights[stock]], [*weights[stock], 0.0], strict=True)
        ]
    for measure, w in weights.items():
        series = find(build, measure, _key(name))
        stored = build.rows(
            "select value from figure where series_id = ? and value is not null order by period",
            (series.series_id,),
        )
        expected = [_stock(w, flow, t) for t in range(YEARS)]
        np.testing.assert_allclose([v for (v,) in stored], expected, rtol=2e-9, err_msg=measure)


def _key(name: str) -> dict[str, str]:
    return {"industry": INDUSTRIES[name], "asset": ASSET, "price_basis": "constant"}


@pytest.mark.parametrize("name", CASES)
def test_figures_are_reproduced_with_the_weights_that_the_record_gives(
    built: tuple[Build, str, str], name: str
) -> None:
    build, _, _ = built
    for measure in ("gross_stock", "productive_stock", "net_stock", *LOST):
        traced = trace(build, find(build, measure, _key(name)), FIRST + YEARS - 1)
        assert traced.reproduced
        assert [i.role for i in traced.inputs].count("investment") == YEARS
        (opening,) = (i for i in traced.inputs if i.role == "opening_stock")
        assert opening.series is not None
        assert trace(build, opening.series, FIRST - 1).reproduced


def test_the_pattern_stands_with_its_own_line_and_citation(built: tuple[Build, str, str]) -> None:
    build, _, mode = built
    traced = trace(build, find(build, "net_stock", _key("straight line")), FIRST)
    used = {choice.name: choice for choice in traced.choices}
    assert (used["asset.age_price"].value, used["asset.age_price"].file) == (
        "straight_line",
        "rules/assets.csv",
    )
    assert used["asset.retirement"].file == "rules/assets.csv"
    assert {name for name in used if name.startswith("asset.retirement.")} == {
        f"asset.retirement.{name}" for name in ("distribution", "sd", "low", "high")
    }
    sd = used["asset.retirement.sd"]
    assert (sd.value, sd.file) == (0.5, "keelbook/rules/retirement.csv")
    assert "198 %" in sd.citation
    assert used["capital.age_price_mode"].value == mode
