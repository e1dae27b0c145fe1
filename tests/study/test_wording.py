"""Numbers said in words."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from estimation.effect import Effect
from estimation.randomisation import Randomisation
from study.analysis import Workbench
from study.disagreement import disagreement, remarks
from study.document import edit, load_study
from study.page import result_lines
from study.wording import answers_table, effect_sentence, figure, p_text, pieces_text, rule_sentence

INFINITE = math.inf


@pytest.mark.parametrize(
    ("value", "spread", "said"),
    [
        (3.14159, 0.52, "3.14"),
        (3.14159, 5.2, "3.1"),
        (1234.5, 52.0, "1,234"),
        (-0.004, 0.52, "0.00"),
        (-1.5, 0.1, "−1.50"),
        (0.00012345, 0.000011, "0.000123"),
        (INFINITE, 1.0, "∞"),
        (-INFINITE, 1.0, "−∞"),
        (math.nan, 1.0, "–"),
        (0.0123456, math.nan, "0.01235"),
        (123456.0, 2300.0, "123,500"),
    ],
)
def test_a_number_has_two_digits_of_its_spread(value: float, spread: float, said: str) -> None:
    assert figure(value, spread) == said


def test_signs_are_true_signs() -> None:
    assert figure(2.0, 1.0, sign=True) == "+2.0"
    assert figure(-2.0, 1.0, sign=True) == "−2.0"
    assert figure(0.001, 1.0, sign=True) == "0.0"


def test_p_values() -> None:
    assert [p_text(p) for p in (0.0001, 0.0461, 1.0, math.nan)] == [
        "p < 0.001",
        "p = 0.046",
        "p = 1.000",
        "p unknown",
    ]


@pytest.mark.parametrize(
    ("pieces", "said"),
    [
        ((), "empty: no ratio fits both jumps"),
        (((-INFINITE, INFINITE),), "everything: take-up says nothing here"),
        (((1.0, 2.0),), "1.00 to 2.00"),
        (((-INFINITE, -1.0), (3.0, INFINITE)), "below −1.00 or above 3.00"),
    ],
)
def test_sets_of_ratios(pieces: tuple[tuple[float, float], ...], said: str) -> None:
    assert pieces_text(pieces, 1.0, 0.2) == said


def bench(
    folder: Path, *, binary: bool = False, treated: str = "at or above", name: str = "visits"
) -> Workbench:
    rng = np.random.default_rng(8)
    score = rng.uniform(0.0, 100.0, 1200)
    y = 10 + 0.05 * score + 3.0 * (score >= 50) + rng.normal(0, 1.0, 1200)
    if binary:
        y = (rng.uniform(size=1200) < 0.2 + 0.3 * (score >= 50)).astype(float)
    lines = [f'need,"{name}"'] + [f"{s:.4f},{v:.5f}" for s, v in zip(score, y)]
    (folder / "people.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    path = folder / "study.toml"
    path.write_text(
        f"[study]\ntitle = 'Visits'\nmasked = false\n[data]\npath = 'people.csv'\n[columns]\n"
        f"outcomes = ['{name}']\nscore = 'need'\n[assignment]\nrule = 'cutoff'\ntreated = '{treated}'\ncutoff = 50.0\n",
        encoding="utf-8",
    )
    return Workbench.open(load_study(path))


def test_the_rule_in_words(tmp_path: Path) -> None:
    study = bench(tmp_path).study
    assert rule_sentence(study) == "A unit is treated when its need is at or above 50."
    below = edit(study, {"assignment.treated": "below"})
    assert rule_sentence(below) == "A unit is treated when its need is below 50."


def test_the_sentence_carries_the_numbers_of_the_effect(tmp_path: Path) -> None:
    here = bench(tmp_path)
    effect = here.effect("visits")
    sentence = effect_sentence(effect, here.study)
    spread = effect.reading.robust.std_error
    for number in (
        figure(effect.reading.estimate, spread, sign=True),
        figure(effect.reading.robust.low, spread),
        figure(effect.reading.robust.high, spread),
        f"{effect.reading.count_below:,} rows below",
    ):
        assert number in sentence
    assert "the interval excludes zero" in sentence
    assert "At need 50, visits differs by" in sentence


def test_levels_are_named_from_the_untreated_side_to_the_treated(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    for folder, treated, start in (("a", "at or above", "below"), ("b", "below", "above")):
        effect = bench(tmp_path / folder, treated=treated).effect("visits")
        reading = effect.reading
        first, last = (
            (reading.levels_below, reading.levels_above)
            if start == "below"
            else (reading.levels_above, reading.levels_below)
        )
        spread = reading.std_error
        study = bench(tmp_path / folder, treated=treated).study
        assert f"from {figure(first, spread)} to {figure(last, spread)}" in effect_sentence(effect, study)


def test_a_binary_outcome_is_in_percentage_points(tmp_path: Path) -> None:
    here = bench(tmp_path, binary=True)
    effect = here.effect("visits")
    assert effect.binary
    said = figure(100 * effect.reading.estimate, 100 * effect.reading.robust.std_error, sign=True)
    assert f"{said} percentage points" in effect_sentence(effect, here.study)
    assert answers_table(effect)[0].numbers[0] == pytest.approx(100 * effect.reading.robust.estimate)


def test_text_from_data_is_harmless_on_the_page(tmp_path: Path) -> None:
    name = "vis\x1b[2Jits"
    here = bench(tmp_path, name="[b]visits[/b]")
    page = "\n".join(result_lines(here.run(), here))
    assert "[b]visits[/b]" in page
    assert "\x1b" not in page
    assert name not in page


def test_the_page_fits_its_width_and_says_what_it_rests_on(tmp_path: Path) -> None:
    here = bench(tmp_path)
    for width in (80, 120):
        lines = result_lines(here.run(), here, width=width)
        assert max(len(line) for line in lines) <= width
        text = "\n".join(lines)
        for part in ("Robust", "Bias-aware", "Randomisation", "1,200 rows read", "disclosure review"):
            assert part in text


def test_a_plain_page_draws_with_ascii_marks(tmp_path: Path) -> None:
    here = bench(tmp_path)
    picture = result_lines(here.run(), here, plain=True)
    assert not any("○" in line or "■" in line for line in picture)


def with_randomisation(effect: Effect, low: float, high: float, window: float = 2.0) -> Effect:
    drawn = Randomisation(
        window=(-window, window),
        below=30,
        above=30,
        estimate=0.5 * (low + high),
        intention=0.5 * (low + high),
        hodges_lehmann=0.5 * (low + high),
        p_value=0.5,
        low=low,
        high=high,
        level=0.95,
        draws=0,
        exact=True,
        slope_removed=False,
        statistic="difference in means",
        seed=1,
    )
    return replace(effect, randomisation=drawn)


def test_agreement_and_disagreement_are_told_from_the_numbers(tmp_path: Path) -> None:
    effect = bench(tmp_path).effect("visits")
    reading = effect.reading
    assert reading.bias_aware is not None
    assert reading.robust.low > 0
    agree = with_randomisation(effect, 1.0, 4.0)
    assert disagreement(agree)[0].endswith("intervals exclude zero, on the same side.") or (
        reading.bias_aware.low <= 0 and "the bias-aware interval does not" in disagreement(agree)[0]
    )
    holds = with_randomisation(effect, -1.0, reading.robust.high)
    assert "the randomisation interval does not." in disagreement(holds)[0].replace(
        "and the randomisation interval do not.", "the randomisation interval does not."
    )
    apart = with_randomisation(effect, 100.0, 101.0)
    assert disagreement(apart)[0] == "The intervals do not all overlap: they can't all be right."


def test_the_slope_inside_the_window_is_named_when_it_moves_the_answer(tmp_path: Path) -> None:
    effect = bench(tmp_path).effect("visits")
    error = effect.reading.std_error
    steep = replace(with_randomisation(effect, 1.0, 4.0), slopes=(error, error))
    # Half of the window times the slope on each side: 0.5·(error·2 + error·2) = 2 standard errors.
    told = [sentence for sentence in disagreement(steep) if "slopes of the local fits alone" in sentence]
    assert told
    assert figure(2.0 * error, error, sign=True) in told[0]
    flat = replace(with_randomisation(effect, 1.0, 4.0), slopes=(0.0, 0.0))
    assert not any("slopes of the local fits" in sentence for sentence in disagreement(flat))


def test_the_bound_on_the_curvature_is_told_at_half_and_twice_and_where_it_gives_way(tmp_path: Path) -> None:
    effect = bench(tmp_path).effect("visits")
    said = remarks(effect)[-1]
    spread = effect.reading.std_error
    low, high = effect.curvature_table[2].honest.low, effect.curvature_table[2].honest.high
    assert f"under twice it {figure(low, spread)} to {figure(high, spread)}" in said
    assert effect.breakdown is not None
    assert f"a bound of {effect.breakdown:.3g}" in said or "under any bound" in said
