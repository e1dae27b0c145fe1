from __future__ import annotations

import stat
from pathlib import Path

import pytest

from study.document import (
    Area,
    Frontier,
    Study,
    edit,
    load_study,
    new_study,
    parse_study,
    save_study,
    values_of,
)
from study.errors import StudyError
from study.options import BY_NAME
from study.readiness import missing_parts, require_complete

TEXT = """\
# Why this study exists
[study]
title = "Lantern oil on the north quay"
seed = 3          # chosen by a throw of dice
masked = false

[data]
path = "stalls.csv"
# rows = "open = 1"

[columns]
outcomes = ["takings"]   # per week
score = "darkness"
# site = "pier"

[assignment]
rule = "cutoffs"  # each pier its own
treated = "below"

[assignment.sites]   # from the minutes of the quay board
North = 12.0
South = 14.5 # disputed

[estimate]
bandwidth = [ 5.0, 8.0 ]   # (below, above)
"""


def refused(text: str) -> StudyError:
    with pytest.raises(StudyError) as caught:
        parse_study(text, "study.toml")
    assert caught.value.status == 2
    return caught.value


@pytest.mark.parametrize(
    ("text", "what", "do"),
    [
        (
            '[estimate]\nkernel = "triangle"',
            'study.toml: estimate.kernel is "triangle", which is not allowed.',
            'Allowed: "triangular", "uniform", "epanechnikov". Did you mean "triangular"?',
        ),
        (
            "[estimate]\npilot = -2.0",
            "study.toml: estimate.pilot is -2.0, which is not allowed.",
            'Allowed: "same", "mse" or a number above 0.',
        ),
        (
            "[estimate]\norder = 4",
            "study.toml: estimate.order is 4, which is not allowed.",
            "Allowed: a whole number from 0 to 3.",
        ),
        (
            "[estimate]\nlevel = 95",
            "study.toml: estimate.level is 95, which is not allowed.",
            "Allowed: a number between 0 and 1, both excluded.",
        ),
        (
            "[estimate]\nbandwidth = [1.0, -2.0]",
            "study.toml: estimate.bandwidth is [1.0, -2.0], which is not allowed.",
            f"Allowed: {BY_NAME['estimate.bandwidth'].expected}.",
        ),
        (
            '[columns]\noutcomes = "takings"',
            'study.toml: columns.outcomes is "takings", which is not allowed.',
            'Allowed: a list of different names in quotes, such as ["first", "second"].',
        ),
        (
            '[assignment.sites]\nNorth = "12"',
            'study.toml: assignment.sites is "12" for "North", which is not allowed.',
            "Allowed: a table of names and numbers, such as { Alder = 52.0 }.",
        ),
        (
            "[estimate]\nkernal = 1",
            'study.toml: "kernal" is not a known key of [estimate].',
            'Did you mean "kernel"?',
        ),
        (
            '[estimate]\nscore = "x"',
            'study.toml: "score" is not a known key of [estimate].',
            "Move it under [columns].",
        ),
        (
            "[guard]\nzzz = 1",
            'study.toml: "zzz" is not a known key of [guard].',
            "The keys of [guard] are profile.",
        ),
        (
            'kernel = "uniform"',
            'study.toml: "kernel" is not a known section or key.',
            "Move it under [estimate].",
        ),
        ("[estimte]", 'study.toml: "estimte" is not a known section or key.', "Did you mean [estimate]?"),
        (
            "[estimate.order]\na = 1",
            "study.toml: estimate.order is a table, which is not allowed.",
            "Allowed: a whole number from 0 to 3.",
        ),
        ("estimate = 3", "study.toml: estimate is not a section.", "Write it as a table, [estimate]."),
        (
            '[study]\ntitle = "a"\nseed = = 3',
            "study.toml: line 3 is not valid TOML: invalid value.",
            "Correct that line.",
        ),
        (
            '[study]\ntitle = "a',
            "study.toml: line 2 is not valid TOML: unterminated string.",
            "Correct that line.",
        ),
        (
            '[estimate]\norder = 0\ninterval = "bias-aware"',
            'study.toml: estimate.interval is "bias-aware", which a comparison of means (estimate.order = 0) does not have.',
            "Set estimate.order to 1 or more, or choose another interval.",
        ),
        (
            '[estimate]\nvariance = "spatial"',
            'study.toml: estimate.variance is "spatial", which belongs to a boundary, but assignment.rule is "cutoff".',
            'Choose "neighbour", "hc0", "hc1", "hc2" or "hc3".',
        ),
        (
            '[assignment]\ntreated = "inside"',
            'study.toml: assignment.treated is "inside", which belongs to a boundary, but assignment.rule is "cutoff".',
            'Choose "at or above", "above", "at or below" or "below".',
        ),
        (
            "[assignment.frontier]\nall = {a = 1.0}\nany = {b = 1.0}",
            "study.toml: assignment.frontier has both all and any.",
            "Keep one of the two.",
        ),
    ],
)
def test_what_a_file_gets_wrong_is_said_whole(text: str, what: str, do: str) -> None:
    error = refused(text)
    if "unterminated" in what:  # the parser's own words differ between Python versions; the line counts
        assert error.what.startswith("study.toml: line 2 is not valid TOML: ")
        return
    assert (error.what, error.do) == (what, do)
    assert str(error) == f"{what}\n{do}"


