"""The command line as its users meet it: exit statuses, streams, pipes, terminals, odd names."""

from __future__ import annotations

import contextlib
import json
import os
import pty
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from budget import __version__
from budget.cli import run
from budget.project.starter import starter

ROOT = Path(__file__).parent.parent
FOLDER = ROOT / "projects"
HERON = str(FOLDER / "heron.toml")
SMALLEST = str(FOLDER / "smallest.toml")

Run = Callable[..., tuple[int, str, str]]


@pytest.fixture
def budget(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Run:
    """One command line in this process and an empty folder: exit status, standard output, standard error."""
    monkeypatch.chdir(tmp_path)

    def call(*arguments: str) -> tuple[int, str, str]:
        try:
            status = run(arguments)
        except SystemExit as leaving:
            status = int(leaving.code or 0)
        out, err = capsys.readouterr()
        return status, out, err

    return call


def environment(**changes: str | None) -> dict[str, str]:
    """Of a child process, with the locale and the variables about colour as told and nothing else of the tester's."""
    kept = {k: v for k, v in os.environ.items() if not k.startswith(("LC_", "LANG", "PYTHON", "NO_COLOR", "TERM"))}
    kept["PYTHONPATH"] = str(ROOT)
    return {**kept, **{key: value for key, value in changes.items() if value is not None}}


def process(*arguments: str, module: str = "budget", **changes: str | None) -> subprocess.CompletedProcess[bytes]:
    command = [sys.executable, "-m", module, *arguments]
    return subprocess.run(command, capture_output=True, env=environment(**changes), timeout=60, check=False)


def at_terminal(*arguments: str, **changes: str | None) -> tuple[int, str]:
    """Exit status and what a terminal gets of one command."""
    master, slave = pty.openpty()
    command = [sys.executable, "-m", "budget", *arguments]
    env = environment(**{"TERM": "xterm-256color", **changes})
    child = subprocess.Popen(command, stdin=slave, stdout=slave, stderr=slave, env=env)
    os.close(slave)
    parts = []
    with contextlib.suppress(OSError):  # the last reader of a closed pseudo-terminal gets an input/output error
        while part := os.read(master, 65536):
            parts.append(part)
    os.close(master)
    return child.wait(60), b"".join(parts).decode()


# -- check: exit status and what it covers


@pytest.mark.parametrize(
    ("arguments", "status"),
    [
        ((HERON,), 1),
        ((SMALLEST,), 0),
        ((SMALLEST, "--strict"), 1),  # without data
        ((HERON, "--case", "ground"), 0),
        ((HERON, "--case", "relay"), 0),
        ((HERON, "--case", "relay", "--strict"), 1),  # thin
        ((HERON, "--line", "high"), 0),
        ((HERON, "--line", "high", "--line", "low"), 1),
        ((HERON, "--case", "ground", "--case", "survey"), 1),
        ((SMALLEST, HERON), 1),
    ],
    ids=lambda value: " ".join(Path(v).name for v in value) if isinstance(value, tuple) else str(value),
)
def test_exit_status(budget: Run, arguments: tuple[str, ...], status: int) -> None:
    found, out, err = budget("check", *arguments)
    assert (found, err) == (status, "")
    assert out


def test_only_the_wanted_corners_are_told(budget: Run) -> None:
    arguments = ("check", "--dc", HERON, "--format", "json", "--case", "relay", "--case", "ground", "--line", "low")
    data = json.loads(budget(*arguments)[1])
    assert [(row["case"], row["line"]) for row in data["operating"]] == [("ground", "low"), ("relay", "low")]
    assert {row["case"] for row in data["checks"]} == {"ground", "relay", None}
    assert {row["line"] for row in data["checks"] if row["case"]} <= {"low", None}
    assert "cases ground, relay; lines low\n" in budget(*arguments, "--format", "text")[1]


def test_the_limits_of_the_corners_are_those_of_all(budget: Run) -> None:
    """A corner has the same bits whatever is calculated beside it."""
    everything = json.loads(budget("check", "--dc", HERON, "--format", "json")[1])["operating"]
    alone = json.loads(budget("check", "--dc", HERON, "--format", "json", "--case", "survey", "--line", "low")[1])[
        "operating"
    ]
    assert alone == [row for row in everything if (row["case"], row["line"]) == ("survey", "low")]


def test_an_unknown_case_is_named_with_those_there_are(budget: Run) -> None:
    status, out, err = budget("check", "--dc", HERON, "--case", "surve\x1by")
    assert (status, out) == (2, "")
    assert "no load case is called 'surve?y'; there are: ground, climb, survey, relay." in err


def test_options_may_stand_between_files(budget: Run) -> None:
    status, out, _ = budget("check", SMALLEST, "--strict", HERON, "--format", "csv")
    assert status == 1
    assert {line.split(",")[0] for line in out.splitlines()} == {"file", SMALLEST, HERON}


# -- check: files that cannot be used


def test_an_unusable_file_does_not_hide_the_others(budget: Run) -> None:
    Path("broken.toml").write_text("[bus\n")
    Path("wrong.toml").write_text('format = 1\n[bus]\nlow = "5 A"\nnominal = 28\nhigh = 30\n')
    files = (SMALLEST, "broken.toml", "wrong.toml", "absent.toml", HERON)
    status, out, err = budget("check", *files)
    assert status == 2
    assert "Heron" in out
    assert "smallest.toml: OK" in out
    for words in (
        "broken.toml: ",
        "at line 1",
        "wrong.toml: bus, low: '5 A' is a current",
        "absent.toml does not exist",
    ):
        assert words in err
    status, out, _ = budget("check", *files, "--format", "json")
    assert status == 2
    assert [entry["file"] for entry in json.loads(out)] == [SMALLEST, HERON]
    status, out, _ = budget("check", "absent.toml", "broken.toml", "--format", "json")
    assert (status, json.loads(out)) == (2, [])


@pytest.mark.parametrize("form", ["text", "json", "markdown", "csv"])
def test_a_single_unusable_file_prints_nothing(budget: Run, form: str) -> None:
    Path("folder").mkdir()
    status, out, err = budget("check", "folder", "--format", form)
    assert (status, out) == (2, "")
    assert err.startswith("budget: folder ")
    assert len(err.splitlines()) == 1


def test_every_error_of_a_file_is_told_at_once(budget: Run) -> None:
    Path("two.toml").write_text('format = 1\n[bus]\nlow = "5 A"\nnominal = -28\n')
    status, out, err = budget("check", "two.toml")
    assert (status, out) == (2, "")
    assert err.splitlines()[0] == "budget: two.toml cannot be used:"
    assert len(err.splitlines()) == 4
    assert all(line.startswith("  two.toml: ") for line in err.splitlines()[1:])


def test_warnings_of_a_csv_go_to_standard_error(budget: Run) -> None:
    text = Path(SMALLEST).read_text().replace("[bus]", "[bus]\ncolour = 1")
    Path("a.toml").write_text(text)
    status, out, err = budget("check", "a.toml", "--format", "csv")
    assert status == 0
    assert "colour" not in out
    assert err == "budget: a.toml: bus, colour: is an unknown key; it is kept, and not used.\n"


# -- usage


@pytest.mark.parametrize(
    "arguments",
    [
        ("check",),
        ("check", "--dc", HERON, "--format", "pdf"),
        ("check", "--dc", HERON, "--line", "middle"),
        ("check", "--dc", HERON, "--form", "json"),  # a short form today may be ambiguous tomorrow
        ("check", "--dc", HERON, "--\x1b[31m"),
        ("chekc", HERON),
        ("--bogus",),
        ("new",),
        ("new", "a.toml", "b.toml"),
    ],
    ids=lambda value: " ".join(ascii(Path(v).name) for v in value),
)
def test_usage_errors(budget: Run, arguments: tuple[str, ...]) -> None:
    status, out, err = budget(*arguments)
    assert (status, out) == (2, "")
    assert err.startswith("usage: budget")
    assert "\x1b" not in err


def test_a_mistyped_command_is_told_from_a_file(budget: Run) -> None:
    assert (
        "'chekc' is no command; the commands are check, new, allocate, reach, sweep, compare"
        in budget("chekc", HERON)[2]
    )


@pytest.mark.parametrize("arguments", [("--help",), ("check", "-h"), ("new", "--help")], ids=" ".join)
def test_help_shows_examples(budget: Run, arguments: tuple[str, ...]) -> None:
    status, out, err = budget(*arguments)
    assert (status, err) == (0, "")
    assert "example" in out
    assert "budget new bus.toml" in out or "budget check bus.toml" in out


def test_help_says_that_hardware_is_another_matter(budget: Run) -> None:
    assert "local codes and licensed practice" in budget("--help")[1]


def test_version(budget: Run) -> None:
    assert budget("--version") == (0, f"budget {__version__}\n", "")


def test_the_sheet_needs_a_terminal(budget: Run) -> None:
    for arguments in ((), (HERON,), ("./check",), ("--", "check")):
        status, out, err = budget(*arguments)
        assert (status, out) == (2, "")
        assert err == "budget: the sheet needs a terminal; 'budget check FILE' prints the results without one.\n"


# -- new


def test_new_writes_a_project_that_can_be_checked(budget: Run) -> None:
    assert budget("new", "bus.toml") == (0, "bus.toml is written; 'budget bus.toml' opens it.\n", "")
    assert Path("bus.toml").read_text() == starter()
    assert budget("check", "bus.toml")[0] == 0


def test_new_never_replaces_a_file(budget: Run) -> None:
    Path("mine").write_text("precious")
    Path("link").symlink_to("nowhere")
    for name in ("mine", "link", "."):
        status, out, err = budget("new", name)
        assert (status, out) == (2, "")
        assert f"{name} exists already; nothing was written." in err
    assert Path("mine").read_text() == "precious"
    assert not Path("nowhere").exists()


def test_new_says_what_stands_in_its_way(budget: Run) -> None:
    status, out, err = budget("new", "no/such/folder.toml")
    assert (status, out) == (2, "")
    assert err.startswith("budget: no/such/folder.toml could not be written: no such file or directory.")


@pytest.mark.parametrize(
    ("name", "shown"), [("check", "./check"), ("new", "./new"), ("my bus.toml", "'my bus.toml'"), ("a\x1bb", "'a?b'")]
)
def test_new_tells_how_an_odd_name_is_opened(budget: Run, name: str, shown: str) -> None:
    status, out, _ = budget("new", name)
    assert status == 0
    assert out.endswith(f"'budget {shown}' opens it.\n")
    assert "\x1b" not in out


def test_a_file_may_be_called_like_a_command(budget: Run) -> None:
    Path("check").write_text(Path(SMALLEST).read_text())
    assert budget("check", "check")[0] == 0


# -- user texts never reach the terminal raw

NASTY = """\
format = 1
[project]
title = "t\\u001b]0;owned\\u0007\\u001b[2J\\u202e\\nend"
[bus]
name = "b\\u009b31m"
low = 20
nominal = 24
high = 28
"k\\u001b[31m" = 1
[[filter]]
id = "F1"
name = "f\\u007f\\u001b"
dm = []
cm = []
[[converter]]
id = "C1"
filter = "F1"
name = "c\\u001bM\\tx"
rated_power = 10
output = [{ voltage = 5, current = 1 }]
efficiency = 0.9
"""


@pytest.mark.parametrize("form", ["text", "json", "markdown", "csv"])
def test_no_control_characters_come_out(budget: Run, form: str) -> None:
    name = "n\x1b[31m\u202e.toml"
    Path(name).write_text(NASTY)
    status, out, err = budget("check", name, "--format", form)
    assert status == 0
    assert all(c.isprintable() or c == "\n" for c in out + err)
    assert "owned" in out or form == "csv"
    if form == "json":
        assert json.loads(out)["title"] == "t\x1b]0;owned\x07\x1b[2J\u202e\nend"


def test_no_control_characters_come_out_with_an_error(budget: Run) -> None:
    Path("n\x1b[31m.toml").write_text(NASTY.replace("efficiency = 0.9", 'efficiency = "\\u001b[31m"\npart = "\\u001b"'))
    Path("s.toml").write_text('shelf_files = ["\\u001b[31m.toml"]\n' + NASTY)
    for file in ("n\x1b[31m.toml", "s.toml", "absent\x1b[31m"):
        status, out, err = budget("check", file)
        assert (status, out) == (2, "")
        assert all(c.isprintable() or c == "\n" for c in err)


# -- as a process of its own


def test_python_m_budget(tmp_path: Path) -> None:
    done = process("check", "--dc", HERON)
    assert (done.returncode, done.stderr) == (1, b"")
    assert b"FAIL (1 fail" in done.stdout
    assert b"\x1b" not in done.stdout, "a pipe gets no colours"


@pytest.mark.parametrize("form", ["text", "json", "markdown", "csv"])
def test_output_fits_any_encoding(tmp_path: Path, form: str) -> None:
    file = tmp_path / "\u00fc.toml"
    text = Path(SMALLEST).read_text().replace('id = "CV1"', 'id = "CV\u00dc1"\nname = "\u4e2d\u6587"')
    file.write_text(text, encoding="utf-8")
    arguments = ("check", str(file), "--format", form)
    plain = process(*arguments, LC_ALL="C", PYTHONIOENCODING="ascii")
    assert (plain.returncode, plain.stderr) == (0, b"")
    assert plain.stdout.isascii()
    assert b"CV\\xdc1" in plain.stdout or b"CV\\\\xdc1" in plain.stdout or form == "json"
    if form == "json":
        assert "CV\u00dc1" in {row["subject"] for row in json.loads(plain.stdout)["checks"]}
    posix = process(*arguments, LC_ALL="C")
    assert posix.returncode == 0
    posix.stdout.decode()


@pytest.mark.parametrize(
    "arguments", [("check", "--dc", HERON), ("check", "--dc", HERON, "--format", "json"), ("--help",)], ids=len
)
def test_a_reader_that_had_enough_is_no_fault(arguments: tuple[str, ...]) -> None:
    read, write = os.pipe()
    os.close(read)
    command = [sys.executable, "-m", "budget", *arguments]
    done = subprocess.run(command, stdout=write, stderr=subprocess.PIPE, env=environment(), timeout=60, check=False)
    os.close(write)
    assert done.stderr == b""
    assert done.returncode == (0 if arguments == ("--help",) else 1), "the status speaks of the checks"


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
def test_a_full_disk_is_said() -> None:
    with open("/dev/full", "wb") as full:
        command = [sys.executable, "-m", "budget", "check", SMALLEST]
        done = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, env=environment(), timeout=60, check=False)
    assert done.returncode == 2
    assert done.stderr == b"budget: the output could not be written: no space left on device.\n"


