"""Starting stocks: K_0 = I_1 / (g + d) of A. Harberger, 1978 (formula from memory); figures derived."""

import numpy as np
import pytest

from keelbook.methods.initial_stock import half_life, half_life_of_part, opening_stock_geometric
from keelbook.methods.weights import period_end_weights


@pytest.mark.parametrize(("timing", "expected"), [("start", 930), ("mid", 965), ("end", 1000)])
def test_steady_state_by_timing(timing, expected):
    weights = period_end_weights(
        efficiency="cohort_geometric",
        retirement=None,
        life=None,
        rate=0.07,
        b=None,
        discount_rate=None,
        timing=timing,
        length=1,
    )
    opening = opening_stock_geometric(100.0, 0.03, weights.net[0], 0.07)
    assert opening == pytest.approx(expected, rel=1e-12)


def test_steady_state_second_example():
    assert opening_stock_geometric(100.0, 0.02, 1.0, 0.05) == pytest.approx(1428.5714, abs=5e-5)


def test_half_lives_of_stock_and_of_its_part():
    """Decay (1-d)^t: G. V. G. Stevens, Federal Reserve IFDP 368, 1989 (seen); figures derived."""
    assert half_life(0.05) == pytest.approx(13.5, abs=0.05)
    assert half_life_of_part(0.05, 0.03) == pytest.approx(8.6, abs=0.05)
    rates = [0.02, 0.05, 0.10, 0.15, 0.30]
    np.testing.assert_allclose([half_life(d) for d in rates], [34.31, 13.51, 6.58, 4.27, 1.94], atol=5.1e-3)
