"""Document -> project in SI floats, with every problem found on the way.

``build`` never fails: a row that cannot be calculated is left out and its cells are named; a bad cell that has a
default is calculated with the default. Rows are read once: an unchanged row is the same object in the next document, so
its reading is taken from the cache, and so is the engine's input made of it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, fields
from functools import cache
from typing import Any

from budget.engine import model
from budget.project import schema
from budget.project.document import Document, Path, Tree
from budget.project.problems import Problem, found, place, printable
from budget.project.read import Reading, read_table, rising

_OWN = frozenset(("id", "part", "filter"))  # what makes a row one particular row; no shelf part lends it
_LADDERS = ("dm", "cm", "attenuation", "input")  # a row without one of these that it should have is another row
_CM_SOURCE = ("converter", "cm")  # has the name of a ladder, and is none
MAX_PROBLEMS = 1_000  # of each sort: nobody reads more, and a hostile file could ask for a hundred thousand
MAX_ELEMENTS = 1_500  # of all differential ladders together: one network, whose matrices grow with the square
_FROM_NEWER = "was found, of a newer program; this one reads up to format"


@dataclass(frozen=True, slots=True)
class Shelf:
    """One file of shelf parts: ``name`` below the project's folder ("" for the project itself), ``data`` its tables."""

    name: str
    data: Tree


@dataclass(frozen=True, slots=True)
class Built:
    """A project, or ``None`` where not even the bus can be read or the file is of a newer format, and what is wrong."""

    project: model.Project | None
    problems: tuple[Problem, ...]
    left_out: tuple[str, ...] = ()  # ids of rows that could not be calculated

    @property
    def errors(self) -> tuple[Problem, ...]:
        return tuple(p for p in self.problems if p.error)

    @property
    def warnings(self) -> tuple[Problem, ...]:
        return tuple(p for p in self.problems if not p.error)


@dataclass(frozen=True, slots=True)
class _Part:
    """A part of the shelf: the file it stands in, its fields as typed, and what is wrong with them."""

    source: str
    raw: Tree
    reading: Reading


_Slot = tuple[str, int, int]
_Entry = tuple[Any, Any, Reading, Any]


@dataclass(slots=True)
class Cache:
    """Readings of rows by the identity of what they were read from; holds the rows, so that an id stays taken."""

    rows: dict[_Slot, _Entry] = field(default_factory=dict)


def build(document: Document, shelves: Iterable[Shelf] = (), cache: Cache | None = None) -> Built:
    """Read the whole document; ``shelves`` are the parts files it names, already parsed.

    Returns a ``Built``; does not raise on any data that TOML can hold.
    """
    run = _Build(document, cache or Cache())
    return run.all((Shelf("", document.data), *shelves))


