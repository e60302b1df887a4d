"""Every kind of figure of the demo, re-performed from what is stored; and stored figures that are wrong."""

import zlib

import duckdb
import numpy as np
import pytest
from small_blocks import HIDDEN_YEAR

from keelbook.audit.reading import Build, panel_path
from keelbook.audit.trace import find, must_reproduce, trace
from keelbook.contracts.measures import load_measures
from keelbook.errors import DeclarationError, NotReproduced
from keelbook.store.generations import EVIDENCE, PANEL

SAMPLE = 100

NOT_IN_DEMO = {
    "investment_indicator",
    "tax_rate",
    "tax_allowances",
    "tax_credit",
    "tax_term",
    "property_tax_rate",
    "price_change",
    "taxed_base",
    "cost_before_return",
}
"""Measures that may be delivered or computed, and that the demo does not have."""

CHAINED = {
    "capital_services_chained",
    "labour_input_chained",
    "residual_level_log",
    "residual_level_discrete",
    "volume_index_chained",
}
"""Formulas that are 1 by definition in one year, and have no terms there."""

MEASURES = tuple(name for name in load_measures() if name not in NOT_IN_DEMO)


@pytest.fixture(scope="module")
def build(demo_build):
    with Build(demo_build) as opened:
        yield opened


@pytest.fixture(scope="module")
def first(first_build):
    with Build(first_build) as opened:
        yield opened


@pytest.fixture(scope="module")
def series(build):
    return {s.series_id: s for s in build.series({})}


def test_the_measures_of_the_demo_are_those_that_are_traced(build):
    assert {m for (m,) in build.rows("select distinct measure from series")} == set(MEASURES)


@pytest.mark.parametrize("measure", MEASURES)
def test_figures_are_reproduced(build, series, measure):
    figures = build.rows(
        "select series_id, period from figure join series using (series_id) "
        "where measure = ? and value is not null order by series_id, period",
        (measure,),
    )
    rng = np.random.default_rng(zlib.crc32(measure.encode()))
    picked = rng.permutation(len(figures))[:SAMPLE]
    assert len(picked) > 0
    for number, year in (figures[i] for i in picked):
        traced = trace(build, series[number], year)
        assert traced.reproduced, f"{traced.series.label} {year}: {traced.stored!r}, {traced.recomputed!r}"
        assert traced.inputs or (traced.formula in CHAINED and traced.stored == 1.0)
        assert traced.equation
        assert traced.citation
        assert np.isfinite([i.value for i in traced.inputs]).all()


def _end(build, traced):
    """Follow the largest term of a figure down, and return what the way ends in."""
    for _ in range(20):
        assert traced.reproduced
        item = max(traced.inputs, key=lambda i: abs(i.contribution))
        if item.series is None:
            return item
        traced = trace(build, item.series, int(item.period))
    raise AssertionError("the way down does not end")


@pytest.mark.parametrize(
    "measure", ["residual_level", "capital_services", "user_cost", "labour_share_two_period"]
)
def test_the_way_down_ends_in_a_source_cell(build, series, measure):
    number, year = build.rows(
        "select series_id, max(period) from figure join series using (series_id) where measure = ? and chosen "
        "and value is not null group by series_id order by series_id",
        (measure,),
    )[0]
    end = _end(build, trace(build, series[number], year))
    assert end.cell is not None
    assert end.cell.raw
    assert end.cell.row > 0
    assert end.cell.column > 0


def test_every_term_can_be_followed(first):
    stock = find(first, "net_stock", {"industry": "G", "asset": "N112", "price_basis": "constant"})
    inputs = trace(first, stock, 1999).inputs
    # Four years of investment and the opening stock, each of them reproduced in its turn.
    assert [(i.role, i.period) for i in inputs] == [
        *(("investment", str(year)) for year in (1999, 1998, 1997, 1996)),
        ("opening_stock", "1995"),
        ("growth", "1995"),
    ]
    assert all(trace(first, i.series, int(i.period)).reproduced for i in inputs)


# --- wrong figures --------------------------------------------------------------------------------------------


def _spoil(folder, series_id, year, factor):
    with duckdb.connect(str(folder / PANEL)) as con:
        con.execute(
            "update figure set value = value * ? where series_id = ? and period = ?",
            [factor, series_id, year],
        )


def test_a_wrong_stored_value_is_noticed(first_build, copy_build):
    folder = copy_build(first_build)
    with Build(folder) as build:
        stock = find(build, "net_stock", {"industry": "G", "asset": "N112", "price_basis": "constant"})
        flow = find(build, "investment", {"industry": "G", "asset": "N112", "price_basis": "constant"})
        must_reproduce(trace(build, stock, 2010))
    _spoil(folder, stock.series_id, 2010, 1 + 1e-9)
    with Build(folder) as build:
        wrong = trace(build, stock, 2010)
        assert not wrong.reproduced
        with pytest.raises(NotReproduced) as caught:
            must_reproduce(wrong)
        assert caught.value.exit_code == 5
        assert stock.label in str(caught.value)
        assert "2010" in str(caught.value)
        assert trace(build, stock, 2009).reproduced
        assert trace(build, stock, 2011).reproduced
    _spoil(folder, flow.series_id, 2005, 1 + 1e-7)
    with Build(folder) as build:
        # A wrong input shows in the figure itself and in whatever was made from it.
        assert not trace(build, flow, 2005).reproduced
        assert not trace(build, stock, 2011).reproduced
        assert trace(build, stock, 2004).reproduced


