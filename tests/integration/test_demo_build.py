"""The assembled demo as a whole: what came in, what is published, and in which form."""

import csv
import os
import shutil
import subprocess
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import duckdb
import openpyxl
import pytest

from keelbook.assembly.run import Report
from keelbook.contracts.measures import load_measures
from keelbook.contracts.tables import load_tables
from keelbook.outputs.summary import summary

PANEL_COLUMNS = (
    "area", "sector", "industry", "asset", "worker_group", "time_period", "measure", "method", "price_basis",
    "value", "unit", "unit_mult", "obs_status", "conf_status", "chosen", "observed_part", "imputed_part",
    "assumed_part",
)  # fmt: skip
KEY = PANEL_COLUMNS[:9]
DIMS = PANEL_COLUMNS[:5]
MISSING = ("O", "M", "L", "H", "Q")


def cells_of_the_demo(sources: Path) -> dict[str, int]:
    """Count the cells of figures of every source without Keelbook: openpyxl for the workbook, csv for the rest."""
    out = {}
    for book, source, sheet, header, first, labels in (
        ("capital_formation", "investment", "T1 Investment", 5, 6, 3),
        ("capital_formation", "prices", "T2 Prices", 5, 6, 1),
        ("capital_formation", "prices_old_base", "T2b Old base", 5, 6, 1),
        ("capital_formation", "branch_prices", "T3 Prices by branch", 6, 7, 1),
        ("capital_formation", "value_added_volume", "T4 Volume", 5, 6, 2),
        ("capital_formation", "land_and_inventories", "T5 Land and inventories", 5, 6, 3),
        ("neighbour", "neighbour_investment", "Investment", 4, 5, 2),
        ("neighbour", "neighbour_prices", "Prices", 4, 5, 1),
        ("neighbour", "neighbour_volume", "Volume", 4, 5, 1),
        ("neighbour", "neighbour_income", "Accounts", 4, 5, 4),
        ("neighbour", "neighbour_hours", "Hours", 4, 5, 2),
        ("neighbour", "neighbour_persons", "Persons", 4, 5, 2),
    ):
        workbook = openpyxl.load_workbook(sources / f"{book}.xlsx")
        rows = list(workbook[sheet].iter_rows(values_only=True))
        width = len(rows[header - 1]) - labels
        count = 0
        for row in rows[first - 1 :]:
            # A merged label stands in its first row only; the last label column is never merged.
            if row[labels - 1] is None:
                break
            count += width
        out[source] = count
    for source, file, encoding, delimiter, labels in (
        ("income", "income_account.csv", "cp1252", ";", 5),
        ("hours", "hours_quarterly.csv", "utf-8-sig", ",", 4),
        ("persons", "persons_employed.csv", "utf-8", ";", 3),
        ("hours_by_skill", "hours_by_skill.csv", "utf-8", ",", 3),
        ("pay_by_skill", "compensation_by_skill.csv", "utf-8", ",", 3),
        ("benchmark", "benchmark_stocks.csv", "utf-8", ",", 4),
        ("volume_changes", "volume_changes.csv", "utf-8", ",", 4),
    ):
        with (sources / file).open(encoding=encoding, newline="") as lines:
            records = list(csv.reader(lines, delimiter=delimiter))[1:]
        long = source in ("income", "hours", "benchmark", "volume_changes")
        out[source] = len(records) if long else sum(len(record) - labels for record in records)
    return out


def test_every_cell_of_the_sources_is_accounted_for(demo_report: Report, demo_build: Path) -> None:
    counted = cells_of_the_demo(demo_build / "sources")
    assert len(counted) == len(demo_report.counts)
    for row in demo_report.counts.to_dict("records"):
        assert row["cells"] == counted[str(row["source"])], row["source"]
        assert row["cells"] == row["observations"] + row["rejected"] + row["missing"]


def test_the_cells_are_stored_as_counted(
    demo_report: Report, evidence: duckdb.DuckDBPyConnection, demo_build: Path
) -> None:
    stored = dict(
        evidence.execute(
            "select f.source, count(*) from source_cell c join source_file f using (file_id) group by f.source"
        ).fetchall()
    )
    assert stored == cells_of_the_demo(demo_build / "sources")
    cited = evidence.execute(
        "select count(distinct cell_id) from observation where value is not null"
    ).fetchall()
    assert cited[0][0] == demo_report.counts["observations"].sum()


def where(row: Mapping[Any, Any]) -> tuple[str, ...]:
    """Return rule, severity and place of a finding: its cell, or its series where a stage found it."""
    cell, series = ("file", "sheet", "row", "column"), (*DIMS, "measure", "time_period")
    return (row["rule"], row["severity"], *(str(row[name]) for name in (cell if row["file"] else series)))


