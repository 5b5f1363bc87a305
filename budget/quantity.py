"""Text to SI numbers and back.

Whatever a user types is read by the strict little parser below and by nothing else: it knows numbers, SI prefixes,
sums, differences, products and brackets, refuses whatever it would have to guess at, and says so in one sentence. Only
the unit behind a number goes further, to ``units``. Values are SI, except that temperatures are in degC, angles in
degrees, levels in dB and ratios fractions: each kind's own unit, which is also what a bare number is taken in.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

from budget import units
from budget.kinds import KINDS, Kind, show, show_in, show_parts
from budget.units import NUMBER, PREFIXES, Dimension, Unit, warm

__all__ = ["KINDS", "Kind", "QuantityError", "Value", "parse", "show", "show_in", "show_parts", "warm"]

LONGEST = 200
DEEPEST = 10


class QuantityError(ValueError):
    """A text that is no quantity of the kind wanted; ``str()`` is one sentence for the user."""

    def __init__(self, found: str, expected: str, hint: str) -> None:
        super().__init__(found, expected, hint)
        self.found = found
        """A clause: "'5 A' is a current"."""
        self.expected = expected
        """The kinds wanted: "a voltage"."""
        self.hint = hint
        """A clause: "a voltage was expected, such as 28 V"."""

    def __str__(self) -> str:
        return f"{self.found}; {self.hint}."


@dataclass(frozen=True, slots=True)
class Value:
    """A number in its kind's SI unit (degC, deg, dB and fractions for the kinds that have none)."""

    kind: Kind
    si: float


def parse(text: str, kind: Kind, *others: Kind) -> Value:
    """Read ``text`` as ``kind`` or one of ``others``; a bare number is always ``kind``. Raises QuantityError."""
    return _read(text, (kind, *others))


@lru_cache(maxsize=4096)  # a live sheet reads all its cells again after each edit
def _read(text: str, kinds: tuple[Kind, ...]) -> Value:
    return _Reader(text, kinds).read()


class _Token(NamedTuple):
    sort: str  # "number", one of "+-*()", or "end"
    start: int
    end: int
    number: str = ""
    unit: str = ""  # tidied; "" for a bare number
    prefix: str = ""  # of a bare number: the 'u' of '4.7u'


class _Node(NamedTuple):
    """A part of the text worked out: in base units, or as typed if bare or standing alone."""

    value: float
    start: int
    end: int
    dimension: Dimension = NUMBER
    bare: bool = False
    prefixed: bool = False
    alone: Unit | None = None  # a temperature or absolute level, not yet converted


_NUMBER = r"(?:[0-9]++(?:\.[0-9]*+)?|\.[0-9]++)(?:[eE][+-]?[0-9]++)?"
_NAME = r"[A-Za-z\u00b5\u03bc\u03a9\u2126°%]++(?:\^[0-9]|[²³]|[23](?![0-9.]))?"
_BETWEEN = r" ?[*/·×] ?| "
_UNIT = rf"{_NAME}(?:(?:{_BETWEEN}|(?<=[0-9²³])){_NAME})*+"
_NUMBER_AT = re.compile(_NUMBER)
_UNIT_AT = re.compile(rf" ?({_UNIT})")
_WORD_AT = re.compile(r"[^\W\d_]+")
_INFIX = re.compile(r"([0-9]+)([fpnu\u00b5\u03bcmkKMGTRrVFH])([0-9]+)(?![.^])")
_SPACES = str.maketrans({"\u00a0": " ", "\u2009": " ", "\u202f": " ", "\u2212": "-"})
_MARKS = {"+": "+", "-": "-", "*": "*", "×": "*", "·": "*", "(": "(", ")": ")"}


