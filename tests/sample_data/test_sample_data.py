"""The invented studies: the script makes these files again, and its truths are those of its draws.

The truths are checked on draws hundreds of times larger than the files, with plain weighted least squares of
statsmodels beside the line, to within four standard errors.
"""

from __future__ import annotations

import csv
import importlib.util
import sys
import tomllib
from pathlib import Path
from types import ModuleType

import duckdb
import numpy as np
import pyogrio
import pytest
import shapely
import statsmodels.api as sm

NAMES = ("hulls", "valleys", "wells")


@pytest.fixture(scope="module")
def make(sample_data: Path) -> ModuleType:
    spec = importlib.util.spec_from_file_location("sample_data_make", sample_data / "make.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # dataclasses look their module up by name
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def made(make: ModuleType, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("made")
    make.make(folder)
    return folder


def jump(position, outcome, width, weight=None):
    """Jump at zero and its standard error: triangular weights, a straight line on each side, HC1."""
    used = np.isfinite(position) & np.isfinite(outcome) & (np.abs(position) < width)
    x, y = position[used], np.asarray(outcome, dtype=float)[used]
    k = (1 - np.abs(x) / width) * (1 if weight is None else weight[used])
    right = (x >= 0).astype(float)
    fit = sm.WLS(y, np.column_stack([np.ones_like(x), right, x, right * x]), weights=k).fit(cov_type="HC1")
    return fit.params[1], fit.bse[1]


def test_the_script_makes_these_values(made: Path, sample_data: Path) -> None:
    for table in ("valleys/farms.csv", "wells/homes.csv"):
        with (made / table).open(newline="") as new, (sample_data / table).open(newline="") as kept:
            assert list(csv.reader(new)) == list(csv.reader(kept))
    new, kept = (duckdb.sql(f"FROM '{f / 'hulls' / 'boats.parquet'}'") for f in (made, sample_data))
    assert new.description == kept.description
    assert new.fetchall() == kept.fetchall()
    new_zone, kept_zone = (
        pyogrio.raw.read(f / "wells" / "zone.gpkg", layer="zone") for f in (made, sample_data)
    )
    assert new_zone[0]["crs"] == kept_zone[0]["crs"] == "EPSG:4326"
    assert shapely.equals_exact(shapely.from_wkb(new_zone[2][0]), shapely.from_wkb(kept_zone[2][0]), 1e-9)


def test_the_files_are_small(sample_data: Path) -> None:
    sizes = [path.stat().st_size for path in sample_data.rglob("*") if path.is_file()]
    assert max(sizes) <= 1_500_000
    assert sum(sizes) < 3_000_000


@pytest.mark.parametrize("name", NAMES)
def test_the_study_file_names_what_is_there(sample_data: Path, name: str) -> None:
    folder = sample_data / name
    study = tomllib.loads((folder / "study.toml").read_text(encoding="utf-8"))
    table = duckdb.sql(f"FROM '{folder / study['data']['path']}'")
    named = [
        v for value in study["columns"].values() for v in (value if isinstance(value, list) else [value])
    ]
    assert set(named) <= set(table.columns)
    assert study["study"]["masked"] is False


def test_the_lines_of_the_study_files_are_those_of_the_script(make: ModuleType, sample_data: Path) -> None:
    hulls, valleys = (tomllib.loads((sample_data / n / "study.toml").read_text("utf-8")) for n in NAMES[:2])
    assert hulls["assignment"]["cutoff"] == make.HULL_CUTOFF
    assert valleys["assignment"]["sites"] == {v.name: v.cutoff for v in make.VALLEYS}


@pytest.mark.parametrize("name", NAMES)
def test_the_flaws_are_there(make: ModuleType, name: str) -> None:
    """A missing outcome, a missing place on the score or map, and many units at one value of it."""
    table = make.draw_study(name)
    place, outcome = {
        "hulls": ("hull_wear", "days_at_sea"),
        "valleys": ("shortage", "ewes_kept"),
        "wells": ("longitude", "sick_days"),
    }[name]
    assert 0.005 < np.isnan(table[place]).mean() < 0.03
    assert 0.03 < np.isnan(table[outcome]).mean() < 0.10
    values, counts = np.unique(table[place][np.isfinite(table[place])], return_counts=True)
    assert counts.max() > 4 * np.median(counts)
    assert len(values) > 50


def test_hulls_jump_by_the_truth(make: ModuleType) -> None:
    boats = make.draw_hulls(np.random.default_rng(901), 1_500_000)
    position = boats["hull_wear"] - make.HULL_CUTOFF
    truth = {
        "days_at_sea": make.HULL_DAYS,
        "rescue_call": make.HULL_RESCUE,
        "crew": make.HULL_CREW,
        "grant": make.HULL_TAKE_UP[1] - make.HULL_TAKE_UP[0],
        "length_m": 0.0,
        "built": 0.0,
        "days_before": 0.0,
    }
    for column, value in truth.items():
        found, error = jump(position, boats[column], 4.0)
        assert abs(found - value) < 4 * error, column
    # And the bend is real: a line over the whole scale gets even the sign wrong.
    assert jump(position, boats["days_at_sea"], 40.0)[0] < 0


def test_valleys_jump_by_their_truths(make: ModuleType) -> None:
    farms = make.draw_valleys(np.random.default_rng(902), 150)
    for valley in make.VALLEYS:
        here = farms["valley"] == valley.name
        position = farms["shortage"][here] - valley.cutoff
        truth = {
            "ewes_kept": valley.ewes_kept,
            "debt_letter": valley.debt_letter,
            "hay_loan": valley.take_up[1] - valley.take_up[0],
            "flock_before": 0.0,
        }
        for column, value in truth.items():
            found, error = jump(position, farms[column][here], 5.0, farms["sampling_weight"][here])
            assert abs(found - value) < 4 * error, (valley.name, column)


def test_a_store_serves_farms_in_several_valleys(make: ModuleType) -> None:
    farms = make.draw_study("valleys")
    pairs = {(store, valley) for store, valley in zip(farms["feed_store"], farms["valley"])}
    assert len(pairs) > 1.5 * len({store for store, _ in pairs})


@pytest.mark.parametrize("north", [4.0, 13.0, 20.0])
def test_wells_jump_by_the_truth_along_the_border(make: ModuleType, north: float) -> None:
    """Homes within 700 m of a stretch of the border, by signed distance in kilometres."""
    homes = make.draw_wells(np.random.default_rng(903), 600_000)
    east_km = (homes["longitude"] - make.WELL_ORIGIN[0]) * make.KM_PER_DEGREE[0]
    north_km = (homes["latitude"] - make.WELL_ORIGIN[1]) * make.KM_PER_DEGREE[1]
    near = np.isfinite(east_km) & (np.abs(north_km - north) < 1.0)
    distance = shapely.distance(
        shapely.LineString(make.border_line()), shapely.points(east_km[near], north_km[near])
    )
    position = np.where(homes["filter"][near] == 1, distance, -distance)
    near_line = np.abs(position) < 0.7
    truth = np.average(make.well_effect(north_km[near][near_line]), weights=0.7 - np.abs(position[near_line]))
    found, error = jump(position, homes["sick_days"][near], 0.7)
    assert abs(found - truth) < 4 * error
    found, error = jump(position, homes["water_bill"][near], 0.7)
    assert abs(found - make.WELL_BILL) < 4 * error


def test_the_zone_has_a_coast_without_neighbours(make: ModuleType) -> None:
    zone, coast, border = (
        shapely.Polygon(make.zone_ring()),
        shapely.LineString(make.coast_line()),
        shapely.LineString(make.border_line()),
    )
    assert zone.is_valid
    assert shapely.length(zone.exterior) == pytest.approx(coast.length + border.length, rel=1e-12)
    homes = make.draw_study("wells")
    seen = np.isfinite(homes["longitude"])
    east = (homes["longitude"][seen] - make.WELL_ORIGIN[0]) * make.KM_PER_DEGREE[0]
    north = (homes["latitude"][seen] - make.WELL_ORIGIN[1]) * make.KM_PER_DEGREE[1]
    outside = homes["filter"][seen] == 0
    beside = (north > 1) & (north < 21) & (east < 5)
    assert beside.sum() > 200
    assert not (beside & outside).any()
    # The recorded zone and the recorded filters agree, up to the fifth decimal of a degree.
    inside = shapely.contains_xy(zone, east, north)
    off = inside != ~outside
    assert shapely.distance(border, shapely.points(east[off], north[off])).max(initial=0.0) < 0.002
