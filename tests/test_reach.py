"""Reach: against closed forms, where the margin is not monotonic, and what it says where there is no answer."""

from __future__ import annotations

import math
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from budget.engine.evaluate import Result
from budget.engine.transient import CancelledError
from budget.project import edits, store
from budget.project.document import Document
from budget.project.problems import ProjectError
from budget.report import study, tables
from budget.study.paths import cell_at, resolve, text_of
from budget.study.probe import Probe
from budget.study.reach import TOLERANCE, Reach, Side, reach

DEMO = Path(__file__).parent.parent / "projects" / "heron.toml"


def load(text: str) -> Document:
    return store.parse(text, None, "test").document


def bus(volts: float = 28.0, feed: float = 0.1, rating: float = 5.0, more: str = "", extra: str = "") -> Document:
    """One ideal converter of 1 A at 10 V behind a filter without resistance: it draws 10 W whatever the voltage."""
    return load(
        f"format = 1\n[bus]\nlow = {volts}\nnominal = {volts}\nhigh = {volts}\nresistance = {feed}\n{extra}\n"
        f'[[filter]]\nid = "F"\nrated_current = {rating}\nmax_voltage = 1000\ndm = [{{ series = {{ L = "1 uH" }} }}]\n'
        '[[converter]]\nid = "C"\nfilter = "F"\nrated_power = 1e6\nefficiency = "100 %"\n'
        f"output = [{{ voltage = 10, current = 1 }}]\n{more}\n"
    )


def go(document: Document, text: str, **options: object) -> Reach:
    return reach(document, (), resolve(document, (), text), **options)  # type: ignore[arg-type]


def limit(side: Side) -> float:
    assert side.limit is not None
    return side.limit


def current(power: float, volts: float, feed: float) -> float:
    """The smaller root of (V - R I) I = P (derived)."""
    return (volts - math.sqrt(volts * volts - 4.0 * feed * power)) / (2.0 * feed)


def test_a_load_reaches_the_rating_of_its_filter() -> None:
    """Source: derived. (V - R I) I = P at I = 5 A, and the same by scipy's brentq on the quadratic's root."""
    found = go(bus(), "C.output.0.current")
    wanted = (28.0 - 0.1 * 5.0) * 5.0 / 10.0
    root = brentq(lambda amps: current(10.0 * amps, 28.0, 0.1) - 5.0, 1.0, 100.0)
    assert root == pytest.approx(wanted, rel=1e-9)
    assert limit(found.up) == pytest.approx(wanted, rel=TOLERANCE)
    assert limit(found.up) <= wanted <= found.up.end
    assert found.up.check is not None
    assert (found.up.check.check, found.up.check.subject) == ("filter current", "F")
    assert found.down.limit is None
    assert found.down.end == 0.0


def test_a_wanted_margin_is_reached_sooner() -> None:
    document = bus(extra="[rules]\nfilter_load = 0.8")
    wanted = (28.0 - 0.1 * 4.0) * 4.0 / 10.0
    found = go(document, "C.output.0.current", thin=True)
    assert limit(found.up) == pytest.approx(wanted, rel=TOLERANCE)
    assert found.up.check is not None
    assert found.up.check.status == "thin"


def test_what_is_thin_already_is_watched_for_its_failure() -> None:
    found = go(bus(extra="[rules]\nfilter_load = 0.05"), "C.output.0.current", thin=True)
    assert limit(found.up) == pytest.approx(13.75, rel=TOLERANCE)


def test_the_bus_collapses_where_the_source_can_give_no_more() -> None:
    """Source: derived, P = V^2 / 4 R; the check has no number there, so that only bisection finds it."""
    found = go(bus(feed=1.0, rating=1e6), "C.output.0.current")
    assert limit(found.up) == pytest.approx(28.0**2 / 4.0 / 10.0, rel=TOLERANCE)
    assert found.up.check is not None
    assert found.up.check.check == "operating point"


