"""What hostile inputs are given to: one function a surface, each of which raises where the program is at fault.

A target takes bytes and returns nothing. What the program may say no with (``ProjectError``, ``QuantityError``, an exit
status) is caught here, and what it says is looked at; everything else that comes out is a fault: another exception, a
control character in a text for people, a number that is none in JSON, a file touched that is not the project's.

**Another surface** is another function of bytes and its line in ``TARGETS``; ``run`` and ``tests/test_fuzz.py`` take it
from there. The lines of a journal (what a session leaves for the next one to take up) belong here as ``journal_lines``,
with ``mutate.raw`` over lines of a good journal: see the place marked below.
"""

from __future__ import annotations

import contextlib
import io
import json
import os
import tomllib
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from random import Random
from typing import Any

from budget import cli, quantity
from budget.engine.evaluate import Result, evaluate, evaluate_dc, with_emissions, with_inrush, with_stability
from budget.engine.transient import CancelledError
from budget.keeping import log
from budget.project import document as doc
from budget.project import edits, schema, store, toml_dump, toml_scan
from budget.project.build import Built, build
from budget.project.document import Document
from budget.project.problems import ProjectError
from budget.report import tables, text
from budget.session import Outcome, Session, open_file
from budget.study import paths
from budget.ui.commands import COMMANDS
from budget.ui.desk import VIEWS
from budget.units import warm
from tests.fuzz import mutate
from tests.fuzz.watch import scratch, watching
from tests.screen.driving import BROKEN, SMALL, desk_of, key_of, screen, session_of

LONGEST_SAID = 400_000  # characters of an answer, so that nobody is drowned in it


@dataclass(frozen=True, slots=True)
class Target:
    """``weight`` is its share of a run; ``mutate`` makes the next input out of one before, ``seeds`` the first."""

    run: Callable[[bytes], None]
    mutate: mutate.Maker
    seeds: tuple[bytes, ...]
    weight: int


@cache
def folder() -> Path:
    """The folder of this process that projects are put into, with everything loaded that is loaded late."""
    made = scratch()
    (made / "shelf.toml").write_text(mutate.SHELF)
    (made / "good.toml").write_text(mutate.DEMOS["smallest"])
    (made / "other.toml").write_text(SMALL)
    (made / "hostile.toml").write_text("")
    warm()
    result = evaluate(_built(mutate.DEMOS["smallest"]).project)  # type: ignore[arg-type]
    said(text.as_text("x", result, ()))
    return made


def _built(source: str) -> Built:
    loaded = store.parse(source, None, "x.toml")
    return build(loaded.document, loaded.shelves)


def said(answer: str, *, ascii_only: bool = False) -> None:
    """A text for people: no control characters, no marks of direction or without width, not without end."""
    assert len(answer) < LONGEST_SAID, f"{len(answer)} characters were said"
    for line in answer.split("\n"):
        assert line.isprintable(), f"a character that is no sign: {line[:300]!r}"
        assert not ascii_only or line.isascii(), f"a sign that not every terminal has: {line[:300]!r}"


@contextlib.contextmanager
def refusing(*kinds: type[Exception]) -> Iterator[None]:
    """Errors that are an answer; a sentence is expected of them."""
    sentence = "fine."
    try:
        yield
    except (ProjectError, *kinds) as error:
        sentence = str(error)
    said(sentence)
    assert sentence.strip(), "an error without a sentence"


def _problems(found: Any) -> None:
    for problem in found:
        said(problem.sentence())
        assert "\n" not in problem.sentence()


def _calculated(built: Built) -> Result | None:
    """The DC results in every form there is."""
    if built.project is None:
        return None
    result = evaluate_dc(built.project)
    reported(result)
    return result


