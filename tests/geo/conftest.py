"""Slow and obvious twins of what geo does fast, and the outlines of open data that a general package ships."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from pyproj import Geod

Oracle = Callable[..., np.ndarray]


@pytest.fixture(scope="session")
def examples() -> Path:
    """The open outlines that libpysal ships (counties of Georgia; 48 states of the USA)."""
    import libpysal

    return Path(libpysal.__file__).parent / "examples"


@pytest.fixture(scope="session")
def brute() -> Oracle:
    """Distance to the nearest of all segments, every pair looked at, in any number of dimensions."""

    def distance(points: np.ndarray, start: np.ndarray, end: np.ndarray) -> np.ndarray:
        out = np.full(len(points), np.inf)
        for a, b in zip(start, end):
            step = b - a
            squared = step @ step
            along = np.clip((points - a) @ step / squared, 0.0, 1.0) if squared else np.zeros(len(points))
            out = np.minimum(out, np.linalg.norm(points - a - along[:, None] * step, axis=1))
        return out

    return distance


@pytest.fixture(scope="session")
def golden() -> Oracle:
    """Least geodesic distance to the edges of a path by golden-section search on pyproj.Geod.

    ``straight`` edges run straight in longitude and latitude, else along the geodesic. Each edge is looked at on
    a grid first, so that more than one valley is no trap.
    """

    def distance(
        longitude: np.ndarray,
        latitude: np.ndarray,
        path: np.ndarray,
        geod: Geod,
        *,
        straight: bool,
        grid: int = 400,
    ) -> np.ndarray:
        first, last = path[:-1], path[1:]
        azimuth, _, length = geod.inv(*first.T, *last.T)

        def apart(edge: np.ndarray, share: np.ndarray) -> np.ndarray:
            shape = share.shape
            if straight:
                at = first[edge] + share[..., None] * (last[edge] - first[edge])
                x, y = at[..., 0].ravel(), at[..., 1].ravel()
            else:
                x, y, _ = geod.fwd(
                    first[edge, 0].ravel(), first[edge, 1].ravel(), np.asarray(azimuth)[edge].ravel(),
                    (share * np.asarray(length)[edge]).ravel(),
                )  # fmt: skip
            here = [np.broadcast_to(v[:, None], shape).ravel() for v in (longitude, latitude)]
            return np.asarray(geod.inv(*here, x, y)[2]).reshape(shape)

        best = np.full(len(longitude), np.inf)
        ratio = (np.sqrt(5.0) - 1.0) / 2.0
        for number in range(len(first)):
            shares = np.linspace(0.0, 1.0, grid)
            edge = np.full((len(longitude), grid), number)
            coarse = apart(edge, np.broadcast_to(shares, edge.shape))
            middle = shares[np.argmin(coarse, axis=1)]
            low, high = np.maximum(middle - 1.0 / (grid - 1), 0.0), np.minimum(middle + 1.0 / (grid - 1), 1.0)
            one = np.full((len(longitude), 1), number)
            for _ in range(60):
                left, right = high - ratio * (high - low), low + ratio * (high - low)
                nearer = apart(one, left[:, None]) < apart(one, right[:, None])
                high, low = np.where(nearer[:, 0], right, high), np.where(nearer[:, 0], low, left)
            best = np.minimum(best, apart(one, ((low + high) / 2.0)[:, None])[:, 0])
        return best

    return distance
