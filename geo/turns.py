"""Outlines that cross the antimeridian, in whatever form they are stored, brought to one unbroken strip of degrees."""

from __future__ import annotations

from typing import Any

import numpy as np
import shapely

from geo.arrays import Matrix, Shapes, Vector
from geo.errors import GeometryError
from geo.notes import Note, counted


def circular_mean(longitude: Vector) -> float:
    """The middle of longitudes in degrees, whatever turn each is on."""
    angle = np.radians(longitude)
    return float(np.degrees(np.arctan2(np.sin(angle).sum(), np.cos(angle).sum())))


def into_window(longitude: Vector, centre: float) -> Vector:
    """The same places with longitudes within half a turn of ``centre``; those already there unchanged."""
    return np.asarray(longitude - 360.0 * np.round((longitude - centre) / 360.0))


def unrolled(shapes: Shapes, *, what: str) -> tuple[Shapes, list[Note]]:
    """Polygons or lines in degrees, without jumps and on one turn, so that parts that meet at 180 do meet.

    Raises
    ------
    GeometryError
        An outline that runs round a pole, or round the globe.
    """
    everywhere = shapely.get_coordinates(shapes)
    if np.ptp(everywhere[:, 0]) <= 180.0:
        return shapes, []
    centre = circular_mean(everywhere[:, 0])
    jumps = 0
    out = []
    for shape in shapes:
        if shape.geom_type != "Polygon":
            path, crossed = _smooth(shapely.get_coordinates(shape), False, what)
            shift = 360.0 * np.round((path[:, 0].mean() - centre) / 360.0)
            out.append(shapely.LineString(path - (shift, 0.0)))
            jumps += crossed
            continue
        shell, crossed = _smooth(shapely.get_coordinates(shape.exterior), True, what)
        shell[:, 0] -= 360.0 * np.round((_middle(shell) - centre) / 360.0)
        holes = []
        for ring in shape.interiors:
            hole, _ = _smooth(shapely.get_coordinates(ring), True, what)
            hole[:, 0] -= 360.0 * np.round((_middle(hole) - _middle(shell)) / 360.0)
            holes.append(hole)
        out.append(shapely.Polygon(shell, holes))
        jumps += crossed
    result = np.array(out, dtype=object)
    if np.ptp(shapely.get_coordinates(result)[:, 0]) >= 359.999:
        raise _round_the_globe(what)
    changed = jumps or np.any(shapely.get_coordinates(result) != everywhere)
    sentence = f"{what}: read as crossing 180 degrees"
    sentence += (
        f", where {counted(jumps, 'outline')} jumped."
        if jumps
        else "; its parts were brought together there."
    )
    return result, [Note(code="antimeridian", severity="information", sentence=sentence)] if changed else []


def _middle(path: Matrix) -> float:
    return float((path[:, 0].min() + path[:, 0].max()) / 2.0)


def _smooth(path: Matrix, closed: bool, what: str) -> tuple[Matrix, int]:
    """A path without jumps over half a turn, and whether it had any."""
    path = path.copy()
    step = np.diff(path[:, 0])
    if np.max(np.abs(step), initial=0.0) >= 359.999:
        raise _round_the_globe(what)
    if np.max(np.abs(step), initial=0.0) <= 180.0:
        return path, 0
    path[1:, 0] -= 360.0 * np.cumsum(np.round(step / 360.0))
    if closed and abs(path[-1, 0] - path[0, 0]) > 180.0:
        raise pole(what)
    return path, 1


def pole(what: str) -> GeometryError:
    """The refusal of an outline round a pole in degrees."""
    return GeometryError(
        f"{what}: its outline runs round a pole, where longitudes say nothing about inside and outside.",
        'Give it in a polar projected system, such as "EPSG:3413" (north) or "EPSG:3031" (south).',
        code="pole",
    )


def _round_the_globe(what: str) -> GeometryError:
    return GeometryError(
        f"{what}: it runs round the whole globe from 180 degrees west to 180 degrees east.",
        "Give the area in a polar projected system, or cut it to where units are.",
        code="pole",
    )


def area_from_rings(rings: list[Matrix], holes_of: list[int]) -> Any:
    """A polygon from cut rings: ``holes_of`` is -1 for a shell, else the number of the ring that it is a hole of."""
    shells = [number for number, owner in enumerate(holes_of) if owner < 0]
    polygons = []
    for shell in shells:
        holes = [rings[number] for number, owner in enumerate(holes_of) if owner == shell]
        polygons.append(shapely.Polygon(rings[shell], holes))
    return polygons[0] if len(polygons) == 1 else shapely.multipolygons(polygons)
