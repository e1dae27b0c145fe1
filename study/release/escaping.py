"""Text from data made harmless in every format that leaves."""

from __future__ import annotations

import html
import re
from typing import Final

from study.literal import clean

_LATEX: Final = {
    "\\": r"\textbackslash{}", "&": r"\&", "%": r"\%", "$": r"\$", "#": r"\#", "_": r"\_", "{": r"\{", "}": r"\}",
    "~": r"\textasciitilde{}", "^": r"\textasciicircum{}", "<": r"\textless{}", ">": r"\textgreater{}",
    "|": r"\textbar{}", '"': r"\textquotedbl{}", "\N{MINUS SIGN}": "$-$", "\N{NO-BREAK SPACE}": "~",
    "\N{EN DASH}": "--", "²": r"\textsuperscript{2}", "χ": r"$\chi$", "∞": r"$\infty$",
}  # fmt: skip
_MARKDOWN: Final = re.compile(r"([\\`*_{}\[\]<>()#+!|~^$&-])")
_NUMBER: Final = re.compile(r"-?\d[\d,]*(\.\d+)?")
# What a spreadsheet program takes for the beginning of a formula, also behind blanks.
_FORMULA: Final = re.compile(r"^\s*[=+\-@\uff1d\uff0b\uff0d\uff20]")


def for_html(text: str) -> str:
    """Text inside an element or a quoted attribute."""
    return html.escape(clean(text), quote=True)


def for_markdown(text: str) -> str:
    """Text inside a paragraph or a cell: every mark that could mean something is escaped."""
    text = clean(text)
    if _NUMBER.fullmatch(text):
        return text
    return _MARKDOWN.sub(r"\\\1", text)


def for_latex(text: str) -> str:
    """Text inside a paragraph or a cell."""
    return "".join(_LATEX.get(c, c) for c in clean(text))


def for_csv(text: str) -> str:
    """One cell: quoted where needed, and never the beginning of a formula; counts without their commas."""
    text = clean(text)
    if _NUMBER.fullmatch(text):
        return text.replace(",", "")
    if _FORMULA.match(text):
        text = "'" + text
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',;"\t') else text


def file_name(text: str) -> str:
    """A name for a file from a name in the data: letters, digits, - and _ of ASCII, never empty, never hidden."""
    kept = re.sub(r"[^A-Za-z0-9_-]+", "-", text).strip("-")[:60]
    return kept or "unnamed"
