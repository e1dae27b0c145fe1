"""The Assignment screen: the line on the score."""

from __future__ import annotations

from pathlib import Path

from bench_study import STUDY, bench, make_study, press, settled, shown, type_text

from study.document import load_study

SIZE = (80, 24)


async def test_the_rule_and_the_counts_are_those_of_the_file(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    lines = [line.split(",") for line in (tmp_path / "homes.csv").read_text().splitlines()[1:]]
    need = [float(line[1]) for line in lines if line[1]]
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2")
        text = shown(pilot)
        assert "A unit is treated when its need is at or above 50." in text
        facts = {line.strip().split("  ")[0]: line.split() for line in text.splitlines()[-7:]}
        assert f"{sum(score < 50 for score in need)}" in facts["below"]
        assert f"{sum(score >= 50 for score in need)}" in facts["at or above"]
        assert f"{sum(score == 50 for score in need)}" in facts["on the line"]
        assert "18" in facts["without a score"]


async def test_arrows_move_the_line_and_enter_makes_it_the_studys(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2", "right", "right")
        assert "at or above 52." in shown(pilot)
        assert "The study's own cutoff is 50: Enter sets the line here, Esc puts it back." in shown(pilot)
        assert load_study(path).assignment.cutoff == 50.0
        await press(pilot, "escape")
        assert "at or above 50." in shown(pilot)
        await press(pilot, "up", "left", "enter")
        assert load_study(path).assignment.cutoff == 59.0
        assert "The line is the study's cutoff." in shown(pilot)
        await press(pilot, "u")
        assert load_study(path).assignment.cutoff == 50.0
        assert "at or above 50." in shown(pilot)


async def test_the_side_goes_round_and_moves_the_units_on_the_line(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2")
        seen = []
        for _ in range(4):
            await press(pilot, "s")
            seen.append(load_study(path).assignment.treated)
            assert f"is {seen[-1]} 50." in shown(pilot)
        assert seen == ["above", "at or below", "below", "at or above"]


async def test_a_typed_cutoff_outside_the_scores_is_refused(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2", "c")
        await type_text(pilot, "700")
        assert "Nobody would be on one side: scores go from 0 to 100." in shown(pilot)
        await type_text(pilot, "x")
        assert "“x” is not a number" in shown(pilot)
        await type_text(pilot, "61,5")
        assert load_study(path).assignment.cutoff == 61.5
        assert "61.5" in shown(pilot)


async def test_units_against_the_rule_are_counted(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY.replace('score = "need"', 'score = "need"\ntake_up = "lantern"'))
    rows = [line.split(",") for line in (tmp_path / "homes.csv").read_text().splitlines()[1:]]
    known = [(float(row[1]), row[4]) for row in rows if row[1]]
    without = sum(score >= 50 and took == "0" for score, took in known)
    taken = sum(score < 50 and took == "1" for score, took in known)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2")
        assert f"{without} treated without take-up, {taken} others with it" in shown(pilot)


async def test_zoom_and_the_numbers_behind_the_picture(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2", "z", "t")
        assert "How many have which need" in shown(pilot)
        assert app.desk is not None and app.desk.view.zoom == 1
        await press(pilot, "escape")
        assert "A unit is treated" in shown(pilot)


async def test_without_a_score_the_screen_says_where_to_go(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path, STUDY.replace('score = "need"', "")))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2")
        assert "There is no score yet" in shown(pilot)
        await press(pilot, "right")
        assert "There is no score to put a line on yet." in shown(pilot)


async def test_another_rule_is_shown_in_words_and_not_moved(tmp_path: Path) -> None:
    text = STUDY.replace('rule = "cutoff"', 'rule = "cutoffs"').replace("cutoff = 50.0", "")
    text = text.replace('score = "need"', 'score = "need"\nsite = "street"')
    path = make_study(tmp_path, text + '\n[assignment.sites]\n"street 1" = 40.0\n"street 2" = 50.0\n')
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2")
        assert "the cutoff of its street" in shown(pilot)
        await press(pilot, "right")
        assert "this version moves one cutoff only" in shown(pilot)
