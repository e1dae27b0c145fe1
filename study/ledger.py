"""The ledger: an append-only record of every estimate that was looked at, beside the study.

One JSON object a line in `study.ledger.jsonl` for `study.toml`. An entry says what was asked (outcome, place, width and
choices), of which data (by fingerprint), when and by which version; it holds no data and no estimate, because the ledger
leaves with a release, and estimates at many widths would give single people away by their differences.

Each entry carries the hash of the one before it, so that an entry that is removed or edited is noticed. The last entries
can be cut off without a trace in the chain alone; the seal's and each release's own entry are therefore named elsewhere
too (in the plan's file and in the list of releases).
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Final

from estimation.choices import Choices
from study.document import Study
from study.errors import BAD_STUDY, StudyError
from study.literal import clean

START: Final = hashlib.sha256(b"cutbank-ledger 1").hexdigest()  # what the first entry follows
_LARGEST: Final = 256 * 2**20  # bytes; a ledger of a million looks


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """One estimate that was looked at.

    Attributes
    ----------
    widths
        (below, above) in units of the score, as they were used.
    rule
        Where the widths come from: a rule's name, or "chosen".
    choices
        Everything else that the estimate depends on.
    """

    outcome: str
    where: str
    widths: tuple[float, float]
    rule: str
    choices: Choices


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """One line of the ledger that could be read."""

    number: int
    kind: str
    when: str
    content: Mapping[str, Any]
    hash: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """A ledger as it stands.

    Attributes
    ----------
    entries
        In the order they were written.
    problems
        What is wrong with the chain, as sentences; empty for a whole ledger.
    head
        Hash of the last entry, which the next one will carry.
    """

    entries: tuple[Entry, ...]
    problems: tuple[str, ...]
    head: str

    @property
    def estimates(self) -> int:
        """Different estimates that were looked at: outcome, place, width and choices, on the same data."""
        return len({_identity(entry.content) for entry in self.looks})

    @property
    def specifications(self) -> int:
        """Different ways of estimating among them, whatever the outcome and the place.

        A width that a rule chose counts by its rule.
        """
        return len({_way(entry.content) for entry in self.looks})

    @property
    def looks(self) -> tuple[Entry, ...]:
        """The entries that are estimates."""
        return tuple(entry for entry in self.entries if entry.kind == "look")

    def outside(self, study: Study) -> int:
        """Specifications that were looked at and are not the study's own choices."""
        own = _way(specification(_frame(study, ""), _own_look(study)))
        return len({_way(entry.content) for entry in self.looks} - {own})


def ledger_path(study: Study) -> Path:
    """Where the study's ledger stands."""
    return study.path.with_name(f"{study.path.stem}.ledger.jsonl")


def record_looks(
    study: Study, fingerprint: str, looks: Sequence[Look], *, version: str, when: datetime | None = None
) -> Reading:
    """Write the estimates that are not in the ledger yet, and give back the ledger as it then stands.

    An estimate that was looked at before on the same data adds nothing: looking twice is looking once.

    Raises
    ------
    StudyError
        When the ledger can't be written or read.
    """
    with _held(ledger_path(study)) as descriptor:
        before = _read(descriptor)
        seen = {_identity(entry.content) for entry in before.looks}
        fresh = []
        frame = _frame(study, fingerprint)
        for look in looks:
            content = specification(frame, look)
            if _identity(content) not in seen:
                seen.add(_identity(content))
                fresh.append(content)
        return _append(descriptor, before, [("look", content) for content in fresh], version, when)


def record_act(
    study: Study, kind: str, content: Mapping[str, Any], *, version: str, when: datetime | None = None
) -> Reading:
    """Write that something was done: the seal, a release.

    Raises
    ------
    StudyError
        When the ledger can't be written or read.
    """
    with _held(ledger_path(study)) as descriptor:
        return _append(descriptor, _read(descriptor), [(kind, content)], version, when)


def read_ledger(study: Study) -> Reading:
    """The ledger and what is wrong with it; an empty one where there is no file.

    Raises
    ------
    StudyError
        When it can't be read.
    """
    path = ledger_path(study)
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        return Reading(entries=(), problems=(), head=START)
    except OSError as error:
        raise _unusable(path, error) from None
    return parse_ledger(content)


