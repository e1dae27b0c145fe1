"""Clustered variances from sums by cluster, against leaving clusters out by hand and general libraries."""

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm

from estimation.adjustment import adjusted
from estimation.choices import Choices
from estimation.cluster_ladder import ClusterLadder
from estimation.ladder import Ladder, Widths
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


def alike(one: np.ndarray, other: np.ndarray, tolerance: float = 1e-10) -> None:
    """Covariances agree to 1e-10 of the errors they are made of."""
    scale = np.sqrt(np.outer(np.diagonal(other), np.diagonal(other)))
    assert one / scale == pytest.approx(other / scale, rel=tolerance, abs=tolerance)


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
    alike(spread.covariance, factor * np.array(plain).T @ np.array(plain))
    alike(spread.robust_covariance, factor * np.array(robust).T @ np.array(robust))


@pytest.mark.parametrize("kernel", ["triangular", "uniform", "epanechnikov"])
@pytest.mark.parametrize("order", [0, 1, 2, 3])
@pytest.mark.parametrize("kind", [{}, {"offset": 1e6}, {"unit": 1e-6}, {"ties": True}, {"level": 1e4}])
def test_the_sums_are_the_rows(kernel: str, order: int, kind: dict[str, object]) -> None:
    data = draw(7, rows=900, fuzzy=True)
    unit = float(kind.get("unit", 1.0))  # type: ignore[arg-type]
    x = np.round(data["position"], 1) if "ties" in kind else data["position"]
    offset = float(kind.get("offset", 0.0))  # type: ignore[arg-type]
    data["position"] = (x * unit + offset) - offset
    data["above"] = x >= 0
    data["outcome"] = data["outcome"] + float(kind.get("level", 0.0))  # type: ignore[arg-type]
    sample = sample_of(data)
    ladder = ClusterLadder.build(sample, kernel=kernel, order=order)
    for below, above, pilot_below, pilot_above in ((0.7, 0.9, 1.0, 0.8), (0.8, 0.8, 0.8, 0.8)):
        widths = Bandwidths(
            below=below * unit,
            above=above * unit,
            pilot_below=pilot_below * unit,
            pilot_above=pilot_above * unit,
            rule="chosen",
        )
        for variance in ("neighbour", "hc0", "hc1"):
            rows = fit_rows(sample, widths, kernel=kernel, order=order, variance=variance)
            spread = ladder.spread(widths, order=order, variance=variance)
            assert spread.clusters == rows.clusters
            # A quartic through eight distinct scores has ten digits less one to give from sums of powers.
            tolerance = 1e-9 if "ties" in kind and order == 3 else 1e-10
            alike(spread.covariance, rows.covariance, tolerance)
            alike(spread.robust_covariance, rows.robust_covariance, tolerance)


def test_lower_orders_are_asked_of_a_higher_ladder() -> None:
    sample = sample_of(draw(8))
    ladder = ClusterLadder.build(sample, kernel="epanechnikov", order=3)
    for order in (0, 1, 2):
        rows = fit_rows(sample, WIDTHS, kernel="epanechnikov", order=order, variance="neighbour")
        spread = ladder.spread(WIDTHS, order=order, variance="neighbour")
        alike(spread.covariance, rows.covariance)
        alike(spread.robust_covariance, rows.robust_covariance)


def test_the_jackknife_is_a_general_librarys_fits_without_each_cluster() -> None:
    data = draw(13)
    h, x, groups = 0.8, data["position"], data["cluster"]
    above = (x >= 0).astype(float)
    design = np.column_stack((np.ones_like(x), above, x, above * x))
    weight = np.maximum(1 - np.abs(x) / h, 0) * data["weight"]

    def jump(rows: np.ndarray) -> float:
        return float(sm.WLS(data["outcome"][rows], design[rows], weights=weight[rows]).fit().params[1])

    whole, names = jump(weight > 0), np.unique(groups[weight > 0])
    changes = np.array([whole - jump((weight > 0) & (groups != name)) for name in names])
    spread = ClusterLadder.build(sample_of(data), kernel="triangular", order=1).spread(
        Bandwidths.common(h), order=1, variance="neighbour"
    )
    share = (len(names) - 1) / len(names)
    assert spread.covariance[0, 0] == pytest.approx(share * float(changes @ changes), rel=1e-10)


@pytest.mark.parametrize("variance", ["neighbour", "hc1"])
def test_many_widths_are_the_widths_one_by_one(variance: str) -> None:
    sample = sample_of(draw(15, rows=9000, clusters=60, fuzzy=True))
    clusters = ClusterLadder.build(sample, kernel="triangular", order=1)
    ladder = Ladder.build(sample, kernel="triangular", order=1)
    # In no order, with a repeat, and one that is too narrow for any fit.
    grid = np.array([0.9, 0.05, 0.4, 1e-6, 0.4, 1.15])
    for pilot in (None, 0.6):
        widths = Widths.common(grid, pilot)
        plain = ladder.fits(widths)
        fits = clusters.clustered(plain, widths, order=1, variance=variance)
        assert fits.clusters is not None
        assert np.array_equal(fits.jump, plain.jump, equal_nan=True)
        for i, width in enumerate(grid):
            if width == 1e-6:
                assert np.isnan(fits.covariance[i]).all()
                continue
            one = clusters.spread(Bandwidths.common(float(width), pilot), order=1, variance=variance)
            assert fits.clusters[i] == one.clusters == fits.at(i).clusters
            alike(fits.covariance[i], one.covariance)
            alike(fits.robust_covariance[i], one.robust_covariance)


