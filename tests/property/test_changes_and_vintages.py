"""What must hold with other changes in volume, and where parameters change from a year on."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from keelbook.lineage.lag import GeometricKernel, Lag, TableKernel, of_periods, of_vintages
from keelbook.lineage.volume_changes import even_change, surviving
from keelbook.methods.perpetual_inventory import geometric_stock
from keelbook.methods.weights import losses, period_end_weights

quick = settings(max_examples=30, deadline=None)
T = 12

rates = st.floats(0.02, 0.6)
timings = st.sampled_from(["start", "mid", "end"])
flows = arrays(np.float64, (T, 2), elements=st.floats(1, 1e3))
parts = arrays(np.float64, (T, 2), elements=st.floats(-0.4, 0.4))
years = arrays(np.int64, (T,), elements=st.integers(0, 1)).map(np.sort)


def _geometric(rate, timing, *, loss=False):
    first = {"start": 1 - rate, "mid": 1 - rate / 2, "end": 1.0}[timing]
    if loss:
        return GeometricKernel(1 - first, rate * first, 1 - rate, first)
    return GeometricKernel(first, first * (1 - rate), 1 - rate, first)


@st.composite
def tables(draw):
    """Return the kernel of a net stock with a finite life, and that of its consumption."""
    weights = period_end_weights(
        efficiency="hyperbolic", retirement="simultaneous", life=draw(st.floats(2.5, 15)), rate=None,
        b=draw(st.floats(0, 1)), discount_rate=draw(st.floats(0, 0.1)), timing=draw(timings), length=1,
    )  # fmt: skip
    return TableKernel(weights.net, weights.net), TableKernel(losses(weights.net), weights.net)


@st.composite
def kernels(draw):
    """Return the kernels of a net stock and of its consumption, of one kind or changing from a year on."""
    kind = draw(st.sampled_from(["geometric", "table", "periods", "vintages"]))
    if kind == "table":
        return draw(tables())
    timing, of_row = draw(timings), draw(years)
    two = draw(rates), draw(rates)
    stock, loss = ([_geometric(r, timing, loss=lost) for r in two] for lost in (False, True))
    if kind == "geometric":
        return stock[0], loss[0]
    if kind == "periods":
        return of_periods(stock, of_row, loss=False), of_periods(stock, of_row, loss=True)
    net, lost = draw(tables())
    return of_vintages([stock[0], net], of_row), of_vintages([loss[0], lost], of_row)


def _case(flow, size):
    flow = flow.copy()
    flow[0] = np.nan
    opening, growth = np.full((2, T, 2), np.nan)
    opening[0], growth[0] = size, 0.03
    return flow, opening, growth


WHICH = np.zeros(2, np.int32)


def _after(pair, changes, flow, opening, growth):
    """Return C, the stock and the loss, as the stage makes them: convolutions of investment before the changes."""
    none = np.full((T, 2), np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        c = surviving([pair[0]])(changes, none, none, flow, opening, growth, WHICH)
    scaled = np.full((T, 2), np.nan)
    scaled[1:] = flow[1:] / c[:-1]
    of, lost = (Lag((kernel,), WHICH).compute(scaled, opening, growth) for kernel in pair)
    before = np.full((T, 2), np.nan)
    before[1:] = c[:-1]
    return c, c * of, before * lost


@quick
@given(kernels(), flows, parts, st.floats(100, 1e4))
def test_the_stock_balances_with_what_was_delivered(pair, flow, part, size):
    flow, opening, growth = _case(flow, size)
    changes = part * flow  # A loss of less than investment of the year, so that something is always left.
    _, stock, lost = _after(pair, changes * _left(pair), flow, opening, growth)
    changes = changes * _left(pair)
    before = np.concatenate([opening[:1], stock[1:-1]])
    np.testing.assert_allclose(stock[1:], before + flow[1:] - lost[1:] + changes[1:], rtol=1e-10)


def _left(pair):
    """Return the part of new investment that stands at the year's end in every year, at the least."""
    return min(pair[0].at(t, 1)[0] for t in range(T))


@quick
@given(kernels(), flows, parts, st.floats(100, 1e4), st.floats(0.01, 100))
def test_what_is_left_does_not_depend_on_the_unit(pair, flow, part, size, unit):
    flow, opening, growth = _case(flow, size)
    changes = part * flow * _left(pair)
    c, stock, _ = _after(pair, changes, flow, opening, growth)
    again, scaled, _ = _after(pair, unit * changes, unit * flow, unit * opening, growth)
    np.testing.assert_allclose(again, c, rtol=1e-10)
    np.testing.assert_allclose(scaled, unit * stock, rtol=1e-10)


@quick
@given(kernels(), flows, parts, st.floats(100, 1e4))
def test_a_later_year_leaves_earlier_ones(pair, flow, part, size):
    flow, opening, growth = _case(flow, size)
    changes = part * flow * _left(pair)
    _, stock, _ = _after(pair, changes, flow, opening, growth)
    other = flow.copy()
    other[-1] *= 3
    _, again, _ = _after(pair, np.where(np.arange(T)[:, None] < T - 1, changes, 0), other, opening, growth)
    np.testing.assert_array_equal(again[:-1], stock[:-1])


@quick
@given(kernels(), flows.map(lambda x: 50 + x / 20), st.floats(100, 1e4), st.floats(0.97, 1.3))
def test_even_changes_meet_the_later_benchmark(pair, flow, size, wanted):
    flow, opening, growth = _case(flow, size)
    none = np.full((T, 2), np.nan)
    _, plain, _ = _after(pair, 0 * flow, flow, opening, growth)
    benchmark = none.copy()
    benchmark[3], benchmark[9] = plain[3], wanted * plain[9]
    with np.errstate(invalid="ignore", divide="ignore"):
        x = even_change([pair[0]])(benchmark, none, flow, opening, growth, WHICH)
    assert np.isnan(x[[0, 1, 2, 3, 10, 11]]).all()
    assert np.ptp(x[4:10], axis=0) == pytest.approx([0, 0], abs=0)
    _, stock, _ = _after(pair, np.nan_to_num(x), flow, opening, growth)
    np.testing.assert_allclose(stock[9], benchmark[9], rtol=1e-9)


@quick
@given(flows, rates, rates, years, timings)
def test_a_rate_that_changes_in_time_is_the_recursion_by_period(flow, before, after, of_row, timing):
    two = [_geometric(rate, timing) for rate in (before, after)]
    band = of_periods(two, of_row, loss=False).band
    first, keep = (np.array([getattr(two[i], name) for i in of_row])[:, None] for name in ("first", "keep"))
    both = np.ones((1, 2))
    np.testing.assert_allclose(
        band @ flow, geometric_stock(flow, first * both, keep * both, None), rtol=1e-12
    )


@quick
@given(kernels())
def test_the_same_parameters_from_a_year_on_change_nothing(pair):
    kernel = pair[0]
    if isinstance(kernel, GeometricKernel):
        again = of_periods([kernel, kernel], np.repeat([0, 1], T // 2), loss=False)
    elif isinstance(kernel, TableKernel):
        again = of_vintages([kernel, kernel], np.repeat([0, 1], T // 2))
    else:
        return
    growth = np.array([0.03])
    for t in range(T):
        np.testing.assert_allclose(again.at(t, t + 1), kernel.weights(t + 1), rtol=1e-12)
    np.testing.assert_allclose(again.remainder(growth, 5, 2), kernel.remainder(growth, 5), rtol=1e-12)
