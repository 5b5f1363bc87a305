"""Makes hostile inputs out of good ones: every function takes a ``random.Random`` and returns text or bytes.

What is mutated is known: a project file is changed as a tree of tables by the schema's fields, then as lines of text,
then as bytes, so that most of what comes out gets past the first check and meets the second, third and tenth.
"""

from __future__ import annotations

import copy
import datetime
import math
from collections.abc import Callable, Sequence
from random import Random
from typing import Any

from budget import quantity
from budget.project import schema, toml_dump, toml_load
from budget.project.schema import Field
from budget.project.starter import starter
from tests.fuzz.strings import (
    BYTES,
    CELLS,
    CONTROLS,
    FILES,
    FORMULAS,
    HEADERS,
    KEYS,
    LITERALS,
    ODD,
    PLACES,
    QUANTITIES,
    VALUES,
    WORDS,
)
from tests.screen.driving import BROKEN, EMPTY, PROJECTS, SMALL

DEMOS = {name: (PROJECTS / f"{name}.toml").read_text(encoding="utf-8") for name in ("heron", "ferry", "smallest")}
SHELF = (PROJECTS / "shelf.toml").read_text(encoding="utf-8")
SEEDS = (DEMOS["smallest"], SMALL, SMALL, DEMOS["heron"], DEMOS["ferry"], BROKEN, EMPTY, starter())

UNITS = {kind.name: (kind.unit, *kind.also) for kind in quantity.KINDS.values()}


def text(rng: Random) -> str:
    """A name, note or title that nobody would want."""
    pick = rng.randrange(8)
    if pick == 0:
        return "".join(rng.choice(CONTROLS) for _ in range(rng.randint(1, 4)))
    if pick == 1:
        return f"a{rng.choice(CONTROLS)}b"
    if pick == 2:
        return rng.choice(ODD)
    if pick == 3:
        return rng.choice(FORMULAS)
    if pick == 4:
        return rng.choice(PLACES)
    if pick == 5:
        return rng.choice(QUANTITIES)
    if pick == 6:
        return "".join(
            chr(rng.choice((rng.randrange(32, 127), rng.randrange(0xD800)))) for _ in range(rng.randint(0, 30))
        )
    return rng.choice("xX\u00fc\u4e2d \u0301") * rng.choice((0, 1, 41, 200, 2001, 20_000))


def amount(rng: Random, kind: str) -> str | int | float:
    """A number of a kind, mostly one that can be read, over all magnitudes and at the ends of what is real."""
    unit = rng.choice(UNITS.get(kind, ("",)))
    if rng.random() < 0.12:
        return rng.choice((rng.choice(QUANTITIES), 0, -1, 1, 10**40, 1e308, 5e-324, math.inf, math.nan, -0.0))
    if rng.random() < 0.15:
        value = rng.choice((0.0, 1.0, -1.0, 1e15, 1e-24, 9.99e14, 1.01e15, 0.5, 2.0, 100.0, 1e-9, 1e9))
    else:
        value = rng.choice((1, 1, 1, -1)) * 10.0 ** rng.choice((rng.uniform(-3, 3), rng.uniform(-24, 15)))
    number = f"{value:.{rng.randint(1, 17)}g}"
    return float(number) if rng.random() < 0.2 else f"{number} {unit}".strip()


