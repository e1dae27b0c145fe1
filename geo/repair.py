"""Polygons made into one valid area, with a note for every change; nothing is mended silently.

Works on shapes in their own coordinate system, longitudes already free of jumps.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
import shapely

from geo.arrays import Mask, Shapes
from geo.errors import GeometryError
from geo.notes import Note, counted

_SHARE: Final = 1e-3  # an area that changes by more than this is for a person to confirm
GAP_SHARE: Final = 1e-5  # gaps narrower than this share of the extent are closed unless told otherwise


def pick(shapes: Shapes, *, lines: bool, what: str) -> tuple[Shapes, list[Note]]:
    """The polygons (or lines) among shapes, one part each, and what else there was.

    Raises
    ------
    GeometryError
        A missing shape, a coordinate that is not finite, or nothing of the wanted kind.
    """
    shapes = np.asarray(shapes, dtype=object)
    missing = np.flatnonzero(shapely.is_missing(shapes))
    if len(missing):
        raise GeometryError(
            f"{what}: {len(missing):,} of {counted(len(shapes), 'shape')} "
            f"{'has' if len(missing) == 1 else 'have'} no geometry, first number {missing[0] + 1}.",
            "The file may be incomplete; fetch it again, or leave those rows out.",
            code="no geometry",
        )
    coordinates, index = shapely.get_coordinates(shapes, return_index=True)
    broken = np.flatnonzero(~np.isfinite(coordinates).all(axis=1))
    if len(broken):
        raise GeometryError(
            f"{what}: shape {index[broken[0]] + 1} has a coordinate that is not a finite number.",
            "Mend that shape or leave it out.",
            code="not finite",
        )
    parts = shapely.get_parts(shapely.get_parts(shapely.get_parts(shapes)))  # collections within collections
    kind = shapely.get_type_id(parts)
    wanted: Mask = np.isin(kind, (1, 2)) if lines else kind == 3
    empty = shapely.is_empty(shapes)
    kept = parts[wanted & ~shapely.is_empty(parts)]
    noun = "line" if lines else "polygon"
    if not len(kept):
        found = "nothing" if not len(shapes) or empty.all() else _kinds(kind)
        raise GeometryError(
            f"{what}: there is no {noun} in it, but {found}.",
            "Name the layer that holds the treated area, or say that it is given as a line."
            if not lines
            else "Name the layer that holds the line.",
            code="empty" if found == "nothing" else "wrong kind",
        )
    notes = []
    if empty.any():
        notes.append(_left_out(counted(int(empty.sum()), "empty shape"), what))
    other = ~wanted & ~shapely.is_empty(parts)
    if other.any():
        notes.append(_left_out(_kinds(kind[other]), what))
    return kept, notes


def _left_out(found: str, what: str) -> Note:
    return Note(code="left out", severity="check", sentence=f"{what}: {found} left out.")


def _kinds(kind: Any) -> str:
    names = {
        0: "point",
        1: "line",
        2: "line",
        3: "polygon",
        4: "point",
        5: "line",
        6: "polygon",
        7: "collection",
    }
    words = [names.get(int(code), "shape") for code in kind]
    return ", ".join(counted(words.count(word), word) for word in dict.fromkeys(words))


def one_area(polygons: Shapes, *, gap: float | None, unit: str, what: str) -> tuple[Any, list[Note]]:
    """Mend rings, dissolve parts and close gaps.

    Parameters
    ----------
    polygons
        Shape (n,), single polygons.
    gap
        Holes and slits narrower than this are closed, in the coordinates' own unit; None: a hundred thousandth of
        the extent; 0: none.
    unit
        The coordinates' unit, for sentences.

    Returns
    -------
    Polygon or MultiPolygon, and notes
    """
    notes: list[Note] = []
    polygons = _mended(polygons, notes, what)
    area = _only_polygons(shapely.union_all(polygons) if len(polygons) > 1 else polygons)
    if area.is_empty or area.area <= 0.0:
        raise GeometryError(f"{what}: its polygons hold no area.", "Check the file.", code="empty")
    parts = len(shapely.get_parts(area))
    if parts != len(polygons):
        notes.append(
            Note(
                code="dissolved",
                severity="information",
                sentence=f"{what}: {counted(len(polygons), 'polygon')} dissolved into {counted(parts, 'part')}.",
            )
        )
    left, low, right, top = area.bounds
    width = GAP_SHARE * max(right - left, top - low) if gap is None else gap
    if width > 0.0:
        area = _closed(area, width, unit, what, notes)
    return area, notes


def _mended(polygons: Shapes, notes: list[Note], what: str) -> Shapes:
    invalid = ~shapely.is_valid(polygons)
    if not invalid.any():
        return polygons
    before = float(np.abs(shapely.area(polygons[invalid])).sum())
    reason = shapely.is_valid_reason(polygons[invalid][0]).split("[")[0].strip().lower()
    mended = shapely.make_valid(polygons[invalid], method="structure", keep_collapsed=False)
    after = float(shapely.area(mended).sum())
    change = abs(after - before) / before if before else float(after > 0.0)
    notes.append(
        Note(
            code="mended",
            severity="check" if change > _SHARE else "information",
            sentence=(
                f"{what}: {counted(int(invalid.sum()), 'polygon')} crossed or touched themselves "
                f"({reason}) and {'was' if invalid.sum() == 1 else 'were'} mended; "
                f"their area changed from {before:.6g} to {after:.6g}."
            ),
            remedy="Look at the outline on the map before relying on it." if change > _SHARE else "",
        )
    )
    parts = shapely.get_parts(np.concatenate((polygons[~invalid], mended)))
    kept: Shapes = parts[(shapely.get_type_id(parts) == 3) & ~shapely.is_empty(parts)]
    return kept


def _only_polygons(area: Any) -> Any:
    parts = shapely.get_parts(area)
    parts = parts[shapely.get_type_id(parts) == 3]
    return parts[0] if len(parts) == 1 else shapely.multipolygons(parts)


def _closed(area: Any, width: float, unit: str, what: str, notes: list[Note]) -> Any:
    """Close holes narrower than ``width``, then slits where closing them shortens the outline."""
    before = area.length
    shells, filled = [], 0
    for part in shapely.get_parts(area):
        rings = np.array([shapely.Polygon(ring) for ring in part.interiors], dtype=object)
        narrow = shapely.is_empty(shapely.buffer(rings, -width / 2.0))
        filled += int(narrow.sum())
        holes = [ring for ring, closed in zip(part.interiors, narrow) if not closed]
        shells.append(shapely.Polygon(part.exterior, holes))
    # Where nothing is closed the outline keeps every vertex as it was.
    closed = shapely.union_all(shells) if filled else area
    outward = {"join_style": "mitre", "mitre_limit": 5.0}
    grown = shapely.buffer(shapely.buffer(closed, 3.0 * width, **outward), -3.0 * width, **outward)
    fewer = len(shapely.get_parts(grown)) < len(shapely.get_parts(closed))
    slits = not grown.is_empty and (fewer or grown.length < closed.length * (1.0 - _SHARE))
    if slits:
        closed = _only_polygons(grown)
    if filled or slits:
        done = ([counted(filled, "hole")] if filled else []) + (["slits"] if slits else [])
        notes.append(
            Note(
                code="gaps",
                severity="check",
                sentence=(
                    f"{what}: {' and '.join(done)} narrower than {width:.3g} {unit} closed; "
                    f"the outline went from {before:.6g} to {closed.length:.6g} {unit} long."
                ),
                remedy="Set the gap width to 0 to keep them.",
            )
        )
    return closed