def test_a_resistance_and_a_voltage_go_down_to_the_lowest_input() -> None:
    """Source: derived, V - R P / U = U at U = 20 V."""
    document = bus(more="min_input = 20")
    found = go(document, "bus.resistance", high=100.0)
    assert limit(found.up) == pytest.approx((28.0 - 20.0) * 20.0 / 10.0, rel=TOLERANCE)
    down = go(document, "bus.low")
    assert limit(down.down) == pytest.approx(20.0 + 0.1 * 10.0 / 20.0, rel=TOLERANCE)
    assert down.up.limit is None
    assert "low <= nominal <= high" in down.up.stop


def test_a_cell_of_zero_has_a_way_up() -> None:
    document = bus(feed=0.0, more='min_input = 20\nlead = { R = 0, L = "1 uH" }')
    found = go(document, "C.lead.R", high=100.0)
    assert limit(found.up) == pytest.approx(16.0, rel=TOLERANCE)
    assert found.down == Side(end=0.0)


def test_a_load_of_a_case_by_power_and_by_share() -> None:
    for load_text, wanted in (('"10 W"', 137.5), ("1.0", 13.75)):
        document = load(store.render(bus()).text + f'\n[[case]]\nid = "climb"\nload = {{ C = {load_text} }}\n')
        assert limit(go(document, "climb.load.C").up) == pytest.approx(wanted, rel=TOLERANCE)


@settings(max_examples=15, deadline=None)
@given(
    volts=st.floats(15.0, 300.0),
    drop=st.floats(0.001, 0.2),
    rating=st.floats(1.0, 50.0),
)
def test_the_closed_form_holds_for_any_bus(volts: float, drop: float, rating: float) -> None:
    feed = drop * volts / rating
    wanted = (volts - feed * rating) * rating / 10.0
    document = bus(round(volts, 3), feed, rating)
    wanted = (round(volts, 3) - feed * rating) * rating / 10.0
    if not 1.01 < wanted < 90.0:
        return
    found = go(document, "C.output.0.current")
    assert limit(found.up) == pytest.approx(wanted, rel=2 * TOLERANCE)


def beating(level: float) -> Document:
    """Two sine ripples, 300 and 400 kHz, and a flat limit that only their sum exceeds."""
    unit = (
        'filter = "F"\nrated_power = 100\nefficiency = 0.9\noutput = [{ voltage = 5, current = 1 }]\n'
        'ripple = { pp = "100 mA", shape = "sine" }\n'
    )
    return load(
        'format = 1\n[rules]\nemissions = ["own"]\nemission_margin = 0\n'
        "[bus]\nlow = 28\nnominal = 28\nhigh = 28\n"
        '[[filter]]\nid = "F"\ndm = [{ series = { L = "1 uH", R = "10 mohm" } }]\n'
        f'[[converter]]\nid = "A"\n{unit}frequency = "400 kHz"\n'
        f'[[converter]]\nid = "B"\n{unit}frequency = "300 kHz"\n'
        f'[[limit]]\nname = "own"\nunit = "dBuA"\nsetup = "cap-10uF"\n'
        f'points = [["100 kHz", {level}], ["10 MHz", {level}]]\n'
        'bandwidth = [["100 kHz", "10 MHz", "9 kHz"]]\n'
    )


def margin(result: Result | str) -> float:
    assert not isinstance(result, str)
    row = next(row for row in result.checks if row.check.startswith("emission"))
    assert row.margin is not None
    return row.margin


def test_a_clock_meets_the_line_of_another() -> None:
    """The margin falls where the two meet and rises again behind; the first turn found is that of a fine scan."""
    alone = margin(Probe(beating(100.0), (), ("dc", "emissions")).at())
    document = beating(100.0 - alone + 3.0)  # 3 dB above the stronger one, 3 dB below the two together
    cell = cell_at(document, (), resolve(document, (), "B.frequency"))
    found = reach(document, (), cell.path, parts=("dc", "emissions"), low=250e3, high=900e3)
    probe = Probe(document, (), ("dc", "emissions"))
    scan = [300e3 + 500.0 * k for k in range(220)]
    first = next(f for f in scan if margin(probe.at((cell, f))) < 0.0)
    assert first - 500.0 <= limit(found.up) <= first
    assert margin(probe.at((cell, limit(found.up)))) >= 0.0
    assert margin(probe.at((cell, found.up.end))) < 0.0
    assert max(p.margin for p in found.curve if p.value > 410e3) > 0.0  # not monotonic: it is free again behind
    assert found.curve[-1].value == 900e3  # the range was given, so the curve covers it


