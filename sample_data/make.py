"""Make the three invented studies: `python sample_data/make.py [FOLDER]`.

Nobody and no place in them exists. Each table is drawn from a rule whose effect at the line is known, and
that truth is kept here as constants, printed at the end and checked in the tests on a very large draw.
The flaws are those of real records: heaped and missing scores, outcomes that never came back, offers that
were not taken up, whole-number scores, a small site, clusters across sites, homes known only to the
village square. `study.toml` beside each table is written by hand.

Every random step comes from the seeds below; numbers are rounded before they are written, so the same values
come out on any machine. The seeds were chosen among some hundred so that these draws are ordinary ones: by
chance alone one covariate in twenty would jump at the line, and a first example should not need that excuse.
"""

from __future__ import annotations

import csv
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Columns = dict[str, NDArray[np.generic]]

HERE = Path(__file__).resolve().parent
SEEDS = {"hulls": 40, "valleys": 68, "wells": 24}
OUTLINE_SEED = 20317  # the small jags of coast and border


# --- hulls: one cutoff -------------------------------------------------------------------------------------
# On the coast of Norrow every small fishing boat is inspected and its hull wear scored from 0 to 100. At 62.5
# or more the harbour board offers a repair grant.

HULL_ROWS = 6_000
HULL_CUTOFF = 62.5
HULL_TAKE_UP = (0.04, 0.79)  # share with a grant just below and just above the line
HULL_DAYS = 6.0  # days at sea in the next season: the jump at the line (8 a grant, times 0.75)
HULL_RESCUE = -0.06  # chance of a rescue call: the jump at the line
HULL_CREW = 0.0  # hired hands: nothing happens


def draw_hulls(rng: np.random.Generator, rows: int) -> Columns:
    """One inspected boat a row; the grant was decided by the score as recorded."""
    harbour = (rng.random(rows) ** 1.4 * 60).astype(np.int64)  # a few large harbours, many small ones
    place = rng.standard_normal(60)[harbour]
    length = np.clip(9.5 + 2.2 * rng.standard_normal(rows) + 0.4 * place, 4.5, 18.0)
    age = np.clip(22 + 11 * rng.standard_normal(rows) - 0.6 * (length - 9.5), 0, 70)
    wear = np.clip(51 + 0.45 * (age - 22) + 15 * rng.standard_normal(rows), 0, 100)
    # One inspector in eight rounds to whole points. The line is not a whole number, so nobody is moved on it.
    wear = np.where(rng.random(rows) < 0.125, np.round(wear), np.round(wear, 1))

    z = (wear - HULL_CUTOFF) / 25
    eligible = wear >= HULL_CUTOFF
    grant = rng.random(rows) < np.where(eligible, HULL_TAKE_UP[1] + 0.08 * z, HULL_TAKE_UP[0] + 0.015 * z)
    share = HULL_TAKE_UP[1] - HULL_TAKE_UP[0]

    liking = 9 * rng.standard_normal(rows)  # how much this skipper likes being out, in days
    before = 104 - 9 * z + 4 * place + liking + 8 * rng.standard_normal(rows)
    # Days fall most steeply about the middle of the scale: a wide straight line is bent by it.
    days = 101 - 16 * np.sin(2.2 * z) - 5 * z**2 + 4 * place + liking + 9 * rng.standard_normal(rows)
    days += HULL_DAYS / share * grant
    rescue = rng.random(rows) < 0.17 + 0.09 * np.tanh(1.2 * z) + HULL_RESCUE / share * grant
    crew = np.floor(
        np.clip(1.9 + 0.22 * (length - 9.5) - 0.15 * z + 0.8 * rng.standard_normal(rows), 0, 9)
        + rng.random(rows)
    )

    whole = rng.random(rows) < 0.7  # log books count days; some count half days, some skippers think in tens
    days = np.where(whole, np.round(days), np.round(2 * days) / 2)
    days = np.where(rng.random(rows) < 0.06, np.round(days, -1), days)
    unreturned = rng.random(rows) < 0.05 + 0.02 * np.clip(np.abs(z), 0, 1)
    uninspected = rng.random(rows) < 0.015

    return {
        "boat": np.char.add("NW", np.char.zfill(np.arange(1, rows + 1).astype(str), 5)),
        "harbour": np.char.add("Harbour ", np.char.zfill((harbour + 1).astype(str), 2)),
        "length_m": np.round(length, 1),
        "built": np.round(2019 - age).astype(np.int64),
        "days_before": np.round(np.clip(before, 0, 210)),
        "hull_wear": np.where(uninspected, np.nan, wear),
        "grant": grant.astype(np.int64),
        "days_at_sea": np.where(unreturned, np.nan, np.clip(days, 0, 210)),
        "rescue_call": rescue.astype(np.int64),
        "crew": np.where(rng.random(rows) < 0.02, np.nan, crew),
    }


