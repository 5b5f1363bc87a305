"""The command line. It loads the screen only to open it, and the engine only to calculate."""

from __future__ import annotations

import argparse
import contextlib
import io
import locale
import os
import shlex
import signal
import sys
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from budget import __version__
from budget.glossary import for_terminal

if TYPE_CHECKING:
    from budget.engine.evaluate import Result
    from budget.engine.model import Project

OK, FAILED, UNUSABLE = 0, 1, 2
CHECKING = 60.0  # s for the slow checks of proposed allocations
COMMANDS = ("check", "new", "allocate", "reach", "sweep", "compare")
FORMATS = ("text", "json", "markdown", "csv")

_EXAMPLES = """\
examples:
  budget                          open a copy of the demo project
  budget bus.toml                 open a project as a sheet
  budget check bus.toml           every check, worst first; exit 1 if one fails
  budget check bus.toml --strict --case climb --line low
  budget check *.toml --format json
  budget allocate bus.toml        propose which converter goes behind which filter
  budget reach bus.toml PATH      how far one cell can go before a check fails
  budget compare A B              what differs, in inputs and results
  budget new bus.toml             write a commented project to start from
"""
_CAUTION = """
Results are estimates. Work on powered or charged hardware only as local codes and licensed practice require.
"""
_ALLOCATE_EXAMPLES = """\
examples:
  budget allocate bus.toml
  budget allocate bus.toml --goal fewest --keep CV1 CV2 --apart CV9,CV10
  budget allocate bus.toml --goal quiet --format json

exit status: 0 there is an admissible allocation; 1 there is none; 2 the file cannot be used
"""
_CHECK_EXAMPLES = """\
examples:
  budget check bus.toml
  budget check bus.toml --format markdown > report.md
  budget check bus.toml --case climb --case survey --line low

exit status: 0 no check failed; 1 at least one failed (with --strict also thin or without data); 2 a file cannot be used
"""


def run(arguments: Sequence[str]) -> int:
    """Carry out one command line; returns the exit status and never shows a traceback for a user's mistake."""
    try:
        return _run(list(arguments))
    except KeyboardInterrupt:
        return 130
    except Exception as error:
        from budget.keeping import log

        _say(f"budget: a fault of this program{log.told(error)}.")
        return UNUSABLE


def _run(arguments: list[str]) -> int:
    command = arguments[0] if arguments else ""
    if command == "check":
        return _check(_options(_check_parser(), arguments[1:], mixed=True))
    if command == "allocate":
        return _allocate(_options(_allocate_parser(), arguments[1:]))
    if command in ("reach", "sweep", "compare"):
        return _study(command, arguments[1:])
    if command == "new":
        return _new(_new_parser().parse_args(arguments[1:]))
    parser = _sheet_parser()
    options = _options(parser, arguments)
    if len(options.files) > 1:
        commands = ", ".join(COMMANDS)
        parser.error(f"the sheet opens one file, and '{options.files[0]}' is no command; the commands are {commands}")
    if options.version:
        return OK if _print(f"budget {__version__}\n") else UNUSABLE
    return _sheet(options)


class _Parser(argparse.ArgumentParser):
    """argparse, except that it never writes raw control characters and that its help may go into a closed pipe."""

    def error(self, message: str) -> NoReturn:
        from budget.report.words import clean

        super().error(clean(message))

    def print_help(self, file: Any = None) -> None:
        _print(self.format_help())


def _options(parser: argparse.ArgumentParser, arguments: list[str], *, mixed: bool = False) -> argparse.Namespace:
    """What a command that reads projects is told; from where their shelf files may come is said here for all of them.

    With ``mixed`` options may stand between the files.
    """
    parser.add_argument(
        "--shelf-from",
        action="append",
        default=[],
        metavar="FOLDER",
        help="also read shelf files below this folder, not only below the project's own; may be given again",
    )
    options = parser.parse_intermixed_args(arguments) if mixed else parser.parse_args(arguments)
    from budget.project import permit
    from budget.project.problems import ProjectError

    try:
        permit.allow(options.shelf_from)
    except ProjectError as error:
        parser.error(f"argument --shelf-from: {error}")
    return options


def _sheet_parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="budget",
        usage="budget [FILE] | budget check FILE... | budget new FILE",
        description="Lay out a DC bus, its EMI filters and the converters behind them, and see what the choice costs.",
        epilog=f"{_EXAMPLES}\n{for_terminal()}\n{_CAUTION}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("files", metavar="FILE", nargs="*", help="the project to open; without it, a copy of the demo")
    parser.add_argument(
        "--ascii", action="store_true", help="draw with ASCII signs only (default where the locale is not UTF-8)"
    )
    parser.add_argument("--version", action="store_true", help="print the version and leave")
    return parser


