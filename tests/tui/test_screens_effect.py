"""The Effect screen by keyboard: the words on screen are those of the workbench, at the width that the keys lead to."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from bench_study import STUDY, bench, make_study, press, settled, shown, type_text

from study.analysis import Workbench
from study.document import load_study
from study.wording import effect_headline
from tui.screens.effect import EffectScreen
from tui.screens.widths import next_width

SIZE = (80, 24)


def headline(path: Path, width: float | None = None, outcome: str = "light") -> str:
    """What the headless program says of this study at a width."""
    said = effect_headline(Workbench.open(load_study(path)).effect(outcome, width))
    return said.partition("  ")[0].replace("\N{NO-BREAK SPACE}", " ")


async def test_the_demo_opens_on_its_effect_with_three_answers(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        text = shown(pilot)
        assert headline(path) in text
        assert "the study's own width (MSE-optimal)" in text
        for name in ("Robust", "Bias-aware", "Randomisation", "○ below", "■ above", "effect by bandwidth"):
            assert name in text


async def test_arrows_change_the_width_and_the_words_with_it(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        room = app.room
        assert isinstance(room, EffectScreen) and room.prepared is not None
        own = room.prepared.own.below
        await press(pilot, "right", "right", "up")
        wanted = next_width(next_width(own, 2), 10)
        assert room.width == wanted
        assert headline(path, wanted) in shown(pilot)
        assert f"within {wanted:g}" in shown(pilot)
        assert f"not the study's {own:.4g}: Enter keeps it" in shown(pilot)
        effect = Workbench.open(load_study(path)).effect("light", wanted)
        assert f"{effect.reading.count_below} below, {effect.reading.count_above} above" in shown(pilot)
        assert load_study(path).estimate.bandwidth == "mse"  # looking changes nothing
        await press(pilot, "escape")
        assert room.width is None and headline(path) in shown(pilot)


async def test_the_reading_is_on_screen_before_the_slow_part_has_run(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        room = app.room
        assert isinstance(room, EffectScreen)
        room.do_much_wider()  # nothing is awaited between the key and the look
        assert room.standing is not None and room.standing.pending
        assert room.standing.effect.bandwidths.below == room.width
        await settled(pilot)
        assert not room.standing.pending


async def test_a_width_is_kept_saved_and_undone(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "down", "enter")
        kept = load_study(path).estimate.bandwidth
        assert isinstance(kept, float)
        assert "the study's own width" in shown(pilot) and f"within {kept:g}" in shown(pilot)
        await press(pilot, "b")  # back to what the rule would choose, without changing the study
        assert "The MSE-optimal width" in shown(pilot)
        assert load_study(path).estimate.bandwidth == kept
        await press(pilot, "escape", "u")
        assert load_study(path).estimate.bandwidth == "mse"
        assert "Taken back: bandwidth is now mse." in shown(pilot)


async def test_a_typed_width_and_its_refusals(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "w")
        await type_text(pilot, "-3")
        assert "“-3” is not a width" in shown(pilot)
        await type_text(pilot, "400")
        assert "No score is that far from the line: the farthest is 50 away." in shown(pilot)
        await type_text(pilot, "12,5")
        assert headline(path, 12.5) in shown(pilot) and "within 12.5" in shown(pilot)


async def test_a_width_too_narrow_to_fit_says_so_and_stays_usable(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "w")
        await type_text(pilot, "0.5")
        assert "distinct score" in shown(pilot)
        await press(pilot, "escape")
        assert headline(path) in shown(pilot)


@pytest.mark.parametrize(
    ("key", "name", "values"),
    [
        ("k", "kernel", ["uniform", "epanechnikov", "triangular"]),
        ("p", "order", [2, 3, 0, 1]),
        ("i", "interval", ["bias-aware", "plain", "robust"]),
    ],
)
async def test_keys_walk_through_the_choices(
    tmp_path: Path, key: str, name: str, values: list[object]
) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        for value in values:
            await press(pilot, key)
            assert getattr(load_study(path).estimate, name) == value
            assert headline(path) in shown(pilot)


async def test_a_choice_that_contradicts_another_is_refused_in_words(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY + '\n[estimate]\ninterval = "bias-aware"\norder = 3\n')
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "p")  # the next order is 0, which has no bias-aware interval
        assert "comparison of means" in shown(pilot)
    assert load_study(path).estimate.order == 3


async def test_the_donut_is_typed_and_leaves_rows_out(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "d")
        await type_text(pilot, "1.5")
        assert load_study(path).estimate.donut == 1.5
        assert "donut 1.5" in shown(pilot) and headline(path) in shown(pilot)


async def test_another_outcome_has_a_width_of_its_own(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "right", "o")
        assert headline(path, outcome="visits") in shown(pilot)
        assert "the study's own width" in shown(pilot)
        await press(pilot, "o")
        assert "Enter keeps it" in shown(pilot)  # the first outcome is where it was left


async def test_the_form_shows_and_changes_every_choice(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "f")
        text = shown(pilot)
        for label in (
            "bandwidth",
            "pilot",
            "kernel",
            "order",
            "interval",
            "level",
            "variance",
            "curvature",
            "donut",
        ):
            assert re.search(rf"^\s*▸?\s*{label}", text, re.MULTILINE), label
        assert headline(path) in text
        await press(pilot, "down", "down", "right")
        assert load_study(path).estimate.kernel == "uniform"
        assert headline(path) in shown(pilot)
        await press(pilot, "up", "up", "7", "enter")
        assert load_study(path).estimate.bandwidth == 7.0
        await press(pilot, "u", "escape")
        assert load_study(path).estimate.bandwidth == "mse"
        assert "effect by bandwidth" in shown(pilot)


async def test_the_numbers_behind_both_pictures(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=(80, 60)) as pilot:
        await settled(pilot)
        room = app.room
        assert isinstance(room, EffectScreen) and room.prepared is not None and room.reach is not None
        bins = room.prepared.workbench.bins("light", room.reach, 20)
        await press(pilot, "t")
        assert "Means of light around the line" in shown(pilot)
        rows = [line for line in shown(pilot).splitlines() if re.match(r"\W*(below|above) ", line)]
        assert len(rows) == len(bins.below.count) + len(bins.above.count)
        assert sum(int(row.split()[-1].replace(",", "")) for row in rows) == sum(bins.below.count) + sum(
            bins.above.count
        )
        await press(pilot, "tab")
        assert "Effect on light by bandwidth, 95 % robust interval" in shown(pilot)
        await press(pilot, "escape")
        assert "effect by bandwidth" in shown(pilot)


async def test_what_was_looked_at_can_be_gone_back_to(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        room = app.room
        assert isinstance(room, EffectScreen)
        await press(pilot, "up")
        there = room.width
        await press(pilot, "k", "escape", "l")
        assert "Looked at in this sitting" in shown(pilot)
        seen = [found.width for found in reversed(room.seen)]
        steps = next(
            i
            for i, found in enumerate(reversed(room.seen))
            if found.effect.choices.kernel == "triangular" and found.width == there
        )
        assert there in seen
        await press(pilot, *["down"] * steps, "enter")
        assert room.width == there
        assert load_study(path).estimate.kernel == "triangular"


async def test_plain_text_and_help_pages(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=(100, 60)) as pilot:
        await settled(pilot)
        await press(pilot, "v")
        text = " ".join(shown(pilot).split())
        assert "light differs by +" in text and "leads; local polynomial" in text
        await press(pilot, "v", "question_mark")
        assert "How close to the line counts as close." in shown(pilot)
        assert "Not now: you stand at the study's own width" in " ".join(shown(pilot).split())
        await press(pilot, "escape", "f2")
        await pilot.press(*"redraw")
        await settled(pilot)
        assert "F5" in shown(pilot)


async def test_an_incomplete_study_says_what_is_missing(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY.replace("cutoff = 50.0", ""))
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "3")
        assert "no cutoff is given" in shown(pilot)
        await press(pilot, "right")
        assert "There is no effect to look at yet." in shown(pilot)


async def test_a_fuzzy_study_echoes_the_width_while_it_works(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY.replace('score = "need"', 'score = "need"\ntake_up = "lantern"'))
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        room = app.room
        assert isinstance(room, EffectScreen) and room.prepared is not None
        assert "per unit of take-up" in shown(pilot)
        object.__setattr__(room.prepared, "at_once", False)
        room.do_wider()
        assert room.standing is not None and room.standing.going_to == room.width
        await settled(pilot)
        assert room.standing.going_to is None and room.standing.effect.bandwidths.below == room.width
