"""From a study and its data file to arrays: who is on which side of which line, and who is left out and why."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final, Literal

import numpy as np

from estimation.arrays import Codes, Mask, Vector
from study.assembly_checks import require_rows, require_usable
from study.border import Border, measure
from study.document import Study
from study.errors import BAD_DATA, BAD_STUDY, CANNOT_ESTIMATE, StudyError
from study.literal import clean, nearest, quoted
from study.readiness import require_complete
from study.tables import Labels, Parts, open_table, parts_of, require_columns

REASONS: Final = (
    "used",
    "missing score",
    "missing site",
    "site without a cutoff",
    "missing cutoff",
    "missing weight",
    "weight not positive",
    "missing cluster",
    "missing coordinates",
    "beyond the reach",
    "on the boundary, without a side",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Assigned:
    """Every row that was read, in file order, with its side of its line.

    Attributes
    ----------
    position
        Score minus the row's own cutoff, shape (n,), in units of the score; NaN where either is missing.
    above
        Shape (n,): True where the row is on the upper side; the study's rule decides for rows on the line. False
        where `position` is NaN.
    treated
        Which of the two sides the programme was handed out to.
    site
        Shape (n,): index into `site_names`, −1 where the row has no site with a cutoff. None where the study has one
        line.
    site_names
        Sites with a cutoff and rows, in natural order; the cutoffs themselves for steps.
    cutoffs
        The row's own cutoff, shape (n,), NaN where it has none. May be a read-only view of one number.
    outcomes, covariates
        Shape (n,) by column name, NaN where missing.
    take_up, weight, cluster
        Shape (n,), or None where the study names no such column. Cluster codes are −1 where missing.
    reason
        Shape (n,): 0 where the row is used, else an index into `reasons`. A missing outcome is no reason: it concerns
        that outcome only.
    reasons
        What the codes of `reason` mean.
    rows_read
        n.
    dropped
        Rows by reason, in the order of `reasons`, without those that did not happen.
    fingerprint
        SHA-256 of the data file's bytes, in hexadecimal.
    row
        Shape (n,): the row's place in the file, from 0; not 0, 1, 2… where data.rows left rows out.
    border
        The boundary and every unit's place against it, where the rule is one; `position` is then the signed distance
        in metres, positive on the treated side, and sites are segments of the border.
    """

    position: Vector
    above: Mask
    treated: Literal["above", "below"]
    site: Codes | None
    site_names: tuple[str, ...]
    cutoffs: Vector
    outcomes: Mapping[str, Vector]
    take_up: Vector | None
    weight: Vector | None
    cluster: Codes | None
    covariates: Mapping[str, Vector]
    reason: Codes
    reasons: tuple[str, ...]
    rows_read: int
    dropped: Mapping[str, int]
    fingerprint: str
    row: Codes
    border: Border | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Lines:
    """Each row's own line: a cutoff (NaN where none) and, with several lines, a site (−1 where none)."""

    cutoffs: Vector
    site: Codes | None = None
    site_names: tuple[str, ...] = ()
    has_site: Mask | None = None
    border: Border | None = None


def assemble(study: Study, *, progress: Callable[[str], None] | None = None) -> Assigned:
    """Read the study's columns, put every row on its side, and check that an effect can be asked for.

    Parameters
    ----------
    study
        A complete study.
    progress
        Called with a short line as the work goes on.

    Raises
    ------
    StudyError
        Status 2 where the study lacks a part or doesn't fit the file, 3 where the data can't be read or used, 1 for
        a rule that is not estimated yet.
    """
    require_complete(study)
    if study.assignment.rule == "frontier":
        raise StudyError(
            f"{clean(study.path.name)}: this version does not estimate a {study.assignment.rule} yet.",
            'Use the rule "cutoff", "cutoffs", "steps" or "boundary".',
            CANNOT_ESTIMATE,
        )
    report = progress or (lambda _: None)
    report(f"Reading {clean(study.data_file.name)}")
    parts = _read(study)
    report("Putting rows on their side of the line")
    require_rows(study, parts.rows)
    if study.assignment.rule == "boundary":
        score, lines = _against_the_boundary(study, parts, report)
    else:
        assert study.columns.score is not None  # `require_complete` saw to it
        score = parts.numbers[study.columns.score]
        lines = _lines(study, parts, score)
    assigned = _assigned(study, parts, score, lines, _fingerprint(study.data_file))
    require_usable(
        study, score, assigned.reason == 0, assigned.above, lines.site, lines.site_names, parts.numbers
    )
    return assigned