def value(rng: Random, spec: Field | None, depth: int = 0) -> Any:
    """A value for a field: one of its own kind, an extreme one of its kind, or none of its kind at all."""
    if spec is None or depth > 3 or rng.random() < 0.1:
        return anything(rng)
    kind = spec.kind
    if kind in quantity.KINDS:
        return amount(rng, kind)
    if kind == schema.CHOICE:
        return rng.choice(spec.choices) if rng.random() < 0.7 else text(rng)
    if kind in (schema.IDENT, schema.FILTER, schema.PART):
        known = ("FA", "FB", "C1", "C2", "FL1", "FL2", "CV1", "CV2", "bought", "brick", "brick-50", "loop-12A")
        return rng.choice(known) if rng.random() < 0.6 else text(rng)
    if kind == schema.TEXTS:
        names = (*schema.LIMIT_SETS, "own", "quay", *PLACES)
        return [rng.choice(names) for _ in range(rng.choice((0, 1, 2, 7)))]
    if kind == schema.TABLE:
        return {f.key: value(rng, f, depth + 1) for f in spec.fields if f.required or rng.random() < 0.5}
    if kind == schema.TABLES:
        rows = range(rng.choice((0, 1, 2, 3, 30)))
        return [
            {f.key: value(rng, f, depth + 1) for f in spec.fields if f.required or rng.random() < 0.5} for _ in rows
        ]
    if kind == schema.LADDER:
        return [branch(rng, depth) for _ in range(rng.choice((0, 1, 2, 3, 4, 9, 40)))]
    if kind in (schema.ROWS, schema.CURVE):
        return rows_of(rng, spec, rng.choice((0, 1, 2, 3, 20)))
    if kind == schema.LOADS:
        idents = ("C1", "C2", "CV1", "CV2", "CV3", text(rng))
        return {ident: load(rng) for ident in idents if rng.random() < 0.6}
    return text(rng)


def load(rng: Random) -> Any:
    return rng.choice(("off", "50 %", "0 %", 0, 1, amount(rng, "ratio"), amount(rng, "power"), anything(rng)))


def branch(rng: Random, depth: int = 0) -> Any:
    """One element of a ladder, mostly a possible one."""
    if rng.random() < 0.08:
        return anything(rng)
    place = rng.choice(schema.BRANCH[0].choices)
    fields = [f for f in schema.BRANCH if f.key not in ("place", "note")]
    chosen = {f.key: value(rng, f, depth + 1) for f in fields if rng.random() < 0.35}
    if place == "shunt":
        chosen.setdefault("C", amount(rng, "capacitance"))
    elif rng.random() < 0.9:
        chosen.pop("C", None)
    return {place: chosen}


def rows_of(rng: Random, spec: Field, count: int) -> Any:
    """Rows of numbers; often with a first column that rises, as a curve must."""
    if spec.kind == schema.CURVE and rng.random() < 0.3:
        return amount(rng, spec.fields[-1].kind)
    rows = [[amount(rng, f.kind) for f in spec.fields] for _ in range(count)]
    if rng.random() < 0.6:
        at = 10.0 ** rng.uniform(-3, 6)
        for row in rows:
            row[0] = at
            at *= 1.0 + 10.0 ** rng.uniform(-9, 1)
    if rng.random() < 0.1 and rows:
        rng.choice(rows).append(anything(rng))
    return rows


def anything(rng: Random) -> Any:
    """A value of any type that TOML has."""
    zone = datetime.timezone(datetime.timedelta(minutes=rng.randint(-1439, 1439)))
    return rng.choice(
        (
            lambda: rng.choice((0, -1, 1, 2**63, 10**40, -(10**40), 10**4000)),
            lambda: rng.choice((0.0, -0.0, 1e308, 5e-324, math.inf, -math.inf, math.nan)),
            lambda: rng.random() < 0.5,
            lambda: text(rng),
            lambda: rng.choice(QUANTITIES),
            list,
            dict,
            lambda: [[]],
            lambda: [{}],
            lambda: {text(rng): text(rng)},
            lambda: deep(rng.choice((3, 12, 28, 40, 300)), rng.random() < 0.5),
            lambda: [text(rng)] * rng.choice((1, 3, 200)),
            lambda: [rng.random(), text(rng), {}, []],
            lambda: datetime.date(1979, 5, 27),
            lambda: datetime.time(7, 32, 0, 999),
            lambda: datetime.datetime(1979, 5, 27, 7, 32, tzinfo=zone),
        )
    )()


def deep(count: int, lists: bool) -> Any:
    """A value inside ``count`` lists or tables."""
    inner: Any = 1
    for _ in range(count):
        inner = [inner] if lists else {"a": inner}
    return inner


