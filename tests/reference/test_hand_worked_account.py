"""Adjustments for the self-employed on one account worked by hand.

The account is invented: value added at factor cost 500 = compensation 240 + operating surplus 170 + mixed income 90;
400 hours of employees, 120 of the self-employed. The rules are published; the results follow from them by hand.
"""

import numpy as np
import pytest

from keelbook.methods.income_shares import by_hours, fixed_fraction, proportional, share

D1, MIXED, BASE = np.array(240.0), np.array(90.0), np.array(500.0)


def test_hours_rule():
    """Compensation x hours of all / hours of employees: OECD, Compendium of Productivity Indicators 2019 (seen)."""
    found = share(by_hours(D1, np.array(400.0), np.array(120.0), np.array(1.0)), BASE)
    assert found == pytest.approx(240 * (520 / 400) / 500)  # 312 / 500
    assert found == pytest.approx(0.624)


def test_two_thirds_rule():
    """Two thirds of mixed income: D. G. Johnson, 1954 (from memory)."""
    assert share(fixed_fraction(D1, MIXED, np.array(2 / 3)), BASE) == pytest.approx(0.6)  # (240 + 60) / 500


def test_proportional_rule():
    """Compensation / (value added - mixed income): D. Gollin, 2002, second adjustment (second-hand)."""
    assert share(proportional(D1, MIXED, BASE), BASE) == pytest.approx(240 / 410)
