"""The widths that the arrow keys walk through, and how far the picture reaches at each.

A ladder of round numbers, a hundred to a decade: a step is about 2 %, the same everywhere, and a width met on the way up is met
again on the way down.
"""

from __future__ import annotations

import math
from typing import Final

STEPS_PER_DECADE: Final = 100
COARSE: Final = 10
"""Fine steps in a coarse one: about a quarter."""


def round_width(value: float) -> float:
    """The value with three significant digits."""
    return float(f"{value:.3g}")


def next_width(width: float, steps: int) -> float:
    """The width so many steps further on the ladder; from between two rungs the first step is to the nearer one on that side.

    Parameters
    ----------
    width : float
        Positive.
    steps : int
        Negative for narrower.
    """
    if steps == 0:
        return width
    place = STEPS_PER_DECADE * math.log10(width)
    here = round(place)
    rung = _rung(here)
    if math.isclose(rung, width, rel_tol=1e-9):
        return _rung(here + steps)
    # Not on a rung: the first step goes to the neighbouring one.
    below = here if rung < width else here - 1
    return _rung(below + steps if steps > 0 else below + 1 + steps)


def _rung(index: int) -> float:
    return round_width(10.0 ** (index / STEPS_PER_DECADE))


def reach_for(width: float, widest: float, before: float | None = None) -> float:
    """How far from the line a picture reaches; it stays as it was while the width fills a fair part of it.

    Parameters
    ----------
    width : float
        The bandwidth, the wider of the two sides.
    widest : float
        The farthest score; a picture reaches no farther.
    before : float, optional
        The reach so far.
    """
    if before is not None and 0.2 * before <= width <= 0.92 * before:
        return before
    if before is not None and before >= widest and width > 0.92 * before:
        return widest
    return min(widest, 2.2 * width)
