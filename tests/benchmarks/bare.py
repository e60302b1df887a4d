"""The bare script: the figures of the benchmark assembly with no check, no status, no lineage.

Run: python tests/benchmarks/bare.py FOLDER PANEL

It reads the sources that make_input.py wrote and the shipped rules, computes every figure that `keelbook assemble`
publishes for them, and writes them into PANEL (tables `series` and `figure`, view `panel`). It knows these files and
the shipped method choices by heart and shares no code with the package: it is the floor that the benchmark compares
with, and a second calculation of the same figures. Arrays have years first.
"""

import csv
import sys
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pandas as pd
from make_input import ASSETS, INDUSTRIES, STATUSES, TRANSACTIONS
from numpy.typing import NDArray

F8 = NDArray[np.float64]
Codes = Sequence[str]

RULES = Path(__file__).resolve().parents[2] / "rules"
DIMS = ("area", "sector", "industry", "asset", "worker_group")
WORKERS = ("SAL", "SELF")
THOUSAND = 1000
"""Hours are delivered in thousands and published in millions."""
TIME_BLOCK = 20
"""Years in one block of a matrix product: its empty corner is skipped."""
NEW = 0.5
"""Age at the end of the year of what was invested in it."""


def parameter(file: str, name: str) -> Any:
    return tomllib.loads((RULES / f"{file}.toml").read_text(encoding="utf-8"))[name]["value"]


# --- reading and writing ----------------------------------------------------------------------------------------


class Files:
    """The source files, and the panel that is written."""

    def __init__(self, folder: Path, panel: Path) -> None:
        declared = tomllib.loads((folder / "assembly.toml").read_text(encoding="utf-8"))
        self.first, self.last = declared["period"]
        self.reference = declared["reference_year"] - self.first
        self.T = self.last - self.first + 1
        with (folder / "rules" / "codes" / "area.csv").open(encoding="utf-8") as file:
            self.areas = tuple(row["code"] for row in csv.DictReader(file))
        self.sources = folder / "sources"
        self.con = duckdb.connect(str(panel))
        self.con.execute("set enable_progress_bar = false")
        self.con.execute("set memory_limit = '1GB'")
        columns = ", ".join(f"{name} varchar" for name in (*DIMS, "measure", "method", "price_basis"))
        self.con.execute(f"create table series (series_id integer, {columns})")
        self.con.execute("create table figure (series_id integer, period smallint, value double)")
        self.con.execute("create view panel as select * from series join figure using (series_id)")
        self.count = 0

    def read(self, name: str, labels: Mapping[str, Codes], skip: str = "") -> F8:
        """Read a long file into an array of years x its labels; `skip` is a column that is not used."""
        types = {"year": "smallint", "value": "double", skip: "varchar"}
        for label, codes in labels.items():
            types[label] = f"{name}_{label}"
            quoted = ", ".join(f"'{code}'" for code in codes)
            self.con.execute(f"create temp type {types[label]} as enum ({quoted})")
        path = str(self.sources / f"{name}.csv")
        with open(path, encoding="utf-8") as file:
            header = file.readline().strip().split(",")
        columns = ", ".join(f"'{column}': '{types[column]}'" for column in header)
        got = self.con.execute(
            f"select year, value, {', '.join(f'enum_code({label}) as {label}' for label in labels)} "
            f"from read_csv(?, auto_detect = false, header = true, columns = {{{columns}}})",
            [path],
        ).fetchnumpy()
        at = got["year"].astype(np.int64) - self.first
        for label, codes in labels.items():
            at = at * len(codes) + got[label]
        out = np.full(self.T * int(np.prod([len(c) for c in labels.values()])), np.nan)
        out[at] = got["value"]
        return out.reshape(self.T, *(len(codes) for codes in labels.values()))

    def read_wide(self, name: str, labels: Mapping[str, Codes]) -> F8:
        """Read a file with the years across, its rows in the order of its labels."""
        frame = pd.read_csv(self.sources / f"{name}.csv")
        values = frame.iloc[:, len(labels) :].to_numpy(np.float64).T
        return np.ascontiguousarray(values).reshape(self.T, *(len(codes) for codes in labels.values()))

    def put(self, key: str, values: F8, axes: Mapping[str, Codes], start: int = 0) -> None:
        """Append figures of `measure/method/price_basis`, (years, ...) with one axis per dimension of `axes`.

        A dimension with one code has no axis; one that is not named does not apply.
        """
        T = len(values)
        shape = [len(codes) for codes in axes.values() if len(codes) > 1]
        n = int(np.prod(shape))
        places = iter(np.indices(shape, np.int32).reshape(len(shape), n))
        columns: dict[str, Any] = {"series_id": np.arange(self.count, self.count + n, dtype=np.int32)}
        for dim in DIMS:
            codes = axes.get(dim, ("S1",) if dim == "sector" else ("_Z",))
            at = next(places) if len(codes) > 1 else np.zeros(n, np.int32)
            columns[dim] = pd.Categorical.from_codes(at, dtype=pd.CategoricalDtype(list(codes)))
        for name, text in zip(("measure", "method", "price_basis"), key.split("/"), strict=True):
            columns[name] = pd.Categorical.from_codes(np.zeros(n, np.int8), dtype=pd.CategoricalDtype([text]))
        self._insert("series", pd.DataFrame(columns))
        figures = {
            "series_id": np.repeat(columns["series_id"], T),
            "period": np.tile(np.arange(self.first + start, self.first + start + T, dtype=np.int16), n),
            "value": values.reshape(T, n).T.ravel(),
        }
        self._insert("figure", pd.DataFrame(figures, copy=False))
        self.count += n

    def _insert(self, table: str, frame: pd.DataFrame) -> None:
        self.con.register("_frame", frame)
        self.con.execute(f"insert into {table} select * from _frame")
        self.con.unregister("_frame")


