from __future__ import annotations

import csv
import json
import os
import subprocess
import sys
import time
from pathlib import Path

import duckdb
import numpy as np
import pytest

from study.faults import fault_text, record_fault
from study.literal import clean

ROOT = Path(__file__).resolve().parents[2]
STUDY = """\
[study]
title = "Lantern oil"
masked = false
[data]
path = "stalls.csv"
[columns]
outcomes = ["takings"]
score = "darkness"
[assignment]
cutoff = 50.0
[estimate]
bandwidth = 20.0
"""


def cutbank(*arguments: str, cwd: Path | None = None, **environment: str) -> subprocess.CompletedProcess[str]:
    kept = {**os.environ, "PYTHONPATH": str(ROOT), **environment}
    return subprocess.run(
        [sys.executable, "-m", "study.cli", *arguments],
        cwd=cwd, env=kept, capture_output=True, text=True, encoding="utf-8", stdin=subprocess.DEVNULL, timeout=60, check=False,
    )  # fmt: skip


@pytest.fixture
def study(tmp_path: Path) -> Path:
    rng = np.random.default_rng(5)
    score = rng.uniform(0, 100, 600).round(2)
    takings = 3.0 + 0.02 * score + 1.5 * (score >= 50) + rng.normal(0, 0.5, 600)
    rows = "".join(f"{s},{y:.4f},{i % 2}\n" for i, (s, y) in enumerate(zip(score, takings)))
    (tmp_path / "stalls.csv").write_text(f"darkness,takings,lamp\n{rows},1.0,0\n", encoding="utf-8")
    (tmp_path / "study.toml").write_text(STUDY, encoding="utf-8")
    return tmp_path / "study.toml"


def two_lines(done: subprocess.CompletedProcess[str], status: int, what: str, do: str) -> None:
    assert (done.returncode, done.stdout) == (status, "")
    assert done.stderr == f"{what}\n{do}\n"


