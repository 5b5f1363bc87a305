"""Switch-on, stability, and what would help: their numbers are the engine's, and what is offered does what it says."""

from __future__ import annotations

import csv
import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from budget.engine.checks import CheckRow
from budget.engine.cure import mode_table
from budget.engine.evaluate import Result
from budget.engine.stability import source_impedances
from budget.engine.transient import Inrush, Run
from budget.report import words
from budget.session import Session, calculate
from budget.ui import stable, switchon
from budget.ui.desk import Desk, Edit, Pick
from budget.ui.plot import SYMBOLS, Trace
from budget.ui.view import Row
from tests.screen.driving import SMALL, Log, demo, desk_of, press, screen, session_of, shown, small, written

# Without a surge, with limits that the switch-on exceeds.
SHARP = (
    SMALL.replace(
        'surge = "50 V"\nsurge_time = "1 ms"\nsurge_rise = "200 us"\n', 'inrush_peak = "30 A"\nrise = "20 us"\n'
    )
    .replace('id = "FA"\n', 'id = "FA"\ninrush_peak = "15 A"\n')
    .replace('[[filter]]\nid = "FB"\n', '[[filter]]\nid = "FB"\ninrush_peak = "90 A"\n')
)
STRICT = SMALL.replace('inrush_window = "1 ms"\n', 'inrush_window = "1 ms"\nstability_margin = 16\n')
BARE = 'format = 1\n[bus]\nlow = 22\nnominal = 28\nhigh = 29\n[[case]]\nid = "c"\n'


def result_of(desk: Desk) -> Result:
    result = desk.session.result
    assert result is not None
    return result


def inrush_of(desk: Desk) -> Inrush:
    found = result_of(desk).inrush
    assert found is not None
    return found


def shown_run(desk: Desk) -> Run:
    found = switchon.shown_run(desk.context())
    assert found is not None
    return found[1]


def rows(desk: Desk, head: str) -> list[Row]:
    return [row for _, row in desk.lines() if row is not None and row.key[0] == head]


def texts(row: Row) -> list[str]:
    return [cell.text for cell in row.cells]


def traces(desk: Desk) -> list[Trace]:
    plot = desk.view().plot
    assert plot is not None
    return list(plot.traces)


def check(desk: Desk, name: str, subject: str) -> CheckRow:
    return next(r for r in result_of(desk).checks if (r.check, r.subject) == (name, subject))


def to_row(desk: Desk, *key: str) -> None:
    press(desk, "pageup pageup pageup pageup pageup")
    for _ in desk.lines():
        row, _ = desk.here()
        if row is not None and row.key == key:
            return
        press(desk, "down")
    pytest.fail(f"no row {key}")


# -- switch-on


def test_the_run_of_the_worst_check_is_shown_first() -> None:
    desk, _ = written(SHARP)
    press(desk, "J")
    run = shown_run(desk)
    failed = [r for r in result_of(desk).checks if r.check in ("inrush peak", "bus inrush") and r.status == "fail"]
    assert {r.subject for r in failed} == {"FA", "bus"}
    worst = min(failed, key=lambda r: r.margin or 0.0)
    assert (run.case, run.event) == (worst.case, worst.line)
    assert desk.view().title == f"{run.event} in {run.case}"


def test_j_goes_through_every_case_and_event() -> None:
    desk = small()
    press(desk, "J")
    seen = []
    for _ in inrush_of(desk).runs:
        seen.append(desk.view().title)
        press(desk, "j")
    assert sorted(seen) == sorted(f"{e} in {c}" for c in ("rest", "run") for e in ("on-low", "on-high", "surge"))
    assert desk.view().title == seen[0]


@pytest.mark.parametrize("make", [lambda: small(), lambda: demo("ferry")[0], lambda: demo("heron")[0]])
def test_the_numbers_and_curves_are_those_of_the_run(make: Callable[[], Desk]) -> None:
    desk = make()
    press(desk, "J")
    project = result_of(desk).project
    for _ in range(2):
        run = shown_run(desk)
        wave = run.wave
        assert wave is not None
        bus = rows(desk, "bus")[0]
        assert texts(bus)[1] == words.show(run.bus_peak, "A")
        assert [r.key[1] for r in rows(desk, "filter")] == [f.id for f in run.filters]
        assert [r.key[1] for r in rows(desk, "converter")] == [c.id for c in run.converters]
        curves = {t.symbol: t for t in traces(desk) if t.kind == "curve"}
        assert list(curves["a"].y) == wave.bus.tolist()
        for row, part in zip(rows(desk, "filter"), run.filters, strict=True):
            assert texts(row)[1] == words.show(part.peak, "A")
            assert texts(row)[5] == words.show(part.peak_voltage, "V")
            letter = texts(row)[0][0]
            assert letter == SYMBOLS[1 + [f.id for f in project.filters].index(part.id)]
            assert max(curves[letter].y) == pytest.approx(part.peak or 0.0, rel=0.02, abs=0.02)
        press(desk, "A")
        curves = {t.symbol: t for t in traces(desk) if t.kind == "curve"}
        for row, unit in zip(rows(desk, "converter"), run.converters, strict=True):
            assert texts(row)[5] == words.show(unit.peak_voltage, "V")
            assert texts(row)[8] == unit.state
            letter = texts(row)[0][0]
            assert letter == SYMBOLS[[c.id for c in project.converters].index(unit.id)]
            assert max(curves[letter].y) == pytest.approx(unit.peak_voltage or 0.0, rel=0.02)
        press(desk, "A j")


