"""What goes over the line, counted in bytes; and that the cells sent are the cells wanted."""

from __future__ import annotations

import random
import re
import signal

import pyte
import pytest
from pty_harness import Terminal, python
from rich.color import ColorSystem
from rich.segment import Segment
from rich.style import Style
from textual.strip import Strip

from tui.cell_diff import Picture
from tui.wire import Pace

APP = python("tests/tui/wire_app.py")
RIGHT, LEFT = "\x1b[C", "\x1b[D"
QUERY = b"\x1b[6n"

SIMPLE = ["width 6.20", "⣀⡤⠖", "┊", "   ", "■ ○", "a b", "größe"]
AWKWARD = [*SIMPLE, "温度", "e\u0301te\u0301", "🙂", "ok 温"]
STYLES = [
    Style(),
    Style.parse("bold"),
    Style.parse("color(75)"),
    Style.parse("color(75) on color(236)"),
    Style.parse("reverse"),
]


def seen(screen: pyte.Screen) -> list[list[tuple[object, ...]]]:
    """The cells of a screen; what a blank would be drawn in cannot be seen."""
    rows = []
    for y in range(screen.lines):
        cells = [screen.buffer[y][x] for x in range(screen.columns)]
        rows.append([(c.data, c.bg, c.reverse, *(() if c.data == " " else (c.fg, c.bold))) for c in cells])
    return rows


def random_strip(draw: random.Random, words: list[str]) -> Strip:
    return Strip([Segment(draw.choice(words), draw.choice(STYLES)) for _ in range(draw.randint(1, 4))])


@pytest.mark.parametrize("seed", range(25))
@pytest.mark.parametrize("words", [SIMPLE, AWKWARD], ids=["simple", "awkward"])
def test_many_small_frames_show_what_one_whole_frame_shows(seed: int, words: list[str]) -> None:
    draw = random.Random(seed)
    picture, whole = Picture(24, 5), Picture(24, 5)
    small, big = pyte.Screen(24, 5), pyte.Screen(24, 5)
    stream = pyte.Stream(small)
    for _ in range(12):
        for _ in range(draw.randint(1, 3)):
            strip, y, x = random_strip(draw, words), draw.randrange(5), draw.randrange(16)
            first = (
                0 if words is AWKWARD else draw.randrange(24)
            )  # a cut through a wide character has no one answer
            for each in (picture, whole):
                each.put(y, x, strip, ColorSystem.EIGHT_BIT, first, 24)
        stream.feed(picture.frame())
    whole.forget()
    pyte.Stream(big).feed(whole.frame())
    assert seen(small) == seen(big)
    assert picture.frame() == ""


@pytest.mark.parametrize("seed", range(30))
def test_scrolled_rows_are_moved_by_the_terminal_and_end_where_they_are_wanted(seed: int) -> None:
    """A list under a header, beside a column that does not scroll, goes up and down by a few rows at a time."""
    draw = random.Random(seed)
    picture, whole = Picture(60, 16), Picture(60, 16)
    small, big = pyte.Screen(60, 16), pyte.Screen(60, 16)
    stream = pyte.Stream(small)
    lines = [
        f"{draw.choice(SIMPLE)} row {index} {draw.random():.12f} and further words" for index in range(60)
    ]
    beside = draw.choice(["", "", "fixed"])
    top = 20
    scrolled = 0
    for _ in range(12):
        top = max(0, min(44, top + draw.choice([-9, -3, -2, -1, 1, 2, 3, 9])))
        header = Strip([Segment(f"{top + 1} of 60", draw.choice(STYLES))])
        rows = [header] + [
            Strip(
                [
                    Segment(f"{lines[top + y]:50.50}", STYLES[y % 5 if y == 7 else 0]),
                    Segment(f"{beside:10}", Style()),
                ]
            )
            for y in range(14)
        ]
        for y, strip in enumerate(rows):
            for each in (picture, whole):
                each.put(y, 0, strip, ColorSystem.EIGHT_BIT, 0, 60)
        frame = picture.frame()
        scrolled += "\x1b[r" in frame
        stream.feed(frame)
        assert [line.rstrip() for line in small.display[1:15]] == [
            f"{lines[top + y]:50.50}{beside:10}".rstrip() for y in range(14)
        ]
    whole.forget()
    pyte.Stream(big).feed(whole.frame())
    assert seen(small) == seen(big)
    assert scrolled >= 3


