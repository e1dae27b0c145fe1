"""How soon a key is answered on the Effect screen: in tmux at many rows, and over a slow line.

Run: python benchmarks/bench_keys.py [rows ...]

In tmux (100 x 30) the time runs from handing tmux the key to the first capture of the pane that shows the new width; a
capture is asked every millisecond over one control connection, so no process is started meanwhile. 60 presses, after 5 to
warm up. Limits: median 30 ms, 95th percentile 60 ms. Over the line (8 kB/s, 200 ms round trip, simulated) the right arrow
is held for 3 s at 30 a second; limit: the last paint within 1 s of letting go.
"""

from __future__ import annotations

import os
import re
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from types import TracebackType

import duckdb

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests" / "tui")]

from slow_link import hold_a_key  # noqa: E402 - found only beside the tests

from tui.screens.widths import next_width  # noqa: E402 - as above

PRESSES, WARM = 60, 5
WIDTH = re.compile(r"within ([\d.]+)")
STUDY = """[study]
title = "Keys under many rows"
masked = false
[data]
path = "rows.parquet"
[columns]
outcomes = ["outcome"]
score = "score"
[assignment]
rule = "cutoff"
treated = "at or above"
cutoff = 50.0
[estimate]
bandwidth = 3.0
"""


def make_study(folder: Path, rows: int) -> Path:
    """So many invented rows in a Parquet file, and a study on them."""
    folder.mkdir()
    with duckdb.connect() as database:
        database.execute("SELECT setseed(0.41)")
        database.execute(
            f"COPY (SELECT score, sin(score / 20) + 0.2 * (score >= 50)::int + random() AS outcome FROM "
            f"(SELECT 100 * random() AS score FROM range({rows}))) TO '{folder / 'rows.parquet'}' (FORMAT parquet)"
        )
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")
    return folder / "study.toml"


class Tmux:
    """A program in a tmux of its own, spoken to over one control connection."""

    def __init__(self, command: list[str], home: Path) -> None:
        self._socket = str(home / "tmux")
        environment = {**os.environ, "HOME": str(home), "TERM": "xterm-256color"}
        environment.pop("TMUX", None)
        subprocess.run(
            ["tmux", "-S", self._socket, "-f", "/dev/null", "new-session", "-d", "-x", "100", "-y", "30", *command],
            check=True, env=environment, cwd=ROOT,
        )  # fmt: skip
        self._control = subprocess.Popen(
            ["tmux", "-S", self._socket, "-C", "attach"],
            stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, bufsize=1, env=environment,
        )  # fmt: skip
        self._reply()

    def __enter__(self) -> Tmux:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        subprocess.run(["tmux", "-S", self._socket, "kill-server"], check=False)
        self._control.wait(5)

    def ask(self, command: str) -> list[str]:
        """Give tmux a command and return what it answers."""
        assert self._control.stdin is not None
        self._control.stdin.write(command + "\n")
        return self._reply()

    def _reply(self) -> list[str]:
        assert self._control.stdout is not None
        lines: list[str] = []
        inside = False
        for line in self._control.stdout:
            if line.startswith("%begin"):
                inside = True
            elif line.startswith(("%end", "%error")):
                return lines
            elif inside:
                lines.append(line.rstrip("\n"))
        raise SystemExit("tmux has ended")

    def width(self) -> str:
        """The width that the screen says it stands at, or ""."""
        found = WIDTH.search("\n".join(self.ask("capture-pane -p")))
        return found[1] if found else ""

    def press(self, key: str) -> float:
        """Press a key and return the seconds until another width is on the screen."""
        before, start = self.width(), time.perf_counter()
        self.ask(f"send-keys {key}")
        while (now := time.perf_counter()) < start + 5.0:
            if self.width() not in ("", before):
                return time.perf_counter() - start
            time.sleep(max(0.0, 0.001 - (time.perf_counter() - now)))
        raise SystemExit("a key was not answered within 5 s")


def key_times(command: list[str], home: Path) -> list[float]:
    """Milliseconds of 60 presses; the key walks to and fro so that the width stays where the rows are."""
    with Tmux(command, home) as tmux:
        end = time.monotonic() + 180.0
        while not tmux.width():
            if time.monotonic() > end:
                raise SystemExit("no effect within 180 s")
            time.sleep(0.2)
        time.sleep(3.0)  # the sweep and whatever else follows the first picture
        times = []
        for press in range(WARM + PRESSES):
            took = tmux.press("Right" if press // 10 % 2 == 0 else "Left")
            time.sleep(0.12)  # as fast as a person presses; the slow part of the answer is at work meanwhile
            if press >= WARM:
                times.append(1e3 * took)
        return times


def final_width(before: str, pressed: int) -> str:
    """What the screen must say after so many presses."""
    found = WIDTH.search(before)
    assert found is not None
    return f"within {next_width(float(found[1]), pressed):.4g} "


def main(sizes: list[int]) -> int:
    """Print the table; 1 when a limit is missed."""
    if shutil.which("tmux") is None:
        raise SystemExit("tmux is needed for this measurement")
    missed = False
    print(
        "| rows | key to repaint in tmux, median | 95th percentile | slowest | last paint on the slow line | sent |"
    )
    print("|---:|---:|---:|---:|---:|---:|", flush=True)
    with tempfile.TemporaryDirectory() as name:
        for rows in sizes:
            home = Path(name) / f"home-{rows}"
            home.mkdir()
            study = make_study(Path(name) / f"study-{rows}", rows)
            command = [sys.executable, "-m", "study.cli", str(study)]
            times = key_times(command, home)
            median, late = statistics.median(times), statistics.quantiles(times, n=20)[-1]
            line = hold_a_key(
                command,
                8000.0,
                0.2,
                ready="△ study's own",
                final=final_width,
                environment={"HOME": str(home)},
            )
            missed |= median > 30.0 or late > 60.0 or line.late_s > 1.0 or not line.complete
            said = f"{line.late_s:.2f} s" + ("" if line.complete else " (not complete)")
            print(
                f"| {rows:,} | {median:.1f} ms | {late:.1f} ms | {max(times):.1f} ms | {said} | {line.sent:,} bytes |",
                flush=True,
            )
    return int(missed)


if __name__ == "__main__":
    raise SystemExit(main([int(float(word)) for word in sys.argv[1:]] or [100_000, 1_000_000, 10_000_000]))
