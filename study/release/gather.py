"""From a result to what may leave: everything is asked of the guard first, then worded, tabled and drawn."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, datetime

from study.analysis import Workbench
from study.errors import CANNOT_ESTIMATE, Masked, StudyError
from study.guard.decisions import Decisions
from study.guard.profile import load_profile
from study.guard.rows import RowSet
from study.ledger import ledger_path
from study.literal import clean
from study.plan import plan_path
from study.release.asked import Asked, ask, headline
from study.release.drawn import pictures_of
from study.release.material import Finding, Picture, Release, Table
from study.release.tabled import (
    effects_table,
    families_table,
    numbers_of,
    rows_table,
    site_tables,
    sweep_table,
    take_up_table,
)
from study.release.worded import (
    answers_of,
    basis_sentence,
    cautions_of,
    data_sentences,
    guard_sentences,
    question_sentences,
    remarks_of,
    repeat_sentences,
    safe_effect,
    together_sentences,
    warnings_of,
)
from study.result import Result
from study.version import program_version
from study.wording import finding_sentence, rule_sentence


def gather(
    result: Result,
    bench: Workbench,
    *,
    earlier: Sequence[tuple[str, RowSet]] = (),
    when: datetime | None = None,
) -> Release:
    """What would leave.

    Parameters
    ----------
    earlier
        Sets of rows that earlier releases of the same data and rule showed.

    Raises
    ------
    StudyError
        When the outcomes are masked, the profile can't be used, or nothing may be shown.
    """
    if bench.masked:
        raise Masked(", ".join(clean(name) for name in bench.outcomes))
    study = result.study
    profile = load_profile(study)
    decisions = Decisions(bench=bench, profile=profile, earlier=earlier)
    asked = ask(result, bench, decisions)
    if not asked.effects:
        raise StudyError(
            f"{clean(study.path.name)}: no effect may leave under {profile.name}.",
            "Ask about more rows, or let the data owner decide on other rules.",
            CANNOT_ESTIMATE,
        )
    sweeps = {
        effect.outcome: sweep_table(asked, effect)
        for effect in asked.effects
        if headline(effect) and asked.widths.get(effect.outcome)
    }
    pictures = pictures_of(asked, sweeps)
    findings = _findings(asked, pictures)
    tables = _tables(asked, findings, sweeps)
    stamp = (when or datetime.now(UTC)).astimezone(UTC).isoformat(timespec="seconds")
    together = {c.outcome: together_sentences(c, asked) for c in result.comparisons}
    data = data_sentences(asked)
    return Release(
        title=clean(study.title) or clean(study.path.stem),
        made=stamp,
        version=program_version(),
        question=question_sentences(study),
        rule=(rule_sentence(study),),
        data=data,
        findings=findings,
        together=together,
        record=() if result.record is None else result.record.sentences(study),
        cautions=cautions_of(study),
        repeat=repeat_sentences(study, program_version()),
        guard=guard_sentences(
            profile,
            sum(decision.did == "suppressed" for decision in decisions.made),
            sum(decision.did == "rounded" for decision in decisions.made),
        ),
        tables=tables,
        pictures=tuple(picture for name in pictures for picture in pictures[name]),
        texts=_texts(bench),
        decisions=tuple(decisions.made),
        sets=tuple(decisions.released_sets()),
        numbers=numbers_of(tables),
    )


def _findings(asked: Asked, pictures: dict[str, tuple[Picture, ...]]) -> tuple[Finding, ...]:
    found = []
    for effect in asked.effects:
        if not headline(effect):
            continue
        safe = safe_effect(effect, asked)
        found.append(
            Finding(
                heading=clean(effect.outcome),
                sentences=(
                    finding_sentence(safe, asked.result.study),
                    basis_sentence(effect, asked),
                ),
                answers=answers_of(effect, safe, asked),
                remarks=remarks_of(safe),
                cautions=warnings_of(effect, asked),
                pictures=tuple(picture.name for picture in pictures.get(effect.outcome, ())),
            )
        )
    return tuple(found)


def _tables(asked: Asked, findings: Sequence[Finding], sweeps: dict[str, Table]) -> tuple[Table, ...]:
    optional = (take_up_table(asked), families_table(asked))
    return (
        effects_table(asked),
        *(finding.answers for finding in findings if finding.answers is not None),
        *site_tables(asked),
        *sweeps.values(),
        *(table for table in optional if table is not None),
        rows_table(asked),
    )


def _texts(bench: Workbench) -> dict[str, str]:
    """The study file, the sealed plan and the ledger, as they stand."""
    study = bench.study
    found = {"study.toml": study.text}
    for name, path in (
        ("study.toml", study.path),
        ("plan.json", plan_path(study)),
        ("ledger.jsonl", ledger_path(study)),
    ):
        if path.is_file():
            found[name] = path.read_text(encoding="utf-8", errors="replace")
    return found
