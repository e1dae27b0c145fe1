"""Every widget with invented data, as small apps: for pictures, golden files and the byte budgets."""

from __future__ import annotations

import sys
from collections.abc import Callable
from types import SimpleNamespace

import numpy as np
from textual.app import ComposeResult
from textual.widget import Widget

from tui.look import DARK, LIGHT, TERMINAL, Ink, Look
from tui.safe import SafeApp, Words
from tui.widgets.answers import Answer, AnswerTable
from tui.widgets.cells import shape
from tui.widgets.chart import EffectChart
from tui.widgets.form import Choice, ChoiceForm
from tui.widgets.histogram import ScoreHistogram
from tui.widgets.sweep import SweepChart
from tui.widgets.table import Column, VTable

LOOKS = {
    "dark": Look(theme=DARK),
    "light": Look(theme=LIGHT),
    "sixteen": Look(theme=TERMINAL),
    "mono": Look(theme=DARK, colour=False),
}


def means(reach: float = 15.0) -> SimpleNamespace:
    """Invented means: a slope, a jump of a quarter, and noise."""
    draw = np.random.default_rng(7)

    def side(sign: int) -> SimpleNamespace:
        centre = sign * (np.arange(20) + 0.5) * reach / 20
        mean = 0.3 + 0.02 * centre + (0.25 if sign > 0 else 0.0) + draw.normal(0, 0.035, 20)
        return SimpleNamespace(centre=centre, mean=mean, count=np.full(20, 31))

    return SimpleNamespace(below=side(-1), above=side(1))


def fits(width: float) -> SimpleNamespace:
    """An invented fit, whose band narrows as the window widens."""

    def side(sign: int) -> SimpleNamespace:
        x = np.linspace(-width, 0.0, 90) if sign < 0 else np.linspace(0.0, width, 90)
        fit = 0.3 + (0.02 + 0.05 / width) * x + (0.25 if sign > 0 else 0.0)
        half = (0.02 + 0.12 * (np.abs(x) / width - 0.45) ** 2) * np.sqrt(6.0 / width)
        return SimpleNamespace(x=x, fit=fit, low=fit - half, high=fit + half)

    return SimpleNamespace(below=side(-1), above=side(1))


def sweep() -> SimpleNamespace:
    """An invented sweep over 120 widths."""
    width = np.geomspace(1.2, 15.0, 120)
    estimate = 0.25 + 0.08 * np.sin(3 * np.log(width)) / width + 0.004 * (width - 4)
    half = 0.32 / np.sqrt(width)
    return SimpleNamespace(bandwidth=width, estimate=estimate, low=estimate - half, high=estimate + half)


def at_width(width: float) -> dict[str, float]:
    """The invented sweep at one width."""
    whole = sweep()
    return {
        "bandwidth": width,
        "estimate": float(np.interp(width, whole.bandwidth, whole.estimate)),
        "low": float(np.interp(width, whole.bandwidth, whole.low)),
        "high": float(np.interp(width, whole.bandwidth, whole.high)),
    }


def effect_chart(width: float = 6.2) -> EffectChart:
    """The effect's picture."""
    chart = EffectChart()
    show_width(chart, width)
    return chart


def show_width(chart: EffectChart, width: float) -> None:
    """Show one width, as a scrubbing person does."""
    chart.set_data(
        bins=means(), curve=fits(width), reach=15.0, bandwidth=(width, width), cutoff=52.0, label="admissions a year",
        score="heat_burden",
    )  # fmt: skip


def sweep_chart() -> SweepChart:
    """The sweep's picture."""
    chart = SweepChart()
    chart.set_data(sweep=sweep(), label="effect on admissions a year")
    chart.set_marks([(4.1, "best")])
    chart.set_here(**at_width(6.2))
    return chart


def histogram(cutoff: float = 52.0) -> ScoreHistogram:
    """A lumpy score with a line on it."""
    draw = np.random.default_rng(3)
    score = np.clip(draw.normal(49, 9, 3000), 20, 80)
    score = np.where(draw.random(3000) < 0.25, np.round(score / 5) * 5, score)
    counts, edges = np.histogram(score, bins=np.arange(20.0, 80.5, 1.0))
    below, above = int((score < cutoff).sum()), int((score >= cutoff).sum())
    widget = ScoreHistogram()
    widget.set_data(
        histogram=SimpleNamespace(edges=edges, counts=counts, on_line=0, below=below, above=above),
        cutoff=cutoff, treated="above", score="heat_burden", cutoff_moves=True,
    )  # fmt: skip
    return widget


