"""The words of the program, in one place: the help screen, the README, ``budget --help`` and a test of all texts
take them from here, so that one thing has one name everywhere."""

from __future__ import annotations

import textwrap

# What is said in ``budget --help`` too stands first.
FIRST = 8
WORDS: tuple[tuple[str, str], ...] = (
    ("corner", "one load case at one line: low, nominal or high voltage of the source"),
    ("worst", "the corner with the least margin; the default of every view"),
    ("allowed", "rated current of a filter, derated for the mounting temperature"),
    ("wanted", "what the rules leave of a limit: thin is inside the limit, beyond the wanted"),
    ("headroom", "what is left of the wanted current of a filter, as a share of it"),
    ("reference", "the state that all changes are shown against, until it is kept or dropped (K)"),
    ("trial", "a state of the project held by a name, to compare and to go back to (T)"),
    ("reach", "how far one cell can go either way before a check fails"),
    ("sweep", "two cells over their ranges: the worst margin at every point"),
    ("allocation", "which converter stands behind which filter"),
    ("check", "one comparison with a limit: FAIL, thin, ok, or no data where something is not entered"),
    ("margin", "the distance to the limit, as a share of it or in dB; below zero it is over"),
    ("out, in", "output power at the rails; input power at the terminals (a filter: of all behind it)"),
    ("heat", "what does not come out again: converter and lead; a filter's row adds all behind it"),
    ("at V", "voltage at the terminals; of a filter: behind it; of the bus: where filters are tied"),
    ("shelf", "parts to take into many projects; what a part leaves open is entered in the row"),
    ("marks", "! cannot be read or over   ~ being calculated   * not saved   + goes on (= shows all of it)"),
    ("changes", "against the reference, below each row: sign and amount, ^ better, ! worse"),
    ("typing", "2.2 uH, 4.5 A, 85 %, off; 4.7u takes the unit of its field; 2 * 1.5 A + 200 mA adds up"),
)

# Words that would name the same thing twice, and the one that is used.
INSTEAD: dict[str, str] = {
    "scenario": "load case",
    "use case": "load case",
    "baseline": "reference",
    "snapshot": "trial",
    "bookmark": "trial",
    "what-if": "trial",
    "assignment": "allocation",
    "placement": "allocation",
    "supply rail": "bus",
    "power supply": "converter",
    "violation": "a check that fails",
    "warning light": "mark",
    "spreadsheet": "sheet",
    "workbook": "project",
    "catalogue": "shelf",
    "catalog": "shelf",
    "library part": "part from the shelf",
    "derived cell": "calculated cell",
}


def for_terminal(width: int = 78) -> str:
    """The first words with their meanings, for the end of ``budget --help``."""
    lines = ["words:"]
    for word, meaning in WORDS[:FIRST]:
        lines += textwrap.wrap(f"{word:<10}  {meaning}", width, initial_indent="  ", subsequent_indent=" " * 14)
    return "\n".join(lines)


def markdown() -> str:
    """All words as the README's table."""
    return "\n".join(["| Word | Meaning |", "|---|---|", *(f"| {word} | {meaning} |" for word, meaning in WORDS)])
