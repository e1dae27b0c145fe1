"""Units' coordinates brought to a boundary's own, and what their places say before any outcome is seen."""

from __future__ import annotations

from typing import Final, Literal

import numpy as np
from pyproj import CRS

from geo.arrays import Mask, Vector
from geo.boundary import Boundary
from geo.distance import Located
from geo.errors import GeometryError
from geo.notes import Note, counted
from geo.projection import PLAIN, datum_notes, missing_crs, read_crs, span, to_degrees

_ON_LINE_SHARE: Final = 0.005
_CROWD_SHARE: Final = 0.05
_AGREE: Final = 0.95


def units_in_degrees(
    x: Vector,
    y: Vector,
    crs: CRS | str | None,
    *,
    boundary: Boundary,
    reach_m: float,
    what: str = "The units",
) -> tuple[Vector, Vector, tuple[Note, ...]]:
    """Units' coordinates as `locate` wants them: longitude and latitude on the boundary's datum, or plain x and y.

    Parameters
    ----------
    x, y
        Coordinates in ``crs``, NaN where unknown, shape (n,).
    crs
        Their own coordinate system, ``"plain"``, or None where nobody said.

    Raises
    ------
    GeometryError
        No system, plain units beside a boundary on the earth or the other way round, coordinates that can't be meant,
        axes swapped, no unit anywhere near the boundary.
    """
    x, y = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
    known = np.isfinite(x) & np.isfinite(y)
    if not known.any():
        raise GeometryError(f"{what}: none has coordinates.", "Check the coordinate columns.", code="empty")
    if crs is None:
        raise missing_crs(x[known], y[known], what)
    plain = isinstance(crs, str) and crs.strip().lower() == PLAIN
    if plain != boundary.is_plain:
        first, second = ("in plain units", "on the earth") if plain else ("on the earth", "in plain units")
        raise GeometryError(
            f"{what} are {first}, the boundary is {second}.",
            "Give both in a coordinate system, or declare both plain.",
            code="mixed",
        )
    if plain:
        _check_near(x[known], y[known], boundary, reach_m, what, None)
        return x, y, ()
    system = read_crs(crs)
    assert boundary.earth is not None  # a plain boundary was refused above
    longitude, latitude = np.full(len(x), np.nan), np.full(len(x), np.nan)
    longitude[known], latitude[known] = to_degrees(
        x[known], y[known], system, earth=boundary.earth, what=what
    )
    _check_near(longitude[known], latitude[known], boundary, reach_m, what, system)
    return longitude, latitude, datum_notes(system, boundary.earth)


def _check_near(
    across: Vector, up: Vector, boundary: Boundary, reach_m: float, what: str, system: CRS | None
) -> None:
    """Refuse units of which none comes near the boundary, and say so if they would with their axes swapped."""
    here = _overlap(across, up, boundary, reach_m)
    if here > 0.01:
        return
    swapped = system is None or system.is_geographic
    there = _overlap(up, across, boundary, reach_m) if swapped else 0.0
    if there > 0.1 and there > 10.0 * here:
        names = "x and y" if system is None else "longitude and latitude"
        raise GeometryError(
            f"{what}: {names} seem to be swapped: {here:.0%} of them lie near the boundary as given, "
            f"{there:.0%} the other way round.",
            "Change the two coordinate columns round.",
            code="swapped axes",
        )
    if here == 0.0:
        raise GeometryError(
            f"{what}: none comes near the boundary; they lie between {span(across)} across and {span(up)} up, "
            f"the boundary between {span(boundary.across)} and {span(boundary.up)}.",
            "Check the coordinate systems of both.",
            code="apart",
        )


def _overlap(across: Vector, up: Vector, boundary: Boundary, reach_m: float) -> float:
    """The share of places within the reach of the box round a boundary."""
    margin_up = margin = reach_m
    if boundary.earth is not None:
        margin_up = float(np.degrees(reach_m / boundary.earth.semi_major_m)) * 1.01
        highest = min(float(np.abs(boundary.up).max()) + margin_up, 89.0)
        margin = margin_up / float(np.cos(np.radians(highest)))
    at = boundary.in_frame(across)
    beside = (at >= boundary.across.min() - margin) & (at <= boundary.across.max() + margin)
    level = (up >= boundary.up.min() - margin_up) & (up <= boundary.up.max() + margin_up)
    return float(np.mean(beside & level))


