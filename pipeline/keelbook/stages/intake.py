"""Intake: files as received become source cells and observations in declared units. No figure is changed.

The connection must allow the source files to be read (`allowed_paths`); see `source_paths`.
"""

import hashlib
from collections.abc import Callable, Iterable, Mapping, Sequence, Set
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import duckdb
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from keelbook import findings as finding_frames
from keelbook.contracts.codes import DIMS
from keelbook.errors import DeclarationError, Problem, SourceMissing
from keelbook.readers import csv_file, excel
from keelbook.readers.numbers import NumberFormat, split_footnote
from keelbook.readers.periods import expected_period, parse_period
from keelbook.readers.place import Place
from keelbook.readers.staging import TABLE, Reading, Staged, TextColumn, read_staged
from keelbook.stages import corrections

if TYPE_CHECKING:
    from keelbook.assembly.declaration import Assembly, Source
    from keelbook.contracts.codes import CodeLists
    from keelbook.contracts.judgements import Correction, Entry
    from keelbook.contracts.measures import Measure

MISSING_STATUSES = frozenset("HLMOQ")
"""CL_OBS_STATUS codes of an observation that has no figure."""

_KEY_ROLES = (*DIMS, "measure", "time_period")

_LISTED_FINDINGS = 1000
"""Rejected cells of one source and rule that get a finding each; `rejected_cell` always holds all."""

_EXPECTED = {
    "unreadable_number": "a figure in the declared form, or a declared missing mark",
    "unreadable_status": "a code of the status list, or a mark declared for it",
    "ragged_row": "as many fields as the header has",
}
_REMEDY = {
    "unreadable_number": "have the cell corrected, or declare its mark under marks",
    "unreadable_period": "have the period corrected, or correct the declared frequency",
    "unreadable_status": "have the mark corrected, or declare it under marks.flags",
    "ragged_row": "have the row corrected; look for an unquoted delimiter",
}


@dataclass(frozen=True)
class Intake:
    """What came in.

    `observations`: one row per observation, with or without a figure; texts are categories whose codes,
    below the length of the code list, are positions in it. `counts`: per source, cells = observations +
    rejected + missing. `corrections`: the table `correction` (see stages/corrections.py).
    """

    observations: pd.DataFrame
    findings: pd.DataFrame
    sources: pd.DataFrame
    counts: pd.DataFrame
    corrections: pd.DataFrame


@dataclass(frozen=True, eq=False)
class _Taken:
    """One source after reading: its observations' columns, texts still with their own labels."""

    texts: Mapping[str, TextColumn]
    arrays: Mapping[str, NDArray[Any]]


def source_paths(assembly: "Assembly") -> dict[str, Path]:
    """Return source name -> resolved path of its file.

    Raises:
        DeclarationError: a path leads out of the assembly folder once its links are resolved.
        SourceMissing: one or more files are not there; all are named.
    """
    base = assembly.folder.resolve()
    paths: dict[str, Path] = {}
    escaping: list[Problem] = []
    missing: list[Problem] = []
    for source in assembly.sources:
        path = (base / source.file).resolve()
        line = f"line {assembly.line_of(source.name)}"
        if not path.is_relative_to(base):
            escaping.append(
                Problem(
                    f"source '{source.name}' leads out of the assembly folder",
                    "assembly.toml",
                    line,
                    found=source.file,
                    expected="a file inside the folder",
                    remedy="copy the file into sources/",
                )
            )
        elif not path.is_file():
            missing.append(
                Problem(
                    f"the file of source '{source.name}' is not there",
                    "assembly.toml",
                    line,
                    found=source.file,
                    expected="a readable file",
                    remedy="wait for the delivery and run again, or correct the name",
                )
            )
        paths[source.name] = path
    if escaping:
        raise DeclarationError(escaping)
    if missing:
        raise SourceMissing(missing)
    return paths


