from __future__ import annotations

import json
import math
import os
import threading
from pathlib import Path

import duckdb
import numpy as np
import pandas as pd
import pyreadstat
import pytest

from study.errors import StudyError
from study.table_source import interruptible
from study.tables import count_rows, describe_columns, natural_key, open_table, parts_of, read_table

CSV = "pier,darkness,takings,open,since\nNorth,1.5,10,true,2020-01-31\nSouth,2,NA,false,\n,.,12,,2021-02-01\n"


def write(path: Path, content: str | bytes) -> Path:
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def refusal(source: Path, *columns: str, **options: str) -> StudyError:
    with pytest.raises(StudyError) as caught:
        read_table(source, columns or ("a",), **options)
    return caught.value


def same(found: np.ndarray, expected: list[object]) -> None:
    if found.dtype == object:
        assert found.tolist() == expected
    else:
        np.testing.assert_array_equal(found, np.array(expected, dtype=float))


@pytest.fixture
def every_format(tmp_path: Path) -> dict[str, Path]:
    """The same rows in every kind of file, written by other programs than ours where there is one."""
    frame = pd.DataFrame(
        {
            "pier": ["North", "South", None],
            "darkness": [1.5, 2.0, np.nan],
            "takings": [10.0, np.nan, 12.0],
        }
    )
    paths = {
        kind: tmp_path / f"stalls.{kind}"
        for kind in ("csv", "tsv", "parquet", "jsonl", "dta", "sav", "duckdb")
    }
    frame.to_csv(paths["csv"], index=False)
    frame.to_csv(paths["tsv"], index=False, sep="\t")
    frame.to_parquet(paths["parquet"])
    frame.to_json(paths["jsonl"], orient="records", lines=True)
    frame.fillna({"pier": ""}).to_stata(paths["dta"], write_index=False)
    pyreadstat.write_sav(frame, str(paths["sav"]))
    with duckdb.connect(str(paths["duckdb"])) as database:
        database.execute(
            "CREATE TABLE stalls AS FROM (VALUES ('North', 1.5, 10), ('South', 2.0, NULL), (NULL, NULL, 12)) "
            "AS rows(pier, darkness, takings)"
        )
    return paths


def test_the_same_rows_come_out_of_every_format(every_format: dict[str, Path]) -> None:
    for path in every_format.values():
        table = read_table(path, ["takings", "pier", "darkness"])
        assert table.rows == 3
        assert list(table.columns) == ["takings", "pier", "darkness"]
        same(table.columns["darkness"], [1.5, 2.0, math.nan])
        same(table.columns["takings"], [10, math.nan, 12])
        same(table.columns["pier"], ["North", "South", None])
        assert table.row.tolist() == [0, 1, 2]

        some = read_table(path, ["pier"], rows="takings > 10 -- the better ones")
        same(some.columns["pier"], [None])
        assert some.row.tolist() == [2]
        assert count_rows(path) == 3
        assert count_rows(path, "darkness < 2") == 1
        assert [c.name for c in describe_columns(path).columns] == ["pier", "darkness", "takings"]


def test_kinds_missing_values_and_yes_or_no(tmp_path: Path) -> None:
    table = read_table(write(tmp_path / "a.csv", CSV), ["pier", "darkness", "takings", "open", "since"])
    assert table.kinds == {
        "pier": "text", "darkness": "number", "takings": "whole number", "open": "yes/no", "since": "date",
    }  # fmt: skip
    same(table.columns["darkness"], [1.5, 2.0, math.nan])
    same(table.columns["takings"], [10, math.nan, 12])
    same(table.columns["open"], [1.0, 0.0, math.nan])
    same(table.columns["since"], ["2020-01-31", None, "2021-02-01"])
    words = read_table(write(tmp_path / "b.csv", "a,b\nyes,x\nno,y\n"), ["a"])
    assert words.kinds["a"] == "yes/no"
    same(words.columns["a"], [1.0, 0.0])


