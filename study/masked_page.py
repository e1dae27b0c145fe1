"""The page of a study whose outcomes are masked."""

from __future__ import annotations

from study.figures import table_lines
from study.literal import clean
from study.masked import POWER, MaskedResult, how_to_seal
from study.page import item_lines, rows_sentence, wrapped_lines
from study.wording import figure, percent, rule_sentence, share, width_text


def masked_lines(result: MaskedResult, *, width: int = 80) -> list[str]:
    """The question, the rows, what each estimate will rest on, take-up, and how to go on."""
    bench = result.bench
    study, level = bench.study, bench.study.estimate.level
    lines = [clean(study.title) or clean(study.path.name), ""]
    lines += wrapped_lines(rule_sentence(study), width)
    lines += wrapped_lines(rows_sentence(bench.assigned), width)
    lines += ["", *wrapped_lines(how_to_seal(bench) + ".", width)]
    if result.designs:
        rows = [("outcome", "where", "width", "below", "above", "detectable")]
        rows += [
            (
                clean(design.outcome),
                clean(design.where),
                _widths(design.bandwidths.below, design.bandwidths.above),
                f"{design.below:,}",
                f"{design.above:,}",
                f"{design.detectable:.3f} sd",
            )
            for design in result.designs
        ]
        lines += ["", "What the estimates will rest on:", ""]
        lines += [*table_lines(rows, right=(2, 3, 4, 5)), ""]
        lines += item_lines(
            "Detectable is the smallest jump of the outcome that is found with a power of "
            f"{percent(POWER)} at the {percent(1.0 - level)} level, in standard deviations of the outcome around "
            "its fit.",
            width,
        )
        if result.clustered:
            lines += item_lines(
                "Rows of one cluster hang together, so that less can be found than this says.", width
            )
    for withheld in result.withheld:
        lines += item_lines(
            f"{clean(withheld.outcome)} ({clean(withheld.where)}): {withheld.sentence} {withheld.remedy}",
            width,
        )
    for where, _, reading in result.take_up:
        lines += item_lines(
            f"Take-up ({clean(where)}) jumps by {share(reading.estimate)} ({percent(level)} interval "
            f"{share(reading.plain.low)} to {share(reading.plain.high)}), "
            f"from {_level(reading.levels_below, reading.std_error)} below to "
            f"{_level(reading.levels_above, reading.std_error)} above.",
            width,
        )
    against = result.against_rule
    if against is not None:
        lines += item_lines(
            f"On the treated side {against.treated_without:,} of {against.treated_rows:,} did without; on the other "
            f"{against.other_with:,} of {against.other_rows:,} took it.",
            width,
        )
    return lines


def _widths(below: float, above: float) -> str:
    return width_text(below) if below == above else f"{width_text(below)}, {width_text(above)}"


def _level(value: float, spread: float) -> str:
    return f"{figure(100.0 * value, 100.0 * spread)} %"
