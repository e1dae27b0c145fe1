"""A profile: one set of disclosure rules, read from a file of data. The two that come with the program are such files too."""

from __future__ import annotations

import dataclasses
import itertools
import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Decimal
from pathlib import Path
from typing import Any, Final, TypeVar

import numpy as np

from study.document import Study
from study.errors import StudyError
from study.literal import clean, nearest, quoted

Shown = TypeVar("Shown")
_KEYS: Final = {
    "profile": {"name", "says"},
    "cells": {"threshold", "zeros", "group_share", "degrees_of_freedom"},
    "counts": {"hidden", "round", "digits"},
    "numbers": {"digits"},
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """A rung of the ladder: counts under `under` are rounded to multiples of `to`."""

    under: int
    to: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Profile:
    """The rules in force.

    Attributes
    ----------
    threshold
        Fewest rows that a released number may rest on.
    zeros
        Whether "nought of them" may be said.
    group_share
        A share of a group above this is not said.
    degrees_of_freedom
        Fewest rows beyond the coefficients of a fit.
    hidden
        What stands in the place of a count below the threshold.
    steps, count_digits
        Rounding of counts, and their significant digits above the last step; None leaves them as they are.
    digits
        Significant digits of every other number.
    """

    name: str
    says: str
    threshold: int
    zeros: bool
    group_share: float
    degrees_of_freedom: int
    hidden: str
    steps: tuple[Step, ...]
    count_digits: int | None
    digits: int

    def count(self, value: int) -> str:
        """A count as it may be shown by itself; whether it gives others away is for `study.guard.cells`."""
        if value == 0 and self.zeros:
            return "0"
        if value < self.threshold:
            return self.hidden
        return f"{self.rounded_count(value):,}"

    def rounded_count(self, value: int) -> int:
        """A count on the ladder, half to even."""
        for step in self.steps:
            if value < step.under:
                return int((Decimal(value) / step.to).quantize(Decimal(1), ROUND_HALF_EVEN)) * step.to
        return value if self.count_digits is None else int(significant(value, self.count_digits))

    def number(self, value: float) -> float:
        """Any other number at the digits that may leave."""
        return significant(value, self.digits)

    def rounds(self, value: int) -> bool:
        """Whether a count that is shown is not shown as it is."""
        return value >= self.threshold and self.rounded_count(value) != value


def significant(value: float, digits: int) -> float:
    """A number at so many significant digits of its shortest decimal form, half to even; infinite and NaN stay.

    Examples
    --------
    >>> significant(0.0123456, 4), significant(1500.5, 4)
    (0.01235, 1500.0)
    """
    if value == 0.0 or not math.isfinite(value):
        return float(value)
    exact = Decimal(repr(float(value)))
    last = Decimal(1).scaleb(exact.adjusted() - digits + 1)
    return float(exact.quantize(last, ROUND_HALF_EVEN)) + 0.0


def rounded(thing: Shown, digits: int) -> Shown:
    """A result with every number in it at so many significant digits, whatever dataclasses it is made of.

    Whole numbers are left: a count is a matter of its rows, not of its digits.
    """
    found: Any = thing
    if isinstance(found, float):
        found = significant(found, digits)
    elif isinstance(found, np.ndarray):
        if np.issubdtype(found.dtype, np.floating):
            found = np.array([significant(float(v), digits) for v in found.ravel()]).reshape(found.shape)
    elif dataclasses.is_dataclass(found) and not isinstance(found, type):
        found = dataclasses.replace(
            found,
            **{
                field.name: rounded(getattr(found, field.name), digits)
                for field in dataclasses.fields(found)
                if field.init
            },
        )
    elif isinstance(found, tuple):
        found = tuple(rounded(item, digits) for item in found)
    elif isinstance(found, Mapping):
        found = {key: rounded(item, digits) for key, item in found.items()}
    result: Shown = found
    return result


def load_profile(study: Study) -> Profile:
    """The profile that a study names: one of the program's, or a file of the site's own beside the study.

    Raises
    ------
    StudyError
        Status 2 when there is no such profile or its file says what can't be meant.
    """
    name = study.guard.profile
    path = (
        study.path.parent / name
        if name.endswith(".toml")
        else Path(__file__).with_name("profiles") / f"{name}.toml"
    )
    try:
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, ValueError) as error:
        reason = (getattr(error, "strerror", None) or "is not UTF-8 text").lower()
        raise StudyError(
            f"{clean(study.path.name)}: guard.profile is {quoted(name)}, which can't be read ({reason}).",
            'Name "threshold-10", "census-ladder" or a profile file beside the study.',
        ) from None
    return parse_profile(text, clean(path.name))


