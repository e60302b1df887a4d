"""What each asset is like: `rules/assets.csv`, and the published tables its rows are taken from."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from functools import lru_cache
from pathlib import Path
from typing import Literal

from pydantic import Field, ValidationInfo, field_validator, model_validator
from pydantic_core import PydanticCustomError

from keelbook.contracts.codes import NOT_APPLICABLE, TOTAL, CodeLists, Mark, load_code_lists
from keelbook.contracts.loader import Declared, fault, faults, load_csv_rows
from keelbook.contracts.parameters import Parameter
from keelbook.contracts.retirement import RetirementPattern, load_retirement
from keelbook.errors import DeclarationError, Problem, did_you_mean
from keelbook.locate import folder
from keelbook.methods.weights import period_end_weights

REFERENCE_TABLES = ("bea_1997", "bea_structures", "bea_intellectual_property")
"""Published rates shipped as they were read: `rules/<name>.csv`."""

Efficiency = Literal["cohort_geometric", "geometric", "hyperbolic", "linear", "constant"]
AgePrice = Literal["straight_line", "declining_balance"]
InitialStock = Literal[
    "steady_state",
    "backcast_growth",
    "backcast_indicator",
    "capital_output_ratio",
    "zero",
    "benchmark",
    "benchmarks_spread",
    "two_benchmarks",
]

_NUMBERS = ("rate", "life", "declining_balance_rate", "gross_life", "b", "discount_rate")
_START = ("initial_stock", "initial_growth", "capital_output_ratio")
_NEEDS: Mapping[str, tuple[str, ...]] = {
    "cohort_geometric": (),
    "geometric": ("rate", "life", "retirement", "discount_rate"),
    "hyperbolic": ("life", "b", "retirement", "discount_rate"),
    "linear": ("life", "retirement", "discount_rate"),
    "constant": ("life", "retirement", "discount_rate"),
    "straight_line": ("life", "retirement", "discount_rate"),
    "declining_balance": ("life", "declining_balance_rate", "retirement", "discount_rate"),
}
_COHORT_MAY = ("rate", "life", "declining_balance_rate", "gross_life", "retirement")


class AssetRow(Declared):
    """One row of `rules/assets.csv`.

    A row gives either an `efficiency`, from which prices by age follow at the `discount_rate`, or an `age_price`,
    from which the efficiency follows. `life` is the mean life, `retirement` a name of `rules/retirement.csv`.
    A `cohort_geometric` row gives either `rate`, or `life` and `declining_balance_rate` (rate =
    declining_balance_rate / life); its `gross_life` is the mean life for the gross stock, and with `rate` and
    `declining_balance_rate` the one the published rate rests on.
    """

    asset: str
    industry: str
    first_year: int | None = Field(None, ge=1800, le=2200)
    applies_to: Literal["vintages", "stock"] | None = None
    efficiency: Efficiency | None = None
    age_price: AgePrice | None = None
    rate: float | None = Field(None, gt=0, le=1)
    life: float | None = Field(None, ge=1)
    declining_balance_rate: float | None = Field(None, gt=0)
    gross_life: float | None = Field(None, ge=1)
    b: float | None = Field(None, le=1)
    retirement: str | None = None
    discount_rate: float | None = Field(None, gt=-1)
    initial_stock: InitialStock | None = None
    initial_growth: float | None = Field(None, gt=-1)
    capital_output_ratio: float | None = Field(None, gt=0)
    citation: str
    status: Mark
    line: int

    @field_validator("asset", "industry")
    @classmethod
    def _known(cls, code: str, info: ValidationInfo) -> str:
        lists: CodeLists = (info.context or {})["lists"]
        name = str(info.field_name)
        valid = [one for one in lists.codes(name) if one != NOT_APPLICABLE]
        if code not in valid:
            raise fault(
                f"unknown {name} '{code}'",
                found=code,
                expected=f"a code of the list {name}",
                remedy=did_you_mean(code, valid) or f"add the code in rules/codes/{name}.csv",
            )
        return code

    @field_validator("retirement")
    @classmethod
    def _pattern(cls, name: str, info: ValidationInfo) -> str:
        patterns: Mapping[str, RetirementPattern] | None = (info.context or {})["patterns"]
        if patterns is not None and name not in patterns:
            raise fault(
                f"unknown retirement '{name}'",
                found=name,
                expected="one of: " + ", ".join(patterns),
                remedy=did_you_mean(name, patterns) or "add a row to rules/retirement.csv",
            )
        return name

    @model_validator(mode="after")
    def _no_contradiction(self, info: ValidationInfo) -> "AssetRow":
        form = self.efficiency or self.age_price
        if form is None or (self.efficiency and self.age_price):
            raise fault(
                "either an efficiency or an age_price is needed",
                found=f"efficiency {self.efficiency}, age_price {self.age_price}" if form else "neither",
                expected="one of the two: the other follows from it at the discount_rate",
                remedy="leave one of the two empty" if form else "give one of the two",
            )
        found = []
        cohort = form == "cohort_geometric"
        needs = _NEEDS[form]
        may = _COHORT_MAY if cohort else needs
        for name in (*_NUMBERS, "retirement"):
            given = getattr(self, name) is not None
            if given and name not in may:
                found.append(
                    fault(
                        f"'{name}' contradicts {form}",
                        at=(name,),
                        found=f"{name} {getattr(self, name)}",
                        expected="one of: " + ", ".join(may),
                        remedy=f"leave {name} empty, or choose another form",
                    )
                )
            elif name in needs and not given:
                found.append(
                    fault(
                        f"{form} without '{name}'",
                        found="an empty cell",
                        expected=name,
                        remedy=f"give {name}, or choose another form",
                    )
                )
        found += self._start_faults()
        if cohort:
            found += self._cohort_faults()
        elif not found and (patterns := (info.context or {})["patterns"]) is not None:
            found += self._without_weights(patterns[self.retirement])
        if found:
            raise faults(found)
        return self

    def _start_faults(self) -> list[PydanticCustomError]:
        """A number that the declared starting stock does not use, or lacks, or that leads nowhere."""
        found = []
        for name, method in (
            ("initial_growth", "backcast_growth"),
            ("capital_output_ratio", "capital_output_ratio"),
        ):
            if getattr(self, name) is not None and self.initial_stock not in (None, method):
                found.append(
                    fault(
                        f"'{name}' contradicts initial_stock {self.initial_stock}",
                        at=(name,),
                        found=f"{name} {getattr(self, name):g}",
                        expected=f"an empty cell, or initial_stock {method}",
                        remedy="correct one of the two",
                    )
                )
        if self.initial_stock == "capital_output_ratio" and self.capital_output_ratio is None:
            found.append(
                fault(
                    "initial_stock capital_output_ratio without the ratio",
                    found="an empty cell",
                    expected="capital_output_ratio: net stock over value added, at the same prices",
                    remedy="give capital_output_ratio",
                )
            )
        rate = self.rate if self.efficiency == "cohort_geometric" else None
        if rate is not None and self.initial_growth is not None and rate + self.initial_growth <= 0:
            found.append(
                fault(
                    "growth plus depreciation is not above 0: no past has that stock",
                    at=("initial_growth",),
                    found=f"initial_growth {self.initial_growth:g}, rate {rate:g}",
                    expected=f"initial_growth above {-rate:g}",
                    remedy="correct one of the two",
                )
            )
        return found

    def _without_weights(self, pattern: RetirementPattern) -> list[PydanticCustomError]:
        """Some values are possible each, but not together: the arithmetic itself says so, whatever the timing."""
        try:
            period_end_weights(
                efficiency=self.efficiency,
                retirement=pattern.distribution,
                retirement_shape=pattern.shape,
                life=self.life,
                rate=self.rate,
                b=self.b,
                discount_rate=self.discount_rate,
                age_price_form=self.age_price,
                factor=self.declining_balance_rate,
                timing="mid",
                length=1,
            )
        except ValueError as error:
            return [
                fault(
                    "these parameters give no profile",
                    found=str(error),
                    expected="parameters that go together",
                    remedy="correct one of them",
                )
            ]
        return []

    def _cohort_faults(self) -> list[PydanticCustomError]:
        found = []
        derived = self.life is not None and self.declining_balance_rate is not None
        if self.life and self.declining_balance_rate and self.declining_balance_rate > self.life:
            found.append(
                fault(
                    "declining_balance_rate / life is no rate",
                    found=f"{self.declining_balance_rate / self.life:g}",
                    expected="at most 1",
                    remedy="correct one of the two",
                )
            )
        if self.rate is not None and self.life is not None:
            found.append(
                fault(
                    "both a life and a rate",
                    found=f"rate {self.rate:g}, life {self.life:g}",
                    expected="rate, or life and declining_balance_rate",
                    remedy="leave one empty; a service life for the gross stock goes to gross_life",
                )
            )
        elif self.rate is None and not derived:
            found.append(
                fault(
                    "cohort_geometric without a rate",
                    found="an empty cell",
                    expected="rate, or life and declining_balance_rate",
                    remedy="give the rate",
                )
            )
        elif self.rate is not None and self.declining_balance_rate is not None:
            if self.gross_life is None:
                found.append(
                    fault(
                        "a declining-balance rate without the life it goes with",
                        found="an empty cell",
                        expected="gross_life",
                        remedy="give gross_life, or leave it out",
                    )
                )
            elif not _agrees(self.rate, self.declining_balance_rate, self.gross_life):
                found.append(
                    fault(
                        "rate, declining_balance_rate and gross_life contradict each other",
                        found=f"rate {self.rate:g}",
                        expected=f"{self.declining_balance_rate / self.gross_life:.4f} "
                        "(declining_balance_rate / gross_life)",
                        remedy="correct one of the three",
                    )
                )
        if found:
            return found
        has_life = self.gross_life is not None or self.life is not None
        if has_life != (self.retirement is not None):
            found.append(
                fault(
                    "a life for the gross stock and a retirement go together",
                    found=f"retirement {self.retirement or 'empty'}",
                    expected="a name of rules/retirement.csv" if has_life else "an empty cell",
                    remedy="correct one",
                )
            )
        return found


class ReferenceRate(Declared):
    """One row of a published table of depreciation rates. `exception` says why rate is not R / life."""

    asset: str
    period: str = ""
    rate: float | None = Field(None, gt=0, le=1)
    life: float | None = Field(None, gt=0)
    declining_balance_rate: float | None = Field(None, gt=0)
    category: str = ""
    exception: str = ""
    citation: str
    status: Mark
    line: int

    @model_validator(mode="after")
    def _identity(self) -> "ReferenceRate":
        if self.rate is None or self.life is None or self.declining_balance_rate is None:
            return self
        if _agrees(self.rate, self.declining_balance_rate, self.life) == bool(self.exception):
            raise fault(
                "rate against declining_balance_rate / life",
                found=f"{self.rate:g}, exception '{self.exception}'",
                expected=f"{self.declining_balance_rate / self.life:.4f}, and an exception only otherwise",
                remedy="correct the row, or say why it differs",
            )
        return self


@dataclass(frozen=True)
class AssetRule:
    """How an asset is treated. `rate` is the rate in use, also where it follows from life and R."""

    asset: str
    industry: str
    efficiency: Efficiency | None
    age_price: AgePrice | None
    rate: float | None
    life: float | None
    declining_balance_rate: float | None
    gross_life: float | None
    b: float | None
    retirement: str | None
    discount_rate: float | None
    initial_stock: InitialStock | None
    initial_growth: float | None
    capital_output_ratio: float | None
    citation: str
    status: Mark
    file: str
    line: int
    pattern: RetirementPattern | None
    first_year: int | None = None
    applies_to: str | None = None
    later: tuple["AssetRule", ...] = ()

    def parameters(self) -> list[Parameter]:
        """Return what a stock under this rule rests on, for the record: `asset.life`, `asset.retirement.sd`, ...

        What holds from a later year on has that year in its name: `asset.life@1990`.
        """
        out = self._own_parameters()
        if self.later and self.later[0].applies_to == "stock":
            first = self.later[0]
            cited = f"{first.citation} [{first.status}]"
            out.append(Parameter("asset.applies_to", "stock", first.file, first.line, cited))
        for rule in self.later:
            out += [replace(p, name=f"{p.name}@{rule.first_year}") for p in rule._own_parameters()]
        return out

    def _own_parameters(self) -> list[Parameter]:
        cited = f"{self.citation} [{self.status}]"
        out = [
            Parameter(f"asset.{name}", getattr(self, name), self.file, self.line, cited)
            for name in ("efficiency", "age_price", *_NUMBERS, "retirement", *_START)
            if getattr(self, name) is not None
        ]
        if self.pattern is not None:
            cited = f"{self.pattern.citation} [{self.pattern.status}]"
            out += [
                Parameter(f"asset.retirement.{name}", value, self.pattern.file, self.pattern.line, cited)
                for name, value in (("distribution", self.pattern.distribution), *self.pattern.shape)
            ]
        return out


class AssetRules:
    """The rules by asset and industry."""

    def __init__(self, rules: Iterable[AssetRule], lists: CodeLists) -> None:
        self._rules = {(rule.asset, rule.industry): rule for rule in rules}
        self._lists = lists

    def all(self) -> tuple[AssetRule, ...]:
        """Return every rule."""
        return tuple(self._rules.values())

    def resolve(self, asset: str, industry: str) -> AssetRule | None:
        """Return the most specific rule: of asset and industry, of the asset, then the same of its parents.

        None if no rule covers it. Raises KeyError for an asset that is not in the code list.
        """
        code: str | None = asset
        while code is not None:
            for where in (industry, TOTAL):
                if (code, where) in self._rules:
                    return self._rules[code, where]
            code = self._lists.parent("asset", code)
        return None


def load_asset_rules(assembly_folder: Path | None = None, lists: CodeLists | None = None) -> AssetRules:
    """Return the rules of `rules/assets.csv`; an assembly's own rows replace the shipped ones of an asset.

    Args:
        assembly_folder: the assembly, or None for the shipped rules alone.
        lists: its code lists, if they are loaded already.

    Raises:
        DeclarationError: a row is not as it must be or contradicts itself; every fault with its line.
    """
    lists = lists or load_code_lists(assembly_folder)
    problems: list[Problem] = []
    patterns = None
    try:
        patterns = load_retirement(assembly_folder)
    except DeclarationError as error:
        problems += error.problems
    own_file = assembly_folder / "rules" / "assets.csv" if assembly_folder else None
    own: list[AssetRule] = []
    if own_file is not None and own_file.is_file():
        try:
            own = _read(own_file, "rules/assets.csv", lists, patterns)
        except DeclarationError as error:
            problems += error.problems
    if problems:
        raise DeclarationError(problems)
    shipped = _read(folder("rules") / "assets.csv", "keelbook/rules/assets.csv", lists, patterns)
    covered = {rule.asset for rule in own}
    return AssetRules([rule for rule in shipped if rule.asset not in covered] + own, lists)


@lru_cache(maxsize=8)
def load_reference_rates(name: str) -> tuple[ReferenceRate, ...]:
    """Return a published table of rates as shipped (`REFERENCE_TABLES`).

    Raises:
        DeclarationError: a row is not as it must be.
    """
    return tuple(load_csv_rows(folder("rules") / f"{name}.csv", ReferenceRate, key=("asset", "period")))


def _read(
    path: Path, label: str, lists: CodeLists, patterns: Mapping[str, RetirementPattern] | None
) -> list[AssetRule]:
    """Return the rules of a file. Without `patterns` (theirs is a faulty file) no retirement is looked up."""
    rules = []
    context = {"lists": lists, "patterns": patterns}
    for row in load_csv_rows(path, AssetRow, key=("asset", "industry", "first_year"), context=context):
        given = row.model_dump()
        if (
            row.efficiency == "cohort_geometric"
            and row.life is not None
            and row.declining_balance_rate is not None
        ):
            given["rate"] = row.declining_balance_rate / row.life
            given["gross_life"] = row.gross_life or row.life
            given["life"] = None
        pattern = patterns[row.retirement] if patterns and row.retirement else None
        rules.append(AssetRule(file=label, pattern=pattern, **given))
    return _in_time(rules, path)


def _in_time(rules: list[AssetRule], path: Path) -> list[AssetRule]:
    """Return one rule for each asset and industry, those that hold from a later year on in it.

    Raises:
        DeclarationError: rows of one asset and industry do not go together.
    """
    by_key: dict[tuple[str, str], list[AssetRule]] = {}
    for rule in rules:
        by_key.setdefault((rule.asset, rule.industry), []).append(rule)
    problems, out = [], []
    for (asset, industry), rows in by_key.items():
        first = [rule for rule in rows if rule.first_year is None]
        later = sorted(
            (rule for rule in rows if rule.first_year is not None), key=lambda r: r.first_year or 0
        )
        problems += _faults_in_time(first, later, path, f"{asset}, {industry}")
        if first:
            out.append(replace(first[0], later=tuple(later)))
    if problems:
        raise DeclarationError(problems)
    return out


def _faults_in_time(first: list[AssetRule], later: list[AssetRule], path: Path, which: str) -> list[Problem]:
    found = []

    def wrong(rule: AssetRule, what: str, found_: str, expected: str, remedy: str) -> None:
        found.append(Problem(f"{which}: {what}", str(path), f"line {rule.line}", found_, expected, remedy))

    if later and not first:
        wrong(
            later[0],
            "no row holds before the first year that is given",
            f"first_year {later[0].first_year}",
            "one row of this asset and industry without first_year",
            "add the row that holds for earlier investment",
        )
    for rule in first:
        if rule.applies_to is not None:
            wrong(rule, "applies_to without first_year", rule.applies_to, "an empty cell", "give first_year")
    if len({rule.applies_to or "vintages" for rule in later}) > 1:
        wrong(
            later[-1],
            "some rows apply to vintages and some to the stock",
            ", ".join(rule.applies_to or "vintages" for rule in later),
            "the same in every row of an asset and industry",
            "choose one",
        )
    for rule in (*first, *later):
        by_rate = rule.efficiency == "cohort_geometric"
        if any(r.applies_to == "stock" for r in later) and not by_rate:
            wrong(
                rule,
                "a rate that changes for the whole stock needs a rate",
                rule.efficiency or rule.age_price or "",
                "cohort_geometric in every row of this asset and industry",
                "leave applies_to empty: the row then holds for investment from its first_year on",
            )
    for rule in later:
        for name in _START:
            if getattr(rule, name) is not None:
                wrong(
                    rule,
                    f"'{name}' in a row that holds from {rule.first_year} on",
                    f"{getattr(rule, name)}",
                    "an empty cell: the start belongs to the row without first_year",
                    "move it to that row",
                )
    return found


def _agrees(rate: float, declining_balance_rate: float, life: float) -> bool:
    """Published rates are printed to four decimals; half a unit of the last, and the noise of a division."""
    return abs(declining_balance_rate / life - rate) <= 0.5e-4 + 1e-9
