"""Puts changed values into a TOML text and leaves everything else in it as it was written."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import tomlkit
from tomlkit.exceptions import TOMLKitError
from tomlkit.items import AbstractTable, InlineTable

from study.options import OPTIONS


def rewritten(text: str, values: Mapping[str, object]) -> str:
    """The text with each key of the options table brought to its value.

    A key that already says its value is not touched; a key that takes its default and isn't in the text stays out
    of it. Comments, order, blank lines and the spelling of untouched values are kept.

    Parameters
    ----------
    text
        TOML, or "" for a file that doesn't exist yet.
    values
        Value by dotted name.
    """
    try:
        document: Any = tomlkit.parse(text)
    except TOMLKitError:
        document = tomlkit.document()
    emptied: set[str] = set()
    for option in OPTIONS:
        value = values[option.name]
        table = _section(document, option.section)
        present = table is not None and option.key in table
        if value is None or (value == option.default and not (present and value)):
            if table is not None and present:
                del table[option.key]
                emptied.add(option.section)
        elif not present or _differs(table[option.key], value):
            if table is None:
                table = _add_section(document, option.section)
            _put(table, option.key, value)
    _drop_emptied(document, emptied)
    return tomlkit.dumps(document)


def _section(document: Any, name: str) -> Any:
    table = document
    for part in name.split("."):
        if part not in table:
            return None
        table = table[part]
    return table


def _add_section(document: Any, name: str) -> Any:
    table = document
    for part in name.split("."):
        if part not in table:
            if table is document and len(table):
                document.add(tomlkit.nl())
            table[part] = tomlkit.table()
        table = table[part]
    return table


def _put(table: Any, key: str, value: object) -> None:
    if isinstance(value, Mapping):
        if key not in table:
            fresh = (
                tomlkit.inline_table()
                if isinstance(table, InlineTable) or key in ("all", "any")
                else tomlkit.table()
            )
            table.add(key, fresh)
        inside = table[key]
        for name in [name for name in inside if name not in value]:
            del inside[name]
        for name, number in value.items():
            if name not in inside or _differs(inside[name], number):
                _put(inside, name, number)
        return
    item = tomlkit.item(list(value) if isinstance(value, tuple) else value)
    if key in table:
        old = table[key]
        if hasattr(old, "trivia"):  # keeps the comment behind the value
            item.trivia.comment_ws, item.trivia.comment = old.trivia.comment_ws, old.trivia.comment
        table[key] = item
    elif isinstance(table, AbstractTable):
        _insert(table, key, item)
    else:
        table.add(key, item)


def _insert(table: Any, key: str, item: Any) -> None:
    """Add a key behind the table's last plain key, ahead of blank lines, comments and tables that follow it."""
    plain = [
        name
        for name, held in table.items()
        if not isinstance(held, AbstractTable) or isinstance(held, InlineTable)
    ]
    if plain and not isinstance(table, InlineTable):
        table.value._insert_after(plain[-1], key, item)
    else:
        table.add(key, item)


def _differs(held: Any, value: object) -> bool:
    plain = held.unwrap() if hasattr(held, "unwrap") else held
    if isinstance(value, tuple):
        return not isinstance(plain, list) or list(plain) != list(value)
    if isinstance(value, Mapping):
        return True  # each name in it is looked at on its own
    return (type(plain) is bool and type(value) is not bool) or plain != value


def _drop_emptied(document: Any, sections: set[str]) -> None:
    """Take out the headers of sections that lost their last key, unless comments still stand under them."""
    for name in sorted(sections, reverse=True):
        section, _, key = name.rpartition(".")
        parent = _section(document, section) if section else document
        if parent is not None and key in parent and not tomlkit.dumps(parent[key]).strip():
            del parent[key]
