"""The projects that are shipped: they open without a word, and the demo has one thing to mend that one move mends."""

from __future__ import annotations

import tomllib
from collections import Counter
from functools import cache
from pathlib import Path

import pytest

from budget.engine.checks import CheckRow, dc_checks
from budget.engine.evaluate import evaluate
from budget.engine.model import Project
from budget.engine.operating import allowed_current, operating_points
from budget.project import store, toml_text
from budget.project.build import build
from budget.project.document import Document, get, put
from budget.project.store import Loaded

FOLDER = Path(__file__).parent.parent / "projects"
NAMES = ("heron", "ferry", "smallest")
SHELVED = ("heron", "ferry")  # these share shelf.toml
MOVE = ("CV11", "FL3")  # what mends the demo


@cache
def loaded(name: str) -> Loaded:
    return store.load(FOLDER / f"{name}.toml")


def built(name: str, document: Document | None = None) -> Project:
    made = build(document or loaded(name).document, loaded(name).shelves)
    assert made.problems == ()
    assert made.left_out == ()
    assert made.project is not None
    return made.project


def moved() -> Project:
    document = loaded("heron").document
    ids = [row["id"] for row in get(document, ("converter",))]
    return built("heron", put(document, ("converter", ids.index(MOVE[0]), "filter"), MOVE[1]))


def rows(project: Project, status: str) -> list[CheckRow]:
    return [row for row in dc_checks(project, operating_points(project)) if row.status == status]


@pytest.mark.parametrize("name", NAMES)
def test_opens_without_a_problem(name: str) -> None:
    assert loaded(name).problems == ()
    project = built(name)
    operating = operating_points(project)
    assert operating.solved.all()
    assert not operating.beyond_data.any()


@pytest.mark.parametrize("path", sorted(FOLDER.glob("*.toml")), ids=lambda path: path.name)
def test_text_survives_unchanged_and_is_ascii(path: Path) -> None:
    raw = path.read_bytes()
    assert raw.isascii()
    text = raw.decode()
    assert toml_text.render(text, tomllib.loads(text), {}) == toml_text.Rendered(text, ())


def test_demo_has_the_size_it_is_described_with() -> None:
    project = built("heron")
    assert [c.id for c in project.converters] == [f"CV{k}" for k in range(1, 13)]
    assert [f.id for f in project.filters] == ["FL1", "FL2", "FL3"]
    assert len(project.cases) == 4
    assert all(case.duration for case in project.cases)
    noise = Counter(
        "chop" if c.chop else "ripple" if c.ripple else "spectrum" if c.spectrum else "none" for c in project.converters
    )
    assert noise == {"chop": 10, "ripple": 1, "spectrum": 1}
    assert sorted(c.phase for c in project.converters if c.clock) == [0.0, 180.0]


def test_ferry_has_the_size_it_is_described_with() -> None:
    project = built("ferry")
    assert (len(project.converters), len(project.filters), len(project.cases)) == (6, 2, 3)
    assert [bool(f.attenuation) for f in project.filters] == [False, True]
    assert [line.name for line in project.limits] == ["quay"]
    assert project.bus.surge is not None


def test_smallest_has_nothing_to_spare() -> None:
    project = built("smallest")
    assert (len(project.converters), len(project.filters)) == (1, 1)
    assert set(loaded("smallest").document.data) == {"format", "bus", "filter", "converter"}


def test_two_projects_share_the_shelf_and_a_part_of_it() -> None:
    used = {}
    for name in SHELVED:
        assert [shelf.name for shelf in loaded(name).shelves] == ["shelf.toml"]
        data = loaded(name).document.data
        used[name] = {(kind, r["part"]) for kind in ("filter", "converter") for r in data[kind] if "part" in r}
    assert used["heron"] & used["ferry"] == {("filter", "panel-8A")}
    shelf = loaded("heron").shelves[0].data["shelf"]
    parts = {(kind, name) for kind in shelf for name in shelf[kind]}
    assert used["heron"] | used["ferry"] == parts, "a part that nobody uses"


def test_demo_ships_with_one_overloaded_filter() -> None:
    project = built("heron")
    (fail,) = rows(project, "fail")
    assert (fail.check, fail.subject, fail.case, fail.line) == ("filter current", "FL2", "survey", "low")
    assert fail.margin is not None
    assert -0.10 < fail.margin < -0.02
    assert 1 <= len(rows(project, "thin")) <= 3
    operating = operating_points(project)
    room = 1 - operating.filter_current[..., 2].max() / allowed_current(project)[2]
    assert room > 0.3


def test_one_move_mends_the_demo() -> None:
    project = moved()
    assert rows(project, "fail") == []
    assert evaluate(project).status != "fail"
    operating = operating_points(project)
    wanted = allowed_current(project) * project.rules.filter_load
    assert (operating.filter_current.max(axis=(0, 1)) <= wanted).all()


@pytest.mark.parametrize("name", ["ferry", "smallest"])
def test_the_other_projects_have_no_fail(name: str) -> None:
    project = built(name)
    assert rows(project, "fail") == []
    assert evaluate(project).status != "fail"
