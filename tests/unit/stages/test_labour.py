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


def test_hours_of_groups_are_weighted_by_their_pay():
    """Shares of pay (1/2, 1/2) and then (3/4, 1/4); hours of employees double."""
    groups = {
        "industry=A worker_group=_T": [20.0, 20, 30],
        "industry=A worker_group=SAL": [10.0, 10, 20],
        "industry=A worker_group=SELF": [10.0, 10, 10],
    }
    pay = {"industry=A worker_group=SAL": [1.0, 50, 75], "industry=A worker_group=SELF": [1.0, 50, 25]}
    hours = block(HOURS, groups, first=REFERENCE_YEAR - 1)
    hours.part[~hours.series.is_code("worker_group", "_T")] = False
    book, _ = run_stage(
        labour.STAGE,
        params("labour", partition="status"),
        hours,
        block("compensation_of_employees/delivered/current", pay, first=REFERENCE_YEAR - 1),
    )
    growth = (1 / 2 + 3 / 4) / 2 * np.log(2)
    index = get(book, "labour_input/tornqvist/index")
    np.testing.assert_allclose(
        column(index, "industry=A worker_group=_T")[1:], [1, np.exp(growth)], rtol=1e-14
    )
    composition = get(book, "labour_composition/tornqvist/index")
    np.testing.assert_allclose(
        column(composition, "industry=A worker_group=_T")[2], np.exp(growth) / 1.5, rtol=1e-14
    )
    assert index.chosen.all()
    assert not get(book, "labour_input/hours/index").chosen.any()


def test_a_delivered_composition_multiplies_hours():
    hours = block(HOURS, {"industry=A worker_group=_T": [20.0, 20, 30]}, first=REFERENCE_YEAR - 1)
    composition = block(
        "labour_composition/delivered/index",
        {"industry=A worker_group=_T": [1.9, 2.0, 2.2]},
        first=REFERENCE_YEAR - 1,
    )
    book, _ = run_stage(labour.STAGE, params("labour"), hours, composition)
    np.testing.assert_allclose(
        column(get(book, "labour_input/*/index"), "industry=A worker_group=_T"), [0.95, 1, 1.65], rtol=1e-14
    )
