"""How `derive` lines inputs up with outputs, and what follows the figures: status, confidentiality, basis."""

import numpy as np
import pytest
from small_blocks import block, choice, column, index, number

from keelbook.blocks import ESTIMATED, NO_FIGURE, NORMAL, PROVISIONAL, BlockKey, Edges
from keelbook.lineage.benchmark import BenchmarkFactor
from keelbook.lineage.derive import Given, derive, given, in_year
from keelbook.lineage.formula import Formula, Role, Setting
from keelbook.lineage.lag import GeometricKernel, Lag
from keelbook.lineage.primitives import Each, Either, Span, Spans, Sum

NAN = np.nan
OUT = BlockKey("net_stock", "made", "constant")


def _formula(roles: tuple[Role, ...], build, kind="each", **flags) -> Formula:
    return Formula("made_up", "y = f(x)", "a test", roles, build, kind, **flags)


COPY = _formula((Role("x"),), lambda s: Each(lambda x: x * 1.0))
PRODUCT = _formula((Role("x"), Role("price")), lambda s: Each(lambda x, price: x * price))
CHANGE = _formula((Role("before", -1), Role("now")), lambda s: Each(lambda before, now: now - before))
AHEAD = _formula((Role("now"), Role("next", 1)), lambda s: Each(lambda now, later: later - now))
TOTAL = _formula((Role("part"),), lambda s: Sum(s.groups), "group")


def _derive(formula, like, inputs, **options):
    return derive(formula, OUT, like.series, like.periods, inputs, **options)


def test_inputs_are_found_by_the_key_of_the_output_after_projection():
    flow = block("x/a/_Z", {"industry=A asset=N112": [1.0, 2], "industry=C asset=N113": [3.0, 4]})
    price = block(
        "p/a/_Z", {"industry=_T asset=N112": [10.0, 20], "asset=N113": [30, 40], "asset=N11": [9, 9]}
    )
    out = _derive(PRODUCT, flow, {"x": given(flow), "price": given(price, industry="_T")})
    np.testing.assert_array_equal(column(out, "industry=A asset=N112"), [10, 40])
    np.testing.assert_array_equal(column(out, "industry=C asset=N113"), [90, 160])
    (derivation,) = out.origin.derivations
    assert derivation.out == OUT
    assert [(k.role, k.kind, k.input, k.project, k.shift) for k in derivation.links] == [
        ("x", "same", flow.key, (), 0),
        ("price", "same", price.key, (("industry", "_T"),), 0),
    ]


def test_an_output_whose_input_is_not_there_has_no_figure():
    flow = block("x/a/_Z", {"industry=A": [1.0, 2], "industry=C": [3.0, 4]})
    price = block("p/a/_Z", {"industry=C": [2.0, NAN]})
    out = _derive(PRODUCT, flow, {"x": given(flow), "price": given(price)})
    np.testing.assert_array_equal(out.value, [[NAN, 6], [NAN, NAN]])


def test_shifts_look_back_and_ahead():
    flow = block("x/a/_Z", {"industry=A": [1.0, 4, 9]})
    back = _derive(CHANGE, flow, {"before": given(flow), "now": given(flow)})
    np.testing.assert_array_equal(back.value[:, 0], [NAN, 3, 5])
    ahead = _derive(AHEAD, flow, {"now": given(flow), "next": given(flow)})
    np.testing.assert_array_equal(ahead.value[:, 0], [3, 5, NAN])
    assert [k.shift for k in back.origin.derivations[0].links] == [-1, 0]


def test_the_reference_year_is_read_for_every_year():
    flow = block("x/a/_Z", {"industry=A": [1.0, 4, 9]}, conf={"industry=A": [0, 2, 0]})
    out = _derive(PRODUCT, flow, {"x": given(flow), "price": in_year(flow, 2011)})
    np.testing.assert_array_equal(out.value[:, 0], [4, 16, 36])
    assert out.origin.derivations[0].links[1].kind == "reference"
    np.testing.assert_array_equal(out.conf[:, 0] > 0, [True, True, True])


