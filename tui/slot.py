"""The latest-wins slot: slow work behind a key that can be held down.

One request at a time is worked on in a thread; of the requests that arrive meanwhile only the newest is kept. So the
newest answer is never more than two runs away, and a held key still shows the answers in between.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from typing import Generic, Protocol, TypeVar

Request = TypeVar("Request")
Answer = TypeVar("Answer")
RequestIn = TypeVar("RequestIn", contravariant=True)
AnswerOut = TypeVar("AnswerOut", covariant=True)


class Work(Protocol[RequestIn, AnswerOut]):
    """Work for a slot: plain data in, a frozen answer out, `should_stop` asked now and then."""

    def __call__(self, request: RequestIn, should_stop: Callable[[], bool], /) -> AnswerOut:
        """Do the work; when `should_stop()` turns true return anything, it will be dropped."""


class Slot(Generic[Request, Answer]):
    """Run one kind of slow work, newest request first, on the event loop's threads.

    Parameters
    ----------
    name : str
        What the work is, for messages; never data.
    work : callable (request, should_stop) -> answer
        Runs in a thread and touches no widget.
    show : callable (request, answer) -> None
        Called on the event loop, only for answers of the current generation.
    failed : callable (request, exception) -> None
        Called on the event loop when `work` raised; without it the error would be silent.

    Notes
    -----
    When `show` or `failed` raises, that is a fault of the program: it goes to the event loop's exception handler, which
    the app has set, instead of waiting in a task that nobody asks.
    """

    def __init__(
        self,
        name: str,
        work: Work[Request, Answer],
        *,
        show: Callable[[Request, Answer], None],
        failed: Callable[[Request, Exception], None],
    ) -> None:
        self.name = name
        self._work = work
        self._show = show
        self._failed = failed
        self._wanted: Request | None = None
        self._generation = 0
        self._task: asyncio.Task[None] | None = None
        self._stop = False

    @property
    def pending(self) -> bool:
        """Whether an answer is still to come: what is on screen is not yet what was asked for."""
        return self._wanted is not None or (self._task is not None and not self._stop)

    def ask(self, request: Request) -> None:
        """Ask for an answer; a request that has not been started is replaced."""
        if request is None:
            raise ValueError("a request is never None")
        self._wanted = request
        if self._task is None:
            self._stop = False
            self._task = asyncio.get_running_loop().create_task(self._run(), name=f"slot {self.name}")
            self._task.add_done_callback(_tell_loop)

    def supersede(self, request: Request) -> None:
        """Ask for an answer and drop whatever is still being worked on: the data or the study has changed."""
        self.forget()
        self.ask(request)

    def forget(self) -> None:
        """Drop the waiting request, tell the running one to stop, and ignore its answer."""
        self._generation += 1
        self._wanted = None
        self._stop = True

    async def settle(self) -> None:
        """Wait until nothing is wanted and nothing runs (for tests and for leaving)."""
        while self._task is not None:
            await asyncio.wait({self._task})

    async def _run(self) -> None:
        try:
            while self._wanted is not None:
                request, self._wanted = self._wanted, None
                generation, self._stop = self._generation, False
                await self._answer(request, generation)
        finally:
            self._task = None

    async def _answer(self, request: Request, generation: int) -> None:
        def should_stop() -> bool:
            return generation != self._generation

        try:
            answer = await asyncio.to_thread(self._work, request, should_stop)
        except Exception as error:  # noqa: BLE001 - whatever went wrong in the thread is told, not lost
            if generation == self._generation:
                self._failed(request, error)
            return
        # A thread cannot be interrupted: an answer to an old question still arrives and is dropped here.
        if generation == self._generation:
            self._show(request, answer)


def _tell_loop(task: asyncio.Task[None]) -> None:
    error = None if task.cancelled() else task.exception()
    if error is not None:
        task.get_loop().call_exception_handler({"message": task.get_name(), "exception": error, "task": task})
