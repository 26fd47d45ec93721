"""Labels stay in the picture and off one another."""

from __future__ import annotations

import itertools

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from vidkin.report.placing import nearest_on, overlap, place_labels

SIZE = (1920, 1080)


@given(seed=st.integers(0, 10_000), count=st.integers(1, 14))
@settings(max_examples=40, deadline=None)
def test_labels_stay_in_the_picture_and_apart(seed: int, count: int) -> None:
    rng = np.random.default_rng(seed)
    points = rng.uniform([0, 0], SIZE, (count, 2))
    sizes = np.tile([110.0, 28.0], (count, 1))
    obstacle = (0.0, 0.0, 1920.0, 90.0)
    boxes = place_labels(points, sizes, SIZE, gap_px=19.0, obstacles=[obstacle])
    assert len(boxes) == count
    for box in boxes:
        assert box[0] >= 0
        assert box[1] >= 0
        assert box[2] <= SIZE[0]
        assert box[3] <= SIZE[1]
    assert sum(overlap(a, b) for a, b in itertools.combinations(boxes, 2)) == 0


def test_a_point_outside_gets_a_label_inside() -> None:
    box = place_labels(np.array([[-400.0, 3000.0]]), np.array([[100.0, 30.0]]), SIZE, gap_px=20.0)[0]
    assert box[0] >= 0
    assert box[3] <= SIZE[1]


def test_a_label_keeps_off_an_obstacle() -> None:
    point, size = np.array([[500.0, 500.0]]), np.array([[100.0, 30.0]])
    free = place_labels(point, size, SIZE, gap_px=20.0)[0]
    moved = place_labels(point, size, SIZE, gap_px=20.0, obstacles=[free])[0]
    assert overlap(moved, free) == 0


def test_no_points_no_labels() -> None:
    assert place_labels(np.zeros((0, 2)), np.zeros((0, 2)), SIZE, gap_px=20.0) == []


def test_nearest_point_of_a_box() -> None:
    assert nearest_on(np.array([0.0, 0.0, 10.0, 5.0]), np.array([20.0, 3.0])).tolist() == [10.0, 3.0]
