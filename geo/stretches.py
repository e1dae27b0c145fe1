"""Stretches of a boundary put together and taken away, part by part, rings included."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from geo.boundary import Boundary, Stretch

_NOTHING_M: Final = 1e-6
_Spans = list[tuple[float, float]]


def joined(boundary: Boundary, stretches: Sequence[Stretch]) -> tuple[Stretch, ...]:
    """The same length of boundary in as few stretches as can be, in order."""
    return _from_spans(boundary, _to_spans(boundary, stretches))


def without(boundary: Boundary, stretches: Sequence[Stretch]) -> tuple[Stretch, ...]:
    """What is left of a boundary when some stretches are taken away."""
    taken = _to_spans(boundary, stretches)
    left = []
    for spans, length in zip(taken, boundary.length_m):
        free, here = [], 0.0
        for start, end in spans:
            if start - here > _NOTHING_M:
                free.append((here, start))
            here = max(here, end)
        if length - here > _NOTHING_M:
            free.append((here, float(length)))
        left.append(free)
    return _from_spans(boundary, left)


def chosen(
    boundary: Boundary,
    automatic: Sequence[Stretch],
    *,
    keep: Sequence[Stretch] = (),
    drop: Sequence[Stretch] = (),
) -> tuple[Stretch, ...]:
    """What a rule found, with a person's own stretches added and then others taken away."""
    together = joined(boundary, (*automatic, *keep))
    return without(boundary, (*without(boundary, together), *drop))


def length_m(boundary: Boundary, stretches: Sequence[Stretch]) -> float:
    """Length of the boundary that some stretches cover, what overlaps counted once."""
    return float(sum(end - start for spans in _to_spans(boundary, stretches) for start, end in spans))


def _to_spans(boundary: Boundary, stretches: Sequence[Stretch]) -> list[_Spans]:
    """Per part the covered spans within 0 and its length, merged and sorted."""
    raw: list[_Spans] = [[] for _ in range(boundary.parts)]
    for stretch in stretches:
        length = float(boundary.length_m[stretch.part])
        start, end = stretch.start_m, min(stretch.end_m, length)
        if end > start:
            raw[stretch.part].append((start, end))
        elif boundary.closed[stretch.part]:
            raw[stretch.part] += [(start, length), (0.0, end)]
    out = []
    for spans in raw:
        merged: _Spans = []
        for start, end in sorted(spans):
            if end - start <= _NOTHING_M:
                continue
            if merged and start <= merged[-1][1] + _NOTHING_M:
                merged[-1] = (merged[-1][0], max(end, merged[-1][1]))
            else:
                merged.append((start, end))
        out.append(merged)
    return out


def _from_spans(boundary: Boundary, parts: list[_Spans]) -> tuple[Stretch, ...]:
    out = []
    for part, spans in enumerate(parts):
        length = float(boundary.length_m[part])
        ends_meet = (
            boundary.closed[part]
            and len(spans) > 1
            and spans[0][0] <= _NOTHING_M
            and spans[-1][1] >= length - _NOTHING_M
        )
        if ends_meet:  # over the ring's start in one
            spans = [*spans[1:-1], (spans[-1][0], spans[0][1])]
        out += [Stretch(part=part, start_m=start, end_m=end) for start, end in spans]
    return tuple(out)
