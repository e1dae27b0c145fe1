"""Which part a column plays in the study, and what changes when it is given another."""

from __future__ import annotations

from typing import Final

from study.document import Columns
from study.literal import quoted

SINGLE: Final = ("score", "site", "take_up", "cluster", "weight")
"""Roles that one column plays."""
LISTS: Final = {"outcome": "outcomes", "covariate": "covariates"}
"""Roles that several columns may play, and the study's key for them."""
PLACES: Final = ("x", "y", "longitude", "latitude")
"""Roles of a boundary study that are shown here and given in the file."""
_LABELS: Final = {"take_up": "take-up"}
_NUMBERS: Final = {"score", "outcome", "take_up", "weight", "covariate"}


def role_of(columns: Columns, name: str) -> str:
    """The role of a column, "" for none. Should it play several, the first in the order of the work."""
    for role, key in LISTS.items():
        if name in getattr(columns, key):
            return role
    for role in (*SINGLE, *PLACES):
        if getattr(columns, role) == name:
            return role
    return ""


def role_label(role: str) -> str:
    """The role in words."""
    return _LABELS.get(role, role)


def role_changes(columns: Columns, name: str, role: str) -> dict[str, object]:
    """What to change in the study so that a column plays a role, or no role when it plays it already.

    A column plays one role: any other is taken away. A role that one column plays is taken from the one that had it.

    Parameters
    ----------
    columns : Columns
        The roles as they are.
    name : str
        The column.
    role : str
        One of `SINGLE` or of the keys of `LISTS`, or "" for none.
    """
    changes: dict[str, object] = {}
    already = role != "" and role_of(columns, name) == role
    for other, key in LISTS.items():
        names = getattr(columns, key)
        if other == role and not already:
            changes[f"columns.{key}"] = (*names, name)
        elif name in names:
            changes[f"columns.{key}"] = tuple(kept for kept in names if kept != name)
    for other in (*SINGLE, *PLACES):
        if other == role and not already:
            changes[f"columns.{other}"] = name
        elif getattr(columns, other) == name:
            changes[f"columns.{other}"] = None
    return changes


def why_not_role(kind: str, name: str, role: str) -> str:
    """Why a column of this kind can't play a role; "" when it can."""
    if role in _NUMBERS and kind in ("text", "date"):
        article = "an" if role == "outcome" else "a"
        return f"{quoted(name)} holds {'dates' if kind == 'date' else 'text'}, but {article} {role_label(role)} is a number"
    if role == "score" and kind == "yes/no":
        return f"{quoted(name)} holds only yes and no, but a score needs many values"
    return ""
