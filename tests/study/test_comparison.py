"""Sites side by side: numbers from the effects of each site, weights in the limit the paper gives, small sites kept."""

import json
from pathlib import Path

import numpy as np
import pytest
from statsmodels.stats.meta_analysis import combine_effects

from estimation.extrapolation import Group, extrapolate
from estimation.kernels import kernel_values
from study.analysis import Workbench
from study.between import between
from study.comparison import compare, order_of
from study.comparison_words import sentences, site_texts
from study.document import Study, edit, load_study
from study.errors import StudyError
from study.page import result_lines

STUDY = """
[study]
title = "Night buses in six towns"
seed = 11
masked = false

[data]
path = "rides.csv"

[columns]
outcomes = ["rides"]
score = "need"
site = "town"
{more}
[assignment]
rule = "cutoffs"
treated = "at or above"

[assignment.sites]
Arl = 40.0
Bex = 45.0
"Cob [b]" = 50.0
Dun = 55.0
Tiny = 50.0
Hamlet = 48.0
"""
CUTOFFS = {"Arl": 40.0, "Bex": 45.0, "Cob [b]": 50.0, "Dun": 55.0, "Tiny": 50.0, "Hamlet": 48.0}
ROWS = {"Arl": 700, "Bex": 500, "Cob [b]": 300, "Dun": 400, "Tiny": 40, "Hamlet": 6}
EFFECT = {"Arl": 1.0, "Bex": 3.0, "Cob [b]": 2.0, "Dun": -1.0, "Tiny": 1.0, "Hamlet": 1.0}


def write(folder: Path, *, fuzzy: bool = False, clusters: int = 0, seed: int = 4) -> Path:
    rng = np.random.default_rng(seed)
    lines = ["town,need,rides,took,street"]
    shock = rng.normal(0, 0.6, max(clusters, 1))
    for town, rows in ROWS.items():
        need = CUTOFFS[town] + rng.normal(0, 6, rows)
        if town == "Tiny":
            # Few distinct scores: no local fit can run, a draw by lot can.
            need = CUTOFFS[town] + rng.choice([-2.0, -1.0, 1.0, 2.0], rows)
        street = rng.integers(0, clusters, rows) if clusters else np.zeros(rows, dtype=int)
        on = need >= CUTOFFS[town]
        took = (rng.uniform(size=rows) < 0.1 + 0.7 * on) if fuzzy else on
        rides = (
            10
            + 0.05 * (need - CUTOFFS[town])
            + EFFECT[town] * took
            + (shock[street] if clusters else 0.0)
            + rng.normal(0, 1, rows)
        )
        lines += [f"{town},{x:.5f},{y:.6f},{int(t)},s{s}" for x, y, t, s in zip(need, rides, took, street)]
    (folder / "rides.csv").write_text("\n".join(lines) + "\n")
    more = ('take_up = "took"\n' if fuzzy else "") + ('cluster = "street"\n' if clusters else "")
    path = folder / "study.toml"
    path.write_text(STUDY.format(more=more))
    return path


@pytest.fixture
def study(tmp_path: Path) -> Study:
    return load_study(write(tmp_path))


def test_each_row_is_the_sites_own_effect(study: Study) -> None:
    bench = Workbench.open(study)
    found = compare(bench, "rides")
    for row in found.rows:
        if row.reading is not None:
            effect = bench.effect("rides", site=row.name)
            assert row.reading.robust.estimate == pytest.approx(effect.reading.robust.estimate, rel=1e-8)
            assert row.reading.robust.low == pytest.approx(effect.reading.robust.low, rel=1e-8)
            assert row.reading.std_error == pytest.approx(effect.reading.std_error, rel=1e-8)
            assert row.reading.count_above == effect.reading.count_above
            assert row.bandwidths is not None
            assert row.bandwidths.below == pytest.approx(effect.bandwidths.below, rel=1e-8)
            assert row.bandwidths.rule == effect.bandwidths.rule
            assert row.cutoff == CUTOFFS[row.name]
    assert [row.name for row in found.rows] == list(bench.sites)


