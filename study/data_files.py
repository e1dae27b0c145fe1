"""Which files hold data that can be read, told by their names and by what stands there."""

from __future__ import annotations

import os
import re
import stat
from pathlib import Path
from typing import Final

from study.errors import BAD_DATA, StudyError
from study.literal import clean, nearest, quoted

DELIMITED: Final = (".csv", ".tsv", ".tab", ".txt")
PARQUET: Final = (".parquet", ".pq")
JSON_LINES: Final = (".jsonl", ".ndjson")
DATABASE: Final = (".duckdb", ".db", ".ddb")
STATISTICAL: Final = (".dta", ".sav", ".zsav", ".sas7bdat")
ENDINGS: Final = DELIMITED + PARQUET + JSON_LINES + DATABASE + STATISTICAL
_KINDS: Final = (
    (DELIMITED, "delimited text"),
    (PARQUET, "Parquet"),
    (JSON_LINES, "JSON lines"),
    (DATABASE, "DuckDB"),
    ((".dta",), "Stata"),
    ((".sav", ".zsav"), "SPSS"),
    ((".sas7bdat",), "SAS"),
)
_LATER: Final = (".xlsx", ".gpkg", ".shp", ".geojson", ".fgb")


def kind_of_file(path: Path) -> str | None:
    """The kind of data file that a name's ending promises, in a word or two; None when it is not read."""
    ending = path.suffix.lower()
    return next((kind for endings, kind in _KINDS if ending in endings), None)


def check_file(source: Path) -> None:
    """Refuse what is not a readable local file of a known kind with something in it.

    Raises
    ------
    StudyError
        Status 3.
    """
    shown = clean(source.name)
    if re.match(r"[A-Za-z][A-Za-z0-9+.-]+:/", str(source)):
        raise StudyError(
            f"{clean(str(source))}: is an address, not a file on this machine.",
            "Name a local file.",
            BAD_DATA,
        )
    try:
        status = source.stat()
    except FileNotFoundError:
        raise StudyError(
            f"{clean(str(source))}: there is no such data file.", _near_file(source), BAD_DATA
        ) from None
    except (OSError, ValueError) as error:
        reason = (getattr(error, "strerror", None) or "the name is not valid").lower()
        raise StudyError(
            f"{clean(str(source))}: can't be read ({reason}).",
            "Check its name and its permissions.",
            BAD_DATA,
        ) from None
    if stat.S_ISDIR(status.st_mode):
        raise StudyError(f"{shown}: is a folder, not a data file.", "Name a file inside it.", BAD_DATA)
    if not stat.S_ISREG(status.st_mode):
        raise StudyError(f"{shown}: is not a regular file.", "Copy the data to a file.", BAD_DATA)
    ending = source.suffix.lower()
    if ending not in ENDINGS:
        later = "in this version" if ending in _LATER else "by Cutbank"
        raise StudyError(
            f"{shown}: files ending in {quoted(ending)} are not read {later}."
            if ending
            else f"{shown}: the name has no ending that says what kind of file it is.",
            f"Use one of {', '.join(ENDINGS)}.",
            BAD_DATA,
        )
    if status.st_size == 0:
        raise StudyError(f"{shown}: the file is empty.", "Name a file with a header and rows.", BAD_DATA)
    if not os.access(source, os.R_OK):
        raise StudyError(f"{shown}: may not be read.", "Ask for read permission on it.", BAD_DATA)


def _near_file(source: Path) -> str:
    try:
        names = sorted(entry.name for entry in source.parent.iterdir() if entry.is_file())
    except OSError:
        return "Check the folder's name; it can't be listed."
    near = nearest(source.name, [name for name in names if name.lower().endswith(ENDINGS)])
    return (
        f"Did you mean {quoted(near)}?"
        if near
        else "Check the name; paths in a study are relative to its file."
    )
