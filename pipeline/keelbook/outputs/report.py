"""The report: one page that stands alone, made from the published panel, the same bytes for the same build."""

import json
import os
from collections.abc import Sequence
from dataclasses import dataclass
from importlib import resources
from pathlib import Path
from typing import Any

import jinja2

from keelbook.errors import DeclarationError, Problem, did_you_mean
from keelbook.findings import SEVERITIES
from keelbook.outputs.published import Panel
from keelbook.outputs.report_figures import section
from keelbook.outputs.text import plural, shown
from keelbook.outputs.trace_text import address

FINDINGS = 20
"""Findings shown; all are counted."""


@dataclass(frozen=True)
class Written:
    """What was written: the file, the build it shows, the areas and the sector on the page."""

    file: Path
    build_id: str
    areas: Sequence[str]
    sector: str


def write_report(place: Path, out: Path, areas: Sequence[str] = (), sector: str | None = None) -> Written:
    """Write the report of the build at `place` to the file `out`, whole or not at all.

    Args:
        areas: codes of the areas to show, the first of the panel if none is named.
        sector: code of the sector to show; the total economy if it has series, else the first.

    Raises:
        DeclarationError: no build there; an area or sector that the panel does not have; `out` is not an .html
            file in an existing folder.
    """
    _refuse_target(out)
    with Panel(place) as panel:
        known = panel.codes("area")
        wanted = [_known("area", code, known) for code in dict.fromkeys(areas)] or known[:1]
        sectors = panel.codes("sector")
        chosen = _known("sector", sector, sectors) if sector else next(iter(sectors), "S1")
        text = render(panel, wanted, chosen)
        written = Written(out, panel.facts["build_id"], wanted, chosen)
    temporary = out.with_name(f".{out.name}.{os.getpid()}")
    temporary.write_text(text, encoding="utf-8")
    os.replace(temporary, out)
    return written


def render(panel: Panel, areas: Sequence[str], sector: str) -> str:
    """Return the page for some areas and one sector of a panel."""
    environment = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    environment.filters["shown"] = shown
    source = resources.files("keelbook.outputs").joinpath("report_template.html").read_text(encoding="utf-8")
    counts = dict(panel.rows("select severity, count(*) from finding group by severity"))
    return environment.from_string(source).render(
        facts=panel.facts,
        sections=[section(panel, area, sector, i) for i, area in enumerate(areas, 1)],
        areas=areas,
        other_areas=[code for code in panel.codes("area") if code not in areas],
        other_sectors=[code for code in panel.codes("sector") if code != sector],
        counts=", ".join(f"{counts.get(name, 0):,} {name}" for name in SEVERITIES),
        findings=_findings(panel),
        more=max(sum(counts.values()) - FINDINGS, 0),
        choices=_choices(panel),
        profiles=_profiles(panel),
        conversions=_conversions(panel),
        plural=plural,
    )


def _refuse_target(out: Path) -> None:
    if out.suffix.lower() not in (".html", ".htm") or not out.parent.is_dir() or out.is_dir():
        raise DeclarationError(
            Problem(
                "the report cannot be written there",
                str(out),
                expected="the name of an .html file in a folder that is there",
                remedy="give another --out, or make the folder first",
            )
        )


def _known(name: str, code: str, codes: Sequence[str]) -> str:
    if code in codes:
        return code
    raise DeclarationError(
        Problem(
            f"the panel has no {name} '{code}'",
            found=code,
            expected=f"one of {', '.join(codes)}",
            remedy=did_you_mean(code, codes) or f"choose another --{name}",
        )
    )


def _findings(panel: Panel) -> list[dict[str, str]]:
    """Return the first findings, gravest first, with place and remedy. What was found stays in the panel."""
    names = (
        "severity", "rule", "message", "file", "sheet", "row", "column",
        "measure", "area", "sector", "industry", "asset", "worker_group", "time_period", "remedy",
        "accepted_by", "accepted_on", "accepted_reason",
    )  # fmt: skip
    columns = ", ".join(f'"{name}"' for name in names)
    rows = panel.rows(
        f"select {columns} from finding order by list_position(?, severity), finding_id limit {FINDINGS}",
        (list(SEVERITIES),),
    )
    out = []
    for row in rows:
        held = dict(zip(names, row, strict=True))
        key = [held[name] for name in names[7:14] if held[name] not in ("", "_T", "_Z")]
        out.append(
            {
                "severity": held["severity"],
                "rule": held["rule"],
                "message": held["message"],
                "where": _where(held),
                "key": " / ".join(key),
                "remedy": held["remedy"],
                "accepted": (
                    f"accepted by {held['accepted_by']} on {held['accepted_on']}: {held['accepted_reason']}"
                    if held["accepted_by"]
                    else ""
                ),
            }
        )
    return out


def _where(held: dict[str, Any]) -> str:
    parts = [held["file"]]
    if held["sheet"]:
        parts.append(f"sheet '{held['sheet']}'")
    if held["row"] is not None and held["column"] is not None:
        cell = address(held["row"], held["column"])
        parts.append(f"cell {cell}" if held["sheet"] else f"line {held['row']}, column {held['column']}")
    elif held["row"] is not None:
        parts.append(f"row {held['row']}" if held["sheet"] else f"line {held['row']}")
    return ", ".join(part for part in parts if part)


def _choices(panel: Panel) -> list[dict[str, str]]:
    """Return the parameters that are choices of method: all but asset profiles and conversions of units."""
    rows = panel.rows(
        "select name, setting, file, line, citation from parameter where "
        "not starts_with(name, 'asset.') and not starts_with(name, 'source.') and not starts_with(name, 'measure.') "
        "order by name, parameter_id"
    )
    return [_parameter(*row) for row in rows]


def _profiles(panel: Panel) -> list[dict[str, str]]:
    """Return the asset profiles used, one a row of the rule file, with the assets and industries they serve."""
    rows = panel.rows(
        """
        with used as (
            select m.parameter_id, string_agg(distinct s.asset, ' ' order by s.asset) as assets,
                   string_agg(distinct s.industry, ' ' order by s.industry) as industries
            from method_used m join series s using (series_id)
            where starts_with(m.name, 'asset.') and s.asset not in ('_T', '_Z')
            group by m.parameter_id
        )
        select p.file, p.line, p.citation, max(u.assets), max(u.industries),
               string_agg(substr(p.name, 7) || ' ' || p.setting, ', ' order by p.parameter_id)
        from parameter p left join used u using (parameter_id) where starts_with(p.name, 'asset.')
        group by p.file, p.line, p.citation order by max(u.assets), p.file, p.line
        """
    )
    return [
        {
            "assets": assets or "",
            "industries": industries or "",
            "setting": setting.replace("_", " "),
            "citation": citation,
            "where": f"{file}, line {line}",
        }
        for file, line, citation, assets, industries, setting in rows
    ]


def _conversions(panel: Panel) -> list[dict[str, str]]:
    rows = panel.rows(
        "select name, setting, file, line, citation from parameter "
        "where starts_with(name, 'source.') or starts_with(name, 'measure.') order by name, file, line"
    )
    return [_parameter(*row) for row in rows]


def _parameter(name: str, setting: str, file: str, line: int, citation: str) -> dict[str, str]:
    try:
        value = json.loads(setting)
    except json.JSONDecodeError:
        value = setting
    words = ", then ".join(str(one) for one in value) if isinstance(value, list) else setting
    where = f"{file}, line {line}" if line else file
    return {"name": name, "setting": words.replace("_", " "), "citation": citation, "where": where}
