"""Declarations that cannot be meant: exit 2, with file and line, and nothing is read or written."""

import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

ASSET_HEAD = (
    "asset,industry,efficiency,rate,life,declining_balance_rate,gross_life,b,retirement,discount_rate,"
    "citation,status"
)


def declared(folder: Path, old: str, new: str) -> int:
    """Change the first occurrence of a text in assembly.toml; return its line."""
    path = folder / "assembly.toml"
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    return text[: text.index(old)].count("\n") + 1


FAULTS: dict[str, tuple[str, str, tuple[str, ...]]] = {
    "a misspelt key": (
        "reference_year = 2015",
        "refrence_year = 2015",
        ("'refrence_year'", "did you mean 'reference_year'?"),
    ),
    "a misspelt key of a source": (
        "unit_mult = 6",
        "unit_mul = 6",
        ("'unit_mul'", "did you mean 'unit_mult'?"),
    ),
    "a measure that does not exist": (
        'measure = "hours_worked"',
        'measure = "hours_work"',
        ("'hours_work'", "did you mean 'hours_worked'?"),
    ),
    "both csv and excel": (
        '[source.csv]\nencoding = "utf-8"',
        '[source.excel]\nsheet = "T1"\n[source.csv]',
        (),
    ),
    "a reference year outside the period": (
        "reference_year = 2015",
        "reference_year = 2031",
        ("2031", "1985", "2019"),
    ),
    "a period that ends before it starts": ("period = [1985, 2019]", "period = [2019, 1985]", ()),
    "a path out of the folder": (
        'file = "sources/persons_employed.csv"',
        'file = "../persons_employed.csv"',
        ("../persons_employed.csv",),
    ),
    "an absolute path": (
        'file = "sources/persons_employed.csv"',
        'file = "/etc/hostname"',
        ("/etc/hostname",),
    ),
    "text that is not TOML": ('area = "XV"', "area = XV", ()),
    "a code that is not in its list": ('"Manufacturing" = "C"', '"Manufacturing" = "C1"', ("C1",)),
}


@pytest.mark.parametrize("name", FAULTS)
def test_is_refused_with_its_line(name: str, published: Path, refused: Callable[..., Any]) -> None:
    old, new, says = FAULTS[name]
    line = declared(published, old, new)
    refusal = refused("assemble", published, "--quiet")
    assert refusal.code == 2, refusal.text
    places = [int(at) for at in re.findall(r"assembly\.toml, line (\d+)", refusal.text)]
    # A missing or doubled part is told at the start of its table, a few lines above or below the change.
    assert places, refusal.text
    assert min(abs(at - line) for at in places) <= 8, refusal.text
    for part in says:
        assert part in refusal.text, refusal.text
    assert "\n    expected: " in refusal.text or "\n    to do: " in refusal.text
    assert not (published / "build" / "refused").exists()


def test_a_misspelt_key_is_told_at_its_own_line(published: Path, refused: Callable[..., Any]) -> None:
    line = declared(published, "period = [1985, 2019]", "perriod = [1985, 2019]")
    text = refused("assemble", published, "--quiet").text
    assert f"assembly.toml, line {line}: " in text
    assert "did you mean 'period'?" in text


def test_everything_wrong_is_told_at_once(published: Path, refused: Callable[..., Any]) -> None:
    declared(published, 'title = "Vorrelund', 'titel = "Vorrelund')
    declared(published, 'measure = "hours_worked"', 'measure = "hours_work"')
    declared(published, 'delimiter = ";"\ndecimal', 'delimeter = ";"\ndecimal')
    text = refused("assemble", published, "--quiet").text
    for part in ("did you mean 'title'?", "did you mean 'hours_worked'?", "did you mean 'delimiter'?"):
        assert part in text


def test_a_rule_without_a_citation_is_refused(published: Path, refused: Callable[..., Any]) -> None:
    path = published / "assembly.toml"
    lines = len(path.read_text(encoding="utf-8").splitlines())
    with path.open("a", encoding="utf-8") as file:
        file.write('\n[rules.capital.timing]\nvalue = "end"\n')
    refusal = refused("assemble", published, "--quiet")
    assert refusal.code == 2
    assert "citation" in refusal.text
    assert f"assembly.toml, line {lines + 2}" in refusal.text


def test_an_unknown_method_lists_the_valid_ones(published: Path, refused: Callable[..., Any]) -> None:
    with (published / "assembly.toml").open("a", encoding="utf-8") as file:
        file.write('\n[rules.capital.timing]\nvalue = "middle"\ncitation = "decision of the accounts unit"\n')
    refusal = refused("assemble", published, "--quiet")
    assert refusal.code == 2
    assert "'middle'" in refusal.text
    for valid in ("start", "mid", "end"):
        assert valid in refusal.text


def test_a_life_and_a_rate_for_one_asset_contradict(published: Path, refused: Callable[..., Any]) -> None:
    (published / "rules").mkdir(exist_ok=True)
    row = "N1132,_T,cohort_geometric,0.3,7,,,,simultaneous,,decision of the accounts unit,seen"
    (published / "rules" / "assets.csv").write_text(f"{ASSET_HEAD}\n{row}\n", encoding="utf-8")
    refusal = refused("assemble", published, "--quiet")
    assert refusal.code == 2
    assert "rules/assets.csv, line 2" in refusal.text
    assert "life" in refusal.text
    assert "rate" in refusal.text
    assert "\n    to do: " in refusal.text


def test_a_link_that_leads_out_of_the_folder(
    published: Path, tmp_path: Path, refused: Callable[..., Any]
) -> None:
    outside = tmp_path / "outside.csv"
    inside = published / "sources" / "persons_employed.csv"
    inside.rename(outside)
    inside.symlink_to(outside)
    refusal = refused("assemble", published, "--quiet")
    assert refusal.code == 2
    assert "the file is not inside the assembly" in refusal.text
    assert "assembly.toml, line " in refusal.text
    assert "sources/persons_employed.csv" in refusal.text


def test_a_folder_without_a_declaration(tmp_path: Path, refused: Callable[..., Any]) -> None:
    refusal = refused("assemble", tmp_path, "--quiet")
    assert refusal.code == 2
    assert "assembly.toml" in refusal.text
    assert "\n    to do: " in refusal.text


def test_an_unknown_option_is_a_usage_error(published: Path, refused: Callable[..., Any]) -> None:
    assert refused("assemble", published, "--strickt").code == 2


def test_new_does_not_write_into_a_folder_in_use(published: Path, refused: Callable[..., Any]) -> None:
    before = sorted(published.rglob("*"))
    refusal = refused("new", published)
    assert refusal.code == 2
    assert "the folder is not empty" in refusal.text
    assert sorted(published.rglob("*")) == before
