"""A long session: after many hours of edits the program holds no more than after the first."""

from __future__ import annotations

import functools
import gc
import random
import sys
import tracemalloc

import pytest

from budget import session as sessions
from budget.project import edits
from budget.project.document import get
from budget.project.problems import ProjectError
from budget.ui.desk import Desk
from budget.ui.paint import frame
from tests.screen.driving import TEXTS, desk_of, press, session_of, shown

VIEWS = "s k l f r b T s"


def work(desk: Desk, rng: random.Random, count: int) -> None:
    """Edits of every sort, as a user makes them: numbers, rows, undo and redo, views, trials, a reference."""
    session = desk.session
    for _ in range(count):
        what = rng.randrange(12)
        try:
            if what < 5:
                k = rng.randrange(max(1, len(get(session.document, ("converter",), []))))
                if session.enter(("converter", k, "output", 0, "current"), f"{rng.uniform(0.1, 4):.3f} A", desk.spot()):
                    desk.changed("edit")
            elif what == 5:
                session.enter(("bus", "note"), "x" * rng.randrange(40), desk.spot())
            elif what == 6 and len(get(session.document, ("converter",), [])) < 5:
                k = rng.randrange(1, 6)
                desk.change("row", edits.new_row(session.document, "converter", k, filter="FL1")[0])
            elif what == 7 and len(get(session.document, ("converter",), [])) > 3:
                desk.change("gone", edits.remove_row(session.document, ("converter", 1)))
            elif what == 8:
                press(desk, rng.choice(["u", "U", "u u"]))
            elif what == 9:
                press(desk, rng.choice(VIEWS.split()))
                press(desk, rng.choice(["down", "up", "right", "pagedown"]))
            elif what == 10:
                press(desk, "escape K")
                if desk.mode is not None:
                    press(desk, rng.choice(["k", "d"]))
            else:
                session.hold_as(f"t{rng.randrange(3)}")
        except ProjectError:
            continue
        frame(desk, 80, 24)


def held() -> int:
    """Bytes held, without what the caches of limited size have filled up with so far."""
    for module in [m for name, m in sys.modules.items() if name.startswith("budget.")]:
        for thing in vars(module).values():
            if isinstance(thing, functools._lru_cache_wrapper) and thing.cache_info().maxsize is not None:
                thing.cache_clear()
    gc.collect()
    return tracemalloc.get_traced_memory()[0]


def test_a_session_of_many_edits_does_not_grow(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sessions, "HISTORY", 20)
    rng = random.Random(1)
    desk, _ = desk_of(session_of(TEXTS["small"]))
    work(desk, rng, 60)  # until the history and the trials are full
    tracemalloc.start()
    try:
        before = held()
        sizes = []
        for _ in range(3):
            work(desk, rng, 70)
            sizes.append(held() - before)
    finally:
        tracemalloc.stop()
    assert shown(desk)
    assert max(sizes) < 900_000, sizes  # a document with its results more or less; 360 edits that leak are more


def test_the_history_is_long_but_not_endless(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sessions, "HISTORY", 10)
    session = session_of(TEXTS["small"])
    for k in range(25):
        session.enter(("bus", "note"), f"n{k}", None)
    assert len(session.done) == 10
    while session.undo(None) is not None:
        pass
    assert get(session.document, ("bus", "note")) == "n14"
    while session.redo(None) is not None:
        pass
    assert get(session.document, ("bus", "note")) == "n24"
