"""The plan: a study's declared choices, frozen before its outcomes are looked at.

A sealed plan is a JSON file beside the study, `study.plan.json` for `study.toml`: the choices in canonical form, the
fingerprint of the data, their SHA-256, and who sealed it when. It holds no data. What a study says later is compared
with it key by key; each difference is a departure.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Final, cast

from study.document import Study, values_of
from study.errors import BAD_DATA, BAD_STUDY, StudyError
from study.literal import clean
from study.saving import write_whole

FORMAT: Final = "cutbank-plan"
VERSION: Final = 1
DATA_FINGERPRINT: Final = "data.fingerprint"
AREA_FINGERPRINT: Final = "assignment.area.fingerprint"
# Where the file lies and what the study is called are no choices; nor is the mask, which the seal itself lifts.
_NOT_PLANNED: Final = frozenset({"study.title", "study.masked", "data.path", "assignment.area.path"})


@dataclass(frozen=True, slots=True, kw_only=True)
class Sealed:
    """A plan as it was sealed.

    Attributes
    ----------
    choices
        Value by dotted key, with the fingerprints of the data (and of the boundary's file) among them.
    hash
        SHA-256 of the canonical form of `choices`, in hexadecimal.
    when
        UTC, ISO 8601, to the second.
    by
        Who sealed it, as they called themselves.
    """

    choices: Mapping[str, object]
    hash: str
    when: str
    by: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Departure:
    """One key that no longer says what the plan says."""

    key: str
    planned: object
    now: object

    @property
    def sentence(self) -> str:
        """The departure in words."""
        if self.key == DATA_FINGERPRINT:
            return "The data file is not the one that the plan was sealed with."
        if self.key == AREA_FINGERPRINT:
            return "The boundary's file is not the one that the plan was sealed with."
        return f"{self.key} was planned as {_said(self.planned)} and is now {_said(self.now)}."


def plan_path(study: Study) -> Path:
    """Where the study's sealed plan stands."""
    return study.path.with_name(f"{study.path.stem}.plan.json")


def fingerprint_of(path: Path) -> str:
    """SHA-256 of a file's bytes, in hexadecimal.

    Raises
    ------
    StudyError
        Status 3 when the file can't be read.
    """
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        raise StudyError(
            f"{clean(str(path))}: can't be read ({(error.strerror or 'unknown reason').lower()}).",
            "Check its name and its permissions.",
            BAD_DATA,
        ) from None


def planned_choices(study: Study, fingerprint: str | None = None) -> dict[str, object]:
    """What a plan of this study freezes, by dotted key, as plain JSON values.

    Parameters
    ----------
    fingerprint
        Of the data file where it is known; read from the file otherwise.
    """
    values = {name: _plain(value) for name, value in values_of(study).items() if name not in _NOT_PLANNED}
    values[DATA_FINGERPRINT] = fingerprint or fingerprint_of(study.data_file)
    area = study.assignment.area
    if study.assignment.rule == "boundary" and area is not None and area.path is not None:
        values[AREA_FINGERPRINT] = fingerprint_of(study.path.parent / area.path)
    return values


def canonical(choices: Mapping[str, object]) -> bytes:
    """One text for one plan: keys sorted, no spaces, numbers as their shortest form, UTF-8."""
    text = json.dumps(choices, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
    return text.encode("utf-8", "replace")


def plan_hash(choices: Mapping[str, object]) -> str:
    """SHA-256 of the canonical form."""
    return hashlib.sha256(canonical(choices)).hexdigest()


def seal(study: Study, *, by: str, when: datetime | None = None, fingerprint: str | None = None) -> Sealed:
    """Freeze the study's choices in a file beside it (mode 0600, whole or not at all).

    Raises
    ------
    StudyError
        When the study is sealed already, is not complete, its data can't be read, or the file not be written.
    """
    from study.readiness import require_complete  # asks for what a masked study has anyway

    require_complete(study)
    earlier = read_seal(study)
    if earlier is not None:
        raise StudyError(
            f"{clean(study.path.name)}: the plan was sealed on {said_when(earlier.when)}.",
            "Go on with it: what differs from it now is marked as a departure.",
        )
    choices = planned_choices(study, fingerprint)
    stamp = (when or datetime.now(UTC)).astimezone(UTC).replace(microsecond=0)
    sealed = Sealed(choices=choices, hash=plan_hash(choices), when=stamp.isoformat(), by=clean(by))
    document = {
        "format": FORMAT,
        "version": VERSION,
        "sealed_at": sealed.when,
        "sealed_by": sealed.by,
        "hash": sealed.hash,
        "plan": choices,
    }
    text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
    write_whole(plan_path(study), text.encode("utf-8", "replace"))
    return sealed


def read_seal(study: Study) -> Sealed | None:
    """The study's sealed plan, or None where there is none.

    Raises
    ------
    StudyError
        Status 2 when the plan's file can't be read or was changed after the sealing.
    """
    path = plan_path(study)
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        return None
    except OSError as error:
        raise _unusable(path, f"can't be read ({(error.strerror or 'unknown reason').lower()})") from None
    try:
        document = json.loads(content.decode("utf-8"))
        if document["format"] != FORMAT:
            raise _unusable(path, "is not a sealed plan")
        if document["version"] != VERSION:
            raise _unusable(path, f"has the version {document['version']}, which this program does not know")
        sealed = Sealed(
            choices=dict(document["plan"]),
            hash=str(document["hash"]),
            when=datetime.fromisoformat(document["sealed_at"]).isoformat(),
            by=clean(str(document["sealed_by"])),
        )
    except (ValueError, KeyError, TypeError, RecursionError):
        raise _unusable(path, "is not a sealed plan") from None
    if plan_hash(sealed.choices) != sealed.hash:
        raise _unusable(path, "was changed after it was sealed")
    return sealed


def is_sealed(study: Study) -> bool:
    """Whether a plan of this study is sealed; a damaged one raises as `read_seal` does."""
    return read_seal(study) is not None


def is_masked(study: Study) -> bool:
    """Whether outcome effects and levels must stay hidden: the study says so, and no plan is sealed."""
    return study.masked and not is_sealed(study)


def departures(study: Study, fingerprint: str | None = None) -> tuple[Departure, ...]:
    """What differs from the sealed plan, in the order of the study file; empty without a plan.

    Parameters
    ----------
    fingerprint
        Of the data file where it is known; read from the file otherwise.
    """
    sealed = read_seal(study)
    if sealed is None:
        return ()
    now = planned_choices(study, fingerprint)
    keys = [*now, *(key for key in sealed.choices if key not in now)]
    return tuple(
        Departure(key=key, planned=sealed.choices.get(key), now=now.get(key))
        for key in keys
        # By their canonical form, so that true is not 1 and a pair read back as a list is the same pair.
        if canonical({key: sealed.choices.get(key)}) != canonical({key: now.get(key)})
    )


def said_when(stamp: str) -> str:
    """An ISO time as people read it: 3 May 2031, 14:05 UTC."""
    moment = datetime.fromisoformat(stamp).astimezone(UTC)
    return f"{moment.day} {moment:%B %Y, %H:%M} UTC"


def _plain(value: object) -> object:
    if isinstance(value, Mapping):
        return {str(key): _plain(inner) for key, inner in cast(Mapping[Any, object], value).items()}
    if isinstance(value, tuple | list):
        return [_plain(inner) for inner in value]
    return value


def _said(value: object) -> str:
    from study.accepting import said  # small; only a departure needs it

    return "not given" if value is None else said(value)


def _unusable(path: Path, why: str) -> StudyError:
    return StudyError(
        f"{clean(path.name)}: {why}.",
        "Put the sealed file back; removing it masks the outcomes again, and the ledger keeps that it was there.",
        BAD_STUDY,
    )