def _spec(path: Sequence[Any]) -> Field | None:
    """The field at a path of the tree, as far as the schema knows it."""
    names = [key for key in path if isinstance(key, str) and key not in ("series", "shunt")]
    if not names:
        return None
    if names[0] == "shelf":
        names = names[1:2] + names[3:]
    if not names or names[0] not in schema.TABLES_BY_KEY:
        return schema.SHELF_FILES if names[:1] == ["shelf_files"] else None
    fields: Sequence[Field] = schema.TABLES_BY_KEY[names[0]].fields
    spec: Field | None = None
    for name in names[1:]:
        if spec is not None and spec.kind == schema.LOADS:
            return schema.LOAD
        spec = next((f for f in fields if f.key == name), None)
        fields = spec.fields if spec is not None else ()
    if spec is not None and spec.fields and path and isinstance(path[-1], int):
        inside = len(path) > 1 and isinstance(path[-2], int) and spec.kind in (schema.ROWS, schema.CURVE)
        column = path[-1] if inside and path[-1] < len(spec.fields) else None
        return spec.fields[column] if column is not None else None
    return spec


def _paths(node: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    """Every place of a tree, its top left out."""
    steps = node.items() if isinstance(node, dict) else enumerate(node) if isinstance(node, list) else ()
    found = []
    for key, inner in steps:
        found.append((*path, key))
        if len(path) < 8:
            found += _paths(inner, (*path, key))
    return found


def tree(rng: Random, data: dict[str, Any], changes: int | None = None) -> dict[str, Any]:
    """The data of a project file with some values, keys and rows changed, in place."""
    for _ in range(rng.choice((1, 1, 2, 3, 8)) if changes is None else changes):
        places = _paths(data)
        if not places:
            data["bus"] = {}
            continue
        path = rng.choice(places)
        node: Any = data
        for key in path[:-1]:
            node = node[key]
        key = path[-1]
        sort = rng.randrange(14)
        if sort < 8:
            node[key] = value(rng, _spec(path))
        elif sort == 8:
            del node[key]
        elif sort == 9 and isinstance(node, list):
            node[key:key] = [node[key]] * rng.choice((1, 1, 2, 20))
        elif sort == 10 and isinstance(node, list):
            rng.shuffle(node)
        elif sort == 11 and isinstance(node, dict):
            node[text(rng)[:200]] = node[key] if rng.random() < 0.5 else anything(rng)
        elif sort == 12:
            _add(rng, data)
        elif isinstance(node, dict):
            fields = _spec(path[:-1])
            table = schema.TABLES_BY_KEY.get(str(path[0]))
            known = fields.fields if fields is not None else table.fields if table is not None else ()
            if known:
                spec = rng.choice(known)
                node[spec.key] = value(rng, spec)
    return data


def _add(rng: Random, data: dict[str, Any]) -> None:
    """Another row of a table, or the table."""
    table = rng.choice(tuple(schema.TABLES_BY_KEY.values()))
    row = {f.key: value(rng, f) for f in table.fields if f.required or rng.random() < 0.3}
    if not table.many:
        data[table.key] = row
    elif isinstance(data.get(table.key), list):
        data[table.key].append(row)
    else:
        data[table.key] = [row]


def extreme(rng: Random, source: str) -> str:
    """A project that can be read as a whole, with a few numbers of any magnitude that their fields take."""
    try:
        data = copy.deepcopy(toml_load.loads(source))
    except (ValueError, RecursionError):
        data = copy.deepcopy(toml_load.loads(SMALL))
    cells = [path for path in _paths(data) if (spec := _spec(path)) is not None and spec.kind in quantity.KINDS]
    for path in rng.sample(cells, min(len(cells), rng.choice((1, 1, 2, 3, 5, 9, 30)))):
        node: Any = data
        for key in path[:-1]:
            node = node[key] if isinstance(node, dict | list) else None  # replaced as a whole before
        if isinstance(node, dict | list):
            node[path[-1]] = _taken(rng, _spec(path))
    for key in ("filter", "converter", "case"):
        rows = data.get(key)
        if isinstance(rows, list) and rows and rng.random() < 0.15:
            twin = copy.deepcopy(rng.choice(rows))
            rows.append({**twin, "id": f"N{len(rows)}"} if isinstance(twin, dict) else twin)
    filters, rules = data.get("filter"), data.get("rules", {})
    for row in filters if isinstance(filters, list) and rng.random() < 0.2 else ():
        if isinstance(row, dict) and "dm" in row:
            row["dm"] = [branch(rng) for _ in range(rng.choice((1, 2, 3, 7)))]
    if rng.random() < 0.1 and isinstance(rules, dict):
        data["rules"] = {**rules, "emissions": [*schema.LIMIT_SETS], "inrush_window": "10 s"}
    try:
        return toml_dump.dump(data)
    except (ValueError, TypeError, AttributeError):
        return source


def _taken(rng: Random, spec: Field | None) -> float:
    """A number that the field takes: anywhere in its limits, at them, or next to what stands there mostly."""
    assert spec is not None
    low = spec.low if spec.low is not None else rng.choice((-1.0, 1.0)) * 10.0 ** rng.uniform(-24, 15)
    high = spec.high if spec.high is not None else 1e15
    if rng.random() < 0.2:
        return rng.choice((low if not spec.above else max(low, 1e-24), high if not spec.below else high * (1 - 1e-12)))
    found = 10.0 ** rng.choice((rng.uniform(-24, 15), rng.uniform(-12, 6), rng.uniform(-3, 3)))
    return min(max(found, low), high)


def lines(rng: Random, source: str) -> str:
    """The text with lines lost, doubled, swapped, cut or given other values, not knowing what they mean."""
    parts = source.split("\n")
    for _ in range(rng.choice((1, 2, 5))):
        at = rng.randrange(len(parts))
        sort = rng.randrange(8)
        if sort == 0:
            del parts[at]
        elif sort == 1:
            parts.insert(at, parts[rng.randrange(len(parts))])
        elif sort == 2:
            other = rng.randrange(len(parts))
            parts[at], parts[other] = parts[other], parts[at]
        elif sort == 3 and "=" in parts[at]:
            parts[at] = parts[at].partition("=")[0] + "= " + rng.choice(LITERALS)
        elif sort == 4:
            cut = rng.randint(0, len(parts[at]))
            parts[at] = (
                parts[at][:cut]
                + rng.choice((*LITERALS, *CONTROLS, "#", '"', "'", "[", "{", "=", "."))
                + parts[at][cut:]
            )
        elif sort == 5:
            parts.insert(at, rng.choice(HEADERS))
        elif sort == 6:
            parts[at] = parts[at][: rng.randint(0, len(parts[at]))]
        else:
            parts.insert(at, f"{rng.choice(KEYS)} = {rng.choice(LITERALS)}")
        if not parts:
            parts = [""]
    return rng.choice(("\n", "\n", "\n", "\r\n")).join(parts)


def big(rng: Random, source: str) -> str:
    """A project that is far too much of something: rows, values, depth, names, one text."""
    count = rng.choice((200, 300, 500, 501, 20_000, 100_000))
    sort = rng.randrange(12)
    row = rng.choice(("filter", "converter", "case", "limit", "x"))
    if sort == 0:
        return source + f"\n[[{row}]]\n" * count
    if sort == 1:
        return source + "".join(f'\n[[{row}]]\nid = "R{k}"\ndm = []\ncm = []\n' for k in range(min(count, 30_000)))
    if sort == 2:
        parts = "".join(f"{{ shunt = {{ C = {k + 1} }} }}," for k in range(min(count, 20_001)))
        return source + f'\n[[filter]]\nid = "BIG"\ncm = []\ndm = [{parts}]\n'
    if sort == 3:
        points = ", ".join(f"[{(k + 1) / count}, 0.9]" for k in range(min(count, 20_001)))
        head = '\n[[converter]]\nid = "BIG"\nfilter = "FA"\nrated_power = 1\noutput = [{ voltage = 1, current = 1 }]\n'
        return source + head + f"efficiency = [{points}]\n"
    if sort == 4:
        return source + "\n[case]\n[[case.load]]\n" + "".join(f"x{k} = 1\n" for k in range(count))
    if sort == 5:
        return "a" + ".a" * count + " = 1\n" + source
    if sort == 6:
        return source + "\n[" + ".".join("a" * min(count, 50_000)) + "]\n"
    if sort == 7:
        return f"x = {'[' * count}\n" + source
    if sort == 8:
        return f"shelf_files = [{', '.join(repr(f's{k}.toml') for k in range(min(count, 50_000)))}]\n" + source
    if sort == 9:
        return source.replace('id = "', 'id = "' + rng.choice("x\u4e2d\u0301") * count, 1)
    if sort == 10:
        return 'note = "' + rng.choice(("x", "\\u001b", "\\U000e0041")) * count + '"\n' + source
    return source + "".join(f"[t{k}]\nk = {k}\n" for k in range(count))


def project(rng: Random, source: str | None = None) -> str:
    """The text of a hostile project file."""
    source = rng.choice(SEEDS) if source is None else source
    sort = rng.random()
    if sort < 0.01:
        return big(rng, source)
    if sort < 0.70:
        made = _as_tree(rng, source)
        if made is not None:
            return made
    return lines(rng, source)


def _as_tree(rng: Random, source: str) -> str | None:
    """The text changed as a tree and written anew; None where it cannot be read, or the tree cannot be written."""
    if len(source) > 200_000:
        return None
    try:
        return toml_dump.dump(tree(rng, copy.deepcopy(toml_load.loads(source))))
    except (ValueError, RecursionError, TypeError, AttributeError, KeyError, IndexError):
        return None


def shelf(rng: Random, source: str | None = None) -> str:
    """The text of a hostile file of shelf parts."""
    source = rng.choice((SHELF, SMALL[SMALL.index("[shelf.filter") :], "")) if source is None else source
    made = project(rng, source)
    if rng.random() < 0.3:
        names = ", ".join(toml_dump.inline(rng.choice(PLACES)) for _ in range(rng.choice((1, 3, 60))))
        made = f"shelf_files = [{names}]\n" + made
    return made


def raw(rng: Random, source: bytes) -> bytes:
    """The bytes with some of them lost, doubled, changed, cut off."""
    data = bytearray(source)
    for _ in range(rng.choice((1, 2, 6))):
        at = rng.randint(0, len(data))
        sort = rng.randrange(6)
        if sort == 0 and data:
            data[min(at, len(data) - 1)] = rng.randrange(256)
        elif sort == 1:
            data[at:at] = rng.choice(BYTES)
        elif sort == 2:
            del data[at : at + rng.randint(1, 20)]
        elif sort == 3:
            data[at:at] = data[max(0, at - rng.randint(1, 200)) : at] * rng.choice((1, 1, 10))
        elif sort == 4:
            del data[at:]
        else:
            data[at:at] = bytes(rng.randrange(256) for _ in range(rng.randint(1, 8)))
    return bytes(data)


def cell(rng: Random, source: str = "") -> str:
    """A text typed into a cell."""
    sort = rng.randrange(4)
    if sort == 0 or not source:
        return text(rng)
    if sort == 1:
        return str(amount(rng, rng.choice(tuple(UNITS))))
    if sort == 2:
        return source + text(rng)[:300]
    at = rng.randint(0, len(source))
    return (
        source[:at] + rng.choice((*CONTROLS, *ODD, "+", "-", "*", "(", ")", "/", "^", " ", ".", ",", "e")) + source[at:]
    )


def quantity_text(rng: Random, source: str = "") -> str:
    """A text that is nearly a number with a unit, or nothing like one."""
    if rng.random() < 0.2:
        return cell(rng, source)
    pieces = [
        lambda: str(rng.choice((0, 1, 4.7, 12, 999.999, 1e-12, 1e300, 5e-324))),
        lambda: rng.choice(QUANTITIES),
        lambda: rng.choice(("+", "-", "*", " * ", " + ", "(", ")", " ", "/", "^2", "\u00b2", "\u00d7", "\u00b7")),
        lambda: rng.choice(("", "m", "k", "u", "\u00b5", "M", "G", "f", "T", "K", "meg", "d")),
        lambda: rng.choice(
            (
                "V",
                "A",
                "W",
                "ohm",
                "\u2126",
                "H",
                "F",
                "Hz",
                "s",
                "h",
                "min",
                "degC",
                "\u00b0C",
                "deg",
                "%",
                "dB",
                "dBuA",
                "J",
                "x",
            )
        ),
    ]
    return "".join(str(rng.choice(pieces)()) for _ in range(rng.randint(1, 8)))


def path(rng: Random, source: str = "") -> str:
    """A text that is nearly the path of a cell."""
    names = (
        *(
            "C1",
            "C2",
            "FA",
            "FB",
            "rest",
            "own",
            "bus",
            "rules",
            "project",
            "converter",
            "filter",
            "case",
            "limit",
            "shelf",
        ),
        *(
            "#1",
            "#2",
            "#999999",
            "#0",
            "output",
            "input",
            "dm",
            "load",
            "efficiency",
            "points",
            "voltage",
            "current",
            "L",
        ),
        *(
            "low",
            "0",
            "1",
            "-1",
            "999999",
            "00",
            "\u0661",
            '"',
            '""',
            '"C1"',
            '"\\"',
            "bought",
            "id",
            "place",
            "emissions",
        ),
    )
    parts = [rng.choice(names) if rng.random() < 0.9 else text(rng)[:500] for _ in range(rng.randint(0, 6))]
    made = rng.choice((".", ".", ".", "..", " . ", "")).join(parts)
    if source and rng.random() < 0.3:
        made = source + "." + made
    return made if rng.random() < 0.97 else made + rng.choice((".x", '"', "\\", ". ")) * rng.choice((10, 5_000))


def command(rng: Random) -> list[str]:
    """The words of a command line; what they calculate is small."""
    name = rng.choice(("check", "check", "allocate", "reach", "sweep", "compare", "new", "", "chekc", "--version"))
    file = rng.choice(FILES) if rng.random() < 0.4 else "hostile.toml"
    words = [name] if name else []
    if name == "check":
        words += [
            file,
            *([rng.choice(FILES)] if rng.random() < 0.2 else []),
            *([] if rng.random() < 0.05 else ["--dc"]),
        ]
    elif name == "allocate":
        words += [file, "--time", rng.choice(WORDS["--time"])]
    elif name == "reach":
        words += [file, rng.choice(CELLS)]
    elif name == "sweep":
        for _ in range(2):
            words += [
                rng.choice(CELLS),
                rng.choice(VALUES),
                rng.choice(VALUES),
                rng.choice(("1", "2", "3", "0", "-1", "x", "9" * 20)),
            ]
        words.insert(1, file)
    elif name == "compare":
        words += [file, rng.choice(FILES)]
    elif name == "new":
        words += [rng.choice(("new.toml", "no/such.toml", "\x1b.toml", "folder", "link.toml", "a\x00b", ""))]
    else:
        words += [rng.choice(FILES)] if rng.random() < 0.5 else []
    for _ in range(rng.choice((0, 1, 1, 2, 4))):
        option = rng.choice(tuple(WORDS))
        at = rng.randint(min(1, len(words)), len(words))
        words[at:at] = [option, rng.choice(WORDS[option])] if WORDS[option] else [option]
    if rng.random() < 0.1 and words:
        words[rng.randrange(len(words))] = text(rng)[:3000]
    return words


Maker = Callable[[Random, bytes], bytes]


def of_text(make: Callable[[Random, str], str]) -> Maker:
    """A mutator of bytes out of one of text."""

    def made(rng: Random, data: bytes) -> bytes:
        return make(rng, data.decode("utf-8", "replace")).encode("utf-8", "surrogateescape")

    return made


def again(make: Callable[[Random], str]) -> Maker:
    """A mutator that makes its input anew or changes bytes of it."""

    def made(rng: Random, data: bytes) -> bytes:
        return raw(rng, data) if data and rng.random() < 0.3 else make(rng).encode("utf-8", "surrogateescape")

    return made
