"""Files that are not as declared: each is refused with the right code, the place, what was found and a remedy."""

import csv
import json
import random
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from click.testing import CliRunner

from keelbook.cli.main import main
from keelbook.store.connect import open_read

BOOK, INCOME, HOURS, PERSONS = (
    "sources/capital_formation.xlsx",
    "sources/income_account.csv",
    "sources/hours_quarterly.csv",
    "sources/persons_employed.csv",
)


@dataclass(frozen=True)
class Fault:
    """A change to the sources, the exit code it must give, and what the message must say."""

    spoil: Callable[[Path], object]
    code: int
    says: tuple[str, ...]


def write(name: str, content: bytes) -> Callable[[Path], object]:
    return lambda folder: (folder / name).write_bytes(content)


def replace(name: str, old: bytes, new: bytes) -> Callable[[Path], object]:
    """Replace the first occurrence of some bytes, which must be there."""

    def spoil(folder: Path) -> None:
        text = (folder / name).read_bytes()
        assert old in text
        (folder / name).write_bytes(text.replace(old, new, 1))

    return spoil


def append(name: str, line: bytes) -> Callable[[Path], object]:
    return lambda folder: (folder / name).write_bytes((folder / name).read_bytes() + line)


def workbook(change: Callable[[Any], object]) -> Callable[[Path], object]:
    def spoil(folder: Path) -> None:
        book = openpyxl.load_workbook(folder / BOOK, rich_text=True)
        change(book)
        book.save(folder / BOOK)

    return spoil


def cell(sheet: str, address: str, value: object) -> Callable[[Path], object]:
    return workbook(lambda book: book[sheet].__setitem__(address, value))


FAULTS = {
    "missing file": Fault(
        lambda folder: (folder / PERSONS).unlink(),
        3,
        (
            "assembly.toml, line ",
            "the file of source 'persons' is not there",
            PERSONS,
            "wait for the delivery",
        ),
    ),
    "empty csv": Fault(write(INCOME, b""), 5, (INCOME, "the file is empty", "assembly.toml, line ")),
    "header without a record": Fault(
        write(HOURS, b"period,sector,branch,status,thousand hours\n"),
        5,
        (HOURS, "no record follows the header"),
    ),
    "empty workbook": Fault(write(BOOK, b""), 5, (BOOK, "the file is empty", "assembly.toml, line ")),
    "binary garbage for a workbook": Fault(
        write(BOOK, random.Random(1).randbytes(4096)), 5, (BOOK, "workbook")
    ),
    "text that is not utf-8": Fault(
        replace(HOURS, b"1985-Q3,S11,A", b"1985-Q3,S11,\xff"), 5, (HOURS, "line 4", "utf-8")
    ),
    "wrong code in a csv": Fault(
        replace(HOURS, b"2016-Q4,S11,A,employees", b"2016-Q4,S11,A9,employees"),
        5,
        (f"{HOURS}, line 129", "'A9'", "nearest: A (Agriculture", "[source.codes.industry]"),
    ),
    "wrong label in a sheet": Fault(
        cell("T4 Volume", "B7", "Manufacturin"),
        5,
        (f"{BOOK}, sheet 'T4 Volume', cell", "'Manufacturin'", "nearest: C (Manufacturing)"),
    ),
    "text in a number column of a sheet": Fault(
        cell("T2 Prices", "C9", "n/a yet"), 5, (f"{BOOK}, sheet 'T2 Prices', cell C9", "'n/a yet'")
    ),
    "text in a number column of a csv": Fault(
        replace(PERSONS, b";103.9;", b";about 100;"), 5, (f"{PERSONS}, line 2, column 5", "'about 100'")
    ),
    "a text that looks like a number where none is declared": Fault(
        cell("T4 Volume", "C8", "8112.3"),
        5,
        (f"{BOOK}, sheet 'T4 Volume', cell C8", "8112.3", "text_numbers"),
    ),
    "decimal comma where a point is declared": Fault(
        replace(PERSONS, b";103.9;", b";103,9;"), 5, (f"{PERSONS}, line 2, column 5", "103,9")
    ),
    "duplicate key": Fault(
        append(HOURS, b"1985-Q1,S11,A,employees,38712\n"),
        5,
        (f"{HOURS}, line 2942", "more than one figure for the same key", "row 2, column 5"),
    ),
    "an index of zero": Fault(
        cell("T2 Prices", "G12", 0), 5, (f"{BOOK}, sheet 'T2 Prices', cell G12", "found: 0", "more than 0")
    ),
    "a header one row lower in a sheet": Fault(
        workbook(lambda book: book["T4 Volume"].insert_rows(1)),
        5,
        (f"{BOOK}, sheet 'T4 Volume', row 5", "found in row 6", "assembly.toml, line "),
    ),
    "a header one line lower in a csv": Fault(
        lambda folder: (folder / INCOME).write_bytes(b"Statistik\r\n" + (folder / INCOME).read_bytes()),
        5,
        (f"{INCOME}, line 1", "'Jahr'", "found in row 2", "assembly.toml, line "),
    ),
    "a renamed column in a csv": Fault(
        replace(HOURS, b"thousand hours", b"thousands of hours"),
        5,
        (f"{HOURS}, line 1", "'thousand hours'", "thousands of hours"),
    ),
    "a renamed column in a sheet": Fault(
        cell("T1 Investment", "C4", "Type of asset"), 5, (f"{BOOK}, sheet 'T1 Investment'", "'Asset'")
    ),
    "a renamed sheet": Fault(
        workbook(lambda book: setattr(book["T4 Volume"], "title", "T4 Volumes")),
        5,
        (BOOK, "'T4 Volume'", "T4 Volumes"),
    ),
    "incomes that do not add up": Fault(
        replace(INCOME, b";B.1g;1.800,0;", b";B.1g;2.500,0;"),
        5,
        (
            f"{INCOME}, line 2, column 5",
            "value_added is not the sum of its terms",
            "found: 2500",
            "difference 700",
        ),
    ),
}


