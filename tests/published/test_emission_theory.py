"""Waveforms, networks and combination against published figures; beside each stands its source."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from budget.engine import waveform
from budget.engine.emission import levels
from budget.engine.lines import lines_of
from budget.engine.model import (
    Branch,
    Bus,
    Case,
    Chop,
    CommonMode,
    Converter,
    Filter,
    LimitLine,
    Output,
    Project,
    Ripple,
)
from budget.engine.network import Job, transfers
from budget.engine.operating import operating_points
from budget.engine.receiver import bandwidth_at, decibel, limit_at, line_impedance
from budget.engine.sweep import plan, worst
from budget.project import limits

PEAK = 2.0  # one-sided amplitude over |c_n|


def pulse(height: float, order: int, duty: float, rise: float, fall: float | None = None) -> float:
    """One-sided peak amplitude of a harmonic; edges in shares of the period."""
    c, _ = waveform.trapezoid(np.array([float(order)]), np.array([duty]), rise, rise if fall is None else fall)
    return PEAK * height * float(np.abs(c[0, 0]))


@pytest.mark.parametrize(
    ("volts", "f0", "rise", "order", "dbuv"),
    [  # C. R. Paul, Introduction to Electromagnetic Compatibility, 3rd ed., sections 3.2.1 and 3.2.2 (examples), as
        # recomputed; the printed values agree to their last digit
        (1.0, 10e6, 20e-9, 11, 73.843),
        (1.0, 10e6, 5e-9, 11, 90.392),
        (5.0, 100e6, 1e-9, 15, 93.070),
        (5.0, 100e6, 1e-9, 3, 119.188),
        (1.0, 1e6, 12.5e-9, 15, 92.048),
    ],
)
def test_trapezoids_of_paul(volts: float, f0: float, rise: float, order: int, dbuv: float) -> None:
    assert decibel(pulse(volts, order, 0.5, rise * f0)) == pytest.approx(dbuv, abs=1e-3)


def test_the_clock_of_paul_in_volts() -> None:
    """Paul, 3rd ed., example 3.5: 5 V, 100 MHz, 1 ns edges."""
    for order, volts in ((1, 3.131), (3, 0.9108), (5, 0.4053), (7, 0.1673), (9, 0.03865)):
        assert pulse(5.0, order, 0.5, 0.1) == pytest.approx(volts, rel=2e-4)


def test_the_power_of_the_first_harmonics() -> None:
    """Paul, 3rd ed., section 3.2: 5 V, 1 ns edges, 10 ns period: 99.97 % of the power in 10 harmonics, 99.84 % in 5."""
    whole = 25.0 * (0.5 - 0.1 / 3)
    for count, share in ((10, 0.99970), (5, 0.99844)):
        power = 2.5**2 + sum(pulse(5.0, n, 0.5, 0.1) ** 2 / 2 for n in range(1, count + 1))
        assert power / whole == pytest.approx(share, abs=1e-5)


def test_a_chopper_at_its_25th_harmonic() -> None:
    """Paul, 3rd ed., section 3.2 (problem): 100 V, 50 kHz, duty 5 %: 125.1 dBuV r.m.s. less 3 dB is the peak's."""
    assert decibel(pulse(100.0, 25, 0.05, 1e-3)) == pytest.approx(125.1, abs=0.05)


def test_unequal_edges() -> None:
    """Derived, confirmed by a fast Fourier transform: 10 A, 37 %, 1 us, 40 ns and 90 ns. Averaging edges is wrong."""
    for order, amps in ((1, 5.796172), (5, 0.491032), (13, 0.165109)):
        assert pulse(10.0, order, 0.37, 0.04, 0.09) == pytest.approx(amps, abs=1e-6)


LISN_50 = (  # MIL-STD-461E/F/G Figure 6 from its elements, source open (derived): kHz, ohm, degrees
    (10.0, 4.992, 9.68),
    (20.0, 7.073, 39.61),
    (30.0, 9.726, 49.59),
    (50.0, 15.069, 54.14),
    (100.0, 26.101, 48.01),
    (150.0, 33.325, 39.74),
    (200.0, 37.795, 33.08),
    (300.0, 42.397, 24.16),
    (500.0, 45.523, 15.31),
    (1000.0, 47.068, 7.85),
    (2000.0, 47.479, 3.95),
    (5000.0, 47.597, 1.58),
    (10000.0, 47.613, 0.79),
)
FIGURE_7 = (
    (10, 5.27),
    (20, 7.39),
    (30, 9.97),
    (50, 15.5),
    (100, 25.8),
    (200, 36.6),
    (300, 41.2),
    (500, 44.6),
    (1000, 46.7),
    (10000, 47.7),
)


