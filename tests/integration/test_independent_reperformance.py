"""Two producers of the demo computed again from the files as received: csv, openpyxl, numpy and loops only.

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

ASSETS = {
    "N112": "Buildings and structures",
    "N1131": "Transport equipment",
    "N1132": "ICT equipment",
    "N11O": "Other machinery and equipment",
    "N1171": "Research and development",
    "N1173": "Computer software and databases",
}
TRANSACTIONS = ("B.1g", "D.29-D.39", "D.1")
SKILLS = ("low", "medium", "high")

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


@dataclass
class Received:
    """What the files give of one producer: million of currency, thousand hours, prices with the reference year = 1."""

    investment: dict[str, Series]
    price: dict[str, Series]
    volume: Series
    income: dict[str, Series]
    employees: Series
    self_employed: Series
    benchmark: dict[str, tuple[int, float]]
    skill_hours: list[Series]
    skill_pay: list[Series]


def rebased(raw: Series) -> Series:
    assert list(raw) == YEARS
    return {year: value / raw[REFERENCE] for year, value in raw.items()}


def across(sheet: Any, header: int, *labels: str) -> Series:
    """Read the row with these labels; a merged label holds until the next one."""
    current = [""] * len(labels)
    for row in range(header + 1, sheet.max_row + 1):
        current = [label(sheet.cell(row, at)) or text for at, text in enumerate(current, start=1)]
        if tuple(current) == labels:
            return {year: figure(sheet.cell(row, len(labels) + 1 + t)) for t, year in enumerate(YEARS)}
    raise LookupError(labels)


def down(sheet: Any, header: int, column: int) -> Series:
    """Read a column of figures with the years in column 1; a dash is no figure."""
    rows = range(header + 1, sheet.max_row + 1)
    return {
        int(label(sheet.cell(row, 1))): figure(sheet.cell(row, column))
        for row in rows
        if label(sheet.cell(row, column)) != "-"
    }


def price_of_corporations(book: Any, branch: str, asset: str) -> Series:
    """The price of the asset in the branch where there is one, else of the asset, with an earlier base linked on."""
    own, current = book["T3 Prices by branch"], ""
    for at in range(2, own.max_column + 1):
        current = label(own.cell(5, at)) or current
        if (current, label(own.cell(6, at))) == (branch, asset):
            return rebased(down(own, 6, at))
    sheet, old = book["T2 Prices"], book["T2b Old base"]
    raw = down(sheet, 5, next(at for at in range(2, 11) if label(sheet.cell(5, at)) == asset))
    if label(old.cell(5, 2)) == asset:
        earlier = down(old, 5, 2)
        link = min(raw)
        before = {year: value * raw[link] / earlier[link] for year, value in earlier.items() if year < link}
        raw = before | raw
    return rebased(raw)


def by_skill(path: Path, industry: str) -> list[Series]:
    with path.open(encoding="utf-8", newline="") as lines:
        rows = {
            r["Skill"]: {year: float(r[str(year)]) for year in YEARS}
            for r in csv.DictReader(lines)
            if (r["Sector"], r["Branch"]) == ("S11", industry)
        }
    return [rows[skill] for skill in SKILLS]


def corporations(sources: Path, industry: str, branch: str, german: str) -> Received:
    """Read an industry of the corporations of XV."""
    book = openpyxl.load_workbook(sources / "capital_formation.xlsx", rich_text=True)
    with (sources / "income_account.csv").open(encoding="cp1252", newline="") as lines:
        rows = [r for r in csv.DictReader(lines, delimiter=";") if r["Sektor"] == "Kapitalgesellschaften"]
    income = {
        code: {
            int(r["Jahr"]): float(r["Wert"].replace(".", "").replace(",", "."))
            for r in rows
            if (r["Branche"], r["Transaktion"]) == (german, code)
        }
        for code in TRANSACTIONS
    }
    worked = dict.fromkeys(YEARS, 0.0)
    with (sources / "hours_quarterly.csv").open(encoding="utf-8-sig", newline="") as lines:
        for r in csv.DictReader(lines):
            if (r["sector"], r["branch"]) == ("S11", industry):
                assert r["status"] == "employees"
                worked[int(r["period"][:4])] += float(r["thousand hours"].rstrip("p"))
    with (sources / "benchmark_stocks.csv").open(encoding="utf-8", newline="") as lines:
        benchmark = {
            r["asset"]: (int(r["year"]), float(r["net stock"]))
            for r in csv.DictReader(lines)
            if (r["sector"], r["branch"]) == ("S11", industry)
        }
    return Received(
        {a: across(book["T1 Investment"], 5, "Corporations", branch, name) for a, name in ASSETS.items()},
        {a: price_of_corporations(book, branch, name) for a, name in ASSETS.items()},
        across(book["T4 Volume"], 5, "Corporations", branch),
        income,
        worked,
        dict.fromkeys(YEARS, 0.0),
        benchmark,
        by_skill(sources / "hours_by_skill.csv", industry),
        by_skill(sources / "compensation_by_skill.csv", industry),
    )


def neighbour(sources: Path, industry: str) -> Received:
    """Read an industry of XW: investment in thousand million, hours in million, no workers by skill."""
    book = openpyxl.load_workbook(sources / "neighbour.xlsx", rich_text=True)
    prices = book["Prices"]
    codes = {label(prices.cell(4, at)): at for at in range(2, 2 + len(ASSETS))}
    income: dict[str, Series] = {code: {} for code in TRANSACTIONS}
    for code, transaction, year, value, _ in book["Accounts"].iter_rows(min_row=5, values_only=True):
        if code == industry and transaction in income:
            income[transaction][year] = value

    def thousand(status: str) -> Series:
        return {y: 1000 * x for y, x in across(book["Hours"], 4, industry, status).items()}

    return Received(
        {a: {y: 1000 * x for y, x in across(book["Investment"], 4, industry, a).items()} for a in ASSETS},
        {a: rebased(down(prices, 4, codes[a])) for a in ASSETS},
        across(book["Volume"], 4, industry),
        income,
        thousand("employees"),
        thousand("self-employed"),
        {},
        [],
        [],
    )


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


def capital(account: Account, received: Received, rules: Path, industry: str, asset: str) -> None:
    current, index = received.investment[asset], received.price[asset]
    volume = account.put(
        "investment", "deflated", "constant", asset, {y: current[y] / index[y] for y in YEARS}
    )
    t = np.arange(1, WINDOW + 1)
    slope, level = np.polyfit(t, np.log([volume[y] for y in YEARS[:WINDOW]]), 1)
    g, first = math.exp(slope) - 1, math.exp(level + slope)
    account.put("trend_growth", "log_linear_trend", "_Z", asset, {YEARS[0] - 1: g})
    account.put("trend_investment", "log_linear_trend", "constant", asset, {YEARS[0] - 1: first})
    assumed = [first / (1 + g) ** j for j in range(BACKCAST, 0, -1)]
    since = [volume[y] for y in YEARS]
    vintages = [*assumed, *since]
    productive, net, gross = weights(asset_rule(rules / "assets.csv", asset, industry), len(vintages))
    stocks = {"productive_stock": productive, "net_stock": net} | (
        {} if gross is None else {"gross_stock": gross}
    )
    if asset in received.benchmark:
        year, known = received.benchmark[asset]
        all_of_it = stock(vintages, net)[year]
        of_investment = stock([0.0] * BACKCAST + since, net)[year]
        factor = (known - of_investment) / (all_of_it - of_investment)
        account.put("benchmark_factor", "benchmark", "_Z", asset, {YEARS[0] - 1: factor})
        vintages = [*(factor * x for x in assumed), *since]
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
        start = "benchmark" if asset in received.benchmark else "steady_state"
        account.put(measure, start, "constant", asset, {YEARS[0] - 1: found.pop(YEARS[0] - 1)})
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


def labour_input(received: Received, worked: Series) -> Series:
    """Hours, or where there are groups of workers the Törnqvist index of their hours; only its growth is used."""
    if not received.skill_hours:
        return worked
    out = {YEARS[0]: 1.0}
    for y in YEARS[1:]:
        now, then = (sum(pay[x] for pay in received.skill_pay) for x in (y, y - 1))
        growth = 0.0
        for spent, pay in zip(received.skill_hours, received.skill_pay, strict=True):
            growth += (pay[y] / now + pay[y - 1] / then) / 2 * math.log(spent[y] / spent[y - 1])
        out[y] = out[y - 1] * math.exp(growth)
    return out


def industry_account(received: Received, rules: Path, industry: str, method: str) -> Account:
    """Compute everything; `method` is the labour share that the demo chooses for the producer."""
    account = Account()
    for asset in ASSETS:
        capital(account, received, rules, industry, asset)
    output, taxes, pay = (received.income[code] for code in TRANSACTIONS)
    worked, worked_self = received.employees, received.self_employed
    base = account.put(
        "value_added", "factor_cost", "current", "_Z", {y: output[y] - taxes[y] for y in YEARS}
    )
    labour = {y: pay[y] + pay[y] / worked[y] * worked_self[y] for y in YEARS}
    share = account.put("labour_share", method, "_Z", "_Z", {y: labour[y] / base[y] for y in YEARS})
    surplus = account.put("capital_income", method, "current", "_Z", {y: base[y] - labour[y] for y in YEARS})

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
    volume = account.put("value_added", "delivered", "constant", "_Z", received.volume)
    labour_of = labour_input(received, {y: worked[y] + worked_self[y] for y in YEARS})
    residual: Series = {}
    level: Series = {YEARS[1]: 1.0}
    for y in YEARS[2:]:
        mean = 1 - (share[y - 1] + share[y]) / 2
        residual[y] = (
            math.log(volume[y] / volume[y - 1])
            - mean * math.log(services[y] / services[y - 1])
            - (1 - mean) * math.log(labour_of[y] / labour_of[y - 1])
        )
        level[y] = level[y - 1] * math.exp(residual[y])
    account.put("residual_growth", "log", "_Z", "_Z", residual)
    account.put("residual_level", "log", "_Z", "_Z", level)
    return account


@pytest.mark.parametrize("producer", [("XV", "S11", "J"), ("XW", "S1", "M")])
def test_the_panel_holds_what_the_files_give(
    producer: tuple[str, str, str], root: Path, demo_build: Path, panel: duckdb.DuckDBPyConnection
) -> None:
    """Corporations have no self-employed and no mixed income: the fixed fraction of it is then pay alone."""
    area, _, industry = producer
    sources = demo_build / "sources"
    if area == "XV":
        german = "Information, Fernmeldewesen und Büro-Datenverarbeitung"
        received = corporations(sources, industry, "Information and communication", german)
    else:
        received = neighbour(sources, industry)
    method = "hours" if area == "XW" else "fixed_fraction"
    account = industry_account(received, root / "rules", industry, method)
    compared = 0
    for (measure, method, basis, asset), expected in account.figures.items():
        stored = dict(
            panel.execute(
                "select cast(time_period as integer), value from panel where area = ? and sector = ? and industry = ? "
                "and measure = ? and method = ? and price_basis = ? and asset = ? order by 1",
                [*producer, measure, method, basis, asset],
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
