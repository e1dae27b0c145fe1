from __future__ import annotations

import numpy as np
import pytest
import shapely

from geo.distance import locate
from geo.errors import GeometryError
from geo.outline import boundary_of_area, boundary_of_line
from geo.segments import boundary_points, cut_equal, support


def one(*shapes: shapely.Geometry) -> np.ndarray:
    out = np.empty(len(shapes), dtype=object)
    out[:] = shapes
    return out


def test_a_square_is_cut_in_equal_segments_and_every_unit_falls_in_the_right_one() -> None:
    boundary = boundary_of_area(one(shapely.box(0, 0, 4, 4)), crs="plain")
    segments = cut_equal(boundary, 4, bandwidth_m=0.1)
    assert segments.length_m == (4.0, 4.0, 4.0, 4.0)
    x, y = np.array([2.0, 4.5, 2.0, -0.5, 9.0]), np.array([-0.5, 2.0, 4.5, 2.0, 9.0])
    located = locate(x, y, boundary=boundary, reach_m=1.0)
    assert segments.of(located).tolist() == [0, 1, 2, 3, -1]


def test_segments_go_to_parts_by_length_and_a_crumb_joins_its_neighbour() -> None:
    shapes = one(shapely.box(0, 0, 30, 30), shapely.box(100, 0, 110, 10), shapely.box(111, 0, 112, 1))
    boundary = boundary_of_area(shapes, crs="plain")
    segments = cut_equal(boundary, 8, bandwidth_m=0.5)
    assert [stretch.part for stretch in segments.stretches] == [0] * 6 + [1] * 2 + [2]
    assert segments.number[-1] in (6, 7)
    assert sum(segments.length_m) == pytest.approx(120 + 40 + 4)
    crumb = locate(np.array([111.5]), np.array([1.2]), boundary=boundary, reach_m=1.0)
    assert segments.of(crumb)[0] == segments.number[-1]


def test_a_jagged_line_is_as_long_as_its_simplified_copy() -> None:
    """Teeth of a hundredth of the bandwidth: a straight line to whoever asks at that width."""
    x = np.linspace(0.0, 100.0, 2001)
    y = np.where(np.arange(2001) % 2 == 0, 0.0, 0.3)
    boundary = boundary_of_line(one(shapely.LineString(np.column_stack((x, y)))), crs="plain")
    assert boundary.length_m[0] > 600.0
    segments = cut_equal(boundary, 5, bandwidth_m=30.0)
    np.testing.assert_allclose(segments.length_m, 20.0, rtol=1e-3)
    points = boundary_points(boundary, bandwidth_m=30.0, count=10)
    np.testing.assert_allclose(
        points.longitude, 7.5 + (np.arange(10) + 0.5) * 8.5, atol=0.3
    )  # ends left by 7.5
    np.testing.assert_allclose(points.share_m, 8.5, rtol=1e-3)
    where = locate(points.longitude, points.latitude, boundary=boundary, reach_m=1.0, treated="left")
    assert where.apart_m.max() < 1e-9  # on the true line, not the copy
    np.testing.assert_allclose(where.position_m, points.position_m, atol=1e-6)


def test_points_on_a_ring_need_no_margin() -> None:
    boundary = boundary_of_area(one(shapely.box(0, 0, 4, 4)), crs="plain")
    points = boundary_points(boundary, bandwidth_m=0.5, count=8)
    np.testing.assert_allclose(points.position_m, np.arange(8) * 2.0 + 1.0)
    np.testing.assert_allclose(points.share_m.sum(), 16.0)


def test_points_on_the_earth_are_evenly_spaced_on_the_ground() -> None:
    boundary = boundary_of_area(one(shapely.box(10, 45, 12, 46)), crs="EPSG:4326")
    points = boundary_points(boundary, bandwidth_m=5000.0, count=40)
    assert np.ptp(points.share_m) == 0.0
    assert points.share_m.sum() == pytest.approx(boundary.length_m.sum(), rel=1e-4)
    assert np.ptp(np.diff(points.position_m)) < 250.0


@pytest.mark.parametrize("crs", ["plain", "EPSG:4326"])
def test_support_counts_every_unit_within_the_bandwidth(crs) -> None:
    boundary = boundary_of_area(one(shapely.box(10, 45, 12, 46)), crs=crs)
    rng = np.random.default_rng(40)
    x, y = rng.uniform(9.5, 12.5, 3000), rng.uniform(44.5, 46.5, 3000)
    x[0] = np.nan
    width = 0.2 if crs == "plain" else 20e3
    side = locate(x, y, boundary=boundary, reach_m=width).side
    points = boundary_points(boundary, bandwidth_m=width, count=12)
    treated, comparison = support(points, x, y, side, boundary=boundary, bandwidth_m=width)
    for k in range(12):
        at = points.longitude[k], points.latitude[k]
        if crs == "plain":
            apart = np.hypot(x - at[0], y - at[1])
        else:
            apart = np.asarray(
                boundary.earth.geod.inv(np.full(3000, at[0]), np.full(3000, at[1]), np.nan_to_num(x), y)[2]
            )
            apart[0] = np.nan
        assert treated[k] == np.sum((apart <= width) & (side == 1))
        assert comparison[k] == np.sum((apart <= width) & (side == -1))
    assert treated.min() > 0


def test_a_number_below_one_is_refused() -> None:
    boundary = boundary_of_area(one(shapely.box(0, 0, 4, 4)), crs="plain")
    with pytest.raises(GeometryError) as caught:
        cut_equal(boundary, 0, bandwidth_m=1.0)
    assert caught.value.sentence == "The boundary can't be cut in 0 segments."
    with pytest.raises(GeometryError) as caught:
        boundary_points(boundary, bandwidth_m=1.0, count=0)
    assert caught.value.sentence == "There can't be 0 boundary points."
