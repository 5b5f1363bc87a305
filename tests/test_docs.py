"""README.md says what the program does: its generated blocks are current, its commands those of .ci/run.

``python -m tests.test_docs`` writes the generated blocks anew.
"""

from __future__ import annotations

import json
import re
import subprocess
from collections.abc import Callable
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import pytest

from budget.cli import check_file
from budget.engine.allocate import allocate
from budget.engine.checks import ORDER
from budget.engine.evaluate import evaluate_dc
from budget.engine.transient import inrush
from budget.glossary import markdown as words_table
from budget.project import limits, reference
from budget.report import tables, words
from budget.session import Outcome, calculate, open_file
from budget.ui import commands
from budget.ui.desk import VIEWS, Desk, Work
from budget.ui.paint import frame, plain

ROOT = Path(__file__).parent.parent
README = ROOT / "README.md"
DEMO = "projects/heron.toml"
SETUP = "python3 -m venv --without-pip .venv && python3 -m pip --python .venv/bin/python install --quiet "


@cache
def as_opened() -> Outcome:
    return calculate(open_file(ROOT / DEMO).snapshot())


def desk() -> Desk:
    """The demo as it opens, calculating at once after each edit; what was calculated before is known after an undo."""
    made = Desk(open_file(ROOT / DEMO))
    known = {id(made.session.document): (made.session.document, as_opened())}

    def at_once() -> None:
        document = made.session.document
        if id(document) not in known:
            known[id(document)] = (document, calculate(made.session.snapshot()))
        made.accept(replace(known[id(document)][1], generation=made.session.generation))

    made.calculate = at_once
    at_once()
    return made


def screen(*keys: str) -> Callable[[], str]:
    """What the demo shows after some keys, in 80 by 24 characters."""

    def make() -> str:
        made = desk()
        press(made, *keys)
        return "```text\n" + "\n".join(shown(made)) + "\n```"

    return make


def press(made: Desk, *keys: str) -> None:
    for key in keys:
        frame(made, 80, 24)  # as on the screen, where the cursor finds its row after each key
        made.key(key, key if len(key) == 1 else None)


def shown(made: Desk) -> list[str]:
    return [plain(line).rstrip() for line in frame(made, 80, 24)]


def glossary() -> str:
    return words_table()


def result_json() -> str:
    """What one corner of the demo gives, each list cut to one entry and each number to four digits."""
    result, warnings = check_file(ROOT / DEMO, ["survey"], ["low"])

    def cut(value: Any) -> Any:
        if isinstance(value, dict):
            return {key: cut(entry) for key, entry in value.items()}
        if isinstance(value, list):
            if not all(isinstance(entry, dict) for entry in value):
                return value  # names and orders of a pair
            wanted = [v for v in value if "FL2" in (v.get("id"), v.get("subject"))]
            return [cut(entry) for entry in (wanted or value)[:1]]
        return float(f"{value:.4g}") if isinstance(value, float) else value

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


def limit_sets() -> str:
    """The built-in limit sets, from their data files."""
    lines = ["| Set | What it is | Band | Reads | Set-up | Edition | Basis |", "|---|---|---|---|---|---|---|"]
    for name, data in limits.builtin().items():
        first, last = (words.frequency(data["points"][k][0]) for k in (0, -1))
        cells = (
            data["title"],
            f"{first} to {last}",
            data["unit"],
            f"`{data['setup']}`",
            data["edition"],
            data["basis"],
        )
        lines.append(f"| `{name}` | " + " | ".join(cells) + " |")
    return "\n".join(lines)


BLOCKS = {
    "screen": screen(),
    "spectrum": screen("a"),
    "switchon": screen("J", "L"),
    "words": glossary,
    "keys": commands.markdown_table,
    "limits": limit_sets,
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
    text = re.sub(r"\s+", " ", README.read_text(encoding="utf-8"))
    made = desk()

    def at_once(work: Work) -> None:
        work.done(work.run(lambda: False, lambda share: None))

    def told(line: str) -> None:
        assert line
        assert f"`{line}`" in text, line

    def fields_of(row: str, field: str, typed: str) -> None:
        press(made, "s", "g", *row, "enter", "f")
        keys = [line.key[-1] for _, line in made.lines() if line is not None]
        press(made, *["pageup"] * 3, *["down"] * keys.index(field), *typed, "enter")

    made.start_job = at_once
    press(made, "g", *"CV11", "enter", ">")
    told(shown(made)[-2].removesuffix("; ... (=)"))
    assert "3 thin" in shown(made)[0]
    assert "FAIL" not in shown(made)[0]

    press(made, "a")
    told_by_receiver = " ".join(shown(made)[-3:-1])
    assert "receiver at 317 kHz" in told_by_receiver
    assert "margin 4.3 dB" in told_by_receiver
    press(made, "y", "M", *"CV11", "enter", "enter")
    told(shown(made)[-2])
    fields_of("CV11", "frequency", "338k")
    assert "bus emission 59.6 dBuV -> 57.3 dBuV" in made.message
    assert "the emission goes from 59.6 dBuV to 57.3 dBuV" in text
    assert "2 thin" in shown(made)[0]

    press(made, "J")
    assert "86.21 A    110 A" in "\n".join(shown(made))
    assert "The bus takes 86.21 A" in text
    fields_of("bus", "inrush_peak", "80")
    assert "1 FAIL" in shown(made)[0]
    said = re.findall(r"add some ([\d.]+) mohm to the feed, or to let the source rise over some (\d+) us", text)
    assert made.session.result is not None
    project = made.session.result.project
    bus = project.bus
    for helped in (
        replace(bus, resistance=bus.resistance + 1e-3 * float(said[0][0])),
        replace(bus, rise=1e-6 * float(said[0][1])),
    ):  # the search itself (H) takes long
        (run,) = inrush(replace(project, bus=helped), only=[(0, "on-high")]).runs
        assert run.bus_peak == pytest.approx(79.9, abs=0.4)
    press(made, "u")
    assert "FAIL" not in shown(made)[0]

    press(made, "Y")
    told(" ".join(shown(made)[-3:-1]).split(", least damping")[0])
    assert made.session.result is not None
    proposed = allocate(made.session.result.project, "even", finish=evaluate_dc, explain=False)
    best, *_, single, present = proposed.candidates
    assert (proposed.proved, present.moves, best.moves, single.moves) == (True, 0, 8, 1)
    assert dict(single.allocation)["CV4"] == "FL1"
    headrooms = tuple(f"{c.headroom or 0.0:.1%}".replace("%", " %") for c in (best, present, single))
    assert headrooms == ("21.8 %", "0.8 %", "12.8 %")
    assert "headroom of 21.8 % where the present one has 0.8 %, but takes 8 moves" in text

    press(made, "u", "u")
    assert not made.session.dirty


def test_every_check_is_explained() -> None:
    text = README.read_text(encoding="utf-8")
    for check in ORDER:
        assert f"| {'emission NAME' if check == 'emission' else check} |" in text, check


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
