"""Writing a panel: blocks become numbered series and thin figures; keys, formulas and parameters are interned."""

import json
from collections.abc import Iterable, Mapping
from typing import Any, NamedTuple

import duckdb
import numpy as np
import pandas as pd

from keelbook.blocks import (
    DIMS,
    I8,
    OWN_PERIOD,
    Block,
    BlockKey,
    Choice,
    Derivation,
    MethodSet,
    SeriesIndex,
    status_of,
)
from keelbook.contracts.codes import CodeLists
from keelbook.contracts.measures import Measure
from keelbook.contracts.tables import Table
from keelbook.frames import coded
from keelbook.stages.catalogue import FORMULAS
from keelbook.store.append import append

VIEWS = """
create view panel as
select s.area, s.sector, s.industry, s.asset, s.worker_group, cast(f.period as varchar) as time_period,
       s.measure, s.method, s.price_basis, f.value, s.unit, s.unit_mult,
       o.code as obs_status, c.code as conf_status, s.chosen,
       1 - f.imputed_part::double - f.assumed_part::double as observed_part,
       f.imputed_part::double as imputed_part, f.assumed_part::double as assumed_part
from figure f
join series s using (series_id)
join code o on o.list = 'obs_status' and o.position = f.obs_status
join code c on c.list = 'conf_status' and c.position = f.conf_status;
create view method_used as
select s.series_id, p.* from series s join method_set m using (method_set) join parameter p using (parameter_id);
"""