def take_in(
    con: duckdb.DuckDBPyConnection,
    assembly: "Assembly",
    lists: "CodeLists",
    measures: Mapping[str, "Measure"],
    *,
    progress: Callable[[str], None] | None = None,
) -> Intake:
    """Read every declared source into `source_file`, `source_cell` and `rejected_cell`, and return the rest.

    A source that cannot be read gives findings and does not keep the others from being read. The assembly's
    corrections are applied to what was read, before a cell is rejected for its figure.

    Raises:
        DeclarationError, SourceMissing: see `source_paths`; a correction means no figure, several, or one that is
            not as it expects (all such corrections are named).
        RuntimeError: cells in differ from observations + rejected + missing (a fault of this program).
    """
    paths = source_paths(assembly)
    if not con.execute("select current_setting('preserve_insertion_order')").fetchall()[0][0]:
        raise RuntimeError("row numbers need preserve_insertion_order")
    files = _source_files(con, assembly, paths)
    taken: list[_Taken] = []
    found: list[pd.DataFrame] = []
    counts: list[dict[str, Any]] = []
    hits: list[corrections.Hit] = []
    unread: set[str] = set()
    next_cell = 0
    for file_id, source in enumerate(assembly.sources):
        if progress is not None:
            progress(f"reading {source.name} ({source.file})")
        place = Place(
            source.name,
            source.file,
            f"assembly.toml, line {assembly.line_of(source.name)}",
            source.excel.sheet if source.excel is not None else "",
        )
        staged, form, stops = _stage(con, paths[source.name], source, place)
        found.append(finding_frames.frame(stops))
        count = {"source": source.name, "cells": 0, "observations": 0, "rejected": 0, "missing": 0}
        if staged is not None:
            reading = read_staged(con, staged, form, lists.codes("obs_status"), file_id, next_cell)
            con.execute(f"drop table {TABLE}")
            part, faults = _observe(reading, source, lists, file_id, next_cell)
            part = _with_defaults(part, source, assembly, measures)
            if assembly.corrections:
                part, faults, own = _corrected(con, part, faults, source, assembly.corrections, lists)
                hits += own
            part = _without(part, faults)
            found.append(_reject(con, faults, reading, source, place, next_cell))
            taken.append(part)
            count |= _count(con, file_id, part)
            if not len(reading.value):
                found.append(finding_frames.frame([_no_cells(place)]))
            next_cell += len(reading.value)
        else:
            unread.add(source.name)
        counts.append(count)
    wrong = corrections.problems(assembly.corrections, hits, unread)
    if wrong:
        raise DeclarationError(wrong)
    return Intake(
        _stack(taken, assembly, lists, measures),
        finding_frames.concat(found),
        files,
        pd.DataFrame(counts, columns=["source", "cells", "observations", "rejected", "missing"]),
        corrections.rows(assembly.corrections, hits),
    )


def _corrected(
    con: duckdb.DuckDBPyConnection,
    part: _Taken,
    faults: dict[int, tuple[str, str]],
    source: "Source",
    entries: "Sequence[Entry[Correction]]",
    lists: "CodeLists",
) -> tuple[_Taken, dict[int, tuple[str, str]], list[corrections.Hit]]:
    file = source.file if source.excel is None else f"{source.file}, sheet '{source.excel.sheet}'"
    cells = corrections.Cells(source.name, source.frequency, file, part.texts, part.arrays, faults)
    where = corrections.located(cells, entries)
    if not where:
        return part, faults, []
    meant = pd.DataFrame(
        {"cell_id": part.arrays["cell_id"][[at for found in where.values() for at in found]]}
    )
    con.register("meant", meant)
    raw = dict(con.execute("select cell_id, raw from source_cell semi join meant using (cell_id)").fetchall())
    con.unregister("meant")
    statuses = corrections.Statuses(lists.codes("obs_status"), MISSING_STATUSES)
    cells, hits = corrections.correct(cells, entries, where, raw, statuses)
    return _Taken(cells.texts, cells.arrays), dict(cells.faults), hits


def _without(part: _Taken, faults: Mapping[int, tuple[str, str]]) -> _Taken:
    """Return the cells that are not refused."""
    if not faults:
        return part
    keep = np.ones(len(part.arrays["value"]), dtype=bool)
    keep[list(faults)] = False
    return _Taken(
        {role: TextColumn(column.labels, column.codes[keep]) for role, column in part.texts.items()},
        {name: array[keep] for name, array in part.arrays.items()},
    )


def _no_cells(place: Place) -> dict[str, Any]:
    return place.finding(
        "unreadable_source",
        "no record follows the header",
        found="no figure",
        expected="at least one",
        remedy=f"obtain the file again, or remove the source ({place.declared})",
    )


