"""The command line. It loads the screen only to open it, and the engine only to calculate."""

from __future__ import annotations

import argparse
import contextlib
import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from budget import __version__

if TYPE_CHECKING:
    from budget.engine.evaluate import Result

OK, FAILED, UNUSABLE = 0, 1, 2
COMMANDS = ("check", "new")
FORMATS = ("text", "json", "markdown", "csv")

_EXAMPLES = """\
examples:
  budget                          open a copy of the demo project
  budget bus.toml                 open a project as a sheet
  budget check bus.toml           every check, worst first; exit 1 if one fails
  budget check bus.toml --strict --case climb --line low
  budget check *.toml --format json
  budget new bus.toml             write a commented project to start from

Results are estimates. Work on powered or charged hardware only as local codes and licensed practice require.
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
    except BrokenPipeError:  # the reader of a pipe had enough
        with contextlib.suppress(OSError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return OK


def _run(arguments: list[str]) -> int:
    if arguments and arguments[0] in COMMANDS:
        options = _parser().parse_args(arguments)
        return _check(options) if options.command == "check" else _new(options)
    options = _sheet_parser().parse_args(arguments)
    return _sheet(options)


def _sheet_parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="budget",
        usage="budget [FILE] | budget check FILE... | budget new FILE",
        description="Lay out a DC bus, its EMI filters and the converters behind them, and see what the choice costs.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("file", metavar="FILE", nargs="?", help="the project to open; without it, a copy of the demo")
    parser.add_argument("--ascii", action="store_true", help="draw with ASCII signs only (default in a C locale)")
    parser.add_argument("--version", action="version", version=f"budget {__version__}")
    return parser


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="budget")
    commands = parser.add_subparsers(dest="command", required=True)
    check = commands.add_parser(
        "check",
        description="Calculate projects and print every check, worst first.",
        epilog=_CHECK_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    check.add_argument("files", metavar="FILE", nargs="+", help="project files")
    check.add_argument("--format", choices=FORMATS, default="text", help="how to print (default: text)")
    check.add_argument("--strict", action="store_true", help="exit 1 also for thin checks and checks without data")
    check.add_argument("--case", action="append", metavar="ID", help="only this load case; may be given again")
    check.add_argument(
        "--line", action="append", choices=("low", "nominal", "high"), help="only this line; may be given again"
    )
    new = commands.add_parser(
        "new",
        description="Write a commented project to start from; an existing file is never replaced.",
        epilog="example:\n  budget new bus.toml",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    new.add_argument("file", metavar="FILE", help="the file to write")
    return parser


def _say(text: str) -> None:
    print(text, file=sys.stderr)


def _check(options: argparse.Namespace) -> int:
    from budget.project.problems import ProjectError
    from budget.report import tables, text

    found: list[tuple[str, Result, list[str]]] = []
    unusable = False
    for name in options.files:
        try:
            result, warnings = check_file(Path(name), options.case, options.line)
        except ProjectError as error:
            _say(f"budget: {error}")
            unusable = True
            continue
        found.append((name, result, warnings))
    if options.format == "json":
        if found:
            print(tables.dumps([tables.as_json(result, warnings) for _, result, warnings in found]))
    elif options.format == "csv":
        print(tables.as_csv([(name, result) for name, result, _ in found]), end="")
    elif options.format == "markdown":
        print("\n".join(text.as_markdown(*entry) for entry in found), end="")
    else:
        colour = sys.stdout.isatty() and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb"
        print("\n".join(text.as_text(*entry, colour=colour) for entry in found), end="")
    if unusable:
        return UNUSABLE
    bad = ("fail", "thin", "no data") if options.strict else ("fail",)
    return FAILED if any(row.status in bad for _, result, _ in found for row in result.checks) else OK


def check_file(path: Path, cases: list[str] | None, lines: list[str] | None) -> tuple[Result, list[str]]:
    """Calculate one file for the wanted cases and lines (None: all).

    Returns the result and the warnings as sentences. Raises ProjectError with every problem, a sentence a line, where
    the file cannot be used.
    """
    from dataclasses import replace

    from budget.engine.evaluate import evaluate
    from budget.engine.model import LINES
    from budget.project import store
    from budget.project.build import build
    from budget.project.problems import ProjectError, printable
    from budget.report import words

    loaded = store.load(path)
    built = build(loaded.document, loaded.shelves)
    problems = (*loaded.problems, *built.problems)
    errors = [p.sentence() for p in problems if p.error]
    if errors or built.project is None:
        raise ProjectError(f"{path} cannot be used:\n" + "\n".join(f"  {path}: {e}" for e in errors))
    project = built.project
    if cases:
        known = [case.id for case in project.cases]
        for wanted in cases:
            if wanted not in known:
                raise ProjectError(
                    f"{path}: no load case is called '{printable(wanted)}'; there are: {', '.join(known)}."
                )
        project = replace(project, cases=tuple(case for case in project.cases if case.id in cases))
    chosen = tuple(k for k, line in enumerate(LINES) if not lines or line in lines)
    result = evaluate(project, chosen)
    warnings = [p.sentence() for p in problems if not p.error]
    warnings += [words.engine_warning(code) for code in result.warnings]
    return result, warnings


def _new(options: argparse.Namespace) -> int:
    from budget.project import store
    from budget.project.problems import ProjectError
    from budget.project.starter import starter

    path = Path(options.file)
    if os.path.lexists(path):
        _say(f"budget: {path} exists already; nothing was written. Choose another name.")
        return UNUSABLE
    try:
        store.write_text(path, starter())
    except ProjectError as error:
        _say(f"budget: {error}")
        return UNUSABLE
    print(f"{path} is written; 'budget {path}' opens it.")
    return OK


def _sheet(options: argparse.Namespace) -> int:
    from budget.project.problems import ProjectError
    from budget.session import open_demo, open_file

    if not (sys.stdin.isatty() and sys.stdout.isatty()):
        _say("budget: the sheet needs a terminal; 'budget check FILE' prints the results without one.")
        return UNUSABLE
    try:
        session = open_file(Path(options.file)) if options.file else open_demo()
    except ProjectError as error:
        _say(f"budget: {error}")
        return UNUSABLE
    os.environ.setdefault("ESCDELAY", "300")  # before textual: split escape sequences over SSH are keys, not Escape
    from budget.ui.app import show

    return show(session, ascii_only=options.ascii or _ascii_locale())


def _ascii_locale() -> bool:
    """Whether the locale is C or POSIX: Python then turns UTF-8 mode on by itself."""
    asked = os.environ.get("PYTHONUTF8") == "1" or "utf8" in sys._xoptions
    return bool(sys.flags.utf8_mode) and not asked
