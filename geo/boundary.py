"""The boundary of a treated area: its parts in a stable order, each with positions along it in metres."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from pyproj import CRS

from geo.arrays import Codes, Mask, Matrix, Vector
from geo.errors import GeometryError
from geo.nearest import SegmentIndex
from geo.notes import Note
from geo.projection import Earth
from geo.turns import into_window

_SAME_PLACE_M: Final = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class Stretch:
    """A piece of one part of a boundary, from one position to another along it.

    Attributes
    ----------
    part
        Number of the part, from 0 for the longest.
    start_m, end_m
        Positions along it, metres. On a ring ``end_m`` may be less than ``start_m``: it then runs over the ring's start.
    """

    part: int
    start_m: float
    end_m: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Boundary:
    """A boundary ready to be measured against.

    Attributes
    ----------
    across, up
        Longitude and latitude of all vertices (x and y for plain units), shape (V,), one part after another; a
        ring repeats its first vertex. Longitudes lie on one unbroken turn and may leave -180..180.
    first
        Where each part begins among the vertices, and V at the end, shape (P + 1,).
    closed
        Which parts are rings, shape (P,).
    position_m
        How far along its part each vertex lies, shape (V,).
    earth
        The datum of ``across`` and ``up``; None for plain units.
    area
        The treated polygon that says who is inside; None for a boundary drawn as a line.
    area_crs
        The system of ``area`` where that isn't ``across`` and ``up``: round a pole only.
    centre
        The longitude in the middle; 0 for plain units.
    sources
        For each part, which stretch of the whole boundary it is, shape (P,).
    notes
        What was found and changed while it was built.
    index
        The segments, ready for questions.
    """

    across: Vector
    up: Vector
    first: Codes
    closed: Mask
    position_m: Vector
    earth: Earth | None
    area: Any
    area_crs: CRS | None
    centre: float
    sources: tuple[Stretch, ...]
    notes: tuple[Note, ...]
    index: SegmentIndex

    @property
    def parts(self) -> int:
        """How many parts there are."""
        return len(self.closed)

    @property
    def is_plain(self) -> bool:
        """Whether coordinates are lengths in a plane."""
        return self.earth is None

    @property
    def is_line(self) -> bool:
        """Whether it was given as a line, with a left and a right instead of an inside and an outside."""
        return self.area is None

    @property
    def length_m(self) -> Vector:
        """Length of each part, shape (P,)."""
        return self.position_m[self.first[1:] - 1]

    @property
    def extent(self) -> float:
        """The longer side of the box round it, in its own coordinates."""
        return float(max(np.ptp(self.across), np.ptp(self.up)))

    @property
    def segment_start(self) -> Codes:
        """The vertex at which each segment begins, shape (M,)."""
        starts = np.ones(len(self.across), dtype=bool)
        starts[self.first[1:] - 1] = False
        return np.flatnonzero(starts)

    def part_of_vertex(self, vertex: Codes) -> Codes:
        """The part that holds each vertex."""
        return np.searchsorted(self.first, vertex, side="right") - 1

    def whole(self) -> tuple[Stretch, ...]:
        """One stretch for each part, from end to end."""
        return tuple(
            Stretch(part=part, start_m=0.0, end_m=float(end)) for part, end in enumerate(self.length_m)
        )

    def part_path(self, part: int) -> Matrix:
        """The vertices of one part, shape (n, 2): for maps and for pieces of it."""
        rows = slice(self.first[part], self.first[part + 1])
        return np.column_stack((self.across[rows], self.up[rows]))

    def places(self, part: int, position_m: Vector) -> tuple[Vector, Vector]:
        """Longitude and latitude (or x and y) at positions along one part."""
        rows = slice(self.first[part], self.first[part + 1])
        along = self.position_m[rows]
        if self.closed[part]:
            position_m = np.where(position_m > along[-1], position_m - along[-1], position_m)
        return np.interp(position_m, along, self.across[rows]), np.interp(position_m, along, self.up[rows])

    def stretch_path(self, stretch: Stretch) -> tuple[Matrix, Vector]:
        """Vertices of a stretch with its two ends, shape (n, 2), and their positions from its start, shape (n,)."""
        rows = slice(self.first[stretch.part], self.first[stretch.part + 1])
        along, path = self.position_m[rows], self.part_path(stretch.part)
        total, end = float(along[-1]), stretch.end_m
        if self.closed[stretch.part] and end <= stretch.start_m:
            path, along, end = (
                np.concatenate((path, path[1:])),
                np.concatenate((along, along[1:] + total)),
                end + total,
            )
        inner = (along > stretch.start_m + _SAME_PLACE_M) & (along < end - _SAME_PLACE_M)
        ends = np.array([stretch.start_m, end])
        corner = np.column_stack([np.interp(ends, along, path[:, axis]) for axis in (0, 1)])
        positions = np.concatenate((ends[:1], along[inner], ends[1:])) - stretch.start_m
        return np.concatenate((corner[:1], path[inner], corner[1:])), positions

    def keep(self, stretches: Sequence[Stretch]) -> Boundary:
        """The boundary that is left when only some stretches are real; who is inside stays as it was.

        A stretch over the whole of a ring keeps it a ring. Distances must be measured anew to the result.

        Raises
        ------
        GeometryError
            Nothing kept, or a stretch that the boundary doesn't have.
        """
        self._check(stretches)
        paths, closed, sources = [], [], []
        for stretch in stretches:
            whole = abs(stretch.end_m - stretch.start_m) >= self.length_m[stretch.part] - _SAME_PLACE_M
            paths.append(self.part_path(stretch.part) if whole else self.stretch_path(stretch)[0])
            closed.append(bool(whole and self.closed[stretch.part]))
            sources.append(self._source(stretch))
        return build(
            paths, closed, earth=self.earth, area=self.area, area_crs=self.area_crs, centre=self.centre,
            notes=self.notes, sources=tuple(sources),
        )  # fmt: skip

    def _source(self, stretch: Stretch) -> Stretch:
        """Where a stretch of this boundary lies on the one that it was cut from."""
        origin = self.sources[stretch.part]
        if self.closed[stretch.part]:
            return replace(stretch, part=origin.part)
        around = np.inf  # the whole ring's length, where this part runs over its start
        if origin.end_m < origin.start_m:
            around = float(self.length_m[stretch.part]) + origin.start_m - origin.end_m
        ends = (origin.start_m + position for position in (stretch.start_m, stretch.end_m))
        start, end = (position - around if position > around else position for position in ends)
        return Stretch(part=origin.part, start_m=start, end_m=end)

    def _check(self, stretches: Sequence[Stretch]) -> None:
        if not stretches:
            raise GeometryError(
                "No stretch of the boundary is kept.", "Keep at least one.", code="nothing kept"
            )
        for stretch in stretches:
            known = 0 <= stretch.part < self.parts
            length = float(self.length_m[stretch.part]) if known else 0.0
            slack = max(1.0, 1e-6 * length) if not self.is_plain else 1e-6 * length
            inside = known and 0.0 <= stretch.start_m <= length and 0.0 <= stretch.end_m <= length + slack
            forward = known and (self.closed[stretch.part] or stretch.start_m < stretch.end_m)
            if not (inside and forward):
                raise GeometryError(
                    f"The boundary has no stretch from {stretch.start_m:.10g} to {stretch.end_m:.10g} "
                    f"on part {stretch.part}"
                    + (
                        f", which is {length:.10g} long."
                        if known
                        else f"; its parts are 0 to {self.parts - 1}."
                    ),
                    "Mark the stretches on the map again; the area's file may have changed.",
                    code="no such stretch",
                )

    def in_frame(self, across: Vector) -> Vector:
        """Longitudes of units on the turn of the boundary's own; x unchanged for plain units."""
        return across if self.is_plain else into_window(across, self.centre)


