"""The rungs that the arrow keys walk, and the reach of the picture."""

from __future__ import annotations

import math

from hypothesis import given
from hypothesis import strategies as st

from tui.screens.widths import COARSE, next_width, reach_for

WIDTHS = st.floats(1e-6, 1e9)


@given(width=WIDTHS, steps=st.integers(1, 40))
def test_wider_is_wider_and_comes_back(width: float, steps: int) -> None:
    start = next_width(width, 1)  # on a rung
    there = next_width(start, steps)
    assert there > start > width or math.isclose(start, width, rel_tol=1e-2)
    assert next_width(there, -steps) == start


@given(width=WIDTHS)
def test_a_step_is_small_and_a_big_step_is_about_a_quarter(width: float) -> None:
    assert 1.0 < next_width(width, 1) / width < 1.03
    rung = next_width(width, 1)
    assert math.isclose(next_width(rung, COARSE) / rung, 10 ** (COARSE / 100), rel_tol=0.02)


@given(width=WIDTHS)
def test_rungs_have_three_digits(width: float) -> None:
    rung = next_width(width, -1)
    assert float(f"{rung:.3g}") == rung


def test_the_first_step_from_between_rungs_goes_to_the_nearer_one() -> None:
    assert next_width(9.4, 1) == 9.55
    assert next_width(9.4, -1) == 9.33
    assert next_width(9.33, 1) == 9.55


@given(width=st.floats(0.1, 50.0), before=st.floats(0.1, 100.0))
def test_the_picture_reaches_past_the_width_and_no_farther_than_the_data(width: float, before: float) -> None:
    reach = reach_for(width, 60.0, min(before, 60.0))
    assert width <= reach <= 60.0


def test_the_picture_does_not_shake() -> None:
    reach = reach_for(10.0, 100.0)
    assert reach == 22.0
    width = 10.0
    while width < 20.0:
        width = next_width(width, 1)
        assert reach_for(width, 100.0, reach) == reach
    assert reach_for(21.0, 100.0, reach) > reach
    assert reach_for(4.0, 100.0, reach) < reach
