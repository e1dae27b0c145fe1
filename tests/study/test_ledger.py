"""The ledger: what it keeps, what it notices, and that two processes can write it at once."""

import hashlib
import json
import os
import subprocess
import sys
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from estimation.choices import Choices
from study.document import Study, edit, parse_study
from study.errors import StudyError
from study.ledger import (
    START,
    Look,
    Resting,
    ledger_path,
    parse_ledger,
    read_ledger,
    record_act,
    record_looks,
    summary,
)

ROOT = Path(__file__).resolve().parents[2]
TEXT = """
[study]
title = "Lamps"
[data]
path = "homes.csv"
[columns]
outcomes = ["falls"]
score = "points"
[assignment]
cutoff = 20.0
"""
WHEN = datetime(2031, 5, 3, 14, 5, 9, tzinfo=UTC)


def look(width: float, outcome: str = "falls", rule: str = "chosen", **choices: object) -> Look:
    return Look(
        outcome=outcome,
        where="at the cutoff",
        widths=(width, width),
        rule=rule,
        choices=replace(Choices(), **choices),
    )


@pytest.fixture
def study(tmp_path: Path) -> Study:
    return parse_study(TEXT, tmp_path / "study.toml")


def keep(study: Study, *looks: Look) -> None:
    record_looks(study, "f" * 64, looks, version="1.0", when=WHEN)


def test_an_entry_says_what_was_asked_and_nothing_of_the_data(study: Study) -> None:
    keep(study, look(4.123456))
    [line] = ledger_path(study).read_text().splitlines()
    entry = json.loads(line)
    assert entry["content"] == {
        "outcome": "falls", "where": "at the cutoff", "width": [4.123, 4.123], "rule": "chosen", "pilot": "same",
        "kernel": "triangular", "order": 1, "interval": "robust", "level": 0.95, "variance": "neighbour",
        "curvature": "auto", "donut": 0.0, "adjust": False, "take_up": None, "cluster": None, "weight": None,
        "covariates": [], "rows": None, "assignment": entry["content"]["assignment"], "data": "f" * 64,
    }  # fmt: skip
    assert (entry["number"], entry["when"], entry["version"]) == (1, "2031-05-03T14:05:09+00:00", "1.0")
    assert ledger_path(study).stat().st_mode & 0o777 == 0o600


