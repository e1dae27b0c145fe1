"""Screen 4, Compare: every site's interval beside the others', at each site's own width or at one that moves."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from typing import TYPE_CHECKING, Any, ClassVar

from textual import events, on
from textual.binding import BindingType
from textual.widget import Widget

from study.errors import StudyError
from study.readiness import missing_parts
from tui.keys import bindings_of
from tui.look import Ink
from tui.screens.header import data_name
from tui.screens.lines import Line, Lines, wrapped
from tui.screens.room import Room, number
from tui.screens.widths import COARSE, next_width
from tui.slot import Slot
from tui.state import WorkbenchReady
from tui.widgets.site_intervals import SiteIntervals

if TYPE_CHECKING:
    from study.analysis import Workbench
    from study.comparison import Comparison
    from tui.screens.compare_work import Compared, Question

_SORTS = ("name", "cutoff", "effect", "rows")
_LEGEND = "● effect  ◇ drawn toward the mean  ┊ pooled  │ nought"
_LEGEND_ASCII = "* effect  o drawn toward the mean  : pooled  | nought"
_MANY_LINES = 34  # from this height on, what the sites say together stands under them


class CompareScreen(Room):
    """All sites of one outcome."""

    place = "compare"
    AUTO_FOCUS = "SiteIntervals"
    BINDINGS: ClassVar[list[BindingType]] = [*bindings_of("compare")]
    DEFAULT_CSS = """
    CompareScreen #all { margin: 1 0; }
    CompareScreen #one { margin: 1 0 0 0; }
    CompareScreen #together { margin: 1 0 0 0; }
    CompareScreen.low #all { margin: 0; }
    CompareScreen.low #one { display: none; }
    """

    def __init__(self) -> None:
        super().__init__(name="compare")
        self.compared: Compared | None = None
        self.width: float | None = None
        self.sorted_by = "name"
        self._outcome = ""
        self._axis: tuple[float, float] | None = None
        self._problem = ""
        self._asked_of: Workbench | None = None
        self._comparing: Slot[Question, Comparison] = Slot(
            "compare", _compare, show=self._show, failed=self._failed
        )

    def body(self) -> Iterator[Widget]:
        """What they say in a line, the sites, the one under the cursor, and what they say together."""
        yield Lines(id="all")
        yield SiteIntervals(id="sites")
        yield Lines(id="one")
        yield Lines(id="together")

    def slots(self) -> Sequence[Slot[Any, Any]]:
        """The comparison."""
        return (self._comparing,)

    # ---- what is there ----------------------------------------------------------------------------------------

    @property
    def outcome(self) -> str:
        """The outcome that is compared."""
        desk = self.bench.desk
        names = () if desk is None else desk.study.columns.outcomes
        return self._outcome if self._outcome in names else names[0] if names else ""

    def on_screen_resume(self) -> None:
        """Compare what was made ready meanwhile; nothing is estimated for a screen that nobody looks at."""
        workbench = self.bench.workbench
        if workbench is not None and workbench is not self._asked_of:
            self._ask(workbench)

    def on_workbench_ready(self, message: WorkbenchReady) -> None:
        """The data are there, or the study has changed."""
        if self.bench.current_mode == self.place:
            self._ask(message.workbench)

    def _ask(self, workbench: Workbench) -> None:
        from tui.screens.compare_work import Question

        self._asked_of, self._problem = workbench, ""
        if not workbench.sites:
            self._comparing.forget()
            self.compared = None
            self.refresh_all()
            return
        self._comparing.supersede(Question(workbench=workbench, outcome=self.outcome, width=self.width))
        self.refresh_all()

    def _show(self, question: Question, comparison: Comparison) -> None:
        if question.workbench is not self._asked_of or question.outcome != self.outcome:
            return  # an answer to an older question; the newer one is on its way
        from tui.screens.compare_work import Compared

        under = None if self.compared is None else self._name_under_cursor()
        self._problem = ""
        self.compared = Compared(comparison, self.sorted_by)
        self._set_sites(under)
        self.refresh_view()
        self.refresh_keys()

    def _failed(self, question: Question, error: Exception) -> None:
        if isinstance(error, StudyError):
            self._problem = f"{error.what} {error.do}"
        elif hasattr(error, "sentence") and hasattr(error, "remedy"):
            self._problem = f"{error.sentence} {error.remedy}"
        else:
            self.bench.record_failure("comparing", error)
            self._problem = (
                "The sites could not be compared because of a fault of the program; it is recorded."
            )
        self.compared = None
        self.refresh_all()

    # ---- drawing ----------------------------------------------------------------------------------------------

    def _sites(self) -> SiteIntervals:
        return self.query_one(SiteIntervals)

    def _name_under_cursor(self) -> str | None:
        return None if self.compared is None else self.compared.name(self._sites().cursor)

    def _set_sites(self, under: str | None) -> None:
        compared = self.compared
        if compared is None:
            return
        self._sites().set_sites(
            compared,
            axis=self._axis_for(compared.axis()),
            pooled=compared.pooled,
            names=compared.names(),
            cursor=0 if under is None else compared.place(under),
        )

    def _axis_for(self, wanted: tuple[float, float]) -> tuple[float, float]:
        """The scale stays while it holds what is drawn and is not far too wide for it: nothing jumps under a key."""
        before = self._axis
        if before is None or not (
            before[0] <= wanted[0]
            and wanted[1] <= before[1]
            and before[1] - before[0] < 1.8 * (wanted[1] - wanted[0])
        ):
            self._axis = wanted
        return self._axis or wanted

    def on_resize(self, event: events.Resize) -> None:
        """Lay out anew; on a low terminal the sites themselves come first."""
        self.set_class(event.size.height < 20, "low")
        self.call_after_refresh(self.refresh_all)

    def refresh_view(self) -> None:
        """Bring the words to what is there; the sites repaint themselves."""
        width = self.size.width - 2
        if width <= 0:
            return
        compared = self.compared
        self._sites().display = compared is not None
        if compared is None:
            self.query_one("#all", Lines).show(
                [[(line, Ink.MUTED)] for line in wrapped(self._why_nothing(), width)]
            )
            self.query_one("#one", Lines).show([])
            self.query_one("#together", Lines).show([])
            return
        from study.wording import width_text

        at = compared.comparison.width
        within = "each within its own width" if at is None else f"all within {width_text(at)}"
        if self._comparing.pending and at != self.width:
            within = (
                f"going to {width_text(self.width) if self.width is not None else 'their own widths'} ..."
            )
        legend: Line = [
            (_LEGEND_ASCII if self.bench.look.ascii_only else _LEGEND, Ink.MUTED),
        ]
        words: list[Line] = [[(line, Ink.STRONG)] for line in wrapped(compared.headline(), width)]
        self.query_one("#all", Lines).show([*words, [(f"{within}, by {self.sorted_by}", Ink.TEXT)], legend])
        self._refresh_one()
        together: list[Line] = []
        if self.size.height >= _MANY_LINES:
            for said in compared.sentences():
                together += [[(line, Ink.MUTED)] for line in wrapped("· " + said, width, indent="  ")]
            together = together[: max(0, self.size.height - 20)]
        self.query_one("#together", Lines).show(together)

    def _refresh_one(self) -> None:
        compared = self.compared
        if compared is None or not len(compared):
            return
        words = wrapped(compared.sentence(self._sites().cursor), self.size.width - 2)
        self.query_one("#one", Lines).show([[line] for line in words[:5]])

    def _why_nothing(self) -> str:
        desk = self.bench.desk
        if desk is None:
            return "No study is open: 1 goes to Data, where f opens one."
        missing = missing_parts(desk.study)
        if missing:
            return f"Nothing to compare yet: {missing[0]}"
        if self.bench.trouble is not None and self.bench.trouble[0]:
            return " ".join(self.bench.trouble)
        if self._problem:
            return self._problem
        workbench = self.bench.workbench
        if workbench is None:
            return f"{self.bench.doing or 'Reading ' + data_name(self.bench)} ..."
        if not workbench.sites:
            return "The study has one line: there is nothing to compare. 3 shows its effect."
        return "Comparing ..."

    @on(SiteIntervals.RowHighlighted)
    def _moved(self) -> None:
        self._refresh_one()
        self.hush()

    @on(SiteIntervals.RowChosen)
    def _chosen(self) -> None:
        self.do_open()

    # ---- keys -------------------------------------------------------------------------------------------------

    def why_not(self, action: str) -> str:
        """Every key needs sites on screen."""
        desk = self.bench.desk
        if desk is None:
            return "No study is open: f on the Data screen opens one"
        if self.compared is None:
            return (
                "There are no sites to look at yet"
                if self.bench.workbench is None
                else self._why_nothing().rstrip(".")
            )
        if action == "own" and self.width is None:
            return "Each site stands at its own width already"
        if action == "outcome" and len(desk.study.columns.outcomes) < 2:
            return "This study has one outcome"
        return ""

    def _stand(self, width: float | None) -> None:
        """One width for all sites, None for each its own: at once where sums are kept, else when the key rests."""
        workbench = self.bench.workbench
        if workbench is None or self.compared is None or width == self.width:
            return
        from tui.screens.compare_work import Question, ask, at_once

        self.width = width
        question = Question(workbench=workbench, outcome=self.outcome, width=width)
        if width is not None and at_once(question):
            self._comparing.forget()
            self._show(question, ask(question))
        else:
            self._comparing.ask(question)
            self.refresh_view()
            self.refresh_keys()

    def _walk(self, steps: int) -> None:
        compared = self.compared
        if compared is None:
            return
        widths = compared.comparison.pooled_bandwidths
        start = self.width if self.width is not None else widths.below if widths is not None else 1.0
        self._stand(next_width(start, steps))

    def do_narrower(self) -> None:
        """Key left."""
        self._walk(-1)

    def do_wider(self) -> None:
        """Key right."""
        self._walk(1)

    def do_much_narrower(self) -> None:
        """Key n."""
        self._walk(-COARSE)

    def do_much_wider(self) -> None:
        """Key m."""
        self._walk(COARSE)

    def do_own(self) -> None:
        """Key escape."""
        self._stand(None)

    def do_width(self) -> None:
        """Key w."""

        def take(text: str) -> str:
            width = number(text)
            if width is None or width <= 0:
                return f"“{text}” is not a width: type a number above 0, in units of the score."
            self._stand(width)
            return ""

        now = "" if self.width is None else f"{self.width:.4g}"
        self.ask(
            "One bandwidth for all sites", now, take, hint="In units of the score, the same on both sides."
        )

    def do_sort(self) -> None:
        """Key s."""
        from tui.screens.compare_work import Compared

        compared = self.compared
        assert compared is not None
        under = self._name_under_cursor()
        self.sorted_by = _SORTS[(_SORTS.index(self.sorted_by) + 1) % len(_SORTS)]
        self.compared = Compared(compared.comparison, self.sorted_by)
        self._set_sites(under)
        self.refresh_view()

    def do_outcome(self) -> None:
        """Key o."""
        desk, workbench = self.bench.desk, self.bench.workbench
        assert desk is not None
        names = desk.study.columns.outcomes
        self._outcome = names[(names.index(self.outcome) + 1) % len(names)]
        self.compared = None
        if workbench is not None:
            self._ask(workbench)

    def do_numbers(self) -> None:
        """Key t."""
        from tui.screens.pages import TablePage

        assert self.compared is not None
        self.bench.push_screen(TablePage([self.compared.numbers()]))

    def do_said(self) -> None:
        """Key d."""
        from tui.screens.pages import TextPage

        assert self.compared is not None and self.bench.desk is not None
        self.bench.push_screen(TextPage("Sites together", self.compared.text(self.bench.desk.study)))

    def do_open(self) -> None:
        """Key enter."""
        name = self._name_under_cursor()
        if name is None:
            return
        self.bench.see_site(name, self.outcome, self.width)

    # ---- plain text -------------------------------------------------------------------------------------------

    def text(self) -> list[str]:
        """Sentences, sites, sentences."""
        desk = self.bench.desk
        if desk is None or self.compared is None:
            return [self._why_nothing()]
        return self.compared.text(desk.study)


def _compare(question: Question, should_stop: Callable[[], bool]) -> Comparison:
    from tui.screens.compare_work import ask

    return ask(question, should_stop)