def reported(result: Result) -> None:
    """A result as text, markdown, CSV and JSON."""
    said(text.as_text("hostile.toml", result, ("a warning",)))
    said(text.as_markdown("hostile.toml", result, ()))
    said(tables.as_csv([("hostile.toml", result)]))
    for line in tables.as_csv([("hostile.toml", result)]).split("\n"):
        assert not line.startswith(("=", "+", "@", "-")), line[:200]
    data = tables.dumps(tables.as_json(result, ()))  # raises for a NaN
    assert data.isascii()
    json.loads(data)


# -- project and shelf files


def file_text(data: bytes) -> None:
    """The text of a project file: read, build, calculate the DC part, report."""
    with watching(folder()), refusing():
        loaded = store.parse(data.decode("utf-8", "replace"), folder(), "hostile.toml")
        _problems(loaded.problems)
        built = build(loaded.document, loaded.shelves)
        _problems(built.problems)
        _calculated(built)


def file_bytes(data: bytes) -> None:
    """The bytes of a project file on disk, opened as the sheet opens it."""
    path = folder() / "hostile.toml"
    path.write_bytes(data)
    with watching(folder()), refusing():
        session = open_file(path)
        _problems(session.file_problems)
        said(session.name)
        assert not session.changed_on_disk()


def shelf_file(data: bytes) -> None:
    """The bytes of a shelf file that a project names, with files it names in turn."""
    (folder() / "sub" / "parts.toml").write_bytes(data)
    head = 'shelf_files = ["sub/parts.toml"]\n'
    with watching(folder()), refusing():
        loaded = store.parse(head + SMALL.replace('part = "brick"', 'part = "brick-50"'), folder(), "hostile.toml")
        _problems(loaded.problems)
        built = build(loaded.document, loaded.shelves)
        _problems(built.problems)
        _calculated(built)
        for key in schema.SHELVES:
            for name in edits.shelf_names(loaded.document, loaded.shelves, key)[:20]:
                edits.shelf_part(loaded.document, loaded.shelves, ("shelf", key, name))


def trials_file(data: bytes) -> None:
    """The bytes of the file of trials that stands beside a project."""
    path = folder() / "good.toml"
    before = set(os.listdir(folder()))
    (folder() / "good.trials.toml").write_bytes(data)
    try:
        with watching(folder()), refusing():
            session = open_file(path)
            for note in session.notes:
                said(note)
            for trial in session.held():
                said(trial.name)
                _problems(trial.problems)
    finally:
        for name in set(os.listdir(folder())) - before:
            (folder() / name).unlink()


# -- cells, quantities, paths


@cache
def _cells() -> tuple[tuple[Document, doc.Path], ...]:
    """A cell of every field there is, in a project that has most of them."""
    loaded = store.parse(SMALL, None, "x.toml")
    found: list[doc.Path] = [("shelf_files",)]

    def walk(base: doc.Path, fields: tuple[schema.Field, ...]) -> None:
        for spec in fields:
            path = (*base, spec.key)
            found.append(path)
            if spec.kind == schema.TABLE:
                walk(path, spec.fields)
            elif spec.kind in (schema.TABLES, schema.LADDER):
                for index in (0, 1, 7):
                    walk((*path, index), spec.fields)
            elif spec.kind in (schema.ROWS, schema.CURVE):
                found.extend((*path, index, column) for index in (0, 5) for column in (0, 1, 2))
            elif spec.kind == schema.LOADS:
                found.extend((*path, ident) for ident in ("C1", "C2", "nobody"))

    for table in schema.TABLES_BY_KEY.values():
        for index in (0, 1, 2) if table.many else (None,):
            walk((table.key,) if index is None else (table.key, index), table.fields)
    for key, name in (("filter", "bought"), ("converter", "brick")):
        walk(("shelf", key, name), schema.shelf_table(key).fields)
    return tuple((loaded.document, path) for path in found)


