"""`keelbook assemble` against the bare script: ratios of time and memory, and whether both give the same figures.

Run: python tests/benchmarks/run.py [--series 100000] [--years 75] [--rounds 3] [--smaller 10000 30000] [--folder DIR]

For every size both sides run as processes of their own, in turn (A B A B), and what is printed are medians of the
ratios of each round. Nothing passes or fails on time; the exit code is 1 if the two disagree on a figure. The default
sizes need 8 GB of disk and most of an hour on two cores; `--series 10000 --smaller --rounds 1` takes a minute. Memory
is what the process had resident at most, the database's cache included.
"""

import argparse
import os
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import duckdb
from make_input import PER_AREA, write

HERE = Path(__file__).resolve().parent
KEELBOOK = (sys.executable, "-c", "from keelbook.cli.main import main; main()")
SAME = 1e-9
"""Largest accepted difference between the sums of both sides, relative to the sum of sizes."""

SUMS = """
select s.measure, s.method, s.price_basis, f.period, count(f.value), sum(f.value), sum(abs(f.value))
from figure f join series s using (series_id) group by all
"""


@dataclass(frozen=True)
class Cost:
    """What one process took: wall and processor seconds, and its largest resident memory in GB."""

    wall: float
    cpu: float
    memory: float


def timed(command: Sequence[str], log: Path) -> Cost:
    """Run a command to its end, its output to a file; any exit code but 0 ends the benchmark."""
    start = time.perf_counter()
    with log.open("wb") as output:
        process = subprocess.Popen(command, stdout=output, stderr=subprocess.STDOUT)
        _, status, used = os.wait4(process.pid, 0)
    wall = time.perf_counter() - start
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise SystemExit(f"{' '.join(command)} ended with {process.returncode}; its output is in {log}")
    return Cost(wall, used.ru_utime + used.ru_stime, used.ru_maxrss / 1e6)


def measure(folder: Path, series: int, years: int, rounds: int) -> list[tuple[Cost, Cost]]:
    """Write the input of one size and run both sides; both results of the last round stay in the folder."""
    write(folder / "input", series, years)
    costs = []
    for _ in range(rounds):
        shutil.rmtree(folder / "build", ignore_errors=True)
        (folder / "bare.duckdb").unlink(missing_ok=True)
        bare = timed(
            (sys.executable, str(HERE / "bare.py"), str(folder / "input"), str(folder / "bare.duckdb")),
            folder / "bare.log",
        )
        whole = timed(
            (*KEELBOOK, "assemble", str(folder / "input"), "--out", str(folder / "build")),
            folder / "assemble.log",
        )
        costs.append((bare, whole))
    return costs


def sums(panel: Path) -> dict[tuple[str, ...], tuple[int, float, float]]:
    """Return count, sum and sum of sizes of the figures by measure, method, price basis and year."""
    with duckdb.connect(str(panel), read_only=True) as con:
        return {row[:4]: row[4:] for row in con.execute(SUMS).fetchall()}


def differences(folder: Path) -> list[str]:
    """Say where the figures of both sides differ: other keys, other counts, other sums."""
    bare, whole = sums(folder / "bare.duckdb"), sums(folder / "build" / "panel.duckdb")
    out = [f"{' '.join(map(str, key))}: only the bare script has it" for key in bare.keys() - whole.keys()]
    out += [f"{' '.join(map(str, key))}: only the panel has it" for key in whole.keys() - bare.keys()]
    for key in bare.keys() & whole.keys():
        (n, total, size), (count, other, _) = bare[key], whole[key]
        if n != count or abs(total - other) > SAME * size:
            out.append(
                f"{' '.join(map(str, key))}: bare {n} figures, sum {total}; panel {count}, sum {other}"
            )
    return sorted(out)


def figures(panel: Path) -> int:
    with duckdb.connect(str(panel), read_only=True) as con:
        return int(con.execute("select count(*) from figure").fetchall()[0][0])