def test_the_demo_is_published_with_the_planted_findings_and_no_others(
    demo_report: Report, root: Path
) -> None:
    assert not demo_report.unchanged
    with (root / "fixtures" / "demo" / "expected_findings.csv").open(encoding="utf-8", newline="") as lines:
        planted = [where(row) for row in csv.DictReader(lines)]
    found = [where(row) for row in demo_report.findings.to_dict("records")]
    assert sorted(found) == sorted(planted)
    assert {severity for _, severity, *_ in found} == {"warn", "note"}


def test_the_summary_fits_a_screen_and_counts_in_whole_cells(demo_report: Report, demo_build: Path) -> None:
    lines = summary(demo_report, demo_build)
    assert len(lines) <= 25
    # A finding names its file, cell, rule and series in one line, however long.
    assert max(len(line) for line in lines if "[warn " not in line) <= 130
    read = next(line for line in lines if line.startswith("Read"))
    assert "19,114 cells = 19,095 observations + 0 rejected + 19 declared missing" in read


@pytest.mark.parametrize("file", ["panel", "evidence"])
def test_every_table_is_as_its_contract_says_when_read_back(
    file: str, demo_report: Report, request: pytest.FixtureRequest
) -> None:
    con: duckdb.DuckDBPyConnection = request.getfixturevalue(file)
    names = [name for (name,) in con.execute("select table_name from duckdb_tables() order by 1").fetchall()]
    contracts = load_tables()
    assert set(names) <= set(contracts)
    for name in names:
        contract = contracts[name]
        types = {row[0]: row[1] for row in con.execute(f'describe "{name}"').fetchall()}
        assert types == {column: declared.sql for column, declared in contract.column.items()}, name
        contract.validate(con.execute(f'select * from "{name}"').df(), demo_report.assembly.lists)


def test_every_contract_is_a_table_of_one_of_the_two_files(
    panel: duckdb.DuckDBPyConnection, evidence: duckdb.DuckDBPyConnection
) -> None:
    tables: set[str] = set()
    for con in (panel, evidence):
        tables |= {name for (name,) in con.execute("select table_name from duckdb_tables()").fetchall()}
    assert tables == set(load_tables())


def test_the_view_panel_has_the_documented_columns(panel: duckdb.DuckDBPyConnection) -> None:
    assert tuple(row[0] for row in panel.execute("describe panel").fetchall()) == PANEL_COLUMNS


def test_no_key_is_null_and_no_key_is_there_twice(panel: duckdb.DuckDBPyConnection) -> None:
    nulls = " or ".join(f"{name} is null" for name in (*KEY, "unit", "obs_status", "conf_status", "chosen"))
    assert panel.execute(f"select count(*) from panel where {nulls}").fetchall() == [(0,)]
    twice = panel.execute(
        f"select count(*) from panel group by {', '.join(KEY)} having count(*) > 1"
    ).fetchall()
    assert twice == []


def test_a_value_is_null_exactly_under_a_status_that_says_so(panel: duckdb.DuckDBPyConnection) -> None:
    rows = panel.execute("select distinct obs_status, value is null from panel order by all").fetchall()
    assert ("A", False) in rows
    assert all(is_null == (status in MISSING) for status, is_null in rows)


def test_no_figure_is_infinite_or_not_a_number(panel: duckdb.DuckDBPyConnection) -> None:
    assert panel.execute("select count(*) from panel where not isfinite(value)").fetchall() == [(0,)]


def test_the_three_parts_of_the_data_basis_sum_to_one(panel: duckdb.DuckDBPyConnection) -> None:
    assert panel.execute(
        "select count(*) from panel where observed_part is not null and "
        "(abs(observed_part + imputed_part + assumed_part - 1) > 1e-9 or observed_part < -1e-9 "
        "or imputed_part < 0 or assumed_part < 0)"
    ).fetchall() == [(0,)]


def test_only_figures_that_are_one_by_definition_rest_on_no_data(panel: duckdb.DuckDBPyConnection) -> None:
    rows = panel.execute(
        "select distinct measure, value from panel where observed_part is null order by all"
    ).fetchall()
    assert {measure for measure, _ in rows} == {
        "capital_services",
        "labour_input",
        "residual_level",
        "investment_index",
        "net_stock_index",
        "consumption_of_fixed_capital_index",
    }
    assert {value for _, value in rows} == {1.0}


def test_stocks_lose_their_assumed_part_and_estimates_are_imputed(panel: duckdb.DuckDBPyConnection) -> None:
    first, last = panel.execute(
        "select max(assumed_part) filter (where time_period = '1985'), "
        "max(assumed_part) filter (where time_period = '2019') "
        "from panel where measure = 'net_stock' and price_basis = 'constant' and method = 'perpetual_inventory'"
        " and asset = 'N1173'"
    ).fetchall()[0]
    assert first > 0.3
    assert last < 0.001
    assert panel.execute(
        "select distinct imputed_part from panel where measure = 'investment' and method = 'delivered' "
        "and obs_status = 'E'"
    ).fetchall() == [(1.0,)]


