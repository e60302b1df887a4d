"""Data basis against its own definition (methods.md section 8), written out slowly.

rho(y) = sum of omega_i rho(x_i), omega_i = |x_i df/dx_i| / sum of them; all zero: equal weights.
"""

import numpy as np
import pytest

from keelbook.blocks import F8
from keelbook.lineage.lag import GeometricKernel, Lag, TableKernel
from keelbook.lineage.primitives import Each, Either, Groups, Span, Spans, Sum


def _rho(pairs: list[tuple[float, float]]) -> float:
    """(size, part) of every input -> part of the figure."""
    total = sum(abs(size) for size, _ in pairs)
    if total == 0:
        return sum(part for _, part in pairs) / len(pairs)
    return sum(abs(size) * part for size, part in pairs) / total


def _parts(rng: np.random.Generator, *shape: int) -> tuple[np.ndarray, np.ndarray]:
    three = rng.dirichlet([1, 1, 1], shape).astype(np.float32)
    return three[..., 0], three[..., 1]


def _on_simplex(imputed: np.ndarray, assumed: np.ndarray) -> None:
    for part in (imputed, assumed, 1 - imputed - assumed):
        assert np.nanmin(part) >= -1e-6
        assert np.nanmax(part) <= 1 + 1e-6


# --- each, either ---------------------------------------------------------------------------------------------


def _value(p: F8, w0: F8, w1: F8, scale: F8) -> F8:
    return np.asarray(scale * p * (w0 + w1) / 2)


def test_each_weighs_inputs_by_size_times_slope():
    rng = np.random.default_rng(1)
    p, w0, w1 = (rng.uniform(-1, 2, (4, 3)) for _ in range(3))
    scale = np.array([1.0, 2.0, 5.0])
    rule = Each(_value, (scale,))
    imputed, assumed = zip(*(_parts(rng, 4, 3) for _ in range(3)), strict=True)
    y = rule.compute(p, w0, w1)
    out = rule.mix([p, w0, w1], y, [list(imputed), list(assumed)])
    for kind, got in zip((imputed, assumed), out, strict=True):
        for t in range(4):
            for n in range(3):
                slopes = (
                    scale[n] * (w0[t, n] + w1[t, n]) / 2,
                    scale[n] * p[t, n] / 2,
                    scale[n] * p[t, n] / 2,
                )
                x = (p[t, n], w0[t, n], w1[t, n])
                expected = _rho([(a * b, k[t, n]) for a, b, k in zip(x, slopes, kind, strict=True)])
                assert got[t, n] == pytest.approx(expected, abs=1e-6)
    _on_simplex(*out)


def test_each_with_all_inputs_zero_weighs_them_equally():
    rule = Each(lambda a, b: a + 2 * b)
    zero, one = np.zeros((1, 1)), np.ones((1, 1), np.float32)
    assert rule.mix([zero, zero], zero, [[one, None]])[0][0, 0] == 0.5


def test_an_input_without_parts_is_observed():
    rule = Each(lambda a, b: a - b)
    a, b = np.full((1, 1), 3.0), np.full((1, 1), 1.0)
    part = np.full((1, 1), 0.8, np.float32)
    imputed, assumed = rule.mix([a, b], a - b, [[part, None], [None, None]])
    assert imputed[0, 0] == pytest.approx(0.8 * 3 / 4)
    assert assumed is None
    assert rule.mix([a, b], a - b, [[None, None], [None, None]]) == [None, None]


def test_either_counts_only_the_branch_that_was_taken():
    first = Each(lambda a, b: a + b)
    second = Each(lambda a, c: a + 3 * c)
    rule = Either((first, second), ((0, 1), (0, 2)))
    a, c = np.array([[2.0, 2.0]]), np.array([[1.0, 1.0]])
    b = np.array([[2.0, np.nan]])
    y = rule.compute(a, b, c)
    np.testing.assert_array_equal(y, [[4, 5]])
    parts = [np.full((1, 2), p, np.float32) for p in (0.0, 1.0, 0.5)]
    got = rule.mix([a, b, c], y, [parts])[0]
    np.testing.assert_allclose(got, [[2 / 4, 3 * 0.5 / 5]], rtol=1e-6)


# --- sums -----------------------------------------------------------------------------------------------------