def _check_parser() -> argparse.ArgumentParser:
    check = _Parser(
        prog="budget check",
        description="Calculate projects and print every check, worst first.",
        epilog=_CHECK_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    check.add_argument("files", metavar="FILE", nargs="+", help="project files")
    check.add_argument("--format", choices=FORMATS, default="text", help="how to print (default: text)")
    check.add_argument("--strict", action="store_true", help="exit 1 also for thin checks and checks without data")
    check.add_argument(
        "--dc", action="store_true", help="only the DC part: no emissions, stability or switch-on, at once"
    )
    check.add_argument("--case", action="append", metavar="ID", help="only this load case; may be given again")
    check.add_argument(
        "--line", action="append", choices=("low", "nominal", "high"), help="only this line; may be given again"
    )
    return check


def _allocate_parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="budget allocate",
        description="Propose which converter goes behind which filter; the file stays as it is.",
        epilog=_ALLOCATE_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    pair = "A,B"
    parser.add_argument("file", metavar="FILE", help="the project")
    parser.add_argument(
        "--goal", choices=("even", "fewest", "quiet"), default="even", help="what is best (default: even)"
    )
    parser.add_argument("--keep", nargs="+", action="extend", default=[], metavar="ID", help="converters that stay")
    parser.add_argument(
        "--apart", action="append", default=[], metavar=pair, help="two converters not behind one filter"
    )
    parser.add_argument(
        "--together", action="append", default=[], metavar=pair, help="two converters behind one filter"
    )
    parser.add_argument(
        "--ban", action="append", default=[], metavar="CV,FL", help="a converter not behind this filter"
    )
    parser.add_argument(
        "--most",
        action="append",
        default=[],
        metavar="N or FL,N",
        help="at most so many converters behind each filter, or behind this one",
    )
    parser.add_argument(
        "--time",
        type=_seconds,
        default=10.0,
        metavar="S",
        help="seconds to search (default: 10), the checks of what was found not counted, which take a minute at most; "
        "Ctrl+C stops before with the best so far",
    )
    parser.add_argument("--format", choices=("text", "json"), default="text", help="how to print (default: text)")
    return parser


def _seconds(text: str) -> float:
    seconds = float(text)
    if not 0.0 < seconds < 1e9:
        raise ValueError
    return seconds


_seconds.__name__ = "number of seconds"  # as argparse calls it


def _new_parser() -> argparse.ArgumentParser:
    new = _Parser(
        prog="budget new",
        description="Write a commented project to start from; an existing file is never replaced.",
        epilog="example:\n  budget new bus.toml",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    new.add_argument("file", metavar="FILE", help="the file to write")
    return new


def _say(text: str) -> None:
    """Tell the user something on standard error; file names and texts from files may hold anything."""
    from budget.report.words import clean

    with contextlib.suppress(OSError):
        print("\n".join(clean(line) for line in text.split("\n")), file=sys.stderr, flush=True)


def _print(text: str) -> bool:
    """Write to standard output; False, said on standard error, where it cannot be written.

    A reader of a pipe that has had enough is no fault. Characters that the encoding lacks are written as escapes.
    """
    if sys.stdout is None:
        _say("budget: the output could not be written: standard output is closed.")
        return False
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="backslashreplace")
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except OSError as error:
        with contextlib.suppress(OSError):  # what is left in the buffer must not raise again at exit
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        if not isinstance(error, BrokenPipeError):
            _say(f"budget: the output could not be written: {(error.strerror or str(error)).lower()}.")
            return False
    return True


def _check(options: argparse.Namespace) -> int:
    from budget.project.problems import ProjectError

    found: list[tuple[str, Result, list[str]]] = []
    for name in options.files:
        try:
            result, warnings = check_file(Path(name), options.case, options.line, dc=options.dc)
        except ProjectError as error:
            _say(f"budget: {error}")
            continue
        found.append((name, result, warnings))
    if not _print(_report(options.format, found, several=len(options.files) > 1)):
        return UNUSABLE
    if len(found) < len(options.files):
        return UNUSABLE
    bad = ("fail", "thin", "no data") if options.strict else ("fail",)
    return FAILED if any(row.status in bad for _, result, _ in found for row in result.checks) else OK


def _report(form: str, found: list[tuple[str, Result, list[str]]], *, several: bool) -> str:
    """The report on the files that could be used; JSON is a list as soon as several were asked for."""
    from budget.report import tables, text

    if form == "json" and several:
        return tables.dumps([{"file": name, **tables.as_json(result, told)} for name, result, told in found]) + "\n"
    if not found:
        return ""
    if form == "json":
        return tables.dumps(tables.as_json(*found[0][1:])) + "\n"
    if form == "csv":
        for name, _, warnings in found:  # a table has no place for them
            for warning in warnings:
                _say(f"budget: {name}: {warning}")
        return tables.as_csv([(name, result) for name, result, _ in found])
    if form == "markdown":
        return "\n".join(text.as_markdown(*entry) for entry in found)
    colour = _colour()
    return "\n".join(text.as_text(*entry, colour=colour) for entry in found)


def _colour() -> bool:
    """Whether standard output is a terminal that shows colours, and NO_COLOR does not forbid them."""
    at_terminal = sys.stdout is not None and sys.stdout.isatty()
    return at_terminal and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb"


def check_file(
    path: Path, cases: list[str] | None, lines: list[str] | None, *, dc: bool = False
) -> tuple[Result, list[str]]:
    """Calculate one file for the wanted cases and lines (None: all); with ``dc`` the DC part alone.

    Returns the result and the warnings as sentences. Raises ProjectError with every problem, a sentence a line, where
    the file cannot be used.
    """
    from dataclasses import replace

    from budget.engine.evaluate import evaluate, evaluate_dc
    from budget.engine.model import LINES
    from budget.project.problems import ProjectError, printable
    from budget.report import words

    project, warnings = project_of(path)
    if cases:
        known = [case.id for case in project.cases]
        for wanted in cases:
            if wanted not in known:
                raise ProjectError(
                    f"{path}: no load case is called '{printable(wanted)}'; there are: {', '.join(known)}."
                )
        project = replace(project, cases=tuple(case for case in project.cases if case.id in cases))
    chosen = tuple(k for k, line in enumerate(LINES) if not lines or line in lines)
    result = evaluate_dc(project, chosen) if dc else evaluate(project, chosen)
    return result, [*warnings, *(words.engine_warning(code) for code in result.warnings)]


def project_of(path: Path) -> tuple[Project, list[str]]:
    """The project of a file, and warnings as sentences; raises ProjectError with all problems, a sentence a line."""
    from budget.project import store
    from budget.project.build import build
    from budget.project.problems import ProjectError

    loaded = store.load(path)
    built = build(loaded.document, loaded.shelves)
    problems = (*loaded.problems, *built.problems)
    errors = [p.sentence() for p in problems if p.error]
    if errors or built.project is None:
        raise ProjectError(f"{path} cannot be used:\n" + "\n".join(f"  {path}: {e}" for e in errors))
    return built.project, [p.sentence() for p in problems if not p.error]


def _new(options: argparse.Namespace) -> int:
    from budget.project import store
    from budget.project.problems import ProjectError
    from budget.project.starter import starter
    from budget.report import words

    path = Path(options.file)
    if os.path.lexists(path):
        _say(f"budget: {path} exists already; nothing was written. Choose another name.")
        return UNUSABLE
    try:
        store.write_text(path, starter())
    except ProjectError as error:
        _say(f"budget: {error}")
        return UNUSABLE
    name = f"./{path}" if str(path) in COMMANDS or str(path).startswith("-") else str(path)
    return OK if _print(words.clean(f"{path} is written; 'budget {shlex.quote(name)}' opens it.") + "\n") else UNUSABLE


def _study(command: str, arguments: list[str]) -> int:
    from budget.cli_study import STUDIES
    from budget.project.problems import ProjectError

    def make(prog: str, description: str, epilog: str) -> argparse.ArgumentParser:
        return _Parser(
            prog=prog,
            description=description,
            epilog=epilog,
            formatter_class=argparse.RawDescriptionHelpFormatter,
            allow_abbrev=False,
        )

    parser, run_it = STUDIES[command]
    options = _options(parser(make), arguments)
    try:
        status, text = run_it(options)
    except ProjectError as error:
        _say(f"budget: {error}")
        return UNUSABLE
    return status if _print(text) else UNUSABLE


def _allocate(options: argparse.Namespace) -> int:
    from budget.project.problems import ProjectError
    from budget.report import allocation

    try:
        project, _ = project_of(Path(options.file))
    except ProjectError as error:
        _say(f"budget: {error}")
        return UNUSABLE
    from budget.engine.allocate import allocate
    from budget.engine.candidates import all_checks, as_json
    from budget.engine.placing import constraints_of

    try:
        wishes = constraints_of(_wishes(options))
        with stoppable() as stopped:
            finish = all_checks(CHECKING, stopped)
            found = allocate(project, options.goal, wishes, time_limit=options.time, cancelled=stopped, finish=finish)
    except ValueError as error:
        _say(f"budget: {options.file}: {error}.")
        return UNUSABLE
    if options.format == "json":
        import json

        printed = _print(json.dumps(as_json(found), indent=1) + "\n")
    else:
        printed = _print(allocation.as_text(found, project))
    for line in allocation.why_none(found) if not found.candidates else ():
        _say(f"budget: {line}.")
    if not printed:
        return UNUSABLE
    return OK if found.candidates else FAILED


def _wishes(options: argparse.Namespace) -> list[tuple[str, ...]]:
    """What is asked of an allocation, by the names of ``placing``; raises ValueError with a sentence."""
    names: list[tuple[str, ...]] = [("keep", who) for who in options.keep]
    for name, code in (("apart", "apart"), ("together", "together"), ("ban", "banned")):
        for text in getattr(options, name):
            pair = tuple(part.strip() for part in text.split(","))
            if len(pair) != 2:
                raise ValueError(f"'{text}' is not a pair; two ids with a comma between were expected")
            names.append((code, *pair))
    for text in options.most:
        where, _, number = (part.strip() for part in text.rpartition(","))
        if not (number.isascii() and number.isdigit() and int(number[:9]) > 0):
            raise ValueError(
                f"--most {text}: a number of converters from 1 on was expected, or a filter, a comma and it"
            )
        names.append(("most", where, str(int(number[:9]))))
    return names


@contextlib.contextmanager
def stoppable() -> Iterator[Callable[[], bool]]:
    """Ctrl+C only says that it is enough; pressed again, it ends the program."""
    asked: list[int] = []

    def enough(number: int, _: object) -> None:
        if asked:
            raise KeyboardInterrupt
        asked.append(number)

    try:
        before = signal.signal(signal.SIGINT, enough)
    except ValueError:  # not the main thread: there is no Ctrl+C to hear of
        yield lambda: False
        return
    try:
        yield lambda: bool(asked)
    finally:
        signal.signal(signal.SIGINT, before)


def _sheet(options: argparse.Namespace) -> int:
    from budget.project.problems import ProjectError
    from budget.session import open_demo, open_file

    if not all(stream is not None and stream.isatty() for stream in (sys.stdin, sys.stdout, sys.stderr)):
        _say("budget: the sheet needs a terminal; 'budget check FILE' prints the results without one.")
        return UNUSABLE
    if os.environ.get("TERM") == "dumb":
        _say(
            "budget: TERM=dumb says that this terminal cannot place text, as the sheet must. If it can, set TERM, "
            "such as TERM=xterm; 'budget check FILE' prints the results on any."
        )
        return UNUSABLE
    path = Path(options.files[0]) if options.files else None
    try:
        session = open_file(path) if path is not None else open_demo()
    except ProjectError as error:
        from budget.keeping.recover import without_file

        left = without_file(path) if path is not None else None
        if left is None:
            _say(f"budget: {error}")
            return UNUSABLE
        session = left
        session.notes = (str(error).partition("\n")[0],)
    os.environ.setdefault("ESCDELAY", "300")  # before textual: split escape sequences over SSH are keys, not Escape
    os.environ.setdefault("TEXTUAL_FPS", "240")  # else a result that follows an edit waits up to 17 ms for its paint
    from budget.ui.app import show

    return show(session, ascii_only=options.ascii or _ascii_terminal())


def _ascii_terminal() -> bool:
    """Whether only ASCII is safe: the locale is not one of UTF-8, or the terminal is of a sort that has no more.

    In the C or POSIX locale, also for want of the one that was asked for, Python turns its UTF-8 mode on by itself;
    what it says of the encoding then means nothing.
    """
    if os.environ.get("PYTHONUTF8") == "1" or "utf8" in sys._xoptions:
        return False
    other = sys.flags.utf8_mode or locale.getencoding().lower().replace("-", "") != "utf8"
    return bool(other) or os.environ.get("TERM", "").startswith("vt")
