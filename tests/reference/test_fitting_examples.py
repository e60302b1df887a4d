"""Proportional fitting against the tables of fixtures/reference, to the printed digit."""

import json
from pathlib import Path

import numpy as np
import pytest

from keelbook.methods.proportional_fitting import fit

REFERENCE = Path(__file__).resolve().parents[2] / "fixtures" / "reference"
EXAMPLES = json.loads((REFERENCE / "proportional_fitting_examples.json").read_text("utf-8"))


@pytest.mark.parametrize("name", EXAMPLES)
def test_fitted_table(name):
    given = {k: np.array(v, dtype=float) for k, v in EXAMPLES[name].items() if k != "mark"}
    seed = given["seed"] if "seed" in given else given["coefficients"] * given["output"]
    fitted = fit(seed, given["rows"], given["columns"], tolerance=1e-12, rounds=100)
    np.testing.assert_allclose(fitted.table, given["derived"], rtol=0, atol=given["printed"] * 1.0001)
    np.testing.assert_array_equal(fitted.table == 0, seed == 0)
