"""Earlier releases of a study: what they showed, so that a later one gives nothing away beside them, and what changed.

One JSON object a line in `study.releases.jsonl` beside `study.toml`. It stays where the data are.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from study.document import Study
from study.errors import BAD_STUDY, StudyError
from study.guard.rows import RowSet, row_set_from
from study.literal import clean
from study.plan import planned_choices, said_when
from study.release.material import Release
from study.saving import write_whole

_SAID: Final = 12  # differences told in the report; the rest are in a table of their own
# What decides which rows a set of rows holds.
_FRAME: Final = ("assignment.", "data.", "columns.score", "columns.site", "columns.take_up", "columns.weight", "columns.x",
                 "columns.y", "columns.longitude", "columns.latitude", "columns.cluster")  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Earlier:
    """One release that was made before.

    Attributes
    ----------
    frame
        Hash of the data and of the rule that puts rows on their side: sets can be told again only under the same.
    sets
        What it showed; None where a later version wrote them.
    """

    when: str
    folder: str
    version: str
    fingerprint: str
    frame: str
    sets: tuple[tuple[str, RowSet], ...] | None
    numbers: Mapping[str, str]


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """One released number that is not what it was."""

    where: str
    before: str
    now: str


def releases_path(study: Study) -> Path:
    """Where the list of releases stands."""
    return study.path.with_name(f"{study.path.stem}.releases.jsonl")


def read_releases(study: Study) -> tuple[Earlier, ...]:
    """Every earlier release, oldest first.

    Raises
    ------
    StudyError
        When the list can't be read: without it nothing can be held against what left before.
    """
    path = releases_path(study)
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        return ()
    except (OSError, UnicodeDecodeError):
        raise _unusable(path) from None
    found = []
    for line in text.splitlines():
        try:
            found.append(_earlier(json.loads(line)))
        except (ValueError, KeyError, TypeError, RecursionError):
            raise _unusable(path) from None
    return tuple(found)


def earlier_sets(
    releases: Sequence[Earlier], study: Study, fingerprint: str
) -> tuple[list[tuple[str, RowSet]], tuple[str, ...]]:
    """(sets that left before, cautions about releases whose sets can't be told from these data)."""
    frame = frame_of(study, fingerprint)
    sets: list[tuple[str, RowSet]] = []
    cautions = []
    for release in releases:
        if release.frame == frame and release.sets is not None:
            sets += release.sets
        else:
            cautions.append(
                f"The release of {said_when(release.when)} is of other data, or of another rule or version: what the two give away "
                "together was not checked. The checker must look at both."
            )
    return list(dict.fromkeys(sets)), tuple(cautions)


def frame_of(study: Study, fingerprint: str) -> str:
    """Hash of everything that decides which row is where."""
    planned = planned_choices(study, fingerprint)
    kept = {key: value for key, value in planned.items() if key.startswith(_FRAME)}
    return hashlib.sha256(json.dumps(kept, sort_keys=True).encode()).hexdigest()


def differences(before: Mapping[str, str], now: Mapping[str, str]) -> tuple[Difference, ...]:
    """Numbers that differ, are new or are gone, in the order of the report."""
    keys = [*now, *(key for key in before if key not in now)]
    return tuple(
        Difference(where=key, before=before.get(key, ""), now=now.get(key, ""))
        for key in keys
        if before.get(key, "") != now.get(key, "")
    )


def change_sentences(
    releases: Sequence[Earlier], now: Mapping[str, str], cautions: Sequence[str]
) -> tuple[str, ...]:
    """What differs from the last release."""
    if not releases:
        return ("Nothing of this study was released before.",)
    last = releases[-1]
    many = len(releases)
    said = [
        f"{'One release was' if many == 1 else f'{many:,} releases were'} made before, last on {said_when(last.when)}."
    ]
    found = differences(last.numbers, now)
    if not found:
        said.append("Every number is as it was then.")
    else:
        said.append(f"{len(found):,} {'number differs' if len(found) == 1 else 'numbers differ'} from then.")
        said += [
            f"{one.where}: {one.before or 'not there'} then, {one.now or 'not there'} now."
            for one in found[:_SAID]
        ]
        if len(found) > _SAID:
            said.append("The others are in differences.csv.")
    return (*said, *cautions)


def entry_of(release: Release, study: Study, fingerprint: str, folder: Path) -> str:
    """The line that a release adds to the list."""
    document = {
        "when": release.made,
        "folder": folder.name,
        "version": release.version,
        "fingerprint": fingerprint,
        "frame": frame_of(study, fingerprint),
        "sets": [[use, rows.to_document()] for use, rows in release.sets],
        "numbers": dict(release.numbers),
    }
    return json.dumps(document, ensure_ascii=False, allow_nan=False)


def add_to_list(study: Study, line: str) -> None:
    """Write the list with one more line: whole or not at all."""
    path = releases_path(study)
    before = path.read_text(encoding="utf-8") if path.exists() else ""
    write_whole(path, (before + line + "\n").encode("utf-8", "replace"))


def _earlier(document: Mapping[str, Any]) -> Earlier:
    try:
        sets = tuple((str(use), row_set_from(rows)) for use, rows in document["sets"])
    except (ValueError, TypeError):
        sets = None
    return Earlier(
        when=str(document["when"]),
        folder=str(document["folder"]),
        version=str(document["version"]),
        fingerprint=str(document["fingerprint"]),
        frame=str(document["frame"]),
        sets=sets,
        numbers={str(key): str(value) for key, value in dict(document["numbers"]).items()},
    )


def _unusable(path: Path) -> StudyError:
    return StudyError(
        f"{clean(path.name)}: the list of earlier releases can't be read.",
        "Put a whole copy back; without it nobody can tell what two releases give away together.",
        BAD_STUDY,
    )