def test_the_50_uh_network() -> None:
    """Element values to 0.1 %; read off Figure 7 of MIL-STD-461E/F/G to 20 %, its tolerance."""
    for khz, ohms, degrees in LISN_50:
        z = complex(line_impedance("lisn-50uH", np.array([2e3 * math.pi * khz]))[0])
        assert abs(z) == pytest.approx(ohms, rel=1e-3)
        assert math.degrees(math.atan2(z.imag, z.real)) == pytest.approx(degrees, abs=0.02)
    for khz, ohms in FIGURE_7:
        z = complex(line_impedance("lisn-50uH", np.array([2e3 * math.pi * khz]))[0])
        assert abs(z) == pytest.approx(ohms, rel=0.2)


@pytest.mark.parametrize(("khz", "ratio"), [(10.5, -14.71), (100.0, -2.57)])
def test_integrity_check_of_461g(khz: float, ratio: float) -> None:
    """MIL-STD-461G 5.5.3.4a: -14 dB at 10.5 kHz and -3 dB at 100 kHz, +1/-2 dB; to two digits derived."""
    z = complex(line_impedance("lisn-50uH", np.array([2e3 * math.pi * khz]))[0])
    assert 20 * math.log10(abs(2 * z / (z + 50))) == pytest.approx(ratio, abs=0.005)


def test_the_coupling_capacitor_is_what_the_correction_takes_out() -> None:
    """MIL-STD-461F/G A.5.5: 20 log10(sqrt(1 + 5.60e-9 f^2)/(7.48e-5 f)), 4.45 dB at 10 kHz."""
    load = 50.0 * 1000.0 / 1050.0
    for f in (10e3, 10.5e3, 15e3, 20e3, 30e3, 50e3, 100e3, 200e3, 1e6):
        port = abs(load / (load + 1 / (2j * math.pi * f * 0.25e-6)))
        printed = 20 * math.log10(math.sqrt(1 + 5.60e-9 * f * f) / (7.48e-5 * f))
        assert -20 * math.log10(port) == pytest.approx(printed, abs=0.006)


def test_the_5_uh_network_with_10_uf() -> None:
    """Derived from the elements: 5 uH, 10 uF at the source, 0.1 uF and 5 kohm || 50 ohm at the port; the round figures
    of MIL-STD-461F/G Figure A-3 (27 ohm at 1 MHz, 50 ohm from 5 MHz) within its 20 %."""
    for f, ohms, within in ((1e6, 27.0, 0.05), (5e6, 50.0, 0.1), (200e3, 5.6, 0.2)):
        assert abs(line_impedance("lisn-5uH", np.array([2 * math.pi * f]))[0]) == pytest.approx(ohms, rel=within)


@pytest.mark.parametrize(
    ("f", "ohms"), [(15e3, 1.061), (20e3, 0.796), (100e3, 0.159), (1e6, 0.0159)]
)  # derived: reactance of 10 uF
def test_the_feed_through_capacitor(f: float, ohms: float) -> None:
    assert abs(line_impedance("cap-10uF", np.array([2 * math.pi * f]))[0]) == pytest.approx(ohms, rel=2e-3)


def test_ce102_between_its_points() -> None:
    """MIL-STD-461E/F/G Figure CE102-1, straight on its axes (20 dB a decade)."""
    basic = limits.resolve("CE102", (), 28.0)
    assert basic is not None
    table: dict[float, float] = {
        10: 94.0,
        20: 87.976,
        30: 84.452,
        50: 80.012,
        100: 73.988,
        150: 70.464,
        200: 67.964,
        250: 66.024,
        300: 64.440,
        400: 61.939,
        500: 60.0,
        9999: 60.0,
    }
    got = limit_at(basic, np.array([khz * 1e3 for khz in table]))
    np.testing.assert_allclose(got, list(table.values()), atol=1e-3)


