"""Distances on the ellipsoid: golden-section search, published geodesics, exact lines, the antimeridian and a pole."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from pyproj import CRS, Geod, Transformer

from geo.boundary import Boundary
from geo.distance import Located, locate
from geo.outline import boundary_of_area, boundary_of_line
from geo.units import units_in_degrees

WGS84 = Geod(ellps="WGS84")


def area(*shapes: shapely.Geometry, crs: str = "EPSG:4326", edges: str = "straight") -> Boundary:
    return boundary_of_area(np.array(shapes, dtype=object), crs=crs, edges=edges)


def line(*places: tuple[float, float], crs: str = "EPSG:4326", edges: str = "straight") -> Boundary:
    return boundary_of_line(np.array([shapely.LineString(places)], dtype=object), crs=crs, edges=edges)


def around(
    centre: tuple[float, float], metres: float, count: int, seed: int
) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    x, y, _ = WGS84.fwd(
        np.full(count, centre[0]), np.full(count, centre[1]), rng.uniform(0, 360, count), metres * np.sqrt(rng.random(count))
    )  # fmt: skip
    return x, y


@pytest.mark.parametrize("latitude", [0.0, 45.0, -65.0])
@pytest.mark.parametrize(("size", "within"), [(0.1, 20e3), (1.0, 150e3), (4.0, 500e3)])
def test_golden_section_on_geodesic_edges(golden, latitude, size, within) -> None:
    """Chords of 500 m stand for geodesics to micrometres, so the engine must agree to the search's own accuracy."""
    rng = np.random.default_rng(20)
    turn = np.linspace(0.0, 2.0 * np.pi, 9, endpoint=False)
    radius = size * rng.uniform(0.4, 1.0, 9)
    ring = np.column_stack((10.0 + 1.5 * radius * np.cos(turn), latitude + radius * np.sin(turn)))
    ring = np.concatenate((ring, ring[:1]))
    x, y = around((10.0, latitude), within, 60, 21)
    got = locate(x, y, boundary=area(shapely.Polygon(ring), edges="geodesic"), reach_m=1e7).apart_m
    truth = golden(x, y, ring, WGS84, straight=False)
    np.testing.assert_allclose(got, truth, rtol=1e-7, atol=1e-4)


@pytest.mark.parametrize(("latitude", "slack"), [(5.0, 1e-3), (46.0, 8e-3), (60.0, 1.5e-2)])
def test_golden_section_on_edges_straight_in_degrees(golden, latitude, slack) -> None:
    """A seven by four degree box: read in a projection instead, 17 % of units near it changed sides."""
    box = shapely.box(-109.0, latitude - 2.0, -102.0, latitude + 2.0)
    rng = np.random.default_rng(22)
    x, y = rng.uniform(-109.4, -101.6, 150), rng.uniform(latitude - 2.3, latitude + 2.3, 150)
    located = locate(x, y, boundary=area(box), reach_m=1e7)
    truth = golden(x, y, shapely.get_coordinates(box), WGS84, straight=True, grid=1500)
    np.testing.assert_allclose(located.apart_m, truth, rtol=1e-7, atol=slack)
    inside = (np.abs(x + 105.5) < 3.5) & (np.abs(y - latitude) < 2.0)
    np.testing.assert_array_equal(located.side > 0, inside)
    _, _, to_foot = WGS84.inv(x, y, located.foot_longitude, located.foot_latitude)
    np.testing.assert_allclose(to_foot, located.apart_m, rtol=1e-12, atol=1e-8)


