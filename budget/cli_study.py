"""The commands that ask further: reach of a cell, a sweep over two, and what differs between two files."""

from __future__ import annotations

import argparse
import contextlib
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from budget.project.store import Loaded
    from budget.study.compare import Variant

PARTS = ("dc", "emissions", "stability", "inrush")
_PATHS = (
    "a cell is named by the id of its row and its fields: CV3.output.0.current, FL1.dm.0.L, bus.low, climb.load.CV3"
)
_REACH = """\
examples:
  budget reach bus.toml CV3.output.0.current
  budget reach bus.toml FL1.dm.0.L --parts dc,emissions --format json
"""
_SWEEP = """\
examples:
  budget sweep bus.toml CV3.output.0.current "1 A" "6 A" 11 bus.low "18 V" "24 V" 7 > map.csv
  budget sweep bus.toml FL1.dm.0.L 1u 10u 40 CV3.frequency 200k 600k 40 --parts dc,emissions --scheduler tcp://big:8786

Points run on all cores; Ctrl+C stops, and then nothing is printed.
exit status: 0 the table is there; 2 a file, a cell or a range cannot be used; 130 stopped
"""
STOPPED = 130
_COMPARE = """\
example:
  budget compare before.toml after.toml --format markdown

exit status: 0 nothing got worse; 1 the state of a check got worse, or it fails by more (with --strict also where a
margin got smaller); 2 a file cannot be used
"""

Parser = Callable[..., argparse.ArgumentParser]


def reach_parser(make: Parser) -> argparse.ArgumentParser:
    text = "How far one cell can go either way before a check fails. " + _PATHS
    parser = make("budget reach", text, _REACH)
    parser.add_argument("file", metavar="FILE", help="the project")
    parser.add_argument("cell", metavar="PATH", help="the cell")
    parser.add_argument("--low", metavar="VALUE", help="look down to this value")
    parser.add_argument("--high", metavar="VALUE", help="look up to this value")
    parser.add_argument("--thin", action="store_true", help="stop already where a check turns thin")
    _common(parser, ("text", "json"))
    return parser


def sweep_parser(make: Parser) -> argparse.ArgumentParser:
    text = "The worst margin over the values of two cells, as CSV. " + _PATHS
    parser = make("budget sweep", text, _SWEEP)
    parser.add_argument("file", metavar="FILE", help="the project")
    for name in ("A", "B"):
        lower = name.lower()
        parser.add_argument(lower, metavar=f"PATH_{name}", help="a cell")
        parser.add_argument(f"low_{lower}", metavar="LOW", help="its first value")
        parser.add_argument(f"high_{lower}", metavar="HIGH", help="its last value")
        parser.add_argument(f"count_{lower}", metavar="N", type=int, help="how many values")
    _common(parser, ("csv", "json"))
    parser.add_argument("--aside", action="store_true", help="leave aside the checks that fail as the file stands")
    parser.add_argument(
        "--scheduler", metavar="ADDRESS", help="calculate on the workers of this dask scheduler (needs budget[dask])"
    )
    return parser


def compare_parser(make: Parser) -> argparse.ArgumentParser:
    parser = make("budget compare", "What differs between two projects, in inputs and in results.", _COMPARE)
    parser.add_argument("before", metavar="A", help="a project")
    parser.add_argument("after", metavar="B", help="the other one")
    parser.add_argument("--strict", action="store_true", help="exit 1 also where a margin got smaller")
    parser.add_argument("--format", choices=("text", "markdown", "json"), default="text", help="how to print")
    return parser


def _common(parser: argparse.ArgumentParser, formats: tuple[str, ...]) -> None:
    parser.add_argument("--parts", default="dc", metavar="LIST", help=f"what to calculate, of {','.join(PARTS)} (dc)")
    parser.add_argument("--format", choices=formats, default=formats[0], help=f"how to print (default: {formats[0]})")


def _parts(text: str) -> tuple[str, ...]:
    from budget.project.problems import ProjectError, printable

    parts = tuple(part.strip() for part in text.split(",") if part.strip())
    for part in parts:
        if part not in PARTS:
            raise ProjectError(f"'{printable(part)}' is no part; there are: {', '.join(PARTS)}.")
    return parts or ("dc",)


def _load(name: str) -> Loaded:
    from budget.cli import project_of
    from budget.project import store

    project_of(Path(name))  # says everything that is wrong with it
    return store.load(Path(name))