@pytest.mark.parametrize("name", FAULTS)
def test_is_refused_with_place_and_remedy(name: str, published: Path, refused: Callable[..., Any]) -> None:
    fault = FAULTS[name]
    fault.spoil(published)
    refusal = refused("assemble", published, "--quiet")
    assert refusal.code == fault.code, refusal.text
    for part in fault.says:
        assert part in refusal.text, refusal.text
    assert "\n    found: " in refusal.text
    assert "\n    expected: " in refusal.text
    assert "\n    to do: " in refusal.text
    assert refusal.shown == ""


def test_a_refused_run_keeps_what_it_found_for_its_owner(
    published: Path, refused: Callable[..., Any]
) -> None:
    cell("T2 Prices", "G12", 0)(published)
    assert refused("assemble", published, "--quiet").code == 5
    folder = published / "build" / "refused"
    assert sorted(path.name for path in folder.iterdir()) == ["evidence.duckdb", "log.jsonl"]
    assert all(path.stat().st_mode & 0o777 == 0o600 for path in folder.iterdir())
    with open_read(folder / "evidence.duckdb") as con:
        rows = con.execute(
            'select rule, sheet, "row", "column" from finding where severity = \'stop\''
        ).fetchall()
    assert rows == [("nonpositive_index", "T2 Prices", 12, 7)]


def test_screening_refuses_the_same(published: Path, refused: Callable[..., Any]) -> None:
    cell("T2 Prices", "G12", 0)(published)
    refusal = refused("screen", published)
    assert refusal.code == 5
    assert f"{BOOK}, sheet 'T2 Prices', cell G12" in refusal.text


def test_everything_wrong_is_told_at_once(published: Path, refused: Callable[..., Any]) -> None:
    cell("T2 Prices", "G12", 0)(published)
    write(INCOME, b"")(published)
    replace(PERSONS, b";103.9;", b";about 100;")(published)
    text = refused("assemble", published, "--quiet").text
    for part in ("cell G12", INCOME, f"{PERSONS}, line 2, column 5"):
        assert part in text


def test_a_mended_source_is_built_again(published: Path, refused: Callable[..., Any]) -> None:
    good = (published / INCOME).read_bytes()
    write(INCOME, b"")(published)
    assert refused("assemble", published, "--quiet").code == 5
    write(INCOME, good)(published)
    result = CliRunner().invoke(main, ["assemble", str(published), "--quiet"])
    assert result.exit_code == 0
    assert "Unchanged" in result.stdout


