"""Take-up (methods 5): the ratio, its delta-method error, and the Anderson–Rubin set by brute force."""

from __future__ import annotations

import math

import numpy as np
from scipy import optimize


def delta_error(ratio, jump_t, v_yy, v_tt, v_yt):
    return math.sqrt(v_yy + ratio**2 * v_tt - 2 * ratio * v_yt) / abs(jump_t)


def anderson_rubin(jump_y, jump_t, v_yy, v_tt, v_yt, z):
    """All r with (jy − r·jt)² ≤ z²(Vyy + r²Vtt − 2rVyt), as a list of intervals.

    A grid in the angle of r = tan θ covers the line including its ends; each change of sign is polished.
    """

    def outside(angle):
        """The inequality times cos²θ: continuous for every angle, negative inside the set."""
        c, s = math.cos(angle), math.sin(angle)
        return (jump_y * c - s * jump_t) ** 2 - z**2 * (v_yy * c * c + s * s * v_tt - 2 * s * c * v_yt)

    # A unit that makes both jumps and errors of like size, so that the grid misses no narrow set.
    edge = math.pi / 2
    grid = np.linspace(-edge, edge, 200_001)
    value = np.array([outside(a) for a in grid])
    roots = [
        math.tan(optimize.brentq(outside, grid[i], grid[i + 1], xtol=1e-15, rtol=1e-14))
        for i in np.flatnonzero(value[:-1] * value[1:] < 0)
    ]
    if not roots:
        return [(-math.inf, math.inf)] if value[0] < 0 else []
    if value[0] < 0:  # the set reaches both infinities
        return [(-math.inf, roots[0]), (roots[1], math.inf)]
    return [(roots[0], roots[1])]
