"""`cutbank run`: the whole study without a screen."""

from __future__ import annotations

import json
from pathlib import Path

from study.commands.speaking import needs_plain_marks, page_width, progress
from study.document import load_study
from study.errors import BAD_STUDY, StudyError
from study.literal import clean
from study.readiness import require_complete
from study.saving import write_whole


def run_study(study_path: Path, *, out: Path | None, as_json: bool, ascii_only: bool) -> int:
    """Estimate a study, print its result, and write it to a folder where one is named.

    Raises
    ------
    StudyError
        Whatever keeps the study from being estimated; nothing is on standard output then.
    """
    study = load_study(study_path)
    require_complete(study)
    # numpy, scipy and DuckDB: not before the study file is known to be good.
    from study.analysis import Workbench
    from study.page import result_lines

    with progress() as report:
        bench = Workbench.open(study, progress=report)
        result = bench.run(report)
        report("Writing the result")
        document = json.dumps(result.to_document(), indent=2, allow_nan=False)
        plain = needs_plain_marks(ascii_only)
        # Written before anything is printed, so that a folder that can't be written to leaves standard output empty.
        if out is not None:
            page = "\n".join(result_lines(result, bench, width=80, plain=ascii_only)) + "\n"
            _write(out, {"result.json": document + "\n", "result.txt": page})
        lines = [] if as_json else result_lines(result, bench, width=page_width(), plain=plain)
    print(document if as_json else "\n".join(lines))
    return 0


def _write(folder: Path, files: dict[str, str]) -> None:
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
    except OSError as error:
        raise StudyError(
            f"{clean(str(folder))}: the folder can't be made ({(error.strerror or 'unknown reason').lower()}).",
            "Choose another folder.",
            BAD_STUDY,
        ) from None
    for name, text in files.items():
        write_whole(folder / name, text.encode("utf-8", "replace"))
