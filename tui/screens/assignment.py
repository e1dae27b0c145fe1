"""Screen 2, Assignment: the rule that made some units treated. One cutoff is drawn and moved here."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar, Final

from textual import events
from textual.binding import BindingType
from textual.containers import Vertical
from textual.widget import Widget

from study.document import Study, edit
from study.errors import StudyError
from study.options import SCORE_SIDES
from tui.keys import bindings_of
from tui.look import Ink
from tui.screens.lines import Line, Lines, wrapped
from tui.screens.room import Room, number
from tui.slot import Slot

if TYPE_CHECKING:
    from tui.screens.score_reading import LineCounts, ScoreReading

_FAR: Final = 10
_ZOOMS: Final = (None, 0.25, 0.08)
"""How much of the score's range is seen on each side of the line; None sees all of it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ScoreRequest:
    """What the score is read from."""

    path: Path
    table: str | None
    rows: str | None
    score: str
    take_up: str | None


class AssignmentScreen(Room):
    """The line on the score."""

    place = "assignment"
    BINDINGS: ClassVar[list[BindingType]] = [*bindings_of("assignment")]
    DEFAULT_CSS = """
    AssignmentScreen #rule { margin: 1 0; }
    AssignmentScreen.low #rule { margin: 0 0 1 0; }
    AssignmentScreen.tiny #rule { margin: 0; }
    AssignmentScreen.tiny #picture { display: none; }
    AssignmentScreen #picture { height: 1fr; }
    AssignmentScreen #picture.-empty { display: none; }
    AssignmentScreen #facts { margin-top: 1; }
    """

    def __init__(self) -> None:
        super().__init__(name="assignment")
        self.line: float | None = None  # where the line stands; None where the study has it
        self._request: ScoreRequest | None = None
        self._reading: ScoreReading | None = None
        self._problem = ""
        self._slot: Slot[ScoreRequest, ScoreReading] = Slot(
            "score", _read, show=self._show, failed=self._failed
        )

    def body(self) -> Iterator[Widget]:
        """The rule in words, the picture (it comes with numpy), the counts."""
        yield Lines(id="rule")
        yield Vertical(id="picture")
        yield Lines(id="facts")

    def slots(self) -> Sequence[Slot[Any, Any]]:
        """Reading the score."""
        return (self._slot,)

    def on_resize(self, event: events.Resize) -> None:
        """Choose the layout for the size."""
        self.set_class(event.size.height < 30, "low")
        self.set_class(event.size.height < 18, "tiny")

    # ---- the score --------------------------------------------------------------------------------------------

    @property
    def study(self) -> Study | None:
        """The study on the desk."""
        return None if self.bench.desk is None else self.bench.desk.study

    @property
    def cutoff(self) -> float | None:
        """Where the line stands: where it was moved to, else the study's, else in the middle."""
        if self.line is not None:
            return self.line
        study = self.study
        if study is not None and study.assignment.cutoff is not None:
            return study.assignment.cutoff
        return None if self._reading is None else self._reading.moved(self._reading.middle(), 0)

    def refresh_view(self) -> None:
        """Read the score when it is another one; draw the line where it stands."""
        study = self.study
        request = self._wanted(study)
        if request != self._request:
            self._request, self._reading, self._problem, self.line = request, None, "", None
            if request is not None:
                self._slot.supersede(request)
            else:
                self._slot.forget()
        self.draw()

    def _wanted(self, study: Study | None) -> ScoreRequest | None:
        if (
            study is None
            or not self.bench.started
            or not study.data.path
            or study.columns.score is None
            or study.assignment.rule != "cutoff"
        ):
            return None
        return ScoreRequest(
            path=study.data_file,
            table=study.data.table,
            rows=study.data.rows,
            score=study.columns.score,
            take_up=study.columns.take_up,
        )

    def _show(self, request: ScoreRequest, reading: ScoreReading) -> None:
        self._reading = reading
        self.call_later(self._mount_and_draw)

    async def _mount_and_draw(self) -> None:
        from tui.widgets.histogram import ScoreHistogram

        if not self.query(ScoreHistogram):
            histogram = ScoreHistogram(id="histogram")
            histogram.can_focus = False  # the keys are the screen's own
            await self.query_one("#picture").mount(histogram)
        self.draw()
        self.refresh_keys()

    def _failed(self, request: ScoreRequest, error: Exception) -> None:
        if isinstance(error, StudyError):
            self._problem = f"{error.what} {error.do}"
        else:
            self.bench.record_failure("reading the score", error)
            self._problem = "The score could not be read because of a fault of the program; it is recorded."
        self.draw()

    # ---- drawing ----------------------------------------------------------------------------------------------

    def draw(self) -> None:
        """Words, picture and counts for the line where it stands."""
        width = self.size.width - 2
        if width <= 0:
            return
        rule, facts = self.query_one("#rule", Lines), self.query_one("#facts", Lines)
        study, reading, cutoff = self.study, self._reading, self.cutoff
        if study is None or reading is None or cutoff is None:
            rule.show([[(line, Ink.MUTED)] for line in wrapped(self._why_nothing(study), width)])
            facts.show([])
            self.query_one("#picture").set_class(True, "-empty")
            return
        zoom = self._zoom()
        reach = None if zoom is None else zoom * (reading.high - reading.low)
        counts = reading.line(cutoff, study.assignment.treated, reach)
        rule.show(self._rule_lines(study, cutoff, width))
        facts.show(self._facts(study, reading, counts))
        self.query_one("#picture").set_class(False, "-empty")
        for histogram in self.query("#histogram"):
            histogram.set_data(  # type: ignore[attr-defined]
                histogram=counts,
                cutoff=cutoff,
                treated="above" if study.assignment.treated in ("at or above", "above") else "below",
                score=study.columns.score or "",
            )

    def _why_nothing(self, study: Study | None) -> str:
        if study is None:
            return "No study is open: 1 goes to Data, where f opens one."
        if self._problem:
            return self._problem
        if study.assignment.rule != "cutoff":
            from study.wording import rule_sentence

            if study.assignment.rule == "cutoffs":
                return f"{rule_sentence(study)} e shows the sites with their cutoffs, to be set, pasted or read from a file."
            return (
                f"{rule_sentence(study)} This study's rule is “{study.assignment.rule}”: this version draws and moves one "
                "cutoff only, so edit the rule in the study file."
            )
        if study.columns.score is None:
            return "There is no score yet: 1 goes to Data, where s makes a column the score."
        return f"Reading {study.columns.score} ..."

    def _rule_lines(self, study: Study, cutoff: float, width: int) -> list[Line]:
        from study.wording import rule_sentence, width_text

        moved = edit(study, {"assignment.cutoff": cutoff})
        lines: list[Line] = [[(line, Ink.STRONG)] for line in wrapped(rule_sentence(moved), width)]
        own = study.assignment.cutoff
        if own is None:
            said, ink = "This line is a proposal: Enter makes it the study's cutoff.", Ink.ACCENT
        elif cutoff != own:
            said = f"The study's own cutoff is {width_text(own)}: Enter sets the line here, Esc puts it back."
            ink = Ink.ACCENT
        else:
            said, ink = "The line is the study's cutoff.", Ink.MUTED
        return [*lines, *[[(line, ink)] for line in wrapped(said, width)]]

    def _facts(self, study: Study, reading: ScoreReading, counts: LineCounts) -> list[Line]:
        from study.wording import width_text

        side = study.assignment.treated
        treats_above = side in ("at or above", "above")
        holds = "at or above" if side in ("at or above", "below") else "above"
        holds_below = "below" if side in ("at or above", "below") else "at or below"
        joins = (holds if side in ("at or above", "below") else holds_below).removeprefix("at or ")
        heavy, many = reading.heaviest
        rows = [
            (holds_below, counts.below, "comparison" if treats_above else "treated"),
            (holds, counts.above, "treated" if treats_above else "comparison"),
            ("on the line", counts.on_line, f"counted {joins} it" if counts.on_line else ""),
            ("different scores", reading.distinct, f"the most common is {width_text(heavy)}, {many:,} times"),
            ("without a score", reading.missing, "left out" if reading.missing else ""),
        ]
        if counts.against is not None:
            against = counts.against
            said = f"{against.untreated:,} treated without take-up, {against.treated:,} others with it"
            rows.append(("against the rule", against.untreated + against.treated, said))
        names = max(len(name) for name, _, _ in rows)
        digits = max(len(f"{count:,}") for _, count, _ in rows)
        return [
            [(name.ljust(names), Ink.MUTED), f"  {count:,}".rjust(digits + 2), (f"  {said}", Ink.MUTED)]
            for name, count, said in rows
        ]

    def _zoom(self) -> float | None:
        desk = self.bench.desk
        return _ZOOMS[desk.view.zoom % len(_ZOOMS)] if desk is not None else None

    # ---- keys -------------------------------------------------------------------------------------------------

    def why_not(self, action: str) -> str:
        """A line needs a score; Enter and Escape need a line that was moved."""
        study = self.study
        if study is None:
            return "No study is open: f on the Data screen opens one"
        if action == "sites":
            named = study.columns.site is not None and study.columns.score is not None
            return "" if named else "No site yet: on the Data screen i makes a column the site, s the score"
        if study.assignment.rule != "cutoff":
            return f"The rule is “{study.assignment.rule}”: this version moves one cutoff only"
        if action == "side":
            return ""
        if self._reading is None:
            return "There is no score to put a line on yet"
        if action == "set" and study.assignment.cutoff is not None and self.cutoff == study.assignment.cutoff:
            return "The line stands on the study's cutoff already"
        if action == "back" and self.line is None:
            return "The line was not moved"
        return ""

    def do_sites(self) -> None:
        """Key e."""
        from tui.screens.sites_page import SitesPage

        self.bench.push_screen(SitesPage())

    def _move(self, steps: int) -> None:
        assert self._reading is not None and self.cutoff is not None
        self._stand(self._reading.moved(self.cutoff, steps))

    def _stand(self, cutoff: float) -> None:
        study = self.study
        own = study.assignment.cutoff if study is not None else None
        self.line = None if cutoff == own else cutoff
        self.draw()
        self.refresh_keys()

    def do_left(self) -> None:
        """Key left."""
        self._move(-1)

    def do_right(self) -> None:
        """Key right."""
        self._move(1)

    def do_far_left(self) -> None:
        """Key down."""
        self._move(-_FAR)

    def do_far_right(self) -> None:
        """Key up."""
        self._move(_FAR)

    def do_set(self) -> None:
        """Key enter."""
        cutoff = self.cutoff
        if cutoff is not None and self.change({"assignment.cutoff": cutoff}):
            self.line = None
            self.draw()
            self.refresh_keys()

    def do_back(self) -> None:
        """Key escape."""
        self.line = None
        self.draw()
        self.refresh_keys()

    def do_cutoff(self) -> None:
        """Key c: a typed cutoff is the study's at once."""
        reading = self._reading
        assert reading is not None

        def take(text: str) -> str:
            cutoff = number(text)
            if cutoff is None:
                return f"“{text}” is not a number: type the cutoff in units of the score."
            if not reading.low <= cutoff <= reading.high:
                return f"Nobody would be on one side: scores go from {reading.low:g} to {reading.high:g}."
            refusal = self.bench.try_change({"assignment.cutoff": cutoff})
            if not refusal:
                self.line = None
                self.draw()
            return refusal

        self.ask("Cutoff", f"{self.cutoff:.10g}", take, hint="In units of the score.")

    def do_side(self) -> None:
        """Key s."""
        study = self.study
        assert study is not None
        sides = SCORE_SIDES
        now = sides.index(study.assignment.treated) if study.assignment.treated in sides else -1
        self.change({"assignment.treated": sides[(now + 1) % len(sides)]})

    def do_zoom(self) -> None:
        """Key z."""
        desk = self.bench.desk
        assert desk is not None
        desk.view = replace(desk.view, zoom=(desk.view.zoom + 1) % len(_ZOOMS))
        self.bench.view_moved()
        self.draw()

    def do_numbers(self) -> None:
        """Key t."""
        from study.wording import width_text
        from tui.screens.pages import Numbers, TablePage
        from tui.widgets.table import Column

        study, reading, cutoff = self.study, self._reading, self.cutoff
        assert study is not None and reading is not None and cutoff is not None
        zoom = self._zoom()
        counts = reading.line(
            cutoff, study.assignment.treated, None if zoom is None else zoom * (reading.high - reading.low)
        )
        rows = [
            (
                width_text(float(counts.edges[i])),
                width_text(float(counts.edges[i + 1])),
                f"{int(counts.counts[i]):,}",
            )
            for i in range(len(counts.counts))
        ]
        columns = (
            Column(key="from", title="from", align="decimal"),
            Column(key="to", title="to", align="decimal"),
            Column(key="rows", title="rows", align="right"),
        )
        numbers = Numbers(title=f"How many have which {study.columns.score}", columns=columns, rows=rows)
        self.bench.push_screen(TablePage([numbers]))

    # ---- plain text -------------------------------------------------------------------------------------------

    def text(self) -> list[str]:
        """The rule, the counts, then the picture."""
        lines = [*self.query_one("#rule", Lines).to_text(), "", *self.query_one("#facts", Lines).to_text()]
        for histogram in self.query("#histogram"):
            lines += ["", *histogram.to_text()]  # type: ignore[attr-defined]
        return lines


def _read(request: ScoreRequest, should_stop: Callable[[], bool]) -> ScoreReading:
    from tui.screens.score_reading import read_score

    return read_score(request)
