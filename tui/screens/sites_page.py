"""The page of sites and their cutoffs: a strip of the score each, cutoffs set in place, pasted or read from a second file."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar

from textual import events, on
from textual.binding import Binding, BindingType
from textual.widget import Widget
from textual.widgets import Input

from study.document import Study
from study.errors import StudyError
from study.literal import clean
from tui.look import Ink
from tui.safe import Entry
from tui.screens.lines import Lines, wrapped
from tui.screens.pages import Page
from tui.screens.room import number
from tui.slot import Slot
from tui.widgets.cells import shape
from tui.widgets.table import Column, VTable
from tui.wire import look_of

if TYPE_CHECKING:
    from study.site_list import SiteList

_BINS = 24


class SitesPage(Page):
    """Sites as rows. Every cutoff that is set is a change of the study and can be undone."""

    AUTO_FOCUS = "VTable"
    DEFAULT_CSS = """
    SitesPage Entry { display: none; padding: 0; background: transparent; }
    SitesPage.asking Entry { display: block; }
    SitesPage #said { margin-top: 1; }
    """
    leave_keys = (
        ("Enter", "set"),
        ("x", "no cutoff"),
        ("f", "from a file"),
        ("paste", "site, cutoff"),
        ("c", "a column"),
        ("u", "undo"),
        ("Esc", "back"),
    )
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("x", "clear", show=False),
        Binding("f", "file", show=False),
        Binding("c", "column", show=False),
        Binding("u", "undo", show=False),
    ]

    def __init__(self) -> None:
        super().__init__("Sites and their cutoffs")
        self._list: SiteList | None = None
        self._take: Callable[[str], str] | None = None
        self._slot: Slot[Study, SiteList] = Slot("sites", _read, show=self._show, failed=self._failed)

    def inside(self) -> Iterator[Widget]:
        """Counts, the table, the field."""
        yield Lines(id="counts")
        yield VTable(id="table")
        yield Lines(id="said")
        yield Entry(id="field", select_on_focus=False, compact=True)

    def on_mount(self) -> None:
        """Read the sites."""
        self._say("Reading the sites ...")
        if self.bench.desk is not None:
            self._slot.supersede(self.bench.desk.study)

    async def settle(self) -> None:
        """Wait until the sites are read (for tests)."""
        await self._slot.settle()

    def _show(self, study: Study, found: SiteList) -> None:
        self._list = found
        self._say("")
        self._fill()

    def _failed(self, study: Study, error: Exception) -> None:
        if isinstance(error, StudyError):
            self._say(f"{error.what} {error.do}", warning=True)
        else:
            self.bench.record_failure("reading the sites", error)
            self._say(
                "The sites could not be read because of a fault of the program; it is recorded.", warning=True
            )

    def _cutoffs(self) -> dict[str, float]:
        desk = self.bench.desk
        return {} if desk is None else dict(desk.study.assignment.sites)

    def _fill(self) -> None:
        found = self._list
        if found is None:
            return
        from study.wording import width_text

        cutoffs, look = self._cutoffs(), look_of(self)
        rows, without = [], 0
        for site in found.sites:
            strip = shape(site.strip(_BINS, found.low, found.high).tolist(), look)
            cutoff = cutoffs.get(site.name)
            if cutoff is None:
                without += len(site.scores) + site.missing
                rows.append((site.name, "–", "", "", "", strip, "left out: no cutoff"))
                continue
            below, on, above = site.sides(cutoff)
            at = round((cutoff - found.low) / ((found.high - found.low) or 1.0) * (_BINS - 1))
            if 0 <= at < _BINS:
                strip = strip[:at] + ("|" if look.ascii_only else "│") + strip[at + 1 :]
            side = "" if below and (above or on) else "one side holds no row"
            rows.append((site.name, width_text(cutoff), f"{below:,}", f"{on:,}", f"{above:,}", strip, side))
        columns = (
            Column(key="site", title="site", widest=24),
            Column(key="cutoff", title="cutoff", align="decimal"),
            Column(key="below", title="below", align="right"),
            Column(key="on", title="on it", align="right"),
            Column(key="above", title="above", align="right"),
            Column(key="strip", title="scores, one scale"),
            Column(key="note", title="", widest=30),
        )
        self.query_one(VTable).set_rows(columns, rows)
        known = sum(site.name in cutoffs for site in found.sites)
        said = f"{known:,} of {len(found.sites):,} sites have a cutoff"
        said += f"; {without:,} rows belong to the others" if without else ""
        said += f"; {found.without_site:,} rows have no site" if found.without_site else ""
        self.query_one("#counts", Lines).show(
            [[(line, Ink.STRONG)] for line in wrapped(said + ".", self._width())]
        )

    def _width(self) -> int:
        return max(20, self.size.width - 2)

    def _say(self, words: str, *, warning: bool = False) -> None:
        ink = Ink.WARNING if warning else Ink.MUTED
        lines = wrapped(words, self._width()) if words else []
        self.query_one("#said", Lines).show([[(line, ink)] for line in lines])

    # ---- changing ---------------------------------------------------------------------------------------------

    def _change(self, changes: dict[str, object]) -> str:
        """Change the study; a first cutoff by site makes that its rule."""
        desk = self.bench.desk
        if desk is None:
            return "No study is open."
        if desk.study.assignment.rule != "cutoffs":
            changes = {
                "assignment.rule": "cutoffs",
                "assignment.cutoff": None,
                "assignment.steps": None,
                **changes,
            }
        refusal = self.bench.try_change(changes)
        if not refusal:
            self._fill()
        return refusal

    def _set_all(self, cutoffs: dict[str, float]) -> str:
        refusal = self._change(
            {"assignment.sites": {**self._cutoffs(), **cutoffs}, "assignment.cutoff_column": None}
        )
        if not refusal:
            self._say(f"{len(cutoffs):,} cutoffs set; u takes them back.")
        return refusal

    def _names(self) -> tuple[str, ...]:
        return () if self._list is None else tuple(site.name for site in self._list.sites)

    def _ask(self, question: str, value: str, take: Callable[[str], str]) -> None:
        self._take = take
        self._say(question)
        self.add_class("asking")
        field = self.query_one(Entry)
        field.value = value
        field.cursor_position = len(value)
        field.focus()

    @on(Input.Submitted)
    def _submitted(self, event: Input.Submitted) -> None:
        event.stop()
        if self._take is None:
            return
        refusal = self._take(event.value.strip())
        if refusal:
            self._say(refusal, warning=True)
        else:
            self._close()

    def _close(self) -> None:
        self._take = None
        self.remove_class("asking")
        self.query_one(VTable).focus()

    def action_leave(self) -> None:
        """Leave the field first, then the page; letters go into the field."""
        if self._take is not None:
            self._close()
            self._say("")
        else:
            self.dismiss()

    @on(VTable.RowChosen)
    def _chosen(self, event: VTable.RowChosen) -> None:
        names = self._names()
        if event.row >= len(names):
            return
        site = names[event.row]

        def take(text: str) -> str:
            value = number(text)
            if value is None:
                return f"“{text}” is not a number: type the cutoff of {clean(site)} in units of the score."
            refusal = self._change({f"assignment.sites.{site}": value, "assignment.cutoff_column": None})
            if not refusal:
                self._say("")
            return refusal

        now = self._cutoffs().get(site)
        self._ask(f"Cutoff of {clean(site)}", "" if now is None else f"{now:g}", take)

    def action_clear(self) -> None:
        """Key x."""
        names, row = self._names(), self.query_one(VTable).cursor
        if row < len(names) and names[row] in self._cutoffs():
            refusal = self._change({f"assignment.sites.{names[row]}": None})
            self._say(refusal, warning=bool(refusal))

    def action_file(self) -> None:
        """Key f."""

        def take(text: str) -> str:
            from study.site_list import cutoffs_from_file

            desk = self.bench.desk
            assert desk is not None
            try:
                return self._set_all(
                    cutoffs_from_file(desk.study.path.parent / Path(text).expanduser(), self._names())
                )
            except StudyError as error:
                return f"{error.what} {error.do}"

        self._ask("A text or CSV file with a site and its cutoff on each line", "", take)

    def action_column(self) -> None:
        """Key c."""

        def take(text: str) -> str:
            refusal = self._change({"assignment.cutoff_column": text or None, "assignment.sites": None})
            if not refusal:
                self._say(f"Each site takes its cutoff from column {clean(text)}; u takes that back.")
            return refusal

        self._ask("The column of the data that holds each row's cutoff", "", take)

    def on_paste(self, event: events.Paste) -> None:
        """Cutoffs that were copied from a spreadsheet."""
        if self._take is not None:
            return
        from study.site_list import read_cutoffs

        event.stop()
        try:
            refusal = self._set_all(read_cutoffs(event.text, self._names()))
        except StudyError as error:
            refusal = f"{error.what} {error.do}"
        if refusal:
            self._say(refusal, warning=True)

    def action_undo(self) -> None:
        """Key u."""
        if self.bench.desk is not None and self.bench.desk.can_undo:
            self.bench.do_undo()
            self._fill()
            self._say("")


def _read(study: Study, should_stop: Callable[[], bool]) -> Any:
    from study.site_list import list_sites  # numpy and DuckDB, only when the page is opened

    return list_sites(study)
