"""How long a person waits: `cutbank --help`, and the bench until its first picture, in a pseudo-terminal.

Run: python benchmarks/startup.py

Limits: --help within 0.3 s of bare Python's own start; first paint within 1 s.
"""

from __future__ import annotations

import os
import pty
import select
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
STUDY = ROOT / "sample_data" / "hulls"


def command_time(arguments: list[str]) -> float:
    """Median of 9 runs of a command, seconds."""
    times = []
    for _ in range(9):
        start = time.perf_counter()
        subprocess.run(arguments, stdout=subprocess.DEVNULL, check=True)
        times.append(time.perf_counter() - start)
    return statistics.median(times)


def paint_time(study: Path, wanted: bytes) -> float:
    """Seconds from exec to the byte that ends the first picture holding `wanted`."""
    start = time.perf_counter()
    child, terminal = pty.fork()
    if child == 0:
        os.environ.update(TERM="xterm-256color", COLUMNS="120", LINES="40")
        os.execv(sys.executable, [sys.executable, "-m", "study.cli", str(study)])
    seen = b""
    while wanted not in seen and time.perf_counter() - start < 20:
        if select.select([terminal], [], [], 0.05)[0]:
            try:
                seen += os.read(terminal, 65536)
            except OSError:
                break
    took = time.perf_counter() - start
    os.write(terminal, b"q")
    time.sleep(0.3)
    os.kill(child, 9)
    os.waitpid(child, 0)
    os.close(terminal)
    return took


def main() -> None:
    bare = command_time([sys.executable, "-c", "pass"])
    helped = command_time([sys.executable, "-m", "study.cli", "--help"])
    with tempfile.TemporaryDirectory() as folder:
        copy = Path(folder) / "hulls"
        shutil.copytree(STUDY, copy)
        first = statistics.median(paint_time(copy / "study.toml", b"Assignment") for _ in range(5))
        effect = statistics.median(paint_time(copy / "study.toml", b"robust") for _ in range(5))
    print("| what | seconds | limit |\n|---|---:|---:|")
    print(f"| bare Python | {bare:.3f} | |")
    print(f"| cutbank --help, above bare Python | {helped - bare:.3f} | 0.3 |")
    print(f"| first paint | {first:.2f} | 1.0 |")
    print(f"| the demo's effect on screen | {effect:.2f} | |")


if __name__ == "__main__":
    main()
