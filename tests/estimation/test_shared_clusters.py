"""Sites that share clusters: their joint covariance against leaving each cluster out of all of them by hand."""

import numpy as np
import pytest

from estimation.choices import Choices
from estimation.line import Line
from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows
from estimation.sample import Sample, build_sample
from estimation.shared_clusters import joint_covariance, shares_of_jump, shares_of_ratio
from estimation.take_up import ratio_of_jumps

WIDTHS = (Bandwidths.common(0.9, 1.1), Bandwidths.common(0.8), Bandwidths.common(1.0))


def draw(seed: int, *, treated: str = "above") -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    rows = 1500
    code, site = rng.integers(100, 140, rows), rng.integers(0, 3, rows)
    # The third site has clusters of its own besides those it shares.
    code = np.where((site == 2) & (rng.uniform(size=rows) < 0.4), code + 500, code)
    x = rng.uniform(-1.2, 1.2, rows)
    on = (x >= 0) == (treated == "above")
    shock = rng.normal(0, 0.7, 700)[code]
    took = (rng.uniform(size=rows) < 0.2 + 0.6 * on).astype(float)
    return {
        "position": x,
        "outcome": np.sin(x) + 0.5 * took + shock * (1 + on) + rng.normal(0, 1, rows),
        "above": x >= 0,
        "take_up": took,
        "cluster": code,
        "site": site,
        "covariates": (shock + rng.normal(size=rows))[:, None],
    }


def sample_of(
    data: dict[str, np.ndarray], rows: np.ndarray, treated: str, covariates: bool = False
) -> Sample:
    columns = {
        key: column[rows]
        for key, column in data.items()
        if key != "site" and (covariates or key != "covariates")
    }
    return build_sample(**columns, treated=treated, score_magnitude=2.0)  # type: ignore[arg-type]


@pytest.mark.parametrize("treated", ["above", "below"])
@pytest.mark.parametrize("variance", ["neighbour", "hc0"])
def test_the_diagonal_is_each_sites_own_variance(treated: str, variance: str) -> None:
    data = draw(1, treated=treated)
    lines = [
        Line.prepare(sample_of(data, data["site"] == s, treated), Choices(variance=variance))
        for s in range(3)
    ]
    jumps, ratios = [], []
    for line, widths in zip(lines, WIDTHS):
        changes = line.cluster_changes(widths)
        assert changes is not None
        jumps.append(shares_of_jump(changes))
        ratios.append(shares_of_ratio(changes, line.fit(widths)))
    for parts, which in ((jumps, "jump"), (ratios, "ratio")):
        covariance, clusters = joint_covariance(parts)
        assert clusters == len(np.unique(data["cluster"]))
        for i, (line, widths) in enumerate(zip(lines, WIDTHS)):
            reading = line.reading(widths)
            robust = reading.robust if which == "ratio" else reading.intention.robust  # type: ignore[union-attr]
            assert np.sqrt(covariance[i, i]) == pytest.approx(robust.std_error, rel=1e-9)


@pytest.mark.parametrize("treated", ["above", "below"])
def test_the_rest_is_what_leaving_each_cluster_out_does_to_two_sites_at_once(treated: str) -> None:
    data = draw(2, treated=treated)
    lines = [Line.prepare(sample_of(data, data["site"] == s, treated), Choices()) for s in range(3)]
    names = np.unique(data["cluster"])
    jump = np.zeros((3, len(names)))
    ratio = np.zeros((3, len(names)))
    for s, widths in enumerate(WIDTHS):

        def fitted(rows: np.ndarray, widths: Bandwidths = widths) -> tuple[np.ndarray, np.ndarray]:
            fit = fit_rows(
                sample_of(data, rows, treated), widths, kernel="triangular", order=1, variance="hc0"
            )
            return fit.robust_jump, fit.robust_covariance

        whole, _ = fitted(data["site"] == s)
        here = np.unique(data["cluster"][data["site"] == s])
        factor = np.sqrt((len(here) - 1) / len(here))
        for g, name in enumerate(names):
            if name not in here:
                continue
            change = factor * (whole - fitted((data["site"] == s) & (data["cluster"] != name))[0])
            jump[s, g] = change[0]
            # To first order, what a change of both jumps does to their ratio.
            r = ratio_of_jumps(whole, np.eye(2)).estimate
            ratio[s, g] = (change[0] - r * change[1]) / whole[1]
    changes = [line.cluster_changes(widths) for line, widths in zip(lines, WIDTHS)]
    found, _ = joint_covariance([shares_of_jump(c) for c in changes if c is not None])
    assert found == pytest.approx(jump @ jump.T, rel=1e-7)
    assert abs(found[0, 1]) > 0.1 * np.sqrt(found[0, 0] * found[1, 1])
    parts = [shares_of_ratio(c, line.fit(w)) for c, line, w in zip(changes, lines, WIDTHS) if c is not None]
    assert joint_covariance(parts)[0] == pytest.approx(ratio @ ratio.T, rel=1e-7)


def test_covariates_taken_off_enter_the_shares() -> None:
    data = draw(3)
    rows = data["site"] == 0
    line = Line.prepare(
        sample_of(data, rows, "above"),
        Choices(adjust=True),
        with_covariates=sample_of(data, rows, "above", covariates=True),
    )
    changes = line.cluster_changes(WIDTHS[0], adjust=True)
    assert changes is not None
    reading = line.reading(WIDTHS[0])
    own = np.sum(shares_of_ratio(changes, line.fit(WIDTHS[0], adjust=True)).shares ** 2)
    assert np.sqrt(own) == pytest.approx(reading.robust.std_error, rel=1e-9)


def test_sites_without_a_common_cluster_are_independent() -> None:
    data = draw(4)
    data["cluster"] = data["cluster"] + 1000 * data["site"]
    lines = [Line.prepare(sample_of(data, data["site"] == s, "above"), Choices()) for s in range(3)]
    changes = [line.cluster_changes(widths) for line, widths in zip(lines, WIDTHS)]
    covariance, _ = joint_covariance([shares_of_jump(c) for c in changes if c is not None])
    assert covariance[~np.eye(3, dtype=bool)] == pytest.approx(0.0)
