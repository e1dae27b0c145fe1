"""`cutbank release`: what may leave, in a folder."""

from __future__ import annotations

from pathlib import Path

from study.commands.speaking import progress
from study.document import load_study
from study.literal import clean
from study.readiness import require_complete


def release_study(study_path: Path, *, to: Path) -> int:
    """Estimate a study, pass everything through the guard, and write outputs and the checker's sheet.

    Raises
    ------
    StudyError
        Whatever keeps the study from being estimated or released; nothing is written then.
    """
    study = load_study(study_path)
    require_complete(study)
    # numpy, scipy, DuckDB and matplotlib: not before the study file is known to be good.
    from study.analysis import Workbench
    from study.release.making import prepare_release
    from study.release.writing import CHECKER, LEAVES, write_release

    with progress() as report:
        bench = Workbench.open(study, progress=report)
        report("Asking the guard")
        release, earlier = prepare_release(bench)
        report("Drawing and writing")
        files = write_release(release, to, study, bench.assigned.fingerprint, earlier)
    leaving = sum(name.startswith(f"{LEAVES}/") for name in files)
    print(f"{clean(str(to))}: {leaving} files in {LEAVES}, the checker's sheet in {CHECKER}.")
    print(f"The guard held back {release.suppressed:,} numbers and rounded {release.rounded:,}.")
    for sentence in release.changes:
        print(sentence)
    print("The data owner's rules and officers decide what may leave.")
    return 0