def cell(data: bytes) -> None:
    """A text typed into a cell: two bytes choose the cell, the rest is the text.

    What the cell takes, the reader reads: the only new errors may be about cells that must agree with this one.
    """
    document, path = _cells()[int.from_bytes(data[:2], "big") % len(_cells())]
    typed = data[2:].decode("utf-8", "replace")
    with watching(folder()), refusing():
        changed = edits.enter(document, (), path, typed)
        built = build(changed)
        _problems(built.problems)
        stored = edits.stored_path(changed, path)
        texts = [p.text for p in built.errors if p.path == stored]
        assert not any("was expected." in t and "was found" in t for t in texts), (path, typed, texts)
        edits.typed(edits.value_at(changed, (), path)[0])
        if typed.isprintable() and len(typed) < 200:
            store.render(changed)


def quantity_text(data: bytes) -> None:
    """A text as a quantity of every kind; what can be read is shown as text that reads back."""
    typed = data.decode("utf-8", "replace")
    for kind in quantity.KINDS.values():
        with refusing(quantity.QuantityError):
            value = quantity.parse(typed, kind, *((quantity.KINDS["power"],) if kind.name == "ratio" else ()))
            shown = quantity.show(value.si, value.kind, 17)
            said(shown)
            again = quantity.parse(shown, value.kind).si
            assert abs(again - value.si) <= 1e-12 * abs(value.si), (typed, value, shown)


def path_text(data: bytes) -> None:
    """A text as the path of a cell; what is found has a path that leads back."""
    document = _cells()[0][0]
    with watching(folder()), refusing():
        path = paths.resolve(document, (), data.decode("utf-8", "replace"))
        shown = paths.text_of(document, path)
        assert paths.resolve(document, (), shown) == path, (path, shown)
        found = paths.cell_at(document, (), path)
        said(found.text)
        if found.value is not None:
            paths.put(document, (), found, found.value)


# -- saving


def saving(data: bytes) -> None:
    """A file changed by a few edits and saved: it reads back, no comment is lost, and undone it is the same text."""
    source = data.decode("utf-8", "replace")
    rng = Random(len(data) * 1_000_003 + sum(data[:4096]))
    with watching(folder()), refusing():
        loaded = store.parse(source, None, "hostile.toml")
        document = loaded.document
        assert store.render(document).text == source
        for _ in range(rng.randint(1, 4)):
            with refusing():
                document = _edited(rng, document)
        rendered = store.render(document)
        assert toml_dump.same(tomllib.loads(rendered.text.removeprefix("\ufeff")), document.data)
        lost = Counter(_comments(source))
        lost.subtract(_comments(rendered.text))
        assert not +lost, +lost


def _comments(source: str) -> list[str]:
    source = source.removeprefix("\ufeff")
    return [source[a:b].rstrip() for a, b in toml_scan.scan(source).comments]


def _edited(rng: Random, document: Document) -> Document:
    """One thing a user does, wherever it can be done."""
    key = rng.choice(("filter", "converter", "case", "limit"))
    rows = document.data.get(key)
    count = len(rows) if isinstance(rows, list) else 0
    index = rng.randrange(count) if count else 0
    sort = rng.randrange(6)
    if sort == 0:
        return edits.new_row(document, key, index)[0]
    if sort == 1 and count:
        return edits.remove_row(document, (key, index))
    if sort == 2 and count:
        return doc.move(document, (key, index), rng.randrange(count))
    if sort == 3 and count:
        return edits.enter(document, (), (key, index, "name" if key == "limit" else "id"), mutate.text(rng))
    path = rng.choice(_cells())[1]
    return edits.enter(document, (), path, mutate.cell(rng, "1"))


# -- the command line


def command_line(data: bytes) -> None:
    """Words of a command line, one a line, up to an empty line; what follows is the project it is about."""
    head, _, body = data.partition(b"\n\n")
    words = [word.decode("utf-8", "surrogateescape") for word in head.split(b"\n")]
    (folder() / "hostile.toml").write_bytes(body)
    before = set(os.listdir(folder()))
    out, err = io.StringIO(), io.StringIO()
    home = os.getcwd()
    os.chdir(folder())
    try:
        # The files on the command line are the user's own choice, links that lead out of the folder included.
        asked = frozenset(_named(word) for word in words)
        with watching(folder().parent, asked), contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
            try:
                status = cli.run(words)
            except SystemExit as leaving:
                status = leaving.code if isinstance(leaving.code, int) else 2
    finally:
        os.chdir(home)
        for name in set(os.listdir(folder())) - before:
            (folder() / name).unlink()
    assert status in (0, 1, 2), status
    said(err.getvalue())
    if "json" in words and out.getvalue().startswith(("{", "[")):
        assert out.getvalue().isascii()
    said(out.getvalue())


