"""What must not change when the data are written down differently, over all choices (methods 1; hypothesis)."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from estimation.choices import Choices
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.reading import Reading
from estimation.sample import build_sample

choices = st.builds(
    Choices,
    kernel=st.sampled_from(["triangular", "uniform", "epanechnikov"]),
    order=st.sampled_from([1, 2]),
    variance=st.sampled_from(["neighbour", "hc0", "hc1", "hc2", "hc3"]),
    bandwidth=st.sampled_from(["mse", "coverage", "mse per side"]),
    pilot=st.sampled_from(["same", "mse"]),
)
WIDTHS = Bandwidths(below=0.8, above=0.9, pilot_below=1.0, pilot_above=1.1, rule="chosen")


def rows(seed: int, ties: bool = False) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = rng.uniform(-1.5, 1.5, 260)
    if ties:
        x = np.round(x, 1)
    return {
        "position": x,
        "outcome": 2.0 + np.exp(x / 2) + 0.5 * (x >= 0) + rng.normal(0, 0.3, 260),
        "above": x >= 0,
        "weight": rng.uniform(0.5, 2.0, 260),
    }


def read(
    data: dict[str, np.ndarray], how: Choices, widths: Bandwidths | None, treated: str = "above"
) -> Reading:
    sample = build_sample(**data, treated=treated, score_magnitude=2.0)  # type: ignore[arg-type]
    line = Line.prepare(sample, how)
    return line.reading(line.bandwidths() if widths is None else widths)


def numbers(reading: Reading) -> list[float]:
    assert reading.bias_aware is not None
    return [
        reading.estimate,
        reading.std_error,
        reading.robust.estimate,
        reading.robust.std_error,
        reading.bias_aware.low,
        reading.bias_aware.high,
    ]


def close(found: list[float], expected: list[float], rel: float = 1e-7) -> None:
    scale = max(abs(value) for value in expected)
    assert found == pytest.approx(expected, rel=rel, abs=rel * scale)


@given(choices, st.integers(0, 50), st.booleans())
@settings(max_examples=25, deadline=None)
def test_row_order(how: Choices, seed: int, ties: bool) -> None:
    data = rows(seed, ties)
    order = np.random.default_rng(seed + 1).permutation(260)
    close(
        numbers(read({name: column[order] for name, column in data.items()}, how, None)),
        numbers(read(data, how, None)),
    )


@given(choices, st.integers(0, 50), st.sampled_from([1e-4, 0.3, 7.0, 1e5]), st.floats(-1e4, 1e4))
@settings(max_examples=25, deadline=None)
def test_shift_and_scale_of_the_outcome(how: Choices, seed: int, scale: float, shift: float) -> None:
    data = rows(seed)
    moved = data | {"outcome": scale * data["outcome"] + shift}
    expected = [scale * value for value in numbers(read(data, how, None))]
    close(numbers(read(moved, how, None)), expected, rel=1e-7 * (1 + abs(shift) / scale / 10))


@given(choices, st.integers(0, 50), st.sampled_from([1e-6, 0.5, 3.0, 1e4]))
@settings(max_examples=25, deadline=None)
def test_the_unit_of_the_score(how: Choices, seed: int, scale: float) -> None:
    data = rows(seed)
    sample = build_sample(
        **(data | {"position": scale * data["position"]}),  # type: ignore[arg-type]
        treated="above",
        score_magnitude=2.0 * scale,
    )
    line = Line.prepare(sample, how)
    reading, here = line.reading(line.bandwidths()), read(data, how, None)
    close(numbers(reading), numbers(here))
    assert (reading.count_below, reading.count_above) == (here.count_below, here.count_above)


@given(choices, st.integers(0, 50), st.booleans())
@settings(max_examples=25, deadline=None)
def test_reflection_of_the_score_with_the_treated_side(how: Choices, seed: int, ties: bool) -> None:
    data = rows(seed, ties)
    mirrored = data | {"position": -data["position"], "above": ~data["above"]}
    close(numbers(read(mirrored, how, None, "below")), numbers(read(data, how, None)))


@given(choices, st.integers(0, 50))
@settings(max_examples=25, deadline=None)
def test_a_row_of_weight_two_estimates_as_two_rows(how: Choices, seed: int) -> None:
    data = rows(seed)
    chosen = np.random.default_rng(seed).integers(0, 260, 30)
    doubled = data | {"weight": np.where(np.isin(np.arange(260), chosen), 2 * data["weight"], data["weight"])}
    twice = {name: np.concatenate((column, column[np.unique(chosen)])) for name, column in data.items()}
    one, two = read(doubled, how, WIDTHS), read(twice, how, WIDTHS)
    assert two.estimate == pytest.approx(one.estimate, rel=1e-9)
    assert two.robust.estimate == pytest.approx(one.robust.estimate, rel=1e-8)
    # Two rows are more information than one of twice the weight: counts follow the rows.
    inside = (np.abs(data["position"][np.unique(chosen)]) < 0.8).any()
    assert not inside or two.count_below + two.count_above > one.count_below + one.count_above


@given(choices, st.integers(0, 50))
@settings(max_examples=25, deadline=None)
def test_rows_outside_the_widths_change_nothing_but_the_rule_of_thumb(how: Choices, seed: int) -> None:
    data = rows(seed)
    rng = np.random.default_rng(seed + 9)
    # Far enough that no row inside has one of them among its nearest neighbours.
    far = np.concatenate((-rng.uniform(5.0, 6.0, 40), rng.uniform(5.0, 6.0, 40)))
    more = {
        "position": np.concatenate((data["position"], far)),
        "outcome": np.concatenate((data["outcome"], rng.normal(50, 9, 80))),
        "above": np.concatenate((data["above"], far >= 0)),
        "weight": np.concatenate((data["weight"], np.ones(80))),
    }
    fixed = replace(how, curvature=1.0)
    close(numbers(read(more, fixed, WIDTHS)), numbers(read(data, fixed, WIDTHS)), rel=1e-8)


@given(st.integers(0, 50))
@settings(max_examples=10, deadline=None)
def test_exchanging_the_treated_side_changes_the_sign(seed: int) -> None:
    data = rows(seed)
    one, other = read(data, Choices(), WIDTHS), read(data, Choices(), WIDTHS, "below")
    assert other.estimate == pytest.approx(-one.estimate, rel=1e-12)
    assert other.robust.low == pytest.approx(-one.robust.high, rel=1e-12)