class Writer:
    """Writes the blocks of one area after another into a panel, and keeps the numbers given so far."""

    def __init__(
        self,
        panel: duckdb.DuckDBPyConnection,
        evidence: duckdb.DuckDBPyConnection,
        tables: Mapping[str, Table],
        lists: CodeLists,
        measures: Mapping[str, Measure],
        currency: Mapping[str, str],
    ) -> None:
        self._panel, self._evidence, self._tables = panel, evidence, tables
        self._lists, self._measures, self._currency = lists, measures, currency
        self._series_count = 0
        self._formulas: dict[Derivation, int] = {}
        self._sets: dict[MethodSet, int] = {}
        self._parameters: dict[Choice, int] = {}
        self._suppressed = lists.position("obs_status", "Q")
        self._hidden: set[tuple[str, str]] = set()
        for name in PANEL_TABLES:
            panel.execute(tables[name].create_sql())
        evidence.execute(tables["withheld_figure"].create_sql())

    def write(self, blocks: Iterable[Block]) -> None:
        """Write the series, edges and figures of blocks that belong together; edges point within them."""
        numbered: dict[BlockKey, tuple[Block, int]] = {}
        for block in blocks:
            numbered[block.key] = (block, self._series_count)
            self._series_count += len(block.series)
        if not numbered:
            return
        self.insert("series", self._series(list(numbered.values())))
        edges = [rows for b, at in numbered.values() for rows in _edges(b, at, numbered)]
        if edges:
            self.insert("edge", _edge_frame(edges))
        for block, _ in numbered.values():
            self._hidden |= _hidden_places(block)
        figures = _figures(list(numbered.values()))
        hidden = figures["conf_status"].to_numpy() > 0
        if hidden.any():
            withheld = figures.loc[hidden, ["series_id", "period", "value"]]
            append(self._evidence, self._tables["withheld_figure"], withheld, self._lists)
            figures = figures.copy()
            # What is left of a known opening, over its assumed part, would be the stock.
            figures.loc[hidden, ["value", "imputed_part", "assumed_part"]] = np.nan
            figures.loc[hidden, "obs_status"] = np.int8(self._suppressed)
        self.insert("figure", figures)

    def withheld(self, found: pd.DataFrame) -> pd.DataFrame:
        """Return findings as they may be published: where an area and industry hide a figure, without figures."""
        places = zip(found["area"], found["industry"], strict=True)
        hidden = np.array([place in self._hidden for place in places], bool)
        if not hidden.any():
            return found
        out = found.copy()
        out.loc[hidden, ["found", "expected"]] = WITHHELD
        out.loc[hidden, "message"] = [f"{rule}: {WITHHELD}" for rule in out.loc[hidden, "rule"]]
        return out

    def insert(self, name: str, frame: pd.DataFrame) -> None:
        """Check a frame against the contract of its table and append it to the panel."""
        append(self._panel, self._tables[name], frame, self._lists)

    def finish(self) -> None:
        """Write the tables that describe the figures, and the views."""
        self.insert("formula", self._formula_rows())
        self.insert("derivation", self._derivation_rows())
        sets = [(number, self._parameter(c)) for s, number in self._sets.items() for c in s]
        self.insert("method_set", pd.DataFrame(sets, columns=["method_set", "parameter_id"], dtype="int64"))
        rows = [
            (number, c.name, _as_text(c.value), c.file, c.line, c.citation)
            for c, number in self._parameters.items()
        ]
        self.insert("parameter", _typed(rows, self._tables["parameter"]))
        codes = [
            (name, position, code, self._lists.name(name, code))
            for name in self._lists.rows
            for position, code in enumerate(self._lists.codes(name))
        ]
        self.insert("code", _typed(codes, self._tables["code"]))
        self._panel.execute(VIEWS)

    def _series(self, numbered: list[tuple[Block, int]]) -> pd.DataFrame:
        """Return the rows of `series` of all blocks, text columns as codes over one list of names."""
        blocks = [block for block, _ in numbered]
        table = blocks[0].series.table
        key = np.concatenate([b.series.key for b in blocks])
        joined = SeriesIndex(table, key)
        sizes = [len(b.series) for b in blocks]
        kinds = [self._measures[b.key.measure] for b in blocks]
        columns: dict[str, Any] = {
            "series_id": np.concatenate([np.arange(at, at + len(b.series)) for b, at in numbered]).astype(
                np.int32
            )
        }
        for dim in DIMS:
            columns[dim] = coded(joined.digit(dim), table.codes[dim])
        for i, name in enumerate(("measure", "method", "price_basis")):
            texts = [b.key[i] for b in blocks]
            names = list(dict.fromkeys(texts))
            columns[name] = coded(np.repeat([names.index(text) for text in texts], sizes), names)
        columns["unit"] = self._units(joined, kinds, sizes)
        columns["unit_mult"] = np.repeat([kind.unit_mult for kind in kinds], sizes).astype(np.int8)
        columns["chosen"] = np.concatenate([b.chosen for b in blocks])
        columns["part"] = np.concatenate([b.part for b in blocks])
        columns["formula_id"] = np.concatenate(
            [self._numbers(b.origin.derivations, self._formulas)[b.origin.derivation] for b in blocks]
        )
        for block in blocks:
            for choices in block.origin.sets:
                for choice in choices:
                    self._parameter(choice)
        columns["method_set"] = np.concatenate(
            [self._numbers(b.origin.sets, self._sets)[b.origin.set] for b in blocks]
        )
        return pd.DataFrame(columns)

    def _units(self, series: SeriesIndex, kinds: list[Measure], sizes: list[int]) -> "pd.Categorical[Any]":
        """Return the unit of every series: the currency of its area where the measure is in currency."""
        currencies = [self._currency[area] for area in series.table.codes["area"]]
        names = list(dict.fromkeys([*currencies, *(kind.unit for kind in kinds)]))
        of_area = np.array([names.index(name) for name in currencies])[series.digit("area")]
        of_kind = np.repeat([names.index(kind.unit) for kind in kinds], sizes)
        in_currency = np.repeat([kind.unit == "currency" for kind in kinds], sizes)
        return coded(np.where(in_currency, of_area, of_kind), names)

    @staticmethod
    def _numbers(items: Iterable[Any], known: dict[Any, int]) -> Any:
        return np.array([known.setdefault(item, len(known)) for item in items], np.int32)

    def _parameter(self, choice: Choice) -> int:
        return self._parameters.setdefault(choice, len(self._parameters))

    def _formula_rows(self) -> pd.DataFrame:
        rows = []
        for derivation, number in self._formulas.items():
            formula = FORMULAS[derivation.formula]
            roles = ", ".join(role.name for role in formula.roles)
            rows.append((number, formula.name, formula.equation, formula.citation, roles))
        return _typed(rows, self._tables["formula"])

    def _derivation_rows(self) -> pd.DataFrame:
        rows = []
        for derivation, number in self._formulas.items():
            for position, link in enumerate(derivation.links):
                key = link.input or BlockKey("", "", "")
                project = ";".join(f"{dim}={code}" for dim, code in link.project)
                rows.append((number, position, link.role, *key, link.kind, project, link.shift))
        return _typed(rows, self._tables["derivation"])


WITHHELD = "withheld: figures of this area and industry are confidential; the evidence file has the details"

FIGURE_COLUMNS = (
    "series_id",
    "period",
    "value",
    "obs_status",
    "conf_status",
    "imputed_part",
    "assumed_part",
)

PANEL_TABLES = (
    "series",
    "figure",
    "code",
    "formula",
    "derivation",
    "edge",
    "parameter",
    "method_set",
    "finding",
    "build",
    "stage_run",
    "decomposition_input",
    "decomposition",
)