def _stage(
    con: duckdb.DuckDBPyConnection, path: Path, source: "Source", place: Place
) -> tuple[Staged | None, NumberFormat, list[dict[str, Any]]]:
    if source.csv is not None:
        form = csv_file.number_format(source.csv, source.marks)
        staged, stops = csv_file.stage_csv(con, path, source, source.csv, place)
        return staged, form, stops
    if source.excel is not None:
        form = excel.number_format(source.marks)
        staged, stops = excel.stage_excel(con, path, source, source.excel, place)
        return staged, form, stops
    raise RuntimeError(f"source '{source.name}' has no file format")


def _source_files(
    con: duckdb.DuckDBPyConnection, assembly: "Assembly", paths: Mapping[str, Path]
) -> pd.DataFrame:
    hashes: dict[Path, str] = {}
    rows = []
    for file_id, source in enumerate(assembly.sources):
        path = paths[source.name]
        if path not in hashes:
            with path.open("rb") as file:
                hashes[path] = hashlib.file_digest(file, "sha256").hexdigest()
        rows.append((file_id, source.name, source.file, hashes[path], path.stat().st_size))
    frame = pd.DataFrame(rows, columns=["file_id", "source", "file", "sha256", "size"])
    con.register("source_file_rows", frame)
    con.execute("insert into source_file by name select * from source_file_rows")
    con.unregister("source_file_rows")
    return frame


def _observe(
    reading: Reading, source: "Source", lists: "CodeLists", file_id: int, first_cell: int
) -> tuple[_Taken, dict[int, tuple[str, str]]]:
    """Give every cell its period, status and labels, and say why some of them are not usable."""
    size = len(reading.value)
    faults = dict(reading.faults)

    def refuse(bad: NDArray[np.bool_], rule: str, reason: Callable[[int], str]) -> None:
        for at in np.flatnonzero(bad).tolist():
            faults.setdefault(at, (rule, reason(at)))

    periods = reading.texts["time_period"]
    parsed = [parse_period(label, source.frequency) for label in periods.labels]
    period = np.array([-1 if at is None else at for at in parsed], dtype=np.int32)[periods.codes]
    refuse(
        period < 0,
        "unreadable_period",
        lambda at: (
            f"the period '{periods.labels[periods.codes[at]]}' is not {expected_period(source.frequency)}"
        ),
    )

    statuses = lists.codes("obs_status")
    normal = statuses.index("A")
    status = np.where(reading.mark >= 0, reading.mark, normal).astype(np.int8)
    without = np.isnan(reading.value)
    missing = np.isin(np.arange(len(statuses)), [statuses.index(code) for code in MISSING_STATUSES])
    if "obs_status" in reading.texts:
        column = reading.texts["obs_status"]
        given = _positions(column, statuses, source.marks.flags)
        said = given >= 0
        refuse(given == -2, "unreadable_status", lambda at: _unknown_mark(column, at))
        refuse(
            said & ~without & (reading.mark >= 0) & (given != reading.mark),
            "unreadable_status",
            lambda at: f"the cell says {statuses[reading.mark[at]]}, the status column {statuses[given[at]]}",
        )
        status = np.where(said & (~without | missing[given]), given, status).astype(np.int8)
    refuse(
        ~without & missing[status],
        "unreadable_status",
        lambda at: f"a figure under the status {statuses[status[at]]}, which means there is none",
    )

    free = lists.codes("conf_status")
    conf = np.full(size, free.index("F"), dtype=np.int8)
    if "conf_status" in reading.texts:
        column = reading.texts["conf_status"]
        given = _positions(column, free, {})
        refuse(given == -2, "unreadable_status", lambda at: _unknown_mark(column, at))
        conf = np.where(given >= 0, given, conf).astype(np.int8)

    labels = {
        role: TextColumn(_codes_of(column.labels, role, source), column.codes)
        for role, column in reading.texts.items()
        if role in (*DIMS, "measure")
    }
    arrays: dict[str, NDArray[Any]] = {
        "period": period,
        "value": reading.value,
        "obs_status": status,
        "conf_status": conf,
        "cell_id": np.arange(first_cell, first_cell + size, dtype=np.int64),
        "file_id": np.full(size, file_id, dtype=np.int16),
        "unit_mult": np.full(size, source.unit_mult, dtype=np.int8),
        "row": reading.row,
        "column": reading.column,
    }
    return _Taken(labels, arrays), faults


def _unknown_mark(column: TextColumn, at: int) -> str:
    return f"the status '{column.labels[column.codes[at]]}' is not in the list"