def test_the_chain_by_hand(study: Study) -> None:
    keep(study, look(4.0), look(5.0))
    keep(study, look(6.0))
    previous = hashlib.sha256(b"cutbank-ledger 1").hexdigest()
    for line in ledger_path(study).read_text().splitlines():
        entry = json.loads(line)
        assert entry["previous"] == previous
        said = entry.pop("hash")
        text = json.dumps(entry, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        previous = hashlib.sha256(text.encode()).hexdigest()
        assert said == previous
    assert read_ledger(study).head == previous and not read_ledger(study).problems


def test_looking_twice_is_looking_once(study: Study) -> None:
    keep(study, look(4.0), look(4.0))
    keep(study, look(4.0), look(4.00001))
    assert read_ledger(study).estimates == 1
    keep(study, look(4.0, "cost"), look(4.0, kernel="uniform"))
    found = read_ledger(study)
    assert (found.estimates, found.specifications, len(found.entries)) == (3, 2, 3)


def test_a_rules_width_is_one_specification_at_every_place(study: Study) -> None:
    keep(study, look(4.0, rule="mse"), look(5.0, rule="mse"), replace(look(7.0, rule="mse"), where="Alder"))
    assert read_ledger(study).specifications == 1
    assert read_ledger(study).outside(study) == 0
    keep(study, look(4.0))
    assert read_ledger(study).outside(study) == 1
    assert read_ledger(study).outside(edit(study, {"estimate.bandwidth": 4.0})) == 1


def test_other_data_or_another_rule_are_other_estimates(study: Study) -> None:
    keep(study, look(4.0))
    record_looks(study, "e" * 64, [look(4.0)], version="1.0")
    record_looks(edit(study, {"assignment.cutoff": 21.0}), "f" * 64, [look(4.0)], version="1.0")
    record_looks(edit(study, {"columns.covariates": ("age",)}), "f" * 64, [look(4.0)], version="1.0")
    assert read_ledger(study).estimates == 4


def test_the_summary_in_words(study: Study) -> None:
    assert summary(read_ledger(study), study, sealed=False) == "No estimate was looked at before."
    keep(study, look(4.0), look(5.0), look(4.0, "cost"))
    assert summary(read_ledger(study), study, sealed=True) == (
        "3 estimates under 2 different specifications were looked at; the planned one is reported."
    )
    assert summary(read_ledger(study), study, sealed=True, departs=True).endswith(
        "looked at; what is reported departs from the plan."
    )
    assert summary(read_ledger(study), study, sealed=False).endswith(
        "looked at; no plan was sealed beforehand."
    )


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_any_entry_removed_swapped_or_edited_is_noticed(
    data: st.DataObject, tmp_path_factory: pytest.TempPathFactory
) -> None:
    study = parse_study(TEXT, tmp_path_factory.mktemp("ledger") / "study.toml")
    keep(study, *(look(float(width)) for width in range(1, 7)))
    lines = ledger_path(study).read_bytes().splitlines(keepends=True)
    assert not parse_ledger(b"".join(lines)).problems
    i = data.draw(st.integers(0, 4))
    match data.draw(st.sampled_from(["remove", "swap", "edit", "double", "foreign"])):
        case "remove":
            del lines[i]
        case "swap":
            lines[i], lines[i + 1] = lines[i + 1], lines[i]
        case "edit":
            entry = json.loads(lines[i])
            entry["content"]["kernel"] = "uniform"
            lines[i] = json.dumps(entry).encode() + b"\n"
        case "double":
            lines.insert(i, lines[i])
        case "foreign":
            lines.insert(i, b"{}\n")
    assert parse_ledger(b"".join(lines)).problems


def test_every_edited_character_is_noticed(study: Study) -> None:
    keep(study, look(4.0), look(5.0))
    whole = ledger_path(study).read_bytes()
    for place in range(len(whole) - 1):
        if whole[place : place + 1].isdigit():
            digit = b"7" if whole[place : place + 1] != b"7" else b"3"
            assert parse_ledger(whole[:place] + digit + whole[place + 1 :]).problems, place


@pytest.mark.parametrize("kept", [1, 40, -2])
def test_a_line_cut_short_is_said_and_the_chain_goes_on(study: Study, kept: int) -> None:
    keep(study, look(4.0), look(5.0))
    lines = ledger_path(study).read_bytes().splitlines(keepends=True)
    ledger_path(study).write_bytes(lines[0] + lines[1][:kept])
    assert read_ledger(study).problems == ("Line 2 was cut short while it was written.",)
    keep(study, look(5.0), look(6.0))
    found = read_ledger(study)
    assert found.problems == ("Line 2 was cut short while it was written.",)
    assert [entry.content["width"][0] for entry in found.entries] == [4.0, 5.0, 6.0]


def test_a_whole_last_line_without_its_end_is_an_entry(study: Study) -> None:
    keep(study, look(4.0))
    ledger_path(study).write_bytes(ledger_path(study).read_bytes().rstrip(b"\n"))
    assert not read_ledger(study).problems
    keep(study, look(5.0))
    assert read_ledger(study).estimates == 2 and not read_ledger(study).problems


def test_processes_that_write_at_once_make_one_chain(study: Study) -> None:
    code = (
        "import sys; from pathlib import Path; from estimation.choices import Choices\n"
        "from study.document import parse_study; from study.ledger import Look, record_looks\n"
        f"study = parse_study({TEXT!r}, Path(sys.argv[1]))\n"
        "for i in range(15):\n"
        "    width = 1000.0 * int(sys.argv[2]) + i + 1\n"
        "    look = Look(outcome='falls', where='x', widths=(width, width), rule='chosen', choices=Choices())\n"
        "    record_looks(study, 'f', [look], version='1')\n"
    )
    running = [
        subprocess.Popen(
            [sys.executable, "-c", code, str(study.path), str(i)], env={**os.environ, "PYTHONPATH": str(ROOT)}
        )
        for i in range(1, 4)
    ]
    assert [process.wait(timeout=60) for process in running] == [0, 0, 0]
    found = read_ledger(study)
    assert found.estimates == 45 and not found.problems
    assert [entry.number for entry in found.entries] == list(range(1, 46))


def test_an_act_stands_in_the_same_chain(study: Study) -> None:
    keep(study, look(4.0))
    record_act(study, "seal", {"plan": "abc"}, version="1.0")
    keep(study, look(5.0))
    found = read_ledger(study)
    assert [entry.kind for entry in found.entries] == ["look", "seal", "look"]
    assert found.estimates == 2 and not found.problems


def test_no_ledger_is_an_empty_one(study: Study) -> None:
    assert read_ledger(study).head == START and read_ledger(study).estimates == 0


def test_a_folder_in_its_place_is_a_sentence(study: Study) -> None:
    ledger_path(study).mkdir()
    with pytest.raises(StudyError) as caught:
        keep(study, look(4.0))
    assert str(caught.value) == (
        "study.ledger.jsonl: the ledger can't be kept (is a directory).\n"
        "Keep the study in a folder that you may write to."
    )


def test_widths_passed_by_are_not_looks() -> None:
    resting = Resting(wait_s=1.0)
    handed = [resting.moved(look(float(w)), 0.1 * w) for w in range(1, 20)]
    assert handed == [None] * 19
    assert resting.rested(2.5) is None
    assert resting.rested(3.0) == look(19.0)
    assert resting.rested(9.0) is None
    resting.moved(look(3.0), 10.0)
    assert resting.moved(look(4.0), 11.5) == look(3.0)