def test_every_measure_and_price_basis_is_allowed(panel: duckdb.DuckDBPyConnection) -> None:
    measures = load_measures()
    rows = panel.execute(
        "select distinct area, measure, price_basis, unit, unit_mult, industry, asset, worker_group from series"
    ).fetchall()
    assert len({row[1] for row in rows}) > 40
    for area, name, basis, unit, unit_mult, *dims in rows:
        measure = measures[name]
        assert basis in measure.price_bases, (name, basis)
        assert unit_mult == measure.unit_mult
        assert unit == (f"{area}C" if measure.unit == "currency" else measure.unit)
        for dim, code in zip(("industry", "asset", "worker_group"), dims, strict=True):
            applies = getattr(measure.dims, dim)
            assert (code == "_Z") == (applies == "none"), (name, dim, code)
            assert applies != "required" or code != "_T", (name, dim, code)


def test_exactly_one_method_is_chosen_for_a_key(panel: duckdb.DuckDBPyConnection) -> None:
    key = "area, sector, industry, asset, worker_group, time_period, measure, price_basis"
    several = panel.execute(
        f"select {key} from panel where chosen group by {key} having count(*) > 1"
    ).fetchall()
    assert several == []
    without = panel.execute(
        f"select distinct measure, price_basis from (select {key} from panel group by {key} having not bool_or(chosen))"
    ).fetchall()
    # Opening stocks lie before the first year of the stocks. An index on its earlier base lives on in the linked one.
    stocks = [(f"{name}_stock", "constant") for name in ("gross", "net", "productive")]
    historic = [("gross_stock", "historic"), ("net_stock", "historic")]
    # What other volume changes come to by vintages stands beside what was delivered, also in years without any.
    beside = [("investment_price", "earlier_index"), ("other_volume_changes", "constant")]
    assert sorted(without) == sorted([*stocks, *historic, *beside])
    years = panel.execute(
        f"select distinct time_period from (select {key} from panel where measure like '%_stock' group by {key} "
        "having not bool_or(chosen))"
    ).fetchall()
    assert years == [("1984",)]


def test_decomposition_input_is_ready_and_says_nothing_against_it(panel: duckdb.DuckDBPyConnection) -> None:
    rows = panel.execute("select ready, reason, count(*) from decomposition_input group by all").fetchall()
    # XV: 16 pairs of sector and industry, 12 industries, 3 sectors, the total; XW: 8 industries and the total.
    assert rows == [(True, "", (16 + 12 + 3 + 1 + 8 + 1) * 35)]


def test_the_evidence_file_is_for_its_owner_alone(demo_build: Path) -> None:
    generation = (demo_build / "build" / "evidence.duckdb").resolve()
    assert generation.stat().st_mode & 0o777 == 0o600


def test_raw_text_is_only_in_the_evidence_file(
    panel: duckdb.DuckDBPyConnection, evidence: duckdb.DuckDBPyConnection
) -> None:
    raw = "1032.9^1"
    assert evidence.execute("select count(*) from source_cell where raw = ?", [raw]).fetchall() == [(1,)]
    texts = panel.execute(
        "select table_name, column_name from duckdb_columns() where data_type = 'VARCHAR' and not internal"
    ).fetchall()
    assert len(texts) > 20
    for table, column in texts:
        hits = panel.execute(f'select count(*) from "{table}" where "{column}" = ?', [raw]).fetchall()
        assert hits == [(0,)], (table, column)


def test_the_manifest_is_one_that_sha256sum_reads(demo_build: Path) -> None:
    folder = (demo_build / "build" / "panel.duckdb").resolve().parent
    lines = (folder / "manifest.sha256").read_text(encoding="utf-8").splitlines()
    assert [line.split("  ")[1] for line in lines] == ["evidence.duckdb", "log.jsonl", "panel.duckdb"]
    program = shutil.which("sha256sum")
    if program is not None:
        done = subprocess.run(
            [program, "-c", "--strict", "manifest.sha256"], cwd=folder, capture_output=True, check=False
        )
        assert done.returncode == 0, done.stderr


def test_the_build_folder_holds_one_generation_and_two_links(demo_build: Path, demo_report: Report) -> None:
    build = demo_build / "build"
    assert sorted(path.name for path in build.iterdir() if path.name != ".lock") == sorted(
        [demo_report.identity.build_id, "current", "panel.duckdb", "evidence.duckdb"]
    )
    assert os.readlink(build / "current") == demo_report.identity.build_id