def test_the_document_says_what_statsmodels_says_of_its_own_numbers(tmp_path: Path) -> None:
    bench = Workbench.open(load_study(write(tmp_path, fuzzy=True)))
    document = json.loads(json.dumps(bench.run().to_document(), allow_nan=False))
    sites = [effect for effect in document["effects"] if effect["kind"] == "site"]
    y = np.array([effect["robust"]["estimate"] for effect in sites])
    v = np.array([effect["robust"]["std_error"] for effect in sites]) ** 2
    other = combine_effects(y, v, method_re="chi2")
    spread = document["comparison"]["heterogeneity"]
    assert spread["q"] == pytest.approx(other.q, rel=1e-9)
    assert spread["df"] == len(sites) - 1
    assert spread["tau2"] == pytest.approx(other.tau2, rel=1e-9)
    assert spread["i2"] == pytest.approx(other.i2, rel=1e-9)
    assert spread["p_value"] == pytest.approx(other.test_homogeneity().pvalue, rel=1e-9)
    pooled = document["comparison"]["pooled"]
    assert pooled["inverse_variance"]["estimate"] == pytest.approx(other.mean_effect_fe, rel=1e-9)
    assert pooled["random_effects"]["std_error"] == pytest.approx(other.sd_eff_w_re, rel=1e-9)
    j = np.array([effect["intention"]["robust"]["estimate"] for effect in sites])
    w = np.array([effect["intention"]["robust"]["std_error"] for effect in sites]) ** 2
    jumps = combine_effects(j, w, method_re="chi2")
    assert document["comparison"]["intention"]["heterogeneity"]["q"] == pytest.approx(jumps.q, rel=1e-9)


def test_a_site_too_small_for_a_fit_is_listed_with_its_answer_by_lot(study: Study) -> None:
    bench = Workbench.open(study)
    found = compare(bench, "rides")
    rows = {row.name: row for row in found.rows}
    assert set(found.together.names) == {"Arl", "Bex", "Cob [b]", "Dun"}
    tiny, hamlet = rows["Tiny"], rows["Hamlet"]
    assert tiny.reason is not None and "distinct scores" in tiny.reason
    assert tiny.randomisation is not None
    assert tiny.below + tiny.above == 40
    assert hamlet.reason is not None and hamlet.randomisation is None
    assert hamlet.randomisation_reason is not None
    assert tiny.share is not None and tiny.share > 0.0
    said = " ".join(sentences(found))
    assert "Tiny has no local estimate" in said and "As if drawn by lot within" in said
    assert "Hamlet has no local estimate" in said and "Nor is there an answer by lot" in said
    document = bench.run().to_document()
    listed = {entry["site"]: entry for entry in document["comparison"]["sites"]}
    assert listed["Tiny"]["randomisation"]["estimate"] == pytest.approx(tiny.randomisation.estimate)
    assert listed["Hamlet"]["randomisation"] is None and listed["Hamlet"]["randomisation_reason"]
    assert [entry["site"] for entry in document["comparison"]["not_estimated"]] == ["Hamlet", "Tiny"]
    page = "\n".join(result_lines(bench.run(), bench))
    assert page.count("Tiny has no local estimate") == 1
    assert "Cob [b]" in page


def test_the_shares_are_local_fits_of_being_of_the_site(study: Study) -> None:
    bench = Workbench.open(study)
    found = compare(bench, "rides")
    assert sum(row.share or 0.0 for row in found.rows) == pytest.approx(1.0, rel=1e-10)
    assert [row.weight for row in found.rows] == pytest.approx([row.share for row in found.rows])
    widths = found.pooled_bandwidths
    assert widths is not None
    a = bench.assigned
    assert a.site is not None
    for i, row in enumerate(found.rows):
        shares = []
        for upper, h in ((False, widths.below), (True, widths.above)):
            inside = (a.above == upper) & (np.abs(a.position) < h)
            x = a.position[inside]
            k = kernel_values(np.abs(x), h, "triangular")
            design = np.column_stack((np.ones_like(x), x)) * np.sqrt(k)[:, None]
            of_site = (a.site[inside] == i) * np.sqrt(k)
            shares.append(np.linalg.lstsq(design, of_site, rcond=None)[0][0])
        assert row.share == pytest.approx(np.mean(shares), rel=1e-8)


