"""CSV and TSV files: their header, and where a file that can't be read goes wrong."""

from __future__ import annotations

import codecs
import csv
from collections.abc import Iterator
from pathlib import Path

from study.errors import BAD_DATA, StudyError
from study.literal import clean

_CANDIDATES = (",", ";", "\t", "|")


def read_header(path: Path) -> tuple[str, tuple[str, ...]]:
    """The separator and the column names of a delimited file; a column without a name gets "column N".

    The separator is a tab for .tsv and .tab, else the one of , ; tab | that cuts the first line into most parts.

    Raises
    ------
    StudyError
        Status 3 when the first line is not UTF-8 or can't be parsed.
    """
    with path.open("rb") as stream:
        start = stream.read(2)
    if start in (codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE):
        raise StudyError(
            f"{clean(path.name)}: is UTF-16, not UTF-8.", "Save the file as UTF-8 text.", BAD_DATA
        )
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            line = stream.readline(2**20)
            separator = "\t" if path.suffix.lower() in (".tsv", ".tab") else _separator(line)
            stream.seek(0)
            names = next(csv.reader(stream, delimiter=separator, strict=True), [])
    except UnicodeDecodeError:
        raise (not_utf8(path) or _hopeless(path)) from None
    except csv.Error:
        raise StudyError(
            f"{clean(path.name)}: line 1, the header, is not valid CSV.", "Correct its quotes.", BAD_DATA
        ) from None
    return separator, tuple(name if name.strip() else f"column {i}" for i, name in enumerate(names, 1))


def _separator(line: str) -> str:
    counts = {candidate: len(next(csv.reader([line], delimiter=candidate), [])) for candidate in _CANDIDATES}
    return max(_CANDIDATES, key=lambda candidate: counts[candidate])


def not_utf8(path: Path) -> StudyError | None:
    """Where the first byte stands that is not UTF-8, or None when all are."""
    decoder = codecs.getincrementaldecoder("utf-8")()
    line = 1
    with path.open("rb") as stream:
        while block := stream.read(2**20):
            held = decoder.getstate()[0]  # bytes of a character cut by the block's end
            try:
                decoder.decode(block)
            except UnicodeDecodeError as error:
                at = max(error.start - len(held), 0)
                line += block.count(b"\n", 0, at)
                return StudyError(
                    f"{clean(path.name)}: line {line} holds a byte that is not UTF-8 (0x{block[at]:02X}).",
                    "Save the file as UTF-8 text.",
                    BAD_DATA,
                )
            line += block.count(b"\n")
    return None


def unreadable(path: Path, separator: str, width: int) -> StudyError:
    """The first line of a file that doesn't have the header's number of values, or a plain sentence when all have."""
    badly_encoded = not_utf8(path)
    if badly_encoded is not None:
        return badly_encoded
    try:
        for line, found in _widths(path, separator):
            if found != width:
                return StudyError(
                    f"{clean(path.name)}: line {line} has {found} {'value' if found == 1 else 'values'}, but the header has {width}.",
                    "Correct that line, or the quotes in or before it.",
                    BAD_DATA,
                )
    except csv.Error:
        pass
    return _hopeless(path)


def _hopeless(path: Path) -> StudyError:
    return StudyError(
        f"{clean(path.name)}: can't be read as a table.",
        "Check its separators, quotes and encoding.",
        BAD_DATA,
    )


def _widths(path: Path, separator: str) -> Iterator[tuple[int, int]]:
    with path.open(encoding="utf-8-sig", newline="") as stream:
        reader = csv.reader(stream, delimiter=separator)
        begin = 1
        for values in reader:
            if values:
                yield begin, len(values)
            begin = reader.line_num + 1
