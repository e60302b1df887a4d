"""Two industries of the demo computed again from the files as received: csv, openpyxl, numpy and loops only.

Nothing of Keelbook is imported here. The file may only be changed when methods change, never to follow the code.
"""

import csv
import math
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
BACKCAST = 2000
"""Years assumed before the first: with the lowest growth plus depreciation of the two industries, 1e-16 is left."""

BRANCHES = {"C": "Manufacturing", "J": "Information and communication"}
ASSETS = {
    "N112": "Buildings and structures",
    "N1131": "Transport equipment",
    "N1132": "ICT equipment",
    "N11O": "Other machinery and equipment",
    "N1171": "Research and development",
    "N1173": "Computer software and databases",
}
GERMAN = {
    "C": "Verarbeitendes Gewerbe (Industrie) – Hütten und Fabriken",
    "J": "Information, Fernmeldewesen und Büro-Datenverarbeitung",
}

Series = dict[int, float]


def figure(cell: Any) -> float:
    """Read a figure from a cell: superscript runs are footnotes, a letter behind the digits is a flag."""
    value = cell.value
    if isinstance(value, CellRichText):
        value = "".join(run for run in value if isinstance(run, str))
    return float(value.rstrip("pe")) if isinstance(value, str) else float(value)


def label(cell: Any) -> str:
    value = cell.value
    if isinstance(value, CellRichText):
        value = "".join(run for run in value if isinstance(run, str))
    return "" if value is None else str(value)


def investment(book: Any, branch: str, asset: str) -> Series:
    sheet, current = book["T1 Investment"], ""
    for row in range(6, 54):
        current = label(sheet.cell(row, 1)) or current
        if (current, label(sheet.cell(row, 2))) == (branch, asset):
            return {year: figure(sheet.cell(row, 3 + t)) for t, year in enumerate(YEARS)}
    raise LookupError(f"{branch}, {asset}")


def price(book: Any, branch: str, asset: str) -> Series:
    """The price of the asset in the branch where there is one, else of the asset; the reference year is 1."""
    sheet, column, first = book["T3 Prices by branch"], 0, 7
    current = ""
    for at in range(2, sheet.max_column + 1):
        current = label(sheet.cell(5, at)) or current
        if (current, label(sheet.cell(6, at))) == (branch, asset):
            column = at
    if not column:
        sheet, first = book["T2 Prices"], 6
        column = next(at for at in range(2, 8) if label(sheet.cell(5, at)) == asset)
    raw = {int(label(sheet.cell(first + t, 1))): figure(sheet.cell(first + t, column)) for t in range(35)}
    assert list(raw) == YEARS
    return {year: value / raw[REFERENCE] for year, value in raw.items()}


def volume_of_value_added(book: Any, branch: str) -> Series:
    sheet = book["T4 Volume"]
    row = next(at for at in range(6, 14) if label(sheet.cell(at, 1)) == branch)
    return {year: figure(sheet.cell(row, 2 + t)) for t, year in enumerate(YEARS)}


def income(path: Path, branch: str, transaction: str) -> Series:
    with path.open(encoding="cp1252", newline="") as lines:
        return {
            int(r["Jahr"]): float(r["Wert"].replace(".", "").replace(",", "."))
            for r in csv.DictReader(lines, delimiter=";")
            if (r["Branche"], r["Transaktion"]) == (branch, transaction)
        }


def hours(path: Path, industry: str, status: str) -> Series:
    out = dict.fromkeys(YEARS, 0.0)
    with path.open(encoding="utf-8-sig", newline="") as lines:
        for r in csv.DictReader(lines):
            if (r["branch"], r["status"]) == (industry, status):
                out[int(r["period"][:4])] += float(r["thousand hours"].rstrip("p"))
    return out


def asset_rule(path: Path, asset: str, industry: str) -> dict[str, float | None]:
    with path.open(encoding="utf-8", newline="") as lines:
        rows = {(r["asset"], r["industry"]): r for r in csv.DictReader(lines)}
    row = rows.get((asset, industry)) or rows[asset, "_T"]
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


