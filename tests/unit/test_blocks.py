import numpy as np
import pytest
from small_blocks import TABLE, block, codes, column, index, number

from keelbook.blocks import (
    DIMS,
    ESTIMATED,
    NO_FIGURE,
    NORMAL,
    PROVISIONAL,
    Block,
    BlockKey,
    Derivation,
    Edges,
    Origin,
    SeriesIndex,
    merge,
    status_of,
)
from keelbook.contracts.codes import load_code_lists


def test_keys_are_mixed_radix_with_area_first():
    assert TABLE.strides == {
        "area": 3 * 4 * 8 * 4,
        "sector": 4 * 8 * 4,
        "industry": 8 * 4,
        "asset": 4,
        "worker_group": 1,
    }
    text = "area=XB sector=S11 industry=C asset=N113 worker_group=SAL"
    assert number(text) == 1 * 384 + 1 * 128 + 3 * 32 + 6 * 4 + 2
    assert TABLE.labels(number(text)) == codes(text)


def test_every_key_has_its_own_labels():
    count = int(np.prod([len(TABLE.codes[dim]) for dim in DIMS]))
    labels = [TABLE.labels(key) for key in range(count)]
    assert len({tuple(x.values()) for x in labels}) == count
    assert [TABLE.key(x) for x in labels] == list(range(count))


def test_projection_sets_the_named_dimensions_and_no_other():
    series = index("industry=A asset=N112", "area=XB industry=C asset=N113 worker_group=SELF")
    projected = series.projected({"industry": "_T", "worker_group": "SAL"})
    assert [TABLE.labels(int(k)) for k in projected] == [
        codes("industry=_T asset=N112 worker_group=SAL"),
        codes("area=XB industry=_T asset=N113 worker_group=SAL"),
    ]
    np.testing.assert_array_equal(series.projected({}), series.key)


def test_digits_and_codes():
    series = index("industry=A", "industry=C", "area=XB industry=A")
    np.testing.assert_array_equal(series.digit("industry"), [2, 3, 2])
    np.testing.assert_array_equal(series.is_code("industry", "A"), [True, False, True])
    np.testing.assert_array_equal(series.is_code("area", "XB"), [False, False, True])


def test_locate_finds_only_what_is_there():
    series = index("industry=A", "industry=C")
    wanted = np.array([number("area=XB"), number("industry=C"), 0, number("industry=A")])
    np.testing.assert_array_equal(series.locate(wanted), [-1, 1, -1, 0])
    np.testing.assert_array_equal(SeriesIndex(TABLE, np.zeros(0, np.int64)).locate(wanted), [-1] * 4)


def test_a_block_refuses_values_of_another_shape():
    with pytest.raises(ValueError, match="shape"):
        Block(
            BlockKey("investment", "delivered", "current"),
            index("industry=A"),
            range(2010, 2012),
            np.ones((3, 1)),
            Origin((), np.zeros(1, np.int32), (), np.zeros(1, np.int32)),
            np.ones(1, bool),
            np.ones(1, bool),
        )


def test_values_cannot_be_written():
    one = block("investment/delivered/current", {"industry=A": [1.0, 2.0]})
    with pytest.raises(ValueError, match="read-only"):
        one.value[0, 0] = 5.0


def _with_edges(one: Block, target: str, keys: list[int], number_of_set: str) -> Block:
    n = len(one.series)
    edges = Edges((BlockKey(target, "rebased", "index"),), np.zeros(n, np.int32), np.array(keys, np.int64))
    link = Derivation(f"formula_{target}", one.key, ())
    origin = Origin(
        (link,), np.zeros(n, np.int32), ((), (number_of_set,)), np.ones(n, np.int32), {"price": edges}
    )
    return Block(
        one.key, one.series, one.periods, one.value, origin, one.chosen, one.part,
        one.status, one.conf, one.imputed, one.assumed,
    )  # fmt: skip