def test_with_the_same_slope_everywhere_the_pooled_effect_is_the_weighted_sites_effects(
    tmp_path: Path,
) -> None:
    """Cattaneo et al. (2016): the pooled effect is Σ w_c τ_c with w_c = f_c(0)P(c)/Σ.

    Without noise and with one slope, the pooled level of a side is exactly Σ (its own share) × (the site's level).
    """
    path = write(tmp_path)
    rng = np.random.default_rng(1)
    lines = ["town,need,rides,took,street"]
    for town, rows in (("Arl", 4000), ("Bex", 2000), ("Cob [b]", 1000), ("Dun", 1000)):
        x = rng.uniform(-10, 10, rows)
        lines += [
            f"{town},{CUTOFFS[town] + d:.8f},{10 + 0.05 * d + EFFECT[town] * (d >= 0):.8f},0,s" for d in x
        ]
    (tmp_path / "rides.csv").write_text("\n".join(lines) + "\n")
    text = path.read_text().replace("Tiny = 50.0\n", "").replace("Hamlet = 48.0\n", "")
    path.write_text(text)
    bench = Workbench.open(edit(load_study(path), {"estimate.bandwidth": 5.0}))
    found = compare(bench, "rides")
    limit = {"Arl": 0.5, "Bex": 0.25, "Cob [b]": 0.125, "Dun": 0.125}
    for row in found.rows:
        assert row.share == pytest.approx(limit[row.name], abs=0.05)
    assert found.pooled is not None
    weighted = sum(row.share * row.reading.estimate for row in found.rows if row.reading and row.share)
    # The upper side alone carries the effect here, so its own shares make the sum exact; the mean of both is close.
    assert found.pooled.estimate == pytest.approx(weighted, abs=0.1)
    assert found.pooled.estimate == pytest.approx(sum(limit[t] * EFFECT[t] for t in limit), abs=0.15)


def test_a_common_width_moves_every_site(study: Study) -> None:
    bench = Workbench.open(study)
    found = compare(bench, "rides", 4.0)
    for row in found.rows:
        if row.reading is not None:
            single = bench.reading("rides", 4.0, row.name)
            assert row.reading.robust.high == pytest.approx(single.robust.high, rel=1e-8)
            assert row.reading.count_below == single.count_below
            assert row.bandwidths is not None and row.bandwidths.below == row.bandwidths.above == 4.0
    assert found.width == 4.0
    assert "all within 4" in result_text(found, study)


def result_text(found, study: Study) -> str:  # type: ignore[no-untyped-def]
    from study.comparison_words import opening

    return opening(found, study)


def test_sites_sort_as_asked_with_those_without_an_estimate_last(study: Study) -> None:
    found = compare(Workbench.open(study), "rides")
    names = [row.name for row in found.rows]
    assert [names[i] for i in order_of(found, "name")][-2:] == ["Hamlet", "Tiny"]
    effects = [found.rows[i].reading for i in order_of(found, "effect")[:4]]
    centres = [reading.robust.estimate for reading in effects if reading]
    assert centres == sorted(centres, reverse=True)
    cutoffs = [found.rows[i].cutoff for i in order_of(found, "cutoff")[:4]]
    assert cutoffs == sorted(cutoffs)
    assert names[order_of(found, "rows")[0]] == "Arl"
    assert [text.reason is None for text in site_texts(found, "cutoff")] == [True] * 4 + [False] * 2


