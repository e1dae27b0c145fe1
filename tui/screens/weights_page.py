"""A page over the Effect screen: how much each unit counts, drawn, and one key away as a table."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, ClassVar, Final

import numpy as np
from textual import events
from textual.binding import Binding, BindingType
from textual.widget import Widget

from estimation.line_fit import Bandwidths
from estimation.unit_weights import SideWeights, UnitWeights, unit_weights
from study.wording import width_text
from tui.look import Ink
from tui.plot_area import with_minus
from tui.screens.effect_words import headline_lines
from tui.screens.effect_work import Prepared
from tui.screens.lines import Line, Lines, wrapped
from tui.screens.pages import Numbers, Page, TablePage
from tui.widgets.table import Column
from tui.widgets.weights import WeightCurve, WeightsChart

if TYPE_CHECKING:
    from tui.screens.effect_keys import EffectKeys


class WeightsPage(Page):
    """The weights at the width where the person stands; the arrows move it here too."""

    AUTO_FOCUS = ""
    DEFAULT_CSS = """
    WeightsPage #effect { margin-bottom: 1; }
    WeightsPage WeightsChart { height: 1fr; margin-bottom: 1; }
    WeightsPage #explain { margin-bottom: 1; }
    """
    leave_keys = (("←→", "width"), ("↑↓", "by much"), ("t", "table"), ("v", "as text"), ("Esc", "back"))
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("left", "narrower", show=False),
        Binding("right", "wider", show=False),
        Binding("down", "much_narrower", show=False),
        Binding("up", "much_wider", show=False),
        Binding("t", "table", show=False),
        Binding("v", "text", show=False),
        Binding("e", "leave", show=False),
    ]

    def __init__(self, room: EffectKeys) -> None:
        super().__init__("How much each unit counts")
        self._room = room

    def inside(self) -> Iterator[Widget]:
        """The effect, the picture, what it says."""
        yield Lines(id="effect")
        yield WeightsChart()
        yield Lines(id="explain")

    def on_mount(self) -> None:
        """Follow the effect."""
        self._room.on_words = self.follow

    def on_unmount(self) -> None:
        """Stop following."""
        self._room.on_words = None

    def on_resize(self, event: events.Resize) -> None:
        """Set words and picture for this size."""
        self.call_after_refresh(self.follow)

    def follow(self) -> None:
        """Show the weights at the width in force."""
        prepared, standing = self._room.prepared, self._room.standing
        if prepared is None or standing is None or not self.query(WeightsChart):
            return
        width = max(20, self.size.width - 2)
        at = standing.effect.bandwidths
        weights = weights_at(prepared, at)
        self.query_one("#effect", Lines).show(headline_lines(standing, width))
        self.query_one(WeightsChart).set_data(
            below=_curve(weights.below, at.below, -1.0),
            above=_curve(weights.above, at.above, 1.0),
            cutoff=standing.effect.cutoff or 0.0,
            score=_score_name(self._room, standing.effect.cutoff is None),
        )
        lines: list[Line] = []
        for sentence in weight_sentences(weights, adjusted=prepared.workbench.study.estimate.adjust):
            lines += [[(line, Ink.MUTED)] for line in wrapped(sentence, width)]
        self.query_one("#explain", Lines).show(lines)

    def action_narrower(self) -> None:
        """Key left."""
        self._room.do_narrower()

    def action_wider(self) -> None:
        """Key right."""
        self._room.do_wider()

    def action_much_narrower(self) -> None:
        """Key down."""
        self._room.do_much_narrower()

    def action_much_wider(self) -> None:
        """Key up."""
        self._room.do_much_wider()

    def action_table(self) -> None:
        """Key t."""
        prepared, standing = self._room.prepared, self._room.standing
        if prepared is not None and standing is not None:
            weights = weights_at(prepared, standing.effect.bandwidths)
            self.bench.push_screen(TablePage([weights_table(weights, standing.effect.cutoff or 0.0)]))

    def action_text(self) -> None:
        """Key v: the sentences, then the numbers, for a screen reader."""
        from tui.screens.pages import TextPage

        prepared, standing = self._room.prepared, self._room.standing
        if prepared is None or standing is None:
            return
        weights = weights_at(prepared, standing.effect.bandwidths)
        table = as_lines(weights, standing.effect.cutoff or 0.0)
        said = list(weight_sentences(weights, adjusted=prepared.workbench.study.estimate.adjust))
        self.bench.push_screen(TextPage("How much each unit counts, as text", [*said, "", *table]))


def weights_at(prepared: Prepared, at: Bandwidths) -> UnitWeights:
    """The weights of the fit at these widths; from running sums, so cheap enough for a key."""
    line = prepared.workbench.line(prepared.outcome, prepared.site)
    return unit_weights(line.ladder, at, order=line.choices.order, treated_sign=line.sample.treated_sign)


def weight_sentences(weights: UnitWeights, *, adjusted: bool) -> Iterator[str]:
    """What the picture says, side by side."""
    for name, side in (("below", weights.below), ("above", weights.above)):
        nearest = abs(side.plain[0]) * side.total
        said = f"The nearest unit {name} the line counts as {_times(nearest)} average ones of its side"
        against = np.sign(side.plain) == -np.sign(side.plain[0])
        if against.any():
            turn = float(side.distance[int(np.argmax(against))])
            said += f"; those farther than {width_text(turn)} from it count against their own side"
        yield said + "."
    if adjusted:
        yield "These are the weights before the covariates adjust the effect."


_COLUMNS: Final = (
    Column(key="side", title="side"),
    Column(key="from", title="from", align="decimal"),
    Column(key="to", title="to", align="decimal"),
    Column(key="rows", title="rows", align="right"),
    Column(key="one", title="one counts", align="decimal"),
    Column(key="one_corrected", title="corrected", align="decimal"),
    Column(key="all", title="all, %", align="decimal"),
    Column(key="all_corrected", title="corrected, %", align="decimal"),
)


def weight_rows(weights: UnitWeights, cutoff: float) -> list[tuple[str, ...]]:
    """The weights by stretches of the score, from left to right: one unit in the middle, and all together."""
    rows: list[tuple[str, ...]] = []
    for name, side, sign in (("below", weights.below, -1.0), ("above", weights.above, 1.0)):
        share = side.share
        for i in range(len(share.low))[:: int(sign)]:
            ends = sorted((cutoff + sign * float(share.low[i]), cutoff + sign * float(share.high[i])))
            middle = 0.5 * (share.low[i] + share.high[i])
            rows.append(
                (
                    name,
                    *(width_text(end) for end in ends),
                    f"{int(share.count[i]):,}",
                    _times(float(np.interp(middle, side.distance, side.plain)) * side.total),
                    _times(float(np.interp(middle, side.distance, side.corrected)) * side.total),
                    with_minus(f"{100 * float(share.plain[i]):.1f}"),
                    with_minus(f"{100 * float(share.corrected[i]):.1f}"),
                )
            )
    return rows


def weights_table(weights: UnitWeights, cutoff: float) -> Numbers:
    """The table behind the picture."""
    title = "How much each unit counts, by score: one in the middle of a stretch, and all of it together"
    return Numbers(title=title, columns=_COLUMNS, rows=weight_rows(weights, cutoff))


def as_lines(weights: UnitWeights, cutoff: float) -> list[str]:
    """The table as plain lines."""
    rows = [tuple(column.title for column in _COLUMNS), *weight_rows(weights, cutoff)]
    widths = [max(len(row[i]) for row in rows) for i in range(len(_COLUMNS))]
    return ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in rows]


def _curve(side: SideWeights, width: float, sign: float) -> WeightCurve:
    step = int(sign)
    return WeightCurve(
        x=(sign * side.distance)[::step],
        plain=(side.plain * side.total)[::step],
        corrected=(side.corrected * side.total)[::step],
        width=width,
    )


def _score_name(room: EffectKeys, normalised: bool) -> str:
    desk = room.bench.desk
    score = (desk.study.columns.score or "score") if desk is not None else "score"
    return f"{score} less its cutoff" if normalised else score


def _times(value: float) -> str:
    return with_minus(f"{value:.2f}")
