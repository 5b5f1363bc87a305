"""A desk without a screen, a small project that has every kind of cell, and keys as words."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import cache
from itertools import islice
from pathlib import Path

from budget.project import store
from budget.project.document import Document
from budget.session import Outcome, Session, calculate, open_file, stages
from budget.ui.desk import Desk, Work
from budget.ui.paint import frame, plain

PROJECTS = Path(__file__).parents[2] / "projects"

# One of everything: a bus with all fields, a filter of each sort, curves, tables, shelf parts, a row without a filter,
# a failing, a thin and a fine check, cases with every sort of load, a limit line. Well damped and with a short window,
# so that its switch-on is calculated in no time.
SMALL = """\
format = 1

[project]
title = "Test bench"
note = "A note that is longer than the line of a small terminal, so that somewhere it has to be cut off by the painter."

[rules]
filter_load = "80 %"
converter_load = "80 %"
emissions = ["CE102", "own"]
inrush_window = "1 ms"

[bus]
name = "bench"
low = "22 V"
nominal = "28 V"
high = "29 V"
rating = "20 A"
resistance = "20 mohm"
surge = "50 V"
surge_time = "1 ms"
surge_rise = "200 us"

[[filter]]
id = "FA"
name = "ladders"
rated_current = "3 A"
max_voltage = "40 V"
dm = [{ series = { L = "4.7 uH", R = "8 mohm" } }, { shunt = { C = "22 uF", R = "500 mohm" } }]
cm = [{ series = { L = "1 mH" } }, { shunt = { C = "10 nF" } }]

[[filter]]
id = "FB"
name = "from the shelf"
part = "bought"

[[filter]]
id = "FC"
rated_current = "5 A"
attenuation = [["100 kHz", 40, 30], ["10 MHz", 60, 50]]
resistance = "10 mohm"

[[converter]]
id = "C1"
name = "first"
filter = "FA"
rated_power = "80 W"
output = [
    { name = "core", voltage = "5 V", current = "10 A", note = "two lanes" },
    { name = "io", voltage = "12 V", current = "2 A" },
]
efficiency = [["20 %", "84 %"], ["60 %", "91 %"], ["100 %", "92 %"]]
min_input = "16 V"
max_input = "40 V"
max_surge = "60 V"
lead = { R = "5 mohm", L = "300 nH" }
input = [{ series = { L = "1 uH", R = "2 mohm" } }, { shunt = { C = "10 uF", R = "150 mohm" } }]
frequency = "300 kHz"
chop = { duty = "40 %", rise = "30 ns", fall = "30 ns" }
cm = { capacitance = "60 pF", swing = "60 V", rise = "30 ns", fall = "30 ns" }

[[converter]]
id = "C2"
name = "second"
filter = "FB"
rated_power = "50 W"
output = [{ name = "main", voltage = "12 V", current = "2 A" }]
efficiency = "88 %"
min_input = "16 V"
max_input = "40 V"
frequency = "280 kHz"
ripple = { pp = "200 mA" }

[[converter]]
id = "C3"
name = "third"
filter = "FA"
part = "brick"
output = [{ name = "main", voltage = "12 V", current = "1 A" }]
spectrum = [["300 kHz", 90], ["600 kHz", 80]]

[[converter]]
id = "C4"
name = "loose"
rated_power = "10 W"
output = [{ voltage = "5 V", current = "1 A" }]
efficiency = 0.8

[[case]]
id = "rest"
name = "At rest"
duration = "2 h"
load = { C1 = "50 %", C2 = "off", C3 = "5 W" }

[[case]]
id = "run"
note = "everything on"

[[limit]]
name = "own"
unit = "dBuV"
setup = "lisn-50uH"
points = [["10 kHz", 94], ["500 kHz", 60], ["10 MHz", 60]]
bandwidth = [["10 kHz", "150 kHz", "1 kHz"], ["150 kHz", "30 MHz", "10 kHz"]]

[shelf.filter.bought]
rated_current = "2 A"
max_voltage = "60 V"
dm = [{ series = { L = "10 uH", R = "30 mohm" } }, { shunt = { C = "10 uF", R = "400 mohm" } }]
cm = [{ series = { L = "2 mH" } }]
note = "lent by the shelf"

