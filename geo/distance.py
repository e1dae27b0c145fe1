"""Where each unit stands: its signed distance to the boundary, the nearest place on it, and its side."""

from __future__ import annotations

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
import shapely

from geo.arrays import Codes, Mask, Matrix, Signs, Vector
from geo.boundary import Boundary
from geo.boxes import Boxes, boxes
from geo.errors import GeometryError, Stopped
from geo.nearest import Hits
from geo.projection import from_degrees

Treated = Literal["inside", "outside", "left", "right"]

_CHUNK: Final = 100_000
_ON_LINE_M: Final = 1e-3
_ON_LINE_SHARE: Final = 1e-9  # of the extent, for plain units
_SAG_M: Final = 1.0  # chords run below the ground: look a little farther than the reach
_SEAM_M: Final = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class Located:
    """Where n units stand, in the order they were given.

    Attributes
    ----------
    distance_m
        Signed distance, positive on the treated side; 0 on the line; NaN beyond the reach, without a side or
        without coordinates, shape (n,). Metres, or the plain units' own.
    apart_m
        The same without a sign, also where there is no side; NaN beyond the reach, shape (n,).
    foot_longitude, foot_latitude
        The nearest place on the boundary (x and y for plain units), NaN beyond the reach, shape (n,).
    part
        The part that holds it, -1 beyond the reach, shape (n,).
    position_m
        How far along that part it lies, NaN beyond the reach, shape (n,).
    side
        +1 treated, -1 comparison, 0 unknown (on the line, off a loose end of a drawn line, beyond the reach of a
        drawn line, no coordinates), shape (n,).
    on_line
        So near the line that its side can't be told, shape (n,).
    loose_end
        Whose nearest place is the loose end of an open part, shape (n,).
    reach_m
        What was looked at on each side.
    """

    distance_m: Vector
    apart_m: Vector
    foot_longitude: Vector
    foot_latitude: Vector
    part: Codes
    position_m: Vector
    side: Signs
    on_line: Mask
    loose_end: Mask
    reach_m: float

    @property
    def within(self) -> Mask:
        """Units within the reach, shape (n,)."""
        return self.part >= 0


def locate(
    longitude: Vector,
    latitude: Vector,
    *,
    boundary: Boundary,
    reach_m: float,
    treated: Treated = "inside",
    on_line_m: float | None = None,
    should_stop: Callable[[], bool] | None = None,
    report: Callable[[int, int], None] | None = None,
) -> Located:
    """Find each unit's signed distance, nearest place and side.

    Exact: the nearest place on the boundary as cut (every 500 m or finer, in its own system), then the geodesic to it.
    Where two places are equally far to within 6 parts in 10⁸, either may be returned.

    Parameters
    ----------
    longitude, latitude
        On the boundary's own datum (`units_in_degrees`), or x and y for plain units, shape (n,); NaN where unknown.
    boundary
        What to measure against.
    reach_m
        How far to look on each side; more than 0.
    treated
        ``"inside"`` or ``"outside"`` of an area; ``"left"`` or ``"right"`` of a line as it was drawn.
    on_line_m
        Units this near have no side. Default: 1 mm, or a billionth of the extent of plain units.
    should_stop
        Asked between chunks; `Stopped` is raised when it says so.
    report
        Told (units done, units in all) after each chunk, in the calling thread.

    Raises
    ------
    GeometryError
        A side that this kind of boundary doesn't have, a reach that is not positive, latitudes beyond 90.
    """
    longitude = np.ascontiguousarray(longitude, dtype=np.float64)
    latitude = np.ascontiguousarray(latitude, dtype=np.float64)
    _check(latitude, boundary, reach_m, treated)
    tolerance = on_line_m
    if tolerance is None:
        tolerance = _ON_LINE_SHARE * boundary.extent if boundary.is_plain else _ON_LINE_M
    located = _blank(len(longitude), reach_m)
    if boundary.area is not None:
        _make_ready(boundary.area)
    sign = 1 if treated in ("inside", "left") else -1
    starts = range(0, len(longitude), _CHUNK)

    def one(start: int) -> int:
        if should_stop is not None and should_stop():
            raise Stopped
        rows = slice(start, start + _CHUNK)
        _locate_chunk(longitude[rows], latitude[rows], boundary, located, rows, sign, tolerance)
        return min(start + _CHUNK, len(longitude))

    with ThreadPoolExecutor(max_workers=min(2, os.cpu_count() or 1)) as pool:
        for done in pool.map(one, starts):
            if report is not None:
                report(done, len(longitude))
    return located


def _make_ready(area: Any) -> None:
    """Build the index that answers who is inside, before threads ask.

    It is built by the second question that the area's box can't answer (the first is answered without one), and two
    threads that build it at once break the process. So several questions are put within the box.
    """
    left, low, right, top = area.bounds
    shapely.prepare(area)
    shapely.contains_xy(area, np.full(8, (left + right) / 2.0), np.full(8, (low + top) / 2.0))


