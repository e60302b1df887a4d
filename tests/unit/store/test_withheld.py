"""A confidential cell: used in every computation, shown nowhere, and so is whatever descends from it."""

import struct

import numpy as np
import pytest
from small_blocks import HIDDEN_RAW, HIDDEN_YEAR

from keelbook.audit.reading import Build
from keelbook.store.connect import open_read
from keelbook.store.generations import EVIDENCE, PANEL

HIDDEN = float(HIDDEN_RAW)


@pytest.fixture(scope="module")
def panel(hidden_build):
    with open_read((hidden_build / "build" / PANEL).resolve()) as con:
        yield con


@pytest.fixture(scope="module")
def evidence(hidden_build):
    with open_read((hidden_build / "build" / EVIDENCE).resolve()) as con:
        yield con


def _years_shown(con, measure: str, industry: str, asset: str, **more: str) -> dict[bool, set[int]]:
    where = " and ".join(f"{name} = '{value}'" for name, value in more.items()) or "true"
    rows = con.execute(
        "select cast(time_period as integer), value is not null from panel "
        f"where measure = ? and industry = ? and asset = ? and {where}",
        [measure, industry, asset],
    ).fetchall()
    assert rows
    return {shown: {year for year, is_shown in rows if is_shown == shown} for shown in (True, False)}


def test_the_delivered_cell_is_withheld(panel):
    value, status, conf = panel.execute(
        "select value, obs_status, conf_status from panel where measure = 'investment' and method = 'delivered' "
        f"and industry = 'C' and asset = 'N11O' and time_period = '{HIDDEN_YEAR}'"
    ).fetchone()
    assert value is None
    assert status == "Q"
    assert conf != "F"


def test_withheld_and_shown_are_told_apart_everywhere(panel):
    wrong = panel.execute(
        "select measure, count(*) from panel where (conf_status <> 'F') <> (obs_status = 'Q') "
        "or (obs_status = 'Q' and value is not null) group by 1"
    ).fetchall()
    assert wrong == []
    assert panel.execute("select count(*) from panel where obs_status = 'Q'").fetchone()[0] > 100


@pytest.mark.parametrize(
    "measure", ["net_stock", "productive_stock", "gross_stock", "consumption_of_fixed_capital"]
)
def test_stocks_are_withheld_from_the_hidden_year_on_and_not_before(panel, measure):
    years = _years_shown(panel, measure, "C", "N11O", price_basis="constant", method="perpetual_inventory")
    assert min(years[False]) == HIDDEN_YEAR
    assert max(years[True]) == HIDDEN_YEAR - 1


@pytest.mark.parametrize(("industry", "asset"), [("C", "_T"), ("_T", "N11O"), ("_T", "_T")])
def test_totals_with_a_hidden_part_are_withheld(panel, industry, asset):
    years = _years_shown(
        panel, "net_stock", industry, asset, price_basis="constant", method="perpetual_inventory"
    )
    assert min(years[False]) == HIDDEN_YEAR


@pytest.mark.parametrize(("industry", "asset"), [("G", "N11O"), ("C", "N112"), ("G", "_T")])
def test_what_does_not_descend_from_it_is_shown(panel, industry, asset):
    years = _years_shown(
        panel, "net_stock", industry, asset, price_basis="constant", method="perpetual_inventory"
    )
    assert not years[False]


def test_the_index_of_services_is_withheld_in_all_years_that_rest_on_it(panel):
    """The reference year lies behind the hidden one: the years before are counted back through it."""
    years = _years_shown(panel, "capital_services", "C", "_T")
    assert years[False] >= set(range(min(years[False]), 2020))
    growth = _years_shown(panel, "capital_services_growth", "C", "_T")
    assert min(growth[False]) == HIDDEN_YEAR
    assert min(years[False]) < HIDDEN_YEAR


def test_the_wide_tables_leave_it_out(panel):
    rows = panel.execute(
        "select net_stock, capital_services from decomposition_input where industry = 'C' "
        f"and cast(time_period as integer) >= {HIDDEN_YEAR}"
    ).fetchall()
    assert rows
    assert set(rows) == {(None, None)}
    rows = panel.execute(
        "select capital_growth, residual_growth, residual_level from decomposition where industry = 'C' "
        f"and cast(time_period as integer) >= {HIDDEN_YEAR}"
    ).fetchall()
    assert set(rows) <= {(None, None, None)}


def test_the_parts_of_a_withheld_figure_are_withheld_too(panel):
    """The assumed part of a stock and its known opening would give the stock away."""
    shown = panel.execute(
        "select count(*) from panel where obs_status = 'Q' "
        "and (imputed_part is not null or assumed_part is not null or observed_part is not null)"
    ).fetchone()[0]
    assert shown == 0


def test_the_panel_file_holds_neither_the_figure_nor_its_text(hidden_build, panel):
    raw = (hidden_build / "build" / PANEL).read_bytes()
    assert HIDDEN_RAW.encode() not in raw
    assert struct.pack("<d", HIDDEN) not in raw
    tables = [name for (name,) in panel.execute("select table_name from duckdb_tables()").fetchall()]
    assert "figure" in tables
    for name in tables:
        columns = panel.execute(
            "select column_name, data_type from duckdb_columns() where table_name = ?", [name]
        ).fetchall()
        for column, kind in columns:
            condition = (
                f'abs("{column}" - {HIDDEN}) < 1e-9'
                if kind == "DOUBLE"
                else f"\"{column}\" like '%{HIDDEN_RAW}%'"
            )
            if kind in ("DOUBLE", "VARCHAR"):
                found = panel.execute(f'select count(*) from "{name}" where {condition}').fetchone()[0]
                assert found == 0, f"{name}.{column}"


def test_the_evidence_file_holds_what_was_withheld(hidden_build, panel, evidence):
    number = panel.execute(
        "select series_id from series where measure = 'investment' and method = 'delivered' and industry = 'C' "
        "and asset = 'N11O' and price_basis = 'current'"
    ).fetchone()[0]
    value = evidence.execute(
        "select value from withheld_figure where series_id = ? and period = ?", [number, HIDDEN_YEAR]
    ).fetchone()[0]
    assert value == HIDDEN
    with Build(hidden_build) as build:
        row = HIDDEN_YEAR - build.periods.start
        assert build.values([number])[row, 0] == HIDDEN
        assert np.isfinite(build.values([number])[1:]).all()
