"""Exact shapes in the plane, shapely as the slow twin, and what must not change a distance."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest
import shapely
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from geo.boundary import Boundary
from geo.distance import locate
from geo.errors import GeometryError, Stopped
from geo.outline import boundary_of_area


def plain(*shapes: shapely.Geometry) -> Boundary:
    return boundary_of_area(np.array(shapes, dtype=object), crs="plain", gap=0.0)


def star(seed: int, corners: int = 40) -> shapely.Polygon:
    rng = np.random.default_rng(seed)
    turn = np.sort(rng.random(corners)) * 2.0 * np.pi
    radius = rng.uniform(0.3, 1.5, corners)
    return shapely.Polygon(np.column_stack((radius * np.cos(turn), radius * np.sin(turn))))


def signed(boundary: Boundary, points: np.ndarray, treated: str = "inside") -> np.ndarray:
    return locate(points[:, 0], points[:, 1], boundary=boundary, reach_m=1e6, treated=treated).distance_m


def against_shapely(area: shapely.Geometry, points: np.ndarray) -> np.ndarray:
    places = shapely.points(points)
    return shapely.distance(places, shapely.boundary(area)) * np.where(
        shapely.contains(area, places), 1.0, -1.0
    )


ZOO = {
    "square": shapely.box(0, 0, 1, 1),
    "L": shapely.Polygon([(0, 0), (2, 0), (2, 1), (1, 1), (1, 2), (0, 2)]),
    "square ring": shapely.box(0, 0, 3, 3).difference(shapely.box(1, 1, 2, 2)),
    "two boxes": shapely.union_all([shapely.box(0, 0, 1, 1), shapely.box(2, 0, 3, 1)]),
    "island in a hole": shapely.union_all(
        [shapely.box(0, 0, 5, 5).difference(shapely.box(1, 1, 4, 4)), shapely.box(2, 2, 3, 3)]
    ),
    "touching holes": shapely.box(0, 0, 4, 2).difference(
        shapely.union_all([shapely.Polygon([(1, 1), (1.5, 0.5), (2, 1), (1.5, 1.5)]), shapely.Polygon([(2, 1), (2.5, 0.5), (3, 1), (2.5, 1.5)])])
    ),
    "needle": shapely.Polygon([(0, 0), (10, 0.001), (10, -0.001)]),
}  # fmt: skip


@pytest.mark.parametrize("name", ZOO)
def test_the_zoo_equals_shapely(name) -> None:
    area = ZOO[name]
    left, low, right, top = area.bounds
    points = np.random.default_rng(8).uniform((left - 1, low - 1), (right + 1, top + 1), (2000, 2))
    np.testing.assert_allclose(
        signed(plain(area), points), against_shapely(area, points), rtol=1e-13, atol=1e-14
    )


def test_corners_of_an_l_by_hand() -> None:
    got = signed(plain(ZOO["L"]), np.array([[1.5, 1.5], [0.9, 0.9], [0.5, 0.5], [-3.0, -4.0]]))
    np.testing.assert_allclose(got, [-0.5, np.sqrt(0.02), 0.5, -5.0], rtol=1e-14)


def test_a_comb_of_fifty_teeth_by_hand() -> None:
    """Teeth one wide and ten high with gaps of one: at mid-height each gap and tooth is known."""
    teeth = [shapely.box(2 * i, 0, 2 * i + 1, 11) for i in range(50)]
    comb = shapely.union_all([shapely.box(0, 0, 99, 1), *teeth])
    assert comb.area == 50 * 11 + 49
    x = np.linspace(0.0, 99.0, 3961)[1:-1]
    x = x[np.abs(x - np.round(x)) > 1e-9]
    into = x - np.floor(x)
    expected = np.minimum(into, 1.0 - into) * np.where(np.floor(x) % 2 == 0, 1.0, -1.0)
    np.testing.assert_allclose(
        signed(plain(comb), np.column_stack((x, np.full_like(x, 6.0)))), expected, atol=1e-13
    )


def test_a_fine_polygon_is_a_circle_within_its_own_bound() -> None:
    turn = np.linspace(0.0, 2.0 * np.pi, 720, endpoint=False)
    points = np.random.default_rng(9).uniform(-2.0, 2.0, (3000, 2))
    got = signed(plain(shapely.Polygon(np.column_stack((np.cos(turn), np.sin(turn))))), points)
    assert np.abs(got - (1.0 - np.hypot(*points.T))).max() <= 1.0 - np.cos(np.pi / 720) + 1e-14


@given(seed=st.integers(0, 10_000))
def test_random_outlines_equal_shapely(seed) -> None:
    area = star(seed)
    assume(area.is_valid)
    points = np.random.default_rng(seed + 1).uniform(-2.0, 2.0, (200, 2))
    np.testing.assert_allclose(
        signed(plain(area), points), against_shapely(area, points), rtol=1e-12, atol=1e-13
    )


@given(
    seed=st.integers(0, 10_000), turn=st.floats(0.0, 6.3), size=st.floats(1e-3, 1e5), x=st.floats(-1e3, 1e3), y=st.floats(-1e3, 1e3)
)  # fmt: skip
@settings(max_examples=30)
def test_moving_turning_and_scaling_the_plane_scales_distances(seed, turn, size, x, y) -> None:
    area = star(seed, 15)
    assume(area.is_valid)
    points = np.random.default_rng(seed + 2).uniform(-2.0, 2.0, (100, 2))
    spin = size * np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]])

    def moved(places: np.ndarray) -> np.ndarray:
        return places @ spin.T + (x, y)

    other = signed(plain(shapely.transform(area, moved)), moved(points))
    np.testing.assert_allclose(other / size, signed(plain(area), points), atol=1e-8 + 1e-11 / size)


@given(seed=st.integers(0, 10_000), shift=st.integers(0, 14), cut=st.floats(0.05, 0.95))
@settings(max_examples=30)
def test_how_a_ring_is_written_changes_nothing(seed, shift, cut) -> None:
    """Reversed, started elsewhere, with a vertex more on each edge: the same distances and places along it."""
    area = star(seed, 15)
    assume(area.is_valid)
    points = np.random.default_rng(seed + 3).uniform(-2.0, 2.0, (100, 2))
    ring = shapely.get_coordinates(area)[:-1]
    ring = np.roll(ring, shift, axis=0)[::-1]
    more = np.stack((ring, ring + cut * (np.roll(ring, -1, axis=0) - ring)), axis=1).reshape(-1, 2)
    first = locate(*points.T, boundary=plain(area), reach_m=9.0)
    second = locate(*points.T, boundary=plain(shapely.Polygon(more)), reach_m=9.0)
    np.testing.assert_allclose(second.distance_m, first.distance_m, atol=1e-13)
    length = plain(area).length_m[0]
    along = np.abs(second.position_m - first.position_m)
    same_foot = (
        np.hypot(second.foot_longitude - first.foot_longitude, second.foot_latitude - first.foot_latitude)
        < 1e-9
    )
    assert same_foot.mean() > 0.95  # else two places are equally near
    assert np.all(np.minimum(along, length - along)[same_foot] < 1e-8)


@given(seed=st.integers(0, 10_000), cut=st.floats(-0.9, 0.9))
@settings(max_examples=30)
def test_an_area_split_in_two_parts_is_the_same_area(seed, cut) -> None:
    area = star(seed, 15)
    assume(area.is_valid)
    halves = [area.intersection(shapely.box(-9, -9, cut, 9)), area.intersection(shapely.box(cut, -9, 9, 9))]
    points = np.random.default_rng(seed + 4).uniform(-2.0, 2.0, (100, 2))
    np.testing.assert_allclose(signed(plain(*halves), points), signed(plain(area), points), atol=1e-12)


def test_treating_the_outside_turns_every_sign() -> None:
    points = np.random.default_rng(10).uniform(-2.0, 2.0, (300, 2))
    np.testing.assert_array_equal(signed(plain(star(1)), points, "outside"), -signed(plain(star(1)), points))


@given(seed=st.integers(0, 10_000))
@settings(max_examples=30)
def test_distances_change_no_faster_than_places(seed) -> None:
    area = star(seed, 15)
    assume(area.is_valid)
    rng = np.random.default_rng(seed + 5)
    here = rng.uniform(-2.0, 2.0, (100, 2))
    there = here + rng.normal(scale=0.1, size=here.shape)
    boundary = plain(area)
    change = np.abs(signed(boundary, here) - signed(boundary, there))
    assert np.all(change <= np.linalg.norm(here - there, axis=1) + 1e-12)
    corners = shapely.get_coordinates(area)
    to_corner = np.linalg.norm(here[:, None] - corners[None], axis=2).min(axis=1)
    assert np.all(np.abs(signed(boundary, here)) <= to_corner + 1e-12)


def test_a_unit_on_the_line_has_no_side() -> None:
    located = locate(
        np.array([0.0, 0.5, 0.5, 1.0]),
        np.array([0.5, 1e-10, 1e-8, 1.0]),
        boundary=plain(ZOO["square"]),
        reach_m=5.0,
    )
    assert located.on_line.tolist() == [True, True, False, True]
    assert located.side.tolist() == [0, 0, 1, 0]
    np.testing.assert_array_equal(located.distance_m[[0, 1, 3]], 0.0)


def test_units_without_coordinates_and_beyond_the_reach_are_left_blank() -> None:
    located = locate(
        np.array([np.nan, 0.5, 9.0, 1.5]),
        np.array([0.5, np.nan, 9.0, 0.5]),
        boundary=plain(ZOO["square"]),
        reach_m=1.0,
    )
    assert located.within.tolist() == [False, False, False, True]
    assert located.side.tolist() == [0, 0, -1, -1]  # of an area the side is known however far
    np.testing.assert_array_equal(located.distance_m, [np.nan, np.nan, np.nan, -0.5])
    assert located.part.tolist() == [-1, -1, -1, 0]


def test_many_units_at_one_place_get_one_answer() -> None:
    rng = np.random.default_rng(11)
    villages = rng.uniform(-2.0, 2.0, (40, 2))
    points = villages[rng.integers(0, 40, 5000)]
    one = {tuple(place): value for place, value in zip(villages, signed(plain(star(2)), villages))}
    np.testing.assert_array_equal(signed(plain(star(2)), points), [one[tuple(place)] for place in points])


def test_chunks_give_the_same_as_one_go(monkeypatch) -> None:
    points = np.random.default_rng(12).uniform(-2.0, 2.0, (5000, 2))
    together = signed(plain(star(3)), points)
    monkeypatch.setattr("geo.distance._CHUNK", 700)
    told = []
    apart = locate(
        *points.T, boundary=plain(star(3)), reach_m=1e6, report=lambda done, total: told.append((done, total))
    )
    np.testing.assert_array_equal(apart.distance_m, together)
    assert told == [(min(700 * i, 5000), 5000) for i in range(1, 9)]


def test_threads_never_build_the_index_of_the_area_together(repository) -> None:
    """Two that do break the process, so it is asked in one of its own: with fewer questions beforehand it aborts."""
    code = """
