"""Constants of local polynomial fits and critical values of honest intervals, against printed ones.

Sources: boundary constants of Fan & Gijbels (1996) and the constants of Imbens & Kalyanaraman (2012), from memory and
re-derived (methods note 1, 3); honest critical values of Armstrong & Kolesár (2020), Table 1, from memory, others
computed (methods note 4).
"""

import numpy as np
import pytest
from scipy import integrate, optimize, stats

from estimation.inference import breakdown_curvature, critical_values, honest_interval
from estimation.kernels import COEFFICIENTS, kernel_values
from estimation.local_polynomial import fit_side
from estimation.sample import Side

pytestmark = pytest.mark.published

RATIOS = [0.0, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0, 1.5, 2.0]
PRINTED = [1.960, 1.970, 1.999, 2.045, 2.107, 2.181, 2.265, 2.356, 2.450, 2.548, 2.646, 3.145, 3.645]


def even_side(rows: int) -> Side:
    """Rows evenly spread on (0, 1), where sums are integrals to 1/rows²."""
    distance = (np.arange(rows) + 0.5) / rows
    return Side(distance=distance, values=distance[:, None], weight=None, cluster=None, row=np.arange(rows))


@pytest.mark.parametrize(
    ("kernel", "bias", "variance"),
    [("triangular", -1 / 10, 24 / 5), ("uniform", -1 / 6, 4.0), ("epanechnikov", -11 / 95, 4.49798)],
)
def test_local_linear_constants(kernel: str, bias: float, variance: float) -> None:
    side = even_side(20_000)
    weights = fit_side(side, bandwidth=1.0, kernel=kernel, order=1).weights[0]
    d = side.distance[: len(weights)]
    # Level bias is (h²/2)·B·μ″: B = Σ l d² at h = 1. Variance is V·σ²/(n h f): V = n Σ l².
    assert weights @ d**2 == pytest.approx(bias, abs=1e-6)
    assert 20_000 * (weights @ weights) == pytest.approx(variance, abs=2e-3)


@pytest.mark.parametrize(
    ("kernel", "variance"), [("triangular", 72 / 7), ("uniform", 9.0), ("epanechnikov", 9.8165)]
)
def test_local_quadratic_variance(kernel: str, variance: float) -> None:
    weights = fit_side(even_side(20_000), bandwidth=1.0, kernel=kernel, order=2).weights[0]
    assert 20_000 * (weights @ weights) == pytest.approx(variance, abs=5e-3)


@pytest.mark.parametrize(
    ("kernel", "constant"), [("triangular", 3.4375), ("uniform", 2.702), ("epanechnikov", 3.1999)]
)
def test_imbens_kalyanaraman_constant(kernel: str, constant: float) -> None:
    # C_K = (C2 / (4 C1²))^(1/5)-type constant of the local linear boundary fit: with bias (h²/2)·B·μ″ a side and
    # variance V·σ²/(n h f), the optimum is h⁵ = V / B² · (σ²₊ + σ²₋)/(f (μ″₊ − μ″₋)²)/n.
    def moment(r: int, power: int = 1) -> float:
        return float(
            integrate.quad(lambda u: kernel_values(np.array([u]), 1.0, kernel)[0] ** power * u**r, 0.0, 1.0)[
                0
            ]
        )

    s0, s1, s2, s3 = (moment(r) for r in range(4))
    det = s0 * s2 - s1**2
    bias = (s2**2 - s1 * s3) / det
    t0, t1, t2 = (moment(r, 2) for r in range(3))
    variance = (s2**2 * t0 - 2 * s1 * s2 * t1 + s1**2 * t2) / det**2
    assert (variance / bias**2) ** 0.2 == pytest.approx(constant, abs=6e-4)
    assert len(COEFFICIENTS[kernel]) <= 3


def test_honest_critical_values_as_printed() -> None:
    assert critical_values(np.array(RATIOS), 0.95) == pytest.approx(PRINTED, abs=5.1e-4)
    assert critical_values(np.array([0.0, 0.5, 1.0, 2.0]), 0.99) == pytest.approx(
        [2.576, 2.842, 3.327, 4.326], abs=6e-4
    )
    assert critical_values(np.array([0.0, 0.5, 1.0, 2.0]), 0.90) == pytest.approx(
        [1.645, 1.839, 2.284, 3.282], abs=6e-4
    )


@pytest.mark.parametrize("level", [0.5, 0.9, 0.95, 0.999])
@pytest.mark.parametrize("ratio", [0.0, 1e-9, 0.03, 0.77, 4.0, 40.0, 1e4])
def test_honest_critical_values_are_quantiles_of_a_folded_normal(level: float, ratio: float) -> None:
    c = critical_values(ratio, level)
    # The folded normal by its own distribution in a general-purpose library.
    assert stats.foldnorm.cdf(c, ratio) == pytest.approx(level, rel=1e-9)


def test_the_breakdown_curvature_is_where_the_interval_first_holds_zero() -> None:
    found = breakdown_curvature(2.0, 0.5, unit_bias=0.3, level=0.95)

    def low(curvature: float) -> float:
        return honest_interval(2.0, 0.5, unit_bias=0.3, curvature=curvature, level=0.95).low

    assert found == pytest.approx(optimize.brentq(low, 0.0, 100.0), rel=1e-9)
    assert breakdown_curvature(0.5, 0.5, unit_bias=0.3, level=0.95) == 0.0
