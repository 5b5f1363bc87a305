"""Sweep: the same as one by one, on any executor; cancelled; with workers that die."""

from __future__ import annotations

import contextlib
import csv
import io
import math
import os
import pickle
import pty
import subprocess
import sys
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import pytest

import budget.study.sweep as module
from budget import cli, cli_study
from budget.engine.transient import CancelledError
from budget.project import store
from budget.project.document import Document
from budget.project.problems import ProjectError
from budget.report import study, tables
from budget.study import cluster
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


# -- the workers of a scheduler


@contextlib.contextmanager
def local_cluster(workers: int = 1) -> Iterator[str]:
    """The address of a scheduler with workers in this process, reached through the network like any other."""
    import distributed

    with distributed.LocalCluster(
        n_workers=workers, threads_per_worker=1, processes=False, protocol="tcp://", dashboard_address=":0"
    ) as found:
        yield found.scheduler_address


def test_a_cluster_is_an_executor_like_any_other(plain: Sweep, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_pool", lambda workers: pytest.fail("the cluster was left"))
    with local_cluster(2) as address, cluster.workers_of(address) as (executor, workers):
        assert workers == 2
        assert run(executor, workers=workers) == plain


def test_a_worker_of_a_cluster_dies(plain: Sweep) -> None:
    """A real process that ends itself instead of the third block; what it lost is calculated here."""
    import dask
    import distributed

    class Deadly(ThreadPoolExecutor):  # hands on to the cluster
        def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
            self.count = getattr(self, "count", 0) + 1
            if self.count == 3:
                return inner.submit(os._exit, 1)  # type: ignore[no-any-return]
            return inner.submit(fn, *args, **kwargs)  # type: ignore[no-any-return]

    with (
        dask.config.set({"distributed.scheduler.allowed-failures": 0}),
        distributed.LocalCluster(n_workers=1, threads_per_worker=1, dashboard_address=":0") as found,
        distributed.Client(found, set_as_default=False) as client,
    ):
        inner = client.get_executor()
        with Deadly(1) as deadly:
            answer = run(deadly)
    assert answer == plain
    assert answer.again > 0


def sweep_command(*more: str, counts: tuple[int, int] = (4, 3)) -> list[str]:
    first, second = (str(count) for count in counts)
    cells = ["CV3.output.0.current", "1 A", "6 A", first, "bus.resistance", "0", "0.1", second]
    return ["sweep", str(DEMO), *cells, *more]


def test_the_command_takes_a_scheduler(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    assert cli.run(sweep_command()) == 0
    wanted = capsys.readouterr().out
    monkeypatch.setattr(module, "_pool", lambda workers: pytest.fail("the cluster was left"))
    with local_cluster() as address:
        assert cli.run(sweep_command("--scheduler", address)) == 0
    out, err = capsys.readouterr()
    assert out == wanted
    assert "budget:" not in err


def test_a_scheduler_that_is_none(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cluster, "CONNECT", 0.2)
    with local_cluster(0) as address:
        for given, words in (
            ("nonsense", "no scheduler was found at 'nonsense'"),
            ("tcp://127.0.0.1:1", "no scheduler was found at 'tcp://127.0.0.1:1'"),
            (address, "has no workers"),
        ):
            assert cli.run(sweep_command("--scheduler", given)) == 2
            out, err = capsys.readouterr()
            assert out == ""
            assert words in err
            assert "Traceback" not in err


def test_workers_with_another_version(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cluster, "__version__", "0.0.7")
    with local_cluster() as address:
        monkeypatch.setattr(cluster, "version", _other_version)
        assert cli.run(sweep_command("--scheduler", address)) == 2
        assert "have budget 0.0.6; 0.0.7 was expected" in capsys.readouterr().err
        monkeypatch.setattr(cluster, "version", _no_version)
        assert cli.run(sweep_command("--scheduler", address)) == 2
        assert "cannot run this program" in capsys.readouterr().err


def _other_version() -> str:
    return "0.0.6"


def _no_version() -> str:
    raise ModuleNotFoundError("No module named 'budget'")


def test_without_the_extra_it_says_what_to_install(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    assert cli.run(sweep_command("--scheduler", "tcp://127.0.0.1:8786")) == 2
    assert "budget[dask]" in capsys.readouterr().err


# -- on the command line


class Screen(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_a_bar_on_a_terminal_and_none_in_a_pipe(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    assert cli.run(sweep_command()) == 0
    wanted, err = capsys.readouterr()
    assert err == ""
    assert len(wanted.splitlines()) == 13
    terminal = Screen()
    monkeypatch.setattr(sys, "stderr", terminal)
    assert cli.run(sweep_command()) == 0
    assert capsys.readouterr().out == wanted
    *shown, last, end = terminal.getvalue().split("\r")
    assert "[############.............]  50 %" in shown
    assert (last.strip(), end) == ("", "")  # it is wiped
    assert len(last) >= max(map(len, shown))


def test_stopped_it_says_so_in_one_sentence(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def stop(*_: Any, **__: Any) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(module, "_Run", stop)
    assert cli.run(sweep_command()) == cli_study.STOPPED == 130
    assert capsys.readouterr() == ("", "budget: stopped; nothing was written.\n")


def test_what_is_left_aside_is_told(capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.run(sweep_command("--aside")) == 0
    out, err = capsys.readouterr()
    assert err == "budget: left aside, for it fails already: FL2 filter current.\n"
    assert ",FL2," not in out


def test_lost_points_are_told(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    pools = iter([Broken(lambda item: item[:2] == (2, 1))])
    monkeypatch.setattr(module, "_ALONE", 0.0)
    monkeypatch.setattr(module, "_pool", lambda workers: next(pools, None) or Broken(lambda item: False))
    assert cli.run(sweep_command()) == 0
    assert "were lost; the points were calculated again." in capsys.readouterr().err


def test_ctrl_c_at_a_terminal_ends_it_and_its_workers_without_a_traceback() -> None:
    """A real terminal, and a sweep of points that take seconds each in workers of their own."""
    child, terminal = pty.fork()
    if child == 0:  # the new program
        command = sweep_command("--parts", "dc,inrush", counts=(40, 40))
        os.execv(sys.executable, [sys.executable, "-m", "budget", *command])
    seen, pressed = b"", False
    while True:
        try:
            part = os.read(terminal, 65536)
        except OSError:  # the other end is closed: by the workers too
            break
        if not part:
            break
        seen += part
        if b"%" in seen and not pressed:
            pressed = os.write(terminal, b"\x03") == 1
    os.close(terminal)
    assert os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 130
    assert b"budget: stopped; nothing was written." in seen
    assert b"Traceback" not in seen


def test_workers_end_with_the_program_however_it_ends() -> None:
    """They hold its standard output open, so that what reads it would wait for ever for one that stays."""
    code = """\
import os, threading
import budget.study.sweep as module
from tests.test_sweep import document, resolve
if __name__ == "__main__":
    module._ALONE, began, doc = 0.0, threading.Event(), document()
    a, b = resolve(doc, (), "C.output.0.current"), resolve(doc, (), "bus.resistance")
    values = [1.0 + 0.001 * k for k in range(300)]
    tell = lambda share: began.set() if share > 2 / 300**2 else None
    options = {"progress": tell}
    threading.Thread(target=module.sweep, args=(doc, (), a, values, b, values), kwargs=options, daemon=True).start()
    began.wait()
    print("a worker has answered", flush=True)
    os._exit(7)
"""
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=DEMO.parent.parent, capture_output=True, text=True, check=False, timeout=120
    )
    assert (done.returncode, done.stdout, done.stderr) == (7, "a worker has answered\n", "")


def test_workers_start_while_a_screen_stands_in_for_standard_error() -> None:
    """A program with a screen has a stream without a file there, whose number is -1."""
    code = """\
import sys
class Stand:
    def write(self, text): raise SystemExit(text)
    def flush(self): pass
    def fileno(self): return -1
if __name__ == "__main__":
    sys.stderr = Stand()
    import budget.study.sweep as module
    module._ALONE = 0.0
    from tests.test_sweep import run
    assert len(run().spots) == 10
    print("done")
"""
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=DEMO.parent.parent, capture_output=True, text=True, check=False, timeout=120
    )
    assert (done.stdout.strip(), done.stderr) == ("done", "")


@pytest.mark.parametrize("alone", [0.0, math.inf])
def test_it_ends_when_told(alone: float, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_ALONE", alone)
    monkeypatch.setattr(module, "_pool", lambda workers: ThreadPoolExecutor(1))
    told: list[float] = []
    with pytest.raises(CancelledError):
        run(cancelled=lambda: bool(told), progress=told.append)
    assert told
    assert told[-1] < 1.0


def test_points_without_a_result_do_not_hide_that_others_take_long(monkeypatch: pytest.MonkeyPatch) -> None:
    """The first points fail at once, so the work looks short; the workers get the rest when it turns out long."""
    pools: list[Broken] = []

    def pool(workers: int) -> Executor:
        pools.append(Broken(lambda item: False))
        return pools[-1]

    clock = [0.0]

    def slow(self: Any, item: Any) -> module.Spot:
        if item[0] < 3:
            return module.Spot(None, fault="no")
        clock[0] += 1.0
        return module.Spot(0.5, "ok")

    monkeypatch.setattr(module, "_pool", pool)
    monkeypatch.setattr(module._Bench, "spot", slow)
    monkeypatch.setattr(module.time, "perf_counter", lambda: clock[0])
    found = run()
    assert [spot.fault for spot in found.spots[0]] == ["no"] * 4
    assert found.spots[9][3].status == "ok"
    assert len(pools) == 1
    assert 0 < len(pools[0].ran) < 28


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


def test_what_fails_already_can_be_left_aside(plain: Sweep) -> None:
    """With another filter that fails whatever is done, the rest is as it is without it."""
    other = (
        '[[filter]]\nid = "G"\nrated_current = 0.01\ndm = [{ series = { L = "1 uH" } }]\n'
        '[[converter]]\nid = "D"\nfilter = "G"\nrated_power = 1e6\nefficiency = "100 %"\n'
        "output = [{ voltage = 10, current = 0.1 }]\n"
    )
    doc = document(TEXT + other)
    assert all(spot.status == "fail" and spot.subject for row in run(doc=doc).spots for spot in row)
    found = run(doc=doc, aside=True)
    assert [(row.check, row.subject) for row in found.failing] == [("filter current", "G")]
    for one, two in zip(found.spots, plain.spots, strict=True):
        for spot, wanted in zip(one, two, strict=True):
            assert (spot.subject, spot.status) == (wanted.subject, wanted.status)
    assert study.sweep_json(found)["failing"][0]["subject"] == "G"
    assert run(doc=document(), aside=True) == plain


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