def test_many_clusters_are_handled_some_at_a_time(monkeypatch: pytest.MonkeyPatch) -> None:
    # Clusters of about four rows, far more than one stretch of them holds.
    sample = sample_of(draw(16, rows=1500, clusters=400))
    monkeypatch.setattr("estimation.cluster_ladder._TOGETHER", 64)
    for variance in ("neighbour", "hc0"):
        rows = fit_rows(sample, WIDTHS, kernel="triangular", order=1, variance=variance)
        spread = ClusterLadder.build(sample, kernel="triangular", order=1).spread(
            WIDTHS, order=1, variance=variance
        )
        assert spread.clusters == rows.clusters
        alike(spread.covariance, rows.covariance)
        alike(spread.robust_covariance, rows.robust_covariance)


def test_kept_sums_stay_within_their_room() -> None:
    sample = sample_of(draw(17, rows=300_000, clusters=60_000))
    below, _ = ClusterLadder.build(sample, kernel="triangular", order=1).sides
    assert below.kept.nbytes <= 48 * 2**20 + below.kept[0].nbytes
    assert len(below.edges) > 5


def test_rows_of_no_weight_bring_no_cluster() -> None:
    data = draw(18)
    without = {key: column[data["cluster"] != 3] for key, column in data.items()}
    data["weight"] = np.where(data["cluster"] == 3, 0.0, data["weight"])
    for variance in ("neighbour", "hc0"):
        expected = fit_rows(sample_of(without), SAME, kernel="uniform", order=1, variance=variance)
        rows = fit_rows(sample_of(data), SAME, kernel="uniform", order=1, variance=variance)
        spread = ClusterLadder.build(sample_of(data), kernel="uniform", order=1).spread(
            SAME, order=1, variance=variance
        )
        assert rows.clusters == spread.clusters == expected.clusters
        alike(rows.covariance, expected.covariance)
        alike(spread.covariance, expected.covariance)


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
        alike(one.covariance, other.covariance)
        alike(one.robust_covariance, other.robust_covariance)


def test_a_cluster_that_carries_a_side_is_scored_instead_of_left_out() -> None:
    data = draw(9, clusters=12)
    # All of the lower side is one cluster: without it there is no fit there.
    data["cluster"] = np.where(data["above"], data["cluster"], 99)
    spread = ClusterLadder.build(sample_of(data), kernel="triangular", order=1).spread(
        SAME, order=1, variance="neighbour"
    )
    rows = fit_rows(sample_of(data), SAME, kernel="triangular", order=1, variance="neighbour")
    alike(spread.covariance, rows.covariance)
    alike(spread.robust_covariance, rows.robust_covariance)
    # By hand: what the lower side's only cluster does is its score, which for a whole side's fit is nought.
    upper = []
    for name in (*np.unique(data["cluster"][data["above"]]),):
        kept = data["cluster"] != name
        part = sample_of({key: column[kept] for key, column in data.items()})
        fit = fit_rows(part, SAME, kernel="triangular", order=1, variance="hc0")
        upper.append(rows.levels_above[0] - fit.levels_above[0])
    share = 1 - 1 / (len(upper) + 1)
    assert spread.covariance[0, 0] == pytest.approx(share * np.sum(np.square(upper)), rel=1e-9)


def test_a_cluster_that_only_the_pilot_needs_is_left_out_of_the_rest() -> None:
    # Without cluster 99 the lower side has two distinct scores: enough for a line, too few for the quadratic.
    data = draw(21)
    x = np.where(data["above"], data["position"], -np.ceil(-data["position"] * 5) / 5)
    data["position"] = np.where(data["above"], x, np.maximum(x, -0.8))
    data["cluster"] = np.where(
        np.isclose(data["position"], [[-0.6], [-0.8]]).any(axis=0), 99, data["cluster"]
    )
    sample = sample_of(data)
    widths = Bandwidths.common(0.9)
    rows = fit_rows(sample, widths, kernel="triangular", order=1, variance="neighbour")
    spread = ClusterLadder.build(sample, kernel="triangular", order=1).spread(
        widths, order=1, variance="neighbour"
    )
    alike(spread.covariance, rows.covariance)
    alike(spread.robust_covariance, rows.robust_covariance)
    without = {key: column[data["cluster"] != 99] for key, column in data.items()}
    below = np.unique(without["position"][~without["above"]])
    assert len(below) == 2
    # By hand: the lower level less the level of the straight line through what is left there.
    side, k = ~without["above"], (1 - np.abs(without["position"]) / 0.9) * without["weight"]
    line = np.polynomial.polynomial.polyfit(
        without["position"][side], without["outcome"][side], 1, w=np.sqrt(k[side])
    )
    ladder = ClusterLadder.build(sample, kernel="triangular", order=1)
    found = ladder.changes(widths, order=1, variance="neighbour")
    share = np.sqrt(1 - 1 / found.inside)
    change = found.plain[found.names == 99, 0][0] / share
    assert change == pytest.approx(-(rows.levels_below[0] - line[0]), rel=1e-9)


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
