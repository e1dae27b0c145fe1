"""A release from beginning to end: what the command line and the bench both call."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime

from study.analysis import Workbench
from study.record import record_of
from study.release.earlier import Earlier, change_sentences, earlier_sets, read_releases
from study.release.gather import gather
from study.release.material import Release
from study.result import Result


def prepare_release(
    bench: Workbench, result: Result | None = None, *, when: datetime | None = None
) -> tuple[Release, tuple[Earlier, ...]]:
    """(what would leave, the releases before it); nothing is written but what was looked at into the ledger.

    Parameters
    ----------
    result
        A run of this bench; it is run where none is given.

    Raises
    ------
    StudyError
        When the outcomes are masked, nothing can be estimated or may be shown, or earlier releases can't be read.
    """
    study, fingerprint = bench.study, bench.assigned.fingerprint
    earlier = read_releases(study)
    sets, cautions = earlier_sets(earlier, study, fingerprint)
    found = bench.run() if result is None else result
    found = replace(found, record=record_of(study, fingerprint, found.effects))
    release = gather(found, bench, earlier=sets, when=when)
    return replace(release, changes=change_sentences(earlier, release.numbers, cautions)), earlier