def test_edges_of_a_projected_layer_are_straight_in_it() -> None:
    """A parallel cut every metre in its own projection is what a straight edge there must be measured as."""
    crs = CRS.from_epsg(3035)
    corners = [(4.0e6, 2.6e6), (4.6e6, 2.6e6), (4.6e6, 3.1e6), (4.0e6, 3.1e6)]
    boundary = area(shapely.Polygon(corners), crs="EPSG:3035")
    back = Transformer.from_crs(crs, boundary.earth.crs, always_xy=True)
    rng = np.random.default_rng(23)
    px, py = rng.uniform(4.05e6, 4.55e6, 40), 2.6e6 + rng.uniform(-20e3, 20e3, 40)
    x, y = back.transform(px, py)
    got = locate(x, y, boundary=boundary, reach_m=1e5)
    edge = back.transform(np.linspace(4.0e6, 4.6e6, 600_001), np.full(600_001, 2.6e6))
    for here in range(40):
        near = np.abs(np.linspace(4.0e6, 4.6e6, 600_001) - px[here]) < 15e3
        count = int(near.sum())
        _, _, apart = Geod(ellps="GRS80").inv(
            np.full(count, x[here]), np.full(count, y[here]), edge[0][near], edge[1][near]
        )
        assert abs(np.min(apart) - got.apart_m[here]) < 0.01
    np.testing.assert_array_equal(got.side, np.where(py > 2.6e6, 1, -1))


@pytest.mark.published
def test_flinders_peak_to_buninyong() -> None:
    """54,972.271 m on GRS80: Geocentric Datum of Australia Technical Manual (from memory)."""

    def degrees(d: int, m: int, s: float) -> float:
        return d + m / 60.0 + s / 3600.0

    flinders = degrees(144, 25, 29.52440), -degrees(37, 57, 3.72030)
    buninyong = degrees(143, 55, 35.38390), -degrees(37, 39, 10.15610)
    beyond = 2 * buninyong[0] - flinders[0], 2 * buninyong[1] - flinders[1]
    boundary = line(buninyong, beyond, crs="EPSG:7844")
    located = locate(
        np.array(flinders[:1]), np.array(flinders[1:]), boundary=boundary, reach_m=1e5, treated="left"
    )
    assert located.apart_m[0] == pytest.approx(54_972.271, abs=6e-4)
    assert located.loose_end[0]


@pytest.mark.published
def test_ten_thousand_kilometres_from_forty_north() -> None:
    """Latitude 40, azimuth 30, 10,000 km: Karney (2013) table 2, doi:10.1007/s00190-012-0578-z (from memory)."""
    end = 137.84490004377, 41.79331020506
    beyond = WGS84.fwd(*end, 149.09016931807, 1000.0)[:2]
    located = locate(
        np.array([0.0]), np.array([40.0]), boundary=line(end, beyond), reach_m=1.2e7, treated="left"
    )
    assert located.apart_m[0] == pytest.approx(10_000_000.0, abs=1e-3)


@pytest.mark.published
def test_a_quarter_meridian_and_a_degree_of_the_equator() -> None:
    """10,001,965.729 m from pole to equator on WGS84 (from memory); a degree of equator is a·π/180."""
    equator = line((0.0, 0.0), (1.0, 0.0))
    pole = locate(np.array([0.5]), np.array([90.0]), boundary=equator, reach_m=1.1e7, treated="left")
    assert pole.apart_m[0] == pytest.approx(10_001_965.729, abs=1e-3)
    assert equator.length_m[0] == pytest.approx(6_378_137.0 * np.pi / 180.0, rel=1e-12)


def test_the_equator_is_a_meridian_arc_away() -> None:
    equator = line((-5.0, 0.0), (5.0, 0.0))
    latitude = np.linspace(-3.0, 3.0, 41)
    longitude = np.linspace(-4.0, 4.0, 41)
    got = locate(longitude, latitude, boundary=equator, reach_m=1e6, treated="left")
    arc = np.array([WGS84.inv(0.0, 0.0, 0.0, value)[2] for value in latitude]) * np.sign(latitude)
    np.testing.assert_allclose(got.distance_m, arc, rtol=1e-10, atol=1e-6)
    # Feet stand on chords of 500 m: along the line they are off by up to 250 m · (1 - cos 3°).
    np.testing.assert_allclose(got.foot_longitude, longitude, atol=4e-6)


