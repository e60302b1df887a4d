"""The kernels of the perpetual inventory: ratios to a plain copy of their output, and to the bare product.

Run: python tests/benchmarks/kernels.py [--series 100000] [--years 75 150] [--rounds 7]

In every round each side runs once, in turn, into memory that was touched before; what is printed are medians of the
ratios of each round. Matrix products run on one thread, unless OPENBLAS_NUM_THREADS says otherwise. Nothing passes or
fails on time; the exit code is 1 if a kernel and its bare product disagree. The defaults need about 2 GB and two
minutes on two cores. Targets: geometric to a copy 1.5; four cohort sums to a copy of the four
outputs 4 (75 years) and 5 (150 years).
"""

import argparse
import os
import statistics
import sys
import time
from collections.abc import Callable, Mapping

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # read once, when numpy is loaded

import numpy as np
from numpy.typing import NDArray

from keelbook.lineage.lag import GeometricKernel, Lag, TableKernel
from keelbook.methods.perpetual_inventory import cohort_stocks, geometric_stock

F8 = NDArray[np.float64]

SAME = 1e-11
"""Largest accepted difference of both sides, relative to the largest figure."""

KINDS = 4
"""Gross, productive and net stock, and consumption: what one product makes of one investment."""

LIVES = {75: 40, 150: 60}
"""Periods over which a cohort is held, by length of the series; two thirds of it for any other length."""


def medians(sides: Mapping[str, Callable[[], object]], rounds: int) -> dict[str, list[float]]:
    """Return the seconds of every round of each side, run in turn, after one round that is not counted."""
    seconds: dict[str, list[float]] = {name: [] for name in sides}
    for number in range(rounds + 1):
        for name, run in sides.items():
            start = time.perf_counter()
            run()
            if number:
                seconds[name].append(time.perf_counter() - start)
    return seconds


def ratio(seconds: Mapping[str, list[float]], name: str, base: str) -> float:
    """Return the median of the ratios of each round."""
    return statistics.median(a / b for a, b in zip(seconds[name], seconds[base], strict=True))


def weights(life: int) -> F8:
    """Return four rows of weights by age, (KINDS, life + 1): three stocks that decline, and a loss."""
    age = np.arange(life + 1)
    survival = np.clip(1 - (age / (life + 1)) ** 3, 0, 1)
    efficiency = survival * (life + 1 - age) / (life + 1 - 0.5 * age)
    net = efficiency * (1 - age / (life + 1))
    loss = np.r_[1 - net[0], net[:-1] - net[1:]]
    return np.stack([survival, efficiency, net, loss])


def bare_geometric(flow: F8, first: float, keep: float, out: F8) -> None:
    """Return nothing: the recursion alone, without a check or an opening stock."""
    np.multiply(first, flow, out=out)
    for t in range(1, len(flow)):
        out[t] += keep * out[t - 1]


def bare_product(flow: F8, rows: F8, out: F8) -> None:
    """Return nothing: one dense product with the stacked band matrices, zeros included."""
    periods = len(flow)
    age = np.arange(periods)[:, None] - np.arange(periods)[None, :]
    padded = np.concatenate([rows, np.zeros((len(rows), 1))], axis=1)
    inside = (age >= 0) & (age < rows.shape[1])
    band = padded[:, np.where(inside, age, rows.shape[1])].reshape(len(rows) * periods, periods)
    np.matmul(band, flow, out=out.reshape(len(rows) * periods, -1))


def geometric(flow: F8, rounds: int) -> bool:
    """Print the ratios of the recursion; return whether it gives what the bare one gives."""
    own, bare, copy = (np.zeros_like(flow) for _ in range(3))
    first, keep = 0.95, 0.9
    by_series = np.full(flow.shape[1], keep)
    by_period = np.full(flow.shape, keep)
    opening = np.zeros(flow.shape[1])
    lag = Lag((GeometricKernel(first, first * keep, keep, first),), np.zeros(flow.shape[1], np.int32))
    begun, growth = np.full_like(flow, np.nan), np.full_like(flow, np.nan)
    begun[0], growth[0] = 0.0, 0.02
    later = flow.copy()
    later[0] = np.nan
    sides: dict[str, Callable[[], object]] = {
        "plain copy": lambda: np.copyto(copy, flow),
        "bare product": lambda: bare_geometric(flow, first, keep, bare),
        "kernel, one rate": lambda: geometric_stock(flow, np.asarray(first), np.asarray(keep), opening, own),
        "kernel, own rates": lambda: geometric_stock(flow, np.asarray(first), by_series, opening, own),
        "kernel, rates by year": lambda: geometric_stock(flow, np.asarray(first), by_period, opening, own),
        "in the stage (`Lag`)": lambda: lag.compute(later, begun, growth),
    }
    show("geometric", flow.shape, medians(sides, rounds))
    return agree("geometric", own, bare)


def cohort(flow: F8, rounds: int) -> bool:
    """Print the ratios of four cohort sums; return whether they give what the dense product gives."""
    rows = weights(LIVES.get(len(flow), len(flow) * 2 // 3))
    own, bare, copy = (np.zeros((KINDS, *flow.shape)) for _ in range(3))
    which = np.zeros(flow.shape[1], np.int32)
    begun, growth = np.full_like(flow, np.nan), np.full_like(flow, np.nan)
    begun[0], growth[0] = 0.0, 0.02
    later = flow.copy()
    later[0] = np.nan
    lags = [Lag((TableKernel(row, row),), which) for row in rows]
    sides: dict[str, Callable[[], object]] = {
        "plain copy": lambda: np.copyto(copy, flow),
        "bare product": lambda: bare_product(flow, rows, bare),
        "kernel": lambda: cohort_stocks(flow, rows, own),
        "in the stage (`Lag`)": lambda: [one.compute(later, begun, growth) for one in lags],
    }
    show("cohort, four outputs", flow.shape, medians(sides, rounds))
    return agree("cohort", own, bare)


def show(title: str, shape: tuple[int, ...], seconds: Mapping[str, list[float]]) -> None:
    print(f"\n{title}, {shape[1]:,} series x {shape[0]} years")
    print(f"{'':24}{'seconds':>10}{'to a copy':>12}{'to the bare product':>22}")
    for name, taken in seconds.items():
        to_copy, to_bare = (ratio(seconds, name, base) for base in ("plain copy", "bare product"))
        print(f"{name:24}{statistics.median(taken):>10.3f}{to_copy:>12.2f}{to_bare:>22.2f}")


def agree(title: str, own: F8, bare: F8) -> bool:
    """Return whether both sides gave the same figures, and say so if not."""
    gap = float(np.abs(own - bare).max() / np.abs(bare).max())
    if gap > SAME:
        print(f"{title}: kernel and bare product differ by {gap:.2g} of the largest figure")
    return gap <= SAME


def main() -> int:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--series", type=int, default=100_000)
    parser.add_argument("--years", type=int, nargs="+", default=[75, 150])
    parser.add_argument("--rounds", type=int, default=7)
    chosen = parser.parse_args()
    same = []
    for years in chosen.years:
        flow = np.random.default_rng(1).uniform(50, 150, (years, chosen.series))
        same += [geometric(flow, chosen.rounds), cohort(flow, chosen.rounds)]
    return 0 if all(same) else 1


if __name__ == "__main__":
    sys.exit(main())