def sides(position: Vector, treated: str) -> tuple[Mask, Literal["above", "below"]]:
    """(rows on the upper side, which side is treated) for one of the four kinds of rule.

    A row on the line is treated under "at or above" and "at or below", and belongs to the other side under "above" and
    "below". NaN is not above.
    """
    on_line_above = treated in ("at or above", "below")
    above: Mask = position >= 0.0 if on_line_above else position > 0.0
    return above, "above" if treated in ("at or above", "above") else "below"


def _read(study: Study) -> Parts:
    columns, rule = study.columns, study.assignment
    keys: dict[str, str] = {}  # the key that names each column
    named = [
        ("columns.score", None if rule.rule == "boundary" else columns.score),
        ("columns.longitude", columns.longitude),
        ("columns.latitude", columns.latitude),
        ("columns.x", columns.x),
        ("columns.y", columns.y),
        *(("columns.outcomes", name) for name in columns.outcomes),
        ("columns.take_up", columns.take_up),
        ("columns.weight", columns.weight),
        *(("columns.covariates", name) for name in columns.covariates),
        ("assignment.cutoff_column", rule.cutoff_column),
    ]
    for key, name in named:
        if name is not None:
            keys.setdefault(name, key)
    said = {
        "columns.score": "score",
        "columns.longitude": "longitude",
        "columns.latitude": "latitude",
        "columns.x": "x",
        "columns.y": "y",
        "columns.outcomes": "outcome",
        "columns.take_up": "take-up",
        "columns.weight": "weight",
        "columns.covariates": "covariate",
        "assignment.cutoff_column": "cutoff of each row",
    }
    numbers = {name: said[key] for name, key in keys.items()}
    labels = [name for name in (columns.site, columns.cluster) if name is not None]
    for key, name in (("columns.site", columns.site), ("columns.cluster", columns.cluster)):
        if name is not None:
            keys.setdefault(name, key)
    source = study.data_file if "://" not in study.data.path else Path(study.data.path)
    with open_table(source, columns=tuple(keys), table=study.data.table, rows=study.data.rows) as opened:
        require_columns(opened, {name: f"{clean(study.path.name)}: {key}" for name, key in keys.items()})
        return parts_of(opened, numbers=numbers, labels=tuple(dict.fromkeys(labels)))


def _lines(study: Study, parts: Parts, score: Vector) -> _Lines:
    rule = study.assignment
    if rule.rule == "steps":
        return _steps(rule.steps, score)
    if rule.rule == "cutoff":
        if rule.cutoff_column is not None:
            return _Lines(cutoffs=parts.numbers[rule.cutoff_column])
        assert rule.cutoff is not None  # `require_complete` saw to it
        return _Lines(cutoffs=np.broadcast_to(np.float64(rule.cutoff), score.shape))
    assert study.columns.site is not None  # `require_complete` saw to it
    labels = parts.labels[study.columns.site]
    names = _site_names(labels, parts.value_labels.get(study.columns.site, {}))
    if rule.cutoff_column is not None:
        by_site = _cutoffs_from_column(study, labels, names, parts.numbers[rule.cutoff_column])
    else:
        by_site = _cutoffs_from_table(study, labels, names)
    kept = np.flatnonzero(~np.isnan(by_site))
    recode = np.full(len(names) + 1, -1, dtype=np.int64)  # the last place is for a missing site, coded −1
    recode[kept] = np.arange(len(kept))
    return _Lines(
        cutoffs=np.append(by_site, np.nan)[labels.codes],
        site=recode[labels.codes],
        site_names=tuple(names[i] for i in kept),
        has_site=labels.codes >= 0,
    )


def _against_the_boundary(study: Study, parts: Parts, report: Callable[[str], None]) -> tuple[Vector, _Lines]:
    """Signed distance in metres stands where a score would, its cutoff nought; segments stand where sites would."""
    columns = study.columns
    degrees = columns.longitude is not None
    across, up = (
        parts.numbers[name]
        for name in ((columns.longitude, columns.latitude) if degrees else (columns.x, columns.y))
        if name is not None
    )
    border = measure(study, across, up, degrees=degrees, report=report)
    distance = border.located.distance_m
    several = len(border.segment_names) > 1
    return distance, _Lines(
        cutoffs=np.broadcast_to(np.float64(0.0), distance.shape),
        site=border.segment if several else None,
        site_names=border.segment_names if several else (),
        border=border,
    )