def _named(word: str) -> str:
    try:
        return os.path.realpath(word)
    except ValueError:
        return ""


# -- the sheet


def views(data: bytes) -> None:
    """A project file in every view, with its DC results alone."""
    with watching(folder()), refusing():
        session = session_of(data.decode("utf-8", "replace"))
        built = build(session.document, session.shelves, session.cache)
        result = evaluate_dc(built.project) if built.project is not None else None
        painted(session, Outcome(session.generation, built, result), ((80, 24), (160, 48)))


def painted(session: Session, outcome: Outcome, sizes: tuple[tuple[int, int], ...]) -> None:
    """Every view at every size, with the cursor in a few places."""
    for ascii_only in (True, False):
        desk, _ = desk_of(session, ascii_only=ascii_only, known=outcome)
        for name in VIEWS:
            desk.view_name = name
            for width, height in sizes:
                for key in ("", "down", "right"):
                    if key:
                        desk.key(key, None)
                    for line in screen(desk, width, height):
                        said(line, ascii_only=ascii_only)


def keys(data: bytes) -> None:
    """Keys pressed one after the other on a project, up to an empty line; the screen is painted after each.

    Nothing is calculated meanwhile, neither after an edit nor aside.
    """
    head, _, body = data.partition(b"\n\n")
    home = os.getcwd()
    os.chdir(folder())
    before = set(os.listdir(folder()))
    try:
        with watching(folder()), refusing(), _nothing_swallowed():
            session = session_of(body.decode("utf-8", "replace"))
            built = build(session.document, session.shelves, session.cache)
            result = evaluate_dc(built.project) if built.project is not None else None
            desk, _ = desk_of(session, live=False)
            desk.start_job = lambda work: None
            desk.accept(Outcome(session.generation, built, result))
            for code in head[:60]:
                name = _KEYS[code % len(_KEYS)]
                desk.paste(mutate.text(Random(code))) if name == "paste" else desk.key(*key_of(name))
                for line in screen(desk, 80, 24):
                    said(line, ascii_only=True)
    finally:
        os.chdir(home)
        for name in set(os.listdir(folder())) - before:
            (folder() / name).unlink()


@contextlib.contextmanager
def _nothing_swallowed() -> Iterator[None]:
    """The desk writes faults into a log and goes on; here they are faults."""

    def raised(error: BaseException) -> str:
        raise error

    kept, log.record = log.record, raised
    try:
        yield
    finally:
        log.record = kept


_KEYS = (
    *(command.keys[0] for command in COMMANDS if command.name not in ("quit",)),
    *(
        "down",
        "down",
        "right",
        "right",
        "enter",
        "enter",
        "escape",
        "1",
        "2",
        " ",
        "V",
        "%",
        "x",
        "o",
        "y",
        "paste",
        "paste",
    ),
)


# -- everything at once


def everything(data: bytes) -> None:
    """All results of a project that can be calculated, in every form; the switch-on is given up after a while."""
    with watching(folder()), refusing():
        loaded = store.parse(data.decode("utf-8", "replace"), folder(), "hostile.toml")
        built = build(loaded.document, loaded.shelves)
        if built.project is None:
            return
        result = evaluate_dc(built.project)
        result = with_stability(with_emissions(result, None))
        asked = 0

        def enough() -> bool:
            nonlocal asked
            asked += 1
            return asked > 60

        with contextlib.suppress(CancelledError):
            result = with_inrush(result, enough)
        reported(result)


# -- journals: the target of a journal's lines goes here, and its line into TARGETS