def test_a_wrong_parameter_is_noticed(first_build, copy_build):
    folder = copy_build(first_build)
    with Build(folder) as build:
        stock = find(build, "net_stock", {"industry": "G", "asset": "N112", "price_basis": "constant"})
        (rate,) = [c for c in trace(build, stock, 2010).choices if c.name == "asset.rate"]
    with duckdb.connect(str(folder / PANEL)) as con:
        con.execute(
            "update parameter set setting = '0.03' where name = 'asset.rate' and setting = ?",
            [repr(rate.value)],
        )
    with Build(folder) as build:
        assert not trace(build, stock, 2010).reproduced


# --- with and without evidence --------------------------------------------------------------------------------


def test_a_withheld_figure_is_traced_with_the_evidence(hidden_build):
    with Build(hidden_build) as build:
        stock = find(build, "net_stock", {"industry": "C", "asset": "N11O", "price_basis": "constant"})
        traced = trace(build, stock, HIDDEN_YEAR + 2)
        assert traced.reproduced
        assert str(HIDDEN_YEAR) in {i.period for i in traced.inputs}


def test_without_the_evidence_it_says_that_the_figure_is_withheld(hidden_build, copy_build):
    folder = copy_build(hidden_build)
    (folder / EVIDENCE).unlink()
    with Build(folder) as build:
        assert not build.has_evidence
        stock = find(build, "net_stock", {"industry": "C", "asset": "N11O", "price_basis": "constant"})
        assert trace(build, stock, HIDDEN_YEAR - 1).reproduced
        with pytest.raises(DeclarationError, match="withheld"):
            trace(build, stock, HIDDEN_YEAR)


def test_without_the_evidence_it_says_why_a_cell_cannot_be_read(hidden_build, copy_build):
    folder = copy_build(hidden_build)
    (folder / EVIDENCE).unlink()
    with Build(folder) as build:
        flow = find(build, "investment", {"industry": "G", "asset": "N11O", "method": "delivered"})
        with pytest.raises(DeclarationError, match="no evidence file beside the panel"):
            trace(build, flow, 2010)


# --- finding a figure -----------------------------------------------------------------------------------------


def test_what_is_left_out_is_the_chosen_method_and_the_total(first):
    share = find(first, "labour_share", {})
    assert (share.key["industry"], share.chosen) == ("_T", True)
    stock = find(first, "net_stock", {"industry": "C"})
    assert (stock.key["asset"], stock.key["price_basis"]) == ("_T", "constant")


@pytest.mark.parametrize(
    ("measure", "wanted", "words"),
    [
        ("net_stok", {}, ["net_stock"]),
        ("net_stock", {"asset": "N1133"}, ["N1133", "N112"]),
        ("net_stock", {"industry": "Z", "asset": "Q"}, ["industry 'Z'", "asset 'Q'"]),
        ("labour_share", {"method": "houres"}, ["hours"]),
    ],
)
def test_a_name_that_is_not_there_is_answered_with_the_nearest(first, measure, wanted, words):
    with pytest.raises(DeclarationError) as caught:
        find(first, measure, wanted)
    assert caught.value.exit_code == 2
    for word in words:
        assert word in str(caught.value)


def test_a_choice_that_is_not_there_in_this_combination(first):
    with pytest.raises(DeclarationError, match="no series of net_stock"):
        find(first, "net_stock", {"price_basis": "index"})


def test_several_answers_are_listed(first):
    with pytest.raises(DeclarationError) as caught:
        find(first, "investment_price", {})
    assert "one of: investment_price[XA N112] (rebased, index)" in str(caught.value)
    assert "--asset" in str(caught.value)


def test_a_year_without_a_figure_says_which_years_there_are(first):
    stock = find(first, "net_stock", {"industry": "G", "asset": "N112"})
    with pytest.raises(DeclarationError, match="a year from 1996 to 2019"):
        trace(first, stock, 2050)


@pytest.mark.parametrize("place", ["", "build", f"build/{PANEL}", "build/current"])
def test_a_build_is_found_from_any_of_its_places(first_build, place):
    assert panel_path(first_build / place) == (first_build / "build" / PANEL).resolve()


def test_no_build_is_told_with_what_to_do(tmp_path):
    with pytest.raises(DeclarationError, match="keelbook assemble"):
        panel_path(tmp_path)
