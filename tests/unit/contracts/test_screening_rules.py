"""The loader of the screening rules: what an assembly may change, what is refused, and where."""

from pathlib import Path

import pytest

from keelbook.contracts.measures import load_measures
from keelbook.contracts.screening_rules import KINDS, Coverage, Identity, Sign, load_screening_rules
from keelbook.errors import DeclarationError, Problem

OWN = """\
[[rule]]
id = "own"
kind = "range"
severity = "warn"
level = 1
reason = "because"
remedy = "look"
citation = "test"
measures = ["labour_share"]
maximum = 1.5
"""


def assembly(folder: Path, text: str) -> Path:
    (folder / "rules").mkdir()
    (folder / "rules" / "screening.toml").write_text(text, encoding="utf-8")
    return folder


def refused(folder: Path, text: str) -> list[Problem]:
    with pytest.raises(DeclarationError) as caught:
        load_screening_rules(assembly(folder, text))
    assert all(problem.file.endswith("screening.toml") for problem in caught.value.problems)
    return list(caught.value.problems)


def test_the_shipped_rules() -> None:
    severity = {rule.id: rule.severity for rule in load_screening_rules()}
    assert (
        severity
        | {
            "duplicate_key": "stop",
            "unknown_code": "stop",
            "coverage": "warn",
            "sign": "stop",
            "nonpositive_index": "stop",
            "income_identity": "stop",
            "no_period": "note",
        }
        == severity
    )


def test_every_positive_measure_is_held_to_its_sign() -> None:
    rules = load_screening_rules()
    positive = {name for name, measure in load_measures().items() if measure.positive}
    index = {name for name, measure in load_measures().items() if measure.unit == "index"}
    signs = [rule for rule in rules if isinstance(rule, Sign)]
    held = set().union(*((set(rule.measures) or positive) - set(rule.excluding) for rule in signs))
    assert positive <= held | index
    assert not held & index


def test_an_assembly_without_rules_of_its_own_has_the_shipped_ones(tmp_path: Path) -> None:
    assert load_screening_rules(tmp_path) == load_screening_rules()


def test_an_assembly_changes_a_rule_and_adds_one(tmp_path: Path) -> None:
    change = (
        '[[rule]]\nid = "income_identity"\nseverity = "warn"\nrelative_tolerance = 0.02\n'
        'citation = "accounts unit, 2024"\n' + OWN
    )
    shipped = load_screening_rules()
    rules = load_screening_rules(assembly(tmp_path, change))
    assert [rule.id for rule in rules] == [*(rule.id for rule in shipped), "own"]
    before = next(rule for rule in shipped if isinstance(rule, Identity))
    after = next(rule for rule in rules if isinstance(rule, Identity))
    assert (after.severity, after.relative_tolerance, after.citation) == ("warn", 0.02, "accounts unit, 2024")
    assert (after.terms, after.reason) == (before.terms, before.reason)
    kept = next(rule for rule in rules if isinstance(rule, Coverage))
    assert kept == next(rule for rule in shipped if isinstance(rule, Coverage))


@pytest.mark.parametrize("rule_id", ["duplicate_key", "unknown_code"])
def test_a_structural_rule_cannot_be_made_to_do_less_than_stop(tmp_path: Path, rule_id: str) -> None:
    text = f'[[rule]]\nid = "{rule_id}"\ncitation = "test"\nseverity = "warn"\n'
    (problem,) = refused(tmp_path, text)
    assert (problem.place, problem.found, problem.expected) == ("line 4", "warn", "stop")


@pytest.mark.parametrize(
    ("old", "new", "line", "what", "remedy"),
    [
        ('kind = "range"', 'kind = "rang"', 3, "unknown kind 'rang'", "did you mean 'range'?"),
        ('kind = "range"', "kind = []", 3, "unknown kind '[]'", "choose one of these kinds"),
        ('kind = "range"', 'kind = "zzz"', 3, "unknown kind 'zzz'", "choose one of these kinds"),
        ('kind = "range"\n', "", 1, "'kind' is missing", "add 'kind'"),
        (
            "maximum = 1.5",
            "maximum = 1.5\nminimun = 0",
            11,
            "unknown key 'minimun'",
            "did you mean 'minimum'?",
        ),
        ('["labour_share"]', "[]", 9, "an empty list", "name what the rule is for"),
        ("maximum = 1.5", "maximum = 1.5\nterms = []", 11, "unknown key 'terms'", ""),
        ("maximum = 1.5\n", "", 1, "a range without bounds", "add a bound"),
        ("maximum = 1.5", "maximum = 1.5\nminimum = 2", 11, "the minimum is above the maximum", "exchange"),
        ("maximum = 1.5", 'maximum = "1.5"', 10, "'maximum' is not as it must be", ""),
        (
            'severity = "warn"',
            'severity = "wran"',
            4,
            "'severity' is not as it must be",
            "did you mean 'warn'?",
        ),
        ("level = 1", "level = 6", 5, "'level' is not as it must be", ""),
        ('reason = "because"', 'reason = ""', 6, "'reason' is not as it must be", ""),
        ('citation = "test"\n', "", 1, "'citation' is missing", "add 'citation'"),
        (
            '"labour_share"',
            '"labour_shar"',
            9,
            "unknown measure 'labour_shar'",
            "did you mean 'labour_share'?",
        ),
        ('id = "own"', 'id = "Own rule"', 2, "'id' is not as it must be", ""),
    ],
)
def test_a_rule_that_is_not_as_it_must_be(
    tmp_path: Path, old: str, new: str, line: int, what: str, remedy: str
) -> None:
    assert OWN.count(old) == 1
    (problem,) = refused(tmp_path, OWN.replace(old, new))
    assert (problem.place, problem.what) == (f"line {line}", what)
    assert remedy in problem.remedy
    assert problem.remedy