def test_limits_are_lines_and_what_exceeds_one_is_marked() -> None:
    desk, _ = written(SHARP)
    press(desk, "J")
    assert {t.y[0] for t in traces(desk) if t.kind == "step"} == {15.0, 30.0, 90.0}
    letters = {(t.symbol, t.y[0]) for t in traces(desk) if t.kind == "dots"}  # whose limit it is
    assert letters == {("a", 30.0), ("b", 15.0), ("c", 90.0)}
    bus, first = rows(desk, "bus")[0], rows(desk, "filter")[0]
    assert [texts(bus)[k] for k in (0, 2)] == ["a bus", "30 A"]
    for row in (bus, first):
        assert (row.cells[1].mark, row.cells[1].tone) == ("!", "fail")
    assert rows(desk, "filter")[1].cells[1].mark == ""
    press(desk, "A")
    entered = {c.max_surge for c in result_of(desk).project.converters if c.max_surge}
    top = max(max(t.y) for t in traces(desk) if t.kind == "curve")
    near = {limit for limit in entered if limit <= switchon.NEAR * top}  # one far above would flatten the curves
    assert {t.y[0] for t in traces(desk) if t.kind == "step"} == near | {min(entered)}


def test_the_time_axis_becomes_logarithmic() -> None:
    desk = small()
    press(desk, "J")
    for log in (True, False, True):
        plot = desk.view().plot
        assert plot is not None
        assert plot.log_x == log
        assert plot.x_range is not None
        assert (plot.x_range[0] > 0) == log
        assert len(screen(desk)) == 24
        press(desk, "L")


def test_the_starts_are_marked_on_the_voltages() -> None:
    desk, _ = demo("heron")
    press(desk, "J")
    assert not [t for t in traces(desk) if t.name == "starts"]
    press(desk, "A")
    starts = sorted(t.x[0] for t in traces(desk) if t.name == "starts")
    assert starts == sorted(c.runs_at for c in shown_run(desk).converters if c.runs_at is not None)
    assert starts
    assert "^" in "\n".join(screen(desk)[1:12])


def test_the_csv_of_a_run_is_its_waveforms() -> None:
    for desk in (small(), demo("ferry")[0]):
        press(desk, "J")
        run = shown_run(desk)
        wave = run.wave
        assert wave is not None
        head, *lines = csv.reader(switchon.csv_waves(desk.context()).splitlines())
        numbers = np.array([[float(v or "nan") for v in line] for line in lines])
        wanted = np.hstack((wave.time[:, None], wave.bus[:, None], wave.filters, wave.outputs, wave.terminals))
        np.testing.assert_array_equal(numbers, wanted)
        assert head[:2] == ["time", "bus current"]
        assert head[2:] == [
            *(f"{f.id} current" for f in run.filters),
            *(f"{f.id} voltage" for f in run.filters),
            *(f"{c.id} voltage" for c in run.converters),
        ]


