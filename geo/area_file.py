"""A boundary from the file that a study names: the layer, what its coordinates mean, its outline."""

from __future__ import annotations

from pathlib import Path

from pyproj import CRS

from geo.boundary import Boundary
from geo.edges import Edges
from geo.errors import GeometryError
from geo.layers import Layer, read_layer
from geo.outline import boundary_of_area, boundary_of_line, refuse_degrees_as_plain
from geo.projection import PLAIN, read_crs, same_crs


def boundary_from_file(
    path: Path | str,
    *,
    layer: str | None = None,
    crs: str | None = None,
    line: bool = False,
    edges: Edges | None = None,
    gap: float | None = None,
) -> Boundary:
    """Read a treated area, or a boundary drawn as a line, from a file.

    Parameters
    ----------
    path, layer
        As `read_layer`.
    crs
        What a person says the coordinates are in, or ``"plain"``; needed where the file says nothing.
    line
        Whether the file holds a line instead of an area.
    edges
        What a person says of edges; None: what the file says.
    gap
        As `boundary_of_area`.

    Raises
    ------
    GeometryError
        As `read_layer` and `boundary_of_area`; or the person and the file disagree on the coordinate system.
    """
    found = read_layer(path, layer=layer)
    system = agreed_crs(found, crs)
    read_as = edges or found.edges
    if line:
        return boundary_of_line(found.shapes, crs=system, edges=read_as, what=found.source.name)
    return boundary_of_area(found.shapes, crs=system, edges=read_as, gap=gap, what=found.source.name)


def agreed_crs(layer: Layer, stated: str | None) -> CRS | str | None:
    """The coordinate system of a layer by its file and by a person, who must not contradict each other.

    Raises
    ------
    GeometryError
        They do; or plain units are declared for degrees or a web map.
    """
    if stated is None or stated.strip() == "":
        return layer.crs
    if stated.strip().lower() == PLAIN:
        refuse_degrees_as_plain(layer.crs, layer.source.name)
        return PLAIN
    system = read_crs(stated)
    if layer.crs is not None and not same_crs(system, layer.crs):
        raise GeometryError(
            f"{layer.source.name}: its coordinates are in {layer.crs.name} by the file, "
            f"but in {system.name} by the study.",
            "Leave the coordinate system out of the study, or correct the file.",
            code="crs",
        )
    return system
