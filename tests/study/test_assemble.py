from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyreadstat
import pytest

from study.assemble import Assigned, assemble, sides
from study.document import Study, edit, parse_study
from study.errors import StudyError

TEXT = """
[data]
path = "stalls.csv"
[columns]
outcomes = ["takings"]
score = "darkness"
[assignment]
cutoff = 5.0
"""
Make = Callable[..., Assigned]


@pytest.fixture
def study(tmp_path: Path) -> Study:
    rng = np.random.default_rng(11)
    rows = 40
    frame = pd.DataFrame(
        {
            "darkness": np.arange(rows) % 10 + 0.5 * (np.arange(rows) % 2),
            "takings": rng.normal(size=rows).round(3),
            "visits": rng.integers(0, 9, rows),
            "pier": np.repeat(["South 10", "South 9", "North", "West"], 10),
            "street": np.arange(rows) % 7,
            "weight": 1.0 + np.arange(rows) % 3,
            "lamp": (np.arange(rows) % 2).astype(bool),
            "line": np.repeat([5.0, 4.0, 3.0, 2.0], 10),
        }
    )
    frame.to_csv(tmp_path / "stalls.csv", index=False)
    return parse_study(TEXT, tmp_path / "study.toml")


def frame_of(study: Study) -> pd.DataFrame:
    return pd.read_csv(study.data_file)


def rewrite(study: Study, **columns: Any) -> None:
    frame_of(study).assign(**columns).to_csv(study.data_file, index=False)


def refusal(study: Study) -> StudyError:
    with pytest.raises(StudyError) as caught:
        assemble(study)
    return caught.value


@pytest.mark.parametrize(
    ("treated", "on_line_above", "side"),
    [
        ("at or above", True, "above"),
        ("above", False, "above"),
        ("at or below", False, "below"),
        ("below", True, "below"),
    ],
)
def test_the_four_kinds_of_treated_and_who_is_on_the_line(
    study: Study, treated: str, on_line_above: bool, side: str
) -> None:
    assigned = assemble(edit(study, {"assignment.treated": treated, "assignment.cutoff": 4.0}))
    score = frame_of(study)["darkness"].to_numpy()
    treated_by_hand = {
        "at or above": score >= 4.0, "above": score > 4.0, "at or below": score <= 4.0, "below": score < 4.0,
    }[treated]  # fmt: skip
    assert (score == 4.0).any()
    assert assigned.treated == side
    np.testing.assert_array_equal(assigned.above == (side == "above"), treated_by_hand)
    above, which = sides(np.array([0.0, -0.0, 1e-300, -1e-300, np.nan]), treated)
    assert above.tolist() == [on_line_above, on_line_above, True, False, False]
    assert which == side


def test_everything_is_in_file_order(study: Study) -> None:
    changes = {
        "columns.take_up": "lamp",
        "columns.weight": "weight",
        "columns.cluster": "street",
        "columns.covariates": ("visits",),
        "columns.outcomes": ("takings", "line"),
    }
    said: list[str] = []
    assigned = assemble(edit(study, changes), progress=said.append)
    frame = frame_of(study)
    np.testing.assert_array_equal(assigned.position, frame["darkness"] - 5.0)
    np.testing.assert_array_equal(assigned.cutoffs, np.full(40, 5.0))
    np.testing.assert_array_equal(assigned.outcomes["takings"], frame["takings"])
    np.testing.assert_array_equal(assigned.take_up, frame["lamp"].astype(float))
    np.testing.assert_array_equal(assigned.weight, frame["weight"])
    np.testing.assert_array_equal(assigned.covariates["visits"], frame["visits"])
    np.testing.assert_array_equal(assigned.cluster, frame["street"])
    assert assigned.site is None
    assert (assigned.rows_read, dict(assigned.dropped)) == (40, {})
    assert not assigned.reason.any()
    assert assigned.fingerprint == hashlib.sha256(study.data_file.read_bytes()).hexdigest()
    assert said == ["Reading stalls.csv", "Putting rows on their side of the line"]


