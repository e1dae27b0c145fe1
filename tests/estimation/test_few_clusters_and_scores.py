"""What the smallest studies ask: honest intervals from few clusters, bandwidth rules at the fewest scores."""

import numpy as np
import pytest
from scipy import stats

from estimation.choices import Choices
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.sample import Sample, build_sample


def clustered(seed: int, groups: int) -> Sample:
    rng = np.random.default_rng(seed)
    code = rng.integers(0, groups, 400)
    x = rng.uniform(-1, 1, 400)
    y = x + rng.normal(0, 0.5, groups)[code] + rng.normal(0, 1, 400)
    return build_sample(
        position=x, outcome=y, above=x >= 0, treated="above", cluster=code, score_magnitude=1.0
    )


@pytest.mark.parametrize("groups", [6, 12, 40])
def test_without_any_bend_the_honest_interval_is_the_plain_one_by_students_t(groups: int) -> None:
    line = Line.prepare(clustered(1, groups), Choices(curvature=0.0))
    reading = line.reading(Bandwidths.common(0.8))
    assert reading.bias_aware is not None
    assert reading.bias_aware.low == pytest.approx(reading.plain.low, rel=1e-9)
    assert reading.bias_aware.critical_value == pytest.approx(stats.t.ppf(0.975, groups - 1), rel=1e-9)


@pytest.mark.parametrize("rule", ["mse", "coverage", "bias-aware", "mse per side"])
@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
def test_four_scores_a_side_are_enough_for_every_rule(rule: str, kernel: str) -> None:
    # Four distinct values a side is the least that the WWC handbook accepts; order 1 with its correction needs as many.
    rng = np.random.default_rng(2)
    x = np.repeat([-4.0, -3.0, -2.0, -1.0, 1.0, 2.0, 3.0, 4.0], 40)
    y = 0.3 * x + (x > 0) + rng.normal(0, 1, len(x))
    sample = build_sample(position=x, outcome=y, above=x > 0, treated="above", score_magnitude=4.0)
    line = Line.prepare(sample, Choices(bandwidth=rule, kernel=kernel))
    reading = line.reading(line.bandwidths())
    assert reading.count_below == reading.count_above == 160
    assert np.isfinite(reading.robust.std_error)