def _positions(column: TextColumn, codes: Sequence[str], mapped: Mapping[str, str]) -> NDArray[np.int8]:
    """Return per cell the position in the list, -1 where the cell is empty, -2 where its text is unknown."""
    by_label = {code: at for at, code in enumerate(codes)}
    by_label |= {label: by_label[code] for label, code in mapped.items()}
    found = [-1 if not label.strip() else by_label.get(label.strip(), -2) for label in column.labels]
    return np.array(found, dtype=np.int8)[column.codes]


def _codes_of(labels: Iterable[str], role: str, source: "Source") -> tuple[str, ...]:
    """Map labels as delivered to codes. A label that is neither declared nor a code stays as it is."""
    declared = {str(name): mapped for name, mapped in source.codes.items()}.get(role, {})
    out = []
    for label in labels:
        stripped = " ".join(label.split())
        bare = " ".join(split_footnote(stripped)[0].split())
        out.append(next((declared[text] for text in (label, stripped, bare) if text in declared), bare))
    return tuple(out)


def _with_defaults(
    part: _Taken, source: "Source", assembly: "Assembly", measures: Mapping[str, "Measure"]
) -> _Taken:
    """Add what the source gives once for all its cells, and the defaults of dimensions it does not give."""
    size = len(part.arrays["value"])

    def constant(code: str) -> TextColumn:
        return TextColumn((code,), np.zeros(size, dtype=np.int32))

    texts = {
        **part.texts,
        "source": constant(source.name),
        "price_basis": constant(source.price_basis),
        "frequency": constant(source.frequency),
    }
    if "measure" not in texts:
        texts["measure"] = constant(source.measure or "")
    measure = texts["measure"]
    for dim in DIMS:
        defaults = [measures[name].default(dim) if name in measures else "_T" for name in measure.labels]
        if dim in texts:
            texts[dim] = _without_blanks(texts[dim], measure, [code == "_Z" for code in defaults])
        elif dim in source.fixed:
            texts[dim] = constant(source.fixed[dim])
        elif dim == "area":
            texts[dim] = constant(source.area or assembly.area)
        else:
            texts[dim] = TextColumn(tuple(code or "_T" for code in defaults), measure.codes)
    return _Taken(texts, part.arrays)


def _without_blanks(column: TextColumn, measure: TextColumn, inapplicable: Sequence[bool]) -> TextColumn:
    """Read an empty label as `_Z` where the dimension does not apply to the measure of the row."""
    if "" not in column.labels or not any(inapplicable):
        return column
    empty = np.array([label == "" for label in column.labels])[column.codes]
    blank = empty & np.array(inapplicable)[measure.codes]
    return TextColumn((*column.labels, "_Z"), np.where(blank, len(column.labels), column.codes))


def _reject(
    con: duckdb.DuckDBPyConnection,
    faults: Mapping[int, tuple[str, str]],
    reading: Reading,
    source: "Source",
    place: Place,
    first_cell: int,
) -> pd.DataFrame:
    """Store the refused cells with their reasons and return their findings, in file order."""
    if not faults:
        return finding_frames.frame()
    at = np.array(sorted(faults), dtype=np.int64)
    rows = pd.DataFrame(
        {
            "cell_id": at + first_cell,
            "rule": [faults[i][0] for i in at.tolist()],
            "reason": [faults[i][1] for i in at.tolist()],
        }
    )
    con.register("refused", rows)
    con.execute(
        'insert into rejected_cell (file_id, sheet, "row", "column", raw, reason, source) '
        'select c.file_id, c.sheet, c."row", c."column", c.raw, r.reason, ? '
        "from refused r join source_cell c using (cell_id) order by cell_id",
        [source.name],
    )
    rank = rows.groupby("rule").cumcount()
    con.register("refused", rows[rank < _LISTED_FINDINGS])
    listed = con.execute(
        'select r.cell_id, r.rule, r.reason, c."row", c."column", c.raw '
        "from refused r join source_cell c using (cell_id) order by r.cell_id"
    ).fetchall()
    con.unregister("refused")
    out = [
        place.finding(
            rule,
            reason,
            row=row,
            column=column,
            found=f"'{raw}'",
            expected=_expected(rule, source),
            remedy=f"{_REMEDY[rule]} ({place.declared})",
            **_known(reading, source, cell_id - first_cell),
        )
        for cell_id, rule, reason, row, column, raw in listed
    ]
    for rule, total in rows["rule"].value_counts(sort=False).items():
        if total > _LISTED_FINDINGS:
            out.append(
                place.finding(
                    str(rule),
                    f"{total - _LISTED_FINDINGS} more cells were refused for this rule",
                    found=f"{total} cells in all",
                    expected=_expected(str(rule), source),
                    remedy=f"the table rejected_cell lists them; {_REMEDY[str(rule)]} ({place.declared})",
                )
            )
    return finding_frames.frame(out)


