"""How the widgets behave under keys, and what they draw from which numbers."""

from __future__ import annotations

import itertools
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from gallery import LOOKS, GalleryApp, at_width, fits, means, show_width, sweep
from golden import check, screen_strips
from textual.app import ComposeResult
from textual.message import Message
from textual.widget import Widget

from tui.look import DARK, LIGHT, TERMINAL, Ink, Look, Paper, detect_look
from tui.safe import SafeApp
from tui.widgets.answers import Answer, AnswerTable, decimals_for
from tui.widgets.cells import fit, pad_decimal, shape
from tui.widgets.chart import EffectChart
from tui.widgets.form import Choice, ChoiceForm
from tui.widgets.histogram import ScoreHistogram
from tui.widgets.sweep import SweepChart
from tui.widgets.table import Column, VTable


class Stage(SafeApp[None]):
    """One widget, and every message it posts."""

    ENABLE_COMMAND_PALETTE = False

    def __init__(self, widget: Widget) -> None:
        super().__init__(look=Look())
        self.widget = widget
        self.told: list[Message] = []

    def compose(self) -> ComposeResult:
        yield self.widget

    def on_mount(self) -> None:
        self.widget.focus()

    def note(self, message: Message) -> None:
        self.told.append(message)

    on_cursor_view_row_highlighted = on_cursor_view_row_chosen = note
    on_choice_form_choice_edited = on_score_histogram_line_moved = on_score_histogram_line_chosen = note


def shown(app: SafeApp[Any]) -> list[str]:
    return [strip.text.rstrip() for strip in screen_strips(app)]


# ---- table ------------------------------------------------------------------------------------------------------

COLUMNS = [Column(key="name", title="name"), Column(key="value", title="value", align="decimal")]


class CountedRows:
    """A million rows that remember which were asked for."""

    def __init__(self, rows: int) -> None:
        self.rows, self.asked = rows, set[int]()

    def __len__(self) -> int:
        return self.rows

    def row(self, index: int) -> list[str]:
        self.asked.add(index)
        return [f"row {index}", f"{index / 8:g}"]


async def test_a_million_rows_cost_what_is_seen() -> None:
    rows, table = CountedRows(1_000_000), VTable()
    app = Stage(table)
    async with app.run_test(size=(60, 12)) as pilot:
        table.set_rows(COLUMNS, rows)
        await pilot.press("G")
        await pilot.pause()
        assert table.cursor == 999_999
        assert "row 999999" in shown(app)[-1]
        assert len(rows.asked) < 400
        assert "1,000,000 of 1,000,000" in shown(app)[0]


async def test_keys_move_the_cursor_and_tell() -> None:
    table = VTable()
    app = Stage(table)
    async with app.run_test(size=(60, 12)) as pilot:
        table.set_rows(COLUMNS, [(f"row {index}", str(index)) for index in range(40)])
        trail = []
        for key in ("j", "down", "k", "pagedown", "pageup", "end", "home", "up", "enter"):
            await pilot.press(key)
            trail.append(table.cursor)
        assert trail == [1, 2, 1, 11, 1, 39, 0, 0, 0]
        await pilot.pause()
        moved = [message.row for message in app.told if isinstance(message, VTable.RowHighlighted)]
        assert moved == [1, 2, 1, 11, 1, 39, 0]
        assert [message.row for message in app.told if isinstance(message, VTable.RowChosen)] == [0]


async def test_the_cursor_stays_in_sight_and_is_marked_without_colour() -> None:
    table = VTable()
    app = Stage(table)
    async with app.run_test(size=(60, 6)) as pilot:
        table.set_rows(COLUMNS, [(f"row {index}", str(index)) for index in range(40)])
        for _ in range(7):
            await pilot.press("j")
        await pilot.pause()
        assert [line for line in shown(app) if line.startswith("▸")] == [shown(app)[5]]
        assert "row 7" in shown(app)[5]
        await pilot.resize_terminal(60, 4)
        await pilot.pause()
        assert any(line.startswith("▸ row 7") for line in shown(app))


