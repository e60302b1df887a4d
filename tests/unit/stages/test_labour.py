import numpy as np
from small_blocks import REFERENCE_YEAR, block, column, get, holds, params, rules_of, run_stage

from keelbook.stages import labour

HOURS = "hours_worked/delivered/_Z"


def test_labour_input_is_hours_relative_to_the_reference_year():
    hours = block(
        HOURS,
        {
            "industry=A worker_group=_T": [50.0, 40, 60],
            "industry=A worker_group=SAL": [10.0, 10, 10],
            "industry=C worker_group=_T": [1.0, 2, np.nan],
        },
        first=REFERENCE_YEAR - 1,
    )
    book, findings = run_stage(labour.STAGE, params("labour"), hours)
    index = get(book, "labour_input/hours/index")
    np.testing.assert_allclose(column(index, "industry=A worker_group=_T"), [1.25, 1, 1.5], rtol=1e-15)
    np.testing.assert_array_equal(column(index, "industry=C worker_group=_T"), [0.5, 1, np.nan])
    assert not holds(index, "industry=A worker_group=SAL")
    assert not findings


def test_without_the_reference_year_there_is_no_index():
    hours = block(HOURS, {"industry=A worker_group=_T": [50.0, np.nan, 60]}, first=REFERENCE_YEAR - 1)
    book, _ = run_stage(labour.STAGE, params("labour"), hours)
    assert np.isnan(column(get(book, "labour_input/hours/index"), "industry=A worker_group=_T")).all()


def test_without_hours_it_is_told():
    _, findings = run_stage(labour.STAGE, params("labour"))
    assert rules_of(findings) == ["not_computed"]
    assert findings[0]["message"] == "labour: not computed, there is no hours_worked"
