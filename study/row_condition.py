"""The SQL condition that says which rows a study reads, checked before it touches any data."""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any, Final

from study.errors import BAD_STUDY, StudyError
from study.literal import clean, nearest, quoted

if TYPE_CHECKING:
    import duckdb

# What an expression on one row's own values is made of. Everything else (subqueries, windows, parameters, lambdas, stars)
# could look beyond the row.
_ALLOWED_CLASSES: Final = frozenset(
    (
        "BETWEEN",
        "CASE",
        "CAST",
        "COLLATE",
        "COLUMN_REF",
        "COMPARISON",
        "CONJUNCTION",
        "CONSTANT",
        "FUNCTION",
        "OPERATOR",
        "TYPE",
    )
)
_EMPTY_PARTS: Final = ("group_expressions", "group_sets", "having", "sample", "qualify", "modifiers")


def check_condition(
    connection: duckdb.DuckDBPyConnection, condition: str, columns: Sequence[str], where: str
) -> frozenset[str]:
    """The columns that a condition looks at, once it is sure to be a plain expression on one row.

    It may compare, calculate and call functions whose result depends on their arguments alone. It can't hold a
    second statement or a query, nor call a function that reads files, settings, the clock or chance, so that the same
    file gives the same rows next year.

    Parameters
    ----------
    connection
        Any open connection; only its parser and its list of functions are used.
    condition
        SQL text.
    columns
        The file's column names.
    where
        The data file's name, for messages.

    Raises
    ------
    StudyError
        Status 2, one sentence on what is wrong with the condition.
    """
    # The line break ends a comment at the condition's end, so that the bracket behind it counts.
    text = f"SELECT 1 FROM data WHERE ({condition}\n)"
    answer = json.loads(connection.execute("SELECT json_serialize_sql(?)", [text]).fetchall()[0][0])
    statements = answer.get("statements", [])
    if answer["error"] or len(statements) != 1:
        raise _bad("is not a valid SQL condition")
    node = statements[0]["node"]
    if (
        node.get("type") != "SELECT_NODE"
        or node["from_table"].get("type") != "BASE_TABLE"
        or any(node.get(part) for part in _EMPTY_PARTS)
        or node["cte_map"]["map"]
        or node["where_clause"] is None
    ):
        raise _bad("is more than one condition")
    pure = {
        row[0]
        for row in connection.execute(
            "SELECT DISTINCT function_name FROM duckdb_functions() WHERE function_type = 'scalar' AND stability = 'CONSISTENT'"
        ).fetchall()
    }
    by_folded = {name.casefold(): name for name in columns}
    used: set[str] = set()
    for part in _parts(node["where_clause"]):
        if part["class"] not in _ALLOWED_CLASSES:
            raise _bad(
                "holds a query inside it" if part["class"] == "SUBQUERY" else "looks beyond the row itself"
            )
        if part["class"] == "COLUMN_REF":
            name = part["column_names"][-1]
            if len(part["column_names"]) > 1 or name.casefold() not in by_folded:
                near = nearest(name, list(columns))
                raise StudyError(
                    f"data.rows: {clean(where)} has no column {quoted(name)}.",
                    f"Did you mean {quoted(near)}?"
                    if near
                    else "List its columns with: cutbank columns FILE",
                    BAD_STUDY,
                )
            used.add(by_folded[name.casefold()])
        elif part["class"] == "FUNCTION" and part["function_name"] not in pure:
            raise _bad(
                f"calls {quoted(part['function_name'])}, which is not a plain function of a row's values"
            )
    return frozenset(used)


def _parts(node: Any) -> Iterator[dict[str, Any]]:
    """Every expression in a syntax tree, the outermost first."""
    if isinstance(node, dict):
        # An expression says its place in the text; the description of a type, which also has a class, does not.
        if isinstance(node.get("class"), str) and "query_location" in node:
            yield node
        for child in node.values():
            yield from _parts(child)
    elif isinstance(node, list):
        for child in node:
            yield from _parts(child)


def _bad(problem: str) -> StudyError:
    return StudyError(
        f"data.rows: the condition {problem}.",
        'Write one SQL condition on the columns of the file, such as "rooms > 0".',
        BAD_STUDY,
    )