async def test_numbers_stand_under_each_other_by_their_point() -> None:
    table = VTable()
    app = Stage(table)
    numbers = ["1", "-12.5", "3.1415", "1,000.25", "none"]
    async with app.run_test(size=(60, 12)) as pilot:
        table.set_rows([Column(key="n", title="n", align="decimal")], [(number,) for number in numbers])
        await pilot.pause()
        lines = shown(app)[1:6]
        points = {line.index(".") for line in lines if "." in line}
        assert len(points) == 1
        (point,) = points
        assert lines[0].index("1") == point - 1, "a whole number ends before the point"


async def test_new_rows_keep_the_cursor_where_it_can_be_kept() -> None:
    table = VTable()
    app = Stage(table)
    async with app.run_test(size=(60, 12)) as pilot:
        table.set_rows(COLUMNS, [(str(index), "1") for index in range(9)], cursor=8)
        assert table.cursor == 8
        table.set_rows(COLUMNS, [(str(index), "1") for index in range(5)])
        assert table.cursor == 4
        table.set_rows(COLUMNS, [])
        assert table.cursor == 0
        await pilot.press("j", "enter", "G")
        await pilot.pause()
        assert not app.told


async def test_an_empty_table_says_why() -> None:
    app = Stage(VTable(empty="no file is open"))
    async with app.run_test(size=(60, 5)) as pilot:
        await pilot.pause()
        assert "no file is open" in shown(app)[1]


async def test_a_changed_row_is_asked_for_again() -> None:
    table = VTable()
    app = Stage(table)
    rows = [["a", "1"], ["b", "2"]]
    async with app.run_test(size=(60, 5)) as pilot:
        table.set_rows(COLUMNS, rows)
        await pilot.pause()
        rows[1][0] = "a much longer name"
        table.update_row(1)
        await pilot.pause()
        assert "a much longer name" in shown(app)[2]
        assert table.to_text() == [
            "name                value",
            "a                       1",
            "a much longer name      2",
        ]


@pytest.mark.parametrize(
    ("words", "cells", "cut"),
    [("abc", 3, "abc"), ("abcd", 3, "ab…"), ("温度計", 5, "温度…"), ("abc", 0, ""), ("ab c", 4, "ab c")],
)
def test_words_are_cut_to_cells(words: str, cells: int, cut: str) -> None:
    assert fit(words, cells, Look()) == cut


def test_small_pieces_of_cells() -> None:
    assert [pad_decimal(words, 3) for words in ("1", "1.5", "1.25")] == ["1   ", "1.5 ", "1.25"]
    assert shape([0, 1, 50, 100], Look()) == " ▁▃▆"
    assert shape([0, 0], Look()) == "  "
    assert shape([0, 1, 100], Look(ascii_only=True)) == " .#"


# ---- form -------------------------------------------------------------------------------------------------------

CHOICES = [
    Choice(
        key="bandwidth",
        label="bandwidth",
        value="mse",
        allowed=("mse", "coverage"),
        typed="number",
        help="how close",
    ),
    Choice(
        key="kernel", label="kernel", value="triangular", allowed=("triangular", "uniform", "epanechnikov")
    ),
    Choice(key="title", label="title", value="Heating", typed="text"),
    Choice(
        key="cluster",
        label="cluster",
        value="none",
        allowed=("none", "street"),
        why_not="no column has this role",
    ),
]


async def edits(*keys: str) -> tuple[list[tuple[str, object]], list[str], ChoiceForm]:
    form = ChoiceForm()
    app = Stage(form)
    async with app.run_test(size=(90, 8)) as pilot:
        form.set_choices(CHOICES)
        await pilot.press(*keys)
        await pilot.pause()
        told = [(m.key, m.value) for m in app.told if isinstance(m, ChoiceForm.ChoiceEdited)]
        return told, shown(app), form


async def test_arrows_walk_through_the_allowed_values_in_a_ring() -> None:
    assert (await edits("right"))[0] == [("bandwidth", "coverage")]
    assert (await edits("j", "left"))[0] == [("kernel", "epanechnikov")]
    assert (await edits("j", "l", "l"))[0] == [("kernel", "uniform")] * 2, (
        "the form keeps no value of its own"
    )


