"""The Compare screen's questions to the workbench, and what is read off the answer. Loaded once the data are there."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from study.analysis import Workbench
from study.comparison import Comparison, compare, order_of
from study.comparison_words import (
    SiteText,
    headline,
    opening,
    scale_of,
    sentences,
    site_sentence,
    site_text,
    site_texts,
)
from study.document import Study
from study.literal import clean
from tui.screens.lines import wrapped
from tui.screens.pages import Numbers
from tui.widgets.table import Column

SORTS: Final = ("name", "cutoff", "effect", "rows")


@dataclass(frozen=True, slots=True, kw_only=True)
class Question:
    """Which outcome, at which common width (None for each site's own), asked of which workbench."""

    workbench: Workbench
    outcome: str
    width: float | None


def ask(question: Question, should_stop: Callable[[], bool] | None = None) -> Comparison:
    """Compare the sites."""
    return compare(question.workbench, question.outcome, question.width, should_stop=should_stop)


def at_once(question: Question) -> bool:
    """Whether all sites answer from one ladder: cheap enough for the key handler, whatever the rows."""
    return question.workbench.sites_at_once(question.outcome) is not None


class Compared:
    """A comparison in an order, its rows turned into text when they are looked at."""

    def __init__(self, comparison: Comparison, by: str) -> None:
        self.comparison, self.by = comparison, by
        self.order = order_of(comparison, by)
        self._texts: dict[int, SiteText] = {}

    def __len__(self) -> int:
        """Return the number of sites."""
        return len(self.order)

    def row(self, index: int) -> SiteText:
        """Return one site as text."""
        if index not in self._texts:
            self._texts[index] = site_text(self.comparison, self.comparison.rows[self.order[index]])
        return self._texts[index]

    def name(self, index: int) -> str:
        """Return the site's name as the study has it."""
        return str(self.comparison.rows[self.order[index]].name)

    def place(self, name: str) -> int:
        """Return where a site stands in this order."""
        names = [self.comparison.rows[i].name for i in self.order]
        return names.index(name) if name in names else 0

    def names(self) -> list[str]:
        """Return every site's name, cleaned."""
        return [clean(row.name) for row in self.comparison.rows]

    def headline(self) -> str:
        """Return all sites in a sentence."""
        return headline(self.comparison)

    def sentence(self, index: int) -> str:
        """Return one site in a sentence."""
        return site_sentence(self.comparison, self.comparison.rows[self.order[index]])

    def sentences(self) -> tuple[str, ...]:
        """Return what the sites say together."""
        return sentences(self.comparison)

    @property
    def pooled(self) -> float:
        """Where the pooled effect stands; NaN for none."""
        pooled = self.comparison.pooled
        return float("nan") if pooled is None else scale_of(self.comparison) * pooled.robust.estimate

    def axis(self) -> tuple[float, float]:
        """From where to where intervals are drawn: all of most, so that one wild site does not flatten the rest."""
        together, scale = self.comparison.together, scale_of(self.comparison)
        y, error = scale * together.estimates.estimate, scale * together.estimates.std_error
        if not len(y):
            return (-1.0, 1.0)
        reach = np.minimum(2.2 * error, 3.0 * float(np.median(2.2 * error)))
        low, high = min(float((y - reach).min()), 0.0), max(float((y + reach).max()), 0.0)
        room = 0.02 * (high - low) or 1.0
        return (low - room, high + room)

    def text(self, study: Study) -> list[str]:
        """Return all of it as plain lines."""
        lines = [*wrapped(opening(self.comparison, study), 78), ""]
        for text in site_texts(self.comparison, self.by):
            at = f"at {text.cutoff}  " if text.cutoff else ""
            if text.reason is None:
                lines.append(
                    f"{text.name}  {at}{text.estimate} ({text.low} to {text.high})  "
                    f"all at once {text.band_low} to {text.band_high}  drawn in {text.shrunken or '–'}  "
                    f"{text.rows} rows  {text.share}"
                )
            else:
                lines.append(f"{text.name}  {at}no local estimate")
        lines.append("")
        for said in self.sentences():
            lines += wrapped("· " + said, 78, indent="  ")
        return lines

    def numbers(self) -> Numbers:
        """Return the table behind the picture."""
        level = f"{100 * self.comparison.level:g} %"
        columns = [
            Column(key="site", title=self.comparison.kind),
            *(
                Column(key=key, title=title, align="decimal")
                for key, title in (
                    ("cutoff", "cutoff"),
                    ("effect", "effect"),
                    ("from", f"{level} from"),
                    ("to", "to"),
                    ("all from", "at once from"),
                    ("all to", "to"),
                    ("drawn", "drawn in"),
                    ("within", "within"),
                )
            ),
            Column(key="rows", title="rows", align="right"),
            Column(key="share", title="share", align="right"),
            Column(key="why", title="why not", widest=120),
        ]
        rows: list[Sequence[str]] = [
            (
                text.name,
                text.cutoff,
                text.estimate,
                text.low,
                text.high,
                text.band_low,
                text.band_high,
                text.shrunken,
                text.width,
                text.rows,
                text.share,
                text.reason or "",
            )
            for text in site_texts(self.comparison, self.by)
        ]
        return Numbers(
            title=f"{clean(self.comparison.outcome)} by {self.comparison.kind}", columns=columns, rows=rows
        )
