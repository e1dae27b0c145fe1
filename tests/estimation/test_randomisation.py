"""The local randomisation answer against full enumeration, brute force and its own invariances."""

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from estimation.errors import CannotEstimate
from estimation.randomisation import _pair_of_rank, hodges_lehmann, randomise


def small(seed: int, below: int = 6, above: int = 5) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = np.concatenate((-rng.uniform(0.1, 1.0, below), rng.uniform(0.0, 1.0, above)))
    return x, rng.normal(size=below + above) + 1.5 * (x >= 0.0)


def p_by_hand(y: np.ndarray, took: np.ndarray, effect: float) -> float:
    """P-value of a constant effect: take it off the treated and list every assignment."""
    null = y - effect * took
    observed = abs(null[took].mean() - null[~took].mean())
    rows = np.arange(len(y))
    extreme = 0
    total = 0
    for chosen in combinations(rows, int(took.sum())):
        mask = np.isin(rows, chosen)
        extreme += abs(null[mask].mean() - null[~mask].mean()) >= observed - 1e-12
        total += 1
    return extreme / total


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("level", [0.8, 0.95])
def test_the_interval_is_the_inversion_of_the_listed_test(seed: int, level: float) -> None:
    x, y = small(seed)
    found = randomise(position=x, outcome=y, above=x >= 0, treated="above", window=(-1, 1), level=level)
    took = x >= 0
    assert found.exact
    assert found.p_value == pytest.approx(p_by_hand(y, took, 0.0), rel=1e-12)
    for inside, outside in ((found.low + 1e-7, found.low - 1e-7), (found.high - 1e-7, found.high + 1e-7)):
        assert p_by_hand(y, took, inside) > 1 - level
        assert p_by_hand(y, took, outside) <= 1 - level


def test_too_few_assignments_leave_the_interval_open() -> None:
    x = np.array([-0.2, -0.1, 0.1, 0.2])
    found = randomise(
        position=x, outcome=np.array([1.0, 2.0, 5.0, 7.0]), above=x >= 0, treated="above", window=(-1, 1)
    )
    assert found.low == -np.inf
    assert found.high == np.inf


def test_drawn_and_normal_intervals_agree_where_both_can_run() -> None:
    rng = np.random.default_rng(4)
    rows = 1_900
    x = rng.uniform(-1.0, 1.0, rows)
    y = rng.normal(size=rows) + 0.2 * (x >= 0.0)
    drawn = randomise(position=x, outcome=y, above=x >= 0, treated="above", window=(-1, 1), seed=2)
    # Doubling every row, and so passing to the normal law, shrinks the interval by √2 but for N − 1.
    x2, y2 = np.tile(x, 2), np.tile(y, 2)
    normal = randomise(position=x2, outcome=y2, above=x2 >= 0, treated="above", window=(-1, 1), seed=2)
    assert drawn.draws == 10_000
    assert normal.draws == 0
    assert "normal" in normal.statistic
    assert normal.estimate == pytest.approx(drawn.estimate, rel=1e-12)
    assert (drawn.high - drawn.low) / (normal.high - normal.low) == pytest.approx(np.sqrt(2.0), rel=0.03)


def test_slopes_are_each_sides_least_squares() -> None:
    x, y = small(11, 9, 8)
    found = randomise(position=x, outcome=y, above=x >= 0, treated="above", window=(-1, 1), slope=True)
    upper = x >= 0
    intercepts = [np.polynomial.polynomial.polyfit(x[s], y[s], 1)[0] for s in (upper, ~upper)]
    assert found.estimate == pytest.approx(intercepts[0] - intercepts[1], rel=1e-10)