def parse_ledger(content: bytes) -> Reading:
    """Read and check the text of a ledger: every entry follows the one before it, and says what its hash says."""
    entries: list[Entry] = []
    problems: list[str] = []
    head = START
    cut: int | None = None  # a line that is no entry: harmless when the next entry says that it was cut short
    lines = content.split(b"\n")
    for number, line in enumerate(lines, 1):
        if not line.strip():
            continue
        document = _document(line)
        if document is None:
            if cut is not None:
                problems.append(f"Line {cut} is no entry of a ledger.")
            cut = number
            continue
        if cut is not None:
            after = document.get("after_cut") is True
            problems.append(
                f"Line {cut} was cut short while it was written."
                if after
                else f"Line {cut} is no entry of a ledger."
            )
            cut = None
        if document["previous"] != head:
            problems.append(
                f"Line {number} does not follow the line before it: an entry was removed or put in."
            )
        if _hash(document) != document["hash"]:
            problems.append(f"Line {number} was changed after it was written.")
        head = document["hash"]
        entries.append(
            Entry(
                number=document["number"],
                kind=document["kind"],
                when=document["when"],
                content=document["content"],
                hash=head,
            )
        )
    if cut is not None:
        problems.append(
            f"Line {cut} is no entry of a ledger."
            if content.endswith(b"\n")
            else f"Line {cut} was cut short while it was written."
        )
    return Reading(entries=tuple(entries), problems=tuple(problems), head=head)


def summary(reading: Reading, study: Study, *, sealed: bool, departs: bool = False) -> str:
    """How much was looked at, in a sentence or two; a plan that was departed from is not said to be what is reported."""
    if not reading.looks:
        said = "No estimate was looked at before."
    else:
        estimates, ways = reading.estimates, reading.specifications
        said = (
            f"{estimates:,} {'estimate' if estimates == 1 else 'estimates'} under {ways:,} "
            f"{'specification' if ways == 1 else 'different specifications'} "
            f"{'was' if estimates == 1 else 'were'} looked at"
        )
        if departs:
            said += "; what is reported departs from the plan."
        else:
            said += "; the planned one is reported." if sealed else "; no plan was sealed beforehand."
    if reading.problems:
        said += " The ledger is not whole: " + " ".join(reading.problems)
    return said


def specification(frame: Mapping[str, Any], look: Look) -> dict[str, Any]:
    """What an entry keeps of an estimate: what was asked, never what came out.

    Widths are kept to four significant digits: what a rule makes of the data needs no more to be known again.
    """
    choices = look.choices
    return {
        "outcome": look.outcome,
        "where": look.where,
        "width": [_short(width) for width in look.widths],
        "rule": look.rule,
        "pilot": choices.pilot if isinstance(choices.pilot, str) else _short(choices.pilot),
        "kernel": choices.kernel,
        "order": choices.order,
        "interval": choices.interval,
        "level": choices.level,
        "variance": choices.variance,
        "curvature": choices.curvature,
        "donut": choices.donut,
        "adjust": choices.adjust,
        **frame,
    }


def _frame(study: Study, fingerprint: str) -> dict[str, Any]:
    """What all looks at one study share: the parts of the columns, the rule by its hash, the data by their fingerprint."""
    from study.plan import planned_choices  # the plan's own plain form of every key

    columns, planned = study.columns, planned_choices(study, fingerprint or "-")
    return {
        "take_up": columns.take_up,
        "cluster": columns.cluster,
        "weight": columns.weight,
        "covariates": list(columns.covariates),
        "rows": study.data.rows,
        "assignment": _digest(
            {key: value for key, value in planned.items() if key.startswith("assignment.")}
        ),
        "data": fingerprint,
    }


def _own_look(study: Study) -> Look:
    bandwidth = study.estimate.bandwidth
    if isinstance(bandwidth, str):
        return Look(outcome="", where="", widths=(0.0, 0.0), rule=bandwidth, choices=study.estimate)
    widths = bandwidth if isinstance(bandwidth, tuple) else (bandwidth, bandwidth)
    return Look(outcome="", where="", widths=widths, rule="chosen", choices=study.estimate)


def _way(content: Mapping[str, Any]) -> str:
    """A way of estimating, whatever the outcome, the place and the data."""
    kept = {key: value for key, value in content.items() if key not in ("outcome", "where", "data")}
    if kept.get("rule") != "chosen":
        kept.pop("width", None)
    return _digest(kept)