def place_notes(located: Located, *, treated: Mask | None = None) -> tuple[Note, ...]:
    """What the places of units say: on the line, beyond the reach, off a loose end, against their own treatment column.

    Parameters
    ----------
    treated
        Whether each unit's own record says that it was treated, where the study has such a column, shape (n,).
    """
    notes = []
    within = int(located.within.sum())
    on_line = int(located.on_line.sum())
    if on_line:
        share = on_line / within
        often = share >= _ON_LINE_SHARE
        notes.append(
            Note(
                code="on the line",
                severity="warning" if often else "information",
                sentence=f"{counted(on_line, 'unit')} ({share:.2%} of those within reach) on the line, without a side.",
                remedy="Many places exactly on a line are a habit of geocoding; use a donut."
                if often
                else "",
            )
        )
    loose = int(located.loose_end.sum())
    if loose:
        notes.append(
            Note(
                code="loose end",
                severity="check",
                sentence=f"{counted(loose, 'unit')} nearest to a loose end of the boundary, beyond which it is not known.",
                remedy="Consider leaving them out.",
            )
        )
    if treated is not None:
        notes += _disagreement(located, treated)
    return tuple(notes)


def _disagreement(located: Located, treated: Mask) -> list[Note]:
    judged = located.within & (located.side != 0)
    wrong = judged & ((located.side > 0) != treated)
    if not wrong.any():
        return []
    apart = located.apart_m[wrong]
    middle, farthest = float(np.median(apart)), float(apart.max())
    inside, outside = int((wrong & treated).sum()), int((wrong & ~treated).sum())
    return [
        Note(
            code="disagree",
            severity="warning",
            sentence=(
                f"{counted(int(wrong.sum()), 'unit')} ({wrong.sum() / judged.sum():.2%}) stand on one side and are recorded "
                f"on the other: {inside:,} treated on the comparison side, {outside:,} untreated on the treated side; "
                f"half of them within {middle:.3g} of the line, the farthest {farthest:.3g}."
            ),
            remedy="Near the line this is geocoding error: use a donut. Far from it, take-up: name the column as such.",
        )
    ]


def crowded_note(longitude: Vector, latitude: Vector, located: Located) -> tuple[Note, ...]:
    """A note where one place holds more than a twentieth of the units within reach, as village centres do."""
    places, counts = np.unique((longitude + 1j * latitude)[located.within], return_counts=True)
    if not len(places) or counts.max() <= max(_CROWD_SHARE * counts.sum(), 1):
        return ()
    return (
        Note(
            code="crowded",
            severity="warning",
            sentence=(
                f"One place holds {counts.max():,} of {counts.sum():,} units within reach; "
                f"there are {counted(len(places), 'different place')}."
            ),
            remedy="Units at one place are one observation of where they are: name the place as the cluster.",
        ),
    )


def treated_side(located: Located, treated: Mask) -> Literal["left", "right"]:
    """Which side of a drawn line is treated, by the units' own records.

    Parameters
    ----------
    located
        Units located with ``treated="left"``.
    treated
        What their records say, shape (n,).

    Raises
    ------
    GeometryError
        Fewer than 95 % of the units agree.
    """
    judged = located.within & (located.side != 0)
    if not judged.any():
        raise GeometryError("No unit within reach has a side of the line.", "Widen the reach.", code="side")
    left = float(np.mean((located.side > 0)[judged] == treated[judged]))
    if max(left, 1.0 - left) < _AGREE:
        raise GeometryError(
            f"Of the units within reach {max(left, 1.0 - left):.0%} agree on which side of the line is treated; "
            f"{_AGREE:.0%} are needed to tell.",
            'Say "left" or "right" of the line as it is drawn.',
            code="side",
        )
    return "left" if left >= 0.5 else "right"
