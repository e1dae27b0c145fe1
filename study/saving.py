"""Files are written whole or not at all, readable by their owner only."""

from __future__ import annotations

import os
import secrets
from collections.abc import Callable
from pathlib import Path

from study.errors import BAD_STUDY, StudyError


def write_whole(path: Path, content: bytes) -> None:
    """Replace a file's content in one step.

    The bytes go to a temporary file in the same folder, reach the disk, and take the place of `path` by a rename:
    whoever reads `path`, even after a power cut, finds the old content or the new, never a part. The file's mode is
    0600. A symbolic link is followed, so that the file that it names is replaced and not the link.

    Raises
    ------
    StudyError
        When the folder is missing or can't be written to.
    """

    def fill(temporary: Path) -> None:
        descriptor = os.open(temporary, os.O_WRONLY | os.O_TRUNC | os.O_NOFOLLOW)
        with os.fdopen(descriptor, "wb") as stream:
            stream.write(content)

    fill_whole(path, fill)


def fill_whole(path: Path, fill: Callable[[Path], None]) -> None:
    """As `write_whole`, for a writer that wants a path: `fill` is called with the temporary file's.

    Raises
    ------
    StudyError
        When the folder is missing or can't be written to.
    """
    target = Path(os.path.realpath(path))
    temporary = target.with_name(f".{target.name}.{secrets.token_hex(4)}.part")
    try:
        if target.is_dir():
            raise IsADirectoryError(21, "it is a folder")
        os.close(os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600))
        try:
            fill(temporary)
            temporary.chmod(0o600)  # a writer may have put a file of its own there
            _sync(temporary)
            temporary.replace(target)
        except BaseException:
            temporary.unlink(missing_ok=True)
            raise
        _sync(target.parent)
    except OSError as error:
        raise StudyError(
            f"{path}: can't be written ({(error.strerror or 'unknown reason').lower()}).",
            "Choose a file in a folder that exists and that you may write to.",
            BAD_STUDY,
        ) from None


def _sync(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    except OSError:
        if (
            not path.is_dir()
        ):  # some network file systems can't sync a folder; the rename is done all the same
            raise
    finally:
        os.close(descriptor)
