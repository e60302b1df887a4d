"""Four industries of the demo computed again from the files as received: csv, openpyxl, numpy and loops only.

Two of the neighbour: plain tables, a steady-state start, labour by hours. Two of the corporations at home: merged
sheets, a linked index, prices of a branch, a benchmark, given stocks of inventories and land, labour by skill.

Nothing of Keelbook is imported here. The file may only be changed when methods change, never to follow the code.
"""

import csv
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import openpyxl
import pytest
from openpyxl.cell.rich_text import CellRichText

YEARS = list(range(1985, 2020))
REFERENCE = 2015
WINDOW = 10
BENCHMARK = 2000

BRANCHES = {"H": "Transportation and storage", "J": "Information and communication"}
GERMAN = {
    "H": "Güter- und Personenverkehr, Lagerei",
    "J": "Information, Fernmeldewesen und Büro-Datenverarbeitung",
}
ASSETS = {
    "N112": "Buildings and structures",
    "N1131": "Transport equipment",
    "N1132": "ICT equipment",
    "N11O": "Other machinery and equipment",
    "N1171": "Research and development",
    "N1173": "Computer software and databases",
}
GIVEN = {"N12": "Inventories", "N211": "Land"}

Series = dict[int, float]


# --- reading ------------------------------------------------------------------------------------------------


def label(cell: Any) -> str:
    """Read a label without what is set as superscript."""
    value = cell.value
    if isinstance(value, CellRichText):
        value = "".join(run for run in value if isinstance(run, str))
    return "" if value is None else str(value)


def figure(cell: Any) -> float:
    """Read a figure: superscript runs are footnotes, a letter behind the digits is a flag, "-" is no figure."""
    text = label(cell).rstrip("pe")
    return math.nan if text == "-" else float(text)


def row_of(sheet: Any, first: int, labels: tuple[str, ...]) -> Series | None:
    """Find the row with these labels (a merged label counts for every row below it) and read it across YEARS."""
    current = [""] * len(labels)
    for row in range(first, sheet.max_row + 1):
        said = [label(sheet.cell(row, at + 1)) for at in range(len(labels))]
        if not any(said):
            return None
        current = [new or old for new, old in zip(said, current, strict=True)]
        if tuple(current) == labels:
            return {year: figure(sheet.cell(row, len(labels) + 1 + t)) for t, year in enumerate(YEARS)}
    return None


def column_of(sheet: Any, header: int, first: int, name: str, group: str = "") -> Series:
    """Read the column under a header (and under a group header in the row above) down the years."""
    current, found = "", 0
    for at in range(2, sheet.max_column + 1):
        current = label(sheet.cell(header - 1, at)) or current
        if label(sheet.cell(header, at)) == name and (not group or current == group):
            found = at
    if not found:
        return {}
    out = {}
    for row in range(first, sheet.max_row + 1):
        year = label(sheet.cell(row, 1))
        if not year.isdigit():
            break
        out[int(year)] = figure(sheet.cell(row, found))
    return out


def records(path: Path, encoding: str, delimiter: str) -> list[dict[str, str]]:
    with path.open(encoding=encoding, newline="") as lines:
        return list(csv.DictReader(lines, delimiter=delimiter))


@dataclass
class Received:
    """What the files say of one industry, years complete, prices with the reference year = 1."""

    area: str
    sector: str
    industry: str
    investment: dict[str, Series]
    price: dict[str, Series]
    given: dict[str, Series]
    benchmark: dict[str, float]
    volume: Series
    value_added: Series
    taxes: Series
    pay: Series
    labour_income: Callable[[int], float]
    method: str
    labour: dict[str, Series]
    labour_pay: dict[str, Series]


def rebased(raw: Series) -> Series:
    assert sorted(raw) == YEARS
    return {year: value / raw[REFERENCE] for year, value in raw.items()}


def home_price(book: Any, branch: str, asset: str) -> Series:
    """The price of the asset in the branch where there is one, else of the asset, linked to its old base."""
    raw = column_of(book["T3 Prices by branch"], 6, 7, asset, branch)
    if not raw:
        raw = column_of(book["T2 Prices"], 5, 6, asset)
    first = min(year for year, value in raw.items() if not math.isnan(value))
    if first > YEARS[0]:
        old = column_of(book["T2b Old base"], 5, 6, asset)
        raw |= {year: old[year] * raw[first] / old[first] for year in range(YEARS[0], first)}
    return rebased(raw)