def test_a_parallel_near_the_pole_keeps_within_its_cut() -> None:
    cap = line(*[(x, 85.0) for x in np.linspace(-60.0, 60.0, 5)])
    latitude, longitude = np.linspace(84.5, 85.5, 21), np.linspace(-50.0, 50.0, 21)
    got = locate(longitude, latitude, boundary=cap, reach_m=1e5, treated="left").distance_m
    arc = np.array([WGS84.inv(0.0, 85.0, 0.0, value)[2] for value in latitude]) * np.sign(latitude - 85.0)
    np.testing.assert_allclose(got, arc, atol=0.06)


def test_a_sphere_gives_the_textbook_distance() -> None:
    """Distance to a meridian on a sphere is R·asin(cos φ · sin Δλ)."""
    crs = CRS.from_dict({"proj": "longlat", "R": 6371008.7714})
    meridian = boundary_of_line(np.array([shapely.LineString([(0, -60), (0, 60)])], dtype=object), crs=crs)
    x, y = np.array([0.5, -1.0, 3.0, 0.01]), np.array([10.0, -40.0, 50.0, 0.0])
    got = locate(x, y, boundary=meridian, reach_m=1e6, treated="right").distance_m
    expected = 6371008.7714 * np.arcsin(np.cos(np.radians(y)) * np.sin(np.radians(x)))
    np.testing.assert_allclose(got, expected, rtol=1e-9)


def box_at_180(form: str) -> list[shapely.Geometry]:
    if form == "beyond 180":
        return [shapely.box(178, -18, 182, -16)]
    if form == "before -180":
        return [shapely.box(-182, -18, -178, -16)]
    if form == "one ring that jumps":
        return [shapely.Polygon([(178, -18), (-178, -18), (-178, -16), (178, -16)])]
    return [shapely.MultiPolygon([shapely.box(178, -18, 180, -16), shapely.box(-180, -18, -178, -16)])]


@pytest.mark.parametrize("form", ["beyond 180", "before -180", "one ring that jumps", "cut in two"])
@pytest.mark.parametrize("wrapped", [True, False])
def test_the_antimeridian_in_four_forms(form, wrapped) -> None:
    """The same box about longitude 0 is the twin: rotating all longitudes changes nothing."""
    rng = np.random.default_rng(24)
    x, y = rng.uniform(-3.0, 3.0, 2000), rng.uniform(-19.0, -15.0, 2000)
    twin = locate(x, y, boundary=area(shapely.box(-2, -18, 2, -16)), reach_m=3e5)
    there = x + 180.0
    if wrapped:
        there = np.where(there > 180.0, there - 360.0, there)
    boundary = area(*box_at_180(form))
    assert boundary.parts == 1
    got = locate(there, y, boundary=boundary, reach_m=3e5)
    # The seam leaves a vertex, and with it other cuts of that edge: chords differ by the bow of 500 m.
    slack = 2e-3 if form == "cut in two" else 2e-6
    np.testing.assert_allclose(got.distance_m, twin.distance_m, rtol=0.0, atol=slack)
    np.testing.assert_allclose(got.position_m, twin.position_m, atol=2.5 if form == "cut in two" else 2e-3)
    turned = (got.foot_longitude - twin.foot_longitude - 180.0) / 360.0
    np.testing.assert_allclose(turned, np.round(turned), atol=1e-7)
    said = [note.code for note in boundary.notes]
    assert ("antimeridian" in said) == (form in ("one ring that jumps", "cut in two"))


def test_a_hole_across_the_antimeridian_stays_a_hole() -> None:
    shell = [(170, -20), (-170, -20), (-170, -10), (170, -10)]
    hole = [(178, -16), (-178, -16), (-178, -14), (178, -14)]
    boundary = area(shapely.Polygon(shell, [hole]))
    located = locate(
        np.array([180.0, -180.0, 175.0, -175.0, 160.0]), np.full(5, -15.0), boundary=boundary, reach_m=1e6
    )
    assert located.side.tolist() == [-1, -1, 1, 1, -1]
    assert boundary.parts == 2


