"""What the README shows is true: its study file is one, its commands exist."""

from __future__ import annotations

import re
from pathlib import Path

from study.cli import main
from study.document import load_study, parse_study


def block(repository: Path) -> str:
    found = re.search(r"```toml\n(.*?)```", (repository / "README.md").read_text(encoding="utf-8"), re.DOTALL)
    assert found is not None
    return found[1]


def test_its_study_file_is_the_demo(repository: Path, sample_data: Path) -> None:
    shown = parse_study(block(repository), sample_data / "hulls" / "study.toml")
    demo = load_study(sample_data / "hulls" / "study.toml")
    assert (shown.title, shown.seed, shown.data) == (demo.title, demo.seed, demo.data)
    assert (shown.columns, shown.assignment, shown.estimate) == (demo.columns, demo.assignment, demo.estimate)


def test_its_commands_are_those_of_the_help(repository: Path, capsys) -> None:
    readme = (repository / "README.md").read_text(encoding="utf-8")
    shown = set(re.findall(r"\| `cutbank ([a-z]+)", readme))
    assert main(["--help"]) == 0
    assert shown == set(re.findall(r"^  cutbank ([a-z]+)", capsys.readouterr().out, re.MULTILINE))
    assert shown
