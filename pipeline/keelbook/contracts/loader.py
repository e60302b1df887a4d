"""The one strict way into `schemas/`, `rules/` and an assembly: every fault at once, each with its line."""

import csv
import io
import json
import tomllib
import types
import typing
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError
from pydantic_core import ErrorDetails, PydanticCustomError

from keelbook.contracts.toml_lines import lines_of
from keelbook.errors import DeclarationError, Problem, did_you_mean


class Declared(BaseModel):
    """Base of every declaration: unknown keys refused, nothing changed after loading, no inf or nan."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


M = TypeVar("M", bound=BaseModel)

Place = tuple[str | int, ...]


def fault(
    what: str, *, at: Place = (), found: str = "", expected: str = "", remedy: str = ""
) -> PydanticCustomError:
    """Return an error for a validator of a declaration to raise; `at` points below the validated value."""
    context = {"what": what, "at": list(at), "found": found, "expected": expected, "remedy": remedy}
    return PydanticCustomError("declaration", "{what}", context)


def faults(found: Sequence[PydanticCustomError]) -> PydanticCustomError:
    """Return one error that carries several, for a validator that checks many things."""
    return PydanticCustomError("declarations", "several", {"all": [one.context for one in found]})


def read_text(path: Path) -> str:
    """Return a declaration's text (UTF-8, a byte-order mark is dropped).

    Raises:
        DeclarationError: the file is not there, or is not UTF-8 (the line is named).
    """
    try:
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise DeclarationError(Problem("file not found", file=str(path), remedy="check the name")) from None
    except UnicodeDecodeError as error:
        line = error.object.count(b"\n", 0, error.start) + 1
        raise DeclarationError(
            Problem(
                "not a UTF-8 text",
                file=str(path),
                place=f"line {line}",
                found=f"byte 0x{error.object[error.start]:02x}",
                expected="UTF-8",
                remedy="save the file as UTF-8",
            )
        ) from None


def parse_toml(path: Path) -> tuple[dict[str, Any], dict[Place, int]]:
    """Return the data of a TOML file and the line of each key path.

    Raises:
        DeclarationError: not found, not UTF-8, or not TOML (with the line).
    """
    text = read_text(path)
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        message, _, where = str(error).partition(" (at ")
        line = where.partition(",")[0] if where.startswith("line") else f"line {text.count(chr(10)) + 1}"
        raise DeclarationError(
            Problem(message, file=str(path), place=line, expected="valid TOML", remedy="correct this line")
        ) from None
    return data, lines_of(text)


def load_toml(path: Path, model: type[M], context: Mapping[str, Any] | None = None) -> M:
    """Read a TOML file into `model` (types as written: a text is not a number).

    Args:
        path: the file.
        model: a `Declared` model.
        context: handed to the model's validators (`info.context`).

    Raises:
        DeclarationError: every fault found, each with line, expectation and the nearest valid name.
    """
    data, lines = parse_toml(path)
    return validate(data, lines, path, model, context)


def validate(
    data: dict[str, Any],
    lines: Mapping[Place, int],
    path: Path,
    model: type[M],
    context: Mapping[str, Any] | None = None,
) -> M:
    """Validate parsed TOML; see `load_toml`. Unknown keys do not hide faults found only without them."""
    problems: dict[tuple[Place, str], Problem] = {}
    while True:
        try:
            loaded = model.model_validate_json(json.dumps(data, default=str), strict=True, context=context)
        except ValidationError as error:
            details = error.errors(include_url=False)
        else:
            if problems:
                raise DeclarationError(_in_line_order(problems.values()))
            return loaded
        for detail in details:
            for problem_place, problem in _problems(detail, data, lines, path, model):
                problems.setdefault((problem_place, problem.what), problem)
        unknown = [
            detail["loc"]
            for detail in details
            if detail["type"] == "extra_forbidden" or detail["loc"][-1:] == ("[key]",)
        ]
        if not unknown:
            raise DeclarationError(_in_line_order(problems.values()))
        data = _without(data, {_real_place(loc, data) for loc in unknown})


def load_csv_rows(
    path: Path, row_model: type[M], key: Sequence[str] = (), context: Mapping[str, Any] | None = None
) -> list[M]:
    """Read a comma-separated rule file, one `row_model` a row.

    Column names are the model's field names; an optional field's column may be absent; an empty cell is an
    absent value. A field `line` of the model is not a column: it receives the row's line number.

    Args:
        path: the file (UTF-8).
        row_model: a `Declared` model.
        key: fields that together may occur once.
        context: handed to the model's validators.

    Raises:
        DeclarationError: every fault found, each with its line.
    """
    reader = csv.reader(io.StringIO(read_text(path), newline=""), strict=True)
    problems: list[Problem] = []
    rows: list[M] = []
    first_line: dict[tuple[Any, ...], int] = {}
    fields = [name for name in row_model.model_fields if name != "line"]
    try:
        header = next(reader, [])
        problems += _header_problems(header, fields, row_model, path)
        if problems:
            raise DeclarationError(problems)
        before = reader.line_num
        for cells in reader:
            line, before = before + 1, reader.line_num
            if not cells:
                continue
            if len(cells) != len(header):
                problems.append(
                    Problem(
                        "a row of another length than the header",
                        file=str(path),
                        place=f"line {line}",
                        found=f"{len(cells)} cells",
                        expected=f"{len(header)} cells",
                        remedy="put a text that contains a comma in double quotes",
                    )
                )
                continue
            data: dict[str, Any] = {name: cell for name, cell in zip(header, cells, strict=True) if cell}
            if "line" in row_model.model_fields:
                data["line"] = line
            try:
                row = row_model.model_validate(data, context=context)
            except ValidationError as error:
                for detail in error.errors(include_url=False):
                    found = _problems(detail, data, {}, path, row_model, line)
                    problems += [problem for _, problem in found]
                continue
            rows.append(row)
            identity = tuple(getattr(row, name) for name in key)
            if key and identity in first_line:
                problems.append(
                    Problem(
                        "the same key twice",
                        file=str(path),
                        place=f"line {line}",
                        found=", ".join(f"{name} {value}" for name, value in zip(key, identity, strict=True)),
                        expected=f"one row (the first is on line {first_line[identity]})",
                        remedy="remove one of the two rows",
                    )
                )
            first_line.setdefault(identity, line)
    except csv.Error as error:
        problems.append(
            Problem(
                f"not readable as CSV: {error}",
                file=str(path),
                place=f"line {reader.line_num}",
                expected="comma-separated values",
                remedy="check the quotation marks",
            )
        )
    if problems:
        raise DeclarationError(problems)
    return rows


def _header_problems(
    header: list[str], fields: list[str], model: type[BaseModel], path: Path
) -> list[Problem]:
    problems = []
    for name in header:
        if name not in fields:
            problems.append(
                Problem(
                    f"unknown column '{name}'",
                    file=str(path),
                    place="line 1",
                    found=name,
                    expected="one of: " + ", ".join(fields),
                    remedy=did_you_mean(name, fields),
                )
            )
        elif header.count(name) > 1:
            problems.append(
                Problem(
                    f"column '{name}' twice",
                    file=str(path),
                    place="line 1",
                    found=name,
                    expected="each column once",
                    remedy="remove one of the two",
                )
            )
    problems += [
        Problem(
            f"column '{name}' is missing",
            file=str(path),
            place="line 1",
            found=", ".join(header),
            expected=name,
            remedy="add the column",
        )
        for name in fields
        if name not in header and model.model_fields[name].is_required()
    ]
    return list(dict.fromkeys(problems))


def _problems(
    detail: ErrorDetails,
    data: Any,
    lines: Mapping[Place, int],
    path: Path,
    model: type[BaseModel],
    row_line: int | None = None,
) -> list[tuple[Place, Problem]]:
    """Turn one pydantic error into problems in our own words."""
    place = _real_place(detail["loc"], data)
    context = detail.get("ctx", {})
    if detail["type"] in ("declaration", "declarations"):
        several = context["all"] if detail["type"] == "declarations" else [context]
        out = []
        for one in several:
            below = (*place, *one["at"])
            texts = {name: one[name] for name in ("found", "expected", "remedy")}
            out.append((below, Problem(one["what"], str(path), _line(below, lines, row_line), **texts)))
        return out
    if detail["loc"][-1:] == ("[key]",):
        valid = _choices(context)
        problem = Problem(
            f"unknown key '{detail['input']}'",
            str(path),
            _line(place, lines, row_line),
            str(detail["input"]),
            _expected(detail, valid),
            did_you_mean(str(detail["input"]), valid) or "remove the key",
        )
        return [(place, problem)]
    name = str(place[-1]) if place else ""
    dotted = ".".join(str(part) for part in place)
    where = _line(place, lines, row_line)
    if detail["type"] == "extra_forbidden":
        valid = _fields_at(model, place[:-1])
        problem = Problem(
            f"unknown key '{name}'",
            str(path),
            where,
            dotted,
            "one of: " + ", ".join(valid),
            did_you_mean(name, valid) or "remove the key",
        )
    elif detail["type"] == "missing":
        problem = Problem(f"'{dotted}' is missing", str(path), where, "nothing", name, f"add '{name}'")
    else:
        valid = _choices(context)
        remedy = did_you_mean(str(detail["input"]), valid) if valid else ""
        problem = Problem(
            f"'{dotted}' is not as it must be",
            str(path),
            where,
            repr(detail["input"]),
            _expected(detail, valid),
            remedy or f"correct '{name}'",
        )
    return [(place, problem)]


def _choices(context: Mapping[str, Any]) -> list[str]:
    listed = str(context.get("expected", ""))
    return listed.replace(" or ", ", ").replace("'", "").split(", ") if "'" in listed else []


def _expected(detail: ErrorDetails, valid: list[str]) -> str:
    if valid:
        return "one of: " + ", ".join(valid)
    return detail["msg"].removeprefix("Input should be ").removeprefix("Value error, ")


def _line(place: Place, lines: Mapping[Place, int], row_line: int | None) -> str:
    if row_line is not None:
        return f"line {row_line}"
    while place and place not in lines:
        place = place[:-1]
    return f"line {lines.get(place, 1)}"


def _real_place(loc: Iterable[str | int], data: Any) -> Place:
    """Drop what pydantic adds to a location (names of union members); keep keys, indices, a missing key."""
    place: list[str | int] = []
    parts = list(loc)
    for count, part in enumerate(parts):
        below = _below(data, part)
        last_key = count == len(parts) - 1 and isinstance(data, dict) and part != "[key]"
        if below is not _NOTHING:
            data = below
        elif not last_key:
            continue
        place.append(part)
    return tuple(place)


_NOTHING = object()


def _below(data: Any, part: str | int) -> Any:
    if isinstance(data, dict):
        return data.get(part, _NOTHING)
    if isinstance(data, list) and isinstance(part, int) and part < len(data):
        return data[part]
    return _NOTHING


def _without(data: Any, places: set[Place], here: Place = ()) -> Any:
    if isinstance(data, dict):
        return {
            key: _without(value, places, (*here, key))
            for key, value in data.items()
            if (*here, key) not in places
        }
    if isinstance(data, list):
        return [_without(value, places, (*here, index)) for index, value in enumerate(data)]
    return data


def _fields_at(model: type[BaseModel], place: Place) -> list[str]:
    """Return the keys a declaration may have at `place`."""
    here: Any = model
    for part in place:
        here = _step(here, part)
    models = [one for one in _members(here) if isinstance(one, type) and issubclass(one, BaseModel)]
    return [field.alias or name for one in models for name, field in one.model_fields.items()]


def _step(annotation: Any, part: str | int) -> Any:
    for one in _members(annotation):
        if isinstance(one, type) and issubclass(one, BaseModel):
            for name, field in one.model_fields.items():
                if part in (name, field.alias):
                    return field.annotation
        else:
            arguments = typing.get_args(one)
            if arguments:
                return arguments[1] if typing.get_origin(one) is dict else arguments[0]
    return None


def _members(annotation: Any) -> list[Any]:
    if typing.get_origin(annotation) in (typing.Union, types.UnionType):
        return [one for one in typing.get_args(annotation) if one is not type(None)]
    return [annotation]


def _in_line_order(problems: Iterable[Problem]) -> list[Problem]:
    return sorted(problems, key=lambda problem: int(problem.place.removeprefix("line ")))
