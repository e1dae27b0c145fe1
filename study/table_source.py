"""One open data file: checked, reachable by SQL, and nothing else on the machine with it."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Final

from study import delimited, statistical_files
from study.data_files import DATABASE, DELIMITED, JSON_LINES, PARQUET, STATISTICAL, check_file
from study.errors import BAD_DATA, BAD_STUDY, StudyError
from study.literal import clean, nearest, quoted
from study.row_condition import check_condition

if TYPE_CHECKING:
    import duckdb

_MISSING: Final = ("", "NA", ".")  # how spreadsheets and statistics packages write a missing value in CSV
_LOADED: Final = "rows of the file"
_ATTACHED: Final = "data file"


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenTable:
    """A data file, open for queries.

    Attributes
    ----------
    path
        The file.
    connection
        A connection that can reach this file only, with its configuration locked.
    relation
        What stands behind FROM.
    names
        Column names in file order.
    types
        SQL type by column; for a statistical file only the loaded columns.
    condition
        The checked condition, "" for all rows.
    contents
        Labels, for a statistical file.
    """

    path: Path
    connection: duckdb.DuckDBPyConnection
    relation: str
    names: tuple[str, ...]
    types: Mapping[str, str]
    condition: str
    contents: statistical_files.Contents | None

    @property
    def from_clause(self) -> str:
        """The rows that the study reads: everything behind FROM, the condition included."""
        return f"{self.relation} WHERE ({self.condition}\n)" if self.condition else self.relation

    def numbered(self, alias: str) -> str:
        """As `from_clause`, with a further column that holds the row's place in the file, from 0."""
        inner = f"(SELECT *, row_number() OVER () - 1 AS {identifier(alias)} FROM {self.relation})"
        return f"{inner} WHERE ({self.condition}\n)" if self.condition else inner


def identifier(name: str) -> str:
    """A column or table name, quoted for SQL."""
    return '"' + name.replace('"', '""') + '"'


@contextmanager
def open_table(
    source: Path, *, columns: Sequence[str] | None = None, table: str | None = None, rows: str | None = None
) -> Iterator[OpenTable]:
    """Open a data file.

    Parameters
    ----------
    source
        CSV, TSV, Parquet, JSON lines, DuckDB, Stata, SPSS or SAS, by its ending.
    columns
        The columns that will be asked for; None for all. Only these are loaded from a statistical file.
    table
        The table of a DuckDB file.
    rows
        SQL condition on the file's own columns.

    Raises
    ------
    StudyError
        Status 3: there is no such file, it is empty, damaged or of a kind that is not read. Status 2: the table or
        the condition is wrong.
    """
    import duckdb  # the first screen paints without it

    check_file(source)
    try:
        with interruptible():
            connection = _connect(source)
            try:
                yield _opened(connection, source, columns, table, rows)
            finally:
                connection.close()
    except duckdb.Error as error:
        raise _explained(error, source) from None


@contextmanager
def interruptible() -> Iterator[None]:
    """Ctrl-C in the middle of a query is KeyboardInterrupt, as everywhere else; the database says RuntimeError."""
    import duckdb  # deferred as above

    try:
        yield
    except duckdb.InterruptException:
        raise KeyboardInterrupt from None
    except RuntimeError as error:
        if str(error) == "Query interrupted":
            raise KeyboardInterrupt from None
        raise


def _connect(source: Path) -> duckdb.DuckDBPyConnection:
    import duckdb  # deferred as above

    settings: dict[str, str | bool | int | float | list[str]] = {
        # No extension is ever fetched or loaded from disk, and nothing is spilled beside the data.
        "autoinstall_known_extensions": False,
        "autoload_known_extensions": False,
        "allow_community_extensions": False,
        "temp_directory": "",
    }
    connection = duckdb.connect(":memory:", config=settings)
    if source.suffix.lower() in DATABASE:
        connection.execute(f"ATTACH {_text(str(source.absolute()))} AS {identifier(_ATTACHED)} (READ_ONLY)")
    connection.execute("SET python_enable_replacements = false")
    if connection.execute("SELECT 1 FROM duckdb_optimizers() WHERE name = 'type_pushdown'").fetchall():
        # It reads a CSV column as the type that it is cast to: "yes" as a number, which fails, and 2 as " 2".
        connection.execute("SET disabled_optimizers = 'type_pushdown'")
    connection.execute("SET allowed_paths = ?", [sorted({_pattern(source), str(source.absolute())})])
    connection.execute("SET enable_external_access = false")
    connection.execute("SET lock_configuration = true")
    return connection


