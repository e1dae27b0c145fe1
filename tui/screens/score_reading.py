"""The score alone, sorted once, so that a line can be moved over it with every count at once. Imports numpy."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from estimation.arrays import Codes, Vector
from tui.plot_area import nice_step

if TYPE_CHECKING:
    from tui.screens.assignment import ScoreRequest

_BARS: Final = 60
_FEW: Final = 400  # different scores up to which a histogram has a bar for each, or for each so many
_ABOVE_HOLDS_LINE: Final = {"at or above": True, "above": False, "at or below": False, "below": True}


@dataclass(frozen=True, slots=True, kw_only=True)
class Against:
    """Units whose take-up is not what the rule says.

    Attributes
    ----------
    untreated
        On the treated side without take-up.
    treated
        On the other side with take-up.
    unknown
        Units with a score whose take-up is missing.
    """

    untreated: int
    treated: int
    unknown: int


@dataclass(frozen=True, slots=True, kw_only=True)
class LineCounts:
    """What a line does to the score, and the histogram around it.

    Attributes
    ----------
    edges, counts
        Bars in units of the score, shapes (k + 1,) and (k,); the line is one of the edges when it lies inside.
    below, above
        Units on each side, those on the line where the rule puts them.
    on_line
        Units whose score is the cutoff.
    against
        None without take-up.
    """

    edges: Vector
    counts: Codes
    below: int
    above: int
    on_line: int
    against: Against | None


@dataclass(frozen=True, slots=True, kw_only=True)
class ScoreReading:
    """A score column, ready for a line.

    Attributes
    ----------
    score
        Known scores, ascending, shape (n,).
    missing
        Rows without a score.
    took
        Running number of units with take-up in the score's order, shape (n + 1,); None without take-up.
    known
        Running number of units whose take-up is known.
    distinct, gap
        Different scores; the smallest step between two of them, 0 for a single one.
    heaviest
        The most common score and how many have it.
    """

    score: Vector
    missing: int
    took: Codes | None
    known: Codes | None
    distinct: int
    gap: float
    heaviest: tuple[float, int]

    @property
    def low(self) -> float:
        """The smallest score."""
        return float(self.score[0])

    @property
    def high(self) -> float:
        """The largest score."""
        return float(self.score[-1])

    @property
    def step(self) -> float:
        """How far one press of an arrow moves the line: one step of a lumpy score, else a round two-hundredth of its range."""
        wide = (self.high - self.low) / 200.0
        if wide <= 0.0:
            return 1.0
        return self.gap if self.distinct <= _FEW and self.gap > 0.25 * wide else float(nice_step(wide))

    def moved(self, cutoff: float, steps: int) -> float:
        """The line some steps further, on a multiple of the step and inside the score's range."""
        step = self.step
        place = round(cutoff / step)
        if not np.isclose(place * step, cutoff, rtol=1e-9, atol=1e-9 * step):
            place = int(np.floor(cutoff / step)) + (1 if steps < 0 else 0)
        return float(f"{min(max((place + steps) * step, self.low), self.high):.12g}")

    def middle(self) -> float:
        """Where a line begins that was never set: the median."""
        return float(self.score[len(self.score) // 2])

    def line(self, cutoff: float, treated: str, reach: float | None = None) -> LineCounts:
        """Count what a line does.

        Parameters
        ----------
        cutoff : float
            In units of the score.
        treated : str
            The study's word for the treated side.
        reach : float, optional
            How far from the line the histogram goes; all of the score when left out.
        """
        first = int(np.searchsorted(self.score, cutoff, side="left"))
        last = int(np.searchsorted(self.score, cutoff, side="right"))
        split = first if _ABOVE_HOLDS_LINE[treated] else last
        edges = self._edges(cutoff, reach)
        # Every bar but the last is closed on the left and open on the right; a line that ties go below of opens the other way.
        at = np.searchsorted(self.score, edges, side="left")
        at[-1] = np.searchsorted(self.score, edges[-1], side="right")
        at[1:-1][edges[1:-1] == cutoff] = split
        return LineCounts(
            edges=edges,
            counts=np.diff(at).astype(np.int64),
            below=split,
            above=len(self.score) - split,
            on_line=last - first,
            against=self._against(split, above=treated in ("at or above", "above")),
        )

    def _edges(self, cutoff: float, reach: float | None) -> Vector:
        low = self.low if reach is None else max(self.low, cutoff - reach)
        high = self.high if reach is None else min(self.high, cutoff + reach)
        if high <= low:
            return np.array([low, low + 1.0])
        width = (high - low) / _BARS
        if self.distinct <= _FEW and self.gap > 0.0:
            # Bars of whole steps around the values: else some bars hold two values and some one, and the eye sees spikes.
            width = self.gap * max(1, round(width / self.gap))
            low = low - 0.5 * self.gap
            high = high + 0.5 * self.gap
        edges = low + width * np.arange(int(np.ceil((high - low) / width - 1e-9)) + 1)
        if low < cutoff < edges[-1]:
            edges = np.unique(np.append(edges, cutoff))
        return np.asarray(edges, dtype=np.float64)

    def _against(self, split: int, *, above: bool) -> Against | None:
        if self.took is None or self.known is None:
            return None
        took_below, took_above = int(self.took[split]), int(self.took[-1] - self.took[split])
        known_below, known_above = int(self.known[split]), int(self.known[-1] - self.known[split])
        unknown = len(self.score) - int(self.known[-1])
        if above:
            return Against(untreated=known_above - took_above, treated=took_below, unknown=unknown)
        return Against(untreated=known_below - took_below, treated=took_above, unknown=unknown)


def read_score(request: ScoreRequest) -> ScoreReading:
    """Read a score column, and take-up where there is one.

    Raises
    ------
    StudyError
        When the file or a column can't be read, or the score holds no number.
    """
    from study.errors import BAD_DATA, StudyError
    from study.literal import quoted
    from study.tables import read_table

    names = [request.score] + ([request.take_up] if request.take_up else [])
    table = read_table(request.path, names, table=request.table, rows=request.rows)
    score = table.columns[request.score]
    if score.dtype.kind != "f":
        raise StudyError(
            f"Column {quoted(request.score)} holds no numbers, so it can't be the score.",
            "Choose a column of numbers as the score on the Data screen.",
            BAD_DATA,
        )
    take_up = table.columns[request.take_up] if request.take_up else None
    if take_up is not None and take_up.dtype.kind != "f":
        take_up = None  # the run says what is wrong with it; the line can be placed without it
    return score_reading(score, take_up)


def score_reading(score: Vector, take_up: Vector | None) -> ScoreReading:
    """Sort a score.

    Raises
    ------
    StudyError
        When no score is known.
    """
    from study.errors import BAD_DATA, StudyError

    known = np.isfinite(score)
    if not known.any():
        raise StudyError(
            "The score column holds no number at all.", "Choose another score on the Data screen.", BAD_DATA
        )
    order = np.argsort(score[known], kind="stable")
    ascending = score[known][order]
    starts = np.flatnonzero(np.append(True, np.diff(ascending) > 0.0))
    sizes = np.diff(np.append(starts, len(ascending)))
    values = ascending[starts]
    top = int(np.argmax(sizes))
    took = seen = None
    if take_up is not None:
        ordered = take_up[known][order]
        took = np.concatenate(([0], np.cumsum(ordered > 0.0))).astype(np.int64)
        seen = np.concatenate(([0], np.cumsum(np.isfinite(ordered)))).astype(np.int64)
    return ScoreReading(
        score=ascending,
        missing=int(len(score) - known.sum()),
        took=took,
        known=seen,
        distinct=len(values),
        gap=float(f"{np.min(np.diff(values)):.9g}") if len(values) > 1 else 0.0,
        heaviest=(float(values[top]), int(sizes[top])),
    )
