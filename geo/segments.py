"""A boundary cut in segments of equal length, and places along it at which effects are asked.

How long a coast is depends on how finely it is drawn: 822 km at full detail, 663 km to the nearest kilometre. So
lengths here are those of a copy simplified to a twentieth of the bandwidth, carried back to the true line.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Final

import numpy as np
import shapely

from geo.arrays import Codes, Signs, Vector
from geo.boundary import Boundary, Stretch
from geo.distance import Located
from geo.errors import GeometryError
from geo.projection import drawing_plane

_DETAIL: Final = 20.0  # the simplified copy keeps within bandwidth / 20
_MARGIN: Final = 4.0  # loose ends are left by bandwidth / 4


@dataclass(frozen=True, slots=True, kw_only=True)
class Segments:
    """A boundary cut in pieces.

    Attributes
    ----------
    stretches
        The pieces; a segment may have more than one where small parts were put to it.
    number
        The segment of each piece, from 0.
    length_m
        Length of each segment on the simplified copy.
    """

    stretches: tuple[Stretch, ...]
    number: tuple[int, ...]
    length_m: tuple[float, ...]

    def of(self, located: Located) -> Codes:
        """The segment that holds each unit's nearest place, -1 beyond the reach, shape (n,)."""
        out = np.full(len(located.part), -1, dtype=np.int64)
        for part in {stretch.part for stretch in self.stretches}:
            mine = [(s.start_m, n) for s, n in zip(self.stretches, self.number) if s.part == part]
            starts, numbers = (np.array(column) for column in zip(*sorted(mine)))
            rows = np.flatnonzero(located.part == part)
            place = np.searchsorted(starts, located.position_m[rows], side="right") - 1
            out[rows] = numbers[np.maximum(place, 0)]
        return out


@dataclass(frozen=True, slots=True, kw_only=True)
class BoundaryPoints:
    """Places along a boundary, each shape (K,).

    Attributes
    ----------
    longitude, latitude
        Or x and y for plain units.
    part, position_m
        Where on the boundary.
    share_m
        The length of the simplified boundary that each stands for: weights of an average by length.
    """

    longitude: Vector
    latitude: Vector
    part: Codes
    position_m: Vector
    share_m: Vector


def cut_equal(boundary: Boundary, count: int, *, bandwidth_m: float) -> Segments:
    """Cut a boundary in ``count`` segments of about equal length.

    Parts get segments by their length; a part too short for one of its own goes to the segment nearest to it.

    Raises
    ------
    GeometryError
        A count below 1.
    """
    if count < 1:
        raise GeometryError(
            f"The boundary can't be cut in {count} segments.", "Ask for 1 or more.", code="count"
        )
    ladders = [_ladder(boundary, part, bandwidth_m) for part in range(boundary.parts)]
    lengths = np.array([simple[-1] for _, simple in ladders])
    shares = _apportioned(lengths, count)
    stretches: list[Stretch] = []
    numbers: list[int] = []
    segment_m: list[float] = []
    for part, (true, simple) in enumerate(ladders):
        edges = np.interp(np.linspace(0.0, simple[-1], shares[part] + 1), simple, true)
        for start, end in pairwise(edges if shares[part] else ()):
            stretches.append(Stretch(part=part, start_m=float(start), end_m=float(end)))
            numbers.append(len(segment_m))
            segment_m.append(float(simple[-1] / shares[part]))
    cut = len(stretches)
    for part in np.flatnonzero(shares == 0).tolist():
        whole = boundary.whole()[part]
        nearest = _nearest_stretch(boundary, stretches[:cut], whole)
        stretches.append(whole)
        numbers.append(numbers[nearest])
        segment_m[numbers[nearest]] += float(lengths[part])
    return Segments(stretches=tuple(stretches), number=tuple(numbers), length_m=tuple(segment_m))


