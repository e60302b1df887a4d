"""What must hold between the published figures, computed here from the panel alone."""

from collections.abc import Callable

import duckdb
import numpy as np
import pandas as pd
import pytest

DIMS = ["area", "sector", "industry", "asset", "worker_group"]

XV_SERIES, XW_SERIES = 16 + 12 + 3 + 1, 8 + 1
"""Pairs of sector and industry, industries, sectors and the total of XV; industries and the total of XW."""
SERIES = XV_SERIES + XW_SERIES

Take = Callable[..., "pd.Series[float]"]


@pytest.fixture(scope="module")
def take(panel: duckdb.DuckDBPyConnection) -> Take:
    """Return a reader: measure, price basis, method (the chosen one) -> values by key and year."""
    frame = panel.execute(
        f"select {', '.join(DIMS)}, cast(time_period as integer) as year, measure, method, price_basis, value, chosen "
        "from panel"
    ).df()

    def read(measure: str, basis: str, method: str | None = None) -> "pd.Series[float]":
        mine = (frame["measure"] == measure) & (frame["price_basis"] == basis)
        mine &= frame["chosen"] if method is None else frame["method"] == method
        found = frame[mine].set_index([*DIMS, "year"])["value"]
        assert len(found), (measure, basis, method)
        return found.sort_index()

    return read


def before(series: "pd.Series[float]") -> "pd.Series[float]":
    """Return the figures of the year before, under this year's key."""
    moved = series.copy()
    levels = [*DIMS, "year"]
    moved.index = pd.MultiIndex.from_frame(
        series.index.to_frame(index=False).assign(year=lambda f: f["year"] + 1)[levels]
    )
    return moved


def agree(left: "pd.Series[float]", right: "pd.Series[float]", size: "pd.Series[float]", least: int) -> None:
    """Require two sides to agree within 1e-10 of the size of their terms, in at least so many figures."""
    both = pd.concat([left, right, size], axis=1, keys=["left", "right", "size"]).dropna()
    assert len(both) >= least
    gap = (both["left"] - both["right"]).abs()
    assert (gap <= 1e-10 * both["size"]).all(), both[gap > 1e-10 * both["size"]].head()


def of_assets(figures: "pd.Series[float]") -> "pd.Series[float]":
    return figures[figures.index.get_level_values("asset") != "_T"]


@pytest.mark.parametrize(
    ("stock", "loss"), [("net_stock", "consumption_of_fixed_capital"), ("gross_stock", "retirements")]
)
def test_closing_is_opening_plus_investment_less_loss(take: Take, stock: str, loss: str) -> None:
    """Asset by asset: the total of all assets holds land, and investment that has no gross stock."""
    closing, lost = of_assets(take(stock, "constant")), take(loss, "constant")
    steady, benchmark = (take(stock, "constant", method) for method in ("steady_state", "benchmark"))
    steady = steady[~steady.index.isin(benchmark.index)]
    opening = pd.concat([before(closing), before(steady), before(benchmark)])
    flow = take("investment", "constant")
    changed = take(
        f"{'other' if stock == 'net_stock' else 'gross'}_volume_changes", "constant", "of_vintages"
    )
    changes = changed.reindex(closing.index).fillna(0.0)
    # What the flood took is stored for the series it hit; for the sums over it both sides are made here.
    hit = changed.index[changed != 0]
    assert len(hit) == 1
    above = [key for key in closing.index if key[3:] == hit[0][3:] and key != hit[0] and key[0] == hit[0][0]]
    summed = [key for key in above if key[1] in ("S1", hit[0][1]) and key[2] in ("_T", hit[0][2])]
    changes.loc[summed] = float(changed[hit[0]])
    expected = opening + flow - lost + changes
    size = opening.abs() + flow.abs() + lost.abs()
    agree(closing, expected, size, 35 * 40)
    first = closing[closing.index.get_level_values("year") == 1985]
    agree(first, expected, size, 40)


def total(parts: "pd.Series[float]", *dims: str) -> "pd.Series[float]":
    """Return the sum of elementary parts over some dimensions, under the key of the total."""
    for dim in dims:
        parts = parts[parts.index.get_level_values(dim) != "_T"]
    frame = parts.reset_index()
    frame[list(dims)] = "_T"
    return frame.groupby([*DIMS, "year"])["value"].sum(min_count=1)


ADDITIVE = [
    ("investment", "current"),
    ("net_stock", "constant"),
    ("net_stock", "year_end"),
    ("productive_stock", "constant"),
    ("consumption_of_fixed_capital", "current"),
    ("capital_compensation", "current"),
    ("asset_base", "current"),
    ("revaluation", "current"),
]