def corporations(sources: Path, industry: str) -> Received:
    book = openpyxl.load_workbook(sources / "capital_formation.xlsx", rich_text=True)
    branch, own = BRANCHES[industry], ("S11", industry)
    accounts = records(sources / "income_account.csv", "cp1252", ";")

    def of(code: str) -> Series:
        return {
            int(r["Jahr"]): float(r["Wert"].replace(".", "").replace(",", "."))
            for r in accounts
            if (r["Sektor"], r["Branche"], r["Transaktion"])
            == ("Kapitalgesellschaften", GERMAN[industry], code)
        }

    def by_skill(name: str) -> dict[str, Series]:
        rows = records(sources / name, "utf-8", ",")
        mine = [r for r in rows if (r["Sector"], r["Branch"]) == own]
        return {r["Skill"]: {year: float(r[str(year)]) for year in YEARS} for r in mine}

    surveys = records(sources / "benchmark_stocks.csv", "utf-8", ",")
    pay, mixed = of("D.1"), of("B.3g")
    given = {}
    for asset, name in GIVEN.items():
        found = row_of(book["T5 Land and inventories"], 6, (name, "Corporations", branch))
        if found is not None:
            given[asset] = found
    investment = {}
    for asset, name in ASSETS.items():
        found = row_of(book["T1 Investment"], 6, ("Corporations", branch, name))
        assert found is not None
        investment[asset] = found
    volume = row_of(book["T4 Volume"], 6, ("Corporations", branch))
    assert volume is not None
    return Received(
        "XV",
        *own,
        investment=investment,
        price={
            a: home_price(book, branch, n) for a, n in (ASSETS | GIVEN).items() if a in investment | given
        },
        given=given,
        benchmark={
            r["asset"]: float(r["net stock"])
            for r in surveys
            if (int(r["year"]), r["sector"], r["branch"]) == (BENCHMARK, *own)
        },
        volume=volume,
        value_added=of("B.1g"),
        taxes=of("D.29-D.39"),
        pay=pay,
        labour_income=lambda y: pay[y] + mixed[y] * 2 / 3,
        method="fixed_fraction",
        labour=by_skill("hours_by_skill.csv"),
        labour_pay=by_skill("compensation_by_skill.csv"),
    )


def neighbour(sources: Path, industry: str) -> Received:
    book = openpyxl.load_workbook(sources / "neighbour.xlsx")
    accounts: dict[str, Series] = {}
    for row in book["Accounts"].iter_rows(min_row=5, values_only=True):
        if row[0] == industry:
            accounts.setdefault(str(row[1]), {})[int(row[2])] = float(row[3])
    worked = {}
    for status in ("employees", "self-employed"):
        found = row_of(book["Hours"], 5, (industry, status))
        assert found is not None
        worked[status] = found
    investment = {}
    for asset in ASSETS:
        found = row_of(book["Investment"], 5, (industry, asset))
        assert found is not None
        # Delivered in thousand million, kept in million.
        investment[asset] = {year: 1000 * value for year, value in found.items()}
    volume = row_of(book["Volume"], 5, (industry,))
    assert volume is not None
    pay = accounts["D.1"]
    return Received(
        "XW",
        "S1",
        industry,
        investment=investment,
        price={asset: rebased(column_of(book["Prices"], 4, 5, asset)) for asset in ASSETS},
        given={},
        benchmark={},
        volume=volume,
        value_added=accounts["B.1g"],
        taxes=accounts["D.29-D.39"],
        pay=pay,
        labour_income=lambda y: pay[y] + pay[y] / worked["employees"][y] * worked["self-employed"][y],
        method="hours",
        labour={"all": {y: sum(worked[status][y] for status in worked) for y in YEARS}},
        labour_pay={"all": pay},
    )


# --- capital ------------------------------------------------------------------------------------------------


def asset_rule(shipped: Path, own: Path, asset: str, industry: str) -> dict[str, float | None]:
    """Read the row for the asset and industry, else for the asset; own rows of an asset replace the shipped ones."""
    rows = {}
    for path in (own, shipped):
        mine = [row for row in records(path, "utf-8", ",") if row["asset"] == asset]
        rows = rows or {row["industry"]: row for row in mine}
    row = rows.get(industry) or rows["_T"]
    assert row["retirement"] in ("", "simultaneous")
    names = ("rate", "life", "gross_life", "b", "discount_rate")
    return {name: float(row[name]) if row[name] else None for name in names}


