"""Invariances with take-up, covariates, clusters and every order together (hypothesis): exact consequences of linearity."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from estimation.choices import Choices
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.reading import Reading
from estimation.sample import build_sample

Data = dict[str, np.ndarray]
WIDTHS = Bandwidths(below=0.9, above=1.1, pilot_below=1.2, pilot_above=1.2, rule="chosen")
SEEDS = st.integers(0, 200)
HOW = st.builds(
    Choices,
    kernel=st.sampled_from(["triangular", "uniform", "epanechnikov"]),
    order=st.sampled_from([0, 1, 2, 3]),
    variance=st.sampled_from(["neighbour", "hc0", "hc1", "hc2", "hc3"]),
    donut=st.sampled_from([0.0, 0.03]),
    level=st.sampled_from([0.9, 0.95]),
)
KIND = st.sampled_from(["sharp", "take-up", "covariates", "clusters", "take-up and clusters"])


def rows(seed: int, kind: str, ties: bool = False) -> Data:
    rng = np.random.default_rng(seed)
    n = 220
    x = np.round(rng.uniform(-1.5, 1.5, n), 2) if ties else rng.uniform(-1.5, 1.5, n)
    data = {
        "position": x,
        "outcome": 2 + np.sin(2 * x) + 0.5 * (x >= 0) + rng.normal(0, 0.3, n),
        "above": x >= 0,
        "weight": rng.uniform(0.5, 2.0, n),
    }
    if "take-up" in kind:
        data["take_up"] = (rng.random(n) < 0.15 + 0.7 * (x >= 0)).astype(float)
    if kind == "covariates":
        data["covariates"] = rng.normal(size=(n, 2))
    if "clusters" in kind:
        data["cluster"] = rng.integers(0, 30, n)
    return data


def read(
    data: Data, how: Choices, widths: Bandwidths = WIDTHS, treated: Any = "above", magnitude: float = 2.0
) -> Reading:
    without = {name: column for name, column in data.items() if name != "covariates"}
    sample = build_sample(**without, treated=treated, score_magnitude=magnitude)  # type: ignore[arg-type]
    full = None
    if "covariates" in data:
        full = build_sample(**data, treated=treated, score_magnitude=magnitude)  # type: ignore[arg-type]
    return Line.prepare(sample, how, full).reading(widths, adjust=full is not None)


def numbers(reading: Reading) -> np.ndarray:
    """What scales with the outcome."""
    found = [reading.estimate, reading.std_error, reading.plain.low, reading.plain.high]
    found += [reading.robust.estimate, reading.robust.std_error, reading.robust.low, reading.robust.high]
    if reading.bias_aware is not None:
        found += [reading.bias_aware.low, reading.bias_aware.high]
    if reading.take_up is not None:
        found += [e for piece in reading.take_up.anderson_rubin for e in piece]
    return np.array(found)


def close(found: np.ndarray, expected: np.ndarray, rtol: float = 1e-8) -> None:
    finite = np.abs(expected[np.isfinite(expected)])
    np.testing.assert_allclose(found, expected, rtol=rtol, atol=rtol * float(finite.max()))


@given(HOW, KIND, SEEDS, st.booleans())
@settings(max_examples=30)
def test_order_of_rows_and_names_of_clusters(how: Choices, kind: str, seed: int, ties: bool) -> None:
    data = rows(seed, kind, ties)
    order = np.random.default_rng(seed).permutation(len(data["position"]))
    moved = {name: column[order] for name, column in data.items()}
    if "cluster" in moved:
        moved["cluster"] = 977 - 7 * moved["cluster"]
    close(numbers(read(moved, how)), numbers(read(data, how)))


@given(HOW, KIND, SEEDS, st.sampled_from([1e-3, 0.25, 40.0]), st.sampled_from([-300.0, 0.0, 1e3]))
@settings(max_examples=30)
def test_scale_and_shift_of_the_outcome(
    how: Choices, kind: str, seed: int, scale: float, shift: float
) -> None:
    data = rows(seed, kind)
    moved = data | {"outcome": scale * data["outcome"] + shift}
    close(numbers(read(moved, how)), scale * numbers(read(data, how)), rtol=1e-9 * (10 + abs(shift) / scale))


@given(HOW, KIND, SEEDS, st.sampled_from([2.0**-20, 1e-6, 3.0, 1e5]))
@settings(max_examples=30)
def test_unit_of_the_score(how: Choices, kind: str, seed: int, unit: float) -> None:
    data = rows(seed, kind)
    assume(how.donut == 0.0)
    widths = Bandwidths(
        below=0.9 * unit, above=1.1 * unit, pilot_below=1.2 * unit, pilot_above=1.2 * unit, rule="chosen"
    )
    moved = data | {"position": unit * data["position"]}
    close(numbers(read(moved, how, widths, magnitude=2 * unit)), numbers(read(data, how)))


@given(HOW, KIND, SEEDS, st.booleans())
@settings(max_examples=30)
def test_reflection(how: Choices, kind: str, seed: int, ties: bool) -> None:
    data = rows(seed, kind, ties)
    mirrored = data | {"position": -data["position"], "above": ~data["above"]}
    widths = Bandwidths(below=1.1, above=0.9, pilot_below=1.2, pilot_above=1.2, rule="chosen")
    close(numbers(read(mirrored, how, widths, "below")), numbers(read(data, how)))


@given(HOW, SEEDS, st.booleans())
@settings(max_examples=20)
def test_a_weighted_row_as_two_rows_of_its_cluster_changes_nothing_in_a_sandwich(
    how: Choices, seed: int, fuzzy: bool
) -> None:
    """Σ over the cluster of l e does not know how many rows carry it, so that the error must not move either."""
    data = rows(seed, "take-up and clusters" if fuzzy else "clusters")
    how = Choices(kernel=how.kernel, order=how.order, variance="hc0", level=how.level)
    split = np.random.default_rng(seed).random(len(data["position"])) < 0.3
    doubled = data | {"weight": np.where(split, 2 * data["weight"], data["weight"])}
    twice = {name: np.concatenate((column, column[split])) for name, column in data.items()}
    close(numbers(read(twice, how)), numbers(read(doubled, how)))


@given(HOW, SEEDS, st.floats(-5, 5), st.floats(-5, 5))
@settings(max_examples=20)
def test_what_covariates_explain_is_taken_off_whole(
    how: Choices, seed: int, first: float, second: float
) -> None:
    data = rows(seed, "covariates")
    moved = data | {"outcome": data["outcome"] + data["covariates"] @ np.array([first, second])}
    one, other = read(data, how), read(moved, how)
    # The bound on the curvature is learnt from the outcome as it stands: the honest interval may move.
    np.testing.assert_allclose(other.estimate, one.estimate, rtol=1e-9, atol=1e-10)
    np.testing.assert_allclose(other.std_error, one.std_error, rtol=1e-8)
    np.testing.assert_allclose(other.robust.low, one.robust.low, rtol=1e-8, atol=1e-9)


@given(HOW, SEEDS, st.floats(0.2, 5), st.sampled_from(["take-up", "take-up and clusters"]))
@settings(max_examples=20)
def test_an_outcome_that_is_take_up_has_its_own_ratio_and_no_error(
    how: Choices, seed: int, effect: float, kind: str
) -> None:
    data = rows(seed, kind)
    moved = data | {"outcome": 7.0 + effect * data["take_up"]}
    reading = read(moved, how)
    assert reading.estimate == pytest.approx(effect, rel=1e-10)
    assert reading.robust.estimate == pytest.approx(effect, rel=1e-8)
    # A variance of nought up to rounding: its root keeps half the digits.
    assert reading.std_error < 1e-6 * effect * max(
        1.0, 1.0 / abs(reading.take_up.jump if reading.take_up else 1.0)
    )


@given(HOW, SEEDS, st.floats(-2, 2))
@settings(max_examples=20)
def test_a_known_effect_added_to_takers_moves_the_ratio_by_it(how: Choices, seed: int, effect: float) -> None:
    data = rows(seed, "take-up")
    moved = data | {"outcome": data["outcome"] + effect * data["take_up"]}
    one, other = read(data, how), read(moved, how)
    close(
        np.array([other.estimate, other.std_error]),
        np.array([one.estimate + effect, one.std_error]),
        rtol=1e-7,
    )
    assert one.take_up is not None and other.take_up is not None
    assert len(one.take_up.anderson_rubin) == len(other.take_up.anderson_rubin)
    for (a, b), (c, d) in zip(one.take_up.anderson_rubin, other.take_up.anderson_rubin):
        for before, after in ((a, c), (b, d)):
            if math.isfinite(before):
                assert after == pytest.approx(before + effect, rel=1e-6, abs=1e-6)
            else:
                assert after == before


@given(HOW, KIND, SEEDS)
@settings(max_examples=20)
def test_polynomials_of_the_order_have_no_jump_and_no_hc_error(how: Choices, kind: str, seed: int) -> None:
    """A polynomial of order p is fitted whole on each side, whatever the rest of the study holds."""
    data = rows(seed, kind)
    x = data["position"]
    smooth = sum((j + 1) * (0.7 * x) ** j for j in range(how.order + 1))
    reading = read(data | {"outcome": smooth + 0.25 * data["above"]}, how)
    sharp = reading if reading.intention is None else reading.intention
    assert sharp.estimate == pytest.approx(0.25, rel=1e-8)
    assert sharp.robust.estimate == pytest.approx(0.25, rel=1e-7)
    if how.variance != "neighbour":
        assert sharp.std_error < 1e-6
