"""The command line. Nothing heavy is loaded before a command needs it: `cutbank --help` answers at once."""

from __future__ import annotations

import os
import sys
import warnings
from argparse import ArgumentParser, Namespace
from collections.abc import Callable, Sequence
from typing import Final, NoReturn

from study.errors import BAD_DATA, BAD_STUDY, CANNOT_ESTIMATE, StudyError

HELP: Final = """\
Cutbank: what did a programme change that was handed out by a line?

  cutbank [STUDY]                           open the bench on a study, a folder or a data file
  cutbank demo [NAME]                       open an invented study: hulls, valleys or wells
  cutbank run STUDY [--out FOLDER] [--json] estimate a study and print the result
  cutbank verify STUDY                      read and check a study, estimate nothing
  cutbank seal STUDY [--by NAME]            freeze the plan, so that masked outcomes may be seen
  cutbank release STUDY --to FOLDER         write what may leave: report, tables, figures, record
  cutbank columns FILE [--table NAME]       list a data file's columns, kinds, gaps and ranges
  cutbank assign STUDY --to FILE            write each row's side and position (.csv or .parquet)

  --mouse     let the bench use the mouse
  --ascii     draw with ASCII characters only
  --version   print the version
  --help      print this

Exit status: 0 done, 1 the study could not be estimated, 2 bad usage or a bad study file,
3 data could not be read.
"""
USAGE: Final = {
    "bench": "cutbank [STUDY] [--mouse] [--ascii]",
    "demo": "cutbank demo [NAME] [--mouse] [--ascii]",
    "run": "cutbank run STUDY [--out FOLDER] [--json] [--ascii]",
    "verify": "cutbank verify STUDY",
    "seal": "cutbank seal STUDY [--by NAME]",
    "release": "cutbank release STUDY --to FOLDER",
    "columns": "cutbank columns FILE [--table NAME]",
    "assign": "cutbank assign STUDY --to FILE",
}