class _Build:
    """One run of ``build``: the pieces share the problem list and the cache."""

    def __init__(self, document: Document, cache: Cache) -> None:
        self.document = document
        self.data = document.data
        self.cache = cache
        self.used: dict[_Slot, _Entry] = {}
        self.problems: list[Problem] = []
        self.left_out: list[str] = []
        self.told = {True: 0, False: 0}  # errors and others

    def note(self, path: Path, text: str, *, error: bool = True, source: str = "") -> None:
        self.told[error] += 1
        if self.told[error] == MAX_PROBLEMS:
            what = "errors" if error else "remarks"
            self.problems.append(
                Problem(("format",), f"there are more than {MAX_PROBLEMS} {what}; the first are told.", error)
            )
        if self.told[error] >= MAX_PROBLEMS:
            return
        owner = Document(_shelf_data(self.shelves, source)) if source else self.document
        self.problems.append(Problem(path, text, error, source, place(owner, path)))

    def take(self, reading: Reading, base: Path, source: str = "") -> None:
        for p in reading.problems:
            self.note((*base, *p.path), p.text, error=p.error, source=source)

    def all(self, shelves: tuple[Shelf, ...]) -> Built:
        self.shelves = shelves
        if not self.root():
            return Built(None, tuple(self.problems))
        self.parts = self.shelf_parts()
        title = self.single("project").get("title") or ""
        rules = self.rules()
        bus = self.bus()
        filters = self.rows("filter")
        converters = self.rows("converter")
        cases = self.rows("case")
        limits = self.rows("limit")
        self.unique((("filter", filters), ("converter", converters)), "id")
        self.unique((("case", cases),), "id")
        self.unique((("limit", limits),), "name")
        self.references(filters, converters, cases)
        self.clocks(converters)
        rules = self.emission_names(rules, limits)
        self.cache.rows = self.used
        if bus is None:
            return Built(None, tuple(self.problems), tuple(self.left_out))
        known = {f.id for _, f in filters if f}
        # What is behind a filter that cannot be calculated is left out with it, not called "not allocated".
        lost = set(_idents(self.data.get("filter"))) - known
        converters = [(n, c) for n, c in converters if not self.lose(c, lost)]
        own = _first_of_each((li for _, li in limits if li and li.name not in schema.LIMIT_SETS), "name")
        project = model.Project(
            bus=bus,
            filters=_first_of_each(f for _, f in filters if f),
            converters=tuple(
                c if c.filter in known or not c.filter else _with(c, filter="")
                for c in _first_of_each(c for _, c in converters if c)
            ),
            cases=_first_of_each(c for _, c in cases if c) or (model.Case("full"),),
            rules=rules,
            limits=own,
            checked=_checked(rules.emissions, own, bus.nominal),
            title=title,
        )
        if not self.fits(project):
            return Built(None, tuple(self.problems), tuple(self.left_out))
        return Built(project, tuple(self.problems), tuple(self.left_out))

    def fits(self, project: model.Project) -> bool:
        """Whether the network is one that can be calculated in the memory of an ordinary machine."""
        ladders = (*(f.dm for f in project.filters), *(c.input for c in project.converters))
        count = sum(map(len, ladders))
        if count > MAX_ELEMENTS:
            text = f"the ladders have {count} elements together; at most {MAX_ELEMENTS} can be calculated."
            self.note(("filter",), text)
        return count <= MAX_ELEMENTS

    def lose(self, converter: model.Converter | None, lost: set[str]) -> bool:
        """Whether a converter goes with its filter; it is named as left out then."""
        if converter is None or converter.filter not in lost:
            return False
        self.left_out.append(converter.id)
        return True

    def root(self) -> bool:
        """Note what is wrong at the top; whether the file is of a format that can be read."""
        version = self.data.get("format")
        if version is None:
            self.note(("format",), f"is missing and taken as {schema.FORMAT}; it belongs at the top.", error=False)
        elif not isinstance(version, int) or isinstance(version, bool) or version < 1:
            self.note(("format",), f"{found(version)} was found; the whole number {schema.FORMAT} was expected.")
        elif version > schema.FORMAT:
            self.note(("format",), f"{found(version)} {_FROM_NEWER} {schema.FORMAT}.")
            return False
        for key in self.data:
            if key not in (*schema.ROOT_KEYS, "note"):
                self.note((key,), "is an unknown key; it is kept, and not used.", error=False)
        files = self.data.get("shelf_files", [])
        if not isinstance(files, list) or not all(isinstance(f, str) for f in files):
            self.note(("shelf_files",), f"{found(files)} was found; a list of file names was expected.")
        return True

    def single(self, key: str) -> dict[str, Any]:
        """The values of a table that stands once."""
        table = schema.TABLES_BY_KEY[key]
        raw = self.data.get(key, {})
        reading = Reading()
        if not isinstance(raw, dict):
            self.note((key,), f"{found(raw)} was found; a table [{key}] was expected.")
            raw = {}
        values = read_table(table.fields, raw, reading)
        if key == "bus" and key not in self.data:
            self.note((key,), "is missing; a table [bus] with low, nominal and high was expected.")
            return {**values, "broken": True}
        self.take(reading, (key,))
        return {**values, "broken": reading.broken}

    def rules(self) -> model.Rules:
        return model.Rules(**_only(model.Rules, self.single("rules")))

    def bus(self) -> model.Bus | None:
        values = self.single("bus")
        if values["broken"]:
            return None
        low, nominal, high = values["low"], values["nominal"], values["high"]
        if not low <= nominal <= high:
            self.note(("bus", "nominal"), "lies outside low to high; low <= nominal <= high was expected.")
            return None
        surge = ("surge", "surge_time", "surge_rise")
        given = [k for k in surge if values[k] is not None]
        if given and len(given) < 3:
            missing = next(k for k in surge if values[k] is None)
            self.note(("bus", missing), "is missing; surge, surge_time and surge_rise go together, all or none.")
            values.update(dict.fromkeys(surge))
        return model.Bus(**_texts_filled(_only(model.Bus, values)))

    def shelf_parts(self) -> dict[str, dict[str, _Part]]:
        """Every shelf part by table and name; each is read once for its own problems."""
        parts: dict[str, dict[str, _Part]] = {key: {} for key in schema.SHELVES}
        for shelf in self.shelves:
            version = shelf.data.get("format", schema.FORMAT)
            if shelf.name and version != schema.FORMAT:
                newer = isinstance(version, int) and version > schema.FORMAT
                text = f"{_FROM_NEWER} {schema.FORMAT}." if newer else "was found; the whole number 1 was expected."
                self.note(("format",), f"{found(version)} {text}", source=shelf.name)
                if newer:
                    continue
            section = shelf.data.get("shelf", {})
            if not isinstance(section, dict):
                text = f"{found(section)} was found; tables [shelf.filter.NAME] were expected."
                self.note(("shelf",), text, source=shelf.name)
                continue
            for key, named in section.items():
                if key == "note" and isinstance(named, str):
                    continue
                if key not in schema.SHELVES or not isinstance(named, dict):
                    self.note(
                        ("shelf", key),
                        "was found; [shelf.filter.NAME] or [shelf.converter.NAME] was expected.",
                        source=shelf.name,
                    )
                    continue
                for name, raw in named.items():
                    if name != "note" or not isinstance(raw, str):
                        self.shelf_part(parts[key], shelf, key, name, raw)
        return parts

    def shelf_part(self, taken: dict[str, _Part], shelf: Shelf, key: str, name: str, raw: Any) -> None:
        base: Path = ("shelf", key, name)
        if not isinstance(raw, dict):
            self.note(base, f"{found(raw)} was found; a table of fields was expected.", source=shelf.name)
            return
        if name in taken:
            other = printable(taken[name].source, 60) or "this file"
            self.note(base, f"stands in {other} too; a part has one place. Rename one of the two.", source=shelf.name)
            return
        slot = (f"shelf {key}", id(raw), 0)
        hit = self.cache.rows.get(slot) or (raw, {}, _read_part(key, raw), None)
        self.used[slot] = hit
        self.take(hit[2], base, shelf.name)
        taken[name] = _Part(shelf.name, raw, hit[2])

    def rows(self, key: str) -> list[tuple[int, Any]]:
        """The rows of an array of tables as (index, engine object or None where the row cannot be calculated)."""
        raw = self.data.get(key, [])
        if not isinstance(raw, list) or not all(isinstance(r, dict) for r in raw):
            self.note((key,), f"{found(raw)} was found; rows [[{key}]] were expected.")
            return []
        return [(index, self.row(key, index, row)) for index, row in enumerate(raw)]

    def row(self, key: str, index: int, row: Tree) -> Any:
        part, told = {}, Reading()
        if key in schema.SHELVES and isinstance(row.get("part"), str) and row["part"]:
            shelved = self.parts[key].get(row["part"])
            if shelved is None:
                names = ", ".join(printable(n) for n in list(self.parts[key])[:6]) or "none"
                self.note(
                    (key, index, "part"),
                    f"{found(row['part'])} is not on the shelf; the {key} parts there are: {names}.",
                )
            else:
                part, told = shelved.raw, shelved.reading
        slot = (key, id(row), id(part) if part else 0)
        hit = self.cache.rows.get(slot)
        if hit is None:
            reading = Reading()
            hit = (row, part, reading, _read_row(key, row, part, reading))
        self.used[slot] = hit
        _, _, reading, made = hit
        # What is wrong with the part by itself was said once, at the shelf.
        said = {(p.path, p.text) for p in told.problems if p.path[0] not in row}
        self.take(Reading(problems=[p for p in reading.problems if (p.path, p.text) not in said]), (key, index))
        if made is None:
            ident = row.get("name" if key == "limit" else "id")
            self.left_out.append(ident if isinstance(ident, str) and ident else f"{key} number {index + 1}")
        return made

    def unique(self, groups: tuple[tuple[str, list[tuple[int, Any]]], ...], key: str) -> None:
        seen: dict[str, str] = {}
        for table, _ in groups:
            for index, row in enumerate(_listed(self.data.get(table))):
                ident = row.get(key) if isinstance(row, dict) else None
                if not isinstance(ident, str) or not ident:
                    continue
                here = f"{schema.TABLES_BY_KEY[table].label} number {index + 1}"
                if ident in seen:
                    self.note((table, index, key), f"{found(ident)} is taken by {seen[ident]}; a new one was expected.")
                else:
                    seen[ident] = here

    def references(
        self, filters: list[tuple[int, Any]], converters: list[tuple[int, Any]], cases: list[tuple[int, Any]]
    ) -> None:
        known = _idents(self.data.get("filter"))
        for index, _ in converters:
            target = self.data["converter"][index].get("filter", "")
            if isinstance(target, str) and target and target not in known:
                names = ", ".join(printable(n) for n in known[:8]) or "none"
                self.note(
                    ("converter", index, "filter"),
                    f"{found(target)} does not exist; the filters are: {names}.",
                )
        ids = frozenset(_idents(self.data.get("converter")))
        for index, case in cases:
            for ident, _ in case.load if case else ():
                if ident not in ids:
                    self.note(("case", index, "load", ident), f"no converter has the id {found(ident)}.")

    def clocks(self, converters: list[tuple[int, Any]]) -> None:
        first: dict[str, model.Converter] = {}
        for index, c in converters:
            if c is None or not c.clock:
                continue
            other = first.setdefault(c.clock, c)
            for key in ("frequency", "frequency_tolerance"):
                if getattr(c, key) != getattr(other, key):
                    self.note(
                        ("converter", index, key),
                        f"differs from that of {printable(other.id)}, which names the same clock "
                        f"{found(c.clock)}; converters in step must agree.",
                    )

    def emission_names(self, rules: model.Rules, limits: list[tuple[int, Any]]) -> model.Rules:
        """The rules with only such limit sets as there are, each once."""
        known = (*schema.LIMIT_SETS, *(li.name for _, li in limits if li))
        names = ", ".join(printable(n) for n in known[:20])
        for index, name in enumerate(rules.emissions):
            if name not in known:
                self.note(("rules", "emissions"), f"item {index + 1}, {found(name)}, is no limit set; known: {names}.")
        for index, li in limits:
            if li and li.name in schema.LIMIT_SETS:
                self.note(("limit", index, "name"), f"{found(li.name)} is built in; a name of your own was expected.")
        wanted = tuple(dict.fromkeys(name for name in rules.emissions if name in known))
        return rules if wanted == rules.emissions else _with(rules, emissions=wanted)


