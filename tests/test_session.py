"""One open project: history, file and results; and the text of a new one."""

from __future__ import annotations

from pathlib import Path

import pytest

from budget.engine.evaluate import Result
from budget.project import document as doc
from budget.project import schema, store
from budget.project.build import build
from budget.project.problems import ProjectError
from budget.project.starter import starter
from budget.session import Outcome, Session, calculate, demo_folder, open_demo, open_file

LOW = ("bus", "low")


@pytest.fixture
def session(tmp_path: Path) -> Session:
    folder = tmp_path / "one"
    (folder / "parts").mkdir(parents=True)
    (folder / "parts" / "a.toml").write_text("[shelf.filter.a]\nrated_current = 1\n")
    (folder / "p.toml").write_text('shelf_files = ["parts/a.toml"]\n' + starter())
    return open_file(folder / "p.toml")


def test_dirty_is_whether_the_file_lacks_something(session: Session) -> None:
    assert not session.dirty
    assert session.enter(LOW, "21 V", None)
    assert session.dirty
    session.undo(None)
    assert not session.dirty
    session.redo(None)
    session.save()
    assert not session.dirty
    session.undo(None)
    assert session.dirty
    session.redo(None)
    assert not session.dirty


def test_the_same_text_again_is_no_step(session: Session) -> None:
    text = str(doc.get(session.document, LOW))
    assert not session.enter(LOW, text, None)
    assert session.done == []
    assert (session.dirty, session.generation) == (False, 1)


def test_a_refused_cell_changes_nothing(session: Session) -> None:
    before = session.document
    with pytest.raises(ProjectError):
        session.enter(LOW, "5 A", None)
    assert (session.document is before, session.done, session.generation) == (True, [], 1)


def test_steps_say_what_was_done_and_where(session: Session) -> None:
    session.enter(LOW, "21 V", "here")
    session.enter(("project", "title"), "", "there")
    assert [(s.label, s.spot) for s in session.done] == [
        ("bus, low = 21 V", "here"),
        ("project, title = empty", "there"),
    ]
    step = session.undo("elsewhere")
    assert step is not None
    assert (step.label, step.spot) == ("project, title = empty", "there")
    session.enter(LOW, "20 V", None)
    assert session.redo(None) is None  # a new step ends what could be done again


def test_a_result_of_an_older_document_is_let_go(session: Session) -> None:
    old = calculate(session.snapshot())
    session.enter(LOW, "21 V", None)
    assert not session.accept(old)
    assert session.outcome is None
    new = calculate(session.snapshot())
    assert session.accept(new)
    assert session.fresh
    session.undo(None)
    assert not session.fresh
    assert not session.accept(old)  # the document is the same, the generation is not
    assert session.result is new.result


def test_generations_only_rise(session: Session) -> None:
    seen = [session.generation]
    for action in (
        lambda: session.enter(LOW, "21 V", None),
        lambda: session.undo(None),
        lambda: session.redo(None),
        lambda: session.reload(None),
    ):
        action()
        seen.append(session.generation)
    assert seen == sorted(set(seen))


def test_reload_can_be_undone(session: Session) -> None:
    assert session.path is not None
    session.enter(LOW, "21 V", None)
    mine = session.document
    assert not session.changed_on_disk()
    session.path.write_text(starter().replace("22 V", "20.5 V"))
    assert session.changed_on_disk()
    session.reload(None)
    assert doc.get(session.document, LOW) == "20.5 V"
    assert (session.dirty, session.shelves, session.changed_on_disk()) == (False, (), False)
    session.undo(None)
    assert session.document is mine
    assert session.dirty
    assert [s.name for s in session.shelves] == ["parts/a.toml"]
    session.save()
    assert doc.get(store.load(session.path).document, LOW) == "21 V"


def test_reload_of_a_broken_file_changes_nothing(session: Session) -> None:
    assert session.path is not None
    before = session.document
    session.path.write_text("[bus")
    with pytest.raises(ProjectError):
        session.reload(None)
    assert (session.document is before, session.done, session.dirty) == (True, [], False)


def test_changed_shelf_files_are_read_at_once(session: Session) -> None:
    session.enter(("shelf_files",), "nix.toml", None)
    assert session.shelves == ()
    assert [p.path for p in calculate(session.snapshot()).built.errors] == [("shelf_files",)]
    session.undo(None)
    assert [s.name for s in session.shelves] == ["parts/a.toml"]
    assert session.file_problems == ()


