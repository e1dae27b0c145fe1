"""What was found or changed on the way, kept as data so that a screen, a page or a log can show it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Severity = Literal["information", "check", "warning"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Note:
    """One thing that a person should know.

    Attributes
    ----------
    code
        A stable word or two.
    severity
        ``"information"``; ``"check"`` where a person should confirm; ``"warning"`` where answers may suffer.
    sentence
        What, with its numbers.
    remedy
        What can be done, or "".
    """

    code: str
    severity: Severity
    sentence: str
    remedy: str = ""


def counted(number: int, one: str, many: str | None = None) -> str:
    """A number with its noun: ``1 ring``, ``2 rings``, ``12,000 rings``."""
    return f"{number:,} {one if number == 1 else many or one + 's'}"


def metres(length: float) -> str:
    """A length for people: ``0.4 m``, ``350 m``, ``12.3 km``, ``1,204 km``."""
    if length >= 99_950:
        return f"{length / 1000:,.0f} km"
    if length >= 999.5:
        return f"{length / 1000:.1f} km"
    return f"{length:.0f} m" if length >= 9.95 else f"{length:.2g} m"
