"""What is mended, what is noted and what is refused on the way from shapes to a boundary."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from pyproj import CRS

from geo.boundary import Stretch
from geo.distance import locate
from geo.errors import GeometryError
from geo.outline import boundary_of_area, boundary_of_line, refuse_degrees_as_plain
from geo.projection import drawing_plane, earth_of, read_crs, to_degrees


def shapes(*items: shapely.Geometry | None) -> np.ndarray:
    out = np.empty(len(items), dtype=object)
    out[:] = items
    return out


def notes_of(*items: shapely.Geometry, crs: str = "plain", gap: float | None = None) -> dict[str, str]:
    return {note.code: note.sentence for note in boundary_of_area(shapes(*items), crs=crs, gap=gap).notes}


with np.errstate(invalid="ignore"):
    BROKEN = shapely.Polygon([(0, 0), (1, 0), (np.nan, 1), (0, 0)])
BOWTIE = shapely.Polygon([(0, 0), (2, 2), (2, 0), (0, 2)])


def test_a_clean_polygon_needs_no_note() -> None:
    assert notes_of(shapely.box(0, 0, 1, 1)) == {}


def test_a_bowtie_keeps_both_wings_and_says_so() -> None:
    boundary = boundary_of_area(shapes(BOWTIE), crs="plain")
    assert boundary.area.area == pytest.approx(2.0)
    assert [note.code for note in boundary.notes] == ["mended"]
    assert boundary.notes[0].sentence == (
        "The area: 1 polygon crossed or touched themselves (self-intersection) and was mended; "
        "their area changed from 0 to 2."
    )
    assert boundary.notes[0].severity == "check"


def test_overlapping_parts_of_one_multipolygon_count_once() -> None:
    """Unmended, being inside and touching disagree on such a shape."""
    overlapping = shapely.MultiPolygon([shapely.box(0, 0, 2, 2), shapely.box(1, 1, 3, 3)])
    assert not overlapping.is_valid
    boundary = boundary_of_area(shapes(overlapping), crs="plain")
    assert boundary.area.area == pytest.approx(7.0)
    assert boundary.parts == 1
    located = locate(np.array([1.5]), np.array([1.5]), boundary=boundary, reach_m=9.0)
    assert located.distance_m[0] == pytest.approx(np.hypot(0.5, 0.5))


def test_many_cells_become_one_outline_with_stable_numbers() -> None:
    cells = shapes(
        *(shapely.box(i, j, i + 1, j + 1) for i in range(20) for j in range(20) if (i, j) != (10, 10))
    )
    boundary = boundary_of_area(cells, crs="plain")
    assert [note.sentence for note in boundary.notes] == ["The area: 399 polygons dissolved into 1 part."]
    np.testing.assert_allclose(boundary.length_m, [80.0, 4.0])
    other = boundary_of_area(cells[np.random.default_rng(1).permutation(399)], crs="plain")
    np.testing.assert_array_equal(other.across[other.first[:-1]], boundary.across[boundary.first[:-1]])
    assert boundary.part_path(0)[0].tolist() == [0.0, 0.0]
    assert boundary.part_path(1)[0].tolist() == [10.0, 10.0]


def test_slivers_between_jittered_cells_are_closed_and_said() -> None:
    rng = np.random.default_rng(2)
    cells = []
    for i in range(12):
        for j in range(12):
            corners = np.array([(i, j), (i + 1, j), (i + 1, j + 1), (i, j + 1)], dtype=float)
            cells.append(shapely.Polygon(corners + rng.uniform(-2e-5, 2e-5, corners.shape)))
    kept = boundary_of_area(shapes(*cells), crs="plain", gap=0.0)
    closed = boundary_of_area(shapes(*cells), crs="plain")
    assert kept.length_m.sum() > 60.0
    assert closed.parts == 1
    assert closed.length_m.sum() == pytest.approx(48.0, abs=0.01)
    said = {note.code: note for note in closed.notes}
    assert said["gaps"].severity == "check"
    assert said["gaps"].remedy == "Set the gap width to 0 to keep them."
    assert "narrower than 0.00012 units closed" in said["gaps"].sentence


def test_a_real_hole_is_a_boundary_and_an_outline_without_gaps_keeps_its_vertices() -> None:
    ring = shapely.box(0, 0, 9, 9).difference(shapely.box(4, 4, 5, 5))
    boundary = boundary_of_area(shapes(ring), crs="plain")
    assert boundary.notes == ()
    assert sorted(map(tuple, boundary.part_path(1)[:-1])) == [(4, 4), (4, 5), (5, 4), (5, 5)]


def test_rings_run_with_the_area_on_their_left() -> None:
    boundary = boundary_of_area(
        shapes(shapely.box(0, 0, 9, 9).difference(shapely.box(4, 4, 5, 5))), crs="plain"
    )
    assert shapely.is_ccw(shapely.LinearRing(boundary.part_path(0)))
    assert not shapely.is_ccw(shapely.LinearRing(boundary.part_path(1)))


def test_other_shapes_are_left_out_and_counted() -> None:
    mixed = shapely.GeometryCollection([shapely.box(0, 0, 1, 1), shapely.Point(3, 3)])
    said = [note.sentence for note in boundary_of_area(shapes(mixed, shapely.LineString([(0, 0), (9, 9)]), shapely.Polygon()), crs="plain").notes]  # fmt: skip
    assert said == ["The area: 1 empty shape left out.", "The area: 1 point, 1 line left out."]


def test_long_edges_are_said_with_what_is_at_stake() -> None:
    said = notes_of(shapely.box(-109, 37, -102, 41), crs="EPSG:4326")["edges"]
    # The bow of a parallel: R sin φ cos φ Δλ² / 8 at 41 degrees.
    bow = 6378.137 * np.sin(np.radians(41)) * np.cos(np.radians(41)) * np.radians(7.0) ** 2 / 8.0
    assert bow == pytest.approx(5.9, abs=0.05)
    assert said == (
        "Edges are read as straight in longitude and latitude; the longest is 629 km, "
        "and the shortest path would depart from it by up to 5.9 km."
    )
    assert notes_of(shapely.box(0, 50, 0.01, 50.01), crs="EPSG:4326") == {}


def test_an_outline_outside_its_systems_region_is_noted() -> None:
    said = notes_of(shapely.box(2e6, 5e6, 2.1e6, 5.1e6), crs="EPSG:32633")["region"]
    assert said.endswith("WGS 84 / UTM zone 33N is made for 12 to 18 and 0 to 84.")


REFUSED = {
    "no crs": (
        shapes(shapely.box(-81, 30, -80, 31)), None,
        "The area: nothing says which coordinate system the coordinates are in; "
        "they lie between -81 and -80 across and 30 and 31 up.",
    ),
    "unknown crs": (
        shapes(shapely.box(0, 0, 1, 1)), "EPSG:999999",
        "'EPSG:999999' is not a coordinate system that is known here.",
    ),
    "a height": (
        shapes(shapely.box(0, 0, 1, 1)), "EPSG:5773",
        "The coordinate system 'EGM96 height' does not say where on the earth its coordinates are.",
    ),
    "metres called degrees": (
        shapes(shapely.box(400000, 5000000, 400100, 5000100)), "EPSG:4326",
        "The area: coordinates between 400000 and 400100 across and 5000000 and 5000100 up are not degrees of WGS 84.",
    ),
    "degrees called metres": (
        shapes(shapely.box(10, 46, 11, 47)), "EPSG:32632",
        "The area: coordinates between 10 and 11 across and 46 and 47 up look like degrees, "
        "but WGS 84 / UTM zone 32N is in metres.",
    ),
    "swapped axes": (
        shapes(shapely.box(46, 100, 47, 101)), "EPSG:4326",
        "The area: latitudes reach 101, which no latitude can; longitude and latitude seem to be swapped.",
    ),
    "pole in degrees": (
        shapes(shapely.Polygon([(x, 80.0) for x in (-170, -90, 0, 90, 170)])), "EPSG:4326",
        "The area: its outline runs round a pole, where longitudes say nothing about inside and outside.",
    ),
    "a band round the globe": (
        shapes(shapely.box(-180, 60, 180, 70)), "EPSG:4326",
        "The area: it runs round the whole globe from 180 degrees west to 180 degrees east.",
    ),
    "a missing shape": (
        shapes(shapely.box(0, 0, 1, 1), None, None), "plain",
        "The area: 2 of 3 shapes have no geometry, first number 2.",
    ),
    "points": (shapes(shapely.Point(0, 0), shapely.Point(1, 1)), "plain", "The area: there is no polygon in it, but 2 points."),
    "nothing": (shapes(), "plain", "The area: there is no polygon in it, but nothing."),
    "empty": (shapes(shapely.Polygon()), "plain", "The area: there is no polygon in it, but nothing."),
    "no area": (shapes(shapely.Polygon([(0, 0), (1, 1), (2, 2)])), "plain", "The area: its polygons hold no area."),
    "not finite": (
        shapes(shapely.from_wkt("POLYGON ((0 0, 1 0, 1 1, 0 0))"), BROKEN), "plain",
        "The area: shape 2 has a coordinate that is not a finite number.",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", REFUSED)
def test_what_cannot_be_meant_is_refused_in_one_sentence(case) -> None:
    given, crs, sentence = REFUSED[case]
    with pytest.raises(GeometryError) as caught:
        boundary_of_area(given, crs=crs)
    assert caught.value.sentence == sentence
    assert caught.value.remedy


def test_the_poles_are_told_from_a_ring_that_only_jumps() -> None:
    jumping = shapely.Polygon([(170, 60), (-170, 60), (-170, 65), (170, 65)])
    assert boundary_of_area(shapes(jumping), crs="EPSG:4326").parts == 1


@pytest.mark.parametrize(("crs", "why"), [("EPSG:4326", "degrees are not lengths"), ("EPSG:3857", "its metres are not metres on the ground")])  # fmt: skip
def test_degrees_and_web_maps_are_never_plain_units(crs, why) -> None:
    with pytest.raises(GeometryError) as caught:
        refuse_degrees_as_plain(crs, "zone.gpkg")
    name = CRS.from_user_input(crs).name
    assert (
        caught.value.sentence
        == f"zone.gpkg: its coordinates are in {name}, where {why}, so they can't be read as plain units."
    )
    refuse_degrees_as_plain("EPSG:27700", "zone.gpkg")
    refuse_degrees_as_plain(None, "zone.gpkg")


def test_a_web_maps_distances_are_measured_on_the_ground() -> None:
    """At 60 degrees north a web map's metre is half a metre on the ground."""
    mercator = read_crs("EPSG:3857")
    earth = earth_of(mercator)
    east = np.array([0.0, 0.0, 1e5, 1e5])
    north = np.array([8399737.9, 8499737.9, 8499737.9, 8399737.9])
    boundary = boundary_of_area(shapes(shapely.Polygon(np.column_stack((east, north)))), crs="EPSG:3857")
    x, y = to_degrees(np.array([5e4]), np.array([8399737.9 - 1e4]), mercator, earth=earth)
    located = locate(x, y, boundary=boundary, reach_m=5e4)
    assert located.distance_m[0] == pytest.approx(-5005.0, abs=30.0)


