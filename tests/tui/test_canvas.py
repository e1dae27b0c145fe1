"""The canvas against slow, obvious twins: dots by Unicode's own names, curves and differences cell by cell."""

from __future__ import annotations

import itertools
import math
import unicodedata

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tui.canvas import ASCII_MARKS, Canvas, narrow
from tui.look import DARK, LIGHT, TERMINAL, Ink, Look, Paper
from tui.plot_area import PlotArea, Scale, even_scale, nice_step, nice_ticks, tick_labels

# Unicode numbers the dots of a braille cell 1-3 and 7 down the left, 4-6 and 8 down the right.
NUMBER_OF_DOT = {(0, 0): 1, (1, 0): 2, (2, 0): 3, (0, 1): 4, (1, 1): 5, (2, 1): 6, (3, 0): 7, (3, 1): 8}


def area_on(width: int = 20, height: int = 8, **options: bool) -> PlotArea:
    canvas = Canvas(width, height, **options)
    return PlotArea(
        canvas,
        left=0,
        top=0,
        width=width,
        height=height,
        x=Scale(low=0, high=width),
        y=Scale(low=0, high=height),
    )


def dots_of(canvas: Canvas) -> set[tuple[int, int]]:
    """Every dot on the canvas, read back through the names of the characters."""
    found = set()
    for y, row in enumerate(canvas.to_text()):
        for x, character in enumerate(row):
            name = unicodedata.name(character)
            if name.startswith("BRAILLE PATTERN DOTS-"):
                numbers = {int(digit) for digit in name.removeprefix("BRAILLE PATTERN DOTS-")}
                found |= {
                    (4 * y + r, 2 * x + c) for (r, c), number in NUMBER_OF_DOT.items() if number in numbers
                }
    return found


@given(st.integers(0, 2**32 - 1))
def test_dots_are_the_ones_unicode_names(seed: int) -> None:
    mask = np.random.default_rng(seed).random((12, 10)) < 0.2
    canvas = Canvas(7, 5)
    canvas.dots(mask, Ink.ACCENT, x=1, y=2)
    wanted = {(int(r) + 8, int(c) + 2) for r, c in zip(*np.nonzero(mask), strict=True)}
    assert dots_of(canvas) == wanted


@given(
    st.lists(st.floats(-30, 30), min_size=2, max_size=12),
    st.floats(0.05, 3),
)
def test_a_curve_passes_through_its_heights_without_holes(heights: list[float], step: float) -> None:
    area = area_on()
    x = np.arange(len(heights)) * step
    area.curve(x, heights, Ink.ACCENT)
    dots = dots_of(area.canvas)
    columns = [c for c in range(40) if x[0] - 1e-9 <= (c + 0.5) / 2 <= x[-1] + 1e-9]
    for column in columns:
        height = float(np.interp((column + 0.5) / 2, x, heights))
        row = (8 - height) * 4 - 0.5
        if 0 <= round(row) < 32 and abs(row - math.floor(row) - 0.5) > 1e-6:
            assert (round(row), column) in dots
    # No holes: dots of neighbouring columns touch, where both are inside.
    for before, after in itertools.pairwise(columns):
        a, b = [{r for r, c in dots if c == column} for column in (before, after)]
        if a and b and min(a) > 0 and max(a) < 31 and min(b) > 0 and max(b) < 31:
            assert min(abs(p - q) for p in a for q in b) <= 1


def test_the_line_does_not_drown_in_its_band() -> None:
    area = area_on()
    x = np.linspace(0, 20, 50)
    area.band(x, np.full(50, 3.9), np.full(50, 4.1))
    area.curve(x, np.full(50, 4.0), Ink.ACCENT)
    row = area.canvas.ink[int(area.rows([4.0])[0])]
    assert (row == Ink.ACCENT).all()


def test_marks_lie_on_the_line_and_a_rule_only_where_nothing_is() -> None:
    area = area_on()
    area.curve([0, 20], [4.05, 4.05], Ink.ACCENT)
    area.points([10.5], [4.05], "■", Ink.TEXT)
    area.vertical_rule(3.5)
    area.vertical_rule(10.5)
    text = area.canvas.to_text()
    assert text[3][10] == "■"
    assert text[2][3] == text[2][10] == "┊"
    assert unicodedata.name(text[3][3]).startswith("BRAILLE")


