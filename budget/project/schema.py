"""Every table and field of a project file, described once.

Parsing, defaults, limits, the cells of the sheet, the help line under a cell, the starter file and the error texts all
read this module; nothing else knows what a field means. A new field is one line here and one in ``engine.model``.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

FORMAT = 1  # of the project file; a newer one is refused

# What the value of a field looks like. Every other kind names an entry of ``quantity.KINDS``.
TEXT = "text"
IDENT = "ident"  # a short name other rows refer to
CHOICE = "choice"
FILTER = "filter"  # the id of a filter, or "" for none
PART = "part"  # the name of a shelf part
TEXTS = "texts"  # a list of names
TABLE = "table"  # one nested table
TABLES = "tables"  # a list of nested tables
LADDER = "ladder"  # a list of { series = {...} } or { shunt = {...} }
ROWS = "rows"  # a list of rows of numbers
CURVE = "curve"  # one number, or a list of rows of numbers
LOADS = "loads"  # converter id -> share, power or "off"
PLAIN = frozenset({TEXT, IDENT, CHOICE, FILTER, PART, TEXTS})
NESTED = frozenset({TABLE, TABLES, LADDER, ROWS, CURVE, LOADS})


@dataclass(frozen=True, slots=True)
class Field:
    """One field: ``kind`` is its dimension (a name in ``quantity.KINDS``) or one of the shapes above.

    ``low`` and ``high`` are the limits in the field's own unit; ``above``/``below`` say that the limit itself is
    excluded. ``default`` is in the own unit too; ``otherwise`` words a default that depends on something else.
    """

    key: str
    kind: str
    help: str
    default: object = None
    required: bool = False
    low: float | None = None
    high: float | None = None
    above: bool = False
    below: bool = False
    otherwise: str = ""
    choices: tuple[str, ...] = ()
    fields: tuple[Field, ...] = ()  # of a nested table, or the columns of a row

    @property
    def title(self) -> str:
        return self.key.replace("_", " ")


@dataclass(frozen=True, slots=True)
class Table:
    """A table of the file: ``many`` for an array of tables, ``label`` the word for one of its rows."""

    key: str
    label: str
    help: str
    fields: tuple[Field, ...]
    many: bool = False

    def field(self, key: str) -> Field | None:
        return next((f for f in self.fields if f.key == key), None)


def _positive(key: str, kind: str, help: str, **more: object) -> Field:
    return Field(key, kind, help, low=0.0, above=True, **more)  # type: ignore[arg-type]


def _not_negative(key: str, kind: str, help: str, **more: object) -> Field:
    return Field(key, kind, help, low=0.0, **more)  # type: ignore[arg-type]


NOTE = Field("note", TEXT, "Anything worth remembering; not used in the calculation.")
_FREEZING = -273.15

BRANCH = (
    Field("place", CHOICE, "In series with the line, or across it.", choices=("series", "shunt"), required=True),
    _positive("L", "inductance", "Inductance of the element; in a shunt its stray inductance (ESL)."),
    _not_negative("R", "resistance", "Series resistance: winding, or ESR of a capacitor.", default=0.0),
    _positive("C", "capacitance", "Series capacitance; a shunt needs one, a series element has none."),
    _positive("Rp", "resistance", "Resistance across the inductance (core loss or damping)."),
    _positive("Cp", "capacitance", "Stray capacitance across the inductance."),
    _positive("saturation", "current", "Current at which 70 % of the inductance is left; series elements only."),
    NOTE,
)

DERATING = (
    Field("derate_from", "temperature", "Full rating up to this mounting temperature.", low=_FREEZING),
    Field("derate_to", "temperature", "No rating left at this temperature; linear between.", low=_FREEZING),
)

PROJECT = Table(
    "project",
    "project",
    "What this project is called and by whom.",
    (
        Field("title", TEXT, "Title of the project, on every report."),
        Field("revision", TEXT, "Revision of the design."),
        Field("author", TEXT, "Who is responsible for it."),
        NOTE,
    ),
)

RULES = Table(
    "rules",
    "rules",
    "The margins this design wants to keep.",
    (
        _positive("filter_load", "ratio", "Share of its derated rating that a filter may carry.", default=1.0),
        _positive("bus_load", "ratio", "Share of the bus rating that may be drawn.", default=1.0),
        _positive("converter_load", "ratio", "Share of its rated power a converter may deliver.", default=1.0),
        Field("growth", "ratio", "Added to every output power.", default=0.0, low=-1.0, above=True),
        Field("emission_margin", "level", "Wanted distance to an emission limit line.", default=6.0),
        Field("stability_margin", "level", "Wanted distance to instability.", default=6.0),
        Field(
            "combine",
            CHOICE,
            "How lines of unrelated clocks add: peaks may align, or root-sum-square.",
            default="arithmetic",
            choices=("arithmetic", "rss"),
        ),
        Field("emissions", TEXTS, "Names of the limit sets to check, with commas between.", default=()),
        _positive("inrush_window", "time", "Length of the switch-on calculation.", default=20e-3, high=10.0),
        NOTE,
    ),
)

BUS = Table(
    "bus",
    "bus",
    "The source, its feed, and the node where the filters are tied together.",
    (
        Field("name", TEXT, "What the bus is called."),
        _positive("low", "voltage", "Lowest steady voltage at the source.", required=True),
        _positive("nominal", "voltage", "Nominal voltage at the source.", required=True),
        _positive("high", "voltage", "Highest steady voltage at the source.", required=True),
        _positive("rating", "current", "Current the bus may deliver (breaker or wire)."),
        _not_negative("resistance", "resistance", "Loop resistance of the feed, source to filters.", default=0.0),
        _not_negative("inductance", "inductance", "Loop inductance of the feed, source to filters.", default=0.0),
        Field("temperature", "temperature", "At the mounting surface.", default=25.0, low=_FREEZING),
        _not_negative("rise", "time", "Linear rise of the source at switch-on; 0 is a step.", default=0.0),
        _positive("inrush_peak", "current", "Largest current the source stands at switch-on."),
        _positive("breaker_i2t", "i2t", "Let-through the breaker stands without opening."),
        _positive("surge", "voltage", "Voltage of a bus surge; with its time and rise, or none."),
        _not_negative("surge_time", "time", "How long the surge holds."),
        _not_negative("surge_rise", "time", "How long the surge takes to rise and to fall."),
        NOTE,
    ),
)

FILTER_TABLE = Table(
    "filter",
    "filter",
    "An EMI filter between the bus and the converters that share it.",
    (
        Field("id", IDENT, "Short name, unique over filters and converters.", required=True),
        Field("name", TEXT, "What it is."),
        Field("part", PART, "Part of the shelf whose fields hold where none is entered here."),
        _positive("rated_current", "current", "Rated current at full rating."),
        *DERATING,
        _positive("max_voltage", "voltage", "Highest steady voltage it stands."),
        _positive("max_surge", "voltage", "Highest voltage it stands for a moment.", otherwise="as max_voltage"),
        _positive("inrush_peak", "current", "Largest current it stands at switch-on."),
        _positive("inrush_i2t", "i2t", "Largest integral of current squared it stands."),
        _not_negative("isolation", "level", "Coupling around the filter: no more than this is taken away."),
        Field("dm", LADDER, "Differential-mode ladder, bus side first; loop values.", fields=BRANCH),
        Field("cm", LADDER, "Common-mode ladder, bus side first; values for the total current.", fields=BRANCH),
        Field(
            "attenuation",
            ROWS,
            "Insertion loss in 50 ohm, in place of the ladders.",
            fields=(
                _positive("f", "frequency", "Frequency.", required=True),
                Field("dm", "level", "Differential-mode insertion loss.", required=True),
                Field("cm", "level", "Common-mode insertion loss.", required=True),
            ),
        ),
        _not_negative(
            "resistance",
            "resistance",
            "Loop DC resistance of a filter given as a table.",
            otherwise="needed with a table",
        ),
        NOTE,
    ),
    many=True,
)

_EDGES = (
    _not_negative("rise", "time", "Rise time, 0 to 100 %.", required=True),
    _not_negative("fall", "time", "Fall time, 100 % to 0.", required=True),
)


def _duty(help: str, **more: object) -> Field:
    return Field("duty", "ratio", help, low=0.0, high=1.0, above=True, below=True, **more)  # type: ignore[arg-type]


CONVERTER_TABLE = Table(
    "converter",
    "converter",
    "A DC-DC converter behind a filter.",
    (
        Field("id", IDENT, "Short name, unique over filters and converters.", required=True),
        Field("name", TEXT, "What it feeds."),
        Field("part", PART, "Part of the shelf whose fields hold where none is entered here."),
        Field("filter", FILTER, "The filter it is behind; empty: not allocated, draws nothing.", default=""),
        _positive("rated_power", "power", "Rated output power.", required=True),
        Field(
            "output",
            TABLES,
            "Its outputs: name, voltage, current at 100 % load.",
            required=True,
            fields=(
                Field("name", TEXT, "What the rail is called.", default=""),
                Field("voltage", "voltage", "Output voltage; its sign does not matter to the power.", required=True),
                _not_negative("current", "current", "Output current at 100 % load.", required=True),
                NOTE,
            ),
        ),
        Field("growth", "ratio", "Added to its output power, in place of the rule's.", low=-1.0, above=True),
        Field(
            "efficiency",
            CURVE,
            "One number at 100 % load, or points over the share of rated power.",
            required=True,
            fields=(
                _positive("share", "ratio", "Share of the rated power.", required=True),
                _positive("efficiency", "ratio", "Output power over input power there.", required=True, high=1.0),
            ),
        ),
        _not_negative("idle_power", "power", "Drawn with no load."),
        _not_negative("off_power", "power", "Drawn when a case switches it off.", default=0.0),
        *DERATING,
        _positive("min_input", "voltage", "Lowest voltage at its terminals at which it works."),
        _positive("max_input", "voltage", "Highest steady voltage at its terminals."),
        _positive("max_surge", "voltage", "Highest voltage it stands for a moment.", otherwise="as max_input"),
        _positive("turn_on", "voltage", "It starts when its terminals reach this.", otherwise="as min_input"),
        _positive("turn_off", "voltage", "It stops when its terminals fall below this.", otherwise="90 % of turn_on"),
        _not_negative("start_delay", "time", "From reaching turn_on to running.", default=0.0),
        _not_negative("soft_start", "time", "Ramp of its power after the delay.", default=0.0),
        _positive("output_capacitance", "capacitance", "On the first output, charged during soft start."),
        Field(
            "lead",
            TABLE,
            "Wiring between its filter and this converter, loop values.",
            fields=(
                _not_negative("R", "resistance", "Loop resistance of the lead.", default=0.0),
                _not_negative("L", "inductance", "Loop inductance of the lead.", default=0.0),
                NOTE,
            ),
        ),
        Field("input", LADDER, "Its own input ladder, from its terminals inward to the switch.", fields=BRANCH),
        _positive("control_bandwidth", "frequency", "Bandwidth of its voltage control."),
        _positive("hold_up", "time", "How long it shall run on without the bus; with hold_up_to."),
        _positive("hold_up_to", "voltage", "Terminal voltage it may fall to in that time."),
        _positive("frequency", "frequency", "Of its input ripple (twice the switch's in push-pull and bridge)."),
        Field(
            "frequency_tolerance", "ratio", "How far its clock may be off.", default=0.0, low=0.0, high=1.0, below=True
        ),
        Field("clock", TEXT, "Converters that name the same clock run in step.", default=""),
        Field("phase", "angle", "Delay of its waveform within a period.", default=0.0),
        Field(
            "chop",
            TABLE,
            "Pulsed current drawn at the switch.",
            fields=(
                _duty("Share of the period the switch is on, at nominal bus voltage.", required=True),
                *_EDGES,
                Field("ripple", "ratio", "Slope of the pulse top, end to end.", default=0.0, low=0.0, high=2.0),
                NOTE,
            ),
        ),
        Field(
            "ripple",
            TABLE,
            "Ripple current at its terminals.",
            fields=(
                _not_negative("pp", "current", "Peak to peak.", required=True),
                Field("shape", CHOICE, "Shape of the ripple.", default="triangle", choices=("triangle", "sine")),
                _duty("Rising share of the triangle.", default=0.5),
                NOTE,
            ),
        ),
        Field(
            "spectrum",
            ROWS,
            "Measured lines of the current at its terminals, r.m.s.",
            fields=(
                _positive("f", "frequency", "Frequency of the line.", required=True),
                Field("level", "level_uA", "Level of the line.", required=True),
            ),
        ),
        Field(
            "duty_law",
            CHOICE,
            "How the duty follows the input voltage.",
            default="constant",
            choices=("constant", "inverse-line", "flyback"),
        ),
        Field(
            "cm",
            TABLE,
            "Common-mode source: the switch's swing behind a capacitance to chassis.",
            fields=(
                _positive("capacitance", "capacitance", "From the swinging node to chassis.", required=True),
                _not_negative("swing", "voltage", "Voltage step of the swinging node.", required=True),
                *_EDGES,
                _duty("Share of the period it is high.", default=0.5),
                _not_negative("shunt", "capacitance", "Both lines to chassis together.", default=0.0),
                NOTE,
            ),
        ),
        NOTE,
    ),
    many=True,
)

CASE = Table(
    "case",
    "load case",
    "What each converter delivers in one phase of use.",
    (
        Field("id", IDENT, "Short name of the case.", required=True),
        Field("name", TEXT, "What happens in it."),
        _positive("duration", "time", "How long it lasts; gives energy and charge."),
        Field("load", LOADS, "Share of the entered outputs, an output power, or off; 100 % if empty."),
        NOTE,
    ),
    many=True,
)

LIMIT = Table(
    "limit",
    "limit line",
    "An emission limit of your own.",
    (
        Field("name", IDENT, "Name of the limit set, as in rules, emissions.", required=True),
        Field("unit", CHOICE, "What is measured.", required=True, choices=("dBuV", "dBuA")),
        Field(
            "setup",
            CHOICE,
            "What stands in for the source.",
            required=True,
            choices=("lisn-50uH", "lisn-5uH", "cap-10uF"),
        ),
        Field(
            "points",
            ROWS,
            "Corners of the limit line, rising in frequency.",
            required=True,
            fields=(
                _positive("f", "frequency", "Frequency of the corner.", required=True),
                Field("limit", "level_line", "Limit there, in the unit of the line.", required=True),
            ),
        ),
        Field(
            "bandwidth",
            ROWS,
            "Receiver bandwidths: from, to, bandwidth.",
            fields=(
                _not_negative("from", "frequency", "From this frequency.", required=True),
                _positive("to", "frequency", "Up to this frequency.", required=True),
                _positive("rbw", "frequency", "Receiver bandwidth.", required=True),
            ),
        ),
        NOTE,
    ),
    many=True,
)

# The value of a converter's name in a case's ``load`` table; its unit decides between a share and a power.
LOAD = Field("load", "ratio", "A share (60 %), an output power (12 W), or off. Empty: 100 %.", default=1.0, low=0.0)

SHELF_FILES = Field("shelf_files", TEXTS, "Files of shelf parts below this folder, with commas between.", default=())

TABLES_BY_KEY: dict[str, Table] = {t.key: t for t in (PROJECT, RULES, BUS, FILTER_TABLE, CONVERTER_TABLE, CASE, LIMIT)}
ROOT_KEYS = ("format", "shelf_files", *TABLES_BY_KEY, "shelf")
SHELVES = ("filter", "converter")

# Names of the built-in limit sets (contract 1.6).
LIMIT_SETS = ("CE102", "CE101-aircraft", "CE101-ship", "CE01", "CE03", "DO160-21L")


@cache
def shelf_table(key: str) -> Table:
    """The table of a shelf part: the fields of a row except what makes it one particular row."""
    whole = TABLES_BY_KEY[key]
    own = tuple(f for f in whole.fields if f.key not in ("id", "part", "filter"))
    return Table(key, f"{whole.label} part", f"A reusable {whole.label}.", own, many=True)


def limits_text(field: Field, show: object) -> str:
    """The limits of a quantity field in words; ``show(value, kind)`` formats a number (see ``quantity.show``)."""
    assert callable(show)
    words = []
    if field.low is not None:
        words.append(f"{'above' if field.above else 'at least'} {show(field.low, field.kind)}")
    if field.high is not None:
        words.append(f"{'below' if field.below else 'at most'} {show(field.high, field.kind)}")
    return ", ".join(words)