# --- valleys: five cutoffs ---------------------------------------------------------------------------------
# Five valleys lend hay for the winter to farms whose fodder shortage, counted in whole points, reaches a line
# that each valley's meeting sets for itself.


@dataclass(frozen=True, slots=True, kw_only=True)
class Valley:
    """A site: its line, its farms, its take-up beside the line, and its truths (jumps at the line)."""

    name: str
    cutoff: float
    farms: int
    take_up: tuple[float, float]
    ewes_kept: float
    debt_letter: float


VALLEYS = (
    Valley(name="Askel", cutoff=52, farms=1_900, take_up=(0.00, 0.85), ewes_kept=4.0, debt_letter=-0.05),
    Valley(name="Brunnel", cutoff=47, farms=1_500, take_up=(0.05, 0.75), ewes_kept=2.5, debt_letter=-0.05),
    Valley(name="Corvane", cutoff=60, farms=1_300, take_up=(0.00, 0.65), ewes_kept=6.5, debt_letter=-0.05),
    Valley(name="Dunlow", cutoff=55, farms=1_000, take_up=(0.10, 0.70), ewes_kept=0.0, debt_letter=-0.05),
    Valley(name="Eddick", cutoff=64, farms=180, take_up=(0.00, 0.60), ewes_kept=5.0, debt_letter=-0.05),
)
STORES = 48  # feed stores: each serves farms in several valleys


def draw_valleys(rng: np.random.Generator, scale: int = 1) -> Columns:
    """One farm a row, valley after valley; `scale` multiplies the number of farms."""
    at_store = rng.standard_normal(STORES)
    parts = [_draw_valley(rng, valley, order, scale, at_store) for order, valley in enumerate(VALLEYS)]
    table = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    return {"farm": np.arange(1, len(table["valley"]) + 1), **table}


def _draw_valley(
    rng: np.random.Generator, valley: Valley, order: int, scale: int, at_store: Floats
) -> Columns:
    rows = valley.farms * scale
    store = (rng.integers(0, 16, rows) + 8 * order) % STORES  # neighbouring valleys share half their stores
    flock = np.exp(4.4 + 0.55 * rng.standard_normal(rows))
    years = np.clip(19 + 10 * rng.standard_normal(rows), 0, 60)
    level = valley.cutoff - 4 + 2 * at_store[store] - 3 * (np.log(flock) - 4.4)
    points = np.round(np.clip(level + 13 * rng.standard_normal(rows), 0, 100))

    z = (points - valley.cutoff) / 20
    reached = points >= valley.cutoff
    below, above = valley.take_up
    loan = rng.random(rows) < np.where(reached, above + 0.05 * z, below)
    # The gain is a farm's own gain from the loan times whether it took it; the jump is the mean of the product.
    kept = 67 + order - 7 * z - 2.5 * z**2 + 1.8 * np.sin(3 * z) + 1.6 * at_store[store]
    kept += valley.ewes_kept / (above - below) * loan + 5 * rng.standard_normal(rows)
    letter = (
        rng.random(rows)
        < 0.20 + 0.07 * z - 0.02 * z**2 * (z > 0) + valley.debt_letter / (above - below) * loan
    )

    small = flock < 60
    sampled = np.where(small, 0.35, 0.8)  # small flocks were sampled more thinly, and count for more
    return {
        "valley": np.full(rows, valley.name),
        "feed_store": np.char.add("store ", np.char.zfill((store + 1).astype(str), 2)),
        "flock_before": np.round(flock).astype(np.int64),
        "years_farming": np.where(rng.random(rows) < 0.03, np.nan, np.round(years)),
        "shortage": np.where(rng.random(rows) < 0.01, np.nan, points),
        "hay_loan": loan.astype(np.int64),
        "ewes_kept": np.where(rng.random(rows) < 0.07, np.nan, np.round(kept, 1)),
        "debt_letter": np.where(rng.random(rows) < 0.04, np.nan, letter),
        "sampling_weight": np.round(1 / sampled, 3),
    }


# --- wells: a boundary on a map ----------------------------------------------------------------------------
# On the invented island of Sorrel, drawn in open water, the water board gave filters to every home with its own
# well inside a zone. The zone's west edge is the coast: there is nobody on the other side.

