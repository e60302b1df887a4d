"""Corrections: figures replaced by declared others, each only where the old one is what its author saw."""

from collections import Counter
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from keelbook.contracts.judgements import CORRECTIONS, Correction, Entry
from keelbook.errors import Problem
from keelbook.readers.periods import parse_period
from keelbook.readers.staging import TextColumn

CORRECTABLE = "unreadable_number"
"""The rule of a refused cell that a figure puts right; a wrong period or status stays wrong with another figure."""

LISTED = 5


@dataclass(frozen=True)
class Hit:
    """A cell that a correction means: `entry` is the position of the correction in its file.

    `old` is NaN where the cell gave no figure; `problem` says why the correction cannot be applied.
    """

    entry: int
    cell_id: int
    place: str
    old: float
    problem: Problem | None = None


@dataclass(frozen=True, eq=False)
class Cells:
    """All cells of one source, refused ones included, with their codes.

    texts: role -> labels; arrays: period, value, obs_status, cell_id, row, column (N,); `faults`: position ->
    (rule, reason) of the refused ones.
    """

    source: str
    frequency: str
    file: str
    texts: Mapping[str, TextColumn]
    arrays: Mapping[str, NDArray[Any]]
    faults: Mapping[int, tuple[str, str]]


@dataclass(frozen=True)
class Statuses:
    """CL_OBS_STATUS in order, and those of its codes under which there is no figure."""

    codes: Sequence[str]
    missing: Collection[str]


def located(cells: Cells, entries: Sequence[Entry[Correction]]) -> dict[int, list[int]]:
    """Return, for each correction (by position) that means cells of this source, their positions."""
    out = {}
    for number, entry in enumerate(entries):
        said = entry.said
        if said.source in (None, cells.source) and len(cells.arrays["value"]):
            found = _at_cell(cells, said) if said.position is not None else _at_key(cells, said)
            if len(found):
                out[number] = found.tolist()
    return out


def _at_cell(cells: Cells, said: Correction) -> NDArray[np.intp]:
    return np.flatnonzero(
        (cells.arrays["row"] == said.position[0]) & (cells.arrays["column"] == said.position[1])  # type: ignore[index]
    )


def _at_key(cells: Cells, said: Correction) -> NDArray[np.intp]:
    period = parse_period(said.time_period or "", cells.frequency)
    if period is None:
        return np.zeros(0, dtype=np.intp)
    at = np.flatnonzero(cells.arrays["period"] == period)
    key = said.key() | ({"price_basis": said.price_basis} if said.price_basis else {})
    for name, code in key.items():
        column = cells.texts[name]
        wanted = np.array([label == code for label in column.labels])
        at = at[wanted[column.codes[at]]]
    return at


def correct(
    cells: Cells,
    entries: Sequence[Entry[Correction]],
    where: Mapping[int, Sequence[int]],
    raw: Mapping[int, str],
    statuses: Statuses,
) -> tuple[Cells, list[Hit]]:
    """Put the declared figures in place of the old ones.

    Args:
        cells: a source; not changed.
        where: from `located`.
        raw: cell_id -> raw text, of the cells that are meant.

    Returns:
        The source as corrected, and every cell that is meant. A cell with a problem is left as it was.
    """
    value, status = cells.arrays["value"].copy(), cells.arrays["obs_status"].copy()
    faults = dict(cells.faults)
    hits = []
    for number, positions in where.items():
        entry = entries[number]
        for at in positions:
            cell_id = int(cells.arrays["cell_id"][at])
            place = f"{cells.file}, row {cells.arrays['row'][at]}, column {cells.arrays['column'][at]}"
            old = float(value[at])
            now = entry.said.obs_status or statuses.codes[status[at]]
            problem = _problem(entry, old, raw[cell_id], place, cells.faults.get(at), now, statuses)
            hits.append(Hit(number, cell_id, place, old, problem))
            if problem is None:
                value[at], status[at] = entry.said.value, statuses.codes.index(now)
                faults.pop(at, None)
    arrays = {**cells.arrays, "value": value, "obs_status": status}
    return Cells(cells.source, cells.frequency, cells.file, cells.texts, arrays, faults), hits


