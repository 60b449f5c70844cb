"""The network: incidence, headroom by hand, and what is refused in which words."""

import numpy as np
import pandas as pd
import pytest

from fleet.errors import FleetError, Refused
from fleet.feeders import feeders, headroom_kw
from sites.clock import Clock

CLOCK = Clock(np.datetime64("2026-07-15T10:00", "us"), 15, 3)


def text(values):
    return np.array(values, dtype=object)


def nodes(rows):
    return pd.DataFrame(rows, columns=["node_id", "parent_id", "import_limit_kw"])


def loads(**by_node):
    starts = pd.to_datetime(CLOCK.starts).tz_localize("UTC").as_unit("us")
    parts = [
        pd.DataFrame({"node_id": node, "interval_start": starts[: len(kw)], "other_kw": kw})
        for node, kw in by_node.items()
    ]
    return pd.concat(parts, ignore_index=True)


TREE = nodes([("all", None, np.nan), ("east", "all", 500.0), ("e1", "east", 100.0), ("west", "all", 80.0)])


def test_without_a_table_one_unlimited_root():
    alone = feeders(None, None, text(["", ""]), CLOCK)
    assert alone.node_id.tolist() == ["fleet"]
    assert alone.below.tolist() == [[True, True]]
    assert alone.root == "fleet"
    assert np.isinf(headroom_kw(alone, np.ones((2, 3))).kw).all()


def test_sites_hang_below_every_node_above_them():
    tree = feeders(TREE, None, text(["e1", "west", "", "east"]), CLOCK)
    assert tree.sites_below("all").tolist() == [True, True, True, True]
    assert tree.sites_below("east").tolist() == [True, False, False, True]
    assert tree.sites_below("e1").tolist() == [True, False, False, False]
    assert tree.parent.tolist() == [-1, 0, 1, 0]
    assert tree.limited.tolist() == [False, True, True, True]


def test_headroom_by_hand():
    """East: limit 500 - other 300 - usual (40 + 10) = 150."""
    given = loads(east=[300.0, 310.0, 320.0], e1=[50.0, 50.0, 50.0])
    tree = feeders(TREE, given, text(["e1", "west", "", "east"]), CLOCK)
    usual = np.array([[40.0] * 3, [100.0, 70.0, 60.0], [9.0] * 3, [10.0] * 3])
    room = headroom_kw(tree, usual)
    assert room.kw[1].tolist() == [150.0, 140.0, 130.0]
    assert room.kw[2].tolist() == [10.0, 10.0, 10.0]
    assert room.kw[3].tolist() == [0.0, 10.0, 20.0]
    assert room.over_kw[3].tolist() == [20.0, 0.0, 0.0]
    assert room.notes == (
        "node west is over its limit of 80 kW before anything is called, by up to 20.0 kW in 1 intervals; "
        "held to no worse than usual there",
    )


def test_a_node_without_rows_carries_what_hangs_below_it():
    given = loads(e1=[50.0, 51.0, 52.0])
    tree = feeders(TREE, given, text(["e1"]), CLOCK)
    assert tree.other_kw.tolist() == [[50.0, 51.0, 52.0]] * 3 + [[0.0] * 3]
    assert tree.notes == (
        "no node_loads for limited nodes east, west: taken as what the nodes below them carry besides the fleet, "
        "or 0 kW where nothing is known",
    )


def test_rows_outside_the_horizon_are_left_alone():
    longer = loads(east=[1.0, 2.0, 3.0])
    early = longer.assign(interval_start=longer["interval_start"] - pd.Timedelta(days=1), other_kw=99.0)
    tree = feeders(TREE, pd.concat([early, longer]), text(["e1"]), CLOCK)
    assert tree.other_kw[1].tolist() == [1.0, 2.0, 3.0]


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        (
            [("a", None, 1.0), ("b", None, 1.0)],
            "nodes, column parent_id: came several roots: a, b; expected exactly one row with an empty parent_id; "
            "leave parent_id empty for the whole fleet only, and hang the others below it",
        ),
        (
            [("r", None, 1.0), ("a", "b", 1.0), ("b", "a", 1.0)],
            "nodes, column parent_id: came a loop b > a; expected a tree; "
            "a radial network has no loop: correct one parent_id of these",
        ),
        (
            [("r", None, 1.0), ("a", "x", 1.0)],
            "nodes, row 2, column parent_id: came 'x'; expected the node_id of another row; "
            "add a row for it or correct the spelling",
        ),
        (
            [("r", None, 1.0), ("a", "r", 1.0), ("a", "r", 1.0)],
            "nodes, row 3, column node_id: came 'a'; expected an id given once; remove or rename the row",
        ),
    ],
)
def test_what_is_no_tree_is_refused(rows, message):
    with pytest.raises(Refused) as caught:
        feeders(nodes(rows), None, text([""]), CLOCK)
    assert str(caught.value) == message


def test_a_loop_without_a_root_tells_both():
    with pytest.raises(Refused) as caught:
        feeders(nodes([("a", "b", 1.0), ("b", "a", 1.0)]), None, text([""]), CLOCK)
    assert [problem.came for problem in caught.value.problems] == [
        "no row with an empty parent_id",
        "a loop b > a",
    ]


def test_a_site_on_an_unknown_node_is_refused():
    with pytest.raises(Refused) as caught:
        feeders(TREE, None, text(["e1", "e9"]), CLOCK, text(["s1", "s2"]))
    assert str(caught.value) == (
        "sites, row 2, column node_id: came 'e9' for site s2; expected a node_id of the table nodes; "
        "add the node to the table nodes or correct the spelling"
    )


def test_loads_with_holes_are_refused():
    with pytest.raises(Refused) as caught:
        feeders(TREE, loads(east=[1.0, 2.0]), text(["e1"]), CLOCK)
    assert str(caught.value) == (
        "node_loads, column other_kw: came node east without a value in 1 of 3 intervals, first "
        "2026-07-15T10:30:00.000000; expected every interval from 2026-07-15T10:00:00.000000 to "
        "2026-07-15T10:45:00.000000 UTC; add rows, or leave the node out"
    )


def test_double_and_unknown_loads_are_refused():
    given = pd.concat([loads(east=[1.0, 2.0, 3.0]), loads(east=[4.0]), loads(elsewhere=[4.0])])
    with pytest.raises(Refused) as caught:
        feeders(TREE, given, text(["e1"]), CLOCK)
    assert [problem.came for problem in caught.value.problems] == [
        "'elsewhere'",
        "node east given 2 times at 2026-07-15T10:00:00.000000 UTC",
    ]


def test_an_unknown_node_is_named_with_those_there_are():
    with pytest.raises(FleetError) as caught:
        feeders(TREE, None, text(["e1"]), CLOCK).sites_below("North")
    assert str(caught.value) == "node 'North' is not in the network; known nodes: all, east, e1, west"
