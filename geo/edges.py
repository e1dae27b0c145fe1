"""What an edge means: straight in its own coordinates, or the shortest path on the earth.

A straight edge of a seven by four degree box, read as straight in a projection instead, puts 17 % of the units
near it on the wrong side. So each edge is cut in its own coordinate system, before anything is transformed.
"""

from __future__ import annotations

from typing import Final, Literal

import numpy as np
from pyproj import CRS

from geo.arrays import Codes, Matrix, Vector
from geo.notes import Note, metres
from geo.projection import Earth, to_degrees

Edges = Literal["straight", "geodesic"]
SPACING_M: Final = 500.0  # a chord of this length keeps within 5 mm of its parallel at 45 degrees, 6 cm at 85
_FINEST: Final = 8  # times that a piece may be halved again where a projection shrinks the ground


def cut_edges(path: Matrix, crs: CRS, *, earth: Earth, edges: Edges, what: str) -> Matrix:
    """Longitude and latitude of a path, cut so finely that chords will do, shape (m, 2).

    Parameters
    ----------
    path
        Vertices in ``crs``, shape (n, 2); longitudes may leave -180..180 so that no edge jumps.
    """
    if edges == "geodesic":
        longitude, latitude = to_degrees(path[:, 0], path[:, 1], crs, earth=earth, what=what)
        return _along_geodesics(longitude, latitude, earth)
    if crs.is_geographic:
        pieces = _pieces(_bound_m(path, earth))
        cut = interpolate(path, pieces)
        longitude, latitude = to_degrees(cut[:, 0], cut[:, 1], crs, earth=earth, what=what)
        # A datum shift answers within -180..180: go back to the turn that the path was on.
        longitude = longitude - 360.0 * np.round((longitude - cut[:, 0]) / 360.0)
        return np.column_stack((longitude, latitude))
    scale = crs.axis_info[0].unit_conversion_factor or 1.0
    pieces = _pieces(np.hypot(*np.diff(path, axis=0).T) * scale)
    for _ in range(_FINEST):
        cut = interpolate(path, pieces)
        longitude, latitude = to_degrees(cut[:, 0], cut[:, 1], crs, earth=earth, what=what)
        chord = np.linalg.norm(np.diff(earth.centred(longitude, latitude), axis=0), axis=1)
        if not len(chord) or chord.max() <= 1.5 * SPACING_M:
            break
        edge = np.repeat(np.arange(len(pieces)), pieces)
        longest = np.zeros(len(pieces))
        np.maximum.at(longest, edge, chord)
        pieces = np.where(longest > 1.5 * SPACING_M, pieces * 2, pieces)
    return np.column_stack((_steady(longitude), latitude))


def interpolate(path: Matrix, pieces: Codes) -> Matrix:
    """Cut each of n - 1 edges in its own number of equal pieces; the vertices stay as they are."""
    edge = np.repeat(np.arange(len(pieces)), pieces)
    place = np.arange(len(edge)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    share = place / pieces[edge]
    cut = path[edge] + share[:, None] * (path[edge + 1] - path[edge])
    return np.concatenate((cut, path[-1:]))


def _pieces(length_m: Vector) -> Codes:
    return np.maximum(np.ceil(length_m / SPACING_M), 1.0).astype(np.int64)


def _bound_m(path: Matrix, earth: Earth) -> Vector:
    """No less than the length on the ground of edges that are straight in degrees."""
    step = np.radians(np.abs(np.diff(path, axis=0)))
    latitude = np.abs(path[:, 1])
    crosses = np.sign(path[1:, 1]) != np.sign(path[:-1, 1])
    nearest_equator = np.where(crosses, 0.0, np.minimum(latitude[1:], latitude[:-1]))
    east = step[:, 0] * np.cos(np.radians(nearest_equator))
    return np.asarray(earth.semi_major_m * 1.01 * np.hypot(east, step[:, 1]))


def _along_geodesics(longitude: Vector, latitude: Vector, earth: Earth) -> Matrix:
    azimuth, _, length = earth.geod.inv(longitude[:-1], latitude[:-1], longitude[1:], latitude[1:])
    azimuth, length = np.asarray(azimuth), np.asarray(length)
    pieces = _pieces(length)
    edge = np.repeat(np.arange(len(pieces)), pieces)
    place = np.arange(len(edge)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    there, up, _ = earth.geod.fwd(
        longitude[edge], latitude[edge], azimuth[edge], length[edge] * place / pieces[edge]
    )
    there, up = np.append(there, longitude[-1]), np.append(up, latitude[-1])
    vertex = np.append(np.cumsum(pieces) - pieces, len(edge))
    there[vertex], up[vertex] = longitude, latitude
    return np.column_stack((_steady(there), up))


def _steady(longitude: Vector) -> Vector:
    """The same places without a jump of more than half a turn from one to the next."""
    if len(longitude) < 2 or np.max(np.abs(np.diff(longitude))) <= 180.0:
        return longitude
    turns = np.concatenate(([0.0], np.cumsum(np.round(np.diff(longitude) / 360.0))))
    return longitude - 360.0 * turns


def edge_notes(paths: list[Matrix], crs: CRS, *, earth: Earth, edges: Edges) -> tuple[Note, ...]:
    """Say how long edges are read, where the two readings part by a metre or more."""
    if not crs.is_geographic:
        return ()
    worst, longest = 0.0, 0.0
    for path in paths:
        step = np.radians(np.abs(np.diff(path, axis=0)[:, 0]))
        middle = np.radians((path[1:, 1] + path[:-1, 1]) / 2.0)
        # The sagitta of a parallel over its great circle.
        bow = earth.semi_major_m * np.abs(np.sin(middle) * np.cos(middle)) * step**2 / 8.0
        worst = max(worst, float(bow.max(initial=0.0)))
        longest = max(longest, float(_bound_m(path, earth).max(initial=0.0)))
    if worst < 1.0:
        return ()
    read = "straight in longitude and latitude" if edges == "straight" else "the shortest path on the earth"
    other = "the shortest path" if edges == "straight" else "a straight line in longitude and latitude"
    return (
        Note(
            code="edges",
            severity="check" if worst >= 100.0 else "information",
            sentence=(
                f"Edges are read as {read}; the longest is {metres(longest)}, "
                f"and {other} would depart from it by up to {metres(worst)}."
            ),
            remedy=""
            if worst < 100.0
            else "Confirm how the outline was drawn, or give it with more vertices.",
        ),
    )