async def test_a_number_is_typed() -> None:
    told, _, form = await edits("6", ".", "2", "5", "backspace", "enter")
    assert told == [("bandwidth", 6.2)]
    assert not form.typing


async def test_an_allowed_word_is_not_typed_over_by_letters() -> None:
    told, lines, form = await edits("c", "e")
    assert told == []
    assert not form.typing
    assert "‹ mse ›" in lines[0]


async def test_what_is_not_a_number_is_refused_in_a_sentence() -> None:
    told, lines, _ = await edits("6", ".", ".", "enter")
    assert told == []
    assert "“6..” is not a number: type a number or one of mse, coverage" in lines[0]


async def test_escape_stops_typing_and_moving_on_drops_it() -> None:
    assert (await edits("6", "escape", "enter", "escape"))[0] == []
    told, lines, form = await edits("6", "j", "k")
    assert told == []
    assert not form.typing
    assert "mse" in lines[0]


async def test_text_begins_with_enter_and_the_value_there_is() -> None:
    told, _, _ = await edits("j", "j", "enter", "space", "2", "enter")
    assert told == [("title", "Heating 2")]


async def test_a_line_that_cannot_be_changed_says_why_and_stays() -> None:
    told, lines, _ = await edits("G", "right", "enter")
    assert told == []
    assert "no column has this role" in lines[3]


async def test_one_help_sentence_at_a_time() -> None:
    assert "how close" in (await edits())[1][0]
    assert "how close" not in (await edits("j"))[1][0]


# ---- charts -----------------------------------------------------------------------------------------------------


def chart_at(width: float) -> EffectChart:
    chart = EffectChart()
    show_width(chart, width)
    return chart


def test_means_outside_the_window_are_faint_and_marks_differ_by_side() -> None:
    canvas = chart_at(6.2).picture(101, 30)
    inks: dict[str, list[tuple[int, int]]] = {"○": [], "■": []}
    middle = next(column for column in range(101) if canvas.glyph[1, column] == ord("┊"))
    for y in range(1, 27):
        for x in range(101):
            mark = chr(canvas.glyph[y, x])
            if mark in inks:
                inks[mark].append((x, int(canvas.ink[y, x])))
    assert all(x <= middle for x, _ in inks["○"])
    assert all(x >= middle for x, _ in inks["■"])
    assert len(inks["○"]) >= 18
    # 8 of the 20 centres (0.375 + 0.75 k) of each side lie within 6.2.
    for mark in "○■":
        near = [ink for x, ink in inks[mark] if ink == Ink.TEXT]
        assert len(near) == 8
        assert {ink for _, ink in inks[mark]} == {Ink.TEXT, Ink.FAINT}


def test_the_window_is_drawn_on_the_axis_where_it_is() -> None:
    lines = chart_at(6.0).picture(101, 30).to_text()
    axis, labels = lines[-2], lines[-1]
    assert axis.index("┝") == pytest.approx(labels.index("46") if "46" in labels else axis.index("┝"))
    left, right, cutoff = axis.index("┝"), axis.index("┥"), lines[3].index("┊")
    assert cutoff - left == right - cutoff
    start = len(axis) - len(axis.lstrip())
    width = len(axis) - start
    assert (right - left) / width == pytest.approx(12.0 / 30.0, abs=1.5 / width)


def test_scrubbing_does_not_shake_the_picture() -> None:
    chart = chart_at(6.0)
    before = chart.picture(100, 30).to_text()
    for width in (6.2, 6.5, 7.0, 5.0):
        show_width(chart, width)
        after = chart.picture(100, 30).to_text()
        gutter = [line[:4] for line in after]
        assert gutter[1:-2] == [line[:4] for line in before][1:-2]


def test_a_masked_outcome_draws_means_of_nothing_without_failing() -> None:
    chart = EffectChart()
    side = SimpleNamespace(
        centre=np.array([1.0, 2.0]), mean=np.array([np.nan, np.nan]), count=np.array([0, 0])
    )
    chart.set_data(bins=SimpleNamespace(below=side, above=side), curve=None, reach=3.0)
    assert "┊" in "\n".join(chart.picture(60, 16).to_text())
    empty = EffectChart()
    assert empty.picture(60, 10).to_text() == [""] * 10


