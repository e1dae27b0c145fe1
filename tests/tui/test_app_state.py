"""The desk, its lock and its memory, without a screen."""

from __future__ import annotations

import json
import os
import socket
import stat
import subprocess
import sys
from pathlib import Path

import pytest
from bench_study import make_study

from study.document import load_study
from study.errors import StudyError
from tui.failures import failure_text, write_failure
from tui.lock import STALE_S, Lock
from tui.memory import FRESH, View, load_view, recent_studies, remember_study, save_view, view_file
from tui.state import Desk, changes_said, open_desk


def lock_as(path: Path, **changes: object) -> Path:
    """Write a lock as another process would, with some of it changed."""
    lock = Lock(path)
    assert lock.take() is None
    held = json.loads(lock.path.read_text())
    lock.path.write_text(json.dumps({**held, **changes}))
    return lock.path


def test_changes_can_be_undone_and_made_again(tmp_path: Path) -> None:
    desk = open_desk(make_study(tmp_path))
    first = desk.study
    assert desk.change({"estimate.kernel": "uniform"})
    assert desk.change({"estimate.order": 2})
    assert not desk.change({"estimate.order": 2})  # nothing would change: not one more to undo
    assert desk.undo() == "order is now 1"
    assert desk.undo() == "kernel is now triangular"
    assert desk.study == first and not desk.can_undo and desk.can_redo
    assert desk.redo() == "kernel is now uniform"
    desk.change({"estimate.donut": 1.5})
    assert not desk.can_redo  # a new change closes the other way
    desk.close()


def test_a_refused_change_leaves_the_study_as_it_was(tmp_path: Path) -> None:
    desk = open_desk(make_study(tmp_path))
    before = desk.study
    with pytest.raises(StudyError) as refused:
        desk.change({"estimate.kernel": "triangel"})
    assert "estimate.kernel" in refused.value.what and "triangular" in refused.value.do
    assert desk.study is before and not desk.can_undo
    desk.close()


def test_closing_saves_what_was_not_saved_and_keeps_comments(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    desk = open_desk(path)
    desk.change({"estimate.bandwidth": 7.5})
    assert not desk.is_saved
    desk.close()
    assert load_study(path).estimate.bandwidth == 7.5
    assert path.read_text().startswith("# kept: a comment of the person's own")


def test_what_changed_is_said_in_words(tmp_path: Path) -> None:
    desk = open_desk(make_study(tmp_path))
    before = desk.study
    desk.change(
        {
            "columns.outcomes": ("light",),
            "columns.cluster": "street",
            "estimate.level": 0.9,
            "estimate.order": 0,
        }
    )
    assert (
        changes_said(before, desk.study)
        == "outcomes is now light, cluster is now street, order is now 0 and 1 more"
    )
    desk.close()


def test_the_second_person_may_look_but_not_change(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    first, second = open_desk(path), open_desk(path)
    assert first.holder is None
    assert second.holder is not None and second.holder.host == socket.gethostname()
    assert second.holder.user in second.why_read_only and "since" in second.why_read_only
    with pytest.raises(StudyError) as refused:
        second.change({"estimate.order": 2})
    assert refused.value.what == second.why_read_only + "."
    second.view = View(widths={"light": 3.0})
    second.close()
    assert not view_file(path).exists()  # who may only look leaves no trace
    assert Lock(path).take() is not None  # and does not take the first one's lock away
    first.close()
    third = open_desk(path)
    assert third.holder is None
    third.close()


def test_a_lock_of_a_dead_process_is_taken_over(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    gone = subprocess.Popen([sys.executable, "-c", ""])
    gone.wait()
    lock_as(path, process=gone.pid)
    assert Lock(path).take() is None


def test_a_process_number_used_again_is_not_taken_for_the_holder(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    lock_as(path, process=os.getpid(), started="1")  # alive, but started at another time than the holder was
    assert Lock(path).take() is None


def test_another_machines_lock_counts_while_it_is_touched(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    file = lock_as(path, host="elsewhere", user="ines")
    holder = Lock(path).take()
    assert holder is not None and holder.said.startswith("ines on elsewhere since ")
    old = file.stat().st_mtime - STALE_S - 1
    os.utime(file, (old, old))
    assert Lock(path).take() is None


def test_a_beat_keeps_a_lock_fresh(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    lock = Lock(path)
    lock.take()
    os.utime(lock.path, (0, 0))
    lock.beat()
    assert lock.path.stat().st_mtime > 0


def test_a_lock_that_is_no_lock_names_nobody(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    file = Lock(path).path
    file.write_text("{half")
    holder = Lock(path).take()
    assert holder is not None and holder.user == "somebody"  # it may be written at this moment
    os.utime(file, (file.stat().st_mtime - 10,) * 2)
    assert Lock(path).take() is None


def test_a_folder_that_cannot_be_written_to_opens_all_the_same(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = make_study(tmp_path)

    def refuse(*args: object, **kwargs: object) -> int:
        raise PermissionError(13, "denied")

    monkeypatch.setattr(os, "open", refuse)
    lock = Lock(path)
    assert lock.take() is None and not lock.held


def test_the_view_comes_back_and_only_its_owner_can_read_it(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    view = View(
        screen="effect", outcome="visits", widths={"visits": 6.5}, data_row=3, zoom=2, colours="cutbank-light"
    )
    save_view(path, view)
    assert load_view(path) == view
    assert stat.S_IMODE(view_file(path).stat().st_mode) == 0o600


@pytest.mark.parametrize("content", [b"", b"[]", b"{", b'{"format": "other"}', b"\xff\xfe", b"null"])
def test_an_unusable_view_is_a_fresh_one(tmp_path: Path, content: bytes) -> None:
    path = make_study(tmp_path)
    view_file(path).write_bytes(content)
    assert load_view(path) == FRESH


def test_a_view_takes_only_what_can_be_used(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    content = {
        "format": "cutbank-view",
        "widths": {"a": -1, "b": "x", "c": True, "d": 2},
        "data_row": -4,
        "screen": 7,
    }
    view_file(path).write_text(json.dumps(content))
    assert load_view(path) == View(widths={"d": 2.0})


def test_recent_studies_are_kept_for_their_owner(tmp_path: Path) -> None:
    paths = []
    for name in ("a", "b", "c"):
        (tmp_path / name).mkdir()
        paths.append(make_study(tmp_path / name))
    for path in paths:
        remember_study(path)
    remember_study(paths[0])
    paths[1].unlink()
    assert recent_studies() == (paths[0], paths[2])
    folder = Path(os.environ["XDG_STATE_HOME"]) / "cutbank"
    assert stat.S_IMODE((folder / "recent.json").stat().st_mode) == 0o600
    assert stat.S_IMODE(folder.stat().st_mode) == 0o700


def test_a_fault_is_recorded_without_any_value(tmp_path: Path) -> None:
    secret = "Alder Street 7"
    try:
        try:
            raise ValueError(f"could not place {secret}")
        except ValueError as error:
            raise RuntimeError(secret) from error
    except RuntimeError as error:
        text = failure_text("testing", error)
        path = write_failure("testing", error)
    assert "RuntimeError" in text and "ValueError" in text and "test_app_state.py" in text
    assert secret not in path.read_text()
    assert stat.S_IMODE(path.stat().st_mode) == 0o600


def test_a_new_study_is_not_written_before_it_is_changed(tmp_path: Path) -> None:
    from bench_study import write_data

    from study.document import new_study

    desk = Desk(new_study(write_data(tmp_path), tmp_path / "study.toml"))
    desk.close()
    assert not (tmp_path / "study.toml").exists()