def test_a_closed_output_is_said() -> None:
    done = subprocess.run(
        ["/bin/sh", "-c", 'exec "$0" -m budget check "$1" >&-', sys.executable, SMALLEST],
        capture_output=True,
        env=environment(),
        timeout=60,
        check=False,
    )
    assert done.returncode == 2
    assert b"could not be written" in done.stderr


def test_colours_on_a_terminal_only_and_only_where_wanted() -> None:
    status, text = at_terminal("check", "--dc", HERON)
    assert status == 1
    assert "\x1b[1;31mFAIL\x1b[0m" in text
    assert "\x1b[32mok" in text
    plain = process("check", "--dc", HERON).stdout.decode()
    colours = ("\x1b[1;31m", "\x1b[33m", "\x1b[32m", "\x1b[2m", "\x1b[0m")
    for colour in colours:
        text = text.replace(colour, "")
    assert text.replace("\r\n", "\n") == plain, "colours change nothing but colours"
    assert "\x1b" not in at_terminal("check", "--dc", HERON, NO_COLOR="1")[1]
    assert "\x1b" not in at_terminal("check", "--dc", HERON, TERM="dumb")[1]
    assert "\x1b" in at_terminal("check", "--dc", HERON, NO_COLOR="")[1]
    assert "\x1b" not in at_terminal("check", "--dc", HERON, "--format", "markdown")[1]


def test_an_unusable_file_at_a_terminal_is_one_sentence(tmp_path: Path) -> None:
    status, text = at_terminal(str(tmp_path / "absent.toml"))
    assert status == 2
    assert "does not exist; an existing project file was expected" in text
    assert "\x1b" not in text, "no screen was opened for it"
