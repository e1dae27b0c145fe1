"""The bench as a whole: what it loads, what it remembers, what it refuses, and how it ends."""

from __future__ import annotations

import os
import stat
import subprocess
import sys
from pathlib import Path

import pytest
from bench_study import STUDY, bench, make_study, press, settled, shown, type_text
from pty_harness import Terminal

from study.document import load_study
from study.errors import StudyError
from tui.app import CutbankApp
from tui.look import DARK, LIGHT, Look
from tui.memory import load_view
from tui.opening import desk_for, first_place
from tui.screens.effect import EffectScreen
from tui.walk import HINTS, walk_is_due

SIZE = (80, 24)
ROOT = Path(__file__).resolve().parents[2]


def test_the_first_screen_loads_nothing_heavy() -> None:
    code = (
        "import sys, tui.app\n"
        "heavy = {'numpy', 'scipy', 'pandas', 'duckdb', 'statsmodels', 'matplotlib', 'tomlkit', 'pyreadstat'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


@pytest.mark.parametrize("place", ["data", "assignment", "effect"])
def test_a_first_screen_is_drawn_before_anything_heavy_is_loaded(tmp_path: Path, place: str) -> None:
    path = make_study(tmp_path)
    code = (
        "import asyncio, sys\n"
        "from dataclasses import replace\n"
        "from pathlib import Path\n"
        "from tui.app import CutbankApp\n"
        "from tui.opening import desk_for\n"
        f"desk = desk_for(Path({str(path)!r}))\n"
        f"desk.view = replace(desk.view, screen={place!r})\n"
        "class First(CutbankApp):\n"
        "    def _begin(self):\n"
        "        said.append((self.room.place, sorted({'numpy', 'duckdb', 'scipy'} & set(sys.modules))))\n"
        "        super()._begin()\n"
        "said = []\n"
        "async def main():\n"
        "    app = First(desk)\n"
        "    async with app.run_test(size=(80, 24)) as pilot:\n"
        "        await pilot.pause()\n"
        "        await app.settle()\n"
        "asyncio.run(main())\n"
        "print(said)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == str([(place, [])])


async def test_the_header_says_which_study_and_where_we_are(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        first, second = shown(pilot).splitlines()[:2]
        assert first.split() == ["Lanterns", "in", "the", "lower", "town", "homes.csv", "unsealed", "saved"]
        assert "▸3 Effect" in second and " 1 Data" in second
        await press(pilot, "4")
        assert "▸4 Compare" in shown(pilot)
        assert "The study has one line: there is nothing to compare." in shown(pilot)
        await press(pilot, "5")
        assert "This version does not have it yet." in " ".join(shown(pilot).split())


async def test_reopening_stands_where_it_stood(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "o", "up")
        room = app.room
        assert isinstance(room, EffectScreen)
        width = room.width
        await press(pilot, "q")
    again = bench(path)
    async with again.run_test(size=SIZE) as pilot:
        await settled(pilot)
        room = again.room
        assert isinstance(room, EffectScreen)
        assert room.outcome == "visits" and room.width == width
        assert "visits" in shown(pilot) and f"within {width:g}" in shown(pilot)
        await press(pilot, "1", "q")
    assert first_place(desk_for(path)) == "data"


async def test_the_view_is_written_when_the_keys_rest(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "2")
        await pilot.pause(1.3)
        assert load_view(path).screen == "assignment"  # a lost connection loses nothing


async def test_a_second_person_is_told_who_has_the_study(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    first = desk_for(path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        assert first.holder is None and "read only" in shown(pilot)
        await press(pilot, "k")
        assert "has this study open, so you can look but not change it." in " ".join(shown(pilot).split())
        await press(pilot, "right")
        assert "not the study's" in shown(pilot)  # looking is free
    assert load_study(path).estimate.kernel == "triangular"
    first.close()


async def test_a_study_changed_elsewhere_is_not_written_over(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        path.write_text(STUDY.replace("50.0", "51.0"))
        await press(pilot, "k")
        assert "was changed by another program" in " ".join(shown(pilot).split())
        assert "not saved" in shown(pilot)
    assert load_study(path).assignment.cutoff == 51.0


async def test_a_small_terminal_is_named_and_grows_back(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=(40, 12)) as pilot:
        await settled(pilot)
        assert "40×12 here: made for 80×24 or more" in shown(pilot)
        assert shown(pilot).splitlines()[2].strip().startswith("+")  # the effect is the first thing
        for size in ((8, 3), (20, 6), (120, 40), (170, 50), (80, 24)):
            await pilot.resize_terminal(*size)
            await settled(pilot)
        assert "made for" not in shown(pilot) and "effect by bandwidth" in shown(pilot)


async def test_copying_writes_a_file_for_its_owner_and_says_where(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "y")
        said = " ".join(shown(pilot).split())
        assert "Sent to the terminal's clipboard; also in" in said
        path = Path(os.environ["XDG_STATE_HOME"]) / "cutbank" / "copied.txt"
        text = path.read_text()
        assert text.startswith("Lanterns in the lower town\n") and "light differs by" in text
        assert stat.S_IMODE(path.stat().st_mode) == 0o600
        assert app.clipboard == text


async def test_a_picture_of_the_screen_needs_nothing_from_a_network(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "f9")
        path = Path(os.environ["XDG_STATE_HOME"]) / "cutbank" / "screen.svg"
        text = path.read_text()
        assert "days" not in text and "light" in text and "Robust" in text
        assert "@font-face" not in text and "url(http" not in text and "cdn" not in text.casefold()
        assert stat.S_IMODE(path.stat().st_mode) == 0o600


async def test_colours_go_round_and_are_remembered(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path, look=Look(theme=DARK))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "f3")
        assert app.look.theme == LIGHT and app.theme == LIGHT
        await press(pilot, "q")
    assert load_view(path).colours == LIGHT


@pytest.mark.parametrize("look", [Look(ascii_only=True), Look(colour=False)], ids=["ascii", "no colour"])
async def test_every_screen_without_colour_and_in_ascii(tmp_path: Path, look: Look) -> None:
    app = bench(make_study(tmp_path), look=look)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        for key in "123456":
            await press(pilot, key)
            text = shown(pilot)
            if look.ascii_only:
                assert text.isascii(), sorted({letter for letter in text if not letter.isascii()})
        await press(pilot, "1", "question_mark")


async def test_the_hints_of_a_first_run_are_walked_through_and_stay_away(tmp_path: Path) -> None:
    assert walk_is_due()
    app = bench(make_study(tmp_path))
    app.hint = 0
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        for number, hint in enumerate(HINTS, 1):
            said = " ".join(shown(pilot).split())
            assert f"{hint} Hint {number} of 5 F4 next F6 no more hints" in said
            await press(pilot, "right", "f4")
        assert "Hint" not in shown(pilot)
    assert not walk_is_due()


async def test_the_hints_can_be_sent_away_at_once(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    app.hint = 0
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "f6")
        assert "Hint" not in shown(pilot) and not walk_is_due()


async def test_any_action_is_found_by_name_and_done(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "f2")
        await type_text(pilot, "next kernel")
        await settled(pilot)
        assert load_study(path).estimate.kernel == "uniform"
        await press(pilot, "f2")
        await type_text(pilot, "keep", enter=False)
        await type_text(pilot, "go to data")
        assert app.room is not None and app.room.place == "data"
        await press(pilot, "f2")
        await type_text(pilot, "xyzzy", enter=False)
        assert "Nothing is called that; try another word." in shown(pilot)
        await press(pilot, "enter", "escape")
        assert "▸1 Data" in shown(pilot)


async def test_leaving_the_browser_without_a_study_says_how_to_come_back(tmp_path: Path) -> None:
    app = bench(None)
    app.browse_from = tmp_path
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        assert "Nothing here can be read." in shown(pilot)
        await press(pilot, "escape")
        assert "f opens a data file or a study." in shown(pilot) and "no study is open" in shown(pilot)
        await press(pilot, "o")
        assert "No study is open: f on the Data screen opens one." in shown(pilot)
        for key in "23456":
            await press(pilot, key)
        await press(pilot, "u", "v", "escape", "q")
    assert app.return_code == 0


async def test_control_c_says_how_to_leave_and_does_not(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "ctrl+c")
        assert "q leaves; everything is saved already." in shown(pilot)


async def test_a_fault_shows_no_data_and_saves_the_study(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    path = make_study(tmp_path)

    def fail(self: EffectScreen) -> None:
        secret_record = "Alder Street 7"
        raise RuntimeError(f"could not place {secret_record}")

    monkeypatch.setattr(EffectScreen, "do_outcome", fail)
    app = bench(path)
    with pytest.raises(RuntimeError):  # noqa: PT012 - the app runs inside the block
        async with app.run_test(size=SIZE) as pilot:
            await settled(pilot)
            await press(pilot, "k", "o")
    printed = "".join(capfd.readouterr())
    assert "Alder" not in printed and "mistake in the program" in printed
    report = (Path(os.environ["XDG_STATE_HOME"]) / "cutbank" / "fault.txt").read_text()
    assert "RuntimeError" in report and "test_app.py" in report and "Alder" not in report
    assert load_study(path).estimate.kernel == "uniform"
    assert desk_for(path).holder is None  # the lock was given back


@pytest.mark.parametrize("name", ["HUP", "TERM"])
def test_a_lost_connection_saves_and_gives_the_terminal_back(tmp_path: Path, name: str) -> None:
    import signal

    path = make_study(tmp_path)
    code = (
        f"from pathlib import Path; import sys; from tui.app import run; sys.exit(run(Path({str(path)!r})))"
    )
    environment = {"XDG_STATE_HOME": str(tmp_path / "state"), "HOME": str(tmp_path)}
    with Terminal([sys.executable, "-c", code], size=SIZE, environment=environment) as terminal:
        terminal.wait_for("Robust", patience=30)
        terminal.type("k")
        terminal.wait_for("uniform\N{NO-BREAK SPACE}kernel", patience=30)
        terminal.type("2")
        terminal.wait_for("A unit is treated", patience=30)
        number = getattr(signal, f"SIG{name}")
        terminal.signal(number)
        terminal.settle()
        ended = os.waitid(os.P_PID, terminal._pid, os.WEXITED | os.WNOWAIT)
        assert ended is not None and ended.si_status == 128 + number
        assert b"\x1b[?1049l" in terminal.raw  # the alternate screen is left
    assert load_study(path).estimate.kernel == "uniform"
    assert load_view(path).screen == "assignment"
    assert not path.with_name(".study.toml.in-use").exists()


@pytest.mark.parametrize(
    ("name", "said"), [("absent.toml", "there is no such study file"), ("absent.csv", "there is no such file")]
)  # fmt: skip
def test_what_is_not_there_is_a_sentence(tmp_path: Path, name: str, said: str) -> None:
    with pytest.raises(StudyError) as refused:
        desk_for(tmp_path / name)
    assert said in refused.value.what


def test_a_data_file_finds_the_study_beside_it(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    desk = desk_for(tmp_path / "homes.csv")
    assert desk.study.path == path and desk.study.columns.score == "need"
    desk.close()
    other = tmp_path / "other.csv"
    other.write_text("a,b\n1,2\n")
    desk = desk_for(other)
    assert desk.study.path == tmp_path / "other.study.toml" and desk.saved is None
    desk.close()
    desk = desk_for(tmp_path)
    assert desk.study.path == path
    desk.close()


def test_text_in_a_study_file_that_names_a_site_in_markup_is_literal(tmp_path: Path) -> None:
    path = make_study(tmp_path, STUDY.replace("Lanterns in the lower town", "[bold red]x[/] a[/b]"))
    assert isinstance(bench(path), CutbankApp)