def _file(source: str) -> bytes:
    return source.encode()


_FILES = tuple(map(_file, dict.fromkeys(mutate.SEEDS)))
_project = mutate.of_text(mutate.project)


def _extreme(rng: Random, data: bytes) -> bytes:
    return (mutate.of_text(mutate.extreme) if rng.random() < 0.7 else _project)(rng, data)


def _project_or_bytes(rng: Random, data: bytes) -> bytes:
    return mutate.raw(rng, data) if rng.random() < 0.5 else _project(rng, data)


def _cell(rng: Random, data: bytes) -> bytes:
    made = mutate.cell(rng, data[2:].decode("utf-8", "replace")) if rng.random() < 0.7 else mutate.quantity_text(rng)
    return rng.randrange(len(_cells())).to_bytes(2, "big") + made.encode("utf-8", "replace")


def _command(rng: Random, data: bytes) -> bytes:
    head, _, body = data.partition(b"\n\n")
    if rng.random() < 0.7 or not head:
        words = (word.replace("\n", " ") for word in mutate.command(rng))
        head = "\n".join(words).encode("utf-8", "surrogateescape")
    if rng.random() < 0.5 or not body:
        body = _file(rng.choice((mutate.DEMOS["smallest"], SMALL)))
        if rng.random() < 0.5:
            body = _project(rng, body)
    return head + b"\n\n" + body


def _trials(rng: Random, data: bytes) -> bytes:
    """Bytes of the file, or hostile projects in it that are trials."""
    if data and rng.random() < 0.5:
        return mutate.raw(rng, data) if rng.random() < 0.5 else mutate.of_text(mutate.lines)(rng, data)
    rows = []
    for k in range(rng.choice((1, 2, 3))):
        value = mutate.project(rng) if rng.random() < 0.8 else mutate.anything(rng)
        name = f"t{k}" if rng.random() < 0.8 else mutate.text(rng)
        rows.append({"name": name, "held": mutate.text(rng), "text": value, "reference": rng.random() < 0.3})
    return _file(toml_dump.dump({"format": 1, "trial": rows}))


def _pressed(rng: Random, data: bytes) -> bytes:
    head, _, body = data.partition(b"\n\n")
    if rng.random() < 0.8 or not head:
        head = bytes(rng.choice(range(1, 256)) for _ in range(rng.randint(1, 25))).replace(b"\n", b"\x0b")
    if rng.random() < 0.5 or not body:
        body = _project(rng, body or _file(SMALL))
    return head + b"\n\n" + body


TARGETS: dict[str, Target] = {
    "file text": Target(file_text, _project, _FILES, 26),
    "file bytes": Target(file_bytes, _project_or_bytes, _FILES, 12),
    "shelf file": Target(shelf_file, mutate.of_text(mutate.shelf), (_file(mutate.SHELF),), 8),
    "trials file": Target(trials_file, _trials, (b'format = 1\n[[trial]]\nname = "a"\ntext = "format = 1"\n',), 2),
    "cell": Target(cell, _cell, (b"\0\0" + b"28 V", b"\0\x09" + b"2 * 3 A"), 16),
    "quantity": Target(quantity_text, mutate.of_text(mutate.quantity_text), (b"2 * (3 A + 100 mA)", b"4.7 uF"), 12),
    "path": Target(path_text, mutate.of_text(mutate.path), (b"C1.output.0.current", b'"FA".dm.0.L'), 8),
    "saving": Target(saving, _project_or_bytes, _FILES, 8),
    "command line": Target(command_line, _command, (b"check\n--dc\nhostile.toml\n\n" + _file(SMALL),), 8),
    "views": Target(views, _project, _FILES, 2),
    "keys": Target(keys, _pressed, (b"\x01\x02\n\n" + _file(SMALL), b"\x05\n\n" + _file(BROKEN)), 3),
    "everything": Target(everything, _extreme, (_file(SMALL), _file(mutate.DEMOS["smallest"])), 0),
}
