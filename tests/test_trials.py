"""Trials: the reference and states held by name, in the session and in the file beside the project."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from budget import session as sessions
from budget import trials
from budget.project import store
from budget.project.document import get, put
from budget.project.problems import ProjectError
from budget.session import Session, asides, calculate, open_file
from budget.study.beside import beside
from budget.study.compare import Variant
from budget.trials import REFERENCE, Shelved, Trial

TEXT = """\
# kept: a remark
format = 1

[bus]
low = "24 V"
nominal = "28 V"
high = "30 V"

[[filter]]
id = "FL1"
rated_current = "5 A"
dm = [{ series = { L = "10 uH", R = "20 mohm" } }, { shunt = { C = "100 uF", R = "0.2 ohm" } }]

[[filter]]
id = "FL2"
rated_current = "2 A"
dm = [{ series = { L = "10 uH", R = "20 mohm" } }, { shunt = { C = "100 uF", R = "0.2 ohm" } }]

[[converter]]
id = "CV1"   # the first
rated_power = "60 W"
filter = "FL1"
efficiency = 0.9
output = [{ voltage = "5 V", current = "4 A" }]

[[converter]]
id = "CV2"
rated_power = "20 W"
filter = "FL2"
efficiency = 0.9
output = [{ voltage = "12 V", current = "1 A" }]
"""
CURRENT = ("converter", 0, "output", 0, "current")


@pytest.fixture
def project(tmp_path: Path) -> Path:
    path = tmp_path / "bus.toml"
    path.write_text(TEXT)
    return path


def calculated(session: Session) -> Session:
    assert session.accept(calculate(session.snapshot()))
    return session


def test_drop_goes_back_to_the_reference_exactly_and_calculates_nothing(project: Path) -> None:
    session = calculated(open_file(project))
    document, result = session.document, session.result
    session.hold()
    session.enter(CURRENT, "6 A", None)
    calculated(session)
    session.drop("here")
    assert session.document is document
    assert session.result is result
    assert session.complete
    assert session.reference is None
    assert session.snapshot().lacking == ()
    assert session.undo("here") is not None  # a drop is one step of history
    assert get(session.document, CURRENT) == "6 A"


def test_keep_lets_the_reference_go_and_the_present_stays(project: Path) -> None:
    session = calculated(open_file(project))
    session.hold()
    session.enter(CURRENT, "6 A", None)
    session.keep()
    assert session.reference is None
    assert get(session.document, CURRENT) == "6 A"
    assert not trials.file_of(project).exists()


def test_a_held_reference_is_never_evaluated_again(project: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    session = calculated(open_file(project))
    seen: list[object] = []
    real = sessions.build
    monkeypatch.setattr(sessions, "build", lambda document, *rest: seen.append(document) or real(document, *rest))
    session.hold()
    held = session.document
    for current in ("5 A", "6 A", "7 A"):
        session.enter(CURRENT, current, None)
        snapshot = session.snapshot()
        calculated(session)
        assert list(asides(snapshot)) == []
    session.drop(None)
    assert len(seen) == 3
    assert held not in seen


def test_a_reference_left_before_its_results_came_gets_them_aside(project: Path) -> None:
    session = open_file(project)
    session.hold()
    held = session.document
    session.enter(CURRENT, "6 A", None)
    snapshot = session.snapshot()
    calculated(session)
    assert session.reference is not None
    assert not session.reference.complete
    for document, outcome in asides(snapshot):
        assert document is held
        assert session.fill(document, outcome)
    assert session.reference.complete
    assert session.snapshot().lacking == ()
    alone = calculate(open_file(project).snapshot()).result
    assert alone is not None
    assert session.reference.outcome is not None
    assert session.reference.outcome.result is not None
    assert session.reference.outcome.result.checks == alone.checks


def test_trials_and_reference_survive_in_the_file_beside_the_project(project: Path) -> None:
    session = calculated(open_file(project))
    session.hold()
    session.enter(CURRENT, "6 A", None)
    session.hold_as("more current")
    session.enter(("filter", 1, "rated_current"), "9 A", None)
    session.hold_as("larger  FL2")
    again = open_file(project)
    assert [t.name for t in again.trials] == ["more current", "larger FL2"]
    assert again.reference is not None
    assert again.reference.document is again.document  # it is the file as it stands: its results are shared
    for old, new in zip(session.trials, again.trials, strict=True):
        assert new.document.data == old.document.data
        assert store.render(new.document).text == store.render(old.document).text
        assert "# kept: a remark" in store.render(new.document).text
    again.switch("larger FL2", None)
    assert get(again.document, ("filter", 1, "rated_current")) == "9 A"
    assert again.undo(None) is not None
    again.forget("more current")
    again.forget("larger FL2")
    again.keep()
    assert not trials.file_of(project).exists()


def test_a_trial_can_be_the_reference(project: Path) -> None:
    session = calculated(open_file(project))
    session.enter(CURRENT, "6 A", None)
    session.hold_as("more")
    session.refer_to("more")
    again = open_file(project)
    assert again.reference is not None
    assert again.reference.name == "more"
    assert [t.name for t in again.trials] == ["more"]
    again.drop(None)
    assert get(again.document, CURRENT) == "6 A"
    assert [t.name for t in again.trials] == ["more"]


def test_one_of_the_same_name_is_replaced_in_its_place(project: Path) -> None:
    session = calculated(open_file(project))
    for name in ("a", "b", "c"):
        session.hold_as(name)
    session.enter(CURRENT, "6 A", None)
    session.hold_as("b")
    assert [t.name for t in session.trials] == ["a", "b", "c"]
    assert session.trials[1].document is session.document


@pytest.mark.parametrize("name", ["", "   ", "x" * 25, "a\x1bb", REFERENCE])
def test_what_is_no_name_is_refused_with_a_sentence(project: Path, name: str) -> None:
    session = open_file(project)
    with pytest.raises(ProjectError, match="expected"):
        session.hold_as(name)
    assert session.trials == ()


def test_too_many_trials_are_refused(project: Path) -> None:
    session = open_file(project)
    for k in range(trials.MOST):
        session.hold_as(f"t{k}")
    with pytest.raises(ProjectError, match="remove one"):
        session.hold_as("one more")
    session.hold_as("t3")  # replacing is no more


def test_a_strange_file_is_told_and_put_aside_before_one_is_written(project: Path) -> None:
    trials.file_of(project).write_text("this = 'is mine'\n")
    session = open_file(project)
    assert "left as it is" in session.notes[0]
    session.hold_as("a")
    others = [p for p in project.parent.iterdir() if "unread" in p.name]
    assert [p.read_text() for p in others] == ["this = 'is mine'\n"]
    assert [t.name for t in open_file(project).trials] == ["a"]


@pytest.mark.parametrize(
    "text",
    [
        "format = 1\ntrial = 3\n",
        "format = 1\n[[trial]]\nname = 'a'\n",
        "format = 1\n[[trial]]\nname = 'a'\ntext = 'x = ['\n",
        "format = 2\n[[trial]]\nname = 'a'\ntext = ''\n",
        "[[[",
    ],
)
def test_a_broken_file_of_trials_never_keeps_the_project_from_opening(project: Path, text: str) -> None:
    trials.file_of(project).write_text(text)
    session = open_file(project)
    assert session.notes
    assert session.trials == ()
    assert calculate(session.snapshot()).result is not None


def test_a_folder_that_takes_no_file_is_told(project: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refused(*_: object) -> None:
        raise ProjectError("bus.trials.toml cannot be written: no space left on device.")

    session = open_file(project)
    monkeypatch.setattr(store, "write_text", refused)
    assert "this session only" in session.hold()
    assert session.reference is not None


def test_saving_under_another_name_takes_the_trials_along(project: Path) -> None:
    session = calculated(open_file(project))
    session.hold_as("a")
    session.save_as(project.with_name("other.toml"))
    assert [t.name for t in open_file(project.with_name("other.toml")).trials] == ["a"]


NAMES = st.text(st.characters(codec="utf-8", categories=("L", "N", "P", "S", "Zs")), min_size=1, max_size=20)


@settings(max_examples=50, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(names=st.lists(NAMES, max_size=4, unique=True), note=st.text(max_size=40), end=st.sampled_from(["\n", "\r\n"]))
def test_whatever_is_written_reads_back(project: Path, names: list[str], note: str, end: str) -> None:
    document = store.parse(TEXT.replace("\n", end), project.parent, project.name).document
    session = Session(document, project)
    session.apply("note", put(document, ("bus", "note"), note), None)
    held = []
    for name in names:
        try:
            held.append(Trial(trials.checked(name), session.document, when="2026-01-01 00:00"))
        except ProjectError:
            continue
    held = list({t.name: t for t in held if t.name != REFERENCE}.values())
    trials.write(project, Shelved(tuple(held)))
    again = trials.read(project)
    assert [t.name for t in again.trials] == [t.name for t in held]
    for trial in again.trials:
        assert trial.document.data == session.document.data
        assert tomllib.loads(store.render(trial.document).text) == session.document.data


def test_side_by_side_tells_the_worst_of_each_kind_and_what_differs(project: Path) -> None:
    session = calculated(open_file(project))
    first = Variant("a", session.document, (), session.result)
    session.enter(("filter", 1, "rated_current"), "0.3 A", None)
    calculated(session)
    second = Variant("b", session.document, (), session.result)
    session.enter(("converter", 1, "note"), "here", None)
    third = Variant("c", session.document, (), None)
    table = beside([first, second, third])
    assert table.failing[:2] == (0, 1)
    assert table.failing[2] is None
    by_name = {line.label: line.rows for line in table.filters}
    assert [row.status if row else None for row in by_name["FL2"]] == ["ok", "fail", None]
    kinds = {line.label: line.rows for line in table.kinds}
    assert kinds["filter current"][1] is by_name["FL2"][1]  # the worst of its kind
    assert table.heat[0] == pytest.approx(table.heat[1])
    cells = dict(table.inputs)
    assert cells["FL2.rated_current"] == ("2 A", "0.3 A", "0.3 A")
    assert [texts[2] for path, texts in table.inputs if path == "CV2.note"] == ["here"]
