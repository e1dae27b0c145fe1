"""Layers read from files, as plain arrays of shapes with their coordinate system."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import shapely
from pyproj import CRS

from geo.arrays import Shapes, Vector
from geo.edges import Edges
from geo.errors import GeometryError
from geo.layer_files import Source, check_source
from geo.notes import counted
from geo.projection import read_crs

_DRIVERS: Final = {
    "GeoPackage": "GPKG",
    "Shapefile": "ESRI Shapefile",
    "GeoJSON": "GeoJSON",
    "FlatGeobuf": "FlatGeobuf",
}
# Everything else that the readers' library may carry. A driver that is not named here is still kept out by the
# first bytes, and by the check of the driver that answered.
_SKIPPED: Final = (
    "ADBC", "AIVector", "AmigoCloud", "ARCGEN", "AVCBin", "AVCE00", "CAD", "Carto", "CouchDB", "CSV", "CSW", "DB2ODBC",
    "DGN", "DGNv8", "DODS", "DWG", "DXF", "EDIGEO", "EEDA", "Elasticsearch", "ElasticSearch", "ESRIJSON", "FileGDB",
    "GDALG", "Geoconcept", "GeoRSS", "GFT", "GML", "GMLAS", "GMT", "GPSBabel", "GPSTrackMaker", "GPX", "GTFS", "HANA",
    "HTF", "HTTP", "Idrisi", "Interlis 1", "Interlis 2", "JML", "JP2OpenJPEG", "JSONFG", "KML", "LIBKML", "LVBAG",
    "MapInfo File", "MapML", "MBTiles", "MiraMonVector", "MongoDBv3", "MSSQLSpatial", "MVT", "MySQL", "NAS", "netCDF",
    "NGW", "OAPIF", "OCI", "ODBC", "ODS", "OGCAPI", "OGDI", "OGR_GMT", "OGR_OGDI", "OGR_PDS", "OGR_SDE", "OGR_VRT",
    "OpenAir", "OpenFileGDB", "OpenJUMP .jml", "OSM", "Parquet", "Arrow", "PCIDSK", "PDF", "PDS4", "PGDUMP", "PGeo",
    "PLSCENES", "PMTiles", "PostgreSQL", "REC", "S57", "SEGUKOOA", "SEGY", "Selafin", "SOSI", "SQLite", "SUA", "SVG",
    "SXF", "TIGER", "TileDB", "TopoJSON", "UK .NTF", "VDV", "VFK", "VICAR", "VRT", "Walk", "WAsP", "WFS", "XLS", "XLSX",
    "XODR", "XPlane", "GeoJSONSeq", "DAAS", "STACIT", "STACTA", "WMS", "WMTS", "WCS",
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Layer:
    """One layer of a file.

    Attributes
    ----------
    source
        The file.
    name
        The layer's own.
    shapes
        Shapely geometries in two dimensions, None where a row has none, shape (n,).
    crs
        What the file says, None where it says nothing.
    edges
        How the file says edges run.
    columns
        The columns that were asked for, each shape (n,).
    """

    source: Source
    name: str
    shapes: Shapes
    crs: CRS | None
    edges: Edges
    columns: Mapping[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class LayerInfo:
    """A layer before it is read: its name, the kind of its shapes, how many, its columns."""

    name: str
    kind: str
    rows: int
    columns: tuple[str, ...]


def list_layers(path: Path | str) -> tuple[LayerInfo, ...]:
    """The layers with shapes in a file.

    Raises
    ------
    GeometryError
        As `read_layer`.
    """
    source = check_source(path)
    if source.kind == "GeoParquet":
        from geo.parquet_layer import describe_parquet  # DuckDB only where a Parquet file is named

        names, rows = describe_parquet(source)
        return (LayerInfo(name=source.path.stem, kind="", rows=rows, columns=names),)
    return tuple(_info(source, name) for name in _layer_names(source))


def read_layer(path: Path | str, *, layer: str | None = None, columns: Sequence[str] = ()) -> Layer:
    """Read one layer of a GeoPackage, Shapefile, GeoJSON, FlatGeobuf or GeoParquet file, or of a zip with one of them.

    Parameters
    ----------
    path
        A local file.
    layer
        Which layer, needed where a file has several.
    columns
        Which columns to read beside the shapes.

    Raises
    ------
    GeometryError
        A file that `check_source` refuses, several layers and none named, no shapes, no such column, damaged.
    """
    source = check_source(path)
    if source.kind == "GeoParquet":
        from geo.parquet_layer import read_parquet  # DuckDB only where a Parquet file is named

        if layer not in (None, source.path.stem):
            raise _no_layer(source, str(layer), (source.path.stem,))
        raw, system, edges, values = read_parquet(source, columns)
        shapes = from_wkb(raw, source)
        return Layer(
            source=source, name=source.path.stem, shapes=shapes, crs=system, edges=edges, columns=values
        )
    chosen = _chosen(source, layer)
    info = _info(source, chosen)
    check_columns(source, columns, info.columns)
    meta, _, raw, values = _ask(
        source,
        lambda reader: reader.raw.read(source.address, layer=chosen, columns=list(columns), force_2d=True),
    )
    shapes = from_wkb(raw, source)
    return Layer(
        source=source,
        name=chosen,
        shapes=shapes,
        crs=_crs(meta["crs"], source),
        edges="straight",
        columns={str(name): np.asarray(value) for name, value in zip(meta["fields"], values)},
    )


def point_coordinates(layer: Layer) -> tuple[Vector, Vector]:
    """The coordinates of a layer of points, NaN where a row has none, each shape (n,).

    Raises
    ------
    GeometryError
        A row that is not one point.
    """
    shapes = layer.shapes
    kind = shapely.get_type_id(shapes)
    single = (kind == 0) | ((kind == 4) & (shapely.get_num_geometries(shapes) == 1))
    wrong = np.flatnonzero((kind >= 0) & ~single & ~shapely.is_empty(shapes))
    if len(wrong):
        raise GeometryError(
            f"{layer.source.name}: row {wrong[0] + 1} is a {shapes[wrong[0]].geom_type}, not a point; "
            f"so are {counted(len(wrong) - 1, 'other row')}.",
            "Give each unit one point.",
            code="wrong kind",
        )
    x, y = np.full(len(shapes), np.nan), np.full(len(shapes), np.nan)
    coordinates, index = shapely.get_coordinates(shapes, return_index=True)
    x[index], y[index] = coordinates.T
    return x, y


def from_wkb(raw: Any, source: Source) -> Shapes:
    """Shapes from their bytes.

    Raises
    ------
    GeometryError
        Names the first row whose bytes hold no shape, such as a ring that is not closed.
    """
    raw = np.asarray(raw, dtype=object)
    shapes: Shapes = shapely.from_wkb(raw, on_invalid="ignore")
    broken = np.flatnonzero(
        shapely.is_missing(shapes) & np.array([value is not None for value in raw], dtype=bool)
    )
    if len(broken):
        raise GeometryError(
            f"{source.name}: the shape of row {broken[0] + 1} is broken, such as a ring that does not close; "
            f"{counted(len(broken), 'shape')} in all.",
            "Mend it in the program that wrote the file.",
            code="damaged",
        )
    return shapes


def check_columns(source: Source, wanted: Sequence[str], known: Sequence[str]) -> None:
    """Refuse a column that a layer doesn't have."""
    for name in wanted:
        if name not in known:
            raise GeometryError(
                f"{source.name}: it has no column {name!r}.",
                f"Its columns are {', '.join(known)}." if known else "It has no columns.",
                code="no column",
            )


