"""Fits at many widths at once: what is asked, and what comes back."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from estimation.arrays import Codes, Cube, Matrix, Vector
from estimation.line_fit import Bandwidths, LineFit
from estimation.sample import SideName


@dataclass(frozen=True, slots=True, kw_only=True)
class Widths:
    """Bandwidths to ask about, each shape (H,), in units of the score."""

    below: Vector
    above: Vector
    pilot_below: Vector
    pilot_above: Vector

    @classmethod
    def single(cls, bandwidths: Bandwidths) -> Widths:
        """One query."""
        b = bandwidths
        return cls(
            below=np.array([b.below]),
            above=np.array([b.above]),
            pilot_below=np.array([b.pilot_below]),
            pilot_above=np.array([b.pilot_above]),
        )

    def of(self, side: SideName) -> tuple[Vector, Vector]:
        """(bandwidth, pilot bandwidth) of one side."""
        return (self.below, self.pilot_below) if side == "below" else (self.above, self.pilot_above)

    def part(self, some: slice) -> Widths:
        """Some of the queries."""
        return Widths(
            below=self.below[some],
            above=self.above[some],
            pilot_below=self.pilot_below[some],
            pilot_above=self.pilot_above[some],
        )

    @classmethod
    def common(cls, bandwidth: Vector, pilot: float | None = None) -> Widths:
        """The same on both sides; the pilot follows the bandwidth unless it is given."""
        h = np.asarray(bandwidth, dtype=np.float64)
        b = h if pilot is None else np.full(len(h), float(pilot))
        return cls(below=h, above=h, pilot_below=b, pilot_above=b)


@dataclass(frozen=True, slots=True, kw_only=True)
class LineFits:
    """A `LineFit` for each query: the same quantities with a leading axis H, NaN where a fit can't run."""

    levels_below: Matrix
    levels_above: Matrix
    jump: Matrix
    covariance: Cube
    robust_jump: Matrix
    robust_covariance: Cube
    unit_bias: Vector
    adjustment: Cube
    count_below: Codes
    count_above: Codes
    effective: Vector
    clusters: Codes | None = None

    def adjusted(self, targets: int) -> LineFits:
        """The fits of y − z′γ (and of take-up likewise), as `estimation.adjustment.adjusted` makes one."""
        queries = len(self.jump)
        same = np.broadcast_to(np.eye(targets), (queries, targets, targets))
        change = np.concatenate((same, -self.adjustment.transpose(0, 2, 1)), axis=2)

        def turned(covariance: Cube) -> Cube:
            return np.asarray(change @ covariance @ change.transpose(0, 2, 1))

        return replace(
            self,
            levels_below=self.levels_below[:, :targets],
            levels_above=self.levels_above[:, :targets],
            jump=np.einsum("htv,hv->ht", change, self.jump),
            covariance=turned(self.covariance),
            robust_jump=np.einsum("htv,hv->ht", change, self.robust_jump),
            robust_covariance=turned(self.robust_covariance),
        )

    def at(self, i: int) -> LineFit:
        """One of them."""
        return LineFit(
            levels_below=self.levels_below[i],
            levels_above=self.levels_above[i],
            jump=self.jump[i],
            covariance=self.covariance[i],
            robust_jump=self.robust_jump[i],
            robust_covariance=self.robust_covariance[i],
            unit_bias=float(self.unit_bias[i]),
            adjustment=self.adjustment[i],
            count_below=int(self.count_below[i]),
            count_above=int(self.count_above[i]),
            effective=float(self.effective[i]),
            clusters=None if self.clusters is None else int(self.clusters[i]),
        )
