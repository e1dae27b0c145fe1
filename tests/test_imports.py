"""The direction of imports, tested twice: from the source, and in a fresh interpreter that lists what got loaded."""

from __future__ import annotations

import json
import os
import pkgutil
import subprocess
import sys
from pathlib import Path

import pytest

OURS = ("estimation", "geo", "study", "tui")
# What makes a start slow: each of these is imported where it is used.
HEAVY = (
    "pandas", "pyarrow", "statsmodels", "linearmodels", "sklearn", "matplotlib", "geopandas", "pyogrio",
    "pyproj", "shapely", "pyreadstat", "openpyxl", "duckdb", "plotext", "scipy.stats",
)  # fmt: skip
# The first screen needs no numbers at all.
NUMBERS = ("numpy", "scipy")


def loaded_by(*statements: str) -> set[str]:
    """Names of all modules that a fresh interpreter holds after `statements`."""
    code = "\n".join((*statements, "import json, sys", "print(json.dumps(sorted(sys.modules)))"))
    root = Path(__file__).resolve().parent.parent
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        cwd=root,
        env={**os.environ, "PYTHONPATH": str(root)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return set(json.loads(done.stdout))


def modules_of(package: str) -> list[str]:
    folder = Path(__file__).resolve().parent.parent / package
    return [package, *(m.name for m in pkgutil.walk_packages([str(folder)], f"{package}."))]


def within(loaded: set[str], names: tuple[str, ...]) -> list[str]:
    return sorted(m for m in loaded if any(m == n or m.startswith(f"{n}.") for n in names))


def test_the_contracts_in_the_source_hold(repository: Path) -> None:
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c()"],
        cwd=repository,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "0 broken" in done.stdout


def test_the_contracts_notice_a_wrong_import(tmp_path: Path, repository: Path) -> None:
    """A contract that can't be broken protects nothing."""
    for package in OURS:
        (tmp_path / package).mkdir()
        (tmp_path / package / "__init__.py").write_text("")
    (tmp_path / "estimation" / "wrong.py").write_text("import study\n")
    (tmp_path / "pyproject.toml").write_text((repository / "pyproject.toml").read_text(encoding="utf-8"))
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c()"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 1
    assert "estimation.wrong -> study" in done.stdout


@pytest.mark.parametrize(
    ("package", "allowed"),
    [
        ("estimation", ("estimation",)),
        ("geo", ("geo",)),
        ("study", ("study", "estimation", "geo")),
        ("tui", ("tui", "study", "estimation", "geo")),
    ],
)
def test_a_package_loads_only_what_lies_below_it(package: str, allowed: tuple[str, ...]) -> None:
    loaded = loaded_by(*(f"import {name}" for name in modules_of(package)))
    assert within(loaded, (package,))
    assert within(loaded, OURS) == within(loaded, allowed)


@pytest.mark.parametrize("package", OURS)
def test_no_module_loads_a_heavy_library_before_it_is_used(package: str) -> None:
    loaded = loaded_by(*(f"import {name}" for name in modules_of(package)))
    light = () if package != "geo" else ("shapely", "pyproj")  # geometry is what geo is for
    assert within(loaded, tuple(name for name in HEAVY if name not in light)) == []


@pytest.mark.parametrize("module", ["study.cli", "tui.app", "estimation.choices", "study.document"])
def test_what_starts_first_loads_no_numbers(module: str) -> None:
    assert within(loaded_by(f"import {module}"), HEAVY + NUMBERS) == []


def test_help_loads_no_screens(capfd: pytest.CaptureFixture[str]) -> None:
    loaded = loaded_by(
        "import contextlib, io",
        "from study.cli import main",
        "with contextlib.redirect_stdout(io.StringIO()), contextlib.suppress(SystemExit):",
        "    main(['--help'])",
    )
    assert within(loaded, HEAVY + NUMBERS + ("textual", "rich", "tomlkit")) == []
