"""What a hostile file cannot do: read elsewhere, write elsewhere, cost without end, speak to the terminal.

``tests/test_fuzz.py`` looks for what nobody thought of; here stands what somebody did.
"""

from __future__ import annotations

import csv
import io
import json
import os
import tomllib
import unicodedata
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget import trials
from budget.cli import run
from budget.engine.lines import MOST, lines_of
from budget.project import document as doc
from budget.project import permit, store, toml_load
from budget.project.build import MAX_PROBLEMS, build
from budget.project.problems import ProjectError
from budget.session import Session, open_file
from budget.ui import spectrum, stable, switchon
from budget.ui.desk import VIEWS, Desk
from tests.fuzz.strings import CONTROLS, FORMULAS
from tests.fuzz.watch import ReachedError, watching
from tests.screen.driving import PROJECTS, SMALL, calculated, desk_of, press, screen, session_of, typed

SMALLEST = (PROJECTS / "smallest.toml").read_text()
SECRET = "[shelf.filter.secret]\nrated_current = 1\n"
PART = "[shelf.filter.common]\nrated_current = 2\n"

Run = Callable[..., tuple[int, str, str]]


@pytest.fixture
def budget(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Run:
    """One command line in this process, in the folder of a project: exit status, standard output, standard error."""
    (tmp_path / "project").mkdir()
    monkeypatch.chdir(tmp_path / "project")

    def call(*arguments: str) -> tuple[int, str, str]:
        try:
            status = run(arguments)
        except SystemExit as leaving:
            status = int(leaving.code or 0)
        out, err = capsys.readouterr()
        return status, out, err

    return call


@pytest.fixture(autouse=True)
def nothing_allowed() -> object:
    """What one test allows, no other may use."""
    yield
    permit.allow(())


def harmless(text: str) -> bool:
    """No control characters, no marks of direction or without width, no separators but the space and the line end."""
    return all(c == "\n" or c == " " or unicodedata.category(c) not in NEVER for c in text)


NEVER = ("Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp", "Zs")


def basic(text: str) -> str:
    """A text as a TOML string."""
    return '"' + "".join(f"\\U{ord(c):08x}" if c in '"\\' or not c.isprintable() else c for c in text) + '"'


# -- what a project file reads


OUTSIDE = {
    "a way up": "../secret.toml",
    "a way down and up": "sub/../../secret.toml",
    "from the top": "{top}/secret.toml",
    "from the top, into the folder": "{top}/project/parts.toml",
    "a link to a file": "link.toml",
    "a link to a folder": "up/secret.toml",
    "a link to a link": "again.toml",
    "the password file": "/etc/passwd",
    "a process": "/proc/self/environ",
    "a process by a link": "environ",
    "a device": "/dev/zero",
    "a device by a link": "zero",
    "the terminal": "/dev/tty",
    "another host": "//server/share.toml",
}
REFUSED = {
    "a pipe": ("pipe", "not an ordinary file"),
    "a folder": ("sub", "folder"),
    "the folder itself": (".", "folder"),
    "no name": ("", "folder"),
    "a huge file": ("huge.toml", "MB"),
    "itself": ("hostile.toml", "circle"),
    "a circle": ("ring.toml", "circle"),
    "a NUL": ("a\0b", "not a file name"),
    "an address": ("file:///etc/passwd", "does not exist"),
    "a home": ("~/secret.toml", "does not exist"),
    "a variable": ("$HOME/secret.toml", "does not exist"),
    "a command": ("| id", "does not exist"),
    "a pattern": ("*.toml", "does not exist"),
    "a very long name": ("x" * 5000, "could not be read"),
    "a very long way": ("a/" * 5000, ""),
}


@pytest.fixture
def place(tmp_path: Path) -> Path:
    """The folder of a hostile project, with all sorts of things in it and a secret beside it."""
    folder = tmp_path / "project"
    folder.mkdir(exist_ok=True)
    (tmp_path / "secret.toml").write_text(SECRET)
    (folder / "sub").mkdir()
    (folder / "parts.toml").write_text(PART)
    (folder / "link.toml").symlink_to("../secret.toml")
    (folder / "again.toml").symlink_to("link.toml")
    (folder / "up").symlink_to("..")
    (folder / "environ").symlink_to("/proc/self/environ")
    (folder / "zero").symlink_to("/dev/zero")
    (folder / "ring.toml").write_text('shelf_files = ["sub/ring.toml"]\n')
    (folder / "sub" / "ring.toml").write_text('shelf_files = ["../ring.toml"]\n')
    os.mkfifo(folder / "pipe")
    with open(folder / "huge.toml", "wb") as huge:
        huge.truncate(3_000_000_000)
    return folder


def opened(folder: Path, name: str) -> store.Loaded:
    """The project that names this shelf file, with proof that nothing else was opened."""
    path = folder / "hostile.toml"
    path.write_text(f"shelf_files = [{basic(name)}]\n{SMALLEST}")
    with watching(folder):
        return store.load(path)


@pytest.mark.parametrize("name", OUTSIDE.values(), ids=OUTSIDE)
def test_a_file_outside_the_folder_is_not_even_opened(place: Path, name: str) -> None:
    loaded = opened(place, name.replace("{top}", str(place.parent)))
    (problem,) = loaded.problems
    assert loaded.shelves == ()
    assert problem.error
    assert "lies outside the project's folder" in problem.text
    assert "'--shelf-from FOLDER'" in problem.text, "it says how it may be allowed"
    assert problem.sentence().isprintable()
    assert build(loaded.document, loaded.shelves).project is not None, "the project opens all the same"


@pytest.mark.parametrize(("name", "why"), REFUSED.values(), ids=REFUSED)
def test_what_is_no_shelf_file_is_refused(place: Path, name: str, why: str) -> None:
    loaded = opened(place, name)
    assert loaded.problems
    assert all(p.error and p.sentence().isprintable() for p in loaded.problems)
    assert why in " ".join(p.text for p in loaded.problems)
    assert "secret" not in str([s.data for s in loaded.shelves])


def test_a_shelf_file_of_a_shelf_file_is_held_to_the_same(place: Path) -> None:
    (place / "sub" / "inner.toml").write_text('shelf_files = ["../parts.toml", "../../secret.toml", "../link.toml"]\n')
    loaded = opened(place, "sub/inner.toml")
    assert [s.name for s in loaded.shelves] == ["sub/inner.toml", "parts.toml"]
    assert len([p for p in loaded.problems if "lies outside" in p.text]) == 2


def test_the_watch_sees_what_is_opened(place: Path) -> None:
    with pytest.raises(ReachedError, match="secret"), watching(place):
        (place.parent / "secret.toml").read_text()
    with pytest.raises(ReachedError, match="exec"), watching(place):
        exec("1 + 1")
    with pytest.raises(ReachedError, match="writing"), watching(place):
        (place.parent / "new").write_text("")


def test_many_names_of_shelf_files_are_not_all_looked_at(place: Path) -> None:
    path = place / "hostile.toml"
    names = ", ".join(f'"s{k}.toml"' for k in range(5000))
    path.write_text(f"shelf_files = [{names}]\n{SMALLEST}")
    problems = store.load(path).problems
    assert len(problems) == store.MAX_NAMES + 1
    assert "more than" in problems[-1].text


def test_shelf_files_have_one_limit_together(place: Path) -> None:
    for k in range(3):
        (place / f"big{k}.toml").write_text(
            "#" * (store.MAX_BYTES // 2 - 2000) + "\n" + PART.replace("common", f"p{k}")
        )
    path = place / "hostile.toml"
    path.write_text(f'shelf_files = ["big0.toml", "big1.toml", "big2.toml"]\n{SMALLEST}')
    loaded = store.load(path)
    assert [s.name for s in loaded.shelves] == ["big0.toml", "big1.toml"]
    assert "with all its shelf files together" in loaded.problems[0].text
    assert store.read_shelves(loaded.document.data, path) == (loaded.shelves, loaded.problems)


# -- what the user allows


@pytest.fixture
def shared(place: Path) -> Path:
    """A project whose parts stand in a folder beside its own: where the parts are."""
    common = place.parent / "common"
    (common / "more").mkdir(parents=True)
    (common / "parts.toml").write_text(PART + "[shelf.converter.box]\nefficiency = 0.5\nrated_power = 9\n")
    (common / "more" / "parts.toml").write_text('shelf_files = ["../parts.toml", "../../secret.toml"]\n')
    text = SMALLEST.replace('id = "CV1"', 'id = "CV1"\npart = "box"')
    (place / "p.toml").write_text(f'shelf_files = ["../common/parts.toml"]\n{text}')
    (place / "q.toml").write_text(f"shelf_files = [{basic(str(common / 'parts.toml'))}]\n{text}")
    return common


COMMANDS = (
    ("check", "--dc", "{}"),
    ("allocate", "{}", "--time", "0.1"),
    ("reach", "{}", "CV1.rated_power"),
    ("sweep", "{}", "CV1.rated_power", "1 W", "2 W", "2", "bus.low", "20 V", "21 V", "2"),
    ("compare", "{}", "{}"),
)


@pytest.mark.parametrize("command", COMMANDS, ids=lambda c: c[0])
@pytest.mark.parametrize("name", ["p.toml", "q.toml"])
def test_the_user_may_allow_another_folder(budget: Run, shared: Path, command: tuple[str, ...], name: str) -> None:
    arguments = [word.replace("{}", name) for word in command]
    status, out, err = budget(*arguments)
    assert (status, out) == (2, "")
    assert "'--shelf-from FOLDER'" in err
    status, out, err = budget(*arguments, "--shelf-from", "../common")
    assert status in (0, 1), err
    assert out
    assert budget(*arguments)[0] == 2, "what was allowed once is not allowed for ever"
    assert budget(*arguments, "--shelf-from", "sub")[0] == 2, "another folder is no help"
    assert budget(*arguments, "--shelf-from", "sub", "--shelf-from", str(shared))[0] in (0, 1)


def test_only_what_was_allowed_is_read(place: Path, shared: Path) -> None:
    path = place / "p.toml"
    path.write_text(f'shelf_files = ["../common/more/parts.toml", "../secret.toml"]\n{SMALLEST}')
    (shared / "away.toml").symlink_to("../secret.toml")
    permit.allow([str(shared)])
    loaded = store.load(path)
    assert [s.name for s in loaded.shelves] == ["../common/more/parts.toml", "../common/parts.toml"]
    assert len([p for p in loaded.problems if "lies outside" in p.text]) == 2
    path.write_text(f'shelf_files = ["../common/away.toml"]\n{SMALLEST}')
    assert store.load(path).shelves == (), "a link that leads out of the allowed folder"


def test_a_folder_that_is_none_is_said(budget: Run, shared: Path) -> None:
    for folder in ("absent", "p.toml", "\x1b[31m", ""):
        status, out, err = budget("check", "--dc", "p.toml", "--shelf-from", folder)
        assert (status, out) == (2, "")
        assert "is no folder" in err
        assert harmless(err)


@pytest.mark.parametrize("command", ["check", "allocate", "reach", "sweep", "compare", ""])
def test_every_help_tells_of_it(budget: Run, command: str) -> None:
    status, out, _ = budget(*([command] if command else []), "--help")
    assert status == 0
    assert "--shelf-from FOLDER" in out


# -- what a project file writes


def listing(folder: Path) -> set[str]:
    return {str(p.relative_to(folder)) for p in folder.rglob("*")}


def test_names_in_a_file_lead_nowhere(tmp_path: Path) -> None:
    """Titles, ids, limits and names that look like paths: what is written stands beside the project, by its name."""
    text = SMALL.replace('"Test bench"', '"../../title"').replace('"bench"', '"/tmp/bus"')
    text = text.replace('"own"', '"../own"').replace('id = "FA"', 'id = "../FA"').replace('"FA"', '"../FA"')
    folder = tmp_path / "here"
    folder.mkdir()
    (folder / "bus.toml").write_text(text.replace("C1", "/C1").replace("{ /C1", '{ "/C1"').replace("../../FA", "../FA"))
    os.chdir(folder)
    session = open_file(folder / "bus.toml")
    desk, _ = desk_of(session)
    before = listing(tmp_path)
    with watching(folder):
        desk.change("x", doc.put(session.document, ("project", "note"), "changed"))
        press(desk, "w")
        session.hold_as("../trial")
        for key in ("a", "Y", "J"):
            press(desk, f"{key} E enter escape escape")
    made = listing(tmp_path) - before
    assert all(name.startswith("here/bus.") for name in made), made
    assert any(name.endswith(".csv") for name in made)


def test_a_copy_brings_no_shelf_file_out_of_its_folder(place: Path, shared: Path, tmp_path: Path) -> None:
    permit.allow([str(shared)])
    target = tmp_path / "deep" / "target"
    target.mkdir(parents=True)
    session = open_file(place / "p.toml")
    before = listing(tmp_path)
    with pytest.raises(ProjectError, match="cannot be brought along"):
        session.save_as(target / "p.toml")
    assert listing(tmp_path) == before, "nothing was written"
    assert session.path == place / "p.toml"
    sideways = tmp_path / "beside"
    sideways.mkdir()
    open_file(place / "p.toml").save_as(sideways / "p.toml")  # the way to the parts is the same from there
    assert open_file(sideways / "p.toml").file_problems == ()
    open_file(place / "q.toml").save_as(target / "q.toml")  # and from anywhere
    assert open_file(target / "q.toml").file_problems == ()
    assert listing(tmp_path) - before == {"beside", "beside/p.toml", "deep/target/q.toml"}


def test_a_link_in_the_target_is_not_followed(tmp_path: Path) -> None:
    source, target, elsewhere = (tmp_path / name for name in ("source", "target", "elsewhere"))
    for folder in (source / "sub", target, elsewhere):
        folder.mkdir(parents=True)
    (source / "sub" / "parts.toml").write_text(PART)
    (target / "sub").symlink_to(elsewhere)
    with pytest.raises(ProjectError, match="cannot be brought along"):
        store.copy_shelves(["sub/parts.toml"], source, target)
    assert listing(elsewhere) == set()


# -- what a project file costs


def refusal(text: str) -> str:
    with pytest.raises(ProjectError) as caught:
        store.parse(text, None, "x.toml")
    sentence = str(caught.value)
    assert all(line.isprintable() and line.isascii() for line in sentence.split("\n"))
    return sentence


LONG = ".".join("a" * 3000)
TOO_MUCH = {
    "a dotted key": (f"{LONG} = 1", "names"),
    "a dotted header": (f"[{LONG}]\nb = 1", "names"),
    "a dotted header of rows": (f"[[{LONG}]]\nb = 1", "names"),
    "a dotted key in a table": (f"x = {{ {LONG} = 1 }}", "names"),
    "a dotted key in a list": (f"x = [\n  1, # a\n  {{ a = 2, {LONG} = 1 }}]", "names"),
    "a spaced dotted key": (" . ".join(['"a.b"', "'c'"] * 9) + " = 1", "names"),
    "behind a text of many lines": (f'x = {{ a = """\n"\\"""", {LONG} = 1 }}', "names"),
    "behind an open text": (f'x = "\n[{LONG}]\n', "names"),
    "lists in each other": (f"x = {'[' * 31}{']' * 31}", "deep"),
    "many lists in each other": (f"x = {'[' * 5000}", "nested"),
    "tables in each other": (f"x = {'{a=' * 31}1{'}' * 31}", "deep"),
    "rows": ("[[filter]]\n" * 501, "filter has 501 rows"),
    "inline rows": (f"case = [{'{},' * 501}]", "case has 501 rows"),
    "items": (f"x = [{'1,' * 20_001}]", "20001 things"),
    "keys": ("".join(f"k{k} = 1\n" for k in range(20_001)), "20001 things"),
    "values": ("".join(f"k{k} = [{'0,' * 15_000}]\n" for k in range(11)), "values"),
    "text": ("#" * (store.MAX_BYTES + 1), "MB"),
    "digits": (f"x = {'9' * 5000}", "too long"),
}


@pytest.mark.parametrize(("text", "why"), TOO_MUCH.values(), ids=TOO_MUCH)
def test_too_much_is_refused_in_a_sentence(text: str, why: str) -> None:
    assert why in refusal(text)


def test_a_network_that_no_machine_could_hold_is_an_error() -> None:
    """Its state equations are matrices of thousands by thousands: the file opens, and is not calculated."""
    shunt = "{ shunt = { C = 1, L = 1 } },"
    row = '[[filter]]\nid = "L{}"\ncm = []\ndm = [{}]\n'
    text = SMALLEST + row.format(1, shunt * 201)
    (problem,) = (p for p in build(store.parse(text, None, "x.toml").document).errors)
    assert problem.sentence() == "filter L1, dm: 201 rows were found; at most 200 were expected."
    text = SMALLEST + "".join(row.format(k, shunt * 200) for k in range(8))
    built = build(store.parse(text, None, "x.toml").document)
    assert built.project is None
    assert "1602 elements together; at most 1500" in built.errors[0].text


def test_the_lines_of_all_limit_sets_have_one_room() -> None:
    """Slow clocks make millions of lines: what has no room is said to be too many, and never begun."""
    text = SMALL.replace('"300 kHz"', '"1 kHz"').replace('emissions = ["CE102", "own"]', 'emissions = ["CE102"]')
    project = build(store.parse(text, None, "x.toml").document).project
    assert project is not None
    whole = lines_of(project, project.checked[0])
    assert not whole.too_many
    assert 0 < whole.room < MOST
    assert lines_of(project, project.checked[0], whole, whole.room) is whole
    short = lines_of(project, project.checked[0], whole, whole.room // 2)
    assert short.too_many
    assert short.frequency.size == 0
    again = lines_of(project, project.checked[0], short, whole.room)
    assert np.array_equal(again.frequency, whole.frequency), "there is room again"


@pytest.mark.parametrize(("old", "new"), [('L = "10 uH"', "L = 1e15"), ('C = "100 uF"', "C = 2e6")])
def test_a_choke_the_size_of_the_moon_is_refused(old: str, new: str) -> None:
    """The stability of a network with 1e15 H took minutes: its poles lie some thirty decades apart."""
    built = build(store.parse(SMALLEST.replace(old, new), None, "x.toml").document)
    assert len(built.errors) == 1
    assert "is beyond anything on a real bus" in built.errors[0].text


def test_what_only_looks_like_too_long_a_key_is_none() -> None:
    chain = ".".join("abcdefghijklmnopqrstuvwxyz")
    text = (
        f"# {chain}\nx = '{chain}'  # {chain}\ny = \"\\\"{chain}\"\nz = '''\n{chain} = 1\n'''''\n"
        f'w = """\\\n{chain} "" {chain}"""""\n"{chain}".b = 1\n[a.b.c.d.e.f.g.h.i.j.k.l.m.n.o.p]\nq = [1.1, 1.2]\n'
    )
    assert store.parse(text, None, "x.toml").document.data == tomllib.loads(text)


@settings(max_examples=200, deadline=None)
@given(st.text(alphabet="a.\"'#\\\n =[]{} \t1", max_size=60))
def test_the_limit_of_keys_refuses_nothing_that_is_short(text: str) -> None:
    """Few names stand in a text this short: the parser has the word, as if there were no limit."""
    try:
        wanted = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError):
        wanted = None
    try:
        found = toml_load.loads(text)
    except tomllib.TOMLDecodeError:
        found = None
    except ValueError:
        assert text.count(".") >= toml_load.MAX_KEY
        return
    assert found == wanted


@settings(max_examples=100, deadline=None)
@given(
    st.sampled_from(['""', '"\\""', "'\"'", '"""a"""', '"""\n"a" ""b\\"""""', "'''\n'a' ''b'''''", "[1, 2]", "0.5"]),
    st.sampled_from(["a", '"a.b"', "'a#'", '"\\"."', "-"]),
    st.sampled_from([".", " . ", "\t."]),
    st.booleans(),
)
def test_a_long_key_is_found_behind_anything(value: str, name: str, dot: str, inside: bool) -> None:
    for count in (toml_load.MAX_KEY, toml_load.MAX_KEY + 1):
        key = dot.join([name] * count)
        text = f"v = {{ w = {value}, {key} = 1 }}" if inside else f"# it's\nv = {value} # \"\n{key} = 1\n"
        assert tomllib.loads(text)
        if count > toml_load.MAX_KEY:
            with pytest.raises(toml_load.LongKeyError):
                toml_load.loads(text)
        else:
            assert toml_load.loads(text) == tomllib.loads(text)


def test_errors_are_never_lost_among_remarks() -> None:
    """However many remarks there are, and told or not, one error makes a file unusable."""
    text = SMALLEST.replace("[bus]", "[bus]\n" + "".join(f"k{k} = 1\n" for k in range(3000)) + 'rating = "lots"')
    built = build(store.parse(text, None, "x.toml").document)
    assert len(built.errors) == 1
    assert len(built.warnings) == MAX_PROBLEMS
    assert "more than" in built.warnings[-1].text
    text = SMALLEST.replace('efficiency = "88 %"', f"efficiency = [{'0,' * 5000}]")
    built = build(store.parse(text, None, "x.toml").document)
    assert len(built.errors) == MAX_PROBLEMS


def test_a_large_file_is_saved_with_its_comments() -> None:
    """Ten thousand lines, each with a comment: one cell changed is one line changed."""
    text = SMALLEST + "".join(f"# part {k}\n[shelf.filter.p{k}]\nrated_current = {k} # A\n" for k in range(4000))
    document = store.parse(text, None, "x.toml").document
    changed = doc.put(document, ("shelf", "filter", "p3999", "rated_current"), 7)
    assert store.render(changed).text == text.replace("= 3999 #", "= 7 #")
    gone = doc.drop(document, ("shelf", "filter", "p17", "rated_current"))
    assert "# part 17" in store.render(gone).text


def test_trials_of_a_large_project_are_read_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whole projects together may take more than one may, and what would not be read again is not written."""
    path = tmp_path / "p.toml"
    path.write_text(SMALLEST + "".join(f"# {k:075}\n" for k in range(5000)))
    session = open_file(path)
    for k in range(3):
        assert session.hold_as(f"t{k}") == ""
        session.enter(("bus", "name"), f"name {k}", None)
    assert (tmp_path / "p.trials.toml").stat().st_size > store.MAX_BYTES
    assert len(open_file(path).trials) == 3
    monkeypatch.setattr(trials, "MOST_BYTES", 1_300_000)
    assert "remove one" in session.hold_as("t3")
    assert len(open_file(path).trials) == 3


# -- what reaches the terminal


BAD = "a" + "".join(c for c in CONTROLS) + "z"


def valid() -> str:
    """A project that can be calculated, with every text that may hold anything full of what a terminal would obey."""
    bad = basic(BAD)
    text = SMALL
    for word in ("Test bench", "bench", "ladders", "from the shelf", "first", "second", "third", "loose", "core", "io"):
        text = text.replace(f'"{word}"', bad, 1)
    text = text.replace('note = "two lanes"', f"note = {bad}").replace('"At rest"', bad)
    text = text.replace('"everything on"', bad).replace('"lent by the shelf"', bad).replace('"bought"', bad)
    text = text.replace("filter.bought", f"filter.{bad}").replace("[bus]", f"[bus]\n{bad} = 1")
    for k in ("300 kHz", "280 kHz"):
        text = text.replace(f'frequency = "{k}"', f'frequency = "{k}"\nclock = {basic(BAD + k)}', 1)
    text = text.replace("[project]", f"[project]\nrevision = {bad}\nauthor = {bad}")
    return f"{bad} = {bad}\n{text}"


def broken() -> str:
    """A project in which such texts stand where none may: ids, references, choices, numbers, keys, lists."""
    bad = basic(BAD)
    text = valid()
    for old in ('id = "C2"', 'id = "FC"', 'id = "run"', 'name = "own"'):
        text = text.replace(old, f"{old.partition('=')[0]}= {bad}")
    text = text.replace('rating = "20 A"', f"rating = {bad}").replace('part = "brick"', f"part = {bad}")
    text = text.replace('filter = "FB"', f"filter = {bad}").replace('"lisn-50uH"', bad).replace('"CE102"', bad)
    text = text.replace("load = {", f"load = {{ {bad} = {bad},").replace('[["300 kHz", 90]', f"[[{bad}, {bad}]")
    return f"shelf_files = [{bad}, 1]\n" + text.replace("lead = {", f"lead = {{ {bad} = {bad},")


SIZES = ((80, 24), (160, 48))


@pytest.fixture(scope="module", params=["valid", "broken"])
def hostile(request: pytest.FixtureRequest) -> tuple[Session, object]:
    session = session_of(valid() if request.param == "valid" else broken())
    return session, calculated(session.document)


def test_the_hostile_project_is_calculated() -> None:
    loaded = store.parse(valid(), None, "x.toml")
    built = build(loaded.document, loaded.shelves)
    assert built.errors == ()
    assert BAD in (built.project.title if built.project else "")


@pytest.mark.parametrize("size", SIZES, ids=str)
@pytest.mark.parametrize("view", VIEWS)
def test_no_view_lets_a_control_character_through(
    hostile: tuple[Session, object], view: str, size: tuple[int, int]
) -> None:
    first, outcome = hostile
    for ascii_only in (True, False):
        session = Session(first.document, None, first.shelves, first.file_problems, saved=first.document)
        desk, _ = desk_of(session, ascii_only=ascii_only, known=outcome)  # type: ignore[arg-type]
        desk.view_name = view
        for keys in (
            "",
            "down",
            "right right",
            "down down down",
            "enter",
            "escape",
            "=",
            "escape",
            "g",
            "escape",
            "space",
        ):
            press(desk, keys)
            painted(desk, size)


def painted(desk: Desk, size: tuple[int, int]) -> None:
    for line in screen(desk, *size):
        assert harmless(line), ascii(line)


def test_nor_do_messages_titles_and_lists(hostile: tuple[Session, object], tmp_path: Path) -> None:
    first, outcome = hostile
    session = Session(first.document, None, first.shelves, first.file_problems, saved=first.document)
    session.path = tmp_path / f"{BAD.replace('/', '').replace(chr(0), '')[:60]}.toml"
    desk, _ = desk_of(session, known=outcome)  # type: ignore[arg-type]
    for keys in (
        "down enter",
        "escape D",
        "u U",
        "e",
        "escape m",
        "escape p",
        "escape o",
        "escape K",
        "T",
        "n",
        "escape s",
    ):
        press(desk, keys)
        painted(desk, (80, 24))
    desk.paste(BAD)
    painted(desk, (80, 24))
    press(desk, "enter")
    painted(desk, (80, 24))
    press(desk, "escape escape W")
    painted(desk, (80, 24))
    typed(desk, "x")
    press(desk, "enter w q")
    painted(desk, (80, 24))


OUTPUTS = (
    *[("check", "--format", form, "{}") for form in ("text", "json", "markdown", "csv")],
    *[("check", "--dc", "--format", form, "{}", "{}") for form in ("text", "json", "markdown", "csv")],
    *[("allocate", "{}", "--time", "0.2", "--format", form) for form in ("text", "json")],
    *[("reach", "{}", "C1.output.0.current", "--format", form) for form in ("text", "json")],
    *[
        ("sweep", "{}", "C1.output.0.current", "1 A", "2 A", "2", "bus.low", "20 V", "22 V", "2", "--format", form)
        for form in ("csv", "json")
    ],
    *[("compare", "{}", "plain.toml", "--format", form) for form in ("text", "markdown", "json")],
)


@pytest.mark.parametrize("command", OUTPUTS, ids=lambda c: " ".join(w for w in c if w.isalpha()))
@pytest.mark.parametrize("sort", ["valid", "broken"])
def test_no_command_lets_a_control_character_out(budget: Run, command: tuple[str, ...], sort: str) -> None:
    name = "n" + "".join(c for c in CONTROLS if "/" not in c and "\0" not in c)[:60] + ".toml"
    Path(name).write_text(valid() if sort == "valid" else broken())
    Path("plain.toml").write_text(SMALL)
    status, out, err = budget(*(word.replace("{}", name) for word in command))
    assert status in ((0, 1) if sort == "valid" else (2,)), err
    assert out if sort == "valid" else err
    assert harmless(err), ascii(err)
    if "json" in command and out:
        assert out.isascii()
        assert harmless(out)
        json.loads(out, parse_constant=lambda name: pytest.fail(f"{name} is no number of JSON"))
    assert harmless(out), ascii(out)


MISUSES = (
    ("check", BAD),
    ("check", "--format", BAD, "x"),
    ("check", f"--{BAD}"),
    ("check", "good.toml", "--case", BAD),
    ("check", "good.toml", "--shelf-from", BAD),
    ("allocate", "good.toml", "--keep", BAD),
    ("allocate", "good.toml", "--apart", BAD),
    ("allocate", "good.toml", "--apart", f"{BAD},C1"),
    ("allocate", "good.toml", "--most", BAD),
    ("allocate", "good.toml", "--time", BAD),
    ("reach", "good.toml", BAD),
    ("reach", "good.toml", f"C1.{BAD}"),
    ("reach", "good.toml", "C1.output.0.current", "--low", BAD),
    ("reach", "good.toml", "C1.output.0.current", "--parts", BAD),
    ("sweep", "good.toml", BAD, "1", "2", "3", "bus.low", "1", "2", "3"),
    ("sweep", "good.toml", "bus.low", BAD, "2", "3", "bus.low", "1", "2", "3"),
    ("sweep", "good.toml", "bus.low", "1", "2", BAD, "bus.low", "1", "2", "3"),
    ("compare", "good.toml", BAD),
    ("new", f"no/{BAD}"),
    (BAD,),
    (BAD, BAD),
    (f"--{BAD}",),
)


@pytest.mark.parametrize("command", MISUSES, ids=lambda c: ascii(" ".join(c))[:40])
def test_no_error_lets_a_control_character_out(budget: Run, command: tuple[str, ...]) -> None:
    Path("good.toml").write_text(SMALL)
    status, out, err = budget(*command)
    assert status == 2
    assert out == ""
    assert err
    assert harmless(err), ascii(err)


def test_a_name_without_end_does_not_blow_up_a_table(budget: Run) -> None:
    """Every row of a table is as wide as its widest cell."""
    rows = "".join(
        SMALLEST[SMALLEST.index("[[converter]]") :].replace("CV1", f"C{k}") + 'name = "n"\n' for k in range(200)
    )
    Path("p.toml").write_text(SMALLEST.replace('id = "CV1"', f'id = "CV1"\nname = "{"x" * 300_000}"') + rows)
    for form in ("text", "markdown", "csv", "json"):
        status, out, _ = budget("check", "--dc", "--format", form, "p.toml")
        assert status == 0
        assert len(out) < 1_000_000


def test_json_keeps_what_stands_in_the_file(budget: Run) -> None:
    Path("p.toml").write_text(valid())
    assert json.loads(budget("check", "--dc", "--format", "json", "p.toml")[1])["title"] == BAD


# -- what a spreadsheet would take for a formula


@pytest.mark.parametrize("text", [*FORMULAS, "\uff1d1", "\uff0b1", "-12V", "+5"])
def test_a_name_is_no_formula(budget: Run, text: str) -> None:
    """An id in a table: a quote before it keeps a spreadsheet from calculating it, and is seen."""
    Path("=p.toml").write_text(SMALLEST.replace('"CV1"', basic(text)))
    status, out, _ = budget("check", "--dc", "--format", "csv", "=p.toml")
    assert status == 0
    rows = list(csv.reader(io.StringIO(out)))
    assert {row[0] for row in rows[1:]} == {"'=p.toml"}
    assert (text if text.startswith("'") else f"'{text}") in {row[2] for row in rows}
    tame(rows)
    out = budget("sweep", "=p.toml", "converter.#1.rated_power", "1 W", "2 W", "2", "bus.low", "20 V", "22 V", "2")[1]
    rows = list(csv.reader(io.StringIO(out)))
    tame(rows)
    assert any(row[3].startswith("-") for row in rows[1:]), "a margin below zero stays a number"


def tame(rows: list[list[str]]) -> None:
    """No cell but a number starts as a formula does."""
    for row in rows:
        for cell in row:
            if cell.startswith(("=", "+", "-", "@", "\t", "\r", "\uff1d", "\uff0b")):
                float(cell)


def test_a_clock_in_a_file_of_lines_is_no_formula_and_no_command() -> None:
    text = SMALL.replace('frequency = "300 kHz"', f'frequency = "300 kHz"\nclock = {basic("=1" + BAD)}', 1)
    session = session_of(text)
    desk, _ = desk_of(session, known=calculated(session.document))
    for view, make in (
        ("spectrum", spectrum.csv_lines),
        ("switchon", switchon.csv_waves),
        ("stable", stable.csv_stability),
    ):
        desk.view_name = view
        out = make(desk.context())
        assert out.count("\n") > 2
        assert harmless(out), ascii(out)
        if view == "spectrum":
            assert "\n'=1a" in out


def test_ordinary_names_and_numbers_stay_as_they_are(budget: Run) -> None:
    Path("p.toml").write_text(SMALL)
    out = budget("check", "--dc", "--format", "csv", "p.toml")[1]
    assert "'" not in out
    rows = list(csv.DictReader(io.StringIO(out)))
    assert any(row["margin"].startswith("-") for row in rows)
    assert all(float(row["value"]) == float(row["value"]) for row in rows if row["value"])