def _checked(names: tuple[str, ...], own: tuple[model.LimitLine, ...], nominal: float) -> tuple[model.LimitLine, ...]:
    """The limit lines that the rules name, each once; a name that is unknown was said before."""
    if not names:
        return ()
    from budget.project import limits  # reads the files of the built-in sets

    lines = (limits.resolve(name, own, nominal) for name in dict.fromkeys(names))
    return tuple(line for line in lines if line is not None)


def _shelf_data(shelves: tuple[Shelf, ...], name: str) -> Tree:
    return next((s.data for s in shelves if s.name == name), {})


def _with(row: Any, **changes: Any) -> Any:
    values = {f.name: getattr(row, f.name) for f in fields(row)}
    return type(row)(**{**values, **changes})


def _first_of_each(rows: Iterable[Any], key: str = "id") -> tuple[Any, ...]:
    taken: dict[str, Any] = {}
    for row in rows:
        taken.setdefault(getattr(row, key), row)
    return tuple(taken.values())


def _listed(raw: Any) -> list[Any]:
    return raw if isinstance(raw, list) else []


def _idents(rows: Any) -> list[str]:
    """The ids of the rows of an array of tables, of those that have one."""
    found = (row.get("id") for row in _listed(rows) if isinstance(row, dict))
    return [ident for ident in found if isinstance(ident, str) and ident]


