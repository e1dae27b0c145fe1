"""The lock files: everything hashed, nothing about where it came from, in step with pyproject.toml."""

from __future__ import annotations

import re
import tomllib
from importlib.metadata import version
from pathlib import Path

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

LOCKS = ("requirements.lock", "requirements-dev.lock")


def locked(text: str) -> dict[str, list[Requirement]]:
    """Requirements by name; a name may stand twice, for older and newer Python."""
    entries = text.split("\n", 1)[1].replace("\\\n", " ").splitlines()
    found: dict[str, list[Requirement]] = {}
    for entry in entries:
        requirement, *hashes = entry.split("--hash=")
        assert hashes, f"no hash: {entry[:60]}"
        assert all(re.fullmatch(r"sha256:[0-9a-f]{64}", h.strip()) for h in hashes)
        parsed = Requirement(requirement.strip())
        found.setdefault(canonicalize_name(parsed.name), []).append(parsed)
    return found


def declared(repository: Path, *extras: str) -> list[Requirement]:
    project = tomllib.loads((repository / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    lines = list(project["dependencies"])
    for extra in extras:
        lines += project["optional-dependencies"][extra]
    return [Requirement(line) for line in lines]


@pytest.mark.parametrize("name", LOCKS)
def test_a_lock_names_no_place(repository: Path, name: str) -> None:
    text = (repository / name).read_text(encoding="utf-8")
    assert "//" not in text
    assert "/" not in text.split("\n", 1)[1]
    options = set(re.findall(r"--[a-z-]+", text))
    assert options == {"--hash"}


@pytest.mark.parametrize(("name", "extras"), [(LOCKS[0], ("build",)), (LOCKS[1], ("build", "dev"))])
def test_a_lock_meets_what_the_project_declares(repository: Path, name: str, extras: tuple[str, ...]) -> None:
    lock = locked((repository / name).read_text(encoding="utf-8"))
    for need in declared(repository, *extras):
        held = lock[canonicalize_name(need.name)]
        assert all(need.specifier.contains(str(entry.specifier).removeprefix("==")) for entry in held), need


def test_both_locks_hold_the_same_versions(repository: Path) -> None:
    run, dev = (locked((repository / name).read_text(encoding="utf-8")) for name in LOCKS)
    assert set(run) < set(dev)
    assert {name: [str(e) for e in entries] for name, entries in run.items()} == {
        name: [str(e) for e in dev[name]] for name in run
    }


def test_what_is_installed_is_what_is_locked(repository: Path) -> None:
    lock = locked((repository / LOCKS[1]).read_text(encoding="utf-8"))
    for need in declared(repository):
        here = [e for e in lock[canonicalize_name(need.name)] if e.marker is None or e.marker.evaluate()]
        assert [str(e.specifier) for e in here] == [f"=={version(need.name)}"], need.name