def test_ce101_between_its_points() -> None:
    """MIL-STD-461E/F/G Figures CE101-1 and CE101-4 curve 2, straight on their axes."""
    ship, aircraft = (limits.resolve(name, (), 28.0) for name in ("CE101-ship", "CE101-aircraft"))
    assert ship is not None
    assert aircraft is not None
    np.testing.assert_allclose(limit_at(ship, np.array([3e3, 5e3, 7e3])), [92.98, 85.78, 81.03], atol=0.006)
    np.testing.assert_allclose(limit_at(aircraft, np.array([2e3, 3e3, 5e3])), [93.98, 90.46, 86.02], atol=0.006)


@pytest.mark.parametrize("nominal", [28.0, 270.0])
def test_ce101_and_ce102_meet_at_10_khz(nominal: float) -> None:
    """Derived from both figures: the current limit times the 5 ohm of the network is the voltage limit."""
    low, high = limits.resolve("CE101-aircraft", (), nominal), limits.resolve("CE102", (), nominal)
    assert low is not None
    assert high is not None
    at = np.array([10e3])
    assert limit_at(low, at)[0] + 20 * math.log10(5.0) == pytest.approx(limit_at(high, at)[0], abs=0.03)


def test_the_receiver() -> None:
    """MIL-STD-461E/F/G Table II, 6 dB bandwidths."""
    basic = limits.resolve("CE102", (), 28.0)
    assert basic is not None
    f = np.array([100.0, 5e3, 10e3, 149e3, 150e3, 29e6, 30e6, 100e6])
    assert bandwidth_at(basic, f).tolist() == [10.0, 100.0, 1e3, 1e3, 10e3, 10e3, 100e3, 100e3]


# -- networks

VOLTS = LimitLine("v", "dBuV", "lisn-50uH", ((10e3, 60.0), (30e6, 60.0)), ((10e3, 30e6, 10e3),))
AMPS = replace(VOLTS, unit="dBuA", setup="cap-10uF")


def section(f: float, inductance: float, share: float, ohms: float) -> Branch:
    """L || (R + n L) at the frequency ``f`` as an equivalent resistance in series with an inductance."""
    s = 2j * math.pi * f
    z = 1 / (1 / (s * inductance) + 1 / (ohms + s * share * inductance))
    return Branch("series", R=z.real, L=z.imag / (2 * math.pi * f))


@pytest.mark.parametrize(("order", "dbua"), [(1, 47.28), (3, -0.55), (5, -22.74)])
def test_the_two_section_filter_of_erickson_and_maksimovic(order: int, dbua: float) -> None:
    """Erickson & Maksimovic, Fundamentals of Power Electronics, 3rd ed., section 17.4.5: buck of 5 A, half duty,
    250 kHz into two sections (31.2 uH, 6.9 uF, 15.6 uH, 1.9 ohm; 5.8 uH, 11.7 uF, 2.9 uH, 0.65 ohm); -79.76 dB at
    250 kHz, which leaves 231.27 uA of a shorted source. Our set-ups stand in its place with what they are (derived)."""
    f = 250e3 * order
    first, second = section(f, 31.2e-6, 0.5, 1.9), section(f, 5.8e-6, 0.5, 0.65)
    ladder = (second, Branch("shunt", C=11.7e-6), first, Branch("shunt", C=6.9e-6))
    s = 2j * math.pi * f
    z1, z2 = (b.R + s * b.L for b in (first, second))

    def loop(termination: complex) -> complex:
        """Current in the source per ampere drawn, by hand."""
        behind = z1 + 1 / (s * 11.7e-6 + 1 / (z2 + termination))
        into = (1 / (s * 6.9e-6)) / (behind + 1 / (s * 6.9e-6))
        return into * (1 / (s * 11.7e-6)) / (1 / (s * 11.7e-6) + z2 + termination)

    amps = 2 * 5.0 / (order * math.pi) / math.sqrt(2)  # r.m.s., odd orders of a half duty
    assert decibel(abs(loop(0.0)) * amps) == pytest.approx(dbua, abs=0.01)
    unit = converter(chop=Chop(0.5, 0.0, 0.0), frequency=250e3)
    project = Project(Bus(28.0, 28.0, 28.0), (Filter("F", dm=ladder),), (unit,), (Case("full"),), limits=())
    way = transfers(project, AMPS, np.array([f]), [Job(0, "switch", 0, 1)])[0][0]
    assert abs(way) == pytest.approx(abs(loop(2 / (s * 10e-6))), rel=1e-9)
    # 50 uH || 50 ohm a line, of which one port reads half the loop's voltage: 50.64 dBuV at 250 kHz
    if order == 1:
        line = 1 / (1 / (s * 50e-6) + 1 / 50)
        assert decibel(abs(loop(2 * line) * line) * amps) == pytest.approx(50.64, abs=0.01)
    ours = transfers(project, VOLTS, np.array([f]), [Job(0, "switch", 0, 1)])[0][0]
    line = complex(line_impedance("lisn-50uH", np.array([s.imag]))[0])
    assert abs(ours) == pytest.approx(abs(loop(2 * line) * line), rel=1e-9)


