"""The sites of a data file with their scores, and cutoffs for them from pasted text or a second file."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from estimation.arrays import Codes, Vector
from study.document import Study
from study.errors import BAD_DATA, StudyError
from study.literal import clean, quoted
from study.tables import open_table, parts_of, require_columns

_LARGEST = 4 * 2**20


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteScores:
    """One site of the file: its name and its known scores, ascending, shape (n,); rows without a score are counted."""

    name: str
    scores: Vector
    missing: int

    def sides(self, cutoff: float) -> tuple[int, int, int]:
        """(rows below, rows on, rows above) a cutoff."""
        first, last = (int(np.searchsorted(self.scores, cutoff, side=side)) for side in ("left", "right"))
        return first, last - first, len(self.scores) - last

    def strip(self, bins: int, low: float, high: float) -> Codes:
        """Rows in equal bins of a scale that all sites share, shape (bins,)."""
        return np.histogram(self.scores, bins=bins, range=(low, high))[0].astype(np.int64)


@dataclass(frozen=True, slots=True, kw_only=True)
class SiteList:
    """Every site of the file in natural order, rows without a site, and the scale of the score."""

    sites: tuple[SiteScores, ...]
    without_site: int
    low: float
    high: float


def list_sites(study: Study) -> SiteList:
    """Read the site and the score of every row.

    Raises
    ------
    StudyError
        When the file or a column can't be read.
    """
    site, score = study.columns.site, study.columns.score
    assert site is not None and score is not None  # the caller asks only then
    source = study.data_file if "://" not in study.data.path else Path(study.data.path)
    with open_table(source, columns=(site, score), table=study.data.table, rows=study.data.rows) as opened:
        name = clean(study.path.name)
        require_columns(opened, {site: f"{name}: columns.site", score: f"{name}: columns.score"})
        parts = parts_of(opened, numbers={score: "score"}, labels=(site,))
    labels, scores = parts.labels[site], parts.numbers[score]
    known_as = parts.value_labels.get(site, {})
    names = tuple(known_as.get(level, level) for level in labels.levels)
    if len(set(names)) < len(names):
        names = labels.levels
    order = np.argsort(labels.codes, kind="stable")
    ends = np.searchsorted(labels.codes[order], np.arange(len(names) + 1))
    found = []
    for i, own in enumerate(names):
        rows = scores[order[ends[i] : ends[i + 1]]]
        found.append(
            SiteScores(name=own, scores=np.sort(rows[~np.isnan(rows)]), missing=int(np.isnan(rows).sum()))
        )
    known = scores[~np.isnan(scores)]
    return SiteList(
        sites=tuple(found),
        without_site=int(np.sum(labels.codes < 0)),
        low=float(known.min()) if len(known) else 0.0,
        high=float(known.max()) if len(known) else 1.0,
    )


_LINE = re.compile(r"\s*(?P<name>.+?)\s*(?:[\t=,;:]|\s)\s*(?P<number>[-+−]?\d[\d.,]*(?:[eE][-+]?\d+)?)\s*")


def read_cutoffs(text: str, sites: tuple[str, ...]) -> dict[str, float]:
    """Cutoffs from lines of "site, cutoff" (a tab, comma, semicolon, colon, equals sign or blanks between).

    Parameters
    ----------
    sites
        The sites there are; names are matched to them, whatever their case where that leaves no doubt.

    Raises
    ------
    StudyError
        For a line that is no name and number (a first line of headings apart), or a name that is no site.
    """
    folded: dict[str, list[str]] = {}
    for site in sites:
        folded.setdefault(site.casefold(), []).append(site)
    found: dict[str, float] = {}
    lines = [line for line in re.split(r"[\r\n]+", text) if line.strip()]
    for i, line in enumerate(lines):
        match = _LINE.fullmatch(line)
        value = math.nan if match is None else _number(match["number"])
        if match is None or not math.isfinite(value):
            if i == 0 and len(lines) > 1:
                continue  # headings
            raise StudyError(
                f"Line {i + 1} is {quoted(line.strip()[:60])}, not a site and its cutoff.",
                "Write a site, a tab or comma, and a number on each line.",
                BAD_DATA,
            )
        name = match["name"].strip().strip("\"'")
        same = [name] if name in sites else folded.get(name.casefold(), [])
        if len(same) != 1:
            raise StudyError(
                f"Line {i + 1} names {quoted(name[:60])}, which is no site of the data.",
                "Correct the name, or leave the line out.",
                BAD_DATA,
            )
        found[same[0]] = value
    return found


def cutoffs_from_file(path: Path, sites: tuple[str, ...]) -> dict[str, float]:
    """The same from a text file.

    Raises
    ------
    StudyError
        When it can't be read, or as for its lines.
    """
    try:
        if path.stat().st_size > _LARGEST:
            raise StudyError(
                f"{clean(str(path))} is too large for a list of cutoffs.", "Name another file.", BAD_DATA
            )
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError, ValueError):
        raise StudyError(
            f"{clean(str(path))} can't be read as text.", "Name a UTF-8 text or CSV file.", BAD_DATA
        ) from None
    return read_cutoffs(text, sites)


def _number(text: str) -> float:
    text = text.replace("−", "-")
    if "," in text and "." not in text:
        text = text.replace(",", ".")
    try:
        return float(text.replace(",", ""))
    except ValueError:
        return math.nan
