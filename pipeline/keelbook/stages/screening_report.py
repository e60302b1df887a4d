"""What the screening rules share: their context, the findings they write, and the precision of printed figures."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from keelbook import findings
from keelbook.contracts.codes import CodeLists
from keelbook.contracts.measures import Measure
from keelbook.contracts.screening_rules import ScreeningRule
from keelbook.stages.observed import Floats, Ints, Observed, dense_numbers

CODED = ("measure", "sector", "industry", "asset", "worker_group")
NOT_A_PART = ("_T", "_Z")

LISTED = 10_000
"""Most findings a rule lists one by one; a last finding counts those beyond, so that a file delivered twice
does not write millions of them."""

SAMPLE = 10_000
MOST_DECIMALS = 9


@dataclass(frozen=True)
class ScreeningContext:
    """What the rules need beside the observations.

    `period` is the assembly's first and last year, `reference_year` the year of constant prices; `files` maps
    file_id to the file's name; `sheet_of` returns the sheet of each cell_id ("" for CSV); `labels` holds, per
    dimension, the labels the sources declare and their codes.
    """

    period: tuple[int, int]
    reference_year: int
    lists: CodeLists
    measures: Mapping[str, Measure]
    files: Mapping[int, str]
    sheet_of: Callable[[Sequence[int]], Sequence[str]]
    labels: Mapping[str, Mapping[str, str]] = field(default_factory=dict)


def figure(value: float) -> str:
    return f"{value:.10g}"


def report(
    observed: Observed,
    rule: ScreeningRule,
    context: ScreeningContext,
    rows: Ints,
    *,
    message: str,
    found: Callable[[Ints], Sequence[str]] | Sequence[str],
    expected: str | Sequence[str],
    remedy: str | Sequence[str] = "",
    severity: str = "",
    time_period: Sequence[str] | None = None,
) -> pd.DataFrame:
    """Return one finding for each of `rows`, at its cell; one more counts those beyond `LISTED`."""
    if not len(rows):
        return findings.frame()
    shown = rows[:LISTED]
    frame = observed.frame
    listed = pd.DataFrame(
        {
            "file": [context.files[file] for file in frame["file_id"].to_numpy()[shown].tolist()],
            "sheet": list(context.sheet_of(frame["cell_id"].to_numpy()[shown].tolist())),
            "row": frame["row"].to_numpy()[shown],
            "column": frame["column"].to_numpy()[shown],
            **{name: observed.text(name, shown) for name in (*CODED, "area")},
            "time_period": observed.period_text(shown) if time_period is None else list(time_period)[:LISTED],
            "found": list(found(shown) if callable(found) else found[:LISTED]),
            "expected": expected if isinstance(expected, str) else list(expected)[:LISTED],
            "remedy": (remedy or rule.remedy) if isinstance(remedy, str) else list(remedy)[:LISTED],
        }
    )
    listed["rule"], listed["level"], listed["message"] = rule.id, rule.level, f"{message}: {rule.reason}"
    listed["severity"] = severity or rule.severity
    if len(rows) == len(shown):
        return findings.frame(listed)
    rest = remark(
        rule,
        message=message,
        found=f"{len(rows) - len(shown)} more like the {len(shown)} listed",
        severity=severity or rule.severity,
    )
    return pd.concat([findings.frame(listed), rest], ignore_index=True)


def remark(rule: ScreeningRule, *, message: str, found: str, severity: str) -> pd.DataFrame:
    return findings.frame(
        [
            {
                "rule": rule.id,
                "severity": severity,
                "level": rule.level,
                "message": f"{message}: {rule.reason}",
                "found": found,
                "remedy": rule.remedy,
            }
        ]
    )


def base_unit(observed: Observed, rows: Ints) -> Floats:
    """Return the figures of some rows without their unit multiplier."""
    return observed.value[rows] * 10.0 ** observed.frame["unit_mult"].to_numpy()[rows].astype(np.float64)


def last_digits(observed: Observed, rows: Ints) -> Floats:
    """Return the unit of the last printed digit of each figure, in single units.

    Figures of one source, measure and multiplier are printed alike: with the most decimals that any of them
    has (looked up in an even sample where there are many).
    """
    mult = observed.frame["unit_mult"].to_numpy()[rows]
    number = dense_numbers([observed.codes("source")[rows], observed.codes("measure")[rows], mult])
    out = np.empty(len(rows))
    for index in range(int(number.max()) + 1):
        own = np.flatnonzero(number == index)
        sample = observed.value[rows[own[:: len(own) // SAMPLE + 1]]]
        out[own] = 10.0 ** (int(mult[own[0]]) - _decimals(sample[~np.isnan(sample)]))
    return out


def _decimals(values: Floats) -> int:
    for decimals in range(MOST_DECIMALS):
        scaled = values * 10.0**decimals
        if np.all(np.abs(scaled - np.rint(scaled)) <= 1e-6 + 1e-15 * np.abs(scaled)):
            return decimals
    return MOST_DECIMALS


def partition_of(worker_group: str, context: ScreeningContext) -> str:
    """Return the partition a worker group belongs to; an unknown one is its own."""
    if not context.lists.has("worker_group", worker_group):
        return worker_group
    return context.lists.partition("worker_group", worker_group) or worker_group
