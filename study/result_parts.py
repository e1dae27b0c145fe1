"""Small pieces of the result document: numbers, intervals, answers by lot."""

from __future__ import annotations

import math
from typing import Any

from estimation.inference import Interval
from estimation.randomisation import Randomisation


def number(value: float | None) -> float | None:
    """A finite number at full precision, or None."""
    return None if value is None or not math.isfinite(value) else float(value)


def interval_document(found: Interval) -> dict[str, Any]:
    """An interval with its own centre."""
    return {
        "estimate": number(found.estimate),
        "std_error": number(found.std_error),
        "low": number(found.low),
        "high": number(found.high),
        "p_value": number(found.p_value),
    }


def randomisation_document(found: Randomisation) -> dict[str, Any]:
    """The local randomisation answer; an end that too few assignments leave open is None with a reason."""
    document = {
        "window": [number(found.window[0]), number(found.window[1])],
        "below": found.below,
        "above": found.above,
        "estimate": number(found.estimate),
        "intention": number(found.intention),
        "hodges_lehmann": number(found.hodges_lehmann),
        "p_value": number(found.p_value),
        "low": number(found.low),
        "high": number(found.high),
        "draws": found.draws,
        "exact": found.exact,
        "statistic": found.statistic,
    }
    if math.isinf(found.low) or math.isinf(found.high):
        document["reason"] = "too few assignments are possible to close the interval"
    return document