def test_scrolling_a_list_by_one_row_sends_little_more_than_that_row() -> None:
    picture = Picture(80, 24)

    def show(first: int) -> str:
        for y in range(24):
            words = f"{random.Random(first + y).getrandbits(200):060x} {(first + y):>10}"
            picture.put(y, 0, Strip([Segment(words, Style())]), ColorSystem.EIGHT_BIT, 0, 80)
        return picture.frame()

    show(0)
    assert len(show(1)) < 150
    assert len(show(0)) < 150


def test_a_frame_holds_only_what_changed() -> None:
    picture = Picture(80, 3)
    picture.put(
        1,
        0,
        Strip([Segment("the width is 6.20 and more words follow here", Style())]),
        ColorSystem.EIGHT_BIT,
        0,
        80,
    )
    picture.frame()
    picture.put(
        1,
        0,
        Strip([Segment("the width is 6.38 and more words follow here", Style())]),
        ColorSystem.EIGHT_BIT,
        0,
        80,
    )
    assert picture.frame() == "\x1b[2;16H\x1b[m38"


def test_a_blank_costs_no_change_of_pen() -> None:
    picture = Picture(20, 1)
    blue = Style.parse("color(75)")
    segments = [
        Segment("o", blue),
        Segment(" ", Style()),
        Segment("o", blue),
        Segment(" ", Style()),
        Segment("o", blue),
    ]
    picture.put(0, 0, Strip(segments), ColorSystem.EIGHT_BIT, 0, 20)
    assert picture.frame().count("38;5;75") == 1


def test_pace_waits_for_the_answer_or_a_second() -> None:
    pace = Pace()
    assert pace.ready(0.0)
    pace.sent(0.0)
    assert not pace.ready(0.5)
    pace.answered()
    assert pace.ready(0.5)
    pace.sent(0.5)
    assert not pace.ready(1.4)
    assert pace.ready(1.6)


def test_pace_stops_asking_a_terminal_that_never_answers_and_begins_again_when_it_does() -> None:
    pace = Pace()
    now = 0.0
    for _ in range(3):
        assert pace.asks
        pace.sent(now)
        now += 1.1
        assert pace.ready(now)
    assert not pace.asks
    pace.sent(now)
    assert pace.ready(now)
    pace.answered()
    assert pace.asks


def test_budgets_idle_scrub_and_status() -> None:
    with Terminal(APP, size=(100, 30)) as terminal:
        terminal.wait_for("local randomisation")
        terminal.settle()
        assert terminal.read(1.0) == 0, "an idle screen sends nothing"
        steps, place = [], 0
        for at in (1, 2, 3, 4, 3, 2, 1, 0, -1, -2):
            before = terminal.sent
            terminal.type(RIGHT if at > place else LEFT)
            terminal.wait_for(f"width {6.2 * 1.03**at:.2f}")
            terminal.settle(quiet=0.06)
            steps.append(terminal.sent - before)
            place = at
        assert max(steps) < 1500
        terminal.type("s")
        terminal.wait_for("permutation 250")
        assert 0 < terminal.read(2.0) / 2.0 < 1000


def test_scrubbed_screen_equals_the_screen_sent_whole() -> None:
    with Terminal(APP, size=(100, 30)) as terminal:
        terminal.wait_for("local randomisation")
        for key in [RIGHT] * 7 + [LEFT] * 3:
            terminal.type(key)
            terminal.settle(quiet=0.1)
        scrubbed = terminal.cells()
        terminal.type("r")
        assert terminal.settle() > 2000
        assert terminal.cells() == scrubbed


