"""Intake with cell addresses against a plain read of the same file. Prints ratios; gates on nothing.

Run: python tests/benchmarks/bench_intake.py [series] [years] [rounds]
"""

import resource
import statistics
import sys
import tempfile
import time
from pathlib import Path

import duckdb
import numpy as np

from keelbook.assembly.declaration import load_assembly
from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.measures import load_measures
from keelbook.contracts.tables import load_tables
from keelbook.stages.intake import take_in

ASSEMBLY = """
title = "Invented figures for timing"
area = "HV"
currency = "HVK"
reference_year = {last}
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
industry = "industry"
asset = "asset"
time_period = "year"
value = "value"
"""
LAST_YEAR = 2019


def write(folder: Path, series: int, years: int) -> Path:
    """Write an assembly of one long CSV, sorted by series; labels beyond the code lists are kept by intake."""
    (folder / "sources").mkdir()
    (folder / "assembly.toml").write_text(ASSEMBLY.format(first=LAST_YEAR - years + 1, last=LAST_YEAR))
    path = folder / "sources" / "investment.csv"
    draw = np.random.default_rng(1)
    with path.open("w") as file:
        file.write("industry,asset,year,value\n")
        for at in range(series):
            figures = draw.uniform(1, 1000, years).round(3).tolist()
            head = f"I{at // 100:04d},N{at % 100:02d}"
            start = LAST_YEAR - years + 1
            file.writelines(f"{head},{start + year},{figure}\n" for year, figure in enumerate(figures))
    return path


def plain(path: Path, target: Path, cells: bool) -> int:
    """Read the file typed, labels as codes; with `cells`, also store the raw text of each figure in a file."""
    con = duckdb.connect(str(target))
    con.execute("set enable_progress_bar = false")
    kind = "varchar" if cells else "double"
    con.execute(
        "create temp table t as select * from read_csv(?, auto_detect = false, header = true, "
        f"columns = {{'industry': 'varchar', 'asset': 'varchar', 'year': 'integer', 'value': '{kind}'}})",
        [str(path)],
    )
    for name in ("industry", "asset"):
        con.execute(f"create temp type {name}_code as enum (select distinct {name} from t order by 1)")
    got = con.execute(
        "select enum_code(industry::industry_code) as i, enum_code(asset::asset_code) as a, year, "
        "value::double as v from t"
    ).fetchnumpy()
    if cells:
        con.execute("create table cell as select rowid as id, rowid + 2 as line, value as raw from t")
    con.close()
    return len(got["v"])


def taken(folder: Path, target: Path) -> int:
    """Take the assembly in, into an evidence file."""
    con = duckdb.connect(str(target))
    con.execute("set enable_progress_bar = false")
    for table in ("source_file", "source_cell", "rejected_cell"):
        con.execute(load_tables()[table].create_sql())
    assembly = load_assembly(folder)
    size = len(take_in(con, assembly, load_code_lists(folder, [assembly.area]), load_measures()).observations)
    con.close()
    return size


def main(series: int = 100_000, years: int = 75, rounds: int = 3) -> None:
    """Interleave the three, round by round, and print the median of the per-round ratios."""
    with tempfile.TemporaryDirectory() as name:
        path = write(Path(name), series, years)
        times: list[list[float]] = []
        for _ in range(rounds):
            row = []
            for step in (
                lambda at: plain(path, at, cells=False),
                lambda at: plain(path, at, cells=True),
                lambda at: taken(Path(name), at),
            ):
                target = Path(name) / "scratch.duckdb"
                start = time.perf_counter()
                if step(target) != series * years:
                    raise SystemExit("a route lost rows")
                row.append(time.perf_counter() - start)
                target.unlink()
            times.append(row)
    print(f"{series} series x {years} years, median of {rounds} rounds")
    for label, at in (("typed read, labels as codes", 0), ("the same, raw cells stored", 1)):
        ratio = statistics.median(row[2] / row[at] for row in times)
        print(f"intake to {label}: {ratio:.2f}")
    print(f"peak memory: {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6:.2f} GB")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