def boundary_points(boundary: Boundary, *, bandwidth_m: float, count: int) -> BoundaryPoints:
    """Places in the middle of about ``count`` equal pieces, a quarter of a bandwidth away from loose ends.

    Raises
    ------
    GeometryError
        A count below 1.
    """
    if count < 1:
        raise GeometryError(f"There can't be {count} boundary points.", "Ask for 1 or more.", code="count")
    ladders = [_ladder(boundary, part, bandwidth_m) for part in range(boundary.parts)]
    spans = []
    for part, (_, simple) in enumerate(ladders):
        margin = 0.0 if boundary.closed[part] else min(bandwidth_m / _MARGIN, simple[-1] / 4.0)
        spans.append((margin, float(simple[-1]) - margin))
    shares = _apportioned(np.array([last - first for first, last in spans]), count)
    found: list[tuple[Vector, Vector, Codes, Vector, Vector]] = []
    for part, ((true, simple), (first, last)) in enumerate(zip(ladders, spans)):
        number = int(shares[part])
        if not number:
            continue
        middle = first + (np.arange(number) + 0.5) * (last - first) / number
        position = np.interp(middle, simple, true)
        longitude, latitude = boundary.places(part, position)
        share = np.full(number, (last - first) / number)
        found.append((longitude, latitude, np.full(number, part, dtype=np.int64), position, share))
    longitude, latitude, parts, position, share = (np.concatenate(column) for column in zip(*found))
    return BoundaryPoints(
        longitude=longitude, latitude=latitude, part=parts, position_m=position, share_m=share
    )


def support(
    points: BoundaryPoints,
    longitude: Vector,
    latitude: Vector,
    side: Signs,
    *,
    boundary: Boundary,
    bandwidth_m: float,
) -> tuple[Codes, Codes]:
    """How many treated and comparison units lie within a bandwidth of each point, each shape (K,).

    Parameters
    ----------
    longitude, latitude, side
        Of units, as given to and returned by `locate`, shape (n,).
    """
    from scipy.spatial import cKDTree  # as in nearest: only where a boundary is asked

    earth, radius = boundary.earth, bandwidth_m
    if earth is not None:  # the chord under an arc
        radius = 2.0 * earth.semi_major_m * np.sin(bandwidth_m / (2.0 * earth.semi_major_m))
    counts = []
    for sign in (1, -1):
        mine = (side == sign) & np.isfinite(longitude) & np.isfinite(latitude)
        at, places = ((longitude[mine], latitude[mine]), (points.longitude, points.latitude))
        if earth is None:
            units, middle = np.column_stack(at), np.column_stack(places)
        else:
            units, middle = earth.centred(*at), earth.centred(*places)
        if not len(units):
            counts.append(np.zeros(len(middle), dtype=np.int64))
            continue
        tree = cKDTree(units, balanced_tree=False, compact_nodes=False)
        counts.append(np.asarray(tree.query_ball_point(middle, radius, return_length=True), dtype=np.int64))
    return counts[0], counts[1]


def _ladder(boundary: Boundary, part: int, bandwidth_m: float) -> tuple[Vector, Vector]:
    """Positions along a part's true line, and along its simplified copy, at the vertices that the copy keeps."""
    path = boundary.part_path(part)
    rows = slice(boundary.first[part], boundary.first[part + 1])
    true = boundary.position_m[rows]
    x, y = path.T
    if boundary.earth is not None:
        centre = float(np.mean(x)), float(np.mean(y))
        x, y = drawing_plane(x, y, centre=centre, earth=boundary.earth)
    numbered = shapely.linestrings(np.column_stack((x, y, np.arange(len(x)))))
    simple = shapely.simplify(numbered, bandwidth_m / _DETAIL, preserve_topology=False)
    kept = shapely.get_coordinates(simple, include_z=True)[:, 2].astype(np.int64)
    if len(kept) < (4 if boundary.closed[part] else 2):  # a ring smaller than the detail
        return true, true
    if boundary.earth is None:
        step = np.hypot(np.diff(x[kept]), np.diff(y[kept]))
    else:
        step = boundary.earth.length_m(path[kept, 0], path[kept, 1])
    return true[kept], np.concatenate(([0.0], np.cumsum(step)))


def _apportioned(lengths: Vector, count: int) -> Codes:
    """Whole numbers that add up to ``count``, in proportion to lengths, by largest remainders."""
    quota = lengths / lengths.sum() * count
    whole = np.floor(quota + 1e-9).astype(np.int64)
    order = np.lexsort((np.arange(len(lengths)), -(quota - whole)))
    whole[order[: count - int(whole.sum())]] += 1
    return np.asarray(whole)


def _nearest_stretch(boundary: Boundary, stretches: list[Stretch], lonely: Stretch) -> int:
    def middle(stretch: Stretch) -> Vector:
        at = np.array([(stretch.start_m + stretch.end_m) / 2.0])
        across, up = boundary.places(stretch.part, at)
        place = (
            np.column_stack((across, up)) if boundary.earth is None else boundary.earth.centred(across, up)
        )
        return np.asarray(place[0])

    here = middle(lonely)
    return int(np.argmin([np.linalg.norm(middle(stretch) - here) for stretch in stretches]))
