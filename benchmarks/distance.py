"""Signed distance of units to a boundary: this program against general-purpose geometry calls, in one run.

Run: python benchmarks/distance.py [units:vertices ...]        (default 100000:100 100000:10000 1000000:10000)

A rough star of 200 km across at 46 degrees north, units uniform over a square of 400 km, reach 10 km. Columns:

* floor: one pass over both coordinate columns (nobody answers without reading them);
* build: cutting the outline in its own degrees, positions along it, the tree;
* on earth: signed distance on the ellipsoid, nearest place, position along, side, two threads;
* in plane: the same for plain units;
* prepared: shapely.prepare and shortest_line, for all units (it knows no reach), distance only;
* STRtree: query_nearest over segments within the reach, distance only;
* distance: shapely.distance, on a sample and scaled.

The general calls work in the plane on the same outline and give no side, no position and no ellipsoid. The last column is the
greatest difference between the plane's distances and shapely's, in metres. Peak memory of the process stands below.
"""

from __future__ import annotations

import resource
import sys
import time

import numpy as np
import shapely

from geo.boundary import Boundary
from geo.distance import Located, locate
from geo.outline import boundary_of_area

REACH = 10_000.0
SAMPLE = 2_000
MOST_PREPARED = 1_000_000  # beyond this the prepared call too is measured on a part and scaled


def outline(vertices: int) -> np.ndarray:
    """A rough star in metres about the origin that never crosses itself."""
    rng = np.random.default_rng(60)
    turn = np.linspace(0.0, 2.0 * np.pi, vertices, endpoint=False)
    waves = (rng.normal() * 0.3 / k * np.cos(k * turn + rng.uniform(0.0, 2.0 * np.pi)) for k in range(1, 40))
    rough = rng.normal(scale=np.pi / vertices, size=vertices)  # half the spacing: as jagged at every size
    radius = np.clip(1.0 + sum(waves), 0.2, None) * (1.0 + rough)
    return 1e5 * np.column_stack((radius * np.cos(turn), radius * np.sin(turn)))


def degrees(metres: np.ndarray) -> np.ndarray:
    """About the same shape round 10 east, 46 north."""
    return np.column_stack((10.0 + metres[:, 0] / 77_400.0, 46.0 + metres[:, 1] / 111_150.0))


def timed(work: object) -> tuple[float, object]:
    start = time.perf_counter()
    result = work()  # type: ignore[operator]
    return time.perf_counter() - start, result


def prepared(points: np.ndarray, ring: shapely.Geometry) -> np.ndarray:
    shapely.prepare(ring)
    return shapely.length(shapely.shortest_line(ring, shapely.points(points)))


def by_tree(points: np.ndarray, ring: np.ndarray) -> np.ndarray:
    segments = shapely.linestrings(np.stack((ring[:-1], ring[1:]), axis=1))
    (which, _), apart = shapely.STRtree(segments).query_nearest(
        shapely.points(points), max_distance=REACH, return_distance=True
    )
    out = np.full(len(points), np.inf)
    out[which] = apart
    return out


def one_row(units: int, vertices: int) -> str:
    path = outline(vertices)
    ring = np.concatenate((path, path[:1]))
    metres = np.random.default_rng(61).uniform(-2e5, 2e5, (units, 2))
    at = degrees(metres)
    x, y = np.ascontiguousarray(at[:, 0]), np.ascontiguousarray(at[:, 1])
    floor, _ = timed(lambda: (x.sum(), y.sum()))
    shape = np.array([shapely.Polygon(degrees(path))], dtype=object)
    build, on_earth = timed(lambda: boundary_of_area(shape, crs="EPSG:4326", gap=0.0))
    assert isinstance(on_earth, Boundary)
    earth, _ = timed(lambda: locate(x, y, boundary=on_earth, reach_m=REACH))
    in_plane = boundary_of_area(np.array([shapely.Polygon(path)], dtype=object), crs="plain", gap=0.0)
    px, py = np.ascontiguousarray(metres[:, 0]), np.ascontiguousarray(metres[:, 1])
    plane, located = timed(lambda: locate(px, py, boundary=in_plane, reach_m=REACH))
    assert isinstance(located, Located)
    some = metres[: min(units, MOST_PREPARED)]
    ready, exact = timed(lambda: prepared(some, shapely.LineString(ring)))
    tree, _ = timed(lambda: by_tree(some, ring))
    plain, _ = timed(lambda: shapely.distance(shapely.points(metres[:SAMPLE]), shapely.LineString(ring)))
    apart = located.apart_m[: len(some)]
    assert np.array_equal(np.isfinite(apart), exact <= REACH)
    worst = float(np.nanmax(np.abs(apart - exact)))
    scale = units / len(some)
    return (
        f"| {units:,} | {vertices:,} | {floor:.3f} | {build:.2f} | {earth:.2f} | {plane:.2f} | {ready * scale:.2f} | "
        f"{tree * scale:.2f} | {plain * units / min(units, SAMPLE):.1f} | {worst:.0e} |"
    )


def main(sizes: list[tuple[int, int]]) -> None:
    print(
        "| units | vertices | floor s | build s | on earth s | in plane s | prepared s | STRtree s | distance s | difference m |"
    )
    print("|---:|---:|---:|---:|---:|---:|---:|---:|---:|---:|")
    for units, vertices in sizes:
        print(one_row(units, vertices), flush=True)
    print(f"\npeak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:,.0f} MB")


if __name__ == "__main__":
    given = [(int(a), int(b)) for a, b in (text.split(":") for text in sys.argv[1:])]
    main(given or [(100_000, 100), (100_000, 10_000), (1_000_000, 10_000)])
