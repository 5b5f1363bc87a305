"""What tells two documents apart, as a small piece of JSON, and back again to the last bit.

Documents share what an edit did not touch, so a difference is found by identity: where two nodes are one object nothing
is looked at. A patch says of a table which keys differ, and of a list which runs of the old one stay; applied to the
old document it gives the new one, which shares with the old what the real one did.

JSON has fewer kinds of values than TOML. What it lacks is written as a table of one key that begins with ``~``; a key
of the user's that begins so gets a second one.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Callable, Iterator
from datetime import date, datetime, time
from typing import Any

from budget.project.document import Document

Json = Any
_LONG = 1 << 63  # an integer from here on is written in hexadecimal: Python refuses thousands of decimal digits


class PatchError(ValueError):
    """A patch does not fit the document it is applied to, or is none."""


# -- values


def pack(value: Any) -> Json:
    """A value of a document as JSON; tuples (of cursor positions) are known too. Raises TypeError for anything else."""
    if value is None or isinstance(value, bool | str):
        return value
    if isinstance(value, int):
        return int(value) if -_LONG < value < _LONG else {"~int": hex(value)}
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else {"~float": struct.pack(">d", value).hex()}
    if isinstance(value, dict):
        return {_key(key): pack(item) for key, item in value.items()}
    if isinstance(value, list):
        return [pack(item) for item in value]
    if isinstance(value, tuple):
        return {"~tuple": [pack(item) for item in value]}
    if isinstance(value, datetime | date | time):  # a datetime is a date
        name = next(name for name, kind in _TIMES.items() if isinstance(value, kind))
        return {f"~{name}": value.isoformat()}
    raise TypeError(f"{type(value).__name__} is no value of a document")


def unpack(packed: Json) -> Any:
    """The value of what ``pack`` gave. Raises PatchError for what it could not have given."""
    if isinstance(packed, list):
        return [unpack(item) for item in packed]
    if not isinstance(packed, dict):
        return packed
    tag = next(iter(packed), "")
    if len(packed) != 1 or not tag.startswith("~") or tag.startswith("~~"):
        return {key[1:] if key.startswith("~~") else key: unpack(item) for key, item in packed.items()}
    try:
        return _TAGS[tag](packed[tag])
    except (KeyError, TypeError, ValueError, struct.error) as error:
        raise PatchError(f"{tag} is no value") from error


def _key(key: Any) -> str:
    if not isinstance(key, str):
        raise TypeError("a key of a table is a text")
    return f"~{key}" if key.startswith("~") else key


_TIMES: dict[str, type] = {"datetime": datetime, "date": date, "time": time}
_TAGS: dict[str, Callable[[Any], Any]] = {
    "~int": lambda text: int(text, 16),
    "~float": lambda text: struct.unpack(">d", bytes.fromhex(text))[0],
    "~tuple": lambda items: tuple(unpack(item) for item in items),
    "~datetime": datetime.fromisoformat,
    "~date": date.fromisoformat,
    "~time": time.fromisoformat,
}


# -- documents


def difference(old: Document, new: Document) -> dict[str, Json]:
    """What ``applied`` needs to make ``new`` of ``old``; empty where they are the same."""
    told: dict[str, Json] = {}
    node = _node(old.data, new.data)
    if node is not None:
        told["data"] = node
    if new.text != old.text:
        told["text"] = new.text
    stems = {key: list(rows) for key, rows in new.origin.items() if old.origin.get(key) != rows}
    if stems:
        told["origin"] = stems
    gone = [key for key in old.origin if key not in new.origin]
    if gone:
        told["stemless"] = gone
    return told


def applied(old: Document, patch: dict[str, Json]) -> Document:
    """The document that ``patch`` makes of ``old``. Raises PatchError where it does not fit."""
    if not isinstance(patch, dict):
        raise PatchError("a patch is a table")
    try:
        data = _changed(old.data, patch["data"]) if "data" in patch else old.data
        origin = {key: rows for key, rows in old.origin.items() if key not in patch.get("stemless", ())}
        origin |= {key: tuple(rows) for key, rows in patch.get("origin", {}).items()}
    except (AttributeError, IndexError, KeyError, TypeError, RecursionError) as error:
        raise PatchError(f"the patch does not fit ({error})") from error
    text = patch.get("text", old.text)
    if not isinstance(data, dict) or not isinstance(text, str):
        raise PatchError("the patch does not give a document")
    return Document(data, text, origin)


def _node(old: Any, new: Any) -> Json:
    """How a node changed; None where it did not."""
    if old is new:
        return None
    if isinstance(old, dict) and isinstance(new, dict):
        return _table(old, new)
    if isinstance(old, list) and isinstance(new, list):
        return _list(old, new)
    return None if _same(old, new) else {"v": pack(new)}


def _same(old: Any, new: Any) -> bool:
    """Whether two values that are no containers are one, to the last bit: 1, 1.0 and true differ, nan equals nan."""
    if type(old) is not type(new):
        return False
    if isinstance(new, float):
        return struct.pack(">d", old) == struct.pack(">d", new)
    if isinstance(new, datetime | time):
        return bool(old.isoformat() == new.isoformat())  # one instant in two time zones is two values
    return bool(old == new)


def _table(old: dict[str, Any], new: dict[str, Any]) -> Json:
    told: dict[str, Json] = {}
    for key, value in new.items():
        if key not in old:
            told[key] = {"v": pack(value)}
        elif (node := _node(old[key], value)) is not None:
            told[key] = node
    gone = [key for key in old if key not in new]
    order = [*(key for key in old if key in new), *(key for key in new if key not in old)]
    node = {"d": told} if told else {}
    if gone:
        node["x"] = gone
    if order != list(new):
        node["o"] = list(new)
    return node or None


def _list(old: list[Any], new: list[Any]) -> Json:
    """The pieces of the new list: ``[a, n]`` for n items of the old one from a on, ``[a, node]`` for its item a as it
    changed, and new items."""
    place = {id(item): index for index, item in reversed(list(enumerate(old)))}
    kept = {place[id(item)] for item in new if id(item) in place}
    pieces: list[Json] = []
    following = 0  # the item of the old list that would come next if nothing had been moved
    for item in new:
        stays = following < len(old) and old[following] is item
        at = following if stays else place.get(id(item), -1)
        if at < 0 and following < len(old) and following not in kept:
            node = _node(old[following], item)
            if node is None:
                at = following
            elif "v" not in node:
                pieces.append([following, node])
                following += 1
                continue
        if at < 0:
            pieces.append({"v": pack(item)})
            if following not in kept:
                following += 1
            continue
        last = pieces[-1] if pieces else None
        if isinstance(last, list) and isinstance(last[1], int) and last[0] + last[1] == at:
            last[1] += 1
        else:
            pieces.append([at, 1])
        following = at + 1
    return None if pieces == [[0, len(old)]] or not (old or new) else {"l": pieces}


def _changed(old: Any, node: Json) -> Any:
    if "v" in node:
        return unpack(node["v"])
    if "l" in node:
        if not isinstance(old, list):
            raise PatchError("a list was expected")
        return [item for piece in node["l"] for item in _piece(old, piece)]
    if not isinstance(old, dict):
        raise PatchError("a table was expected")
    gone = set(node.get("x", ()))
    table = {key: value for key, value in old.items() if key not in gone}
    for key, inner in node.get("d", {}).items():
        table[key] = _changed(table.get(key), inner)
    return {key: table[key] for key in node["o"]} if "o" in node else table


def _piece(old: list[Any], piece: Json) -> Iterator[Any]:
    if isinstance(piece, dict):
        yield unpack(piece["v"])
        return
    at, what = piece
    if isinstance(what, int):
        if not 0 <= at <= at + what <= len(old):
            raise PatchError("the list is shorter than the patch says")
        yield from old[at : at + what]
    else:
        if at < 0:
            raise PatchError("the list has no such item")
        yield _changed(old[at], what)
