"""Columns of a data file as arrays, and what a file's columns hold."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from estimation.arrays import Codes, Vector
from study.column_kinds import NUMERIC, ColumnKind, kind_of
from study.column_summary import ColumnInfo, TableDescription, describe_columns
from study.data_files import kind_of_file
from study.errors import BAD_DATA, BAD_STUDY, StudyError
from study.literal import clean, nearest, quoted
from study.table_source import OpenTable, identifier, open_table

__all__ = [
    "ColumnInfo",
    "Labels",
    "OpenTable",
    "Parts",
    "Table",
    "TableDescription",
    "count_rows",
    "describe_columns",
    "kind_of_file",
    "natural_key",
    "open_table",
    "parts_of",
    "read_table",
    "require_columns",
]


@dataclass(frozen=True, slots=True, kw_only=True)
class Labels:
    """A column of names.

    Attributes
    ----------
    codes
        Shape (n,): index into `levels`, −1 where missing.
    levels
        The different names in natural order ("2" before "10").
    """

    codes: Codes
    levels: tuple[str, ...]

    def texts(self) -> npt.NDArray[np.object_]:
        """The names row by row, shape (n,), None where missing."""
        return np.array([*self.levels, None], dtype=object)[self.codes]


@dataclass(frozen=True, slots=True, kw_only=True)
class Parts:
    """Columns by the part they play.

    Attributes
    ----------
    rows
        Number of rows read.
    numbers
        Shape (n,) each, NaN where missing; yes/no is 1 and 0.
    labels
        Columns that name something.
    row
        Shape (n,): each row's place in the file, from 0.
    value_labels
        Label by value (as text) by column, where the file has them.
    """

    rows: int
    numbers: Mapping[str, Vector]
    labels: Mapping[str, Labels]
    row: Codes
    value_labels: Mapping[str, Mapping[str, str]] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """Columns of a file, in file order.

    Attributes
    ----------
    rows
        Number of rows read.
    columns
        float64 with NaN for missing for numbers and yes/no, else object arrays of str or None. Whole numbers beyond
        2**53 are rounded.
    kinds
        Kind by column.
    row
        Shape (n,): each row's place in the file, from 0; differs from 0, 1, 2… where a condition left rows out.
    """

    rows: int
    columns: Mapping[str, npt.NDArray[Any]]
    kinds: Mapping[str, ColumnKind]
    row: Codes


def read_table(
    source: Path, columns: Sequence[str], *, table: str | None = None, rows: str | None = None
) -> Table:
    """Read some columns of a file; no other column is read.

    Raises
    ------
    StudyError
        Status 3 where the file can't be read or a number is infinite, 2 where a column is absent or the condition bad.
    """
    with open_table(source, columns=columns, table=table, rows=rows) as opened:
        require_columns(opened, dict.fromkeys(columns, ""))
        kinds = {name: kind_of(opened.types[name]) for name in columns}
        numbers = {name: "" for name in columns if kinds[name] in NUMERIC}
        parts = parts_of(opened, numbers=numbers, labels=[name for name in columns if name not in numbers])
    arrays = {
        name: parts.numbers[name] if name in numbers else parts.labels[name].texts() for name in columns
    }
    return Table(rows=parts.rows, columns=arrays, kinds=kinds, row=parts.row)


def count_rows(source: Path, rows_condition: str | None = None, *, table: str | None = None) -> int:
    """Number of rows that a condition lets through; of all rows for None."""
    with open_table(source, columns=(), table=table, rows=rows_condition) as opened:
        return int(opened.connection.execute(f"SELECT count(*) FROM {opened.from_clause}").fetchall()[0][0])


def require_columns(opened: OpenTable, parts: Mapping[str, str]) -> None:
    """Refuse names that the file doesn't have.

    Parameters
    ----------
    opened
        The file.
    parts
        The key that named it, by column; "" where none did.

    Raises
    ------
    StudyError
        Status 2, with the nearest name.
    """
    for name, part in parts.items():
        if name not in opened.names:
            near = nearest(name, opened.names)
            raise StudyError(
                f"{f'{part}: ' if part else ''}{clean(opened.path.name)} has no column {quoted(name)}.",
                f"Did you mean {quoted(near)}?"
                if near
                else f"See its columns with: cutbank columns {clean(opened.path.name)}",
                BAD_STUDY,
            )


def parts_of(opened: OpenTable, *, numbers: Mapping[str, str], labels: Sequence[str]) -> Parts:
    """Read columns of an open file.

    Parameters
    ----------
    opened
        The file, with all the columns.
    numbers
        What the column is to the study (such as "score"), by the name of each column to be read as numbers.
    labels
        Columns to be read as names, whatever they hold.

    Raises
    ------
    StudyError
        Status 3: a column that should hold numbers doesn't, or holds an infinite one.
    """
    for name, part in numbers.items():
        if kind_of(opened.types[name]) not in NUMERIC and not _is_empty(opened, name):
            raise _not_numeric(opened, name, part)
    place = _free_name(opened, "row")
    picked = [f"{as_number(opened, name)} AS {identifier(f'n{i}')}" for i, name in enumerate(numbers)]
    levels: list[list[str]] = []
    for i, name in enumerate(labels):
        text = _as_text(opened, name)
        found = opened.connection.execute(
            f"SELECT DISTINCT label FROM (SELECT {text} AS label FROM {opened.from_clause}) WHERE label IS NOT NULL ORDER BY 1"
        ).fetchall()
        levels.append([row[0] for row in found])
        listed = ", ".join("'" + level.replace("'", "''") + "'" for level in levels[-1])
        if listed:
            opened.connection.execute(f"CREATE TYPE {identifier(f'label {i}')} AS ENUM ({listed})")
        code = f"enum_code(CAST({text} AS {identifier(f'label {i}')}))" if listed else "CAST(NULL AS INTEGER)"
        picked.append(f"CAST({code} AS BIGINT) AS {identifier(f'l{i}')}")
    if opened.condition:
        picked.append(f"{identifier(place)} AS r")
    source = opened.numbered(place) if opened.condition else opened.from_clause
    picked = picked or ["1 AS one"]
    fetched = opened.connection.execute(f"SELECT {', '.join(picked)} FROM {source}").fetchnumpy()
    rows = len(next(iter(fetched.values())))
    row = (
        np.asarray(fetched.pop("r"), dtype=np.int64) if opened.condition else np.arange(rows, dtype=np.int64)
    )
    taken: dict[str, Vector] = {}
    for i, name in enumerate(numbers):
        taken[name] = _filled(fetched.pop(f"n{i}"))
        _refuse_infinite(opened, name, taken[name], row)
    return Parts(
        rows=rows,
        numbers=taken,
        labels={name: _naturally(fetched.pop(f"l{i}"), levels[i]) for i, name in enumerate(labels)},
        row=row,
        value_labels=opened.contents.value_labels if opened.contents else {},
    )


def as_number(opened: OpenTable, name: str) -> str:
    """SQL for a column as an eight-byte number.

    A four-byte number becomes the one that is written the same: its 52.3 is 52.3, not 52.29999924, which would lie below
    a cutoff of 52.3.
    """
    column = identifier(name)
    if kind_of(opened.types[name]) not in NUMERIC:
        return "CAST(NULL AS DOUBLE)"  # a column without any value, which may have got any type
    if opened.types[name] == "FLOAT":
        column = f"CAST({column} AS VARCHAR)"
    return f"CAST({column} AS DOUBLE)"


def natural_key(text: str) -> tuple[tuple[int, int, str], ...]:
    """Sorts "site 2" before "site 10"."""
    pieces = re.findall(r"[0-9]+|[^0-9]+", text)
    return tuple((0, int(piece), piece) if piece.isdecimal() else (1, 0, piece) for piece in pieces)


def _filled(values: npt.NDArray[Any]) -> Vector:
    if isinstance(values, np.ma.MaskedArray):
        return np.asarray(values.filled(np.nan), dtype=np.float64)
    return np.asarray(values, dtype=np.float64)


def _naturally(values: npt.NDArray[Any], levels: Sequence[str]) -> Labels:
    codes = values.filled(-1) if isinstance(values, np.ma.MaskedArray) else values
    order = sorted(range(len(levels)), key=lambda i: natural_key(levels[i]))
    rank = np.empty(len(levels) + 1, dtype=np.int64)
    rank[order], rank[-1] = np.arange(len(levels)), -1
    return Labels(codes=rank[np.asarray(codes, dtype=np.int64)], levels=tuple(levels[i] for i in order))


def _as_text(opened: OpenTable, name: str) -> str:
    """SQL for a column as names: whole numbers without a decimal point, empty text as missing."""
    column = identifier(name)
    if opened.types[name] in ("DOUBLE", "FLOAT"):
        return (
            f"CASE WHEN isnan({column}) THEN NULL "
            f"WHEN abs({column}) < 1e15 AND {column} = trunc({column}) THEN CAST(CAST({column} AS BIGINT) AS VARCHAR) "
            f"ELSE CAST({column} AS VARCHAR) END"
        )
    return f"nullif(CAST({column} AS VARCHAR), '')"


def _is_empty(opened: OpenTable, name: str) -> bool:
    counted = opened.connection.execute(f"SELECT count({_as_text(opened, name)}) FROM {opened.from_clause}")
    return bool(counted.fetchall()[0][0] == 0)


def _free_name(opened: OpenTable, wanted: str) -> str:
    taken = {name.casefold() for name in opened.names}
    while wanted in taken:
        wanted += " "
    return wanted


def _refuse_infinite(opened: OpenTable, name: str, values: Vector, row: Codes) -> None:
    infinite = np.isinf(values)
    if infinite.any():
        at = int(row[int(np.argmax(infinite))]) + 1
        raise StudyError(
            f"{clean(opened.path.name)}: column {quoted(name)} holds an infinite value, first in row {at:,}.",
            "Correct it, make it missing, or leave it out with data.rows.",
            BAD_DATA,
        )


def _not_numeric(opened: OpenTable, name: str, part: str) -> StudyError:
    """Why a column can't be read as numbers, and the first row that shows it, but not the value there."""
    what = f"{clean(opened.path.name)}: column {quoted(name)}{f', the {part},' if part else ''}"
    kind = kind_of(opened.types[name])
    if kind == "date":
        return StudyError(
            f"{what} holds dates, not numbers.", "Add a column that counts days, and name that one.", BAD_DATA
        )
    place = _free_name(opened, "row")
    column = f"CAST({identifier(name)} AS VARCHAR)"
    found = opened.connection.execute(
        f"SELECT {identifier(place)}, {column} FROM {opened.numbered(place)} "
        f"{'AND' if opened.condition else 'WHERE'} {column} IS NOT NULL AND TRY_CAST({column} AS DOUBLE) IS NULL "
        f"ORDER BY 1 LIMIT 1"
    ).fetchall()
    if not found:
        return StudyError(f"{what} holds text, not numbers.", "Name a column that holds numbers.", BAD_DATA)
    row, value = int(found[0][0]) + 1, str(found[0][1]).strip()
    how = "text"
    if re.fullmatch(r"[-+]?\d+,\d+|[-+]?\d{1,3}(\.\d{3})+,\d+", value):
        how = "a number with a decimal comma or a thousands comma"
    elif re.fullmatch(r"[-+]?\d{1,3}([, '’\u00a0\u202f]\d{3})+(\.\d+)?", value):
        how = "a number with thousands separators"
    return StudyError(
        f"{what} holds text, not numbers: row {row:,} is the first with {how}.",
        "Write numbers with a decimal point and no separators, or name another column.",
        BAD_DATA,
    )
