"""One thing has one name: in every text of the program, on the screen, on the command line and in the README."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

from budget import glossary
from budget.cli import _sheet_parser
from budget.project import schema

ROOT = Path(__file__).parents[1]


def texts() -> Iterator[tuple[str, str]]:
    """Every string of the program that a user may read, and the README; docstrings are for developers."""
    for path in sorted((ROOT / "budget").rglob("*.py")):
        if path.name == "glossary.py":
            continue
        tree = ast.parse(path.read_text())
        docs = {
            id(node.body[0].value)
            for node in ast.walk(tree)
            if isinstance(node, ast.Module | ast.ClassDef | ast.FunctionDef)
            and node.body
            and isinstance(node.body[0], ast.Expr)
        }
        for node in ast.walk(tree):
            if isinstance(node, ast.Constant) and isinstance(node.value, str) and id(node) not in docs:
                yield f"{path.relative_to(ROOT)}:{node.lineno}", node.value
    for number, line in enumerate((ROOT / "README.md").read_text().splitlines(), 1):
        yield f"README.md:{number}", line


@pytest.mark.parametrize("word", sorted(glossary.INSTEAD))
def test_no_text_has_a_second_name_for_a_thing(word: str) -> None:
    pattern = re.compile(rf"\b{re.escape(word)}s?\b", re.IGNORECASE)
    allowed = ("README.md:1", "README.md:2", "README.md:3", "README.md:4", "README.md:5")
    found = [where for where, text in texts() if " " in text and pattern.search(text) and where not in allowed]
    assert not found, f"'{glossary.INSTEAD[word]}' is the word, not '{word}'"


def test_the_words_stand_in_help_and_readme() -> None:
    shown = _sheet_parser().format_help()
    for word, _ in glossary.WORDS[: glossary.FIRST]:
        assert f"  {word}" in shown
    readme = (ROOT / "README.md").read_text()
    for word, meaning in glossary.WORDS:
        assert f"| {word} | {meaning} |" in readme


def test_the_help_of_every_field_is_a_sentence() -> None:
    for table in schema.TABLES_BY_KEY.values():
        for field in table.fields:
            assert field.help.endswith("."), field.key
            assert field.help[0].isupper() or field.help[0].isdigit(), field.key
