"""What a study still lacks before it can be estimated."""

from __future__ import annotations

from collections.abc import Iterator

from study.document import Study
from study.errors import BAD_STUDY, StudyError
from study.literal import clean, quoted


def require_complete(study: Study) -> None:
    """Refuse a study that lacks a part its rule needs, or gives one column two parts that exclude each other.

    Raises
    ------
    StudyError
        Status 2, with the first part that is missing.
    """
    for what, do in _gaps(study):
        raise StudyError(f"{clean(study.path.name)}: {what}", do, BAD_STUDY)


def missing_parts(study: Study) -> tuple[str, ...]:
    """Every missing part as a sentence, in the order of the work; empty when the study is complete."""
    return tuple(what for what, _ in _gaps(study))


def _gaps(study: Study) -> Iterator[tuple[str, str]]:
    if not study.data.path:
        yield "data.path is missing.", "Name the data file under [data]."
    if not study.columns.outcomes:
        yield "columns.outcomes is missing.", "Name one or more outcome columns under [columns]."
    yield from _gaps_of_the_rule(study)
    yield from _double_parts(study)


def _gaps_of_the_rule(study: Study) -> Iterator[tuple[str, str]]:
    rule, columns = study.assignment, study.columns
    if rule.rule in ("cutoff", "cutoffs", "steps") and columns.score is None:
        yield "columns.score is missing.", "Name the score column under [columns]."
    match rule.rule:
        case "cutoff":
            if rule.cutoff is None and rule.cutoff_column is None:
                yield 'assignment.rule is "cutoff", but no cutoff is given.', "Set assignment.cutoff."
            if rule.cutoff is not None and rule.cutoff_column is not None:
                yield "assignment.cutoff and assignment.cutoff_column are both given.", "Keep one of the two."
        case "cutoffs":
            if not rule.sites and rule.cutoff_column is None:
                yield (
                    'assignment.rule is "cutoffs", but no site has a cutoff.',
                    "List the sites under [assignment.sites], or set assignment.cutoff_column.",
                )
            if rule.sites and rule.cutoff_column is not None:
                yield "assignment.sites and assignment.cutoff_column are both given.", "Keep one of the two."
            if columns.site is None:
                yield (
                    'assignment.rule is "cutoffs", but columns.site is missing.',
                    "Name the site column under [columns].",
                )
        case "steps":
            if len(rule.steps) < 2:
                yield (
                    'assignment.rule is "steps", but fewer than two cutoffs are given.',
                    'List them in assignment.steps, or set assignment.rule to "cutoff".',
                )
            if rule.doses and len(rule.doses) != len(rule.steps):
                yield (
                    f"assignment.doses has {len(rule.doses)} entries for {len(rule.steps)} steps.",
                    "Give one dose for each step, or take the doses out.",
                )
            if rule.doses and rule.doses[0] <= 0.0:
                yield (
                    f"assignment.doses starts with {rule.doses[0]:g}, but every step hands something out.",
                    "Give doses above nought, ascending from the first step that a row meets.",
                )
        case "boundary":
            yield from _gaps_of_a_boundary(study)
        case "frontier":
            if rule.frontier is None or len(rule.frontier.cutoffs) < 2:
                yield (
                    'assignment.rule is "frontier", but fewer than two scores have a cutoff.',
                    "List them as all or any under [assignment.frontier].",
                )


def _gaps_of_a_boundary(study: Study) -> Iterator[tuple[str, str]]:
    columns = study.columns
    if study.assignment.area is None or study.assignment.area.path is None:
        yield 'assignment.rule is "boundary", but the area is missing.', "Set path under [assignment.area]."
    for first, second in (("x", "y"), ("longitude", "latitude")):
        if (getattr(columns, first) is None) != (getattr(columns, second) is None):
            yield (
                f"columns.{first} and columns.{second} go together, but one is missing.",
                "Give both or neither.",
            )
    if not any((columns.x, columns.y, columns.longitude, columns.latitude)):
        yield (
            'assignment.rule is "boundary", but no column holds coordinates.',
            "Name columns.longitude and columns.latitude, or columns.x and columns.y.",
        )
    if study.assignment.treated not in ("inside", "outside"):
        yield (
            f'assignment.rule is "boundary", but assignment.treated is {quoted(study.assignment.treated)}.',
            'Choose "inside" or "outside".',
        )


def _double_parts(study: Study) -> Iterator[tuple[str, str]]:
    """One column can't be what is explained and what explains it."""
    columns = study.columns
    parts = [("columns.score", columns.score), ("columns.take_up", columns.take_up)]
    parts += [("columns.outcomes", name) for name in columns.outcomes]
    parts += [("columns.covariates", name) for name in columns.covariates]
    seen: dict[str, str] = {}
    for part, name in parts:
        if name is None:
            continue
        if name in seen:
            yield f"column {quoted(name)} is named by {seen[name]} and by {part}.", "Give it one part only."
        seen.setdefault(name, part)
