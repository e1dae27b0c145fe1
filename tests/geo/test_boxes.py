from __future__ import annotations

import numpy as np
import pytest
import shapely

from geo import distance
from geo.boxes import boxes
from geo.distance import locate
from geo.outline import boundary_of_area


def one(*shapes: shapely.Geometry) -> np.ndarray:
    out = np.empty(len(shapes), dtype=object)
    out[:] = shapes
    return out


@pytest.mark.parametrize(
    ("crs", "latitude"), [("plain", 0.0), ("EPSG:4326", 0.0), ("EPSG:4326", 55.0), ("EPSG:4326", 84.0)]
)
@pytest.mark.parametrize("reach", [3e3, 2e4, 2e5])
def test_no_place_of_a_box_is_farther_from_its_middle_than_said(crs, latitude, reach) -> None:
    boundary = boundary_of_area(one(shapely.box(0, latitude - 1, 3, latitude + 1)), crs=crs, gap=0.0)
    if crs == "plain":
        reach /= 1e5
    rng = np.random.default_rng(70)
    x, y = rng.uniform(-3, 6, 20_000), rng.uniform(latitude - 4, latitude + 4, 20_000)
    grid = boxes(x, y, reach, boundary)
    if grid is None:  # only where more boxes than places would be needed
        assert reach < 0.5 if crs == "plain" else reach < 5e4
        return
    middle = np.zeros((grid.count, 2))
    middle[grid.occupied] = np.column_stack((grid.across, grid.up))
    middle = middle[grid.number]
    if crs == "plain":
        apart = np.hypot(x - middle[:, 0], y - middle[:, 1])
    else:
        apart = np.asarray(boundary.earth.geod.inv(x, y, middle[:, 0], middle[:, 1])[2])
    assert apart.max() <= grid.radius
    assert 2.0 * grid.radius < reach
    np.testing.assert_array_equal(grid.spread(np.ones(len(grid.occupied), dtype=bool)), True)


@pytest.mark.parametrize("crs", ["plain", "EPSG:4326"])
@pytest.mark.parametrize("reach", [0.05, 0.3, 2.0])
def test_boxes_change_no_answer(monkeypatch, crs, reach) -> None:
    """The twin looks at every unit by itself."""
    rng = np.random.default_rng(71)
    turn = np.sort(rng.random(60)) * 2.0 * np.pi
    radius = rng.uniform(0.3, 1.5, 60)
    star = shapely.Polygon(
        np.column_stack((170.0 + 12 * radius * np.cos(turn), 60.0 + 6 * radius * np.sin(turn)))
    )
    boundary = boundary_of_area(one(star), crs=crs, gap=0.0)
    x, y = rng.uniform(150, 195, 30_000), rng.uniform(48, 72, 30_000)
    if crs != "plain":
        x, reach = np.where(x > 180, x - 360, x), reach * 1e5
    quick = locate(x, y, boundary=boundary, reach_m=reach)
    asked = []
    monkeypatch.setattr(distance, "boxes", lambda *given: asked.append(given))
    slow = locate(x, y, boundary=boundary, reach_m=reach)
    assert asked
    assert 0.0 < slow.within.mean() < 1.0
    for name in ("distance_m", "apart_m", "side", "part", "on_line"):
        np.testing.assert_array_equal(getattr(quick, name), getattr(slow, name), err_msg=name)
    np.testing.assert_allclose(quick.position_m, slow.position_m, rtol=1e-9)