def test_clusters_over_sites_make_a_joint_covariance_and_apart_they_do_not(tmp_path: Path) -> None:
    bench = Workbench.open(load_study(write(tmp_path, clusters=60)))
    found = compare(bench, "rides").together
    assert not found.independent
    assert found.band is not None and found.band.method == "joint"
    assert found.estimates.covariance is not None
    assert np.sqrt(np.diagonal(found.estimates.covariance)) == pytest.approx(
        found.estimates.std_error, rel=1e-9
    )
    # A shock common to a street moves both sides alike, here: what is shared is small, but there.
    off = found.estimates.covariance[~np.eye(len(found.names), dtype=bool)]
    assert np.any(off != 0.0)
    again = compare(bench, "rides").together
    assert again.band is not None and np.array_equal(again.band.low, found.band.low)
    text = (tmp_path / "rides.csv").read_text().splitlines()
    own = [text[0]] + [f"{line}{line.split(',')[0]}" for line in text[1:]]
    (tmp_path / "rides.csv").write_text("\n".join(own) + "\n")
    apart = compare(Workbench.open(load_study(tmp_path / "study.toml")), "rides").together
    assert apart.independent
    assert apart.band is not None and apart.band.method == "independent"


def test_one_line_has_no_comparison(tmp_path: Path) -> None:
    study = edit(
        load_study(write(tmp_path)),
        {"assignment.rule": "cutoff", "assignment.sites": None, "assignment.cutoff": 48.0},
    )
    document = Workbench.open(study).run().to_document()
    assert document["comparison"] is None
    assert document["comparison_reason"] == "the study has one line"


def test_a_mean_by_the_studys_own_weights(tmp_path: Path) -> None:
    study = edit(load_study(write(tmp_path)), {"assignment.site_weights": {"Arl": 3.0, "Dun": 1.0}})
    found = compare(Workbench.open(study), "rides").together
    assert found.stated is not None
    y = dict(zip(found.names, found.estimates.estimate))
    v = dict(zip(found.names, found.estimates.variance))
    assert found.stated.found.estimate == pytest.approx(0.75 * y["Arl"] + 0.25 * y["Dun"], rel=1e-12)
    assert found.stated.found.std_error == pytest.approx(
        np.sqrt(0.5625 * v["Arl"] + 0.0625 * v["Dun"]), rel=1e-12
    )
    with pytest.raises(StudyError) as problem:
        Workbench.open(edit(study, {"assignment.site_weights": {"Bax": 3.0}}))
    assert problem.value.what == (
        'study.toml: assignment.site_weights names "Bax", which is no site with a cutoff and rows.'
    )
    assert problem.value.do == 'Did you mean "Bex"?'


@pytest.mark.parametrize("fuzzy", [False, True])
def test_between_cutoffs_the_bench_asks_what_the_file_says(tmp_path: Path, fuzzy: bool) -> None:
    bench = Workbench.open(load_study(write(tmp_path, fuzzy=fuzzy)))
    pair = between(bench, "rides", "Dun", "Bex")
    assert (pair.whose, pair.other) == ("Bex", "Dun")
    assert pair.found is not None
    rows = [line.split(",") for line in (tmp_path / "rides.csv").read_text().splitlines()[1:]]
    groups = []
    for town in ("Bex", "Dun"):
        x, y, t = (np.array([float(row[j]) for row in rows if row[0] == town]) for j in (1, 2, 3))
        widths = bench.chosen("rides", town)
        groups.append(
            Group(
                score=x,
                values=np.column_stack((y, t)) if fuzzy else y[:, None],
                treated=x >= CUTOFFS[town],
                cutoff=CUTOFFS[town],
                bandwidth=widths.below,
            )
        )
    direct = extrapolate(
        *groups, points=pair.found.points, kernel="triangular", order=1, level=0.95, treated_above=True
    )
    assert pair.found.points[4] == 50.0
    assert pair.found.estimate == pytest.approx(direct.estimate, rel=1e-8)
    middle, expected = pair.found.robust[4], direct.robust[4]
    assert middle is not None and expected is not None
    assert middle.low == pytest.approx(expected.low, rel=1e-7)
    listed = compare(bench, "rides").between
    assert ("Bex", "Dun") not in {(one.whose, one.other) for one in listed}  # others lie between
    hamlet = next(one for one in listed if "Hamlet" in (one.whose, one.other))
    assert hamlet.found is None and hamlet.reason is not None
