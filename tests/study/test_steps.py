"""Steps on one score: no row serves two of them, effects by dose, the joint test."""

from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from estimation.kernels import count_inside
from study.analysis import Workbench
from study.comparison import compare
from study.comparison_words import sentences
from study.document import load_study, parse_study
from study.errors import StudyError
from study.readiness import require_complete

STUDY = """
[study]
title = "Coal allowance by cold days"
seed = 2
masked = false

[data]
path = "homes.csv"

[columns]
outcomes = ["damp"]
score = "cold_days"

[assignment]
rule = "steps"
treated = "{treated}"
steps = [30.0, 50.0, 60.0]
doses = [1.0, 3.0, 4.0]
"""
GAIN = 2.0


def write(folder: Path, treated: str = "at or above") -> Path:
    rng = np.random.default_rng(6)
    x = rng.uniform(10, 85, 3000)
    if treated == "at or above":
        dose = np.array([0.0, 1.0, 3.0, 4.0])[np.searchsorted([30, 50, 60], x, side="right")]
    else:
        dose = np.array([4.0, 3.0, 1.0, 0.0])[np.searchsorted([30, 50, 60], x, side="right")]
    y = 20 - 0.05 * x + GAIN * dose + rng.normal(0, 1, 3000)
    (folder / "homes.csv").write_text(
        "cold_days,damp\n" + "\n".join(f"{a:.6f},{b:.6f}" for a, b in zip(x, y)) + "\n"
    )
    path = folder / "study.toml"
    path.write_text(STUDY.format(treated=treated))
    return path


def test_no_row_serves_two_steps_at_any_width(tmp_path: Path) -> None:
    bench = Workbench.open(load_study(write(tmp_path)))
    for width in (None, 3.0, 8.0, 60.0):
        found = compare(bench, "damp", width)
        taken: list[np.ndarray] = []
        for row, (low, high) in zip(found.rows, ((20.0, 40.0), (40.0, 55.0), (55.0, 86.0))):
            assert row.bandwidths is not None
            assert row.cutoff - row.bandwidths.below >= low - 1e-9 or row.cutoff == 30.0
            assert row.cutoff + row.bandwidths.above <= high + 1e-9 or row.cutoff == 60.0
            line = bench.line("damp", row.name)
            for name, side in line.sample.sides:
                taken.append(
                    side.row[: count_inside(side.distance, row.bandwidths.of(name)[0], "triangular")]
                )
        rows = np.concatenate(taken)
        assert len(rows) == len(np.unique(rows))
    # The live sweep stops at the same place as the reading.
    sweep = bench.sweep("damp", np.array([4.0, 9.0, 30.0]), site="50")
    for i, width in enumerate((4.0, 9.0, 30.0)):
        reading = bench.reading("damp", width, "50")
        assert sweep.estimate[i] == pytest.approx(reading.estimate, rel=1e-10)
        assert sweep.low[i] == pytest.approx(reading.robust.low, rel=1e-9)
    assert bench.chosen("damp").below <= 5.0


@pytest.mark.parametrize("treated", ["at or above", "below"])
def test_effects_by_dose_and_their_joint_test(tmp_path: Path, treated: str) -> None:
    bench = Workbench.open(load_study(write(tmp_path, treated)))
    found = compare(bench, "damp")
    grows = {"30": 1.0, "50": 2.0, "60": 1.0}
    z = []
    for row in found.rows:
        assert row.reading is not None
        assert row.dose == grows[row.name]
        robust = row.reading.robust
        assert abs(robust.estimate - GAIN * grows[row.name]) < 4 * robust.std_error
        z.append(robust.estimate / robust.std_error)
    joint = found.together.joint
    assert joint is not None
    assert joint.statistic == pytest.approx(np.sum(np.square(z)), rel=1e-10)
    assert joint.p_value == pytest.approx(stats.chi2.sf(np.sum(np.square(z)), 3), rel=1e-6, abs=1e-300)
    assert found.per_dose is not None and found.per_dose.inverse_variance is not None
    per = found.per_dose
    by_hand = [row.reading.robust.estimate / grows[row.name] for row in found.rows if row.reading]
    assert per.estimates.estimate == pytest.approx(by_hand, rel=1e-12)
    assert per.inverse_variance.found.low < GAIN < per.inverse_variance.found.high
    effects = bench.run().effects
    assert [effect.kind for effect in effects] == ["step", "step", "step", "pooled"]
    assert any("For each unit of dose" in said for said in sentences(found))


def test_doses_that_do_not_fit_the_steps_are_refused(tmp_path: Path) -> None:
    text = STUDY.format(treated="at or above").replace("[1.0, 3.0, 4.0]", "[1.0, 3.0]")
    with pytest.raises(StudyError) as problem:
        require_complete(parse_study(text, tmp_path / "study.toml"))
    assert problem.value.what == "study.toml: assignment.doses has 2 entries for 3 steps."
    assert problem.value.do == "Give one dose for each step, or take the doses out."


def test_doses_start_above_nought(tmp_path: Path) -> None:
    text = STUDY.format(treated="at or above").replace("[1.0, 3.0, 4.0]", "[0.0, 3.0, 4.0]")
    with pytest.raises(StudyError) as problem:
        require_complete(parse_study(text, tmp_path / "study.toml"))
    assert problem.value.what == (
        "study.toml: assignment.doses starts with 0, but every step hands something out."
    )
