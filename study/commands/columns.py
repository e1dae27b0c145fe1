"""`cutbank columns`: what a data file's columns hold."""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence
from pathlib import Path

from study.literal import clean

_LONGEST_NAME = 40  # characters; a longer name is cut, so that the table keeps its shape


def list_columns(source: Path, *, table: str | None) -> int:
    """Print one line a column: name, kind, missing and different values, range.

    Raises
    ------
    StudyError
        When the file can't be read.
    """
    from study.tables import describe_columns  # numpy and DuckDB

    found = describe_columns(source, table=table)
    estimated = any(column.distinct_is_estimate for column in found.columns)
    rows = [("column", "kind", "missing", "different", "range")]
    for column in found.columns:
        about = "~" if column.distinct_is_estimate else ""
        rows.append(
            (
                _cut(clean(column.name)),
                column.kind,
                f"{column.missing:,}",
                f"{about}{column.distinct:,}",
                _range(column.low, column.high, column.kind),
            )
        )
    many = "column" if len(found.columns) == 1 else "columns"
    print(
        f"{clean(source.name)}: {found.rows:,} {'row' if found.rows == 1 else 'rows'}, {len(found.columns)} {many}"
    )
    print()
    for line in _aligned(rows):
        print(line)
    if estimated:
        print("\n~ different values are estimated in files of over a million rows, within a few per cent")
    return 0


def _range(low: float | str | None, high: float | str | None, kind: str) -> str:
    if low is None or high is None:
        return ""
    if kind == "yes/no":
        return {(0.0, 1.0): "no to yes", (0.0, 0.0): "no", (1.0, 1.0): "yes"}[(float(low), float(high))]

    def number(value: float) -> str:
        # Years and the like read badly with a comma.
        return (
            (f"{value:,.0f}" if abs(value) >= 10_000 else f"{value:.0f}")
            if kind == "whole number"
            else f"{value:.6g}"
        )

    shown = [clean(value) if isinstance(value, str) else number(value) for value in (low, high)]
    return shown[0] if shown[0] == shown[1] else f"{shown[0]} to {shown[1]}"


def _cut(text: str) -> str:
    return text if len(text) <= _LONGEST_NAME else text[: _LONGEST_NAME - 3] + "..."


def _aligned(rows: Sequence[tuple[str, ...]]) -> list[str]:
    """Rows in columns two spaces apart; counts to the right, everything else to the left."""
    widths = [max(_cells(row[i]) for row in rows) for i in range(len(rows[0]))]
    lines = []
    for row in rows:
        parts = []
        for i, text in enumerate(row):
            gap = " " * (widths[i] - _cells(text))
            parts.append(gap + text if i in (2, 3) else text + gap)
        lines.append("  ".join(parts).rstrip())
    return lines


def _cells(text: str) -> int:
    """Terminal cells that the text takes: East Asian wide characters take two, combining marks none."""
    return sum(
        0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text
    )
