"""Profiles: the published examples of a rounding ladder, and what a profile of one's own may say."""

import math
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Context, Decimal
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from study.document import parse_study
from study.errors import StudyError
from study.guard.profile import Profile, load_profile, parse_profile, rounded, significant
from study.options import PROFILES


def profile(name: str, folder: Path = Path("/nowhere")) -> Profile:
    return load_profile(parse_study(f'[guard]\nprofile = "{name}"', folder / "study.toml"))


@pytest.mark.published
@pytest.mark.parametrize(
    ("count", "shown"),
    [
        # Examples of a national statistical institute's staff rounding rules of 2019.
        (14, "N<15"), (15, "20"), (25, "20"), (99, "100"), (125, "100"), (999, "1,000"), (1050, "1,000"),
        (10250, "10,000"),
    ],
)  # fmt: skip
def test_counts_of_the_census_ladder(count: int, shown: str) -> None:
    assert profile("census-ladder").count(count) == shown


@pytest.mark.published
@pytest.mark.parametrize(("number", "shown"), [(0.0123456, 0.01235), (1500.5, 1500.0)])
def test_numbers_of_the_census_ladder(number: float, shown: float) -> None:
    assert profile("census-ladder").number(number) == shown


def test_the_rest_of_the_ladder_by_its_own_rule() -> None:
    ladder = profile("census-ladder")
    assert ladder.count(0) == "N<15"
    assert ladder.count(149_750) == "150,000"
    assert ladder.count(1_234_567) == "1,235,000"
    for value in range(15, 5000):
        unit = 10 if value < 100 else 50 if value < 1000 else 100
        assert abs(ladder.rounded_count(value) - value) <= unit / 2
        assert ladder.rounded_count(value) % unit == 0


def test_the_default_shows_counts_from_ten_on() -> None:
    found = profile("threshold-10")
    assert [found.count(value) for value in (0, 1, 9, 10, 1234)] == [
        "under 10", "under 10", "under 10", "10", "1,234",
    ]  # fmt: skip


def test_every_named_profile_comes_with_the_program() -> None:
    assert [profile(name).name for name in PROFILES] == list(PROFILES)


@given(value=st.floats(allow_nan=False, allow_infinity=False), digits=st.integers(1, 8))
def test_significant_digits_are_those_of_the_decimal_module(value: float, digits: int) -> None:
    twin = Context(prec=digits, rounding=ROUND_HALF_EVEN).create_decimal(Decimal(repr(value)))
    assert significant(value, digits) == float(twin)


def test_what_is_no_number_stays() -> None:
    assert math.isnan(significant(math.nan, 4))
    assert significant(-math.inf, 4) == -math.inf


@dataclass(frozen=True, slots=True)
class Inner:
    low: float
    rows: int
    name: str


@dataclass(frozen=True, slots=True)
class Outer:
    inner: Inner
    pairs: tuple[tuple[float, float], ...]
    values: np.ndarray
    nothing: None = None


def test_every_number_inside_a_result_is_rounded() -> None:
    thing = Outer(Inner(1.23456, 12345, "9.87654"), ((1.00004, 2.00006),), np.array([[0.123456, np.nan]]))
    found = rounded(thing, 4)
    assert found.inner == Inner(1.235, 12345, "9.87654")
    assert found.pairs == ((1.0, 2.0),)
    assert found.values[0, 0] == 0.1235 and math.isnan(found.values[0, 1])


OWN = """
[profile]
name = "ours"
says = "Twenty."
[cells]
threshold = 20
zeros = "show"
group_share = 0.8
degrees_of_freedom = 5
[counts]
hidden = "*"
[numbers]
digits = 3
"""


def test_a_profile_of_ones_own_beside_the_study(tmp_path: Path) -> None:
    (tmp_path / "ours.toml").write_text(OWN)
    found = profile("ours.toml", tmp_path)
    assert (found.name, found.threshold, found.count(19), found.count(0)) == ("ours", 20, "*", "0")
    assert found.number(1234.0) == 1230.0


@pytest.mark.parametrize(
    ("old", "new", "what", "do"),
    [
        ("threshold = 20", "threshold = 1", "cells.threshold is not what it takes.", "Give a whole number of at least 2."),
        ("threshold = 20", "", "cells.threshold is missing.", "Give a whole number of at least 2."),
        ('zeros = "show"', 'zeros = "maybe"', "cells.zeros is not what it takes.", 'Give "hide" or "show".'),
        ("group_share = 0.8", "group_share = 2", "cells.group_share is not what it takes.", "Give a share above 0.5 and up to 1."),
        ("digits = 3", "digits = true", "numbers.digits is not what it takes.", "Give a whole number of at least 1."),
        ("threshold = 20", "treshold = 20", 'there is no key "cells.treshold" in a profile.', 'Did you mean "cells.threshold"?'),
        ('hidden = "*"', 'hidden = "*"\nround = [{ under = 100, to = 10 }, { under = 50, to = 5 }]',
         "counts.round is not what it takes.", "Give a list of steps such as { under = 100, to = 10 }, ascending."),
        ("[counts]\n", "", 'there is no key "cells.hidden" in a profile.', 'Did you mean "cells.zeros"?'),
    ],
)  # fmt: skip
def test_a_profile_that_can_not_be_meant(old: str, new: str, what: str, do: str) -> None:
    with pytest.raises(StudyError) as caught:
        parse_profile(OWN.replace(old, new, 1), "ours.toml")
    assert caught.value.what == f"ours.toml: {what}"
    if "hidden" not in what:
        assert caught.value.do == do


def test_a_profile_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(StudyError) as caught:
        profile("ours.toml", tmp_path)
    assert caught.value.what == (
        'study.toml: guard.profile is "ours.toml", which can\'t be read (no such file or directory).'
    )
