"""The catalogue: every method there is, its equation, its parameters and its source.

Forms and distributions are described by their own docstrings: what stands before the arguments, and the
paragraph that starts with "Source:". Nothing is written down twice.
"""

import inspect
from collections.abc import Callable, Iterator, Mapping
from itertools import takewhile
from typing import Any

from keelbook.contracts.assets import REFERENCE_TABLES
from keelbook.contracts.parameters import declared_parameters, load_parameters
from keelbook.contracts.retirement import load_retirement
from keelbook.methods import profiles, retirement, weights
from keelbook.stages.catalogue import FORMULAS

TITLES = {
    "formula": "Formulas of the stages",
    "efficiency": "Efficiency by age (rules/assets.csv, column efficiency)",
    "age_price": "Price by age, declared (rules/assets.csv, column age_price)",
    "cohort": "Profiles of a whole vintage",
    "distribution": "Distributions of lives (rules/retirement.csv, column distribution)",
    "retirement": "Retirement patterns (rules/assets.csv, column retirement)",
    "choice": "Choices and numbers (rules/*.toml; [rules.FILE.NAME] of assembly.toml)",
}
"""Kinds of entries in the order in which they are listed."""

COLUMNS = {"factor": "declining_balance_rate"}
"""Parameter of a form -> the column of rules/assets.csv that gives it, where the two names differ."""


def catalogue() -> list[dict[str, Any]]:
    """Return every entry: kind, name, equation, inputs, parameters (name -> what it may be or is), citation."""
    return [*_formulas(), *_profiles(), *_distributions(), *_patterns(), *_choices()]


def catalogue_lines(rows: list[dict[str, Any]]) -> Iterator[str]:
    """Yield the catalogue as text, one kind after the other."""
    for kind, title in TITLES.items():
        yield f"{title}\n"
        for row in rows:
            if row["kind"] != kind:
                continue
            yield row["name"]
            yield f"    {row['equation']}"
            if row["inputs"]:
                yield f"    inputs: {', '.join(row['inputs'])}"
            given = (f"{name} {value}".rstrip() for name, value in row["parameters"].items())
            if row["parameters"]:
                yield f"    parameters: {'; '.join(given)}"
            yield f"    source: {row['citation']}"
        yield ""


def _entry(kind: str, name: str, equation: str, citation: str, **more: Any) -> dict[str, Any]:
    return {
        "kind": kind,
        "name": name,
        "equation": equation,
        "inputs": [],
        "parameters": {},
        "citation": citation,
        **more,
    }


def _formulas() -> Iterator[dict[str, Any]]:
    for f in FORMULAS.values():
        yield _entry("formula", f.name, f.equation, f.citation, inputs=[role.name for role in f.roles])


def _profiles() -> Iterator[dict[str, Any]]:
    yield _entry(
        "efficiency",
        weights.COHORT_GEOMETRIC,
        "(1 - d)^a of a whole vintage, efficiency and price alike: retirement is in the rate, there is no last age; "
        "d = rate, or declining_balance_rate / life; a gross stock only with gross_life and retirement",
        "published rates, as in " + ", ".join(f"rules/{name}.csv" for name in REFERENCE_TABLES),
        parameters=dict.fromkeys(("rate", "declining_balance_rate", "life", "gross_life", "retirement"), ""),
    )
    for kind, forms in (("efficiency", profiles.EFFICIENCY_FORMS), ("age_price", profiles.AGE_PRICE_FORMS)):
        for name, form in forms.items():
            takes = (COLUMNS.get(parameter, parameter) for parameter in form.parameters)
            yield _described(kind, name, form.function, tuple(takes))
    yield _described("cohort", "age_price", profiles.age_price, ("discount_rate",))
    yield _described(
        "cohort", "efficiency_from_age_price", profiles.efficiency_from_age_price, ("discount_rate",)
    )
    yield _described("cohort", "period_end_weights", weights.period_end_weights, ("timing", "age_price_mode"))


def _distributions() -> Iterator[dict[str, Any]]:
    for name, one in retirement.RETIREMENT.items():
        yield _described("distribution", name, one.spread or retirement.simultaneous, one.parameters)


def _described(kind: str, name: str, function: Callable[..., Any], takes: tuple[str, ...]) -> dict[str, Any]:
    said = inspect.getdoc(function) or ""
    for heading in ("Source:", "Args:", "Returns:", "Raises:"):
        said = said.replace(f"\n{heading}", f"\n\n{heading}")
    paragraphs = [" ".join(paragraph.split()) for paragraph in said.split("\n\n")]
    source = next(p for p in paragraphs if p.startswith("Source:")).removeprefix("Source: ")
    before = takewhile(lambda p: not p.startswith(("Source:", "Args:")), paragraphs)
    equation = " ".join(before).removeprefix("Return ")
    return _entry(kind, name, equation, source, parameters=dict.fromkeys(takes, ""))


def _patterns() -> Iterator[dict[str, Any]]:
    for pattern in load_retirement().values():
        yield _entry(
            "retirement",
            pattern.name,
            f"{pattern.distribution}; its cuts leave out {pattern.truncated:.2%} of it",
            f"{pattern.citation} [{pattern.status}]",
            parameters={name: f"{value:g}" for name, value in pattern.shape},
        )


def _choices() -> Iterator[dict[str, Any]]:
    for one in load_parameters().all():
        file, name = one.name.split(".")
        declared = declared_parameters()[file][name]
        if declared.type in ("float", "int"):
            may = f"{declared.type} from {declared.minimum:g} to {declared.maximum:g}"
        else:
            may = f"{declared.type} of " + ", ".join(declared.allowed())
        yield _entry(
            "choice",
            one.name,
            declared.description,
            one.citation,
            parameters={"may be": may, "is": _plain(one.value)},
        )


def _plain(value: Any) -> Any:
    if isinstance(value, tuple):
        return ", ".join(value)
    return ", ".join(f"{k} {v}" for k, v in value.items()) if isinstance(value, Mapping) else value
