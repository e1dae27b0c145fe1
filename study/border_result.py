"""What an outcome's effects along a border are, as numbers, as a document and in words."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from estimation.boundary_points import Average, PointEffects
from study.literal import clean
from study.result_parts import number
from study.wording import figure, percent

if TYPE_CHECKING:  # shapely is loaded only when a boundary is asked for
    from geo.segments import BoundaryPoints


@dataclass(frozen=True, slots=True, kw_only=True)
class AlongBorder:
    """One outcome's effects along the border.

    Attributes
    ----------
    points
        Where: longitude and latitude, part and position along it, the length each stands for.
    effects
        The estimates there, with pointwise intervals, the band and the joint covariance.
    by_length, by_units
        Averages over the estimated points: each by the length it stands for, and by the units near it. None where no
        point could be estimated.
    largest
        Index of the point whose effect is farthest from nought; its interval is that of the band, which holds for
        whichever point turns out largest. None where no point could be estimated.
    """

    outcome: str
    points: BoundaryPoints
    effects: PointEffects
    by_length: Average | None
    by_units: Average | None
    largest: int | None


def border_document(found: AlongBorder) -> dict[str, Any]:
    """One outcome's entry under `border` in the result document."""
    effects, points = found.effects, found.points

    def mean(one: Average | None) -> dict[str, Any] | None:
        if one is None:
            return None
        return {
            "estimate": number(one.estimate),
            "std_error": number(one.std_error),
            "low": number(one.low),
            "high": number(one.high),
        }

    return {
        "outcome": found.outcome,
        "kind": "boundary point",
        "bandwidth": number(effects.bandwidth),
        "bandwidth_rule": "the pooled distance estimate's width, adjusted to the plane's rate",
        "critical_value": number(effects.critical),
        "average_by_length": mean(found.by_length),
        "average_by_units": mean(found.by_units),
        "largest": found.largest,
        "reason": "" if found.by_length is not None else "no point has enough units on both sides",
        "points": [
            {
                "longitude": number(points.longitude[k]),
                "latitude": number(points.latitude[k]),
                "part": int(points.part[k]),
                "position": number(points.position_m[k]),
                "estimate": number(effects.estimate[k]),
                "std_error": number(effects.std_error[k]),
                "degrees_of_freedom": number(effects.degrees[k]),
                "low": number(effects.low[k]),
                "high": number(effects.high[k]),
                "band_low": number(effects.band_low[k]),
                "band_high": number(effects.band_high[k]),
                "bias_corrected": number(effects.corrected[k]),
                "bias_corrected_low": number(effects.corrected_low[k]),
                "bias_corrected_high": number(effects.corrected_high[k]),
                "counts": {"comparison": int(effects.below[k]), "treated": int(effects.above[k])},
                "reason": effects.reasons[k],
            }
            for k in range(len(points.longitude))
        ],
    }


def border_sentences(found: AlongBorder, *, binary: bool) -> tuple[str, ...]:
    """The averages along the border, how the effect varies, and where it could not be estimated."""
    effects, outcome = found.effects, clean(found.outcome)
    if found.by_length is None or found.by_units is None or found.largest is None:
        usual = Counter(effects.reasons).most_common(1)[0][0]
        return (f"Along the border {outcome} can be estimated at no point: at most of them {usual}.",)
    scale, unit = (100.0, " percentage points") if binary else (1.0, "")
    mean, spread = found.by_length, scale * found.by_length.std_error
    known = effects.known
    apart = int(((effects.band_low > 0.0) | (effects.band_high < 0.0)).sum())
    said = [
        f"At {int(known.sum())} of {len(known)} points along the border, within {effects.bandwidth:.4g} m of each: on average by "
        f"length {figure(scale * mean.estimate, spread, sign=True)}{unit} ({percent(effects.level)} interval "
        f"{figure(scale * mean.low, spread)} to {figure(scale * mean.high, spread)}), by units "
        f"{figure(scale * found.by_units.estimate, spread, sign=True)}.",
        f"The band that holds at all of them together excludes zero at {apart}; the largest effect is "
        f"{figure(scale * effects.estimate[found.largest], spread, sign=True)} "
        f"({figure(scale * effects.band_low[found.largest], spread)} to "
        f"{figure(scale * effects.band_high[found.largest], spread)}).",
    ]
    thin = int(effects.thin.sum())
    if thin:
        said.append(f"{thin} of the points stand on fewer than 15 degrees of freedom: read them with care.")
    missing = int((~known).sum())
    if missing:
        said.append(f"{missing} of the points have too few units on a side.")
    return tuple(said)
