import numpy as np
import pandas as pd
import pytest
from small_blocks import TABLE, codes, column, get, holds, params, rules_of

from keelbook.blocks import DIMS, NO_FIGURE, NORMAL, PROVISIONAL
from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.measures import load_measures
from keelbook.stages.base import Book
from keelbook.stages.harmonise import harmonise, observed_blocks

YEARS = range(2010, 2013)
LISTS = load_code_lists()
IMPUTED, BREAK, MISSING = (LISTS.position("obs_status", code) for code in "IBO")

PARAMS = params("harmonise")


def _rows(
    measure: str, series: str, values: list[float], *, basis="current", source="yearly", frequency="A",
    unit_mult=6, status=None, conf=None, first=None,
) -> list[dict]:  # fmt: skip
    start = first if first is not None else (2010 if frequency == "A" else 4 * 2010)
    n = len(values)
    return [
        {
            "source": source, "measure": measure, "price_basis": basis, "frequency": frequency,
            **codes(series), "unit_mult": unit_mult, "period": start + i, "value": v,
            "obs_status": s, "conf_status": c,
        }
        for i, (v, s, c) in enumerate(zip(values, status or [0] * n, conf or [0] * n, strict=True))
    ]  # fmt: skip


def _observations(*series: list[dict]) -> pd.DataFrame:
    frame = pd.DataFrame([row for rows in series for row in rows])
    for name in ("source", "measure", "price_basis", "frequency"):
        frame[name] = frame[name].astype("category")
    for dim in DIMS:
        frame[dim] = pd.Categorical(frame[dim], categories=list(TABLE.codes[dim]))
    for name in ("obs_status", "conf_status", "unit_mult"):
        frame[name] = frame[name].astype(np.int8)
    return frame


def _harmonised(*series: list[dict]) -> tuple[Book, list[dict]]:
    observed = observed_blocks(_observations(*series), TABLE, YEARS, PARAMS)
    result = harmonise(observed, YEARS, PARAMS)
    return Book(result.blocks), [dict(f) for f in result.findings]


# --- observations into blocks ---------------------------------------------------------------------------------


def test_observations_are_scattered_to_their_period_and_series():
    rows = _rows("investment", "industry=C asset=N112", [1.0, 2, 3], status=[BREAK, IMPUTED, 0])
    later = _rows("investment", "industry=A asset=N112", [9.0], first=2012, conf=[2])
    (item,) = observed_blocks(_observations(rows, later), TABLE, YEARS, PARAMS)
    np.testing.assert_array_equal(item.block.value, [[np.nan, 1], [np.nan, 2], [9, 3]])
    np.testing.assert_array_equal(
        column(item.block, "industry=A asset=N112", "status"), [NO_FIGURE] * 2 + [0]
    )
    np.testing.assert_array_equal(column(item.block, "industry=A asset=N112", "conf"), [0, 0, 2])
    np.testing.assert_array_equal(column(item.block, "industry=C asset=N112", "imputed"), [0, 1, 0])
    assert item.block.assumed is None
    assert item.block.series.key[item.column[0]] > item.block.series.key[item.column[3]]


def test_observations_outside_the_period_are_not_used():
    rows = _rows("investment", "industry=A asset=N112", [7.0, 1, 2, 3, 8], first=2009)
    (item,) = observed_blocks(_observations(rows), TABLE, YEARS, PARAMS)
    np.testing.assert_array_equal(item.block.value[:, 0], [1, 2, 3])


def test_two_observations_of_one_figure_are_refused():
    rows = _rows("investment", "industry=A asset=N112", [1.0])
    with pytest.raises(ValueError, match="two observations for one figure"):
        observed_blocks(_observations(rows, rows), TABLE, YEARS, PARAMS)


def test_sources_measures_bases_and_units_are_kept_apart():
    blocks = observed_blocks(
        _observations(
            _rows("investment", "asset=N112", [1.0]),
            _rows("investment", "asset=N113", [1.0], unit_mult=3),
            _rows("investment", "asset=N112", [1.0], basis="constant"),
            _rows("hours_worked", "", [1.0], basis="_Z", unit_mult=6),
            _rows("hours_worked", "", [1.0], basis="_Z", unit_mult=6, frequency="Q"),
        ),
        TABLE,
        YEARS,
        PARAMS,
    )
    found = {(b.block.key.measure, b.block.key.price_basis, b.unit_mult, b.frequency) for b in blocks}
    assert found == {
        ("investment", "current", 6, "A"),
        ("investment", "current", 3, "A"),
        ("investment", "constant", 6, "A"),
        ("hours_worked", "_Z", 6, "A"),
        ("hours_worked", "_Z", 6, "Q"),
    }