def test_a_sum_weighs_its_parts_by_size():
    rng = np.random.default_rng(2)
    of = np.array([1, 0, -1, 1, 0, 1], np.int32)
    x = rng.uniform(-5, 5, (3, 6))
    x[1, [1, 4]] = 0.0
    rule = Sum(Groups(of, 3))
    y = rule.compute(x)
    np.testing.assert_allclose(y[:, 0], x[:, 1] + x[:, 4], rtol=1e-15)
    assert np.isnan(y[:, 2]).all(), "a group without members has no total"
    imputed, assumed = _parts(rng, 3, 6)
    out = rule.mix([x], y, [[imputed], [assumed]])
    for kind, got in zip((imputed, assumed), out, strict=True):
        for t in range(3):
            for group in (0, 1):
                members = np.flatnonzero(of == group)
                expected = _rho([(x[t, m], kind[t, m]) for m in members])
                assert got[t, group] == pytest.approx(expected, abs=1e-6)
    _on_simplex(out[0][:, :2], out[1][:, :2])


def test_an_index_counts_its_components_by_weight_not_by_growth():
    weight = np.array([[0.25, 0.75]])
    rule = Sum(
        Groups(np.zeros(2, np.int32), 1),
        value=lambda growth: growth,
        weight=lambda growth, *, groups: weight,
        by_weight=True,
    )
    growth = np.array([[0.5, 0.001]])
    part = np.array([[1.0, 0.0]], np.float32)
    got = rule.mix([growth], rule.compute(growth), [[part]])[0]
    assert got[0, 0] == pytest.approx(0.25)


# --- spans ----------------------------------------------------------------------------------------------------


def _last_three(coefficients: list[float]):
    def plan(x: F8) -> Spans:
        first = np.where(np.arange(len(x))[:, None] >= 2, np.arange(len(x))[:, None] - 2, -1)
        shape = (3, *x.shape)
        weights = np.broadcast_to(np.array(coefficients)[:, None, None], shape)
        return Spans(np.broadcast_to(first, x.shape), np.full(x.shape, 3), weights)

    return plan


def test_a_span_weighs_its_periods_by_size_of_coefficient_times_value():
    rng = np.random.default_rng(3)
    coefficients = [0.5, -1.0, 2.0]
    x = rng.uniform(0.2, 3, (6, 2))
    x[3, 1] = 1.0
    rule = Span(_last_three(coefficients), inner=np.log, outer=np.exp)
    y = rule.compute(x)
    assert np.isnan(y[:2]).all()
    imputed, assumed = _parts(rng, 6, 2)
    out = rule.mix([x], y, [[imputed], [assumed]])
    for kind, got in zip((imputed, assumed), out, strict=True):
        for t in range(2, 6):
            for n in range(2):
                pairs = [
                    (c * np.log(x[t - 2 + k, n]), kind[t - 2 + k, n]) for k, c in enumerate(coefficients)
                ]
                assert got[t, n] == pytest.approx(_rho(pairs), abs=1e-6)
    _on_simplex(out[0][2:], out[1][2:])


def test_a_span_of_zeros_weighs_its_periods_equally():
    x = np.zeros((3, 1))
    rule = Span(_last_three([1.0, 5.0, 1.0]))
    part = np.array([[0.0], [0.3], [0.6]], np.float32)
    got = rule.mix([x], rule.compute(x), [[part]])[0]
    assert got[2, 0] == pytest.approx(0.3)


def test_a_figure_that_is_one_by_definition_rests_on_nothing():
    def plan(x: F8) -> Spans:
        """The sum from row 1 (the reference) to each row: at row 1 over no rows at all."""
        first = np.array([[1], [2], [2]])
        return Spans(first, np.array([[1], [0], [1]]), np.broadcast_to(np.ones((1, 1, 1)), (1, 3, 1)))

    x = np.array([[np.nan], [0.1], [0.2]])
    rule = Span(plan, outer=np.exp)
    y = rule.compute(x)
    np.testing.assert_allclose(y[:, 0], [np.exp(0.1), 1.0, np.exp(0.2)], rtol=1e-15)
    got = rule.mix([x], y, [[np.array([[0], [0.2], [0.4]], np.float32)]])[0]
    assert np.isnan(got[1, 0])
    np.testing.assert_allclose(got[[0, 2], 0], [0.2, 0.4], rtol=1e-6)


# --- stocks ---------------------------------------------------------------------------------------------------

T = 9
HYPERBOLIC = np.array([0.9, 0.7, 0.4, 0.1, 0.0])