WELL_ROWS = 5_500
WELL_ORIGIN = (-24.0, -37.0)  # longitude and latitude of kilometre (0, 0)
KM_PER_DEGREE = (88.93, 110.97)  # of longitude and of latitude, there
WELL_BILL = 0.0  # the water bill does not change anywhere
# The zone in kilometres east and north: up the coast, then inland along the border and back with a bend.
COAST = ((0.6, -0.4), (-0.5, 3.1), (0.9, 6.8), (0.1, 11.0), (-0.8, 14.2), (0.4, 18.5), (-0.2, 22.3))
BORDER = ((-0.2, 22.3), (4.8, 23.4), (9.7, 21.9), (14.6, 22.6), (17.1, 18.2), (12.4, 13.0), (15.8, 7.4), (14.9, 2.1), (8.8, -0.9), (0.6, -0.4))  # fmt: skip


def well_effect(north: Floats) -> Floats:
    """Sick days a year that a filter changes, by kilometres north: more where the old mines are."""
    return -(1.2 + 1.8 * north / 22)


def jagged(corners: Sequence[tuple[float, float]], seed: int) -> Floats:
    """Put a vertex about every 400 m between the corners and push each aside by up to some 40 m."""
    rng = np.random.default_rng(seed)
    parts = []
    for start, end in pairwise(corners):
        a, b = np.array(start), np.array(end)
        steps = max(2, round(float(np.hypot(*(b - a))) / 0.4))
        along = a + np.linspace(0, 1, steps, endpoint=False)[:, None] * (b - a)
        along[1:] += 0.08 * (rng.random((steps - 1, 2)) - 0.5)
        parts.append(along)
    return np.vstack([*parts, np.array(corners[-1])[None]])


def coast_line() -> Floats:
    """The sea edge of the zone, south to north, in kilometres, shape (k, 2)."""
    return jagged(COAST, OUTLINE_SEED + 1)


def border_line() -> Floats:
    """The inland edge of the zone, which is the line of the study, in kilometres, shape (k, 2)."""
    return jagged(BORDER, OUTLINE_SEED + 2)


def zone_ring() -> Floats:
    """The closed outline of the zone in kilometres."""
    return np.vstack([coast_line(), border_line()[1:]])


def degrees(east: Floats, north: Floats) -> tuple[Floats, Floats]:
    """Longitude and latitude of kilometres east and north."""
    return WELL_ORIGIN[0] + east / KM_PER_DEGREE[0], WELL_ORIGIN[1] + north / KM_PER_DEGREE[1]


def draw_wells(rng: np.random.Generator, rows: int) -> Columns:
    """One home with a well a row: half in villages, half scattered, none in the sea."""
    import shapely  # only this study needs it

    villages = 70
    centre = np.column_stack([1.5 + 25 * rng.random(villages), -7 + 36 * rng.random(villages)])
    zone = shapely.Polygon(zone_ring())
    shapely.prepare(zone)
    village = rng.integers(0, villages, rows)
    near = centre[village] + 0.9 * rng.standard_normal((rows, 2))
    far = np.column_stack([1.2 + 26 * rng.random(rows), -8 + 38 * rng.random(rows)])
    place = np.where((rng.random(rows) < 0.5)[:, None], near, far)
    place[:, 0] = np.where(
        place[:, 0] < 1.2, 2.4 - place[:, 0], place[:, 0]
    )  # ashore, and well off the coast
    village = (
        np.argmin(((place[:, None, :] - centre[None]) ** 2).sum(axis=2), axis=1) if rows < 50_000 else village
    )
    coarse = rng.random(rows) < 0.04  # known only to the village square, though never across the line

    inside = shapely.contains_xy(zone, place[:, 0], place[:, 1])
    square = shapely.contains_xy(zone, centre[village, 0], centre[village, 1])
    shown = np.where((coarse & (square == inside))[:, None], centre[village], place)
    east, north = place.T
    persons = 1 + np.floor(4.5 * rng.random(rows) ** 1.5)
    depth = np.clip(24 + 0.5 * east + 7 * rng.standard_normal(rows), 4, 70)
    sick = 11 + 0.7 * persons + 2.4 * np.sin(east / 6) + 0.08 * north - 0.04 * (depth - 30)
    sick += 0.8 * rng.standard_normal(villages)[village] + 2.6 * rng.standard_normal(rows)
    sick += np.where(inside, well_effect(north), 0.0)
    bill = 180 + 2.1 * depth + 14 * persons - 0.9 * north + 22 * rng.standard_normal(rows)

    longitude, latitude = degrees(*shown.T)
    lost = rng.random(rows) < 0.01
    return {
        "home": np.arange(1, rows + 1),
        "village": np.char.add("village ", np.char.zfill((village + 1).astype(str), 2)),
        "longitude": np.where(lost, np.nan, np.round(longitude, 5)),
        "latitude": np.where(lost, np.nan, np.round(latitude, 5)),
        "persons": persons.astype(np.int64),
        "well_depth_m": np.round(depth),
        "filter": inside.astype(np.int64),
        "sick_days": np.where(rng.random(rows) < 0.05, np.nan, np.round(2 * np.clip(sick, 0, None)) / 2),
        "water_bill": np.round(bill),
    }


