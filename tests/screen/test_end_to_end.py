"""The whole way in a pseudo-terminal: a user who does what the screen says mends the demo, tries, saves and leaves.

Each step is one that the screen offers, and waits for what it must bring; nothing waits for a time to pass.
"""

from __future__ import annotations

import re
import shutil
import tomllib
from pathlib import Path

import pytest

from tests.screen.driving import PROJECTS
from tests.screen.test_terminal import Terminal, ready, terminal


@pytest.fixture
def heron(tmp_path: Path) -> Path:
    for name in ("heron.toml", "shelf.toml"):
        shutil.copy(PROJECTS / name, tmp_path / name)
    return tmp_path / "heron.toml"


def homes(file: Path) -> dict[str, str]:
    with file.open("rb") as handle:
        return {row["id"]: row["filter"] for row in tomllib.load(handle)["converter"]}


def failing(lines: list[str]) -> bool:
    return "FAIL" in lines[0]


def offered(lines: list[str], word: str) -> str:
    """The key that the hint line offers for a word."""
    found = re.search(rf" (\S+) {word} ", lines[-1])
    assert found is not None, (word, lines[-1])
    return found[1]


def test_the_demo_is_mended_by_the_key_the_screen_names(heron: Path) -> None:
    before, text = homes(heron), heron.read_text(encoding="utf-8")
    with terminal(heron) as program:
        lines = program.until(lambda lines: lines[-2].startswith("FAIL: FL2 current"))
        key = lines[-2].rpartition(". ")[2].split()[0]
        assert key == ">"  # "> on a converter moves it on"
        row = next(n for n, line in enumerate(lines) if "FAIL" in line and line.startswith("FL2"))
        last = next(n for n in range(row + 1, 24) if lines[n].startswith("FL3")) - 1  # the last one behind FL2
        who = lines[last].split()[0]
        program.press(" ".join(["down"] * (last - 2)))
        program.until(lambda lines: lines[-4].startswith(f"converter {who}, name"))
        program.press(key)
        lines = program.until(lambda lines: not failing(lines) and lines[-2].startswith(f"{who} behind FL3: "))
        assert "thin" in lines[0]
        assert "*" in lines[0]  # not saved yet
        program.press(offered(lines, "undo"))
        lines = program.until(lambda lines: failing(lines) and lines[-2].startswith("undone: "))
        assert "*" not in lines[0].partition("|")[0]
        program.press("U")
        lines = program.until(lambda lines: not failing(lines) and lines[-2].startswith("done again: "))
        assert heron.read_text(encoding="utf-8") == text
        program.press(offered(lines, "save"))
        lines = program.until(lambda lines: "saved heron.toml" in lines[-2])
        assert homes(heron) == {**before, who: "FL3"}
        changed = set(heron.read_text(encoding="utf-8").splitlines()) ^ set(text.splitlines())
        assert all("filter" in line for line in changed)  # all else stands as it was written
        program.press(offered(lines, "quit"))
        assert program.end() == 0


def test_a_trial_is_held_compared_dropped_and_kept(heron: Path) -> None:
    text = heron.read_text(encoding="utf-8")

    def move(program: Terminal) -> list[str]:
        program.press("home >")
        return program.until(lambda lines: not failing(lines) and any(line.startswith("change") for line in lines))

    with terminal(heron) as program:
        program.press("g C V 1 1 enter K")
        program.until(lambda lines: "vs reference" in lines[0])
        lines = move(program)
        assert any("^" in line for line in lines if line.startswith("change"))  # what came out better
        program.press(offered(lines, "keep or drop"))
        lines = program.until_text("All is shown against reference")
        program.press(offered(lines, "drop it: back"))
        program.until(lambda lines: failing(lines) and "reference" not in lines[0])
        program.press("g C V 1 1 enter K")
        program.until(lambda lines: "vs reference" in lines[0])
        program.press(offered(move(program), "keep or drop"))
        lines = program.until_text("All is shown against reference")
        program.press(offered(lines, "keep the present"))
        lines = program.until(lambda lines: not failing(lines) and "reference" not in lines[0])
        assert not any(line.startswith("change") for line in lines)
        program.press(offered(lines, "quit"))
        lines = program.until_text("There is unsaved work")
        program.press(offered(lines, "discard it and quit"))
        assert program.end() == 0
        assert heron.read_text(encoding="utf-8") == text


def test_from_the_sheet_to_every_view_and_back(heron: Path) -> None:
    """By the keys of the list of all commands; each view says what it is, and Esc leads back."""
    with terminal(heron) as program:
        program.press("space")
        program.until_text("all commands")
        program.press("c h e c k s enter")
        program.until(lambda lines: "checks, worst first" in lines[0] and lines[2].startswith("FAIL"))
        program.press("escape")
        program.until(lambda lines: lines[2].startswith("bus 28 V"))
        for key, sign in (("a", "CE102"), ("y", "frequency plan"), ("l", "load cases"), ("r", "rules"), ("?", "help")):
            program.press(key)
            program.until(lambda lines, sign=sign: sign in lines[0])  # type: ignore[misc]
        program.press("s")
        program.until(lambda lines: lines[2].startswith("bus 28 V"))
        program.press("=")
        program.until_text("at full length")
        program.press("escape q")
        assert program.end() == 0


def test_a_project_begins_empty_and_is_led_to_a_result(tmp_path: Path) -> None:
    path = tmp_path / "bus.toml"
    path.write_text("format = 1\n", encoding="utf-8")
    with terminal(path, sign="budget") as program:
        program.until_text("first the bus: f on its row")
        program.press("f")
        program.until(lambda lines: "meaning" in lines[1])
        program.press("down 2 2 enter 2 8 enter 3 2 enter s")
        program.until_text("next a filter: N adds one")
        program.press("N")
        program.until_text("next a converter: n on the filter's row")
        program.press("n")
        lines = ready(program)
        assert any(line.startswith("  CV") for line in lines)
        program.press("w")
        program.until(lambda lines: "saved bus.toml" in lines[-2])
        with path.open("rb") as handle:
            made = tomllib.load(handle)
        assert (made["bus"]["low"], made["bus"]["nominal"], made["bus"]["high"]) == (22, 28, 32)
        assert made["converter"][0]["filter"] == made["filter"][0]["id"]
        program.press("q")
        assert program.end() == 0
