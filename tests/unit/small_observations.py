"""Observations as intake delivers them, in small, and the rules and context to screen them with."""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd

from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.measures import load_measures
from keelbook.contracts.screening_rules import KINDS, ScreeningRule
from keelbook.stages.screening import screen
from keelbook.stages.screening_report import ScreeningContext

LISTS = load_code_lists()
DIMENSIONS = ("area", "sector", "industry", "asset", "worker_group")
LABELS = ("source", *DIMENSIONS, "measure", "price_basis", "frequency")
USUAL: dict[str, Any] = {
    "source": "one",
    "area": "HV",
    "sector": "S1",
    "industry": "C",
    "asset": "N111",
    "worker_group": "_Z",
    "measure": "investment",
    "price_basis": "current",
    "frequency": "A",
    "period": 2000,
    "value": 1.0,
    "status": "A",
    "unit_mult": 6,
}
COMMON = {"severity": "warn", "level": 1, "reason": "because", "remedy": "look", "citation": "test"}


def observations(rows: Sequence[dict[str, Any]]) -> pd.DataFrame:
    """Rows over `USUAL`, as intake delivers them; the row number in the file is 11, 12, ..., the column 5."""
    given = pd.DataFrame([{**USUAL, **row} for row in rows], columns=list(USUAL))
    frame = pd.DataFrame(index=given.index)
    for name in LABELS:
        listed = list(LISTS.codes(name)) if name in DIMENSIONS else []
        unknown = [label for label in dict.fromkeys(given[name].dropna()) if label not in listed]
        frame[name] = pd.Categorical(given[name], categories=[*listed, *unknown])
    count = np.arange(len(given))
    frame["period"] = given["period"].astype("int32")
    frame["value"] = given["value"].astype("float64")
    frame["obs_status"] = np.array(
        [LISTS.position("obs_status", code) for code in given["status"]], dtype="int8"
    )
    frame["conf_status"] = np.zeros(len(given), dtype="int8")
    frame["unit_mult"] = given["unit_mult"].astype("int8")
    frame["cell_id"] = (count + 1).astype("int64")
    frame["file_id"] = np.array([1 if source == "one" else 2 for source in given["source"]], dtype="int16")
    frame["row"] = (count + 11).astype("int32")
    frame["column"] = np.full(len(given), 5, dtype="int16")
    return frame


CONTEXT = ScreeningContext(
    period=(2000, 2003),
    reference_year=2001,
    lists=LISTS,
    measures=load_measures(),
    files={1: "capital.xlsx", 2: "hours.csv"},
    sheet_of=lambda cells: ["Table 3" for _ in cells],
    labels={"industry": {"Fabrication": "C"}},
)


def rule(kind: str, **parameters: Any) -> ScreeningRule:
    return KINDS[kind].model_validate({"id": f"a_{kind}", "kind": kind, **COMMON, **parameters})


def applied(rows: Sequence[dict[str, Any]], kind: str, **parameters: Any) -> pd.DataFrame:
    return screen(observations(rows), [rule(kind, **parameters)], CONTEXT)


def years(first: int, last: int, **given: Any) -> list[dict[str, Any]]:
    return [{"period": year, **given} for year in range(first, last + 1)]


def place(finding: Any) -> tuple[str, str, int, int]:
    return finding.file, finding.sheet, finding.row, finding.column


def only(found: pd.DataFrame) -> Any:
    assert len(found) == 1
    return found.iloc[0]