def _flows(rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray, np.ndarray, list[int]]:
    """Investment (one negative figure, one zero), the opening stock of the year before, and its growth."""
    starts = [1, 3, 1]
    flow = rng.uniform(10, 90, (T, 3))
    opening, growth = np.full((T, 3), np.nan), np.full((T, 3), np.nan)
    for n, start in enumerate(starts):
        flow[:start, n] = np.nan
        opening[start - 1, n] = 100.0 + n
        growth[start - 1, n] = 0.03 * n
    flow[4, 0], flow[5, 1] = -30.0, 0.0
    return flow, opening, growth, starts


def _left_of_opening(kernel, growth: float, periods: int) -> float:
    """What is left of an opening stock made of vintages that grew at a constant rate, after some periods."""
    if isinstance(kernel, GeometricKernel):
        return kernel.keep**periods
    ages = range(len(HYPERBOLIC))
    was = sum(HYPERBOLIC[v] * (1 + growth) ** -(v + 1) for v in ages)
    now = sum(
        HYPERBOLIC[v + periods] * (1 + growth) ** -(v + 1) for v in ages if v + periods < len(HYPERBOLIC)
    )
    return now / was


def _weight(kernel, age: int) -> float:
    if isinstance(kernel, GeometricKernel):
        return kernel.first if age == 0 else kernel.second * kernel.keep ** (age - 1)
    return HYPERBOLIC[age] if age < len(HYPERBOLIC) else 0.0


KERNELS = (GeometricKernel(0.95, 0.855, 0.9, 0.95), TableKernel(HYPERBOLIC, HYPERBOLIC))


def test_a_stock_weighs_every_vintage_by_what_is_left_of_it():
    rng = np.random.default_rng(4)
    flow, opening, growth, starts = _flows(rng)
    which = np.array([0, 1, 1], np.int32)
    rule = Lag(KERNELS, which)
    x = [flow, opening, growth]
    y = rule.compute(*x)
    imputed, assumed = _parts(rng, T, 3)
    opening_parts = [np.full((T, 3), p, np.float32) for p in (0.0, 1.0)]
    out = rule.mix(x, y, [[imputed, opening_parts[0], None], [assumed, opening_parts[1], None]])
    for n, start in enumerate(starts):
        kernel = KERNELS[which[n]]
        assert np.isnan(y[:start, n]).all()
        for t in range(start, T):
            ages = range(t - start + 1)
            sizes = [_weight(kernel, v) * flow[t - v, n] for v in ages]
            first = _left_of_opening(kernel, growth[start - 1, n], t - start + 1) * opening[start - 1, n]
            assert y[t, n] == pytest.approx(sum(sizes) + first, rel=1e-12)
            for kind, of_opening, got in zip((imputed, assumed), (0.0, 1.0), out, strict=True):
                pairs = [(size, kind[t - v, n]) for v, size in zip(ages, sizes, strict=True)]
                expected = _rho([*pairs, (first, of_opening)])
                assert got[t, n] == pytest.approx(expected, abs=1e-6)
    _on_simplex(*out)


def test_the_assumed_part_of_a_geometric_stock_is_the_share_of_what_is_left_of_its_opening():
    d, opening, flow = 0.1, 500.0, 60.0
    kernel = GeometricKernel(1 - d / 2, (1 - d / 2) * (1 - d), 1 - d, 1 - d / 2)
    start = np.full((T, 1), np.nan)
    start[0] = opening
    x = [np.array([[np.nan], *[[flow]] * (T - 1)]), start, np.zeros((T, 1))]
    rule = Lag((kernel,), np.zeros(1, np.int32))
    y = rule.compute(*x)
    imputed, assumed = rule.mix(x, y, [[None, None, None], [None, np.ones((T, 1), np.float32), None]])
    assert imputed is None
    stock = opening
    for t in range(1, T):
        stock = (1 - d) * stock + (1 - d / 2) * flow
        assert y[t, 0] == pytest.approx(stock, rel=1e-13)
        assert assumed[t, 0] == pytest.approx(opening * (1 - d) ** t / stock, rel=1e-6)


def test_a_stock_of_nothing_still_says_what_it_rests_on():
    """An asset that was given up: investment is 0 for a whole life, and nothing is left of the opening."""
    flow = np.zeros((T, 1))
    flow[0] = np.nan
    start = np.full((T, 1), np.nan)
    start[0] = 100.0
    rule = Lag((KERNELS[1],), np.zeros(1, np.int32))
    y = rule.compute(flow, start, np.zeros((T, 1)))
    assert y[-1, 0] == 0
    imputed = np.full((T, 1), 0.25, np.float32)
    got = rule.mix([flow, start, np.zeros((T, 1))], y, [[imputed, np.zeros((T, 1), np.float32), None]])[0]
    assert got[-1, 0] == pytest.approx(0.25)