def test_rows_left_out_are_counted_by_reason_and_a_missing_outcome_is_none(study: Study) -> None:
    frame = frame_of(study)
    score, weight, street, takings = (
        frame[name].astype(object) for name in ("darkness", "weight", "street", "takings")
    )
    score[[0, 1]] = None
    weight[[1, 2]] = None
    weight[3], weight[4] = 0, -2
    street[[4, 5]] = None
    takings[6] = None
    rewrite(study, darkness=score, weight=weight, street=street, takings=takings)
    assigned = assemble(edit(study, {"columns.weight": "weight", "columns.cluster": "street"}))
    assert dict(assigned.dropped) == {
        "missing score": 2, "missing weight": 1, "weight not positive": 2, "missing cluster": 1,
    }  # fmt: skip
    assert [assigned.reasons[code] for code in assigned.reason[:7]] == [
        "missing score", "missing score", "missing weight", "weight not positive", "weight not positive",
        "missing cluster", "used",
    ]  # fmt: skip
    assert np.isnan(assigned.position[:2]).all()
    assert np.isnan(assigned.outcomes["takings"][6])


def test_each_site_has_its_own_cutoff(study: Study) -> None:
    pier = frame_of(study)["pier"].astype(object)
    pier[39] = None
    rewrite(study, pier=pier)
    sited = edit(
        study,
        {
            "assignment.rule": "cutoffs",
            "assignment.cutoff": None,
            "columns.site": "pier",
            "assignment.sites": {"North": 3.0, "South 9": 4.0, "South 10": 5.0},
        },
    )
    assigned = assemble(sited)
    assert assigned.site_names == ("North", "South 9", "South 10")
    assert assigned.site is not None
    assert assigned.site.tolist() == [2] * 10 + [1] * 10 + [0] * 10 + [-1] * 10
    assert dict(assigned.dropped) == {"missing site": 1, "site without a cutoff": 9}
    frame = frame_of(study)
    expected = frame["darkness"] - np.repeat([5.0, 4.0, 3.0, np.nan], 10)
    np.testing.assert_array_equal(assigned.position, expected)

    by_column = edit(sited, {"assignment.sites": None, "assignment.cutoff_column": "line"})
    other = assemble(by_column)
    assert other.site_names == ("North", "South 9", "South 10", "West")
    np.testing.assert_array_equal(other.position[:30], assigned.position[:30])
    one_line = assemble(edit(by_column, {"assignment.rule": "cutoff"}))
    np.testing.assert_array_equal(one_line.position, frame["darkness"] - frame["line"])
    assert one_line.site is None

    error = refusal(edit(sited, {"assignment.sites.Nort": 3.0}))
    assert error.what == (
        'study.toml: assignment.sites names "Nort", but no row of stalls.csv has it in column "pier".'
    )
    assert error.do == 'Did you mean "North"?'
    error = refusal(edit(sited, {"assignment.sites.North": 30.0}))
    assert error.what == (
        "study.toml: assignment.sites.North is 30, outside the site's score, which runs from 0 to 9.5."
    )
    rewrite(study, line=np.arange(40))
    assert refusal(by_column).what == (
        'stalls.csv: the rows of site "North" have different cutoffs in column "line".'
    )


def test_sites_are_named_by_their_value_labels(tmp_path: Path) -> None:
    frame = pd.DataFrame(
        {"s": np.arange(20.0) % 10, "y": np.arange(20.0) % 7, "pier": np.repeat([1.0, 2.0], 10)}
    )
    pyreadstat.write_sav(
        frame, str(tmp_path / "a.sav"), variable_value_labels={"pier": {1: "North", 2: "South"}}
    )
    text = (
        '[data]\npath = "a.sav"\n[columns]\noutcomes = ["y"]\nscore = "s"\nsite = "pier"\n'
        '[assignment]\nrule = "cutoffs"\n[assignment.sites]\nNorth = 4.0\n2 = 5.0\n'
    )
    assigned = assemble(parse_study(text, tmp_path / "study.toml"))
    assert assigned.site_names == ("North", "South")
    assert assigned.cutoffs.tolist() == [4.0] * 10 + [5.0] * 10


def test_steps_take_the_nearest_cutoff(study: Study) -> None:
    assigned = assemble(
        edit(study, {"assignment.rule": "steps", "assignment.cutoff": None, "assignment.steps": (2.0, 6.0)})
    )
    score = frame_of(study)["darkness"].to_numpy()
    nearest = np.where(np.abs(score - 2.0) <= np.abs(score - 6.0), 2.0, 6.0)
    np.testing.assert_array_equal(assigned.cutoffs, nearest)
    np.testing.assert_array_equal(assigned.position, score - nearest)
    assert assigned.site_names == ("2", "6")


