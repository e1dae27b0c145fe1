"""The weight of each unit: drawn and tabulated from the same numbers, at the width where the person stands."""

from __future__ import annotations

import re
from pathlib import Path

import golden
from bench_study import bench, make_study, press, settled, shown

from estimation.local_polynomial import fit_side
from study.analysis import Workbench
from study.document import load_study
from tui.look import DARK, Look
from tui.widgets.weights import WeightsChart


def of_one_unit(path: Path, width: float | None = None) -> dict[str, float]:
    """How many average units the nearest of a side counts as, by the row-wise fit."""
    line = Workbench.open(load_study(path)).line("light")
    at = line.bandwidths() if width is None else line.at(width)
    found = {}
    for name, side in line.sample.sides:
        fit = fit_side(side, bandwidth=at.of(name)[0], kernel="triangular", order=1)
        found[name] = float(fit.weights[0][0]) * fit.weights.shape[1]
    return found


async def test_the_picture_and_the_sentences_follow_the_width(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=(80, 24)) as pilot:
        await settled(pilot)
        await press(pilot, "e")
        text = shown(pilot)
        for name, counts in of_one_unit(path).items():
            assert (
                f"The nearest unit {name} the line counts as {counts:.2f} average ones of its side"
                in " ".join(text.split())
            )
        assert "━ estimate  ╌ bias-corrected" in text and "count against their own side" in text
        before = app.screen.query_one(WeightsChart).to_text()
        await press(pilot, "up")
        room = app.room
        assert room is not None and app.screen.query_one(WeightsChart).to_text() != before
        wanted = of_one_unit(path, room.width)  # type: ignore[attr-defined]
        assert f"{wanted['above']:.2f} average ones" in " ".join(shown(pilot).split())
        await press(pilot, "escape")
        assert "effect by bandwidth" in shown(pilot)


async def test_the_table_holds_what_is_drawn_and_both_signs(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=(100, 40)) as pilot:
        await settled(pilot)
        await press(pilot, "e", "t")
        rows = [line.replace("−", "-").replace("▸", "").split() for line in shown(pilot).splitlines()]
        rows = [row for row in rows if row and row[0] in ("below", "above") and len(row) == 8]
        below = [row for row in rows if row[0] == "below"]
        above = [row for row in rows if row[0] == "above"]
        # Each side's weights come to a hundred per cent, with the sign with which the side enters.
        for column in (6, 7):
            assert abs(sum(float(row[column]) for row in above) - 100) < 0.7
            assert abs(sum(float(row[column]) for row in below) + 100) < 0.7
        assert any(float(row[4]) < 0 for row in above) and any(float(row[4]) > 0 for row in below)
        effect = Workbench.open(load_study(path)).effect("light")
        assert sum(int(row[3]) for row in above) == effect.reading.count_above
        assert sum(int(row[3]) for row in below) == effect.reading.count_below


async def test_as_text_for_a_screen_reader(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=(100, 40)) as pilot:
        await settled(pilot)
        await press(pilot, "e", "v")
        text = shown(pilot)
        assert "as text" in text and re.search(r"above +50 +\d", text)


async def test_what_it_looks_like(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path), look=Look(theme=DARK))
    async with app.run_test(size=(80, 24)) as pilot:
        await settled(pilot)
        await press(pilot, "e")
        golden.check(app, "screen-weights-80x24")
