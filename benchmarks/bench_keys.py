"""From a key to the changed screen on the bench, over many rows, in a real tmux.

Run: python benchmarks/bench_keys.py [rows]      (needs tmux; default 10,000,000 rows)

A study of generated rows is opened at 120x40. Sixty times the right or the left arrow is sent and the screen is read until
it has changed. Each reading is a call of tmux of its own; the time of such a call on an unchanged screen is shown beside.
Limits: median under 30 ms, 95th percentile under 60 ms, the calls taken off once.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
SERVER = "cutbank-bench-keys"
STUDY = """[study]
title = "Many rows"
masked = false
[data]
path = "rows.parquet"
[columns]
outcomes = ["y"]
score = "x"
[assignment]
rule = "cutoff"
treated = "at or above"
cutoff = 0.0
"""


def tmux(*arguments: str) -> str:
    """One call of tmux on a server of our own."""
    return subprocess.run(
        ["tmux", "-L", SERVER, *arguments], capture_output=True, text=True, check=True
    ).stdout


def screen() -> str:
    """What stands on the screen."""
    return tmux("capture-pane", "-p")


def write_study(folder: Path, rows: int) -> Path:
    """Generated rows in Parquet, and the study beside them."""
    import duckdb

    connection = duckdb.connect()
    connection.execute("SELECT setseed(0.5)")
    connection.execute(
        f"COPY (SELECT x, sin(2 * x) + 0.3 * (x >= 0)::INT + random() AS y FROM "
        f"(SELECT 2 * random() - 1 AS x FROM range({rows}))) TO '{folder / 'rows.parquet'}' (FORMAT parquet)"
    )
    path = folder / "study.toml"
    path.write_text(STUDY)
    return path


def wait_for(words: str, seconds: float) -> None:
    """Until the words stand on the screen."""
    until = time.perf_counter() + seconds
    while words not in screen():
        if time.perf_counter() > until:
            raise SystemExit(f"“{words}” did not appear within {seconds:g} s:\n{screen()}")
        time.sleep(0.2)


def main(rows: int) -> None:
    # The program is killed at the end and may still be saving where it stood.
    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as folder:
        path = write_study(Path(folder), rows)
        started = time.perf_counter()
        tmux("new", "-d", "-x", "120", "-y", "40", f"cd {ROOT} && {sys.executable} -m study.cli {path}")
        try:
            wait_for("Randomisation", 180)
            opened = time.perf_counter() - started
            time.sleep(2)
            calls = []
            for _ in range(20):
                start = time.perf_counter()
                screen()
                calls.append(time.perf_counter() - start)
            call = statistics.median(calls)
            times = []
            for press in range(60):
                before = screen()
                start = time.perf_counter()
                tmux("send-keys", "Right" if press % 20 < 10 else "Left")
                while screen() == before:
                    if time.perf_counter() - start > 5:
                        raise SystemExit("a key changed nothing on the screen")
                times.append(time.perf_counter() - start - call)
                time.sleep(0.15)
        finally:
            tmux("kill-server")
    times.sort()
    print(
        "| rows | effect on screen after | call of tmux | key to screen, median | 95th percentile | limits |"
    )
    print("|---:|---:|---:|---:|---:|---|")
    print(
        f"| {rows:,} | {opened:.1f} s | {1e3 * call:.1f} ms | {1e3 * statistics.median(times):.1f} ms "
        f"| {1e3 * times[int(0.95 * len(times))]:.1f} ms | 30 and 60 ms |"
    )


if __name__ == "__main__":
    main(int(float(sys.argv[1])) if len(sys.argv) > 1 else 10_000_000)
