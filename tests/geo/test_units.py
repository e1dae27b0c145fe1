from __future__ import annotations

import numpy as np
import pytest
import shapely

from geo.distance import locate
from geo.errors import GeometryError
from geo.outline import boundary_of_area, boundary_of_line
from geo.units import crowded_note, place_notes, treated_side, units_in_degrees


def one(*shapes: shapely.Geometry) -> np.ndarray:
    out = np.empty(len(shapes), dtype=object)
    out[:] = shapes
    return out


EARTH = boundary_of_area(one(shapely.box(-81, 32, -80, 33)), crs="EPSG:4326")
PLAIN = boundary_of_area(one(shapely.box(0, 0, 10, 4)), crs="plain")
RNG = np.random.default_rng(50)
X, Y = RNG.uniform(-81.5, -79.5, 500), RNG.uniform(31.5, 33.5, 500)


@pytest.mark.parametrize(
    ("x", "y", "crs", "boundary", "sentence"),
    [
        (Y, X, "EPSG:4326", EARTH, "The units: longitude and latitude seem to be swapped: 0% of them lie near the boundary as given, SHARE the other way round."),
        (X, Y, None, EARTH, f"The units: nothing says which coordinate system the coordinates are in; they lie between {X.min():.7g} and {X.max():.7g} across and {Y.min():.7g} and {Y.max():.7g} up."),
        (X, Y, "plain", EARTH, "The units are in plain units, the boundary is on the earth."),
        (X, Y, "EPSG:4326", PLAIN, "The units are on the earth, the boundary is in plain units."),
        (X + 90, Y, "EPSG:4326", EARTH, f"The units: none comes near the boundary; they lie between {X.min() + 90:.7g} and {X.max() + 90:.7g} across and {Y.min():.7g} and {Y.max():.7g} up, the boundary between -81 and -80 and 32 and 33."),
        (X * np.nan, Y, "EPSG:4326", EARTH, "The units: none has coordinates."),
        (X * 1e4, Y * 1e5, "EPSG:4326", EARTH, None),
    ],
)  # fmt: skip
def test_units_that_cannot_belong_to_the_boundary_are_refused(x, y, crs, boundary, sentence) -> None:
    with pytest.raises(GeometryError) as caught:
        units_in_degrees(x, y, crs, boundary=boundary, reach_m=2e4)
    if sentence is None:
        assert "are not degrees of WGS 84" in caught.value.sentence
    else:
        inside = np.mean(
            (np.abs(X + 80.5) < 0.5 + 0.2146) & (np.abs(Y - 32.5) < 0.5 + 0.1815)
        )  # 20 km at 33 degrees
        assert caught.value.sentence == sentence.replace("SHARE", f"{inside:.0%}")


def test_unknown_coordinates_stay_unknown() -> None:
    x = X.copy()
    x[3] = np.nan
    longitude, latitude, notes = units_in_degrees(x, Y, "EPSG:4326", boundary=EARTH, reach_m=2e4)
    assert np.flatnonzero(np.isnan(longitude)).tolist() == np.flatnonzero(np.isnan(latitude)).tolist() == [3]
    assert notes == ()


def test_another_datum_is_a_warning_with_its_metres() -> None:
    _, _, notes = units_in_degrees(X, Y, "EPSG:4267", boundary=EARTH, reach_m=2e4)
    (note,) = notes
    assert note.severity == "warning"
    assert note.sentence.startswith("Units are on NAD27, the boundary on WGS 84: the shift between them is ")


def test_units_on_the_line_are_counted() -> None:
    x = np.array([0.0, 5.0, 5.0, 5.0] + [5.0] * 96)
    y = np.array([2.0, 1.0, -1.0, 0.5] + [0.25] * 96)
    located = locate(x, y, boundary=PLAIN, reach_m=3.0)
    (note,) = place_notes(located)
    assert note.sentence == "1 unit (1.00% of those within reach) on the line, without a side."
    assert note.severity == "warning"
    (crowd,) = crowded_note(x, y, located)
    assert crowd.sentence == "One place holds 96 of 100 units within reach; there are 5 different places."


def test_units_recorded_on_the_other_side_are_cross_tabled() -> None:
    x, y = np.full(10, 5.0), np.array([0.5, 0.6, 0.7, 0.8, 0.9, -0.5, -0.6, -0.7, -0.8, -2.0])
    located = locate(x, y, boundary=PLAIN, reach_m=3.0)
    recorded = y > 0
    recorded[[0, 5, 9]] = [False, True, True]
    (note,) = place_notes(located, treated=recorded)
    assert note.sentence == (
        "3 units (30.00%) stand on one side and are recorded on the other: 2 treated on the comparison side, "
        "1 untreated on the treated side; half of them within 0.5 of the line, the farthest 2."
    )


def test_the_treated_side_of_a_line_is_told_by_records() -> None:
    line = boundary_of_line(one(shapely.LineString([(0, 0), (100, 0)])), crs="plain")
    rng = np.random.default_rng(51)
    x, y = rng.uniform(5, 95, 1000), rng.uniform(-4, 4, 1000)
    located = locate(x, y, boundary=line, reach_m=5.0, treated="left")
    assert treated_side(located, y > 0) == "left"
    assert treated_side(located, y < 0) == "right"
    with pytest.raises(GeometryError) as caught:
        treated_side(located, np.where(np.arange(1000) % 5 == 0, y < 0, y > 0))
    assert caught.value.sentence == (
        "Of the units within reach 80% agree on which side of the line is treated; 95% are needed to tell."
    )