def test_an_area_round_the_pole_in_a_polar_projection(golden) -> None:
    """A square of 2,000 km about the north pole: inside and outside are told in its own projection."""
    square = shapely.box(-1e6, -1e6, 1e6, 1e6)
    boundary = area(square, crs="EPSG:3413")
    back = Transformer.from_crs("EPSG:3413", "EPSG:4326", always_xy=True)
    rng = np.random.default_rng(25)
    px, py = rng.uniform(-1.3e6, 1.3e6, (2, 300))
    px[0] = py[0] = 0.0
    x, y = back.transform(px, py)
    got = locate(x, y, boundary=boundary, reach_m=2e6)
    np.testing.assert_array_equal(got.side > 0, np.maximum(np.abs(px), np.abs(py)) < 1e6)
    ring = np.linspace(-1e6, 1e6, 4001)
    edge = np.full(4001, 1e6)
    sides = [(ring, edge), (ring, -edge), (edge, ring), (-edge, ring)]
    all_x, all_y = back.transform(*(np.concatenate(v) for v in zip(*sides)))
    for here in range(0, 300, 10):
        _, _, apart = WGS84.inv(np.full(16004, x[here]), np.full(16004, y[here]), all_x, all_y)
        assert -0.01 < np.min(apart) - got.apart_m[here] < 0.5 + 250.0**2 / max(got.apart_m[here], 250.0)
    longest = boundary.length_m[0]
    stretch = boundary.stretch_path(boundary.whole()[0])[1]
    assert stretch[-1] == pytest.approx(longest)


def same(first: Located, second: Located) -> None:
    np.testing.assert_allclose(first.distance_m, second.distance_m, rtol=1e-9, atol=1e-4)


def test_units_and_area_each_in_their_own_system() -> None:
    boundary = area(shapely.box(-81.5, 32.0, -80.5, 33.0))
    rng = np.random.default_rng(26)
    x, y = rng.uniform(-82, -80, 300), rng.uniform(31.5, 33.5, 300)
    east, north = Transformer.from_crs("EPSG:4326", "EPSG:32617", always_xy=True).transform(x, y)
    lon, lat, notes = units_in_degrees(east, north, "EPSG:32617", boundary=boundary, reach_m=5e4)
    assert notes == ()
    same(locate(lon, lat, boundary=boundary, reach_m=5e4), locate(x, y, boundary=boundary, reach_m=5e4))


def test_loose_ends_of_a_drawn_line_have_no_side() -> None:
    boundary = line((0.0, 50.0), (1.0, 50.0), (1.0, 51.0))
    x, y = np.array([0.5, 0.5, -0.5, 1.2, 1.0, 1.5]), np.array([50.1, 49.9, 50.0, 50.5, 51.2, 49.9])
    located = locate(x, y, boundary=boundary, reach_m=2e5, treated="left")
    assert located.side.tolist() == [1, -1, 0, -1, 0, -1]
    assert located.loose_end.tolist() == [False, False, True, False, True, False]
    np.testing.assert_array_equal(np.isnan(located.distance_m), [False, False, True, False, True, False])
    assert np.all(np.isfinite(located.apart_m))


@pytest.mark.parametrize("crs", ["plain", "EPSG:4326"])
def test_sides_of_a_jagged_line_equal_those_of_the_polygon_it_closes(crs) -> None:
    """The pseudo-normal at shared vertices: a line across a box must part it as the polygon below it does."""
    rng = np.random.default_rng(27)
    x = np.linspace(0.0, 10.0, 200)
    y = 45.0 + rng.normal(scale=0.4, size=200)
    places = list(zip(x, y))
    boundary = line(*places, crs=crs)
    below = shapely.Polygon([*places, (10.0, 40.0), (0.0, 40.0)])
    px, py = rng.uniform(0.5, 9.5, 4000), rng.uniform(43.0, 47.0, 4000)
    located = locate(px, py, boundary=boundary, reach_m=1e7, treated="right")
    known = (located.side != 0) & ~located.loose_end
    assert known.mean() > 0.99
    np.testing.assert_array_equal(located.side[known] > 0, shapely.contains_xy(below, px[known], py[known]))