# --- capital ----------------------------------------------------------------------------------------------------


def asset_rules() -> dict[tuple[str, str], dict[str, str]]:
    with (RULES / "assets.csv").open(encoding="utf-8") as file:
        return {(row["asset"], row["industry"]): row for row in csv.DictReader(file)}


def by_rule(asset: str) -> Iterator[tuple[list[int], dict[str, str]]]:
    """Yield the industries that share a rule for an asset, and the rule."""
    rules = asset_rules()
    shared: dict[str, list[int]] = {}
    for j, industry in enumerate(INDUSTRIES):
        shared.setdefault(industry if (asset, industry) in rules else "_T", []).append(j)
    for industry, members in shared.items():
        yield members, rules[asset, industry]


def lives(mean: float) -> list[tuple[int, float]]:
    whole = int(mean)
    part = mean - whole
    return [(whole, 1 - part), (whole + 1, part)] if part else [(whole, 1.0)]


def survival(mean: float) -> F8:
    """Return what is left of a vintage v and a half years old, for simultaneous retirement."""
    ages = np.arange(lives(mean)[-1][0] + 1) + NEW
    return np.asarray(sum(mass * (ages < one) for one, mass in lives(mean)), np.float64)


def hyperbolic(rule: Mapping[str, str]) -> tuple[F8, F8]:
    """Return mid-year weights of the productive and of the net stock."""
    b, rho, spread = float(rule["b"]), float(rule["discount_rate"]), lives(float(rule["life"]))

    def cohort(ages: F8) -> F8:
        kept = (m * np.where(ages < one, (one - ages) / (one - b * ages), 0) for one, m in spread)
        return np.asarray(sum(kept), np.float64)

    ages = np.arange(spread[-1][0] + 2, dtype=np.float64)
    price = cohort(ages)
    for age in range(len(price) - 2, -1, -1):
        price[age] += price[age + 1] / (1 + rho)
    price /= price[0]
    return cohort(ages[:-1] + NEW), (price[:-1] + price[1:]) / 2


def vintages(flow: F8, weights: Sequence[F8], growth: F8, start: F8) -> list[tuple[F8, F8]]:
    """Return (opening, stock by year) for each set of weights, (N,) and (T, N), after a steady-state start."""
    T, N = flow.shape
    x = 1 / (1 + growth)
    out = []
    for w in weights:
        stock = np.empty((T, N))
        left = np.zeros(N)
        for t in range(len(w) - 1, -1, -1):
            left = x * (w[t] + left)
            if 0 < t <= T:
                stock[t - 1] = left * start
        stock[len(w) - 1 :] = 0
        out.append((left * start, stock))
    reach = max(len(w) for w in weights)
    padded = np.array([np.concatenate([w, np.zeros(reach + 1 - len(w))]) for w in weights])
    for low in range(0, T, TIME_BLOCK):
        high, oldest = min(low + TIME_BLOCK, T), max(0, low - reach + 1)
        age = np.arange(low, high)[:, None] - np.arange(oldest, high)
        band = padded[:, np.where((age >= 0) & (age < reach), age, reach)].reshape(-1, high - oldest)
        product = (band @ flow[oldest:high]).reshape(len(weights), high - low, N)
        for (_, stock), added in zip(out, product, strict=True):
            stock[low:high] += added
    return out


