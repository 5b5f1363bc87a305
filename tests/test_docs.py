"""README.md says what the program does: its generated blocks are current, its commands those of .ci/run.

``python -m tests.test_docs`` writes the generated blocks anew.
"""

from __future__ import annotations

import json
import re
import subprocess
from pathlib import Path
from typing import Any

import pytest

from budget.cli import check_file
from budget.project import reference
from budget.report import tables
from budget.session import calculate, open_file
from budget.ui import commands, lists
from budget.ui.desk import VIEWS, Desk
from budget.ui.paint import frame, plain

ROOT = Path(__file__).parent.parent
README = ROOT / "README.md"
DEMO = "projects/heron.toml"
SETUP = "python3 -m venv --without-pip .venv && python3 -m pip --python .venv/bin/python install --quiet "


def desk() -> Desk:
    """The demo as it opens, calculating at once after each edit."""
    made = Desk(open_file(ROOT / DEMO))

    def at_once() -> None:
        made.accept(calculate(made.session.snapshot()))

    made.calculate = at_once
    at_once()
    return made


def screen() -> str:
    lines = [plain(line).rstrip() for line in frame(desk(), 80, 24)]
    return "```text\n" + "\n".join(lines) + "\n```"


def words() -> str:
    return "\n".join(["| Word | Meaning |", "|---|---|", *(f"| {word} | {text} |" for word, text in lists.GLOSSARY)])


def result_json() -> str:
    """What one corner of the demo gives, each list cut to one entry and each number to six digits."""
    result, warnings = check_file(ROOT / DEMO, ["survey"], ["low"])

    def cut(value: Any) -> Any:
        if isinstance(value, dict):
            return {key: cut(entry) for key, entry in value.items()}
        if isinstance(value, list):
            wanted = [v for v in value if isinstance(v, dict) and "FL2" in (v.get("id"), v.get("subject"))]
            return [cut(entry) for entry in (wanted or value)[:1]]
        return float(f"{value:.6g}") if isinstance(value, float) else value

    return "```json\n" + spread(cut(tables.as_json(result, warnings))) + "\n```"


def spread(value: Any, indent: str = "") -> str:
    """JSON with a line for each thing that fits on one."""
    flat = json.dumps(value)
    if len(indent + flat) <= 110 or not value or not isinstance(value, dict | list):
        return flat
    inner = indent + " "
    if isinstance(value, list):
        parts, ends = [spread(entry, inner) for entry in value], "[]"
    else:
        parts, ends = [f"{json.dumps(k)}: {spread(v, inner)}" for k, v in value.items()], "{}"
    lines = [""]
    for part in parts:  # short neighbours share a line
        if "\n" not in part and "\n" not in lines[-1] and lines[-1] and len(inner + lines[-1] + part) <= 100:
            lines[-1] += ", " + part
        else:
            lines.append(part)
    return f"{ends[0]}\n{inner}" + f",\n{inner}".join(lines[1:]) + f"\n{indent}{ends[1]}"


BLOCKS = {
    "screen": screen,
    "words": words,
    "keys": commands.markdown_table,
    "json": result_json,
    "fields": reference.markdown,
}


def block(name: str) -> re.Pattern[str]:
    return re.compile(rf"(?<=<!-- {name} -->\n).*?(?=<!-- end of {name} -->)", re.DOTALL)


@pytest.mark.parametrize("name", BLOCKS)
def test_generated_block_is_current(name: str) -> None:
    found = block(name).search(README.read_text(encoding="utf-8"))
    assert found, f"no block {name}"
    assert found.group().strip("\n") == BLOCKS[name](), "run: python -m tests.test_docs"


def test_commands_are_those_that_ci_runs() -> None:
    shown = re.findall(r"^```sh\n(.*?)```$", README.read_text(encoding="utf-8"), re.DOTALL | re.MULTILINE)
    assert shown == [f"{SETUP}. && .venv/bin/budget {DEMO}\n", f'{SETUP}".[test]" && .venv/bin/python -m pytest\n']
    ran = subprocess.run([ROOT / ".ci" / "run", "--commands"], capture_output=True, text=True, check=True)
    assert ran.stdout == "".join(shown)


def test_walk_through_the_demo_does_what_it_says() -> None:
    text = README.read_text(encoding="utf-8")
    made = desk()
    for key in ("g", *"CV11"):
        made.key(key, key)
    made.key("enter")
    made.key("greater_than_sign", ">")
    told = plain(frame(made, 80, 24)[-2]).rstrip()
    assert told
    assert f"`{told}`" in text
    made.key("u", "u")
    assert not made.session.dirty


def test_every_view_and_file_named_exists() -> None:
    text = README.read_text(encoding="utf-8") + (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    for name in set(re.findall(r"`((?:budget|tests|projects|\.ci)/[\w./-]*)`", text)):
        assert (ROOT / name).exists(), name
    for name in VIEWS:
        assert f"| {name} " in text, name


def write() -> None:
    text = README.read_text(encoding="utf-8")
    for name, make in BLOCKS.items():
        before, after = block(name).split(text)
        text = f"{before}\n{make()}\n\n{after}"
    README.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    write()