# --- units and years ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("unit_mult", "factor"), [(6, 1.0), (3, 1e-3), (9, 1e3), (0, 1e-6)])
def test_units_become_those_of_the_measure(unit_mult, factor):
    book, findings = _harmonised(
        _rows("investment", "industry=A asset=N112", [5.0, 6, 7], unit_mult=unit_mult)
    )
    out = get(book, "investment/delivered/current")
    np.testing.assert_allclose(column(out, "industry=A asset=N112"), np.array([5, 6, 7]) * factor, rtol=1e-15)
    assert not findings
    names = {c.name: (c.value, c.file, c.line) for c in out.origin.sets[out.origin.set[0]]}
    assert names["source.unit_mult"] == (unit_mult, "assembly.toml", 10)
    assert names["measure.unit_mult"][0] == 6


@pytest.mark.parametrize(
    ("measure", "basis", "expected"),
    [
        ("investment", "current", 1.0 + 2 + 3 + 4),  # a flow: the sum
        ("persons_employed", "_Z", 2.5),  # a level held through the year: the mean
        ("net_stock", "year_end", 4.0),  # a balance sheet: the last
    ],
)
def test_a_year_is_made_from_quarters_as_the_measure_says(measure, basis, expected):
    mult = load_measures()[measure].unit_mult
    asset = "" if measure == "persons_employed" else " asset=N112"
    book, _ = _harmonised(
        _rows(measure, f"industry=A{asset}", [1.0, 2, 3, 4], basis=basis, frequency="Q", unit_mult=mult)
    )
    out = get(book, f"{measure}/delivered/{basis}")
    np.testing.assert_array_equal(column(out, f"industry=A{asset}"), [expected, np.nan, np.nan])


def test_quarters_at_annual_rates_are_averaged_and_scaled():
    book, _ = _harmonised(
        _rows(
            "value_added",
            "industry=A",
            [4000.0, 4200, 4400, 4600],
            source="rates",
            frequency="Q",
            unit_mult=3,
        )
    )
    out = get(book, "value_added/delivered/current")
    np.testing.assert_allclose(column(out, "industry=A")[0], 4.3, rtol=1e-15)
    how = {c.name: c for c in out.origin.sets[0]}["measure.annual"]
    assert (how.value, how.line) == ("mean", 20)


def test_an_incomplete_year_is_refused_and_told():
    quarters = [1.0, 1, 1, 1, 1, np.nan, 1, 1, 1, 1]
    status = [0] * 5 + [MISSING] + [0] * 4
    book, findings = _harmonised(
        _rows("investment", "industry=A asset=N112", quarters, frequency="Q", status=status)
    )
    np.testing.assert_array_equal(
        column(get(book, "investment/delivered/current"), "industry=A asset=N112"), [4, np.nan, np.nan]
    )
    (finding,) = findings
    assert finding["rule"] == "incomplete_year"
    assert finding["severity"] == "warn"
    assert (finding["industry"], finding["asset"], finding["time_period"]) == ("A", "N112", "2011")
    assert finding["found"] == "3 quarters"
    assert "2011, 2012" in finding["message"]


def test_a_year_with_no_quarters_at_all_is_not_incomplete():
    book, findings = _harmonised(_rows("investment", "asset=N112", [1.0] * 4, frequency="Q", first=4 * 2011))
    np.testing.assert_array_equal(
        column(get(book, "investment/delivered/current"), "asset=N112"), [np.nan, 4, np.nan]
    )
    assert not findings


def test_status_and_confidentiality_come_along():
    book, _ = _harmonised(
        _rows("investment", "asset=N112", [1.0, 2, np.nan], status=[0, PROVISIONAL, MISSING], conf=[3, 0, 0])
    )
    out = get(book, "investment/delivered/current")
    np.testing.assert_array_equal(column(out, "asset=N112", "status"), [NORMAL, PROVISIONAL, MISSING])
    np.testing.assert_array_equal(column(out, "asset=N112", "conf") > 0, [True, False, False])


# --- index numbers --------------------------------------------------------------------------------------------


def test_an_index_is_brought_to_the_reference_year():
    book, findings = _harmonised(
        _rows("investment_price", "asset=N112", [80.0, 100, 120], basis="source_index", unit_mult=0),
        _rows("investment_price", "asset=N113", [1.0, 2, 5], basis="source_index", unit_mult=0),
    )
    out = get(book, "investment_price/rebased/index")
    np.testing.assert_allclose(column(out, "asset=N112"), [0.8, 1, 1.2], rtol=1e-15)
    np.testing.assert_allclose(column(out, "asset=N113"), [0.5, 1, 2.5], rtol=1e-15)
    assert out.chosen.all()
    assert not findings


