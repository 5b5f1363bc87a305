"""The views of emissions and filters: their numbers are those of the engine, and every choice changes what it says."""

from __future__ import annotations

import csv
import itertools
import math
from collections.abc import Iterator

import numpy as np
import pytest

from budget.engine.damping import best_damping, damping_branches
from budget.engine.emission import levels
from budget.engine.evaluate import Result
from budget.engine.inspection import bare_levels
from budget.engine.lines import Lines
from budget.engine.model import LINES
from budget.engine.plan import Meeting, meetings
from budget.engine.plan import scan as scan_of
from budget.engine.response import Feed
from budget.project.problems import ProjectError
from budget.ui import spectrum
from budget.ui.desk import Desk, Edit, Pick
from budget.ui.plot import Trace
from budget.ui.sheet import BOTH, CM, DM
from budget.ui.studies import frequency_range
from budget.ui.view import Row
from tests.screen.driving import SMALL, demo, press, screen, session_of, shown, small, typed, written

SHARED = SMALL.replace('frequency = "280 kHz"', 'frequency = "300 kHz"\nclock = "sync"').replace(
    'frequency = "300 kHz"\nchop', 'frequency = "300 kHz"\nclock = "sync"\nchop'
)
CLOSE = SMALL.replace('frequency = "280 kHz"', 'frequency = "296 kHz"\nfrequency_tolerance = "2 %"')
NO_LIMIT = SMALL.replace('emissions = ["CE102", "own"]\n', "emissions = []\n")
NO_ROOM = SMALL.replace(
    'duty = "40 %", rise = "30 ns", fall = "30 ns" }\ncm', 'duty = "0.1 %", rise = "300 ns", fall = "300 ns" }\ncm'
)
DAMPED = SMALL.replace(
    '{ shunt = { C = "22 uF", R = "500 mohm" } }]',
    '{ shunt = { C = "4.7 uF", R = "5 mohm" } }, { shunt = { C = "22 uF", R = "500 mohm" } }]',
)


def result_of(desk: Desk) -> Result:
    result = desk.session.result
    assert result is not None
    return result


def rows(desk: Desk, head: str = "") -> list[Row]:
    return [row for _, row in desk.lines() if row is not None and (not head or row.key[0] == head)]


def texts(row: Row) -> list[str]:
    return [cell.text for cell in row.cells]


def trace(desk: Desk, name: str) -> Trace:
    plot = desk.view().plot
    assert plot is not None
    return next(t for t in plot.traces if t.name == name)


def to_filter(desk: Desk, number: int) -> None:
    desk.subject = ("filter", number)
    desk.view_name = "response"


def frequency(lines: Lines) -> list[float]:
    found: list[float] = lines.frequency.tolist()
    return found


# -- the spectrum


def test_the_lines_stand_from_worst_to_best_and_are_all_there() -> None:
    desk = small()
    press(desk, "a")
    table = spectrum.table(desk.context())
    assert [e["margin"] for e in table] == sorted(e["margin"] for e in table)
    assert [float(texts(row)[2]) for row in rows(desk)] == [round(e["margin"], 1) for e in table]
    found = spectrum.shown(desk.context())
    assert found is not None
    level = spectrum.decibels(levels(found[0].project, found[0].operating, found[1], [found[2]]).level[0])
    assert len(table) == sum(dB > -400.0 for dB in level)  # at half the duty every other harmonic is none


def test_the_summary_is_the_reading_of_the_receiver() -> None:
    for desk in (small(), demo("heron")[0]):
        press(desk, "a")
        emissions = result_of(desk).emissions
        assert emissions is not None
        worst = min((row for row in emissions.rows if row.limit == "CE102"), key=lambda row: row.margin or 0.0)
        assert worst.margin_rss is not None
        assert (
            f"margin {worst.margin_arithmetic:.1f} dB if peaks align, {worst.margin_rss:.1f} dB" in desk.view().summary
        )
        assert f"{worst.level:.1f} of {worst.limit_level:.1f} dBuV" in desk.view().summary
        assert f"{worst.contributors[0].clock} n=1 {worst.contributors[0].level:.1f}" in desk.view().summary
        assert desk.view().title == f"CE102 in {worst.case}, {worst.line} line"
        low = worst.margin_arithmetic if result_of(desk).project.rules.combine == "arithmetic" else worst.margin_rss
        assert worst.margin == low


