"""Text from data made harmless for a terminal: it is shown as it is, but can't steer anything."""

from __future__ import annotations

from typing import Final

# Characters that a terminal obeys, hides or reorders by: C0 and DEL, C1, soft hyphen, Arabic letter mark,
# Mongolian vowel separator, zero-width characters, line and paragraph separators, bidi embeddings and isolates, invisible
# operators, byte order mark, interlinear annotations, surrogates and the tag block.
_HARMFUL_RANGES: Final = (
    (0x00, 0x1F),
    (0x7F, 0x9F),
    (0xAD, 0xAD),
    (0x61C, 0x61C),
    (0x180E, 0x180E),
    (0x200B, 0x200F),
    (0x2028, 0x202E),
    (0x2060, 0x206F),
    (0xD800, 0xDFFF),
    (0xFEFF, 0xFEFF),
    (0xFFF9, 0xFFFB),
    (0xE0000, 0xE007F),
)
REPLACEMENT: Final = "\ufffd"
_TABLE: Final = {code: REPLACEMENT for low, high in _HARMFUL_RANGES for code in range(low, high + 1)}


def clean(text: str) -> str:
    """The text with every character that could steer a terminal replaced by U+FFFD.

    The result has the same number of characters, holds no line break, and can be encoded as UTF-8.

    Examples
    --------
    >>> clean("income")
    'income'
    >>> clean("a\\x1b[2Jb") == "a\\ufffd[2Jb"
    True
    """
    if text.isascii() and text.isprintable():
        return text
    return text.translate(_TABLE)


def quoted(text: str) -> str:
    """The cleaned text in double quotes, as messages show names and words."""
    return f'"{clean(text)}"'


def nearest(word: str, candidates: list[str] | tuple[str, ...]) -> str | None:
    """The candidate spelt most like `word`, or None when none comes near.

    Case does not count, so that "Income" is near "income" and even "INCOME" is.
    """
    import difflib  # only needed once something is misspelt

    folded = {candidate.casefold(): candidate for candidate in reversed(candidates)}
    found = difflib.get_close_matches(word.casefold(), list(folded), n=1, cutoff=0.6)
    return folded[found[0]] if found else None
