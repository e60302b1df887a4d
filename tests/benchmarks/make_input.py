"""Write the benchmark assembly: an invented economy of many areas, delivered as CSV.

Run: python tests/benchmarks/make_input.py FOLDER [--series 100000] [--years 75]

Every area has 20 industries (ISIC sections) with 10 assets each, so 100 000 investment series are 500 areas. The
other sources are what the demo assembly has: prices by asset, the income account, hours and persons by status,
value added in volume. One investment figure in a hundred is an estimate and the last year is provisional, so that
status and data basis have something to follow. All figures are invented; the seed is fixed.
"""

import argparse
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pandas as pd
from numpy.typing import NDArray

F8 = NDArray[np.float64]

INDUSTRIES = tuple("ABCDEFGHIJKLMNOPQRST")
ASSETS = ("N111", "N1121", "N1122", "N1131", "N11321", "N11322", "N1133", "N1151", "N1171", "N11731")
STATUSES = ("employees", "self-employed")
TRANSACTIONS = ("B.1g", "D.1", "B.2g", "B.3g", "D.29-D.39")
PER_AREA = len(INDUSTRIES) * len(ASSETS)
LAST_YEAR, REFERENCE_YEAR, PRICE_BASE = 2019, 2015, 2010

ASSET_PRICE_GROWTH = (0.025, 0.025, 0.025, 0.015, -0.06, -0.02, 0.01, 0.02, 0.02, -0.01)
ASSET_SHARE = (0.03, 0.02, 0.02, 0.02, 0.015, 0.01, 0.04, 0.005, 0.02, 0.02)
"""Invented: price growth of an asset, and investment in it as a part of value added."""

DECLARATION = """\
# Invented figures for timing, written by tests/benchmarks/make_input.py.
title = "Invented areas for timing"
area = "R0000"
currency = "XXV"
reference_year = {reference}
period = [{first}, {last}]

[[source]]
name = "investment"
file = "sources/investment.csv"
measure = "investment"
price_basis = "current"
unit_mult = 6
frequency = "A"
[source.csv]
[source.long]
area = "region"
industry = "branch"
asset = "asset"
time_period = "year"
obs_status = "status"
value = "value"

[[source]]
name = "prices"
file = "sources/prices.csv"
measure = "investment_price"
price_basis = "source_index"
unit_mult = 0
frequency = "A"
[source.csv]
[source.long]
area = "region"
asset = "asset"
time_period = "year"
value = "value"

[[source]]
name = "value_added_volume"
file = "sources/value_added_volume.csv"
measure = "value_added"
price_basis = "constant"
unit_mult = 6
frequency = "A"
[source.csv]
[source.long]
area = "region"
industry = "branch"
time_period = "year"
value = "value"

[[source]]
name = "income"
file = "sources/income.csv"
price_basis = "current"
unit_mult = 6
frequency = "A"
[source.csv]
[source.long]
area = "region"
industry = "branch"
measure = "transaction"
time_period = "year"
obs_status = "status"
value = "value"
[source.codes.measure]
"B.1g" = "value_added"
"D.1" = "compensation_of_employees"
"B.2g" = "operating_surplus"
"B.3g" = "mixed_income"
"D.29-D.39" = "net_taxes_on_production"

[[source]]
name = "hours"
file = "sources/hours.csv"
measure = "hours_worked"
unit_mult = 3
frequency = "A"
[source.csv]
[source.long]
area = "region"
industry = "branch"
worker_group = "workers"
time_period = "year"
value = "value"
[source.codes.worker_group]
"employees" = "SAL"
"self-employed" = "SELF"

[[source]]
name = "persons"
file = "sources/persons.csv"
measure = "persons_employed"
unit_mult = 3
frequency = "A"
[source.csv]
[source.wide]
periods = "across"
period_header = 1
area = "region"
industry = "branch"
worker_group = "workers"
[source.codes.worker_group]
"employees" = "SAL"
"self-employed" = "SELF"
"""


def area_codes(count: int) -> list[str]:
    return [f"R{number:04d}" for number in range(count)]


