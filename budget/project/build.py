"""Document -> project in SI floats, with every problem found on the way.

``build`` never fails: a row that cannot be calculated is left out and its cells are named; a bad cell that has a
default is calculated with the default. Rows are read once: an unchanged row is the same object in the next document, so
its reading is taken from the cache, and so is the engine's input made of it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, fields
from typing import Any

from budget.engine import model
from budget.project import schema
from budget.project.document import Document, Path, Tree
from budget.project.problems import Problem, found, place, printable
from budget.project.read import Reading, read_table, rising


@dataclass(frozen=True, slots=True)
class Shelf:
    """One file of shelf parts: ``name`` as the user wrote it ("" for the project itself), ``data`` its tables."""

    name: str
    data: Tree


@dataclass(frozen=True, slots=True)
class Built:
    """A project, or ``None`` where not even the bus can be read, and what is wrong with the document."""

    project: model.Project | None
    problems: tuple[Problem, ...]
    left_out: tuple[str, ...] = ()  # ids of rows that could not be calculated

    @property
    def errors(self) -> tuple[Problem, ...]:
        return tuple(p for p in self.problems if p.error)

    @property
    def warnings(self) -> tuple[Problem, ...]:
        return tuple(p for p in self.problems if not p.error)


@dataclass(slots=True)
class Cache:
    """Readings of rows by the identity of what they were read from; holds the rows, so that an id stays taken."""

    rows: dict[tuple[str, int, int], tuple[Any, Any, Reading, Any]] = field(default_factory=dict)


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
        self.used: dict[tuple[str, int, int], tuple[Any, Any, Reading, Any]] = {}
        self.problems: list[Problem] = []
        self.left_out: list[str] = []

    def note(self, path: Path, text: str, *, error: bool = True, source: str = "") -> None:
        owner = Document(_shelf_data(self.shelves, source)) if source else self.document
        self.problems.append(Problem(path, text, error, source, place(owner, path)))

    def take(self, reading: Reading, base: Path, source: str = "", skip: frozenset[str] = frozenset()) -> None:
        for p in reading.problems:
            if not p.path or p.path[0] not in skip:
                self.note((*base, *p.path), p.text, error=p.error, source=source)

    def all(self, shelves: tuple[Shelf, ...]) -> Built:
        self.shelves = shelves
        self.root()
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
        self.emission_names(rules, limits)
        self.cache.rows = self.used
        if bus is None:
            return Built(None, tuple(self.problems), tuple(self.left_out))
        known = {f.id for _, f in filters if f}
        project = model.Project(
            bus=bus,
            filters=_first_of_each(f for _, f in filters if f),
            converters=tuple(
                c if c.filter in known or not c.filter else _with(c, filter="")
                for c in _first_of_each(c for _, c in converters if c)
            ),
            cases=_first_of_each(c for _, c in cases if c) or (model.Case("full"),),
            rules=rules,
            limits=tuple(li for _, li in limits if li),
            title=title,
        )
        return Built(project, tuple(self.problems), tuple(self.left_out))

    def root(self) -> None:
        for key in self.data:
            if key not in schema.ROOT_KEYS:
                self.note((key,), "is an unknown key; it is kept, and not used.", error=False)
        version = self.data.get("format")
        if version is None:
            self.note(("format",), f"is missing and taken as {schema.FORMAT}; it belongs at the top.", error=False)
        elif not isinstance(version, int) or isinstance(version, bool) or version < 1:
            self.note(("format",), f"{found(version)} was found; the whole number {schema.FORMAT} was expected.")
        elif version > schema.FORMAT:
            self.note(
                ("format",),
                f"{version} was found, of a newer program; this one reads up to format {schema.FORMAT}.",
            )
        files = self.data.get("shelf_files", [])
        if not isinstance(files, list) or not all(isinstance(f, str) for f in files):
            self.note(("shelf_files",), f"{found(files)} was found; a list of file names was expected.")

    def single(self, key: str) -> dict[str, Any]:
        """The values of a table that stands once."""
        table = schema.TABLES_BY_KEY[key]
        raw = self.data.get(key, {})
        reading = Reading()
        if not isinstance(raw, dict):
            self.note((key,), f"{found(raw)} was found; a table [{key}] was expected.")
            raw = {}
        values = read_table(table.fields, raw, reading)
        reading.values = values
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

    def shelf_parts(self) -> dict[str, dict[str, tuple[str, Tree]]]:
        """Every shelf part by table and name, with the file it stands in; each is read once for its own problems."""
        parts: dict[str, dict[str, tuple[str, Tree]]] = {key: {} for key in schema.SHELVES}
        for shelf in self.shelves:
            section = shelf.data.get("shelf", {})
            if not isinstance(section, dict):
                self.note(("shelf",), f"{found(section)} was found; tables [shelf.filter.NAME] were expected.")
                continue
            for key, named in section.items():
                if key not in schema.SHELVES or not isinstance(named, dict):
                    self.note(
                        ("shelf", key),
                        "was found; [shelf.filter.NAME] or [shelf.converter.NAME] was expected.",
                        source=shelf.name,
                    )
                    continue
                for name, raw in named.items():
                    self.shelf_part(parts[key], shelf, key, name, raw)
        return parts

    def shelf_part(self, taken: dict[str, tuple[str, Tree]], shelf: Shelf, key: str, name: str, raw: Any) -> None:
        base: Path = ("shelf", key, name)
        if not isinstance(raw, dict):
            self.note(base, f"{found(raw)} was found; a table of fields was expected.", source=shelf.name)
            return
        if name in taken:
            other = taken[name][0] or "this file"
            self.note(base, f"stands in {other} too; a part has one place. Rename one of the two.", source=shelf.name)
            return
        table = schema.shelf_table(key)
        reading = Reading()
        for own in ("id", "part", "filter"):
            if own in raw and (key, own) != ("filter", "filter"):
                reading.fault((own,), "belongs to a row, not to a shelf part; it was not expected here.")
        rest = {k: v for k, v in raw.items() if k not in ("id", "part", "filter")}
        values = read_table(table.fields, rest, reading)
        _check(key, values, rest, reading)
        reading.problems = [p for p in reading.problems if len(p.path) > 1 or not p.text.startswith("is missing")]
        self.take(reading, base, shelf.name)
        taken[name] = (shelf.name, rest)

    def rows(self, key: str) -> list[tuple[int, Any]]:
        """The rows of an array of tables as (index, engine object or None where the row cannot be calculated)."""
        raw = self.data.get(key, [])
        if not isinstance(raw, list) or not all(isinstance(r, dict) for r in raw):
            self.note((key,), f"{found(raw)} was found; rows [[{key}]] were expected.")
            return []
        return [(index, self.row(key, index, row)) for index, row in enumerate(raw)]

    def row(self, key: str, index: int, row: Tree) -> Any:
        part: Tree = {}
        if key in schema.SHELVES and isinstance(row.get("part"), str) and row["part"]:
            shelved = self.parts[key].get(row["part"])
            if shelved is None:
                names = ", ".join(printable(n) for n in list(self.parts[key])[:6]) or "none"
                self.note(
                    (key, index, "part"),
                    f"{found(row['part'])} is not on the shelf; the {key} parts there are: {names}.",
                )
            else:
                part = shelved[1]
        slot = (key, id(row), id(part) if part else 0)
        hit = self.cache.rows.get(slot)
        if hit is None:
            reading = Reading()
            hit = (row, part, reading, _read_row(key, row, part, reading))
        self.used[slot] = hit
        _, _, reading, made = hit
        # What is wrong inside the part was said once, at the shelf.
        self.take(reading, (key, index), skip=frozenset(k for k in part if k not in row))
        if made is None:
            ident = row.get("name" if key == "limit" else "id")
            self.left_out.append(ident if isinstance(ident, str) and ident else f"{key} number {index + 1}")
        return made

    def unique(self, groups: tuple[tuple[str, list[tuple[int, Any]]], ...], key: str) -> None:
        seen: dict[str, str] = {}
        for table, _ in groups:
            for index, row in enumerate(self.data.get(table, [])):
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
        known = [r.get("id") for r in self.data.get("filter", []) if isinstance(r, dict)] if filters else []
        for index, _ in converters:
            target = self.data["converter"][index].get("filter", "")
            if isinstance(target, str) and target and target not in known:
                names = ", ".join(printable(str(n)) for n in known[:8] if n) or "none"
                self.note(
                    ("converter", index, "filter"),
                    f"{found(target)} does not exist; the filters are: {names}.",
                )
        ids = {r.get("id") for r in self.data.get("converter", []) if isinstance(r, dict)} if converters else set()
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

    def emission_names(self, rules: model.Rules, limits: list[tuple[int, Any]]) -> None:
        own = [li.name for _, li in limits if li]
        for index, name in enumerate(rules.emissions):
            if name not in (*schema.LIMIT_SETS, *own):
                names = ", ".join((*schema.LIMIT_SETS, *own))
                self.note(("rules", "emissions"), f"item {index + 1}, {found(name)}, is no limit set; known: {names}.")
        for index, li in limits:
            if li and li.name in schema.LIMIT_SETS:
                self.note(("limit", index, "name"), f"{found(li.name)} is built in; a name of your own was expected.")


def _shelf_data(shelves: tuple[Shelf, ...], name: str) -> Tree:
    return next((s.data for s in shelves if s.name == name), {})


def _with(row: Any, **changes: Any) -> Any:
    values = {f.name: getattr(row, f.name) for f in fields(row)}
    return type(row)(**{**values, **changes})


def _first_of_each(rows: Iterable[Any]) -> tuple[Any, ...]:
    taken: dict[str, Any] = {}
    for row in rows:
        taken.setdefault(row.id, row)
    return tuple(taken.values())


def _only(kind: type, values: dict[str, Any]) -> dict[str, Any]:
    names = {f.name for f in fields(kind)}
    return {k: v for k, v in values.items() if k in names}


def _texts_filled(values: dict[str, Any]) -> dict[str, Any]:
    return {k: "" if v is None and k in ("id", "name", "filter", "clock") else v for k, v in values.items()}


def _read_row(key: str, row: Tree, part: Tree, reading: Reading) -> Any:
    """The engine's object for one row, or None; what is wrong goes to ``reading`` with relative paths."""
    table = schema.TABLES_BY_KEY[key]
    raw = {**part, **row}
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
    filled = ({**e, "R": e["R"] or 0.0, "L": e["L"] or 0.0} for e in elements or ())
    return tuple(model.Branch(**_only(model.Branch, e)) for e in filled)