def test_a_message_can_not_steer_the_terminal() -> None:
    error = refused('[study]\nseed = "\\u001b]0;owned\\u0007"')
    assert "\x1b" not in str(error)
    assert "\x07" not in str(error)
    assert "\ufffd]0;owned\ufffd" in error.what


def test_every_part_is_read() -> None:
    study = parse_study(TEXT, "study.toml")
    assert (study.title, study.seed, study.masked) == ("Lantern oil on the north quay", 3, False)
    assert study.data.path == "stalls.csv"
    assert study.columns.outcomes == ("takings",)
    assert study.assignment.sites == {"North": 12.0, "South": 14.5}
    assert study.estimate.bandwidth == (5.0, 8.0)
    later = parse_study(
        '[assignment]\nrule = "boundary"\ntreated = "inside"\n'
        '[assignment.area]\npath = "zone.gpkg"\nreach = 5000\nsegments = "stretch"\n'
        "[assignment.frontier]\nany = { reading = 60, writing = 55.0 }\n",
        "study.toml",
    )
    assert later.assignment.area == Area(path="zone.gpkg", reach=5000.0, segments="stretch")
    assert later.assignment.frontier == Frontier(combine="any", cutoffs={"reading": 60.0, "writing": 55.0})


def test_an_edit_makes_a_new_study_and_a_bad_one_leaves_it_alone() -> None:
    study = parse_study(TEXT, "study.toml")
    changed = edit(
        study, {"estimate.kernel": "uniform", "assignment.sites.South": 15, "assignment.sites.West": 9.0}
    )
    assert changed.estimate.kernel == "uniform"
    assert changed.assignment.sites == {"North": 12.0, "South": 15.0, "West": 9.0}
    assert study.estimate.kernel == "triangular"
    assert study.assignment.sites == {"North": 12.0, "South": 14.5}
    assert (
        edit(
            changed, {"assignment.sites.West": None, "assignment.sites.South": 14.5, "estimate.kernel": None}
        )
        == study
    )
    with pytest.raises(StudyError) as caught:
        edit(study, {"estimate.kernle": "uniform"})
    assert caught.value.what == 'study.toml: "kernle" is not a known key of [estimate].'


