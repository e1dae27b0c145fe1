"""A small invented study for the tests of the bench, and how to wait for the work behind a screen."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from golden import screen_strips
from textual import events
from textual.pilot import Pilot

from tui.app import CutbankApp
from tui.look import Look
from tui.opening import desk_for

ROWS = 900
CUTOFF = 50.0
STUDY = """# kept: a comment of the person's own
[study]
title = "Lanterns in the lower town"
masked = false

[data]
path = "homes.csv"

[columns]
outcomes = ["light", "visits"]
score = "need"

[assignment]
rule = "cutoff"
treated = "at or above"
cutoff = 50.0
"""


def write_data(folder: Path) -> Path:
    """Homes with a need score in whole points; light jumps by 6 at 50, visits do not."""
    draw = np.random.default_rng(20)
    need = np.round(draw.uniform(0, 100, ROWS))
    light = 20 + 0.1 * need + 6.0 * (need >= CUTOFF) + draw.normal(0, 2.0, ROWS)
    visits = 3 + 0.02 * need + draw.normal(0, 1.0, ROWS)
    lantern = ((need >= CUTOFF) ^ (draw.uniform(0, 1, ROWS) < 0.1)).astype(int)
    street = draw.integers(1, 9, ROWS)
    lines = ["home,need,light,visits,lantern,street,kind"]
    for i in range(ROWS):
        known = "" if i % 50 == 0 else f"{need[i]:.0f}"
        lines.append(
            f"{i + 1},{known},{light[i]:.3f},{visits[i]:.3f},{lantern[i]},street {street[i]},{'old' if i % 3 else 'new'}"
        )
    path = folder / "homes.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def make_study(folder: Path, text: str = STUDY) -> Path:
    """Write the data and a study file, and return the latter's path."""
    write_data(folder)
    path = folder / "study.toml"
    path.write_text(text, encoding="utf-8")
    return path


def bench(path: Path | None, *, look: Look | None = None) -> CutbankApp:
    """The bench over a study, as `run` builds it."""
    return CutbankApp(None if path is None else desk_for(path), look=look or Look())


async def settled(pilot: Pilot[int]) -> None:
    """Wait until every slot has answered and the answer is drawn."""
    app = pilot.app
    assert isinstance(app, CutbankApp)
    for _ in range(10):
        await pilot.pause()
        if not app.busy:
            break
        await app.settle()


_NAMES = {
    " ": "space",
    ".": "full_stop",
    ",": "comma",
    ">": "greater_than_sign",
    "=": "equals_sign",
    "-": "minus",
}


async def press(pilot: Pilot[int], *keys: str) -> None:
    """Press keys one by one, each time waiting for what it sets off."""
    for key in keys:
        pilot.app.post_message(events.Key(key, key if len(key) == 1 else None))
        await settled(pilot)


async def type_text(pilot: Pilot[int], text: str, *, enter: bool = True) -> None:
    """Type text into a field, in place of what stands there; then Enter."""
    await press(pilot, "ctrl+u")
    for letter in text:
        pilot.app.post_message(events.Key(_NAMES.get(letter, letter), letter))
    await settled(pilot)
    if enter:
        await press(pilot, "enter")


def shown(pilot: Pilot[int]) -> str:
    """What stands on the screen; a blank that holds a number and its unit together is a blank."""
    return "\n".join(strip.text.rstrip() for strip in screen_strips(pilot.app)).replace(
        "\N{NO-BREAK SPACE}", " "
    )
