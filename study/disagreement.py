"""Why the three answers differ, from their own numbers: which assumption moves which of them, and by how much."""

from __future__ import annotations

from estimation.effect import Effect
from study.wording import figure, width_text


def disagreement(effect: Effect) -> tuple[str, ...]:
    """What the three answers agree on, and what drives the largest difference, in sentences.

    The first sentence says whether they agree about zero and overlap. Each later one names an assumption whose
    share of the difference is at least half a standard error, largest first.
    """
    intervals = _intervals(effect)
    sentences = [_verdict(intervals)]
    drivers = sorted(_drivers(effect), key=lambda driver: -driver[0])
    sentences += [sentence for size, sentence in drivers if size >= 0.5]
    if len(sentences) == 1 and len(intervals) > 1:
        sentences.append(
            "No assumption moves them apart by more than half a standard error; what is left is chance and "
            "the different rows that they use."
        )
    return tuple(sentences)


def remarks(effect: Effect) -> tuple[str, ...]:
    """What stands beside the three answers: why they differ, the answer with covariates, the bound on the curvature."""
    return (*disagreement(effect), *_covariates(effect), *_curvature(effect))


def _covariates(effect: Effect) -> list[str]:
    """The robust answer with (or without) covariates, whichever does not lead."""
    other = effect.unadjusted if effect.choices.adjust else effect.adjusted
    if other is None or effect.unadjusted is None:
        return (
            [] if effect.adjusted_reason is None else [f"No answer with covariates: {effect.adjusted_reason}"]
        )
    scale = 100.0 if effect.binary else 1.0
    estimate, low, high = (
        figure(scale * value, scale * other.robust.std_error, sign=value is other.robust.estimate)
        for value in (other.robust.estimate, other.robust.low, other.robust.high)
    )
    how = "Without" if effect.choices.adjust else "With"
    return [f"{how} covariates taken off the robust answer is {estimate}, {low} to {high}."]


def _curvature(effect: Effect) -> list[str]:
    """How the bias-aware interval of the jump in the outcome moves with its bound, and where it gives way."""
    if len(effect.curvature_table) != 3 or effect.breakdown is None:
        return []
    scale = 100.0 if effect.binary else 1.0
    error = scale * (effect.reading.intention or effect.reading).std_error
    half, _, double = (
        f"{figure(scale * row.honest.low, error)} to {figure(scale * row.honest.high, error)}"
        for row in effect.curvature_table
    )
    bound = effect.curvature_table[1].honest.curvature
    what = "of the outcome itself " if effect.fuzzy else ""
    gives_way = (
        "it holds zero under any bound"
        if effect.breakdown == 0.0
        else f"it first holds zero under a bound of {effect.breakdown:.3g}"
    )
    return [
        f"Under half the bound of {bound:.3g} the bias-aware interval {what}is {half}, under twice it {double}; {gives_way}."
    ]


def _intervals(effect: Effect) -> dict[str, tuple[float, float]]:
    reading = effect.reading
    found = {"robust": (reading.robust.low, reading.robust.high)}
    if reading.bias_aware is not None:
        found["bias-aware"] = (reading.bias_aware.low, reading.bias_aware.high)
    if effect.randomisation is not None:
        found["randomisation"] = (effect.randomisation.low, effect.randomisation.high)
    return found


def _verdict(intervals: dict[str, tuple[float, float]]) -> str:
    if len(intervals) == 1:
        return "Only one answer can be given here."
    excluding = [name for name, (low, high) in intervals.items() if low > 0.0 or high < 0.0]
    holding = [name for name in intervals if name not in excluding]
    apart = max(low for low, _ in intervals.values()) > min(high for _, high in intervals.values())
    if apart:
        return "The intervals do not all overlap: they can't all be right."
    every = "Both" if len(intervals) == 2 else "All three"
    if not holding:
        same = len({low > 0.0 for low, _ in intervals.values()}) == 1
        if same:
            return f"{every} intervals exclude zero, on the same side."
        return "The intervals exclude zero on different sides."
    if not excluding:
        return f"{every} intervals hold zero."
    verb = "does" if len(holding) == 1 else "do"
    excludes = "excludes" if len(excluding) == 1 else "exclude"
    sentence = f"{_listed(excluding)} {excludes} zero; {_listed(holding)} {verb} not."
    return sentence[0].upper() + sentence[1:]


def _listed(names: list[str]) -> str:
    said = [f"the {name} interval" for name in names]
    return said[0] if len(said) == 1 else ", ".join(said[:-1]) + " and " + said[-1]


def _drivers(effect: Effect) -> list[tuple[float, str]]:
    """(size in standard errors of the plain estimate, sentence) of each assumption that separates the answers."""
    reading, scale = effect.reading, 100.0 if effect.binary else 1.0
    error = reading.std_error
    if not error > 0.0:
        return []
    found = []
    correction = reading.robust.estimate - reading.estimate
    found.append(
        (
            abs(correction) / error,
            f"The bias correction moves the robust answer by {figure(scale * correction, scale * error, sign=True)}, "
            f"{abs(correction) / error:.1f} standard errors: the curve bends inside the bandwidth.",
        )
    )
    honest = reading.bias_aware
    if honest is not None:
        ratio = honest.max_bias / error
        found.append(
            (
                ratio,
                f"The bias-aware interval allows for a bias of up to {figure(scale * honest.max_bias, scale * error)}, "
                f"{ratio:.1f} standard errors, under its bound of {honest.curvature:.3g} on the curvature; "
                + (
                    "its width is mostly that bound."
                    if ratio > 1.0
                    else "its width is mostly sampling error."
                ),
            )
        )
    found += _randomisation_driver(effect, scale, error)
    return found


def _randomisation_driver(effect: Effect, scale: float, error: float) -> list[tuple[float, str]]:
    drawn = effect.randomisation
    if drawn is None or effect.slopes is None or effect.fuzzy:
        return []
    # A difference in means over a window takes in the slopes: half the window on each side.
    sign = 1.0 if effect.treated == "above" else -1.0
    drift = sign * 0.5 * (effect.slopes[1] * drawn.window[1] - effect.slopes[0] * drawn.window[0])
    return [
        (
            abs(drift) / error,
            f"The randomisation answer takes the outcome to be flat within {width_text(drawn.window[1])} of the line; "
            f"the slopes of the local fits alone would add {figure(scale * drift, scale * error, sign=True)} to it"
            + (
                f", and with slopes removed it is {figure(scale * effect.without_slopes.estimate, scale * error, sign=True)}."
                if effect.without_slopes is not None
                else "."
            ),
        )
    ]
