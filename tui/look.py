"""Colours, marks and themes: the one place that knows how quiet the program looks.

A drawing says what a cell is (an `Ink` on a `Paper`); a `Look` says what that means on this terminal. So a
drawing never changes when the theme does, and without colour the marks alone carry the meaning.
All colours exist in the 256-colour palette: a session over SSH, where true colour is rarely announced, looks the same.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum
from functools import lru_cache

from rich.style import Style
from textual.theme import Theme


class Ink(IntEnum):
    """What the foreground of a cell stands for."""

    TEXT = 0
    MUTED = 1
    FAINT = 2
    ACCENT = 3
    STRONG = 4
    EDGE = 5
    WARNING = 6


class Paper(IntEnum):
    """What the background of a cell stands for."""

    PLAIN = 0
    BAND = 1
    CURSOR = 2


DARK = "cutbank-dark"
LIGHT = "cutbank-light"
TERMINAL = "cutbank-terminal"
THEME_NAMES = (DARK, LIGHT, TERMINAL)

# Every ink as a rich style definition. "" is the terminal's own foreground. Without 256 colours the greys are
# made by the dim attribute: in many 16-colour palettes "bright black" is the background itself.
_INKS: dict[str, dict[Ink, str]] = {
    DARK: {
        Ink.TEXT: "default",
        Ink.MUTED: "color(246)",
        Ink.FAINT: "color(240)",
        Ink.ACCENT: "color(75)",
        Ink.STRONG: "bold default",
        Ink.EDGE: "color(67)",
        Ink.WARNING: "color(215)",
    },
    LIGHT: {
        Ink.TEXT: "default",
        Ink.MUTED: "color(242)",
        Ink.FAINT: "color(249)",
        Ink.ACCENT: "color(25)",
        Ink.STRONG: "bold default",
        Ink.EDGE: "color(67)",
        Ink.WARNING: "color(130)",
    },
    TERMINAL: {
        Ink.TEXT: "default",
        Ink.MUTED: "dim default",
        Ink.FAINT: "dim default",
        Ink.ACCENT: "cyan",
        Ink.STRONG: "bold default",
        Ink.EDGE: "dim cyan",
        Ink.WARNING: "yellow",
    },
}
_PAPERS: dict[str, dict[Paper, str]] = {
    DARK: {Paper.PLAIN: "", Paper.BAND: " on color(235)", Paper.CURSOR: " on color(238)"},
    LIGHT: {Paper.PLAIN: "", Paper.BAND: " on color(255)", Paper.CURSOR: " on color(252)"},
    TERMINAL: {Paper.PLAIN: "", Paper.BAND: "", Paper.CURSOR: " reverse"},
}


@lru_cache(maxsize=512)
def _style(theme: str, ink: int, paper: int, bold: bool, colour: bool) -> Style:
    words = _INKS[theme][Ink(ink)] + _PAPERS[theme][Paper(paper)] + (" bold" if bold else "")
    if "reverse" in words:
        # Reversed, every ink would become a background of its own: a patchwork instead of one bar.
        words = "bold reverse" if "bold" in words else "reverse"
    style = Style.parse(words)
    return style if colour else style.without_color


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """How the program looks on one terminal.

    Parameters
    ----------
    theme : str
        One of `THEME_NAMES`.
    ascii_only : bool
        Draw with the 95 printable ASCII characters.
    colour : bool
        False under NO_COLOR: attributes (bold, dim, reverse) remain, colours do not.
    """

    theme: str = DARK
    ascii_only: bool = False
    colour: bool = True

    def style(self, ink: Ink, paper: Paper = Paper.PLAIN, *, bold: bool = False) -> Style:
        """Return the style of a cell; never None, which Textual's colour filters cannot bear."""
        # Without colour a tint cannot show, so the marks of the terminal palette (reverse, dim) are used.
        theme = self.theme if self.colour else TERMINAL
        return _style(theme, int(ink), int(paper), bold, self.colour)

    @property
    def shows_tints(self) -> bool:
        """Whether a background tint can be told from the background itself."""
        return self.colour and self.theme != TERMINAL


