import json

import pytest

from keelbook.audit.reading import Build
from keelbook.audit.trace import find, trace
from keelbook.outputs.trace_text import address, as_json, lines


@pytest.fixture(scope="module")
def build(first_build):
    with Build(first_build) as opened:
        yield opened


@pytest.fixture(scope="module")
def stock(build):
    series = find(build, "net_stock", {"industry": "G", "asset": "N112", "price_basis": "constant"})
    return trace(build, series, 2010)


@pytest.mark.parametrize(
    ("row", "column", "text"),
    [(1, 1, "A1"), (12, 26, "Z12"), (3, 27, "AA3"), (7, 702, "ZZ7"), (1, 703, "AAA1")],
)
def test_addresses(row, column, text):
    assert address(row, column) == text


def test_a_trace_shows_formula_parameters_terms_and_the_cell(build, stock):
    text = "\n".join(lines(build, stock, 1))
    assert "net_stock[XA G N112]" in text
    assert stock.equation in text
    assert "asset.rate = 0.0247 (" in text
    assert "sources/investment.csv, line " in text
    assert "re-performed: " in text


def test_few_terms_are_shown_unless_all_are_asked_for(build, stock):
    short, whole = list(lines(build, stock, 1)), list(lines(build, stock, 1, every_term=True))
    assert any("more terms that contribute" in line for line in short)
    assert not any("more terms that contribute" in line for line in whole)
    assert len(whole) > len(short)


def test_json_has_every_term_and_their_sum_is_the_figure(build, stock):
    made = json.loads(json.dumps(as_json(build, stock, 2)))
    assert sum(t["contribution"] for t in made["terms"]) == pytest.approx(made["stored"], rel=1e-12)
    assert all("figure" in t for t in made["terms"])
    assert {p["name"] for p in made["parameters"]} >= {"asset.rate", "capital.timing"}
    assert all(p["citation"] for p in made["parameters"])
