"""What every test gets: repeatable properties, one thread for linear algebra, no trace in the person's home."""

from __future__ import annotations

import os
from pathlib import Path

# Before numpy is imported anywhere: two workers on two cores are slowed by threads of their own.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import pytest
from hypothesis import settings

# The same examples on every run, and no deadline: a busy machine is not a wrong answer.
settings.register_profile("repeatable", derandomize=True, deadline=None, database=None, max_examples=50)
settings.load_profile("repeatable")


@pytest.fixture(autouse=True)
def _own_home(tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch) -> None:
    """Point home and its customary folders at an empty place."""
    home = tmp_path_factory.mktemp("home")
    monkeypatch.setenv("HOME", str(home))
    for name in ("XDG_CONFIG_HOME", "XDG_STATE_HOME", "XDG_DATA_HOME", "XDG_CACHE_HOME", "XDG_RUNTIME_DIR"):
        monkeypatch.setenv(name, str(home / name.lower()))


@pytest.fixture(scope="session")
def repository() -> Path:
    """The checkout's top folder."""
    return Path(__file__).resolve().parent.parent


@pytest.fixture(scope="session")
def sample_data(repository: Path) -> Path:
    """The folder of the invented studies; copy what a test changes."""
    return repository / "sample_data"