@pytest.mark.parametrize(("key", "word"), [("a", "lines"), ("J", "switch-on"), ("Y", "stability")])
def test_csv_is_written_beside_the_project_and_never_over_a_file(
    key: str, word: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    desk = small()
    press(desk, f"{key} E")
    assert isinstance(desk.mode, Edit)
    name = desk.mode.text
    assert word in name
    press(desk, "enter")
    assert desk.message == f"written: {name}"
    text = (tmp_path / name).read_text(encoding="utf-8")
    assert len(text.splitlines()) > 20
    press(desk, "E")
    assert isinstance(desk.mode, Edit)
    assert desk.mode.text != name
    press(desk, "ctrl+u")
    desk.paste(name)
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert "exists already" in desk.mode.error
    assert (tmp_path / name).read_text(encoding="utf-8") == text


def test_where_there_is_nothing_it_says_so() -> None:
    desk, _ = written(BARE)
    for key in "JY":
        press(desk, key)
        assert len(screen(desk)) == 24
    press(desk, "J E")
    press(desk, "escape Y E escape H")
    assert "no filter" in desk.message
    desk, _ = written("format = 1\n")
    for key in "JYz":
        press(desk, key)
        assert "~ calculating" not in shown(desk), key


# -- what would help at the switch-on


@pytest.mark.parametrize("target", ["FA", "bus"])
@pytest.mark.parametrize("what", ["add ", "rise over "])
def test_what_is_offered_brings_the_peak_within_its_limit(target: str, what: str) -> None:
    desk, log = written(SHARP, everything=True)
    press(desk, "J")
    name = "bus inrush" if target == "bus" else "inrush peak"
    before = check(desk, name, target)
    assert before.status == "fail"
    first = desk.session.document
    to_row(desk, *(["bus"] if target == "bus" else ["filter", target]))
    press(desk, "H")
    assert log.jobs == [f"solving for {target}"]
    assert isinstance(desk.mode, Pick)
    assert [t.split()[0] for t, _ in desk.mode.shown()] == ["add", "rise"]
    choice = next(t for t, _ in desk.mode.shown() if t.startswith(what))
    desk.mode.index = [t for t, _ in desk.mode.shown()].index(choice)
    press(desk, "enter")
    after = check(desk, name, target)
    assert after.status == "ok"
    assert after.value is not None
    assert before.limit is not None
    assert 0.9 * before.limit < after.value <= before.limit
    assert len(desk.session.done) == 1
    press(desk, "u")
    assert desk.session.document is first
    assert check(desk, name, target).status == "fail"


def test_escape_takes_no_change() -> None:
    desk, _ = written(SHARP, everything=True)
    first = desk.session.document
    press(desk, "J H escape")
    assert desk.mode is None
    assert desk.session.document is first


def test_what_needs_no_help_or_has_no_limit_is_told() -> None:
    desk, _ = written(SHARP)
    press(desk, "J")
    to_row(desk, "filter", "FB")
    press(desk, "H")
    assert desk.message == "the peak of FB is within its limit"
    desk = small()
    press(desk, "J H")
    assert desk.message == "no inrush_peak is entered for bus"


def test_an_offer_of_an_older_document_is_not_made() -> None:
    desk, _ = written(SHARP)
    held: list[Callable[[], None]] = []
    desk.start_job = lambda work: held.append(lambda: work.done(work.run(lambda: False, lambda _: None)))
    press(desk, "J H s down D")
    held[0]()
    assert desk.mode is None
    assert desk.message == "the project changed meanwhile; ask again"


def test_help_waits_for_the_results() -> None:
    desk = Desk(session_of(SHARP), True)
    press(desk, "J H")
    assert "not calculated yet" in desk.message
    press(desk, "Y H")
    assert "not calculated yet" in desk.message


# -- stability


@pytest.mark.parametrize("make", [lambda: small(), lambda: demo("ferry")[0]])
def test_the_numbers_are_those_of_the_stability(make: Callable[[], Desk]) -> None:
    desk = make()
    press(desk, "Y")
    found = result_of(desk).stability
    assert found is not None
    c, k = np.unravel_index(int(np.where(found.solved, found.margin_db, np.inf).argmin()), found.solved.shape)
    case = result_of(desk).project.cases[int(c)].id
    assert desk.view().title == f"stability in {case}, {('low', 'nominal', 'high')[int(k)]} line"
    summary = desk.view().summary
    assert summary.startswith(f"stable, margin {found.margin_db[c, k]:.1f} dB, ")
    assert f"least damping {found.damping[c, k]:.3g} at {words.frequency(float(found.frequency[c, k]))}" in summary
    modes = mode_table(result_of(desk).project, result_of(desk).operating, int(c), int(k), stable.MODES)
    assert [texts(row)[1] for row in rows(desk, "mode")] == [f"{mode.damping:.3g}" for mode in modes]
    assert float(texts(rows(desk, "mode")[0])[1]) == pytest.approx(float(found.damping[c, k]), rel=0.01)
    for f, row in enumerate(rows(desk, "filter")):
        apart = float(found.impedance_db[c, k, f])
        assert texts(row)[4] == (f"{apart:.1f} dB" if math.isfinite(apart) else "")
        if result_of(desk).project.filters[f].attenuation:
            assert texts(row)[1] == "table"


def test_another_corner_has_its_own_numbers() -> None:
    desk = small()
    press(desk, "Y o home down down down enter")
    found = result_of(desk).stability
    assert found is not None
    assert desk.view().title == "stability in rest, high line"
    assert f"margin {found.margin_db[0, 2]:.1f} dB" in desk.view().summary


def test_j_goes_through_the_filters_that_have_an_impedance() -> None:
    desk = small()
    press(desk, "Y")
    names = []
    for k in (0, 1, 0):
        source = traces(desk)[0]
        names.append(source.name)
        z = source_impedances(result_of(desk).project, 2 * np.pi * np.array(source.x), k)[0]
        np.testing.assert_allclose(source.y, 20 * np.log10(np.abs(z)), atol=1e-9)
        press(desk, "j")
    assert names == ["FA source", "FB source", "FA source"]


def test_source_and_load_are_as_far_apart_as_the_table_says() -> None:
    desk = small()
    press(desk, "Y")
    for k in range(2):
        source, load = traces(desk)
        said = float(texts(rows(desk, "filter")[k])[4].split()[0])
        assert load.y[0] - max(source.y) == pytest.approx(said, abs=0.1)
        press(desk, "j")


def test_a_bus_that_swings_says_unstable() -> None:
    desk, _ = desk_of(session_of(SMALL.replace('C = "10 uF", R = "400 mohm"', 'C = "100 nF"')))
    press(desk, "Y")
    assert desk.view().summary.startswith("UNSTABLE, margin -")
    mode = rows(desk, "mode")[0]
    assert mode.cells[1].mark == "!"
    assert texts(mode)[2].startswith("filter FB")


def test_the_csv_of_the_stability() -> None:
    desk = small()
    press(desk, "Y")
    modes, impedance = stable.csv_stability(desk.context()).split("\n\n")
    read = list(csv.DictReader(modes.splitlines()))
    corner = stable.shown_corner(desk.context(), result_of(desk))
    wanted = mode_table(result_of(desk).project, result_of(desk).operating, *corner)
    assert list(dict.fromkeys(float(line["mode frequency"]) for line in read)) == list(
        dict.fromkeys(mode.frequency for mode in wanted)
    )
    assert float(read[0]["damping"]) == wanted[0].damping
    curve = list(csv.DictReader(impedance.splitlines()))
    assert list(curve[0]) == ["frequency", "FA source impedance", "FB source impedance"]
    assert len(curve) == 900
    found = result_of(desk).stability
    assert found is not None
    assert max(float(line["FA source impedance"]) for line in curve) == pytest.approx(float(found.peak[0]), rel=0.01)


def helped(desk: Desk, log: Log, name: str) -> None:
    press(desk, "Y")
    to_row(desk, "filter", name)
    press(desk, "H")
    assert log.jobs[-1] == f"damping {name}"


def test_the_damping_that_is_offered_reaches_the_wanted_margin() -> None:
    desk, log = written(STRICT)
    first = desk.session.document
    assert check(desk, "stability", "bus").status != "ok"
    helped(desk, log, "FA")
    assert isinstance(desk.mode, Pick)
    (choice, _), *rest = desk.mode.shown()
    assert not rest
    assert choice.startswith("add ")
    press(desk, "enter")
    found = result_of(desk).stability
    assert found is not None
    assert float(found.margin_db.min()) >= 16.0
    assert f"margin {found.margin_db.min():.1f} dB" in choice
    assert len(desk.session.done) == 1
    assert check(desk, "stability", "bus").status == "ok"
    part = result_of(desk).project.filters[0]
    assert len(part.dm) == 3
    assert part.dm[-1].place == "shunt"
    press(desk, "u")
    assert desk.session.document is first
    press(desk, "U")
    assert len(result_of(desk).project.filters[0].dm) == 3


def test_damping_that_is_there_already_or_out_of_reach_is_told() -> None:
    desk, log = demo("ferry")
    helped(desk, log, "FL1")
    assert "are there already" in desk.message
    desk, log = written(STRICT.replace("stability_margin = 16", "stability_margin = 60"))
    helped(desk, log, "FA")
    assert desk.message == "no branch behind FA reaches 60.0 dB; the trouble is elsewhere"


def test_results_of_before_the_edit_are_marked_in_every_view_that_waits_for_its_part() -> None:
    from itertools import islice

    from budget.session import stages

    session = session_of(SMALL)
    desk = Desk(session, True)
    desk.accept(calculate(session.snapshot()))
    press(desk, "down > s")
    shares = list(islice(stages(session.snapshot()), 4))
    for n, outcome in enumerate(shares):
        desk.accept(outcome)
        for key, from_stage in (("a", 1), ("y", 1), ("Y", 2), ("J", 3)):
            press(desk, key)
            assert desk.view().title.startswith("~ before the edit: ") == (n < from_stage), (key, n)
    assert session.complete


def test_the_sheet_is_not_stale_once_the_operating_points_are_there() -> None:
    from itertools import islice

    from budget.session import stages

    session: Session = session_of(SMALL)
    desk = Desk(session, True)
    desk.accept(calculate(session.snapshot()))
    desk.go_to(("converter", 0, "output", 0, "current"))
    press(desk, "4 enter escape s")
    desk.pending = True
    assert "~" in "\n".join(screen(desk)[2:10])
    desk.accept(next(iter(islice(stages(session.snapshot()), 1))))
    assert session.fresh
    assert not session.complete
    assert "~" not in "\n".join(screen(desk)[2:10])
    assert "~ calculating" in screen(desk)[0]