def _only(kind: type, values: dict[str, Any]) -> dict[str, Any]:
    names = _names(kind)
    return {k: v for k, v in values.items() if k in names}


@cache
def _names(kind: type) -> frozenset[str]:
    return frozenset(f.name for f in fields(kind))


def _texts_filled(values: dict[str, Any]) -> dict[str, Any]:
    return {k: "" if v is None and k in ("id", "name", "filter", "clock") else v for k, v in values.items()}


def _lent(part: Tree) -> Tree:
    return {k: v for k, v in part.items() if k not in _OWN}


def _read_part(key: str, raw: Tree) -> Reading:
    """What is wrong with a shelf part by itself; fields that it leaves to the rows are not missing."""
    reading = Reading()
    for own in ("id", "part", "filter"):
        if own in raw and (key, own) != ("filter", "filter"):
            reading.fault((own,), "belongs to a row, not to a shelf part; it was not expected here.")
    rest = _lent(raw)
    values = read_table(schema.shelf_table(key).fields, rest, reading)
    _check(key, values, rest, reading)
    reading.problems = [p for p in reading.problems if len(p.path) > 1 or not p.text.startswith("is missing")]
    return reading


def _read_row(key: str, row: Tree, part: Tree, reading: Reading) -> Any:
    """The engine's object for one row, or None; what is wrong goes to ``reading`` with relative paths."""
    table = schema.TABLES_BY_KEY[key]
    raw = {**_lent(part), **row}
    values = read_table(table.fields, raw, reading)
    _check(key, values, raw, reading)
    if reading.broken:
        return None
    values = _texts_filled(values)
    if key == "case":
        loads = tuple((ident, model.Load(*load)) for ident, load in values["load"] or ())
        return model.Case(**{**_only(model.Case, values), "load": loads})
    if key == "limit":
        return model.LimitLine(**_only(model.LimitLine, {**values, "bandwidth": values["bandwidth"] or ()}))
    if key == "filter":
        return _filter(values)
    return _converter(values)