[shelf.converter.brick]
rated_power = "25 W"
efficiency = "85 %"
min_input = "16 V"
max_input = "40 V"
"""

# Several cells that cannot be read, in every sort of place; the rest calculates.
BROKEN = """\
format = 1
colour = "red"
[bus]
low = "22 V"
nominal = "28 V"
high = "29 V"
rating = "lots"
temperature = "-400 degC"
[[filter]]
id = "FA"
rated_current = "8 V"
dm = [{ series = { L = "1 uH" } }, { shunt = { R = "1 ohm" } }, 7]
[[filter]]
id = "FB"
rated_current = "5 A"
dm = [{ series = { L = "1 uH", R = "1 mohm" } }]
cm = []
[[converter]]
id = "C1"
filter = "FX"
rated_power = "50 W"
efficiency = [["20 %", "84 %"], ["10 %", "190 %"]]
output = [{ voltage = "5 V", current = "x" }, 4]
[[converter]]
id = "C2"
filter = "FB"
rated_power = "50 W"
efficiency = "90 %"
output = [{ voltage = "5 V", current = "2 A" }]
[[converter]]
id = "C2"
filter = "FB"
rated_power = "50 W"
efficiency = "90 %"
output = 5
lead = "long"
[[case]]
id = "c"
load = { C2 = "200 V" }
"""

EMPTY = "format = 1\n[bus]\nlow = 22\nnominal = 28\nhigh = 29\n"
TEXTS = {"small": SMALL, "broken": BROKEN, "empty": EMPTY}

# What textual calls a key that types a character.
_NAMED = {
    " ": "space",
    "?": "question_mark",
    "[": "left_square_bracket",
    "]": "right_square_bracket",
    "<": "less_than_sign",
    ">": "greater_than_sign",
    ".": "full_stop",
    "+": "plus",
    "-": "minus",
    "(": "left_parenthesis",
    ")": "right_parenthesis",
    "*": "asterisk",
    "%": "percent_sign",
    ",": "comma",
    "_": "underscore",
}
_TYPES = {"space": " ", "question_mark": "?"}


@dataclass
class Log:
    """What a desk asked of the program around it."""

    left: int = 0
    clips: list[str] = field(default_factory=list)
    calculated: int = 0
    jobs: list[str] = field(default_factory=list)
    shares: list[float] = field(default_factory=list)


def desk_of(
    session: Session,
    *,
    ascii_only: bool = True,
    live: bool = True,
    everything: bool = False,
    known: Outcome | None = None,
) -> tuple[Desk, Log]:
    """A desk on ``session``; with ``live`` every edit is calculated at once, else never.

    An edit is calculated without the switch-on, the slow part, unless ``everything`` is asked for. ``known`` are the
    results of the document as it stands. What a command wants calculated aside is done at once.
    """
    log = Log()
    desk = Desk(session, ascii_only)

    def run() -> None:
        log.calculated += 1
        if live:
            desk.accept(calculate(session.snapshot()) if everything else without_switch_on(session))

    def leave() -> None:
        log.left += 1

    def job(work: Work) -> None:
        log.jobs.append(work.label)
        work.done(work.run(lambda: False, log.shares.append))

    desk.calculate, desk.leave, desk.clip, desk.start_job = run, leave, log.clips.append, job
    if known is None:
        run()
    elif live:
        desk.accept(replace(known, generation=session.generation))
    log.calculated = 0
    return desk, log


def without_switch_on(session: Session) -> Outcome:
    """All results but those that take long."""
    outcome = list(islice(stages(session.snapshot()), 3))[-1]
    return replace(outcome, complete=True)


def session_of(text: str) -> Session:
    """A session on a text, without a file."""
    loaded = store.parse(text, None, "test.toml")
    return Session(loaded.document, shelves=loaded.shelves, file_problems=loaded.problems, saved=loaded.document)


@cache
def results_of(text: str) -> Outcome:
    """All results of a text, calculated once."""
    return calculate(session_of(text).snapshot())


def small(name: str = "small", *, ascii_only: bool = True) -> Desk:
    return desk_of(session_of(TEXTS[name]), ascii_only=ascii_only, known=results_of(TEXTS[name]))[0]


@cache
def _demo(name: str) -> tuple[Session, Outcome]:
    session = open_file(PROJECTS / f"{name}.toml")
    return session, calculate(session.snapshot())


def demo(name: str, *, ascii_only: bool = True, everything: bool = False) -> tuple[Desk, Log]:
    """A desk on a project of the repository, whose results are calculated once for all tests."""
    first, outcome = _demo(name)
    session = Session(first.document, None, first.shelves, first.file_problems, saved=first.document)
    return desk_of(session, ascii_only=ascii_only, everything=everything, known=outcome)


def written(text: str, *, ascii_only: bool = True, everything: bool = False) -> tuple[Desk, Log]:
    """A desk on a text; its results are calculated once for all tests."""
    return desk_of(session_of(text), ascii_only=ascii_only, everything=everything, known=results_of(text))


def on_file(path: Path) -> tuple[Desk, Log]:
    return desk_of(open_file(path))


def calculated(document: Document) -> Outcome:
    """The results of a document, to be given to many desks."""
    return calculate(Session(document).snapshot())


def press(desk: Desk, keys: str) -> None:
    """Keys with spaces between: names as textual has them, or single characters."""
    for key in keys.split():
        if len(key) == 1:
            desk.key(_NAMED.get(key, key), key)
        else:
            desk.key(key, _TYPES.get(key))


def typed(desk: Desk, text: str) -> None:
    """Characters, one key each, spaces included."""
    for character in text:
        desk.key(_NAMED.get(character, character), character)


def key_of(name: str) -> tuple[str, str | None]:
    """A key of the command table as the terminal sends it: its name and its character."""
    if len(name) == 1:
        return _NAMED.get(name, name), name
    return name, _TYPES.get(name)


def screen(desk: Desk, width: int = 80, height: int = 24) -> list[str]:
    return [plain(line) for line in frame(desk, width, height)]


def shown(desk: Desk, width: int = 80, height: int = 24) -> str:
    return "\n".join(screen(desk, width, height))
