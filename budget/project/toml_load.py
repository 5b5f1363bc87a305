"""TOML text to data, within bounds: what a hostile text could cost is refused before it is paid.

The standard library's parser takes time and memory with the square of the length of a dotted key (32 kB of it ask for a
gigabyte), and everything behind the parser walks lists and tables one in the other. So keys, depth, and the number of
things are limited, far above what a real project needs.
"""

from __future__ import annotations

import itertools
import re
import tomllib
from functools import lru_cache
from typing import Any

from budget.project.problems import ProjectError, printable

MAX_KEY = 16  # names in one dotted key; the deepest field of a project has eight
MAX_DEPTH = 30  # of lists and tables in each other
MAX_ITEMS = 20_000  # of one list or one table
MAX_ROWS = 500  # of one array of tables: converters, filters, cases
MAX_VALUES = 150_000  # of a file, lists and tables included
MAX_FAULTS = 20  # of the syntax, told at once
MAX_PIECES = 500  # tables of a broken file that are read by themselves


class LongKeyError(ValueError):
    """A key of more than ``MAX_KEY`` names."""


def load(text: str, name: str) -> dict[str, Any]:
    """The data of a project or shelf file called ``name``; raises ProjectError, a sentence a line, for any other."""
    body = text.removeprefix("\ufeff")
    try:
        data = loads(body)
    except tomllib.TOMLDecodeError as error:
        faults = [str(error), *_further_faults(body, str(error))]
        lines = "\n".join(f"{name}: {printable(fault, 200)}." for fault in faults[:MAX_FAULTS])
        raise ProjectError(f"{lines}\n{name}: valid TOML was expected.") from error
    except LongKeyError as error:
        raise ProjectError(f"{name}: a key of more than {MAX_KEY} names; a project file was expected.") from error
    except (RecursionError, ValueError) as error:
        raise ProjectError(
            f"{name}: brackets nested too deep, or a number too long; a project file was expected."
        ) from error
    fault = _too_much(data)
    if fault:
        raise ProjectError(f"{name}: {fault}; that is no project file.")
    return data


@lru_cache(maxsize=2)  # a save reads the text it started from, and its own twice
def loads(text: str) -> dict[str, Any]:
    """As ``tomllib.loads``, but a LongKeyError where a key has too many names. What it gives is not to be changed."""
    if _has_long_key(text):
        raise LongKeyError
    return tomllib.loads(text)


# Strings and comments, which may hold anything, and (dotted) keys. What is left open reaches to its end, so that each
# character is looked at once.
_NAME = r"""(?:[A-Za-z0-9_-]++|"(?:[^"\\\n]++|\\[^\n])*+"?|'[^'\n]*+'?)"""
_TOKEN = re.compile(
    r"#[^\n]*+"
    r'|"""(?:[^"\\]++|\\.|"(?!""))*+"*+'
    r"|'''(?:[^']++|'(?!''))*+'*+"
    rf"|(?P<key>{_NAME}(?:[ \t]*+\.[ \t]*+{_NAME})*+)",
    re.DOTALL,
)
_IN_KEY = re.compile(_NAME)


def _has_long_key(text: str) -> bool:
    """Whether a key has more than ``MAX_KEY`` names; what can be seen at once is not looked at closely."""
    if all(line.count(".") < MAX_KEY for line in text.split("\n")):
        return False
    for match in _TOKEN.finditer(text):
        key = match["key"]
        if key and key.count(".") >= MAX_KEY and len(_IN_KEY.findall(key)) > MAX_KEY:
            return True
    return False


def _too_much(data: dict[str, Any]) -> str:
    """What there is too much of, as a clause; empty if there is not."""
    for key, rows in data.items():
        if isinstance(rows, list) and len(rows) > MAX_ROWS and any(isinstance(row, dict) for row in rows):
            return f"{printable(key)} has {len(rows)} rows, at most {MAX_ROWS} were expected"
    left: list[tuple[Any, int]] = [(data, 1)]
    values = 0
    while left:
        node, depth = left.pop()
        values += len(node)
        if len(node) > MAX_ITEMS:
            return f"a list or table of {len(node)} things was found, at most {MAX_ITEMS} were expected"
        if values > MAX_VALUES:
            return f"more than {MAX_VALUES} values were found"
        if depth > MAX_DEPTH:
            return f"lists and tables stand more than {MAX_DEPTH} deep in each other"
        inside = node.values() if isinstance(node, dict) else node
        left += [(inner, depth + 1) for inner in inside if inner and isinstance(inner, dict | list)]
    return ""


_HEADER = re.compile(r"^[ \t]*\[{1,2}[A-Za-z0-9_.\"' -]+\]{1,2}[ \t]*(#.*)?$")
_AT = re.compile(r"\(at line (\d+), column (\d+)\)|\(at end of document\)")


def _further_faults(text: str, first: str) -> list[str]:
    """Syntax faults after the first one, found by reading each table of the file by itself."""
    lines = [line + "\n" for line in text.split("\n")]  # other line ends may stand in a text
    starts = [0, *(i for i, line in enumerate(lines) if _HEADER.match(line)), len(lines)]
    told = {m.group(0) for m in _AT.finditer(first)}
    faults: list[str] = []
    for start, end in itertools.pairwise(starts[: MAX_PIECES + 1]):
        try:
            loads("".join(lines[start:end]))
        except tomllib.TOMLDecodeError as error:
            where = _AT.search(str(error))
            at = f"(at line {end}, at the end of its table)"
            if where and where.group(1):
                at = f"(at line {int(where.group(1)) + start}, column {where.group(2)})"
            if at not in told and not (end == len(lines) and "(at end of document)" in told):
                faults.append(_AT.sub(at, str(error)))
        except (RecursionError, ValueError):
            break
        if len(faults) >= MAX_FAULTS:
            break
    return faults