class _Parser(ArgumentParser):
    """Says what is wrong with a command line in our two lines."""

    def error(self, message: str) -> NoReturn:
        from study.literal import clean  # small, but not needed by a good command line

        raise StudyError(f"cutbank: {clean(message)}.", f"Usage: {self.usage}", BAD_STUDY)


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command and return its exit status.

    Parameters
    ----------
    argv
        Arguments without the program's name; those of the process for None.
    """
    arguments = list(sys.argv[1:] if argv is None else argv)
    if not sys.warnoptions:
        warnings.simplefilter("ignore")  # a library's warning is for us, and may quote data
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")  # a terminal that can't show a character gets "?"
    try:
        status = _dispatch(arguments)
        sys.stdout.flush()
        return status
    except StudyError as error:
        return _say(error.what, error.do, error.status)
    except KeyboardInterrupt:
        _print_error("Stopped.")
        return 130
    except BrokenPipeError:
        # Whoever read our output has had enough; what is still in the buffer must not raise again at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except MemoryError:
        return _say("The data do not fit in memory.", "Read fewer rows with data.rows.", BAD_DATA)
    except Exception as error:  # noqa: BLE001 - the last line of defence: a person never sees a traceback
        return _own_fault(error)


def _dispatch(arguments: list[str]) -> int:
    if "--" not in arguments and ("--help" in arguments or "-h" in arguments):
        print(HELP, end="")
        return 0
    if arguments == ["--version"]:
        from study.version import program_version

        print(f"cutbank {program_version()}")
        return 0
    place = next((i for i, word in enumerate(arguments) if not word.startswith("-")), None)
    command = arguments[place] if place is not None else "bench"
    if command not in _COMMANDS:
        command = "bench"
    elif place is not None:
        del arguments[place]
    declare, perform = _COMMANDS[command]
    parser = _Parser(prog="cutbank", usage=USAGE[command], add_help=False, allow_abbrev=False)
    declare(parser)
    return perform(parser.parse_args(arguments))


def _declare_bench(parser: ArgumentParser) -> None:
    parser.add_argument("study", nargs="?")
    _declare_looks(parser)


def _declare_demo(parser: ArgumentParser) -> None:
    parser.add_argument("name", nargs="?")
    _declare_looks(parser)


def _declare_looks(parser: ArgumentParser) -> None:
    parser.add_argument("--mouse", action="store_true")
    parser.add_argument("--ascii", action="store_true")


def _declare_run(parser: ArgumentParser) -> None:
    parser.add_argument("study", metavar="STUDY")
    parser.add_argument("--out", metavar="FOLDER")
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--ascii", action="store_true")


def _declare_verify(parser: ArgumentParser) -> None:
    parser.add_argument("study", metavar="STUDY")


def _declare_seal(parser: ArgumentParser) -> None:
    parser.add_argument("study", metavar="STUDY")
    parser.add_argument("--by", metavar="NAME")


def _declare_release(parser: ArgumentParser) -> None:
    parser.add_argument("study", metavar="STUDY")
    parser.add_argument("--to", metavar="FOLDER", required=True)


def _declare_columns(parser: ArgumentParser) -> None:
    parser.add_argument("file", metavar="FILE")
    parser.add_argument("--table", metavar="NAME")


def _declare_assign(parser: ArgumentParser) -> None:
    parser.add_argument("study", metavar="STUDY")
    parser.add_argument("--to", metavar="FILE", required=True)


def _bench(asked: Namespace) -> int:
    from pathlib import Path

    from study.commands.bench import open_bench
    from study.literal import nearest, quoted

    if asked.study and not os.path.lexists(asked.study):
        near = nearest(asked.study, list(_COMMANDS))
        raise StudyError(
            f"There is no command, study or data file named {quoted(asked.study)}.",
            f"Did you mean: cutbank {near}?" if near else "See what there is with: cutbank --help",
            BAD_STUDY,
        )
    return open_bench(Path(asked.study) if asked.study else None, mouse=asked.mouse, ascii_only=asked.ascii)


def _demo(asked: Namespace) -> int:
    from study.commands.demo import DEFAULT, open_demo

    return open_demo(asked.name or DEFAULT, mouse=asked.mouse, ascii_only=asked.ascii)


def _run(asked: Namespace) -> int:
    from pathlib import Path

    from study.commands.run import run_study

    out = Path(asked.out) if asked.out else None
    return run_study(Path(asked.study), out=out, as_json=asked.json, ascii_only=asked.ascii)


def _verify(asked: Namespace) -> int:
    from pathlib import Path

    from study.commands.verify import verify_study

    return verify_study(Path(asked.study))


def _seal(asked: Namespace) -> int:
    from pathlib import Path

    from study.commands.seal import seal_study

    return seal_study(Path(asked.study), by=asked.by)


def _release(asked: Namespace) -> int:
    from pathlib import Path

    from study.commands.release import release_study

    return release_study(Path(asked.study), to=Path(asked.to))


def _columns(asked: Namespace) -> int:
    from pathlib import Path

    from study.commands.columns import list_columns

    return list_columns(Path(asked.file), table=asked.table)


def _assign(asked: Namespace) -> int:
    from pathlib import Path

    from study.commands.assign import assign_rows

    return assign_rows(Path(asked.study), to=Path(asked.to))


_COMMANDS: Final[dict[str, tuple[Callable[[ArgumentParser], None], Callable[[Namespace], int]]]] = {
    "bench": (_declare_bench, _bench),
    "demo": (_declare_demo, _demo),
    "run": (_declare_run, _run),
    "verify": (_declare_verify, _verify),
    "seal": (_declare_seal, _seal),
    "release": (_declare_release, _release),
    "columns": (_declare_columns, _columns),
    "assign": (_declare_assign, _assign),
}


def _own_fault(error: Exception) -> int:
    from estimation.errors import CannotEstimate
    from study.faults import record_fault

    if isinstance(error, CannotEstimate):
        return _say(error.sentence, error.remedy, CANNOT_ESTIMATE)
    record = record_fault("running a command", error)
    where = f"Where it happened is written in {record} (no data in it)." if record else "Please report it."
    return _say(
        f"Cutbank stopped because of a fault of its own ({type(error).__name__}).", where, CANNOT_ESTIMATE
    )


def _say(what: str, do: str, status: int) -> int:
    _print_error(f"{what}\n{do}")
    return status


def _print_error(text: str) -> None:
    try:
        print(text, file=sys.stderr, flush=True)
    except BrokenPipeError:
        pass  # nobody listens


if __name__ == "__main__":
    sys.exit(main())