def weights(rule: dict[str, float | None], count: int) -> tuple[list[float], list[float], list[float] | None]:
    """Return what is left at the end of a period of investment made v periods ago: productive, net, gross."""
    gross_life = rule["gross_life"] or rule["life"]
    gross = None if gross_life is None else [1.0 if v + 0.5 < gross_life else 0.0 for v in range(count)]
    rate = rule["rate"]
    if rate is not None:
        left = [(1 - rate / 2) * (1 - rate) ** v for v in range(count)]
        return left, left, gross
    life, b, rho = rule["life"], rule["b"], rule["discount_rate"]
    assert life is not None
    assert b is not None
    assert rho is not None

    def efficiency(age: float) -> float:
        return (life - age) / (life - b * age) if age < life else 0.0

    def value(age: int) -> float:
        return sum(efficiency(age + j) / (1 + rho) ** j for j in range(math.ceil(life) + 1))

    prices = [value(v) / value(0) if v < life else 0.0 for v in range(count + 1)]
    net = [(prices[v] + prices[v + 1]) / 2 for v in range(count)]
    return [efficiency(v + 0.5) for v in range(count)], net, gross


def stock(vintages: list[float], left: list[float]) -> Series:
    """Add up what is left of every vintage, one after the other; the last vintages are those of YEARS."""
    before = len(vintages) - len(YEARS)
    out = {}
    for t, year in [(-1, YEARS[0] - 1), *enumerate(YEARS)]:
        total = 0.0
        for v in range(before + t + 1):
            total += left[v] * vintages[before + t - v]
        out[year] = total
    return out


def loss(vintages: list[float], left: list[float]) -> Series:
    """Add up what every vintage loses in a year: new investment 1 - w(0), older w(v-1) - w(v)."""
    before = len(vintages) - len(YEARS)
    out = {}
    for t, year in enumerate(YEARS):
        total = (1 - left[0]) * vintages[before + t]
        for v in range(1, before + t + 1):
            total += (left[v - 1] - left[v]) * vintages[before + t - v]
        out[year] = total
    return out


@dataclass
class Account:
    """All figures of one industry; keys are (measure, method, price basis, asset)."""

    figures: dict[tuple[str, str, str, str], Series] = field(default_factory=dict)

    def put(self, measure: str, method: str, basis: str, asset: str, series: Series) -> Series:
        self.figures[measure, method, basis, asset] = series
        return series


def year_end_prices(index: Series) -> Series:
    out = {y: math.sqrt(index[y] * index[y + 1]) for y in YEARS[:-1]}
    out[YEARS[-1]] = index[YEARS[-1]] * math.sqrt(index[YEARS[-1]] / index[YEARS[-2]])
    return out


def years_assumed(rule: dict[str, float | None], g: float) -> int:
    """Return how many years before the first are needed: a whole life, or until 1e-14 of the stock is left out."""
    whole_life = math.ceil(rule["life"] or rule["gross_life"] or 0)
    rate = rule["rate"]
    return (
        whole_life
        if rate is None
        else whole_life + math.ceil(math.log(1e-14) / math.log((1 - rate) / (1 + g)))
    )