def _ladder(elements: list[dict[str, Any]] | None) -> model.Ladder:
    filled = ({**e, "L": e["L"] or 0.0} for e in elements or ())
    return tuple(model.Branch(**_only(model.Branch, e)) for e in filled)


def _filter(values: dict[str, Any]) -> model.Filter:
    values = {
        **values,
        "dm": _ladder(values["dm"]),
        "cm": _ladder(values["cm"]),
        "attenuation": values["attenuation"] or (),
        "resistance": values["resistance"] or 0.0,
        "max_surge": values["max_surge"] if values["max_surge"] is not None else values["max_voltage"],
    }
    return model.Filter(**_only(model.Filter, values))


def _converter(values: dict[str, Any]) -> model.Converter:
    kinds: dict[str, type] = {"chop": model.Chop, "ripple": model.Ripple, "cm": model.CommonMode, "lead": model.Lead}
    for key, kind in kinds.items():
        inner = values[key]
        values[key] = kind(**_only(kind, inner)) if inner is not None else (model.Lead() if key == "lead" else None)
    turn_on = values["turn_on"] if values["turn_on"] is not None else values["min_input"]
    values = {
        **values,
        "output": tuple(model.Output(**_only(model.Output, o)) for o in values["output"]),
        "input": _ladder(values["input"]),
        "spectrum": values["spectrum"] or (),
        "max_surge": values["max_surge"] if values["max_surge"] is not None else values["max_input"],
        "turn_on": turn_on,
        "turn_off": values["turn_off"] if values["turn_off"] is not None else (turn_on * 0.9 if turn_on else None),
    }
    return model.Converter(**_only(model.Converter, values))


def _check(key: str, values: dict[str, Any], raw: Tree, out: Reading) -> None:
    """What fields of one row must agree on."""
    if key in schema.SHELVES:
        _check_derating(values, out)
        out.broken |= any(k in raw and values[k] is None for k in _LADDERS if k in values and (key, k) != _CM_SOURCE)
    if key == "filter":
        _check_filter(values, raw, out)
    elif key == "converter":
        _check_converter(values, raw, out)
    elif key == "limit":
        points = values["points"] or ()
        if values["points"] is not None and len(points) < 2:
            count = "1 point was" if points else "no points were"
            out.fault(("points",), f"{count} found; a line needs two or more.")
            out.broken = True
        unit = values["unit"]
        for index, row in enumerate(_listed(raw.get("points")) if unit else ()):
            text = row[1] if isinstance(row, list) and len(row) == 2 else ""
            if isinstance(text, str) and ("dBuA" if unit == "dBuV" else "dBuV") in text:
                out.fault(("points", index, 1), f"{found(text)} was found; {unit}, the unit of the line, was expected.")
                out.broken = True
        out.broken |= not rising(points, out, ("points",), "frequency", equal=True)
        for index, (low, high, _) in enumerate(values["bandwidth"] or ()):
            if low >= high:
                out.fault(("bandwidth", index), "ends where it starts or before; from < to was expected.")
                values["bandwidth"] = None


