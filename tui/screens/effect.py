"""Screen 3, Effect: what the programme changed at the line, at a width that moves under the arrow keys."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any, ClassVar

from textual import events
from textual.binding import BindingType
from textual.containers import Vertical
from textual.widget import Widget

from study.readiness import missing_parts
from tui.keys import bindings_of
from tui.look import Ink
from tui.screens.effect_keys import EffectKeys
from tui.screens.effect_words import (
    Standing,
    all_text,
    answers,
    choices_lines,
    headline_lines,
    sentence_lines,
    why_lines,
)
from tui.screens.header import data_name
from tui.screens.lines import Line, Lines, wrapped
from tui.screens.widths import reach_for
from tui.slot import Slot
from tui.state import StudyEdited, WorkbenchReady

if TYPE_CHECKING:
    from estimation.line import Sweep
    from study.analysis import Workbench
    from tui.screens.effect_work import Asked, Found, Prepared
    from tui.widgets.answers import AnswerTable
    from tui.widgets.chart import EffectChart
    from tui.widgets.sweep import SweepChart

SIDE_BY_SIDE = 160


class EffectScreen(EffectKeys):
    """The live width."""

    place = "effect"
    BINDINGS: ClassVar[list[BindingType]] = [*bindings_of("effect")]
    DEFAULT_CSS = """
    EffectScreen #headline { margin: 1 0; }
    EffectScreen.low #headline { margin: 0; }
    EffectScreen #work { height: 1fr; layout: vertical; }
    EffectScreen #pictures { height: 1fr; width: 1fr; }
    EffectScreen #side { height: auto; width: 1fr; }
    EffectScreen EffectChart { height: 3fr; min-height: 6; margin-bottom: 1; }
    EffectScreen SweepChart { height: 2fr; min-height: 6; margin-bottom: 1; }
    EffectScreen.low EffectChart { margin-bottom: 0; }
    EffectScreen.low SweepChart { height: 6; margin-bottom: 0; }
    EffectScreen #why { margin-top: 1; }
    EffectScreen.low #why { display: none; }
    EffectScreen.compact SweepChart { display: none; }
    EffectScreen.tiny #pictures { display: none; }
    EffectScreen.wide #work { layout: horizontal; }
    EffectScreen.wide #side { width: 76; height: 1fr; padding: 0 0 0 4; }
    EffectScreen.wide #choices { margin: 1 0; }
    """

    def __init__(self) -> None:
        super().__init__(name="effect")
        self.seen: list[Found] = []
        self._problem = ""
        # Kept beside the tree: looking them up there would take a tenth of the time of a key.
        self._drawn: tuple[EffectChart, SweepChart, AnswerTable] | None = None
        self._asked_of: Workbench | None = None
        self._prepare: Slot[Asked, Prepared] = Slot(
            "prepare", _prepare, show=self._show_prepared, failed=self._failed
        )
        self._sweeping: Slot[Prepared, Sweep] = Slot(
            "sweep", _sweep_of, show=self._show_sweep, failed=self._sweep_failed
        )
        self._effect: Slot[Asked, Found] = Slot("effect", _find, show=self._show_found, failed=self._failed)
        self.best_slot: Slot[Asked, float] = Slot(
            "best width", _best, show=self.show_best, failed=self._failed
        )

    def body(self) -> Iterator[Widget]:
        """The headline, the pictures (they come with numpy, after the first paint), and what stands beside them."""
        yield Lines(id="headline")
        with Vertical(id="work"):
            yield Vertical(id="pictures")
            with Vertical(id="side"):
                yield Lines(id="choices")
                yield Lines(id="why")

    def on_screen_resume(self) -> None:
        """Ask for the line of what was made ready meanwhile; nothing is estimated for a screen that nobody looks at."""
        workbench = self.bench.workbench
        if workbench is not None and workbench is not self._asked_of:
            self._ask_for_line(workbench)

    def slots(self) -> Sequence[Slot[Any, Any]]:
        """Preparing a line, the full effect, another rule's width."""
        return (self._prepare, self._sweeping, self._effect, self.best_slot)

    # ---- what is there ----------------------------------------------------------------------------------------

    @property
    def outcome(self) -> str:
        """The outcome that is looked at."""
        desk = self.bench.desk
        if desk is None or not desk.study.columns.outcomes:
            return ""
        names = desk.study.columns.outcomes
        return desk.view.outcome if desk.view.outcome in names else names[0]

    def on_workbench_ready(self, message: WorkbenchReady) -> None:
        """The data are there, or the study has changed: prepare the line again."""
        if self.bench.current_mode == self.place:
            self._ask_for_line(message.workbench)

    def on_study_edited(self, message: StudyEdited) -> None:
        """What stands on screen is another study's until the work is done."""
        if message.study.estimate.bandwidth != message.before.estimate.bandwidth:
            self._stand_at(None)

    def look_at(self, outcome: str, *, site: str | None = None, width: float | None = None) -> None:
        """Look at another outcome, of one site or (None) of all: its line is prepared, then shown."""
        desk = self.bench.desk
        assert desk is not None
        desk.view = replace(desk.view, outcome=outcome)
        self.bench.view_moved()
        self.site = site
        if self.bench.workbench is not None:
            self._ask_for_line(self.bench.workbench, width)

    def _ask_for_line(self, workbench: Workbench, width: float | None = None) -> None:
        from tui.screens.effect_work import Asked

        desk = self.bench.desk
        if desk is None or not self.outcome:
            return
        if self.site not in workbench.sites:
            self.site = None
        # Widths are remembered of the pooled line; a site is entered at its own or at the one given.
        self.width = desk.view.widths.get(self.outcome) if self.site is None and width is None else width
        self._asked_of = workbench
        self._effect.forget()
        self._sweeping.forget()
        self._prepare.supersede(
            Asked(workbench=workbench, outcome=self.outcome, width=self.width, site=self.site)
        )
        self._refresh_words()

    def _show_prepared(self, asked: Asked, prepared: Prepared) -> None:
        self._problem = ""
        before = self.prepared
        same = before is not None and (before.outcome, before.site) == (prepared.outcome, prepared.site)
        self.prepared = prepared
        self.reach = self.reach if same else None
        self.standing = Standing(
            effect=prepared.effect,
            own=asked.width is None,
            own_width=max(prepared.own.below, prepared.own.above),
            pending=False,
        )
        self._remember(prepared.found)
        self.call_later(self._mount_and_show)

    async def _mount_and_show(self) -> None:
        from tui.widgets.answers import AnswerTable
        from tui.widgets.chart import EffectChart
        from tui.widgets.sweep import SweepChart

        if self._drawn is None:
            chart, swept, table = EffectChart(id="chart"), SweepChart(id="sweep"), AnswerTable(id="answers")
            await self.query_one("#pictures").mount(chart, swept)
            await self.query_one("#side").mount(table, before="#choices")
            self._drawn = chart, swept, table
        self.refresh_view()
        self.refresh_keys()
        if self.prepared is not None:
            self._sweeping.supersede(self.prepared)

    def _show_sweep(self, prepared: Prepared, swept: Sweep) -> None:
        if prepared is self.prepared:
            self.swept = swept
            self._draw_sweep()

    def _sweep_failed(self, prepared: Prepared, error: Exception) -> None:
        """The effect stands without its sweep; a fault is recorded all the same."""
        if not hasattr(error, "sentence"):
            self.bench.record_failure("sweeping the width", error)

    def _failed(self, asked: Asked, error: Exception) -> None:
        """A width or a study that gives no estimate says why; anything else is the program's fault and is recorded."""
        if hasattr(error, "sentence") and hasattr(error, "remedy"):
            self._problem = f"{error.sentence} {error.remedy}"
        elif hasattr(error, "what") and hasattr(error, "do"):
            self._problem = f"{error.what} {error.do}"
        else:
            self.bench.record_failure("estimating", error)
            self._problem = (
                "The effect could not be estimated because of a fault of the program; it is recorded."
            )
        self.standing = None
        self.refresh_view()
        self.refresh_keys()

    # ---- drawing ----------------------------------------------------------------------------------------------

    def on_resize(self, event: events.Resize) -> None:
        """Choose the layout for the size."""
        width, height = event.size
        self.set_class(height < 30, "low")
        self.set_class(height < 22 or width < 50, "compact")
        self.set_class(height < 14 or width < 40, "tiny")
        self.set_class(width >= SIDE_BY_SIDE, "wide")

    def refresh_view(self) -> None:
        """Bring words and pictures to where we stand."""
        self._refresh_words()
        self._draw_chart()
        self._draw_here()

    def _refresh_words(self) -> None:
        width = self.size.width - 2
        if width <= 0 or not self.query("#work"):
            return  # asked before the screen was composed: its mounting comes back here
        desk, standing = self.bench.desk, self.standing
        shown = standing is not None and desk is not None
        self.query_one("#work").display = shown or self.prepared is not None
        headline = self.query_one("#headline", Lines)
        if not shown or standing is None or desk is None:
            headline.show([[(line, Ink.MUTED)] for line in wrapped(self._why_nothing(), width)])
            self._say_nothing()
            return
        headline.show(headline_lines(standing, width))
        side = 72 if self.has_class("wide") else width
        chosen = choices_lines(desk.study, side)
        self.query_one("#choices", Lines).show(chosen if self.has_class("wide") else chosen[:1])
        drawn, digits = answers(standing.effect)
        if self._drawn is not None:
            self._drawn[2].set_answers(drawn, digits=digits)
        room = 30 if self.has_class("wide") else 4 if self.size.height >= 34 else 0
        why: list[Line] = []
        if self.has_class("wide"):
            why = [*([line] for line in sentence_lines(standing, desk.study, side)), [""]]
        self.query_one("#why", Lines).show(why + why_lines(standing, side, room))
        if self.on_words is not None:
            self.on_words()

    def _say_nothing(self) -> None:
        if self._drawn is not None:
            chart, swept, table = self._drawn
            chart.say("")
            swept.say("")
            table.set_answers([])
        self.query_one("#why", Lines).show([])
        self.query_one("#choices", Lines).show([])

    def _why_nothing(self) -> str:
        desk = self.bench.desk
        if desk is None:
            return "No study is open: 1 goes to Data, where f opens one."
        missing = missing_parts(desk.study)
        if missing:
            return f"Nothing to estimate yet: {missing[0]} 1 gives columns their roles, 2 sets the cutoff."
        if self.bench.trouble is not None and self.bench.trouble[0]:
            return " ".join(self.bench.trouble)
        if self._problem:
            return self._problem
        if self.bench.workbench is not None:
            return "Estimating ..."
        return f"{self.bench.doing or 'Reading ' + data_name(self.bench)} ..."

    def _draw_chart(self) -> None:
        standing, prepared = self.standing, self.prepared
        if standing is None or prepared is None or self._drawn is None:
            return
        from tui.screens.effect_work import draw_chart

        at = standing.effect.bandwidths
        self.reach = reach_for(max(at.below, at.above), prepared.widest, self.reach)
        desk = self.bench.desk
        score = (desk.study.columns.score or "score") if desk is not None else "score"
        draw_chart(self._drawn[0], prepared, at, reach=self.reach, score=score)

    def _draw_here(self) -> None:
        standing = self.standing
        if standing is None or self._drawn is None:
            return
        from tui.screens.effect_work import draw_here

        draw_here(self._drawn[1], standing.effect)

    def _draw_sweep(self) -> None:
        if self.prepared is not None and self.swept is not None and self._drawn is not None:
            from tui.screens.effect_work import draw_sweep

            draw_sweep(self._drawn[1], self.prepared, self.swept)
            self._draw_here()

    # ---- the width --------------------------------------------------------------------------------------------

    def stand(self, width: float | None) -> None:
        """Stand at a width, None for the study's own: words, fit and counts at once, the rest when the key rests."""
        if width == self.width:
            return
        self._stand_at(width)
        prepared = self.prepared
        if prepared is None:
            return
        self.bench.view_moved()
        self._read_now(prepared)
        from tui.screens.effect_work import Asked

        self._effect.ask(
            Asked(workbench=prepared.workbench, outcome=prepared.outcome, width=width, site=prepared.site)
        )
        self.refresh_keys()

    def _stand_at(self, width: float | None) -> None:
        self.width = width
        desk = self.bench.desk
        if desk is not None and self.outcome and self.site is None:
            desk.view = desk.view.at_width(self.outcome, width)

    def _read_now(self, prepared: Prepared) -> None:
        """The cheap part, in the key handler: under a millisecond whatever the rows, where sums are kept."""
        if not prepared.at_once:
            self._echo(prepared)
            return
        from estimation.errors import CannotEstimate

        try:
            effect = prepared.reading_at(self.width)
        except CannotEstimate as problem:
            self.tell(f"{problem.sentence} {problem.remedy}", warning=True)
            return
        own = max(prepared.own.below, prepared.own.above)
        self.standing = Standing(effect=effect, own=self.width is None, own_width=own, pending=True)
        self.refresh_view()

    def _echo(self, prepared: Prepared) -> None:
        """Where a reading takes a moment: say at once which width it will be of."""
        if self.standing is not None:
            width = self.width if self.width is not None else max(prepared.own.below, prepared.own.above)
            self.standing = replace(self.standing, going_to=width, pending=True)
            self._refresh_words()

    def _show_found(self, asked: Asked, found: Found) -> None:
        prepared = self.prepared
        if (
            prepared is None
            or asked.workbench is not prepared.workbench
            or asked.width != self.width
            or asked.site != prepared.site
        ):
            return  # an answer to an older question; the newer one is on its way
        own = max(prepared.own.below, prepared.own.above)
        self.standing = Standing(effect=found.effect, own=asked.width is None, own_width=own, pending=False)
        self._problem = ""
        self._remember(found)
        self.refresh_view()

    def _remember(self, found: Found) -> None:
        if found not in self.seen:
            self.seen.append(found)

    # ---- plain text -------------------------------------------------------------------------------------------

    def text(self) -> list[str]:
        """Sentences first, then the pictures as they stand."""
        desk, standing = self.bench.desk, self.standing
        if desk is None or standing is None:
            return [self._why_nothing()]
        lines = all_text(standing, desk.study)
        for picture in () if self._drawn is None else self._drawn[:2]:
            lines += ["", *picture.to_text()]
        return lines

    def copied(self) -> list[str]:
        """The sentences and the answers; no picture."""
        desk, standing = self.bench.desk, self.standing
        return [] if desk is None or standing is None else all_text(standing, desk.study)


def _prepare(asked: Asked, should_stop: Callable[[], bool]) -> Prepared:
    from tui.screens.effect_work import prepare

    return prepare(asked, should_stop)


def _sweep_of(prepared: Prepared, should_stop: Callable[[], bool]) -> Sweep:
    from tui.screens.effect_work import sweep

    return sweep(prepared, should_stop)


def _find(asked: Asked, should_stop: Callable[[], bool]) -> Found:
    from tui.screens.effect_work import find

    return find(asked)


def _best(asked: Asked, should_stop: Callable[[], bool]) -> float:
    from tui.screens.effect_work import best_width

    return best_width(asked)
