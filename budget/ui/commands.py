"""The one table of commands: keys, hint line, command list, help screen and the README's key table come from it."""

from __future__ import annotations

from dataclasses import dataclass

SHEET, FIELDS, SPECTRUM, PLAN, RESPONSE = "sheet", "fields", "spectrum", "plan", "response"
SWITCHON, STABLE, ALLOCATION, ALL = "switchon", "stable", "allocation", "all"
REACH, MAP = "reach", "map"


@dataclass(frozen=True, slots=True)
class Command:
    """One command: ``name`` is the method of the desk that does it, ``keys`` as textual names them.

    The first key is one that arrives on every terminal; ``hint`` is its word on the hint line ("" keeps it off), in the
    order of ``rank``, and ``where`` the views in which it means something.
    """

    name: str
    keys: tuple[str, ...]
    label: str
    group: str
    hint: str = ""
    where: tuple[str, ...] = (ALL,)
    rank: int = 50


COMMANDS: tuple[Command, ...] = (
    Command("up", ("up",), "one row up", "move"),
    Command("down", ("down",), "one row down", "move"),
    Command("left", ("left", "shift+tab"), "one cell to the left", "move"),
    Command("right", ("right", "tab"), "one cell to the right", "move"),
    Command("first", ("home",), "first cell of the row", "move"),
    Command("last", ("end",), "last cell of the row", "move"),
    Command("page_up", ("pageup",), "one page up", "move"),
    Command("page_down", ("pagedown",), "one page down", "move"),
    Command("find", ("g",), "go to a row by its name", "move"),
    Command(
        "edit", ("enter",), "edit the cell; on a calculated one, go to what it follows from", "edit", "edit", rank=10
    ),
    Command("empty", ("delete", "backspace"), "empty the cell: back to its default", "edit"),
    Command("undo", ("u", "ctrl+z"), "undo", "edit", "undo", rank=14),
    Command("redo", ("U", "ctrl+y"), "redo", "edit"),
    Command("copy", ("c", "ctrl+c"), "copy the cell", "edit"),
    Command("cut", ("x", "ctrl+x"), "cut the cell", "edit"),
    Command("paste", ("v", "ctrl+v"), "paste the cell", "edit"),
    Command("fill", ("d",), "fill down: take the value of the cell above", "edit"),
    Command("new", ("n",), "new row after this one (on a filter: a converter behind it)", "rows", "new", rank=62),
    Command("new_filter", ("N",), "new filter", "rows", "", (SHEET,)),
    Command("duplicate", ("D",), "duplicate the row", "rows"),
    Command("remove", ("R",), "remove the row", "rows"),
    Command("copy_row", ("C",), "copy the row", "rows"),
    Command("cut_row", ("X",), "cut the row", "rows"),
    Command("paste_row", ("V",), "paste the row after this one", "rows"),
    Command("earlier", ("[",), "move the row up", "rows"),
    Command("later", ("]",), "move the row down", "rows"),
    Command("rename", ("e",), "rename its id everywhere", "rows"),
    Command("filter_up", ("<",), "converter behind the filter above", "rows", "", (SHEET, FIELDS)),
    Command(
        "filter_down", (">",), "converter behind the filter below", "rows", "next filter", (SHEET, FIELDS), rank=61
    ),
    Command("to_filter", ("m",), "converter behind a filter from a list", "rows", "", (SHEET, FIELDS)),
    Command("take_part", ("p",), "take a part from the shelf", "rows", "", (SHEET, FIELDS)),
    Command("read", ("=",), "all there is to say about the cell, and the message, at full length", "show"),
    Command("corner", ("o",), "choose the case and line that are shown", "show", "corner", rank=22),
    Command("worst", ("O",), "show the worst over all cases and lines", "show"),
    Command("view_sheet", ("s", "f2"), "the sheet: bus, filters, converters", "show"),
    Command("go_back", ("escape",), "stop a calculation; else back where you came from, or to the sheet", "show"),
    Command("view_fields", ("f", "f3"), "every field of the selected row", "show", "fields", rank=20),
    Command("view_rules", ("r", "f4"), "the rules: wanted margins", "show"),
    Command("view_loads", ("l", "f5"), "load cases by converters", "show", "loads", rank=21),
    Command("view_checks", ("k", "f6"), "all checks from worst to best", "show", "checks", rank=23),
    Command("view_spectrum", ("a",), "emissions: every line against the limit", "show", "emissions", rank=24),
    Command("view_plan", ("y",), "frequency plan: clocks that meet, beats", "show"),
    Command("view_response", ("z",), "the filter over frequency: loss, impedance, damping", "show", "filter", rank=25),
    Command("view_switchon", ("J",), "switch-on and surge over time", "show", "switch-on", rank=26),
    Command("view_stable", ("Y",), "stability: impedances and modes", "show", "stability", rank=27),
    Command("view_allocation", ("Z",), "proposed allocations side by side", "show", "allocation", rank=28),
    Command("propose", ("G",), "search for an allocation", "show", "search", (ALLOCATION, SHEET), rank=29),
    Command(
        "next_mode",
        ("A",),
        "DM, CM, both; or currents, voltages; or fails, thin; or map, numbers",
        "show",
        "mode",
        (SPECTRUM, RESPONSE, SWITCHON, REACH, MAP),
        rank=5,
    ),
    Command(
        "next_one",
        ("j",),
        "next limit set, event or filter",
        "show",
        "next",
        (SPECTRUM, PLAN, SWITCHON, STABLE),
        rank=6,
    ),
    Command("log_time", ("L",), "time axis linear or logarithmic", "show", "log", (SWITCHON,), rank=7),
    Command(
        "what_helps", ("H",), "what would bring it within the limit", "show", "what helps", (SWITCHON, STABLE), rank=8
    ),
    Command("toggle_bare", ("B",), "the unfiltered level beside it", "show", "unfiltered", (SPECTRUM,), rank=7),
    Command("export", ("E",), "write what is drawn as CSV", "show", "CSV", (SPECTRUM, SWITCHON, STABLE, MAP), rank=9),
    Command(
        "scan_clock", ("M",), "move one clock over a range, find the best place", "show", "move clock", (PLAN,), rank=5
    ),
    Command("hold", ("K",), "hold the present as reference; then keep it or drop back", "try", "reference", rank=30),
    Command("view_trials", ("T",), "trials: states held by name, side by side", "try", "trials", rank=31),
    Command("ask_reach", ("Q",), "how far this cell can go before a check fails", "try", "how far", rank=32),
    Command("ask_sweep", ("P",), "sweep this cell and another: a map of the worst margin", "try", "sweep", rank=33),
    Command("view_map", ("F",), "the map of the last sweep", "try"),
    Command("view_limits", ("i", "f7"), "emission limit lines of your own", "show"),
    Command("view_shelf", ("h", "f8"), "shelf of reusable parts", "show"),
    Command("view_project", ("t", "f9"), "title, author, shelf files", "show"),
    Command("view_faults", ("b",), "cells that cannot be read, and warnings", "show"),
    Command("view_recovered", ("I",), "work of a session that was cut off: take it back or discard it", "file"),
    Command("save", ("w", "ctrl+s"), "save", "file", "save", rank=11),
    Command("save_as", ("W",), "save under another name", "file"),
    Command("commands", ("space",), "list of all commands", "file", "all", rank=63),
    Command("help", ("question_mark", "f1"), "keys, words and cautions", "file", "help", rank=12),
    Command("quit", ("q", "ctrl+q"), "quit", "file", "quit", rank=13),
)

