"""Clustered variances from sums by cluster, against leaving clusters out by hand and general libraries."""

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm

from estimation.adjustment import adjusted
from estimation.choices import Choices
from estimation.cluster_ladder import ClusterLadder
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows
from estimation.sample import Sample, build_sample

WIDTHS = Bandwidths(below=0.7, above=0.9, pilot_below=1.0, pilot_above=0.8, rule="chosen")
SAME = Bandwidths.common(0.8)


def draw(
    seed: int, rows: int = 700, clusters: int = 30, *, one_side: bool = False, fuzzy: bool = False
) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    code = rng.integers(0, clusters, rows)
    x = rng.uniform(-1.2, 1.2, rows)
    if one_side:
        x = np.where(code % 2 == 0, np.abs(x), -np.abs(x))
    y = np.sin(x) + 0.4 * (x >= 0) + rng.normal(0, 0.5, clusters)[code] + rng.normal(0, 1, rows)
    data = {
        "position": x,
        "outcome": y,
        "above": x >= 0,
        "weight": rng.uniform(0.5, 2, rows),
        "cluster": code,
    }
    if fuzzy:
        data["take_up"] = (rng.uniform(size=rows) < 0.2 + 0.5 * (x >= 0)).astype(float)
    return data


def sample_of(data: dict[str, np.ndarray]) -> Sample:
    return build_sample(**data, treated="above", score_magnitude=2.0)  # type: ignore[arg-type]


@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("order", [0, 1, 2])
@pytest.mark.parametrize("widths", [SAME, WIDTHS])
@pytest.mark.parametrize("one_side", [False, True])
def test_the_jackknife_leaves_out_each_cluster(
    kernel: str, order: int, widths: Bandwidths, one_side: bool
) -> None:
    data = draw(order, one_side=one_side, fuzzy=True)
    whole = fit_rows(sample_of(data), widths, kernel=kernel, order=order, variance="hc0")
    names = np.unique(data["cluster"])
    plain, robust = [], []
    for name in names:
        kept = data["cluster"] != name
        fit = fit_rows(
            sample_of({key: column[kept] for key, column in data.items()}),
            widths,
            kernel=kernel,
            order=order,
            variance="hc0",
        )
        plain.append(whole.jump - fit.jump)
        robust.append(whole.robust_jump - fit.robust_jump)
    count = len(names)
    factor = (count - 1) / count
    spread = ClusterLadder.build(sample_of(data), kernel=kernel, order=order).spread(
        widths, order=order, variance="neighbour"
    )
    assert spread.clusters == count
    assert spread.covariance == pytest.approx(factor * np.array(plain).T @ np.array(plain), rel=1e-8)
    assert spread.robust_covariance == pytest.approx(factor * np.array(robust).T @ np.array(robust), rel=1e-7)


@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("order", [0, 1, 2, 3])
@pytest.mark.parametrize("kind", ["hc0", "hc1"])
def test_the_sandwich_is_the_row_by_row_one(kernel: str, order: int, kind: str) -> None:
    sample = sample_of(draw(7, fuzzy=True))
    rows = fit_rows(sample, WIDTHS, kernel=kernel, order=order, variance=kind)
    spread = ClusterLadder.build(sample, kernel=kernel, order=order).spread(
        WIDTHS, order=order, variance=kind
    )
    assert spread.clusters == rows.clusters
    assert spread.covariance == pytest.approx(rows.covariance, rel=1e-8)
    assert spread.robust_covariance == pytest.approx(rows.robust_covariance, rel=1e-7)


def test_the_sandwich_is_a_general_librarys() -> None:
    data = draw(3)
    h = 0.8
    x, inside = data["position"], np.abs(data["position"]) < h
    above = (x >= 0).astype(float)
    design = np.column_stack((np.ones_like(x), above, x, above * x))[inside]
    weight = ((1 - np.abs(x) / h) * data["weight"])[inside]
    groups = data["cluster"][inside]
    fit = sm.WLS(data["outcome"][inside], design, weights=weight).fit(
        cov_type="cluster", cov_kwds={"groups": groups, "use_correction": False}
    )
    count = len(np.unique(groups))
    spread = ClusterLadder.build(sample_of(data), kernel="triangular", order=1).spread(
        Bandwidths.common(h), order=1, variance="hc0"
    )
    assert spread.covariance[0, 0] == pytest.approx(fit.cov_params()[1, 1] * count / (count - 1), rel=1e-9)


def test_kept_distances_change_nothing() -> None:
    data = draw(5, rows=9000, clusters=50)
    sample = sample_of(data)
    kept = ClusterLadder.build(sample, kernel="triangular", order=1)
    assert len(kept.sides[0].edges) > 2
    below, above = (replace(side, edges=side.edges[:1], kept=side.kept[:1]) for side in kept.sides)
    bare = replace(kept, sides=(below, above))
    for width in (0.05, 0.4, 1.2):
        widths = Bandwidths.common(width)
        one, other = (ladder.spread(widths, order=1, variance="neighbour") for ladder in (kept, bare))
        assert one.covariance == pytest.approx(other.covariance, rel=1e-9)
        assert one.robust_covariance == pytest.approx(other.robust_covariance, rel=1e-8)


def test_a_cluster_that_carries_a_side_is_scored_instead_of_left_out() -> None:
    data = draw(9, clusters=12)
    # All of the lower side is one cluster: without it there is no fit there.
    data["cluster"] = np.where(data["above"], data["cluster"], 99)
    spread = ClusterLadder.build(sample_of(data), kernel="triangular", order=1).spread(
        SAME, order=1, variance="neighbour"
    )
    assert np.isfinite(spread.covariance).all()
    assert spread.covariance[0, 0] > 0


def test_the_line_reads_clustered_errors_with_and_without_covariates() -> None:
    data = draw(11)
    rng = np.random.default_rng(4)
    covariates = (data["outcome"] * 0.5 + rng.normal(size=700))[:, None]
    line = Line.prepare(
        sample_of(data), Choices(), with_covariates=sample_of(data | {"covariates": covariates})
    )
    assert line.on_ladder
    reading = line.reading(SAME)
    slow = fit_rows(line.sample, SAME, kernel="triangular", order=1, variance="neighbour")
    assert reading.clusters == slow.clusters == 30
    assert reading.std_error == pytest.approx(np.sqrt(slow.covariance[0, 0]), rel=1e-9)
    assert line.with_covariates is not None
    rows = fit_rows(
        line.with_covariates, SAME, kernel="triangular", order=1, variance="neighbour", adjust=True
    )
    expected = adjusted(rows, 1)
    found = line.reading(SAME, adjust=True)
    assert found.estimate == pytest.approx(expected.jump[0], rel=1e-9)
    assert found.std_error == pytest.approx(np.sqrt(expected.covariance[0, 0]), rel=1e-9)
    sweep = line.sweep(np.array([0.8]))
    assert sweep.low[0] == pytest.approx(reading.robust.low, rel=1e-12)