def _problem(
    entry: Entry[Correction],
    old: float,
    raw: str,
    place: str,
    fault: tuple[str, str] | None,
    status: str,
    statuses: Statuses,
) -> Problem | None:
    line = f"line {entry.line}"
    expected = entry.said.expected
    if fault is not None and fault[0] != CORRECTABLE:
        return Problem(
            f"the cell cannot be corrected by a figure: {fault[1]}",
            CORRECTIONS,
            line,
            found=f"{fault[0]} in {place}",
            expected="a cell refused for its figure only",
            remedy="have the cell corrected in the file, or declare its mark in assembly.toml",
        )
    if raw != expected if isinstance(expected, str) else old != expected:
        return Problem(
            "the old value is not the one expected",
            CORRECTIONS,
            line,
            found=(f"'{raw}'" if isinstance(expected, str) or np.isnan(old) else f"{old!r}") + f" in {place}",
            expected=f"'{expected}'" if isinstance(expected, str) else f"{expected!r}",
            remedy="the figure has changed since: decide again whether it needs correcting",
        )
    if status in statuses.missing:
        return Problem(
            "a figure under a status that says there is none",
            CORRECTIONS,
            line,
            found=f"status {status} in {place}",
            expected="obs_status of the new figure",
            remedy='add obs_status: "A" for a figure of the supplier, "I" for one of your own',
        )
    return None


def problems(
    entries: Sequence[Entry[Correction]], hits: Sequence[Hit], unread: Collection[str]
) -> list[Problem]:
    """Return what keeps the corrections from being applied: no figure, several, or one that is not as expected.

    Args:
        hits: of all sources.
        unread: sources that could not be read, in which a correction may have its figure.
    """
    out = []
    of_cell = Counter(hit.cell_id for hit in hits)
    for number, entry in enumerate(entries):
        own = [hit for hit in hits if hit.entry == number]
        line = f"line {entry.line}"
        if len(own) > 1:
            more = f" and {len(own) - LISTED} more" if len(own) > LISTED else ""
            out.append(
                Problem(
                    f"the correction means {len(own)} figures",
                    CORRECTIONS,
                    line,
                    found="; ".join(hit.place for hit in own[:LISTED]) + more,
                    expected="one figure",
                    remedy="name more of its key, or its source and cell",
                )
            )
        elif not own:
            if not (unread if entry.said.source is None else entry.said.source in unread):
                out.append(_no_figure(entry))
        elif of_cell[own[0].cell_id] > 1:
            out.append(
                Problem(
                    "two corrections of one figure",
                    CORRECTIONS,
                    line,
                    found=own[0].place,
                    expected="one correction",
                    remedy="remove all but one",
                )
            )
        elif own[0].problem is not None:
            out.append(own[0].problem)
    return out


def _no_figure(entry: Entry[Correction]) -> Problem:
    said = entry.said
    key = " ".join([*said.key().values(), said.price_basis or "", said.time_period or ""]).split()
    address = said.cell or f"line {said.line}, column {said.column}"
    return Problem(
        "the correction means no figure",
        CORRECTIONS,
        f"line {entry.line}",
        found=f"nothing read at {address} of source '{said.source}'"
        if said.position is not None
        else f"no figure with {' '.join(key)}",
        expected="one figure",
        remedy="see where the figure is now, or remove the correction",
    )


def rows(entries: Sequence[Entry[Correction]], hits: Sequence[Hit]) -> pd.DataFrame:
    """Return the table `correction` of corrections that were applied."""
    return pd.DataFrame(
        {
            "cell_id": np.array([hit.cell_id for hit in hits], dtype=np.int64),
            "old": np.array([hit.old for hit in hits], dtype=np.float64),
            "new": np.array([entries[hit.entry].said.value for hit in hits], dtype=np.float64),
            **{
                name: pd.Series([str(getattr(entries[hit.entry].said, name)) for hit in hits], dtype="str")
                for name in ("reason", "author", "date")
            },
            "file": pd.Series([CORRECTIONS] * len(hits), dtype="str"),
            "line": np.array([entries[hit.entry].line for hit in hits], dtype=np.int32),
        }
    )
