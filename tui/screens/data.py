"""Screen 1, Data: the file's columns, and the part each plays in the study."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar, Final

from textual import on
from textual.binding import BindingType
from textual.widget import Widget

from study.errors import StudyError
from study.readiness import missing_parts
from tui.keys import bindings_of
from tui.look import Ink, Look
from tui.screens.browse import Browse
from tui.screens.lines import Line, Lines, wrapped
from tui.screens.pages import Numbers, TablePage
from tui.screens.roles import role_changes, role_label, role_of, why_not_role
from tui.screens.room import Room
from tui.slot import Slot
from tui.widgets.cells import shape
from tui.widgets.table import Cell, Column, VTable

if TYPE_CHECKING:
    from study.tables import ColumnInfo, TableDescription

_KINDS: Final = {"whole number": "whole"}
_ROLE_ACTIONS: Final = ("outcome", "score", "site", "take_up", "cluster", "weight", "covariate")
Source = tuple[Path, str | None]
Counting = tuple[Path, str | None, str]


class DataScreen(Room):
    """The columns of the data file."""

    place = "data"
    AUTO_FOCUS = "VTable"
    BINDINGS: ClassVar[list[BindingType]] = [*bindings_of("data")]
    DEFAULT_CSS = """
    DataScreen VTable { height: 1fr; margin-top: 1; }
    DataScreen #detail { margin-top: 1; }
    """

    def __init__(self) -> None:
        super().__init__(name="data")
        self._source: Source | None = None
        self._described: TableDescription | None = None
        self._kept: int | None = None
        self._counted: tuple[str, str] = ("", "")
        self._slot: Slot[Source, TableDescription] = Slot(
            "columns", _describe, show=self._show_columns, failed=self._columns_failed
        )
        self._count: Slot[Counting, int] = Slot(
            "row count", _count_rows, show=self._show_count, failed=self._count_failed
        )

    def body(self) -> Iterator[Widget]:
        """The table, and under it what there is to say about the column under the cursor."""
        yield VTable(id="columns", empty="f opens a data file or a study.")
        yield Lines(id="detail")

    def slots(self) -> Sequence[Slot[Any, Any]]:
        """Describing the columns and counting rows."""
        return (self._slot, self._count)

    # ---- the file ---------------------------------------------------------------------------------------------

    def refresh_view(self) -> None:
        """Describe another file when the study has one, else only show the roles anew."""
        desk = self.bench.desk
        if desk is None or not self.bench.started:
            return
        source = (desk.study.data_file, desk.study.data.table) if desk.study.data.path else None
        if source != self._source:
            self._source, self._described, self._kept = source, None, None
            if source is not None:
                self._say(f"Reading {source[0].name} ...")
                self._slot.supersede(source)
        if self._described is not None:
            self._fill()
        condition = desk.study.data.rows
        if source is not None and condition and self._counted[0] != condition:
            self._counted = (condition, "")
            self._count.supersede((source[0], source[1], condition))

    def _show_columns(self, request: Source, described: TableDescription) -> None:
        self._described = described
        desk = self.bench.desk
        self._fill(cursor=0 if desk is None else desk.view.data_row)
        self.refresh_keys()

    def _columns_failed(self, request: Source, error: Exception) -> None:
        if isinstance(error, StudyError):
            self._say(f"{error.what} {error.do}", warning=True)
        else:
            self.bench.record_failure("reading columns", error)
            self._say(f"{request[0].name}: its columns could not be read.", warning=True)

    def _fill(self, *, cursor: int | None = None) -> None:
        desk, described = self.bench.desk, self._described
        if desk is None or described is None:
            return
        table = self.query_one(VTable)
        wide = self.size.width >= 100
        columns = (
            Column(key="name", title="column", widest=40 if wide else 18),
            Column(key="role", title="role"),
            Column(key="kind", title="type"),
            Column(key="missing", title="missing", align="right"),
            Column(key="distinct", title="distinct", align="right"),
            Column(key="low", title="lowest", align="decimal", widest=14 if wide else 10),
            Column(key="high", title="highest", align="decimal", widest=14 if wide else 10),
            Column(key="shape", title="spread"),
        )
        rows = [
            _row(
                info,
                role_of(desk.study.columns, info.name),
                described.rows,
                16 if wide else 8,
                self.bench.look,
            )
            for info in described.columns
        ]
        table.set_rows(columns, rows, cursor=cursor)
        self._detail()

    # ---- under the table --------------------------------------------------------------------------------------

    @on(VTable.RowHighlighted)
    def _row_highlighted(self, event: VTable.RowHighlighted) -> None:
        desk = self.bench.desk
        if desk is not None:
            desk.view = replace(desk.view, data_row=event.row)
            self.bench.view_moved()
        self._detail()
        self.hush()
        self.refresh_keys()

    def _detail(self) -> None:
        desk, info, described = self.bench.desk, self._info(), self._described
        if desk is None or info is None or described is None:
            return
        width = self.size.width - 2
        lines: list[Line] = [[(info.name, Ink.STRONG), (f"  {_about(info, described.rows)}", Ink.MUTED)]]
        labels = ", ".join(f"{value} = {label}" for value, label in list(info.labels.items())[:12])
        lines.append([(labels or info.label or "", Ink.MUTED)])
        lines.append([(self._rows_said(described.rows), Ink.MUTED)])
        missing = missing_parts(desk.study)
        said = f"Next: {_plainly(missing[0])}" if missing else "The study is complete: 3 shows its effect."
        lines.append([(wrapped(said, width)[0], Ink.ACCENT if missing else Ink.MUTED)])
        self.query_one("#detail", Lines).show(lines)

    def _rows_said(self, rows: int) -> str:
        desk = self.bench.desk
        condition = desk.study.data.rows if desk is not None else None
        if not condition:
            return f"{rows:,} rows, all of them kept"
        count = self._counted[1] or "counting ..."
        return f"{count} of {rows:,} rows kept: {condition}"

    def _info(self) -> ColumnInfo | None:
        if self._described is None or not self._described.columns:
            return None
        return self._described.columns[min(self.query_one(VTable).cursor, len(self._described.columns) - 1)]

    def _say(self, words: str, *, warning: bool = False) -> None:
        ink = Ink.WARNING if warning else Ink.MUTED
        self.query_one(VTable).set_rows((), [])
        self.query_one("#detail", Lines).show([[(line, ink)] for line in wrapped(words, self.size.width - 2)])

    # ---- keys -------------------------------------------------------------------------------------------------

    def why_not(self, action: str) -> str:
        """A role needs a column that can play it."""
        if action == "open":
            return ""
        if self.bench.desk is None:
            return "No study is open: f opens one"
        if action == "title":
            return ""
        info = self._info()
        if info is None:
            return "The columns are not there yet"
        if action in ("rows", "details"):
            return ""
        if action == "none":
            return "" if role_of(self.bench.desk.study.columns, info.name) else "This column has no role"
        return why_not_role(info.kind, info.name, action)

    def give_role(self, role: str) -> None:
        """Let the column under the cursor play a role."""
        desk, info = self.bench.desk, self._info()
        if desk is not None and info is not None:
            self.change(role_changes(desk.study.columns, info.name, role))

    def do_outcome(self) -> None:
        """Key o."""
        self.give_role("outcome")

    def do_score(self) -> None:
        """Key s."""
        self.give_role("score")

    def do_site(self) -> None:
        """Key i."""
        self.give_role("site")

    def do_take_up(self) -> None:
        """Key p."""
        self.give_role("take_up")

    def do_cluster(self) -> None:
        """Key c."""
        self.give_role("cluster")

    def do_weight(self) -> None:
        """Key w."""
        self.give_role("weight")

    def do_covariate(self) -> None:
        """Key a."""
        self.give_role("covariate")

    def do_none(self) -> None:
        """Key n."""
        self.give_role("")

    @on(VTable.RowChosen)
    def _row_chosen(self) -> None:
        self.do_details()

    def do_details(self) -> None:
        """Key enter."""
        info = self._info()
        if info is not None:
            self.bench.push_screen(TablePage(column_tables(info)))

    def do_open(self) -> None:
        """Key f."""
        desk = self.bench.desk
        folder = desk.study.path.parent if desk is not None else Path.cwd()
        self.bench.push_screen(Browse(folder, self.bench.open_path))

    def do_title(self) -> None:
        """Key e."""
        desk = self.bench.desk
        assert desk is not None
        self.ask(
            "Title of the study",
            desk.study.title,
            lambda text: self.bench.try_change({"study.title": text or None}),
        )

    def do_rows(self) -> None:
        """Key r: the condition is counted while it is typed."""
        desk = self.bench.desk
        assert desk is not None
        self.ask(
            "Keep rows where",
            desk.study.data.rows or "",
            lambda text: self.bench.try_change({"data.rows": text or None}),
            hint="A condition on the file's own columns, such as: rooms > 0 and year = 2024. Empty keeps every row.",
            typed=self._condition_typed,
        )

    def _condition_typed(self, text: str) -> None:
        if self._source is not None and text:
            self._count.ask((*self._source, text))

    def _show_count(self, request: Counting, rows: int) -> None:
        total = self._described.rows if self._described is not None else rows
        if self.asking:
            self.tell(f"Keeps {rows:,} of {total:,} rows.")
        desk = self.bench.desk
        if desk is not None and desk.study.data.rows == request[2]:
            self._counted = (request[2], f"{rows:,}")
            self._detail()

    def _count_failed(self, request: Counting, error: Exception) -> None:
        if self.asking and isinstance(error, StudyError):
            self.tell(error.what, warning=True)
        elif not isinstance(error, StudyError):
            self.bench.record_failure("counting rows", error)

    # ---- plain text -------------------------------------------------------------------------------------------

    def text(self) -> list[str]:
        """The table, and what stands under it."""
        return [*self.query_one(VTable).to_text(), "", *self.query_one("#detail", Lines).to_text()]


def _row(info: ColumnInfo, role: str, rows: int, cells: int, look: Look) -> list[Cell]:
    share = info.missing / rows if rows else 0.0
    missing = "" if not info.missing else f"{100 * share:.1f}%" if share >= 0.001 else "<0.1%"
    return [
        (info.name, Ink.STRONG if role else Ink.TEXT),
        (role_label(role), Ink.ACCENT),
        (_KINDS.get(info.kind, info.kind), Ink.MUTED),
        missing,
        f"{info.distinct:,}",
        end_said(info.low),
        end_said(info.high),
        (spread(info.histogram, cells, look), Ink.MUTED),
    ]


def end_said(end: object) -> str:
    """An end of a column's range, numbers with at most six digits."""
    if end is None:
        return ""
    if isinstance(end, bool) or not isinstance(end, int | float):
        return str(end)
    if float(end).is_integer() and abs(end) < 1e9:
        return f"{end:,.0f}" if abs(end) >= 10_000 else f"{end:.0f}"  # a year is not a thousand of something
    return f"{end:.6g}"


