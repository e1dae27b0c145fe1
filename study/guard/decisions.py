"""One release's decisions: which counts and estimates are shown, and what was done to each, for the checker."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from study.analysis import Workbench
from study.guard.cells import admit
from study.guard.profile import Profile
from study.guard.rows import RowSet


@dataclass(frozen=True, slots=True, kw_only=True)
class Decision:
    """What the guard did to one number, for the checker's sheet.

    Attributes
    ----------
    what
        The number in words.
    released
        As it leaves; empty where it does not.
    rows
        Unrounded rows that it counts or rests on, "below + above" for an estimate.
    did
        "shown", "rounded" or "suppressed".
    why
        The rule, where it was not shown as it is.
    """

    what: str
    released: str
    rows: str
    did: str
    why: str = ""


@dataclass(slots=True)
class Decisions:
    """Asked first for everything that a release would show, then decided at once.

    Counts compete with all other counts; estimates with those of the same outcome, because only two estimates of one
    outcome can be subtracted from each other. What is asked for first takes precedence.

    Attributes
    ----------
    earlier
        Sets that earlier releases of the same data showed: counts, and sets under each outcome's estimates.
    """

    bench: Workbench
    profile: Profile
    earlier: Sequence[tuple[str, RowSet]] = ()
    made: list[Decision] = field(default_factory=list)
    _counts: dict[str, tuple[str, RowSet]] = field(default_factory=dict)
    _estimates: dict[str, tuple[str, str, tuple[RowSet, ...]]] = field(default_factory=dict)
    _shown: dict[str, bool] = field(default_factory=dict)
    _size: dict[RowSet, int] = field(default_factory=dict)

    def ask_count(self, key: str, what: str, rows: RowSet) -> None:
        """Ask to show how many rows these are."""
        self._counts[key] = (what, rows)

    def ask_estimate(self, key: str, what: str, variable: str, *sides: RowSet) -> None:
        """Ask to show an estimate of `variable` that stands on these rows, one set a side."""
        self._estimates[key] = (what, variable, sides)

    def decide(self) -> None:
        """Answer everything asked for since the last time; what was let through before stays and takes precedence."""
        self._decide_counts()
        for variable in dict.fromkeys(variable for _, variable, _ in self._estimates.values()):
            self._decide_estimates(variable)

    def shows(self, key: str) -> bool:
        """Whether a count or an estimate is shown."""
        return self._shown[key]

    def hide(self, key: str) -> None:
        """Suppress an estimate although it could be shown by itself."""
        self._shown[key] = False

    def size(self, rows: RowSet) -> int:
        """Unrounded rows of a set."""
        if rows not in self._size:
            self._size[rows] = int(rows.mask(self.bench).sum())
        return self._size[rows]

    def count_text(self, key: str) -> str:
        """A count as it leaves, noted for the checker."""
        what, rows = self._counts[key]
        size, profile = self.size(rows), self.profile
        if self._shown[key]:
            text = profile.count(size)
            did, why = ("rounded", f"{profile.name}: counts") if profile.rounds(size) else ("shown", "")
        elif size < profile.threshold and not (size == 0 and profile.zeros):
            text, did = profile.hidden, "suppressed"
            why = f"under the threshold of {profile.threshold}"
        else:
            text, did, why = "not shown", "suppressed", "a small group could be worked out from it"
        self.note(Decision(what=what, released=text, rows=f"{size:,}", did=did, why=why))
        return text

    def note(self, decision: Decision) -> None:
        """Keep a decision for the checker, once."""
        if decision not in self.made:
            self.made.append(decision)

    def note_estimate(self, key: str, released: str, why: str = "") -> None:
        """Keep for the checker what became of an estimate and the rows that it rests on."""
        what, _, sides = self._estimates[key]
        shown = self._shown[key]
        reason = why or ("" if shown else self._why(sides))
        self.note(
            Decision(
                what=what,
                released=released if shown else "",
                rows=" + ".join(f"{self.size(side):,}" for side in sides),
                did="rounded" if shown else "suppressed",
                why=reason or f"{self.profile.name}: {self.profile.digits} significant digits",
            )
        )

    def released_sets(self) -> list[tuple[str, RowSet]]:
        """(what they were used for, set) of everything shown, for the list of releases."""
        found = [("count", rows) for key, (_, rows) in self._counts.items() if self._shown[key]]
        for key, (_, variable, sides) in self._estimates.items():
            if self._shown[key]:
                found += [(f"estimate {variable}", side) for side in sides]
        return list(dict.fromkeys(found))

    def _why(self, sides: Sequence[RowSet]) -> str:
        if min(self.size(side) for side in sides) < self.profile.threshold:
            return f"rests on fewer than {self.profile.threshold} rows on a side"
        return "differs by a few rows from another estimate"

    def _decide_counts(self) -> None:
        settled = [rows for key, (_, rows) in self._counts.items() if self._shown.get(key)]
        fresh = [(key, rows) for key, (_, rows) in self._counts.items() if key not in self._shown]
        before = [rows for use, rows in self.earlier if use == "count"]
        for (key, _), allowed in zip(fresh, self._admit([rows for _, rows in fresh], [*before, *settled])):
            self._shown[key] = allowed

    def _decide_estimates(self, variable: str) -> None:
        mine = {key: sides for key, (_, other, sides) in self._estimates.items() if other == variable}
        settled = [side for key, sides in mine.items() if self._shown.get(key) for side in sides]
        before = [rows for use, rows in self.earlier if use == f"estimate {variable}"]
        fresh = [(key, sides) for key, sides in mine.items() if key not in self._shown]
        answers = iter(self._admit([side for _, sides in fresh for side in sides], [*before, *settled]))
        for key, sides in fresh:
            answered = [next(answers) for _ in sides]  # every side's answer, whatever the first one is
            self._shown[key] = all(answered)

    def _admit(self, asked: Sequence[RowSet], released: Sequence[RowSet]) -> list[bool]:
        return admit(
            [rows.mask(self.bench) for rows in asked],
            self.profile.threshold,
            zeros=self.profile.zeros,
            released=[rows.mask(self.bench) for rows in dict.fromkeys(released)],
        )