import numpy as np, shapely, geo.distance
from geo.outline import boundary_of_area
geo.distance._CHUNK = 500
turn = np.linspace(0.0, 6.28, 40_000)
circle = np.column_stack((np.cos(turn), np.sin(turn)))
x, y = np.random.default_rng(0).uniform(-0.6, 0.6, (2, 2000))
for size in range(1, 41):
    boundary = boundary_of_area(np.array([shapely.Polygon(size * circle)], dtype=object), crs="plain", gap=0.0)
    located = geo.distance.locate(size * x, size * y, boundary=boundary, reach_m=1e-3)
    assert located.side.min() == 1
"""
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=repository, capture_output=True, text=True, check=False
    )
    assert (done.returncode, done.stderr) == (0, "")


def test_a_stop_is_obeyed() -> None:
    with pytest.raises(Stopped):
        locate(np.zeros(3), np.zeros(3), boundary=plain(ZOO["square"]), reach_m=1.0, should_stop=lambda: True)


@pytest.mark.parametrize(
    ("treated", "reach", "sentence", "remedy"),
    [
        ("left", 1.0, "The boundary is given as an area, so no unit is 'left'.", "Say 'inside' or 'outside'."),
        (
            "inside", 0.0, "The reach is 0.0; how far to look must be a positive number of metres.",
            "Give a reach at least as wide as the widest bandwidth.",
        ),
        (
            "inside", float("inf"), "The reach is inf; how far to look must be a positive number of metres.",
            "Give a reach at least as wide as the widest bandwidth.",
        ),
    ],
)  # fmt: skip
def test_a_question_that_has_no_answer_is_refused(treated, reach, sentence, remedy) -> None:
    with pytest.raises(GeometryError) as caught:
        locate(np.zeros(1), np.zeros(1), boundary=plain(ZOO["square"]), reach_m=reach, treated=treated)
    assert (caught.value.sentence, caught.value.remedy) == (sentence, remedy)