def _check(latitude: Vector, boundary: Boundary, reach_m: float, treated: str) -> None:
    allowed = ("left", "right") if boundary.is_line else ("inside", "outside")
    if treated not in allowed:
        given = "line" if boundary.is_line else "area"
        raise GeometryError(
            f"The boundary is given as {'a' if given == 'line' else 'an'} {given}, so no unit is {treated!r}.",
            f"Say {allowed[0]!r} or {allowed[1]!r}.",
            code="side",
        )
    if not (np.isfinite(reach_m) and reach_m > 0.0):
        raise GeometryError(
            f"The reach is {reach_m!r}; how far to look must be a positive number of metres.",
            "Give a reach at least as wide as the widest bandwidth.",
            code="reach",
        )
    if not boundary.is_plain and len(latitude) and np.nanmax(np.abs(latitude), initial=0.0) > 90.0:
        raise GeometryError(
            f"The units: a latitude is {latitude[np.nanargmax(np.abs(latitude))]:.7g}; none goes beyond 90.",
            "Longitude and latitude may be swapped, or the coordinates are projected: name their system.",
            code="range",
        )


def _blank(count: int, reach_m: float) -> Located:
    return Located(
        distance_m=np.full(count, np.nan),
        apart_m=np.full(count, np.nan),
        foot_longitude=np.full(count, np.nan),
        foot_latitude=np.full(count, np.nan),
        part=np.full(count, -1, dtype=np.int64),
        position_m=np.full(count, np.nan),
        side=np.zeros(count, dtype=np.int8),
        on_line=np.zeros(count, dtype=bool),
        loose_end=np.zeros(count, dtype=bool),
        reach_m=reach_m,
    )


def _locate_chunk(
    longitude: Vector,
    latitude: Vector,
    boundary: Boundary,
    out: Located,
    rows: slice,
    sign: int,
    tolerance: float,
) -> None:
    known = np.flatnonzero(np.isfinite(longitude) & np.isfinite(latitude))
    across, up = longitude[known], latitude[known]
    kept, back = _collapsed(across, up)
    across, up = across[kept], up[kept]
    grid = boxes(boundary.in_frame(across), up, out.reach_m, boundary)
    near, points, hits = _near(across, up, grid, boundary, out.reach_m)
    foot, apart, foot_across, foot_up = _feet(across[near], up[near], hits, boundary)
    inside = apart <= out.reach_m
    near, points, foot, apart = near[inside], points[inside], foot[inside], apart[inside]
    segment, along = hits.segment[inside], hits.along[inside]
    part, position = _positions(boundary, segment, along)
    loose, before, after = _neighbours(boundary, segment, along)
    side = np.zeros(len(across), dtype=np.int8)
    if boundary.area is not None:
        side[:] = _inside(across, up, near, grid, boundary)
    else:
        drawn = _left(points, foot, before, after, boundary)
        drawn[loose] = 0
        side[near] = drawn
    side *= sign
    side[near[apart <= tolerance]] = 0

    def put(target: np.ndarray, values: np.ndarray, fill: float) -> None:
        everyone = np.full(len(across), fill, dtype=target.dtype)
        everyone[near] = values
        target[rows][known] = everyone[back]

    put(out.apart_m, apart, np.nan)
    put(out.foot_longitude, foot_across[inside], np.nan)
    put(out.foot_latitude, foot_up[inside], np.nan)
    put(out.part, part, -1)
    put(out.position_m, position, np.nan)
    put(out.on_line, apart <= tolerance, False)
    put(out.loose_end, loose, False)
    signed = np.where(side[near] == 0, np.nan, side[near] * apart)
    put(out.distance_m, np.where(apart <= tolerance, 0.0, signed), np.nan)
    out.side[rows][known] = side[back]