def test_saving_keeps_comments_and_layout(tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    path.write_text(TEXT, encoding="utf-8")
    study = load_study(path)
    save_study(study)
    assert path.read_text(encoding="utf-8") == TEXT

    changed = edit(
        study,
        {
            "estimate.bandwidth": 6.0,
            "assignment.sites.South": 15.0,
            "columns.cluster": "street",
            "guard.profile": "census-ladder",
            "columns.outcomes": ("takings", "visits"),
        },
    )
    save_study(changed)
    expected = (
        TEXT.replace("bandwidth = [ 5.0, 8.0 ]   # (below", "bandwidth = 6.0   # (below")
        .replace("South = 14.5 # disputed", "South = 15.0 # disputed")
        .replace('["takings"]   # per', '["takings", "visits"]   # per')
        .replace('score = "darkness"\n', 'score = "darkness"\ncluster = "street"\n')
        + '\n[guard]\nprofile = "census-ladder"\n'
    )
    assert path.read_text(encoding="utf-8") == expected
    assert load_study(path) == changed

    save_study(study)  # undone
    assert path.read_text(encoding="utf-8") == TEXT


def test_a_saved_file_is_private_and_no_temporary_file_stays(tmp_path: Path) -> None:
    study = new_study(tmp_path / "stalls.csv", tmp_path / "study.toml")
    save_study(study)
    assert stat.S_IMODE((tmp_path / "study.toml").stat().st_mode) == 0o600
    assert [entry.name for entry in tmp_path.iterdir()] == ["study.toml"]
    assert load_study(tmp_path / "study.toml") == study
    assert study.data.path == "stalls.csv"
    assert study.title == "stalls"


def test_a_failed_save_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "study.toml"
    path.write_text(TEXT, encoding="utf-8")
    study = load_study(path)

    def full(_descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(StudyError) as caught:
        save_study(edit(study, {"estimate.order": 2}))
    assert caught.value.what == f"{path}: can't be written (no space left on device)."
    assert path.read_text(encoding="utf-8") == TEXT
    assert [entry.name for entry in tmp_path.iterdir()] == ["study.toml"]


def test_a_change_made_elsewhere_is_not_overwritten(tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    path.write_text(TEXT, encoding="utf-8")
    study = load_study(path)
    by_hand = TEXT + "# added in an editor\n"
    path.write_text(by_hand, encoding="utf-8")
    with pytest.raises(StudyError) as caught:
        save_study(edit(study, {"estimate.order": 2}))
    assert caught.value.what == "study.toml: was changed by another program since it was opened here."
    assert path.read_text(encoding="utf-8") == by_hand
    save_study(edit(load_study(path), {"estimate.order": 2}))
    assert "# added in an editor" in path.read_text(encoding="utf-8")


@pytest.mark.parametrize(
    "text",
    [
        "assignment.sites.North = 12.0\nestimate.kernel = 'uniform'\n",
        "[assignment]\nsites = { North = 12.0 } # inline\n",
        "[assignment.sites]\nNorth = 12\n[estimate]\norder = 2\n[assignment]\nrule = 'cutoffs'\n",
        "study = {title = 'a', seed = 3}\n",
        "[columns]\noutcomes = [\n  'a', # first\n  'b',\n]\n",
        "[estimate]\r\norder = 2 # c\r\n",
        "",
    ],
)
def test_unusual_layouts_survive_every_kind_of_change(text: str, tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    path.write_text(text, encoding="utf-8", newline="")
    study = load_study(path)
    everything = edit(
        study,
        {
            "study.title": 'a "quoted" title',
            "columns.outcomes": ("a", "new\nline"),
            "assignment.sites": {"South pier": 1.0, "é": 2.0},
            "assignment.area.path": "p",
            "assignment.frontier.all": {"x": 1.0, "y": 2.0},
            "estimate.order": 3,
        },
    )
    nothing = edit(everything, dict.fromkeys(values_of(study)))
    for state in (everything, nothing, study):
        save_study(state)
        assert load_study(path) == state


@pytest.mark.parametrize(
    ("make", "what"),
    [
        (lambda p: None, "there is no such study file."),
        (lambda p: p.mkdir(), "is a folder, not a study file."),
        (lambda p: p.write_bytes(b"[study]\ntitle = '\xff'\n"), "line 2 is not valid UTF-8."),
        (lambda p: p.write_bytes(b"#" * 5_000_000), "is too large for a study file."),
    ],
)
def test_a_file_that_is_none(make: object, what: str, tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    make(path)  # type: ignore[operator]
    with pytest.raises(StudyError) as caught:
        load_study(path)
    assert caught.value.what == f"{path}: {what}"
    assert caught.value.status == 2


def test_a_misspelt_study_file_is_found(tmp_path: Path) -> None:
    (tmp_path / "study.toml").touch()
    with pytest.raises(StudyError) as caught:
        load_study(tmp_path / "studdy.toml")
    assert caught.value.do == 'Did you mean "study.toml"?'


@pytest.mark.parametrize(
    ("changes", "sentence"),
    [
        ({"data.path": None}, "study.toml: data.path is missing."),
        ({"columns.outcomes": None}, "study.toml: columns.outcomes is missing."),
        ({"columns.score": None}, "study.toml: columns.score is missing."),
        ({"columns.site": None}, 'study.toml: assignment.rule is "cutoffs", but columns.site is missing.'),
        ({"assignment.sites": None}, 'study.toml: assignment.rule is "cutoffs", but no site has a cutoff.'),
        (
            {"assignment.cutoff_column": "c"},
            "study.toml: assignment.sites and assignment.cutoff_column are both given.",
        ),
        ({"assignment.rule": "cutoff"}, 'study.toml: assignment.rule is "cutoff", but no cutoff is given.'),
        (
            {"assignment.rule": "cutoff", "assignment.cutoff": 1.0, "assignment.cutoff_column": "c"},
            "study.toml: assignment.cutoff and assignment.cutoff_column are both given.",
        ),
        (
            {"assignment.rule": "steps"},
            'study.toml: assignment.rule is "steps", but fewer than two cutoffs are given.',
        ),
        (
            {"assignment.rule": "boundary", "assignment.treated": "inside"},
            'study.toml: assignment.rule is "boundary", but the area is missing.',
        ),
        (
            {"assignment.rule": "frontier"},
            'study.toml: assignment.rule is "frontier", but fewer than two scores have a cutoff.',
        ),
        (
            {"columns.covariates": ("darkness",)},
            'study.toml: column "darkness" is named by columns.score and by columns.covariates.',
        ),
    ],
)
def test_what_a_study_still_lacks(changes: dict[str, object], sentence: str) -> None:
    complete = edit(parse_study(TEXT, "study.toml"), {"columns.site": "pier"})
    require_complete(complete)
    assert missing_parts(complete) == ()
    with pytest.raises(StudyError) as caught:
        require_complete(edit(complete, changes))
    assert caught.value.what == sentence
    assert caught.value.status == 2


def test_a_study_of_data_elsewhere_keeps_the_whole_path(tmp_path: Path) -> None:
    study = new_study(tmp_path / "data" / "a.csv", tmp_path / "studies" / "study.toml")
    assert study.data_file == tmp_path / "data" / "a.csv"
    assert isinstance(study, Study)