@pytest.mark.parametrize("size", [(24, 6), (25, 7), (40, 12), (200, 60)])
def test_charts_of_any_size(size: tuple[int, int]) -> None:
    swept = SweepChart()
    swept.set_data(sweep=sweep(), label="effect")
    swept.set_here(**at_width(6.2))
    for widget in (chart_at(6.2), swept):
        lines = widget.picture(*size).to_text()
        assert len(lines) == size[1]
        assert max(map(len, lines)) <= size[0]
    assert "needs 24 x 6 cells" in chart_at(6.2).picture(20, 5).to_text()[0]


def test_moving_the_mark_changes_few_cells() -> None:
    swept = SweepChart()
    swept.set_data(sweep=sweep(), label="effect")
    swept.set_here(**at_width(6.2))
    before = swept.picture(100, 14)
    swept.set_here(**at_width(6.4))
    after = swept.picture(100, 14)
    assert 0 < int((before.glyph != after.glyph).sum()) < 45
    column = after.to_text()[-2].index("▲")
    assert after.to_text()[-2].count("▲") == 1
    share = (np.log(6.4) - np.log(1.2)) / (np.log(15.0) - np.log(1.2))
    left = len(after.to_text()[-2]) - len(after.to_text()[-2].lstrip())
    assert column == left + int(share * (100 - left))


def test_wild_intervals_at_narrow_widths_run_out_of_the_picture() -> None:
    whole = sweep()
    whole.low[:3], whole.high[:3] = -1e6, 1e6
    swept = SweepChart()
    swept.set_data(sweep=whole, label="effect")
    labels = [line[:6] for line in swept.picture(100, 20).to_text()]
    assert any("0.2" in label for label in labels)


def test_a_sweep_of_one_width_or_of_nothing() -> None:
    one = SimpleNamespace(
        bandwidth=np.array([3.0]), estimate=np.array([0.2]), low=np.array([0.1]), high=np.array([0.3])
    )
    swept = SweepChart()
    swept.set_data(sweep=one)
    swept.set_here(bandwidth=3.0, estimate=0.2, low=0.1, high=0.3)
    assert "◆" in "".join(swept.picture(60, 12).to_text())
    nothing = SimpleNamespace(
        bandwidth=np.array([3.0]),
        estimate=np.array([np.nan]),
        low=np.array([np.nan]),
        high=np.array([np.nan]),
    )
    swept.set_data(sweep=nothing)
    assert not swept.has_data
    swept.say("no width has enough scores on both sides")
    assert "no width has enough" in swept.picture(60, 12).to_text()[0]


# ---- histogram --------------------------------------------------------------------------------------------------


def a_histogram(
    counts: list[int], low: float = 0.0, cutoff: float | None = None, **options: Any
) -> ScoreHistogram:
    widget = ScoreHistogram()
    edges = low + np.arange(len(counts) + 1.0)
    widget.set_data(
        histogram=SimpleNamespace(edges=edges, counts=np.array(counts), on_line=0, below=3, above=7),
        cutoff=cutoff, score="score", **options,
    )  # fmt: skip
    return widget


def test_columns_are_as_high_as_their_counts() -> None:
    canvas = a_histogram([0, 5, 10, 20]).picture(43, 24)
    area_rows = range(2, 22)
    heights = []
    for part in range(4):
        column = 3 + part * 10 + 5
        eighths = sum(
            max(0, int(canvas.glyph[y, column]) - 0x2580)
            for y in area_rows
            if canvas.glyph[y, column] != 0x20
        )
        heights.append(eighths)
    assert heights[0] == 0
    assert heights[2] == pytest.approx(2 * heights[1], abs=2)
    assert heights[3] == pytest.approx(4 * heights[1], abs=3)


@pytest.mark.parametrize("height", [12, 20, 24, 33, 40])
def test_labels_of_counts_have_one_rhythm(height: int) -> None:
    lines = a_histogram([0, 5, 10, 23]).picture(60, height).to_text()
    labels = [(row, int(line[:3])) for row, line in enumerate(lines[:-2]) if line[:3].strip().isdigit()]
    assert len(labels) >= 2
    assert len({before[0] - after[0] for before, after in itertools.pairwise(labels)}) == 1
    assert labels[-1] == (height - 3, 0)


