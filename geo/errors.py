"""What geometry can't do is said in one sentence, with what to do about it."""

from __future__ import annotations


class GeometryError(Exception):
    """A file, a coordinate system or an outline that can't be used as it is.

    Attributes
    ----------
    sentence
        What is wrong and where.
    remedy
        What to do.
    code
        One word or two by which a caller can tell the case, such as ``"no crs"`` or ``"layers"``.
    """

    def __init__(self, sentence: str, remedy: str, *, code: str = "geometry") -> None:
        super().__init__(f"{sentence}\n{remedy}")
        self.sentence = sentence
        self.remedy = remedy
        self.code = code


class Stopped(Exception):  # not an error: the person asked for it
    """The caller's ``should_stop`` said so; nothing was kept."""
