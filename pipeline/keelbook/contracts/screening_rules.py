"""Screening rules: the closed kinds, and the loader of `rules/screening.toml` and of an assembly's own file.

An assembly's `rules/screening.toml` has the same form. An entry with the id of a shipped rule changes the
keys it gives and keeps the others; an entry with a new id is a further rule. Each states a citation: who
decided, and when.
"""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, Field, model_validator

from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.loader import Declared, Place, fault, load_toml, parse_toml, validate
from keelbook.contracts.measures import PriceBasis, load_measures
from keelbook.errors import DeclarationError, Problem, did_you_mean
from keelbook.locate import folder

NAME = "screening.toml"

Text = Annotated[str, Field(min_length=1)]
Tolerance = Annotated[float, Field(ge=0)]


def _known_measure(name: str) -> str:
    measures = load_measures()
    if name not in measures:
        raise fault(
            f"unknown measure '{name}'",
            found=name,
            expected="a measure of schemas/measures.toml",
            remedy=did_you_mean(name, measures) or "correct the name",
        )
    return name


def _known_status(code: str) -> str:
    lists = load_code_lists()
    if not lists.has("obs_status", code):
        raise fault(
            f"unknown observation status '{code}'",
            found=code,
            expected="one of: " + ", ".join(lists.codes("obs_status")),
            remedy="see rules/codes/obs_status.csv",
        )
    return code


def _stop_only(severity: str) -> str:
    if severity != "stop":
        raise fault(
            "this rule must stop the run",
            found=severity,
            expected="stop",
            remedy="leave the severity at 'stop': with such data there is no figure to compute with",
        )
    return severity


def _never_acceptable(acceptable: bool) -> bool:
    if acceptable:
        raise fault(
            "a finding of this rule cannot be accepted",
            found="acceptable = true",
            expected="acceptable = false",
            remedy="remove it: nobody can accept data of which it is not known what they say",
        )
    return acceptable


def _not_empty(names: tuple[str, ...]) -> tuple[str, ...]:
    if not names:
        raise fault(
            "an empty list", found="[]", expected="one name or more", remedy="name what the rule is for"
        )
    return names


MeasureName = Annotated[str, AfterValidator(_known_measure)]
Status = Annotated[str, AfterValidator(_known_status)]
Severity = Literal["stop", "warn", "note"]
StopOnly = Annotated[Severity, AfterValidator(_stop_only)]
NeverAcceptable = Annotated[bool, AfterValidator(_never_acceptable)]


class ScreeningRule(Declared):
    """What every rule states: `level` is the ESS validation level, `reason` a clause, `remedy` what to do.

    A finding that warns can be accepted by an entry of acceptances.toml; one that stops, if `acceptable`.
    """

    id: Annotated[str, Field(pattern="^[a-z][a-z0-9_]*$")]
    kind: str
    severity: Severity
    level: Annotated[int, Field(ge=0, le=5)]
    reason: Text
    remedy: Text
    citation: Text
    acceptable: bool = False


class DuplicateKey(ScreeningRule):
    """The same key (area to price basis, frequency, period) more than once, from whichever source."""

    kind: Literal["duplicate_key"]
    severity: StopOnly
    acceptable: NeverAcceptable = False


class UnknownCode(ScreeningRule):
    """A label that is not in the code list of its dimension."""

    kind: Literal["unknown_code"]
    severity: StopOnly
    acceptable: NeverAcceptable = False


class Coverage(ScreeningRule):
    """A series with periods that have no figure.

    `measures`: which (empty: all); `full_period`: not only between its first and last, but in the whole
    period of the assembly; `accepted_missing`: statuses under which a missing figure is no gap.
    """

    kind: Literal["coverage"]
    measures: tuple[MeasureName, ...] = ()
    full_period: bool = False
    accepted_missing: tuple[Status, ...] = ()


class Sign(ScreeningRule):
    """A negative figure of `measures` (empty: those marked positive in their schema), less `excluding`."""

    kind: Literal["sign"]
    measures: tuple[MeasureName, ...] = ()
    excluding: tuple[MeasureName, ...] = ()


class NonpositiveIndex(ScreeningRule):
    """A figure of zero or less at one of `price_bases`, which hold index numbers."""

    kind: Literal["nonpositive_index"]
    price_bases: Annotated[tuple[PriceBasis, ...], AfterValidator(_not_empty)]