def test_edges_read_whatever_series_they_name():
    flow = block("x/a/_Z", {"industry=A": [1.0, 1], "industry=C": [1.0, 1], "area=XB": [1.0, 1]})
    first = block("p/a/_Z", {"asset=N11": [2.0, 3]}, imputed={"asset=N11": [0.5, 0]})
    second = block("p/b/_Z", {"asset=N112": [5.0, 7]}, status={"asset=N112": [NORMAL, PROVISIONAL]})
    edges = Edges(
        (first.key, second.key),
        np.array([1, 0, 0], np.int32),
        np.array([number("asset=N112"), number("asset=N11"), -1]),
    )
    out = _derive(PRODUCT, flow, {"x": given(flow), "price": Given((first, second), edges=edges)})
    np.testing.assert_array_equal(out.value, [[5, 2, NAN], [7, 3, NAN]])
    np.testing.assert_array_equal(out.status, [[NORMAL, NORMAL, NO_FIGURE], [PROVISIONAL, NORMAL, NO_FIGURE]])
    np.testing.assert_allclose(out.imputed, [[0, 0.25, 0], [0, 0, 0]])
    assert out.origin.edges["price"] is edges
    assert out.origin.derivations[0].links[1].kind == "edge"


def test_groups_take_only_parts():
    rows = {"industry=A asset=N112": [1.0, 2], "industry=A asset=N113": [10.0, NAN], "asset=N112": [50.0, 60]}
    flow = block("x/a/_Z", rows)
    flow.part[flow.series.is_code("industry", "_T")] = False
    like = index("industry=A asset=_T", "industry=_T asset=_T")
    out = derive(TOTAL, OUT, like, flow.periods, {"part": given(flow)}, group={"asset": "_T"})
    np.testing.assert_array_equal(column(out, "industry=A asset=_T"), [11, NAN])
    assert np.isnan(column(out, "industry=_T asset=_T")).all()
    assert out.origin.derivations[0].links[0].kind == "group"
    assert out.origin.derivations[0].links[0].project == (("asset", "_T"),)


def test_parameters_go_to_the_series_that_use_them():
    scaled = _formula((Role("x"),), lambda s: Each(lambda x, f: x * f, (s.column("factor"),)))
    flow = block("x/a/_Z", {"industry=A": [1.0], "industry=C": [1.0], "area=XB": [1.0]})
    sets = ((choice("factor", 2.0),), (choice("factor", 5.0),))
    which = np.array([1, 0, 1], np.int32)
    out = _derive(scaled, flow, {"x": given(flow)}, sets=sets, which=which)
    np.testing.assert_array_equal(out.value[0], [5, 2, 5])
    assert [out.origin.sets[i][0].value for i in out.origin.set] == [5.0, 2.0, 5.0]


def test_a_parameter_that_must_be_single_is_refused_when_it_is_not():
    setting = Setting([{"n": 2}, {"n": 3}], np.zeros(1, np.int32), range(1), None)
    with pytest.raises(ValueError, match="differs between series"):
        setting.single("n")


def test_roles_must_be_given_by_name():
    flow = block("x/a/_Z", {"industry=A": [1.0]})
    with pytest.raises(ValueError, match=r"takes \['x', 'price'\]"):
        _derive(PRODUCT, flow, {"x": given(flow), "deflator": given(flow)})


# --- status ---------------------------------------------------------------------------------------------------


def test_what_rests_on_provisional_figures_is_provisional():
    flow = block("x/a/_Z", {"industry=A": [1.0, 4, 9, 9]}, status={"industry=A": [0, 0, PROVISIONAL, 0]})
    out = _derive(CHANGE, flow, {"before": given(flow), "now": given(flow)})
    np.testing.assert_array_equal(out.status[:, 0], [NO_FIGURE, NORMAL, PROVISIONAL, PROVISIONAL])
    total = derive(
        TOTAL, OUT, index("industry=_T"), flow.periods, {"part": given(flow)}, group={"industry": "_T"}
    )
    np.testing.assert_array_equal(total.status[:, 0], [NORMAL, NORMAL, PROVISIONAL, NORMAL])


def test_figures_that_are_all_normal_carry_no_statuses():
    flow = block("x/a/_Z", {"industry=A": [1.0, 4]}, status={"industry=A": [0, 0]})
    assert _derive(COPY, flow, {"x": given(flow)}).status is None