def test_a_chosen_corner_is_shown_and_then_the_worst_again() -> None:
    desk = small()
    press(desk, "a")
    worst = desk.view().title
    for n, (case, line) in enumerate(itertools.product(("rest", "run"), LINES)):
        press(desk, "o home" + " down" * (n + 1) + " enter")
        assert desk.view_name == "spectrum"
        assert desk.view().title == f"CE102 in {case}, {line} line"
        emissions = result_of(desk).emissions
        assert emissions is not None
        row = next(r for r in emissions.rows if (r.limit, r.case, r.line) == ("CE102", case, line))
        assert f"{row.level:.1f} of " in desk.view().summary
    press(desk, "O")
    assert desk.view().title == worst


def test_the_cursor_walks_along_the_lines_and_is_seen_in_the_picture() -> None:
    desk = small()
    press(desk, "a")
    columns = []
    for entry in spectrum.table(desk.context())[:6]:
        row, cell = desk.here()
        assert row is not None
        assert row.mark == (entry["frequency"], entry["level"])
        assert f"{entry['level']:.1f} dBuV against {entry['limit']:.1f}" in cell.info
        picture = screen(desk)[1:12]
        columns.append(max(range(80), key=lambda k: sum(line[k] == ":" for line in picture)))
        press(desk, "down")
    assert columns[:4] == [43, 50, 43, 54]  # 300, 600, 300 and 900 kHz


def test_the_mode_goes_through_both_dm_and_cm() -> None:
    desk = small()
    press(desk, "a")
    for mode, word in ((BOTH, ""), (DM, "DM only"), (CM, "CM only"), (BOTH, "")):
        assert desk.options.mode == mode
        assert desk.view().title.endswith(word or "line")
        for entry in spectrum.table(desk.context()):
            wanted = {BOTH: entry["level"], DM: entry["dm"], CM: entry["cm"]}[mode]
            assert entry["level"] == wanted
            if mode == BOTH:  # the two modes add on each line's own way to the receiver
                assert max(entry["dm"], entry["cm"]) - 0.01 <= entry["level"] <= max(entry["dm"], entry["cm"]) + 6.03
        press(desk, "A")


def test_the_unfiltered_level_stands_beside_it() -> None:
    desk = small()
    press(desk, "a")
    before = {(e["clock"], e["order"]): e["level"] for e in spectrum.table(desk.context())}
    assert "bare" not in shown(desk)
    press(desk, "B")
    assert "bare" in shown(desk)
    found = spectrum.shown(desk.context())
    assert found is not None
    wanted = spectrum.decibels(bare_levels(found[0].project, found[0].operating, found[1], found[2]))
    table = spectrum.table(desk.context())
    clocks, orders = found[1].clock.tolist(), found[1].order.tolist()
    known = {
        (found[1].clocks[c].name, n, f): bare
        for c, n, f, bare in zip(clocks, orders, frequency(found[1]), wanted, strict=True)
    }
    for e in table:
        assert e["bare"] == known[e["clock"], e["order"], e["frequency"]]
    assert {(e["clock"], e["order"]): e["level"] for e in table} == before
    assert all(e["bare"] > e["level"] for e in table if e["clock"] == "C1")
    assert f"unfiltered {table[0]['bare']:.1f}" in desk.here()[1].info
    press(desk, "B")
    assert "bare" not in shown(desk)


def test_j_goes_through_the_limit_sets() -> None:
    desk = small()
    press(desk, "a")
    names = []
    for _ in range(3):
        names.append(desk.view().title.split()[0])
        press(desk, "j")
    assert names == ["CE102", "own", "CE102"]
    desk, _ = written(SMALL.replace('["CE102", "own"]', '["own"]'))
    press(desk, "a j")
    assert "no other limit set" in desk.message


def test_the_csv_is_the_table() -> None:
    desk = small()
    press(desk, "a B")
    table = spectrum.table(desk.context())
    read = list(csv.DictReader(spectrum.csv_lines(desk.context()).splitlines()))
    assert len(read) == len(table)
    for line, entry in zip(read, table, strict=True):
        assert (line["clock"], line["converters"], int(line["order"])) == (
            entry["clock"],
            entry["converters"],
            entry["order"],
        )
        for key in ("frequency", "low", "high", "level", "dm", "cm", "bare", "limit", "margin"):
            assert (float(line[key]) if line[key] else -math.inf) == entry[key]