def _steps(steps: tuple[float, ...], score: Vector) -> _Lines:
    """Each row belongs to the step nearest to its score; half-way between two, to the lower."""
    values = np.array(steps)
    nearest_step = np.searchsorted((values[1:] + values[:-1]) / 2.0, score, side="left")
    cutoffs = np.where(np.isnan(score), np.nan, values[nearest_step])
    site = np.where(np.isnan(score), -1, nearest_step).astype(np.int64)
    return _Lines(cutoffs=cutoffs, site=site, site_names=tuple(f"{step:g}" for step in steps))


def _site_names(labels: Labels, value_labels: Mapping[str, str]) -> tuple[str, ...]:
    """A site's value label where the file has one and it names one site only, else its value."""
    named = tuple(value_labels.get(level, level) for level in labels.levels)
    return named if len(set(named)) == len(named) else labels.levels


def _cutoffs_from_table(study: Study, labels: Labels, names: tuple[str, ...]) -> Vector:
    sites = study.assignment.sites
    known = set(names) | set(labels.levels)
    for site in sites:
        if site not in known:
            near = nearest(site, sorted(known))
            raise StudyError(
                f"{clean(study.path.name)}: assignment.sites names {quoted(site)}, but no row of "
                f"{clean(study.data_file.name)} has it in column {quoted(study.columns.site or '')}.",
                f"Did you mean {quoted(near)}?" if near else "Correct the name, or take the site out.",
                BAD_STUDY,
            )
    return np.array(
        [sites.get(name, sites.get(level, np.nan)) for name, level in zip(names, labels.levels)],
        dtype=np.float64,
    )


def _cutoffs_from_column(study: Study, labels: Labels, names: tuple[str, ...], column: Vector) -> Vector:
    """Each site's cutoff, which its rows must agree on; rows without one don't count."""
    given = (labels.codes >= 0) & ~np.isnan(column)
    low, high = np.full(len(names), np.inf), np.full(len(names), -np.inf)
    np.minimum.at(low, labels.codes[given], column[given])
    np.maximum.at(high, labels.codes[given], column[given])
    differing = np.flatnonzero(low < high)
    if len(differing):
        raise StudyError(
            f"{clean(study.data_file.name)}: the rows of site {quoted(names[differing[0]])} have different cutoffs in "
            f"column {quoted(study.assignment.cutoff_column or '')}.",
            "Name a site column that is as fine as the cutoffs, such as the district and year together.",
            BAD_DATA,
        )
    return np.where(np.isfinite(low), low, np.nan)


def _assigned(study: Study, parts: Parts, score: Vector, lines: _Lines, fingerprint: str) -> Assigned:
    columns = study.columns
    position = score - lines.cutoffs
    above, treated = sides(position, "at or above" if lines.border else study.assignment.treated)
    weight = parts.numbers[columns.weight] if columns.weight else None
    cluster = parts.labels[columns.cluster].codes if columns.cluster else None
    reason = np.zeros(parts.rows, dtype=np.int64)

    def because(sentence: str, rows: Mask) -> None:
        reason[rows & (reason == 0)] = REASONS.index(sentence)

    if lines.border is not None:
        because("missing coordinates", ~np.isfinite(lines.border.longitude))
        because("beyond the reach", ~lines.border.within)
        because("on the boundary, without a side", np.isnan(score))
    else:
        because("missing score", np.isnan(score))
    if lines.has_site is not None:
        because("missing site", ~lines.has_site)
        because("site without a cutoff", np.isnan(lines.cutoffs))
    else:
        because("missing cutoff", np.isnan(lines.cutoffs))
    if weight is not None:
        because("missing weight", np.isnan(weight))
        because("weight not positive", ~(weight > 0.0))
    if cluster is not None:
        because("missing cluster", cluster < 0)
    counts = np.bincount(reason, minlength=len(REASONS))
    return Assigned(
        position=position,
        above=above,
        treated=treated,
        site=lines.site,
        site_names=lines.site_names,
        cutoffs=lines.cutoffs,
        outcomes={name: parts.numbers[name] for name in columns.outcomes},
        take_up=parts.numbers[columns.take_up] if columns.take_up else None,
        weight=weight,
        cluster=cluster,
        covariates={name: parts.numbers[name] for name in columns.covariates},
        reason=reason,
        reasons=REASONS,
        rows_read=parts.rows,
        dropped={REASONS[i]: int(counts[i]) for i in range(1, len(REASONS)) if counts[i]},
        fingerprint=fingerprint,
        row=parts.row,
        border=lines.border,
    )


def _fingerprint(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
