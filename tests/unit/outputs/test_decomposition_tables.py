"""The printed decomposition against the table it is read from."""

import pytest

from keelbook.audit.reading import Build
from keelbook.outputs.decomposition import averages, averages_text, forms, yearly, yearly_text

TOTAL = {"area": "XA", "sector": "S1", "industry": "_T"}


@pytest.fixture(scope="module")
def build(first_build):
    with Build(first_build) as opened:
        yield opened


def test_the_chosen_form_comes_first(build):
    assert forms(build) == ["log", "discrete"]


def test_averages_are_those_of_the_years(build):
    (row,) = [r for r in averages(build, "log", 2001, 2010) if r["industry"] == "_T"]
    years = [r for r in yearly(build, TOTAL, "log") if 2001 <= int(r["time_period"]) <= 2010]
    assert (row["first"], row["last"], len(years)) == (2001, 2010, 10)
    for name in ("output_growth", "capital_contribution", "residual_growth"):
        assert row[name] == pytest.approx(sum(r[name] for r in years) / 10, rel=1e-12)
    assert row["residual_level"] == years[-1]["residual_level"]


def test_averages_add_up_as_the_years_do(build):
    for row in averages(build):
        parts = row["capital_contribution"] + row["labour_contribution"] + row["residual_growth"]
        assert parts == pytest.approx(row["output_growth"], rel=1e-10, abs=1e-12)


def test_the_total_is_shown_first(build):
    rows = averages(build)
    assert rows[0]["industry"] == "_T"
    assert len(rows) == 3


def test_the_level_starts_at_one(build):
    first, *later = yearly(build, TOTAL)
    assert first["residual_level"] == 1.0
    assert first["residual_growth"] is None
    assert all(row["residual_growth"] is not None for row in later)


def test_texts_have_a_line_for_every_row(build):
    rows = averages(build)
    text = averages_text(rows, {"_T": "Total", "C": "Manufacturing"})
    assert len(text) == len(rows) + 1
    assert text[1].startswith("_T   Total")
    years = yearly(build, TOTAL)
    assert len(yearly_text(years)) == len(years) + 1