def test_converters_on_one_clock_are_one_set_of_lines() -> None:
    desk, _ = written(SHARED)
    press(desk, "a")
    table = spectrum.table(desk.context())
    assert {(e["clock"], e["converters"]) for e in table} == {("sync", "C1, C2"), ("C3", "C3")}
    assert len({e["order"] for e in table if e["clock"] == "sync"}) == sum(e["clock"] == "sync" for e in table)
    assert "a sync n=1" in shown(desk)


def test_a_tolerance_is_told_with_its_ends() -> None:
    desk, _ = written(CLOSE)
    press(desk, "a")
    row = next(row for row in rows(desk) if row.key[1:3] == ("C2", 1))
    assert "anywhere from 290.1 kHz to 301.9 kHz" in row.cells[0].info


def test_without_a_limit_set_it_says_what_to_do() -> None:
    desk, _ = written(NO_LIMIT)
    for key in "ay":
        press(desk, key)
        assert "no limit set is chosen: name one in the rules (r), emissions, such as CE102" in shown(desk)
    press(desk, "M")
    assert "rules (r), emissions" in desk.message
    press(desk, "a E")
    assert "nothing to write" in desk.message
    assert desk.mode is None


@pytest.mark.parametrize("key", list("ayzJY"))
def test_before_the_first_results_every_view_says_that_it_calculates(key: str) -> None:
    desk = Desk(session_of(SMALL), True)
    press(desk, f"down {key}")
    assert "~ calculating" in "\n".join(screen(desk)[1:])


def test_a_limit_quoted_from_memory_says_so() -> None:
    desk, _ = demo("ferry")
    press(desk, "a")
    emissions = result_of(desk).emissions
    assert emissions is not None
    told = set()
    for lines in emissions.spectra:
        assert ("(from memory)" in desk.view().summary) == (lines.limit.basis == "memory")
        told.add(lines.limit.basis)
        press(desk, "j")
    assert told


def test_a_duty_without_room_for_its_edges_is_told() -> None:
    desk, _ = written(NO_ROOM)
    press(desk, "a")
    emissions = result_of(desk).emissions
    assert emissions is not None
    assert any(row.failures for row in emissions.rows)
    press(desk, "o home" + " down" * 4 + " enter")
    assert desk.view().summary == "FAIL: C1: no room for the edges"
    assert "FAIL: C1: no room for the edges" in shown(desk)


def test_a_case_in_which_nothing_switches_has_no_lines() -> None:
    desk, _ = written(SMALL.replace('C1 = "50 %", C2 = "off", C3 = "5 W"', 'C1 = "off", C2 = "off", C3 = "off"'))
    press(desk, "a o home down enter")
    assert "in rest" in desk.view().title
    assert spectrum.table(desk.context()) == []
    assert "no line" in shown(desk)


def test_what_rounding_left_of_nothing_is_not_shown_as_a_level() -> None:
    desk, _ = demo("heron")
    press(desk, "a")
    numbers = [float(t) for row in rows(desk) for t in texts(row)[3:7] if t]
    assert min(numbers) >= -100.0


# -- the frequency plan


def brute(lines: Lines) -> list[Meeting]:
    """Meetings pair by pair of lines, as the words of ``Meeting`` say."""
    first, last = lines.limit.points[0][0], lines.limit.points[-1][0]
    start = np.maximum(lines.low - lines.bandwidth / 2, first)
    end = np.minimum(lines.high + lines.bandwidth / 2, last)
    found: dict[tuple[int, int], list[tuple[int, int]]] = {}
    for i in range(lines.frequency.size):
        for j in range(lines.frequency.size):
            pair = (int(lines.clock[i]), int(lines.clock[j]))
            if pair[0] < pair[1] and max(start[i], start[j]) <= min(end[i], end[j]):
                found.setdefault(pair, []).append((i, j))
    out = []
    for pair, met in sorted(found.items()):
        i, j = met[0]
        names = (lines.clocks[pair[0]].name, lines.clocks[pair[1]].name)
        orders = (int(lines.order[i]), int(lines.order[j]))
        out.append(Meeting(names, orders, max(start[i], start[j]), min(end[i], end[j]), len(met)))
    return out