def test_a_level_rule_keeps_away_from_what_is_drawn() -> None:
    area = area_on()
    area.curve([5, 15], [4.0, 4.0], Ink.EDGE, dashed=True)
    area.horizontal_rule(4.0)
    row = area.canvas.to_text()[int(area.rows([4.0])[0])]
    assert row[:4] == row[16:20] == "╌╌╌╌"
    assert "╌" not in row[5:15]


def test_the_band_is_tinted_between_its_edges_and_nowhere_else() -> None:
    area = area_on()
    area.band([5, 15], [2.0, 2.0], [6.0, 6.0])
    tinted = area.canvas.paper == Paper.BAND
    wanted = np.zeros_like(tinted)
    wanted[2:6, 5:15] = True
    assert (tinted == wanted).all()


def test_what_cannot_be_drawn_draws_nothing() -> None:
    area = area_on()
    nothing = np.empty(0)
    for x, y in (
        (nothing, nothing),
        ([1.0], [2.0]),
        ([1.0, 2.0], [np.nan, np.nan]),
        ([30.0, 40.0], [1.0, 1.0]),
    ):
        area.curve(x, y, Ink.ACCENT)
        area.band(x, y, y)
    area.curve([0.0, 20.0], [1e300, -1e300], Ink.TEXT)  # far outside: no overflow, only the crossing
    area.points([np.inf, -np.inf, np.nan, 99.0], [1.0, np.nan, 1.0, 1.0], "○", Ink.TEXT)
    area.canvas.dots(np.zeros((32, 40), dtype=bool), Ink.TEXT)
    assert "○" not in "".join(area.canvas.to_text())
    assert Canvas(0, 0).strips(Look()) == []
    assert Canvas(0, 3).to_text() == ["", "", ""]
    assert Canvas(3, 0).to_text() == []


def test_points_outside_are_left_out_not_pushed_to_the_rim() -> None:
    area = area_on()
    area.points([-0.5, 20.5, 5.0, 5.0], [4.0, 4.0, -0.5, 8.5], "○", Ink.TEXT)
    assert area.canvas.to_text() == [""] * 8


def test_text_is_cut_at_both_rims() -> None:
    canvas = Canvas(5, 1)
    canvas.text(-2, 0, "abcd")
    canvas.text(3, 0, "xyz")
    canvas.text(0, 7, "nowhere")
    assert canvas.to_text() == ["cd xy"]


@pytest.mark.parametrize("theme", [DARK, LIGHT, TERMINAL])
@pytest.mark.parametrize("colour", [True, False])
def test_strips_hold_the_text_and_every_segment_has_a_style(theme: str, colour: bool) -> None:
    area = area_on()
    area.band([5, 15], [2.0, 3.0], [6.0, 7.0])
    area.curve([0, 20], [1.0, 7.0], Ink.ACCENT)
    area.canvas.text(0, 0, "words", Ink.STRONG)
    strips = area.canvas.strips(Look(theme=theme, colour=colour))
    assert [strip.text.rstrip() for strip in strips] == area.canvas.to_text()
    assert {strip.cell_length for strip in strips} == {20}
    styles = [segment.style for strip in strips for segment in strip]
    assert None not in styles
    if not colour:
        assert all(style.color is None or style.color.is_default for style in styles if style)
        assert all(style.bgcolor is None for style in styles if style)


def test_blanks_cut_no_run() -> None:
    canvas = Canvas(12, 1)
    for x in (0, 4, 8):
        canvas.text(x, 0, "o", Ink.ACCENT)
    (strip,) = canvas.strips(Look())
    assert [segment.text for segment in strip] == ["o   o   o   "]


@given(st.integers(0, 2**32 - 1))
def test_changes_are_the_rows_that_differ_and_cover_every_difference(seed: int) -> None:
    draw = np.random.default_rng(seed)
    before, after = Canvas(9, 6), Canvas(9, 6)
    for canvas in (before, after):
        canvas.text(1, 1, "same", Ink.MUTED)
    for _ in range(int(draw.integers(0, 4))):
        ink = Ink(int(draw.integers(0, 6)))
        after.text(int(draw.integers(0, 9)), int(draw.integers(0, 6)), "x", ink)
    regions = after.changes(before)
    assert regions is not None
    different = {
        (x, y)
        for y in range(6)
        for x in range(9)
        if (after.glyph[y, x], after.ink[y, x]) != (before.glyph[y, x], before.ink[y, x])
    }
    covered = {(x, r.y) for r in regions for x in range(r.x, r.right)}
    assert different <= covered
    assert {y for _, y in different} == {region.y for region in regions}
    assert after.changes(Canvas(9, 5)) is None
    assert after.changes(None) is None


