"""The command line: prevmap run, inspect, demo, verify.

Exit codes: 0 done; 1 (verify only) a number differs; 2 the input is wrong; 3 the model could not be fitted;
130 interrupted.
"""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING, NoReturn

from prevmap import __version__
from prevmap.errors import FitError, InputError

if TYPE_CHECKING:
    import argparse
    from collections.abc import Callable, Sequence
    from pathlib import Path

DONE, DIFFERS, WRONG_INPUT, NOT_FITTED, INTERRUPTED = 0, 1, 2, 3, 130


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code.

    Parameters
    ----------
    arguments : sequence of str, optional
        Default: the arguments of the process.
    """
    try:
        return _obey(arguments)
    except InputError as error:
        print(f"prevmap: {error}", file=sys.stderr)
        return WRONG_INPUT
    except FitError as error:
        print(f"prevmap: the model could not be fitted: {error}", file=sys.stderr)
        return NOT_FITTED
    except OSError as error:  # a file that may not be read, a disk that is full
        print(f"prevmap: {error}", file=sys.stderr)
        return WRONG_INPUT
    except KeyboardInterrupt:
        print("prevmap: interrupted; earlier results are as they were", file=sys.stderr)
        return INTERRUPTED


def _obey(arguments: Sequence[str] | None) -> int:
    import logging  # modules load inside main's try, so that an interruption meanwhile is told in words
    import signal

    options = _parser().parse_args(arguments)
    logging.basicConfig(level=logging.WARNING, format="%(levelname)s: %(message)s", stream=sys.stderr)
    previous = signal.signal(signal.SIGTERM, _interrupt)  # so that a stopped run tidies up as well
    command: Callable[[argparse.Namespace], int] = options.command
    try:
        return command(options)
    finally:
        signal.signal(signal.SIGTERM, previous)


def _interrupt(_number: int, _frame: object) -> NoReturn:
    raise KeyboardInterrupt


def _folder(text: str) -> Path:
    import argparse
    from pathlib import Path

    if not text.strip():
        raise argparse.ArgumentTypeError(f'found "{text}"; accepted: the path of a folder')
    return Path(text)


def _parser() -> argparse.ArgumentParser:
    import argparse
    from pathlib import Path

    parser = argparse.ArgumentParser(
        prog="prevmap",
        description="From a disease survey to a prevalence map, exceedance probabilities and unit decisions.",
        epilog="Exit codes: 0 done; 1 (verify) a number differs; 2 wrong input; 3 no fit; 130 interrupted.",
    )
    parser.add_argument("--version", action="version", version=f"prevmap {__version__}")
    commands = parser.add_subparsers(required=True, metavar="COMMAND")

    run = commands.add_parser("run", help="run a study file to its report and tables")
    run.add_argument("study", type=Path, metavar="STUDY", help="the study file (TOML)")
    run.add_argument(
        "--output", type=_folder, metavar="DIR", help="folder for the results, not the study file's"
    )
    run.add_argument("--quiet", action="store_true", help="print no progress")
    run.set_defaults(command=_run)

    inspect = commands.add_parser("inspect", help="check every input of a study file; fit nothing")
    inspect.add_argument("study", type=Path, metavar="STUDY", help="the study file (TOML)")
    inspect.add_argument("--quiet", action="store_true", help="print no progress")
    inspect.set_defaults(command=_inspect)

    demo = commands.add_parser("demo", help="copy the demo study into a folder and run it")
    demo.add_argument("folder", type=_folder, metavar="FOLDER", help="a new or empty folder")
    demo.add_argument("--quiet", action="store_true", help="print no progress")
    demo.set_defaults(command=_demo)

    verify = commands.add_parser(
        "verify", help="run a record's study again and name every number that differs"
    )
    verify.add_argument("record", type=Path, metavar="RECORD", help="the record.json of an earlier run")
    verify.add_argument(
        "--tolerance",
        type=float,
        metavar="SHARE",
        help="largest relative difference that counts as equal (default: 0 on the same versions)",
    )
    verify.add_argument("--quiet", action="store_true", help="print no progress")
    verify.set_defaults(command=_verify)
    return parser


def _run(options: argparse.Namespace) -> int:
    from prevmap.study import read_study  # the heavy rooms load when a command needs them

    result = read_study(options.study).run(progress=not options.quiet, output=options.output)
    _print_results(result.folder)
    return DONE


def _tell(line: object) -> None:
    from prevmap.study.progress import say

    say(str(line), sys.stdout)


def _print_results(folder: Path) -> None:
    _tell(f"Report:  {folder / 'share' / 'report.html'}")
    _tell(f"To pass on (no exact site positions): {folder / 'share'}")
    _tell(f"To keep (exact site positions):       {folder / 'internal'}")


def _inspect(options: argparse.Namespace) -> int:
    from prevmap.study import read_study

    _tell(read_study(options.study).inspect(progress=not options.quiet))
    return DONE


def _demo(options: argparse.Namespace) -> int:
    from prevmap.study import read_study
    from prevmap.study.demo import copy_demo

    study = copy_demo(options.folder)
    result = read_study(study).run(progress=not options.quiet)
    _tell(f"The demo study (an invented province) is in {study.parent}.")
    _print_results(result.folder)
    return DONE


def _verify(options: argparse.Namespace) -> int:
    from prevmap.study.verification import verify_record

    found = verify_record(options.record, progress=not options.quiet, tolerance=options.tolerance)
    for difference in found.environment:
        _tell(f"other environment: {difference}")
    for difference in found.differences:
        _tell(f"differs: {difference}")
    rule = "exactly" if found.tolerance == 0 else f"within a relative {found.tolerance:g}"
    _tell(f"{found.compared} numbers compared {rule}: {len(found.differences)} differences.")
    return DIFFERS if found.differences else DONE


if __name__ == "__main__":
    sys.exit(main())