def test_coordinates_survive_earth_centred_and_back() -> None:
    earth = earth_of(CRS.from_epsg(4326))
    rng = np.random.default_rng(3)
    x, y = rng.uniform(-180, 180, 1000), rng.uniform(-90, 90, 1000)
    from pyproj import Transformer

    centred = earth.centred(x, y)
    twin = np.column_stack(
        Transformer.from_crs("EPSG:4979", "EPSG:4978", always_xy=True).transform(x, y, np.zeros(1000))
    )
    np.testing.assert_allclose(centred, twin, atol=1e-8)
    back = earth.degrees(centred * (1.0 - 1e-9))  # six millimetres down, as the middle of a chord is
    np.testing.assert_allclose(back, (x, y), atol=1e-9)


def test_the_drawing_plane_keeps_distances_from_its_centre() -> None:
    earth = earth_of(CRS.from_epsg(4326))
    x, y = np.array([10.0, 10.5, 9.0]), np.array([46.0, 46.2, 45.0])
    px, py = drawing_plane(x, y, centre=(10.0, 46.0), earth=earth)
    truth = earth.geod.inv(np.full(3, 10.0), np.full(3, 46.0), x, y)[2]
    np.testing.assert_allclose(np.hypot(px, py), truth, atol=1e-5)


def test_a_polygon_in_another_datum_is_measured_on_its_own_ellipsoid() -> None:
    boundary = boundary_of_area(shapes(shapely.box(-3, 51, -2, 52)), crs="EPSG:4277")
    assert boundary.earth.crs.name == "OSGB36"
    assert boundary.earth.semi_major_m == pytest.approx(6377563.396)