@pytest.mark.parametrize("text", [SMALL, SHARED, CLOSE], ids=["small", "shared", "close"])
def test_the_meetings_are_those_of_a_comparison_of_all_pairs(text: str) -> None:
    desk, _ = written(text)
    press(desk, "y")
    for _ in range(2):
        found = spectrum.shown(desk.context())
        assert found is not None
        wanted = brute(found[1])
        assert list(meetings(found[1])) == wanted
        table = rows(desk, "meet")
        if wanted:
            assert [(r.key[1:], texts(r)[1], texts(r)[4]) for r in table] == [
                (m.clocks, f"{m.orders[0]}, {m.orders[1]}", str(m.count)) for m in wanted
            ]
        else:
            assert texts(table[0]) == ["none"]
        press(desk, "j")


def test_beats_are_those_of_the_engine() -> None:
    desk, _ = written(CLOSE)
    press(desk, "y")
    emissions = result_of(desk).emissions
    assert emissions is not None
    assert [row.key[1:] for row in rows(desk, "beat")] == [(*b.clocks, *b.orders) for b in emissions.beats]
    assert texts(rows(desk, "beat")[0])[:4] == ["C1 and C2", "1, 1", "0 Hz", "9.92 kHz"]
    press(desk, "down down")
    assert "a notice, not a level" in desk.here()[1].info or "pairs of lines" in desk.here()[1].info
    desk = small()
    press(desk, "y")
    assert "none falls below 20 kHz or a control bandwidth" in shown(desk)


def choose(desk: Desk, name: str, text: str) -> None:
    """M, a clock, and a range typed in place of the one offered."""
    press(desk, "M")
    assert isinstance(desk.mode, Pick)
    assert [item for item, _ in desk.mode.shown()] == ["C1", "C2"]
    typed(desk, name)
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert desk.mode.label == f"move {name} over, from - to"
    if text:
        press(desk, "ctrl+u")
        typed(desk, text)
    press(desk, "enter")


def test_a_clock_is_moved_and_its_best_place_named() -> None:
    desk, log = written(CLOSE)
    press(desk, "y")
    choose(desk, "C2", "")
    assert log.jobs == ["moving C2"]
    assert log.shares[-1] == 1.0
    result = result_of(desk)
    wanted = scan_of(result.project, result.operating, "C2", 222e3, 370e3, 61)
    assert wanted is not None
    assert desk.options.scan == wanted
    assert desk.view_name == "plan"
    assert wanted.best is not None
    assert max(m for m in wanted.margin if m == m) == pytest.approx(wanted.best_margin or 0.0, abs=0.05)
    assert f"with a margin of {wanted.best_margin:.1f} dB; now 296 kHz with " in desk.view().summary
    assert trace(desk, "best").x == [wanted.best]
    assert trace(desk, "now").x == [296e3]
    assert len(trace(desk, "C2").x) == 62
    assert "X" in shown(desk)


def test_the_ends_of_a_range_may_be_exchanged() -> None:
    desk, _ = written(CLOSE)
    press(desk, "y")
    choose(desk, "C2", "400 kHz to 250 kHz")
    assert desk.options.scan.frequency[0] == pytest.approx(250e3)
    assert desk.options.scan.frequency[-1] == pytest.approx(400e3)
    assert frequency_range("400 kHz to 250 kHz") == frequency_range("250 kHz to 400 kHz") == (250e3, 400e3)


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("", "two frequencies were expected"),
        ("300 kHz", "two frequencies were expected"),
        ("a to b", "'a' is not a quantity"),
        ("3 V to 5 V", "V"),
        ("0 Hz to 5 kHz", "1 Hz to 1 GHz"),
        ("5 kHz to 5 kHz", "1 Hz to 1 GHz"),
        ("5 kHz to 5 GHz", "1 Hz to 1 GHz"),
        ("-5 kHz to 5 kHz", "1 Hz to 1 GHz"),
    ],
)
def test_a_range_that_is_none_is_refused_with_the_text_kept(text: str, told: str) -> None:
    with pytest.raises(ProjectError, match=told):
        frequency_range(text)
    desk = small()
    press(desk, "y M enter ctrl+u")
    typed(desk, text)
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert told in desk.mode.error
    assert desk.mode.text == text