class Identity(ScreeningRule):
    """`total` is the sum of `terms` at `price_basis`, by area, sector, industry and period.

    The difference may be `rounding_units` last printed digits of each figure plus `relative_tolerance` of
    the total.
    """

    kind: Literal["identity"]
    total: MeasureName
    terms: Annotated[tuple[MeasureName, ...], AfterValidator(_not_empty)]
    price_basis: PriceBasis
    rounding_units: Tolerance
    relative_tolerance: Tolerance

    @model_validator(mode="after")
    def _terms_differ(self) -> "Identity":
        named = [self.total, *self.terms]
        if len(set(named)) < len(named):
            raise fault(
                "a measure occurs twice in the identity",
                at=("terms",),
                found=", ".join(named),
                expected="each measure once",
                remedy="remove the repetition",
            )
        return self


class Range(ScreeningRule):
    """A figure of `measures`, or its ratio to `per` at the same key, outside [minimum, maximum]."""

    kind: Literal["range"]
    measures: Annotated[tuple[MeasureName, ...], AfterValidator(_not_empty)]
    per: MeasureName | None = None
    price_basis: PriceBasis | None = None
    frequency: Literal["A", "Q"] | None = None
    minimum: float | None = None
    maximum: float | None = None

    @model_validator(mode="after")
    def _bounds_in_order(self) -> "Range":
        if self.minimum is None and self.maximum is None:
            raise fault("a range without bounds", expected="minimum, maximum or both", remedy="add a bound")
        if self.minimum is not None and self.maximum is not None and self.minimum > self.maximum:
            raise fault(
                "the minimum is above the maximum",
                at=("minimum",),
                found=f"{self.minimum} to {self.maximum}",
                expected="minimum <= maximum",
                remedy="exchange the two",
            )
        return self


class StatusMark(ScreeningRule):
    """An observation that carries one of `statuses`."""

    kind: Literal["status_mark"]
    statuses: Annotated[tuple[Status, ...], AfterValidator(_not_empty)]


class OutsidePeriod(ScreeningRule):
    """An observation outside the period of the assembly."""

    kind: Literal["outside_period"]


class Jump(ScreeningRule):
    """Log growth of a series far from its own usual growth.

    Far is more than `threshold` median absolute deviations from the median, and more than `least_deviation`
    (a log change): a smooth series has no deviation to speak of. Growth is that over one year, also of quarters.
    Figures of zero or less are passed over. A series needs `minimum_years` growth rates.
    """

    kind: Literal["jump"]
    measures: Annotated[tuple[MeasureName, ...], AfterValidator(_not_empty)]
    threshold: Annotated[float, Field(gt=0)]
    least_deviation: Tolerance
    minimum_years: Annotated[int, Field(ge=3)]


class PartsTotal(ScreeningRule):
    """A delivered total over `dimension` is the sum of the parts delivered beside it, at one price basis.

    Parts are the codes without detail of their own, worker groups those of one partition; there must be two or
    more. The difference may be `rounding_units` last printed digits of each figure plus `relative_tolerance` of
    the total.
    """

    kind: Literal["parts_total"]
    dimension: Literal["industry", "asset", "worker_group"]
    price_bases: Annotated[tuple[PriceBasis, ...], AfterValidator(_not_empty)]
    excluding: tuple[MeasureName, ...] = ()
    rounding_units: Tolerance
    relative_tolerance: Tolerance


class PriceVolume(ScreeningRule):
    """`measure` at current prices is its volume times the price on the reference year, where all are delivered.

    The difference may be `rounding_units` last printed digits of each figure plus `relative_tolerance` of the
    value.
    """

    kind: Literal["price_volume"]
    measure: MeasureName
    price: MeasureName
    price_bases: Annotated[tuple[PriceBasis, ...], AfterValidator(_not_empty)]
    rounding_units: Tolerance
    relative_tolerance: Tolerance


class Magnitude(ScreeningRule):
    """A series about 10^`power` above or below the other series of its measure in the same source.

    About is within `tolerance` (in powers of ten). It must also be more than `spread` median absolute deviations
    from the median, so that sources whose series differ widely in size are left alone.
    """

    kind: Literal["magnitude"]
    power: Annotated[float, Field(gt=0)]
    tolerance: Tolerance
    spread: Annotated[float, Field(gt=0)]
    minimum_series: Annotated[int, Field(ge=3)]


class Completeness(ScreeningRule):
    """Every industry of an area for which one of `measures` is delivered has all of them.

    `instead`: measure -> others that serve as well.
    """

    kind: Literal["completeness"]
    measures: Annotated[tuple[MeasureName, ...], AfterValidator(_not_empty)]
    instead: dict[MeasureName, tuple[MeasureName, ...]] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _instead_of_named(self) -> "Completeness":
        for name in self.instead:
            if name not in self.measures:
                raise fault(
                    f"'{name}' is not one of the measures",
                    at=("instead", name),
                    found=name,
                    expected="one of: " + ", ".join(self.measures),
                    remedy=did_you_mean(name, self.measures) or "add it to measures",
                )
        return self


