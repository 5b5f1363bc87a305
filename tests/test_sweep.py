"""Sweep: the same as one by one, on any executor; cancelled; with workers that die."""

from __future__ import annotations

import csv
import io
import math
import os
import pickle
from collections.abc import Callable
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import pytest

import budget.study.sweep as module
from budget.engine.transient import CancelledError
from budget.project import store
from budget.project.document import Document
from budget.project.problems import ProjectError
from budget.report import study, tables
from budget.study.paths import cell_at, resolve
from budget.study.probe import Probe, worst
from budget.study.reach import reach
from budget.study.sweep import LOST, Sweep, steps, sweep

DEMO = Path(__file__).parent.parent / "projects" / "heron.toml"
TEXT = """\
format = 1
[bus]
low = 28
nominal = 28
high = 28
resistance = 0.1
[[filter]]
id = "F"
rated_current = 5
dm = [{ series = { L = "1 uH" } }]
[[converter]]
id = "C"
filter = "F"
rated_power = 1e6
efficiency = "100 %"
output = [{ voltage = 10, current = 1 }]
"""
AMPS = tuple(2.0 * k for k in range(1, 11))
OHMS = (0.0, 0.1, 0.2, 0.5)


def document(text: str = TEXT) -> Document:
    return store.parse(text, None, "test").document


def run(executor: Executor | None = None, doc: Document | None = None, **options: Any) -> Sweep:
    doc = doc or document()
    a, b = resolve(doc, (), "C.output.0.current"), resolve(doc, (), "bus.resistance")
    return sweep(doc, (), a, AMPS, b, OHMS, executor=executor, **options)


@pytest.fixture(scope="module")
def plain() -> Sweep:
    return run()


class Broken(Executor):
    """Runs blocks on the spot; one that holds the point ``kills`` breaks it like a dead worker breaks a pool."""

    def __init__(self, kills: Callable[[Any], bool]) -> None:
        self.kills, self.broken = kills, False
        self.ran: list[Any] = []

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        if self.broken:
            raise BrokenProcessPool("dead")
        future: Future[Any] = Future()
        if any(self.kills(item) for item in args[1]):
            self.broken = True
            future.set_exception(BrokenProcessPool("dead"))
        else:
            self.ran.extend(item[:2] for item in args[1])
            future.set_result(fn(*args, **kwargs))
        return future


class Dying(ProcessPoolExecutor):
    """Real workers, the first of which ends itself when the second block comes."""

    def __init__(self) -> None:
        super().__init__(1, mp_context=get_context("spawn"))
        self.count = 0

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        self.count += 1
        if self.count == 2:
            return super().submit(os._exit, 1)
        return super().submit(fn, *args, **kwargs)


def test_every_point_is_what_one_evaluation_gives(plain: Sweep) -> None:
    doc = document()
    a, b = (cell_at(doc, (), resolve(doc, (), text)) for text in ("C.output.0.current", "bus.resistance"))
    for i, amps in enumerate(AMPS):
        for j, ohms in enumerate(OHMS):
            result = Probe(doc, ()).at((a, amps), (b, ohms))
            assert not isinstance(result, str)
            margin, row = worst(result.checks)
            spot = plain.spots[i][j]
            assert spot.margin == margin
            assert (spot.check, spot.subject) == ((row.check, row.subject) if row else ("", ""))
            assert spot.status == result.status


def test_the_boundary_is_the_closed_form(plain: Sweep) -> None:
    """Source: derived, P = (V - R I) I at the rating, I = 5 A; the grid is 2 A wide and the curve nearly straight."""
    assert plain.boundary
    for amps, ohms in plain.boundary:
        if ohms in OHMS and ohms < 0.5:
            assert amps == pytest.approx((28.0 - ohms * 5.0) * 5.0 / 10.0, abs=0.1)


def test_the_boundary_is_where_reach_says(plain: Sweep) -> None:
    doc = document()
    found = reach(doc, (), resolve(doc, (), "C.output.0.current"))
    at = next(amps for amps, ohms in plain.boundary if ohms == 0.1)
    assert found.up.limit == pytest.approx(at, abs=0.1)


def test_threads_and_processes_give_the_same(plain: Sweep, monkeypatch: pytest.MonkeyPatch) -> None:
    with ThreadPoolExecutor(2) as threads:
        assert run(threads) == plain
        assert threads.submit(int, 1).result() == 1  # a given executor is left open
    monkeypatch.setattr(module, "_ALONE", 0.0)
    told: list[float] = []
    assert run(progress=told.append) == plain  # own processes
    assert told == sorted(told)
    assert told[-1] == 1.0


def test_a_worker_dies_and_only_its_points_are_run_again(plain: Sweep, monkeypatch: pytest.MonkeyPatch) -> None:
    again: list[Broken] = []

    def pool(workers: int) -> Executor:
        again.append(Broken(lambda item: False))
        return again[-1]

    monkeypatch.setattr(module, "_pool", pool)
    once = Broken(lambda item: item[:2] == (5, 1))
    assert run(once) == plain
    rerun = [place for executor in again for place in executor.ran]
    assert not set(rerun) & set(once.ran)
    assert len(rerun) + len(once.ran) + 1 == len(AMPS) * len(OHMS)


