"""The layout of networks: nothing overlaps, streams lead where they should, the same case gives the same sheet."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.report.drawing import MARGIN, lay_out

NODE, LABEL = (80.0, 46.0), (100.0, 38.0)


def drawn(streams):
    count = 1 + max((k for pair in streams for k in pair), default=-1)
    return lay_out([NODE] * count, streams, [LABEL] * len(streams)), count


def boxes(found, streams):
    """Rectangles of nodes and of labels, each as (left, top, right, bottom)."""
    out = [(x - NODE[0] / 2, y - NODE[1] / 2, x + NODE[0] / 2, y + NODE[1] / 2) for x, y in found.centres]
    for stroke in found.strokes:
        x, y = stroke.label
        out.append((x - LABEL[0] / 2, y - LABEL[1], x + LABEL[0] / 2, y))
    return out


def overlapping(found, streams):
    return [
        (a, b)
        for a, b in combinations(boxes(found, streams), 2)
        if a[0] < b[2] - 0.01 and b[0] < a[2] - 0.01 and a[1] < b[3] - 0.01 and b[1] < a[3] - 0.01
    ]


networks = st.integers(1, 9).flatmap(
    lambda n: st.lists(
        st.tuples(st.integers(-1, n - 1), st.integers(-1, n - 1)).filter(lambda p: p[0] != p[1]),
        min_size=1,
        max_size=20,
    )
)


@given(networks)
def test_no_node_and_no_label_covers_another(streams):
    found, _ = drawn(streams)
    assert overlapping(found, streams) == []


@given(networks)
def test_everything_lies_on_the_sheet(streams):
    found, _ = drawn(streams)
    for left, top, right, bottom in boxes(found, streams):
        assert left >= 0
        assert top >= 0
        assert right <= found.width + 0.01
        assert bottom <= found.height + 0.01
    for stroke in found.strokes:
        for x, y in stroke.points:
            assert 0 <= x <= found.width
            assert 0 <= y <= found.height


@given(networks)
def test_streams_leave_their_source_on_the_right_and_enter_their_target_on_the_left(streams):
    found, _ = drawn(streams)
    assert len(found.strokes) == len(streams)
    for (a, b), stroke in zip(streams, found.strokes, strict=True):
        if a >= 0:
            x, y = found.centres[a]
            assert stroke.points[0][0] == pytest.approx(x + NODE[0] / 2)
            assert abs(stroke.points[0][1] - y) < NODE[1] / 2
        if b >= 0:
            x, y = found.centres[b]
            assert stroke.points[-1][0] == pytest.approx(x - NODE[0] / 2)
            assert abs(stroke.points[-1][1] - y) < NODE[1] / 2


@given(networks)
def test_streams_that_are_no_recycles_run_from_left_to_right(streams):
    found, _ = drawn(streams)
    for (a, b), stroke in zip(streams, found.strokes, strict=True):
        xs = [p[0] for p in stroke.points]
        if not stroke.recycle:
            assert all(np.diff(xs) >= -0.01)
            if a >= 0 and b >= 0:
                assert found.centres[a][0] < found.centres[b][0]


@given(networks)
def test_the_same_network_gives_the_same_sheet(streams):
    assert drawn(streams)[0] == drawn(streams)[0]


def test_a_recycle_runs_back_below_everything():
    # Feed and recycle meet at 0, pass 1, and 2 sends part of it back.
    streams = [(-1, 0), (2, 0), (0, 1), (1, -1), (1, 2), (2, -1)]
    found, _ = drawn(streams)
    assert [s.recycle for s in found.strokes] == [False, True, False, False, False, False]
    assert found.centres[0][0] < found.centres[1][0] < found.centres[2][0]
    floor = max(y + NODE[1] / 2 for _, y in found.centres)
    assert found.strokes[1].label[1] > floor


def test_a_recycle_to_the_first_inlet_is_told_from_the_way_through():
    # 0 -> 1 -> 2 -> 0 with a second inlet at 2: the stream back to the first inlet is the recycle.
    streams = [(-1, 0), (2, 0), (0, 1), (1, 2), (-1, 2), (2, -1)]
    assert [s.recycle for s in drawn(streams)[0].strokes] == [False, True, False, False, False, False]


def test_a_bypass_of_a_loop_is_no_recycle():
    # 0 -> 1 -> 2 -> 3 with a short cut 0 -> 3 and a recycle 3 -> 0.
    streams = [(-1, 0), (0, 1), (1, 2), (2, 3), (0, 3), (3, 0), (3, -1)]
    assert [s.recycle for s in drawn(streams)[0].strokes] == [False, False, False, False, False, True, False]


def test_one_recycle_is_enough_for_one_loop():
    ring = [(k, (k + 1) % 7) for k in range(7)]
    assert sum(s.recycle for s in drawn([(-1, 3), *ring, (2, -1)])[0].strokes) == 1


def test_loops_beside_the_same_layer_turn_at_different_places():
    streams = [(-1, 0), (-1, 1), (0, 2), (1, 3), (2, 4), (3, 5), (4, -1), (5, -1), (4, 2), (5, 3)]
    found, _ = drawn(streams)
    back = [s for s in found.strokes if s.recycle]
    assert len(back) == 2
    assert abs(back[0].points[1][0] - back[1].points[1][0]) >= 6
    assert abs(back[0].points[3][0] - back[1].points[3][0]) >= 6


def test_a_straight_line_stays_straight():
    found, _ = drawn([(-1, 0), (0, 1), (1, 2), (2, -1)])
    assert np.ptp([y for _, y in found.centres]) < 0.5
    for stroke in found.strokes:
        assert np.ptp([y for _, y in stroke.points]) < 0.5


def test_nothing_but_a_margin_without_streams():
    found = lay_out([], [], [])
    assert found.width <= 2 * MARGIN
    assert found.strokes == ()


def test_a_hundred_and_fifty_streams_fit_without_overlaps():
    rng = np.random.default_rng(3)
    streams = [(-1, k) for k in range(8)]
    streams += [(int(a), int(a + rng.integers(1, 9))) for a in rng.integers(0, 80, 110)]
    streams += [(int(a), int(a - rng.integers(1, 20))) for a in rng.integers(30, 80, 20)]
    streams += [(int(a), -1) for a in rng.integers(70, 88, 12)]
    found, _ = drawn(streams)
    assert len(found.strokes) == 150
    assert overlapping(found, streams) == []
