"""`cutbank seal`: freeze the plan, so that the outcomes may be seen."""

from __future__ import annotations

import getpass
from pathlib import Path

from study.commands.speaking import progress
from study.document import Study, load_study
from study.literal import clean
from study.plan import Sealed, plan_path, said_when, seal
from study.readiness import require_complete


def seal_study(study_path: Path, *, by: str | None) -> int:
    """Check that the study can be read as it is declared, freeze its choices, and record the seal.

    Raises
    ------
    StudyError
        When the study is incomplete, its data can't be used, it is sealed already, or the plan can't be written.
    """
    study = load_study(study_path)
    require_complete(study)
    from study.assemble import assemble  # numpy and DuckDB: not before the study file is known to be good

    with progress() as report:
        assigned = assemble(study, progress=report)
    sealed = freeze(study, by=by, fingerprint=assigned.fingerprint)
    print(f"The plan of {clean(study.path.name)} is sealed: {said_when(sealed.when)}, by {sealed.by}.")
    print(f"{clean(plan_path(study).name)} keeps it; its hash is {sealed.hash}.")
    print("Outcomes may be seen now. What differs from the plan from here on is marked as a departure.")
    return 0


def freeze(study: Study, *, by: str | None = None, fingerprint: str | None = None) -> Sealed:
    """Seal a study's plan and record the act in its ledger; the command line and the bench both do just this.

    Raises
    ------
    StudyError
        As `study.plan.seal`.
    """
    from study.ledger import record_act
    from study.version import program_version

    sealed = seal(study, by=by or _user(), fingerprint=fingerprint)
    record_act(
        study, "seal", {"plan": sealed.hash, "by": sealed.by, "at": sealed.when}, version=program_version()
    )
    return sealed


def _user() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError):  # a number without a name, as in some containers
        return "somebody without a user name"
