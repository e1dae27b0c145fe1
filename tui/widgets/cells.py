"""Words in cells: how wide they are, and how they are cut and aligned."""

from __future__ import annotations

from collections.abc import Sequence

from rich.cells import cell_len, set_cell_size

from tui.look import Look


def cell_width(words: str) -> int:
    """Return how many cells the words take on the screen."""
    return len(words) if words.isascii() else cell_len(words)


def fit(words: str, cells: int, look: Look) -> str:
    """Return the words, cut to at most so many cells; a cut is shown by an ellipsis (``~`` in ASCII)."""
    if cell_width(words) <= cells:
        return words
    if cells <= 0:
        return ""
    return set_cell_size(words, cells - 1).rstrip() + ("~" if look.ascii_only else "…")


def shape(counts: Sequence[int], look: Look) -> str:
    """Return a histogram one row high, a character a count; never a full cell, so that rows under each other stay apart."""
    levels = " .:-=#" if look.ascii_only else " ▁▂▃▄▅▆"
    most = max(counts, default=0)
    if most <= 0:
        return " " * len(counts)
    # Anything at all is seen: the lowest level is for 0 only.
    return "".join(levels[-(-count * (len(levels) - 1) // most)] for count in counts)


def pad_decimal(words: str, after: int) -> str:
    """Return a number with blanks after it, so that numbers set flush right stand under each other by their point.

    Parameters
    ----------
    words : str
        The number as text; words without a point end where a whole number would.
    after : int
        Cells from the point on, of the longest number in the column.
    """
    _, point, rest = words.partition(".")
    return words + " " * max(0, after - len(point + rest))
