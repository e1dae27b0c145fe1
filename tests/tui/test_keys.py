"""The one table of keys: nothing twice, nothing a terminal eats, and everything in the table can be done."""

from __future__ import annotations

import re
from collections import Counter
from pathlib import Path

import pytest

from tui.app import _ROOMS, CutbankApp
from tui.keys import (
    EVERYWHERE,
    IN_LISTS,
    PLACES,
    bindings_of,
    key_list_markdown,
    key_named,
    keys_of,
    with_key_list,
)

ALLOWED = re.compile(r"[a-zA-Z0-9]|f\d{1,2}|left|right|up|down|enter|escape|tab|question_mark")


@pytest.mark.parametrize("place", [place.name for place in PLACES])
def test_a_screen_uses_no_key_twice(place: str) -> None:
    used = Counter(name for binding in bindings_of(place) for name in binding.key.split(","))
    assert [name for name, times in used.items() if times > 1] == []


@pytest.mark.parametrize("place", [place.name for place in PLACES])
def test_only_keys_that_reach_the_program(place: str) -> None:
    for binding in bindings_of(place):
        for name in binding.key.split(","):
            assert ALLOWED.fullmatch(name), name


@pytest.mark.parametrize("place", [place.name for place in PLACES])
def test_every_key_has_something_that_does_it(place: str) -> None:
    for key in keys_of(place):
        holder = CutbankApp if key in EVERYWHERE else _ROOMS[place]
        assert callable(getattr(holder, f"do_{key.action}", None)), key.id


def test_every_key_says_what_it_does() -> None:
    for place in PLACES:
        for key in keys_of(place.name):
            assert key.help.endswith(".") and key.help[0].isupper(), key.id
            assert key.label and key.shown
            assert key_named(key.id) is key


def test_a_screen_that_is_not_built_says_so_in_one_sentence() -> None:
    awaited = [place for place in PLACES if place.awaits]
    assert [place.digit for place in awaited] == ["5", "6"]
    for place in awaited:
        assert place.awaits.count(".") == 1 and not place.keys


def test_the_readme_list_holds_every_key() -> None:
    text = key_list_markdown()
    for place in PLACES:
        assert f"| {place.digit} |" in text
        for key in keys_of(place.name):
            assert f"| {key.shown} | {key.help} |" in text
    for shown, _ in IN_LISTS:
        assert f"| {shown} |" in text
    assert all(line.count("|") == 3 for line in text.splitlines() if line.startswith("|"))


def test_the_list_goes_between_its_marks_and_nowhere_else() -> None:
    text = "above\n<!-- keys -->\nold\n<!-- /keys -->\nbelow\n"
    once = with_key_list(text)
    assert once.startswith("above\n<!-- keys -->\n### On every screen") and once.endswith(
        "|\n<!-- /keys -->\nbelow\n"
    )
    assert "old" not in once and with_key_list(once) == once
    with pytest.raises(ValueError, match="not both there"):
        with_key_list("no marks")


def test_the_readme_is_up_to_date() -> None:
    text = (Path(__file__).parents[2] / "README.md").read_text(encoding="utf-8")
    assert with_key_list(text) == text, (
        "a key has changed: run `python -m tui.keys` in the root of the repository"
    )


def test_an_unknown_key_is_an_error() -> None:
    with pytest.raises(KeyError):
        key_named("effect.nothing")