def _identity(content: Mapping[str, Any]) -> str:
    return _digest(content)


def _digest(content: Mapping[str, Any]) -> str:
    text = json.dumps(content, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    return hashlib.sha256(text.encode("utf-8", "replace")).hexdigest()


def _hash(document: Mapping[str, Any]) -> str:
    return _digest({key: value for key, value in document.items() if key != "hash"})


def _short(width: float) -> float:
    return float(f"{width:.4g}")


def _document(line: bytes) -> dict[str, Any] | None:
    """One line as an entry, or None where it is none."""
    try:
        document = json.loads(line.decode("utf-8"))
    except (ValueError, RecursionError):
        return None
    kinds = {"number": int, "kind": str, "when": str, "content": dict, "previous": str, "hash": str}
    if not isinstance(document, dict) or any(
        not isinstance(document.get(key), kind) for key, kind in kinds.items()
    ):
        return None
    return document


def _append(
    descriptor: int,
    before: Reading,
    fresh: Sequence[tuple[str, Mapping[str, Any]]],
    version: str,
    when: datetime | None,
) -> Reading:
    """Write entries in one go, each carrying the hash of the one before it."""
    if not fresh:
        return before
    size = os.lseek(descriptor, 0, os.SEEK_END)
    cut = size > 0 and os.pread(descriptor, 1, size - 1) != b"\n"
    stamp = (when or datetime.now(UTC)).astimezone(UTC).isoformat(timespec="seconds")
    head, number = before.head, before.entries[-1].number if before.entries else 0
    lines: list[str] = []
    for kind, content in fresh:
        number += 1
        document: dict[str, Any] = {
            "number": number,
            "kind": kind,
            "when": stamp,
            "version": version,
            "content": dict(content),
            "previous": head,
        }
        if cut and not lines:
            document["after_cut"] = True
        head = document["hash"] = _hash(document)
        lines.append(json.dumps(document, ensure_ascii=False))
    text = ("\n" if cut else "") + "\n".join(lines) + "\n"
    data = text.encode("utf-8", "replace")
    while data:
        data = data[os.write(descriptor, data) :]
    try:
        os.fsync(descriptor)
    except OSError:
        pass  # a file system that can't; the entry is written all the same
    return _read(descriptor)


def _read(descriptor: int) -> Reading:
    size = os.lseek(descriptor, 0, os.SEEK_END)
    if size > _LARGEST:
        raise StudyError("The ledger is too large to be one.", "Move it away, and start a new one.")
    content, place = b"", 0
    while place < size:
        part = os.pread(descriptor, size - place, place)
        if not part:
            break
        content += part
        place += len(part)
    return parse_ledger(content)


@contextmanager
def _held(path: Path) -> Iterator[int]:
    """The ledger open for appending, no other process writing meanwhile."""
    import fcntl  # only where a ledger is written

    try:
        descriptor = os.open(path, os.O_RDWR | os.O_APPEND | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW, 0o600)
    except OSError as error:
        raise _unusable(path, error) from None
    try:
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX)
        except OSError:
            pass  # a file system without locks: two writers at once would then show as a chain that forks
        yield descriptor
    except OSError as error:
        raise _unusable(path, error) from None
    finally:
        os.close(descriptor)


def _unusable(path: Path, error: OSError) -> StudyError:
    return StudyError(
        f"{clean(path.name)}: the ledger can't be kept ({(error.strerror or 'unknown reason').lower()}).",
        "Keep the study in a folder that you may write to.",
        BAD_STUDY,
    )


class Resting:
    """Tells widths that were rested on from widths that were passed by, for live scrubbing.

    Call `moved` with each look and the time, and `rested` from a timer (or before leaving): a look is handed out once it
    has stood for `wait_s` seconds.
    """

    def __init__(self, wait_s: float = 1.0) -> None:
        self._wait = wait_s
        self._look: Look | None = None
        self._since = 0.0

    def moved(self, look: Look, now: float) -> Look | None:
        """The person stands at `look` now; gives back the look before it where that one was rested on."""
        if look == self._look:
            return None
        before = self.rested(now)
        self._look, self._since = look, now
        return before

    def rested(self, now: float) -> Look | None:
        """The look that has been rested on and was not handed out yet, else None."""
        if self._look is None or now - self._since < self._wait:
            return None
        look, self._look = self._look, None
        return look
