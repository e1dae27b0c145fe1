"""The bench object: what it answers, what it keeps, and that headless and live digits are the same."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from estimation.line_fit import Bandwidths
from estimation.local_polynomial import fit_rows
from estimation.sample import build_sample
from study.analysis import Workbench
from study.document import edit, load_study

STUDY = """
[study]
title = "Lamps on the stairs"
seed = 3
masked = false

[data]
path = "homes.csv"

[columns]
outcomes = ["falls", "fell"]
score = "points"
covariates = ["age"]

[assignment]
rule = "cutoff"
treated = "{treated}"
cutoff = 20.0

[estimate]
variance = "{variance}"
"""


def write(folder: Path, treated: str = "at or above", variance: str = "neighbour") -> Path:
    rng = np.random.default_rng(12)
    points = np.round(rng.normal(20.0, 6.0, 900), 1)
    age = 60 + rng.normal(0, 5, 900)
    falls = 5 - 0.1 * points - 1.0 * (points >= 20) + 0.05 * (age - 60) + rng.normal(0, 1, 900)
    fell = (falls > 2.5).astype(int)
    rows = ["points,falls,fell,age"]
    for i in range(900):
        outcome = "" if i % 50 == 7 else f"{falls[i]:.6f}"
        score = "" if i % 90 == 3 else f"{points[i]:.1f}"
        rows.append(f"{score},{outcome},{fell[i]},{age[i]:.3f}")
    (folder / "homes.csv").write_text("\n".join(rows) + "\n")
    path = folder / "study.toml"
    path.write_text(STUDY.format(treated=treated, variance=variance))
    return path


@pytest.fixture
def bench(tmp_path: Path) -> Workbench:
    return Workbench.open(load_study(write(tmp_path)))


def test_the_live_reading_and_the_full_effect_are_the_same_numbers(bench: Workbench) -> None:
    chosen = bench.chosen("falls")
    effect = bench.effect("falls")
    assert effect.reading == bench.reading("falls", chosen)
    assert bench.reading("falls", 4.0) == bench.effect("falls", 4.0).reading


def test_the_reading_is_the_row_by_row_fit_of_the_file(bench: Workbench) -> None:
    table = np.genfromtxt(bench.study.data_file, delimiter=",", skip_header=1)
    known = ~np.isnan(table[:, 0])
    x = table[known, 0] - 20.0
    sample = build_sample(
        position=x, outcome=table[known, 1], above=x >= 0, treated="above", score_magnitude=40.0
    )
    direct = fit_rows(sample, Bandwidths.common(4.0), kernel="triangular", order=1, variance="neighbour")
    reading = bench.reading("falls", 4.0)
    assert reading.estimate == pytest.approx(direct.jump[0], rel=1e-10)
    assert reading.std_error == pytest.approx(np.sqrt(direct.covariance[0, 0]), rel=1e-10)
    assert reading.robust.estimate == pytest.approx(direct.robust_jump[0], rel=1e-10)
    assert (reading.count_below, reading.count_above) == (direct.count_below, direct.count_above)


def test_swapping_the_treated_side_changes_the_sign_only(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    up = Workbench.open(load_study(write(tmp_path / "a", "at or above")))
    down = Workbench.open(load_study(write(tmp_path / "b", "below")))
    one, other = up.reading("falls", 4.0), down.reading("falls", 4.0)
    assert other.estimate == pytest.approx(-one.estimate, rel=1e-12)
    assert other.std_error == pytest.approx(one.std_error, rel=1e-12)
    assert other.robust.low == pytest.approx(-one.robust.high, rel=1e-12)


def test_covariates_are_reported_beside_and_never_move_the_bandwidth(bench: Workbench) -> None:
    plain = bench.effect("falls")
    bare = Workbench.open(edit(bench.study, {"columns.covariates": ()})).effect("falls")
    adjusted = bench.with_study(edit(bench.study, {"estimate.adjust": True})).effect("falls")
    assert plain.bandwidths == bare.bandwidths == adjusted.bandwidths
    assert plain.reading == bare.reading
    assert plain.adjusted is not None
    assert adjusted.reading == plain.adjusted
    # Age explains part of the falls: taking it off narrows the interval.
    assert plain.adjusted.std_error < plain.reading.std_error


def test_the_adjusted_estimate_is_one_stacked_weighted_regression(bench: Workbench) -> None:
    table = np.genfromtxt(bench.study.data_file, delimiter=",", skip_header=1)
    table = table[~np.isnan(table[:, :2]).any(axis=1)]
    x, y, z = table[:, 0] - 20.0, table[:, 1], table[:, 3]
    h = 4.0
    k = np.maximum(1 - np.abs(x) / h, 0)
    above = (x >= 0).astype(float)
    design = np.column_stack((np.ones_like(x), above, x, above * x, z)) * np.sqrt(k)[:, None]
    coefficients = np.linalg.lstsq(design, y * np.sqrt(k), rcond=None)[0]
    adjusted = bench.effect("falls", h).adjusted
    assert adjusted is not None
    assert adjusted.estimate == pytest.approx(coefficients[1], rel=1e-9)


def test_a_change_of_the_estimate_keeps_the_rows_and_one_of_the_data_reads_again(bench: Workbench) -> None:
    bench.effect("falls")
    changed = bench.with_study(edit(bench.study, {"estimate.level": 0.9}))
    assert changed.assigned is bench.assigned
    assert changed.line("falls").ladder is bench.line("falls").ladder
    assert changed.effect("falls").reading.robust.low > bench.effect("falls").reading.robust.low
    moved = bench.with_study(edit(bench.study, {"assignment.cutoff": 21.0}))
    assert moved.assigned is not bench.assigned


def test_the_sweep_is_the_readings_one_by_one(bench: Workbench) -> None:
    for interval in ("robust", "bias-aware", "plain"):
        here = bench.with_study(edit(bench.study, {"estimate.interval": interval}))
        widths = np.array([0.05, 2.0, 4.0, 9.0])
        sweep = here.sweep("falls", widths)
        assert np.isnan(sweep.estimate[0])
        for i in (1, 2, 3):
            reading = here.reading("falls", float(widths[i]))
            expected = {
                "robust": reading.robust,
                "plain": reading.plain,
                "bias-aware": reading.bias_aware,
            }[interval]
            assert expected is not None
            assert sweep.estimate[i] == pytest.approx(reading.estimate, rel=1e-10)
            assert sweep.low[i] == pytest.approx(expected.low, rel=1e-9)
            assert sweep.high[i] == pytest.approx(expected.high, rel=1e-9)
            assert sweep.count_below[i] == reading.count_below


def test_bins_are_plain_means_of_the_rows(bench: Workbench) -> None:
    table = np.genfromtxt(bench.study.data_file, delimiter=",", skip_header=1)
    table = table[~np.isnan(table[:, :2]).any(axis=1)]
    d = table[:, 0] - 20.0
    bins = bench.bins("falls", 6.0, 4)
    for i, (centre, mean, count) in enumerate(zip(bins.above.centre, bins.above.mean, bins.above.count)):
        low, high = 1.5 * i, 1.5 * (i + 1)
        inside = (d >= low - 1e-9) & (d < high - 1e-9 if i < 3 else d <= high)
        assert centre == pytest.approx(low + 0.75)
        assert count == inside.sum()
        assert mean == pytest.approx(table[inside, 1].mean(), rel=1e-10)


def test_the_curve_meets_the_levels_and_its_band_is_that_of_a_weighted_fit(bench: Workbench) -> None:
    h = 4.0
    curve, reading = bench.curve("falls", h, 5), bench.reading("falls", h)
    assert curve.above.fit[0] == pytest.approx(reading.levels_above, rel=1e-10)
    assert curve.below.fit[0] == pytest.approx(reading.levels_below, rel=1e-10)
    half = np.array([curve.above.high[0] - curve.above.fit[0], curve.below.high[0] - curve.below.fit[0]])
    assert np.sqrt((half**2).sum()) / 1.959963984540054 == pytest.approx(reading.std_error, rel=1e-9)


@pytest.mark.parametrize("treated", ["at or above", "above", "at or below", "below"])
def test_the_histogram_counts_every_assigned_row_once(tmp_path: Path, treated: str) -> None:
    bench = Workbench.open(load_study(write(tmp_path, treated)))
    histogram = bench.histogram(40)
    used = int((bench.assigned.reason == 0).sum())
    assert histogram.counts.sum() == used == histogram.below + histogram.above
    assert len(histogram.counts) == len(histogram.edges) - 1
    assert 0.0 in histogram.edges
    position = bench.assigned.position[bench.assigned.reason == 0]
    assert histogram.on_line == int((np.abs(position) < 1e-9).sum())
    values, counts = np.unique(np.round(position, 6), return_counts=True)
    assert histogram.distinct == len(values)
    assert histogram.heaviest[1] == counts.max()
    near = bench.histogram(10, reach=1.0)
    assert near.counts.sum() < used


def test_the_document_is_json_with_the_digits_of_the_bench(bench: Workbench) -> None:
    result = bench.run()
    document = json.loads(json.dumps(result.to_document(), allow_nan=False))
    assert (document["format"], document["version"]) == ("cutbank-result", 1)
    entry = document["effects"][0]
    reading = bench.reading("falls", bench.chosen("falls"))
    assert entry["estimate"] == reading.estimate
    assert entry["robust"]["low"] == reading.robust.low
    assert entry["design"] == "sharp"
    assert entry["take_up"] is None
    assert document["data"]["dropped"] == {"missing score": 10}
    assert document["data"]["rows_read"] == 900
    holm = [family["holm"] for family in document["several_outcomes"]]
    p = sorted((family["p_value"], i) for i, family in enumerate(document["several_outcomes"]))
    assert holm[p[0][1]] == pytest.approx(min(1.0, 2 * p[0][0]), rel=1e-12)


def test_whatever_is_null_has_a_reason_beside_it(bench: Workbench) -> None:
    ordered = bench.with_study(replace(bench.study, estimate=replace(bench.study.estimate, order=0)))
    document = ordered.run().to_document()
    nullable = {"take_up", "clusters"}  # null is their answer: sharp, and no clusters

    def walk(node: object, path: str) -> None:
        if isinstance(node, dict):
            for key, value in node.items():
                if value is None and key not in nullable:
                    assert f"{key}_reason" in node or "reason" in node, (
                        f"{path}.{key} is null without a reason"
                    )
                walk(value, f"{path}.{key}")
        elif isinstance(node, list):
            for item in node:
                walk(item, path)

    walk(document, "")