def _expected(rule: str, source: "Source") -> str:
    return expected_period(source.frequency) if rule == "unreadable_period" else _EXPECTED[rule]


def _known(reading: Reading, source: "Source", at: int) -> dict[str, str]:
    """Return what is known of the refused cell's key, labels as delivered."""
    said = {role: column.labels[column.codes[at]] for role, column in reading.texts.items()}
    return {"measure": source.measure or "", **{role: said[role] for role in _KEY_ROLES if role in said}}


def _count(con: duckdb.DuckDBPyConnection, file_id: int, part: _Taken) -> dict[str, int]:
    """Count a source from both sides: cells and rejections as stored, observations as returned."""
    cells = con.execute("select count(*) from source_cell where file_id = ?", [file_id]).fetchall()[0][0]
    rejected = con.execute("select count(*) from rejected_cell where file_id = ?", [file_id]).fetchall()[0][0]
    missing = int(np.isnan(part.arrays["value"]).sum())
    observations = len(part.arrays["value"]) - missing
    if cells != observations + rejected + missing:
        raise RuntimeError(
            f"{cells} cells in, but {observations} observations + {rejected} rejected + {missing} missing"
        )
    return {"cells": cells, "observations": observations, "rejected": rejected, "missing": missing}


def _stack(
    taken: Sequence[_Taken], assembly: "Assembly", lists: "CodeLists", measures: Mapping[str, "Measure"]
) -> pd.DataFrame:
    """Put the sources on common category tables and one below the other."""
    bases = dict.fromkeys(basis for measure in measures.values() for basis in measure.price_bases)
    listed: dict[str, Sequence[str]] = {
        "source": [source.name for source in assembly.sources],
        **{dim: lists.codes(dim) for dim in DIMS},
        "measure": list(measures),
        "price_basis": list(bases),
        "frequency": lists.codes("freq"),
    }
    sizes = [len(part.arrays["value"]) for part in taken]
    ends = np.cumsum([0, *sizes])
    columns: dict[str, Any] = {}
    for name, codes in listed.items():
        known = set(codes)
        unknown = dict.fromkeys(label for part in taken for label in _unknown_labels(part.texts[name], known))
        categories = [*codes, *unknown]
        position = {label: at for at, label in enumerate(categories)}
        joined = np.empty(ends[-1], dtype=_code_type(len(categories)))
        for part, start, end in zip(taken, ends[:-1], ends[1:], strict=True):
            column = part.texts[name]
            own = np.array([position.get(label, -1) for label in column.labels], dtype=joined.dtype)
            joined[start:end] = own[column.codes] if len(own) > 1 else own[0]
        columns[name] = pd.Categorical.from_codes(
            joined, dtype=pd.CategoricalDtype(categories), validate=False
        )
    types = {
        "period": np.int32, "value": np.float64, "obs_status": np.int8, "conf_status": np.int8,
        "unit_mult": np.int8, "cell_id": np.int64, "file_id": np.int16, "row": np.int32, "column": np.int16,
    }  # fmt: skip
    for name, dtype in types.items():
        joined = np.empty(ends[-1], dtype=dtype)
        for part, start, end in zip(taken, ends[:-1], ends[1:], strict=True):
            joined[start:end] = part.arrays[name]
        columns[name] = joined
    return pd.DataFrame(columns, copy=False)


def _unknown_labels(column: TextColumn, known: Set[str]) -> list[str]:
    """Return the labels of a column that are not known and stand in at least one cell."""
    unknown = [at for at, label in enumerate(column.labels) if label not in known]
    uses = np.bincount(column.codes, minlength=len(column.labels)) if unknown else ()
    return [column.labels[at] for at in unknown if uses[at]]


def _code_type(count: int) -> type[np.signedinteger[Any]]:
    return np.int8 if count < 128 else np.int16 if count < 32768 else np.int32
