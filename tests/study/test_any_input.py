"""Whatever text stands in a study file, a condition or a data file: an answer or a StudyError, and no third thing."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from pathlib import Path

from hypothesis import given
from hypothesis import strategies as st

from study.document import edit, load_study, parse_study, save_study
from study.errors import StudyError
from study.literal import clean
from study.options import OPTIONS, Option
from study.tables import count_rows, describe_columns

names = st.text(min_size=1, max_size=12).filter(lambda text: bool(text.strip()) and "\0" not in text)
# A study file is UTF-8, which has no lone surrogates.
names = names.filter(lambda text: not any(0xD800 <= ord(c) <= 0xDFFF for c in text))
positive = st.floats(min_value=1e-300, max_value=1e300, allow_subnormal=False)
finite = st.floats(allow_nan=False, allow_infinity=False)
pieces = st.sampled_from(
    ["[study]", "[assignment.sites]", "[estimate]", "order", "kernel", "= ", "1", '"mse"', "\n", "[", "]", "{", "}",
     ".", ",", "#", "'", '"""', "inf", "nan", "true", "2020-01-01", "\x1b", "é", "title"]
)  # fmt: skip
parts_of_conditions = st.sampled_from(
    ["a", "b", "1", ">", "=", "AND", "NOT", "(", ")", "--", "/*", "*/", ";", "'", '"', "SELECT", "FROM", "IN", "NULL",
     "random", "::INT", "*", ",", "?", "$1", "->", "[", "]", "{", "}", ":", "LIKE", "IS", "CASE", "\n", "\\", "%"]
)  # fmt: skip


@st.composite
def good_values(draw: st.DrawFn) -> dict[str, object]:
    """Some keys with allowed values that don't contradict each other."""
    chosen = draw(
        st.lists(st.sampled_from([o for o in OPTIONS if o.section != "assignment.frontier"]), max_size=8)
    )
    values = {option.name: draw(value_of(option)) for option in chosen}
    for name in ("assignment.treated", "estimate.variance", "estimate.order"):
        values.pop(name, None)  # the keys that others can contradict
    return values


def value_of(option: Option) -> st.SearchStrategy[object]:
    number = positive if option.least is not None else finite
    return {
        "text": names,
        "yes/no": st.booleans(),
        "whole number": st.integers(0, 3),
        "number": st.just(0.5) if option.most is not None else number,
        "word": st.sampled_from(option.allowed or ("",)),
        "word or number": st.sampled_from(option.allowed or ("",)) | number,
        "word, number or pair": st.sampled_from(option.allowed or ("",)) | number | st.tuples(number, number),
        "text list": st.lists(names, unique=True, max_size=4).map(tuple),
        "number list": st.lists(finite, unique=True, max_size=4).map(lambda found: tuple(sorted(found))),
        "number table": st.dictionaries(names, number, max_size=4),
        "whole number or text": st.integers(1, 99) | names,
        "word or file": st.sampled_from((*option.allowed, "ours.toml")),
    }[option.kind]


def refusal_of(attempt: Callable[[], object]) -> StudyError | None:
    """The refusal of an attempt, which must be two harmless lines; None when it went through."""
    try:
        attempt()
    except StudyError as error:
        refusal = error
    else:
        return None
    lines = str(refusal).split("\n")
    assert len(lines) == 2
    assert lines == [clean(line) for line in lines]
    return refusal


@given(st.lists(pieces | st.text(max_size=5), max_size=25).map("".join))
def test_any_text_is_a_study_or_a_sentence(text: str) -> None:
    refusal = refusal_of(lambda: parse_study(text, Path("study.toml")))
    assert refusal is None or refusal.status == 2


@given(good_values(), good_values())
def test_what_is_saved_is_what_is_read(first: dict[str, object], second: dict[str, object]) -> None:
    with tempfile.TemporaryDirectory() as folder:
        study = edit(parse_study("", Path(folder) / "study.toml"), first)
        save_study(study)
        loaded = load_study(study.path)
        assert loaded == study
        changed = edit(loaded, second)
        save_study(changed)
        assert load_study(study.path) == changed


@given(st.lists(parts_of_conditions, min_size=1, max_size=9).map(" ".join))
def test_any_condition_is_an_answer_or_a_sentence(condition: str) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "a.csv"
        path.write_text("a,b\n1,x\n2,y\n", encoding="utf-8")
        refusal = refusal_of(lambda: count_rows(path, condition))
        assert refusal is None or (refusal.status, refusal.what[:11]) == (2, "data.rows: ")


some_bytes = st.sampled_from(
    [b"a", b"1", b",", b"\n", b'"', b"\r", b"\xff", b"\x00", b"inf", b"#", b" ", b"\xc3\xa9"]
)


@given(st.lists(some_bytes, max_size=30).map(b"".join))
def test_any_bytes_are_a_table_or_a_sentence(content: bytes) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "a.csv"
        path.write_bytes(content)
        refusal = refusal_of(lambda: describe_columns(path))
        if refusal is not None:
            assert refusal.status == 3
            return
        found = describe_columns(path)
        for column in found.columns:
            assert 0 <= column.missing <= found.rows
            if column.kind == "whole number" and column.histogram:
                assert sum(column.histogram) == found.rows - column.missing
