"""Sealing a plan from the bench: the outcome is hidden before, shown after, and the act is recorded."""

from pathlib import Path

from bench_study import STUDY, bench, make_study, press, settled, shown

SIZE = (80, 24)


async def test_one_key_and_a_word_seal_the_plan_and_show_the_outcome(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY.replace("masked = false", "masked = true"))
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "3")
        await settled(pilot)
        assert "masked until the plan is sealed" in shown(pilot)
        assert "unsealed" in shown(pilot)
        await press(pilot, "S")
        assert "Seal the plan?" in shown(pilot)
        await press(pilot, *"no", "enter")
        assert "Type the word seal" in shown(pilot)
        assert not (tmp_path / "study.plan.json").exists()
        await press(pilot, "ctrl+u", *"seal", "enter")
        await settled(pilot)
        assert "Robust" in shown(pilot)
        assert "unsealed" not in shown(pilot)
    assert (tmp_path / "study.plan.json").exists()
    assert '"seal"' in (tmp_path / "study.ledger.jsonl").read_text()


async def test_a_sealed_plan_is_not_sealed_twice(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY.replace("masked = false", "masked = true"))
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "3", "S", *"seal", "enter")
        await settled(pilot)
        before = (tmp_path / "study.plan.json").read_bytes()
        await press(pilot, "S")
        assert "sealed already" in shown(pilot)
    assert (tmp_path / "study.plan.json").read_bytes() == before


async def test_a_choice_that_differs_from_the_plan_is_marked_and_its_return_unmarked(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY.replace("masked = false", "masked = true"))
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "3", "S", *"seal", "enter")
        await settled(pilot)
        assert "as planned" in shown(pilot) and "departs" not in shown(pilot)
        await press(pilot, "k")
        assert "departs from plan" in shown(pilot)
        await press(pilot, "right")  # looking elsewhere is no departure, and takes none away
        assert "departs from plan" in shown(pilot)
        await press(pilot, "u")
        assert "as planned" in shown(pilot)
