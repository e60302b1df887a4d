"""Blocks small enough to be worked out by hand: short code lists, series written as texts."""

from dataclasses import replace
from functools import cache
from types import SimpleNamespace
from typing import Any

import numpy as np

from keelbook.assembly import plan
from keelbook.blocks import NO_FIGURE, Block, BlockKey, Choice, CodeTable, Origin, SeriesIndex
from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.parameters import load_parameters
from keelbook.stages.base import Book, Inputs, Stage

TABLE = CodeTable(
    {
        "area": ("XA", "XB"),
        "sector": ("S1", "S11", "S13"),
        "industry": ("_T", "_Z", "A", "C"),
        "asset": ("_T", "_Z", "N11", "N11K", "N112", "N11M", "N113", "N1131"),
        "worker_group": ("_T", "_Z", "SAL", "SELF"),
    }
)

REFERENCE_YEAR = 2011

HIDDEN_RAW, HIDDEN_YEAR = "123.4567", 2010
"""The one confidential figure of the fixture `hidden_build`: investment of industry C in asset N11O."""


def codes(series: str) -> dict[str, str]:
    """Return the five codes of a text such as "industry=A asset=N112"; what is left out does not vary."""
    given = dict(part.split("=") for part in series.split())
    common = {"area": "XA", "sector": "S1", "industry": "_T", "asset": "_Z", "worker_group": "_Z"}
    return {**common, **given}


def number(series: str) -> int:
    return TABLE.key(codes(series))


def index(*series: str) -> SeriesIndex:
    return SeriesIndex(TABLE, np.array(sorted(number(s) for s in series), np.int64))


def block(
    key: str,
    rows: dict[str, list[float]],
    *,
    first: int = 2010,
    chosen: bool = True,
    part: bool = True,
    **marks: dict[str, list[Any]],
) -> Block:
    """Return a block of the key "measure/method/price_basis" from one list of figures a series.

    marks: `status`, `conf`, `imputed` or `assumed`, each from a series to its list.
    """
    series = index(*rows)
    order = sorted(rows, key=number)
    value = np.array([rows[s] for s in order], float).T
    n = len(series)
    types = {"status": np.int8, "conf": np.int8, "imputed": np.float32, "assumed": np.float32}
    extra = {}
    for name, given in marks.items():
        full = np.zeros(value.shape, types[name])
        if name == "status":
            full[np.isnan(value)] = NO_FIGURE
        for s, listed in given.items():
            full[:, order.index(s)] = listed
        extra[name] = full
    return Block(
        key=BlockKey(*key.split("/")),
        series=series,
        periods=range(first, first + len(value)),
        value=value,
        origin=Origin((), np.zeros(n, np.int32), ((),), np.zeros(n, np.int32)),
        chosen=np.full(n, chosen),
        part=np.full(n, part),
        **extra,
    )


def column(block: Block | None, series: str, name: str = "value") -> Any:
    """Return what a block holds for one series, over its periods."""
    assert block is not None
    at = int(block.series.locate(np.array([number(series)]))[0])
    assert at >= 0, f"{block.key} has no series {series}"
    return getattr(block, name)[:, at]


def holds(block: Block, series: str) -> bool:
    return bool(block.series.locate(np.array([number(series)]))[0] >= 0)


def choice(name: str, value: Any) -> Choice:
    return Choice(name, value, "rules/test.toml", 1, "made up for a test")


@cache
def _assembly() -> Any:
    """Return as much of an assembly as the plan reads: no rules of its own, and two sources."""
    yearly = SimpleNamespace(name="yearly", annual_rate=False)
    rates = SimpleNamespace(name="rates", annual_rate=True)
    return SimpleNamespace(
        folder=None,
        lists=load_code_lists(),
        reference_year=REFERENCE_YEAR,
        lines={("reference_year",): 4},
        sources=(yearly, rates),
        line_of={"yearly": 10, "rates": 20}.get,
        rule_overrides=(),
    )


def params(stage: str, **changes: Any) -> Any:
    """Return the parameters of a stage by the shipped rules, with some values changed."""
    if stage == "harmonise":
        shipped: Any = plan.harmonise_params(_assembly(), load_parameters())
    else:
        shipped = plan.stage_params(_assembly(), load_parameters())[stage]
    for name, value in changes.items():
        old = getattr(shipped, name)
        shipped = replace(shipped, **{name: replace(old, value=value) if isinstance(old, Choice) else value})
    return shipped


def run_stage(stage: Stage[Any], params: Any, *blocks: Block) -> tuple[Book, list[dict[str, Any]]]:
    """Run a stage on some blocks; return what it gave, and its findings."""
    result = stage.run(Inputs(Book(blocks), stage.needs, stage.optional), params)
    assert {b.key for b in result.blocks} <= stage.gives
    return Book(result.blocks), [dict(f) for f in result.findings]


def get(book: Book, key: str) -> Block:
    found = book.get(BlockKey(*key.split("/")))
    assert found is not None, f"no {key} among {book.keys()}"
    return found


def rules_of(findings: list[dict[str, Any]]) -> list[str]:
    return [str(f["rule"]) for f in findings]
