"""What a picture may show: merged bins, and nothing at more digits than a table."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from estimation.arrays import Vector
from estimation.sample import Side
from study.guard.profile import Profile


@dataclass(frozen=True, slots=True, kw_only=True)
class SafeBins:
    """Means of one side's bins that hold enough rows each; empty where none may be shown.

    Attributes
    ----------
    centre, mean
        Middle of each bin (|score − cutoff|) and its mean, at the digits of the profile.
    count
        Unrounded rows, for the checker only.
    """

    centre: Vector
    mean: Vector
    count: tuple[int, ...]


def safe_bins(side: Side, *, reach: float, bins: int, binary: bool, profile: Profile) -> SafeBins:
    """Equal bins out to `reach`, each merged with the next outward until it may be shown.

    A bin needs as many rows as the threshold. For an outcome of noughts and ones it needs as many of each: from a mean of
    0.02564 anybody reads one in 39. What is left at the far end joins the last bin.
    """
    edges = np.linspace(0.0, reach, bins + 1)
    ends = np.searchsorted(side.distance, edges, side="right")
    ends[0] = 0
    kept: list[tuple[float, float, int, int]] = []  # (inner edge, outer edge, first row, row after the last)
    first = 0
    for j in range(1, len(edges)):
        if _enough(side.outcome[ends[first] : ends[j]], binary, profile):
            kept.append((edges[first], edges[j], int(ends[first]), int(ends[j])))
            first = j
    if kept and first < bins:
        inner, _, start, _ = kept.pop()
        kept.append((inner, edges[-1], start, int(ends[-1])))
    weights = side.weights(len(side))
    means = [float(np.average(side.outcome[a:b], weights=weights[a:b])) for _, _, a, b in kept]
    return SafeBins(
        centre=np.array([profile.number(0.5 * (inner + outer)) for inner, outer, _, _ in kept]),
        mean=np.array([profile.number(mean) for mean in means]),
        count=tuple(b - a for _, _, a, b in kept),
    )


def _enough(values: Vector, binary: bool, profile: Profile) -> bool:
    if not binary:
        return len(values) >= profile.threshold
    ones = int(np.sum(values != 0.0))
    return min(ones, len(values) - ones) >= profile.threshold


def share_text(took: int, of: int, profile: Profile) -> str:
    """A share of a group in per cent; nought and all are not said, nor what holds for nearly all of it."""
    if of < profile.threshold or took in (0, of):
        return "not shown"
    share = took / of
    if share > profile.group_share:
        return f"over {100 * profile.group_share:g} %"
    if share < 1.0 - profile.group_share:
        return f"under {100 * (1.0 - profile.group_share):.3g} %"
    return f"{100 * profile.number(share):.4g} %"
