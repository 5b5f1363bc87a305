"""Whoever calls the engine finds shapes and units where they look first: in the docstring."""

from __future__ import annotations

import dataclasses
import importlib
import inspect
import pkgutil
import re
from collections.abc import Callable
from types import ModuleType
from typing import Any

import pytest

import budget.engine
from budget.engine import model
from budget.project import schema

MODULES = [
    importlib.import_module(f"budget.engine.{module.name}") for module in pkgutil.iter_modules(budget.engine.__path__)
]
ARRAY = re.compile(r"\b(?:NDArray|ndarray|Floats|Bools|Indices|Complex)\b")
SHAPE = re.compile(r"\([A-Z0-9a-z][\w +*-]*(?:,[^()]*)?\)")  # (F,), (C, 3), (case C, converter N)
UNIT = re.compile(  # a quantity that is named has its SI unit
    r"\[[A-Za-z0-9^/ -]+\]|\bin (?:V|A|W|Hz|dB|s|ohm)\b"
    r"|\b(?:ratios?|share|indices|index|count|voltages?|currents?|powers?|True|whether)\b",
    re.IGNORECASE,
)


def _mirrors() -> dict[type, tuple[schema.Field, ...]]:
    converter = schema.TABLES_BY_KEY["converter"]
    inner = {"output": model.Output, "chop": model.Chop, "ripple": model.Ripple, "cm": model.CommonMode}
    inner["lead"] = model.Lead
    tables = {"rules": model.Rules, "bus": model.Bus, "filter": model.Filter, "converter": model.Converter}
    tables |= {"case": model.Case, "limit": model.LimitLine}
    found: dict[type, tuple[schema.Field, ...]] = {
        kind: schema.TABLES_BY_KEY[key].fields for key, kind in tables.items()
    }
    for key, kind in inner.items():
        spec = converter.field(key)
        assert spec is not None
        found[kind] = spec.fields
    found[model.Branch] = schema.BRANCH
    return found


MIRRORS = _mirrors()  # records of a table of the project file: their fields are described once, in the schema


def public(module: ModuleType) -> list[tuple[str, Any]]:
    return [
        (name, thing)
        for name, thing in vars(module).items()
        if not name.startswith("_") and getattr(thing, "__module__", "") == module.__name__ and callable(thing)
    ]


def described(thing: Any) -> str:
    """The docstring, without the one a dataclass makes up for itself."""
    text = inspect.getdoc(thing) or ""
    return "" if inspect.isclass(thing) and text.startswith(f"{thing.__name__}(") else text


FUNCTIONS = [(f"{m.__name__}.{n}", f) for m in MODULES for n, f in public(m) if inspect.isfunction(f)]
CLASSES = [(f"{m.__name__}.{n}", c) for m in MODULES for n, c in public(m) if inspect.isclass(c)]
named = pytest.mark.parametrize


@named("module", MODULES, ids=lambda module: module.__name__)
def test_every_module_says_what_it_is_for(module: ModuleType) -> None:
    assert len(module.__doc__ or "") > 20


@named(("name", "function"), FUNCTIONS, ids=[name for name, _ in FUNCTIONS])
def test_functions_are_described(name: str, function: Callable[..., Any]) -> None:
    text = described(function)
    assert len(text) > 20, f"{name} has no docstring"
    hints = [str(hint) for hint in inspect.get_annotations(function).values()]
    returned = str(inspect.get_annotations(function).get("return", ""))
    if any(ARRAY.search(hint) for hint in hints):
        assert SHAPE.search(text), f"{name}: give the shape of the arrays, as in (C, 3)"
        assert UNIT.search(text), f"{name}: give the unit of the arrays, as in [A]"
    elif returned == "float":
        assert UNIT.search(text), f"{name}: give the unit of the number, as in [ohm]"


@named(("name", "kind"), CLASSES, ids=[name for name, _ in CLASSES])
def test_classes_are_described(name: str, kind: type) -> None:
    text = described(kind)
    if not text and kind in MIRRORS:
        spoken = {field.key: field.help for field in MIRRORS[kind]}
        for field in dataclasses.fields(kind):
            here = any(line.partition("#")[2] for line in _source_of(kind, {field.name}))
            assert here or spoken.get(field.name), f"{name}.{field.name}: describe it in the schema or beside it"
        return
    if kind is model.Project:  # its module is about nothing else
        text = text or inspect.getdoc(model) or ""
    assert len(text) > 20, f"{name} has no docstring"
    for line in _array_fields(kind):
        comment = line.partition("#")[2]
        assert SHAPE.search(comment) or SHAPE.search(text), f"{name}: give the shape of: {line.strip()}"


def _array_fields(kind: type) -> list[str]:
    """The source lines of the fields that hold arrays."""
    if not dataclasses.is_dataclass(kind):
        return []
    return _source_of(kind, {field.name for field in dataclasses.fields(kind) if ARRAY.search(str(field.type))})


def _source_of(kind: type, names: set[str]) -> list[str]:
    lines = inspect.getsource(kind).splitlines()
    return [line for line in lines if (match := re.match(r"\s+(\w+):", line)) and match.group(1) in names]


@pytest.mark.parametrize("text", ["shape (F,) [A]", "axes (C, 3)", "shapes (case C, converter N)"])
def test_the_rule_knows_a_shape(text: str) -> None:
    assert SHAPE.search(text)


@pytest.mark.parametrize("text", ["no shape", "see (the module) above", "()"])
def test_the_rule_knows_what_is_no_shape(text: str) -> None:
    found = SHAPE.search(text)
    assert found is None or "," not in found.group()