def _collapsed(across: Vector, up: Vector) -> tuple[Codes | slice, Codes | slice]:
    """Rows to look at and the way back; many units at one place are looked at once, where that pays."""
    stride = max(len(across) // 2000, 1)
    probe = across[::stride] + 1j * up[::stride]
    if len(np.unique(probe)) > 0.9 * len(probe):
        return slice(None), slice(None)
    _, first, back = np.unique(across + 1j * up, return_index=True, return_inverse=True)
    return first, back


def _near(
    across: Vector, up: Vector, grid: Boxes | None, boundary: Boundary, reach: float
) -> tuple[Codes, Matrix, Hits]:
    """The places near the boundary, where they are in its space, and their nearest segments."""

    def space(x: Vector, y: Vector) -> Matrix:
        return np.column_stack((x, y)) if boundary.earth is None else boundary.earth.centred(x, y)

    slack = 0.0 if boundary.earth is None else _SAG_M
    look = np.arange(len(across))
    if grid is not None:  # a box whose middle is too far off needs no further look
        middles = boundary.index.nearest(
            space(grid.across, grid.up), reach + slack + grid.radius * (1.0 + 1e-9)
        )
        look = np.flatnonzero(grid.spread(middles.segment >= 0))
        # Neighbours one after another find the tree's branches still at hand: a third less time.
        look = look[np.argsort(grid.number[look], kind="stable")]
    points = space(across[look], up[look])
    hits = boundary.index.nearest(points, reach + slack)
    found = np.flatnonzero(hits.segment >= 0)
    hits = Hits(distance=hits.distance[found], segment=hits.segment[found], along=hits.along[found])
    return look[found], points[found], hits


def _feet(
    across: Vector, up: Vector, hits: Hits, boundary: Boundary
) -> tuple[Matrix, Vector, Vector, Vector]:
    """The nearest places, and how far away they are on the ground."""
    foot = boundary.index.start[hits.segment] + hits.along[:, None] * boundary.index.step[hits.segment]
    if boundary.earth is None:
        return foot, hits.distance, foot[:, 0], foot[:, 1]
    longitude, latitude = boundary.earth.degrees(foot)
    if not len(foot):
        return foot, np.zeros(0), longitude, latitude
    _, _, apart = boundary.earth.geod.inv(across, up, longitude, latitude)
    return foot, np.asarray(apart), longitude, latitude


def _positions(boundary: Boundary, segment: Codes, along: Vector) -> tuple[Codes, Vector]:
    vertex = boundary.segment_start[segment]
    part = boundary.part_of_vertex(vertex)
    start, end = boundary.position_m[vertex], boundary.position_m[vertex + 1]
    position = start + along * (end - start)
    total = boundary.length_m[part]
    seam = boundary.closed[part] & (position >= total - _SEAM_M * np.minimum(1.0, total))
    return part, np.where(seam, 0.0, position)  # a ring's end is its start


def _neighbours(boundary: Boundary, segment: Codes, along: Vector) -> tuple[Mask, Codes, Codes]:
    """Whether a hit is a loose end, and the segments before and after it (the same one away from vertices)."""
    vertex = boundary.segment_start[segment]
    part = boundary.part_of_vertex(vertex)
    first, last = boundary.first[part] - part, boundary.first[part + 1] - part - 2  # segments of the part
    closed = boundary.closed[part]
    at_start, at_end = along <= 0.0, along >= 1.0
    before, after = segment.copy(), segment.copy()
    before[at_start] -= 1
    after[at_end] += 1
    under, over = before < first, after > last
    before = np.where(under, np.where(closed, last, segment), before)
    after = np.where(over, np.where(closed, first, segment), after)
    return (under | over) & ~closed, before, after


def _left(points: Matrix, foot: Matrix, before: Codes, after: Codes, boundary: Boundary) -> Signs:
    """+1 left of the line as drawn, -1 right: at a vertex by the sum of the two unit normals (Bærentzen & Aanæs 2005)."""
    index = boundary.index
    ahead = np.zeros_like(foot)
    for segment in (before, after):
        ahead += (
            index.step[segment] / np.where(index.length[segment] > 0.0, index.length[segment], 1.0)[:, None]
        )
    away = points - foot
    if boundary.earth is None:
        turn = ahead[:, 0] * away[:, 1] - ahead[:, 1] * away[:, 0]
    else:
        outward = foot / np.linalg.norm(foot, axis=1)[:, None]
        turn = np.einsum("ij,ij->i", np.cross(outward, ahead), away)
    return np.sign(turn).astype(np.int8)


def _inside(across: Vector, up: Vector, near: Codes, grid: Boxes | None, boundary: Boundary) -> Signs:
    """+1 inside, -1 outside.

    A box whose diagonal is shorter than the reach, round a place beyond the reach, holds no boundary: all places in it
    are on one side. So of those beyond the reach one a box is asked.
    """
    if boundary.area_crs is not None and boundary.earth is not None:
        x, y = from_degrees(across, up, boundary.area_crs, earth=boundary.earth)
        inside = shapely.contains_xy(
            boundary.area, x, y
        )  # what a polar system can't describe is inf: outside
        return np.where(inside, 1, -1).astype(np.int8)
    across = boundary.in_frame(across)
    if grid is None:
        return np.where(shapely.contains_xy(boundary.area, across, up), 1, -1).astype(np.int8)
    far = np.ones(len(across), dtype=bool)
    far[near] = False
    number = grid.number[far]
    one = np.full(grid.count, -1, dtype=np.int64)
    one[number] = np.flatnonzero(far)
    held = np.flatnonzero(one >= 0)
    asked = np.concatenate((near, one[held]))
    answers = np.where(shapely.contains_xy(boundary.area, across[asked], up[asked]), 1, -1).astype(np.int8)
    of_box = np.zeros(grid.count, dtype=np.int8)
    of_box[held] = answers[len(near) :]
    side = np.empty(len(across), dtype=np.int8)
    side[near] = answers[: len(near)]
    side[far] = of_box[number]
    return side