def test_a_negative_tolerance(tmp_path: Path) -> None:
    change = '[[rule]]\nid = "income_identity"\ncitation = "test"\n'
    text = change + "relative_tolerance = -0.1\nrounding_units = -1\n"
    problems = refused(tmp_path, text)
    assert [problem.place for problem in problems] == ["line 4", "line 5"]
    assert all("greater than or equal to 0" in problem.expected for problem in problems)


def test_an_unknown_status_and_a_measure_twice(tmp_path: Path) -> None:
    common = 'severity = "note"\nlevel = 1\nreason = "a"\nremedy = "b"\ncitation = "c"\n'
    text = (
        f'[[rule]]\nid = "a"\nkind = "status_mark"\nstatuses = ["ZZ"]\n{common}'
        '[[rule]]\nid = "b"\nkind = "identity"\ntotal = "value_added"\nterms = ["value_added"]\n'
        f'price_basis = "current"\nrounding_units = 1\nrelative_tolerance = 0\n{common}'
    )
    problems = refused(tmp_path, text)
    assert [(problem.place, problem.what) for problem in problems] == [
        ("line 4", "unknown observation status 'ZZ'"),
        ("line 14", "a measure occurs twice in the identity"),
    ]


def test_an_id_twice(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, OWN + OWN)
    assert (problem.place, problem.found) == ("line 12", "own")
    assert "the first is on line 2" in problem.expected


@pytest.mark.parametrize("rule_id", ["duplicate_key", "unknown_code"])
def test_nobody_accepts_data_of_which_it_is_not_known_what_they_say(tmp_path: Path, rule_id: str) -> None:
    text = f'[[rule]]\nid = "{rule_id}"\ncitation = "test"\nacceptable = true\n'
    (problem,) = refused(tmp_path, text)
    assert (problem.place, problem.what) == ("line 4", "a finding of this rule cannot be accepted")


def test_stops_are_acceptable_by_declaration_only(tmp_path: Path) -> None:
    assert {rule.id for rule in load_screening_rules() if rule.acceptable} == {"income_identity"}
    text = '[[rule]]\nid = "sign"\ncitation = "accounts unit, 2024"\nacceptable = true\n'
    assert {rule.id for rule in load_screening_rules(assembly(tmp_path, text)) if rule.acceptable} == {
        "income_identity",
        "sign",
    }


def test_there_are_rules_of_every_kind_each_with_a_reason_a_remedy_and_a_citation() -> None:
    rules = load_screening_rules()
    assert {rule.kind for rule in rules} == set(KINDS)
    assert all(rule.reason and rule.remedy and rule.citation for rule in rules)


@pytest.mark.parametrize(
    ("rule_id", "change", "what"),
    [
        ("growth_jump", "threshold = 0", "'threshold' is not as it must be"),
        ("growth_jump", "minimum_years = 2", "'minimum_years' is not as it must be"),
        ("growth_jump", "measures = []", "an empty list"),
        ("parts_asset", 'dimension = "area"', "'dimension' is not as it must be"),
        ("parts_asset", 'price_bases = ["curent"]', "'price_bases.0' is not as it must be"),
        ("price_volume", 'price = "investment_prices"', "unknown measure 'investment_prices'"),
        ("unit_magnitude", "minimum_series = 1", "'minimum_series' is not as it must be"),
        ("decomposition_inputs", "instead = {net_stock = []}", "'net_stock' is not one of the measures"),
    ],
)
def test_a_parameter_out_of_bounds(tmp_path: Path, rule_id: str, change: str, what: str) -> None:
    (problem,) = refused(tmp_path, f'[[rule]]\nid = "{rule_id}"\ncitation = "test"\n{change}\n')
    assert (problem.place, problem.what) == ("line 4", what)


def test_a_change_needs_a_citation_and_keeps_the_kind(tmp_path: Path) -> None:
    text = '[[rule]]\nid = "coverage"\nseverity = "note"\n'
    text += '[[rule]]\nid = "sign"\ncitation = "c"\nkind = "range"\n'
    problems = refused(tmp_path, text)
    assert ("line 1", "citation") in {(problem.place, problem.expected) for problem in problems}
    assert ("line 7", "sign") in {(problem.place, problem.expected) for problem in problems}


def test_everything_wrong_is_told_at_once(tmp_path: Path) -> None:
    text = OWN.replace("level = 1", "level = -1") + OWN.replace('"own"', '"other"').replace(
        '"range"', '"rnge"'
    )
    assert [problem.place for problem in refused(tmp_path, text)] == ["line 5", "line 13"]


def test_a_text_that_is_not_toml(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, '[[rule]]\nid = "own\n')
    assert problem.place == "line 2"
