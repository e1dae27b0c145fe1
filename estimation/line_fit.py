"""What one pair of widths gives at the line, whichever way it was computed."""

from __future__ import annotations

from dataclasses import dataclass

from estimation.arrays import Matrix, Vector
from estimation.errors import CannotEstimate
from estimation.sample import SideName


@dataclass(frozen=True, slots=True, kw_only=True)
class Bandwidths:
    """Widths on each side of the line, in units of the score, and the rule they came from."""

    below: float
    above: float
    pilot_below: float
    pilot_above: float
    rule: str

    @classmethod
    def common(cls, bandwidth: float, pilot: float | None = None, rule: str = "chosen") -> Bandwidths:
        """One bandwidth for both sides; the pilot is the same unless given."""
        b = bandwidth if pilot is None else pilot
        return cls(below=bandwidth, above=bandwidth, pilot_below=b, pilot_above=b, rule=rule)

    def of(self, side: SideName) -> tuple[float, float]:
        """(bandwidth, pilot bandwidth) of one side."""
        return (self.below, self.pilot_below) if side == "below" else (self.above, self.pilot_above)


@dataclass(frozen=True, slots=True, kw_only=True)
class LineFit:
    """Everything that is linear or quadratic in the rows, at one pair of widths.

    The v variables are the outcome, take-up where there is one, then the covariates.

    Attributes
    ----------
    levels_below, levels_above
        Fitted values at the line, shape (v,).
    jump, covariance
        Treated level less the other, shape (v,), and its covariance, shape (v, v).
    robust_jump, robust_covariance
        The same, bias-corrected.
    unit_bias
        Worst bias of `jump` for each unit of the bound on the second derivative; infinite where no bound
        on it bounds the bias (order 0).
    adjustment
        Coefficients of the covariates for each earlier variable, shape (k, v − k).
    count_below, count_above
        Rows with a positive kernel weight at the bandwidth.
    effective
        Kish's number of equally weighted rows, both sides: Σ over sides (Σ k)² / Σ k².
    clusters
        Clusters in the window, or None.
    """

    levels_below: Vector
    levels_above: Vector
    jump: Vector
    covariance: Matrix
    robust_jump: Vector
    robust_covariance: Matrix
    unit_bias: float
    adjustment: Matrix
    count_below: int
    count_above: int
    effective: float
    clusters: int | None


def too_few(found: int, *, bandwidth: float, name: str, order: int) -> CannotEstimate:
    """A side that can't carry a fit of this order with anything left to judge it by."""
    there = "is 1 distinct score" if found == 1 else f"are {found} distinct scores"
    return CannotEstimate(
        f"Within {bandwidth:.6g} {name} the line there {there}; a fit of order {order} needs {order + 2}.",
        "Widen the bandwidth or lower the order.",
    )