KINDS: Mapping[str, type[ScreeningRule]] = {
    "duplicate_key": DuplicateKey,
    "unknown_code": UnknownCode,
    "coverage": Coverage,
    "sign": Sign,
    "nonpositive_index": NonpositiveIndex,
    "identity": Identity,
    "range": Range,
    "status_mark": StatusMark,
    "outside_period": OutsidePeriod,
    "jump": Jump,
    "parts_total": PartsTotal,
    "price_volume": PriceVolume,
    "magnitude": Magnitude,
    "completeness": Completeness,
}


class _File(Declared):
    rule: tuple[dict[str, Any], ...]


def load_screening_rules(assembly_folder: Path | None = None) -> list[ScreeningRule]:
    """Return the screening rules, in file order: the shipped ones, as an assembly changes them, then its own.

    Args:
        assembly_folder: the assembly, whose `rules/screening.toml` may be absent; None for the shipped rules
            alone.

    Raises:
        DeclarationError: every fault of a file, with its line: an unknown kind or key, a wrong type, a
            negative tolerance, an id twice, an unknown measure or status, a structural rule made to do less
            than stop, a changed rule without a citation.
    """
    shipped = _rules(folder("rules") / NAME, {})
    own = assembly_folder / "rules" / NAME if assembly_folder is not None else None
    if own is None or not own.is_file():
        return list(shipped.values())
    return list((shipped | _rules(own, shipped)).values())


def _rules(path: Path, shipped: Mapping[str, ScreeningRule]) -> dict[str, ScreeningRule]:
    entries = load_toml(path, _File).rule
    _, lines = parse_toml(path)
    problems: list[Problem] = []
    rules: dict[str, ScreeningRule] = {}
    first_line: dict[str, int] = {}
    for index, entry in enumerate(entries):
        place: Place = ("rule", index)
        below = {key[2:]: line for key, line in lines.items() if key[:2] == place}
        name = entry.get("id")
        base = shipped.get(name) if isinstance(name, str) else None
        problems += _entry_problems(entry, base, path, below)
        kind = entry.get("kind", base.kind if base else None)
        model = KINDS.get(kind) if isinstance(kind, str) else None
        if model is None:
            continue
        given = base.model_dump(mode="json", exclude_unset=True) if base else {}
        try:
            rule = validate({**given, **entry}, below, path, model)
        except DeclarationError as error:
            problems += error.problems
            continue
        if rule.id in rules:
            problems.append(
                Problem(
                    f"the id '{rule.id}' twice",
                    str(path),
                    f"line {below.get(('id',), below[()])}",
                    found=rule.id,
                    expected=f"each id once (the first is on line {first_line[rule.id]})",
                    remedy="give one of the two rules another id",
                )
            )
        rules.setdefault(rule.id, rule)
        first_line.setdefault(rule.id, below.get(("id",), below[()]))
    if problems:
        raise DeclarationError(problems)
    return rules


def _entry_problems(
    entry: Mapping[str, Any], base: ScreeningRule | None, path: Path, lines: Mapping[Place, int]
) -> Sequence[Problem]:
    """Return what is wrong with an entry as such, before its kind says which keys it has."""
    kind = entry.get("kind", base.kind if base else None)
    problems = []
    if kind is None:
        problems.append(
            Problem(
                "'kind' is missing",
                str(path),
                f"line {lines[()]}",
                found="nothing",
                expected="one of: " + ", ".join(KINDS),
                remedy="add 'kind' (only a rule with the id of a shipped rule may go without)",
            )
        )
    elif str(kind) not in KINDS:
        problems.append(
            Problem(
                f"unknown kind '{kind}'",
                str(path),
                f"line {lines[('kind',)]}",
                found=str(kind),
                expected="one of: " + ", ".join(KINDS),
                remedy=did_you_mean(str(kind), KINDS) or "choose one of these kinds",
            )
        )
    elif base is not None and kind != base.kind:
        problems.append(
            Problem(
                f"the rule '{base.id}' is of another kind",
                str(path),
                f"line {lines[('kind',)]}",
                found=str(kind),
                expected=base.kind,
                remedy="leave 'kind' out, or give the rule an id of its own",
            )
        )
    if base is not None and "citation" not in entry:
        problems.append(
            Problem(
                f"the shipped rule '{base.id}' is changed without a citation",
                str(path),
                f"line {lines[()]}",
                found="nothing",
                expected="citation",
                remedy="add a citation: who decided this, and when",
            )
        )
    return problems
