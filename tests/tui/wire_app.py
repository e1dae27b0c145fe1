"""The app that the terminal tests drive: a chart, a sweep, a status line, a table."""

from __future__ import annotations

import sys
from collections.abc import Callable
from typing import ClassVar

from gallery import answers, at_width, effect_chart, show_width, sweep_chart, table
from textual.app import ComposeResult

import tui.wire
from tui.safe import SafeApp, Words
from tui.slot import Slot
from tui.widgets.chart import EffectChart
from tui.widgets.sweep import SweepChart


class WireTestApp(SafeApp[None]):
    """left and right change the width, s starts a status line at 2 Hz, r repaints everything, x, k and f crash."""

    ENABLE_COMMAND_PALETTE = False
    AUTO_FOCUS = None
    BINDINGS: ClassVar = [
        ("left", "width(-1)"), ("right", "width(1)"), ("s", "status"), ("r", "redraw"), ("x", "crash"), ("q", "quit"),
        ("t", "table"), ("n", "notice"), ("k", "crash_showing"), ("f", "crash_failing"),
    ]  # fmt: skip
    CSS = (
        "EffectChart { height: 2fr } SweepChart { height: 1fr } Words { height: 1 } VTable { display: none }"
    )

    def compose(self) -> ComposeResult:
        """Compose."""
        yield effect_chart()
        yield sweep_chart()
        yield Words("width 6.20", id="width")
        yield Words("ready", id="status")
        yield answers()
        yield table()

    def on_mount(self) -> None:
        """Begin."""
        self.steps = 0
        self.ticks = 0

    def action_width(self, step: int) -> None:
        """Change the width by a share, as the bench does."""
        self.steps += step
        width = 6.2 * 1.03**self.steps
        show_width(self.query_one(EffectChart), width)
        self.query_one(SweepChart).set_here(**at_width(width))
        self.query_one("#width", Words).show(f"width {width:.2f}")

    def action_status(self) -> None:
        """Count progress twice a second."""

        def tick() -> None:
            self.ticks += 1
            self.query_one("#status", Words).show(
                f"permutation {self.ticks * 250:,} of 20,000, about {40 - self.ticks} s left"
            )

        self.set_interval(0.5, tick)

    def action_table(self) -> None:
        """Show the table instead of the charts."""
        self.query("EffectChart, SweepChart").set(display=False)
        view = self.query_one("VTable")
        view.display = True
        view.focus()

    def action_notice(self) -> None:
        """Say something with harmful text in it."""
        self.notify("a[/b] \x1b[2J \x1b]52;c;aGk=\x07 [@click=app.bell]z[/]", timeout=60)

    def action_crash(self) -> None:
        """Fail, with a datum in a local variable."""
        secret_record = "Alder Street 7"
        raise RuntimeError(f"could not place {secret_record}")

    def action_crash_showing(self) -> None:
        """Fail where a slot's answer is shown, in a task that nobody waits for."""
        self.slot: Slot[int, int] = Slot(
            "count", lambda request, should_stop: request, show=self._crash, failed=self._crash
        )
        self.slot.ask(1)

    def action_crash_failing(self) -> None:
        """Fail where a slot's failure is told."""

        def work(request: int, should_stop: Callable[[], bool]) -> int:
            raise ValueError("no answer")

        self.slot = Slot("count", work, show=self._crash, failed=self._crash)
        self.slot.ask(1)

    def _crash(self, request: int, answer: object) -> None:
        self.action_crash()


if __name__ == "__main__":
    if "plain" in sys.argv:
        tui.wire.WORKS_HERE = False  # as with a version of Textual that was never tested
    WireTestApp().run(mouse=False)
