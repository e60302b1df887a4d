import math
from itertools import pairwise

import numpy as np
import pytest
from small_blocks import block, column, get, params, rules_of, run_stage

from keelbook.stages import decomposition

NAN = np.nan

OUTPUT = "value_added/delivered/constant"
HOURS = "hours_worked/delivered/_Z"
SHARE = "capital_share/hours/_Z"
MEAN = "capital_share_two_period/mean/_Z"
SERVICES = "capital_services/tornqvist/index"
PRODUCTIVE = "productive_stock/perpetual_inventory/constant"
NET = "net_stock/perpetual_inventory/constant"
LABOUR = "labour_input/hours/index"

A = "industry=A"
CAPITAL, WORKERS = f"{A} asset=_T", f"{A} worker_group=_T"

Y, K, L = [100.0, 110, 121], [50.0, 60, 63], [20.0, 21, 20]
SHARES = [0.3, 0.4, 0.5]


def _mean(share: list[float]) -> list[float]:
    return [NAN, *[(a + b) / 2 for a, b in pairwise(share)]]


def _run(*more, output=Y, hours=L, share=SHARES, **changes):
    blocks = [
        block(OUTPUT, {A: output}),
        block(HOURS, {WORKERS: hours}),
        block(SHARE, {A: share}),
        block(MEAN, {A: _mean(share)}),
        *more,
    ]
    return run_stage(decomposition.STAGE, params("decomposition", **changes), *blocks)


STOCK = block(NET, {CAPITAL: K})


def _of(book, measure: str, form: str):
    return column(get(book, f"{measure}/{form}/_Z"), A)


def test_log_form_by_hand():
    book, findings = _run(STOCK)
    dy, dk, dl = math.log(1.1), math.log(60 / 50), math.log(21 / 20)
    a = 0.35
    expected = {
        "output_growth": dy,
        "capital_growth": dk,
        "labour_growth": dl,
        "capital_contribution": a * dk,
        "labour_contribution": (1 - a) * dl,
        "residual_growth": dy - a * dk - (1 - a) * dl,
        "residual_labour_augmenting": (dy - a * dk - (1 - a) * dl) / (1 - a),
        "residual_capital_augmenting": (dy - a * dk - (1 - a) * dl) / a,
        "output_per_hour_growth": dy - dl,
        "capital_deepening": dk - dl,
        "deepening_contribution": a * (dk - dl),
        "residual_level": math.exp(dy - a * dk - (1 - a) * dl),
    }
    assert set(expected) == set(decomposition.MEASURES)
    for measure, value in expected.items():
        assert _of(book, measure, "log")[1] == pytest.approx(value, rel=1e-13), measure
    assert not findings


def test_discrete_form_by_hand():
    book, _ = _run(STOCK)
    dy, dk, dl = 0.1, 0.2, 0.05
    a = 0.3  # the share of the year before
    residual = dy - a * dk - (1 - a) * dl
    per_hour = (110 / 21) / (100 / 20) - 1
    deepening = (60 / 21) / (50 / 20) - 1
    expected = {
        "output_growth": dy,
        "capital_growth": dk,
        "labour_growth": dl,
        "capital_contribution": a * dk,
        "labour_contribution": (1 - a) * dl,
        "residual_growth": residual,
        "output_per_hour_growth": per_hour,
        "capital_deepening": deepening,
        "deepening_contribution": a * deepening,
        "residual_level": 1 + residual,
    }
    for measure, value in expected.items():
        assert _of(book, measure, "discrete")[1] == pytest.approx(value, rel=1e-12), measure


@pytest.mark.parametrize("form", ["log", "discrete"])
def test_contributions_and_residual_add_up_to_growth(form):
    book, _ = _run(STOCK)
    parts = sum(
        _of(book, m, form) for m in ("capital_contribution", "labour_contribution", "residual_growth")
    )
    np.testing.assert_allclose(parts[1:], _of(book, "output_growth", form)[1:], rtol=1e-13)


