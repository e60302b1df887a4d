"""Every starting stock, other volume changes and years of parameters, assembled from files and re-performed."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from keelbook.assembly.run import assemble
from keelbook.audit.reading import Build
from keelbook.audit.trace import find, trace
from keelbook.audit.verify import verify

FIRST, LAST = 2000, 2014
STARTS = {
    "A": "steady_state,,",
    "B": "backcast_growth,0.04,",
    "C": "backcast_indicator,,",
    "D": "capital_output_ratio,,2.5",
    "E": "zero,,",
    "F": "benchmark,,",
    "G": "benchmarks_spread,,",
    "H": "two_benchmarks,,",
    "I": "benchmark,,",
    "J": "steady_state,,",
    "K": "benchmark,,",
    "L": "zero,,",
}
LATER = {
    "N1132": "2007,stock,cohort_geometric,0.4,,5,,simultaneous,,,,",
    "N1133": "2007,,hyperbolic,,4,,0.5,truncated_normal,0.04,,,",
}
"""What holds from 2007 on in K and L: a rate for all that is alive, a life for later investment."""
PROFILES = {
    "N1132": "cohort_geometric,0.3,,7,,simultaneous,",
    "N1133": "hyperbolic,,5,,0.5,truncated_normal,0.04",
}
DECLARED = f"""\
title = "Invented"
area = "HV"
currency = "HVK"
reference_year = 2005
period = [{FIRST}, {LAST}]
[rules.capital]
trend_window = {{ value = 5, citation = "test" }}
warm_up_limit = {{ value = 0.2, citation = "test" }}
negative_factor = {{ value = "rescale", citation = "test" }}
"""
SOURCE = """\
[[source]]
name = "{name}"
file = "sources/{name}.csv"
measure = "{name}"
{basis}unit_mult = {mult}
frequency = "A"
[source.csv]
[source.long]
time_period = "year"
value = "value"
industry = "industry"
{asset}
"""


def _declare(name: str, basis: str, *, asset: bool = True, mult: int = 6) -> str:
    return SOURCE.format(
        name=name,
        basis=f'price_basis = "{basis}"\n' if basis != "_Z" else "",
        mult=mult,
        asset='asset = "asset"' if asset else "",
    )


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("starts")
    (folder / "sources").mkdir()
    (folder / "rules").mkdir()
    rng = np.random.default_rng(4)
    tables: dict[str, list[str]] = {
        "investment": [],
        "investment_price": [f"_T,_T,{year},{1.02 ** (year - 2005)}" for year in range(FIRST, LAST + 1)],
        "investment_indicator": [f"C,_T,{year},{7 + year % 5}" for year in range(FIRST, LAST + 1)],
        "value_added": [f"D,{year},{400 + year % 7}" for year in range(FIRST, LAST + 1)],
        "net_stock": [],
        "other_volume_changes": [
            f"{industry},{asset},{year},{change}"
            for industry in "AGJKL"
            for asset in PROFILES
            for year, change in ((2006, -30.5), (2009, 12.25))
        ],
    }
    for asset in PROFILES:
        for industry in STARTS:
            for year in range(2004 if industry == "C" else FIRST, LAST + 1):
                tables["investment"].append(f"{industry},{asset},{year},{rng.uniform(90, 110):.3f}")
        # A stock of H that a rate leads to; one of I that later investment alone exceeds.
        known = {
            "F": {2003: 420},
            "K": {2003: 420},
            "G": {2002: 300, 2008: 290},
            "H": {2002: 310, 2010: 305},
            "I": {2004: 30},
        }
        for industry, stocks in known.items():
            tables["net_stock"] += [f"{industry},{asset},{year},{stock}" for year, stock in stocks.items()]
    for name, rows in tables.items():
        head = "industry,year,value" if name == "value_added" else "industry,asset,year,value"
        (folder / "sources" / f"{name}.csv").write_text("\n".join([head, *rows]) + "\n", encoding="utf-8")
    declared = DECLARED + "".join(
        (
            _declare("investment", "constant"),
            _declare("investment_price", "source_index", mult=0),
            _declare("investment_indicator", "_Z", mult=0),
            _declare("value_added", "constant", asset=False),
            _declare("net_stock", "constant"),
            _declare("other_volume_changes", "constant"),
        )
    )
    (folder / "assembly.toml").write_text(declared, encoding="utf-8")
    head = (
        "asset,industry,first_year,applies_to,efficiency,rate,life,gross_life,b,retirement,discount_rate,"
        "initial_stock,initial_growth,capital_output_ratio,citation,status"
    )
    rows = [
        f"{asset},{industry},,,{profile},{start},a test,common practice"
        for asset, profile in PROFILES.items()
        for industry, start in STARTS.items()
    ]
    rows += [f"{a},{i},{later},a test,common practice" for a, later in LATER.items() for i in "KL"]
    (folder / "rules" / "assets.csv").write_text("\n".join([head, *rows]) + "\n", encoding="utf-8")
    assemble(folder)
    return folder


@pytest.fixture(scope="module")
def built(folder: Path) -> Iterator[Build]:
    with Build(folder) as build:
        yield build


def test_every_figure_is_reproduced(folder: Path) -> None:
    assert verify(folder, 25)["figures"] > 800


def test_nothing_stops_and_what_was_decided_is_told(built: Build) -> None:
    found = built.rows(
        "select rule, industry, asset from finding where severity = 'stop' "
        "or rule in ('benchmark_too_small', 'warm_up', 'balance') order by all"
    )
    assert found == [
        ("benchmark_too_small", "I", "N1132"),
        ("benchmark_too_small", "I", "N1133"),
        ("warm_up", "E", "N1132"),
        ("warm_up", "E", "N1133"),
        ("warm_up", "L", "N1132"),
        ("warm_up", "L", "N1133"),
    ]


KNOWN = {"F": {2003: 420}, "G": {2002: 300, 2008: 290}, "I": {2004: 30}, "K": {2003: 420}}

METHODS = {
    "A": "steady_state",
    "B": "declared_growth",
    "C": "steady_state",
    "D": "capital_output_ratio",
    "E": "zero",
    "F": "benchmark",
    "G": "benchmark",
    "H": "benchmark",
    "I": "steady_state",
    "K": "benchmark",
    "L": "zero",
}


@pytest.mark.parametrize("asset", PROFILES)
@pytest.mark.parametrize("industry", METHODS)
def test_every_series_starts_as_its_row_says(built: Build, industry: str, asset: str) -> None:
    found = built.rows(
        "select distinct method from series s join figure f using (series_id) "
        "where measure = 'net_stock' and industry = ? and asset = ? and price_basis = 'constant' and value is not null "
        "and method not in ('perpetual_inventory', 'delivered', 'before_changes')",
        (industry, asset),
    )
    assert METHODS[industry] in {method for (method,) in found}


@pytest.mark.parametrize("asset", PROFILES)
def test_known_stocks_are_met(built: Build, asset: str) -> None:
    for industry, years in KNOWN.items():
        series = find(
            built,
            "net_stock",
            {
                "industry": industry,
                "asset": asset,
                "method": "perpetual_inventory",
                "price_basis": "constant",
            },
        )
        for year, stock in years.items():
            assert trace(built, series, year).stored == pytest.approx(stock, rel=1e-12), (industry, year)
    ratio = find(built, "net_stock", {"industry": "D", "asset": asset, "method": "capital_output_ratio"})
    assert trace(built, ratio, FIRST - 1).stored == pytest.approx(2.5 * (400 + FIRST % 7), rel=1e-12)


def test_the_way_down_from_a_stock_after_a_loss_names_the_loss(built: Build) -> None:
    series = find(
        built,
        "net_stock",
        {"industry": "A", "asset": "N1133", "method": "perpetual_inventory", "price_basis": "constant"},
    )
    traced = trace(built, series, 2010)
    (part,) = (i for i in traced.inputs if i.role == "surviving_part")
    assert part.series is not None
    below = trace(built, part.series, 2010)
    changes = {i.period: i for i in below.inputs if i.role == "other_volume_changes"}
    assert {year: i.value for year, i in changes.items()} == {"2006": -30.5, "2009": 12.25}
    assert below.reproduced
