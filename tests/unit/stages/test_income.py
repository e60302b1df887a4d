import numpy as np
import pytest
from small_blocks import block, column, get, number, params, rules_of, run_stage

from keelbook.stages import income

NAN = np.nan

VALUE_ADDED = "value_added/delivered/current"
COMPENSATION = "compensation_of_employees/delivered/current"
MIXED = "mixed_income/delivered/current"
TAXES = "net_taxes_on_production/delivered/current"
HOURS = "hours_worked/delivered/_Z"

CASCADE = ("hours", "fixed_fraction", "unadjusted")


def _account(
    value_added, compensation, *, taxes=None, mixed=None, employees=None, self_employed=None, **changes
):
    """Run the stage on texts of series -> figures; compensation is that of all workers."""
    blocks = [
        block(VALUE_ADDED, value_added),
        block(COMPENSATION, {f"{s} worker_group=_T": v for s, v in compensation.items()}),
    ]
    if taxes:
        blocks.append(block(TAXES, taxes))
    if mixed:
        blocks.append(block(MIXED, mixed))
    if employees:
        hours = {f"{s} worker_group=SAL": v for s, v in employees.items()}
        hours |= {f"{s} worker_group=SELF": v for s, v in (self_employed or {}).items()}
        blocks.append(block(HOURS, hours))
    for one in blocks:
        one.part[one.series.is_code("industry", "_T")] = not (~one.series.is_code("industry", "_T")).any()
    return run_stage(income.STAGE, params("income", **changes), *blocks)


def test_every_method_by_hand():
    """Y = 110 - 10; D.1 = 60; mixed income 18; 50 hours of employees, 10 of the self-employed."""
    book, _ = _account(
        {"industry=A": [110.0]},
        {"industry=A": [60.0]},
        taxes={"industry=A": [10.0]},
        mixed={"industry=A": [18.0]},
        employees={"industry=A": [50.0]},
        self_employed={"industry=A": [10.0]},
        cascade=CASCADE,
        mixed_income_labour_fraction=0.5,
        relative_earnings=0.75,
    )
    assert column(get(book, "value_added/factor_cost/current"), "industry=A")[0] == 100
    for method, labour in (
        ("unadjusted", 60.0),
        ("hours", 60 + 0.75 * (60 / 50) * 10),
        ("fixed_fraction", 60 + 0.5 * 18),
    ):
        for measure, basis, expected in (
            ("labour_income", "current", labour),
            ("capital_income", "current", 100 - labour),
            ("labour_share", "_Z", labour / 100),
            ("capital_share", "_Z", 1 - labour / 100),
        ):
            got = get(book, f"{measure}/{method}/{basis}")
            np.testing.assert_allclose(column(got, "industry=A")[0], expected, rtol=1e-14)
            assert got.chosen.all() == (method == "hours")


def test_the_parameters_used_are_recorded():
    book, _ = _account(
        {"industry=A": [100.0]}, {"industry=A": [60.0]}, mixed={"industry=A": [10.0]}, cascade=CASCADE
    )
    block = get(book, "labour_income/fixed_fraction/current")
    names = {c.name: c for c in block.origin.sets[block.origin.set[0]]}
    assert names["income.mixed_income_labour_fraction"].value == pytest.approx(2 / 3)
    assert "Johnson" in names["income.mixed_income_labour_fraction"].citation


def test_without_taxes_the_base_is_value_added_and_it_is_told():
    book, findings = _account({"industry=A": [100.0]}, {"industry=A": [60.0]})
    assert column(get(book, "value_added/factor_cost/current"), "industry=A")[0] == 100
    assert rules_of(findings) == ["not_computed"]
    assert findings[0]["measure"] == "net_taxes_on_production"


def _is_chosen(block, series: str) -> bool:
    at = int(block.series.locate(np.array([number(series)]))[0])
    return at >= 0 and bool(block.chosen[at])


def _methods_chosen(book, series: str) -> list[str]:
    return [b.key.method for b in book if b.key.measure == "labour_share" and _is_chosen(b, series)]


