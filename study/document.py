"""The study file: one declared question as a frozen object, read from TOML and written back with its comments."""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final, Literal, cast

from estimation.choices import Choices
from study.accepting import Refused, accept
from study.errors import StudyError
from study.literal import clean, quoted
from study.options import AREA_SIDES, BY_NAME, OPTIONS, SECTIONS, Option
from study.refusals import hint_for_missing, not_allowed, not_toml, refusal, unknown
from study.saving import write_whole

_LARGEST: Final = (
    4 * 2**20
)  # bytes; a study file is a page, and a data file given by mistake should say so at once


@dataclass(frozen=True, slots=True, kw_only=True)
class Data:
    """Where the rows are: the keys of `[data]`."""

    path: str = ""
    table: str | None = None
    layer: str | None = None
    rows: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Columns:
    """Which column plays which part: the keys of `[columns]`."""

    outcomes: tuple[str, ...] = ()
    score: str | None = None
    site: str | None = None
    take_up: str | None = None
    cluster: str | None = None
    weight: str | None = None
    covariates: tuple[str, ...] = ()
    x: str | None = None
    y: str | None = None
    longitude: str | None = None
    latitude: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Area:
    """The area whose boundary is the line: the keys of `[assignment.area]`. `reach` is in metres."""

    path: str | None = None
    layer: str | None = None
    crs: str | None = None
    reach: float | None = None
    segments: int | str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Frontier:
    """Several scores with a cutoff each: the keys of `[assignment.frontier]`.

    Attributes
    ----------
    combine
        "all" when every condition must hold to be treated, "any" when one is enough.
    cutoffs
        Cutoff by score column.
    """

    combine: Literal["all", "any"]
    cutoffs: Mapping[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Assignment:
    """The rule that made some rows treated: the keys of `[assignment]`."""

    rule: str = "cutoff"
    treated: str = "at or above"
    cutoff: float | None = None
    steps: tuple[float, ...] = ()
    doses: tuple[float, ...] = ()
    cutoff_column: str | None = None
    sites: Mapping[str, float] = field(default_factory=dict)
    site_weights: Mapping[str, float] = field(default_factory=dict)
    area: Area | None = None
    frontier: Frontier | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Guard:
    """The disclosure rules in force: the keys of `[guard]`."""

    profile: str = "threshold-10"


@dataclass(frozen=True, slots=True, kw_only=True)
class Study:
    """One declared question. Never changes: an edit makes a new one.

    Attributes
    ----------
    path
        The study file. Paths inside the study are relative to its folder.
    text
        The TOML that the study was read from; its comments and layout are kept on saving.
    """

    path: Path
    title: str = ""
    seed: int = 1
    masked: bool = True
    data: Data = field(default_factory=Data)
    columns: Columns = field(default_factory=Columns)
    assignment: Assignment = field(default_factory=Assignment)
    estimate: Choices = field(default_factory=Choices)
    guard: Guard = field(default_factory=Guard)
    text: str = field(default="", repr=False, compare=False)

    @property
    def data_file(self) -> Path:
        """The data file, its path resolved from the study's folder."""
        return self.path.parent / self.data.path

    def value(self, name: str) -> object:
        """The value of a key by its dotted name, such as "estimate.kernel"; KeyError for an unknown name."""
        return values_of(self)[name]


def load_study(path: Path | str) -> Study:
    """Read and check a study file.

    Parts may still be missing from it (a study grows in the app); `study.readiness.require_complete` says so.

    Raises
    ------
    StudyError
        Status 2: the file can't be read, is not TOML in UTF-8, or holds a key or value that is not allowed.
    """
    path = Path(path)
    shown = clean(str(path))
    try:
        if path.is_dir():
            raise StudyError(f"{shown}: is a folder, not a study file.", "Name the study.toml inside it.")
        if path.exists() and not path.is_file():
            raise StudyError(f"{shown}: is not a regular file.", "Name a study file on this machine.")
        content = path.read_bytes() if path.stat().st_size <= _LARGEST else None
    except FileNotFoundError:
        raise StudyError(f"{shown}: there is no such study file.", hint_for_missing(path)) from None
    except (OSError, ValueError) as error:
        reason = (getattr(error, "strerror", None) or "the name is not valid").lower()
        raise StudyError(
            f"{shown}: the study file can't be read ({reason}).", "Check its name and its permissions."
        ) from None
    if content is None:
        raise StudyError(f"{shown}: is too large for a study file.", "Name a study file, not a data file.")
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise StudyError(
            f"{shown}: line {line} is not valid UTF-8.", "Save the study file as UTF-8 text."
        ) from None
    study = parse_study(text, path)
    _last_seen[os.path.realpath(path)] = text
    return study


def parse_study(text: str, path: Path | str) -> Study:
    """Read and check the text of a study file that stands, or will stand, at `path`.

    Raises
    ------
    StudyError
        Status 2, naming the key, what was found, what is allowed and the nearest valid spelling.
    """
    path = Path(path)
    try:
        document = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise not_toml(path, text, str(error)) from None
    except RecursionError:
        raise refusal(
            path, "is not valid TOML (nested too deeply).", "Write each key on its own line."
        ) from None
    return _build(path, _flatten(document, path), text)


def new_study(data_path: Path | str, path: Path | str) -> Study:
    """A study of a data file with nothing declared yet; nothing is written.

    The data file's path is kept relative where it lies in the study's folder or below, absolute elsewhere.
    """
    data_path, path = Path(data_path), Path(path)
    absolute, folder = data_path.absolute(), path.absolute().parent
    kept = absolute.relative_to(folder) if absolute.is_relative_to(folder) else absolute
    return edit(Study(path=path), {"data.path": kept.as_posix(), "study.title": data_path.stem})


def edit(study: Study, changes: Mapping[str, object]) -> Study:
    """A new study with some keys changed.

    Parameters
    ----------
    changes
        Value by dotted name, such as {"estimate.bandwidth": 6.0}. None takes a key back to its default.
        "assignment.sites.NAME" changes one site of the table.

    Raises
    ------
    StudyError
        Status 2, as for a file that said so; `study` itself is as it was.
    """
    values = values_of(study)
    for name, value in changes.items():
        site = name.removeprefix("assignment.sites.")
        if site != name:
            sites = dict(cast(Mapping[str, float], values["assignment.sites"]))
            sites.pop(site, None)
            values["assignment.sites"] = sites if value is None else {**sites, site: value}
        elif name not in BY_NAME:
            raise unknown(study.path, name)
        else:
            values[name] = BY_NAME[name].default if value is None else value
    given = {name: value for name, value in values.items() if not _is_default(BY_NAME[name], value)}
    return _build(study.path, given, study.text)


def _is_default(option: Option, value: object) -> bool:
    # Not by equality alone: true is no whole number, although Python has True == 1.
    return value == option.default and isinstance(value, bool) == isinstance(option.default, bool)


def save_study(study: Study) -> None:
    """Write the study to its file: whole or not at all, mode 0600, comments and layout kept.

    Raises
    ------
    StudyError
        Status 2: the file can't be written, or another program changed it since it was opened here.
    """
    from study.rewriting import rewritten  # tomlkit is slow to load and only needed to write

    place = os.path.realpath(study.path)
    expected = _last_seen.get(place)
    try:
        on_disk = None if expected is None else Path(place).read_bytes().decode("utf-8-sig")
    except (OSError, UnicodeDecodeError):
        on_disk = None
    if on_disk is not None and on_disk != expected:
        raise refusal(
            study.path,
            "was changed by another program since it was opened here.",
            "Open it again to take that change in; nothing was written over it.",
        )
    text = rewritten(study.text, values_of(study))
    if not _says(text, study):
        # A layout too unusual to change in place: what the study says counts for more than its comments.
        text = rewritten("", values_of(study))
    write_whole(study.path, text.encode("utf-8"))
    _last_seen[place] = text


def _says(text: str, study: Study) -> bool:
    try:
        return parse_study(text, study.path) == study
    except StudyError:
        return False


# What each study file held when this process last read or wrote it, so that a change made elsewhere meanwhile is noticed and
# not overwritten by an autosave.
_last_seen: dict[str, str] = {}


def values_of(study: Study) -> dict[str, object]:
    """Every key's value by dotted name, in the order of the options table."""
    values: dict[str, object] = {}
    for option in OPTIONS:
        holder: object = {
            "study": study,
            "data": study.data,
            "columns": study.columns,
            "assignment": study.assignment,
            "assignment.area": study.assignment.area,
            "assignment.frontier": study.assignment.frontier,
            "estimate": study.estimate,
            "guard": study.guard,
        }[option.section]
        if isinstance(holder, Frontier):
            values[option.name] = holder.cutoffs if holder.combine == option.key else None
        else:
            values[option.name] = option.default if holder is None else getattr(holder, option.key)
    return values


def _flatten(document: Mapping[str, Any], path: Path, prefix: str = "") -> dict[str, object]:
    """Values by dotted name; a key that no option declares is an error."""
    values: dict[str, object] = {}
    for key, value in document.items():
        name = f"{prefix}{key}"
        if name in SECTIONS:
            if not isinstance(value, dict):
                raise refusal(path, f"{name} is not a section.", f"Write it as a table, [{name}].")
            values.update(_flatten(value, path, f"{name}."))
        elif name in BY_NAME:
            values[name] = value
        else:
            raise unknown(path, name)
    return values


def _build(path: Path, given: Mapping[str, object], text: str) -> Study:
    sections: dict[str, dict[str, Any]] = {section: {} for section in SECTIONS}
    for name, value in given.items():
        option = BY_NAME[name]
        try:
            sections[option.section][option.key] = accept(option, value)
        except Refused as refused:
            raise not_allowed(path, option, refused) from None
    area, frontier = sections.pop("assignment.area"), sections.pop("assignment.frontier")
    if len(frontier) > 1:
        raise refusal(path, "assignment.frontier has both all and any.", "Keep one of the two.")
    study = Study(
        path=path,
        text=text,
        **sections["study"],
        data=Data(**sections["data"]),
        columns=Columns(**sections["columns"]),
        assignment=Assignment(
            **sections["assignment"],
            area=Area(**area) if area else None,
            frontier=next((Frontier(combine=cast(Any, k), cutoffs=v) for k, v in frontier.items()), None),
        ),
        estimate=Choices(**sections["estimate"]),
        guard=Guard(**sections["guard"]),
    )
    _refuse_contradictions(study)
    return study


def _refuse_contradictions(study: Study) -> None:
    """Keys that are each allowed but not together, whatever else is still missing."""
    rule, treated, chosen = study.assignment.rule, study.assignment.treated, study.estimate
    if rule in ("cutoff", "cutoffs", "steps") and treated in AREA_SIDES:
        raise refusal(
            study.path,
            f"assignment.treated is {quoted(treated)}, which belongs to a boundary, but assignment.rule is {quoted(rule)}.",
            'Choose "at or above", "above", "at or below" or "below".',
        )
    if chosen.order == 0:
        for key, value in (("interval", chosen.interval), ("bandwidth", chosen.bandwidth)):
            if value == "bias-aware":
                raise refusal(
                    study.path,
                    f'estimate.{key} is "bias-aware", which a comparison of means (estimate.order = 0) does not have.',
                    f"Set estimate.order to 1 or more, or choose another {key}.",
                )
    if chosen.variance == "spatial" and rule != "boundary":
        raise refusal(
            study.path,
            f'estimate.variance is "spatial", which belongs to a boundary, but assignment.rule is {quoted(rule)}.',
            'Choose "neighbour", "hc0", "hc1", "hc2" or "hc3".',
        )
