"""Panel: the two wide tables a decomposition is read from, one row per area, sector, industry and year."""

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from keelbook.blocks import F8, Block, BlockKey, SeriesIndex
from keelbook.frames import coded
from keelbook.stages import decomposition
from keelbook.stages.base import CHOSEN, Book
from keelbook.stages.totals import TOTAL

WORKERS, ASSETS = {"worker_group": TOTAL}, {"asset": TOTAL}

INPUTS: Mapping[str, tuple[BlockKey, Mapping[str, str]]] = {
    "value_added_current": (BlockKey("value_added", CHOSEN, "current"), {}),
    "value_added_volume": (BlockKey("value_added", CHOSEN, "constant"), {}),
    "hours_worked": (BlockKey("hours_worked", CHOSEN, "_Z"), WORKERS),
    "labour_input": (BlockKey("labour_input", CHOSEN, "index"), WORKERS),
    "net_stock": (BlockKey("net_stock", CHOSEN, "constant"), ASSETS),
    "productive_stock": (BlockKey("productive_stock", CHOSEN, "constant"), ASSETS),
    "capital_services": (BlockKey("capital_services", CHOSEN, "index"), ASSETS),
    "labour_share": (BlockKey("labour_share", CHOSEN, "_Z"), {}),
    "capital_share": (BlockKey("capital_share", CHOSEN, "_Z"), {}),
}
"""Column of decomposition_input -> its block, and the codes of dimensions that output does not have."""

REQUIRED = ("value_added_volume", "hours_worked", "capital_share")
CAPITAL = ("capital_services", "productive_stock", "net_stock")

WORDS = {
    "value_added_volume": "value added in volume",
    "hours_worked": "hours worked",
    "capital_share": "capital share",
}


def inputs_of(book: Book) -> pd.DataFrame:
    """Return `decomposition_input`: what each series and year has, whether that is enough, and why not."""
    series = _series(book)
    if series is None:
        return pd.DataFrame()
    periods = next(iter(book)).periods
    columns = {
        name: _values(book.get(key), series, project, len(periods)) for name, (key, project) in INPUTS.items()
    }
    missing = {WORDS[name]: np.isnan(columns[name]) for name in REQUIRED}
    no_capital = np.isnan([columns[name] for name in CAPITAL]).all(axis=0)
    missing["capital stock or services"] = np.asarray(no_capital)
    shown = np.isfinite(list(columns.values())).any(axis=0)
    ready = shown & ~np.any(list(missing.values()), axis=0)
    reason = np.full(ready.shape, "", dtype=object)
    for words, gone in missing.items():
        text = np.where(reason == "", f"no {words}", reason + f", no {words}")
        reason = np.where(gone & shown, text, reason)
    frame = _labelled(series, periods, shown)
    for name, values in columns.items():
        frame[name] = values.T[shown.T]
    frame["ready"] = ready.T[shown.T]
    frame["reason"] = pd.Series(reason.T[shown.T].astype(str), dtype="str")
    return frame


def decomposition_of(book: Book) -> pd.DataFrame:
    """Return `decomposition`: growth, contributions, residual, level and readings, a row per form and year."""
    frames = []
    for form in decomposition.FORMS:
        level, residual = (book.get(BlockKey(m, form, "_Z")) for m in ("residual_level", "residual_growth"))
        if level is None or residual is None:
            continue
        # After a gap there is growth again, and no level any more.
        shown = np.isfinite(level.value) | np.isfinite(residual.value)
        frame = _labelled(level.series, level.periods, shown)
        frame["form"] = pd.Series([form] * len(frame), dtype="str")
        share = _values(book.get(_share_key(form)), level.series, {}, len(level.periods))
        if form == "discrete":
            share = np.vstack([np.full((1, share.shape[1]), np.nan), share[:-1]])
        for measure in decomposition.MEASURES:
            if measure == "capital_contribution":
                frame["capital_share"] = share.T[shown.T]
            block = book.get(BlockKey(measure, form, "_Z"))
            frame[measure] = _values(block, level.series, {}, len(level.periods)).T[shown.T]
        frames.append(frame)
    return pd.concat(frames, ignore_index=True) if frames else pd.DataFrame()


def _share_key(form: str) -> BlockKey:
    return decomposition.MEAN_SHARE if form == "log" else decomposition.SHARE


def _series(book: Book) -> SeriesIndex | None:
    """Return the series of value added, and of whatever else has the keys of value added."""
    found: list[Any] = []
    table = None
    for key, project in INPUTS.values():
        block = book.get(key)
        if block is not None:
            table = block.series.table
            mine = np.ones(len(block.series), bool)
            for dim, code in project.items():
                mine &= block.series.is_code(dim, code)
            found.append(block.series.take(mine).projected({"asset": "_Z", "worker_group": "_Z"}))
    return SeriesIndex(table, np.unique(np.concatenate(found))) if table is not None else None


def _values(block: Block | None, series: SeriesIndex, project: Mapping[str, str], count: int) -> F8:
    """Return the values of a block for the rows of the table; a confidential figure is left out."""
    out = np.full((count, len(series)), np.nan)
    if block is None:
        return out
    at = block.series.locate(series.projected(project))
    there = at >= 0
    out[:, there] = block.value[:, at[there]]
    if block.conf is not None:
        hidden = np.zeros(out.shape, bool)
        hidden[:, there] = block.conf[:, at[there]] > 0
        out[hidden] = np.nan
    return out


def _labelled(series: SeriesIndex, periods: range, shown: Any) -> pd.DataFrame:
    column, row = np.nonzero(shown.T)
    labels = {
        dim: coded(series.digit(dim)[column], series.table.codes[dim])
        for dim in ("area", "sector", "industry")
    }
    years = coded(row, [str(p) for p in periods])
    return pd.DataFrame({**labels, "time_period": years})