@given(seed=st.integers(0, 10_000), scale=st.sampled_from([1e-3, 2.0, 50.0]), shift=st.floats(-1e3, 1e3))
@settings(max_examples=15)
def test_scale_shift_reflection_and_row_order_change_what_they_must(
    seed: int, scale: float, shift: float
) -> None:
    x, y = small(seed)
    base = randomise(position=x, outcome=y, above=x >= 0, treated="above", window=(-1, 1))
    moved = randomise(position=x, outcome=scale * y + shift, above=x >= 0, treated="above", window=(-1, 1))
    order = np.random.default_rng(seed).permutation(len(x))
    mixed = randomise(
        position=x[order], outcome=y[order], above=x[order] >= 0, treated="above", window=(-1, 1)
    )
    mirrored = randomise(position=-x, outcome=y, above=x < 0, treated="below", window=(-1, 1))
    tolerance = 1e-9 * (1 + abs(shift) / scale)
    assert moved.p_value == pytest.approx(base.p_value, rel=1e-9)
    assert moved.estimate == pytest.approx(scale * base.estimate, rel=1e-9, abs=scale * tolerance)
    assert moved.low == pytest.approx(scale * base.low, rel=1e-7, abs=scale * tolerance)
    assert mixed == base
    assert mirrored.estimate == pytest.approx(base.estimate, rel=1e-12)
    assert mirrored.p_value == pytest.approx(base.p_value, rel=1e-12)
    assert mirrored.high == pytest.approx(base.high, rel=1e-9)


@given(st.integers(1, 30), st.integers(1, 30), st.integers(0, 1000))
@settings(max_examples=40)
def test_hodges_lehmann_is_the_median_of_all_pairs(m: int, n: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    a, b = np.round(rng.normal(size=m), 1), np.round(rng.normal(size=n), 1)
    pairs = np.sort((a[:, None] - b[None, :]).ravel())
    assert hodges_lehmann(a, b) == pytest.approx(np.median(pairs), abs=1e-12)
    # The search that large sets use, on the same pairs.
    for rank in (0, (m * n) // 2, m * n - 1):
        assert _pair_of_rank(np.sort(a), np.sort(b), rank) == pytest.approx(pairs[rank], abs=1e-9)


def test_a_side_without_two_rows_is_refused_in_words() -> None:
    x = np.array([-0.5, -0.2, 0.3])
    with pytest.raises(CannotEstimate) as problem:
        randomise(position=x, outcome=x, above=x >= 0, treated="above", window=(-1, 1))
    assert problem.value.sentence == (
        "Within the window -1 to 1 there are 2 rows with an outcome below the line and 1 above; "
        "local randomisation needs two on each side."
    )


@pytest.mark.parametrize("seed", range(3))
def test_with_take_up_the_interval_is_the_inversion_of_the_test_of_what_the_lot_left_alone(seed: int) -> None:
    rng = np.random.default_rng(seed + 40)
    x = np.concatenate((-rng.uniform(0.1, 1.0, 6), rng.uniform(0.0, 1.0, 6)))
    took = x >= 0
    dose = np.where(took, rng.uniform(size=12) < 0.9, rng.uniform(size=12) < 0.1).astype(float)
    y = rng.normal(size=12) + 2.0 * dose
    found = randomise(
        position=x, outcome=y, above=took, treated="above", window=(-1, 1), take_up=dose, level=0.9
    )
    assert found.estimate == pytest.approx(found.intention / (dose[took].mean() - dose[~took].mean()))

    def p(ratio: float) -> float:
        return p_by_hand(y - ratio * dose, took, 0.0)

    if np.isfinite(found.low):
        assert p(found.low - 1e-6) <= 0.1
    if np.isfinite(found.high):
        assert p(found.high + 1e-6) <= 0.1
    assert p(found.estimate) > 0.1
    # Nothing that the test keeps may lie outside.
    for ratio in np.linspace(found.estimate - 20, found.estimate + 20, 401):
        if p(float(ratio)) > 0.1:
            assert found.low - 1e-9 <= ratio <= found.high + 1e-9


def test_many_rows_with_take_up_agree_with_the_drawn_interval() -> None:
    rng = np.random.default_rng(3)
    x = rng.uniform(-1, 1, 1900)
    dose = (rng.uniform(size=1900) < 0.2 + 0.6 * (x >= 0)).astype(float)
    y = rng.normal(size=1900) + 0.5 * dose
    given = {"above": x >= 0, "treated": "above", "window": (-1.0, 1.0)}
    drawn = randomise(position=x, outcome=y, take_up=dose, **given)  # type: ignore[arg-type]
    doubled = {name: np.tile(v, 2) for name, v in {"position": x, "outcome": y, "take_up": dose}.items()}
    normal = randomise(**doubled, above=np.tile(x >= 0, 2), treated="above", window=(-1.0, 1.0))  # type: ignore[arg-type]
    assert normal.estimate == pytest.approx(drawn.estimate, rel=1e-12)
    assert (drawn.high - drawn.low) / (normal.high - normal.low) == pytest.approx(np.sqrt(2.0), rel=0.04)
