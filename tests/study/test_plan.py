"""The plan: one text for one set of choices, a seal that notices a change, departures key by key."""

import hashlib
import json
from dataclasses import replace
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import pytest

from study.document import Study, edit, parse_study, values_of
from study.errors import Masked, StudyError
from study.options import OPTIONS
from study.plan import departures, is_masked, is_sealed, plan_path, planned_choices, read_seal, seal

WHEN = datetime(2031, 5, 3, 16, 5, 9, 1234, tzinfo=timezone(timedelta(hours=2)))
TEXT = """
[study]
title = "Lamps"
seed = 3
[data]
path = "homes.csv"
[columns]
outcomes = ["falls"]
score = "points"
[assignment]
cutoff = 20.0
"""


@pytest.fixture
def study(tmp_path: Path) -> Study:
    (tmp_path / "homes.csv").write_text("points,falls\n1,2\n30,4\n")
    return parse_study(TEXT, tmp_path / "study.toml")


def test_the_seal_freezes_the_choices_and_the_data(study: Study) -> None:
    sealed = seal(study, by="Ines", when=WHEN)
    assert sealed.when == "2031-05-03T14:05:09+00:00"
    assert sealed.choices["data.fingerprint"] == hashlib.sha256(b"points,falls\n1,2\n30,4\n").hexdigest()
    assert read_seal(study) == sealed
    assert is_sealed(study) and not departures(study)


def test_the_hash_is_that_of_the_sorted_json_without_spaces(study: Study) -> None:
    sealed = seal(study, by="Ines", when=WHEN)
    written = json.loads(plan_path(study).read_text())
    by_hand = json.dumps(written["plan"], sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    assert hashlib.sha256(by_hand.encode()).hexdigest() == sealed.hash == written["hash"]


def test_the_file_is_its_owners_only(study: Study) -> None:
    seal(study, by="Ines")
    assert plan_path(study).stat().st_mode & 0o777 == 0o600


def test_every_declared_choice_is_planned_but_names_and_places(study: Study) -> None:
    left_out = {option.name for option in OPTIONS} - set(planned_choices(study))
    assert left_out == {"study.title", "study.masked", "data.path", "assignment.area.path"}


def test_a_departure_names_key_planned_and_now(study: Study) -> None:
    seal(study, by="Ines")
    changed = edit(study, {"estimate.bandwidth": (5.0, 8.0), "columns.outcomes": ("falls", "cost")})
    found = {d.key: (d.planned, d.now) for d in departures(changed)}
    assert found == {
        "columns.outcomes": (["falls"], ["falls", "cost"]),
        "estimate.bandwidth": ("mse", [5.0, 8.0]),
    }
    said = [d.sentence for d in departures(changed)]
    assert said[1] == 'estimate.bandwidth was planned as "mse" and is now [5.0, 8.0].'
    assert not departures(edit(changed, {"estimate.bandwidth": "mse", "columns.outcomes": ("falls",)}))


def test_other_data_are_a_departure(study: Study) -> None:
    seal(study, by="Ines")
    study.data_file.write_text("points,falls\n1,2\n30,5\n")
    assert [d.sentence for d in departures(study)] == [
        "The data file is not the one that the plan was sealed with."
    ]


def test_a_title_and_a_moved_file_are_none(study: Study) -> None:
    seal(study, by="Ines")
    moved = study.data_file.rename(study.path.parent / "moved.csv")
    assert not departures(edit(study, {"study.title": "Other", "data.path": moved.name}))


def test_each_choice_that_changes_is_noticed(study: Study) -> None:
    seal(study, by="Ines")
    for name, value in {
        "study.seed": 4,
        "columns.score": "other",
        "columns.covariates": ("age",),
        "assignment.cutoff": 20.5,
        "assignment.treated": "below",
        "estimate.kernel": "uniform",
        "estimate.level": 0.9,
        "estimate.donut": 0.1,
        "estimate.adjust": True,
        "guard.profile": "census-ladder",
        "data.rows": "points > 3",
    }.items():
        assert [d.key for d in departures(edit(study, {name: value}))] == [name]


def test_a_plan_is_sealed_once(study: Study) -> None:
    seal(study, by="Ines", when=WHEN)
    with pytest.raises(StudyError) as caught:
        seal(study, by="Ines")
    assert str(caught.value) == (
        "study.toml: the plan was sealed on 3 May 2031, 14:05 UTC.\n"
        "Go on with it: what differs from it now is marked as a departure."
    )


@pytest.mark.parametrize(
    ("content", "why"),
    [
        ("{", "is not a sealed plan"),
        ("[]", "is not a sealed plan"),
        ('{"format": "cutbank-result", "version": 1}', "is not a sealed plan"),
        ('{"format": "cutbank-plan", "version": 9}', "has the version 9, which this program does not know"),
        ("\xff", "is not a sealed plan"),
    ],
)
def test_a_damaged_plan_unmasks_nothing(study: Study, content: str, why: str) -> None:
    plan_path(study).write_bytes(content.encode("latin-1"))
    with pytest.raises(StudyError) as caught:
        is_masked(study)
    assert caught.value.what == f"study.plan.json: {why}."


def test_an_edited_plan_is_noticed(study: Study) -> None:
    seal(study, by="Ines")
    text = plan_path(study).read_text().replace('"triangular"', '"uniform"')
    plan_path(study).write_text(text)
    with pytest.raises(StudyError) as caught:
        departures(study)
    assert caught.value.what == "study.plan.json: was changed after it was sealed."


def test_masked_until_sealed(study: Study) -> None:
    assert study.masked and is_masked(study)
    assert not is_masked(replace(study, masked=False))
    seal(study, by="Ines", when=datetime.now(UTC))
    assert not is_masked(study)


def test_planned_values_are_the_studys_own(study: Study) -> None:
    planned, values = planned_choices(study), values_of(study)
    assert planned["assignment.cutoff"] == values["assignment.cutoff"] == 20.0
    assert planned["columns.outcomes"] == list(study.columns.outcomes)


def test_the_masked_sentence_serves_both_kinds_of_listener() -> None:
    masked = Masked("falls")
    assert masked.sentence == masked.what and masked.remedy == masked.do and masked.status == 1
    assert str(masked).startswith("falls is masked until the plan is sealed")
