"""Charts: axes hold what they show, stacks add up, gaps stay gaps, labels stay apart."""

import itertools
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from keelbook.outputs.charts import (
    LABEL_GAP,
    SMALL,
    WIDE,
    Axis,
    Curve,
    Text,
    area_chart,
    axis,
    bar_chart,
    line_chart,
    row_chart,
    stack,
    stacked_extent,
)

TEXT = Text("x", "Stock", "What it is.", "millions")
VALUES = st.lists(st.floats(-1e9, 1e9).filter(lambda v: v == 0 or abs(v) > 1e-6), min_size=1, max_size=8)


@given(values=VALUES, zero=st.booleans())
def test_an_axis_holds_every_value_in_few_round_steps(values: list[float], zero: bool) -> None:
    found = axis(values, zero)
    slack = 1e-6 * found.step
    assert found.low - slack <= min(values)
    assert max(values) <= found.high + slack
    assert not zero or found.low <= 0 <= found.high
    assert 1 <= len(found.ticks) <= 9


@pytest.mark.parametrize(
    ("values", "ticks"),
    [
        ([0.0, 10.0], [0, 2, 4, 6, 8, 10]),
        ([-1.2, 3.4], [-2, -1, 0, 1, 2, 3, 4]),
        ([None], [0, 0.2, 0.4, 0.6, 0.8, 1]),
    ],
)
def test_ticks(values: list[float | None], ticks: list[float]) -> None:
    assert axis(values, True).ticks == pytest.approx(ticks)


def test_tick_labels_have_the_digits_of_the_step_and_no_negative_zero() -> None:
    assert [Axis(-0.2, 0.2, 0.1).label(v) for v in (-0.1, -1e-17, 0.2)] == ["−0.1", "0", "0.2"]
    assert Axis(0, 2000, 500).label(1500) == "1,500"


def curves(*values: list[float | None]) -> list[Curve]:
    return [Curve(f"name {i}", f"c{i}", v, "#123456") for i, v in enumerate(values)]


def test_a_stack_puts_negative_parts_below_zero_and_leaves_gaps() -> None:
    parts = curves([1.0, 2.0, 1.0], [3.0, None, -4.0], [-1.0, 1.0, -1.0])
    assert stack(parts) == [
        [(0, 1), None, (0, 1)],
        [(1, 4), None, (0, -4)],
        [(0, -1), None, (-4, -5)],
    ]
    assert min(stacked_extent(parts)) == -5  # type: ignore[type-var]


def test_a_gap_breaks_a_line_and_a_lone_figure_is_a_dot() -> None:
    (curve,) = curves([1.0, 2.0, None, 3.0])
    drawn = line_chart(TEXT, range(2000, 2004), [curve], Axis(0, 4, 1), WIDE)
    assert drawn.count('stroke="#123456"') == 2  # the line of two years and the stub of the label
    assert drawn.count("<circle") == 1


def test_a_missing_part_leaves_a_gap_in_a_stacked_area() -> None:
    drawn = area_chart(TEXT, range(2000, 2005), curves([1.0, 1.0, None, 1.0, 1.0]), Axis(0, 1, 1), WIDE)
    assert drawn.count("Z") == 2


def test_bars_are_as_high_as_their_figures() -> None:
    parts = curves([1.0], [2.0])
    drawn = bar_chart(TEXT, [2000], parts, Curve("Output", "Output", [3.0], "#000"), Axis(0, 4, 1), WIDE)
    first, second = (float(h) for h in re.findall(r'<rect [^>]*height="([\d.]+)"', drawn))
    assert second == pytest.approx(2 * first, abs=0.02)


def test_rows_write_the_sum_and_their_name() -> None:
    sums = Curve("Output", "Output", [-1.25, None], "#000")
    drawn = row_chart(TEXT, ["Alpha", "Beta"], curves([-1.25, None]), sums, Axis(-2, 0, 1), WIDE)
    assert "−1.25" in drawn
    assert {"Alpha", "Beta"} <= set(re.findall(r">([A-Z][a-z]+)<", drawn))


@given(st.lists(st.floats(0, 10), min_size=2, max_size=8))
def test_labels_stay_apart_and_inside(values: list[float]) -> None:
    drawn = line_chart(TEXT, [2000, 2001], curves(*([v, v] for v in values)), Axis(0, 10, 5), SMALL)
    heights = [float(y) for y in re.findall(r'y="([-\d.]+)" text-anchor="start" class="n"', drawn)]
    assert len(heights) == len(values)
    assert all(b - a >= LABEL_GAP - 0.11 for a, b in itertools.pairwise(heights))
    assert heights[0] >= 0
    assert heights[-1] <= SMALL.height


def test_text_is_escaped() -> None:
    hostile = '<script>"&'
    text = Text("x", hostile, hostile, hostile)
    curve = Curve(hostile, hostile, [1.0, 2.0], "#123456")
    drawn = line_chart(text, [2000, 2001], [curve], Axis(0, 2, 1), WIDE)
    assert "<script" not in drawn
    assert drawn.count("&lt;script&gt;") == 5
