"""An assembly of one source, written, declared and taken in; the tests look at what came of its cells."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import duckdb
import pytest

from keelbook.assembly.declaration import load_assembly
from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.measures import load_measures
from keelbook.contracts.tables import load_tables
from keelbook.stages.intake import Intake, take_in

HEAD = """
title = "Invented"
area = "HV"
currency = "HVK"
reference_year = 2015
period = [2010, 2019]
"""


class Taken:
    """What one source became, and the tables it went to."""

    def __init__(self, intake: Intake, con: duckdb.DuckDBPyConnection) -> None:
        self.intake = intake
        self.con = con

    def cells(self) -> list[tuple[int, int, str]]:
        """(row, column, raw) of every source cell, in reading order."""
        return self.con.execute('select "row", "column", raw from source_cell order by cell_id').fetchall()

    def rejected(self) -> list[tuple[int, int, str, str]]:
        return self.con.execute('select "row", "column", raw, reason from rejected_cell').fetchall()

    def values(self) -> list[float]:
        return self.intake.observations["value"].tolist()

    def column(self, name: str) -> list[Any]:
        return self.intake.observations[name].tolist()

    def status(self) -> list[str]:
        codes = load_code_lists().codes("obs_status")
        return [codes[at] for at in self.intake.observations["obs_status"]]

    def rules(self) -> list[str]:
        return self.intake.findings["rule"].tolist()

    def finding(self) -> Any:
        """The only finding."""
        assert len(self.intake.findings) == 1, self.intake.findings.to_string()
        return self.intake.findings.iloc[0]


@pytest.fixture
def take(tmp_path: Path) -> Callable[..., Taken]:
    """Write `content` (bytes, or a function that saves to a path) as the source and take the assembly in."""

    def run(
        content: bytes | Callable[[Path], None], declared: str, *, more: str = "", name: str = ""
    ) -> Taken:
        file = name or ("data.csv" if isinstance(content, bytes) else "data.xlsx")
        (tmp_path / "sources").mkdir(exist_ok=True)
        path = tmp_path / "sources" / file
        if isinstance(content, bytes):
            path.write_bytes(content)
        else:
            content(path)
        usual = {"measure": '"investment"', "price_basis": '"current"', "unit_mult": "6", "frequency": '"A"'}
        usual |= dict(line.split(" = ", 1) for line in more.strip().splitlines())
        lines = [f"{key} = {value}" for key, value in usual.items() if value]
        head = [HEAD, "[[source]]", 'name = "one"', f'file = "sources/{file}"', *lines]
        (tmp_path / "assembly.toml").write_text("\n".join([*head, declared]), encoding="utf-8")
        assembly = load_assembly(tmp_path)
        lists = load_code_lists(tmp_path, [assembly.area])
        con = duckdb.connect()
        for table in ("source_file", "source_cell", "rejected_cell"):
            con.execute(load_tables()[table].create_sql())
        return Taken(take_in(con, assembly, lists, load_measures()), con)

    return run
