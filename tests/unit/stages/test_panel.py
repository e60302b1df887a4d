import numpy as np
import pytest
from small_blocks import block

from keelbook.stages import panel
from keelbook.stages.base import Book
from keelbook.stages.decomposition import MEASURES

NAN = np.nan

A = "industry=A"


def _complete(industry: str, years: int = 2):
    level = [1.0 + t for t in range(years)]
    return [
        block("value_added/delivered/current", {industry: level}),
        block("value_added/delivered/constant", {industry: level}),
        block("hours_worked/delivered/_Z", {f"{industry} worker_group=_T": level}),
        block("labour_input/hours/index", {f"{industry} worker_group=_T": level}),
        block("net_stock/perpetual_inventory/constant", {f"{industry} asset=_T": level}),
        block("capital_services/tornqvist/index", {f"{industry} asset=_T": level}),
        block("labour_share/hours/_Z", {industry: [0.6] * years}),
        block("capital_share/hours/_Z", {industry: [0.4] * years}),
    ]


def _without(*keys: str):
    return [b for b in _complete(A) if "/".join(b.key) not in keys]


def test_a_series_with_everything_is_ready():
    frame = panel.inputs_of(Book(_complete(A)))
    assert frame["time_period"].tolist() == ["2010", "2011"]
    assert frame["industry"].tolist() == ["A", "A"]
    assert frame["ready"].tolist() == [True, True]
    assert frame["reason"].tolist() == ["", ""]
    assert frame["hours_worked"].tolist() == [1.0, 2.0]
    assert frame["capital_services"].tolist() == [1.0, 2.0]
    assert frame["productive_stock"].isna().all()


@pytest.mark.parametrize(
    ("blocks", "reason"),
    [
        (_without("value_added/delivered/constant"), "no value added in volume"),
        (_without("hours_worked/delivered/_Z"), "no hours worked"),
        (_without("capital_share/hours/_Z"), "no capital share"),
        (
            _without("net_stock/perpetual_inventory/constant", "capital_services/tornqvist/index"),
            "no capital stock or services",
        ),
    ],
)
def test_what_is_missing_is_the_reason(blocks, reason):
    frame = panel.inputs_of(Book(blocks))
    assert not frame["ready"].any()
    assert frame["reason"].unique().tolist() == [reason]


def test_one_kind_of_capital_is_enough():
    blocks = _without("capital_services/tornqvist/index")
    assert panel.inputs_of(Book(blocks))["ready"].all()


def test_all_that_is_missing_is_named():
    blocks = [b for b in _complete(A) if b.key.measure == "value_added"]
    (reason,) = panel.inputs_of(Book(blocks))["reason"].unique()
    for words in ("hours worked", "capital share", "capital stock or services"):
        assert words in reason


def test_readiness_is_told_year_by_year():
    blocks = [
        block("hours_worked/delivered/_Z", {f"{A} worker_group=_T": [1.0, NAN]})
        if b.key.measure == "hours_worked"
        else b
        for b in _complete(A)
    ]
    frame = panel.inputs_of(Book(blocks))
    assert frame["ready"].tolist() == [True, False]
    assert frame["reason"].tolist() == ["", "no hours worked"]


def test_years_with_nothing_at_all_have_no_row():
    blocks = [block("value_added/delivered/constant", {A: [NAN, 1.0, NAN]})]
    assert panel.inputs_of(Book(blocks))["time_period"].tolist() == ["2011"]


def test_a_confidential_figure_is_left_out_of_the_wide_table():
    blocks = [
        *_without("hours_worked/delivered/_Z"),
        block(
            "hours_worked/delivered/_Z",
            {f"{A} worker_group=_T": [1.0, 2.0]},
            conf={f"{A} worker_group=_T": [0, 2]},
        ),
    ]
    frame = panel.inputs_of(Book(blocks))
    assert frame["hours_worked"].isna().tolist() == [False, True]


def test_nothing_made_gives_no_rows():
    assert len(panel.inputs_of(Book())) == 0
    assert len(panel.decomposition_of(Book())) == 0


def test_the_decomposition_table_shows_the_share_that_was_used():
    growth = {f"{m}/{form}/_Z": {A: [NAN, 0.1, 0.2]} for m in MEASURES for form in ("log", "discrete")}
    for form in ("log", "discrete"):
        growth[f"residual_level/{form}/_Z"] = {A: [1.0, 1.1, 1.3]}
    blocks = [block(key, rows) for key, rows in growth.items()]
    share = [
        block("capital_share/hours/_Z", {A: [0.3, 0.4, 0.5]}),
        block("capital_share_two_period/mean/_Z", {A: [NAN, 0.35, 0.45]}),
    ]
    frame = panel.decomposition_of(Book([*blocks, *share]))
    assert frame["form"].tolist() == ["log"] * 3 + ["discrete"] * 3
    np.testing.assert_allclose(frame["capital_share"], [NAN, 0.35, 0.45, NAN, 0.3, 0.4])
    np.testing.assert_allclose(frame["residual_level"], [1, 1.1, 1.3] * 2)
    np.testing.assert_allclose(frame["output_growth"], [NAN, 0.1, 0.2] * 2)