def test_only_the_named_columns_of_a_parquet_file_are_read(tmp_path: Path) -> None:
    path = tmp_path / "a.parquet"
    pd.DataFrame({"a": np.arange(9.0), "b": np.arange(9.0), "secret": ["canary"] * 9}).to_parquet(path)
    with open_table(path, rows="b > 3") as opened:
        place = opened.numbered("place")
        plan = opened.connection.execute(f'EXPLAIN SELECT "a", place FROM {place}').fetchall()[0][1]
        parts = parts_of(opened, numbers={"a": ""}, labels=[])
    assert "READ_PARQUET" in plan
    assert "secret" not in plan
    assert parts.numbers["a"].tolist() == [4.0, 5.0, 6.0, 7.0, 8.0]
    # The canary's own bytes are destroyed: whoever read that column would stumble.
    broken = path.read_bytes()
    start = broken.index(b"canary") - 12
    path.write_bytes(broken[:start] + b"\xff" * 24 + broken[start + 24 :])
    assert read_table(path, ["a"]).rows == 9
    with pytest.raises(StudyError):
        read_table(path, ["secret"])


def test_only_the_named_columns_of_a_stata_file_are_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.dta"
    pd.DataFrame({"a": [1.0], "b": [2.0], "secret": ["canary"]}).to_stata(path, write_index=False)
    asked: list[object] = []
    real = pyreadstat.read_dta

    def spy(name: str, **options: object) -> object:
        asked.append(options.get("usecols", "none" if options.get("metadataonly") else "all"))
        return real(name, **options)

    monkeypatch.setattr(pyreadstat, "read_dta", spy)
    assert read_table(path, ["a"], rows="b = 2").columns["a"].tolist() == [1.0]
    assert asked == ["none", ["a", "b"]]


def test_statistical_files_keep_labels_and_lose_user_missing_values(tmp_path: Path) -> None:
    path = tmp_path / "a.sav"
    frame = pd.DataFrame(
        {"pier": [1.0, 2.0, 9.0], "when": pd.to_datetime(["2020-01-01", None, "2020-01-03"])}
    )
    pyreadstat.write_sav(
        frame,
        str(path),
        variable_value_labels={"pier": {1: "North", 2: "South"}},
        column_labels={"pier": "Which pier"},
        missing_ranges={"pier": [9]},
    )
    info = describe_columns(path).columns
    assert info[0].labels == {"1": "North", "2": "South"}
    assert info[0].label == "Which pier"
    assert (info[0].missing, info[0].distinct, info[0].low, info[0].high) == (1, 2, 1.0, 2.0)
    assert info[1].kind == "date"
    assert read_table(path, ["when"]).columns["when"].tolist() == [
        "2020-01-01 00:00:00",
        None,
        "2020-01-03 00:00:00",
    ]


def test_a_four_byte_number_is_the_number_that_was_typed(tmp_path: Path) -> None:
    frame = pd.DataFrame({"score": np.array([52.3, 0.1, np.nan], dtype=np.float32)})
    frame.to_stata(tmp_path / "a.dta", write_index=False)
    frame.to_parquet(tmp_path / "a.parquet")
    for name in ("a.dta", "a.parquet"):
        same(read_table(tmp_path / name, ["score"]).columns["score"], [52.3, 0.1, math.nan])


