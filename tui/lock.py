"""One writer at a time: a file beside the study says who has it open.

Nothing of the study is in it. A process that died, or a machine that stopped beating, leaves a lock that the next person
recognises as stale and takes over.
"""

from __future__ import annotations

import getpass
import json
import os
import secrets
import socket
import time
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Final

BEAT_S: Final = 60.0
"""Seconds between two touches of a lock that is held."""
STALE_S: Final = 600.0
"""Seconds without a touch after which another machine's lock counts as left behind."""


_WRITING_S: Final = 5.0  # a lock that can't be read is being written; after this it was left half written


@dataclass(frozen=True, slots=True, kw_only=True)
class Holder:
    """Who has a study open.

    Attributes
    ----------
    user, host
        Login name and machine.
    process, started
        Process number and when the system started it (ticks since boot; "" where the system doesn't say), so that a
        number used again is not taken for the same process.
    since
        Seconds since 1970.
    """

    user: str
    host: str
    process: int
    started: str
    since: float

    @property
    def said(self) -> str:
        """Who, where and since when, in words."""
        since = time.strftime("%d %B %H:%M", time.localtime(self.since)).lstrip("0")
        return f"{self.user} on {self.host} since {since}"


class Lock:
    """The lock of one study file.

    Call `take`; when it gives a `Holder`, somebody else has the study and this process must not write it.
    """

    def __init__(self, study_path: Path) -> None:
        real = Path(os.path.realpath(study_path))
        self.path = real.with_name(f".{real.name}.in-use")
        self._token = ""

    @property
    def held(self) -> bool:
        """Whether this process may write the study."""
        return bool(self._token)

    def take(self) -> Holder | None:
        """Take the lock, and over from a process that died; else return who holds it.

        A folder that can't be written to has no lock: then nobody can save, which saving says itself.
        """
        for _ in range(3):
            if self._create():
                return None
            found = self._read()
            if found is None:
                continue
            holder, content = found
            if not self._stale(holder):
                return holder
            self._discard(content)
        return None

    def beat(self) -> None:
        """Show that the holder is still there."""
        if self._token:
            try:
                os.utime(self.path)
            except OSError:
                return

    def leave(self) -> None:
        """Give the lock back, if it is still ours."""
        found = self._read()
        if self._token and found is not None and self._token in found[1]:
            self.path.unlink(missing_ok=True)
        self._token = ""

    def _create(self) -> bool:
        token = secrets.token_hex(8)
        holder = asdict(_this_process())
        try:
            descriptor = os.open(self.path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_NOFOLLOW, 0o600)
        except FileExistsError:
            return False
        except OSError:
            return True  # nothing can be written here, so nothing needs a lock
        with os.fdopen(descriptor, "w", encoding="utf-8") as stream:
            json.dump({**holder, "token": token}, stream)
        self._token = token
        return True

    def _read(self) -> tuple[Holder, str] | None:
        try:
            content = self.path.read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError):
            return None
        try:
            held = json.loads(content)
            holder = Holder(
                user=str(held["user"]),
                host=str(held["host"]),
                process=int(held["process"]),
                started=str(held["started"]),
                since=float(held["since"]),
            )
        except (ValueError, KeyError, TypeError):
            # Written halfway by a process that died; somebody, once, but nobody who can be named.
            holder = Holder(user="somebody", host="?", process=0, started="", since=self._touched())
        return holder, content

    def _touched(self) -> float:
        try:
            return self.path.stat().st_mtime
        except OSError:
            return 0.0

    def _stale(self, holder: Holder) -> bool:
        if not holder.process:
            return time.time() - self._touched() > _WRITING_S
        if holder.host == socket.gethostname():
            return not _alive(holder)
        return time.time() - self._touched() > STALE_S

    def _discard(self, content: str) -> None:
        """Move a stale lock away; if a third process was quicker, what was moved is its lock and goes back."""
        aside = self.path.with_name(f"{self.path.name}.{secrets.token_hex(4)}")
        try:
            self.path.rename(aside)
            if aside.read_text(encoding="utf-8", errors="replace") != content:
                os.link(aside, self.path)
        except OSError:
            pass  # gone already, or taken anew: the next round sees which
        finally:
            aside.unlink(missing_ok=True)


def _this_process() -> Holder:
    try:
        user = getpass.getuser()
    except (KeyError, OSError):
        user = f"user {os.getuid()}"
    process = os.getpid()
    return Holder(
        user=user, host=socket.gethostname(), process=process, started=_started(process), since=time.time()
    )


def _started(process: int) -> str:
    try:
        text = Path(f"/proc/{process}/stat").read_text(encoding="ascii", errors="replace")
    except OSError:
        return ""
    # The command in brackets may hold anything; what follows the last bracket is regular, and the start is its 20th word.
    words = text.rpartition(")")[2].split()
    return words[19] if len(words) > 19 else ""


def _alive(holder: Holder) -> bool:
    if holder.process <= 0:
        return False
    try:
        os.kill(holder.process, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        pass  # somebody else's process, and alive
    started = _started(holder.process)
    return not (started and holder.started and started != holder.started)
