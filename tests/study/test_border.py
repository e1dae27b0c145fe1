"""A boundary study from its files to an effect: distances, dropped coast, segments, refusals."""

from pathlib import Path

import numpy as np
import pyogrio.raw
import pytest
import shapely
from pyproj import Geod

from study.analysis import Workbench
from study.document import load_study
from study.errors import StudyError

GEOD = Geod(ellps="WGS84")
STUDY = """
[study]
title = "Wells"
masked = false
[data]
path = "homes.csv"
[columns]
outcomes = ["sick"]
longitude = "lon"
latitude = "lat"
[assignment]
rule = "boundary"
treated = "{treated}"
[assignment.area]
path = "zone.gpkg"
reach = 4000.0
segments = {segments}
"""
# A box of about 11 by 22 km in open water; nobody lives west of it, so that its west edge is a coast.
BOX = shapely.box(10.0, 0.0, 10.1, 0.2)


def write(folder: Path, *, treated: str = "inside", segments: int = 1, crs: str | None = "EPSG:4326") -> Path:
    rng = np.random.default_rng(3)
    lon = rng.uniform(10.0, 10.2, 4000)
    lat = rng.uniform(-0.1, 0.3, 4000)
    inside = shapely.contains_xy(BOX, lon, lat)
    sick = 5.0 + 2.0 * inside + 20.0 * (lon - 10.1) + rng.normal(0, 1.0, 4000)
    lines = ["lon,lat,sick"]
    for i in range(4000):
        place = "" if i % 400 == 5 else f"{lon[i]:.7f}"
        lines.append(f"{place},{lat[i]:.7f},{sick[i]:.5f}")
    (folder / "homes.csv").write_text("\n".join(lines) + "\n")
    pyogrio.raw.write(
        folder / "zone.gpkg",
        np.array([shapely.to_wkb(BOX)], dtype=object),
        [],
        [],
        layer="zone",
        geometry_type="Polygon",
        crs=crs,
        driver="GPKG",
    )
    path = folder / "study.toml"
    path.write_text(STUDY.format(treated=treated, segments=segments))
    return path


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> Workbench:
    return Workbench.open(load_study(write(tmp_path_factory.mktemp("wells"))))


def test_distances_are_geodesics_to_the_edge_and_positive_inside(bench: Workbench) -> None:
    border = bench.assigned.border
    assert border is not None
    position = bench.assigned.position
    # Beside the middle of the east edge, a meridian, the nearest place is due west or east of the unit, but for the
    # meridian's bend: brute force over the edge.
    rows = np.flatnonzero((np.abs(border.latitude - 0.1) < 0.05) & (np.abs(position) < 2000))[:40]
    edge = np.linspace(0.0, 0.2, 20_001)
    for row in rows:
        lon, lat = border.longitude[row], border.latitude[row]
        near = edge[np.abs(edge - lat) < 0.002]
        _, _, away = GEOD.inv(
            np.full(len(near), lon), np.full(len(near), lat), np.full(len(near), 10.1), near
        )
        assert abs(position[row]) == pytest.approx(away.min(), abs=0.05)
        assert (position[row] > 0) == (lon < 10.1)


def test_the_coast_is_no_border(bench: Workbench) -> None:
    border = bench.assigned.border
    assert border is not None
    # The west edge is 22.1 km of a 66.3 km outline.
    assert border.real.dropped_m == pytest.approx(22_100, rel=0.1)
    assert any("do not count as border" in note for note in border.notes)
    west = border.longitude < 10.01
    assert not np.any(np.abs(bench.assigned.position[west & (np.abs(border.latitude - 0.1) < 0.05)]) < 4000)


def test_every_row_has_its_place_or_its_reason(bench: Workbench) -> None:
    dropped = dict(bench.assigned.dropped)
    assert dropped["missing coordinates"] == 10
    used = bench.assigned.reason == 0
    assert used.sum() + sum(dropped.values()) == 4000
    assert np.all(np.abs(bench.assigned.position[used]) <= 4000)
    assert np.array_equal(bench.assigned.above[used], bench.assigned.position[used] > 0)


def test_the_effect_along_the_border_is_the_one_that_was_built_in(bench: Workbench) -> None:
    effect = bench.effect("sick")
    assert effect.kind == "boundary"
    assert effect.reading.robust.low < 2.0 < effect.reading.robust.high
    assert abs(effect.reading.estimate - 2.0) < 4 * effect.reading.std_error


def test_outside_treated_turns_the_sign(tmp_path: Path) -> None:
    other = Workbench.open(load_study(write(tmp_path, treated="outside")))
    assert other.reading("sick", 2000.0).estimate < -1.0


def test_segments_stand_where_sites_would_and_hold_every_row_once(tmp_path: Path) -> None:
    here = Workbench.open(load_study(write(tmp_path, segments=3)))
    assert here.sites == ("segment 1", "segment 2", "segment 3")
    kinds = [effect.kind for effect in here.run().effects]
    assert kinds == ["segment"] * 3 + ["boundary"]
    used = here.assigned.reason == 0
    assert here.assigned.site is not None
    assert set(here.assigned.site[used].tolist()) == {0, 1, 2}


@pytest.mark.filterwarnings("ignore:'crs' was not provided")  # that is what this test is about
def test_an_area_without_a_coordinate_system_is_refused_in_words(tmp_path: Path) -> None:
    path = write(tmp_path, crs=None)
    with pytest.raises(StudyError) as problem:
        Workbench.open(load_study(path))
    assert problem.value.status in (2, 3)
    assert "study.toml" in problem.value.what


def test_a_missing_area_file_is_refused_in_words(tmp_path: Path) -> None:
    path = write(tmp_path)
    (tmp_path / "zone.gpkg").unlink()
    with pytest.raises(StudyError) as problem:
        Workbench.open(load_study(path))
    assert "zone.gpkg" in problem.value.what


def test_effects_along_the_border_hold_what_was_built_in(bench: Workbench) -> None:
    (found,) = bench.run().along
    effects = found.effects
    assert effects.known.sum() >= 10
    assert found.by_length is not None
    assert found.by_length.low < 2.0 < found.by_length.high
    assert np.all((effects.band_low[effects.known] < 2.0) & (effects.band_high[effects.known] > 2.0))
    # One point by hand: offsets from it by the geodesic's length and direction, both sides by least squares.
    border = bench.assigned.border
    assert border is not None
    k = int(np.flatnonzero(effects.known)[0])
    lon, lat = found.points.longitude[k], found.points.latitude[k]
    ok = np.isfinite(border.longitude) & (bench.assigned.reason == 0)
    azimuth, _, away = GEOD.inv(
        np.full(ok.sum(), lon), np.full(ok.sum(), lat), border.longitude[ok], border.latitude[ok]
    )
    u = away / effects.bandwidth
    design = np.column_stack(
        (np.ones(len(u)), u * np.sin(np.radians(azimuth)), u * np.cos(np.radians(azimuth)))
    )
    levels = []
    for side in (False, True):
        rows = (u < 1) & (bench.assigned.above[ok] == side)
        root = np.sqrt(1 - u[rows])
        outcome = bench.outcome_values("sick")[ok][rows]
        levels.append(np.linalg.lstsq(design[rows] * root[:, None], outcome * root, rcond=None)[0][0])
    assert effects.estimate[k] == pytest.approx(levels[1] - levels[0], rel=1e-5)
    document = bench.run().to_document()["border"][0]
    assert document["points"][k]["estimate"] == effects.estimate[k]
