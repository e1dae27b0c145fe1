"""The slot: the newest request wins, old answers are dropped, failures are told."""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Callable

import pytest

from tui.slot import Slot


class Bench:
    """A slot whose work waits until the test lets it go."""

    def __init__(self) -> None:
        self.gate = threading.Semaphore(0)
        self.begun: list[int] = []
        self.stopped: list[int] = []
        self.shown: list[tuple[int, int]] = []
        self.failures: list[tuple[int, str]] = []
        self.has_begun = threading.Semaphore(0)
        self.slot: Slot[int, int] = Slot("square", self.work, show=self.show, failed=self.failed)

    def work(self, request: int, should_stop: Callable[[], bool]) -> int:
        self.begun.append(request)
        self.has_begun.release()
        assert self.gate.acquire(timeout=5)
        if should_stop():
            self.stopped.append(request)
        if request < 0:
            raise ValueError("no square for this")
        return request * request

    def show(self, request: int, answer: int) -> None:
        self.shown.append((request, answer))

    def failed(self, request: int, error: Exception) -> None:
        self.failures.append((request, str(error)))

    async def until_begun(self) -> None:
        import asyncio

        assert await asyncio.to_thread(self.has_begun.acquire, timeout=5)


async def test_a_held_key_shows_the_first_and_the_last_and_nothing_waits_between() -> None:
    bench = Bench()
    bench.slot.ask(1)
    await bench.until_begun()
    for request in range(2, 90):
        bench.slot.ask(request)
    assert bench.slot.pending
    bench.gate.release(90)
    await bench.slot.settle()
    assert bench.begun == [1, 89]
    assert bench.shown == [(1, 1), (89, 89 * 89)]
    assert not bench.slot.pending


async def test_what_was_superseded_is_told_to_stop_and_never_shown() -> None:
    bench = Bench()
    bench.slot.ask(1)
    await bench.until_begun()
    bench.slot.supersede(2)
    bench.gate.release(2)
    await bench.slot.settle()
    assert bench.stopped == [1]
    assert bench.shown == [(2, 4)]


async def test_forgetting_leaves_nothing_pending() -> None:
    bench = Bench()
    bench.slot.ask(1)
    await bench.until_begun()
    bench.slot.ask(2)
    bench.slot.forget()
    assert not bench.slot.pending
    bench.gate.release(1)
    await bench.slot.settle()
    assert bench.begun == [1]
    assert bench.shown == []


async def test_a_failure_is_told_and_the_slot_works_on() -> None:
    bench = Bench()
    bench.slot.ask(-1)
    await bench.until_begun()
    bench.slot.ask(3)
    bench.gate.release(2)
    await bench.slot.settle()
    assert bench.failures == [(-1, "no square for this")]
    assert bench.shown == [(3, 9)]


async def test_a_failure_of_something_superseded_is_not_told() -> None:
    bench = Bench()
    bench.slot.ask(-1)
    await bench.until_begun()
    bench.slot.supersede(3)
    bench.gate.release(2)
    await bench.slot.settle()
    assert bench.failures == []
    assert bench.shown == [(3, 9)]


async def test_asking_from_show_runs_again() -> None:
    shown: list[int] = []
    slot: Slot[int, int] = Slot(
        "count down",
        lambda request, should_stop: request,
        show=lambda request, answer: (shown.append(answer), slot.ask(answer - 1) if answer > 1 else None)[0],
        failed=lambda request, error: pytest.fail(str(error)),
    )
    slot.ask(3)
    await slot.settle()
    assert shown == [3, 2, 1]


async def test_a_fault_while_showing_reaches_the_loop_at_once() -> None:
    told: list[object] = []
    asyncio.get_running_loop().set_exception_handler(lambda loop, context: told.append(context["exception"]))

    def show(request: int, answer: int) -> None:
        raise RuntimeError("the picture has no such row")

    slot: Slot[int, int] = Slot(
        "count", lambda request, should_stop: request, show=show, failed=lambda request, error: None
    )
    slot.ask(3)
    await slot.settle()
    await asyncio.sleep(0)
    assert [str(error) for error in told] == ["the picture has no such row"]


def test_none_is_not_a_request() -> None:
    with pytest.raises(ValueError, match="never None"):
        Bench().slot.ask(None)  # type: ignore[arg-type]