def test_an_index_without_the_reference_year_cannot_be_rebased():
    book, findings = _harmonised(
        _rows("investment_price", "asset=N112", [80.0], basis="source_index", unit_mult=0),
        _rows("investment_price", "asset=N113", [1.0, 2, 5], basis="source_index", unit_mult=0),
    )
    assert np.isnan(column(get(book, "investment_price/rebased/index"), "asset=N112")).all()
    (finding,) = findings
    assert (finding["rule"], finding["asset"], finding["time_period"]) == (
        "no_reference_year",
        "N112",
        "2011",
    )


def test_no_totals_of_index_numbers():
    book, _ = _harmonised(
        _rows("investment_price", "asset=N112", [80.0, 100, 120], basis="source_index", unit_mult=0)
    )
    assert {b.key.method for b in book} == {"delivered", "rebased"}


# --- totals ---------------------------------------------------------------------------------------------------


def test_totals_over_industries_and_assets():
    book, _ = _harmonised(
        _rows("investment", "industry=A asset=N112", [1.0, 1, 1]),
        _rows("investment", "industry=A asset=N113", [10.0, 10, 10]),
        _rows("investment", "industry=C asset=N112", [100.0, 100, np.nan]),
    )
    total = get(book, "investment/sum_of_parts/current")
    np.testing.assert_array_equal(column(total, "industry=A asset=_T"), [11, 11, 11])
    np.testing.assert_array_equal(column(total, "industry=_T asset=N112"), [101, 101, np.nan])
    np.testing.assert_array_equal(column(total, "industry=_T asset=_T"), [111, 111, np.nan])
    assert not total.part.any()
    assert total.chosen.all()


def test_a_group_and_its_assets_are_not_both_counted():
    book, _ = _harmonised(
        _rows("investment", "industry=A asset=N11", [50.0, 50, 50]),
        _rows("investment", "industry=A asset=N112", [1.0, 1, 1]),
        _rows("investment", "industry=A asset=N1131", [10.0, 10, 10]),
        _rows("investment", "industry=C asset=N11", [7.0, 7, 7]),
    )
    total = get(book, "investment/sum_of_parts/current")
    np.testing.assert_array_equal(column(total, "industry=A asset=_T"), [11, 11, 11])
    # Where only the group was delivered, it is the part.
    np.testing.assert_array_equal(column(total, "industry=C asset=_T"), [7, 7, 7])
    np.testing.assert_array_equal(column(total, "industry=_T asset=_T"), [18, 18, 18])


def test_a_delivered_total_is_kept_and_not_made_again():
    book, _ = _harmonised(
        _rows("hours_worked", "industry=A worker_group=SAL", [1.0, 1, 1], basis="_Z"),
        _rows("hours_worked", "industry=A worker_group=SELF", [2.0, 2, 2], basis="_Z"),
        _rows("hours_worked", "industry=A worker_group=_T", [5.0, 5, 5], basis="_Z"),
    )
    delivered = get(book, "hours_worked/delivered/_Z")
    np.testing.assert_array_equal(column(delivered, "industry=A worker_group=_T"), [5, 5, 5])
    made = get(book, "hours_worked/sum_of_parts/_Z")
    assert not holds(made, "industry=A worker_group=_T")
    np.testing.assert_array_equal(column(made, "industry=_T worker_group=_T"), [5, 5, 5])
    chosen = get(book, "hours_worked/*/_Z")
    np.testing.assert_array_equal(column(chosen, "industry=A worker_group=_T"), [5, 5, 5])


def test_sectors_are_parts_of_the_economy_and_areas_are_not_added_up():
    book, _ = _harmonised(
        _rows("investment", "sector=S11 industry=A asset=N112", [1.0, 1, 1]),
        _rows("investment", "sector=S13 industry=A asset=N112", [4.0, 4, 4]),
        _rows("investment", "area=XB industry=A asset=N112", [9.0, 9, 9]),
    )
    total = get(book, "investment/sum_of_parts/current")
    np.testing.assert_array_equal(column(total, "sector=S1 industry=A asset=N112"), [5, 5, 5])
    np.testing.assert_array_equal(column(total, "sector=S13 industry=_T asset=N112"), [4, 4, 4])
    np.testing.assert_array_equal(column(total, "area=XB industry=_T asset=_T"), [9, 9, 9])


def test_two_sources_may_deliver_different_series_of_one_measure():
    book, findings = _harmonised(
        _rows("investment", "industry=A asset=N112", [1.0, 1, 1]),
        _rows("investment", "industry=C asset=N112", [1.0] * 12, source="rates", frequency="Q"),
    )
    out = get(book, "investment/delivered/current")
    np.testing.assert_array_equal(column(out, "industry=C asset=N112"), [1, 1, 1])
    assert rules_of(findings) == []
