"""From shapes as they were stored to a boundary: checked, mended, dissolved, cut, ordered."""

from __future__ import annotations

from typing import Any

import numpy as np
import shapely
from pyproj import CRS

from geo.arrays import Matrix, Shapes
from geo.boundary import Boundary, build
from geo.edges import Edges, cut_edges, edge_notes
from geo.errors import GeometryError
from geo.notes import Note, counted
from geo.projection import (
    PLAIN,
    Earth,
    check_coordinates,
    earth_of,
    missing_crs,
    read_crs,
    region_notes,
)
from geo.repair import one_area, pick
from geo.turns import area_from_rings, circular_mean, pole, unrolled


def boundary_of_area(
    shapes: Shapes,
    *,
    crs: CRS | str | None,
    edges: Edges = "straight",
    gap: float | None = None,
    what: str = "The area",
) -> Boundary:
    """The boundary of a treated area given as polygons.

    Parameters
    ----------
    shapes
        Polygons and multipolygons, shape (n,); what else there is gets left out with a note.
    crs
        Their coordinate system, or ``"plain"`` for x and y in a plane. None is refused, never guessed.
    edges
        Whether edges are straight in their own coordinates or the shortest path on the earth.
    gap
        Gaps narrower than this are closed, in the coordinates' unit. None: a hundred thousandth of the extent. 0: none.
    what
        Whose shapes, to begin a sentence with.

    Raises
    ------
    GeometryError
        No coordinate system, coordinates that can't be meant, a missing shape, no polygon, an outline round a pole
        in degrees.
    """
    polygons, notes = pick(shapes, lines=False, what=what)
    system = _system(polygons, crs, what)
    if system is not None and system.is_geographic:
        polygons, turned = unrolled(polygons, what=what)
        notes += turned
    unit = "units" if system is None else f"{system.axis_info[0].unit_name}s"
    area, changes = one_area(polygons, gap=gap, unit=unit, what=what)
    notes += changes
    rings, holes_of = _rings(area)
    if system is None:
        order = _order(rings, None)
        return build(
            [rings[number] for number in order], [True] * len(rings), earth=None, area=area, centre=0.0,
            notes=tuple(notes),
        )  # fmt: skip
    earth = earth_of(system)
    notes += edge_notes(rings, system, earth=earth, edges=edges)
    cut = [cut_edges(ring, system, earth=earth, edges=edges, what=what) for ring in rings]
    cut, area, area_crs = _in_degrees(cut, holes_of, area, system, what)
    notes += region_notes(cut[0][:, 0], cut[0][:, 1], system)
    order = _order(cut, earth)
    return build(
        [cut[number] for number in order], [True] * len(cut), earth=earth, area=area, area_crs=area_crs,
        centre=_centre(cut), notes=tuple(notes),
    )  # fmt: skip


def boundary_of_line(
    shapes: Shapes, *, crs: CRS | str | None, edges: Edges = "straight", what: str = "The line"
) -> Boundary:
    """A boundary drawn as a line: it has a left and a right as drawn, and its loose ends have no side.

    Parameters and errors as `boundary_of_area`. Lines that meet end to start are joined; where some are drawn
    against the others, they are turned to follow the longer share, with a note.
    """
    lines, notes = pick(shapes, lines=True, what=what)
    system = _system(lines, crs, what)
    if system is not None and system.is_geographic:
        lines, turned = unrolled(lines, what=what)
        notes += turned
    paths = [_without_repeats(path) for path in _joined(lines, notes, what)]
    paths = [path for path in paths if len(path) > 1]
    if not paths:
        raise GeometryError(f"{what}: it has no length.", "Check the file.", code="empty")
    earth = None
    if system is not None:
        earth = earth_of(system)
        notes += edge_notes(paths, system, earth=earth, edges=edges)
        paths = [cut_edges(path, system, earth=earth, edges=edges, what=what) for path in paths]
        middle = circular_mean(np.concatenate(paths)[:, 0])
        paths = [_shifted(path, middle) for path in paths]
        notes += region_notes(paths[0][:, 0], paths[0][:, 1], system)
    closed = [bool(len(path) > 3 and np.all(path[0] == path[-1])) for path in paths]
    order = _order(paths, earth)
    return build(
        [paths[number] for number in order], [closed[number] for number in order], earth=earth, area=None,
        centre=0.0 if earth is None else _centre(paths), notes=tuple(notes),
    )  # fmt: skip


def _system(shapes: Shapes, crs: CRS | str | None, what: str) -> CRS | None:
    """The checked coordinate system; None for plain units."""
    x, y = shapely.get_coordinates(shapes).T
    if crs is None:
        raise missing_crs(x, y, what)
    if isinstance(crs, str) and crs.strip().lower() == PLAIN:
        return None
    system = read_crs(crs)
    check_coordinates(x, y, system, what)
    return system