def test_output_per_hour_is_deepening_and_residual_in_logs():
    book, _ = _run(STOCK)
    parts = _of(book, "deepening_contribution", "log") + _of(book, "residual_growth", "log")
    np.testing.assert_allclose(parts[1:], _of(book, "output_per_hour_growth", "log")[1:], rtol=1e-13)


@pytest.mark.parametrize("form", ["log", "discrete"])
def test_the_level_is_one_in_the_first_year_and_carries_the_growth(form):
    book, _ = _run(STOCK)
    growth, level = _of(book, "residual_growth", form), _of(book, "residual_level", form)
    assert level[0] == 1.0
    expected = np.cumsum(growth[1:]) if form == "log" else np.log(np.cumprod(1 + growth[1:]))
    np.testing.assert_allclose(np.log(level[1:]), expected, rtol=1e-12)


def test_the_level_starts_where_the_residual_can_be_computed():
    book, _ = _run(STOCK, output=[NAN, 110.0, 121])
    level = _of(book, "residual_level", "log")
    assert np.isnan(level[0])
    assert level[1] == 1.0


def test_a_gap_ends_the_level_and_nothing_bridges_it():
    years = 6
    book, _ = run_stage(
        decomposition.STAGE,
        params("decomposition"),
        block(OUTPUT, {A: [100.0, 110, NAN, 130, 140, 150]}),
        block(HOURS, {WORKERS: [1.0] * years}),
        block(SHARE, {A: [0.3] * years}),
        block(MEAN, {A: [NAN] + [0.3] * (years - 1)}),
        block(NET, {CAPITAL: [1.0] * years}),
    )
    level = _of(book, "residual_level", "log")
    np.testing.assert_allclose(level[:2], [1, 1.1], rtol=1e-13)
    assert np.isnan(level[2:4]).all()
    # After the gap nothing connects to the first year: no level is better than a wrong one.
    assert np.isnan(level[4:]).all()


@pytest.mark.parametrize("form", ["log", "discrete"])
def test_the_declared_form_is_the_chosen_one(form):
    book, _ = _run(STOCK, form=form)
    for one in ("log", "discrete"):
        assert get(book, f"residual_growth/{one}/_Z").chosen.all() == (one == form)


@pytest.mark.parametrize(
    ("order", "growth"),
    [
        (("capital_services", "productive_stock", "net_stock"), math.log(1.5)),
        (("productive_stock", "net_stock"), math.log(2.0)),
        (("net_stock", "capital_services"), math.log(60 / 50)),
    ],
)
def test_capital_is_the_first_measure_of_the_declared_order_that_a_series_has(order, growth):
    book, _ = _run(
        STOCK,
        block(SERVICES, {CAPITAL: [1.0, 1.5, 2.0]}),
        block(PRODUCTIVE, {CAPITAL: [1.0, 2.0, 3.0]}),
        capital_order=order,
    )
    made = get(book, "capital_growth/log/_Z")
    assert column(made, A)[1] == pytest.approx(growth)
    edges = made.origin.edges["current"]
    assert edges.blocks[edges.which[0]].measure == order[0]


def test_labour_falls_back_to_hours():
    without, _ = _run(STOCK)
    assert _of(without, "labour_growth", "log")[1] == pytest.approx(math.log(21 / 20))
    having, _ = _run(STOCK, block(LABOUR, {WORKERS: [1.0, 3.0, 2.0]}))
    assert _of(having, "labour_growth", "log")[1] == pytest.approx(math.log(3))
    assert _of(having, "output_per_hour_growth", "log")[1] == pytest.approx(math.log(1.1 / (21 / 20)))


def test_what_is_not_there_is_told_all_at_once():
    _, findings = run_stage(decomposition.STAGE, params("decomposition"), block(OUTPUT, {A: Y}))
    assert set(rules_of(findings)) == {"not_computed"}
    assert {"hours_worked", "capital_share", "capital_share_two_period"} <= {f["measure"] for f in findings}
    _, findings = _run()
    assert [f["measure"] for f in findings] == ["net_stock"]
