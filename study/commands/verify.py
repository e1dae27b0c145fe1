"""`cutbank verify`: read and check everything, estimate nothing."""

from __future__ import annotations

from pathlib import Path

from study.commands.speaking import progress
from study.document import load_study
from study.literal import clean
from study.readiness import require_complete


def verify_study(study_path: Path) -> int:
    """Say what the study reads and who is on which side, or raise what keeps it from being estimated.

    Raises
    ------
    StudyError
        The first thing that is wrong.
    """
    study = load_study(study_path)
    require_complete(study)
    import numpy as np  # not before the study file is known to be good

    from study.assemble import assemble
    from study.wording import plural, rule_sentence

    with progress() as report:
        assigned = assemble(study, progress=report)
    used = assigned.reason == 0
    data = clean(study.data_file.name)
    print(f"{clean(study.path.name)} and {data} go together.")
    print(rule_sentence(study))
    print(f"{plural(assigned.rows_read, 'row')} read, {int(used.sum()):,} used.")
    for reason, count in assigned.dropped.items():
        print(f"Left out: {count:,} {reason}.")
    above = int(np.sum(used & assigned.above))
    print(f"Below the line {int(used.sum()) - above:,}, above it {above:,}; treated: {assigned.treated}.")
    if assigned.site is not None:
        for code, name in enumerate(assigned.site_names):
            here = used & (assigned.site == code)
            up = int(np.sum(here & assigned.above))
            print(f"  {clean(name)}: below {int(here.sum()) - up:,}, above {up:,}")
    for name, values in assigned.outcomes.items():
        missing = int(np.isnan(values[used]).sum())
        print(f"Outcome {clean(name)}: {missing:,} of the rows used are missing it.")
    print(f"SHA-256 of {data}: {assigned.fingerprint}")
    return 0
