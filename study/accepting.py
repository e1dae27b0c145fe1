"""Whether a key of the study file takes a value, and how the study then holds it."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping

from study.literal import nearest, quoted
from study.options import Option


class Refused(Exception):
    """A value that a key does not take.

    Attributes
    ----------
    found
        What stands there, in words.
    nearest
        The allowed word spelt most like it, or None.
    """

    def __init__(self, found: str, nearest: str | None = None) -> None:
        super().__init__(found)
        self.found = found
        self.nearest = nearest


def accept(option: Option, value: object) -> object:
    """The value as the study holds it: floats for numbers, tuples for lists.

    Raises
    ------
    Refused
        When the key does not take this value.
    """
    match option.kind:
        case "text":
            return value if value == "" == option.default else _text(value)
        case "yes/no":
            if isinstance(value, bool):
                return value
            raise Refused(said(value))
        case "whole number":
            return int(_number(option, value, whole=True))
        case "number":
            return _number(option, value)
        case "word":
            return _word(option, value)
        case "word or file":
            return value if isinstance(value, str) and _is_profile_file(value) else _word(option, value)
        case "word or number":
            return _word(option, value) if isinstance(value, str) else _number(option, value)
        case "word, number or pair":
            return _width(option, value)
        case "text list":
            return _text_list(value)
        case "number list":
            return _number_list(option, value)
        case "number table":
            if not isinstance(value, Mapping):
                raise Refused(said(value))
            return {_text(name): _number(option, number, of=str(name)) for name, number in value.items()}
        case "whole number or text":
            return _text(value) if isinstance(value, str) else int(_number(option, value, whole=True))


def said(value: object) -> str:
    """A value of the study file in words, cleaned and cut to a line."""
    match value:
        case bool():
            return "true" if value else "false"
        case str():
            return quoted(value if len(value) <= 60 else value[:57] + "...")
        case int() | float():
            return str(value) if isinstance(value, float) or abs(value) < 10**30 else "a very large number"
        case list() | tuple():
            inside = ", ".join(said(item) for item in value[:4])
            return f"[{inside}{', ...' if len(value) > 4 else ''}]"
        case Mapping():
            return "a table"
        case None:
            return "nothing"
        case _:
            return f"a {type(value).__name__}"


def _text(value: object) -> str:
    if not isinstance(value, str):
        raise Refused(said(value))
    if not value.strip():
        raise Refused("empty text")
    if "\0" in value:
        raise Refused("text with a null character")
    return value


def _is_profile_file(value: str) -> bool:
    return value.endswith(".toml") and "\0" not in value


def _word(option: Option, value: object) -> str:
    if isinstance(value, str) and value in option.allowed:
        return value
    raise Refused(said(value), nearest(value, option.allowed) if isinstance(value, str) else None)


def _number(option: Option, value: object, *, whole: bool = False, of: str | None = None) -> float:
    found = said(value) if of is None else f"{said(value)} for {quoted(of)}"
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise Refused(found)
    if whole and not isinstance(value, int):
        raise Refused(found)
    try:
        number = float(value)
    except OverflowError:
        raise Refused(found) from None
    if not math.isfinite(number):
        raise Refused(found)
    if option.least is not None and (
        number < option.least or (option.least_excluded and number == option.least)
    ):
        raise Refused(found)
    if option.most is not None and (number > option.most or (option.most_excluded and number == option.most)):
        raise Refused(found)
    return number


def _width(option: Option, value: object) -> str | float | tuple[float, float]:
    if isinstance(value, str):
        return _word(option, value)
    if isinstance(value, list | tuple):
        if len(value) != 2:
            raise Refused(said(value))
        try:
            return (_number(option, value[0]), _number(option, value[1]))
        except Refused:
            raise Refused(said(value)) from None
    return _number(option, value)


def _text_list(value: object) -> tuple[str, ...]:
    if not isinstance(value, list | tuple):
        raise Refused(said(value))
    names = tuple(_text(item) for item in value)
    for i, name in enumerate(names):
        if name in names[:i]:
            raise Refused(f"{quoted(name)} twice")
    return names


def _number_list(option: Option, value: object) -> tuple[float, ...]:
    if not isinstance(value, list | tuple):
        raise Refused(said(value))
    numbers = tuple(_number(option, item) for item in value)
    if any(later <= earlier for earlier, later in itertools.pairwise(numbers)):
        raise Refused(said(value))
    return numbers