def detect_look(
    environment: Mapping[str, str], *, theme: str | None = None, ascii_only: bool = False
) -> Look:
    """Choose the look from what the terminal says of itself.

    Parameters
    ----------
    environment : mapping
        The process environment: NO_COLOR, TERM, COLORTERM and COLORFGBG are read.
    theme : str, optional
        One of `THEME_NAMES`, when the person has chosen; detection then decides only about colour.
    ascii_only : bool
        Passed on.

    Notes
    -----
    NO_COLOR counts when it is set and not empty. COLORFGBG ends in the number of the background colour, of which 7 and
    9 to 15 are light.
    """
    colour = not environment.get("NO_COLOR") and environment.get("TERM", "") != "dumb"
    if theme is None:
        many = "256" in environment.get("TERM", "") or environment.get("COLORTERM", "") in (
            "truecolor",
            "24bit",
        )
        background = environment.get("COLORFGBG", "").rpartition(";")[2]
        light = background.isdigit() and (int(background) == 7 or int(background) >= 9)
        theme = TERMINAL if not many else LIGHT if light else DARK
    return Look(theme=theme, ascii_only=ascii_only, colour=colour)


def _theme(name: str, *, dark: bool, accent: str, muted: str, faint: str, cursor: str, warning: str) -> Theme:
    plain = "ansi_default"
    return Theme(
        name=name,
        ansi=True,
        dark=dark,
        primary=accent,
        secondary=accent,
        accent=accent,
        warning=warning,
        error=warning,
        success=accent,
        foreground=plain,
        background=plain,
        surface=plain,
        panel=plain,
        boost=plain,
        variables={
            "ansi-background": "ansi_black" if dark else "ansi_white",
            "ansi-foreground": "ansi_white" if dark else "ansi_black",
            "text-muted": muted,
            "text-disabled": faint,
            "foreground-muted": muted,
            "cutbank-muted": muted,
            "cutbank-faint": faint,
            "cutbank-cursor": cursor,
            "border": faint,
            "border-blurred": faint,
            "scrollbar": faint,
            "scrollbar-hover": muted,
            "scrollbar-active": muted,
            "scrollbar-background": plain,
            "scrollbar-background-hover": plain,
            "scrollbar-background-active": plain,
            "scrollbar-corner-color": plain,
            "block-cursor-foreground": plain,
            "block-cursor-background": cursor,
            "block-cursor-text-style": "bold" if cursor != plain else "reverse",
            "block-cursor-blurred-foreground": plain,
            "block-cursor-blurred-background": plain,
            "block-cursor-blurred-text-style": "none",
            "block-hover-background": plain,
            "footer-key-foreground": accent,
            "footer-description-foreground": muted,
            "input-cursor-background": plain,
            "input-cursor-foreground": plain,
            "input-cursor-text-style": "reverse",
            "input-selection-background": cursor if cursor != plain else "ansi_blue",
            "input-selection-foreground": plain,
        },
    )


# The hexadecimal values are those of the palette numbers above.
THEMES: tuple[Theme, ...] = (
    _theme(
        DARK,
        dark=True,
        accent="#5fafff",
        muted="#949494",
        faint="#585858",
        cursor="#444444",
        warning="#ffaf5f",
    ),
    _theme(
        LIGHT,
        dark=False,
        accent="#005faf",
        muted="#6c6c6c",
        faint="#b2b2b2",
        cursor="#d0d0d0",
        warning="#af5f00",
    ),
    _theme(
        TERMINAL,
        dark=True,
        accent="ansi_cyan",
        muted="ansi_default",
        faint="ansi_default",
        cursor="ansi_default",
        warning="ansi_yellow",
    ),
)