def test_merge_puts_everything_in_key_order():
    late = block(
        "investment/delivered/current",
        {"industry=C": [3.0, np.nan]},
        chosen=False,
        status={"industry=C": [PROVISIONAL, NO_FIGURE]},
        imputed={"industry=C": [0.25, 0]},
    )
    early = block(
        "investment/delivered/current",
        {"industry=_T": [1.0, 2.0], "area=XB industry=A": [np.nan, 4.0]},
        part=False,
        conf={"industry=_T": [0, 2]},
    )
    late = _with_edges(late, "late", [11], "L")
    both = merge([late, _with_edges(early, "early", [5, -1], "E")])
    np.testing.assert_array_equal(
        both.series.key, [number("industry=_T"), number("industry=C"), number("area=XB industry=A")]
    )
    np.testing.assert_array_equal(both.value, [[1, 3, np.nan], [2, np.nan, 4]])
    np.testing.assert_array_equal(both.chosen, [True, False, True])
    np.testing.assert_array_equal(both.part, [False, True, False])
    # A block without statuses is normal where it has a figure, and nothing where it has none.
    np.testing.assert_array_equal(
        both.status, [[NORMAL, PROVISIONAL, NO_FIGURE], [NORMAL, NO_FIGURE, NORMAL]]
    )
    np.testing.assert_array_equal(both.conf, [[0, 0, 0], [2, 0, 0]])
    np.testing.assert_array_equal(both.imputed, [[0, 0.25, 0], [0, 0, 0]])
    assert both.assumed is None
    assert [both.origin.derivations[i].formula for i in both.origin.derivation] == [
        "formula_early",
        "formula_late",
        "formula_early",
    ]
    assert [both.origin.sets[i] for i in both.origin.set] == [("E",), ("L",), ("E",)]
    edges = both.origin.edges["price"]
    assert [(edges.blocks[w].measure, k) for w, k in zip(edges.which, edges.key, strict=True)] == [
        ("early", 5),
        ("late", 11),
        ("early", -1),
    ]


def test_merge_of_a_role_that_only_one_block_has():
    with_price = _with_edges(block("investment/a/current", {"industry=C": [1.0]}), "price", [7], "S")
    without = block("investment/a/current", {"industry=A": [1.0]})
    edges = merge([with_price, without]).origin.edges["price"]
    np.testing.assert_array_equal(edges.key, [-1, 7])


@pytest.mark.parametrize(
    ("other", "message"),
    [
        (block("investment/delivered/current", {"industry=A": [1.0]}), "in two blocks"),
        (block("investment/delivered/constant", {"industry=C": [1.0]}), "different keys or periods"),
        (block("investment/delivered/current", {"industry=C": [1.0]}, first=2011), "different keys"),
    ],
)
def test_merge_refuses_what_does_not_belong_together(other, message):
    with pytest.raises(ValueError, match=message):
        merge([block("investment/delivered/current", {"industry=A": [1.0]}), other])


def test_take_keeps_series_with_all_that_belongs_to_them():
    rows = {"industry=A": [1.0, 2.0], "industry=C": [3.0, 4.0], "area=XB": [5.0, 6.0]}
    three = block("investment/delivered/current", rows, conf={"area=XB": [0, 3]})
    three = _with_edges(three, "price", [7, 8, 9], "S")
    taken = three.take(np.array([False, True, True]))
    np.testing.assert_array_equal(column(taken, "industry=C"), [3, 4])
    np.testing.assert_array_equal(column(taken, "area=XB", "conf"), [0, 3])
    np.testing.assert_array_equal(taken.origin.edges["price"].key, [8, 9])
    assert taken.status is None
    assert len(taken.origin.set) == len(taken.origin.derivation) == len(taken.chosen) == len(taken.part) == 2


def test_status_of_a_block_without_statuses():
    one = block("investment/delivered/current", {"industry=A": [1.0, np.nan]})
    np.testing.assert_array_equal(status_of(one)[:, 0], [NORMAL, NO_FIGURE])


def test_status_positions_are_those_of_the_code_list():
    lists = load_code_lists()
    positions = {code: lists.position("obs_status", code) for code in ("A", "E", "P")}
    assert positions == {"A": NORMAL, "E": ESTIMATED, "P": PROVISIONAL}
    assert lists.position("conf_status", "F") == 0
