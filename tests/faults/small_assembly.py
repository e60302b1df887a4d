"""An assembly of two industries that takes a second: an income account by year, and hours by quarter."""

from pathlib import Path
from typing import Any

from click.testing import CliRunner, Result

from keelbook.cli.main import main
from keelbook.store.connect import open_read

DECLARED = """\
title = "Invented"
area = "HV"
currency = "HVK"
reference_year = 2012
period = [2010, 2014]

[[source]]
name = "income"
file = "sources/income.csv"
price_basis = "current"
unit_mult = 6
frequency = "A"
[source.csv]
[source.long]
time_period = "year"
value = "value"
measure = "item"
industry = "industry"
[source.marks]
missing = { ":" = "O" }

[[source]]
name = "hours"
file = "sources/hours.csv"
measure = "hours_worked"
unit_mult = 3
frequency = "Q"
[source.csv]
[source.long]
time_period = "quarter"
value = "value"
industry = "industry"
[source.fixed]
worker_group = "SAL"
"""
ITEMS = {
    "value_added": "100",
    "compensation_of_employees": "60",
    "operating_surplus": "35",
    "mixed_income": "3",
    "net_taxes_on_production": "2",
}


def write(folder: Path, **changed: str) -> Path:
    """Write the assembly; `changed` gives cells another text, by item, industry and year: mixed_income_B_2013."""
    (folder / "sources").mkdir(parents=True)
    (folder / "assembly.toml").write_text(DECLARED, encoding="utf-8")
    lines = ["industry,item,year,value"]
    for industry in ("A", "B"):
        for year in range(2010, 2015):
            for item, text in ITEMS.items():
                lines.append(f"{industry},{item},{year},{changed.get(f'{item}_{industry}_{year}', text)}")
    (folder / "sources" / "income.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    lines = ["industry,quarter,value"]
    for industry in ("A", "B"):
        lines += [
            f"{industry},{year}-Q{quarter},{500 + quarter}"
            for year in range(2010, 2015)
            for quarter in range(1, 5)
        ]
    (folder / "sources" / "hours.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return folder


def line_of(folder: Path, industry: str, item: str, year: int) -> int:
    """Return the line of a figure of the income account."""
    lines = (folder / "sources" / "income.csv").read_text(encoding="utf-8").splitlines()
    return next(at for at, line in enumerate(lines, 1) if line.startswith(f"{industry},{item},{year},"))


def entries(folder: Path, name: str, *given: dict[str, Any]) -> None:
    """Write corrections.toml or acceptances.toml; `name` is that of the tables in it."""
    text = ""
    for one in given:
        text += f"[[{name}]]\n"
        for key, value in one.items():
            bare = key == "date" or not isinstance(value, str)
            text += f"{key} = {value}\n" if bare else f'{key} = "{value}"\n'
    (folder / f"{name}s.toml").write_text(text, encoding="utf-8")


def keelbook(*arguments: object) -> Result:
    """Run a command; what it prints to the two streams is kept apart."""
    return CliRunner().invoke(main, [str(argument) for argument in arguments])


def rows(folder: Path, sql: str, file: str = "evidence") -> list[tuple[Any, ...]]:
    """Return the rows of a query on the published build."""
    with open_read(folder / "build" / f"{file}.duckdb") as con:
        return con.execute(sql).fetchall()
