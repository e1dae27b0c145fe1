"""The report in order: headings, sentences, tables and figures that every format lays out in its own way."""

from __future__ import annotations

from dataclasses import dataclass

from study.plan import said_when
from study.release.material import Release, Table


@dataclass(frozen=True, slots=True)
class Heading:
    """A heading of a section, or of a part of one."""

    text: str
    level: int = 2


@dataclass(frozen=True, slots=True)
class Sentences:
    """A paragraph."""

    text: str
    lead: bool = False


@dataclass(frozen=True, slots=True)
class Items:
    """A list."""

    texts: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Shown:
    """A figure by its name, with the sentence that stands for it."""

    name: str
    title: str


Block = Heading | Sentences | Items | Shown | Table


def report_blocks(release: Release) -> list[Block]:
    """A report that a reader without the program understands."""
    titles = {picture.name: picture.title for picture in release.pictures}
    tables = {table.name: table for table in release.tables}
    blocks: list[Block] = [
        Heading(release.title, 1),
        Sentences(f"Made on {said_when(release.made)} with Cutbank {release.version}."),
        Heading("The question"),
        Sentences(" ".join((*release.question, *release.rule))),
        Heading("What was found"),
    ]
    for finding in release.findings:
        blocks.append(Heading(finding.heading, 3))
        blocks.append(Sentences(finding.sentences[0], lead=True))
        blocks.append(Sentences(" ".join(finding.sentences[1:])))
        if finding.answers is not None:
            blocks.append(finding.answers)
        blocks.append(Items((*finding.remarks, *finding.cautions)))
        blocks += [Shown(name, titles[name]) for name in finding.pictures]
    if release.together:
        blocks.append(Heading("Site by site"))
        for outcome, sentences in release.together.items():
            table = tables.get(f"sites-{outcome}")
            if table is not None:
                blocks.append(table)
            blocks.append(Items(sentences))
    elsewhere = {finding.answers.name for finding in release.findings if finding.answers is not None}
    rest = [
        t
        for t in release.tables
        if t.name not in elsewhere and not t.name.startswith(("sites-", "rows", "widths-"))
    ]
    blocks += [Heading("All numbers in tables"), *rest]
    blocks += [Heading("The data"), Items(release.data), tables["rows"]]
    blocks += [Shown(picture.name, picture.title) for picture in release.pictures if picture.name == "score"]
    blocks += [Heading("How it came about"), Items(release.record)]
    blocks += [Heading("What to keep in mind"), Items(release.cautions)]
    blocks += [Heading("What was held back"), Items(release.guard)]
    if release.changes:
        blocks += [Heading("Against earlier releases"), Items(release.changes)]
    blocks += [Heading("How to repeat it"), Items(release.repeat)]
    return blocks