def parse_profile(text: str, file: str) -> Profile:
    """Read and check the text of a profile.

    Raises
    ------
    StudyError
        Status 2, naming the file and the key.
    """
    try:
        document = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError):
        raise StudyError(f"{file}: is not valid TOML.", "Start from a copy of a profile that is.") from None
    for section, keys in document.items():
        allowed = _KEYS.get(section)
        if allowed is None or not isinstance(keys, dict):
            raise _unknown(file, section, list(_KEYS))
        for key in keys:
            if key not in allowed:
                raise _unknown(file, f"{section}.{key}", [f"{section}.{known}" for known in allowed])
    return Profile(
        name=_text(document, file, "profile", "name"),
        says=_text(document, file, "profile", "says"),
        threshold=_whole(document, file, "cells", "threshold", least=2),
        zeros=_zeros(document, file),
        group_share=_share(document, file),
        degrees_of_freedom=_whole(document, file, "cells", "degrees_of_freedom", least=0),
        hidden=_text(document, file, "counts", "hidden"),
        steps=_steps(document, file),
        count_digits=_whole(document, file, "counts", "digits", least=1)
        if "digits" in document["counts"]
        else None,
        digits=_whole(document, file, "numbers", "digits", least=1),
    )


def _value(document: Mapping[str, Any], file: str, section: str, key: str, expected: str) -> Any:
    if key not in document.get(section, {}):
        raise StudyError(f"{file}: {section}.{key} is missing.", f"Give {expected}.")
    return document[section][key]


def _text(document: Mapping[str, Any], file: str, section: str, key: str) -> str:
    value = _value(document, file, section, key, "text in quotes")
    if not isinstance(value, str) or not value.strip():
        raise _wrong(file, f"{section}.{key}", "text in quotes")
    return clean(value)


def _whole(document: Mapping[str, Any], file: str, section: str, key: str, *, least: int) -> int:
    expected = f"a whole number of at least {least}"
    value = _value(document, file, section, key, expected)
    if not isinstance(value, int) or isinstance(value, bool) or value < least:
        raise _wrong(file, f"{section}.{key}", expected)
    return value


def _zeros(document: Mapping[str, Any], file: str) -> bool:
    value = _value(document, file, "cells", "zeros", '"hide" or "show"')
    if value not in ("hide", "show"):
        raise _wrong(file, "cells.zeros", '"hide" or "show"')
    return bool(value == "show")


def _share(document: Mapping[str, Any], file: str) -> float:
    value = _value(document, file, "cells", "group_share", "a share above 0.5 and up to 1")
    if not isinstance(value, int | float) or isinstance(value, bool) or not 0.5 < value <= 1.0:
        raise _wrong(file, "cells.group_share", "a share above 0.5 and up to 1")
    return float(value)


def _steps(document: Mapping[str, Any], file: str) -> tuple[Step, ...]:
    found = document["counts"].get("round", [])
    expected = "a list of steps such as { under = 100, to = 10 }, ascending"
    whole = isinstance(found, list) and all(
        isinstance(step, dict)
        and set(step) == {"under", "to"}
        and all(
            isinstance(value, int) and not isinstance(value, bool) and value > 0 for value in step.values()
        )
        for step in found
    )
    if not whole:
        raise _wrong(file, "counts.round", expected)
    steps = tuple(Step(under=step["under"], to=step["to"]) for step in found)
    if any(later.under <= earlier.under for earlier, later in itertools.pairwise(steps)):
        raise _wrong(file, "counts.round", expected)
    return steps


def _wrong(file: str, key: str, expected: str) -> StudyError:
    return StudyError(f"{file}: {key} is not what it takes.", f"Give {expected}.")


def _unknown(file: str, key: str, known: list[str]) -> StudyError:
    near = nearest(key, known)
    return StudyError(
        f"{file}: there is no key {quoted(key)} in a profile.",
        f"Did you mean {quoted(near)}?" if near else f"There are {', '.join(sorted(known))}.",
    )