def _filter(values: dict[str, Any]) -> model.Filter:
    values = {
        **values,
        "dm": _ladder(values["dm"]),
        "cm": _ladder(values["cm"]),
        "attenuation": values["attenuation"] or (),
        "max_surge": values["max_surge"] if values["max_surge"] is not None else values["max_voltage"],
    }
    return model.Filter(**_only(model.Filter, values))


def _converter(values: dict[str, Any]) -> model.Converter:
    kinds: dict[str, type] = {"chop": model.Chop, "ripple": model.Ripple, "cm": model.CommonMode, "lead": model.Lead}
    for key, kind in kinds.items():
        inner = values[key]
        known = _only(kind, inner or {})
        complete = inner is not None and all(v is not None for v in known.values())
        values[key] = kind(**known) if complete else (model.Lead() if key == "lead" else None)
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
    if key == "filter":
        _check_filter(values, raw, out)
    elif key == "converter":
        _check_converter(values, raw, out)
    elif key == "limit":
        points = values["points"] or ()
        if "points" in raw and len(points) < 2 and not any(p.path[:1] == ("points",) for p in out.problems):
            out.fault(("points",), f"{len(points)} point was found; a line needs two or more.")
            out.broken = True
        for index, row in enumerate(raw["points"] if isinstance(raw.get("points"), list) else ()):
            text = row[1] if isinstance(row, list) and len(row) == 2 else ""
            if isinstance(text, str) and "dBu" in text and not text.strip().endswith(str(values["unit"])):
                out.fault(("points", index, 1), f"{found(text)} is not in the unit of the line, {values['unit']}.")
        rising(points, out, ("points",), "frequency", equal=True)
        for index, (low, high, _) in enumerate(values["bandwidth"] or ()):
            if low >= high:
                out.fault(("bandwidth", index), "ends where it starts or before; from < to was expected.")


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
    elif table and "resistance" not in raw:
        out.fault(("resistance",), "is missing; a filter given as a table needs its loop resistance.")
        out.broken = True
    elif ladders and "resistance" in raw:
        out.fault(("resistance",), "belongs to a filter given as a table; the ladder has its own R.")
    elif not table and not ladders:
        out.fault(("dm",), "is missing; a filter needs a ladder dm = [...] or a table attenuation = [...].")
        out.broken = True
    elif ladders and "dm" not in raw:
        out.fault(("dm",), "is missing beside cm; a filter with a common-mode ladder needs the other too.")
        out.broken = True
    elif ladders and "cm" not in raw:
        out.fault(("cm",), "is missing: the filter is a direct connection for the common mode.", error=False)
    if "dm" in raw and values["dm"] == [] and raw["dm"] == []:
        out.fault(("dm",), "has no elements: the filter is a direct connection.", error=False)
    rising(values["attenuation"] or (), out, ("attenuation",), "frequency")
    if table and values["attenuation"] == () and raw["attenuation"] == []:
        out.fault(("attenuation",), "an empty list was found; rows [f, dm, cm] were expected.")
        out.broken = True