BY_KEY: dict[str, Command] = {key: command for command in COMMANDS for key in command.keys}
GROUPS = {
    "move": "Moving",
    "edit": "Editing",
    "rows": "Rows",
    "show": "Showing",
    "try": "Trying",
    "file": "File and program",
}

# Characters that start typing into a cell at once.
STARTS_NUMBER = frozenset("0123456789.+-(")

_SHOWN = {
    "question_mark": "?",
    "escape": "Esc",
    "enter": "Enter",
    "pageup": "PageUp",
    "pagedown": "PageDown",
    "delete": "Del",
    "backspace": "Backspace",
    "space": "Space",
    "shift+tab": "Shift+Tab",
    "tab": "Tab",
    "up": "Up",
    "down": "Down",
    "left": "Left",
    "right": "Right",
    "home": "Home",
    "end": "End",
}


def key_text(key: str) -> str:
    """A key as it is written on the screen and in the docs."""
    if key in _SHOWN:
        return _SHOWN[key]
    if key.startswith("ctrl+"):
        return f"Ctrl+{key[5:].upper()}"
    return key.upper() if len(key) > 1 and key[0] == "f" else key


def keys_text(command: Command) -> str:
    return " or ".join(key_text(key) for key in command.keys)


# What a command is called on the hint line of a view where it does something of its own.
OWN_HINTS: dict[str, dict[str, str]] = {
    "trials": {"edit": "switch to", "new": "hold as", "remove": "remove", "hold": "make reference"},
    "allocation": {"edit": "take", "new": "wish", "remove": "remove wish", "propose": "search"},
    "recovered": {"edit": "take back or discard"},
    "reach": {"edit": "put in", "next_mode": "fails or thin", "ask_reach": "again"},
    "map": {"edit": "put both in", "next_mode": "map or numbers", "ask_sweep": "again"},
}


def hints(view: str) -> list[tuple[str, str]]:
    """(key, word) for the hint line of a view, most useful first."""
    own = OWN_HINTS.get(view, {})
    first = [(key_text(c.keys[0]), own[c.name]) for c in COMMANDS if c.name in own]
    fitting = [c for c in COMMANDS if c.hint and c.name not in own and (ALL in c.where or view in c.where)]
    return first + [(key_text(c.keys[0]), c.hint) for c in sorted(fitting, key=lambda c: c.rank)]


def markdown_table() -> str:
    """The key table of the README."""
    lines = ["| Keys | What they do |", "|---|---|"]
    for group, title in GROUPS.items():
        lines.append(f"| **{title}** | |")
        for command in COMMANDS:
            if command.group == group:
                keys = ", ".join(f"`{key_text(key)}`" for key in command.keys)
                lines.append(f"| {keys} | {command.label} |")
    return "\n".join(lines)