def test_a_dip_between_two_points_is_searched(monkeypatch: pytest.MonkeyPatch) -> None:
    """A coil that brings the filter to resonance with the ripple: far fewer points than the dip is wide."""
    text = store.render(beating(100.0)).text
    shunt = '[{ series = { L = "1 uH", R = "30 mohm" } }, { shunt = { C = "1 uF", R = "200 mohm" } }]'
    text = text.replace('[{ series = { L = "1 uH", R = "10 mohm" } }]', shunt).replace('"300 kHz"', '"390 kHz"')
    document = load(text)
    cell = cell_at(document, (), resolve(document, (), "F.dm.0.L"))
    probe = Probe(document, (), ("dc", "emissions"))
    values = [1e-8 * 1.05**k for k in range(140)]
    margins = [margin(probe.at((cell, v))) for v in values]
    k = min(range(len(values)), key=margins.__getitem__)
    assert 0 < k < len(values) - 1
    assert margins[0] > margins[k] < margins[-1]
    start = edits.enter(document, (), cell.path, repr(values[0]))
    options = {"parts": ("dc", "emissions"), "high": values[-1], "points": 7}
    with monkeypatch.context() as without:
        without.setattr("budget.study.reach._DIP", 0)
        grid = reach(start, (), cell.path, **options)  # type: ignore[arg-type]
    seen = min(margin(probe.at((cell, p.value))) for p in grid.curve)
    assert seen > margins[k] + 0.2
    level = 100.0 - (0.3 * seen + 0.7 * margins[k])  # between what the grid shows and the bottom of the dip
    text = store.render(start).text.replace("100.0]", f"{level}]")
    found = reach(load(text), (), cell.path, **options)  # type: ignore[arg-type]
    probe = Probe(load(text), (), ("dc", "emissions"))
    assert all(margin(probe.at((cell, p.value))) >= 0.0 for p in grid.curve)
    assert margin(probe.at((cell, limit(found.up)))) >= 0.0 > margin(probe.at((cell, found.up.end)))
    assert found.up.end == pytest.approx(limit(found.up), rel=2 * TOLERANCE)


def test_a_check_that_fails_already_is_left_aside_and_named() -> None:
    found = go(bus(rating=0.1, more="min_input = 20"), "bus.resistance", high=100.0)
    assert [(row.check, row.subject) for row in found.failing] == [("filter current", "F")]
    assert limit(found.up) == pytest.approx(16.0, rel=TOLERANCE)
    assert "left aside" in study.reach_text(found)


def test_converters_in_step_cannot_leave_each_other() -> None:
    unit = 'rated_power = 10\nefficiency = 0.9\noutput = [{ voltage = 5, current = 1 }]\nclock = "k"\n'
    document = load(
        "format = 1\n[bus]\nlow = 28\nnominal = 28\nhigh = 28\n"
        f'[[converter]]\nid = "A"\n{unit}frequency = "400 kHz"\n[[converter]]\nid = "B"\n{unit}frequency = "400 kHz"\n'
    )
    found = go(document, "A.frequency")
    assert "same clock" in found.up.stop
    assert "same clock" in found.down.stop