def report(folder: Path, series: int, costs: list[tuple[Cost, Cost]]) -> bool:
    """Print the ratios of one size; return whether both sides have the same figures."""
    print(f"\n{series:,} investment series, {figures(folder / 'bare.duckdb'):,} figures; {len(costs)} rounds")
    print(f"{'':12}{'bare':>10}{'assemble':>10}{'ratio':>8}{'lowest':>8}{'highest':>8}")
    for label, name, unit in (
        ("wall time", "wall", "s"),
        ("processor", "cpu", "s"),
        ("peak memory", "memory", "GB"),
    ):
        pairs = [(getattr(bare, name), getattr(whole, name)) for bare, whole in costs]
        ratios = [whole / bare for bare, whole in pairs]
        bare, whole = (statistics.median(side) for side in zip(*pairs, strict=True))
        print(
            f"{label:12}{bare:>8.2f} {unit:2}{whole:>7.2f} {unit:2}"
            f"{statistics.median(ratios):>7.2f}{min(ratios):>8.2f}{max(ratios):>8.2f}"
        )
    found = differences(folder)
    print("figures     " + ("the same on both sides" if not found else f"{len(found)} sums differ"))
    for line in found[:20]:
        print(f"            {line}")
    return not found


def other_commands(folder: Path, rounds: int) -> None:
    """Print what the commands around the build take on the largest panel."""
    build = folder / "build"
    again = [
        timed((*KEELBOOK, "assemble", str(folder / "input"), "--out", str(build)), folder / "again.log").wall
        for _ in range(rounds)
    ]
    usage = [timed((*KEELBOOK, "--help"), folder / "help.log").wall for _ in range(max(rounds, 3))]
    print(f"\nnothing changed     {statistics.median(again):.2f} s")
    print(f"--help              {statistics.median(usage):.2f} s")
    for label, seconds in traces(build).items():
        print(f"trace, {label:13}{seconds:.3f} s")


def traces(place: Path) -> dict[str, float]:
    """Time opening a panel, and finding and re-performing one figure of each kind with the process up."""
    from keelbook.audit.reading import Build
    from keelbook.audit.trace import find, must_reproduce, trace

    wanted = {
        "stock": ("net_stock", {"industry": "C", "asset": "N1133", "price_basis": "constant"}),
        "delivered": ("investment", {"industry": "C", "asset": "N1133", "price_basis": "current"}),
        "total": ("net_stock", {"industry": "_T", "asset": "_T", "price_basis": "constant"}),
        "residual": ("residual_growth", {"industry": "C"}),
    }
    taken = {}
    start = time.perf_counter()
    with Build(place) as build:
        taken["opening"] = time.perf_counter() - start
        for label, (measure, key) in wanted.items():
            seconds = []
            for year in (2010, 2012, 2014):
                start = time.perf_counter()
                must_reproduce(trace(build, find(build, measure, {"area": "R0001", **key}), year))
                seconds.append(time.perf_counter() - start)
            taken[label] = statistics.median(seconds)
    return taken


def main() -> int:
    parser = argparse.ArgumentParser(description="assemble against the bare script, as ratios.")
    parser.add_argument("--series", type=int, default=100_000)
    parser.add_argument("--years", type=int, default=75)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument(
        "--smaller",
        type=int,
        nargs="*",
        default=[10_000, 30_000],
        help="further sizes, to see how cost grows",
    )
    parser.add_argument(
        "--folder", type=Path, help="where to work; kept afterwards (default: a temporary one)"
    )
    chosen = parser.parse_args()
    work = chosen.folder or Path(tempfile.mkdtemp(prefix="bench-"))
    same, per_series = True, {}
    try:
        for size in sorted({*chosen.smaller, chosen.series}):
            folder = work / str(size)
            shutil.rmtree(folder, ignore_errors=True)
            folder.mkdir(parents=True)
            costs = measure(folder, size, chosen.years, chosen.rounds)
            same &= report(folder, size // PER_AREA * PER_AREA, costs)
            per_series[size] = [
                statistics.median(pair[side].wall for pair in costs) / size for side in (0, 1)
            ]
        print("\nwall time a series, relative to the largest size")
        for size, (bare, whole) in per_series.items():
            largest = per_series[max(per_series)]
            print(f"{size:>12,}  bare {bare / largest[0]:.2f}  assemble {whole / largest[1]:.2f}")
        other_commands(work / str(max(per_series)), chosen.rounds)
    finally:
        if chosen.folder is None:
            shutil.rmtree(work)
    return 0 if same else 1


if __name__ == "__main__":
    sys.exit(main())