def test_an_estimating_formula_says_so_for_every_figure():
    estimated = _formula((Role("x"),), lambda s: Each(lambda x: x * 1.0), estimated=True)
    flow = block("x/a/_Z", {"industry=A": [1.0, NAN, 2]}, status={"industry=A": [PROVISIONAL, NO_FIGURE, 0]})
    out = _derive(estimated, flow, {"x": given(flow)})
    np.testing.assert_array_equal(out.status[:, 0], [ESTIMATED, NO_FIGURE, ESTIMATED])


def test_a_fallback_is_an_estimate():
    either = _formula(
        (Role("now"), Role("next", 1)),
        lambda s: Either((Each(lambda a, b: a + b), Each(lambda a: 2 * a)), ((0, 1), (0,))),
    )
    flow = block("x/a/_Z", {"industry=A": [1.0, 4]})
    out = _derive(either, flow, {"now": given(flow), "next": given(flow)})
    np.testing.assert_array_equal(out.value[:, 0], [5, 8])
    np.testing.assert_array_equal(out.status[:, 0], [NORMAL, ESTIMATED])


BREAK = 1


def _annual(x: np.ndarray) -> Spans:
    whole = np.isfinite(x).reshape(-1, 4, x.shape[1]).all(axis=1)
    first = np.where(whole, 4 * np.arange(len(whole))[:, None], -1)
    return Spans(first, np.full(whole.shape, 4), np.ones((4, *whole.shape)))


def test_delivered_figures_keep_their_status_and_a_year_that_of_its_quarters():
    annual = _formula((Role("x"),), lambda s: Span(_annual), carries=True)
    quarters = {"industry=A": [1.0] * 12}
    status = [0, BREAK, 0, 0, 0, BREAK, 0, PROVISIONAL, 0, 0, 0, 0]
    conf = [0, 0, 0, 0, 0, 0, 3, 0, 0, 0, 0, 0]
    flow = block("x/observed/_Z", quarters, status={"industry=A": status}, conf={"industry=A": conf})
    out = derive(annual, OUT, flow.series, range(2010, 2013), {"x": Given((flow,), observation=True)})
    np.testing.assert_array_equal(out.value[:, 0], [4, 4, 4])
    np.testing.assert_array_equal(out.status[:, 0], [BREAK, PROVISIONAL, NORMAL])
    np.testing.assert_array_equal(out.conf[:, 0] > 0, [False, True, False])
    assert out.origin.derivations[0].links[0].kind == "observation"


# --- confidentiality ------------------------------------------------------------------------------------------


def test_what_descends_from_a_hidden_figure_is_hidden_and_nothing_else():
    flow = block(
        "x/a/_Z", {"industry=A": [1.0, 2, 3], "industry=C": [1.0, 2, 3]}, conf={"industry=A": [0, 4, 0]}
    )
    price = block("p/a/_Z", {"industry=_T": [1.0, 1, 1]})
    out = _derive(PRODUCT, flow, {"x": given(flow), "price": given(price, industry="_T")})
    np.testing.assert_array_equal(column(out, "industry=A", "conf") > 0, [False, True, False])
    assert not column(out, "industry=C", "conf").any()
    change = _derive(CHANGE, flow, {"before": given(flow), "now": given(flow)})
    np.testing.assert_array_equal(column(change, "industry=A", "conf") > 0, [False, True, True])


def test_blocks_without_hidden_figures_carry_no_confidentiality():
    flow = block("x/a/_Z", {"industry=A": [1.0, 2]}, conf={"industry=A": [0, 0]})
    assert _derive(COPY, flow, {"x": given(flow)}).conf is None


def test_a_total_with_a_hidden_part_is_hidden():
    flow = block("x/a/_Z", {"industry=A": [1.0, 2], "industry=C": [1.0, 2]}, conf={"industry=C": [2, 0]})
    out = derive(
        TOTAL, OUT, index("industry=_T"), flow.periods, {"part": given(flow)}, group={"industry": "_T"}
    )
    np.testing.assert_array_equal(out.conf[:, 0] > 0, [True, False])


STOCK = _formula(
    (Role("flow"), Role("opening"), Role("growth", counted=False)),
    lambda s: Lag((GeometricKernel(0.95, 0.855, 0.9, 0.95),), np.zeros(len(s.which), np.int32)),
    "series",
)