def capital(account: Account, book: Any, rules: Path, industry: str, asset: str) -> None:
    branch = BRANCHES[industry]
    current, index = investment(book, branch, ASSETS[asset]), price(book, branch, ASSETS[asset])
    volume = account.put(
        "investment", "deflated", "constant", asset, {y: current[y] / index[y] for y in YEARS}
    )
    t = np.arange(1, WINDOW + 1)
    slope, level = np.polyfit(t, np.log([volume[y] for y in YEARS[:WINDOW]]), 1)
    g, first = math.exp(slope) - 1, math.exp(level + slope)
    account.put("trend_growth", "log_linear_trend", "_Z", asset, {YEARS[0] - 1: g})
    account.put("trend_investment", "log_linear_trend", "constant", asset, {YEARS[0] - 1: first})
    assumed = [first / (1 + g) ** j for j in range(BACKCAST, 0, -1)]
    vintages = [*assumed, *(volume[y] for y in YEARS)]
    productive, net, gross = weights(asset_rule(rules / "assets.csv", asset, industry), len(vintages))
    stocks = {"productive_stock": productive, "net_stock": net} | (
        {} if gross is None else {"gross_stock": gross}
    )
    year_end = {}
    for y in YEARS:
        before, after = index.get(y - 1), index.get(y + 1)
        if after is not None:
            year_end[y] = math.sqrt(index[y] * after)
        else:
            assert before is not None
            year_end[y] = index[y] * math.sqrt(index[y] / before)
    for measure, left in stocks.items():
        found = stock(vintages, left)
        account.put(measure, "steady_state", "constant", asset, {YEARS[0] - 1: found.pop(YEARS[0] - 1)})
        account.put(measure, "perpetual_inventory", "constant", asset, found)
        account.put(
            measure, "perpetual_inventory", "year_end", asset, {y: year_end[y] * found[y] for y in YEARS}
        )
    losses = {"consumption_of_fixed_capital": net} | ({} if gross is None else {"retirements": gross})
    for measure, left in losses.items():
        lost = account.put(measure, "perpetual_inventory", "constant", asset, loss(vintages, left))
        account.put(measure, "perpetual_inventory", "current", asset, {y: index[y] * lost[y] for y in YEARS})
    w = account.figures["net_stock", "perpetual_inventory", "constant", asset]
    k = account.figures["productive_stock", "perpetual_inventory", "constant", asset]
    base = {y: index[y] * (w[y - 1] + w[y]) / 2 for y in YEARS[1:]}
    account.put("asset_base", "average", "current", asset, base)
    gain = {y: (year_end[y] / year_end[y - 1] - 1) * base[y] for y in YEARS[1:]}
    account.put("revaluation", "actual", "current", asset, gain)
    account.put(
        "productive_stock_average",
        "average",
        "constant",
        asset,
        {y: (k[y - 1] + k[y]) / 2 for y in YEARS[1:]},
    )


