"""Bad values for every key, made from the table of keys itself."""

from __future__ import annotations

import math
from collections.abc import Iterator
from pathlib import Path

import pytest

from estimation.choices import Choices
from study.accepting import Refused, accept
from study.document import Study, edit, parse_study, values_of
from study.errors import StudyError
from study.options import BY_NAME, OPTIONS, Option

WRONG_FOR_ALL = (None, object(), b"bytes", 1j)
WRONG: dict[str, tuple[object, ...]] = {
    "text": (1, 1.5, True, [], {}, "", "   ", "a\0b"),
    "yes/no": ("true", "yes", 0, 1, [], {}),
    "whole number": ("1", 1.5, True, [], {}, -1, math.nan, math.inf, 10**400),
    "number": ("1", True, [], {}, math.nan, math.inf, -math.inf, 10**400),
    "word": ("nonsense", "", 1, True, [], {}),
    "word or file": ("nonsense", "", "ours.json", True, [], {}, 1, None),
    "word or number": ("nonsense", "", True, [], {}, math.nan, math.inf, 0, -1.0),
    "word, number or pair": (
        "nonsense",
        True,
        {},
        [],
        [1.0],
        [1.0, 2.0, 3.0],
        [1.0, "a"],
        [0, 1],
        0,
        -1,
        math.nan,
    ),
    "text list": ("text", 1, True, {}, [1], [""], ["a", "a"], [["a"]]),
    "number list": ("text", 1.0, True, {}, ["1"], [2.0, 1.0], [1.0, 1.0], [True], [math.nan]),
    "number table": ("text", 1.0, True, [], {"a": "1"}, {"a": True}, {"a": math.inf}, {"": 1.0}),
    "whole number or text": (1.5, True, 0, -1, [], {}, ""),
}
GOOD: dict[str, tuple[object, ...]] = {
    "text": ("a", "naïve name", "drop table x;"),
    "yes/no": (True, False),
    "text list": (["a"], ["a", "b"], []),
    "number list": ([1, 2.5], []),
    "number table": ({"a": 1, "b c": 2.5}, {}),
    "whole number or text": (1, 12, "segment"),
}


def bad_values(option: Option) -> Iterator[object]:
    yield from WRONG_FOR_ALL
    yield from (value for value in WRONG[option.kind] if value != "" or option.default != "")
    if option.least is not None and option.least_excluded:
        yield option.least
    if option.least is not None:
        yield option.least - 1
    if option.most is not None:
        yield option.most + (0 if option.most_excluded else 1)


@pytest.mark.parametrize(
    ("option", "value"),
    [pytest.param(o, v, id=f"{o.name}-{i}") for o in OPTIONS for i, v in enumerate(bad_values(o))],
)
def test_a_bad_value_is_refused_and_the_message_names_the_key_and_what_is_allowed(
    option: Option, value: object
) -> None:
    with pytest.raises(Refused):
        accept(option, value)
    if value is None:
        return  # in an edit, None takes a key back to its default
    with pytest.raises(StudyError) as caught:
        edit(Study(path=Path("study.toml")), {option.name: value})
    assert caught.value.status == 2
    assert caught.value.what.startswith(f"study.toml: {option.name} is ")
    assert caught.value.what.endswith(", which is not allowed.")
    assert caught.value.do.startswith(f"Allowed: {option.expected}.")


@pytest.mark.parametrize("option", OPTIONS, ids=lambda o: o.name)
def test_a_good_value_is_held_and_so_is_the_default(option: Option) -> None:
    for value in (*GOOD.get(option.kind, ()), *option.allowed):
        accept(option, value)
    if option.default not in (None, "", (), {}):
        assert accept(option, option.default) == option.default


def test_the_defaults_are_those_of_an_empty_file() -> None:
    values = values_of(parse_study("", "study.toml"))
    assert values == {option.name: option.default for option in OPTIONS}
    assert parse_study("", "study.toml").estimate == Choices()


def test_every_key_is_declared_once_and_explained() -> None:
    assert len({option.name for option in OPTIONS}) == len(OPTIONS)
    assert BY_NAME["estimate.kernel"].key == "kernel"
    for option in OPTIONS:
        assert option.help.endswith(".")
        assert "\n" not in option.help
        assert option.expected
