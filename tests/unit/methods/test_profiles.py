import numpy as np
import pytest

from keelbook.methods.profiles import (
    age_price,
    direct_age_price,
    efficiency,
    efficiency_from_age_price,
)

AGES = np.array([0.0, 0.5, 3.5, 4.0, 9.0])


@pytest.mark.parametrize(
    ("form", "parameters", "expected"),
    [
        ("geometric", {"rate": 0.19}, [1, 0.9, 0.81**3.5, 0.81**4, 0.81**9]),
        ("geometric", {"rate": 1}, [1, 0, 0, 0, 0]),
        ("linear", {"life": 4}, [1, 0.875, 0.125, 0, 0]),
        ("constant", {"life": 4}, [1, 1, 1, 0, 0]),
        ("hyperbolic", {"life": 4, "b": 1}, [1, 1, 1, 0, 0]),
        ("hyperbolic", {"life": 4, "b": 0.5}, [1, 3.5 / 3.75, 0.5 / 2.25, 0, 0]),
        ("hyperbolic", {"life": 4, "b": -1}, [1, 3.5 / 4.5, 0.5 / 7.5, 0, 0]),
    ],
)
def test_efficiency_of_each_form(form, parameters, expected):
    np.testing.assert_allclose(efficiency(form, AGES, **parameters), expected, rtol=1e-15)


@pytest.mark.parametrize(
    ("form", "parameters", "message"),
    [
        ("hiperbolic", {"life": 4, "b": 0.5}, "geometric, hyperbolic, linear, constant"),
        ("geometric", {}, "depreciation rate is needed"),
        ("geometric", {"rate": 1.1}, r"1\.1, expected a number in \[0, 1\]"),
        ("geometric", {"rate": float("nan")}, "nan, expected"),
        ("hyperbolic", {"life": 4, "b": 1.01}, "b is 1.01"),
        ("hyperbolic", {"life": 0, "b": 0.5}, "life is 0"),
        ("linear", {"life": 4, "b": 0.5, "rate": 0.1}, "does not use rate and b"),
    ],
)
def test_efficiency_refuses(form, parameters, message):
    with pytest.raises(ValueError, match=message):
        efficiency(form, AGES, **parameters)


@pytest.mark.parametrize("age", [-0.5, np.nan])
def test_efficiency_refuses_ages_that_do_not_exist(age):
    with pytest.raises(ValueError, match="negative or not a number"):
        efficiency("linear", np.array([0.0, age]), life=4)


def test_age_price_by_hand():
    # At 25 %: earnings 1, 0.5 are worth 1 + 0.5 / 1.25 = 1.4 when new and 0.5 a period later.
    np.testing.assert_allclose(age_price(np.array([1, 0.5, 0]), 0.25), [1, 0.5 / 1.4, 0], rtol=1e-15)


@pytest.mark.parametrize("h", [[0.0, 0.0], [1.0, np.nan], []])
def test_age_price_refuses_a_profile_without_value(h):
    with pytest.raises(ValueError, match="no positive value"):
        age_price(np.array(h), 0.04)


def test_discount_rate_must_exceed_minus_one():
    for function in (age_price, efficiency_from_age_price):
        with pytest.raises(ValueError, match="discount rate is -1"):
            function(np.array([1.0, 0.5]), -1)


def test_prices_that_do_not_fit_the_rate_show_in_the_efficiency():
    rising = efficiency_from_age_price(np.array([1.0, 0.9, 0.0]), 0.0)
    np.testing.assert_allclose(rising, [1, 9, 0], rtol=1e-12)
    with pytest.raises(ValueError, match="age-price profile"):
        efficiency_from_age_price(np.array([1.0, 1.2, 0.0]), 0.0)


@pytest.mark.parametrize(
    ("form", "parameters", "expected"),
    [
        ("straight_line", {}, [1, 0.875, 0.125, 0, 0]),
        ("declining_balance", {"factor": 2}, [1, 0.5**0.5, 0.5**3.5, 0, 0]),
        ("declining_balance", {"factor": 5}, [1, 0, 0, 0, 0]),
    ],
)
def test_prices_given_directly(form, parameters, expected):
    np.testing.assert_allclose(direct_age_price(form, AGES, life=4, **parameters), expected, rtol=1e-15)


@pytest.mark.parametrize(
    ("form", "parameters", "message"),
    [
        ("straight", {"life": 4}, "expected one of straight_line, declining_balance"),
        ("straight_line", {"life": 4, "factor": 2}, "straight_line price does not use factor"),
        ("declining_balance", {"life": 4}, "declining-balance factor is needed"),
        ("declining_balance", {"life": 4, "factor": 0}, "factor is 0"),
        ("declining_balance", {"life": 0, "factor": 2}, "life is 0"),
    ],
)
def test_prices_refused(form, parameters, message):
    with pytest.raises(ValueError, match=message):
        direct_age_price(form, AGES, **parameters)


def test_straight_line_prices_without_discounting_come_from_constant_efficiency():
    z = direct_age_price("straight_line", np.arange(6.0), life=5)
    np.testing.assert_allclose(efficiency_from_age_price(z, 0.0), [1, 1, 1, 1, 1, 0], atol=1e-15)
