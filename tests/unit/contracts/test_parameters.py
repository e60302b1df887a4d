from dataclasses import dataclass
from pathlib import Path

import pytest

from keelbook.contracts import parameters
from keelbook.contracts.parameters import Parameter, declared_parameters, load_parameters, rule_files
from keelbook.errors import DeclarationError, Problem
from keelbook.locate import folder


@dataclass(frozen=True)
class Office:
    folder: Path
    rule_overrides: tuple[Parameter, ...] = ()


def refused(tmp_path: Path, text: str) -> list[Problem]:
    rules = tmp_path / "rules"
    rules.mkdir()
    (rules / "capital.toml").write_text(text, encoding="utf-8")
    with pytest.raises(DeclarationError) as caught:
        rule_files(tmp_path)
    assert all(problem.file.endswith("capital.toml") for problem in caught.value.problems)
    return list(caught.value.problems)


def test_every_declared_parameter_is_set_with_line_and_citation() -> None:
    names = [f"{file}.{name}" for file, group in declared_parameters().items() for name in group]
    shipped = load_parameters().all()
    assert [parameter.name for parameter in shipped] == names
    for parameter in shipped:
        file = folder("rules") / Path(parameter.file).name
        line = file.read_text(encoding="utf-8").splitlines()[parameter.line - 1]
        assert line == f"[{parameter.name.partition('.')[2]}]"
        assert parameter.citation


def test_every_observation_status_has_a_basis() -> None:
    basis = load_parameters().get("status", "basis_of").value
    assert basis["A"] == "observed"
    assert basis["I"] == "imputed"
    with pytest.raises(TypeError):
        basis["A"] = "assumed"


def test_precedence(tmp_path: Path) -> None:
    (tmp_path / "rules").mkdir()
    (tmp_path / "rules" / "capital.toml").write_text(
        '[trend_window]\nvalue = 8\ncitation = "unit"\n\n[timing]\nvalue = "end"\ncitation = "unit"\n',
        encoding="utf-8",
    )
    own = Parameter("capital.timing", "start", "assembly.toml", 7, "board")
    chosen = load_parameters(Office(tmp_path, (own,)))
    assert chosen.get("capital", "timing") == own
    window = chosen.get("capital", "trend_window")
    assert (window.value, window.file, window.line) == (8, "rules/capital.toml", 1)
    assert chosen.get("capital", "initial_stock") == load_parameters().get("capital", "initial_stock")
    assert len(chosen.all()) == len(load_parameters().all())


def test_unknown_parameter_names_the_nearest(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, '\n[timng]\nvalue = "mid"\ncitation = "x"\n')
    assert (problem.place, problem.remedy) == ("line 2", "did you mean 'timing'?")


def test_all_faults_of_a_rule_file_at_once(tmp_path: Path) -> None:
    text = (
        '[timing]\nvalue = "middle"\ncitation = "x"\n[trend_window]\nvalue = 2.5\ncitation = " "\n'
        "[age_price_mode]\nvalue = 1\ncitation = 'x'\n"
    )
    assert [(problem.place, problem.expected) for problem in refused(tmp_path, text)] == [
        ("line 2", "one of: start, mid, end"),
        ("line 5", "a whole number from 3 to 100"),
        ("line 6", "a source, or who decided and when"),
        ("line 8", "one of: pooled, by_life"),
    ]


def test_value_and_citation_are_both_required(tmp_path: Path) -> None:
    problems = refused(tmp_path, '[timing]\ncitation = "x"\n[trend_window]\nvalue = 5\nreason = "x"\n')
    assert [(problem.place, problem.what) for problem in problems] == [
        ("line 1", "'timing.value' is missing"),
        ("line 3", "'trend_window.citation' is missing"),
        ("line 5", "unknown key 'reason'"),
    ]


@pytest.mark.parametrize(
    ("file", "text", "line", "what"),
    [
        ("deflation", 'value = ["asset", "asst"]', 2, "'deflation.order' has an unknown value"),
        ("deflation", 'value = ["asset",\n"asset"]', 3, "'deflation.order' names one twice"),
        ("deflation", 'value = "asset"', 2, "'deflation.order' is not a list"),
    ],
)
def test_lists(tmp_path: Path, file: str, text: str, line: int, what: str) -> None:
    (tmp_path / "rules").mkdir()
    (tmp_path / "rules" / f"{file}.toml").write_text(f'[order]\n{text}\ncitation = "x"\n', encoding="utf-8")
    with pytest.raises(DeclarationError) as caught:
        rule_files(tmp_path)
    (problem,) = caught.value.problems
    assert (problem.place, problem.what) == (f"line {line}", what)


def test_a_table_must_be_complete_and_known(tmp_path: Path) -> None:
    (tmp_path / "rules").mkdir()
    full = dict(load_parameters().get("status", "basis_of").value)
    del full["V"]
    full |= {"AA": "observed", "B": "obs"}
    body = "\n".join(f'{key} = "{value}"' for key, value in full.items())
    text = f'[basis_of]\ncitation = "x"\n[basis_of.value]\n{body}\n'
    (tmp_path / "rules" / "status.toml").write_text(text, encoding="utf-8")
    with pytest.raises(DeclarationError) as caught:
        rule_files(tmp_path)
    added = text.splitlines().index('AA = "observed"') + 1
    assert {(problem.place, problem.what) for problem in caught.value.problems} == {
        (f"line {added}", "'status.basis_of' has an unknown key 'AA'"),
        ("line 5", "'status.basis_of' has an unknown value"),
        ("line 3", "'status.basis_of' does not say what 'V' is"),
    }


@pytest.mark.parametrize(("value", "accepted"), [("1", True), ("0.5", True), ("true", False), ("1.5", False)])
def test_numbers_become_floats_within_their_range(tmp_path: Path, value: str, accepted: bool) -> None:
    (tmp_path / "rules").mkdir()
    (tmp_path / "rules" / "income.toml").write_text(
        f'[mixed_income_labour_fraction]\nvalue = {value}\ncitation = "x"\n', encoding="utf-8"
    )
    if not accepted:
        with pytest.raises(DeclarationError, match="out of its range"):
            rule_files(tmp_path)
        return
    (parameter,) = rule_files(tmp_path)
    assert isinstance(parameter.value, float)


def test_a_shipped_file_must_be_complete(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for file in declared_parameters():
        text = (folder("rules") / f"{file}.toml").read_text(encoding="utf-8")
        (tmp_path / f"{file}.toml").write_text(text, encoding="utf-8")
    (tmp_path / "shares.toml").write_text("# nothing\n", encoding="utf-8")
    monkeypatch.setattr(parameters, "folder", lambda kind: tmp_path)
    with pytest.raises(DeclarationError) as caught:
        parameters._shipped.__wrapped__()
    (problem,) = caught.value.problems
    assert problem.what == "parameter 'shares.smoothing_years' is missing"


@pytest.mark.parametrize(
    ("text", "what"),
    [
        ('type = "choice"', "choices and the type do not go together"),
        ('type = "float"\nminimum = 0', "a number without its range"),
        ('type = "list"\nchoices = ["a"]\nkeys_from = "freq"', "keys_from goes with a table"),
    ],
)
def test_a_faulty_declaration_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, text: str, what: str
) -> None:
    (tmp_path / "parameters.toml").write_text(f'[a.b]\ndescription = "x"\n{text}\n', encoding="utf-8")
    monkeypatch.setattr(parameters, "folder", lambda kind: tmp_path)
    with pytest.raises(DeclarationError, match=what) as caught:
        declared_parameters.__wrapped__()
    assert caught.value.problems[0].place == "line 1"
