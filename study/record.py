"""How a result came about: the plan behind it, what departs from it, and how much was looked at."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

from estimation.effect import Effect
from study.document import Study
from study.errors import StudyError
from study.ledger import Look, Reading, read_ledger, record_looks, summary
from study.plan import Departure, Sealed, departures, read_seal, said_when
from study.version import program_version

# What a report calls numbers that are not in the plan can't follow from these.
_TOUCHES_NO_NUMBER = frozenset({"guard.profile"})


@dataclass(frozen=True, slots=True, kw_only=True)
class Record:
    """What stands behind a result.

    Attributes
    ----------
    ledger
        As it stands, this result included; None where it could not be kept, then `reason` says why.
    """

    sealed: Sealed | None
    departures: tuple[Departure, ...]
    ledger: Reading | None
    reason: str | None = None

    def departs(self, outcome: str) -> tuple[str, ...]:
        """Keys in which one outcome's effects depart from the plan."""
        if self.sealed is None:
            return ()
        planned = self.sealed.choices.get("columns.outcomes")
        unplanned = not isinstance(planned, list) or outcome not in planned
        return tuple(
            departure.key
            for departure in self.departures
            if departure.key not in _TOUCHES_NO_NUMBER and (departure.key != "columns.outcomes" or unplanned)
        )

    def sentences(self, study: Study) -> tuple[str, ...]:
        """The plan, each departure and the ledger in words."""
        if self.sealed is None:
            said = ["No plan was sealed before these numbers were seen."]
        else:
            said = [f"The plan was sealed on {said_when(self.sealed.when)} by {self.sealed.by}."]
            if not self.departures:
                said.append("Nothing departs from it.")
            said += [f"Departure from the plan: {departure.sentence}" for departure in self.departures]
        if self.ledger is not None:
            said.append(
                summary(self.ledger, study, sealed=self.sealed is not None, departs=bool(self.departures))
            )
            said.append(
                "The ledger holds runs and releases; what was looked at on the bench is not in it yet."
            )
        elif self.reason is not None:
            said.append(self.reason)
        return tuple(said)

    def to_document(self) -> dict[str, Any]:
        """Keys of the result document's `study` part."""
        document: dict[str, Any] = {"sealed": self.sealed is not None}
        if self.sealed is not None:
            document["plan"] = {
                "hash": self.sealed.hash,
                "sealed_at": self.sealed.when,
                "sealed_by": self.sealed.by,
                "departures": [
                    {"key": departure.key, "planned": departure.planned, "now": departure.now}
                    for departure in self.departures
                ],
            }
        if self.ledger is None:
            return document | {"looked_at": None, "looked_at_reason": self.reason}
        document["looked_at"] = self.ledger.estimates
        document["specifications"] = self.ledger.specifications
        if self.ledger.problems:
            document["ledger_problems"] = list(self.ledger.problems)
        return document


def look_of(effect: Effect) -> Look:
    """An effect as the ledger keeps it."""
    widths = effect.bandwidths
    return Look(
        outcome=effect.outcome,
        where=effect.where,
        widths=(widths.below, widths.above),
        rule=widths.rule,
        choices=effect.choices,
    )


def record_of(study: Study, fingerprint: str, effects: Iterable[Effect] = ()) -> Record:
    """Write the effects into the ledger, and say what stands behind them.

    A ledger that can't be kept, in a folder that may only be read, does not keep a study from being estimated: the
    record says so in its place.

    Raises
    ------
    StudyError
        When the sealed plan can't be read.
    """
    sealed = read_seal(study)
    departed = departures(study, fingerprint)
    looks = [look_of(effect) for effect in effects]
    try:
        ledger = (
            record_looks(study, fingerprint, looks, version=program_version())
            if looks
            else read_ledger(study)
        )
    except StudyError as problem:
        return Record(sealed=sealed, departures=departed, ledger=None, reason=f"Not recorded: {problem.what}")
    return Record(sealed=sealed, departures=departed, ledger=ledger)
