"""Stata, SPSS and SAS files, read by column and by chunk into the embedded database."""

from __future__ import annotations

import datetime
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

from study.errors import BAD_DATA, StudyError
from study.literal import clean

if TYPE_CHECKING:
    import duckdb

_CHUNK: Final = 250_000  # rows held as Python values at a time


@dataclass(frozen=True, slots=True, kw_only=True)
class Contents:
    """What a statistical file says about itself.

    Attributes
    ----------
    names
        Column names.
    value_labels
        Label by value (as text) by column.
    titles
        The label of a column, where it has one.
    """

    names: tuple[str, ...]
    value_labels: Mapping[str, Mapping[str, str]]
    titles: Mapping[str, str]


def contents_of(path: Path) -> Contents:
    """Column names and labels; no row is read.

    Raises
    ------
    StudyError
        Status 3 when the file is damaged.
    """
    _, meta = _read(path, metadataonly=True)
    return Contents(
        names=tuple(meta.column_names),
        value_labels={
            column: {number_text(value): str(label) for value, label in labels.items()}
            for column, labels in meta.variable_value_labels.items()
        },
        titles={name: label for name, label in meta.column_names_to_labels.items() if label},
    )


def load_columns(
    connection: duckdb.DuckDBPyConnection, path: Path, columns: Sequence[str], table: str
) -> None:
    """Make a table of the named columns only. System- and user-missing values, and empty text, become NULL.

    Raises
    ------
    StudyError
        Status 3 when the file is damaged.
    """
    quoted_table = '"' + table.replace('"', '""') + '"'
    types: dict[str, str] = {}
    offset = 0
    while True:
        values, meta = _read(path, usecols=list(columns), row_offset=offset, row_limit=_CHUNK)
        if not types:
            types = {name: _type(values[name], meta.readstat_variable_types[name]) for name in columns}
            declared = ", ".join(f"{_quote(name)} {kind}" for name, kind in types.items())
            connection.execute(f"CREATE TABLE {quoted_table} ({declared})")
        held = len(values[columns[0]]) if columns else 0
        if held:
            picked = ", ".join(
                f"nullif(unnest(?::{kind}[]), '')" if kind == "VARCHAR" else f"unnest(?::{kind}[])"
                for kind in types.values()
            )
            connection.execute(
                f"INSERT INTO {quoted_table} SELECT {picked}", [list(values[name]) for name in columns]
            )
        if held < _CHUNK:
            return
        offset += held


def number_text(value: object) -> str:
    """A value as text; a whole number has no decimal point."""
    return str(int(value)) if isinstance(value, float) and value.is_integer() else str(value)


def _quote(name: str) -> str:
    return '"' + name.replace('"', '""') + '"'


def _type(values: Sequence[object], stored: str) -> str:
    first = next((value for value in values if value is not None), None)
    if isinstance(first, datetime.datetime):
        return "TIMESTAMP"
    if isinstance(first, datetime.date):
        return "DATE"
    if isinstance(first, datetime.time):
        return "TIME"
    if stored == "string":
        return "VARCHAR"
    # A four-byte number keeps its type, so that 52.3 is not read as 52.29999924 and put below a cutoff of 52.3.
    return "BIGINT" if stored.startswith("int") else "FLOAT" if stored == "float" else "DOUBLE"


def _read(path: Path, **options: Any) -> tuple[Mapping[str, list[Any]], Any]:
    import pyreadstat  # only for these files: it takes 0.1 s to load

    readers: dict[str, Callable[..., Any]] = {
        ".dta": pyreadstat.read_dta,
        ".sav": pyreadstat.read_sav,
        ".zsav": pyreadstat.read_sav,
        ".sas7bdat": pyreadstat.read_sas7bdat,
    }
    try:
        # Plain lists, so that no data-frame package is needed.
        values, meta = readers[path.suffix.lower()](str(path), output_format="dict", **options)
    except (pyreadstat.ReadstatError, pyreadstat.PyreadstatError, UnicodeDecodeError, ValueError):
        raise StudyError(
            f"{clean(path.name)}: is damaged, or not a {path.suffix.lower()} file.",
            "Export it again from the program that made it.",
            BAD_DATA,
        ) from None
    return values, meta