def _as_text(value: Any) -> str:
    return value if isinstance(value, str) else json.dumps(value)


def _typed(rows: list[tuple[Any, ...]], table: Table) -> pd.DataFrame:
    """Return rows as a frame with the column types of a contract, also when there are none."""
    kinds = {"str": "str", "int": "int64", "float": "float64", "bool": "bool"}
    frame = pd.DataFrame(rows, columns=list(table.column))
    return frame.astype({name: kinds[column.type] for name, column in table.column.items()})


class _EdgeRows(NamedTuple):
    """Edges of one role: numbers of the outputs, their periods or None, numbers and periods of the inputs."""

    role: str
    series: I8
    period: I8 | None
    target: I8
    input_period: I8


def _edges(block: Block, first: int, numbered: Mapping[BlockKey, tuple[Block, int]]) -> list[_EdgeRows]:
    out = []
    for role, edges in block.origin.edges.items():
        target = np.full(len(block.series), -1, np.int64)
        for i, key in enumerate(edges.blocks):
            for number, at in _resolved(key, edges.key, numbered):
                mine = (edges.which == i) & (edges.key >= 0) & (number >= 0) & (target < 0)
                target[mine] = at + number[mine]
        linked = np.flatnonzero(target >= 0)
        period = np.full(len(linked), OWN_PERIOD) if edges.period is None else edges.period[linked]
        out.append(_EdgeRows(role, first + linked, None, target[linked], period))
    fills = block.origin.fills
    if fills is not None and len(fills.column):
        source, at = numbered[fills.block]
        number = at + source.series.locate(block.series.key[fills.column])
        for role, input_period in (("before", fills.before), ("after", fills.after)):
            out.append(_EdgeRows(role, first + fills.column, fills.period, number, input_period))
    return out


def _edge_frame(edges: list[_EdgeRows]) -> pd.DataFrame:
    roles = list(dict.fromkeys(rows.role for rows in edges))
    sizes = [len(rows.series) for rows in edges]
    period = [np.full(len(r.series), OWN_PERIOD) if r.period is None else r.period for r in edges]

    def nullable(values: I8) -> pd.arrays.IntegerArray:
        return pd.arrays.IntegerArray(values.astype(np.int16), np.asarray(values == OWN_PERIOD))

    return pd.DataFrame(
        {
            "series_id": np.concatenate([r.series for r in edges]).astype(np.int32),
            "period": nullable(np.concatenate(period)),
            "role": coded(np.repeat([roles.index(r.role) for r in edges], sizes), roles),
            "input_series_id": np.concatenate([r.target for r in edges]).astype(np.int32),
            "input_period": nullable(np.concatenate([r.input_period for r in edges])),
        }
    )


def _resolved(key: BlockKey, wanted: Any, numbered: Mapping[BlockKey, tuple[Block, int]]) -> Iterable[Any]:
    """Yield positions and first number of the wanted keys, in the block or the chosen series of all methods."""
    for other, (block, at) in numbered.items():
        if other.measure != key.measure or other.price_basis != key.price_basis:
            continue
        if other.method == key.method:
            yield block.series.locate(wanted), at
        elif key.method == "*":
            position = block.series.locate(wanted)
            known = position >= 0
            position[known] = np.where(block.chosen[position[known]], position[known], -1)
            yield position, at


def _hidden_places(block: Block) -> set[tuple[str, str]]:
    """Return the areas and industries of series with a confidential figure."""
    if block.conf is None:
        return set()
    labels = [block.series.table.labels(int(k)) for k in block.series.key[(block.conf > 0).any(axis=0)]]
    return {(label["area"], label["industry"]) for label in labels}


def _figures(numbered: list[tuple[Block, int]]) -> pd.DataFrame:
    """Return the figures of all blocks series by series, so that one series lies together in the file."""
    columns: dict[str, list[Any]] = {name: [] for name in FIGURE_COLUMNS}
    for block, first in numbered:
        status = status_of(block).T
        kept = np.isfinite(block.value.T) | (status >= 0)
        series, period = np.nonzero(kept)
        columns["series_id"].append((first + series).astype(np.int32))
        columns["period"].append((block.periods.start + period).astype(np.int16))
        columns["value"].append(block.value.T[kept])
        columns["obs_status"].append(status[kept])
        for name, values, dtype in (
            ("conf_status", block.conf, np.int8),
            ("imputed_part", block.imputed, np.float32),
            ("assumed_part", block.assumed, np.float32),
        ):
            columns[name].append(
                np.zeros(len(series), dtype) if values is None else values.T[kept].astype(dtype)
            )
    return pd.DataFrame({name: np.concatenate(parts) for name, parts in columns.items()})