def test_ascii_only_is_ascii() -> None:
    area = area_on(ascii_only=True)
    area.band(np.linspace(0, 20, 40), np.linspace(0, 3, 40), np.linspace(2, 8, 40))
    area.curve(np.linspace(0, 20, 40), np.linspace(0, 8, 40), Ink.ACCENT)
    for column, mark in enumerate(ASCII_MARKS):
        area.canvas.text(column % 20, column // 20, mark)
    area.canvas.text(0, 5, "größe ☃")
    assert "".join(area.canvas.to_text()).isascii()


def test_names_in_wide_scripts_cannot_shift_the_picture() -> None:
    assert narrow("größe 温度 ok") == "größe ?? ok"


@given(st.floats(1e-12, 1e12))
def test_a_nice_step_is_one_two_or_five_and_the_next_not_below(rough: float) -> None:
    step = nice_step(rough)
    power = 10.0 ** math.floor(math.log10(step) + 1e-9)
    assert min(abs(step / power - factor) for factor in (1, 2, 5)) < 1e-9
    assert rough * (1 - 1e-8) <= step <= 2.5 * rough * (1 + 1e-8)


@given(st.floats(-1e6, 1e6), st.floats(1e-3, 1e6), st.integers(2, 12))
def test_ticks_are_few_inside_and_evenly_spaced(low: float, length: float, most: int) -> None:
    ticks = nice_ticks(low, low + length, most)
    assert len(ticks) <= most + 1
    slack = 1e-6 * length
    assert all(low - slack <= tick <= low + length + slack for tick in ticks)
    if len(ticks) > 2:
        np.testing.assert_allclose(np.diff(ticks), ticks[1] - ticks[0], rtol=1e-6)


@given(st.floats(-1e5, 1e5), st.floats(1e-3, 1e5), st.integers(5, 60))
def test_an_even_scale_holds_the_interval_and_spaces_its_labels_evenly(
    low: float, length: float, rows: int
) -> None:
    scale = even_scale(low, low + length, rows)
    slack = 1e-6 * length
    assert scale.low <= low + slack
    assert scale.high >= low + length - slack
    area = PlotArea(Canvas(5, rows), left=0, top=0, width=5, height=rows, x=Scale(low=0, high=1), y=scale)
    found = area.rows(scale.ticks(8))
    assert 1 <= len(found) <= 9
    assert len(set(np.diff(found).tolist())) <= 1


def test_an_even_scale_of_nothing_and_of_counts() -> None:
    flat = even_scale(3.0, 3.0, 10)
    assert flat.low < 3.0 < flat.high
    counts = even_scale(0.0, 273.0, 20, from_zero=True)
    assert counts.low == 0.0
    assert counts.high >= 273.0


@pytest.mark.parametrize(
    ("ticks", "labels"),
    [
        ([0.0, 0.2, 0.4], ["0.0", "0.2", "0.4"]),
        ([-5.0, 0.0, 5.0], ["−5", "0", "5"]),
        ([-0.0], ["0"]),
        ([0.25, 0.5], ["0.2", "0.5"]),
        ([1000.0, 2000.0], ["1,000", "2,000"]),
        ([1e8, 2e8], ["1e+08", "2e+08"]),
        ([0.0, 2e-6], ["0", "2e-06"]),
        ([], []),
    ],
)
def test_labels(ticks: list[float], labels: list[str]) -> None:
    assert tick_labels(ticks) == labels


def test_a_logarithmic_scale_gives_equal_ratios_equal_lengths() -> None:
    scale = Scale(low=1.0, high=16.0, log=True)
    np.testing.assert_allclose(scale.share([1, 2, 4, 8, 16]), [0, 0.25, 0.5, 0.75, 1], rtol=1e-12, atol=1e-12)
    assert scale.value(0.5) == pytest.approx(4.0, rel=1e-12)
    assert np.isnan(scale.share([0.0, -1.0])).all()
    assert Scale(low=1.0, high=100.0, log=True).ticks(8) == [1, 2, 5, 10, 20, 50, 100]
    assert len(Scale(low=6.0, high=9.0, log=True).ticks(6)) >= 3
