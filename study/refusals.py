"""The sentences that refuse a study file: what stands there, what is allowed, what was probably meant."""

from __future__ import annotations

import re
from pathlib import Path

from study.accepting import Refused
from study.errors import BAD_STUDY, StudyError
from study.literal import clean, nearest, quoted
from study.options import OPTIONS, SECTIONS, Option


def refusal(path: Path, what: str, do: str) -> StudyError:
    """An error about a study file, which is named first."""
    return StudyError(f"{clean(path.name)}: {what}", do, BAD_STUDY)


def not_allowed(path: Path, option: Option, refused: Refused) -> StudyError:
    """A value that its key does not take, what it takes, and the nearest valid spelling."""
    hint = f" Did you mean {quoted(refused.nearest)}?" if refused.nearest else ""
    return refusal(
        path, f"{option.name} is {refused.found}, which is not allowed.", f"Allowed: {option.expected}.{hint}"
    )


def unknown(path: Path, name: str) -> StudyError:
    """A key or section that no option declares, and where it may belong."""
    section, _, key = name.rpartition(".")
    siblings = [option.key for option in OPTIONS if option.section == section]
    elsewhere = [option for option in OPTIONS if option.key == key]
    if not section or not siblings:
        near = nearest(name, SECTIONS)
        if elsewhere:
            do = f"Move it under [{elsewhere[0].section}]."
        elif near:
            do = f"Did you mean [{near}]?"
        else:
            do = f"The sections are {', '.join(SECTIONS)}."
        return refusal(path, f"{quoted(name)} is not a known section or key.", do)
    near = nearest(key, siblings)
    if elsewhere:
        do = f"Move it under [{elsewhere[0].section}]."
    elif near:
        do = f"Did you mean {quoted(near)}?"
    else:
        do = f"The keys of [{section}] are {', '.join(siblings)}."
    return refusal(path, f"{quoted(key)} is not a known key of [{clean(section)}].", do)


def not_toml(path: Path, text: str, message: str) -> StudyError:
    """Text that is not TOML, with its line."""
    found = re.search(r"\(at line (\d+)", message)
    line = int(found.group(1)) if found else text.count("\n") + 1
    problem = clean(re.sub(r"\s*\(at [^)]*\)\s*$", "", message)).rstrip(".")
    return refusal(
        path, f"line {line} is not valid TOML: {problem[:1].lower()}{problem[1:]}.", "Correct that line."
    )


def hint_for_missing(path: Path) -> str:
    """What to do about a study file that isn't there."""
    try:
        siblings = sorted(entry.name for entry in path.parent.iterdir() if entry.suffix == ".toml")
    except OSError:
        return "Check the folder's name; it could not be listed."
    near = nearest(path.name, siblings)
    if near:
        return f"Did you mean {quoted(near)}?"
    return "Check the name, or start one with cutbank and a data file."
