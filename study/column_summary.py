"""What every column of a file holds: its kind, gaps, range and shape."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

from study.column_kinds import ColumnKind, kind_of
from study.table_source import OpenTable, identifier, open_table

BINS: Final = 16
_EXACT_UP_TO: Final = 1_000_000  # rows; beyond, different values are estimated, within about 2 %
_AT_ONCE: Final = 60  # columns a query: a file of thousands of columns must not make one endless query


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnInfo:
    """One column.

    Attributes
    ----------
    name, kind
        As in the file.
    missing, distinct
        Counts of rows and of different values.
    low, high
        Smallest and largest value: a number, a date as ISO text, or None for text and for a column without values.
    histogram
        Rows in each of 16 equal bins from low to high, infinite values left out; empty where there is no range.
    labels
        Label by value, where the file has value labels.
    label
        The column's own label, or None.
    distinct_is_estimate
        True where `distinct` is an estimate (files of over a million rows).
    """

    name: str
    kind: ColumnKind
    missing: int
    distinct: int
    low: float | str | None
    high: float | str | None
    histogram: tuple[int, ...]
    labels: Mapping[str, str] = field(default_factory=dict)
    label: str | None = None
    distinct_is_estimate: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class TableDescription:
    """A file's columns, in file order, and its number of rows."""

    rows: int
    columns: tuple[ColumnInfo, ...]


def describe_columns(source: Path, *, table: str | None = None, rows: str | None = None) -> TableDescription:
    """Look at every column of a file once for its range and once for its histogram.

    Raises
    ------
    StudyError
        Status 3 where the file can't be read, 2 where the table or the condition is wrong.
    """
    with open_table(source, table=table, rows=rows) as opened:
        found: list[ColumnInfo] = []
        count = int(opened.connection.execute(f"SELECT count(*) FROM {opened.from_clause}").fetchall()[0][0])
        for start in range(0, len(opened.names), _AT_ONCE):
            found += _described(opened, opened.names[start : start + _AT_ONCE], count)
    return TableDescription(rows=count, columns=tuple(found))


def _described(opened: OpenTable, names: Sequence[str], rows: int) -> list[ColumnInfo]:
    exact = rows <= _EXACT_UP_TO
    picked: list[str] = []
    for name in names:
        value, axis = _value(opened, name), _axis(opened, name)
        different = f"count(DISTINCT {value})" if exact else f"approx_count_distinct({value})"
        finite = f"FILTER (WHERE isfinite({axis}))" if axis else ""
        shown = kind_of(opened.types[name]) != "text"
        picked += [
            f"count({value})",
            different,
            f"min({value})" if shown else "NULL",
            f"max({value})" if shown else "NULL",
            f"min({axis}) {finite}" if axis else "NULL",
            f"max({axis}) {finite}" if axis else "NULL",
        ]
    answer = opened.connection.execute(f"SELECT {', '.join(picked)} FROM {opened.from_clause}").fetchall()[0]
    ranges = {name: answer[6 * i + 4 : 6 * i + 6] for i, name in enumerate(names)}
    histograms = _histograms(opened, ranges)
    contents = opened.contents
    return [
        ColumnInfo(
            name=name,
            kind=kind_of(opened.types[name]),
            missing=rows - answer[6 * i],
            distinct=min(answer[6 * i + 1], answer[6 * i]),
            low=_plain(answer[6 * i + 2]),
            high=_plain(answer[6 * i + 3]),
            histogram=histograms.get(name, ()),
            labels=contents.value_labels.get(name, {}) if contents else {},
            label=contents.titles.get(name) if contents else None,
            distinct_is_estimate=not exact,
        )
        for i, name in enumerate(names)
    ]


def _value(opened: OpenTable, name: str) -> str:
    """SQL for a column with what counts as missing made NULL."""
    column = identifier(name)
    match kind_of(opened.types[name]):
        case "number":
            return f"nullif(CAST({column} AS DOUBLE), CAST('nan' AS DOUBLE))"
        case "text":
            return f"nullif(CAST({column} AS VARCHAR), '')"
        case _:
            return column


def _axis(opened: OpenTable, name: str) -> str | None:
    """SQL for a column as a number to draw it by, or None for text."""
    match kind_of(opened.types[name]):
        case "text":
            return None
        case "date":
            return f"CAST(epoch(CAST({identifier(name)} AS TIMESTAMP)) AS DOUBLE)"
        case _:
            return f"CAST({_value(opened, name)} AS DOUBLE)"


def _histograms(
    opened: OpenTable, ranges: Mapping[str, tuple[float | None, float | None]]
) -> dict[str, tuple[int, ...]]:
    picked: list[str] = []
    drawn: list[str] = []
    for name, (low, high) in ranges.items():
        if low is None or high is None or not math.isfinite(high - low):
            continue
        axis = _axis(opened, name)
        place = f"floor(({axis} - ({low!r})) / ({high - low!r}) * {BINS})" if high > low else "0"
        inside = f"CAST(greatest(0, least({BINS - 1}, {place})) AS TINYINT)"
        picked.append(f"histogram({inside}) FILTER (WHERE isfinite({axis}))")
        drawn.append(name)
    if not picked:
        return {}
    answer = opened.connection.execute(f"SELECT {', '.join(picked)} FROM {opened.from_clause}").fetchall()[0]
    return {
        name: tuple(counts.get(i, 0) for i in range(BINS)) for name, counts in zip(drawn, answer, strict=True)
    }


def _plain(value: Any) -> float | str | None:
    if value is None:
        return None
    return float(value) if isinstance(value, bool | int | float) else str(value)
