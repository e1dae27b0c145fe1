"""The rows that enter an estimate, as arrays sorted outward from the line, one set a side."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from estimation.arrays import Codes, Mask, Matrix, Vector
from estimation.errors import CannotEstimate

SideName = Literal["below", "above"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Side:
    """One side of the line; row i is the i-th nearest to it.

    Attributes
    ----------
    distance
        |score − cutoff|, shape (n,), ascending, in units of the score.
    values
        Shape (n, v): the outcome, then take-up where the study has one, then the covariates. An estimator is
        linear in each, so that they share its weights.
    weight
        Sampling weights, shape (n,), or None for equal weights.
    cluster
        Cluster codes, shape (n,), shared by both sides, or None.
    row
        Position of each row in the file, shape (n,).
    """

    distance: Vector
    values: Matrix
    weight: Vector | None
    cluster: Codes | None
    row: Codes

    @property
    def outcome(self) -> Vector:
        """The outcome, shape (n,)."""
        return self.values[:, 0]

    def __len__(self) -> int:
        return len(self.distance)

    def weights(self, count: int) -> Vector:
        """Sampling weights of the `count` nearest rows, ones where the study has none."""
        return np.ones(count) if self.weight is None else self.weight[:count]

    def beyond(self, distance: float) -> Side:
        """The rows at least `distance` from the line."""
        start = int(np.searchsorted(self.distance, distance, side="left"))
        return Side(
            distance=self.distance[start:],
            values=self.values[start:],
            weight=None if self.weight is None else self.weight[start:],
            cluster=None if self.cluster is None else self.cluster[start:],
            row=self.row[start:],
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Sample:
    """Both sides of one line.

    Attributes
    ----------
    below, above
        Rows by the score's side. Which of the two holds a row on the line follows from the study's rule.
    treated
        The side that the programme was handed out to.
    resolution
        Scores nearer than this are one mass point: the rounding that a subtraction of a cutoff leaves.
    has_take_up
        Whether column 1 of `Side.values` is take-up; the columns after it (or after 0) are covariates.
    """

    below: Side
    above: Side
    treated: SideName
    resolution: float
    has_take_up: bool = False

    def __len__(self) -> int:
        return len(self.below) + len(self.above)

    @property
    def treated_sign(self) -> float:
        """+1 where the treated side is above, −1 where it is below."""
        return 1.0 if self.treated == "above" else -1.0

    @property
    def sides(self) -> tuple[tuple[SideName, Side], tuple[SideName, Side]]:
        """(name, side), below first."""
        return (("below", self.below), ("above", self.above))

    @property
    def widest(self) -> float:
        """The largest |score − cutoff| of either side."""
        return float(max(side.distance[-1] if len(side) else 0.0 for side in (self.below, self.above)))

    def without_donut(self, donut: float) -> Sample:
        """The sample less the rows nearer to the line than `donut`."""
        if donut <= 0.0:
            return self
        trimmed = Sample(
            below=self.below.beyond(donut),
            above=self.above.beyond(donut),
            treated=self.treated,
            resolution=self.resolution,
            has_take_up=self.has_take_up,
        )
        for name, side in trimmed.sides:
            if not len(side):
                raise CannotEstimate(
                    f"A donut of {donut:g} leaves no row {name} the line.", "Choose a smaller donut."
                )
        return trimmed


def build_sample(
    *,
    position: Vector,
    outcome: Vector,
    above: Mask,
    treated: SideName,
    weight: Vector | None = None,
    take_up: Vector | None = None,
    covariates: Matrix | None = None,
    cluster: Codes | None = None,
    row: Codes | None = None,
    score_magnitude: float = 0.0,
    sort: tuple[Codes, Codes] | None = None,
) -> Sample:
    """Sort rows outward from the line and drop those with a missing value among what is used.

    Parameters
    ----------
    position
        Score minus cutoff, shape (n,), in units of the score, finite.
    outcome
        Shape (n,); rows where it is NaN do not enter this outcome's estimate.
    above
        Shape (n,): True where the row lies on the upper side (the rule decides for rows on the line).
    treated
        "above" or "below".
    weight, take_up, cluster, row
        Shape (n,) or None.
    covariates
        Shape (n, k) or None. Rows with a missing covariate are dropped here; the caller counts them.
    score_magnitude
        Largest |score| before the cutoff was taken off; sets the rounding below which scores are one point.
    sort
        Indices that order the rows (below, above) outward, where the caller has them already.

    Raises
    ------
    CannotEstimate
        When no row is left on a side.
    """
    usable = ~np.isnan(outcome)
    columns: list[Vector] = [outcome]
    for extra in ([] if take_up is None else [take_up]) + ([] if covariates is None else list(covariates.T)):
        usable &= ~np.isnan(extra)
        columns.append(extra)
    orders = sort if sort is not None else outward_order(position, above)
    below, above_side = (
        _take_side(order, usable, position, columns, weight, cluster, row) for order in orders
    )
    for name, side in (("below", below), ("above", above_side)):
        if not len(side):
            raise CannotEstimate(
                f"No row with an outcome lies {name} the line.",
                "Check the cutoff and which rows the study reads.",
            )
    reach = max(float(below.distance[-1]), float(above_side.distance[-1]))
    return Sample(
        below=below,
        above=above_side,
        treated=treated,
        resolution=8.0 * np.finfo(np.float64).eps * max(score_magnitude, reach),
        has_take_up=take_up is not None,
    )


def outward_order(position: Vector, above: Mask) -> tuple[Codes, Codes]:
    """Row indices of the lower and of the upper side, nearest to the line first."""
    order = np.argsort(position)
    split = len(position) - int(np.count_nonzero(above))
    lower, upper = order[:split][::-1], order[split:]
    if split and (above[lower].any() or not above[upper].all()):
        # Sides that do not follow from the position alone (a unit on the line, say): one sort a side.
        lower, upper = np.flatnonzero(~above), np.flatnonzero(above)
        lower = lower[np.argsort(-position[lower])]
        upper = upper[np.argsort(position[upper])]
    return np.ascontiguousarray(lower), upper


def _take_side(
    order: Codes,
    usable: Mask,
    position: Vector,
    columns: Sequence[Vector],
    weight: Vector | None,
    cluster: Codes | None,
    row: Codes | None,
) -> Side:
    if not usable.all():
        order = order[usable[order]]
    values = np.empty((len(order), len(columns)))
    for j, column in enumerate(columns):
        np.take(column, order, out=values[:, j])
    return Side(
        distance=np.abs(position[order]),
        values=values,
        weight=None if weight is None else weight[order],
        cluster=None if cluster is None else cluster[order],
        row=order if row is None else row[order],
    )