def converter(**fields: object) -> Converter:
    base = Converter("X", 100.0, (Output("", 10.0, 1.0),), ((1.0, 1.0),), filter="F")
    return replace(base, **fields)  # type: ignore[arg-type]


def test_two_lines_and_two_modes() -> None:
    """Paul, 3rd ed., section 6.1 (eq. 6.1 to 6.6): both lines in 50 ohm, a DM loop current I reads 50 I, a total CM
    current I reads 25 I. The ports here are those of the 461 network far above its corners, 47.6 ohm."""
    f = np.array([30e6])
    port = 50.0 * 1000.0 / 1050.0
    unit = converter(ripple=Ripple(1.0), frequency=30e6, cm=CommonMode(1e-15, 1.0, 0.0, 0.0))
    project = Project(Bus(28.0, 28.0, 28.0), (Filter("F"),), (unit,), (Case("full"),))
    jobs = [Job(0, "terminals", 0, 1), Job(0, "common", 0, 1)]
    dm, cm = (complex(way[0]) for way in transfers(project, VOLTS, f, jobs))
    total = abs(2j * math.pi * 30e6 * 1e-15)  # A per volt behind 1 fF
    assert abs(dm) == pytest.approx(port, rel=1e-3)
    assert abs(cm) / total == pytest.approx(port / 2, rel=1e-3)
    dm, cm = (complex(way[0]) for way in transfers(project, replace(VOLTS, unit="dBuA"), f, jobs))
    assert abs(dm) == pytest.approx(1.0, rel=1e-9)
    assert abs(cm) / total == pytest.approx(0.5, rel=1e-4)


@pytest.mark.parametrize(("order", "dbuv"), [(1, 94.49), (63, 92.96)])
def test_common_mode_current_through_a_heatsink(order: int, dbuv: float) -> None:
    """Derived: 60 V, 250 kHz, 20 ns, 50 pF gives 4 A f C into 25 ohm, 94.49 dBuV; with the 461 network its own ohms."""
    f = 250e3 * order
    unit = converter(frequency=250e3, cm=CommonMode(50e-12, 60.0, 20e-9, 20e-9))
    project = Project(Bus(28.0, 28.0, 28.0), (Filter("F"),), (unit,), (Case("full"),), checked=(VOLTS,))
    spectrum = lines_of(project, VOLTS)
    got = levels(project, operating_points(project), spectrum, [(0, 1)]).level[0, order - 1]
    source = 1 / (2j * math.pi * f * 50e-12)
    line = complex(line_impedance("lisn-50uH", np.array([2 * math.pi * f]))[0])
    in_25_ohm = got * abs(line / 2 + source) / abs(line / 2) * 25.0 / abs(25.0 + source)
    assert decibel(in_25_ohm) == pytest.approx(dbuv, abs=0.01)


# -- combining

TABLE_33 = (6.02, 5.53, 5.08, 4.65, 4.25, 3.88, 3.53, 3.21, 2.91, 2.64, 2.39)  # d = 0 to 10 dB
POWER_SUM = (3.01, 2.54, 2.12, 1.76, 1.46, 1.19, 0.97, 0.79, 0.64, 0.51, 0.41)


@pytest.mark.parametrize("below", range(11))
def test_two_free_clocks_in_one_bandwidth(below: int) -> None:
    """Paul, 3rd ed., section 3.3.1, Table 3.3 for the peak detector; the power sum beside it is elementary."""
    flat = LimitLine("f", "dBuV", "lisn-50uH", ((10e3, 60.0), (1e6, 60.0)), ((10e3, 1e6, 10e3),))
    f = np.array([250e3, 258e3])
    level = np.array([[1e-3, 1e-3 * 10 ** (-below / 20)]])
    sweep = plan(flat, np.array([0, 1]), 2, f - 5e3, f + 5e3)
    for (tuned,), more in zip(worst(sweep, level), (TABLE_33[below], POWER_SUM[below]), strict=True):
        assert tuned is not None
        assert -tuned.margin == pytest.approx(more, abs=0.006)
        assert tuned.frequency == 253e3
    apart = plan(flat, np.array([0, 1]), 2, np.array([245e3, 256e3]), np.array([255e3, 266e3]))
    assert worst(apart, level)[0][0].margin == pytest.approx(0.0)  # type: ignore[union-attr]


