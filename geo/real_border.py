"""Which part of an outline is a border between treated and comparison units, decided by places alone.

Counting a coast or an outer border as boundary gave an effect of 1.5 where the truth was 0. The rules look at
where units are and never at an outcome, so they may run before a plan is sealed.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from geo.arrays import Codes, Mask, Vector
from geo.boundary import Boundary, Stretch
from geo.distance import Located
from geo.errors import GeometryError
from geo.stretches import joined, length_m, without

_PIECES: Final = 20  # to a band
_ENOUGH: Final = 30  # units in a window
_LEAST: Final = 3  # of them on the thinner side
_SHARE: Final = 0.05
_TOUCH_M: Final = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class RealBorder:
    """What a rule kept of a boundary.

    Attributes
    ----------
    rule
        ``"units"`` or ``"neighbours"``.
    kept, dropped
        Stretches of the whole boundary.
    kept_m, dropped_m
        Their lengths.
    by_neighbour
        For the rule by neighbours: the stretches shared with each.
    """

    rule: str
    kept: tuple[Stretch, ...]
    dropped: tuple[Stretch, ...]
    kept_m: float
    dropped_m: float
    by_neighbour: Mapping[str, tuple[Stretch, ...]]

    @property
    def to_confirm(self) -> bool:
        """Whether a person must look: some of the outline would not count."""
        return self.dropped_m > 0.0


def _result(
    rule: str, boundary: Boundary, kept: tuple[Stretch, ...], by: Mapping[str, tuple[Stretch, ...]]
) -> RealBorder:
    dropped = without(boundary, kept)
    return RealBorder(
        rule=rule,
        kept=kept,
        dropped=dropped,
        kept_m=length_m(boundary, kept),
        dropped_m=length_m(boundary, dropped),
        by_neighbour=by,
    )


def border_by_units(boundary: Boundary, located: Located, *, band_m: float) -> RealBorder:
    """Keep where units of both sides face each other.

    The outline is cut in pieces of a twentieth of the band; each unit within the band belongs to the piece that holds
    its foot. Round each piece a window grows from a quarter of a band either way to a whole one, and on to two while it
    holds fewer than 30 units. The piece is real if in any of these the thinner side has 3 units and 5 % of them: where
    a line bends, feet of one side crowd and the other's are elsewhere. Each run of real pieces is then shrunk to where feet of both
    sides are, and a piece more.

    Parameters
    ----------
    boundary
        The whole outline.
    located
        Units located on it, with a reach of at least ``band_m``.
    band_m
        How near units must be to count.

    Raises
    ------
    GeometryError
        No stretch has units of both sides.
    """
    if located.reach_m < band_m:
        raise GeometryError(
            f"Units are known up to {located.reach_m:g} from the boundary, but the band is {band_m:g} wide.",
            "Locate units with a reach at least as wide as the band.",
            code="reach",
        )
    near = (located.apart_m <= band_m) & (located.side != 0) & ~located.loose_end
    kept: list[Stretch] = []
    for part in range(boundary.parts):
        mine = near & (located.part == part)
        length = float(boundary.length_m[part])
        pieces = max(int(np.ceil(length / (band_m / _PIECES))), 1)
        piece = np.minimum((located.position_m[mine] / length * pieces).astype(np.int64), pieces - 1)
        treated = located.side[mine] > 0
        counts = tuple(np.bincount(piece[side], minlength=pieces) for side in (treated, ~treated))
        real = _real_pieces(counts, bool(boundary.closed[part]))
        runs = _runs(real, bool(boundary.closed[part]))
        for first, last in _shrunk(runs, counts, pieces, bool(boundary.closed[part])):
            end = (last + 1) % pieces or pieces
            kept.append(
                Stretch(part=part, start_m=first % pieces * length / pieces, end_m=end * length / pieces)
            )
    if not kept:
        raise GeometryError(
            f"Nowhere along the boundary are there treated and comparison units within {band_m:g} of it.",
            "Widen the reach, or check the area and the coordinates on the map.",
            code="nothing kept",
        )
    return _result("units", boundary, joined(boundary, kept), {})


def _real_pieces(counts: tuple[Codes, ...], closed: bool) -> Mask:
    pieces = len(counts[0])
    widest = min(2 * _PIECES, (pieces - 1) // 2) if closed else 2 * _PIECES  # a window must not meet itself
    around = [np.pad(side, widest, mode="wrap" if closed else "constant") for side in counts]
    running = [np.concatenate(([0], np.cumsum(side))) for side in around]
    middle = np.arange(pieces) + widest
    real, total = np.zeros(pieces, dtype=bool), np.zeros(pieces, dtype=np.int64)
    for half in range(min(_PIECES // 4, widest), widest + 1):
        first, last = middle - half, np.minimum(middle + half + 1, len(around[0]))
        open_still = (half <= _PIECES) | (total < _ENOUGH)
        treated, comparison = (sums[last] - sums[first] for sums in running)
        thinner, total = np.minimum(treated, comparison), treated + comparison
        real |= open_still & (thinner >= _LEAST) & (thinner >= _SHARE * total)
    return real


def _runs(real: Mask, closed: bool) -> list[tuple[int, int]]:
    """First and last piece of each run; on a ring one that runs over the start ends beyond the number of pieces."""
    if not real.any():
        return []
    if real.all():
        return [(0, len(real) - 1)]
    edge = np.diff(np.concatenate(([0], real.astype(np.int8), [0])))
    runs = list(zip(np.flatnonzero(edge == 1).tolist(), (np.flatnonzero(edge == -1) - 1).tolist()))
    if closed and len(runs) > 1 and runs[0][0] == 0 and runs[-1][1] == len(real) - 1:
        runs = [*runs[1:-1], (runs[-1][0], runs[0][1] + len(real))]
    return runs


def _shrunk(
    runs: list[tuple[int, int]], counts: tuple[Codes, ...], pieces: int, closed: bool
) -> list[tuple[int, int]]:
    out = []
    for first, last in runs:
        if closed and last - first + 1 >= pieces:
            out.append((first, last))
            continue
        held = [np.flatnonzero(side[np.arange(first, last + 1) % pieces]) for side in counts]
        if any(not len(side) for side in held):
            continue
        start = first + max(int(side[0]) for side in held) - 1
        end = first + min(int(side[-1]) for side in held) + 1
        if end >= start:
            out.append((max(start, first), min(end, last)))
    return out


def border_by_neighbours(
    boundary: Boundary, neighbours: Mapping[str, Boundary], *, touch_m: float = _TOUCH_M
) -> RealBorder:
    """Keep what runs along the outline of a comparison area, and say along which.

    Parameters
    ----------
    boundary
        The whole outline of the treated area.
    neighbours
        The outlines of comparison areas by name, on the same datum.
    touch_m
        Outlines this near are one border: twice the widest gap between them.

    Raises
    ------
    GeometryError
        No neighbour touches, or one on another datum.
    """
    shared: dict[str, tuple[Stretch, ...]] = {}
    for name, other in neighbours.items():
        if (other.earth and other.earth.crs) != (boundary.earth and boundary.earth.crs):
            raise GeometryError(
                f"The neighbour {name!r} is on another datum than the treated area.",
                "Give both in one coordinate system.",
                code="datum",
            )
        stretches = _along(boundary, other, touch_m)
        # Where outlines only meet at a corner, both are near each other for the touch's own width.
        spans = tuple(s for s in stretches if length_m(boundary, (s,)) > 4.0 * touch_m)
        if spans:
            shared[name] = spans
    kept = joined(boundary, [stretch for stretches in shared.values() for stretch in stretches])
    if not kept:
        raise GeometryError(
            f"No comparison area comes within {touch_m:g} of the treated area's outline.",
            "Check both on the map, or widen the gap at which outlines count as touching.",
            code="nothing kept",
        )
    return _result("neighbours", boundary, kept, shared)


def _along(boundary: Boundary, other: Boundary, touch_m: float) -> tuple[Stretch, ...]:
    """Stretches of a boundary within ``touch_m`` of another."""
    index, segment = boundary.index, np.arange(len(boundary.index.length))

    def touches(rows: Codes, along: Vector) -> Mask:
        places = index.start[rows] + along[:, None] * index.step[rows]
        return np.asarray(other.index.nearest(places, touch_m).segment >= 0)

    begins, ends = touches(segment, np.zeros(len(segment))), touches(segment, np.ones(len(segment)))
    middle = touches(segment, np.full(len(segment), 0.5))
    start, end = np.zeros(len(segment)), np.ones(len(segment))
    whole, leaves, enters = begins & ends & middle, begins & ~(ends & middle), ends & ~(begins & middle)
    for rows, inside_first, bound in (
        (np.flatnonzero(leaves), True, end),
        (np.flatnonzero(enters), False, start),
    ):
        inner, outer = (
            np.full(len(rows), 0.0 if inside_first else 1.0),
            np.full(len(rows), 1.0 if inside_first else 0.0),
        )
        seen_middle = ~middle[rows]
        outer[seen_middle] = 0.5
        for _ in range(30):
            half = (inner + outer) / 2.0
            inside = touches(rows, half)
            inner, outer = np.where(inside, half, inner), np.where(inside, outer, half)
        bound[rows] = inner
    vertex = boundary.segment_start
    part = boundary.part_of_vertex(vertex)
    low, high = boundary.position_m[vertex], boundary.position_m[vertex + 1]
    spans = [(row, start[row], end[row]) for row in np.flatnonzero(whole | (leaves ^ enters))]
    for row in np.flatnonzero(leaves & enters):  # near at both ends, away in the middle
        spans += [(row, 0.0, end[row]), (row, start[row], 1.0)]
    return joined(
        boundary,
        [
            Stretch(
                part=int(part[row]),
                start_m=float(low[row] + first * (high[row] - low[row])),
                end_m=float(low[row] + last * (high[row] - low[row])),
            )
            for row, first, last in spans
            if last > first
        ],
    )