def geometric(flow: F8, rate: float, growth: F8, start: F8) -> tuple[tuple[F8, F8], tuple[F8, F8]]:
    """Return (opening, by year) of a cohort with a constant rate, mid-year: its stock, and its stock times age."""
    opening = (1 - rate / 2) * start / (growth + rate)
    stock = (1 - rate / 2) * flow
    opening_aged = opening * (NEW + (1 - rate) / (growth + rate))
    aged = NEW * stock
    before, older = opening, opening_aged
    for now, old in zip(stock, aged, strict=True):
        now += (1 - rate) * before
        old += (1 - rate) * (before + older)  # all that is left is a year older
        before, older = now, old
    return (opening, stock), (opening_aged, aged)


def trend(flow: F8) -> tuple[F8, F8]:
    """Return growth and fitted first value of the log-linear trend over the first years."""
    n = int(parameter("capital", "trend_window"))
    t = np.arange(1, n + 1)
    slope = (t - t.mean()) / np.sum((t - t.mean()) ** 2)
    logs = np.log(flow[:n])
    fitted = logs.mean(axis=0) + (1 - t.mean()) * np.tensordot(slope, logs, 1)
    return np.expm1(np.tensordot(slope, logs, 1)), np.exp(fitted)


def stocks(asset: str, flow: F8, growth: F8, start: F8) -> dict[str, tuple[F8, F8]]:
    """Return (opening, by year) of the stocks of one asset and of its net stock times age, (A, J) and (T, A, J)."""
    out: dict[str, tuple[F8, F8]] = {}
    for members, rule in by_rule(asset):
        x = np.ascontiguousarray(flow[:, :, members]).reshape(len(flow), -1)
        g, i = growth[:, members].ravel(), start[:, members].ravel()
        if rule["efficiency"] == "cohort_geometric":
            net, aged = geometric(x, float(rule["rate"]), g, i)
            made = {"productive_stock": net, "net_stock": net}  # its age-price profile is its efficiency
            made["vintage_ages"] = aged
            if rule["gross_life"]:
                made["gross_stock"] = vintages(x, [survival(float(rule["gross_life"]))], g, i)[0]
        else:
            productive, price = hyperbolic(rule)
            gross, ages = survival(float(rule["life"])), np.arange(len(price)) + NEW
            weights = [gross, productive, price, price * ages]
            names = ("gross_stock", "productive_stock", "net_stock", "vintage_ages")
            made = dict(zip(names, vintages(x, weights, g, i), strict=True))
        for name, (opening, stock) in made.items():
            whole = out.setdefault(name, (np.empty(growth.shape), np.empty(flow.shape)))
            whole[0][:, members] = opening.reshape(-1, len(members))
            whole[1][:, :, members] = stock.reshape(len(flow), -1, len(members))
    return out


class Sums:
    """Totals over industries and assets of figures that come asset by asset."""

    def __init__(self) -> None:
        self.industries: dict[str, F8] = {}
        self.assets: dict[str, dict[str, F8]] = {}

    def add(self, key: str, asset: str, values: F8) -> None:
        if key in self.industries:
            self.industries[key] += values
        else:
            self.industries[key] = values.copy()
        self.assets.setdefault(key, {})[asset] = values.sum(axis=2)

    def put(self, files: Files, start: Mapping[str, int]) -> None:
        A = files.areas
        for key, values in self.industries.items():
            first = start.get(key, 0)
            by_asset = self.assets[key]
            if len(by_asset) == len(ASSETS):  # a total to which an asset does not add would be too small
                files.put(key, values, {"area": A, "industry": INDUSTRIES, "asset": ("_T",)}, first)
                files.put(key, values.sum(axis=2), {"area": A, "industry": ("_T",), "asset": ("_T",)}, first)
            axes = {"area": A, "industry": ("_T",), "asset": tuple(by_asset)}
            files.put(key, np.stack(list(by_asset.values()), axis=2), axes, first)