def _pattern(source: Path) -> str:
    """The path with the characters that would make it match other files taken literally."""
    return re.sub(r"([*?\[])", r"[\1]", str(source.absolute()))


def _text(value: str) -> str:
    return "'" + value.replace("'", "''") + "'"


def _opened(
    connection: duckdb.DuckDBPyConnection,
    source: Path,
    columns: Sequence[str] | None,
    table: str | None,
    rows: str | None,
) -> OpenTable:
    ending = source.suffix.lower()
    if table is not None and ending not in DATABASE:
        raise StudyError(
            f"data.table is {quoted(table)}, but {clean(source.name)} is not a DuckDB file.",
            "Take data.table out.",
            BAD_STUDY,
        )
    contents, names, path = None, None, _text(_pattern(source))
    if ending in STATISTICAL:
        contents = statistical_files.contents_of(source)
        names, relation = contents.names, identifier(_LOADED)
    elif ending in DELIMITED:
        separator, names = delimited.read_header(source)
        _refuse_duplicates(source, names)
        relation = _delimited_relation(connection, path, separator, names, source)
    elif ending in PARQUET:
        schema = connection.execute(f"SELECT name, num_children FROM parquet_schema({path})").fetchall()
        _refuse_duplicates(source, _top_level(schema))
        relation = f"read_parquet({path}, hive_partitioning = false, union_by_name = false)"
    elif ending in JSON_LINES:
        relation = f"read_json({path}, format = 'newline_delimited', hive_partitioning = false)"
    else:
        relation = _database_table(connection, source, table)
    if contents is None:
        types: Mapping[str, str] = _types_of(connection, relation)
        names = tuple(types)
    assert names is not None
    used = check_condition(connection, rows, names, source.name) if rows else frozenset()
    if contents is not None:
        wanted = [name for name in names if columns is None or name in columns or name in used]
        # With no column wanted one is read all the same: rows can't be counted without.
        statistical_files.load_columns(connection, source, wanted or names[:1], _LOADED)
        types = _types_of(connection, relation)
    elif ending in DELIMITED:
        wanted = [name for name in names if columns is None or name in columns or name in used]
        relation, types = _settled_types(connection, relation, types, wanted)
    opened = OpenTable(
        path=source,
        connection=connection,
        relation=relation,
        names=names,
        types=types,
        condition=rows or "",
        contents=contents,
    )
    if rows:
        _require_fit(opened)
    return opened


def _require_fit(opened: OpenTable) -> None:
    """Refuse a condition that doesn't fit the columns' types or whose answer is not true or false."""
    import duckdb  # deferred as above

    try:
        answer = opened.connection.execute(
            f"DESCRIBE SELECT ({opened.condition}\n) AS kept FROM {opened.relation}"
        ).fetchall()
    except duckdb.Error:
        raise _misfit() from None
    if answer[0][1] != "BOOLEAN":
        raise StudyError(
            "data.rows: the condition is not true or false for a row.",
            'Compare, such as "rooms > 0".',
            BAD_STUDY,
        )


def _misfit() -> StudyError:
    return StudyError(
        "data.rows: the condition does not fit the values of the columns that it compares.",
        "Compare numbers with numbers, and text with text in single quotes.",
        BAD_STUDY,
    )


def _top_level(schema: Sequence[tuple[str, int | None]]) -> tuple[str, ...]:
    """Names of the columns of a Parquet file from its depth-first list of nodes, the root first."""
    names: list[str] = []
    waiting = 0
    for name, children in schema[1:]:
        if waiting:
            waiting -= 1
        else:
            names.append(name)
        waiting += children or 0
    return tuple(names)


def _delimited_relation(
    connection: duckdb.DuckDBPyConnection, path: str, separator: str, names: Sequence[str], source: Path
) -> str:
    import duckdb  # deferred as above

    fixed = (
        f"delim = {_text(separator)}, quote = '\"', escape = '\"', comment = '', header = true, skip = 0, "
        f"names = [{', '.join(_text(name) for name in names)}], nullstr = [{', '.join(map(_text, _MISSING))}], "
        "strict_mode = true, null_padding = false, ignore_errors = false, hive_partitioning = false"
    )
    relation = f"read_csv({path}, {fixed})"
    try:
        connection.execute(f"DESCRIBE SELECT * FROM {relation}")
    except duckdb.Error:
        raise delimited.unreadable(source, separator, len(names)) from None
    return relation


