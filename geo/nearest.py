"""The nearest place on a set of line segments, in the plane or in space, exact and certified.

Samples stand on every segment, half a gap of at most ``half_gap`` apart. The segments at a point's nearest
samples give a distance d. A segment not yet looked at has its nearest place within ``half_gap`` of one of its
samples, so by Pythagoras it can be nearer than d only if a sample of it lies within sqrt(d² + half_gap²).
Once the k-th sample is farther than that, d is proven; else more samples are asked for.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np

from geo.arrays import Codes, Matrix, Vector

_LEAF: Final = 64  # twice as fast here as the customary 16
_FIRST: Final = 2  # samples asked for at first: settles 95-99.9 % of points
_LAST: Final = 128  # beyond this a point is hard: near the centre of a circle, or in a knot of short segments
_FINE_SAMPLES: Final = 2_000_000
_PAIRS: Final = 2_000_000  # points times segments looked at together


@dataclass(frozen=True, slots=True, kw_only=True)
class Hits:
    """The nearest place for each of n points.

    Attributes
    ----------
    distance
        Straight distance, inf where nothing lies within the reach, shape (n,).
    segment
        The segment that holds the place, -1 beyond the reach, shape (n,). At a shared vertex either one.
    along
        Where on it, from 0 at its start to 1 at its end, shape (n,).
    """

    distance: Vector
    segment: Codes
    along: Vector


@dataclass(frozen=True, slots=True)
class _Samples:
    tree: Any  # scipy's k-d tree; it ships no types
    owner: Codes  # (samples, 2): the segments that meet at a sample, the same one twice inside a segment
    half_gap: float


@dataclass(frozen=True, slots=True)
class SegmentIndex:
    """M segments made ready for questions; immutable and safe to ask from several threads.

    Attributes
    ----------
    start, end, step
        Where each segment begins, ends, and the vector between, shape (M, dimensions).
    length
        Shape (M,).
    tolerance
        How far a distance may be from the least one; reached only at centres of circles.
    """

    start: Matrix
    end: Matrix
    step: Matrix
    length: Vector
    tolerance: float
    _squared: Vector
    _samples: _Samples
    _finer: dict[int, _Samples] = field(default_factory=dict)

    @classmethod
    def build(cls, start: Matrix, end: Matrix, *, tolerance: float) -> SegmentIndex:
        """Index the segments from ``start`` to ``end``, both shape (M, dimensions), M at least 1."""
        start = np.ascontiguousarray(start, dtype=np.float64)
        end = np.ascontiguousarray(end, dtype=np.float64)
        step = end - start
        squared = np.einsum("ij,ij->i", step, step)
        length = np.sqrt(squared)
        spacing = float(length.sum()) / max(len(length), 2000)
        samples = _sample(start, end, length, spacing)
        # A segment of no length is its own start: any divisor but 0 will do.
        return cls(start, end, step, length, tolerance, np.where(squared > 0.0, squared, 1.0), samples)

    def nearest(self, points: Matrix, reach: float = np.inf) -> Hits:
        """Find the nearest place within ``reach`` of each of n points, shape (n, dimensions)."""
        hits = Hits(
            distance=np.full(len(points), np.inf),
            segment=np.full(len(points), -1, dtype=np.int64),
            along=np.zeros(len(points)),
        )
        if not len(points):
            return hits
        bound = float(np.sqrt(reach**2 + self._samples.half_gap**2) * (1.0 + 1e-12))
        todo = np.arange(len(points))
        asked = _FIRST
        while len(todo) and asked <= _LAST:
            todo = self._ask(points, todo, asked, bound, hits)
            asked *= 4
        if len(todo):
            self._hard(points, todo, hits)
        beyond = hits.distance > reach
        hits.distance[beyond], hits.segment[beyond], hits.along[beyond] = np.inf, -1, 0.0
        return hits

    def _ask(self, points: Matrix, rows: Codes, count: int, bound: float, hits: Hits) -> Codes:
        """Look at the segments of the nearest samples; return the rows that this did not settle."""
        samples = self._samples
        count = min(count, samples.tree.n)
        near, which = samples.tree.query(points[rows], k=count, distance_upper_bound=bound)
        near, which = near.reshape(len(rows), -1), which.reshape(len(rows), -1)
        found = np.isfinite(near[:, 0])
        rows, near, which = rows[found], near[found], which[found]
        if not len(rows):
            return rows
        missing = which >= samples.tree.n
        which = np.where(missing, which[:, :1], which)  # fewer samples than asked within reach: look twice
        self._project(points[rows], samples.owner[which].reshape(len(rows), -1), rows, hits)
        if count == samples.tree.n:
            return rows[:0]
        distance, gap = hits.distance[rows], samples.half_gap
        unseen = near[:, -1] <= np.sqrt(distance**2 + gap**2)
        left: Codes = rows[unseen & (gap**2 > 2.0 * distance * self.tolerance)]
        return left

    def _project(self, points: Matrix, segments: Codes, rows: Codes, hits: Hits) -> None:
        """Keep the nearest of the ``segments``, shape (n, c), of each point where it beats what is known."""
        across = points[:, None, :] - self.start[segments]
        step = self.step[segments]
        along = np.clip(np.einsum("ijk,ijk->ij", across, step) / self._squared[segments], 0.0, 1.0)
        across -= along[:, :, None] * step
        squared = np.einsum("ijk,ijk->ij", across, across)
        best = np.argmin(squared, axis=1)
        pick = np.arange(len(points)), best
        distance = np.sqrt(squared[pick])
        better = distance < hits.distance[rows]
        where = rows[better]
        hits.distance[where] = distance[better]
        hits.segment[where] = segments[pick][better]
        hits.along[where] = along[pick][better]

    def _hard(self, points: Matrix, rows: Codes, hits: Hits) -> None:
        """Settle what many samples at nearly one distance left open: finer samples, or every candidate."""
        places, back = np.unique(points[rows], axis=0, return_inverse=True)
        first = np.zeros(len(places), dtype=np.int64)
        first[back.ravel()] = rows
        open_rows = self._with_finer_samples(points, first, hits)
        self._with_every_candidate(points, open_rows, hits)
        source = first[back.ravel()]
        hits.distance[rows] = hits.distance[source]
        hits.segment[rows] = hits.segment[source]
        hits.along[rows] = hits.along[source]

    def _with_finer_samples(self, points: Matrix, rows: Codes, hits: Hits) -> Codes:
        """Ask samples so dense that one of them is as good as the foot: 2·half_gap = √(8·d·tolerance)."""
        octave = np.floor(np.log2(np.maximum(hits.distance[rows], 1e-300))).astype(np.int64)
        left = []
        for level in np.unique(octave):
            group = rows[octave == level]
            spacing = 2.0 * np.sqrt(2.0 * 2.0 ** float(level) * self.tolerance)
            if self.length.sum() / spacing + len(self.length) > _FINE_SAMPLES:
                left.append(group)
                continue
            if level not in self._finer:
                self._finer[int(level)] = _sample(self.start, self.end, self.length, spacing)
            finer = self._finer[int(level)]
            _, which = finer.tree.query(points[group], k=1)
            self._project(points[group], finer.owner[which], group, hits)
        return np.concatenate(left) if left else rows[:0]

    def _with_every_candidate(self, points: Matrix, rows: Codes, hits: Hits) -> None:
        """Look at every segment that can still be nearer."""
        tree = self._samples.tree
        radius = np.sqrt(hits.distance[rows] ** 2 + self._samples.half_gap**2) * (1.0 + 1e-12)
        counts = tree.query_ball_point(points[rows], radius, return_length=True)
        chunk = np.cumsum(counts) // _PAIRS
        for number in np.unique(chunk):
            mine = chunk == number
            for row, found in zip(rows[mine], tree.query_ball_point(points[rows[mine]], radius[mine])):
                segments = np.unique(self._samples.owner[found])
                self._project(points[row : row + 1], segments[None, :], np.array([row]), hits)


def _sample(start: Matrix, end: Matrix, length: Vector, spacing: float) -> _Samples:
    """Place samples on every segment no more than ``spacing`` apart, both ends included."""
    from scipy.spatial import (
        cKDTree,
    )  # a tenth of a second at start-up, for nothing unless a boundary is asked

    pieces = np.ones(len(length), dtype=np.int64)
    if spacing > 0.0:
        pieces = np.maximum(np.ceil(length / spacing), 1.0).astype(np.int64)
    owner = np.repeat(np.arange(len(length)), pieces)
    place = np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    points = start[owner] + (place / pieces[owner])[:, None] * (end[owner] - start[owner])
    # At a segment's start the one before it meets it, where it does: then its end needs no sample of its own.
    meets = np.zeros(len(length), dtype=bool)
    meets[1:] = np.all(start[1:] == end[:-1], axis=1)
    before = np.where((place == 0) & meets[owner], owner - 1, owner)
    loose = np.flatnonzero(~np.append(meets[1:], False))
    points = np.concatenate((points, end[loose]))
    owners = np.concatenate((np.column_stack((before, owner)), np.column_stack((loose, loose))))
    half_gap = float(np.max(length / pieces)) / 2.0 if len(length) else 0.0
    # The default (balanced, compact) tree is 10-20 times slower for points away from a curve.
    tree = cKDTree(points, leafsize=_LEAF, balanced_tree=False, compact_nodes=False)
    return _Samples(tree, owners, half_gap)
