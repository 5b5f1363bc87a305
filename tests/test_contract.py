"""Whole projects through ``budget check --format json`` against results that were worked out without the engine.

Each project is chosen so that a closed form or a few lines of scipy give the answer. Figures that are written down here
come from an outside integration (scipy Radau, relative tolerance 1e-7, own event logic) of the same project: derived.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from budget.cli import run

Check = Callable[..., tuple[int, dict[str, Any]]]

BUS = """format = 1
[rules]
emissions = ["own"]
{rules}
[bus]
low = {low}
nominal = 28
high = 28
{bus}
[[filter]]
id = "F1"
{filter}
[[limit]]
name = "own"
unit = "{unit}"
setup = "cap-10uF"
points = {points}
bandwidth = {bandwidth}
"""


@pytest.fixture
def check(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> Check:
    """Writes a project and checks it: exit status and the JSON."""

    def call(text: str, *arguments: str) -> tuple[int, dict[str, Any]]:
        path = tmp_path / "project.toml"
        path.write_text(text)
        status = run(["check", str(path), "--format", "json", *arguments])
        out, err = capsys.readouterr()
        assert out, err
        return status, json.loads(out)

    return call


def project(
    *converters: str,
    rules: str = "",
    low: float = 28,
    bus: str = "",
    filter: str = "dm = []\ncm = []",
    points: str = '[["1 kHz", 0], ["100 MHz", 0]]',
    bandwidth: str = '[["1 Hz", "1 GHz", "1 kHz"]]',
    unit: str = "dBuA",
) -> str:
    """A bus with one filter, by default a direct connection: then the whole noise current is in the line."""
    head = BUS.format(rules=rules, low=low, bus=bus, filter=filter, points=points, bandwidth=bandwidth, unit=unit)
    return head + "\n".join(converters)


def converter(name: str, text: str, filter: str = "F1") -> str:
    return (
        f'[[converter]]\nid = "{name}"\nfilter = "{filter}"\nrated_power = 40\nmin_input = 12\n'
        f"output = [{{ voltage = 12, current = 2 }}]\nefficiency = 0.8\n{text}\n"
    )


def emission(result: dict[str, Any], line: str = "low", case: str | None = None) -> dict[str, Any]:
    rows = [e for e in result["emissions"] if e["line"] == line and case in (None, e["case"])]
    assert len(rows) == 1
    row: dict[str, Any] = rows[0]
    return row


def row(result: dict[str, Any], check: str, subject: str) -> dict[str, Any]:
    (found,) = [c for c in result["checks"] if c["check"] == check and c["subject"] == subject]
    one: dict[str, Any] = found
    return one


def amps(level: float) -> float:
    return float(1e-6 * 10 ** (level / 20))


def dB(value: float) -> float:  # noqa: N802
    return 20 * math.log10(value / 1e-6)


def harmonic(points: list[tuple[float, float]], period: float, n: int) -> complex:
    """r.m.s. phasor of a polygon by Gauss-Legendre quadrature of the definition of c_n."""
    x, weight = np.polynomial.legendre.leggauss(40)
    total = 0j
    for (t0, y0), (t1, y1) in pairwise(points):
        t = 0.5 * (t0 + t1) + 0.5 * (t1 - t0) * x
        y = 0.5 * (y0 + y1) + 0.5 * (y1 - y0) * x
        total += 0.5 * (t1 - t0) * complex(np.sum(weight * y * np.exp(-2j * np.pi * n * t / period)))
    return math.sqrt(2) * total / period


def pulse(duty: float, rise: float, fall: float, ripple: float, period: float) -> list[tuple[float, float]]:
    on = rise / 2 + duty * period
    top = [(rise, 1 - ripple / 2), (on - fall / 2, 1 + ripple / 2)]
    return [(0.0, 0.0), *top, (on + fall / 2, 0.0), (period, 0.0)]


def mean(points: list[tuple[float, float]], period: float) -> float:
    pairs = pairwise(points)
    return sum((b[0] - a[0]) * (a[1] + b[1]) / 2 for a, b in pairs) / period


# -- operating point: the quadratic of one constant-power load behind one resistance (derived)


def test_operating_point_is_the_upper_solution(check: Check) -> None:
    filter = (
        'dm = [{ series = { R = "60 mohm" } }, { shunt = { C = "1 uF" } }, { series = { R = "20 mohm" } }]\ncm = []'
    )
    unit = converter("C1", 'growth = "10 %"\nlead = { R = "120 mohm" }')
    status, result = check(project(unit, low=20, bus="resistance = 0.3", filter=filter, rules='growth = "50 %"'))
    power, resistance = 24 * 1.1 / 0.8, 0.5
    volts = (20 + math.sqrt(20**2 - 4 * resistance * power)) / 2
    (corner,) = [o for o in result["operating"] if o["line"] == "low"]
    current = power / volts
    assert corner["converters"][0]["voltage"] == pytest.approx(volts, rel=1e-10)
    assert corner["bus"]["current"] == pytest.approx(current, rel=1e-10)
    assert corner["bus"]["power"] == pytest.approx((20 - 0.3 * current) * current, rel=1e-10)
    assert corner["filters"][0]["output_voltage"] == pytest.approx(20 - 0.38 * current, rel=1e-10)
    assert corner["filters"][0]["loss"] == pytest.approx(0.08 * current**2, rel=1e-9)
    assert status in (0, 1)


def test_loss_between_points_and_beyond_them(check: Check) -> None:
    text = (
        "[[case]]\nid = 'a'\nload = { C1 = '9 W' }\n[[case]]\nid = 'b'\nload = { C1 = 1 }\n"
        "[[case]]\nid = 'c'\nload = { C1 = 0 }\n[[case]]\nid = 'd'\nload = { C1 = 'off' }\n"
    )
    unit = converter("C1", "idle_power = 2\noff_power = 0.7").replace(
        "efficiency = 0.8", "efficiency = [[0.25, 0.5], [0.5, 0.8]]"
    )
    _, result = check(project(unit) + text)
    drawn = {o["case"]: o["converters"][0]["input_power"] for o in result["operating"] if o["line"] == "low"}
    assert drawn["a"] == pytest.approx(9 + 2 + (10 - 2) * 0.9)
    assert drawn["b"] == pytest.approx(24 / 0.8)  # beyond the data: the efficiency of the last point
    assert drawn["c"] == 2.0
    assert drawn["d"] == 0.7
    assert row(result, "converter load", "C1")["note"]


# -- emissions: behind a direct connection without any capacitor the line carries the noise current itself


@pytest.mark.parametrize("ripple", ["0 %", "40 %", "200 %"])
@pytest.mark.parametrize(("rise", "fall"), [(0.0, 0.0), (2e-7, 5e-8)])
@pytest.mark.parametrize("law", ["constant", "inverse-line", "flyback"])
def test_pulsed_current(check: Check, ripple: str, rise: float, fall: float, law: str) -> None:
    noise = f'duty_law = "{law}"\nfrequency = "200 kHz"\n'
    noise += f'chop = {{ duty = 0.4, rise = {rise}, fall = {fall}, ripple = "{ripple}" }}'
    points = '[["550 kHz", 0], ["650 kHz", 0]]'  # the third harmonic alone
    _, result = check(project(converter("C1", noise), low=21, points=points), "--line", "low")
    k = 28 / 21
    duty = {"constant": 0.4, "inverse-line": 0.4 * k, "flyback": (2 / 3 * k) / (1 + 2 / 3 * k)}[law]
    shape = pulse(duty, rise, fall, float(ripple[:-2]) / 100, 5e-6)
    expected = abs(harmonic(shape, 5e-6, 3)) * (30 / 21) / mean(shape, 5e-6)
    found = emission(result)
    assert found["level"] == pytest.approx(dB(expected), abs=1e-6)
    assert found["frequency"] == pytest.approx(599.5e3)  # a flat limit: the lowest F that sees it
    assert found["contributors"][0]["harmonic"] == 3


def test_one_clock_adds_as_phasors(check: Check) -> None:
    common = 'clock = "k"\nfrequency = "100 kHz"\nripple = { pp = 0.1, shape = "sine" }\nphase = '
    points = '[["90 kHz", 0], ["110 kHz", 0]]'
    opposite = project(converter("C1", common + "20"), converter("C2", common + "200"), points=points)
    quarter = project(converter("C1", common + "20"), converter("C2", common + "110"), points=points)
    one = 0.05 / math.sqrt(2)
    level = emission(check(opposite)[1])["level"]
    assert level is None or level < dB(one) - 200
    assert emission(check(quarter)[1])["level"] == pytest.approx(dB(one * math.sqrt(2)), abs=1e-9)


def test_common_mode_is_half_the_total_current(check: Check) -> None:
    noise = 'frequency = "1 MHz"\n'
    noise += 'cm = { capacitance = "50 pF", swing = 40, rise = 0, fall = "20 ns", duty = 0.3, shunt = "2 nF" }'
    _, result = check(project(converter("C1", noise), points='[["0.9 MHz", 0], ["1.1 MHz", 0]]'))
    w = 2 * math.pi * 1e6
    line = 1 / (2j * w * 10e-6)  # two lines of 10 uF in parallel
    source, shunt = 1 / (1j * w * 50e-12), 1 / (1j * w * 2e-9)
    both = line * shunt / (line + shunt)
    volts = 40 * harmonic(pulse(0.3, 0, 20e-9, 0, 1e-6), 1e-6, 1) * both / (both + source)
    assert emission(result)["level"] == pytest.approx(dB(abs(volts / line) / 2), abs=1e-6)


def test_unrelated_clocks_and_the_edges_of_the_receiver(check: Check) -> None:
    """Two lines a bandwidth apart are seen together at one frequency only: both ends count."""
    lines = [converter(f"C{k}", f"spectrum = [['{f} kHz', {level}]]") for k, f, level in ((1, 100, 60), (2, 101, 50))]
    for combine, total in (("arithmetic", amps(60) + amps(50)), ("rss", math.hypot(amps(60), amps(50)))):
        found = emission(check(project(*lines, rules=f'combine = "{combine}"'))[1])
        assert found["frequency"] == pytest.approx(100.5e3)
        assert found["level"] == pytest.approx(dB(total), abs=1e-9)
        assert found["margin"] == found[f"margin_{combine}"]
        assert [c["clock"] for c in found["contributors"]] == ["C1", "C2"]
    lines[1] = lines[1].replace("101 kHz", "101.001 kHz")
    assert emission(check(project(*lines))[1])["level"] == pytest.approx(60)


def test_a_clock_shows_its_largest_visible_line(check: Check) -> None:
    wide = 'frequency = "50 kHz"\nfrequency_tolerance = "40 %"\nripple = { pp = 0.2 }'  # orders 1 to 3 overlap
    _, result = check(project(converter("C1", wide), points='[["20 kHz", 40], ["90 kHz", 60], ["400 kHz", 0]]'))
    shape = [(0.0, -0.1), (1e-5, 0.1), (2e-5, -0.1)]
    ends, margins = [], []
    for n in range(1, 16, 2):  # a symmetric triangle has odd orders alone
        level = dB(abs(harmonic(shape, 2e-5, n)))
        for f in (n * 30e3 - 500, n * 70e3 + 500, 20e3, 90e3, 400e3):
            if n * 30e3 - 500 <= f <= n * 70e3 + 500 and 20e3 <= f <= 400e3:
                ends.append(f)
                margins.append(float(np.interp(np.log(f), np.log([20e3, 90e3, 400e3]), [40, 60, 0])) - level)
    best = int(np.argmin(margins))
    assert emission(result)["margin"] == pytest.approx(margins[best], abs=1e-6)
    assert emission(result)["frequency"] == pytest.approx(ends[best])


def test_measured_lines_join_their_clock(check: Check) -> None:
    common = 'clock = "k"\nfrequency = "100 kHz"\n'
    noisy = converter("C1", common + 'ripple = { pp = 0.001, shape = "sine" }')
    probed = converter("C2", common + "spectrum = [['96 kHz', 40], ['104 kHz', 44]]")
    found = emission(check(project(noisy, probed))[1])
    assert found["frequency"] == pytest.approx(99.5e3)
    assert found["level"] == pytest.approx(dB(0.0005 / math.sqrt(2) + amps(40) + amps(44)), abs=1e-9)
    alone = emission(check(project(converter("C2", common + "spectrum = [['96 kHz', 40], ['104 kHz', 44]]")))[1])
    assert (alone["frequency"], alone["level"]) == (pytest.approx(103.5e3), pytest.approx(44))


def test_steps_and_gaps(check: Check) -> None:
    """At a step the lower value holds, on whichever side; in a gap between the rows the last bandwidth holds."""
    rows = '[["10 kHz", "90 kHz", 100], ["120 kHz", "130 kHz", "8 kHz"]]'
    for before, after in ((70, 50), (50, 70)):
        points = f'[["50 kHz", 70], ["100 kHz", {before}], ["100 kHz", {after}], ["200 kHz", 100]]'
        unit = converter("C1", "spectrum = [['96 kHz', 40]]")
        found = emission(check(project(unit, points=points, bandwidth=rows))[1])
        assert found["frequency"] == pytest.approx(100e3)
        assert found["margin"] == pytest.approx(10)
    outside = converter("C1", "spectrum = [['45 kHz', 40]]")
    found = emission(check(project(outside, points=points, bandwidth=rows))[1])
    assert (found["margin"], found["frequency"], found["contributors"]) == (None, None, [])


def test_tables_and_isolation(check: Check) -> None:
    table = "resistance = 0\nattenuation = [['10 kHz', 20, 0], ['1 MHz', 60, 0]]\n"
    unit = converter("C1", "spectrum = [['100 kHz', 80]]")
    assert emission(check(project(unit, filter=table))[1])["level"] == pytest.approx(40)
    assert emission(check(project(unit, filter=table + "isolation = 30"))[1])["level"] == pytest.approx(50)
    high = converter("C1", "spectrum = [['5 MHz', 80]]")
    _, result = check(project(high, filter=table))
    assert emission(result)["level"] == pytest.approx(20)
    assert "F1" in row(result, "emission own", "bus")["note"]  # held beyond the end of the table


def test_noise_flows_into_the_neighbours(check: Check) -> None:
    """A capacitor in another, silent converter shares the current with the line, also when that one is off."""
    noisy = converter("C1", "spectrum = [['20 kHz', 80]]")
    silent = converter("C2", "input = [{ shunt = { C = '3 uF', R = 0.2 } }]")
    case = "[[case]]\nid = 'a'\n[[case]]\nid = 'b'\nload = { C2 = 'off' }\n"
    _, result = check(project(noisy, silent, bus="resistance = 0.01") + case)
    w = 2 * math.pi * 20e3
    line, other = 2 / (1j * w * 10e-6), 0.2 + 1 / (1j * w * 3e-6)
    expected = 80 + 20 * math.log10(abs(other / (other + line)))
    for name in "ab":
        assert emission(result, case=name)["level"] == pytest.approx(expected, abs=1e-9)


def test_no_room_for_the_edges_fails_by_name(check: Check) -> None:
    noise = 'duty_law = "inverse-line"\nfrequency = "200 kHz"\nchop = { duty = 0.8, rise = 0, fall = 0 }'
    status, result = check(project(converter("C1", noise), low=20, points='[["100 kHz", 200], ["1 MHz", 200]]'))
    found = row(result, "emission own", "bus")
    assert (status, found["status"], found["line"]) == (1, "fail", "low")
    assert "C1" in found["note"]


# -- stability of one damped section with a constant-power load (the condition of the second-order system, derived)


def test_second_order_stability(check: Check) -> None:
    inductance, capacitance, resistance, esr = 20e-6, 50e-6, 0.08, 0.02
    choke = f"{{ series = {{ L = {inductance}, R = {resistance}, Cp = 1e-9 }} }}"
    capacitor = f"{{ shunt = {{ C = {capacitance}, R = {esr}, L = 1e-8 }} }}"
    filter = f"dm = [{choke}, {capacitor}]\ncm = []"
    _, result = check(project(converter("C1", ""), filter=filter))
    (found,) = [s for s in result["stability"] if s["line"] == "nominal"]
    volts = (28 + math.sqrt(28**2 - 4 * resistance * 30)) / 2
    g = 30 / volts**2

    def polynomial(g: float) -> list[float]:
        # (1 + s C esr)(1 - g (R + s L)) + s C (R + s L) = 0
        return [
            inductance * capacitance * (1 - g * esr),
            capacitance * (resistance + esr - g * esr * resistance) - g * inductance,
            1 - g * resistance,
        ]

    a, b, c = polynomial(g)
    w = math.sqrt(c / a)
    assert found["stable"]
    assert found["frequency"] == pytest.approx(w / (2 * math.pi), rel=1e-6)
    assert found["damping"] == pytest.approx(b / a / (2 * w), rel=1e-6)
    limit = capacitance * (resistance + esr) / (inductance + capacitance * esr * resistance)
    assert found["margin_db"] == pytest.approx(20 * math.log10(limit / g), abs=1e-4)
    s = 2j * np.pi * np.geomspace(10, 1e6, 400_001)
    series, shunt = resistance + s * inductance, esr + 1 / (s * capacitance)
    source = np.abs(series * shunt / (series + shunt)).max()
    assert found["filters"][0]["impedance_db"] == pytest.approx(20 * math.log10(1 / g / source), abs=1e-3)


# -- switch-on and surge


def test_a_saturating_choke_behind_a_lead(check: Check) -> None:
    """One mesh: lead, choke that falls to 5 % of its inductance, damped capacitor (scipy DOP853, derived)."""
    unit = converter(
        "C1",
        'turn_on = 100\nlead = { R = "30 mohm", L = "300 nH" }\n'
        'input = [{ series = { L = "2.2 uH", R = "14 mohm", saturation = 1 } }, { shunt = { C = "20 uF", R = 0.2 } }]',
    )
    _, result = check(project(unit))
    (found,) = [e for e in result["inrush"] if e["event"] == "on-high"]

    def slope(i: float, v: float) -> float:
        choke = 2.2e-6 * max(0.05, 1 / (1 + 3 / 7 * i**2))
        return (28 - v - 0.244 * i) / (0.3e-6 + choke)

    out = solve_ivp(
        lambda _, y: [slope(y[0], y[1]), y[0] / 20e-6], (0, 1e-4), [0, 0], method="DOP853", rtol=1e-9, max_step=1e-7
    )
    current, volts = out.y
    terminal = 28 - 0.03 * current - 0.3e-6 * np.array([slope(i, v) for i, v in zip(current, volts, strict=True)])
    assert found["bus"]["peak"] == pytest.approx(current.max(), rel=5e-3)
    assert found["converters"][0]["peak_voltage"] == pytest.approx(terminal.max(), rel=5e-3)
    assert found["converters"][0]["runs_at"] is None


RESTARTS = """format = 1
[rules]
inrush_window = "5 ms"
[bus]
low = 20
nominal = 28
high = 30
inductance = "10 uH"
resistance = "10 mohm"
surge = 60
surge_time = 0
surge_rise = "0.05 ms"
[[filter]]
id = "F1"
dm = [{ series = { L = "10 uH", R = "20 mohm" } }, { shunt = { C = "47 uF", R = "60 mohm" } }]
cm = []
[[filter]]
id = "F2"
dm = []
[[converter]]
id = "C1"
filter = "F1"
rated_power = 60
output = [{ voltage = 12, current = 2 }]
efficiency = 0.88
turn_on = 19
turn_off = 10
min_input = 16
start_delay = "0.25 ms"
soft_start = "0.3 ms"
lead = { R = "5 mohm" }
input = [{ shunt = { C = "10 uF", R = "50 mohm" } }]
[[converter]]
id = "C2"
filter = "F2"
rated_power = 60
output = [{ voltage = 12, current = 2 }]
efficiency = 0.88
turn_on = 17
min_input = 16
soft_start = "0.5 ms"
lead = { R = "5 mohm", L = "500 nH" }
input = [{ shunt = { C = "10 uF", R = "50 mohm" } }]
"""


def test_trips_and_counts_that_restart(check: Check) -> None:
    """A ringing bus: C2 trips three times and starts a fourth; C1's count restarts at every dip below turn_on."""
    _, result = check(RESTARTS)
    runs = {e["event"]: {c["id"]: c["runs_at"] for c in e["converters"]} for e in result["inrush"]}
    expected = {
        "on-low": {"C1": 2.007e-3, "C2": 0.464e-3},
        "on-high": {"C1": 0.709e-3, "C2": 0.012e-3},
        "surge": {"C1": 1.129e-3, "C2": 0.235e-3},
    }
    for event, times in expected.items():
        assert runs[event] == {k: pytest.approx(t, rel=5e-3, abs=1e-6) for k, t in times.items()}