def _check_derating(values: dict[str, Any], out: Reading) -> None:
    low, high = values["derate_from"], values["derate_to"]
    if (low is None) != (high is None):
        missing = "derate_from" if low is None else "derate_to"
        out.fault((missing,), "is missing; derate_from and derate_to go together, both or none.")
    elif low is not None and low >= high:
        out.fault(("derate_to",), "is not above derate_from; the rating falls from the first to the second.")


def _check_filter(values: dict[str, Any], raw: Tree, out: Reading) -> None:
    table, ladders = "attenuation" in raw, "dm" in raw or "cm" in raw
    if table and ladders:
        out.fault(("attenuation",), "stands beside a ladder; a filter has ladders or a table, one of the two.")
        out.broken = True
    if table and not ladders and "resistance" not in raw:
        out.fault(("resistance",), "is missing; a filter given as a table needs its loop resistance.")
        out.broken = True
    if ladders and not table and "resistance" in raw:
        out.fault(("resistance",), "belongs to a filter given as a table; the ladder has its own R.")
        values["resistance"] = 0.0
    if not table and not ladders:
        out.fault(("dm",), "is missing; a filter needs a ladder dm = [...] or a table attenuation = [...].")
        out.broken = True
    elif ladders and "dm" not in raw:
        out.fault(("dm",), "is missing beside cm; a filter with a common-mode ladder needs the other too.")
        out.broken = True
    elif ladders and "cm" not in raw:
        out.fault(("cm",), "is missing: the filter is a direct connection for the common mode.", error=False)
    if values["dm"] == []:
        out.fault(("dm",), "has no elements: the filter is a direct connection.", error=False)
    out.broken |= not rising(values["attenuation"] or (), out, ("attenuation",), "frequency")
    if values["attenuation"] == ():
        out.fault(("attenuation",), "an empty list was found; rows [f, dm, cm] were expected.")
        out.broken = True


def _check_converter(values: dict[str, Any], raw: Tree, out: Reading) -> None:
    held = ("hold_up", "hold_up_to")
    given = [k for k in held if k in raw]
    if len(given) == 1:
        missing = next(k for k in held if k not in raw)
        out.fault((missing,), "is missing; hold_up and hold_up_to go together, both or none.")
    noise = [k for k in ("chop", "ripple", "spectrum") if k in raw]
    for extra in noise[1:]:
        out.fault((extra,), f"stands beside {noise[0]}; one description of the differential noise was expected.")
        values[extra] = None
    if values["frequency"] is None:
        needs = next((k for k in ("chop", "ripple", "cm") if k in raw), None)
        if needs and "frequency" not in raw:
            out.fault(("frequency",), f"is missing; {needs} needs the frequency of the input ripple.")
        values.update(chop=None, ripple=None, cm=None)
    if None not in (values["min_input"], values["max_input"]) and values["min_input"] > values["max_input"]:
        out.fault(("min_input",), "is above max_input; at most that was expected.")
    start = "turn_on" if values["turn_on"] is not None else "min_input"
    if None not in (values["turn_off"], values[start]) and values["turn_off"] > values[start]:
        words = "turn_on" if start == "turn_on" else "min_input, at which it starts"
        out.fault(("turn_off",), f"is above {words}; at most that was expected.")
        values["turn_off"] = None
    for source in ("chop", "cm"):
        inner = values[source]
        if inner and values["frequency"] and None not in (inner["duty"], inner["rise"], inner["fall"]):
            edges = (inner["rise"] + inner["fall"]) / 2 * values["frequency"]
            if inner["duty"] < edges or inner["duty"] + edges > 1:
                out.fault((source, "duty"), "leaves no room for the edges at nominal voltage.", error=False)
