"""Effects at points along a study's border, with their averages and the largest of them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

import numpy as np

from estimation.arrays import Cube, Matrix, Vector
from estimation.boundary_points import average, point_effects
from study.analysis import Workbench
from study.border_result import AlongBorder

if TYPE_CHECKING:  # shapely and pyproj are loaded only when a boundary is asked for
    from geo.boundary import Boundary
    from geo.segments import BoundaryPoints

POINTS: Final = 20


def along_border(
    bench: Workbench, outcome: str, *, count: int = POINTS, bandwidth_m: float | None = None
) -> AlongBorder:
    """Estimate an outcome's effect at about `count` places along the border.

    Parameters
    ----------
    bandwidth_m
        Radius round each point. None takes a rule of thumb: the pooled distance estimate's own width, times n^(1/5 − 1/6)
        for the plane's slower rate.
    """
    from geo.segments import boundary_points  # deferred: shapely

    border = bench.assigned.border
    assert border is not None
    assigned = bench.assigned
    values = bench.outcome_values(outcome)
    rows = np.flatnonzero((assigned.reason == 0) & ~np.isnan(values))
    if bandwidth_m is None:
        pooled = bench.chosen(outcome)
        bandwidth_m = max(pooled.below, pooled.above) * len(rows) ** (1 / 5 - 1 / 6)
    points = boundary_points(border.kept, bandwidth_m=bandwidth_m, count=count)
    # Only rows within a width of the border can be within a width of a point on it.
    rows = rows[np.abs(assigned.position[rows]) <= bandwidth_m]
    places, centres, frames = _frames(border.kept, border.longitude[rows], border.latitude[rows], points)
    effects = point_effects(
        places=places,
        treated=assigned.above[rows],
        outcome=values[rows],
        points=centres,
        frames=frames,
        bandwidth=bandwidth_m,
        level=bench.study.estimate.level,
        kernel=bench.study.estimate.kernel,
        weight=None if assigned.weight is None else assigned.weight[rows],
        cluster=None if assigned.cluster is None else assigned.cluster[rows],
        seed=bench.study.seed,
    )
    known = effects.known
    return AlongBorder(
        outcome=outcome,
        points=points,
        effects=effects,
        by_length=average(effects, points.share_m) if known.any() else None,
        by_units=average(effects, (effects.below + effects.above).astype(np.float64))
        if known.any()
        else None,
        largest=int(np.nanargmax(np.abs(effects.estimate))) if known.any() else None,
    )


def _frames(
    boundary: Boundary, longitude: Vector, latitude: Vector, points: BoundaryPoints
) -> tuple[Matrix, Matrix, Cube]:
    """Units and points in one Cartesian system, and for each point the directions of its plane (east, north)."""
    earth = boundary.earth
    if earth is None:
        plane = np.repeat(np.eye(2)[None], len(points.longitude), axis=0)
        return (
            np.column_stack((longitude, latitude)),
            np.column_stack((points.longitude, points.latitude)),
            plane,
        )
    lam, phi = np.radians(points.longitude), np.radians(points.latitude)
    east = np.stack((-np.sin(lam), np.cos(lam), np.zeros(len(lam))), axis=1)
    north = np.stack((-np.sin(phi) * np.cos(lam), -np.sin(phi) * np.sin(lam), np.cos(phi)), axis=1)
    return (
        earth.centred(longitude, latitude),
        earth.centred(points.longitude, points.latitude),
        np.stack((east, north), axis=1),
    )
