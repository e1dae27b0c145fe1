"""The guard on counts, against an attacker who adds and subtracts everything that was let through."""

import itertools
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from study.guard.cells import admit, exposes


def solvable(rows: list[list[int]], wanted: list[int]) -> bool:
    """Whether `wanted` is a rational combination of the rows: exact elimination, no floating point."""
    table = [[Fraction(v) for v in column] for column in zip(*rows, wanted)]  # unknowns: one a released set
    unknowns, pivot = len(rows), 0
    for j in range(unknowns):
        found = next((i for i in range(pivot, len(table)) if table[i][j]), None)
        if found is None:
            continue
        table[pivot], table[found] = table[found], table[pivot]
        for i in range(len(table)):
            if i != pivot and table[i][j]:
                factor = table[i][j] / table[pivot][j]
                table[i] = [a - factor * b for a, b in zip(table[i], table[pivot])]
        pivot += 1
    return all(row[-1] == 0 for row in table[pivot:])


def recovered(masks: list[np.ndarray], threshold: int) -> list[tuple[int, ...]]:
    """Every group under the threshold that the counts of these sets give away, by trying all unions of atoms."""
    if not masks:
        return []
    kinds, counts = np.unique(np.column_stack(masks), axis=0, return_counts=True)
    held = kinds.any(axis=1)
    kinds, counts = kinds[held], counts[held]
    rows = kinds.T.astype(int).tolist()
    small = [i for i in range(len(counts)) if counts[i] < threshold]
    found = []
    for size in range(1, len(small) + 1):
        for group in itertools.combinations(small, size):
            if sum(counts[i] for i in group) < threshold:
                wanted = [int(i in group) for i in range(len(counts))]
                if solvable(rows, wanted):
                    found.append(group)
    return found


@st.composite
def systems(draw: st.DrawFn) -> list[np.ndarray]:
    """Overlapping sets of rows made of a few atoms, some small."""
    sizes = draw(st.lists(st.integers(1, 30), min_size=2, max_size=7))
    count = draw(st.integers(1, 7))
    pattern = draw(
        st.lists(
            st.lists(st.booleans(), min_size=len(sizes), max_size=len(sizes)), min_size=count, max_size=count
        )
    )
    atoms = np.repeat(np.arange(len(sizes)), sizes)
    return [np.array(row)[atoms] for row in pattern]


@settings(max_examples=400, deadline=None)
@given(masks=systems())
def test_nothing_small_can_be_worked_out_from_what_is_let_through(masks: list[np.ndarray]) -> None:
    shown = admit(masks, 10)
    assert not recovered([m for m, ok in zip(masks, shown) if ok and m.any()], 10)


@settings(max_examples=300, deadline=None)
@given(masks=systems())
def test_what_is_refused_would_have_given_something_away(masks: list[np.ndarray]) -> None:
    kept: list[np.ndarray] = []
    for mask, ok in zip(masks, admit(masks, 10)):
        if not ok:
            assert not mask.any() or mask.sum() < 10 or recovered([*kept, mask], 10)
        elif mask.any():
            kept.append(mask)


def sites(*sizes: int) -> list[np.ndarray]:
    place = np.repeat(np.arange(len(sizes)), sizes)
    return [np.ones(len(place), dtype=bool), *(place == i for i in range(len(sizes)))]


def test_a_small_site_hides_a_second_one_beside_their_total() -> None:
    assert admit(sites(200, 80, 40, 6), 10) == [True, True, True, False, False]
    assert admit(sites(200, 80, 40, 16), 10) == [True] * 5


def test_two_small_sites_hide_each_other() -> None:
    assert admit(sites(200, 80, 7, 6), 10) == [True, True, True, False, False]
    # Together they are still under the threshold: a third one goes too.
    assert admit(sites(200, 80, 4, 3), 10) == [True, True, False, False, False]


def test_neighbouring_bandwidths_step_by_the_threshold() -> None:
    distance = np.arange(100.0)
    nested = [distance < width for width in (50, 55, 60, 64, 70, 71, 80)]
    assert admit(nested, 10) == [True, False, True, False, True, False, True]


def test_what_left_before_counts() -> None:
    distance = np.arange(100.0)
    assert admit([distance < 53], 10) == [True]
    assert admit([distance < 53], 10, released=[distance < 50]) == [False]
    assert admit([distance < 50], 10, released=[distance < 50]) == [True]


def test_what_left_before_and_gave_something_away_takes_nothing_more() -> None:
    distance = np.arange(100.0)
    spoilt = [distance < 50, distance < 53]
    assert admit([distance < 80, distance < 50], 10, released=spoilt) == [False, True]


def test_nought_is_said_only_where_it_may_be() -> None:
    nobody = np.zeros(30, dtype=bool)
    assert admit([nobody], 10) == [False]
    assert admit([nobody], 10, zeros=True) == [True]


def test_no_sets_at_all() -> None:
    assert admit([], 10) == []


def test_what_can_not_be_decided_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    # Atoms of 6, 7 and 100 rows; what is shown is the first two together, and the first with the third.
    incidence, sizes = np.array([[1.0, 1.0, 0.0], [1.0, 0.0, 1.0]]), np.array([6, 7, 100])
    assert not exposes(incidence, sizes, 10)
    monkeypatch.setattr("study.guard.cells._MOST", 0)
    assert exposes(incidence, sizes, 10)