def test_a_stock_stays_hidden_once_it_holds_a_hidden_flow():
    """The stocks of two successive years and a known rate would give the hidden flow away."""
    flow = block("x/a/_Z", {"industry=A": [NAN, 2.0, 3, 4]}, conf={"industry=A": [0, 0, 2, 0]})
    opening = block("o/a/_Z", {"industry=A": [50.0, NAN, NAN, NAN]})
    growth = block("g/a/_Z", {"industry=A": [0.0, NAN, NAN, NAN]})
    out = _derive(STOCK, flow, {"flow": given(flow), "opening": given(opening), "growth": given(growth)})
    np.testing.assert_array_equal(out.conf[:, 0] > 0, [False, False, True, True])


def test_a_stock_with_a_hidden_start_is_hidden_from_its_first_year():
    flow = block("x/a/_Z", {"industry=A": [NAN, 2.0, 3]})
    opening = block("o/a/_Z", {"industry=A": [50.0, NAN, NAN]}, conf={"industry=A": [2, 0, 0]})
    growth = block("g/a/_Z", {"industry=A": [0.0, NAN, NAN]})
    out = _derive(STOCK, flow, {"flow": given(flow), "opening": given(opening), "growth": given(growth)})
    np.testing.assert_array_equal(out.conf[1:, 0] > 0, [True, True])


def test_a_span_that_reaches_a_later_hidden_figure_is_hidden():
    """A trend over the first years is booked in the year before them, and rests on all of them."""

    def plan(x: np.ndarray) -> Spans:
        first = np.full(x.shape, -1)
        first[0] = 1
        return Spans(first, np.full(x.shape, 3), np.ones((3, *x.shape)))

    trend = _formula((Role("x"),), lambda s: Span(plan), "series")
    flow = block(
        "x/a/_Z",
        {"industry=A": [NAN, 2.0, 3, 4, 5], "industry=C": [NAN, 2.0, 3, 4, 5]},
        conf={"industry=A": [0, 0, 0, 2, 0], "industry=C": [0, 0, 0, 0, 2]},
    )
    out = _derive(trend, flow, {"x": given(flow)})
    assert column(out, "industry=A", "conf")[0] > 0
    assert column(out, "industry=C", "conf")[0] == 0


def test_a_factor_solved_from_later_hidden_figures_is_hidden():
    """It is booked before the first year; with a known benchmark it would give the hidden flow away."""
    lag = Lag((GeometricKernel(1.0, 0.9, 0.9, 1.0),), np.zeros(1, np.int32))
    factor = _formula(
        (Role("benchmark"), Role("flow"), Role("opening"), Role("growth", counted=False)),
        lambda s: BenchmarkFactor(lag),
        "series",
    )
    flow = block("x/a/_Z", {"industry=A": [NAN, 2.0, 3]}, conf={"industry=A": [0, 0, 2]})
    sources = {
        "benchmark": given(block("b/a/_Z", {"industry=A": [NAN, NAN, 50.0]})),
        "flow": given(flow),
        "opening": given(block("o/a/_Z", {"industry=A": [50.0, NAN, NAN]})),
        "growth": given(block("g/a/_Z", {"industry=A": [0.0, NAN, NAN]})),
    }
    out = _derive(factor, flow, sources)
    np.testing.assert_allclose(out.value[0, 0], (50 - 3 - 0.9 * 2) / (0.81 * 50), rtol=1e-13)
    assert out.conf[0, 0] > 0


# --- data basis -----------------------------------------------------------------------------------------------


def test_a_formula_of_assumptions_makes_every_figure_assumed():
    opening = _formula((Role("x"),), lambda s: Each(lambda x: x * 1.0), assumed=True)
    flow = block("x/a/_Z", {"industry=A": [1.0, 2]}, imputed={"industry=A": [1, 0]})
    out = _derive(opening, flow, {"x": given(flow)})
    assert out.imputed is None
    np.testing.assert_array_equal(out.assumed[:, 0], [1, 1])


def test_parts_follow_shifts_and_projections():
    flow = block("x/a/_Z", {"industry=A": [1.0, 3, 1]}, imputed={"industry=A": [0, 1, 0]})
    out = _derive(CHANGE, flow, {"before": given(flow), "now": given(flow)})
    np.testing.assert_allclose(out.imputed[1:, 0], [0.75, 0.75])