def spread(histogram: tuple[int, ...], cells: int, look: Look) -> str:
    """A histogram in so many cells."""
    each = max(1, len(histogram) // cells)
    return shape([sum(histogram[start : start + each]) for start in range(0, len(histogram), each)], look)


def column_tables(info: ColumnInfo) -> list[Numbers]:
    """A column's histogram, and its value labels where it has any."""
    bars: list[tuple[str, str, str]] = []
    low, high = info.low, info.high
    if info.histogram and isinstance(low, int | float) and isinstance(high, int | float):
        width = (high - low) / len(info.histogram)
        bars = [
            (f"{low + i * width:.6g}", f"{low + (i + 1) * width:.6g}", f"{count:,}")
            for i, count in enumerate(info.histogram)
        ]
    columns = (
        Column(key="from", title="from", align="decimal"),
        Column(key="to", title="to", align="decimal"),
        Column(key="rows", title="rows", align="right"),
    )
    empty = "This column has no range to divide."
    tables = [Numbers(title=f"Spread of {info.name}", columns=columns, rows=bars, empty=empty)]
    if info.labels:
        named = (Column(key="value", title="value"), Column(key="label", title="label", widest=100))
        tables.append(Numbers(title=f"Labels of {info.name}", columns=named, rows=list(info.labels.items())))
    return tables


def _about(info: ColumnInfo, rows: int) -> str:
    parts = [info.kind, f"{info.distinct:,} distinct"]
    parts.append(f"{info.missing:,} of {rows:,} missing" if info.missing else "none missing")
    if info.low is not None:
        parts.append(f"from {end_said(info.low)} to {end_said(info.high)}")
    return ", ".join(parts)


def _plainly(part: str) -> str:
    """What is missing, as a thing to do rather than a key of the file."""
    return {
        "columns.outcomes is missing.": "mark an outcome: o on its row.",
        "columns.score is missing.": "mark the score: s on its row.",
        "data.path is missing.": "open a data file: f.",
        'assignment.rule is "cutoff", but no cutoff is given.': "set the cutoff on screen 2.",
    }.get(part, part)


def _describe(source: Source, should_stop: Callable[[], bool]) -> TableDescription:
    from study.tables import describe_columns  # DuckDB and numpy, only once the first screen stands

    return describe_columns(source[0], table=source[1])


def _count_rows(counting: Counting, should_stop: Callable[[], bool]) -> int:
    from study.tables import count_rows  # as above

    return count_rows(counting[0], counting[2], table=counting[1])
