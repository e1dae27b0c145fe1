from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geo.nearest import SegmentIndex


def index_of(path: np.ndarray, tolerance: float = 1e-9) -> SegmentIndex:
    return SegmentIndex.build(path[:-1], path[1:], tolerance=tolerance)


@given(
    dimensions=st.integers(2, 3),
    vertices=st.integers(2, 60),
    seed=st.integers(0, 2**32 - 1),
    uneven=st.booleans(),
)
def test_distances_equal_those_of_every_pair(brute, dimensions, vertices, seed, uneven) -> None:
    rng = np.random.default_rng(seed)
    path = rng.normal(size=(vertices, dimensions))
    if uneven:  # a knot of short segments beside long ones
        path *= np.where(rng.random((vertices, 1)) < 0.7, 1e-3, 1.0)
    points = rng.normal(size=(80, dimensions))
    hits = index_of(path).nearest(points)
    np.testing.assert_allclose(hits.distance, brute(points, path[:-1], path[1:]), rtol=1e-12, atol=1e-9)
    foot = path[hits.segment] + hits.along[:, None] * (path[hits.segment + 1] - path[hits.segment])
    np.testing.assert_allclose(np.linalg.norm(points - foot, axis=1), hits.distance, rtol=1e-12, atol=1e-15)


def test_places_on_the_path_are_at_no_distance() -> None:
    rng = np.random.default_rng(4)
    path = rng.normal(size=(300, 2)).cumsum(axis=0)
    segment, along = rng.integers(0, 299, 500), rng.random(500)
    places = path[segment] + along[:, None] * (path[segment + 1] - path[segment])
    assert index_of(path).nearest(places).distance.max() < 1e-13


@given(reach=st.floats(0.01, 3.0), seed=st.integers(0, 1000))
@settings(max_examples=30)
def test_a_reach_keeps_what_lies_within_it_and_nothing_else(brute, reach, seed) -> None:
    rng = np.random.default_rng(seed)
    path, points = rng.normal(size=(30, 2)), rng.normal(scale=2.0, size=(100, 2))
    truth = brute(points, path[:-1], path[1:])
    hits = index_of(path).nearest(points, reach)
    np.testing.assert_array_equal(hits.segment >= 0, truth <= reach)
    np.testing.assert_allclose(hits.distance, np.where(truth <= reach, truth, np.inf), atol=1e-12)


def test_segments_that_do_not_meet_keep_both_ends(brute) -> None:
    rng = np.random.default_rng(5)
    start, end = rng.normal(size=(40, 2)), rng.normal(size=(40, 2))
    points = rng.normal(size=(200, 2))
    hits = SegmentIndex.build(start, end, tolerance=1e-9).nearest(points)
    np.testing.assert_allclose(hits.distance, brute(points, start, end), rtol=1e-12, atol=1e-12)


def test_a_segment_without_length_is_a_place() -> None:
    path = np.array([[0.0, 0.0], [0.0, 0.0], [0.0, 1.0]])
    hits = index_of(path).nearest(np.array([[-3.0, -4.0], [2.0, 0.5]]))
    np.testing.assert_allclose(hits.distance, [5.0, 2.0], rtol=1e-15)


@pytest.mark.parametrize("corners", [720, 30_000])
def test_the_centre_of_a_circle_is_settled_by_finer_samples(brute, corners) -> None:
    """Every segment is a candidate there: the tree alone would ask for all of them, for every point."""
    turn = np.linspace(0.0, 2.0 * np.pi, corners + 1)
    path = 1e5 * np.column_stack((np.cos(turn), np.sin(turn)))
    path[-1] = path[0]
    rng = np.random.default_rng(6)
    points = rng.normal(scale=0.3, size=(40, 2))
    hits = index_of(path, 1e-4).nearest(points)
    if corners < 1000:
        np.testing.assert_allclose(hits.distance, brute(points, path[:-1], path[1:]), atol=1e-4)
    apothem = 1e5 * np.cos(np.pi / corners)
    assert np.all(hits.distance <= 1e5 - np.linalg.norm(points, axis=1) + 1e-4)
    assert np.all(hits.distance >= apothem - np.linalg.norm(points, axis=1) - 1e-6)


def test_a_knot_of_very_many_short_segments_is_settled_by_looking_at_all_of_them(brute, monkeypatch) -> None:
    """Samples stand by the mean spacing, so a fine knot beside a long edge offers hundreds of equal candidates."""
    rng = np.random.default_rng(7)
    knot = rng.normal(scale=1e-4, size=(900, 2))
    path = np.concatenate((knot, [[3000.0, 0.0]]))
    points = rng.normal(scale=3e-4, size=(60, 2))
    index = index_of(path, 1e-12)
    asked = []
    looked = SegmentIndex._with_every_candidate
    monkeypatch.setattr(
        SegmentIndex,
        "_with_every_candidate",
        lambda self, p, rows, h: (asked.append(len(rows)), looked(self, p, rows, h)),
    )
    hits = index.nearest(points)
    assert sum(asked) == 60
    np.testing.assert_allclose(hits.distance, brute(points, path[:-1], path[1:]), rtol=1e-9, atol=1e-13)


def test_no_points_no_answers() -> None:
    hits = index_of(np.array([[0.0, 0.0], [1.0, 0.0]])).nearest(np.zeros((0, 2)))
    assert len(hits.distance) == len(hits.segment) == 0