def produced(account: Account, files: Received, asset: str, rule: dict[str, float | None]) -> None:
    """Vintages of one asset, its stocks, what it loses, at all prices."""
    current, index = files.investment[asset], files.price[asset]
    volume = account.put(
        "investment", "deflated", "constant", asset, {y: current[y] / index[y] for y in YEARS}
    )
    t = np.arange(1, WINDOW + 1)
    slope, level = np.polyfit(t, np.log([volume[y] for y in YEARS[:WINDOW]]), 1)
    g, first = math.exp(slope) - 1, math.exp(level + slope)
    before = YEARS[0] - 1
    account.put("trend_growth", "log_linear_trend", "_Z", asset, {before: g})
    account.put("trend_investment", "log_linear_trend", "constant", asset, {before: first})
    assumed = [first / (1 + g) ** j for j in range(years_assumed(rule, g), 0, -1)]
    observed = [volume[y] for y in YEARS]
    productive, net, gross = weights(rule, len(assumed) + len(observed))
    stocks = {"productive_stock": productive, "net_stock": net} | (
        {} if gross is None else {"gross_stock": gross}
    )
    for measure, left in stocks.items():
        found = stock([*assumed, *observed], left)[before]
        account.put(measure, "steady_state", "constant", asset, {before: found})
    factor = 1.0
    if asset in files.benchmark:
        nothing = [0.0] * len(assumed)
        of_observed = stock([*nothing, *observed], net)[BENCHMARK]
        of_assumed = stock([*assumed, *[0.0] * len(observed)], net)[BENCHMARK]
        factor = (files.benchmark[asset] - of_observed) / of_assumed
        account.put("benchmark_factor", "benchmark", "_Z", asset, {before: factor})
    vintages = [*(factor * one for one in assumed), *observed]
    year_end = year_end_prices(index)
    for measure, left in stocks.items():
        found_all = stock(vintages, left)
        opening = found_all.pop(before)
        if asset in files.benchmark:
            account.put(measure, "benchmark", "constant", asset, {before: opening})
        account.put(measure, "perpetual_inventory", "constant", asset, found_all)
        valued = {y: year_end[y] * found_all[y] for y in YEARS}
        account.put(measure, "perpetual_inventory", "year_end", asset, valued)
    losses = {"consumption_of_fixed_capital": net} | ({} if gross is None else {"retirements": gross})
    for measure, left in losses.items():
        lost = account.put(measure, "perpetual_inventory", "constant", asset, loss(vintages, left))
        account.put(measure, "perpetual_inventory", "current", asset, {y: index[y] * lost[y] for y in YEARS})


def in_services(account: Account, files: Received, asset: str) -> tuple[Series, Series, Series, Series]:
    """Base, consumption, revaluation and average stock of an asset; a given stock does not wear out."""
    index = files.price[asset]
    if asset in files.given:
        w = k = account.put("productive_stock", "as_net_stock", "constant", asset, files.given[asset])
        worn = dict.fromkeys(YEARS, 0.0)
    else:
        w, k = (
            account.figures[measure, "perpetual_inventory", "constant", asset]
            for measure in ("net_stock", "productive_stock")
        )
        worn = account.figures["consumption_of_fixed_capital", "perpetual_inventory", "current", asset]
    base = {y: index[y] * (w[y - 1] + w[y]) / 2 for y in YEARS[1:]}
    year_end = year_end_prices(index)
    gain = {y: (year_end[y] / year_end[y - 1] - 1) * base[y] for y in YEARS[1:]}
    mean = {y: (k[y - 1] + k[y]) / 2 for y in YEARS[1:]}
    account.put("asset_base", "average", "current", asset, base)
    account.put("revaluation", "actual", "current", asset, gain)
    account.put("productive_stock_average", "average", "constant", asset, mean)
    return base, worn, gain, mean


def tornqvist(quantities: dict[str, Series], values: dict[str, Series], years: list[int]) -> Series:
    """Log growth of a bundle, weighted by the mean of this and last year's parts in the value."""
    out = {}
    for y in years:
        total, total_before = (sum(one[x] for one in values.values()) for x in (y, y - 1))
        out[y] = 0.0
        for name, quantity in quantities.items():
            weight = (values[name][y] / total + values[name][y - 1] / total_before) / 2
            out[y] += weight * math.log(quantity[y] / quantity[y - 1])
    return out


def chained(growth: Series) -> Series:
    out: Series = {REFERENCE: 1.0}
    for y in range(REFERENCE + 1, YEARS[-1] + 1):
        out[y] = out[y - 1] * math.exp(growth[y])
    for y in range(REFERENCE - 1, min(growth) - 2, -1):
        out[y] = out[y + 1] / math.exp(growth[y + 1])
    return out


