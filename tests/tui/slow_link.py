"""Developer tool: hold a key over a slow line and measure how late the last paint is.

    python tests/tui/slow_link.py [BYTES_A_SECOND] [ROUND_TRIP_S]

The line between program and terminal is simulated: bytes arrive at the given rate after half a round trip, keys and the
terminal's answers take the other half. Printed for our wire and for the toolkit's own painting.
"""

from __future__ import annotations

import os
import select
import sys
import time
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from pty_harness import Terminal, python

KEYS_A_SECOND, HELD_S, BUFFER = 30, 3.0, 262_144


@dataclass(frozen=True)
class Measured:
    """What came of holding the key."""

    sent: int
    late_s: float
    complete: bool


def hold_a_key(
    command: list[str],
    rate: float,
    round_trip: float,
    *,
    ready: str = "local randomisation",
    final: Callable[[str, int], str] = lambda before, pressed: f"width {6.2 * 1.03**pressed:.2f}",
    environment: Mapping[str, str] | None = None,
) -> Measured:
    """Hold the right arrow for `HELD_S`; return bytes sent and seconds from release to the last paint.

    Parameters
    ----------
    ready
        What stands on the screen when the program can be used.
    final
        What must stand there in the end, from the screen before and the number of presses.
    """
    with Terminal(command, size=(102, 30), environment=environment) as terminal:
        terminal.wait_for(ready, patience=120.0)
        terminal.settle()
        screen_before = terminal.text()
        before, answers, keys, arriving = (
            terminal.sent,
            deque[tuple[float, str]](),
            deque[float](),
            deque[tuple[float, bytes]](),
        )
        terminal.screen.write_process_input = lambda words: answers.append(
            (time.monotonic() + round_trip / 2, words)
        )
        start = free = last = time.monotonic()
        pressed, sent = 0, 0
        while (now := time.monotonic()) < start + HELD_S or arriving or now - last < 2.0:
            while pressed < min(HELD_S, now - start) * KEYS_A_SECOND:
                keys.append(now + round_trip / 2)
                pressed += 1
            while keys and keys[0] <= now:
                keys.popleft()
                terminal.type("\x1b[C")
            while answers and answers[0][0] <= now:
                terminal.type(answers.popleft()[1])
            if (free - now) * rate < BUFFER and select.select([terminal.fileno()], [], [], 0.002)[0]:
                part = os.read(terminal.fileno(), 4096)
                sent += len(part)
                free = max(free, now) + len(part) / rate
                arriving.append((free + round_trip / 2, part))
            while arriving and arriving[0][0] <= time.monotonic():
                terminal.show(arriving.popleft()[1])
                last = time.monotonic()
        complete = final(screen_before, pressed) in terminal.text()
        return Measured(sent=sent + terminal.sent - before, late_s=last - start - HELD_S, complete=complete)


def main() -> None:
    """Measure both."""
    rate = float(sys.argv[1]) if len(sys.argv) > 1 else 8000.0
    round_trip = float(sys.argv[2]) if len(sys.argv) > 2 else 0.2
    for name, extra in (("our wire", []), ("the toolkit's", ["plain"])):
        found = hold_a_key(python("tests/tui/wire_app.py", *extra), rate, round_trip)
        complete = "complete" if found.complete else "NOT COMPLETE"
        print(f"{name:15} {found.sent:8,} bytes, last paint {found.late_s:6.2f} s after release, {complete}")


if __name__ == "__main__":
    main()