def test_help_and_version_are_quick_and_load_nothing_heavy() -> None:
    code = (
        "import sys; from study.cli import main; status = main(['--help']); "
        "heavy = {'numpy', 'duckdb', 'tomlkit', 'textual', 'scipy', 'pyreadstat', 'tui'} & set(sys.modules); "
        "sys.exit(f'{status} {heavy}' if status or heavy else 0)"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.startswith("Cutbank: what did a programme change that was handed out by a line?\n")

    def best(*command: str) -> float:
        times = []
        for _ in range(3):
            start = time.perf_counter()
            subprocess.run([sys.executable, *command], cwd=ROOT, capture_output=True, check=True)
            times.append(time.perf_counter() - start)
        return min(times)

    assert best("-m", "study.cli", "--help") - best("-c", "pass") < 0.3
    assert cutbank("--version").stdout.startswith("cutbank ")


@pytest.mark.parametrize(
    ("arguments", "what", "do"),
    [
        (["run"], "cutbank: the following arguments are required: STUDY.",
         "Usage: cutbank run STUDY [--out FOLDER] [--json] [--ascii]"),
        (["run", "a", "b"], "cutbank: unrecognized arguments: b.",
         "Usage: cutbank run STUDY [--out FOLDER] [--json] [--ascii]"),
        (["verify", "--fast", "a"], "cutbank: unrecognized arguments: --fast.", "Usage: cutbank verify STUDY"),
        (["assign", "a"], "cutbank: the following arguments are required: --to.",
         "Usage: cutbank assign STUDY --to FILE"),
        (["verfy"], 'There is no command, study or data file named "verfy".', "Did you mean: cutbank verify?"),
        (["a\x1b[2J.toml"], 'There is no command, study or data file named "a\ufffd[2J.toml".',
         "See what there is with: cutbank --help"),
        ([], "The bench needs a terminal for its input and its output.",
         "Without one use: cutbank run STUDY"),
        (["demo", "hull"], 'There is no demo named "hull".', 'Did you mean "hulls"?'),
        (["demo", "zzz"], 'There is no demo named "zzz".', "The demos are hulls, valleys, wells."),
        (["run", "nowhere.toml"], "nowhere.toml: there is no such study file.",
         "Check the name, or start one with cutbank and a data file."),
    ],
)  # fmt: skip
def test_bad_usage_is_two_lines_and_status_2(
    arguments: list[str], what: str, do: str, tmp_path: Path
) -> None:
    two_lines(cutbank(*arguments, cwd=tmp_path), 2, what, do)


def test_data_that_can_not_be_read_is_status_3(study: Path) -> None:
    (study.parent / "stalls.csv").unlink()
    for command in (["run", "--json"], ["verify"], ["run"]):
        done = cutbank(command[0], str(study), *command[1:])
        two_lines(
            done, 3, f"{study.parent}/stalls.csv: there is no such data file.",
            "Check the name; paths in a study are relative to its file.",
        )  # fmt: skip
    done = cutbank("columns", "nothing.csv", cwd=study.parent)
    assert (done.returncode, done.stdout) == (3, "")


def test_a_study_that_can_not_be_estimated_is_status_1(study: Path) -> None:
    study.write_text(STUDY.replace("bandwidth = 20.0", "bandwidth = 0.000001"), encoding="utf-8")
    done = cutbank("run", str(study), "--json")
    assert (done.returncode, done.stdout) == (1, "")
    assert len(done.stderr.splitlines()) == 2
    assert "Traceback" not in done.stderr


def test_a_run_prints_one_document_and_writes_the_same(study: Path) -> None:
    done = cutbank("run", str(study), "--json", "--out", str(study.parent / "out" / "first"))
    assert (done.returncode, done.stderr) == (0, "")
    document = json.loads(done.stdout)
    assert (document["format"], document["version"]) == ("cutbank-result", 1)
    assert document["data"]["rows_read"] == 601
    assert document["data"]["dropped"] == {"missing score": 1}
    (effect,) = document["effects"]
    assert effect["robust"]["low"] < 1.5 < effect["robust"]["high"]
    out = study.parent / "out" / "first"
    assert (out / "result.json").read_text(encoding="utf-8") == done.stdout
    assert (out / "result.txt").read_text(encoding="utf-8") == cutbank("run", str(study)).stdout
    assert sorted(entry.name for entry in out.iterdir()) == ["result.json", "result.txt"]
    assert (out / "result.json").stat().st_mode & 0o777 == 0o600
    again = cutbank("run", str(study), "--json")
    assert again.stdout == done.stdout

    done = cutbank("run", str(study), "--json", "--out", str(study / "inside a file"))
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.startswith(f"{study}/inside a file: the folder can't be made (")


def test_without_a_language_and_without_a_clever_terminal(study: Path) -> None:
    plain = cutbank("run", str(study), LC_ALL="C", LANG="C", TERM="dumb", PYTHONIOENCODING="ascii:strict")
    assert (plain.returncode, plain.stderr) == (0, "")
    assert plain.stdout.isascii()
    assert "Lantern oil" in plain.stdout
    done = cutbank("run", str(study), LC_ALL="C", LANG="C", TERM="dumb")
    assert (done.returncode, done.stderr) == (0, "")


def test_verify_reads_and_estimates_nothing(study: Path) -> None:
    done = cutbank("verify", str(study))
    assert (done.returncode, done.stderr) == (0, "")
    lines = done.stdout.splitlines()
    assert lines[0] == "study.toml and stalls.csv go together."
    assert "601 rows read, 600 used." in lines
    assert "Left out: 1 missing score." in lines
    assert "Outcome takings: 0 of the rows used are missing it." in lines


def test_columns_are_listed_literally_and_harmlessly(tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_text(
        'name,"bad\x1b[2J\u202e",[bold]x[/bold],漢字,open,since\nx,1,2.5,10000,yes,2020-01-01\n,3,,20000,no,2020-01-02\n',
        encoding="utf-8",
    )
    done = cutbank("columns", "a.csv", cwd=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.splitlines() == [
        "a.csv: 2 rows, 6 columns",
        "",
        "column          kind          missing  different  range",
        "name            text                1          1",
        "bad\ufffd[2J\ufffd        whole number        0          2  1 to 3",
        "[bold]x[/bold]  number              1          1  2.5",
        "漢字            whole number        0          2  10,000 to 20,000",
        "open            yes/no              0          2  no to yes",
        "since           date                0          2  2020-01-01 to 2020-01-02",
    ]


def test_assign_writes_each_row(study: Path) -> None:
    rows_at = study.parent / "rows.csv"
    study.write_text(STUDY.replace("cutoff = 50.0", 'cutoff = 50.0\ntreated = "below"'), encoding="utf-8")
    done = cutbank("assign", str(study), "--to", str(rows_at))
    assert (done.returncode, done.stderr) == (0, "")
    with rows_at.open(encoding="utf-8", newline="") as stream:
        written = list(csv.DictReader(stream))
    with (study.parent / "stalls.csv").open(encoding="utf-8", newline="") as stream:
        data = list(csv.DictReader(stream))
    assert list(written[0]) == ["row", "site", "side", "position", "segment", "used", "reason"]
    assert len(written) == len(data) == 601
    for number, (line, row) in enumerate(zip(written, data)):
        assert line["row"] == str(number)
        if not row["darkness"]:
            assert (line["side"], line["position"], line["used"], line["reason"]) == (
                "",
                "",
                "false",
                "missing score",
            )
            continue
        assert float(line["position"]) == float(row["darkness"]) - 50.0
        assert line["side"] == ("treated" if float(row["darkness"]) < 50.0 else "comparison")
        assert (line["used"], line["reason"], line["site"]) == ("true", "", "")
    done = cutbank("assign", str(study), "--to", str(study.parent / "rows.parquet"))
    assert done.returncode == 0
    counted = duckdb.sql(
        f"SELECT count(*) FROM '{study.parent}/rows.parquet' AS p JOIN read_csv('{rows_at}') AS c USING (row) "
        "WHERE p.position IS NOT DISTINCT FROM c.position AND p.side IS NOT DISTINCT FROM c.side AND p.used = c.used"
    ).fetchall()
    assert counted == [(601,)]
    assert rows_at.stat().st_mode & 0o777 == 0o600


def test_assign_names_the_site_and_the_place_in_the_file(study: Path) -> None:
    sited = STUDY.replace("cutoff = 50.0", 'rule = "cutoffs"').replace("score =", 'site = "lamp"\nscore =')
    sited = sited.replace("[columns]", 'rows = "darkness > 30"\n[columns]') + "[assignment.sites]\n1 = 60.0\n"
    study.write_text(sited, encoding="utf-8")
    rows_at = study.parent / "rows.csv"
    assert cutbank("assign", str(study), "--to", str(rows_at)).returncode == 0
    data = np.genfromtxt(study.parent / "stalls.csv", delimiter=",", names=True)
    with rows_at.open(encoding="utf-8", newline="") as stream:
        written = list(csv.DictReader(stream))
    assert [int(line["row"]) for line in written] == np.flatnonzero(data["darkness"] > 30).tolist()
    for line in written:
        if data["lamp"][int(line["row"])] == 1:
            assert (line["site"], line["reason"]) == ("1", "")
            assert float(line["position"]) == data["darkness"][int(line["row"])] - 60.0
        else:
            assert (line["used"], line["reason"], line["side"]) == ("false", "site without a cutoff", "")


def test_assign_does_not_write_over_what_it_reads(study: Path) -> None:
    data = study.parent / "stalls.csv"
    before = data.read_bytes()
    two_lines(
        cutbank("assign", str(study), "--to", str(data)), 2,
        f"{data}: is a file that the study reads.", "Choose another name to write to.",
    )  # fmt: skip
    assert data.read_bytes() == before
    two_lines(
        cutbank("assign", str(study), "--to", "rows.txt"), 2,
        "rows.txt: the file to write must end in .csv or .parquet.", "Choose such a name.",
    )  # fmt: skip


def test_the_demo_without_a_terminal_prints_a_result_and_leaves_nothing(tmp_path: Path) -> None:
    before = sorted(str(path) for path in (ROOT / "sample_data").rglob("*"))
    done = cutbank("demo", cwd=tmp_path, TMPDIR=str(tmp_path))
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.startswith("Hull grants on the coast of Norrow\n")
    assert list(tmp_path.iterdir()) == []
    assert sorted(str(path) for path in (ROOT / "sample_data").rglob("*")) == before


def test_a_reader_that_closes_early_is_no_error(study: Path) -> None:
    kept = {**os.environ, "PYTHONPATH": str(ROOT)}
    reader, writer = os.pipe()
    os.close(reader)
    done = subprocess.run(
        [sys.executable, "-m", "study.cli", "run", str(study)],
        env=kept, stdout=writer, stderr=subprocess.PIPE, check=False, timeout=60,
    )  # fmt: skip
    os.close(writer)
    assert (done.returncode, done.stderr) == (0, b"")


def test_an_interrupt_is_one_line(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from study import cli

    def interrupted(_arguments: list[str]) -> int:
        raise KeyboardInterrupt

    monkeypatch.setattr(cli, "_dispatch", interrupted)
    assert cli.main([]) == 130
    assert capsys.readouterr() == ("", "Stopped.\n")


def test_a_fault_of_our_own_shows_and_records_no_data(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from study import cli

    def broken(_arguments: list[str]) -> int:
        secret = "Ada Quill, 17 North quay"
        raise ValueError(f"could not convert {secret}")

    monkeypatch.setattr(cli, "_dispatch", broken)
    assert cli.main([]) == 1
    out, err = capsys.readouterr()
    record = Path(os.environ["XDG_STATE_HOME"]) / "cutbank" / "fault.txt"
    assert out == ""
    assert err == (
        "Cutbank stopped because of a fault of its own (ValueError).\n"
        f"Where it happened is written in {record} (no data in it).\n"
    )
    text = record.read_text(encoding="utf-8")
    assert "in broken" in text
    assert "Quill" not in text


def test_a_fault_record_names_the_whole_chain_and_survives_a_bad_home(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    def inner() -> None:
        raise KeyError("Ada")

    try:
        try:
            inner()
        except KeyError as error:
            raise RuntimeError("Ada again") from error
    except RuntimeError as error:
        caught = error
    text = fault_text("testing", caught)
    assert "builtins.RuntimeError" in text
    assert "builtins.KeyError" in text
    assert "in inner" in text
    assert "Ada" not in text
    monkeypatch.setenv("XDG_STATE_HOME", "/dev/null/nowhere")
    assert record_fault("testing", caught) is None


def test_clean_text_can_not_steer_and_keeps_its_length() -> None:
    assert clean("plain [b]text[/b] é 漢字 👩") == "plain [b]text[/b] é 漢字 👩"
    for code in (0, 7, 10, 13, 27, 0x7F, 0x9B, 0x200B, 0x200F, 0x202E, 0x2066, 0xFEFF, 0xD800, 0xE0041):
        assert clean(f"a{chr(code)}b") == "a\ufffdb"
        clean(chr(code)).encode("utf-8")
