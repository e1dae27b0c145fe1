"""Before the seal: nothing that a masked study prints, writes or answers holds an effect or a level of an outcome."""

import csv
import json
import math
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pytest

from estimation.errors import CannotEstimate
from study.analysis import Workbench
from study.cli import main
from study.comparison import compare
from study.document import edit, load_study
from study.errors import Masked
from study.ledger import read_ledger
from study.masked import masked_result
from study.plan import plan_path, seal

STUDY = """
[study]
title = "Lamps"
seed = 3
[data]
path = "homes.csv"
[columns]
outcomes = ["falls", "fell"]
score = "points"
take_up = "lamp"
site = "town"
covariates = ["age"]
cluster = "street"
[assignment]
rule = "cutoffs"
[assignment.sites]
Elm = 20.0
Oak = 22.0
"""


@pytest.fixture
def path(tmp_path: Path) -> Path:
    rng = np.random.default_rng(8)
    n = 700
    town = rng.integers(0, 2, n)
    points = np.round(rng.normal(21, 6, n), 1)
    over = points >= 20 + 2 * town
    lamp = np.where(over, rng.random(n) < 0.8, rng.random(n) < 0.1).astype(int)
    falls = 731.9 + 0.4 * points - 47.3 * lamp + rng.normal(0, 3, n)
    fell = (rng.random(n) < 0.37 - 0.13 * lamp).astype(int)
    lines = ["points,town,lamp,falls,fell,age,street"]
    for i in range(n):
        lines.append(
            f"{points[i]},{('Elm', 'Oak')[town[i]]},{lamp[i]},{'' if i % 40 == 7 else f'{falls[i]:.5f}'},"
            f"{fell[i]},{60 + i % 9},s{i % 60}"
        )
    (tmp_path / "homes.csv").write_text("\n".join(lines) + "\n")
    (tmp_path / "study.toml").write_text(STUDY)
    return tmp_path / "study.toml"


def numbers(document: Any) -> Iterator[float]:
    if isinstance(document, dict):
        for value in document.values():
            yield from numbers(value)
    elif isinstance(document, list):
        for value in document:
            yield from numbers(value)
    elif isinstance(document, str):
        yield from (float(found) for found in re.findall(r"\d+(?:\.\d+)?", document.replace(",", "")))
    elif isinstance(document, int | float) and not isinstance(document, bool):
        yield abs(float(document))


@pytest.fixture
def canaries(path: Path) -> list[float]:
    """Everything about the outcomes that an unmasked twin of the study shows, and their plain means and spreads."""
    bench = Workbench.open(edit(load_study(path), {"study.masked": False}))
    found: list[float] = []
    for outcome in bench.outcomes:
        values = bench.assigned.outcomes[outcome]
        above = bench.assigned.above
        for part in (values, values[above], values[~above]):
            found += [
                float(np.nanmean(part)),
                float(np.nanstd(part)),
                float(np.nanmin(part)),
                float(np.nanmax(part)),
            ]
        for site in (*bench.sites, None):
            reading = bench.reading(outcome, bench.chosen(outcome, site), site)
            for one in (reading, reading.intention):
                assert one is not None
                found += [one.estimate, one.std_error, one.levels_below, one.levels_above]
                found += [one.robust.estimate, one.robust.low, one.robust.high, one.robust.std_error]
    scaled = [100.0 * value for value in found if abs(value) < 1.0]
    return [abs(value) for value in (*found, *scaled) if abs(value) not in (0.0, 1.0, 100.0)]


def assert_silent(shown: Any, canaries: list[float], allowed: set[float] = frozenset()) -> None:
    for value in numbers(shown):
        for canary in canaries:
            hidden = not math.isclose(value, canary, rel_tol=2e-4)
            assert hidden or value in allowed, (value, canary)


def test_the_canaries_would_be_heard(path: Path, canaries: list[float]) -> None:
    unmasked = Workbench.open(edit(load_study(path), {"study.masked": False}))
    with pytest.raises(AssertionError):
        assert_silent(unmasked.run().to_document()["effects"], canaries)