@pytest.mark.parametrize(
    ("text", "options", "words"),
    [
        ("bus.resistance", {"low": 2.0, "high": 1.0}, "ends are exchanged"),
        ("bus.resistance", {"low": 1.0}, "above the present value"),
        ("bus.resistance", {"high": 0.01}, "below the present value"),
        ("bus.resistance", {"high": math.inf}, "no number"),
        ("bus.resistance", {"parts": ("dc", "magic")}, "the parts are"),
        ("bus.name", {}, "holds a text"),
        ("C.filter", {}, "holds a text"),
        ("C.output", {}, "several cells"),
        ("bus.rating", {}, "not entered"),
        ("C.output.3.current", {}, "it has: 0"),
        ("Z.growth", {}, "starts with one of"),
        ("C.grwth", {}, "it has: id, name"),
        ("C", {}, "one of these was expected behind it"),
        ("bus..low", {}, "is no path"),
        ("", {}, "is no path"),
        ("bus.low.x", {}, "one cell"),
    ],
)
def test_what_cannot_be_is_said_in_a_sentence(text: str, options: dict[str, object], words: str) -> None:
    with pytest.raises(ProjectError, match=words) as caught:
        go(bus(), text, **options)
    assert str(caught.value).endswith(".")


def test_a_load_that_is_off_is_no_number() -> None:
    document = load(store.render(bus()).text + '\n[[case]]\nid = "climb"\nload = { C = "off" }\n')
    with pytest.raises(ProjectError, match="switched off"):
        go(document, "climb.load.C")


def test_it_stops_when_told_and_says_how_far_it_is() -> None:
    told: list[float] = []
    go(bus(), "C.output.0.current", progress=told.append)
    assert told == sorted(told)
    assert told[-1] == 1.0
    calls = iter(range(100))
    with pytest.raises(CancelledError):
        go(bus(), "C.output.0.current", cancelled=lambda: next(calls) > 3)


def test_every_number_of_the_demo_has_a_path_that_leads_back() -> None:
    loaded = store.load(DEMO)

    def walk(path: tuple[str | int, ...], value: object) -> list[tuple[str | int, ...]]:
        if isinstance(value, dict):
            return [p for k, v in value.items() for p in walk((*path, k), v)]
        if isinstance(value, list):
            return [p for k, v in enumerate(value) for p in walk((*path, k), v)]
        return [edits.cell_of(path)]

    tables_of = {k: v for k, v in loaded.document.data.items() if k not in ("format", "shelf_files", "shelf")}
    paths = [p for p in walk((), tables_of) if edits.spec_at(p) is not None and not isinstance(p[-1], int)]
    assert len(paths) > 100
    for path in paths:
        assert resolve(loaded.document, loaded.shelves, text_of(loaded.document, path)) == path
    lent = resolve(loaded.document, loaded.shelves, "FL2.dm.0.L")  # stands on the shelf
    assert cell_at(loaded.document, loaded.shelves, lent).value == pytest.approx(4.7e-6)


def test_names_that_mean_two_things() -> None:
    row = "rated_power = 10\nefficiency = [[0.5, 0.8], [1, 0.9]]\noutput = [{ voltage = 5, current = 1 }]\n"
    document = load(
        "format = 1\n[bus]\nlow = 28\nnominal = 28\nhigh = 28\n"
        f'[[converter]]\nid = "bus"\n{row}[[converter]]\nid = "a.b"\n{row}[[converter]]\nid = "x"\n{row}'
        '[[case]]\nid = "x"\nduration = 5\n'
    )
    for path in (
        ("bus", "low"),
        ("converter", 0, "rated_power"),
        ("converter", 1, "rated_power"),
        ("converter", 2, "efficiency", 1, 0),
        ("case", 0, "duration"),
        ("case", 0, "load", "a.b"),
    ):
        assert resolve(document, (), text_of(document, path)) == path
    assert text_of(document, ("converter", 1, "rated_power")) == '"a.b".rated_power'
    assert text_of(document, ("converter", 2, "efficiency", 1, 0)) == "x.efficiency.1.share"
    assert resolve(document, (), "converter.#2.rated_power") == ("converter", 1, "rated_power")


def test_the_report_says_both_ways_and_is_plain_data() -> None:
    found = go(bus(), "C.output.0.current")
    text = study.reach_text(found)
    assert "no limit down to 0 A" in text
    assert "beyond, F filter current fails (full, low line)" in text
    data = study.reach_json(found)
    tables.dumps(data)
    assert data["up"]["limit"] == pytest.approx(13.75, rel=TOLERANCE)
    assert data["path"] == "C.output.0.current"