def account_of(files: Received, shipped: Path, own: Path) -> Account:
    account = Account()
    for asset in files.investment:
        produced(account, files, asset, asset_rule(shipped, own, asset, files.industry))
    base = {y: files.value_added[y] - files.taxes[y] for y in YEARS}
    labour = {y: files.labour_income(y) for y in YEARS}
    share = {y: labour[y] / base[y] for y in YEARS}
    surplus = {y: base[y] - labour[y] for y in YEARS}
    account.put("value_added", "factor_cost", "current", "_Z", base)
    account.put("labour_share", files.method, "_Z", "_Z", share)
    account.put("capital_income", files.method, "current", "_Z", surplus)
    used = {asset: in_services(account, files, asset) for asset in (*files.investment, *files.given)}
    rate = {
        y: (
            surplus[y] - sum(d[y] for _, d, _, _ in used.values()) + sum(h[y] for _, _, h, _ in used.values())
        )
        / sum(b[y] for b, _, _, _ in used.values())
        for y in YEARS[1:]
    }
    account.put("rate_of_return", "endogenous", "_Z", "_T", rate)
    cost = {a: {y: rate[y] * b[y] + d[y] - h[y] for y in YEARS[1:]} for a, (b, d, h, _) in used.items()}
    stocks = {a: mean for a, (_, _, _, mean) in used.items()}
    for a in used:
        account.put("capital_compensation", "endogenous", "current", a, cost[a])
        account.put(
            "user_cost", "endogenous", "current", a, {y: cost[a][y] / stocks[a][y] for y in YEARS[1:]}
        )
    growth = account.put(
        "capital_services_growth", "tornqvist", "_Z", "_T", tornqvist(stocks, cost, YEARS[2:])
    )
    account.put("capital_services", "tornqvist", "index", "_T", chained(growth))
    labour_growth = tornqvist(files.labour, files.labour_pay, YEARS[1:])
    if len(files.labour) > 1:
        account.put("labour_input_growth", "tornqvist", "_Z", "_Z", labour_growth)
    account.put("value_added", "delivered", "constant", "_Z", files.volume)
    residual: Series = {}
    level: Series = {YEARS[1]: 1.0}
    for y in YEARS[2:]:
        mean = 1 - (share[y - 1] + share[y]) / 2
        output = math.log(files.volume[y] / files.volume[y - 1])
        residual[y] = output - mean * growth[y] - (1 - mean) * labour_growth[y]
        level[y] = level[y - 1] * math.exp(residual[y])
    account.put("residual_growth", "log", "_Z", "_Z", residual)
    account.put("residual_level", "log", "_Z", "_Z", level)
    return account


@pytest.mark.parametrize("read", [corporations, neighbour])
@pytest.mark.parametrize("industry", BRANCHES)
def test_the_panel_holds_what_the_files_give(
    read: Callable[[Path, str], Received],
    industry: str,
    root: Path,
    demo_build: Path,
    panel: duckdb.DuckDBPyConnection,
) -> None:
    files = read(demo_build / "sources", industry)
    account = account_of(files, root / "rules" / "assets.csv", demo_build / "rules" / "assets.csv")
    compared = 0
    for (measure, method, basis, asset), expected in account.figures.items():
        # Labour input is a measure of workers: its asset is `_Z`, its worker group the total.
        stored = dict(
            panel.execute(
                "select cast(time_period as integer), value from panel where area = ? and sector = ? "
                "and industry = ? and measure = ? and method = ? and price_basis = ? and asset = ? order by 1",
                [files.area, files.sector, industry, measure, method, basis, asset],
            ).fetchall()
        )
        assert sorted(stored) == sorted(expected), (measure, method, basis, asset)
        size = max(map(abs, expected.values()))
        for year, value in expected.items():
            # Growth and residuals are differences of near numbers: they are held to the size of the series.
            within = 1e-9 * max(abs(value), size if measure.endswith("growth") else 0.0)
            at = (measure, method, basis, asset, year, stored[year], value)
            assert abs(stored[year] - value) <= within, at
        compared += len(expected)
    assert compared > 3000


def test_the_hyperbolic_weights_by_hand() -> None:
    """Life 2, b = 0.5, no discounting: h = 1, 2/3 at whole ages, so z = 1, 0.4, 0."""
    rule: dict[str, float | None] = {
        "rate": None,
        "life": 2.0,
        "gross_life": None,
        "b": 0.5,
        "discount_rate": 0.0,
    }
    productive, net, gross = weights(rule, 3)
    assert productive == pytest.approx([1.5 / 1.75, 0.5 / 1.25, 0])
    assert net == pytest.approx([0.7, 0.2, 0])
    assert gross == [1, 1, 0]
