"""Acceptances: findings that somebody let stand, each only as long as it reads as it did."""

from collections.abc import Collection, Mapping, Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from keelbook import findings
from keelbook.contracts.codes import DIMS
from keelbook.contracts.judgements import ACCEPTANCES, Acceptance, Entry, SourceSheet

LAPSED = "lapsed_acceptance"


def accept(
    found: pd.DataFrame,
    entries: Sequence[Entry[Acceptance]],
    sources: Mapping[str, SourceSheet],
    acceptable: Collection[str],
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Mark the findings that are accepted, and report the acceptances that no longer hold.

    An acceptance holds for one finding: that of its rule, at its place and key, with its text. It lapses where
    there is none, where that one now says something else, where several fit, and where the finding stops the run
    by a rule that is not in `acceptable`.

    Args:
        found: a findings frame; not changed.
        sources: source name -> its file and sheet.

    Returns:
        The frame with accepted_by, accepted_on and accepted_reason filled in, and one finding for each
        acceptance that lapsed.
    """
    out = found.copy()
    lapsed = []
    for entry in entries:
        said = entry.said
        about = np.flatnonzero(_about(found, said, sources))
        same = about[(found["found"].to_numpy()[about] == said.found)]
        stops = same[found["severity"].to_numpy()[same] == "stop"]
        if len(same) == 1 and not (len(stops) and said.rule not in acceptable):
            row = int(same[0])
            for name, text in (
                ("accepted_by", said.accepted_by),
                ("accepted_on", str(said.date)),
                ("accepted_reason", said.reason),
            ):
                out.loc[out.index[row], name] = text
        else:
            lapsed.append(_lapsed(entry, found, about, same, bool(len(stops))))
    return out, findings.frame(lapsed)


def _about(found: pd.DataFrame, said: Acceptance, sources: Mapping[str, SourceSheet]) -> NDArray[np.bool_]:
    wanted: dict[str, str | int] = {"rule": said.rule, **said.key()}
    if said.time_period is not None:
        wanted["time_period"] = said.time_period
    if said.source is not None:
        wanted |= {"file": sources[said.source].file, "sheet": sources[said.source].sheet}
    if said.position is not None:
        wanted |= {"row": said.position[0], "column": said.position[1]}
    mask = np.ones(len(found), dtype=np.bool_)
    for name, value in wanted.items():
        mask &= (found[name] == value).fillna(False).to_numpy(dtype=np.bool_)
    return mask


def _lapsed(
    entry: Entry[Acceptance],
    found: pd.DataFrame,
    about: NDArray[np.intp],
    same: NDArray[np.intp],
    stops: bool,
) -> dict[str, object]:
    said = entry.said
    if len(same) > 1:
        what, now = "fits several findings", f"{len(same)} findings with this text"
        remedy = "name more of the key, or source and cell, so that one finding is meant"
    elif stops:
        what, now = "is of a rule whose stop cannot be accepted", f"a stop of {said.rule}"
        remedy = "have the figure corrected, by the supplier or in corrections.toml; remove the acceptance"
    elif len(about):
        texts = found["found"].to_numpy()[about].tolist()
        more = f" and {len(texts) - 1} more" if len(texts) > 1 else ""
        what, now = "has lapsed: the finding now says something else", f"{texts[0]}{more}"
        remedy = (
            "look at the figure again; write down the new text if it may stand, else remove the acceptance"
        )
    else:
        what, now = "has lapsed: there is no such finding", "no finding"
        remedy = "remove the acceptance"
    key = {name: getattr(said, name) or "" for name in (*DIMS, "measure", "time_period")}
    return {
        "rule": LAPSED,
        "severity": "warn",
        "level": 1,
        "message": f"the acceptance of {said.rule} by {said.accepted_by} {what}",
        "file": ACCEPTANCES,
        "row": entry.line,
        **key,
        "found": now,
        "expected": said.found,
        "remedy": remedy,
    }
