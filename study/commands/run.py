"""`cutbank run`: the whole study without a screen."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from study.commands.speaking import Reporter, needs_plain_marks, page_width, progress
from study.document import load_study
from study.errors import BAD_STUDY, StudyError
from study.literal import clean
from study.readiness import require_complete
from study.saving import write_whole

if TYPE_CHECKING:
    from study.analysis import Workbench

Page = Callable[[int, bool], list[str]]  # (columns, ASCII marks only) to lines


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

    plain = needs_plain_marks(ascii_only)
    with progress() as report:
        bench = Workbench.open(study, progress=report)
        content, page = (_masked if bench.masked else _estimated)(bench, report)
        document = json.dumps(content, indent=2, allow_nan=False)
        # Written before anything is printed, so that a folder that can't be written to leaves standard output empty.
        if out is not None:
            lines = page(80, ascii_only)
            _write(out, {"result.json": document + "\n", "result.txt": "\n".join(lines) + "\n"})
        lines = [] if as_json else page(page_width(), plain)
    print(document if as_json else "\n".join(lines))
    return 0


def _estimated(bench: Workbench, report: Reporter) -> tuple[dict[str, Any], Page]:
    """The result and its page; what was estimated goes into the ledger before anybody sees it."""
    from study.page import result_lines
    from study.record import record_of

    result = bench.run(report)
    report("Writing the result")
    record = record_of(bench.study, bench.assigned.fingerprint, result.effects)
    result = replace(result, record=record)
    return result.to_document(), lambda width, plain: result_lines(result, bench, width=width, plain=plain)


def _masked(bench: Workbench, report: Reporter) -> tuple[dict[str, Any], Page]:
    """What may be known before the seal."""
    from study.masked import masked_result
    from study.masked_page import masked_lines

    report("Looking at the design; outcomes are masked")
    result = masked_result(bench)
    return result.to_document(), lambda width, _plain: masked_lines(result, width=width)


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