@pytest.mark.parametrize(("measure", "basis"), ADDITIVE)
@pytest.mark.parametrize("dims", [("asset",), ("industry",), ("industry", "asset")])
def test_a_total_is_the_sum_of_its_parts(take: Take, measure: str, basis: str, dims: tuple[str, ...]) -> None:
    figures = take(measure, basis)
    made = total(figures, *dims)
    agree(figures, made, total(figures.abs(), *dims), 34 * {1: 6, 2: 1}[len(dims)])


@pytest.mark.parametrize(
    ("measure", "basis", "dims", "least"),
    [
        ("persons_employed", "_Z", ("industry",), 3 * 35),
        ("value_added", "current", ("industry",), 35),
        ("value_added", "constant", ("industry",), 35),
        ("labour_income", "current", ("industry",), 35),
        ("capital_income", "current", ("industry",), 35),
    ],
)
def test_totals_of_labour_and_income(
    take: Take, measure: str, basis: str, dims: tuple[str, ...], least: int
) -> None:
    figures = take(measure, basis)
    agree(figures, total(figures, *dims), total(figures.abs(), *dims), least)


@pytest.mark.parametrize(
    ("measure", "basis", "groups", "least"),
    [
        ("hours_worked", "_Z", ("SAL", "SELF"), SERIES * 35),
        ("hours_worked", "_Z", ("SK_L", "SK_M", "SK_H"), 16 * 35),
        ("compensation_of_employees", "current", ("SK_L", "SK_M", "SK_H"), 16 * 35),
    ],
)
def test_every_partition_of_workers_adds_up_to_all(
    take: Take, measure: str, basis: str, groups: tuple[str, ...], least: int
) -> None:
    figures = take(measure, basis)
    parts = figures[figures.index.get_level_values("worker_group").isin(groups)]
    agree(figures, total(parts, "worker_group"), figures, least)


def test_gross_stock_has_a_total_only_where_every_part_has_one(take: Take) -> None:
    figures = take("gross_stock", "constant")
    agree(figures, total(figures, "industry"), total(figures, "industry"), 5 * 35)


def test_the_costs_of_all_assets_are_the_capital_income(take: Take) -> None:
    """But for government: a declared rate leaves a part of its income, which is stored."""
    costs, income = take("capital_compensation", "current"), take("capital_income", "current")
    assert (income.index.get_level_values("asset") == "_Z").all()
    left = take("unallocated_income", "current").rename({"_T": "_Z"}, level="asset")
    assert set(left.index.get_level_values("sector")) == {"S13"}
    all_assets = total(costs, "asset").rename({"_T": "_Z"}, level="asset")
    agree(all_assets.reindex(left.index) + left, income.reindex(left.index), income.abs(), 3 * 34)
    exhausted = all_assets[
        all_assets.index.get_level_values("sector").isin(["S11", "S14"])
        | (all_assets.index.get_level_values("area") == "XW")
    ]
    agree(exhausted, income, income.abs(), (8 + 5 + 8) * 34)
    of_neighbour = total(costs.xs("XW", level="area", drop_level=False), "industry", "asset")
    agree(of_neighbour.rename({"_T": "_Z"}, level="asset"), income, income.abs(), 34)


def test_the_user_cost_times_the_stock_is_the_cost(take: Take) -> None:
    cost = take("capital_compensation", "current")
    agree(
        take("user_cost", "current") * take("productive_stock_average", "constant"), cost, cost.abs(), 48 * 34
    )


@pytest.mark.parametrize("method", ["unadjusted", "hours", "fixed_fraction", "sum_of_industries"])
def test_the_two_shares_and_the_two_incomes_are_the_whole(take: Take, method: str) -> None:
    labour, capital = take("labour_share", "_Z", method), take("capital_share", "_Z", method)
    one = pd.Series(1.0, labour.index)
    agree(labour + capital, one, one, 35)
    base = take("value_added", "current", "factor_cost")
    agree(
        take("labour_income", "current", method) + take("capital_income", "current", method), base, base, 35
    )


def test_labour_shares_come_in_the_order_that_mixed_income_allows(take: Take) -> None:
    unadjusted, fraction = (take("labour_share", "_Z", m) for m in ("unadjusted", "fixed_fraction"))
    mixed = take("mixed_income", "current").reindex(unadjusted.index)
    above = fraction.reindex(unadjusted.index) >= unadjusted
    assert (above == (mixed >= 0)).all()
    assert [(key[2], key[-1]) for key in mixed[mixed < 0].index if key[1] == "S14"] == [("L", 1993)]