def reach(options: argparse.Namespace) -> tuple[int, str]:
    """Exit status and output of ``budget reach``; raises ProjectError."""
    import json

    from budget.report import study
    from budget.study import paths
    from budget.study.reach import reach as find

    loaded = _load(options.file)
    cell = paths.cell_at(loaded.document, loaded.shelves, paths.resolve(loaded.document, loaded.shelves, options.cell))
    ends = [None if text is None else paths.number(cell, text) for text in (options.low, options.high)]
    found = find(
        loaded.document,
        loaded.shelves,
        cell.path,
        parts=_parts(options.parts),
        low=ends[0],
        high=ends[1],
        thin=options.thin,
    )
    if options.format == "json":
        return 0, json.dumps(study.reach_json(found), indent=1, allow_nan=False) + "\n"
    return 0, study.reach_text(found).rstrip("\n") + "\n"


def sweep(options: argparse.Namespace) -> tuple[int, str]:
    """Exit status and output of ``budget sweep``; raises ProjectError."""
    from budget.cli import stoppable
    from budget.engine.cancel import CancelledError

    try:
        with stoppable() as enough:  # an exception out of a signal handler may get lost in a callback
            return _sweep(options, enough)
    except (KeyboardInterrupt, CancelledError):
        _tell("budget: stopped; nothing was written.")
        return STOPPED, ""


def _sweep(options: argparse.Namespace, enough: Callable[[], bool]) -> tuple[int, str]:
    import json

    from budget.report import study
    from budget.study import paths
    from budget.study.cluster import workers_of
    from budget.study.sweep import steps
    from budget.study.sweep import sweep as run

    loaded = _load(options.file)
    axes: list[Any] = []
    for name in ("a", "b"):
        path = paths.resolve(loaded.document, loaded.shelves, getattr(options, name))
        cell = paths.cell_at(loaded.document, loaded.shelves, path)
        low, high = (paths.number(cell, getattr(options, f"{end}_{name}")) for end in ("low", "high"))
        axes += [path, steps(cell, low, high, getattr(options, f"count_{name}"))]
    parts = _parts(options.parts)
    with workers_of(options.scheduler) as (executor, workers), _progress() as told:
        found = run(
            loaded.document,
            loaded.shelves,
            *axes,
            parts=parts,
            aside=options.aside,
            executor=executor,
            workers=workers,
            progress=told,
            cancelled=enough,
        )
    if found.failing:
        names = ", ".join(f"{row.subject} {row.check}" for row in found.failing)
        _tell(f"budget: left aside, for it fails already: {names}.")
    if found.again:
        _tell(f"budget: the workers of {found.again} points were lost; the points were calculated again.")
    if options.format == "json":
        return 0, json.dumps(study.sweep_json(found), indent=1, allow_nan=False) + "\n"
    return 0, study.sweep_csv(found)


def _tell(text: str) -> None:
    with contextlib.suppress(OSError, AttributeError):
        print(text, file=sys.stderr, flush=True)


@contextlib.contextmanager
def _progress() -> Iterator[Callable[[float], None] | None]:
    """A bar on standard error while something runs, wiped afterwards; only where that is a terminal."""
    if sys.stderr is None or not sys.stderr.isatty():
        yield None
        return
    shown = -1

    def tell(share: float) -> None:
        nonlocal shown
        percent = int(share * 100.0)
        if percent != shown:
            shown = percent
            line = f"\r[{'#' * (percent // 4):.<25}] {percent:3} %"
            with contextlib.suppress(OSError):
                sys.stderr.write(line)
                sys.stderr.flush()

    try:
        yield tell
    finally:
        with contextlib.suppress(OSError):
            sys.stderr.write("\r" + " " * 33 + "\r" if shown >= 0 else "")
            sys.stderr.flush()


def compare(options: argparse.Namespace) -> tuple[int, str]:
    """Exit status and output of ``budget compare``; raises ProjectError."""
    from budget.report import compare as report
    from budget.report.tables import dumps
    from budget.study.compare import compare as find

    found = find(_variant(options.before), _variant(options.after))
    status = 1 if found.worse or (options.strict and found.lower) else 0
    if options.format == "json":
        return status, dumps([report.as_json(found)]) + "\n"
    text = report.as_markdown(found) if options.format == "markdown" else report.as_text(found)
    return status, text.rstrip("\n") + "\n"


def _variant(name: str) -> Variant:
    from budget.cli import project_of
    from budget.engine.evaluate import evaluate
    from budget.study.compare import Variant

    loaded = _load(name)
    project, _ = project_of(Path(name))
    return Variant(name, loaded.document, loaded.shelves, evaluate(project))


STUDIES: dict[str, tuple[Callable[[Parser], argparse.ArgumentParser], Callable[..., tuple[int, str]]]] = {
    "reach": (reach_parser, reach),
    "sweep": (sweep_parser, sweep),
    "compare": (compare_parser, compare),
}