def industry_account(sources: Path, rules: Path, industry: str) -> Account:
    book = openpyxl.load_workbook(sources / "capital_formation.xlsx", rich_text=True)
    account = Account()
    for asset in ASSETS:
        capital(account, book, rules, industry, asset)
    path = sources / "income_account.csv"
    output, taxes, pay = (income(path, GERMAN[industry], code) for code in ("B.1g", "D.29-D.39", "D.1"))
    worked, worked_self = (
        hours(sources / "hours_quarterly.csv", industry, status) for status in ("employees", "self-employed")
    )
    base = account.put(
        "value_added", "factor_cost", "current", "_Z", {y: output[y] - taxes[y] for y in YEARS}
    )
    labour = {y: pay[y] + pay[y] / worked[y] * worked_self[y] for y in YEARS}
    share = account.put("labour_share", "hours", "_Z", "_Z", {y: labour[y] / base[y] for y in YEARS})
    surplus = account.put("capital_income", "hours", "current", "_Z", {y: base[y] - labour[y] for y in YEARS})

    def of(measure: str, method: str, basis: str, asset: str) -> Series:
        return account.figures[measure, method, basis, asset]

    rate: Series = {}
    cost: dict[str, Series] = {asset: {} for asset in ASSETS}
    for y in YEARS[1:]:
        b = {a: of("asset_base", "average", "current", a)[y] for a in ASSETS}
        d = {a: of("consumption_of_fixed_capital", "perpetual_inventory", "current", a)[y] for a in ASSETS}
        h = {a: of("revaluation", "actual", "current", a)[y] for a in ASSETS}
        rate[y] = (surplus[y] - sum(d.values()) + sum(h.values())) / sum(b.values())
        for a in ASSETS:
            cost[a][y] = rate[y] * b[a] + d[a] - h[a]
    account.put("rate_of_return", "endogenous", "_Z", "_T", rate)
    growth: Series = {}
    for y in YEARS[2:]:
        total, total_before = (sum(cost[a][x] for a in ASSETS) for x in (y, y - 1))
        growth[y] = 0.0
        for a in ASSETS:
            k = of("productive_stock_average", "average", "constant", a)
            weight = (cost[a][y] / total + cost[a][y - 1] / total_before) / 2
            growth[y] += weight * math.log(k[y] / k[y - 1])
    for a in ASSETS:
        k = of("productive_stock_average", "average", "constant", a)
        account.put("capital_compensation", "endogenous", "current", a, cost[a])
        account.put("user_cost", "endogenous", "current", a, {y: cost[a][y] / k[y] for y in YEARS[1:]})
    account.put("capital_services_growth", "tornqvist", "_Z", "_T", growth)
    services: Series = {REFERENCE: 1.0}
    for y in range(REFERENCE + 1, YEARS[-1] + 1):
        services[y] = services[y - 1] * math.exp(growth[y])
    for y in range(REFERENCE - 1, YEARS[0], -1):
        services[y] = services[y + 1] / math.exp(growth[y + 1])
    account.put("capital_services", "tornqvist", "index", "_T", services)
    volume = account.put(
        "value_added", "delivered", "constant", "_Z", volume_of_value_added(book, BRANCHES[industry])
    )
    residual: Series = {}
    level: Series = {YEARS[1]: 1.0}
    for y in YEARS[2:]:
        mean = 1 - (share[y - 1] + share[y]) / 2
        all_hours, all_before = (worked[x] + worked_self[x] for x in (y, y - 1))
        residual[y] = (
            math.log(volume[y] / volume[y - 1])
            - mean * math.log(services[y] / services[y - 1])
            - (1 - mean) * math.log(all_hours / all_before)
        )
        level[y] = level[y - 1] * math.exp(residual[y])
    account.put("residual_growth", "log", "_Z", "_Z", residual)
    account.put("residual_level", "log", "_Z", "_Z", level)
    return account


@pytest.mark.parametrize("industry", BRANCHES)
def test_the_panel_holds_what_the_files_give(
    industry: str, root: Path, demo_build: Path, panel: duckdb.DuckDBPyConnection
) -> None:
    account = industry_account(demo_build / "sources", root / "rules", industry)
    compared = 0
    for (measure, method, basis, asset), expected in account.figures.items():
        stored = dict(
            panel.execute(
                "select cast(time_period as integer), value from panel where industry = ? and measure = ? "
                "and method = ? and price_basis = ? and asset = ? order by 1",
                [industry, measure, method, basis, asset],
            ).fetchall()
        )
        assert sorted(stored) == sorted(expected), (measure, method, basis, asset)
        size = max(map(abs, expected.values()))
        for year, value in expected.items():
            # Growth and residuals are differences of near numbers: they are held to the size of the series.
            within = 1e-9 * max(abs(value), size if measure.endswith("growth") else 0.0)
            assert abs(stored[year] - value) <= within, (
                measure,
                method,
                basis,
                asset,
                year,
                stored[year],
                value,
            )
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
