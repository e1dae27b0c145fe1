"""Which part of an outline is a real border: against open outlines whose shared edges are known exactly."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st

from geo.boundary import Boundary, Stretch
from geo.distance import locate
from geo.errors import GeometryError
from geo.layers import read_layer
from geo.outline import boundary_of_area
from geo.real_border import border_by_neighbours, border_by_units
from geo.stretches import chosen, joined, length_m, without

GEORGIA = "georgia/G_utm.shp"  # 159 counties, metres, no .prj beside it
STATES = "us_income/us48.shp"


def one(*shapes: shapely.Geometry) -> np.ndarray:
    out = np.empty(len(shapes), dtype=object)
    out[:] = shapes
    return out


def overlap(
    boundary: Boundary, truth: tuple[Stretch, ...], found: tuple[Stretch, ...]
) -> tuple[float, float]:
    """Recall and precision by length."""
    both = length_m(boundary, truth) + length_m(boundary, found) - length_m(boundary, (*truth, *found))
    return both / length_m(boundary, truth), both / length_m(boundary, found)


def units_in(
    area: shapely.Geometry, count: int, seed: int, bounds: tuple[float, ...] | None = None
) -> np.ndarray:
    left, low, right, top = bounds or area.bounds
    shapely.prepare(area)
    places = np.random.default_rng(seed).uniform((left, low), (right, top), (4 * count, 2))
    return places[shapely.contains_xy(area, *places.T)][:count]


@pytest.fixture(scope="module")
def georgia(examples: Path) -> np.ndarray:
    return read_layer(examples / GEORGIA).shapes


@pytest.fixture(scope="module")
def states(examples: Path) -> tuple[np.ndarray, np.ndarray]:
    layer = read_layer(examples / STATES, columns=["STATE_NAME"])
    return layer.shapes, layer.columns["STATE_NAME"]


def eastern(counties: np.ndarray) -> np.ndarray:
    """A quarter of the counties with a coast, an outer border and an inland border."""
    x = shapely.get_x(shapely.centroid(counties))
    return x > np.quantile(x, 0.75)


def test_neighbours_give_exactly_the_shared_edges_of_georgias_counties(georgia) -> None:
    east = eastern(georgia)
    boundary = boundary_of_area(georgia[east], crs="plain", gap=0.0)
    rest = boundary_of_area(georgia[~east], crs="plain", gap=0.0)
    found = border_by_neighbours(boundary, {"rest": rest})
    # The twin: what the two outlines have in common, edge by edge.
    shared = shapely.intersection(
        shapely.union_all(georgia[east]).boundary, shapely.union_all(georgia[~east]).boundary
    ).length
    assert found.kept_m == pytest.approx(shared, rel=1e-5)
    assert found.kept_m + found.dropped_m == pytest.approx(boundary.length_m.sum(), rel=1e-12)
    assert found.to_confirm


def test_pieces_by_neighbour_add_up(georgia) -> None:
    x, y = shapely.get_x(shapely.centroid(georgia)), shapely.get_y(shapely.centroid(georgia))
    block = (np.abs(x - np.median(x)) < 60e3) & (np.abs(y - np.median(y)) < 70e3)
    boundary = boundary_of_area(georgia[block], crs="plain", gap=0.0)
    near = shapely.distance(georgia, shapely.union_all(georgia[block])) == 0.0
    others = {
        str(number): boundary_of_area(one(georgia[number]), crs="plain", gap=0.0)
        for number in np.flatnonzero(near & ~block)
    }
    found = border_by_neighbours(boundary, others)
    apart = sum(length_m(boundary, stretches) for stretches in found.by_neighbour.values())
    assert apart == pytest.approx(found.kept_m, rel=1e-4)
    assert found.kept_m == pytest.approx(boundary.length_m[0], rel=1e-4)  # inland all round
    for name, stretches in found.by_neighbour.items():
        edge = shapely.intersection(
            shapely.union_all(georgia[block]).boundary, georgia[int(name)].boundary
        ).length
        assert length_m(boundary, stretches) == pytest.approx(edge, abs=5.0)


@pytest.mark.parametrize(
    ("count", "recall", "precision"), [(50_000, 0.98, 0.99), (5_000, 0.85, 0.99), (1_000, 0.55, 0.99)]
)
def test_units_find_the_inland_border_of_eastern_georgia(georgia, count, recall, precision) -> None:
    east = eastern(georgia)
    boundary = boundary_of_area(georgia[east], crs="plain", gap=0.0)
    rest = boundary_of_area(georgia[~east], crs="plain", gap=0.0)
    truth = border_by_neighbours(boundary, {"rest": rest}).kept
    places = units_in(shapely.union_all(georgia), count, 31)
    located = locate(*places.T, boundary=boundary, reach_m=20e3)
    found = border_by_units(boundary, located, band_m=20e3)
    got = overlap(boundary, truth, found.kept)
    assert got[0] >= recall
    assert got[1] >= precision


@pytest.mark.parametrize(
    ("treated", "precision"),
    [(["California"], 0.97), (["Georgia", "Florida"], 0.95), (["Kansas"], 1.0 - 1e-9)],
)
def test_units_find_the_land_borders_of_states(states, treated, precision) -> None:
    """Counting the coast in gave an effect of 1.5 where the truth was 0; an inland state keeps its whole ring."""
    shapes, names = states
    mine = np.isin(names, treated)
    boundary = boundary_of_area(shapes[mine], crs="EPSG:4326")
    land = shapely.union_all(shapes)
    touching = shapely.distance(shapes, shapely.union_all(shapes[mine])) < 0.01
    neighbours = {n: boundary_of_area(shapes[names == n], crs="EPSG:4326") for n in names[touching & ~mine]}
    truth = border_by_neighbours(boundary, neighbours)
    frame = (
        boundary.across.min() - 2,
        boundary.up.min() - 2,
        boundary.across.max() + 2,
        boundary.up.max() + 2,
    )
    located = locate(*units_in(land, 20_000, 32, frame).T, boundary=boundary, reach_m=50e3)
    found = border_by_units(boundary, located, band_m=50e3)
    recall, right = overlap(boundary, truth.kept, found.kept)
    assert recall >= 0.99
    assert right >= precision
    if treated == ["Kansas"]:
        assert not found.to_confirm
        assert boundary.keep(found.kept).closed.tolist() == [True]


def test_distances_are_measured_anew_to_what_is_kept(states) -> None:
    shapes, names = states
    boundary = boundary_of_area(shapes[names == "California"], crs="EPSG:4326")
    neighbours = {
        n: boundary_of_area(shapes[names == n], crs="EPSG:4326") for n in ("Oregon", "Nevada", "Arizona")
    }
    kept = boundary.keep(border_by_neighbours(boundary, neighbours).kept)
    los_angeles = np.array([-118.25]), np.array([34.05])
    before = locate(*los_angeles, boundary=boundary, reach_m=1e6)
    after = locate(*los_angeles, boundary=kept, reach_m=1e6)
    assert before.apart_m[0] < 40e3  # the coast
    assert after.apart_m[0] > 250e3  # the nearest other state
    assert after.side[0] == before.side[0] == 1


def test_a_treated_half_island_keeps_only_its_inland_edge() -> None:
    """The west half of a box of land: one straight border of known length, three coasts."""
    boundary = boundary_of_area(one(shapely.box(0, 0, 50, 60)), crs="plain")
    places = units_in(shapely.box(0, 0, 100, 60), 5000, 33)
    located = locate(*places.T, boundary=boundary, reach_m=10.0)
    found = border_by_units(boundary, located, band_m=10.0)
    (stretch,) = found.kept
    assert boundary.parts == 1
    assert stretch.start_m == pytest.approx(50.0, abs=1.0)
    assert stretch.end_m == pytest.approx(110.0, abs=1.0)


def test_a_hole_without_units_drops_out_and_an_enclave_stays() -> None:
    land = shapely.box(0, 0, 90, 90)
    lake, enclave = shapely.box(20, 40, 30, 50), shapely.box(60, 40, 75, 55)
    boundary = boundary_of_area(one(land.difference(lake).difference(enclave)), crs="plain")
    places = units_in(land.difference(lake), 6000, 34)
    found = border_by_units(boundary, locate(*places.T, boundary=boundary, reach_m=5.0), band_m=5.0)
    assert [stretch.part for stretch in found.kept] == [1]
    assert found.kept_m == pytest.approx(60.0)


def test_nothing_to_keep_is_said() -> None:
    boundary = boundary_of_area(one(shapely.box(0, 0, 9, 9)), crs="plain")
    located = locate(np.array([1.0, 2.0]), np.array([1.0, 2.0]), boundary=boundary, reach_m=5.0)
    with pytest.raises(GeometryError) as caught:
        border_by_units(boundary, located, band_m=5.0)
    assert caught.value.sentence == (
        "Nowhere along the boundary are there treated and comparison units within 5 of it."
    )
    with pytest.raises(GeometryError) as caught:
        border_by_units(boundary, located, band_m=9.0)
    assert caught.value.sentence == "Units are known up to 5 from the boundary, but the band is 9 wide."
    far = boundary_of_area(one(shapely.box(20, 20, 30, 30)), crs="plain")
    with pytest.raises(GeometryError) as caught:
        border_by_neighbours(boundary, {"far": far})
    assert caught.value.sentence == "No comparison area comes within 1 of the treated area's outline."


RING = boundary_of_area(one(shapely.box(0, 0, 25, 25)), crs="plain")
SPANS = st.lists(st.tuples(st.integers(0, 100), st.integers(0, 100)), max_size=5)


def metres_in(spans: list[tuple[int, int]]) -> set[int]:
    """Which whole metres of a ring of 100 some spans cover: the obvious twin."""
    covered: set[int] = set()
    for start, end in spans:
        covered |= set(range(start, end)) if end > start else set(range(start, 100)) | set(range(end))
    return covered


@given(keep=SPANS, drop=SPANS, automatic=SPANS)
def test_stretches_add_and_subtract_like_sets_of_metres(keep, drop, automatic) -> None:
    def stretches(spans: list[tuple[int, int]]) -> list[Stretch]:
        return [Stretch(part=0, start_m=float(start), end_m=float(end)) for start, end in spans]

    def back(found: tuple[Stretch, ...]) -> set[int]:
        return metres_in([(round(s.start_m), round(s.end_m)) for s in found])

    assert back(joined(RING, stretches(keep))) == metres_in(keep)
    assert back(without(RING, stretches(keep))) == set(range(100)) - metres_in(keep)
    assert length_m(RING, stretches(keep)) == len(metres_in(keep))
    result = chosen(RING, stretches(automatic), keep=stretches(keep), drop=stretches(drop))
    assert back(result) == (metres_in(automatic) | metres_in(keep)) - metres_in(drop)
