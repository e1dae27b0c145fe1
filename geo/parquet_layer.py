"""GeoParquet: shapes as well-known bytes in one column, what they mean in the file's own metadata."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from pyproj import CRS

from geo.edges import Edges
from geo.errors import GeometryError
from geo.layer_files import Source
from geo.projection import read_crs

if TYPE_CHECKING:
    import duckdb

_DEFAULT: Final = "OGC:CRS84"  # GeoParquet 1.1: a column that says nothing is in longitude and latitude


def describe_parquet(source: Source) -> tuple[tuple[str, ...], int]:
    """Column names beside the shapes, and the number of rows."""
    with _connection(source) as connection:
        about = _about(connection, source)
        names = _names(connection, source)
        rows = _query(connection, source, "SELECT count(*) FROM read_parquet(?)").fetchone()
    return tuple(name for name in names if name != about["primary_column"]), int(rows[0] if rows else 0)


def read_parquet(source: Source, columns: Sequence[str]) -> tuple[Any, CRS | None, Edges, Mapping[str, Any]]:
    """The bytes of the shapes, their coordinate system and edges, and the columns asked for.

    Raises
    ------
    GeometryError
        No ``geo`` metadata, shapes in another encoding, no such column, a damaged file.
    """
    from geo.layers import check_columns, damaged

    with _connection(source) as connection:
        about = _about(connection, source)
        primary = str(about["primary_column"])
        column = about.get("columns", {}).get(primary)
        if not isinstance(column, dict):
            raise damaged(source)
        if column.get("encoding") != "WKB":
            raise GeometryError(
                f"{source.name}: its shapes are stored as {column.get('encoding')}, which is not read.",
                "Write them as WKB.",
                code="kind",
            )
        check_columns(source, columns, [name for name in _names(connection, source) if name != primary])
        wanted = ", ".join(f'"{name.replace(chr(34), chr(34) * 2)}"' for name in (primary, *columns))
        found = _query(connection, source, f"SELECT {wanted} FROM read_parquet(?)").fetchnumpy()
    raw = _plain(found[primary])
    shapes = np.empty(len(raw), dtype=object)
    shapes[:] = [None if value is None else bytes(value) for value in raw]
    values = {name: _plain(found[name]) for name in columns}
    return shapes, _system(column, source), _edges(column, source), values


def _plain(column: Any) -> Any:
    """A column without a mask: NaN for a missing number, None for anything else that is missing."""
    if not np.ma.isMaskedArray(column):
        return column
    if column.dtype.kind in "iufb" and column.mask.any():
        return np.ma.filled(column.astype(np.float64), np.nan)
    return np.ma.filled(column.astype(object), None) if column.mask.any() else column.data


def _edges(column: Mapping[str, Any], source: Source) -> Edges:
    edges = column.get("edges", "planar")
    if edges not in ("planar", "spherical"):
        raise GeometryError(
            f"{source.name}: it says that edges are {str(edges)[:40]!r}, which is not known here.",
            "Write it with planar or spherical edges.",
            code="kind",
        )
    return "geodesic" if edges == "spherical" else "straight"


def _system(column: Mapping[str, Any], source: Source) -> CRS | None:
    if "crs" in column and column["crs"] is None:
        return None
    stated = column.get("crs", _DEFAULT)
    try:
        return read_crs(json.dumps(stated) if isinstance(stated, dict) else str(stated))
    except GeometryError as error:
        raise GeometryError(f"{source.name}: {error.sentence}", error.remedy, code=error.code) from None


def _connection(source: Source) -> duckdb.DuckDBPyConnection:
    import duckdb  # a tenth of a second, only where a Parquet file is named

    connection = duckdb.connect(
        ":memory:", config={"autoinstall_known_extensions": False, "autoload_known_extensions": False}
    )
    # This file and nothing else on the machine.
    connection.execute("SET allowed_paths = [?]", [str(source.path)])
    connection.execute("SET enable_external_access = false")
    connection.execute("SET lock_configuration = true")
    return connection


def _query(connection: duckdb.DuckDBPyConnection, source: Source, query: str) -> Any:
    import duckdb  # as above

    from geo.layers import damaged

    # A name with a star or bracket in it would be taken for a pattern.
    if any(character in str(source.path) for character in "*?["):
        raise GeometryError(
            f"{source.name}: its name or folder has one of * ? [ in it, which can't be read from.",
            "Rename it.",
            code="no file",
        )
    try:
        return connection.execute(query, [str(source.path)])
    except duckdb.Error as error:
        raise damaged(source) from error


def _names(connection: duckdb.DuckDBPyConnection, source: Source) -> list[str]:
    return [
        str(row[0]) for row in _query(connection, source, "DESCRIBE SELECT * FROM read_parquet(?)").fetchall()
    ]


def _about(connection: duckdb.DuckDBPyConnection, source: Source) -> dict[str, Any]:
    rows = _query(connection, source, "SELECT key, value FROM parquet_kv_metadata(?)").fetchall()
    text = next((bytes(value) for key, value in rows if bytes(key) == b"geo"), None)
    try:
        about = json.loads(text) if text is not None else None
    except ValueError:
        about = None
    if not isinstance(about, dict) or "primary_column" not in about:
        raise GeometryError(
            f"{source.name}: it is a Parquet table that says nothing about shapes.",
            "Read it as a table with coordinate columns, or write it as GeoParquet.",
            code="no geometry",
        )
    return about