@pytest.mark.parametrize("form", ["log", "discrete"])
def test_contributions_and_residual_add_up_to_output_growth(take: Take, form: str) -> None:
    capital, labour, residual = (
        take(f"{name}", "_Z", form)
        for name in ("capital_contribution", "labour_contribution", "residual_growth")
    )
    agree(
        take("output_growth", "_Z", form),
        capital + labour + residual,
        capital.abs() + labour.abs() + residual.abs(),
        SERIES * 33,
    )


def test_output_per_hour_is_deepening_and_residual(take: Take) -> None:
    """In logarithms. What the composition of labour adds is nothing where labour input is made of hours alone."""
    residual = take("residual_growth", "_Z", "log")
    deepening = take("deepening_contribution", "_Z", "log")
    per_hour = take("output_per_hour_growth", "_Z", "log")
    hours = take("hours_worked", "_Z").xs("_T", level="worker_group", drop_level=False)
    hours = hours.rename({"_T": "_Z"}, level="worker_group")
    share = take("labour_share_two_period", "_Z")
    composition = take("labour_contribution", "_Z", "log") - share * (np.log(hours) - np.log(before(hours)))
    assert (composition.xs("XW", level="area").dropna().abs() < 1e-12).all()
    assert (composition.xs("XV", level="area").dropna() != 0).all()
    size = per_hour.abs() + deepening.abs() + residual.abs() + 1
    agree(per_hour, deepening + residual + composition, size, SERIES * 33)


def test_the_level_cumulates_the_residual_from_one(take: Take) -> None:
    level, residual = take("residual_level", "_Z", "log"), take("residual_growth", "_Z", "log")
    first = level[level.index.get_level_values("year") == 1986]
    assert (first == 1).all()
    assert len(first) == SERIES
    agree(np.log(level), np.log(before(level)) + residual, 1 + residual.abs(), SERIES * 33)


def test_the_three_readings_of_the_residual(take: Take) -> None:
    residual, share = take("residual_growth", "_Z", "log"), take("capital_share_two_period", "_Z")
    agree(
        take("residual_labour_augmenting", "_Z", "log") * (1 - share), residual, residual.abs(), SERIES * 33
    )
    agree(take("residual_capital_augmenting", "_Z", "log") * share, residual, residual.abs(), SERIES * 33)


def test_indices_are_one_in_the_reference_year(take: Take) -> None:
    for measure in ("investment_price", "capital_services", "labour_input", "capital_composition"):
        figures = take(measure, "index")
        there = figures[figures.index.get_level_values("year") == 2015]
        assert len(there) >= 9, measure
        assert np.allclose(there, 1, rtol=0, atol=1e-12), measure


def test_net_does_not_exceed_productive_nor_productive_gross(take: Take) -> None:
    """All investment is positive; one asset's gross stock rests on a life of its own (cohort rate) and is left out."""
    net, productive = take("net_stock", "constant"), take("productive_stock", "constant")
    assert (net <= productive * (1 + 1e-12)).all()
    gross = take("gross_stock", "constant").xs("N11O", level="asset")
    assert (productive.xs("N11O", level="asset") <= gross * (1 + 1e-12)).all()


def test_the_wide_table_repeats_the_panel(panel: duckdb.DuckDBPyConnection, take: Take) -> None:
    wide = panel.execute("select * from decomposition_input").df()
    wide["year"] = wide["time_period"].astype(int)
    wide = wide.set_index(["area", "sector", "industry", "year"]).sort_index()
    for column, measure, basis, dim, code in (
        ("value_added_volume", "value_added", "constant", "asset", "_Z"),
        ("hours_worked", "hours_worked", "_Z", "worker_group", "_T"),
        ("net_stock", "net_stock", "constant", "asset", "_T"),
        ("capital_services", "capital_services", "index", "asset", "_T"),
        ("capital_share", "capital_share", "_Z", "asset", "_Z"),
    ):
        figures = take(measure, basis).xs(code, level=dim)
        narrow = figures.groupby(["area", "sector", "industry", "year"]).first()
        assert len(narrow) == len(figures)
        assert (wide.loc[narrow.index, column] == narrow).all(), column


def test_the_table_decomposition_repeats_the_panel(panel: duckdb.DuckDBPyConnection, take: Take) -> None:
    stored = panel.execute("select * from decomposition").df()
    stored["year"] = stored["time_period"].astype(int)
    stored = stored.set_index(["form", "area", "sector", "industry", "year"]).sort_index()
    for measure in ("output_growth", "capital_contribution", "residual_growth", "residual_level"):
        for form in ("log", "discrete"):
            narrow = take(measure, "_Z", form).groupby(["area", "sector", "industry", "year"]).first()
            column = stored.loc[form, measure].reindex(narrow.index)
            assert (column == narrow).all(), (measure, form)
