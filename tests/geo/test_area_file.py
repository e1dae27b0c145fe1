from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import shapely

from geo.area_file import boundary_from_file
from geo.distance import locate
from geo.errors import GeometryError


def write(path: Path, shape: shapely.Geometry, crs: str | None) -> Path:
    import geopandas

    geopandas.GeoSeries([shape], crs=crs).to_file(path)
    return path


BOX = shapely.box(-81, 32, -80, 33)


def test_the_file_says_what_its_coordinates_are(tmp_path) -> None:
    path = write(tmp_path / "zone.gpkg", BOX, "EPSG:4326")
    for stated in (None, "", "EPSG:4326", "OGC:CRS84"):
        assert boundary_from_file(path, crs=stated).earth.crs.name.startswith("WGS 84")


@pytest.mark.parametrize(
    ("own", "stated", "sentence"),
    [
        ("EPSG:4326", "EPSG:4269", "zone.shp: its coordinates are in WGS 84 by the file, but in NAD83 by the study."),
        ("EPSG:4326", "plain", "zone.shp: its coordinates are in WGS 84, where degrees are not lengths, so they can't be read as plain units."),
        (None, None, "zone.shp: nothing says which coordinate system the coordinates are in; they lie between -81 and -80 across and 32 and 33 up."),
        ("EPSG:4326", "EPSG:1", "'EPSG:1' is not a coordinate system that is known here."),
    ],
)  # fmt: skip
@pytest.mark.filterwarnings("ignore::UserWarning")  # the writer warns of a file without a system
def test_the_person_and_the_file_must_agree(tmp_path, own, stated, sentence) -> None:
    with pytest.raises(GeometryError) as caught:
        boundary_from_file(write(tmp_path / "zone.shp", BOX, own), crs=stated)
    assert caught.value.sentence == sentence


def test_a_line_and_its_edges(tmp_path) -> None:
    """The shortest path between two places at 49 north bows polewards of the parallel between them."""
    path = write(tmp_path / "line.fgb", shapely.LineString([(-110, 49), (-100, 49)]), "EPSG:4326")
    between = np.array([-105.0]), np.array([49.05])
    straight = boundary_from_file(path, line=True)
    bowed = boundary_from_file(path, line=True, edges="geodesic")
    assert locate(*between, boundary=straight, reach_m=1e5, treated="left").distance_m[0] == pytest.approx(
        5561, abs=5
    )
    # The bow of ten degrees: R sin φ cos φ Δλ² / 8 = 12.0 km, of which 5.6 are the place's own.
    assert locate(*between, boundary=bowed, reach_m=1e5, treated="left").distance_m[0] == pytest.approx(
        -6440, abs=80
    )
