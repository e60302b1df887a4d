import numpy as np
import pytest

from keelbook.methods.growth import (
    discrete_residual,
    log_log_fit,
    log_residual,
    period_means,
    readings,
    reallocation,
    residual_level,
    split_of_rise,
)


def test_residual_by_hand():
    growth = np.array(0.05), np.array(0.04), np.array(0.01), np.array(0.25)
    assert log_residual(*growth) == pytest.approx(0.05 - 0.01 - 0.0075)
    assert discrete_residual(*growth) == pytest.approx(0.0325)


def test_level_starts_at_one_and_follows_its_form():
    np.testing.assert_allclose(residual_level(np.array([0.1, -0.5]), "discrete"), [1, 1.1, 0.55])
    np.testing.assert_allclose(residual_level(np.log([2.0, 3.0])), [1, 2, 6])


def test_a_gap_in_growth_leaves_no_level_after_it():
    level = residual_level(np.array([[0.1, 0.1], [np.nan, 0.1], [0.1, 0.1]]))
    assert np.isnan(level).tolist() == [[False, False], [False, False], [True, False], [True, False]]


def test_readings_by_hand():
    labour, capital = readings(np.array(0.03), np.array(0.25))
    assert labour == pytest.approx(0.04)
    assert capital == pytest.approx(0.12)


def test_fit_of_an_exact_power():
    x = np.array([1.0, 2.0, 4.0])
    fit = log_log_fit(5 * x**0.3, x)
    assert (fit.slope, fit.intercept, fit.r2) == pytest.approx((0.3, np.log(5), 1))
    assert fit.standard_error == pytest.approx(0, abs=1e-12)


@pytest.mark.parametrize(
    ("y", "x", "message"),
    [
        ([1, 2], [1, 2], "3 or more"),
        ([1, 2, 3], [1, 2], "same length"),
        ([1, 2, 3], [1, 2, 0], "above 0"),
        ([1, 2, np.nan], [1, 2, 3], "above 0"),
        ([1, 2, 3], [2, 2, 2], "variation"),
    ],
)
def test_fit_refuses(y, x, message):
    with pytest.raises(ValueError, match=message):
        log_log_fit(np.array(y, dtype=float), np.array(x, dtype=float))


def test_form_of_the_level_is_refused():
    with pytest.raises(ValueError, match="expected one of log, discrete"):
        residual_level(np.zeros(2), "linear")


@pytest.mark.parametrize(
    ("changes", "message"),
    [({"q1": 1.0}, "no rise"), ({"k0": 0.0}, "above 0"), ({"residual_level": -1.0}, "above 0")],
)
def test_split_refuses(changes, message):
    given = {"q0": 1.0, "q1": 2.0, "k0": 1.0, "k1": 1.5, "residual_level": 1.8, "capital_share": 0.3}
    with pytest.raises(ValueError, match=message):
        split_of_rise(**(given | changes))


def test_reallocation_by_hand():
    """Two industries without change of their own; labour moves from the one with the low labour share."""
    found = reallocation(
        value_share=np.array([0.5, 0.5]),
        industry_growth=(np.array([-0.02, 0.06]), np.array([0.0, 0.0]), np.array([-0.1, 0.1])),
        industry_capital_share=np.array([0.8, 0.4]),
        total_growth=(np.array(0.03), np.array(0.0), np.array(0.0)),
        capital_share=np.array(0.6),
    )
    np.testing.assert_allclose(found.within, 0, atol=1e-15)
    assert found.output == pytest.approx(0.03 - 0.02)
    assert found.capital == 0
    assert found.labour == pytest.approx(0.5 * 0.2 * -0.1 + 0.5 * 0.6 * 0.1)
    assert found.total() == pytest.approx(0.03)


def test_means_of_spans_of_periods():
    growth = np.array([[0.01, 0.01], [0.03, np.nan], [0.05, 0.05]])
    np.testing.assert_allclose(
        period_means(growth, [(0, 1), (2, 2), (0, 2)]), [[0.02, np.nan], [0.05, 0.05], [0.03, np.nan]]
    )
    with pytest.raises(ValueError, match=r"rows 0 to 2: \(1, 3\), \(2, 1\)"):
        period_means(growth, [(0, 1), (1, 3), (2, 1)])
