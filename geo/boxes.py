"""Places sorted in boxes, so that what holds for a box need be asked only once."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from geo.arrays import Codes, Mask, Vector
from geo.boundary import Boundary

_MOST: Final = 500_000
_TO_REACH: Final = 1.5  # a box's diagonal must stay below the reach


@dataclass(frozen=True, slots=True, kw_only=True)
class Boxes:
    """Boxes whose diagonal is shorter than the reach.

    Attributes
    ----------
    number
        The box of each of n places, shape (n,).
    count
        How many boxes there are, empty ones included.
    occupied
        The boxes that hold places, shape (b,).
    across, up
        The middles of those, shape (b,).
    radius
        No place of a box is farther from its middle, on the ground.
    """

    number: Codes
    count: int
    occupied: Codes
    across: Vector
    up: Vector
    radius: float

    def spread(self, values: Mask) -> Mask:
        """What was said of the occupied boxes, said of each place."""
        table = np.zeros(self.count, dtype=values.dtype)
        table[self.occupied] = values
        return table[self.number]


def boxes(across: Vector, up: Vector, reach: float, boundary: Boundary) -> Boxes | None:
    """Sort places in boxes; None where there would be more boxes than it is worth.

    On the earth a straight line in degrees is no shorter than its own length in radians times the greatest radius of
    curvature allows, so a box of equal degrees has the diagonal of a square at most.
    """
    length = reach / _TO_REACH
    size = length
    if boundary.earth is not None:  # the greatest radius of curvature is a third of a percent above the axis
        size = float(np.degrees(length / (1.01 * boundary.earth.semi_major_m)))
    if not len(across) or max(np.ptp(across), np.ptp(up)) / size > _MOST:
        return None
    left, low = float(across.min()), float(up.min())
    columns = ((across - left) / size).astype(np.int64)
    rows = ((up - low) / size).astype(np.int64)
    width = int(columns.max()) + 1
    count = width * (int(rows.max()) + 1)
    if count > _MOST or count > len(across):
        return None
    number = rows * width + columns
    held = np.zeros(count, dtype=bool)
    held[number] = True
    occupied = np.flatnonzero(held)
    return Boxes(
        number=number,
        count=count,
        occupied=occupied,
        across=np.asarray(left + (occupied % width + 0.5) * size),
        up=np.asarray(low + (occupied // width + 0.5) * size),
        radius=length / np.sqrt(2.0),
    )
