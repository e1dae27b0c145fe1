"""One side's sums of powers by cluster, kept at a coarse grid of distances and filled in between when asked."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

import numpy as np

from estimation.arrays import Codes, Cube, Mask, Matrix, Vector
from estimation.kernels import count_inside
from estimation.sample import Side, SideName

# Bytes that the kept sums of one side may take; fewer distances are kept when clusters are many.
_ROOM: Final = 48 * 2**20
_MOST_EDGES: Final = 64
# Rows that are added to a kept sum at no noticeable cost: distances need not be kept closer than this.
_FEW_ROWS: Final = 2048


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterTable:
    """Sums over the `count` nearest rows by cluster.

    Attributes
    ----------
    ratio
        The side's reach over the bandwidth asked for.
    mass
        Σ w·(d/reach)^r, shape (R, G).
    first
        Σ w·v·(d/reach)^r, shape (Q, v, G).
    """

    count: int
    ratio: float
    mass: Matrix
    first: Cube


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterSums:
    """One side's sums by cluster.

    Attributes
    ----------
    codes
        Cluster of each row, 0 … G − 1, shared by both sides, shape (n,).
    nearest
        Index of each cluster's nearest row of positive weight, n where it has none, shape (G,).
    centre
        Taken off the values before they are summed, shape (v,).
    edges
        Numbers of nearest rows at which sums are kept, ascending from 0.
    kept
        The sums there, those of powers and then those of values by power, shape (edges, R + Q·v, G).
    """

    name: SideName
    side: Side
    codes: Codes
    clusters: int
    nearest: Codes
    centre: Vector
    powers: int
    edges: Codes
    kept: Cube

    @property
    def reach(self) -> float:
        """Largest distance."""
        return float(self.side.distance[-1]) or 1.0

    @property
    def variables(self) -> int:
        """How many values a row has."""
        return len(self.centre)

    @classmethod
    def build(
        cls,
        name: SideName,
        side: Side,
        codes: Codes,
        clusters: int,
        centre: Vector,
        *,
        powers: int,
        firsts: int,
    ) -> ClusterSums:
        """Sum one side by cluster."""
        width = powers + firsts * len(centre)
        room = min(_MOST_EDGES, _ROOM // max(8 * clusters * width, 1), len(side) // _FEW_ROWS)
        edges = np.linspace(0, len(side), room + 1).astype(np.int64)
        if side.weight is None:
            counted = codes
        else:
            counted = np.where(side.weight > 0.0, codes, clusters)
        nearest = np.full(clusters + 1, len(side), dtype=np.int64)
        # Written from the farthest row to the nearest, so that the nearest is what stays.
        nearest[counted[::-1]] = np.arange(len(side) - 1, -1, -1)
        empty = cls(
            name=name,
            side=side,
            codes=codes,
            clusters=clusters,
            nearest=nearest[:clusters],
            centre=centre,
            powers=powers,
            edges=edges,
            kept=np.zeros((len(edges), width, clusters)),
        )
        for e in range(1, len(edges)):
            empty.kept[e] = empty.kept[e - 1]
            empty._add(empty.kept[e], int(edges[e - 1]), int(edges[e]))
        return empty

    def _add(self, sums: Matrix, start: int, stop: int) -> None:
        """Add rows start … stop − 1."""
        rows = slice(start, stop)
        codes, u = self.codes[rows], self.side.distance[rows] / self.reach
        term = np.ones(len(u)) if self.side.weight is None else self.side.weight[rows].copy()
        values = self.side.values[rows] - self.centre
        firsts = (len(sums) - self.powers) // self.variables
        for r in range(self.powers):
            sums[r] += np.bincount(codes, weights=term, minlength=self.clusters)
            if r < firsts:
                for a in range(self.variables):
                    sums[self.powers + r * self.variables + a] += np.bincount(
                        codes, weights=term * values[:, a], minlength=self.clusters
                    )
            term *= u

    def at(self, bandwidth: float, kernel: str, known: Iterable[ClusterTable] = ()) -> ClusterTable:
        """The sums over the rows inside a bandwidth, from the nearest kept ones or from `known` if these are nearer."""
        count = count_inside(self.side.distance, bandwidth, kernel)
        edge = int(np.searchsorted(self.edges, count, side="right")) - 1
        start, sums = int(self.edges[edge]), self.kept[edge]
        for table in known:
            if start < table.count <= count:
                start = table.count
                sums = np.concatenate((table.mass, table.first.reshape(-1, self.clusters)))
        if start < count:
            sums = sums.copy()
            self._add(sums, start, count)
        return ClusterTable(
            count=count,
            ratio=self.reach / bandwidth,
            mass=sums[: self.powers],
            first=sums[self.powers :].reshape(-1, self.variables, self.clusters),
        )

    def present(self, count: int) -> Mask:
        """Clusters with a row of positive weight among the `count` nearest, shape (G,)."""
        return np.asarray(self.nearest < count)
