"""Index numbers against published data; sources in fixtures/reference/README.md."""

import numpy as np
import pytest

from keelbook.methods.index_numbers import (
    chain,
    fisher,
    fixed_base,
    laspeyres,
    links,
    paasche,
    weighted_log_change,
)

FORMULAS = {"Laspeyres": "laspeyres", "Paasche": "paasche", "Fisher": "fisher", "Tornqvist": "tornqvist"}


@pytest.fixture
def manual(figures):
    data = figures("ppi_manual_artificial_dataset.csv")
    return data["price"].reshape(5, 6), data["quantity"].reshape(5, 6)


def test_values_of_the_manual(manual):
    """Producer Price Index Manual, 2004, tables 19.1 and 19.2 (second-hand): value of each period."""
    price, quantity = manual
    np.testing.assert_allclose((price * quantity).sum(axis=1), [10.00, 14.10, 15.28, 17.56, 20.00], atol=5e-3)


@pytest.mark.parametrize("printed", FORMULAS)
def test_price_indices_of_the_manual(manual, rows, printed):
    """The same data: fixed base and chained, derived to six decimals."""
    price, quantity = manual
    derived = [row for row in rows("ppi_manual_index_results_derived.csv") if row["formula"] == printed]
    assert len(derived) == 5
    formula = FORMULAS[printed]
    direct = fixed_base(formula, price, quantity)
    chained = chain(links(formula, price, quantity))
    np.testing.assert_allclose(direct, [float(row["fixed_base"]) for row in derived], rtol=0, atol=5.1e-7)
    np.testing.assert_allclose(chained, [float(row["chained"]) for row in derived], rtol=0, atol=5.1e-7)


def test_small_example(figures):
    """Four products, two periods (seen): sums 740, 669, 629, 571; indices 110.61, 110.16, 110.39."""
    data = figures("index_small_example.csv")
    p0, q0, p1, q1 = (data[name] for name in ("p0", "q0", "p1", "q1"))
    assert ((p1 * q0).sum(), (p0 * q0).sum(), (p1 * q1).sum(), (p0 * q1).sum()) == (740, 669, 629, 571)
    assert 100 * laspeyres(p0, p1, q0, q1) == pytest.approx(110.61, abs=5e-3)
    assert 100 * paasche(p0, p1, q0, q1) == pytest.approx(110.16, abs=5e-3)
    assert 100 * fisher(p0, p1, q0, q1) == pytest.approx(110.39, abs=5e-3)


def test_chained_and_direct_input_price_of_us_manufacturing(figures):
    """Berndt and Wood 1975, four inputs 1947 to 1971 (second-hand); indices derived."""
    data = figures("berndt_wood_1975_klem.csv")
    share = np.column_stack([data[f"share_{name}"] for name in "klem"])
    price = np.column_stack([data[f"p_{name}"] for name in "klem"])
    # The source's shares of 1958 do not sum to one; they are used as printed.
    off = np.abs(share.sum(axis=1) - 1) > 1.5e-5
    assert data["year"][off].tolist() == [1958]
    mean = (share[:-1] + share[1:]) / 2
    chained = chain(np.exp(weighted_log_change(price[:-1], price[1:], mean, axis=1)))
    np.testing.assert_allclose(chained, data["derived_chain_tornqvist_input_price"], rtol=0, atol=5.1e-7)
    assert chained[-1] == pytest.approx(1.798516, abs=5.1e-7)
    direct = np.exp(weighted_log_change(price[0], price[-1], (share[0] + share[-1]) / 2))
    assert direct == pytest.approx(1.791601, abs=5.1e-7)

    quantity = share * data["cost"][:, None] / price
    for formula in ("fisher", "laspeyres", "paasche"):
        column = "derived_chain_fisher_input_price" if formula == "fisher" else f"derived_chain_{formula}"
        np.testing.assert_allclose(chain(links(formula, price, quantity)), data[column], rtol=0, atol=5.1e-7)
    assert fixed_base("fisher", price, quantity)[-1] == pytest.approx(1.793687, abs=5.1e-7)