def capital(files: Files) -> dict[str, Any]:
    """Write investment, stocks and what leaves them; return what the cost of capital needs."""
    A, J = files.areas, INDUSTRIES
    prices = files.read("prices", {"region": A, "asset": ASSETS})
    price = prices / prices[files.reference]
    year_end = np.sqrt(price * np.vstack([price[1:], (price[-1] ** 2 / price[-2])[None]]))
    for key, values in (
        ("investment_price/delivered/source_index", prices),
        ("investment_price/rebased/index", price),
        ("investment_price/year_end/year_end", year_end),
    ):
        files.put(key, values, {"area": A, "industry": ("_T",), "asset": ASSETS})
    current = files.read("investment", {"region": A, "branch": J, "asset": ASSETS}, skip="status")
    sums = Sums()
    kept: dict[str, list[F8]] = {"base": [], "loss": [], "gain": [], "average": []}
    for k, asset in enumerate(ASSETS):
        axes = {"area": A, "industry": J, "asset": (asset,)}
        p, pe = price[:, :, k, None], year_end[:, :, k, None]
        flow = np.ascontiguousarray(current[..., k])
        files.put("investment/delivered/current", flow, axes)
        sums.add("investment/sum_of_parts/current", asset, flow)
        flow = flow / p
        files.put("investment/deflated/constant", flow, axes)
        sums.add("investment/deflated/constant", asset, flow)
        growth, start = trend(flow)
        files.put("trend_growth/log_linear_trend/_Z", growth[None], axes, -1)
        files.put("trend_investment/log_linear_trend/constant", start[None], axes, -1)
        held = stocks(asset, flow, growth, start)
        _, aged = held.pop("vintage_ages")
        lost = {}
        for name, (opening, stock) in held.items():
            files.put(f"{name}/steady_state/constant", opening[None], axes, -1)
            before = np.concatenate([opening[None], stock[:-1]])
            lost[name] = before + flow - stock
            for values, basis in ((stock, "constant"), (stock * pe, "year_end")):
                files.put(f"{name}/perpetual_inventory/{basis}", values, axes)
                sums.add(f"{name}/perpetual_inventory/{basis}", asset, values)
        names = {"consumption_of_fixed_capital": "net_stock", "retirements": "gross_stock"}
        for loss, stock_name in names.items():
            if stock_name in lost:
                for values, basis in ((lost[stock_name], "constant"), (lost[stock_name] * p, "current")):
                    files.put(f"{loss}/perpetual_inventory/{basis}", values, axes)
                    sums.add(f"{loss}/perpetual_inventory/{basis}", asset, values)
        net, productive = held["net_stock"][1], held["productive_stock"][1]
        files.put("vintage_ages/perpetual_inventory/constant", aged, axes)
        files.put("average_age/perpetual_inventory/constant", aged / net, axes)
        holding = net[:-1] * (p[1:] - pe[:-1]) + net[1:] * (pe[1:] - p[1:])
        base = p[1:] * (net[1:] + net[:-1]) / 2
        gain = (pe[1:] / pe[:-1] - 1) * base
        average = (productive[1:] + productive[:-1]) / 2
        files.put("productive_stock_average/average/constant", average, axes, 1)
        for key, values in (
            ("holding_gains/perpetual_inventory/current", holding),
            ("asset_base/average/current", base),
            ("revaluation/actual/current", gain),
        ):
            files.put(key, values, axes, 1)
            sums.add(key, asset, values)
        kept["base"].append(base)
        kept["gain"].append(gain)
        kept["average"].append(average)
        kept["loss"].append((lost["net_stock"] * p)[1:])
    late = ("holding_gains/perpetual_inventory", "asset_base/average", "revaluation/actual")
    sums.put(files, {f"{key}/current": 1 for key in late})
    return {**kept, "sums": sums.industries}


