"""Totals from parts, by hand and against sums over random subsets of series."""

from dataclasses import replace

import numpy as np
import pytest
from small_blocks import TABLE, block, column, holds, index, number, params

from keelbook.blocks import Block, SeriesIndex
from keelbook.stages.totals import Grouping, parts_of, totals

GROUPING = params("harmonise").grouping


def _parts(*series: str, dims=("industry", "asset")) -> dict[str, bool]:
    found = index(*series)
    marks = dict(zip(found.key.tolist(), parts_of(found, dims, GROUPING).tolist(), strict=True))
    return {s: marks[number(s)] for s in series}


def test_a_total_is_no_part_while_there_is_detail():
    assert _parts("industry=_T asset=N112", "industry=A asset=N112", "industry=_T asset=N113") == {
        "industry=_T asset=N112": False,
        "industry=A asset=N112": True,
        "industry=_T asset=N113": True,
    }


def test_a_group_of_assets_is_no_part_while_one_of_its_assets_is_there():
    assert _parts("asset=N11", "asset=N1131", "asset=N112", "area=XB asset=N11") == {
        "asset=N11": False,
        "asset=N1131": True,
        "asset=N112": True,
        "area=XB asset=N11": True,
    }
    assert _parts("industry=A asset=N113", "industry=A asset=N1131", "industry=C asset=N113") == {
        "industry=A asset=N113": False,
        "industry=A asset=N1131": True,
        "industry=C asset=N113": True,
    }


def test_of_workers_the_delivered_total_is_the_part():
    dims = ("industry", "worker_group")
    series = [f"industry={i} worker_group={w}" for i, w in (("A", "_T"), ("A", "SAL"), ("C", "SAL"))]
    assert _parts(*series, dims=dims) == dict(zip(series, (True, False, True), strict=True))


def test_two_partitions_of_workers_never_add_up_twice():
    grouping = Grouping({}, {"SAL": "status", "SELF": "skill"}, ("status", "skill"))
    found = index("worker_group=SAL", "worker_group=SELF")
    np.testing.assert_array_equal(parts_of(found, ("worker_group",), grouping), [True, False])
    swapped = replace(grouping, partitions=("skill", "status"))
    np.testing.assert_array_equal(parts_of(found, ("worker_group",), swapped), [False, True])


def _random(seed: int) -> Block:
    """Some of all elementary series, each a part."""
    rng = np.random.default_rng(seed)
    every = [
        f"sector={s} industry={i} asset={a}"
        for s in ("S11", "S13")
        for i in ("A", "C")
        for a in ("N112", "N113")
    ]
    some = [s for s in every if rng.random() < 0.7] or every[:1]
    return block("investment/delivered/current", {s: list(rng.uniform(-9, 9, 3)) for s in some})


@pytest.mark.parametrize("seed", range(6))
def test_every_total_is_the_sum_of_what_it_covers(seed):
    one = _random(seed)
    made = totals(one, ("sector", "industry", "asset"))
    assert made
    for total in made:
        for n, key in enumerate(total.series.key):
            labels = TABLE.labels(int(key))
            inside = np.ones(len(one.series), bool)
            for dim, whole in (("sector", "S1"), ("industry", "_T"), ("asset", "_T")):
                if labels[dim] != whole:
                    inside &= one.series.is_code(dim, labels[dim])
            np.testing.assert_allclose(total.value[:, n], one.value[:, inside].sum(axis=1), rtol=1e-12)
    keys = np.concatenate([t.series.key for t in made])
    assert len(np.unique(keys)) == len(keys)
    expected = {
        int(k)
        for s in ({}, {"sector": "S1"})
        for i in ({}, {"industry": "_T"})
        for a in ({}, {"asset": "_T"})
        for k in one.series.projected({**s, **i, **a})
    }
    assert set(keys.tolist()) == expected - set(one.series.key.tolist())


def test_a_total_that_is_there_is_left_alone():
    rows = {"industry=A asset=N112": [1.0], "industry=C asset=N112": [2.0], "industry=_T asset=N112": [9.0]}
    one = block("investment/delivered/current", rows)
    one = replace(one, part=parts_of(one.series, ("industry", "asset"), GROUPING))
    made = totals(one, ("industry", "asset"), "sum_of_parts")
    assert not any(holds(t, "industry=_T asset=N112") for t in made)
    (whole,) = [t for t in made if holds(t, "industry=_T asset=_T")]
    assert column(whole, "industry=_T asset=_T")[0] == 3.0
    assert whole.key.method == "sum_of_parts"


def test_no_parts_no_totals():
    one = block("investment/delivered/current", {"industry=A asset=N112": [1.0]}, part=False)
    assert totals(one, ("industry", "asset")) == []
    empty = SeriesIndex(TABLE, np.zeros(0, np.int64))
    assert len(parts_of(empty, ("asset",), GROUPING)) == 0
