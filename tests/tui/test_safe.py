"""Text from data is shown literally and harms nothing: three layers, and a watch that nobody goes round them."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest
from golden import screen_strips
from pty_harness import Terminal, python
from rich.segment import Segment
from rich.style import Style
from textual.app import ComposeResult
from textual.color import Color
from textual.widget import Widget

from tui.look import Look
from tui.safe import Choices, ControlGuard, Entry, SafeApp, Words, literal
from tui.widgets.answers import Answer, AnswerTable
from tui.widgets.chart import EffectChart
from tui.widgets.form import Choice, ChoiceForm
from tui.widgets.histogram import ScoreHistogram
from tui.widgets.sweep import SweepChart
from tui.widgets.table import Column, VTable

TUI = Path(__file__).resolve().parents[2] / "tui"

PAYLOADS = {
    "markup": "[bold red]x[/]",
    "broken markup": "a[/b]",
    "link": "[link=http://evil.example]y[/link]",
    "action": "[@click=app.bell]z[/]",
    "erase": "\x1b[2J",
    "clipboard": "\x1b]52;c;aGk=\x07",
    "c1": "\x9b2J",
    "bidi": "abc\u202edef",
    "hidden": "in\u200bvisible\U000e0041",
    "newline": "two\nlines\r\tand a tab",
    "surrogate": "half \ud800 char",
}
STEERS = {chr(code) for code in [*range(0x20), *range(0x7F, 0xA0)]} | set("\u202e\u200b\U000e0041\ud800")


def every_widget(words: str) -> list[Widget]:
    """Every place where text from data can appear, with this text in it."""
    from gallery import fits, means, sweep

    table = VTable(empty=words)
    table.set_rows(
        [Column(key="a", title=words), Column(key="b", title="b", align="decimal")], [(words, words)]
    )
    form = ChoiceForm()
    form.set_choices([Choice(key="k", label=words, value=words, allowed=(words, "other"), help=words)])
    answers = AnswerTable()
    answers.set_answers([Answer(name=words, estimate=1.0, low=0.5, high=1.5, note=words)])
    chart, swept, histogram = EffectChart(), SweepChart(), ScoreHistogram()
    chart.set_data(bins=means(), curve=fits(6.0), reach=15.0, label=words, score=words)
    swept.set_data(sweep=sweep(), label=words)
    swept.set_marks([(4.0, words)])
    from gallery import histogram as some_histogram

    known = some_histogram()._histogram
    assert known is not None
    histogram.set_data(histogram=known, cutoff=50.0, score=words)
    empty = EffectChart()
    empty.say(words)
    return [
        Words(words),
        Choices([("k", words)]),
        Entry(placeholder=words),
        Entry(value=words),
        table,
        form,
        answers,
        chart,
        swept,
        histogram,
        empty,
    ]


class EveryWidget(SafeApp[None]):
    ENABLE_COMMAND_PALETTE = False
    CSS = "Screen > * { height: 9 } Choices { border: none }"

    def __init__(self, words: str) -> None:
        super().__init__(look=Look())
        self._words = words

    def compose(self) -> ComposeResult:
        yield from every_widget(self._words)


@pytest.mark.parametrize("payload", PAYLOADS)
async def test_every_payload_is_harmless_in_every_widget(payload: str) -> None:
    words = PAYLOADS[payload]
    app = EveryWidget(words)
    async with app.run_test(size=(100, 120)) as pilot:
        await pilot.pause()
        strips = screen_strips(app)
        shown = [segment for strip in strips for segment in strip]
        assert not STEERS & set("".join(segment.text for segment in shown))
        assert all(segment.style is not None for segment in shown)
        assert not any(
            segment.style.link or segment.style.meta.get("@click") for segment in shown if segment.style
        )
        if words.startswith("["):
            for widget in app.screen.children:
                rows = range(widget.region.y, widget.region.bottom)
                text = "".join(strips[y].text for y in rows)
                assert words in text, f"markup is shown as it is in {widget}"


async def test_a_notice_is_literal() -> None:
    app = EveryWidget("x")
    async with app.run_test(size=(100, 12), notifications=True) as pilot:
        app.notify("a[/b] [@click=app.bell]z[/] \x1b[2J", title="[red]t[/]")
        await pilot.pause()
        await pilot.pause()
        text = "".join(segment.text for strip in screen_strips(app) for segment in strip)
        assert "a[/b] [@click=app.bell]z[/]" in text
        assert "[red]t[/]" in text
        assert not STEERS & set(text)


def test_the_guard_is_the_last_layer_and_gives_every_segment_a_style() -> None:
    segments = [Segment("ok", Style(bold=True)), Segment("\x1b[2J", None), Segment("a\u202eb", Style())]
    found = ControlGuard().apply(segments, Color(0, 0, 0))
    assert found[0] is segments[0]
    assert [segment.text for segment in found] == ["ok", "\ufffd[2J", "a\ufffdb"]
    assert all(segment.style is not None for segment in found)


def test_literal_keeps_brackets() -> None:
    assert literal("[b]x[/b]").plain == "[b]x[/b]"


def test_nothing_harmful_is_seen_on_the_wire() -> None:
    with Terminal(python("tests/tui/wire_app.py"), size=(100, 30)) as terminal:
        terminal.wait_for("local randomisation")
        terminal.settle()
        before = len(terminal.raw)
        terminal.type("n")
        terminal.wait_for("[@click=app.bell]z[/]")
        after = bytes(terminal.raw[before:])
        assert b"\x1b[2J" not in after
        assert b"\x1b]52" not in after
        assert b"\x07" not in after


@pytest.mark.parametrize("key", ["x", "k", "f"], ids=["in a key", "showing an answer", "telling a failure"])
def test_a_crash_shows_no_data(key: str) -> None:
    with Terminal(python("tests/tui/wire_app.py"), size=(100, 30)) as terminal:
        terminal.wait_for("local randomisation")
        terminal.type(key)
        terminal.settle(quiet=0.6)
        assert b"stopped because of a mistake in the program (RuntimeError)" in terminal.raw
        assert b"Alder Street" not in terminal.raw
        assert b"secret_record" not in terminal.raw
        assert b"\x1b[?1049l" in terminal.raw, "the terminal is given back"


# ---- nobody goes round the layers -----------------------------------------------------------------------------

RAW = {
    "Button", "Checkbox", "Collapsible", "DataTable", "Digits", "DirectoryTree", "Input", "Label", "Link", "ListItem",
    "ListView", "Log", "Markdown", "MarkdownViewer", "MaskedInput", "OptionList", "Pretty", "RadioButton", "RadioSet", "RichLog",
    "Select", "SelectionList", "Static", "Switch", "TabPane", "TabbedContent", "Tabs", "TextArea", "Toast", "Tree",
}  # fmt: skip


def raw_uses(source: str) -> list[str]:
    """What a module builds from the toolkit's raw classes, or writes where markup is read."""
    found = []
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Call):
            name = node.func.id if isinstance(node.func, ast.Name) else getattr(node.func, "attr", "")
            if name in RAW:
                found.append(f"line {node.lineno}: {name}(...)")
            if name == "from_markup" and not (node.args and isinstance(node.args[0], ast.Constant)):
                found.append(f"line {node.lineno}: markup from something that is not written out")
            if any(
                word.arg == "markup" and getattr(word.value, "value", None) is not False
                for word in node.keywords
            ):
                found.append(f"line {node.lineno}: markup switched on")
        if isinstance(node, ast.ClassDef):
            found += [
                f"line {node.lineno}: a kind of {b.id}"
                for b in node.bases
                if isinstance(b, ast.Name) and b.id in RAW
            ]
        if isinstance(node, ast.Assign):
            for target in node.targets:
                if getattr(target, "attr", "") in ("border_title", "border_subtitle", "tooltip"):
                    found.append(f"line {node.lineno}: {target.attr} reads markup")  # type: ignore[attr-defined]
    return found


def test_the_watch_sees_what_it_should() -> None:
    assert raw_uses("Static('x')") == ["line 1: Static(...)"]
    assert raw_uses("widgets.Label(name)")
    assert raw_uses("class A(OptionList): pass")
    assert raw_uses("self.border_title = name")
    assert raw_uses("Content.from_markup(name)")
    assert raw_uses("self.notify('x', markup=True)")
    assert not raw_uses("Content.from_markup('[b]$x[/b]', x=name)")
    assert not raw_uses("Words(name)")


@pytest.mark.parametrize("path", sorted(TUI.rglob("*.py")), ids=lambda path: str(path.relative_to(TUI)))
def test_no_raw_widgets(path: Path) -> None:
    if path == TUI / "safe.py":
        return
    assert raw_uses(path.read_text(encoding="utf-8")) == [], "build it with the constructors of tui.safe"