def table() -> VTable:
    """A table of columns."""
    draw = np.random.default_rng(5)
    names = [
        "heat_burden",
        "admissions",
        "district",
        "[bold]street[/]",
        "grant",
        "head_age",
        "rooms",
        "größe",
        "温度",
    ]
    kinds = ["number", "whole number", "text", "text", "yes/no"]
    rows = [
        (
            names[index % 9] + ("" if index < 9 else f"_{index // 9}"),
            (kinds[index % 5], Ink.MUTED),
            f"{int(draw.integers(0, 400)):,}" if index % 3 else ("none", Ink.FAINT),
            f"{draw.normal(0, 40):.{index % 4}f}",
            f"{draw.normal(900, 400):,.{(index + 1) % 3}f}",
            (shape(draw.integers(0, 40, 12).tolist(), Look()), Ink.MUTED),
        )
        for index in range(60)
    ]
    view = VTable(id="columns")
    view.set_rows(
        [
            Column(key="name", title="column", widest=24),
            Column(key="kind", title="type"),
            Column(key="missing", title="missing", align="right"),
            Column(key="low", title="lowest", align="decimal"),
            Column(key="high", title="highest", align="decimal"),
            Column(key="shape", title="shape"),
        ],
        rows,
    )
    return view


def answers() -> AnswerTable:
    """Three answers that nearly agree."""
    view = AnswerTable()
    view.set_answers(
        [
            Answer(name="robust bias-corrected", estimate=0.247, low=0.121, high=0.371, chosen=True),
            Answer(name="bias-aware", estimate=0.258, low=0.097, high=0.419, note="curvature at most 0.0031"),
            Answer(name="local randomisation", estimate=0.31, low=0.18, high=0.44, note="window -1.2 to 1.2"),
        ]
    )
    return view


def form() -> ChoiceForm:
    """The choices of an estimate."""
    view = ChoiceForm()
    view.set_choices(
        [
            Choice(key="bandwidth", label="bandwidth", value="mse", allowed=("mse", "coverage", "bias-aware"),
                   typed="number", help="how close is close: a rule, or a number in the score's units"),
            Choice(key="kernel", label="kernel", value="triangular", allowed=("triangular", "uniform", "epanechnikov"),
                   help="how weight falls with distance from the cutoff"),
            Choice(key="order", label="order", value="1", allowed=("0", "1", "2", "3"), help="degree of the local fit"),
            Choice(key="interval", label="interval", value="robust", allowed=("robust", "bias-aware", "plain"),
                   help="which interval is drawn and quoted first"),
            Choice(key="donut", label="donut", value="0", typed="number", help="leave out scores closer than this"),
            Choice(key="cluster", label="cluster", value="none", allowed=("none",), why_not="no column has this role yet"),
        ]
    )  # fmt: skip
    return view


GALLERY: dict[str, Callable[[], list[Widget]]] = {
    "effect": lambda: [effect_chart()],
    "sweep": lambda: [sweep_chart()],
    "histogram": lambda: [histogram()],
    "table": lambda: [table()],
    "answers": lambda: [answers(), form()],
    "bench": lambda: [
        effect_chart(),
        sweep_chart(),
        Words("Being just above the line changed admissions."),
        answers(),
    ],
}


class GalleryApp(SafeApp[None]):
    """One page of the gallery."""

    ENABLE_COMMAND_PALETTE = False

    def __init__(self, page: str, *, look: Look | None = None) -> None:
        super().__init__(look=look)
        self._page = page

    def compose(self) -> ComposeResult:
        """Compose the page."""
        yield from GALLERY[self._page]()

    def on_mount(self) -> None:
        """Focus what can be focused."""
        for widget in self.query("ScoreHistogram, CursorView"):
            widget.focus()
            break


if __name__ == "__main__":
    GalleryApp(sys.argv[1]).run()
