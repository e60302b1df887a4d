"""What a run did, in the words of the people who run it."""

from pathlib import Path
from typing import Any

import pandas as pd

from keelbook.assembly.declaration import Assembly
from keelbook.assembly.run import Report, as_problem
from keelbook.audit.reading import Build
from keelbook.outputs.decomposition import averages
from keelbook.outputs.text import percent, plural, shown

ON_REQUEST = ("valuation",)
"""Stages that give nothing unless the assembly asks for it: no news if they do not."""

SHOWN_FINDINGS = 3
WIDTH = 120
"""Characters shown of a finding; `keelbook screen` and the table `finding` have it in full."""
WORDS = {
    "harmonise": "delivered figures in one unit, frequency and reference year",
    "deflation": "investment volumes and year-end prices",
    "stocks": "gross, productive and net stocks, consumption, retirements",
    "valuation": "other price bases and chained aggregates",
    "labour": "labour input",
    "income": "labour and capital income and shares, every method",
    "services": "rates of return, user costs, capital services",
    "shares": "two-period and smoothed shares",
    "decomposition": "growth, contributions, residual",
}


def summary(report: Report, place: Path) -> list[str]:
    """Return at most 25 lines: what came in, what was built and what not, findings, where, and what next."""
    assembly = report.assembly
    lines = [
        shown(assembly.title),
        f"{_areas(assembly.lists.codes('area'))}, {assembly.period[0]}-{assembly.period[1]}, reference year "
        f"{assembly.reference_year}, million {' and '.join(_currencies(assembly))}",
        "",
    ]
    if report.unchanged:
        lines.append(f"Unchanged  sources, rules and code are those of build {report.identity.build_id}")
    else:
        counts = report.counts.sum(numeric_only=True)
        lines.append(
            f"Read       {plural(len(report.counts), 'source')}: {int(counts['cells']):,} cells = "
            f"{int(counts['observations']):,} observations + {int(counts['rejected']):,} rejected + "
            f"{int(counts['missing']):,} declared missing"
        )
    for row in report.stages.to_dict("records"):
        if row["stage"] in WORDS and row["figures"]:
            lines.append(f"{'Built':<10} {row['figures']:>11,} figures  {WORDS[str(row['stage'])]}")
    lines += [
        f"Not built  {WORDS[s]}: {_why(report.findings, s)}"
        for s in WORDS
        if s not in ON_REQUEST and not _figures(report.stages, s)
    ]
    lines += _findings(report.findings)
    lines += _growth(report)
    lines += [
        "",
        f"Results    {report.folder.parent / 'panel.duckdb'} (build {report.identity.build_id}, "
        f"{report.seconds:.1f} s)",
        f"Next       keelbook decompose {place}",
    ]
    return lines


def _figures(stages: pd.DataFrame, name: str) -> int:
    return int(stages.loc[stages["stage"] == name, "figures"].sum())


def _currencies(assembly: Assembly) -> list[str]:
    """Return the currencies of the assembly and of its sources."""
    return list(dict.fromkeys([assembly.currency, *(s.currency for s in assembly.sources if s.currency)]))


def _areas(codes: tuple[str, ...], most: int = 8) -> str:
    listed = ", ".join(codes[:most])
    return listed if len(codes) <= most else f"{listed} and {len(codes) - most} more areas"


def _why(found: pd.DataFrame, stage: str) -> str:
    """Return why a stage gave nothing, in the words of its notes."""
    mine = found[(found["rule"] == "not_computed") & found["message"].str.startswith(f"{stage}: ")]
    reasons = dict.fromkeys(message.rsplit(", ", 1)[-1] for message in mine["message"])
    return " and ".join(reasons) or "nothing to compute it from"


def _findings(found: pd.DataFrame) -> list[str]:
    counts = found["severity"].value_counts()
    accepted = found.loc[found["accepted_by"] != "", "severity"].value_counts()
    texts = [
        f"{int(counts.get(name, 0)):,} {name}"
        + (f" ({int(accepted[name]):,} accepted)" if name in accepted else "")
        for name in ("stop", "warn", "note")
    ]
    lines = [f"Findings   {', '.join(texts)}"]
    for row in found.head(SHOWN_FINDINGS).to_dict("records"):
        problem: Any = as_problem(row)
        where = ", ".join(part for part in (problem.file, problem.place) if part)
        text = shown(f"{where + ': ' if where else ''}{problem.what}")
        lines.append(f"           {text if len(text) <= WIDTH else text[: WIDTH - 3] + '...'}")
    if len(found) > SHOWN_FINDINGS:
        lines.append(f"           and {len(found) - SHOWN_FINDINGS:,} more, in the table finding")
    return lines


def _growth(report: Report) -> list[str]:
    with Build(report.folder) as build:
        rows = [row for row in averages(build) if row["industry"] == "_T"]
        if not rows:
            return [f"Ready      {_ready(build)}"]
        row = rows[0]
        return [
            f"Ready      {_ready(build)}",
            f"Growth     {row['area']} total, {row['first']}-{row['last']}, % a year: output "
            f"{percent(row['output_growth'])} = capital {percent(row['capital_contribution'])} + labour "
            f"{percent(row['labour_contribution'])} + residual {percent(row['residual_growth'])}",
        ]


def _ready(build: Build) -> str:
    rows = build.rows("select count(*), count(*) filter (where ready) from decomposition_input")[0]
    return f"{rows[1]:,} of {rows[0]:,} rows of decomposition_input have all that a decomposition needs"
