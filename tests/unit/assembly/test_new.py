import csv
from decimal import Decimal
from pathlib import Path

import pytest

from keelbook.assembly.declaration import load_assembly
from keelbook.assembly.new import write_new
from keelbook.errors import DeclarationError


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        title = file.readline()
        assert title.startswith("Invented figures")
        return list(csv.DictReader(file))


def test_writes_an_assembly_that_is_declared_without_fault(tmp_path: Path) -> None:
    written = write_new(tmp_path / "first")
    assert written == sorted(path for path in (tmp_path / "first").rglob("*") if path.is_file())
    assembly = load_assembly(tmp_path / "first")
    assert {tmp_path / "first" / source.file for source in assembly.sources} == set(written[1:])
    assert assembly.period[1] - assembly.period[0] >= 20
    assert "invented" in assembly.title


def test_the_invented_figures_are_complete(tmp_path: Path) -> None:
    write_new(tmp_path)
    first, last = load_assembly(tmp_path).period
    years = {str(year) for year in range(first, last + 1)}
    for name, series in (("investment", 4), ("prices", 2), ("hours", 4), ("income", 10), ("volume", 2)):
        found = rows(tmp_path / "sources" / f"{name}.csv")
        assert {row["year"] for row in found} == years
        assert len(found) == series * len(years)


def test_the_invented_income_account_adds_up(tmp_path: Path) -> None:
    write_new(tmp_path)
    accounts: dict[tuple[str, str], dict[str, Decimal]] = {}
    for row in rows(tmp_path / "sources" / "income.csv"):
        accounts.setdefault((row["industry"], row["year"]), {})[row["transaction"]] = Decimal(row["value"])
    for account in accounts.values():
        assert account["B.1g"] == account["D.1"] + account["B.2g"] + account["B.3g"] + account["D.29-D.39"]


def test_current_and_constant_value_added_agree_in_the_reference_year(tmp_path: Path) -> None:
    write_new(tmp_path)
    year = str(load_assembly(tmp_path).reference_year)
    volume = {
        row["industry"]: row["value"]
        for row in rows(tmp_path / "sources" / "volume.csv")
        if row["year"] == year
    }
    current = {
        row["industry"]: row["value"]
        for row in rows(tmp_path / "sources" / "income.csv")
        if row["year"] == year and row["transaction"] == "B.1g"
    }
    assert volume == current


def test_an_empty_folder_is_used(tmp_path: Path) -> None:
    assert write_new(tmp_path)[0] == tmp_path / "assembly.toml"


def test_a_folder_in_use_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("mine", encoding="utf-8")
    with pytest.raises(DeclarationError) as caught:
        write_new(tmp_path)
    (problem,) = caught.value.problems
    assert (problem.file, problem.found) == (str(tmp_path), "mine.txt")
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]


def test_a_file_is_no_folder(tmp_path: Path) -> None:
    (tmp_path / "name").write_text("x", encoding="utf-8")
    with pytest.raises(DeclarationError, match="not a folder"):
        write_new(tmp_path / "name")