def test_names_are_labels_in_natural_order(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", "site,year,code\nsite 10,2019,007\nsite 2,2019.0,07\n,2018,7\n")
    with open_table(path) as opened:
        parts = parts_of(opened, numbers={}, labels=["site", "year", "code"])
    assert parts.labels["site"].levels == ("site 2", "site 10")
    assert parts.labels["site"].codes.tolist() == [1, 0, -1]
    assert parts.labels["year"].levels == ("2018", "2019")
    assert parts.labels["year"].codes.tolist() == [1, 1, 0]
    assert parts.labels["code"].texts().tolist() == ["007", "07", "7"]
    assert sorted(["b10", "b9", "a", "10", "9"], key=natural_key) == ["9", "10", "a", "b9", "b10"]


def test_names_that_are_hard_to_quote(tmp_path: Path) -> None:
    hard = ['a "b"', "c'd", "e,f", "g]h", "select", "é\u200b", "1; drop table x", "line\nbreak", "%s {0}"]
    path = tmp_path / "it's [x] *a?.csv"
    pd.DataFrame([[float(i) for i in range(len(hard))]], columns=hard).to_csv(path, index=False)
    (tmp_path / "it's x za!.csv").write_text(
        "wrong\n1\n", encoding="utf-8"
    )  # what the name would match as a pattern
    table = read_table(path, hard)
    assert [table.columns[name][0] for name in hard] == list(range(len(hard)))
    pd.DataFrame({name: ["x"] for name in hard}).to_parquet(tmp_path / "a.parquet")
    assert read_table(tmp_path / "a.parquet", hard).columns[hard[0]].tolist() == ["x"]


def test_a_late_value_of_another_kind_changes_the_column_and_not_the_answer(tmp_path: Path) -> None:
    lines = ["a,b,c"] + ["1,2,3"] * 30_000 + ["1.5,x,3"]
    path = write(tmp_path / "a.csv", "\n".join(lines) + "\n")
    table = read_table(path, ["a", "b"])
    assert table.columns["a"][-1] == 1.5
    assert table.columns["b"][-1] == "x"
    assert read_table(path, ["c"]).kinds["c"] == "whole number"


def test_a_column_in_one_pass(tmp_path: Path) -> None:
    path = tmp_path / "a.parquet"
    values = np.concatenate([np.arange(160.0), [np.nan, np.inf]])
    pd.DataFrame({"x": values, "same": 3, "t": ["p", "q"] * 81}).to_parquet(path)
    x, constant, text = describe_columns(path).columns
    assert (x.missing, x.distinct, x.low, x.high) == (1, 161, 0.0, math.inf)
    assert x.histogram == tuple(np.histogram(np.arange(160.0), bins=16)[0])
    assert (constant.kind, constant.low, constant.high, constant.histogram[0]) == (
        "whole number",
        3.0,
        3.0,
        162,
    )
    assert (text.kind, text.distinct, text.low, text.histogram) == ("text", 2, None, ())
    assert not x.distinct_is_estimate


def test_different_values_of_a_large_file_are_estimated_and_it_says_so(tmp_path: Path) -> None:
    path = tmp_path / "a.parquet"
    pd.DataFrame({"x": np.arange(1_000_001) % 50_000}).to_parquet(path)
    (x,) = describe_columns(path).columns
    assert x.distinct_is_estimate
    assert x.distinct == pytest.approx(50_000, rel=0.1)


BAD_FILES = [
    ("a.csv", b"", "a.csv: the file is empty.", "Name a file with a header and rows."),
    ("a.csv", b"a,b\n1,x\n2,\xff\n", "a.csv: line 3 holds a byte that is not UTF-8 (0xFF).", "Save the file as UTF-8 text."),
    ("a.csv", b"\xe9t\xe9\n1\n", "a.csv: line 1 holds a byte that is not UTF-8 (0xE9).", "Save the file as UTF-8 text."),
    ("a.csv", "a\n1\n".encode("utf-16"), "a.csv: is UTF-16, not UTF-8.", "Save the file as UTF-8 text."),
    ("a.csv", b"a,b,a\n1,2,3\n", 'a.csv: columns 1 and 3 are both named "a".', "Give every column its own name."),
    (
        "a.csv",
        b"a,Pay,pay\n1,2,3\n",
        'a.csv: the names of columns 2 and 3 differ by case only, "Pay" and "pay".',
        "Give every column its own name.",
    ),
    ("a.csv", b"a,b\n1,2\n3,4,5\n", "a.csv: line 3 has 3 values, but the header has 2.",
     "Correct that line, or the quotes in or before it."),
    ("a.csv", b"a,b\n1,2\n3\n", "a.csv: line 3 has 1 value, but the header has 2.",
     "Correct that line, or the quotes in or before it."),
    (
        "a.csv",
        b"a,b\n" + b"1,2\n" * 60_000 + b"1,2,3\n",
        "a.csv: line 60002 does not have the values that the header promises.",
        "Correct that line, or the quotes in or before it.",
    ),
    ("a.csv", b'a,b\n1,"x\n2,y\n', "a.csv: can't be read as a table.", "Check its separators, quotes and encoding."),
    ("a.parquet", b"PAR1 no more", "a.parquet: is damaged, or not a .parquet file.",
     "Export it again from the program that made it."),
    ("a.dta", b"no stata", "a.dta: is damaged, or not a .dta file.", "Export it again from the program that made it."),
    ("a.sav", b"no spss", "a.sav: is damaged, or not a .sav file.", "Export it again from the program that made it."),
    ("a.duckdb", b"no database", "a.duckdb: is damaged, or not a .duckdb file.",
     "Export it again from the program that made it."),
    ("a.jsonl", b'{"a": 1}\n{"a": ]\n', "a.jsonl: line 2 is not one JSON object.", "Write one JSON object a line, in UTF-8."),
    (
        "a.png", b"x", 'a.png: files ending in ".png" are not read by Cutbank.',
        "Use one of .csv, .tsv, .tab, .txt, .parquet, .pq, .jsonl, .ndjson, .duckdb, .db, .ddb, .dta, .sav, .zsav, .sas7bdat.",
    ),
    (
        "a.xlsx", b"x", 'a.xlsx: files ending in ".xlsx" are not read in this version.',
        "Use one of .csv, .tsv, .tab, .txt, .parquet, .pq, .jsonl, .ndjson, .duckdb, .db, .ddb, .dta, .sav, .zsav, .sas7bdat.",
    ),
]  # fmt: skip


@pytest.mark.parametrize(("name", "content", "what", "do"), BAD_FILES, ids=[b[2][:50] for b in BAD_FILES])
def test_a_bad_file_is_refused_in_two_lines(
    tmp_path: Path, name: str, content: bytes, what: str, do: str
) -> None:
    error = refusal(write(tmp_path / name, content))
    assert (error.what, error.do, error.status) == (what, do, 3)


def test_what_is_no_local_file(tmp_path: Path) -> None:
    write(tmp_path / "stalls.csv", CSV)
    error = refusal(tmp_path / "stals.csv")
    assert (error.what, error.do) == (
        f"{tmp_path}/stals.csv: there is no such data file.",
        'Did you mean "stalls.csv"?',
    )
    (tmp_path / "d.csv").mkdir()
    assert refusal(tmp_path / "d.csv").what == "d.csv: is a folder, not a data file."
    os.mkfifo(tmp_path / "p.csv")
    assert refusal(tmp_path / "p.csv").what == "p.csv: is not a regular file."
    error = refusal(Path("https://example.org/a.csv"))
    assert error.what.endswith("example.org/a.csv: is an address, not a file on this machine.")
    assert refusal(tmp_path / ("x" * 300 + ".csv")).what.endswith("can't be read (file name too long).")


def test_a_truncated_parquet_file(tmp_path: Path) -> None:
    path = tmp_path / "a.parquet"
    pd.DataFrame({"a": np.arange(1000.0)}).to_parquet(path)
    path.write_bytes(path.read_bytes()[:-100])
    assert refusal(path).what == "a.parquet: is damaged, or not a .parquet file."


def test_an_absent_column_and_the_nearest_name(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", CSV)
    error = refusal(path, "Darkness")
    assert (error.what, error.do, error.status) == (
        'a.csv has no column "Darkness".',
        'Did you mean "darkness"?',
        2,
    )
    error = refusal(path, "zzz")
    assert (error.what, error.do) == (
        'a.csv has no column "zzz".',
        "See its columns with: cutbank columns a.csv",
    )


@pytest.mark.parametrize(
    ("values", "how"),
    [
        (("1.5", "2,5"), "row 2 is the first with a number with a decimal comma or a thousands comma"),
        (("1.5", "1,234"), "row 2 is the first with a number with a decimal comma or a thousands comma"),
        (("1.5", "1 234 567"), "row 2 is the first with a number with thousands separators"),
        (("private", "2"), "row 1 is the first with text"),
    ],
)
def test_text_where_numbers_should_be_names_the_row_and_not_the_value(
    tmp_path: Path, values: tuple[str, ...], how: str
) -> None:
    path = write(tmp_path / "a.csv", "id;a\n" + "".join(f"{i};{v}\n" for i, v in enumerate(values)))
    with open_table(path) as opened, pytest.raises(StudyError) as caught:
        parts_of(opened, numbers={"a": "score"}, labels=[])
    assert caught.value.what == f'a.csv: column "a", the score, holds text, not numbers: {how}.'
    assert caught.value.status == 3
    assert values[1] not in str(caught.value)
    assert "private" not in str(caught.value)


def test_an_infinite_value(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", "a,b\n1.5,1\ninf,2\n-inf,3\n")
    error = refusal(path)
    assert error.what == 'a.csv: column "a" holds an infinite value, first in row 2.'
    assert error.do == "Correct it, make it missing, or leave it out with data.rows."
    assert error.status == 3
    assert refusal(path, rows="b <> 2").what == 'a.csv: column "a" holds an infinite value, first in row 3.'
    same(read_table(path, ["a"], rows="isfinite(a)").columns["a"], [1.5])


def test_the_tables_of_a_database(tmp_path: Path) -> None:
    path = tmp_path / "a.duckdb"
    with duckdb.connect(str(path)) as database:
        database.execute("CREATE TABLE stalls AS SELECT 1 AS a; CREATE TABLE piers AS SELECT 2 AS a")
        database.execute("CREATE SCHEMA old; CREATE TABLE old.stalls AS SELECT 3 AS a")
    before = path.read_bytes()
    assert read_table(path, ["a"], table="piers").columns["a"].tolist() == [2]
    assert read_table(path, ["a"], table="old.stalls").columns["a"].tolist() == [3]
    error = refusal(path)
    assert error.what == "a.duckdb: holds 3 tables, and data.table does not say which."
    assert error.do == 'Its tables are "piers", "stalls", "old.stalls".'
    error = refusal(path, table="stals")
    assert (error.what, error.do) == ('a.duckdb: has no table "stals".', 'Did you mean "stalls"?')
    assert path.read_bytes() == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.duckdb"]
    csv = write(tmp_path / "a.csv", CSV)
    assert refusal(csv, table="t").what == 'data.table is "t", but a.csv is not a DuckDB file.'


CONDITIONS = [
    ("takings >", "the condition is not a valid SQL condition."),
    ("true; DROP TABLE x", "the condition is not a valid SQL condition."),
    ("true) UNION ALL SELECT 1 WHERE (true", "the condition is more than one condition."),
    ("true) GROUP BY (1", "the condition is more than one condition."),
    ("takings IN (SELECT 1)", "the condition holds a query inside it."),
    ("EXISTS (FROM read_text('FILE'))", "the condition holds a query inside it."),
    ("(FROM read_csv('FILE') SELECT count(*)) > 0", "the condition holds a query inside it."),
    ("row_number() OVER () > 1", "the condition looks beyond the row itself."),
    ("COLUMNS(*) IS NOT NULL", "the condition looks beyond the row itself."),
    ("takings > ?", "the condition looks beyond the row itself."),
    ("takings > random()", 'the condition calls "random", which is not a plain function of a row\'s values.'),
    ("now() > DATE '2020-01-01'", 'the condition calls "now", which is not a plain function of a row\'s values.'),
    ("current_setting('threads') > 0",
     'the condition calls "current_setting", which is not a plain function of a row\'s values.'),
    ("read_text('FILE') IS NULL", 'the condition calls "read_text", which is not a plain function of a row\'s values.'),
    ("takngs > 1", 'a.csv has no column "takngs".'),
    ("takings > 'many'", "the condition does not fit the values of the columns that it compares."),
    ("takings + 1", "the condition is not true or false for a row."),
]  # fmt: skip


@pytest.mark.parametrize(("condition", "what"), CONDITIONS)
def test_a_condition_can_only_look_at_its_row(tmp_path: Path, condition: str, what: str) -> None:
    path = write(tmp_path / "a.csv", CSV)
    other = write(tmp_path / "other.csv", "z\n1\n")
    error = refusal(path, "takings", rows=condition.replace("FILE", str(other)))
    assert error.what == f"data.rows: {what}"
    assert error.status == 2


@pytest.mark.parametrize(
    ("condition", "count"),
    [
        ("takings >= 10", 2),
        ("pier = 'North' OR (darkness BETWEEN 1 AND 2 AND NOT open)", 2),
        ("lower(pier) LIKE 's%' -- the southern one", 1),
        ("CAST(takings AS DOUBLE) / 2 > 5 and since is not null", 1),
        ("CASE WHEN open THEN darkness > 1 ELSE false END", 1),
        ('"pier" IN (\'North\', \'South\')', 2),
        ("/* all */ true", 3),
    ],
)  # fmt: skip
def test_plain_conditions_work(tmp_path: Path, condition: str, count: int) -> None:
    assert count_rows(write(tmp_path / "a.csv", CSV), condition) == count


def test_the_connection_reaches_one_file_and_no_network(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", CSV)
    other = write(tmp_path / "other.csv", "z\n1\n")
    with open_table(path) as opened:
        for statement in (
            f"FROM read_csv('{other}')",
            f"FROM read_text('{other}')",
            f"FROM '{other}'",
            f"COPY (SELECT 1) TO '{tmp_path}/new.csv'",
            f"ATTACH '{tmp_path}/new.db'",
            "FROM 'https://example.org/a.csv'",
            "INSTALL httpfs",
            "LOAD httpfs",
            "SET enable_external_access = true",
            "SET allowed_paths = []",
        ):
            with pytest.raises(duckdb.Error):
                opened.connection.execute(statement)
    assert sorted(entry.name for entry in tmp_path.iterdir()) == ["a.csv", "other.csv"]


def test_json_lines_are_typed(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    path.write_text(
        "\n".join(json.dumps(row) for row in ({"a": 1, "b": True}, {"a": 2.5}, {"b": False})),
        encoding="utf-8",
    )
    table = read_table(path, ["a", "b"])
    same(table.columns["a"], [1.0, 2.5, math.nan])
    same(table.columns["b"], [1.0, math.nan, 0.0])


def test_an_interrupted_query_is_an_interrupt_and_no_damaged_file(tmp_path: Path) -> None:
    # The database's own interrupt, asked for again until it is heard: one that comes before the query has begun is lost.
    path = write(tmp_path / "a.csv", CSV)
    done = threading.Event()
    with open_table(path) as opened:

        def ask() -> None:
            while not done.wait(0.1):
                opened.connection.interrupt()

        asking = threading.Thread(target=ask)
        asking.start()
        try:
            with pytest.raises(KeyboardInterrupt), interruptible():
                opened.connection.execute(
                    "SELECT count(*) FROM range(1000000000000) AS t(i) WHERE i % 7 = 3"
                ).fetchall()
        finally:
            done.set()
            asking.join()


def test_a_column_without_any_value_is_a_column_of_missing_numbers(tmp_path: Path) -> None:
    path = write(tmp_path / "a.csv", "a,b\n,1\nNA,2\n")
    with open_table(path) as opened:
        parts = parts_of(opened, numbers={"a": "score"}, labels=["a"])
    assert np.isnan(parts.numbers["a"]).all()
    assert (parts.labels["a"].levels, parts.labels["a"].codes.tolist()) == ((), [-1, -1])