def refuse_degrees_as_plain(crs: CRS | str | None, what: str) -> None:
    """Refuse plain units where the file itself says degrees: a metre would be a different length in each direction.

    Raises
    ------
    GeometryError
        ``crs``, the file's own, is geographic or a web map's.
    """
    if crs is None or (isinstance(crs, str) and crs.strip().lower() == PLAIN):
        return
    system = read_crs(crs)
    web = "pseudo-mercator" in system.name.lower() or "pseudo mercator" in system.name.lower()
    if system.is_geographic or web:
        why = "degrees are not lengths" if system.is_geographic else "its metres are not metres on the ground"
        raise GeometryError(
            f"{what}: its coordinates are in {system.name}, where {why}, so they can't be read as plain units.",
            "Leave out the declaration of plain units; distances are then measured on the earth.",
            code="degrees as plain",
        )


def _rings(area: Any) -> tuple[list[Matrix], list[int]]:
    """Rings with a stable start and direction (area on the left), and which shell each hole belongs to."""
    rings: list[Matrix] = []
    holes_of: list[int] = []
    for part in shapely.get_parts(area):
        shell = len(rings)
        rings.append(_steadied(shapely.get_coordinates(part.exterior), True))
        holes_of.append(-1)
        for hole in part.interiors:
            rings.append(_steadied(shapely.get_coordinates(hole), False))
            holes_of.append(shell)
    return rings, holes_of


def _without_repeats(path: Matrix) -> Matrix:
    return np.asarray(path[np.append(True, np.any(np.diff(path, axis=0) != 0.0, axis=1))])


def _steadied(ring: Matrix, anticlockwise: bool) -> Matrix:
    """A ring that starts at its lowest vertex (least x, then y) and runs with the area on its left."""
    path = _without_repeats(ring)[:-1]
    if shapely.is_ccw(shapely.linearrings(ring)) != anticlockwise:
        path = path[::-1]
    lowest = np.lexsort((path[:, 1], path[:, 0]))[0]
    path = np.roll(path, -lowest, axis=0)
    return np.concatenate((path, path[:1]))


def _order(paths: list[Matrix], earth: Earth | None) -> list[int]:
    """Longest first; between equals the one that starts lowest."""

    def length(path: Matrix) -> float:
        step = np.hypot(*np.diff(path, axis=0).T) if earth is None else earth.length_m(path[:, 0], path[:, 1])
        return round(float(step.sum()), 6)  # a rounding must not decide

    return sorted(range(len(paths)), key=lambda i: (-length(paths[i]), *paths[i][0]))


def _in_degrees(
    cut: list[Matrix], holes_of: list[int], area: Any, system: CRS, what: str
) -> tuple[list[Matrix], Any, CRS | None]:
    """Rings on one turn and the polygon that says who is inside; round a pole that stays as it was given."""
    open_ring = [abs(ring[-1, 0] - ring[0, 0]) > 180.0 for ring in cut]
    near_pole = any(np.abs(ring[:, 1]).max() > 89.999 for ring in cut)
    if any(open_ring) or (near_pole and not system.is_geographic):
        if system.is_geographic:
            raise pole(what)
        return cut, area, system
    middle = circular_mean(np.concatenate(cut)[:, 0])
    out: list[Matrix] = []
    for ring, owner in zip(cut, holes_of):
        about = middle if owner < 0 else (out[owner][:, 0].min() + out[owner][:, 0].max()) / 2.0
        out.append(_shifted(ring, float(about)))
    shapes = area_from_rings(out, holes_of)
    if not shapely.is_valid(shapes):  # rings that touched may cross by a rounding
        shapes = shapely.make_valid(shapes, method="structure", keep_collapsed=False)
    return out, shapes, None


def _shifted(path: Matrix, about: float) -> Matrix:
    middle = (path[:, 0].min() + path[:, 0].max()) / 2.0
    return np.asarray(path - (360.0 * np.round((middle - about) / 360.0), 0.0))


def _centre(paths: list[Matrix]) -> float:
    longitude = np.concatenate(paths)[:, 0]
    return float((longitude.min() + longitude.max()) / 2.0)


def _joined(lines: Shapes, notes: list[Note], what: str) -> list[Matrix]:
    """Lines joined where one ends and another begins."""
    together = shapely.multilinestrings(list(shapely.get_parts(lines)))
    directed = shapely.get_parts(shapely.line_merge(together, directed=True))
    free = shapely.get_parts(shapely.line_merge(together))
    if len(free) == len(directed):
        return [shapely.get_coordinates(line) for line in directed]
    paths, turned = [], 0
    pieces = shapely.get_parts(lines)
    for line in free:
        path = shapely.get_coordinates(line)
        position = {tuple(place): number for number, place in enumerate(path)}
        along = against = 0.0
        for piece in pieces:
            step = shapely.get_coordinates(piece)[:2]
            here, there = (position.get(tuple(place), -9) for place in step)
            along += piece.length * (there - here == 1)
            against += piece.length * (here - there == 1)
        turned += bool(along and against)
        paths.append(path[::-1] if against > along else path)
    if turned:
        notes.append(
            Note(
                code="direction",
                severity="check",
                sentence=(
                    f"{what}: {counted(turned, 'line')} {'was' if turned == 1 else 'were'} drawn in pieces that run "
                    "against each other; left and right follow the longer share."
                ),
                remedy="Check the treated side on the map.",
            )
        )
    return paths
