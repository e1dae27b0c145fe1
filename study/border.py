"""Where a study's units stand against the boundary of its area: signed distance, segment, and what was found."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, Literal

import numpy as np

from estimation.arrays import Codes, Mask, Vector
from study.document import Study
from study.errors import BAD_DATA, BAD_STUDY, StudyError
from study.literal import clean

if TYPE_CHECKING:  # shapely and pyproj are loaded only when a boundary is asked for
    from geo.boundary import Boundary
    from geo.distance import Located
    from geo.real_border import RealBorder

REACH_M: Final = 10_000.0
SEGMENTS: Final = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Border:
    """The boundary that units were measured against, and what was decided on the way.

    Attributes
    ----------
    whole, kept
        The outline as read, and the part of it that has units on both sides, which distances refer to.
    real
        Which stretches were kept and dropped.
    longitude, latitude
        Of units, on the boundary's own datum (x and y for plain units), shape (n,).
    located
        Where each unit stands against the kept boundary.
    segment
        Segment of each unit's nearest place, −1 where there is none, shape (n,).
    segment_names
        "segment 1" … in order along the boundary; empty for a boundary that is not cut.
    notes
        What was found, repaired or assumed, in sentences.
    """

    whole: Boundary
    kept: Boundary
    real: RealBorder
    longitude: Vector
    latitude: Vector
    located: Located
    segment: Codes
    segment_names: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def within(self) -> Mask:
        """Units within the reach, shape (n,)."""
        return self.located.within


def measure(
    study: Study, across: Vector, up: Vector, *, degrees: bool, report: Callable[[str], None]
) -> Border:
    """Measure every unit against the study's area.

    Parameters
    ----------
    across, up
        Longitude and latitude, or x and y in the area's own coordinate system, shape (n,), NaN where unknown.
    degrees
        Whether these are longitude and latitude.

    Raises
    ------
    StudyError
        Status 2 where the study's area is at fault, 3 where a file is.
    """
    from geo.errors import GeometryError  # deferred: shapely and pyproj take a third of a second

    try:
        return _measure(study, across, up, degrees=degrees, report=report)
    except GeometryError as problem:
        raise StudyError(
            f"{clean(study.path.name)}: {problem.sentence}",
            problem.remedy,
            BAD_DATA if problem.code in ("damaged", "empty") else BAD_STUDY,
        ) from None


def _measure(
    study: Study, across: Vector, up: Vector, *, degrees: bool, report: Callable[[str], None]
) -> Border:
    from geo.distance import locate
    from geo.layers import read_layer
    from geo.outline import boundary_of_area
    from geo.real_border import border_by_units
    from geo.segments import cut_equal
    from geo.units import place_notes, units_in_degrees

    area = study.assignment.area
    assert area is not None and area.path is not None  # `require_complete` saw to it
    report(f"Reading {clean(area.path)}")
    layer = read_layer(study.path.parent / area.path, layer=area.layer)
    crs = area.crs if area.crs is not None else layer.crs
    whole = boundary_of_area(layer.shapes, crs=crs, edges=layer.edges)
    reach = area.reach if area.reach is not None else REACH_M
    longitude, latitude, notes = units_in_degrees(
        across, up, "EPSG:4326" if degrees else crs, boundary=whole, reach_m=reach
    )
    treated: Literal["inside", "outside"] = "inside" if study.assignment.treated == "inside" else "outside"
    report("Measuring distances to the boundary")
    located = locate(longitude, latitude, boundary=whole, reach_m=reach, treated=treated)
    real = border_by_units(whole, located, band_m=reach)
    kept = whole
    said = [note.sentence for note in (*whole.notes, *notes)]
    if real.dropped_m > 0.0:
        # Distances are measured anew: a unit's nearest place must not be a coast that nobody lives beyond.
        kept = whole.keep(real.kept)
        located = locate(longitude, latitude, boundary=kept, reach_m=reach, treated=treated)
        said.append(
            f"{_km(real.dropped_m)} of the outline's {_km(real.kept_m + real.dropped_m)} have no units on one of the two "
            "sides and do not count as border; distances are to the rest."
        )
    said += [note.sentence for note in place_notes(located)]
    count = area.segments if isinstance(area.segments, int) else SEGMENTS
    segment = np.zeros(len(longitude), dtype=np.int64)
    names: tuple[str, ...] = ()
    if count > 1:
        pieces = cut_equal(kept, count, bandwidth_m=reach)
        segment = np.asarray(pieces.of(located), dtype=np.int64)
        names = tuple(f"segment {i + 1}" for i in range(len(pieces.length_m)))
    return Border(
        whole=whole,
        kept=kept,
        real=real,
        longitude=longitude,
        latitude=latitude,
        located=located,
        segment=segment,
        segment_names=names,
        notes=tuple(said),
    )


def _km(metres: float) -> str:
    return f"{metres / 1000:,.1f} km" if metres < 100_000 else f"{metres / 1000:,.0f} km"