def build(
    paths: Sequence[Matrix],
    closed: Sequence[bool],
    *,
    earth: Earth | None,
    area: Any,
    area_crs: CRS | None = None,
    centre: float,
    notes: tuple[Note, ...],
    sources: tuple[Stretch, ...] | None = None,
) -> Boundary:
    """Put finely cut paths together: positions along each, and the index of their segments."""
    vertices = np.concatenate(paths)
    counts = np.array([len(path) for path in paths], dtype=np.int64)
    first = np.concatenate(([0], np.cumsum(counts)))
    positions = []
    for path in paths:
        step = np.hypot(*np.diff(path, axis=0).T) if earth is None else earth.length_m(path[:, 0], path[:, 1])
        positions.append(np.concatenate(([0.0], np.cumsum(step))))
    points = vertices if earth is None else earth.centred(vertices[:, 0], vertices[:, 1])
    starts = np.ones(len(vertices), dtype=bool)
    starts[first[1:] - 1] = False
    start = np.flatnonzero(starts)
    # Plain units have a size of their own: a billionth of the whole; on the earth a tenth of a millimetre.
    tolerance = 1e-4 if earth is not None else 1e-9 * float(np.ptp(vertices, axis=0).max())
    return Boundary(
        across=np.ascontiguousarray(vertices[:, 0]),
        up=np.ascontiguousarray(vertices[:, 1]),
        first=first,
        closed=np.array(closed, dtype=bool),
        position_m=np.concatenate(positions),
        earth=earth,
        area=area,
        area_crs=area_crs,
        centre=centre,
        sources=sources
        or tuple(
            Stretch(part=part, start_m=0.0, end_m=float(position[-1]))
            for part, position in enumerate(positions)
        ),
        notes=notes,
        index=SegmentIndex.build(points[start], points[start + 1], tolerance=tolerance),
    )
