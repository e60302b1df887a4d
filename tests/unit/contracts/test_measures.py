import pytest

from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.measures import load_measures

NAMED = [
    "investment",
    "investment_price",
    "gross_stock",
    "net_stock",
    "productive_stock",
    "consumption_of_fixed_capital",
    "retirements",
    "other_volume_changes",
    "gross_volume_changes",
    "surviving_part",
    "investment_indicator",
    "vintage_ages",
    "holding_gains",
    "average_age",
    "rate_of_return",
    "user_cost",
    "capital_compensation",
    "capital_services",
    "capital_composition",
    "aggregation_discrepancy",
    "hours_worked",
    "persons_employed",
    "labour_input",
    "labour_composition",
    "compensation_of_employees",
    "mixed_income",
    "operating_surplus",
    "net_taxes_on_production",
    "value_added",
    "labour_income",
    "labour_share",
    "capital_share",
    "capital_income",
    "asset_base",
    "revaluation",
    "productive_stock_average",
    "trend_growth",
    "trend_investment",
    "output_growth",
    "capital_growth",
    "labour_growth",
    "capital_contribution",
    "labour_contribution",
    "residual_growth",
    "residual_level",
    "residual_labour_augmenting",
    "residual_capital_augmenting",
    "output_per_hour_growth",
    "capital_deepening",
    "deepening_contribution",
    "labour_share_two_period",
    "capital_share_two_period",
    "labour_share_smoothed",
    "capital_share_smoothed",
    "capital_services_growth",
    "benchmark_factor",
    "labour_input_growth",
    "unallocated_income",
    "tax_rate",
    "tax_allowances",
    "tax_credit",
    "tax_term",
    "property_tax_rate",
    "price_change",
    "taxed_base",
    "cost_before_return",
    "investment_growth",
    "investment_index",
    "net_stock_growth",
    "net_stock_index",
    "consumption_of_fixed_capital_growth",
    "consumption_of_fixed_capital_index",
]

MULTIPLIERS = {"currency": 6, "hours": 6, "persons": 3}


def test_the_measures_of_the_design_are_all_there_and_no_other() -> None:
    assert set(load_measures()) == set(NAMED)


@pytest.mark.parametrize("name", NAMED)
def test_stored_unit_multiplier_follows_the_unit(name: str) -> None:
    measure = load_measures()[name]
    assert measure.unit_mult == MULTIPLIERS.get(measure.unit, 0)
    assert load_code_lists().has("unit_mult", str(measure.unit_mult))


@pytest.mark.parametrize("name", NAMED)
def test_price_bases_fit_the_unit(name: str) -> None:
    measure = load_measures()[name]
    bases = set(measure.price_bases)
    if measure.unit == "currency":
        assert bases
        assert not bases & {"_Z", "index", "source_index", "earlier_index"}
    if measure.unit in ("hours", "persons", "rate", "log_change"):
        assert bases == {"_Z"}
    if measure.unit == "index":
        assert bases <= {"index", "source_index", "earlier_index", "year_end"}


def test_defaults_of_a_dimension_not_given() -> None:
    hours = load_measures()["hours_worked"]
    assert [hours.default(dim) for dim in ("area", "sector", "industry", "asset", "worker_group")] == [
        None,
        "S1",
        "_T",
        "_Z",
        "_T",
    ]