def test_the_same_screen_without_our_wire() -> None:
    with Terminal(APP, size=(100, 30)) as ours, Terminal([*APP, "plain"], size=(100, 30)) as theirs:
        for terminal in (ours, theirs):
            terminal.wait_for("local randomisation")
            for key in (RIGHT, RIGHT, LEFT, RIGHT):
                terminal.type(key)
                terminal.settle(quiet=0.1)
        assert ours.cells() == theirs.cells()


def test_a_held_key_queues_nothing_for_a_terminal_that_is_behind() -> None:
    with Terminal(APP, size=(100, 30)) as terminal:
        terminal.wait_for("local randomisation")
        terminal.settle()
        terminal.answers = False
        before = terminal.raw.count(QUERY)
        for _ in range(25):
            terminal.type(RIGHT)
            terminal.read(0.02)
        assert terminal.raw.count(QUERY) - before <= 2  # one frame, and at most one more after a second
        terminal.answers = True
        terminal.type("\x1b[1;1R")  # the late answer
        terminal.settle()
        width = 6.2 * 1.03**25
        assert f"width {width:.2f}" in terminal.text()


def test_a_terminal_that_never_answers_still_gets_everything() -> None:
    with Terminal(APP, size=(100, 30), answers=False) as terminal:
        terminal.wait_for("local randomisation")
        terminal.type(RIGHT)
        terminal.wait_for(f"width {6.2 * 1.03:.2f}", patience=5.0)


def test_resizing_leaves_no_remains() -> None:
    with Terminal(APP, size=(100, 30)) as terminal:
        terminal.wait_for("local randomisation")
        terminal.settle()
        terminal.resize(80, 24)
        terminal.settle()
        small = terminal.cells()
        terminal.type("r")
        terminal.settle()
        assert terminal.cells() == small
        assert "local randomisation" in terminal.text()


def test_coming_back_after_a_stop_draws_everything_anew() -> None:
    with Terminal(APP, size=(100, 30)) as terminal:
        terminal.wait_for("local randomisation")
        terminal.settle()
        before = terminal.cells()
        terminal.signal(signal.SIGTSTP)
        terminal.read(0.5)
        terminal.show("\x1b[2J\x1b[Hsomething else wrote here")
        terminal.signal(signal.SIGCONT)
        # Everything, however late a loaded machine wakes the program up; `wait_for` fails where it never comes.
        terminal.wait_for(lambda _: terminal.cells() == before)
        terminal.type(RIGHT)
        terminal.wait_for("width 6.39")


@pytest.mark.parametrize(
    ("environment", "size"),
    [
        ({"TERM": "xterm"}, (80, 24)),
        ({"TERM": "screen-256color"}, (80, 24)),
        ({"TERM": "dumb"}, (80, 24)),
        ({"NO_COLOR": "1"}, (80, 24)),
        ({"LANG": "C"}, (80, 24)),
        ({}, (40, 12)),
        ({}, (20, 6)),
    ],
    ids=lambda value: "-".join(map(str, value.items() if isinstance(value, dict) else value)),
)
def test_awkward_terminals(environment: dict[str, str], size: tuple[int, int]) -> None:
    with Terminal(APP, size=size, environment=environment) as terminal:
        terminal.wait_for("width 6.20" if size == (80, 24) else lambda text: bool(text.strip()))
        terminal.type(RIGHT)
        terminal.settle()
        if size == (80, 24):
            assert "width 6.39" in terminal.text()
        colours = set(re.findall(rb"\x1b\[0;[\d;]*?([34]8;[25];|[34][0-7]m)", bytes(terminal.raw)))
        if "NO_COLOR" in environment or environment.get("TERM") == "dumb":
            assert not colours
        if environment.get("TERM") == "xterm":
            assert not any(colour.startswith((b"38;", b"48;")) for colour in colours)
        assert b"Traceback" not in terminal.raw
