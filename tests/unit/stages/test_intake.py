"""Intake over several sources: common codes, defaults, statuses, the count of cells, and what stops it."""

import hashlib
import math
from pathlib import Path

import duckdb
import pytest

from keelbook.assembly.declaration import load_assembly
from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.measures import load_measures
from keelbook.contracts.tables import load_tables
from keelbook.errors import DeclarationError, SourceMissing
from keelbook.stages import intake
from keelbook.stages.intake import Intake, take_in

LISTS = load_code_lists(areas=["HV"])
HEAD = """
title = "Invented"
area = "HV"
currency = "HVK"
reference_year = 2015
period = [2010, 2019]
"""
INVESTMENT = """
[[source]]
name = "investment"
file = "sources/investment.csv"
measure = "investment"
price_basis = "current"
unit_mult = 6
frequency = "A"
[source.csv]
[source.long]
time_period = "year"
value = "value"
industry = "industry"
asset = "asset"
"""
HOURS = """
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
obs_status = "flag"
conf_status = "conf"
[source.fixed]
worker_group = "SAL"
[source.marks]
missing = { "-" = "M" }
flags = { p = "P", e = "E" }
"""
INCOME = """
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
worker_group = "group"
[source.codes.measure]
"D.1" = "compensation_of_employees"
"B.1g" = "value_added"
"""
INVESTMENT_CSV = "industry,asset,year,value\nC,N111,2015,1.5\nXX,N111,2015,2\n"
HOURS_CSV = "industry,quarter,value,flag,conf\nC,2015-Q1,10,,F\nC,2015-Q2,11,P,C\nYY,2015-Q3,-,,\n"


def taken(folder: Path, declared: str, **files: str) -> tuple[Intake, duckdb.DuckDBPyConnection]:
    (folder / "sources").mkdir(exist_ok=True)
    for name, text in files.items():
        (folder / "sources" / f"{name}.csv").write_text(text, encoding="utf-8")
    (folder / "assembly.toml").write_text(HEAD + declared, encoding="utf-8")
    con = duckdb.connect()
    for table in ("source_file", "source_cell", "rejected_cell"):
        con.execute(load_tables()[table].create_sql())
    return take_in(con, load_assembly(folder), LISTS, load_measures()), con


def statuses(result: Intake) -> list[str]:
    return [LISTS.codes("obs_status")[at] for at in result.observations["obs_status"]]


def test_sources_share_one_table_of_codes_with_the_unknown_labels_after_the_list(tmp_path: Path) -> None:
    result, _ = taken(tmp_path, INVESTMENT + HOURS, investment=INVESTMENT_CSV, hours=HOURS_CSV)
    observations = result.observations
    listed = LISTS.codes("industry")
    assert observations["industry"].cat.categories.tolist() == [*listed, "XX", "YY"]
    codes = observations["industry"].cat.codes
    assert (codes >= len(listed)).tolist() == [False, True, False, False, True]
    assert observations["asset"].cat.categories.tolist() == list(LISTS.codes("asset"))
    assert observations["source"].tolist() == ["investment"] * 2 + ["hours"] * 3
    assert observations["file_id"].tolist() == [0, 0, 1, 1, 1]
    assert observations["cell_id"].tolist() == [0, 1, 2, 3, 4]
    assert observations["unit_mult"].tolist() == [6, 6, 3, 3, 3]
    assert observations["period"].tolist() == [2015, 2015, 8060, 8061, 8062]


def test_the_columns_and_their_types(tmp_path: Path) -> None:
    result, _ = taken(tmp_path, INVESTMENT, investment=INVESTMENT_CSV)
    texts = ["source", "area", "sector", "industry", "asset", "worker_group", "measure", "price_basis"]
    assert {name: str(kind) for name, kind in result.observations.dtypes.items()} == {
        **dict.fromkeys([*texts, "frequency"], "category"),
        "period": "int32",
        "value": "float64",
        "obs_status": "int8",
        "conf_status": "int8",
        "unit_mult": "int8",
        "cell_id": "int64",
        "file_id": "int16",
        "row": "int32",
        "column": "int16",
    }


def test_dimensions_that_a_source_does_not_give(tmp_path: Path) -> None:
    result, _ = taken(tmp_path, INVESTMENT + HOURS, investment=INVESTMENT_CSV, hours=HOURS_CSV)
    dims = ["area", "sector", "asset", "worker_group"]
    assert result.observations.iloc[0][dims].tolist() == ["HV", "S1", "N111", "_Z"]
    assert result.observations.iloc[2][dims].tolist() == ["HV", "S1", "_Z", "SAL"]


