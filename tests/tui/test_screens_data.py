"""The Data screen: columns, roles by key, the row filter, opening files."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from bench_study import bench, make_study, press, settled, shown, type_text, write_data

from study.document import Columns, load_study
from tui.look import Look
from tui.screens.browse import list_folder, size_said
from tui.screens.data import end_said, spread
from tui.screens.roles import role_changes, role_of, why_not_role

SIZE = (100, 30)


async def test_columns_show_type_gaps_range_and_role(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "1")
        rows = {line.split()[0]: line.split() for line in shown(pilot).splitlines() if line.strip()}
        assert rows["need"][1:4] == ["score", "whole", "2.0%"]
        assert rows["need"][5:7] == ["0", "100"]
        assert rows["light"][1] == "outcome" and rows["lantern"][1] == "whole"
        assert "Lanterns in the lower town" in shown(pilot)


async def test_a_key_gives_a_role_and_takes_it_away_and_the_file_says_so(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "1", "down", "down", "down", "o")  # visits, an outcome until now
        assert load_study(path).columns.outcomes == ("light",)
        await press(pilot, "down", "p", "down", "c")
        assert load_study(path).columns.take_up == "lantern"
        assert load_study(path).columns.cluster == "street"
        await press(pilot, "n")
        assert load_study(path).columns.cluster is None
        await press(pilot, "u", "u")
        study = load_study(path)
        assert (study.columns.cluster, study.columns.take_up) == (None, "lantern")
        await press(pilot, "U")
        assert load_study(path).columns.cluster == "street"
        assert path.read_text().startswith("# kept")


async def test_text_cannot_be_the_score_and_says_why(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "1", "end", "s")
        assert '"kind" holds text, but a score is a number.' in shown(pilot)
        await press(pilot, "k")
        assert "holds text" not in shown(pilot)  # said until the next key
    assert load_study(path).columns.score == "need"


async def test_rows_are_counted_while_the_condition_is_typed(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "1", "r")
        await type_text(pilot, "home > 600", enter=False)
        assert "Keeps 300 of 900 rows." in shown(pilot)
        await press(pilot, "enter")
        assert load_study(path).data.rows == "home > 600"
        assert "300 of 900 rows kept: home > 600" in shown(pilot)


async def test_a_bad_condition_is_a_sentence_and_changes_nothing(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "1", "r")
        await type_text(pilot, "hom > 600", enter=False)
        assert "Keeps" not in shown(pilot) and "hom" in shown(pilot)
        await press(pilot, "escape")
    assert load_study(path).data.rows is None


async def test_a_file_with_other_columns_shows_its_names_literally(tmp_path: Path) -> None:
    data = tmp_path / "odd.csv"
    data.write_text("[bold]x[/],\x1b[2Jy,a[/b]\n1,2,3\n4,5,6\n", encoding="utf-8")
    app = bench(data)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        text = shown(pilot)
        assert "[bold]x[/]" in text and "a[/b]" in text
        assert "\x1b" not in text and "[2Jy" in text


async def test_a_file_that_cannot_be_read_is_a_sentence(tmp_path: Path) -> None:
    path = make_study(tmp_path)
    (tmp_path / "homes.csv").unlink()
    app = bench(path)
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "1")
        await settled(pilot)  # two lines where one was: the layout follows
        assert "homes.csv: there is no such" in " ".join(shown(pilot).split())
        await press(pilot, "3")
        assert "homes.csv" in shown(pilot)


async def test_from_a_data_file_to_a_declared_study_by_keys_alone(tmp_path: Path) -> None:
    app = bench(write_data(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        assert "Next: mark an outcome: o on its row." in shown(pilot)
        assert not (tmp_path / "study.toml").exists()
        await press(pilot, "down", "s", "down", "o")
        assert "Next: set the cutoff on screen 2." in shown(pilot)
        await press(pilot, "2", "c")
        assert "This line is a proposal" in shown(pilot)
        await type_text(pilot, "50")
    study = load_study(tmp_path / "study.toml")
    assert (study.columns.score, study.columns.outcomes, study.assignment.cutoff) == (
        "need",
        ("light",),
        50.0,
    )


async def test_the_browser_lists_only_what_can_be_read_and_opens_it(tmp_path: Path) -> None:
    (tmp_path / "inner").mkdir()
    path = make_study(tmp_path / "inner")
    (tmp_path / "inner" / "notes.md").write_text("no data")
    (tmp_path / "inner" / "pyproject.toml").write_text("[project]\nname = 'other'\n")
    os.mkfifo(tmp_path / "inner" / "pipe.csv")
    names = [found.name for found in list_folder(tmp_path / "inner")]
    assert names == ["study.toml", "homes.csv"]
    app = bench(None)
    app.browse_from = tmp_path
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        assert "inner/" in shown(pilot)
        await press(pilot, "enter")
        assert "notes.md" not in shown(pilot) and "pyproject" not in shown(pilot)
        await press(pilot, "enter")
        assert app.desk is not None and app.desk.study.path == path
        assert "Lanterns in the lower town" in shown(pilot)


async def test_a_columns_spread_is_a_table_whose_counts_are_its_rows(tmp_path: Path) -> None:
    app = bench(make_study(tmp_path))
    async with app.run_test(size=SIZE) as pilot:
        await settled(pilot)
        await press(pilot, "1", "down", "enter")
        lines = shown(pilot).splitlines()
        assert "Spread of need" in lines[0]
        assert sum(int(line.split()[-1]) for line in lines[3:19]) == 882  # 900 less one in fifty
        await press(pilot, "escape")
        assert "lowest" in shown(pilot)


def test_a_folder_that_cannot_be_looked_into_is_an_error_for_the_page(tmp_path: Path) -> None:
    with pytest.raises(OSError):
        list_folder(tmp_path / "absent")


def test_a_column_plays_one_role() -> None:
    columns = Columns(outcomes=("a",), score="b", covariates=("c",))
    assert role_changes(columns, "a", "score") == {"columns.outcomes": (), "columns.score": "a"}
    assert role_changes(columns, "b", "score") == {"columns.score": None}
    assert role_changes(columns, "c", "outcome") == {"columns.outcomes": ("a", "c"), "columns.covariates": ()}
    assert role_changes(columns, "b", "") == {"columns.score": None}
    assert role_changes(columns, "d", "") == {}
    assert [role_of(columns, name) for name in "abcd"] == ["outcome", "score", "covariate", ""]


@pytest.mark.parametrize(
    ("kind", "role", "said"),
    [
        ("text", "score", '"x" holds text, but a score is a number'),
        ("date", "outcome", '"x" holds dates, but an outcome is a number'),
        ("yes/no", "score", '"x" holds only yes and no, but a score needs many values'),
        ("text", "cluster", ""),
        ("yes/no", "outcome", ""),
    ],
)
def test_why_a_column_cannot_play_a_role(kind: str, role: str, said: str) -> None:
    assert why_not_role(kind, "x", role) == said


@pytest.mark.parametrize(
    ("end", "said"), [(None, ""), (1958.0, "1958"), (25_000.0, "25,000"), (0.123456789, "0.123457"), ("2024-01-02", "2024-01-02")]
)  # fmt: skip
def test_ends_of_a_range(end: object, said: str) -> None:
    assert end_said(end) == said


def test_a_spread_fills_its_cells() -> None:
    assert len(spread(tuple(range(16)), 8, Look())) == 8
    assert spread((), 8, Look()) == ""
    assert spread((0, 0, 4, 4), 2, Look(ascii_only=True)) == " #"


@pytest.mark.parametrize(
    ("size", "said"), [(999, "999 B"), (1000, "1.0 kB"), (999_960, "1.0 MB"), (3_100_000, "3.1 MB")]
)
def test_sizes_are_said(size: int, said: str) -> None:
    assert size_said(size) == said
