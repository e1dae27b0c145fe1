"""What must hold of a study's rows before an effect can be asked for."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from estimation.arrays import Codes, Mask, Vector
from study.document import Study
from study.errors import BAD_DATA, BAD_STUDY, StudyError
from study.literal import clean, nearest, quoted


def require_rows(study: Study, rows: int) -> None:
    """Refuse a file, or a condition, that leaves no row.

    Raises
    ------
    StudyError
        Status 3 for a file without rows, 2 for a condition that leaves none.
    """
    if rows:
        return
    if study.data.rows:
        raise StudyError(
            f"{clean(study.path.name)}: data.rows leaves no row of {clean(study.data_file.name)}.",
            "Widen the condition.",
            BAD_STUDY,
        )
    raise StudyError(
        f"{clean(study.data_file.name)}: has a header but no rows.", "Name a file with rows.", BAD_DATA
    )


def require_usable(
    study: Study,
    score: Vector,
    used: Mask,
    above: Mask,
    site: Codes | None,
    site_names: tuple[str, ...],
    numbers: Mapping[str, Vector],
) -> None:
    """Refuse rows that no effect can come from.

    Parameters
    ----------
    study
        The study.
    score, used, above, site
        Shape (n,): as in `Assigned`, the score as in the file.
    site_names
        Names behind the codes of `site`.
    numbers
        Columns by name, the outcomes among them.

    Raises
    ------
    StudyError
        Status 2 where the study's cutoff is at fault, 3 where the data are.
    """
    data = clean(study.data_file.name)
    if not used.any():
        raise StudyError(
            f"{data}: no row has all of score, cutoff, weight and cluster.",
            "See what is missing with: cutbank columns " + data,
            BAD_DATA,
        )
    _require_cutoffs_in_range(study, score, used, site, site_names)
    for name in study.assignment.site_weights:
        if name not in site_names:
            near = nearest(name, site_names)
            raise StudyError(
                f"{clean(study.path.name)}: assignment.site_weights names {quoted(name)}, which is no site with a cutoff "
                "and rows.",
                f"Did you mean {quoted(near)}?" if near else "Correct the name, or take it out.",
                BAD_STUDY,
            )
    for side, rows in (("below", used & ~above), ("above", used & above)):
        if not rows.any():
            raise StudyError(
                f"{clean(study.path.name)}: no row of {data} is {side} its cutoff.",
                "Check the cutoff, assignment.treated and data.rows.",
                BAD_STUDY,
            )
    for name in study.columns.outcomes:
        values = numbers[name][used]
        seen = values[~np.isnan(values)]
        if not len(seen):
            raise StudyError(
                f"{data}: the outcome {quoted(name)} is missing in every row that is used.",
                "Name another outcome, or check data.rows.",
                BAD_DATA,
            )
        if seen.min() == seen.max():
            raise StudyError(
                f"{data}: the outcome {quoted(name)} has the same value in every row that is used.",
                "Name an outcome that varies.",
                BAD_DATA,
            )


def _require_cutoffs_in_range(
    study: Study, score: Vector, used: Mask, site: Codes | None, site_names: tuple[str, ...]
) -> None:
    """A cutoff that the study gives must lie among the scores that it cuts, or it is likely mistyped."""
    rule = study.assignment
    if rule.rule == "cutoff" and rule.cutoff is not None:
        _require_inside(study, "assignment.cutoff", rule.cutoff, score[used], "the score")
    elif rule.rule == "steps":
        for step in rule.steps:
            _require_inside(study, "assignment.steps", step, score[used], "the score")
    elif rule.rule == "cutoffs" and rule.sites and site is not None:
        for code, name in enumerate(site_names):
            scores = score[used & (site == code)]
            cutoff = rule.sites.get(name)
            if cutoff is not None and len(scores):
                _require_inside(study, f"assignment.sites.{clean(name)}", cutoff, scores, "the site's score")


def _require_inside(study: Study, key: str, cutoff: float, scores: Vector, whose: str) -> None:
    low, high = float(scores.min()), float(scores.max())
    if not low <= cutoff <= high:
        raise StudyError(
            f"{clean(study.path.name)}: {key} is {cutoff:g}, outside {whose}, which runs from {low:.4g} to {high:.4g}.",
            "Correct the cutoff, in the units of the score.",
            BAD_STUDY,
        )
