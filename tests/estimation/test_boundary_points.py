"""Effects at boundary points against general-purpose fits, dense matrices and a corner with a known truth."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from estimation.boundary_points import _satterthwaite, average, point_effects

PLANE = np.eye(2)


def square(rows: int, seed: int, *, effect: float = 1.0, curved: float = 0.0) -> dict[str, np.ndarray]:
    """Units on the unit square; the treated quarter x, y > 0.5 makes an L-shaped border with a corner."""
    rng = np.random.default_rng(seed)
    places = rng.uniform(0, 1, (rows, 2))
    treated = (places[:, 0] > 0.5) & (places[:, 1] > 0.5)
    mean = places[:, 0] - 0.5 * places[:, 1] + curved * (places[:, 0] ** 2 + places[:, 1])
    return {
        "places": places,
        "treated": treated,
        "outcome": mean + effect * treated + rng.normal(0, 0.3, rows),
    }


POINTS = np.array([[0.5, 0.9], [0.5, 0.7], [0.5, 0.5], [0.7, 0.5], [0.9, 0.5]])


def effects(data: dict[str, np.ndarray], h: float = 0.2, **more: object):  # type: ignore[no-untyped-def]
    frames = np.repeat(PLANE[None], len(POINTS), axis=0)
    return point_effects(**data, points=POINTS, frames=frames, bandwidth=h, **more)  # type: ignore[arg-type]


def test_a_point_is_two_weighted_regressions() -> None:
    data = square(3000, 1)
    found = effects(data)
    for k, b in enumerate(POINTS):
        u = (data["places"] - b) / 0.2
        inside = (u**2).sum(axis=1) < 1
        levels, variance = [], 0.0
        for side in (False, True):
            rows = inside & (data["treated"] == side)
            design = np.column_stack((np.ones(rows.sum()), u[rows]))
            weight = 1 - np.sqrt((u[rows] ** 2).sum(axis=1))
            fit = sm.WLS(data["outcome"][rows], design, weights=weight).fit(cov_type="HC2")
            levels.append(fit.params[0])
            variance += fit.cov_params()[0, 0]
        assert found.estimate[k] == pytest.approx(levels[1] - levels[0], rel=1e-9)
        assert found.std_error[k] == pytest.approx(np.sqrt(variance), rel=1e-9)


def test_the_joint_covariance_is_that_of_one_dense_matrix_of_rows() -> None:
    data = square(2500, 2)
    found = effects(data)
    psi = np.zeros((2500, len(POINTS)))
    for k, b in enumerate(POINTS):
        u = (data["places"] - b) / 0.2
        r = np.sqrt((u**2).sum(axis=1))
        for side, sign in ((False, -1.0), (True, 1.0)):
            rows = np.flatnonzero((r < 1) & (data["treated"] == side))
            x = np.column_stack((np.ones(len(rows)), u[rows]))
            w = np.diag(1 - r[rows])
            a = np.linalg.inv(x.T @ w @ x)
            hat = x @ a @ x.T @ w
            e = data["outcome"][rows] - hat @ data["outcome"][rows]
            psi[rows, k] = sign * (a @ x.T @ w)[0] * e / np.sqrt(1 - np.diag(hat))
    assert found.covariance == pytest.approx(psi.T @ psi, rel=1e-8, abs=1e-14)


def test_degrees_of_freedom_are_those_of_the_dense_quadratic_form() -> None:
    rng = np.random.default_rng(3)
    x = np.column_stack((np.ones(60), rng.normal(size=(60, 2))))
    k = rng.uniform(0.1, 1, 60)
    a = np.linalg.inv(x.T @ (k[:, None] * x))
    line = (x @ a[0]) * k
    hat = x @ a @ x.T * k
    d2 = line**2 / (1 - np.diag(hat))
    # The estimate is e′ (I − H)′ D² (I − H) e; its trace and that of its square, for equal independent errors.
    form = (np.eye(60) - hat).T @ np.diag(d2) @ (np.eye(60) - hat)
    trace, square_trace = _satterthwaite(x, a, k, d2)
    assert trace == pytest.approx(np.trace(form), rel=1e-10)
    assert square_trace == pytest.approx(np.trace(form @ form), rel=1e-10)


def test_clusters_are_added_up_before_they_are_squared() -> None:
    data = square(2500, 4)
    code = np.random.default_rng(5).integers(0, 40, 2500)
    plain = effects(data)
    single = effects(data, cluster=np.arange(2500))
    assert single.covariance == pytest.approx(plain.covariance * 2500 / 2499, rel=1e-9)
    assert np.isfinite(effects(data, cluster=code).std_error).all()


def test_few_clusters_on_a_side_are_no_basis_for_an_error() -> None:
    data = square(2500, 4)
    # Vertical strips a tenth wide: two or three of them reach into the kernel on the treated side.
    strips = (data["places"][:, 0] * 10).astype(np.int64)
    found = effects(data, cluster=strips)
    assert not found.known.any()
    assert set(found.reasons) == {"fewer than 6 clusters on a side within the width"}


def test_the_band_is_wider_than_pointwise_and_narrower_than_bonferroni() -> None:
    found = effects(square(3000, 6))
    assert 1.96 < found.critical < stats.norm.ppf(1 - 0.025 / len(POINTS)) + 0.03
    assert np.all(found.band_low < found.low)


def test_a_place_without_rows_says_why() -> None:
    data = square(3000, 7)
    keep = ~((data["places"][:, 1] > 0.7) & ~data["treated"])
    found = effects({name: column[keep] for name, column in data.items()})
    assert np.isnan(found.estimate[0])
    assert found.reasons[0] == "fewer than 20 rows on a side within the width"
    assert found.reasons[3] == ""


def corner_units(rows: int = 300_000) -> tuple[np.ndarray, np.ndarray]:
    places = np.random.default_rng(8).uniform(0, 1, (rows, 2))
    return places, (places[:, 0] > 0.5) & (places[:, 1] > 0.5)


def test_the_bias_at_a_corner_shrinks_with_the_square_of_the_width() -> None:
    # No noise, a curved mean: what is left of the effect is bias.
    places, treated = corner_units()
    mean = np.sin(3 * places[:, 0]) * np.exp(places[:, 1])

    def bias(h: float) -> float:
        found = point_effects(
            places=places,
            treated=treated,
            outcome=mean,
            points=np.array([[0.5, 0.5]]),
            frames=PLANE[None],
            bandwidth=h,
        )
        return float(abs(found.estimate[0]))

    assert bias(0.3) / bias(0.15) == pytest.approx(4.0, rel=0.2)


def test_beside_a_corner_the_plane_is_exact_where_the_distance_alone_is_not() -> None:
    # A mean that is a plane, no effect. In the distance to the point its average has a kink where the corner comes in.
    places, treated = corner_units()
    mean = places[:, 0] - 0.5 * places[:, 1]
    point, h = np.array([[0.5, 0.54]]), 0.2
    found = point_effects(
        places=places, treated=treated, outcome=mean, points=point, frames=PLANE[None], bandwidth=h
    )
    r = np.sqrt(((places - point[0]) ** 2).sum(axis=1)) / h
    levels = []
    for side in (False, True):
        rows = (r < 1) & (treated == side)
        levels.append(np.polynomial.polynomial.polyfit(r[rows], mean[rows], 1, w=np.sqrt(1 - r[rows]))[0])
    assert abs(found.estimate[0]) < 1e-10
    assert abs(levels[1] - levels[0]) > 0.005


def test_averages_weigh_the_points_and_their_covariance() -> None:
    found = effects(square(3000, 9))
    share = np.array([1.0, 2.0, 3.0, 2.0, 1.0])
    mean = average(found, share)
    a = share / share.sum()
    assert mean.estimate == pytest.approx(a @ found.estimate, rel=1e-12)
    assert mean.std_error == pytest.approx(np.sqrt(a @ found.covariance @ a), rel=1e-12)
    assert mean.low < 1.0 < mean.high


@pytest.mark.slow
@pytest.mark.parametrize("rows", [1500, 20_000])
def test_the_band_covers(rows: int) -> None:
    held = []
    for seed in range(300):
        found = effects(square(rows, seed), h=0.2)
        known = found.known
        held.append(bool(np.all((found.band_low[known] <= 1) & (found.band_high[known] >= 1))))
    assert 0.93 - 0.025 <= np.mean(held) <= 0.98 + 0.015
