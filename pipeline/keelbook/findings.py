"""Findings: one row per rule and record, with its key, its place, and what to do about it."""

from collections.abc import Iterable, Mapping
from typing import Any

import pandas as pd

SEVERITIES = ("stop", "warn", "note")

COLUMNS: dict[str, str] = {
    "rule": "str",
    "severity": "str",
    "level": "Int64",
    "message": "str",
    "file": "str",
    "sheet": "str",
    "row": "Int64",
    "column": "Int64",
    "area": "str",
    "sector": "str",
    "industry": "str",
    "asset": "str",
    "worker_group": "str",
    "measure": "str",
    "time_period": "str",
    "found": "str",
    "expected": "str",
    "remedy": "str",
    "accepted_by": "str",
    "accepted_on": "str",
    "accepted_reason": "str",
}
"""Column -> dtype of a findings frame. Text columns use "" for "does not apply", never null."""


def frame(records: Iterable[Mapping[str, Any]] | pd.DataFrame = ()) -> pd.DataFrame:
    """Return a findings frame with every column of `COLUMNS` in order; absent text is "", absent numbers <NA>."""
    given = records if isinstance(records, pd.DataFrame) else pd.DataFrame(list(records))
    out = pd.DataFrame(index=pd.RangeIndex(len(given)))
    for name, dtype in COLUMNS.items():
        if name in given:
            column = given[name].reset_index(drop=True)
            out[name] = column.fillna("").astype("str") if dtype == "str" else column.astype("Int64")
        else:
            empty: Any = "" if dtype == "str" else pd.NA
            out[name] = pd.Series([empty] * len(given), dtype=dtype)
    return out


def concat(frames: Iterable[pd.DataFrame]) -> pd.DataFrame:
    """Stack findings frames: stop, warn, note, then the accepted ones; the order within these is kept."""
    parts = [part for part in frames if len(part)]
    if not parts:
        return frame()
    stacked = pd.concat(parts, ignore_index=True)
    order = stacked["severity"].map({name: rank for rank, name in enumerate(SEVERITIES)})
    order += len(SEVERITIES) * (stacked["accepted_by"] != "")
    return stacked.iloc[order.argsort(kind="stable")].reset_index(drop=True)