class _Reader:
    """One reading of one text. The nesting limit bounds the recursion, the length limit everything else."""

    def __init__(self, text: str, kinds: tuple[Kind, ...]) -> None:
        self.kinds = kinds
        self.expected = " or ".join(kind.label for kind in kinds)
        self.example = " or ".join(f"{kind.label} such as {kind.example}" for kind in kinds) + " was expected"
        if len(kinds) == 1:
            self.example = f"{kinds[0].label} was expected, such as {kinds[0].example}"
        self.text = text
        if len(text) > LONGEST:
            raise self.error(f"The text is {len(text)} characters long", f"at most {LONGEST} are taken")
        for char in text:
            if not char.isprintable() and char not in "\u00a0\u2009\u202f":
                raise self.error(
                    f"{self.quote()} holds a character that cannot be shown", "delete it or retype the text"
                )
        self.text = re.sub(" +", " ", text.translate(_SPACES)).strip(" ")
        if not self.text:
            raise self.error("Nothing was entered", self.example)
        self.tokens = list(self.scan())
        self.at = 0

    def read(self) -> Value:
        node = self.sum(0)
        token = self.token
        if token.sort == ")":
            raise self.error(f"{self.quote()} closes a bracket that was not opened", "delete it or open one before it")
        if token.sort != "end":
            raise self.missing_sign(node, token)
        return self.finish(node)

    # -- the words of an error

    def quote(self, start: int = 0, end: int | None = None) -> str:
        return _quote(self.text[start:end])

    def error(self, found: str, hint: str) -> QuantityError:
        return QuantityError(found, self.expected, hint)

    def missing_sign(self, left: _Node, token: _Token) -> QuantityError:
        before, after = self.quote(left.start, left.end), self.quote(token.start, token.end)
        hint = "write +, - or * between them, and no spaces inside a number"
        return self.error(f"There is no sign between {before} and {after}", hint)

    # -- text to tokens

    def scan(self) -> Iterator[_Token]:
        text, at, last = self.text, 0, "start"
        while at < len(text):
            char = text[at]
            if char == " ":
                at += 1
                continue
            if number := _NUMBER_AT.match(text, at):
                token = self.scan_number(number)
            elif char in _MARKS:
                if char == "*" and text.startswith("**", at):
                    raise self.no_powers()
                token = _Token(_MARKS[char], at, at + 1)
            else:
                raise self.stray(at, last)
            yield token
            at, last = token.end, token.sort
        yield _Token("end", at, at)

    def scan_number(self, number: re.Match[str]) -> _Token:
        text, start, end = self.text, number.start(), number.end()
        if infix := _INFIX.match(text, start):
            whole, letter, part = infix.groups()
            behind = {"K": "k", "R": " ohm", "r": " ohm", "V": " V", "F": " F", "H": " H"}.get(
                letter, units.tidy(letter)
            )
            found = f"{self.quote(start, infix.end())} has a letter for the decimal point"
            raise self.error(found, f"write {_shorten(whole + '.' + part + behind)}")
        match = _UNIT_AT.match(text, end)
        if not match:
            return _Token("number", start, end, number.group())
        typed = match.group(1)
        if re.match(r"[eE](?![A-Za-z])", text[end:]):
            found = f"{self.quote(start, end + 1)} has no exponent behind the e"
            raise self.error(found, "write a number such as 3e-6, or 3 with its unit")
        if text.startswith("^", match.end()):
            raise self.no_powers()
        tidied = units.tidy(typed)
        if tidied in PREFIXES:
            return _Token("number", start, match.end(), number.group(), prefix=tidied)
        return _Token("number", start, match.end(), number.group(), unit=tidied)

    def no_powers(self) -> QuantityError:
        return self.error(
            f"{self.quote()} holds a power, which is not taken", "write the product out, such as 3 * 3 * 2 A"
        )

    def stray(self, at: int, last: str) -> QuantityError:
        """The sentence for text that can stand nowhere, or not here."""
        char = self.text[at]
        if char == "^":
            return self.no_powers()
        if char == ",":
            return self.comma(at)
        if char == "/":
            hint = "work it out, or multiply by a fraction, such as 0.5 * 28 V"
            return self.error(f"{self.quote()} holds a division, which is not taken", hint)
        if char == "±":
            return self.error(
                f"{self.quote()} holds a tolerance, which is not taken",
                f"write one value, such as {self.kinds[0].example}",
            )
        if not (word := _WORD_AT.match(self.text, at)):
            return self.error(f"{self.quote()} holds {_quote(char)}, which is not taken", self.example)
        found = _quote(word.group())
        if last == ")":
            return self.error(f"{found} stands behind a bracket", "write the unit behind each number inside it")
        if word.group().lower() in ("nan", "inf", "infinity"):
            return self.error(f"{found} is not a number to calculate with", self.example)
        unit = _UNIT_AT.match(self.text, at)
        if unit and (units.tidy(unit.group(1)) in units.table() or unit.group(1) in PREFIXES):
            return self.error(f"{_quote(unit.group(1))} has no number in front of it", self.example)
        return self.error(f"{found} is not a quantity", self.example)

    def comma(self, at: int) -> QuantityError:
        found = f"{self.quote()} holds a comma"
        around = re.search(r"(?<![0-9,.])([0-9]{1,12}),([0-9]{1,12})(?![0-9,])", self.text[max(0, at - 12) :])
        if not around:
            return self.error(found, "write a decimal point and no other separators, such as 1.5")
        point, plain = ".".join(around.groups()), "".join(around.groups())
        if len(around.group(2)) == 3:
            return self.error(found, f"write {point} or {plain}, whichever is meant")
        return self.error(found, f"the decimal sign is a point, write {point}")

    # -- tokens to one value

    @property
    def token(self) -> _Token:
        return self.tokens[self.at]

    def sum(self, depth: int) -> _Node:
        terms = [self.product(depth)]
        while (sign := self.token.sort) in ("+", "-"):
            self.at += 1
            term = self.product(depth)
            terms.append(_negative(term) if sign == "-" else term)
        if len(terms) == 1:
            return terms[0]
        whole = terms[0]
        if all(term.bare for term in terms):
            for term in terms[1:]:
                prefixed = whole.prefixed or term.prefixed
                whole = self.sound(_Node(whole.value + term.value, whole.start, term.end, bare=True, prefixed=prefixed))
            return whole
        for term in terms:
            if term.alone:
                raise self.stands_alone(term)
        terms = [self.in_own_unit(term) for term in terms]
        whole = terms[0]
        for term in terms[1:]:
            if term.dimension != whole.dimension:
                left, right = self.quote(whole.start, whole.end), self.quote(term.start, term.end)
                found = f"{left} is {_words(whole.dimension)} and {right} is {_words(term.dimension)}"
                raise self.error(found, "they cannot be added or subtracted")
            whole = self.sound(_Node(whole.value + term.value, whole.start, term.end, whole.dimension))
        return whole

    def product(self, depth: int) -> _Node:
        left = self.factor(depth)
        while self.token.sort == "*":
            self.at += 1
            right = self.factor(depth)
            for node in (left, right):
                if node.alone:
                    raise self.stands_alone(node)
            dimension = tuple(a + b for a, b in zip(left.dimension, right.dimension, strict=True))
            bare = left.bare and right.bare
            prefixed = bare and (left.prefixed or right.prefixed)
            value = left.value * right.value
            lost = not value and left.value and right.value
            left = self.sound(_Node(value, left.start, right.end, dimension, bare, prefixed), bool(lost))
        return left

    def factor(self, depth: int) -> _Node:
        start = self.token.start
        sign = self.token.sort
        if sign in ("+", "-"):
            self.at += 1
        token = self.token
        if token.sort == "number":
            node = self.number(token)
        elif token.sort == "(":
            if depth == DEEPEST:
                raise self.error("Brackets stand too deep in each other", f"at most {DEEPEST} are taken")
            self.at += 1
            node = self.sum(depth + 1)
            if self.token.sort in ("number", "("):
                raise self.missing_sign(node, self.token)
            if self.token.sort != ")":
                raise self.error(f"{self.quote()} opens a bracket that is not closed", "close it or delete it")
        elif token.sort == "end":
            raise self.error(f"{self.quote()} ends where a number was expected", self.example)
        else:
            found = f"{self.quote()} has {_quote(self.text[token.start])} where a number was expected"
            raise self.error(found, self.example)
        self.at += 1
        node = node._replace(start=start, end=token.end if token.sort == "number" else self.tokens[self.at - 1].end)
        if self.token.sort in ("number", "("):
            raise self.missing_sign(node, self.token)
        return _negative(node) if sign == "-" else node

    def number(self, token: _Token) -> _Node:
        start, end, unit = token.start, token.end, None
        if token.unit:
            unit = units.lookup(token.unit)
            if unit is None:
                raise self.unknown_unit(token)
        shift = float(f"1e{PREFIXES[token.prefix]}") if token.prefix else 1.0
        factor = unit.factor if unit and not unit.stands_alone else shift
        value = _scaled(token.number, factor)
        lost = not value and re.search(r"[1-9]", re.split("[eE]", token.number)[0]) is not None
        if unit is None:
            node = _Node(value, start, end, bare=True, prefixed=bool(token.prefix))
        else:
            node = _Node(value, start, end, unit.dimension, alone=unit if unit.stands_alone else None)
        return self.sound(node, lost)

    def unknown_unit(self, token: _Token) -> QuantityError:
        typed = self.text[token.start + len(token.number) : token.end].strip(" ")
        found, names = f"{_quote(typed)} is not a unit known here", units.names_in(token.unit)
        if len(token.unit) > units.LONGEST:
            return self.error(f"{_quote(typed)} is too long for a unit", self.example)
        if len(names) > 1 and (loose := next((name for name in names if name in PREFIXES), "")):
            return self.error(found, f"write the prefix {_quote(loose)} against its unit, as in 4.7 uF")
        known = units.table()
        name = next((name for name in names if name not in known), names[0])
        if name.lower().startswith("meg"):
            return self.error(found, f"for a million write M, as in {_shorten(token.number)}M")
        if name in ("x", "X"):
            return self.error(found, "a product is written with *, as in 2 * 3 A")
        if (tail := re.fullmatch(r"(.+?)_?(rms|dc|ac|pp|pk|p|s)", name, re.IGNORECASE)) and tail.group(1) in known:
            plain = tail.group(1)
            if tail.group(2) == "s" and plain[-1] in "VAW":
                return self.error(found, f"write {plain}, or {plain} s for a product with seconds")
            return self.error(found, f"write {plain} alone")
        if name[:1] in PREFIXES and name[1:] in units.PLAIN:
            return self.error(found, f"{name[1:]} takes no prefix")
        if close := [other for other in known if other.lower() == name.lower() and other != name]:
            return self.error(found, f"write {' or '.join(close)}")
        return self.error(found, self.example)

    def stands_alone(self, node: _Node) -> QuantityError:
        found = f"{self.quote(node.start, node.end)} is {_words(node.dimension)}, which cannot be added or multiplied"
        return self.error(found, self.kelvin(node) or f"write a single value, such as {_example(node.dimension)}")

    def in_own_unit(self, node: _Node) -> _Node:
        """A bare number as a quantity of the first kind."""
        if not node.bare:
            return node
        kind = self.kinds[0]
        if node.prefixed and not kind.prefixes:
            found = f"{self.quote(node.start, node.end)} has a prefix and no unit, and {kind.label} takes no prefix"
            raise self.error(found, f"write it in full, such as {kind.example}")
        return node._replace(bare=False, dimension=_own(kind).dimension)

    def sound(self, node: _Node, lost: bool = False) -> _Node:
        """The node, if its number is still one."""
        if not math.isfinite(node.value):
            raise self.error(f"{self.quote(node.start, node.end)} is too large a number", self.example)
        if lost:
            raise self.error(f"{self.quote(node.start, node.end)} is too small a number", self.example)
        return node

    def finish(self, node: _Node) -> Value:
        node = self.in_own_unit(node)
        for kind in self.kinds:
            own = _own(kind)
            if node.dimension == own.dimension:
                return Value(kind, self.converted(node, own) + 0.0)  # + 0.0: no negative zero
            if any(node.dimension == _unit(name).dimension for name in kind.also):
                return Value(kind, node.value + 0.0)
        found = f"{self.quote()} is {_words(node.dimension)}"
        raise self.error(found, self.kelvin(node) or self.example)

    def kelvin(self, node: _Node) -> str:
        """The hint for '10K' where no temperature is wanted."""
        typed = self.text[node.start : node.end]
        if not typed.endswith("K") or not node.alone or any(kind.unit == "degC" for kind in self.kinds):
            return ""
        return f"K is kelvin, for a thousand write {_shorten(typed[:-1].rstrip(' '))}k"

    def converted(self, node: _Node, own: Unit) -> float:
        """The value in the kind's own unit; two offsets are taken together first, so that 71 degC stays 71."""
        value = node.value
        if node.alone:
            value = self.sound(node._replace(value=value * node.alone.factor + (node.alone.offset - own.offset))).value
        if own.offset and value < -own.offset - 1e-9:
            raise self.error(f"{self.quote()} is below absolute zero", self.example)
        return value