def services(files: Files, held: Mapping[str, Any], income: F8) -> F8:
    """Write rate of return, user cost and capital services; return the services index, (T - 1, A, J + 1)."""
    A, J = files.areas, INDUSTRIES
    sums = held["sums"]
    base, gain = sums["asset_base/average/current"], sums["revaluation/actual/current"]
    loss = sums["consumption_of_fixed_capital/perpetual_inventory/current"][1:]
    rate = (income[1:] - (loss - gain)) / base
    files.put("rate_of_return/endogenous/_Z", rate, {"area": A, "industry": J, "asset": ("_T",)}, 1)
    costs, totals, summed = [], Sums(), "capital_compensation/sum_of_parts/current"
    for k, asset in enumerate(ASSETS):
        cost = rate * held["base"][k] + held["loss"][k] - held["gain"][k]
        axes = {"area": A, "industry": J, "asset": (asset,)}
        files.put("capital_compensation/endogenous/current", cost, axes, 1)
        files.put("user_cost/endogenous/current", cost / held["average"][k], axes, 1)
        totals.add(summed, asset, cost)
        costs.append(cost)
    totals.put(files, {summed: 1})
    of_industry = totals.industries[summed]
    of_area = of_industry.sum(axis=2, keepdims=True)
    growth = np.zeros((files.T - 2, len(A), len(J) + 1))
    for cost, average in zip(costs, held["average"], strict=True):
        change = np.log(average[1:] / average[:-1])
        for total, columns in ((of_industry, slice(0, len(J))), (of_area, slice(len(J), None))):
            part = cost / total
            added = (part[1:] + part[:-1]) / 2 * change
            growth[..., columns] += added if columns.start == 0 else added.sum(axis=2, keepdims=True)
    index = chain(growth, files.reference - 1)
    net = with_total(sums["net_stock/perpetual_inventory/constant"])
    composition = index / (net / net[files.reference])[1:]
    axes = {"area": A, "industry": (*J, "_T"), "asset": ("_T",)}
    files.put("capital_services_growth/tornqvist/_Z", growth, axes, 2)
    files.put("capital_services/tornqvist/index", index, axes, 1)
    files.put("capital_composition/services_over_net_stock/index", composition, axes, 1)
    return index


# --- labour, income, growth -------------------------------------------------------------------------------------


def with_total(values: F8) -> F8:
    """Return (T, A, J + 1): the industries and their sum."""
    return np.concatenate([values, values.sum(axis=2, keepdims=True)], axis=2)


def chain(growth: F8, reference: int) -> F8:
    """Return levels one period longer than the growth of their logarithms, 1 at `reference`."""
    logs = np.concatenate([np.zeros((1, *growth.shape[1:])), np.cumsum(growth, axis=0)])
    return np.asarray(np.exp(logs - logs[reference]))


def workers(files: Files, measure: str, by_status: F8) -> F8:
    """Write hours or persons and their totals; return (T, A, J + 1) of all workers."""
    A, J = files.areas, INDUSTRIES
    files.put(f"{measure}/delivered/_Z", by_status, {"area": A, "industry": J, "worker_group": WORKERS})
    key, everybody = f"{measure}/sum_of_parts/_Z", with_total(by_status.sum(axis=3))
    files.put(key, by_status.sum(axis=2), {"area": A, "industry": ("_T",), "worker_group": WORKERS})
    files.put(key, everybody, {"area": A, "industry": (*J, "_T"), "worker_group": ("_T",)})
    return everybody


def delivered(files: Files, measure: str, basis: str, values: F8) -> F8:
    """Write a flow by industry and its total; return (T, A, J + 1)."""
    A, J = files.areas, INDUSTRIES
    whole = with_total(values)
    group = {"worker_group": ("_T",)} if measure == "compensation_of_employees" else {}
    files.put(f"{measure}/delivered/{basis}", values, {"area": A, "industry": J, **group})
    axes = {"area": A, "industry": ("_T",), **group}
    files.put(f"{measure}/sum_of_parts/{basis}", whole[..., -1], axes)
    return whole


