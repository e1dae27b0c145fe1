"""The parts of a release as plain data: everything in them has passed the guard, and writers only lay them out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from estimation.line import Curve
from study.guard.decisions import Decision
from study.guard.pictures import SafeBins
from study.guard.rows import RowSet


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """A table of text.

    Attributes
    ----------
    name
        Of its files, such as "effects".
    title
        One line over it.
    head, rows
        Column headings, and rows of as many cells.
    numeric
        Columns aligned on the right.
    note
        A sentence under it, or empty.
    """

    name: str
    title: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numeric: tuple[int, ...] = ()
    note: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class EffectPicture:
    """Binned means and local fits around a line, on the score's own scale where there is one cutoff."""

    name: str
    title: str
    across: str
    up: str
    cutoff: float
    below: SafeBins
    above: SafeBins
    curve: Curve
    percent: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class SweepPicture:
    """The effect against the bandwidth."""

    name: str
    title: str
    across: str
    up: str
    width: tuple[float, ...]
    estimate: tuple[float, ...]
    low: tuple[float, ...]
    high: tuple[float, ...]
    chosen: float


@dataclass(frozen=True, slots=True, kw_only=True)
class SitesPicture:
    """An interval a site; the last one may be the pooled effect."""

    name: str
    title: str
    across: str
    names: tuple[str, ...]
    numbers: tuple[tuple[float, float, float], ...]
    pooled: tuple[float, float, float] | None


@dataclass(frozen=True, slots=True, kw_only=True)
class ScorePicture:
    """Rows by score; a bar that may not be shown is marked as such, whatever its height."""

    name: str
    title: str
    across: str
    bars: tuple[tuple[float, float, int], ...]  # (from, to, rows as they may be shown)
    hidden: tuple[tuple[float, float], ...]  # (from, to)
    cutoff: float


Picture = EffectPicture | SweepPicture | SitesPicture | ScorePicture


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One headline effect in words.

    Attributes
    ----------
    heading
        The outcome.
    sentences
        The finding and what it rests on.
    answers
        The three answers as a table.
    remarks, cautions
        What stands beside them, and what to mind.
    """

    heading: str
    sentences: tuple[str, ...]
    answers: Table | None
    remarks: tuple[str, ...]
    cautions: tuple[str, ...]
    pictures: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Release:
    """Everything that would leave, and what the checker needs beside it.

    Attributes
    ----------
    question, rule, data, record, cautions, repeat
        Sections of the report, in sentences.
    findings
        One a headline effect.
    together
        What sites say together, by outcome.
    tables, pictures
        In the order of the report.
    texts
        Files that leave as they are, by name: the study file, the ledger.
    decisions, sets
        For the checker: what was done to each number; the sets of rows that were shown.
    numbers
        Every released number as text, by where it stands, for the comparison of releases.
    changes
        What differs from the release before, in sentences.
    """

    title: str
    made: str
    version: str
    question: tuple[str, ...]
    rule: tuple[str, ...]
    data: tuple[str, ...]
    findings: tuple[Finding, ...]
    together: Mapping[str, tuple[str, ...]]
    record: tuple[str, ...]
    cautions: tuple[str, ...]
    repeat: tuple[str, ...]
    guard: tuple[str, ...]
    tables: tuple[Table, ...]
    pictures: tuple[Picture, ...]
    texts: Mapping[str, str]
    decisions: tuple[Decision, ...]
    sets: tuple[tuple[str, RowSet], ...]
    changes: tuple[str, ...] = ()
    numbers: Mapping[str, str] = field(default_factory=dict)

    @property
    def suppressed(self) -> int:
        """Numbers that do not leave."""
        return sum(decision.did == "suppressed" for decision in self.decisions)

    @property
    def rounded(self) -> int:
        """Numbers that leave rounded."""
        return sum(decision.did == "rounded" for decision in self.decisions)