def test_a_column_of_measures_gives_each_row_the_defaults_of_its_own(tmp_path: Path) -> None:
    text = "item,group,year,value\nD.1,,2015,1\nB.1g,,2015,2\nB.9,,2015,3\n"
    result, _ = taken(tmp_path, INCOME, income=text)
    observations = result.observations
    assert observations["measure"].tolist() == ["compensation_of_employees", "value_added", "B.9"]
    assert (observations["measure"].cat.codes < len(load_measures())).tolist() == [True, True, False]
    assert observations["worker_group"].tolist()[1] == "_Z"
    assert observations["worker_group"].tolist()[2] == ""
    assert observations["asset"].tolist()[:2] == ["_Z", "_Z"]


def test_status_comes_from_mark_flag_or_column(tmp_path: Path) -> None:
    rows = ["10,,", "11p,,", "12,e,", "13p,P,", "-,,", "-,O,", ",P,", "14,A,C"]
    text = "industry,quarter,value,flag,conf\n" + "".join(
        f"C,201{at}-Q1,{row}\n" for at, row in enumerate(rows)
    )
    result, _ = taken(tmp_path, HOURS, hours=text)
    assert statuses(result) == ["A", "P", "E", "P", "M", "O", "O", "A"]
    free = LISTS.position("conf_status", "F")
    assert (result.observations["conf_status"] == free).tolist() == [True] * 7 + [False]


@pytest.mark.parametrize(
    ("row", "words"),
    [
        ("10,z,", "the status 'z' is not in the list"),
        ("10,,z", "the status 'z' is not in the list"),
        ("10p,E,", "the cell says P, the status column E"),
        ("10,M,", "a figure under the status M"),
    ],
)
def test_a_status_that_cannot_be_is_refused(tmp_path: Path, row: str, words: str) -> None:
    result, con = taken(tmp_path, HOURS, hours=f"industry,quarter,value,flag,conf\nC,2015-Q1,{row}\n")
    assert result.findings["rule"].tolist() == ["unreadable_status"]
    assert words in result.findings["message"][0]
    assert con.execute('select "row", "column" from rejected_cell').fetchall() == [(2, 3)]


def test_labels_are_mapped_as_declared_without_blanks_and_footnotes(tmp_path: Path) -> None:
    declared = INVESTMENT + '[source.codes.industry]\n"Man. total" = "C"\n"F\u00b2" = "F"\n'
    labels = ["Man. total", " Man.  total ", "Man. total\u00b9", "F\u00b2", "A", "Mann. total"]
    text = "industry,asset,year,value\n" + "".join(f"{label},N111,2015,1\n" for label in labels)
    result, _ = taken(tmp_path, declared, investment=text)
    assert result.observations["industry"].tolist() == ["C", "C", "C", "F", "A", "Mann. total"]


def test_cells_in_are_observations_and_rejected_and_missing(tmp_path: Path) -> None:
    text = "industry,asset,year,value\nC,N111,2015,1\nC,N111,2016,\nC,N111,2017,x\nC,N111,20,1\nC,N111\n"
    result, con = taken(tmp_path, INVESTMENT, investment=text)
    assert result.counts.to_dict("records") == [
        {"source": "investment", "cells": 5, "observations": 1, "rejected": 3, "missing": 1}
    ]
    assert result.findings["rule"].tolist() == ["unreadable_number", "unreadable_period", "ragged_row"]
    assert set(result.findings["severity"]) == {"stop"}
    assert set(result.findings["level"]) == {0}
    assert [math.isnan(value) for value in result.observations["value"]] == [False, True]
    con.register("observed", result.observations[["cell_id"]])
    kept = con.execute(
        "select raw from source_cell join observed using (cell_id) order by cell_id"
    ).fetchall()
    assert kept == [("1",), ("",)]


def test_every_rejected_cell_is_stored_and_the_first_of_a_rule_are_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(intake, "_LISTED_FINDINGS", 3)
    text = "industry,asset,year,value\n" + "C,N111,2015,x\n" * 5
    result, con = taken(tmp_path, INVESTMENT, investment=text)
    assert con.execute("select count(*) from rejected_cell").fetchall() == [(5,)]
    assert result.findings["row"].tolist()[:3] == [2, 3, 4]
    assert len(result.findings) == 4
    assert "2 more cells" in result.findings["message"][3]