def test_a_condition_keeps_each_rows_place_in_the_file(study: Study) -> None:
    assigned = assemble(edit(study, {"data.rows": "street = 3"}))
    assert assigned.row.tolist() == [3, 10, 17, 24, 31, 38]
    assert assigned.rows_read == 6


@pytest.mark.parametrize(
    ("changes", "what", "do", "status"),
    [
        (
            {"columns.score": "darknes"},
            'study.toml: columns.score: stalls.csv has no column "darknes".',
            'Did you mean "darkness"?',
            2,
        ),
        (
            {"columns.outcomes": ("Takings",)},
            'study.toml: columns.outcomes: stalls.csv has no column "Takings".',
            'Did you mean "takings"?',
            2,
        ),
        (
            {"columns.score": "pier"},
            'stalls.csv: column "pier", the score, holds text, not numbers: row 1 is the first with text.',
            "Write numbers with a decimal point and no separators, or name another column.",
            3,
        ),
        (
            {"columns.outcomes": ("pier",)},
            'stalls.csv: column "pier", the outcome, holds text, not numbers: row 1 is the first with text.',
            "Write numbers with a decimal point and no separators, or name another column.",
            3,
        ),
        (
            {"assignment.cutoff": 50.0},
            "study.toml: assignment.cutoff is 50, outside the score, which runs from 0 to 9.5.",
            "Correct the cutoff, in the units of the score.",
            2,
        ),
        (
            {"assignment.cutoff": 9.5, "assignment.treated": "above"},
            "study.toml: no row of stalls.csv is above its cutoff.",
            "Check the cutoff, assignment.treated and data.rows.",
            2,
        ),
        (
            {"assignment.cutoff": 0.0},
            "study.toml: no row of stalls.csv is below its cutoff.",
            "Check the cutoff, assignment.treated and data.rows.",
            2,
        ),
        (
            {"data.rows": "darkness > 100"},
            "study.toml: data.rows leaves no row of stalls.csv.",
            "Widen the condition.",
            2,
        ),
        (
            {"assignment.rule": "boundary", "assignment.treated": "inside", "assignment.area.path": "z.gpkg"},
            'study.toml: assignment.rule is "boundary", but no column holds coordinates.',
            "Name columns.longitude and columns.latitude, or columns.x and columns.y.",
            2,
        ),
        (
            {"assignment.rule": "frontier", "assignment.frontier.all": {"darkness": 1.0, "visits": 2.0}},
            "study.toml: this version does not estimate a frontier yet.",
            'Use the rule "cutoff", "cutoffs", "steps" or "boundary".',
            1,
        ),
        ({"columns.score": None}, "study.toml: columns.score is missing.",
         "Name the score column under [columns].", 2),
        ({"data.path": "https://example.org/stalls.csv"},
         "https:/example.org/stalls.csv: is an address, not a file on this machine.", "Name a local file.", 3),
    ],
)  # fmt: skip
def test_what_is_wrong_is_said_whole(
    study: Study, changes: dict[str, object], what: str, do: str, status: int
) -> None:
    error = refusal(edit(study, changes))
    assert (error.what, error.do, error.status) == (what, do, status)


@pytest.mark.parametrize(
    ("columns", "what"),
    [
        ({"takings": 3}, 'stalls.csv: the outcome "takings" has the same value in every row that is used.'),
        ({"takings": ""}, 'stalls.csv: the outcome "takings" is missing in every row that is used.'),
        ({"takings": ["1"] + [""] * 39, "darkness": [""] + ["4", "6"] * 19 + ["5"]},
         'stalls.csv: the outcome "takings" is missing in every row that is used.'),
        ({"darkness": [""] * 39 + ["x"]},
         'stalls.csv: column "darkness", the score, holds text, not numbers: row 40 is the first with text.'),
        ({"weight": 0}, "stalls.csv: no row has all of score, cutoff, weight and cluster."),
    ],
)  # fmt: skip
def test_data_that_no_effect_can_come_from(study: Study, columns: dict[str, Any], what: str) -> None:
    rewrite(study, **columns)
    error = refusal(edit(study, {"columns.weight": "weight"}))
    assert error.what == what
    assert error.status == 3


def test_a_file_with_a_header_only(study: Study) -> None:
    study.data_file.write_text("darkness,takings\n", encoding="utf-8")
    error = refusal(study)
    assert (error.what, error.do, error.status) == (
        "stalls.csv: has a header but no rows.", "Name a file with rows.", 3,
    )  # fmt: skip
