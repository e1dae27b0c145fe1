"""The bench in a real terminal: kinds of terminal, and what it sends."""

from __future__ import annotations

import os
import sys
from pathlib import Path

import pytest
from bench_study import make_study
from pty_harness import Terminal

KINDS = {
    "16 colours": {"TERM": "xterm"},
    "dumb": {"TERM": "dumb"},
    "no colour": {"NO_COLOR": "1"},
    "C locale": {"LANG": "C", "LC_ALL": "C"},
}


def start(path: Path, size: tuple[int, int], **environment: str) -> Terminal:
    """The bench on a study, in a terminal of its own and with nothing remembered but that the hints were seen."""
    state = path.parent / "state" / "cutbank"
    state.mkdir(parents=True, exist_ok=True)
    (state / "hints-seen").touch()
    code = (
        f"from pathlib import Path; import sys; from tui.app import run; sys.exit(run(Path({str(path)!r})))"
    )
    fixed = {"XDG_STATE_HOME": str(path.parent / "state"), "HOME": str(path.parent)}
    return Terminal([sys.executable, "-c", code], size=size, environment={**fixed, **environment})


def status_of(terminal: Terminal) -> int:
    """The exit status, once the program has ended."""
    terminal.settle()
    ended = os.waitid(os.P_PID, terminal._pid, os.WEXITED | os.WNOWAIT)
    assert ended is not None
    return ended.si_status


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_terminal_shows_an_effect_and_takes_keys(tmp_path: Path, kind: str) -> None:
    with start(make_study(tmp_path), (80, 24), **KINDS[kind]) as terminal:
        terminal.wait_for("Randomisation", patience=30)
        terminal.type("\x1b[C")
        terminal.wait_for("Enter keeps it")
        if kind == "no colour":
            assert b"[38;" not in terminal.raw and b";38;" not in terminal.raw
        terminal.type("q")
        assert status_of(terminal) == 0
        assert b"\x1b[?1000h" not in terminal.raw  # the mouse is the terminal's own


def test_a_small_terminal_begins_with_the_effect(tmp_path: Path) -> None:
    with start(make_study(tmp_path), (40, 12)) as terminal:
        text = terminal.wait_for("Robust", patience=30)
        assert text.splitlines()[2].strip().startswith("+")
        terminal.type("q")
        assert status_of(terminal) == 0


def test_bytes_of_an_idle_screen_and_of_a_step(tmp_path: Path) -> None:
    with start(make_study(tmp_path), (100, 30)) as terminal:
        terminal.wait_for("Randomisation", patience=30)
        terminal.settle(quiet=0.6)
        assert terminal.read(1.5) == 0  # idle: nothing at all
        steps = []
        for key in ("\x1b[C", "\x1b[C", "\x1b[D", "\x1b[C"):
            terminal.type(key)
            steps.append(terminal.settle(quiet=0.4))
        assert max(steps) < 1500, steps
