"""Counts at a line against counting one by one."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from study.errors import StudyError
from tui.screens.score_reading import score_reading

SIDES = ("at or above", "above", "at or below", "below")
NAN = float("nan")


@given(
    scores=st.lists(st.one_of(st.integers(-5, 5).map(float), st.just(NAN)), min_size=1, max_size=40),
    took=st.data(),
    cutoff=st.integers(-5, 5).map(float),
    side=st.sampled_from(SIDES),
)
def test_counts_are_those_of_counting(
    scores: list[float], took: st.DataObject, cutoff: float, side: str
) -> None:
    take_up = took.draw(
        st.lists(st.sampled_from((0.0, 1.0, NAN)), min_size=len(scores), max_size=len(scores))
    )
    known = [(s, t) for s, t in zip(scores, take_up) if s == s]
    if not known:
        return
    reading = score_reading(np.array(scores), np.array(take_up))
    found = reading.line(cutoff, side)
    treated = {
        "at or above": lambda s: s >= cutoff,
        "above": lambda s: s > cutoff,
        "at or below": lambda s: s <= cutoff,
        "below": lambda s: s < cutoff,
    }[side]
    on_treated = sum(treated(s) for s, _ in known)
    assert (found.above if "above" in side else found.below) == on_treated
    assert found.below + found.above == len(known)
    assert found.on_line == sum(s == cutoff for s, _ in known)
    assert found.against is not None
    assert found.against.untreated == sum(treated(s) and t == 0.0 for s, t in known)
    assert found.against.treated == sum(not treated(s) and t == 1.0 for s, t in known)
    assert found.against.unknown == sum(t != t for _, t in known)
    assert int(found.counts.sum()) == len(known)
    assert reading.missing == len(scores) - len(known)
    assert reading.distinct == len({s for s, _ in known})


@given(
    scores=st.lists(st.integers(0, 30).map(float), min_size=2, max_size=60),
    cutoff=st.integers(1, 29).map(float),
)
def test_bars_stay_on_their_side_of_the_line(scores: list[float], cutoff: float) -> None:
    found = score_reading(np.array(scores), None).line(cutoff, "at or above")
    edges, counts = found.edges, found.counts
    assert np.all(np.diff(edges) > 0)
    if edges[0] < cutoff < edges[-1]:
        assert cutoff in edges
        assert int(counts[edges[1:] <= cutoff].sum()) == found.below
        assert int(counts[edges[:-1] >= cutoff].sum()) == found.above


def test_a_lumpy_score_has_a_bar_for_each_value_and_moves_by_them() -> None:
    reading = score_reading(np.repeat(np.arange(0.0, 41.0), 3), None)
    found = reading.line(100.0, "above")
    assert set(found.counts.tolist()) == {3}
    assert reading.moved(20.0, 1) == 21.0
    assert reading.moved(20.4, -1) == 20.0
    assert reading.moved(40.0, 5) == 40.0


def test_a_smooth_score_moves_by_round_steps() -> None:
    reading = score_reading(np.random.default_rng(1).uniform(0, 100, 5000), None)
    assert reading.step == 0.5
    assert reading.moved(50.2, 1) == 50.5
    assert reading.moved(50.2, -1) == 50.0


def test_reach_cuts_the_picture_and_not_the_counts() -> None:
    reading = score_reading(np.arange(1000.0), None)
    near = reading.line(500.0, "at or above", 50.0)
    assert near.below == 500 and near.above == 500
    assert near.edges[0] >= 449.0 and near.edges[-1] <= 551.0


def test_one_score_only_is_no_trouble() -> None:
    reading = score_reading(np.full(5, 3.0), None)
    found = reading.line(3.0, "above")
    assert (found.below, found.above, found.on_line) == (5, 0, 5)
    assert reading.step == 1.0 and reading.heaviest == (3.0, 5)


def test_no_score_at_all_is_one_sentence() -> None:
    with pytest.raises(StudyError) as refused:
        score_reading(np.array([NAN, NAN]), None)
    assert (
        str(refused.value)
        == "The score column holds no number at all.\nChoose another score on the Data screen."
    )
