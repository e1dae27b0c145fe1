"""Which files may hold a layer: local, regular, of a known kind by their name and by their first bytes."""

from __future__ import annotations

import re
import stat
import zipfile
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from geo.errors import GeometryError

KINDS: Final = {
    ".gpkg": "GeoPackage",
    ".shp": "Shapefile",
    ".geojson": "GeoJSON",
    ".json": "GeoJSON",
    ".fgb": "FlatGeobuf",
    ".parquet": "GeoParquet",
    ".geoparquet": "GeoParquet",
}
ENDINGS: Final = (*KINDS, ".zip")
_FIRST_BYTES: Final = {
    "GeoPackage": b"SQLite format 3\x00",
    "Shapefile": b"\x00\x00\x27\x0a",
    "FlatGeobuf": b"fgb",
    "GeoParquet": b"PAR1",
    "zip": b"PK\x03\x04",
}
_LOOK: Final = 4096
_UNPACKED: Final = 2_000_000_000  # bytes that a zip may hold
_RATIO: Final = 100.0  # times its own size, once that is large
_LARGE: Final = 50_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """A file that passed.

    Attributes
    ----------
    path
        Absolute, with links resolved.
    kind
        One of the values of `KINDS`.
    inner
        The member's name in a zip, else "".
    """

    path: Path
    kind: str
    inner: str = ""

    @property
    def name(self) -> str:
        """What to call it in a sentence."""
        shown = f"{self.path.name}, {self.inner}" if self.inner else self.path.name
        return "".join(character if character.isprintable() else "�" for character in shown)

    @property
    def address(self) -> str:
        """What the reader is given: always absolute, so that no prefix in a name is understood as a command."""
        return f"/vsizip/{{{self.path}}}/{self.inner}" if self.inner else str(self.path)


def check_source(path: Path | str) -> Source:
    """Refuse what is not a readable local file of a known kind.

    Raises
    ------
    GeometryError
        An address, a folder, a missing or empty file, an unknown ending, first bytes of something else, a zip
        with more than one layer file or too much in it.
    """
    text = str(path)
    if re.match(r"[A-Za-z][A-Za-z0-9+.-]*://", text) or text.lower().startswith(("/vsi", "\\vsi")):
        raise _refused(text, "is an address, not a file on this machine.", "Name a local file.", "address")
    place = Path(text)
    try:
        status = place.stat()
        place = place.resolve()
    except (OSError, ValueError) as error:
        missing = isinstance(error, FileNotFoundError)
        said = "there is no such file." if missing else "it can't be read."
        raise _refused(text, said, "Check its name and its permissions.", "no file") from None
    if stat.S_ISDIR(status.st_mode):
        raise _refused(place.name, "is a folder, not a file.", _inside(place), "folder")
    if not stat.S_ISREG(status.st_mode):
        raise _refused(place.name, "is not a regular file.", "Copy the layer to a file.", "no file")
    kind = "zip" if place.suffix.lower() == ".zip" else KINDS.get(place.suffix.lower())
    if kind is None:
        raise _refused(
            place.name,
            "its ending names no kind of layer that is read.",
            f"Use one of {', '.join(ENDINGS)}.",
            "kind",
        )
    if status.st_size == 0:
        raise _refused(place.name, "the file is empty.", "Fetch or write it again.", "damaged")
    try:
        with place.open("rb") as file:
            head = file.read(_LOOK)
    except OSError:
        raise _refused(
            place.name, "it may not be read.", "Ask for read permission on it.", "no file"
        ) from None
    if kind == "zip":
        _check_head(place.name, kind, head)
        return _in_zip(place)
    _check_head(place.name, kind, head)
    if kind == "Shapefile":
        _check_index(place.name, place.stem, (entry.name for entry in place.parent.iterdir()))
    return Source(path=place, kind=kind)


def _refused(name: str, said: str, remedy: str, code: str) -> GeometryError:
    shown = "".join(character if character.isprintable() else "�" for character in name)[:200]
    return GeometryError(f"{shown}: {said}", remedy, code=code)


def _inside(folder: Path) -> str:
    try:
        names = sorted(entry.name for entry in folder.iterdir() if entry.suffix.lower() in ENDINGS)
    except OSError:
        names = []
    return f"Name one file inside it: {', '.join(names[:8])}." if names else "Name one file inside it."


def _check_head(name: str, kind: str, head: bytes) -> None:
    if kind == "GeoJSON":
        text = head.removeprefix(b"\xef\xbb\xbf").lstrip()
        right = (
            text.startswith(b"{") and b"gdal_streamed_alg" not in head
        )  # a recipe of files to open, not a layer
    else:
        right = head.startswith(_FIRST_BYTES[kind])
    if not right:
        raise _refused(
            name,
            f"its ending says {kind}, but what stands in it is something else.",
            "Rename it by what it holds, or fetch it again.",
            "kind",
        )


def _check_index(name: str, stem: str, names: Iterable[str]) -> None:
    if f"{stem}.shx".lower() not in {other.lower() for other in names}:
        raise _refused(
            name,
            f"the file {stem}.shx that belongs to it is missing.",
            "Copy all files of the Shapefile.",
            "damaged",
        )


def _in_zip(place: Path) -> Source:
    """The one layer file in a zip, after its limits are checked; nothing is unpacked to the disk."""
    try:
        with zipfile.ZipFile(place) as packed:
            members = [member for member in packed.infolist() if not member.is_dir()]
            unpacked = sum(member.file_size for member in members)
            ratio = unpacked / max(place.stat().st_size, 1)
            if unpacked > _UNPACKED or (ratio > _RATIO and unpacked > _LARGE):
                raise _refused(
                    place.name,
                    f"unpacked it would hold {unpacked / 1e6:,.0f} MB, {ratio:,.0f} times its own size.",
                    "Unpack it yourself if you trust it, and name the file inside.",
                    "zip",
                )
            layers = [member for member in members if Path(member.filename).suffix.lower() in KINDS]
            if len(layers) != 1:
                found = ", ".join(member.filename for member in layers[:8]) or "none"
                raise _refused(
                    place.name,
                    f"it should hold one layer file, but holds {found}.",
                    "Unpack it and name the file inside.",
                    "zip",
                )
            if layers[0].flag_bits & 1:
                raise _refused(place.name, "it is locked with a password.", "Unpack it first.", "zip")
            inner = layers[0].filename
            kind = KINDS[Path(inner).suffix.lower()]
            if kind == "GeoParquet" or "{" in str(place) or "}" in str(place):
                raise _refused(
                    place.name, f"a {kind} is not read from a zip here.", "Unpack it first.", "zip"
                )
            with packed.open(inner) as file:
                _check_head(f"{place.name}, {inner}", kind, file.read(_LOOK))
            if kind == "Shapefile":
                folder = Path(inner).parent
                beside = (m.filename for m in members if Path(m.filename).parent == folder)
                _check_index(place.name, Path(inner).stem, (Path(other).name for other in beside))
    except (zipfile.BadZipFile, OSError, RuntimeError, NotImplementedError, EOFError):
        raise _refused(
            place.name, "the zip is damaged or incomplete.", "Fetch it again.", "damaged"
        ) from None
    return Source(path=place, kind=kind, inner=inner)
