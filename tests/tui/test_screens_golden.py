"""What the screens look like, cell by cell: on purpose few, and only to notice a change that nobody meant."""

from __future__ import annotations

from pathlib import Path

import golden
import pytest
from bench_study import bench, make_study, press, settled

from tui.look import DARK, LIGHT, TERMINAL, Look

SIZES = ((80, 24), (120, 40))
PLACES = {"1": "data", "2": "assignment", "3": "effect"}
LOOKS = {
    "light": Look(theme=LIGHT),
    "sixteen": Look(theme=TERMINAL),
    "mono": Look(theme=DARK, colour=False),
    "ascii": Look(theme=DARK, ascii_only=True),
}


@pytest.mark.parametrize("size", SIZES, ids=["80x24", "120x40"])
@pytest.mark.parametrize("digit", PLACES)
async def test_a_screen_looks_as_it_did(tmp_path: Path, digit: str, size: tuple[int, int]) -> None:
    app = bench(make_study(tmp_path), look=Look(theme=DARK))
    async with app.run_test(size=size) as pilot:
        await settled(pilot)
        await press(pilot, digit)
        golden.check(app, f"screen-{PLACES[digit]}-{size[0]}x{size[1]}")


@pytest.mark.parametrize("name", LOOKS)
async def test_the_effect_looks_as_it_did_in_other_modes(tmp_path: Path, name: str) -> None:
    app = bench(make_study(tmp_path), look=LOOKS[name])
    async with app.run_test(size=(80, 24)) as pilot:
        await settled(pilot)
        await press(pilot, "right")
        golden.check(app, f"screen-effect-80x24-{name}")