def test_a_source_that_cannot_be_read_leaves_the_others(tmp_path: Path) -> None:
    result, _ = taken(tmp_path, HOURS + INVESTMENT, hours="", investment=INVESTMENT_CSV)
    assert result.findings["rule"].tolist() == ["unreadable_source"]
    assert result.findings["file"].tolist() == ["sources/hours.csv"]
    assert result.counts["cells"].tolist() == [0, 2]
    assert result.observations["source"].tolist() == ["investment"] * 2
    assert result.observations["file_id"].tolist() == [1, 1]


def test_a_run_without_any_observation_still_has_its_columns(tmp_path: Path) -> None:
    whole, _ = taken(tmp_path, INVESTMENT, investment=INVESTMENT_CSV)
    none, _ = taken(tmp_path, INVESTMENT, investment="")
    assert none.observations.dtypes.drop("industry").equals(whole.observations.dtypes.drop("industry"))
    assert len(none.observations) == 0


def test_source_files_are_hashed_and_stored(tmp_path: Path) -> None:
    result, con = taken(tmp_path, INVESTMENT, investment=INVESTMENT_CSV)
    content = INVESTMENT_CSV.encode()
    row = (0, "investment", "sources/investment.csv", hashlib.sha256(content).hexdigest(), len(content))
    assert tuple(result.sources.iloc[0]) == row
    assert con.execute("select * from source_file").fetchall() == [row]


def test_all_missing_files_are_named_at_once(tmp_path: Path) -> None:
    with pytest.raises(SourceMissing) as caught:
        taken(tmp_path, INVESTMENT + HOURS + INCOME, income="item,group,year,value\nD.1,,2015,1\n")
    assert caught.value.exit_code == 3
    assert [problem.found for problem in caught.value.problems] == [
        "sources/investment.csv",
        "sources/hours.csv",
    ]
    line = (HEAD + INVESTMENT).splitlines().index("[[source]]") + 1
    assert caught.value.problems[0].place == f"line {line}"


def test_a_link_that_leads_out_after_the_declaration_was_read_is_refused(tmp_path: Path) -> None:
    folder = tmp_path / "assembly"
    folder.mkdir()
    taken(folder, INVESTMENT, investment=INVESTMENT_CSV)
    assembly = load_assembly(folder)
    (tmp_path / "secret.csv").write_text(INVESTMENT_CSV)
    (folder / "sources" / "investment.csv").unlink()
    (folder / "sources" / "investment.csv").symlink_to(tmp_path / "secret.csv")
    with pytest.raises(DeclarationError, match="leads out of the assembly folder"):
        intake.source_paths(assembly)


def test_a_locked_connection_that_allows_the_sources_can_be_used(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("keelbook.readers.csv_file._SMALL_FILE", 0)
    taken(tmp_path, INVESTMENT, investment=INVESTMENT_CSV)
    assembly = load_assembly(tmp_path)
    con = duckdb.connect()
    for table in ("source_file", "source_cell", "rejected_cell"):
        con.execute(load_tables()[table].create_sql())
    allowed = [str(path) for path in intake.source_paths(assembly).values()]
    con.execute(f"set allowed_paths = {allowed}")
    con.execute("set enable_external_access = false")
    con.execute("set lock_configuration = true")
    assert take_in(con, assembly, LISTS, load_measures()).observations["value"].tolist() == [1.5, 2.0]


def test_nothing_temporary_is_left_behind(tmp_path: Path) -> None:
    _, con = taken(tmp_path, INVESTMENT, investment=INVESTMENT_CSV + "C,N111,2016,x\n")
    tables = con.execute(
        "select table_name from duckdb_tables() union select view_name from duckdb_views() "
        "where not internal order by 1"
    ).fetchall()
    assert tables == [("rejected_cell",), ("source_cell",), ("source_file",)]
    assert con.execute("select count(*) from duckdb_types() where type_name = 'staged_text'").fetchall() == [
        (0,)
    ]


def test_progress_names_each_source(tmp_path: Path) -> None:
    taken(tmp_path, INVESTMENT + HOURS, investment=INVESTMENT_CSV, hours=HOURS_CSV)
    con = duckdb.connect()
    for table in ("source_file", "source_cell", "rejected_cell"):
        con.execute(load_tables()[table].create_sql())
    told: list[str] = []
    take_in(con, load_assembly(tmp_path), LISTS, load_measures(), progress=told.append)
    assert told == ["reading investment (sources/investment.csv)", "reading hours (sources/hours.csv)"]