def _negative(node: _Node) -> _Node:
    return node._replace(value=-node.value)


def _scaled(number: str, factor: float) -> float:
    """``number * factor``, rounded once if the factor is a power of ten: '4.7' and 1e-6 give 4.7e-6 to the last bit."""
    power = _POWERS.get(factor)
    if power is None:
        return float(number) * factor
    mantissa, _, exponent = number.lower().partition("e")
    return float(f"{mantissa}e{int(exponent or 0) + power}")


_POWERS = {float(f"1e{power}"): power for power in (0, *PREFIXES.values())} | {0.01: -2}


def _unit(name: str) -> Unit:
    unit = units.lookup(units.tidy(name)) if name else Unit(1.0, 0.0, NUMBER)
    assert unit is not None
    return unit


def _own(kind: Kind) -> Unit:
    return _unit(kind.unit)


def _words(dimension: Dimension) -> str:
    """A dimension in words, or by its units where it has none: "a voltage", "in V^2 A"."""
    for kind in KINDS.values():
        if _own(kind).dimension == dimension:
            return kind.label
    over, under = (
        " ".join(
            base + (f"^{abs(n)}" if abs(n) > 1 else "")
            for base, n in zip(units.BASES, dimension, strict=True)
            if n * way > 0
        )
        for way in (1, -1)
    )
    return f"in {over or '1'}" + (f"/({under})" if " " in under else f"/{under}" if under else "")


def _example(dimension: Dimension) -> str:
    return next((kind.example for kind in KINDS.values() if _own(kind).dimension == dimension), "28 V")


def _shorten(text: str, limit: int = 30) -> str:
    safe = "".join(
        c if c.isprintable() and (ord(c) < 256 or c in "\u03a9\u03bc\u2126") else "?" for c in text[: limit + 1]
    )
    return safe if len(safe) <= limit else safe[: limit - 3] + "..."


def _quote(text: str) -> str:
    """At most 30 characters of the user's text, harmless on any terminal."""
    return f"'{_shorten(text)}'"
