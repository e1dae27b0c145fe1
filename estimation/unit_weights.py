r"""How much each unit counts: the weights l of the effect Σ l y, as functions of the score.

The effect is linear in the outcome. On one side l(d) = w·a′r(d/h)·K(d/h), a polynomial in the distance d times the
unit's own weight w; the bias-corrected centre has l(d) less what the pilot fit takes off (see
`estimation.local_polynomial`). Units on the other side than the treated count with the opposite sign, and from order
1 on some far units count against their own side: nobody should have to guess which.

References
----------
Fan, J. & Gijbels, I. (1996). Local Polynomial Modelling and Its Applications. Chapman & Hall. Section 3.2.2
    (the equivalent kernel).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from estimation.arrays import Codes, Vector
from estimation.ladder import Ladder
from estimation.line_fit import Bandwidths
from estimation.moments import Extended, SideSums, combine, hankel, kernel_coefficients, solve
from estimation.sample import SideName

_Piece = tuple[float, Extended]  # a width, and K(u)·Σ a_j u^j as coefficients of u = d/width, 0 beyond it


@dataclass(frozen=True, slots=True, kw_only=True)
class Share:
    """What a stretch of scores holds.

    Attributes
    ----------
    low, high
        Ends in distance from the line, shape (k,).
    count
        Rows, shape (k,).
    plain, corrected
        Σ l over its rows, of the effect and of its bias-corrected centre, shape (k,); over all stretches ±1.
    """

    low: Vector
    high: Vector
    count: Codes
    plain: Vector
    corrected: Vector


@dataclass(frozen=True, slots=True, kw_only=True)
class SideWeights:
    """Weights of one side, signed as they enter the effect.

    Attributes
    ----------
    distance
        |score − cutoff|, ascending from the nearest unit's, shape (m,).
    plain, corrected
        Weight of a unit there whose own weight is 1, shape (m,).
    total
        Σ of the units' own weights inside the bandwidth: `plain * total` is how many average units a unit stands for.
    share
        The same by stretches.
    """

    distance: Vector
    plain: Vector
    corrected: Vector
    total: float
    share: Share


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitWeights:
    """Weights on both sides of the line."""

    below: SideWeights
    above: SideWeights


def unit_weights(
    ladder: Ladder,
    bandwidths: Bandwidths,
    *,
    order: int,
    treated_sign: float,
    points: int = 121,
    stretches: int = 12,
) -> UnitWeights:
    """The weight of a unit at each distance, from running sums: no pass over the rows.

    Parameters
    ----------
    treated_sign
        1 where the upper side is treated, −1 where the lower is.
    points
        How many distances, from the nearest unit to the farther of bandwidth and pilot.
    stretches
        How many equal stretches the way from the line to there is cut into for the shares.
    """

    def side(sums: SideSums, name: SideName, sign: float) -> SideWeights:
        bandwidth, pilot = bandwidths.of(name)
        plain, correction = _pieces(sums, ladder.kernel, order, bandwidth, pilot)
        farthest = max(bandwidth, pilot)
        distance = np.linspace(float(sums.first_scores[0]), farthest, points)
        near, far = _at(plain, distance), _at(correction, distance)
        edges = np.linspace(0.0, farthest, stretches + 1)
        held = np.diff(_up_to(sums, ladder.kernel, plain, edges))
        taken = np.diff(_up_to(sums, ladder.kernel, correction, edges))
        width = np.array([bandwidth])
        share = Share(
            low=edges[:-1],
            high=edges[1:],
            count=np.diff(_rows_up_to(sums, ladder.kernel, edges)),
            plain=sign * held,
            corrected=sign * (held - taken),
        )
        return SideWeights(
            distance=distance,
            plain=sign * near,
            corrected=sign * (near - far),
            total=float(sums.raw(width, width, ladder.kernel, weights_only=True)[0, 0, 0]),
            share=share,
        )

    return UnitWeights(
        below=side(ladder.below, "below", -treated_sign), above=side(ladder.above, "above", treated_sign)
    )


def _pieces(sums: SideSums, kernel: str, order: int, bandwidth: float, pilot: float) -> tuple[_Piece, _Piece]:
    """The level's weights, and those of the bias that the pilot fit estimates."""
    shape, size = kernel_coefficients(kernel), order + 1
    near, far = np.array([bandwidth]), np.array([pilot])
    moments = combine(sums.raw(near, near, kernel, weights_only=True), shape, 2 * size)[:, :, 0]
    level = solve(hankel(moments, size), np.eye(size, dtype=np.longdouble)[None, :, :1])[0, :, 0]
    pilot_moments = combine(sums.raw(far, far, kernel, weights_only=True), shape, 2 * size + 1)[:, :, 0]
    last = np.eye(size + 1, dtype=np.longdouble)[None, :, -1:]
    top = solve(hankel(pilot_moments, size + 1), last)[0, :, 0]
    # Σ l d^(p+1) is in units of h^(p+1), the pilot's coefficient in units of b^(−p−1).
    left_over = level @ moments[0, size : 2 * size] * np.longdouble(bandwidth / pilot) ** size
    return (bandwidth, np.convolve(shape, level)), (pilot, np.convolve(shape, left_over * top))


def _at(piece: _Piece, distance: Vector) -> Vector:
    width, polynomial = piece
    u = distance / width
    return np.where(u <= 1.0, np.polynomial.polynomial.polyval(u, polynomial), 0.0).astype(np.float64)


def _up_to(sums: SideSums, kernel: str, piece: _Piece, edges: Vector) -> Vector:
    """Σ of the weights of all rows nearer than each edge."""
    width, polynomial = piece
    limit = np.minimum(_closed(edges), width)
    raw = sums.raw(limit, np.full(len(edges), width), kernel, weights_only=True)[:, :, 0]
    # The first edge is the line itself: a row on it belongs to the first stretch.
    raw[0] = 0.0
    return np.asarray(raw[:, : len(polynomial)] @ polynomial, dtype=np.float64)


def _rows_up_to(sums: SideSums, kernel: str, edges: Vector) -> Codes:
    count = sums.count(_closed(edges), kernel)
    count[0] = 0
    return count


def _closed(edges: Vector) -> Vector:
    """The edges with the last a hair farther, so that a row exactly there is inside."""
    return np.append(edges[:-1], edges[-1] * (1.0 + 1e-12))