def test_the_first_method_of_the_cascade_with_every_year_is_chosen_series_by_series():
    book, _ = _account(
        {"industry=A": [100.0, 100], "industry=C": [100.0, 100]},
        {"industry=A": [60.0, 60], "industry=C": [60.0, 60]},
        mixed={"industry=A": [9.0, 9], "industry=C": [9.0, 9]},
        employees={"industry=A": [50.0, 50], "industry=C": [50.0, NAN]},
        self_employed={"industry=A": [10.0, 10], "industry=C": [10.0, 10]},
        cascade=CASCADE,
    )
    assert _methods_chosen(book, "industry=A") == ["hours"]
    assert _methods_chosen(book, "industry=C") == ["fixed_fraction"]


def test_a_method_whose_labour_income_exceeds_the_base_gives_way_to_the_next():
    book, findings = _account(
        {"industry=A": [100.0]},
        {"industry=A": [60.0]},
        taxes={"industry=A": [0.0]},
        mixed={"industry=A": [9.0]},
        employees={"industry=A": [10.0]},
        self_employed={"industry=A": [10.0]},
        cascade=CASCADE,
    )
    assert column(get(book, "labour_share/hours/_Z"), "industry=A")[0] == pytest.approx(1.2)
    assert _methods_chosen(book, "industry=A") == ["fixed_fraction"]
    assert not findings


def test_when_no_method_stays_inside_the_first_with_figures_is_chosen_and_told():
    book, findings = _account(
        {"industry=A": [100.0, 100]},
        {"industry=A": [60.0, 130]},
        taxes={"industry=A": [0.0, 0]},
        cascade=("fixed_fraction", "unadjusted"),
    )
    assert _methods_chosen(book, "industry=A") == ["unadjusted"]
    np.testing.assert_allclose(column(get(book, "labour_share/unadjusted/_Z"), "industry=A"), [0.6, 1.3])
    (finding,) = findings
    assert (finding["rule"], finding["severity"]) == ("share_range", "warn")
    assert (finding["industry"], finding["time_period"], finding["found"]) == ("A", "2011", "1.3000")


def test_a_total_adds_up_the_chosen_incomes_of_its_industries():
    book, _ = _account(
        {"industry=A": [100.0], "industry=C": [300.0], "industry=_T": [400.0]},
        {"industry=A": [60.0], "industry=C": [200.0], "industry=_T": [260.0]},
        taxes={"industry=A": [0.0], "industry=C": [0.0], "industry=_T": [0.0]},
        mixed={"industry=A": [9.0], "industry=_T": [9.0]},
        cascade=CASCADE,
        mixed_income_labour_fraction=1.0,
    )
    # A by its mixed income (69), C unadjusted (200): the total is 269, not 260 + 9 by one method alone.
    total = get(book, "labour_share/sum_of_industries/_Z")
    np.testing.assert_allclose(column(total, "industry=_T")[0], 269 / 400, rtol=1e-14)
    assert _methods_chosen(book, "industry=_T") == ["sum_of_industries"]
    np.testing.assert_allclose(
        column(get(book, "capital_income/sum_of_industries/current"), "industry=_T")[0], 131, rtol=1e-14
    )
    assert not _is_chosen(get(book, "labour_share/fixed_fraction/_Z"), "industry=_T")


def test_a_total_without_its_industries_is_chosen_like_any_other():
    book, _ = _account({"industry=_T": [400.0]}, {"industry=_T": [260.0]}, cascade=CASCADE)
    assert _methods_chosen(book, "industry=_T") == ["unadjusted"]


def test_one_method_is_chosen_for_every_series_in_the_end():
    book, _ = _account(
        {"industry=A": [100.0], "industry=C": [300.0], "industry=_T": [400.0]},
        {"industry=A": [60.0], "industry=C": [200.0], "industry=_T": [260.0]},
        employees={"industry=A": [1.0]},
        self_employed={"industry=A": [0.0]},
        cascade=CASCADE,
    )
    for series in ("industry=A", "industry=C", "industry=_T"):
        assert len(_methods_chosen(book, series)) == 1


def test_a_delivered_share_alone_gives_the_capital_share():
    book, findings = run_stage(
        income.STAGE, params("income"), block("labour_share/delivered/_Z", {"industry=A": [0.7]})
    )
    np.testing.assert_allclose(column(get(book, "capital_share/delivered/_Z"), "industry=A"), [0.3])
    assert rules_of(findings) == ["not_computed", "not_computed"]