def _settled_types(
    connection: duckdb.DuckDBPyConnection, relation: str, types: Mapping[str, str], columns: Sequence[str]
) -> tuple[str, Mapping[str, str]]:
    """A CSV file's relation and column types such that every value of the wanted columns fits.

    Types are first taken from the file's beginning; where a later value does not fit, again from all of its rows.
    """
    import duckdb  # deferred as above

    if not columns:
        return relation, types
    try:
        counted = ", ".join(f"count({identifier(name)})" for name in columns)
        connection.execute(f"SELECT {counted} FROM {relation}").fetchall()
    except duckdb.ConversionException:
        relation = f"{relation[:-1]}, sample_size = -1)"
        return relation, _types_of(connection, relation)
    return relation, types


def _types_of(connection: duckdb.DuckDBPyConnection, relation: str) -> dict[str, str]:
    described = connection.execute(f"DESCRIBE SELECT * FROM {relation}").fetchall()
    return {str(row[0]): str(row[1]) for row in described}


def _refuse_duplicates(source: Path, names: Sequence[str]) -> None:
    first: dict[str, int] = {}
    for place, name in enumerate(names, 1):
        earlier = first.setdefault(name.casefold(), place)
        if earlier != place:
            same = names[earlier - 1] == name
            raise StudyError(
                f"{clean(source.name)}: columns {earlier} and {place} are both named {quoted(name)}."
                if same
                else f"{clean(source.name)}: the names of columns {earlier} and {place} differ by case only, "
                f"{quoted(names[earlier - 1])} and {quoted(name)}.",
                "Give every column its own name.",
                BAD_DATA,
            )


def _database_table(connection: duckdb.DuckDBPyConnection, source: Path, table: str | None) -> str:
    found = connection.execute(
        "SELECT table_schema, table_name FROM information_schema.tables "
        "WHERE table_catalog = ? ORDER BY 1, 2",
        [_ATTACHED],
    ).fetchall()
    names = [name if schema == "main" else f"{schema}.{name}" for schema, name in found]
    if table is None and len(names) == 1:
        table = names[0]
    if table not in names:
        near = nearest(table, names) if table else None
        listed = ", ".join(quoted(name) for name in names[:10]) + (", ..." if len(names) > 10 else "")
        raise StudyError(
            f"{clean(source.name)}: has no table {quoted(table)}."
            if table
            else f"{clean(source.name)}: holds {len(names)} tables, and data.table does not say which.",
            f"Did you mean {quoted(near)}?" if near else f"Its tables are {listed or 'none'}.",
            BAD_STUDY if names else BAD_DATA,
        )
    schema, name = found[names.index(table)]
    return f"{identifier(_ATTACHED)}.{identifier(schema)}.{identifier(name)}"


def _explained(error: duckdb.Error, source: Path) -> StudyError:
    """The database's complaint in a sentence of ours: its own text may quote values from the data."""
    import duckdb  # deferred as above

    shown, message = clean(source.name), str(error)
    if isinstance(error, duckdb.OutOfMemoryException):
        return StudyError(f"{shown}: does not fit in memory.", "Read fewer rows with data.rows.", BAD_DATA)
    if "not utf-8" in message or "Invalid unicode" in message:
        return delimited.not_utf8(source) or StudyError(
            f"{shown}: is not valid UTF-8.", "Save the file as UTF-8 text.", BAD_DATA
        )
    line = re.search(r"CSV Error on Line: (\d+)", message)
    if line:
        return StudyError(
            f"{shown}: line {line.group(1)} does not have the values that the header promises.",
            "Correct that line, or the quotes in or before it.",
            BAD_DATA,
        )
    if source.suffix.lower() in JSON_LINES:
        return _bad_json(source)
    if isinstance(error, duckdb.ConversionException | duckdb.OutOfRangeException):
        return _misfit()
    ending = source.suffix.lower()
    return StudyError(
        f"{shown}: is damaged, or not a {ending} file.",
        "Export it again from the program that made it.",
        BAD_DATA,
    )


def _bad_json(source: Path) -> StudyError:
    where = "can't be read as JSON lines"
    with source.open("rb") as stream:
        for number, line in enumerate(stream, 1):
            if line.strip() and not _is_object(line):
                where = f"line {number} is not one JSON object"
                break
    return StudyError(f"{clean(source.name)}: {where}.", "Write one JSON object a line, in UTF-8.", BAD_DATA)


def _is_object(line: bytes) -> bool:
    try:
        return isinstance(json.loads(line), dict)
    except ValueError:
        return False