def income(files: Files, hours: F8) -> tuple[F8, F8]:
    """Write the account and the shares; return chosen capital income and capital share, (T, A, J + 1)."""
    A, J = files.areas, INDUSTRIES
    account = files.read("income", {"region": A, "branch": J, "transaction": TRANSACTIONS}, skip="status")
    names = (
        "value_added",
        "compensation_of_employees",
        "operating_surplus",
        "mixed_income",
        "net_taxes_on_production",
    )
    whole = {n: delivered(files, n, "current", account[..., i]) for i, n in enumerate(names)}
    base = whole["value_added"] - whole["net_taxes_on_production"]
    axes = {"area": A, "industry": (*J, "_T")}
    files.put("value_added/factor_cost/current", base, axes)
    paid, mixed = whole["compensation_of_employees"], whole["mixed_income"]
    employed, own = with_total(hours[..., 0]), with_total(hours[..., 1])
    earnings = parameter("income", "relative_earnings")
    forms = {
        "unadjusted": paid,
        "hours": paid + earnings * paid / employed * own,
        "fixed_fraction": paid + parameter("income", "mixed_income_labour_fraction") * mixed,
    }
    chosen = with_total(forms["hours"][..., :-1])
    summed = {"area": A, "industry": ("_T",)}
    for method, labour in (*forms.items(), ("sum_of_industries", chosen)):
        total_only = method == "sum_of_industries"
        x, y, where = (labour[..., -1], base[..., -1], summed) if total_only else (labour, base, axes)
        files.put(f"labour_income/{method}/current", x, where)
        files.put(f"capital_income/{method}/current", y - x, where)
        files.put(f"labour_share/{method}/_Z", x / y, where)
        files.put(f"capital_share/{method}/_Z", 1 - x / y, where)
    share = chosen / base
    years = int(parameter("shares", "smoothing_years"))
    for measure, values in (("labour_share", share), ("capital_share", 1 - share)):
        files.put(f"{measure}_two_period/mean/_Z", (values[1:] + values[:-1]) / 2, axes, 1)
        smoothed = sum(values[lag : lag + files.T - years + 1] for lag in range(years)) / years
        files.put(f"{measure}_smoothed/mean/_Z", np.asarray(smoothed), axes, years - 1)
    return base - chosen, 1 - share


def growth_accounts(files: Files, output: F8, capital: F8, labour: F8, hours: F8, share: F8) -> None:
    """Write both decompositions; `capital` starts a year later than the other levels."""
    axes = {"area": files.areas, "industry": (*INDUSTRIES, "_T")}
    mean = (share[1:] + share[:-1]) / 2
    for form in ("log", "discrete"):
        log = form == "log"
        weight = mean if log else share[:-1]

        def grown(x: F8, log: bool = log) -> F8:
            ratio = x[1:] / x[:-1]
            return np.asarray(np.log(ratio) if log else ratio - 1)

        y, k, n = grown(output), grown(capital), grown(labour)
        deepening = grown(capital / hours[1:])
        late = weight[1:]
        residual = y[1:] - late * k - (1 - late) * n[1:]
        level = chain(residual if log else np.log1p(residual), 0)
        for measure, values, start in (
            ("output_growth", y, 1),
            ("capital_growth", k, 2),
            ("labour_growth", n, 1),
            ("output_per_hour_growth", grown(output / hours), 1),
            ("capital_deepening", deepening, 2),
            ("capital_contribution", late * k, 2),
            ("labour_contribution", (1 - weight) * n, 1),
            ("deepening_contribution", late * deepening, 2),
            ("residual_growth", residual, 2),
            ("residual_level", level, 1),
            ("residual_labour_augmenting", residual / (1 - mean[1:]), 2),
            ("residual_capital_augmenting", residual / mean[1:], 2),
        ):
            files.put(f"{measure}/{form}/_Z", values, axes, start)


def main(folder: Path, panel: Path) -> None:
    files = Files(folder, panel)
    A, J = files.areas, INDUSTRIES
    held = capital(files)
    by_status = files.read("hours", {"region": A, "branch": J, "workers": STATUSES}) / THOUSAND
    hours = workers(files, "hours_worked", by_status)
    persons = files.read_wide("persons", {"region": A, "branch": J, "workers": STATUSES})
    workers(files, "persons_employed", persons)
    labour = hours / hours[files.reference]
    axes = {"area": A, "industry": (*J, "_T"), "worker_group": ("_T",)}
    files.put("labour_input/hours/index", labour, axes)
    capital_income, share = income(files, by_status)
    index = services(files, held, capital_income[..., :-1])
    volume = files.read("value_added_volume", {"region": A, "branch": J})
    output = delivered(files, "value_added", "constant", volume)
    growth_accounts(files, output, index, labour, hours, share)
    files.con.close()


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(sys.argv[2]))