# -- the filter over frequency


def test_the_filter_of_a_row_or_of_a_converter_behind_it() -> None:
    desk = small()
    press(desk, "z")
    assert "no filter here" in shown(desk)
    press(desk, "escape down z")
    assert desk.view().title == "FA ladders, differential mode"
    press(desk, "escape down z")
    assert desk.view().title == "FA ladders, differential mode"


def test_differential_and_common_mode_are_exchanged() -> None:
    desk = small()
    to_filter(desk, 0)
    assert {t.name for t in (desk.view().plot or pytest.fail("no picture")).traces} == {
        "in 50 ohm",
        "in the set-up",
        "output impedance",
    }
    one = list(trace(desk, "in 50 ohm").y)
    press(desk, "A")
    assert desk.view().title == "FA ladders, common mode"
    assert {t.name for t in (desk.view().plot or pytest.fail("no picture")).traces} == {"in 50 ohm", "in the set-up"}
    assert list(trace(desk, "in 50 ohm").y) != one
    press(desk, "A")
    assert list(trace(desk, "in 50 ohm").y) == one


def test_the_loss_of_a_capacitor_in_50_ohm_is_that_of_the_book() -> None:
    # derived: a shunt C between 50 ohm and 50 ohm has the loss 10 log10(1 + (w C 25 ohm)^2)
    text = SMALL.replace(
        'dm = [{ series = { L = "4.7 uH", R = "8 mohm" } }, { shunt = { C = "22 uF", R = "500 mohm" } }]',
        'dm = [{ shunt = { C = "1 uF" } }]',
    )
    desk, _ = written(text)
    to_filter(desk, 0)
    found = trace(desk, "in 50 ohm")
    for f, loss in list(zip(found.x, found.y, strict=True))[::100]:
        assert loss == pytest.approx(10 * math.log10(1 + (2 * math.pi * f * 1e-6 * 25) ** 2), abs=1e-6)


def test_a_filter_given_as_a_table_shows_the_table() -> None:
    desk = small()
    to_filter(desk, 2)
    assert [texts(row) for row in rows(desk)] == [
        ["100 kHz", "40.0 dB", "30.0 dB"],
        ["10 MHz", "60.0 dB", "50.0 dB"],
    ]
    assert (trace(desk, "DM").y, trace(desk, "CM").y) == ([40.0, 60.0], [30.0, 50.0])
    assert "a table has no impedance" in shown(desk)


def test_a_filter_without_elements_loses_nothing() -> None:
    import re

    text = re.sub(r'(id = "FA"\n(?:.*\n){3})dm = .*\ncm = .*\n', r"\1dm = []\ncm = []\n", SMALL)
    desk, _ = written(text)
    to_filter(desk, 0)
    assert "FA" in desk.view().title
    for _ in range(2):
        assert max(abs(y) for y in trace(desk, "in 50 ohm").y) < 1e-9
        assert len(screen(desk)) == 24
        press(desk, "A")


def damped() -> Iterator[tuple[Desk, int]]:
    desk, _ = written(DAMPED)
    yield desk, 0
    heron, _ = demo("heron")
    for k, _ in enumerate(result_of(heron).project.filters):
        yield heron, k


def test_the_damping_is_that_of_the_engine() -> None:
    count = 0
    for desk, k in damped():
        to_filter(desk, k)
        project = result_of(desk).project
        feed = Feed(project.bus.resistance, project.bus.inductance)
        ladder = project.filters[k].dm
        branches = damping_branches(ladder)
        table = rows(desk, "damping")
        assert len(table) == len(branches)
        for row, damper in zip(table, branches, strict=True):
            best = best_damping(ladder, damper.index, feed)
            name, entered, resistance, _, _, how = texts(row)
            assert name == f"element {damper.index + 1}, {damper.kind}"
            assert entered == ("none" if best.entered is None else _ohm(best.entered))
            assert resistance == ("none" if best.resistance is None else _ohm(best.resistance))
            assert how == best.method
            assert "lowest peak" in row.cells[0].info
            count += 1
    assert count


def _ohm(value: float) -> str:
    from budget import quantity

    return quantity.show(value, quantity.KINDS["resistance"])