def test_a_real_worker_dies(plain: Sweep, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_pool", lambda workers: ThreadPoolExecutor(1))
    with Dying() as dying:
        assert run(dying) == plain
    assert dying.count >= 2


def test_a_point_that_always_kills_is_given_up_alone(plain: Sweep, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_ALONE", 0.0)
    monkeypatch.setattr(module, "_pool", lambda workers: Broken(lambda item: item[:2] == (3, 3)))
    found = run()
    assert found.spots[3][3].fault == LOST
    assert found.spots[3][3].margin is None
    assert [s for i, row in enumerate(found.spots) for j, s in enumerate(row) if (i, j) != (3, 3)] == [
        s for i, row in enumerate(plain.spots) for j, s in enumerate(row) if (i, j) != (3, 3)
    ]


def test_workers_that_never_start_are_no_endless_loop(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_ALONE", 0.0)
    monkeypatch.setattr(module, "_pool", lambda workers: Broken(lambda item: True))
    with pytest.raises(ProjectError, match="die as soon as they start"):
        run()


def test_an_executor_with_faults_of_its_own_words(plain: Sweep, monkeypatch: pytest.MonkeyPatch) -> None:
    class Other(ThreadPoolExecutor):
        def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
            if args[1][0][:2] > (4, 0):
                future: Future[Any] = Future()
                future.set_exception(RuntimeError("worker lost"))
                return future
            return super().submit(fn, *args, **kwargs)

    monkeypatch.setattr(module, "_pool", lambda workers: ThreadPoolExecutor(1))
    with Other(1) as other:
        assert run(other) == plain


def test_a_cluster_of_dask_is_an_executor_like_any_other(plain: Sweep) -> None:
    distributed = pytest.importorskip("distributed")
    with distributed.Client(processes=False, n_workers=1, threads_per_worker=1, dashboard_address=None) as client:
        assert run(client.get_executor()) == plain


@pytest.mark.parametrize("alone", [0.0, math.inf])
def test_it_ends_when_told(alone: float, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_ALONE", alone)
    monkeypatch.setattr(module, "_pool", lambda workers: ThreadPoolExecutor(1))
    told: list[float] = []
    with pytest.raises(CancelledError):
        run(cancelled=lambda: bool(told), progress=told.append)
    assert told
    assert told[-1] < 1.0


def test_a_point_that_cannot_be_calculated_says_why() -> None:
    doc = document()
    a, b = resolve(doc, (), "bus.low"), resolve(doc, (), "bus.high")
    found = sweep(doc, (), a, (27.0, 30.0), b, (26.0, 29.0))
    assert "low <= nominal <= high" in found.spots[1][0].fault
    assert found.spots[0][1].margin is not None
    assert found.boundary == ()
    rows = list(csv.DictReader(io.StringIO(study.sweep_csv(found))))
    assert [row["status"] for row in rows].count("none") == 3
    assert rows[0]["bus.low [V]"] == "27"
    tables.dumps(study.sweep_json(found))


def test_the_table_holds_every_point(plain: Sweep) -> None:
    rows = list(csv.DictReader(io.StringIO(study.sweep_csv(plain))))
    assert len(rows) == len(AMPS) * len(OHMS)
    assert {row["status"] for row in rows} == {"ok", "fail"}
    for row in rows:
        assert (float(row["margin"]) < 0.0) == (row["status"] == "fail")
    data = study.sweep_json(plain)
    tables.dumps(data)
    assert len(data["margins"]) == len(AMPS)


def test_the_demo_with_its_shelf_travels_as_plain_data() -> None:
    loaded = store.load(DEMO)
    a, b = (resolve(loaded.document, loaded.shelves, text) for text in ("FL2.dm.0.R", "ground.load.CV1"))
    job = module.Job(loaded.document.data, tuple((s.name, s.data) for s in loaded.shelves), a, b, ("dc",), (0, 1, 2))
    item = (0, 0, 0.02, 0.5)
    assert module.block(pickle.loads(pickle.dumps(job)), [item]) == module.block(job, [item])


def test_steps_are_even_or_by_factors() -> None:
    doc = document()
    cell = cell_at(doc, (), resolve(doc, (), "bus.resistance"))
    assert steps(cell, 1.0, 3.0, 3) == (1.0, 2.0, 3.0)
    assert steps(cell, 1.0, 4.0, 3, factors=True) == pytest.approx((1.0, 2.0, 4.0))
    assert steps(cell, 2.0, 2.0, 5) == (2.0,)
    for low, high, count, factors, words in (
        (3.0, 1.0, 3, False, "ends are exchanged"),
        (0.0, 1.0, 3, True, "start above 0"),
        (0.0, 1.0, 0, False, "steps were found"),
        (0.0, math.nan, 2, False, "no number"),
    ):
        with pytest.raises(ProjectError, match=words):
            steps(cell, low, high, count, factors=factors)


def test_bad_questions_are_refused() -> None:
    doc = document()
    a, b, name = (resolve(doc, (), t) for t in ("bus.low", "bus.resistance", "F.name"))
    for arguments, words in (
        ((a, (1.0,), a, (1.0,)), "two different cells"),
        ((a, (1.0,), name, (1.0,)), "holds a text"),
        ((a, (), b, (1.0,)), "no values"),
        ((a, (1.0,) * 1000, b, (1.0,) * 1000), "at most"),
    ):
        with pytest.raises(ProjectError, match=words):
            sweep(doc, (), *arguments)
    broken = document(TEXT.replace('"100 %"', '"much"'))
    with pytest.raises(ProjectError, match="mended first"):
        sweep(broken, (), a, (1.0,), b, (1.0,))