def test_pieces_of_a_line_are_joined_and_drawn_one_way() -> None:
    pieces = shapes(
        shapely.LineString([(0, 0), (5, 0)]),
        shapely.LineString([(6, 0), (5, 0)]),
        shapely.LineString([(6, 0), (9, 0)]),
    )
    boundary = boundary_of_line(pieces, crs="plain")
    assert boundary.part_path(0).tolist() == [[0, 0], [5, 0], [6, 0], [9, 0]]
    assert [note.code for note in boundary.notes] == ["direction"]
    tidy = boundary_of_line(
        shapes(*shapely.get_parts(pieces[[0, 2]]), shapely.LineString([(5, 0), (6, 0)])), crs="plain"
    )
    assert tidy.notes == ()
    assert tidy.parts == 1


def test_keeping_stretches_leaves_open_parts_and_the_same_inside() -> None:
    boundary = boundary_of_area(shapes(shapely.box(0, 0, 4, 4)), crs="plain")
    kept = boundary.keep([Stretch(part=0, start_m=13.0, end_m=3.0), Stretch(part=0, start_m=5.0, end_m=7.0)])
    np.testing.assert_allclose(kept.length_m, [6.0, 2.0])
    assert kept.part_path(0).tolist() == [[0, 3], [0, 0], [3, 0]]
    assert kept.part_path(1).tolist() == [[4, 1], [4, 3]]
    located = locate(np.array([2.0, 2.0, 4.5]), np.array([3.5, -1.0, 3.5]), boundary=kept, reach_m=9.0)
    np.testing.assert_allclose(located.distance_m, [np.hypot(2.0, 0.5), -1.0, -np.hypot(0.5, 0.5)])
    assert located.loose_end.tolist() == [True, False, True]
    again = kept.keep([Stretch(part=0, start_m=1.0, end_m=2.0)])
    assert again.sources == (Stretch(part=0, start_m=14.0, end_m=15.0),)
    (over,) = kept.keep([Stretch(part=0, start_m=2.0, end_m=5.0)]).sources
    assert (over.start_m, over.end_m) == pytest.approx((15.0, 2.0))  # over the ring's start
    whole = boundary.keep(boundary.whole())
    assert whole.closed.tolist() == [True]


@pytest.mark.parametrize(
    ("stretches", "sentence"),
    [
        ([], "No stretch of the boundary is kept."),
        (
            [Stretch(part=0, start_m=0.0, end_m=99.0)],
            "The boundary has no stretch from 0 to 99 on part 0, which is 16 long.",
        ),
        ([Stretch(part=3, start_m=0.0, end_m=1.0)], "The boundary has no stretch from 0 to 1 on part 3; its parts are 0 to 0."),
    ],
)  # fmt: skip
def test_a_stretch_that_is_not_there_is_refused(stretches, sentence) -> None:
    boundary = boundary_of_area(shapes(shapely.box(0, 0, 4, 4)), crs="plain")
    with pytest.raises(GeometryError) as caught:
        boundary.keep(stretches)
    assert caught.value.sentence == sentence
