"""The first screen stands before anything heavy is loaded."""

from __future__ import annotations

import subprocess
import sys

import pytest

LIGHT = [
    "tui.look",
    "tui.wire",
    "tui.safe",
    "tui.slot",
    "tui.widgets.table",
    "tui.widgets.form",
    "tui.widgets.cells",
]
HEAVY = {"numpy", "scipy", "pandas", "matplotlib", "plotext", "duckdb", "statsmodels", "shapely", "PIL"}


@pytest.mark.parametrize(
    "names", [LIGHT, [*LIGHT, "tui.widgets.chart", "tui.widgets.answers"]], ids=["words", "drawings"]
)
def test_what_a_screen_loads(names: list[str]) -> None:
    words = f"import sys, {', '.join(names)}; print(*{{name.partition('.')[0] for name in sys.modules}})"
    done = subprocess.run([sys.executable, "-c", words], capture_output=True, text=True, check=True)
    allowed = set() if names is LIGHT else {"numpy"}
    assert set(done.stdout.split()) & HEAVY == allowed
