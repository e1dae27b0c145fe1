"""The program's own version."""

from __future__ import annotations


def program_version() -> str:
    """The version of the installed program, or "(not installed)" in a bare checkout."""
    from importlib.metadata import PackageNotFoundError, version  # only where it is asked for

    try:
        return version("cutbank")
    except PackageNotFoundError:
        return "(not installed)"