def damaged(source: Source) -> GeometryError:
    """The sentence for a file that its reader can't make sense of."""
    return GeometryError(
        f"{source.name}: it could not be read as {source.kind}; the file is damaged or incomplete.",
        "Fetch or write it again.",
        code="damaged",
    )


def _crs(text: str | None, source: Source) -> CRS | None:
    if not text:
        return None
    try:
        return read_crs(text)
    except GeometryError as error:
        raise GeometryError(f"{source.name}: {error.sentence}", error.remedy, code=error.code) from None


def _chosen(source: Source, layer: str | None) -> str:
    names = _layer_names(source)
    if layer is not None:
        if layer not in names:
            raise _no_layer(source, layer, names)
        return layer
    if len(names) > 1:
        raise GeometryError(
            f"{source.name}: it has {len(names)} layers: {', '.join(names[:12])}.",
            "Name the one that is meant.",
            code="layers",
        )
    return names[0]


def _no_layer(source: Source, layer: str, names: Sequence[str]) -> GeometryError:
    return GeometryError(
        f"{source.name}: it has no layer {layer!r}.", f"Its layers are {', '.join(names)}.", code="no layer"
    )


def _layer_names(source: Source) -> tuple[str, ...]:
    listed = _ask(source, lambda reader: reader.list_layers(source.address))
    names = tuple(str(name) for name, kind in listed if kind is not None)
    if not names:
        raise GeometryError(
            f"{source.name}: it holds a table without shapes.",
            "Read it as a table with coordinate columns, or name a file with shapes.",
            code="no geometry",
        )
    return names


def _info(source: Source, name: str) -> LayerInfo:
    found = _ask(source, lambda reader: reader.read_info(source.address, layer=name))
    if found.get("driver", _DRIVERS[source.kind]) != _DRIVERS[source.kind]:
        raise damaged(source)
    return LayerInfo(
        name=name,
        kind=str(found["geometry_type"]),
        rows=int(found["features"]),
        columns=tuple(str(column) for column in found["fields"]),
    )


def _ask(source: Source, question: Any) -> Any:
    """Ask the readers' library; whatever goes wrong inside it is a damaged file to a person."""
    import warnings

    reader = _reader()
    try:
        with warnings.catch_warnings():
            warnings.simplefilter(
                "ignore"
            )  # nobody sees a warning under a full screen; what matters is checked
            return question(reader)
    except GeometryError:
        raise
    except Exception as error:  # each reader has errors of its own, from index errors to GDAL's
        raise damaged(source) from error


def _reader() -> Any:
    """The readers' library, imported with all but four of its drivers left out."""
    import sys

    if "pyogrio" in sys.modules:
        import pyogrio
        import pyogrio.raw

        return pyogrio
    # GDAL speaks of a driver to skip that it doesn't have; nothing of it belongs on a full screen.
    during = {"GDAL_SKIP": ",".join(_SKIPPED), "CPL_LOG": os.devnull}
    before = {name: os.environ.get(name) for name in during}
    os.environ.update(during)
    try:
        import pyogrio  # carries GDAL: half a second, only where a layer is read
        import pyogrio.raw
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value
    return pyogrio
