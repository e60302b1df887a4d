"""What `Writer` makes of blocks: dense numbers, interned keys, and every figure where it belongs."""

import pytest

from keelbook.store.connect import open_read
from keelbook.store.generations import PANEL


@pytest.fixture(scope="module")
def panel(first_build):
    with open_read((first_build / "build" / PANEL).resolve()) as con:
        yield con


def _one(con, sql: str):
    return con.execute(sql).fetchone()[0]


def test_series_are_numbered_without_gaps(panel):
    count, low, high, distinct = panel.execute(
        "select count(*), min(series_id), max(series_id), count(distinct series_id) from series"
    ).fetchone()
    assert (low, high, distinct) == (0, count - 1, count)


@pytest.mark.parametrize(("table", "column"), [("formula", "formula_id"), ("parameter", "parameter_id")])
def test_interned_numbers_have_no_gaps(panel, table, column):
    count, low, high, distinct = panel.execute(
        f"select count(*), min({column}), max({column}), count(distinct {column}) from {table}"
    ).fetchone()
    assert count > 0
    assert (low, high, distinct) == (0, count - 1, count)


def test_nothing_is_interned_twice(panel):
    assert _one(panel, "select count(*) from parameter") == _one(
        panel, "select count(*) from (select distinct name, setting, file, line, citation from parameter)"
    )
    key = "area, sector, industry, asset, worker_group, measure, method, price_basis"
    assert _one(panel, "select count(*) from series") == _one(
        panel, f"select count(*) from (select distinct {key} from series)"
    )


@pytest.mark.parametrize(
    ("child", "column", "parent", "key"),
    [
        ("figure", "series_id", "series", "series_id"),
        ("series", "formula_id", "formula", "formula_id"),
        ("derivation", "formula_id", "formula", "formula_id"),
        ("method_set", "parameter_id", "parameter", "parameter_id"),
        ("edge", "series_id", "series", "series_id"),
        ("edge", "input_series_id", "series", "series_id"),
    ],
)
def test_every_reference_leads_somewhere(panel, child, column, parent, key):
    lost = _one(panel, f"select count(*) from {child} where {column} not in (select {key} from {parent})")
    assert lost == 0
    assert _one(panel, f"select count(*) from {child}") > 0


def test_every_role_of_every_formula_has_a_link(panel):
    roles = panel.execute(
        "select f.name, f.parameters, string_agg(d.\"role\", ', ' order by d.role_position) "
        "from formula f join derivation d using (formula_id) group by f.formula_id, f.name, f.parameters"
    ).fetchall()
    assert roles
    for name, declared, linked in roles:
        assert declared == linked, name


def test_an_edge_leads_to_the_price_it_was_deflated_by(panel):
    rows = panel.execute(
        "select s.industry, s.asset, p.industry, p.asset, p.method from edge e "
        "join series s using (series_id) join series p on p.series_id = e.input_series_id "
        "where s.measure = 'investment' and s.method = 'deflated' order by 1, 2"
    ).fetchall()
    assert rows == [(i, a, "_T", a, "rebased") for i in ("C", "G") for a in ("N112", "N11O")]


def test_units_are_those_of_the_measures(panel):
    rows = dict(panel.execute("select distinct measure, unit from series").fetchall())
    assert rows["net_stock"] == "XAC"
    assert rows["hours_worked"] == "hours"
    assert rows["capital_services"] == "index"


def test_figures_of_a_series_lie_together_and_in_order_of_time(panel):
    unordered = _one(
        panel,
        "select count(*) from (select series_id, period, lag(series_id) over w as s, lag(period) over w as p "
        "from (select *, rowid as r from figure) window w as (order by r)) where s > series_id "
        "or (s = series_id and p >= period)",
    )
    assert unordered == 0
