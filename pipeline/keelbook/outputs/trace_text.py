"""A trace as text: the figure, its formula and parameters, its terms, and the way down to the cells."""

from collections.abc import Iterator
from dataclasses import asdict
from typing import Any

from keelbook.audit.reading import Build, Cell
from keelbook.audit.trace import Input, Traced, must_reproduce, rests_on_cells, trace
from keelbook.outputs.text import number, shown

SHOWN_TERMS = 6


def lines(build: Build, traced: Traced, depth: int, every_term: bool = False) -> Iterator[str]:
    """Yield the trace of a figure. Below the first `depth` levels only the largest term is followed to its cell.

    Every figure on the way is re-performed too.

    Raises:
        NotReproduced: a stored figure on the way differs from what its inputs give.
    """
    yield from _figure(build, traced, depth, every_term, "")


def _figure(build: Build, traced: Traced, depth: int, every_term: bool, indent: str) -> Iterator[str]:
    must_reproduce(traced)
    yield f"{indent}{traced.series.label} {traced.year} = {number(traced.stored, 9)} {_unit(traced)}"
    inner = indent + "  "
    yield f"{inner}{traced.equation}   [{traced.formula}]"
    yield f"{inner}source: {traced.citation}"
    for choice in traced.choices:
        yield f"{inner}{choice.name} = {choice.value} ({choice.file}, line {choice.line}; {choice.citation})"
    yield f"{inner}re-performed: {traced.recomputed!r}, stored: {traced.stored!r}"
    ranked = sorted(traced.inputs, key=lambda i: -abs(i.contribution))
    count = len(ranked) if every_term or len(ranked) <= SHOWN_TERMS + 1 else SHOWN_TERMS
    for at, item in enumerate(ranked[:count]):
        yield f"{inner}{_term(item)}"
        follow = depth > 1 or at == 0
        if item.cell is not None:
            yield from _cell(item.cell, inner + "  ")
        elif item.series is not None and not build.has_evidence and rests_on_cells(build, item.series):
            yield f"{inner}  (its source cells are in the evidence file, which is not beside this panel)"
        elif follow and item.series is not None:
            below = trace(build, item.series, int(item.period))
            yield from _figure(build, below, depth - 1, every_term, inner + "  ")
    rest = ranked[count:]
    if rest:
        total = sum(item.contribution for item in rest)
        yield f"{inner}and {len(rest)} more terms that contribute {number(total)} (--all shows them)"


def _term(item: Input) -> str:
    name = item.series.label if item.series is not None else "observation"
    if item.weight == 0 and item.contribution == 0 and item.value != 0:
        return (
            f"{item.role}: {name} {item.period}: {number(item.value, 8)}, read for the weights of the others"
        )
    return (
        f"{item.role}: {name} {item.period}: value {number(item.value, 8)} x weight {number(item.weight)} "
        f"= {number(item.contribution, 8)}"
    )


def _cell(cell: Cell, indent: str) -> Iterator[str]:
    sheet = f", sheet '{shown(cell.sheet)}'" if cell.sheet else ""
    place = address(cell.row, cell.column) if cell.sheet else f"line {cell.row}, column {cell.column}"
    yield (
        f'{indent}{shown(cell.file)}{sheet}, {place}: "{shown(cell.raw)}" '
        f"(source '{cell.source}', status {cell.status}, sha256 {cell.sha256[:12]})"
    )
    made = cell.correction
    if made is not None:
        old = "no figure" if made.old is None else repr(made.old)
        yield (
            f"{indent}corrected from {old} to {made.new!r} by {shown(made.author)} on {made.date}: "
            f"{shown(made.reason)} ({made.file}, line {made.line})"
        )


def _unit(traced: Traced) -> str:
    power = traced.series.unit_mult
    return traced.series.unit if power == 0 else f"{traced.series.unit} x 10^{power}"


def address(row: int, column: int) -> str:
    """Return the A1 address of a cell counted from 1."""
    letters = ""
    while column:
        column, rest = divmod(column - 1, 26)
        letters = chr(65 + rest) + letters
    return f"{letters}{row}"


def as_json(build: Build, traced: Traced, depth: int) -> dict[str, Any]:
    """Return the trace with every term, down `depth` levels, for machines."""
    must_reproduce(traced)
    return {
        "series": {"series_id": traced.series.series_id, **traced.series.key},
        "time_period": str(traced.year),
        "stored": traced.stored,
        "recomputed": traced.recomputed,
        "formula": traced.formula,
        "equation": traced.equation,
        "citation": traced.citation,
        "parameters": [
            {"name": c.name, "value": c.value, "file": c.file, "line": c.line, "citation": c.citation}
            for c in traced.choices
        ],
        "terms": [_term_json(build, item, depth) for item in traced.inputs],
    }


def _term_json(build: Build, item: Input, depth: int) -> dict[str, Any]:
    out: dict[str, Any] = {
        "role": item.role,
        "time_period": item.period,
        "value": item.value,
        "weight": item.weight,
        "contribution": item.contribution,
    }
    if item.series is not None:
        out["series"] = {"series_id": item.series.series_id, **item.series.key}
        if depth > 1 and (build.has_evidence or not rests_on_cells(build, item.series)):
            out["figure"] = as_json(build, trace(build, item.series, int(item.period)), depth - 1)
    if item.cell is not None:
        out["cell"] = {
            "source": item.cell.source,
            "file": item.cell.file,
            "sha256": item.cell.sha256,
            "sheet": item.cell.sheet,
            "row": item.cell.row,
            "column": item.cell.column,
            "address": address(item.cell.row, item.cell.column),
            "raw": item.cell.raw,
            "obs_status": item.cell.status,
            "correction": None if item.cell.correction is None else asdict(item.cell.correction),
        }
    return out
