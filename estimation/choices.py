"""The choices behind one estimate. Imports no numpy: the first screen and the study file need only these."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

KERNELS: Final = ("triangular", "uniform", "epanechnikov")
BANDWIDTH_RULES: Final = ("mse", "coverage", "bias-aware", "mse per side", "coverage per side")
PILOT_RULES: Final = ("same", "mse")
INTERVALS: Final = ("robust", "bias-aware", "plain")
VARIANCES: Final = ("neighbour", "hc0", "hc1", "hc2", "hc3")
ORDERS: Final = (0, 1, 2, 3)


@dataclass(frozen=True, slots=True, kw_only=True)
class Choices:
    """How an effect at the line is estimated.

    Attributes
    ----------
    bandwidth
        A rule of `BANDWIDTH_RULES`, one width for both sides, or (below, above), in units of the score.
    pilot
        Width of the fit that estimates the bias: "same" as the bandwidth, the "mse" rule's own, or a number.
    kernel, order
        Kernel of `KERNELS`; order of the local polynomial, 0 (means) to 3.
    interval
        The interval that leads, of `INTERVALS`.
    level
        Confidence level, in (0, 1).
    variance
        One of `VARIANCES`. A cluster column makes any of them clustered.
    curvature
        Bound on the second derivative of each side's regression for the bias-aware interval, in units of
        outcome per squared unit of score; "auto" takes a rule of thumb from the data.
    donut
        Rows with |score − cutoff| below this are left out, in units of the score.
    adjust
        Whether the covariates adjust the headline; where there are any, both answers are reported.
    """

    bandwidth: str | float | tuple[float, float] = "mse"
    pilot: str | float = "same"
    kernel: str = "triangular"
    order: int = 1
    interval: str = "robust"
    level: float = 0.95
    variance: str = "neighbour"
    curvature: str | float = "auto"
    donut: float = 0.0
    adjust: bool = False