def test_a_single_unit_is_seen() -> None:
    assert "▁" in "".join(a_histogram([1, 0, 100_000]).picture(60, 12).to_text())


def test_counts_stand_on_their_sides() -> None:
    lines = a_histogram([5] * 10, cutoff=5.0).picture(81, 14).to_text()
    line = lines[1].index("┊")
    assert lines[1].index("3 below") < line < lines[1].index("7 above, treated")
    narrow = a_histogram([5] * 10, cutoff=0.2).picture(81, 14).to_text()
    assert "3 below, 7 above, treated" in narrow[1]


def test_a_heap_right_at_the_line_is_not_hidden_under_it() -> None:
    """200 bins on 40 cells: the bin that begins at the line is a fifth of a cell wide and holds nearly everybody."""
    counts = [1] * 200
    counts[100] = 5000
    canvas = a_histogram(counts, cutoff=100.0).picture(46, 24)
    line = int(np.flatnonzero(canvas.glyph[3] == ord("┊"))[0])
    columns = (canvas.glyph[2:22] >= 0x2581) & (canvas.glyph[2:22] <= 0x2588)
    assert columns[:, line + 1].sum() > 10
    assert columns[:, line - 1].sum() <= 1


async def test_the_line_moves_in_round_steps_and_stops_at_the_ends() -> None:
    widget = a_histogram([5] * 60, low=20.0, cutoff=52.3, cutoff_moves=True)
    app = Stage(widget)
    async with app.run_test(size=(80, 20)) as pilot:
        await pilot.press("right")
        assert widget.cutoff == 53.0
        await pilot.press("h", "left", "enter")
        await pilot.pause()
        moved = [m.value for m in app.told if type(m) is ScoreHistogram.LineMoved]
        assert moved == [53.0, 52.0, 51.0]
        assert [m.value for m in app.told if type(m) is ScoreHistogram.LineChosen] == [51.0]
        await pilot.press(*["pagedown"] * 9)
        assert widget.cutoff == 80.0


async def test_a_line_that_is_only_shown_stays() -> None:
    widget = a_histogram([5] * 60, low=20.0, cutoff=52.3)
    app = Stage(widget)
    async with app.run_test(size=(80, 20)) as pilot:
        await pilot.press("right", "enter")
        await pilot.pause()
        assert widget.cutoff == 52.3
        assert not app.told


# ---- answers ----------------------------------------------------------------------------------------------------


def test_answers_share_one_axis_with_zero_on_it() -> None:
    table = AnswerTable()
    table.set_answers(
        [
            Answer(name="first", estimate=1.0, low=0.0, high=2.0, chosen=True),
            Answer(name="second", estimate=-1.0, low=-2.0, high=0.0),
            Answer(name="third", estimate=None, low=None, high=None, note="too few in the window"),
        ]
    )
    lines = table.picture(80, 3).to_text()
    assert "1.0" in lines[0]
    assert "0.0 to 2.0" in lines[0]
    assert abs(lines[0].index("├") - lines[1].index("┤")) <= 1
    assert "−2.0 to 0.0" in lines[1]
    assert lines[1].index("○") < lines[0].index("●")
    assert "none" in lines[2]
    assert "too few in the window" in lines[2]
    assert [line.startswith("▸") for line in lines] == [True, False, False]


@pytest.mark.parametrize(
    ("length", "decimals"), [(0.25, 2), (2.5, 1), (25.0, 0), (0.0025, 4), (1e-9, 6), (1e9, 0)]
)
def test_as_many_decimals_as_the_interval_deserves(length: float, decimals: int) -> None:
    assert decimals_for([Answer(name="a", estimate=0.0, low=0.0, high=length)]) == decimals


def test_what_is_rounded_to_zero_has_no_sign() -> None:
    table = AnswerTable()
    table.set_answers([Answer(name="a", estimate=-0.001, low=-1.0, high=0.9)])
    assert "0.0  −1.0 to 0.9" in table.picture(60, 1).to_text()[0]