def without_a_quarter(folder: Path) -> None:
    lines = (folder / HOURS).read_bytes().splitlines(keepends=True)
    kept = [line for line in lines if not line.startswith(b"2012-Q2,S14,M,self-employed,")]
    assert len(kept) == len(lines) - 1
    (folder / HOURS).write_bytes(b"".join(kept))


def test_strict_turns_a_warning_into_a_stop(published: Path, refused: Callable[..., Any]) -> None:
    without_a_quarter(published)
    refusal = refused("assemble", published, "--quiet", "--strict")
    assert refusal.code == 5
    assert "[warn coverage]" in refusal.text
    assert "no figure for 2012-Q2" in refusal.text
    assert refused("screen", published, "--strict").code == 5


def test_without_strict_the_warning_is_told_and_the_year_is_left_out(published: Path) -> None:
    without_a_quarter(published)
    result = CliRunner().invoke(main, ["assemble", str(published), "--quiet"])
    assert result.exit_code == 0, result.stderr
    assert "0 stop, 8 warn" in result.stdout
    assert "Ready      1,431 of 1,435 rows" in result.stdout
    with open_read(published / "build" / "panel.duckdb") as con:
        rules = con.execute(
            "select rule, sector, industry, time_period from finding where industry = 'M' and severity = 'warn' "
            "order by rule"
        ).fetchall()
        gaps = con.execute(
            "select area, sector, industry, time_period, reason from decomposition_input where not ready "
            "order by sector, industry"
        ).fetchall()
    assert rules == [("coverage", "S14", "M", "2012-Q2"), ("incomplete_year", "S14", "M", "2012")]
    assert [row[:4] for row in gaps] == [
        ("XV", sector, industry, "2012") for sector in ("S1", "S14") for industry in ("M", "_T")
    ]
    assert all("no hours worked" in reason for *_, reason in gaps)
    # An unchanged rerun holds the stored findings to --strict as well.
    assert CliRunner().invoke(main, ["assemble", str(published), "--quiet", "--strict"]).exit_code == 5


def test_the_faulty_demo_is_stopped_and_every_planted_fault_is_named(
    root: Path, copy_fixture: Callable[[str, Path], Path], tmp_path: Path
) -> None:
    folder = copy_fixture("demo_faulty", tmp_path / "faulty")
    result = CliRunner().invoke(main, ["assemble", str(folder), "--quiet"])
    assert result.exit_code == 5
    assert "Traceback" not in result.output
    assert not (folder / "build" / "panel.duckdb").exists()
    with open_read(folder / "build" / "refused" / "evidence.duckdb") as con:
        cursor = con.execute('select rule, file, sheet, "row", "column", found, remedy from finding')
        names = [one[0] for one in cursor.description]
        findings = [dict(zip(names, row, strict=True)) for row in cursor.fetchall()]
    assert all(finding["found"] and finding["remedy"] for finding in findings)
    path = root / "fixtures" / "demo_faulty" / "expected_findings.csv"
    with path.open(encoding="utf-8", newline="") as lines:
        planted = list(csv.DictReader(lines))
    assert len(planted) == 9

    def names_it(finding: dict[str, Any], wanted: dict[str, str]) -> bool:
        """A label that is no code is named at the first figure under it: same row, with the label as found."""
        of_label = wanted["rule"] == "unknown_code"
        place = ("rule", "file", "sheet", "row", *(() if of_label else ("column",)))
        said = wanted["found"] in finding["found"] if of_label else True
        return said and all(wanted[name] in ("", str(finding[name])) for name in place)

    missed = [wanted for wanted in planted if not any(names_it(finding, wanted) for finding in findings)]
    assert missed == []


def test_refusals_are_json_when_asked_for(published: Path, refused: Callable[..., Any]) -> None:
    write(INCOME, b"")(published)
    answer = json.loads(refused("assemble", published, "--json").shown)
    assert answer["error"] == "StopFindings"
    assert answer["problems"][0]["file"] == INCOME
    assert answer["problems"][0]["remedy"]
