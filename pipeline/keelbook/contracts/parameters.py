"""Parameters: declared in `schemas/parameters.toml`, set in `rules/`, overridden by an assembly."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from types import MappingProxyType
from typing import Any, Literal, Protocol

from pydantic import JsonValue, RootModel, ValidationInfo, model_validator
from pydantic_core import PydanticCustomError

from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.loader import Declared, Place, fault, faults, load_toml, parse_toml, validate
from keelbook.errors import DeclarationError, Problem, did_you_mean
from keelbook.locate import folder


@dataclass(frozen=True)
class Parameter:
    """A parameter as set: value (lists are tuples, tables read-only mappings), where it was set, and why."""

    name: str
    value: Any
    file: str
    line: int
    citation: str


class Declaration(Declared):
    """What a parameter may be."""

    type: Literal["choice", "list", "table", "float", "int"]
    description: str
    choices: tuple[str, ...] = ()
    choices_from: str | None = None
    keys_from: str | None = None
    minimum: float | None = None
    maximum: float | None = None

    @model_validator(mode="after")
    def _complete(self) -> "Declaration":
        number = self.type in ("float", "int")
        if number == bool(self.choices or self.choices_from):
            raise fault(
                "choices and the type do not go together",
                found=self.type,
                expected="choices for choice, list and table; minimum and maximum for numbers",
            )
        if number and (self.minimum is None or self.maximum is None):
            raise fault("a number without its range", found=self.type, expected="minimum and maximum")
        if (self.type == "table") != (self.keys_from is not None):
            raise fault(
                "keys_from goes with a table, and only with it", found=self.type, expected="keys_from"
            )
        return self

    def allowed(self) -> tuple[str, ...]:
        """Return what a choice, an element of a list or a value of a table may be."""
        return load_code_lists().codes(self.choices_from) if self.choices_from else self.choices


class Given(Declared):
    """A parameter as written in a rule file or in `assembly.toml`."""

    value: JsonValue
    citation: str


class _Declarations(RootModel[dict[str, dict[str, Declaration]]]):
    pass


class _RuleFile(RootModel[dict[str, Given]]):
    @model_validator(mode="after")
    def _as_declared(self, info: ValidationInfo) -> "_RuleFile":
        context = info.context or {}
        file: str = context["file"]
        found = faults_in(file, self.root)
        if context["complete"]:
            for name in declared_parameters()[file]:
                if name not in self.root:
                    found.append(
                        fault(
                            f"parameter '{file}.{name}' is missing",
                            found="nothing",
                            expected=name,
                            remedy=f"add [{name}] with value and citation",
                        )
                    )
        if found:
            raise faults(found)
        return self


class Parameters:
    """Every parameter of a run: of `assembly.toml`, else its `rules/`, else the shipped `rules/`."""

    def __init__(self, parameters: Iterable[Parameter]) -> None:
        self._by_name = {parameter.name: parameter for parameter in parameters}

    def get(self, file: str, name: str) -> Parameter:
        """Return one parameter, as in `get("capital", "timing")`. Raises KeyError for one not declared."""
        return self._by_name[f"{file}.{name}"]

    def all(self) -> tuple[Parameter, ...]:
        """Return every parameter, in the order of `schemas/parameters.toml`."""
        return tuple(self._by_name.values())


class WithRules(Protocol):
    """What `load_parameters` needs of an assembly."""

    @property
    def folder(self) -> Path: ...
    @property
    def rule_overrides(self) -> tuple[Parameter, ...]: ...


@lru_cache(maxsize=1)
def declared_parameters() -> Mapping[str, Mapping[str, Declaration]]:
    """Return file -> parameter -> declaration. Raises DeclarationError if the schema is not as it must be."""
    return MappingProxyType(load_toml(folder("schemas") / "parameters.toml", _Declarations).root)


def load_parameters(assembly: WithRules | None = None) -> Parameters:
    """Return every declared parameter as set for this assembly; None for the shipped rules alone.

    Raises:
        DeclarationError: a rule file is not as it must be, or a declared parameter is not given.
    """
    parameters = {one.name: one for one in _shipped()}
    if assembly is not None:
        parameters |= {one.name: one for one in rule_files(assembly.folder)}
        parameters |= {one.name: one for one in assembly.rule_overrides}
    return Parameters(parameters.values())


def rule_files(assembly_folder: Path) -> tuple[Parameter, ...]:
    """Return the parameters an assembly sets in its `rules/<file>.toml`.

    Raises:
        DeclarationError: one of them is not as it must be; all faults of all files.
    """
    problems: list[Problem] = []
    parameters: list[Parameter] = []
    for file in declared_parameters():
        path = assembly_folder / "rules" / f"{file}.toml"
        if path.is_file():
            try:
                parameters += _read(path, file, label=f"rules/{file}.toml", complete=False)
            except DeclarationError as error:
                problems += error.problems
    if problems:
        raise DeclarationError(problems)
    return tuple(parameters)


@lru_cache(maxsize=1)
def _shipped() -> tuple[Parameter, ...]:
    problems: list[Problem] = []
    parameters: list[Parameter] = []
    for file in declared_parameters():
        path = folder("rules") / f"{file}.toml"
        try:
            parameters += _read(path, file, label=f"keelbook/rules/{file}.toml", complete=True)
        except DeclarationError as error:
            problems += error.problems
    if problems:
        raise DeclarationError(problems)
    order = [f"{file}.{name}" for file, names in declared_parameters().items() for name in names]
    return tuple(sorted(parameters, key=lambda one: order.index(one.name)))


def _read(path: Path, file: str, *, label: str, complete: bool) -> list[Parameter]:
    data, lines = parse_toml(path)
    rules = validate(data, lines, path, _RuleFile, {"file": file, "complete": complete})
    return [set_by(file, name, given, label, lines[(name,)]) for name, given in rules.root.items()]


def set_by(file: str, name: str, given: Given, where: str, line: int) -> Parameter:
    """Return the parameter a valid `Given` sets."""
    value: Any = given.value
    if isinstance(value, list):
        value = tuple(value)
    elif isinstance(value, dict):
        value = MappingProxyType(value)
    elif declared_parameters()[file][name].type == "float":
        value = float(value)
    return Parameter(f"{file}.{name}", value, where, line, given.citation)


def faults_in(file: str, given: Mapping[str, Given], at: Place = ()) -> list[PydanticCustomError]:
    """Return what is wrong with the parameters given for one rule file, each placed at its key below `at`."""
    declared = declared_parameters()
    if file not in declared:
        return [
            fault(
                f"unknown rule file '{file}'",
                at=at,
                found=file,
                expected="one of: " + ", ".join(declared),
                remedy=did_you_mean(file, declared) or "remove the table",
            )
        ]
    found: list[PydanticCustomError] = []
    for name, one in given.items():
        if name not in declared[file]:
            found.append(
                fault(
                    f"unknown parameter '{file}.{name}'",
                    at=(*at, name),
                    found=name,
                    expected="one of: " + ", ".join(declared[file]),
                    remedy=did_you_mean(name, declared[file]) or "remove the parameter",
                )
            )
            continue
        if not one.citation.strip():
            what = f"'{file}.{name}' without a citation"
            found.append(
                fault(
                    what,
                    at=(*at, name, "citation"),
                    found="an empty text",
                    expected="a source, or who decided and when",
                    remedy="say where the value comes from",
                )
            )
        found += _value_faults(f"{file}.{name}", declared[file][name], one.value, (*at, name, "value"))
    return found


def _value_faults(name: str, declared: Declaration, value: Any, at: Place) -> list[PydanticCustomError]:
    def wrong(
        what: str, part: Any, expected: str, remedy: str = "", below: Place = ()
    ) -> PydanticCustomError:
        return fault(
            f"'{name}' {what}",
            at=(*at, *below),
            found=repr(part),
            expected=expected,
            remedy=remedy or "correct the value",
        )

    def not_allowed(part: Any, below: Place = ()) -> list[PydanticCustomError]:
        allowed = declared.allowed()
        if part in allowed:
            return []
        return [
            wrong(
                "has an unknown value",
                part,
                "one of: " + ", ".join(allowed),
                did_you_mean(str(part), allowed),
                below,
            )
        ]

    if declared.type in ("float", "int"):
        number = isinstance(value, int if declared.type == "int" else int | float) and not isinstance(
            value, bool
        )
        low, high = declared.minimum or 0, declared.maximum or 0
        if not number or not low <= value <= high:
            kind = "a whole number" if declared.type == "int" else "a number"
            return [wrong("is out of its range", value, f"{kind} from {low:g} to {high:g}")]
        return []
    if declared.type == "choice":
        return not_allowed(value)
    if declared.type == "list":
        if not isinstance(value, list):
            return [wrong("is not a list", value, "a list of: " + ", ".join(declared.allowed()))]
        found = [one for at_, part in enumerate(value) for one in not_allowed(part, (at_,))]
        return found + [
            wrong("names one twice", part, "each once", below=(at_,))
            for at_, part in enumerate(value)
            if part in value[:at_]
        ]
    if not isinstance(value, dict):
        return [wrong("is not a table", value, f"a table of the codes of {declared.keys_from}")]
    keys = load_code_lists().codes(declared.keys_from or "")
    found = [
        wrong(
            f"has an unknown key '{key}'", key, "one of: " + ", ".join(keys), did_you_mean(key, keys), (key,)
        )
        for key in value
        if key not in keys
    ]
    found += [
        wrong(f"does not say what '{key}' is", value, f"every code of {declared.keys_from}")
        for key in keys
        if key not in value
    ]
    return found + [one for key, part in value.items() for one in not_allowed(part, (key,))]