def write(folder: Path, series: int, years: int) -> None:
    """Write the assembly with `series` investment series (rounded down to whole areas) of `years` years."""
    first = LAST_YEAR - years + 1
    if series < PER_AREA or first > PRICE_BASE:
        raise SystemExit(
            f"at least {PER_AREA} series and {LAST_YEAR - PRICE_BASE + 1} years; got {series}, {years}"
        )
    areas = area_codes(series // PER_AREA)
    (folder / "sources").mkdir(parents=True)
    (folder / "rules" / "codes").mkdir(parents=True)
    (folder / "assembly.toml").write_text(
        DECLARATION.format(first=first, last=LAST_YEAR, reference=REFERENCE_YEAR), encoding="utf-8"
    )
    rows = "".join(f"{code},Invented region {code[1:]},,invented,seen\n" for code in areas)
    (folder / "rules" / "codes" / "area.csv").write_text(
        "code,name,parent,citation,status\n" + rows, encoding="utf-8"
    )
    con = duckdb.connect()
    con.execute("set enable_progress_bar = false")
    _Sources(con, folder / "sources", areas, range(first, LAST_YEAR + 1)).write()
    con.close()


class _Sources:
    """The invented economy, written file by file; every array has years first."""

    def __init__(self, con: duckdb.DuckDBPyConnection, folder: Path, areas: list[str], years: range) -> None:
        self.con, self.folder, self.areas, self.years = con, folder, areas, years
        self.draw = np.random.default_rng(20150101)

    def _path(self, mean: float | F8, spread: float, *shape: int) -> F8:
        """Return levels that start near 1 and grow by `mean` a year, give or take `spread`."""
        steps = self.draw.normal(0, spread, (len(self.years), *shape)) + mean
        return np.asarray(np.exp(np.cumsum(steps, axis=0)))

    def _wobble(self, spread: float, *shape: int) -> F8:
        return np.asarray(np.exp(self.draw.normal(0, spread, (len(self.years), *shape))))

    def write(self) -> None:
        A, J, K, T = len(self.areas), len(INDUSTRIES), len(ASSETS), len(self.years)
        size = self.draw.lognormal(7.6, 0.3, (A, J))
        volume = np.round(size * self._path(0.02, 0.008, A, J), 1)
        deflator = self._path(0.02, 0.004, A, 1)
        deflator /= deflator[self.years.index(REFERENCE_YEAR)]
        current = volume * deflator
        prices = self._path(np.array(ASSET_PRICE_GROWTH), 0.004, A, K)
        prices *= 100 / prices[self.years.index(PRICE_BASE)]
        self._long("prices", prices, 2, {"region": self.areas, "asset": ASSETS})
        self._long("value_added_volume", volume, 1, {"region": self.areas, "branch": INDUSTRIES})
        self._income(current)
        hours = size[None, :, :, None] * self._path(0.004, 0.008, A, J, 2) * np.array([30.0, 3.6])
        workers = {"region": self.areas, "branch": INDUSTRIES, "workers": STATUSES}
        self._long("hours", hours, 0, workers)
        self._wide("persons", hours / 1700 / self._wobble(0.005, A, J, 2), 3, workers)
        shares = np.array(ASSET_SHARE) * self.draw.uniform(0.6, 1.4, (A, J, K))
        investment = current[..., None] * shares * self._wobble(0.03, A, J, K)
        status = np.where(self.draw.random(investment.shape) < 0.01, 1, 0).astype(np.int8)
        status[T - 1] = 2
        labels = {"region": self.areas, "branch": INDUSTRIES, "asset": ASSETS}
        self._long("investment", investment, 2, labels, status)

    def _income(self, value_added: F8) -> None:
        """Write an account whose parts add up to value added to the printed digit."""
        parts = [
            np.round(value_added * part * self._wobble(0.01, *value_added.shape[1:]), 1)
            for part in (0.5, 0.38, 0.08, 0.02)
        ]
        account = np.stack([sum(parts, np.zeros_like(value_added)), *parts], axis=3)
        status = np.zeros(account.shape, np.int8)
        status[-1] = 2
        labels = {"region": self.areas, "branch": INDUSTRIES, "transaction": TRANSACTIONS}
        self._long("income", account, 1, labels, status)

    def _labels(self, labels: dict[str, Any], repeat: int) -> dict[str, Any]:
        shape = [len(codes) for codes in labels.values()]
        places = np.indices(shape, np.int16).reshape(len(shape), -1)
        return {
            name: pd.Categorical.from_codes(np.repeat(at, repeat), dtype=pd.CategoricalDtype(list(codes)))
            for (name, codes), at in zip(labels.items(), places, strict=True)
        }

    def _long(
        self,
        name: str,
        values: F8,
        digits: int,
        labels: dict[str, Any],
        status: NDArray[np.int8] | None = None,
    ) -> None:
        """Write (T, ...) figures, a line each, sorted by series and then by year."""
        T = len(self.years)
        columns = self._labels(labels, T)
        columns["year"] = np.tile(np.array(self.years, np.int16), values[0].size)
        if status is not None:
            columns["status"] = pd.Categorical.from_codes(
                status.reshape(T, -1).T.ravel(), dtype=pd.CategoricalDtype(["A", "E", "P"])
            )
        columns["value"] = values.reshape(T, -1).T.ravel()
        self._copy(name, pd.DataFrame(columns), {"value": digits})

    def _wide(self, name: str, values: F8, digits: int, labels: dict[str, Any]) -> None:
        """Write (T, ...) figures with the years across."""
        flat = values.reshape(len(self.years), -1)
        columns = {str(year): flat[t] for t, year in enumerate(self.years)}
        frame = pd.DataFrame({**self._labels(labels, 1), **columns})
        self._copy(name, frame, dict.fromkeys(columns, digits))

    def _copy(self, name: str, frame: pd.DataFrame, digits: dict[str, int]) -> None:
        columns = ", ".join(
            f'cast("{column}" as decimal(18, {digits[column]})) as "{column}"'
            if column in digits
            else f'"{column}"'
            for column in frame.columns
        )
        self.con.register("_frame", frame)
        target = str(self.folder / f"{name}.csv").replace("'", "''")
        self.con.execute(f"copy (select {columns} from _frame) to '{target}' (format csv, header)")
        self.con.unregister("_frame")


def main() -> None:
    parser = argparse.ArgumentParser(description="Write the benchmark assembly.")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--series", type=int, default=100_000)
    parser.add_argument("--years", type=int, default=75)
    chosen = parser.parse_args()
    write(chosen.folder, chosen.series, chosen.years)


if __name__ == "__main__":
    main()