def test_a_run_of_a_masked_study_is_silent(
    path: Path, canaries: list[float], capsys: pytest.CaptureFixture[str]
) -> None:
    out = path.parent / "out"
    assert main(["run", str(path), "--out", str(out)]) == 0
    page = capsys.readouterr().out
    assert "Outcomes are masked" in page and "cutbank seal study.toml" in page.replace("\n", " ")
    assert_silent(page, canaries)
    assert main(["run", str(path), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["effects"] == [] and document["study"]["sealed"] is False
    # Seeds, counts and the like are whole numbers known not to come from an outcome.
    data = document.pop("data")
    data.pop("fingerprint")
    assert_silent([document, data], canaries)
    assert json.loads((out / "result.json").read_text())["effects"] == []
    assert_silent((out / "result.txt").read_text(), canaries)
    assert not read_ledger(load_study(path)).entries


def test_other_commands_are_silent_too(
    path: Path, canaries: list[float], capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["verify", str(path)]) == 0
    shown = capsys.readouterr().out
    assert_silent(re.sub(r"SHA-256.*", "", shown), canaries)
    for ending in ("csv", "parquet"):
        target = path.parent / f"rows.{ending}"
        assert main(["assign", str(path), "--to", str(target)]) == 0
        table = duckdb.sql(f"SELECT * FROM '{target}'").fetchnumpy()
        assert set(table) == {"row", "site", "side", "position", "segment", "used", "reason"}
        values = np.genfromtxt(path.parent / "homes.csv", delimiter=",", skip_header=1)[:, 3]
        kept = np.ma.filled(table["position"].astype(float), 0.0)
        assert not np.isin(np.round(values, 5), np.round(kept, 5)).any()
    assert_silent(capsys.readouterr().out, canaries)


@pytest.mark.parametrize("site", [None, "Elm"])
@pytest.mark.parametrize("outcome", ["falls", "fell"])
def test_every_question_about_an_outcome_is_refused(path: Path, outcome: str, site: str | None) -> None:
    bench = Workbench.open(load_study(path))
    grid = np.array([3.0, 4.0])
    for ask in (
        lambda: bench.effect(outcome, site=site),
        lambda: bench.effect(outcome, 4.0, site=site),
        lambda: bench.reading(outcome, 4.0, site),
        lambda: bench.sweep(outcome, grid, site=site),
        lambda: bench.bins(outcome, 5.0, 8, site),
        lambda: bench.curve(outcome, 4.0, site=site),
        lambda: bench.line(outcome, site),
        lambda: bench.randomisation(outcome, site),
        lambda: compare(bench, outcome),
        lambda: bench.run(),
    ):
        with pytest.raises(Masked) as caught:
            ask()
        assert isinstance(caught.value, CannotEstimate)


def test_rows_widths_and_take_up_stay_to_be_asked(path: Path) -> None:
    bench = Workbench.open(load_study(path))
    twin = Workbench.open(edit(bench.study, {"study.masked": False}))
    assert bench.chosen("falls") == twin.chosen("falls")
    assert bench.widest("falls") == twin.widest("falls")
    assert bench.rows_with("falls") == twin.rows_with("falls")
    assert bench.against_rule() == twin.against_rule()
    assert np.array_equal(bench.histogram(20).counts, twin.histogram(20).counts)
    for design in masked_result(bench).designs:
        site = None if design.where == "pooled" else design.where
        reading = twin.reading(design.outcome, design.bandwidths, site)
        assert (design.below, design.above) == (reading.count_below, reading.count_above)


def test_the_take_up_jump_is_that_of_the_whole_file(path: Path) -> None:
    found = {
        where: (widths, reading)
        for where, widths, reading in masked_result(Workbench.open(load_study(path))).take_up
    }
    rows = list(csv.DictReader((path.parent / "homes.csv").read_text().splitlines()))
    cutoff = {"Elm": 20.0, "Oak": 22.0}
    x = np.array([float(row["points"]) - cutoff[row["town"]] for row in rows])
    lamp = np.array([float(row["lamp"]) for row in rows])
    widths, reading = found["pooled"]
    ends = {}
    for name, side, h in (("above", x >= 0, widths.above), ("below", x < 0, widths.below)):
        k = np.maximum(1 - np.abs(x[side]) / h, 0)
        ends[name] = np.polynomial.polynomial.polyfit(x[side], lamp[side], 1, w=np.sqrt(k))[0]
    assert reading.estimate == pytest.approx(ends["above"] - ends["below"], rel=1e-9)


@pytest.mark.parametrize(("interval", "degree"), [("plain", 1), ("robust", 2)])
def test_precision_is_the_design_matrix_of_a_regression(path: Path, interval: str, degree: int) -> None:
    # A uniform kernel makes the local fit least squares; with pilot = bandwidth the robust one is a power higher.
    study = edit(
        load_study(path),
        {
            "estimate.kernel": "uniform", "estimate.interval": interval, "estimate.bandwidth": 4.05,
            "columns.cluster": None, "columns.outcomes": ("falls",),
        },
    )  # fmt: skip
    [design] = [d for d in masked_result(Workbench.open(study)).designs if d.where == "pooled"]
    table = np.genfromtxt(path.parent / "homes.csv", delimiter=",", skip_header=1, dtype=None, encoding=None)
    x = np.array([row[0] - {"Elm": 20.0, "Oak": 22.0}[row[1]] for row in table])
    known = np.array([not math.isnan(row[3]) for row in table])
    variance = 0.0
    for side in (x >= 0, x < 0):
        inside = x[side & known & (np.abs(x) <= 4.05)]
        design_matrix = np.vander(inside, degree + 1, increasing=True)
        variance += np.linalg.inv(design_matrix.T @ design_matrix)[0, 0]
    # 1.959964 and 0.841621: the normal's 97.5 and 80 per cent points.
    assert design.detectable == pytest.approx((1.959964 + 0.841621) * math.sqrt(variance), rel=1e-6)


def test_sealing_shows_the_effects_and_marks_what_departs(
    path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["seal", str(path), "--by", "Ines"]) == 0
    said = capsys.readouterr().out
    assert said.startswith("The plan of study.toml is sealed: ") and ", by Ines." in said
    assert plan_path(load_study(path)).exists()
    assert main(["run", str(path), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["study"]["sealed"] is True and document["study"]["plan"]["departures"] == []
    assert document["study"]["looked_at"] == len(document["effects"]) == 6
    assert document["study"]["specifications"] == 1
    path.write_text(path.read_text() + "[estimate]\nbandwidth = 5.0\n")
    assert main(["run", str(path), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["study"]["looked_at"] == 12 and document["study"]["specifications"] == 2
    assert document["study"]["plan"]["departures"] == [
        {"key": "estimate.bandwidth", "planned": "mse", "now": 5.0}
    ]
    assert all(effect["departs"] == ["estimate.bandwidth"] for effect in document["effects"])
    assert main(["run", str(path)]) == 0
    page = capsys.readouterr().out
    assert "Departs from the sealed plan in estimate.bandwidth." in page
    assert "12 estimates under 2 different specifications were looked at" in " ".join(page.split())
    kinds = [entry.kind for entry in read_ledger(load_study(path)).entries]
    assert kinds == ["seal"] + 12 * ["look"]


def test_an_outcome_that_was_not_planned_departs_alone(
    path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    study = load_study(path)
    seal(edit(study, {"columns.outcomes": ("falls",)}), by="Ines")
    assert main(["run", str(path), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    departs = {effect["outcome"]: effect["departs"] for effect in document["effects"]}
    assert departs == {"falls": [], "fell": ["columns.outcomes"]}


def test_a_seal_that_was_tampered_with_shows_nothing(
    path: Path, canaries: list[float], capsys: pytest.CaptureFixture[str]
) -> None:
    study = load_study(path)
    seal(study, by="Ines")
    plan_path(study).write_text(plan_path(study).read_text().replace("robust", "plain"))
    assert main(["run", str(path)]) == 2
    shown = capsys.readouterr()
    assert shown.out == ""
    assert shown.err.startswith("study.plan.json: was changed after it was sealed.\n")


def test_a_folder_that_can_not_be_written_to_does_not_stop_a_run(
    path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path.write_text(path.read_text().replace("seed = 3", "seed = 3\nmasked = false"))
    path.with_name("study.ledger.jsonl").mkdir()  # nothing can be appended to a folder
    assert main(["run", str(path), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["study"]["looked_at"] is None
    assert document["study"]["looked_at_reason"] == (
        "Not recorded: study.ledger.jsonl: the ledger can't be kept (is a directory)."
    )


def test_running_twice_says_the_same(path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path.write_text(path.read_text().replace("seed = 3", "seed = 3\nmasked = false"))
    shown = []
    for _ in range(2):
        assert main(["run", str(path), "--json"]) == 0
        shown.append(capsys.readouterr().out)
    assert shown[0] == shown[1]