@pytest.mark.parametrize(
    ("count", "peaks", "power"),
    [(2, 6.02, 3.01), (3, 9.54, 4.77), (4, 12.04, 6.02), (8, 18.06, 9.03), (10, 20.0, 10.0)],
)
def test_equal_free_clocks(count: int, peaks: float, power: float) -> None:
    """Elementary: N equal tones add to N in amplitude, to the square root of N in power."""
    flat = LimitLine("f", "dBuV", "lisn-50uH", ((10e3, 60.0), (1e6, 60.0)))
    sweep = plan(flat, np.arange(count), count, np.full(count, 1e5), np.full(count, 1.1e5))
    arithmetic, rss = (found[0] for found in worst(sweep, np.full((1, count), 1e-3)))
    assert arithmetic is not None
    assert rss is not None
    assert -arithmetic.margin == pytest.approx(peaks, abs=0.006)
    assert -rss.margin == pytest.approx(power, abs=0.006)


def interleaved(phases: list[float], amplitudes: list[float] | None = None) -> np.ndarray:
    """Levels of orders 1 to 4 over those of one converter, all on one clock with the given phases."""
    units = tuple(
        converter(
            id=f"C{k}",
            frequency=100e3,
            clock="one",
            phase=phase,
            ripple=Ripple((amplitudes or [1.0] * 9)[k], duty=0.3),
        )
        for k, phase in enumerate(phases)
    )

    def of(chosen: tuple[Converter, ...]) -> np.ndarray:
        project = Project(Bus(28.0, 28.0, 28.0), (Filter("F"),), chosen, (Case("full"),))
        return levels(project, operating_points(project), lines_of(project, VOLTS), [(0, 1)]).level[0, :4]

    single = replace(units[0], ripple=Ripple(1.0, duty=0.3))
    return np.asarray(of(units) / of((single,)))


def test_interleaving() -> None:
    """Perreault & Kassakian, "Distributed interleaving of paralleled power converters", IEEE Trans. Circuits Syst. I
    44(8), 1997 (from memory): N equal converters a share of a period apart leave orders that N divides; the rest
    follows from the sum of phasors (derived)."""
    np.testing.assert_allclose(interleaved([0.0, 120.0, 240.0])[:3], [0, 0, 3], atol=1e-9)
    np.testing.assert_allclose(interleaved([0.0, 120.0, 245.0])[:3], [0.0872, 0.1743, 2.9772], atol=1e-4)
    np.testing.assert_allclose(interleaved([0.0, 180.0], [1.0, 0.9])[0], 0.1, atol=1e-9)
    np.testing.assert_allclose(interleaved([0.0, 90.0, 180.0]), [1, 1, 1, 3], atol=1e-9)


# -- common practice


def test_a_filter_with_its_corner_at_40_khz_takes_40_db_a_decade() -> None:
    """Common practice: filters for 461 have their corner near 40 kHz, and do nothing below 10 to 20 kHz."""
    f0 = 40e3
    capacitance = 10e-6
    inductance = 1 / ((2 * math.pi * f0) ** 2 * capacitance)
    ladder = (Branch("series", L=inductance), Branch("shunt", C=capacitance))
    unit = converter(ripple=Ripple(1.0), frequency=1e3)
    project = Project(Bus(28.0, 28.0, 28.0), (Filter("F", dm=ladder),), (unit,), (Case("full"),))
    f = np.array([1e3, 10e3, 20e3, 400e3, 4e6])
    job = [Job(0, "terminals", 0, f.size)]
    volts = replace(VOLTS, setup="cap-10uF", unit="dBuA")
    through = np.abs(transfers(project, volts, f, job)[0] / transfers(project, volts, f, job, alone=True)[0])
    assert through[:3] == pytest.approx(1.0, abs=3.0)  # resonance with the set-up, no attenuation
    assert (through[:3] > 0.3).all()
    assert 20 * math.log10(through[3] / through[4]) == pytest.approx(40.0, abs=0.5)