# -- the shape of the result


def test_what_has_no_value_is_null(check: Check) -> None:
    lost = converter("C1", "spectrum = [['100 kHz', 80]]").replace('filter = "F1"', 'filter = ""')
    status, result = check(project(lost))
    assert status == 1
    assert row(result, "allocation", "C1")["status"] == "fail"
    assert row(result, "converter load", "C1")["status"] == "no data"
    assert row(result, "emission own", "bus")["status"] == "no data"
    text = json.dumps(result)
    assert "NaN" not in text
    assert "Infinity" not in text


def test_a_bus_that_cannot_carry_the_case(check: Check) -> None:
    case = "[[case]]\nid = 'a'\nduration = 3600\n[[case]]\nid = 'b'\nload = { C1 = '2 kW' }\nduration = 60\n"
    status, result = check(project(converter("C1", ""), bus="resistance = 0.2") + case, "--dc")
    assert status == 1
    assert {(o["case"], o["solved"]) for o in result["operating"]} == {("a", True), ("b", False)}
    assert all(set(o) == {"case", "line", "solved"} for o in result["operating"] if o["case"] == "b")
    found = row(result, "operating point", "bus")
    assert (found["status"], found["case"]) == ("fail", "b")
    (energy,) = [e for e in result["energy"] if e["case"] == "a"]
    current = 30 / ((28 + math.sqrt(28**2 - 4 * 0.2 * 30)) / 2)
    assert energy["energy_wh"] == pytest.approx(28 * current)
    assert energy["charge_ah"] == pytest.approx(current)


def test_exit_status_of_strict(check: Check) -> None:
    filter = "dm = []\ncm = []\nrated_current = 1.2\nmax_voltage = 40"
    text = project(converter("C1", ""), filter=filter, rules='filter_load = "80 %"')
    text = text.replace('emissions = ["own"]', "emissions = []")
    assert check(text)[0] == 0
    status, result = check(text, "--strict")
    found = row(result, "filter current", "F1")
    assert (status, found["status"]) == (1, "thin")
    assert found["margin"] == pytest.approx(1 - 30 / 28 / 1.2)
    assert found["wanted"] == pytest.approx(0.96)