# --- files -------------------------------------------------------------------------------------------------


def _written(value: object) -> str:
    if isinstance(value, float):
        return "" if np.isnan(value) else f"{value:.10g}"
    return str(value)


def write_csv(columns: Columns, path: Path) -> None:
    """Write one table; a missing value is an empty field."""
    with path.open("w", newline="", encoding="utf-8") as file:
        lines = csv.writer(file, lineterminator="\n")
        lines.writerow(columns)
        lines.writerows(
            [_written(value) for value in row] for row in zip(*(c.tolist() for c in columns.values()))
        )


def write_parquet(columns: Columns, path: Path) -> None:
    """Write one table through DuckDB, one thread so that the bytes do not depend on the machine."""
    import duckdb

    kinds = {"U": "VARCHAR", "i": "BIGINT", "f": "DOUBLE"}
    types = {name: kinds[column.dtype.kind] for name, column in columns.items()}
    with TemporaryDirectory() as folder, duckdb.connect(config={"threads": 1}) as connection:
        plain = Path(folder) / "table.csv"
        write_csv(columns, plain)
        connection.read_csv(str(plain), columns=types, header=True).write_parquet(
            str(path), compression="zstd"
        )


def write_zone(path: Path) -> None:
    """Write the zone as a GeoPackage with one layer, dated so that its bytes stay the same."""
    import pyogrio
    import shapely

    longitude, latitude = degrees(*zone_ring().T)
    outline = shapely.Polygon(np.round(np.column_stack([longitude, latitude]), 6))
    path.unlink(missing_ok=True)
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": "2024-03-01T00:00:00.000Z"})
    pyogrio.raw.write(
        str(path),
        geometry=np.array([shapely.to_wkb(outline)], dtype=object),
        field_data=[np.array(["Sorrel filter zone"], dtype=object)],
        fields=["name"],
        layer="zone",
        driver="GPKG",
        geometry_type="Polygon",
        crs="EPSG:4326",
    )
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})


def draw_study(name: str) -> Columns:
    """The table of one study as it is kept here."""
    if name == "hulls":
        return draw_hulls(np.random.default_rng([SEEDS[name], 1]), HULL_ROWS)
    if name == "valleys":
        return draw_valleys(np.random.default_rng([SEEDS[name], 2]))
    return draw_wells(np.random.default_rng([SEEDS[name], 3]), WELL_ROWS)


def make(folder: Path) -> None:
    """Write all tables and the zone below `folder`."""
    for name in ("hulls", "valleys", "wells"):
        (folder / name).mkdir(parents=True, exist_ok=True)
    write_parquet(draw_study("hulls"), folder / "hulls" / "boats.parquet")
    write_csv(draw_study("valleys"), folder / "valleys" / "farms.csv")
    write_csv(draw_study("wells"), folder / "wells" / "homes.csv")
    write_zone(folder / "wells" / "zone.gpkg")


def truth() -> str:
    """What was built in, as text."""
    north = np.array([-0.4, 13.0, 22.3])
    lines = [
        f"hulls    jump at {HULL_CUTOFF}: days_at_sea {HULL_DAYS:+g}, rescue_call {HULL_RESCUE:+g}, crew {HULL_CREW:+g};",
        f"         take-up jumps by {HULL_TAKE_UP[1] - HULL_TAKE_UP[0]:.2f}",
    ]
    lines += [
        f"valleys  {v.name:8} at {v.cutoff:g}: ewes_kept {v.ewes_kept:+g}, debt_letter {v.debt_letter:+g}, "
        f"take-up jumps by {v.take_up[1] - v.take_up[0]:.2f}"
        for v in VALLEYS
    ]
    effects = ", ".join(f"{e:+.2f} at km {n:g}" for e, n in zip(well_effect(north), north))
    return "\n".join(
        [*lines, f"wells    sick_days by kilometres north: {effects}; water_bill {WELL_BILL:+g}"]
    )


if __name__ == "__main__":
    make(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE)
    print(truth())