def test_save_refuses_to_write_over_another_hand(session: Session) -> None:
    assert session.path is not None
    session.enter(LOW, "21 V", None)
    session.path.write_text("format = 1\n")
    with pytest.raises(store.ChangedOnDiskError):
        session.save()
    assert session.dirty
    session.save(over=True)
    assert not session.dirty


def test_save_as_brings_the_shelves_along(session: Session, tmp_path: Path) -> None:
    (tmp_path / "two").mkdir()
    new = tmp_path / "two" / "q.toml"
    session.save_as(new)
    assert session.path == new
    assert not session.dirty
    assert [s.name for s in open_file(new).shelves] == ["parts/a.toml"]
    with pytest.raises(store.ChangedOnDiskError):
        session.save_as(new)
    session.save_as(new, over=True)
    session.enter(LOW, "21 V", None)
    session.save()
    assert doc.get(open_file(new).document, LOW) == "21 V"


def test_save_as_does_not_write_over_its_own_shelf(session: Session, tmp_path: Path) -> None:
    (tmp_path / "s.toml").write_text("[shelf.filter.a]\nrated_current = 1\n")
    (tmp_path / "p.toml").write_text('shelf_files = ["s.toml"]\n')
    session = open_file(tmp_path / "p.toml")
    with pytest.raises(ProjectError, match="shelf file"):
        session.save_as(tmp_path / "s.toml", over=True)
    assert "rated_current" in (tmp_path / "s.toml").read_text()


def test_copy_to_stays_with_its_file(session: Session, tmp_path: Path) -> None:
    session.enter(LOW, "21 V", None)
    session.copy_to(tmp_path / "one" / "copy.toml")
    assert session.dirty
    assert doc.get(open_file(tmp_path / "one" / "copy.toml").document, LOW) == "21 V"


def test_a_project_without_a_file_is_saved_under_a_name() -> None:
    with pytest.raises(ProjectError, match="no file yet"):
        open_demo().save()


def test_the_demo_stands_alone(tmp_path: Path) -> None:
    session = open_demo()
    assert (session.path, session.shelves, session.dirty, session.changed_on_disk()) == (None, (), False, False)
    assert "shelf_files" not in session.document.data
    outcome = calculate(session.snapshot())
    assert outcome.built.problems == ()
    with_files = build(*(lambda loaded: (loaded.document, loaded.shelves))(store.load(demo_folder() / "heron.toml")))
    assert outcome.built.project == with_files.project
    assert session.save_as(tmp_path / "mine.toml") == ()
    again = open_file(tmp_path / "mine.toml")
    assert calculate(again.snapshot()).built.project == with_files.project
    assert [p.name for p in tmp_path.iterdir()] == ["mine.toml"]
    assert session.name == "mine.toml"
    assert "Heron" in session.title


@pytest.mark.parametrize("name", ["heron", "ferry", "smallest"])
def test_every_shipped_project_is_calculated(name: str) -> None:
    session = open_file(demo_folder() / f"{name}.toml")
    outcome = calculate(session.snapshot())
    assert outcome.built.problems == ()
    assert isinstance(outcome.result, Result)
    assert session.accept(outcome)
    assert session.fresh


def test_without_a_bus_there_is_no_result(tmp_path: Path) -> None:
    (tmp_path / "p.toml").write_text("format = 1\n")
    outcome = calculate(open_file(tmp_path / "p.toml").snapshot())
    assert isinstance(outcome, Outcome)
    assert outcome.result is None
    assert outcome.built.errors


# -- the text of a new project


def test_the_starter_calculates_without_a_problem_or_a_fail(tmp_path: Path) -> None:
    (tmp_path / "new.toml").write_text(starter())
    outcome = calculate(open_file(tmp_path / "new.toml").snapshot())
    assert outcome.built.problems == ()
    assert outcome.result is not None
    assert outcome.result.status != "fail"


def test_the_starter_names_every_field_of_its_tables() -> None:
    assert starter().isascii()
    table, named = "", set()
    for line in starter().splitlines():
        if line.startswith("["):
            table = line.strip("[]")
        elif table and line.startswith("# ") and ": " in line:
            key = line[2:].split(":")[0]
            assert schema.TABLES_BY_KEY[table].field(key) is not None, line
            named.add((table, key))
        elif table and " = " in line and not line.startswith((" ", "#")):
            named.add((table, line.split(" = ")[0]))
    for key in {table for table, _ in named}:
        assert {k for t, k in named if t == key} == {f.key for f in schema.TABLES_BY_KEY[key].fields}