def test_decimals_without_any_interval() -> None:
    assert decimals_for([Answer(name="a", estimate=1.0, low=None, high=float("nan"))]) == 2


# ---- looks ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("environment", "theme", "colour"),
    [
        ({"TERM": "xterm-256color"}, DARK, True),
        ({"TERM": "xterm-256color", "COLORFGBG": "0;15"}, LIGHT, True),
        ({"TERM": "xterm-256color", "COLORFGBG": "15;default;0"}, DARK, True),
        ({"TERM": "xterm"}, TERMINAL, True),
        ({"TERM": "xterm", "COLORTERM": "truecolor"}, DARK, True),
        ({"TERM": "xterm-256color", "NO_COLOR": "1"}, DARK, False),
        ({"TERM": "xterm-256color", "NO_COLOR": ""}, DARK, True),
        ({"TERM": "dumb"}, TERMINAL, False),
        ({}, TERMINAL, True),
    ],
)
def test_the_look_follows_what_the_terminal_says(
    environment: dict[str, str], theme: str, colour: bool
) -> None:
    look = detect_look(environment)
    assert (look.theme, look.colour) == (theme, colour)


def test_a_chosen_theme_is_kept() -> None:
    assert detect_look({"TERM": "xterm"}, theme=LIGHT).theme == LIGHT


def test_every_ink_on_every_paper_has_a_style_of_the_256_colours() -> None:
    for look in LOOKS.values():
        for ink in Ink:
            for paper in Paper:
                style = look.style(ink, paper)
                for colour in (style.color, style.bgcolor):
                    assert colour is None or colour.number is None or 0 <= colour.number <= 255
                    assert colour is None or colour.triplet is None


async def test_a_changed_look_repaints_the_drawing() -> None:
    app = Stage(chart_at(6.2))
    async with app.run_test(size=(80, 20)) as pilot:
        await pilot.pause()
        app.set_look(Look(theme=LIGHT, ascii_only=True))
        await pilot.pause()
        assert "".join(shown(app)).isascii()
        colours = {
            s.style.color.name for strip in screen_strips(app) for s in strip if s.style and s.style.color
        }
        assert "color(25)" in colours
        assert "color(75)" not in colours


# ---- golden screens ---------------------------------------------------------------------------------------------

PAGES = ["effect", "sweep", "histogram", "table", "answers"]
SEEN = [(page, (80, 24), look) for page in PAGES for look in ("dark", "light", "sixteen", "mono", "ascii")]
SEEN += [(page, (120, 40), "dark") for page in PAGES]


@pytest.mark.parametrize(("page", "size", "look"), SEEN, ids=lambda value: str(value))
async def test_golden(page: str, size: tuple[int, int], look: str) -> None:
    app = GalleryApp(page, look=Look(ascii_only=True) if look == "ascii" else LOOKS[look])
    async with app.run_test(size=size) as pilot:
        await pilot.pause()
        await pilot.pause()
        check(app, f"{page}-{size[0]}x{size[1]}-{look}")


def test_fits_and_means_reach_the_chart() -> None:
    """The gallery's numbers are what the chart shows: its jump of a quarter is seen at the cutoff."""
    chart = chart_at(6.0)
    canvas = chart.picture(101, 33)
    curve = fits(6.0)
    jump = curve.above.fit[0] - curve.below.fit[-1]
    assert jump == pytest.approx(0.25, abs=1e-12)
    cutoff = canvas.to_text()[3].index("┊")
    line = canvas.ink == Ink.ACCENT
    below = np.flatnonzero(line[1:30, cutoff - 2])
    above = np.flatnonzero(line[1:30, cutoff + 2])
    axis = [
        (row, float(text[:4]))
        for row, text in enumerate(canvas.to_text()[1:30])
        if text[:3].strip(" -").replace(".", "").isdigit()
    ]
    (row_a, value_a), (row_b, value_b) = axis[0], axis[-1]
    per_row = (value_a - value_b) / (row_b - row_a)
    assert (below.mean() - above.mean()) * per_row == pytest.approx(jump, abs=1.5 * per_row)
    assert len(means().below.centre) == 20