def _check_converter(values: dict[str, Any], raw: Tree, out: Reading) -> None:
    if not values["output"] or not values["efficiency"]:
        out.broken = True  # said where the field was read
    noise = [k for k in ("chop", "ripple", "spectrum") if k in raw]
    for extra in noise[1:]:
        out.fault((extra,), f"stands beside {noise[0]}; one description of the differential noise was expected.")
    if values["frequency"] is None and "frequency" not in [str(p.path[0]) for p in out.problems if p.path]:
        needs = next((k for k in ("chop", "ripple", "cm") if k in raw), None)
        if needs:
            out.fault(("frequency",), f"is missing; {needs} needs the frequency of the input ripple.")
    for low, high in (("min_input", "max_input"), ("turn_off", "turn_on")):
        if values[low] is not None and values[high] is not None and values[low] > values[high]:
            out.fault((low,), f"is above {high}; at most that was expected.")
    for source in ("chop", "cm"):
        inner = values[source]
        if inner and values["frequency"] and None not in (inner["duty"], inner["rise"], inner["fall"]):
            edges = (inner["rise"] + inner["fall"]) / 2 * values["frequency"]
            if inner["duty"] < edges or inner["duty"] + edges > 1:
                out.fault((source, "duty"), "leaves no room for the edges at nominal voltage.", error=False)
