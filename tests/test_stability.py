"""Stability: against brute force and dense solvers; corners of the definition; check rows; plain data."""

from __future__ import annotations

import json
import tracemalloc
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from budget.engine import loop as loops
from budget.engine import margin
from budget.engine.cancel import CancelledError
from budget.engine.cure import damping_for, mode_table
from budget.engine.loop import closed, least_damped, open_loop, spectra
from budget.engine.margin import smallest_factors
from budget.engine.model import Bus, Case, Filter, Lead, Load, Project
from budget.engine.operating import operating_points
from budget.engine.stability import conductances, source_impedances, stability, stability_checks, stability_rows
from budget.engine.statespace import state_space
from tests.bench.bench_stability import large
from tests.test_statespace import Tableau, flt, net, networks, ser, sh, unit


def loaded(project: Project, watts: list[float], bands: list[float | None]) -> Project:
    """The converters of a random network with powers and control bandwidths of their own."""
    parts = tuple(
        replace(c, output=(replace(c.output[0], current=w),), rated_power=w or 1.0, control_bandwidth=b)
        for c, w, b in zip(project.converters, watts, bands, strict=False)
    )
    return replace(project, converters=parts)


def tableau_values(project: Project, g: np.ndarray, k: float) -> int:
    """Eigenvalues in the right half-plane, counted on the tableau by the winding of its determinant along a contour.

    Independent of the state equations: the argument principle over the imaginary axis and a great half circle.
    """
    other = Tableau(project)
    e, a, _ = other.pencil()
    tau = [1.0 / (2 * np.pi * c.control_bandwidth) if c.control_bandwidth else 0.0 for c in project.converters]

    def sign(s: complex) -> complex:
        matrix = s * e - a
        for node, conductance, t in zip(other.end, g, tau, strict=True):
            matrix[node - 1, node - 1] += k * conductance / (1 + s * t)  # KCL row: -sum of currents leaving = +g v
        for j in range(matrix.shape[0]):
            matrix[j] /= np.abs(matrix[j]).max()
        return complex(np.linalg.slogdet(matrix)[0])

    axis = np.concatenate((np.linspace(0.0, 1e3, 20)[:-1], np.geomspace(1e3, 1e11, 1500)))
    path = [1j * w for w in axis] + [1e11 * np.exp(1j * x) for x in np.linspace(np.pi / 2, 0.0, 60)]
    signs = np.array([sign(s) for s in path])
    turn = np.angle(signs[1:] / signs[:-1]).sum()
    return -round(float(2.0 * turn / (2.0 * np.pi)))


def first_unstable(project: Project, g: np.ndarray, factors: np.ndarray) -> float:
    """The first of the rising ``factors`` at which any eigenvalue of the closed loop has a positive real part."""
    loop = open_loop(project, state_space(project))
    for k in factors:
        matrix, values = spectra(loop, k * g[None])[0]
        if least_damped(matrix, values)[0] < -1e-10:
            return float(k)
    return float("inf")


POWERS = st.lists(st.floats(1.0, 100.0), min_size=4, max_size=4)
BANDS = st.lists(st.one_of(st.none(), st.floats(1e2, 1e6)), min_size=4, max_size=4)


@settings(deadline=None, max_examples=60)
@given(networks(resist=True), POWERS, BANDS)
def test_margin_against_a_fine_scan(project: Project, watts: list[float], bands: list[float | None]) -> None:
    project = loaded(project, watts, bands)
    assume(project.converters)
    g = np.array(watts[: len(project.converters)]) / 28.0**2
    loop = open_loop(project, state_space(project))
    found = float(smallest_factors(loop, g[None])[0])
    if found == 0.0:
        assert first_unstable(project, g, np.array([1e-6])) == 1e-6
        return
    brute = first_unstable(project, g, np.geomspace(1e-4, 1e6, 400))
    assert found <= brute * (1.0 + 1e-6)  # a scan may step over an island of instability, never find one too early
    if np.isfinite(found):
        assert first_unstable(project, g, found * np.array([0.9, 1.0 - 1e-5])) == np.inf
        assert np.isfinite(first_unstable(project, g, found * np.array([1.0 + 1e-7, 1.0 + 1e-5])))


@settings(deadline=None, max_examples=60)
@given(networks(resist=True), POWERS, BANDS)
def test_the_way_for_many_loads_finds_the_same(project: Project, watts: list[float], bands: list[float | None]) -> None:
    project = loaded(project, watts, bands)
    assume(project.converters)
    g = np.array(watts[: len(project.converters)]) / 28.0**2 * np.array([[1.0], [0.3]])
    g[1, 1:] *= 2.0
    loop = open_loop(project, state_space(project))
    together = smallest_factors(loop, g)
    with pytest.MonkeyPatch.context() as patch:
        for module, name in ((margin, "_WHOLE"), (margin, "_MANY"), (loops, "_WHOLE"), (loops, "_AT_ONCE")):
            patch.setattr(module, name, 0)
        alone = smallest_factors(loop, g)
    assert alone == pytest.approx(together, rel=1e-9)


def test_memory_does_not_grow_with_the_square_of_the_converters_times_the_modes() -> None:
    project = large(60, 12, 3)
    points = operating_points(project)
    tracemalloc.start()
    try:
        found = stability(project, points)
        most = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert np.isfinite(found.margin_db).all()
    assert most < 48e6  # what each load sees of each mode, as one table: 24 MB; of the walk: 100 MB


def test_it_can_be_stopped_between_corners() -> None:
    project = large(20, 5, 2)
    points = operating_points(project)
    asked: list[int] = []

    def cancelled() -> bool:
        asked.append(1)
        return len(asked) > 6

    with pytest.raises(CancelledError):
        stability(project, points, cancelled=cancelled)
    assert len(asked) == 7


def test_an_island_of_instability() -> None:
    """Derived: resistances, a load with a pole and one without. The second turns the first one's resistance negative
    through infinity: unstable from where k g0 R(k) = 1 until R's pole, and stable above it."""
    units = [unit("A", watts=1.0, lead=Lead(1.0), control_bandwidth=100.0), unit("B", watts=9.0, lead=Lead(1.0))]
    project = net([flt()], units, 1.0)
    g = np.array([1.0, 9.0]) / 784.0

    def excess(k: float) -> float:
        behind = 1.0 - 1.0 / (k * g[1])
        return k * g[0] * (1.0 + behind / (1.0 + behind)) - 1.0

    k = float(brentq(excess, 30.0, 43.0, xtol=1e-12))
    loop = open_loop(project, state_space(project))
    assert smallest_factors(loop, g[None])[0] == pytest.approx(k, rel=1e-9)
    assert first_unstable(project, g, np.array([44.0, 100.0, 400.0])) == np.inf


@settings(deadline=None, max_examples=6)
@given(networks(resist=True, filters=2, converters=3), POWERS, BANDS, st.floats(-2.0, 3.0))
def test_number_of_unstable_eigenvalues_by_the_argument_principle(
    project: Project, watts: list[float], bands: list[float | None], level: float
) -> None:
    project = loaded(project, watts, [b or 1e5 for b in bands])
    assume(project.converters)
    g = np.array(watts[: len(project.converters)]) / 28.0**2
    k = 10.0**level
    matrix, values = spectra(open_loop(project, state_space(project)), k * g[None])[0]
    assume(matrix.size and np.abs(values.real / np.abs(values)).min() > 1e-2)
    assert np.abs(values).max() < 1e11
    assert tableau_values(project, g, k) == int((values.real > 0.0).sum())


@settings(deadline=None, max_examples=40)
@given(networks())
def test_source_impedance_against_the_tableau(project: Project) -> None:
    """A converter without lead and ladder, added behind each filter, measures the impedance at its output."""
    probes = tuple(unit(f"P{k}", part.id) for k, part in enumerate(project.filters))
    probed = replace(project, converters=(*probes, *project.converters))
    w = np.array([1e3, 2e5, 7e6])
    mine = source_impedances(project, w)
    other = Tableau(probed)
    for j, x in enumerate(w):
        theirs = other.response(1j * x)
        for k in range(len(probes)):
            row = 1 + 2 * len(probes) + k
            assert mine[k, j] == pytest.approx(-theirs[row, 1 + k], rel=1e-6, abs=1e-9)


def test_impedance_rule_takes_the_peak_between_any_grid() -> None:
    """Derived: L with R in series and C in parallel; a peak of a Q of 3000 is found to all digits."""
    ind, cap, r = 10e-6, 10e-6, 1e-3 / 3.0
    project = net([flt(ser(ind, r), sh(cap))], [unit("A", watts=50.0)])
    o = operating_points(project)
    found = stability(project, o)
    w = np.linspace(0.999, 1.001, 2_000_001) / np.sqrt(ind * cap)
    size = np.abs(1.0 / (1j * w * cap + 1.0 / (r + 1j * w * ind)))
    assert found.peak[0] == pytest.approx(size.max(), rel=1e-7)
    assert found.peak_frequency[0] == pytest.approx(w[size.argmax()] / 2 / np.pi, rel=1e-6)
    load = o.filter_voltage[0, 0, 0] ** 2 / 50.0
    assert found.impedance_db[0, 0, 0] == pytest.approx(20 * np.log10(load / size.max()), abs=1e-6)


def test_unstable_for_any_load() -> None:
    """No resistance anywhere, or an inductance that feeds a load without capacitor and control pole."""
    lossless = net([flt(ser(1e-6), sh(1e-6))], [unit("A", watts=5.0)])
    fed = net([flt(ser(1e-6, 0.1), sh(1e-6, 0.5))], [unit("A", watts=5.0, lead=Lead(0.01, 1e-7))], 0.01)
    for project in (lossless, fed):
        found = stability(project, operating_points(project))
        assert not found.stable.any()
        assert np.all(found.margin_db == -np.inf)
        assert stability_rows(project, found)[0]["margin_db"] is None
        row = stability_checks(project, found)[0]
        assert (row.status, row.value, row.remarks) == ("fail", None, ("unstable for any load",))


def test_a_control_pole_makes_an_inductive_end_stable() -> None:
    project = net(
        [flt(ser(1e-6, 0.1), sh(1e-6, 0.5))], [unit("A", watts=5.0, lead=Lead(0.01, 1e-7), control_bandwidth=1e4)]
    )
    found = stability(project, operating_points(project))
    assert found.stable.all()
    loop = open_loop(project, state_space(project))
    g = conductances(operating_points(project), state_space(project))[:1]
    k = float(smallest_factors(loop, g)[0])
    values = [np.linalg.eigvals(closed(loop, g * k * x))[0].real.max() for x in (1 - 1e-6, 1 + 1e-6)]
    assert values[0] < 0.0 < values[1]


@pytest.mark.parametrize("bus", [(0.0, 0.0), (0.1, 0.0), (0.0, 1e-6), (0.01, 1e-6)])
@pytest.mark.parametrize("ladder", [(), (ser(R=0.1),), (ser(1e-6),), (sh(1e-6),), (ser(1e-6, 0.01), sh(1e-6))])
@pytest.mark.parametrize("lead", [Lead(), Lead(0.01), Lead(0.0, 1e-7)])
@pytest.mark.parametrize("band", [None, 1e4])
def test_every_small_network_gives_sound_numbers(
    bus: tuple[float, float], ladder: tuple, lead: Lead, band: float | None
) -> None:
    twins = [unit(n, watts=5.0, lead=lead, control_bandwidth=band) for n in "AB"]
    project = net([flt(*ladder)], twins, *bus)
    found = stability(project, operating_points(project))
    assert not np.isnan(found.margin_db).any()
    assert np.all((found.margin_db <= 0.0) <= ~found.stable) or not found.stable.all()
    assert np.all(found.stable | (found.margin_db < 0.0))
    json.dumps(stability_rows(project, found), allow_nan=False)


def test_huge_and_tiny_elements() -> None:
    parts = [
        flt(ser(1e-12, 1e-6, 1e6), sh(1e-15, 1e-3), ser(1e-6, 1e-3), sh(1.0, 1e-6), sh(1e-15)),
        flt(ser(1e-12), sh(1.0), ser(R=0.1), sh(1e-15, 1e6), name="G"),
    ]
    units = [unit("A", lead=Lead(1e-6, 1e-12), control_bandwidth=1e3), unit("B", "G", ladder=(sh(1e-15),))]
    project = net(parts, units, 1e-6, 1e-12)
    found = stability(project, operating_points(project))
    assert not np.isnan(found.margin_db).any()
    assert np.isfinite(found.damping).all()
    assert np.isfinite(found.impedance_db).all()


def lab() -> Project:
    parts = (
        flt(ser(5e-6, 0.01), sh(4e-6, 0.01), sh(20e-6, 0.6)),
        flt(ser(4e-6, 0.02), sh(6e-6, 0.01), sh(25e-6, 0.5), name="G"),
    )
    ladder = (sh(8e-6, 0.005), sh(20e-6, 0.3))
    units = [
        unit(f"C{k}", "FG"[k % 2], 30.0 + 7 * k, Lead(0.01, 3e-7), ladder, control_bandwidth=1e4) for k in range(4)
    ]
    project = net(list(parts), units, 0.01, 1e-6)
    cases = (Case("full"), Case("half", load=(("C0", Load("share", 0.5)), ("C1", Load("off")))))
    return replace(project, bus=replace(project.bus, low=22.0, high=32.0), cases=cases)


def test_less_line_or_more_load_is_worse() -> None:
    found = stability(lab(), operating_points(lab()))
    assert np.all(np.diff(found.margin_db, axis=1) > 0.0)
    assert np.all(found.margin_db[1] > found.margin_db[0])
    assert np.all(np.diff(found.impedance_db, axis=1) > 0.0)
    np.testing.assert_array_equal(found.peak, stability(lab(), operating_points(lab())).peak)


def test_order_of_rows_does_not_matter() -> None:
    one = lab()
    two = replace(one, filters=one.filters[::-1], converters=one.converters[::-1])
    a, b = (stability(p, operating_points(p)) for p in (one, two))
    np.testing.assert_allclose(a.margin_db, b.margin_db, rtol=1e-8)
    np.testing.assert_allclose(a.damping, b.damping, rtol=1e-8)
    np.testing.assert_allclose(a.impedance_db, b.impedance_db[:, :, ::-1], rtol=1e-8)


@pytest.mark.parametrize("scale", [0.01, 10.0])
def test_scaling_of_impedances_and_time(scale: float) -> None:
    """All impedances by a factor and all powers by its inverse: the same margin. All L and C too: slower, the same."""
    one = lab()

    def scaled(z: float, t: float) -> Project:
        def ladder(parts: tuple) -> tuple:
            return tuple(replace(b, R=b.R * z, L=b.L * z * t, C=b.C and b.C / z * t) for b in parts)

        bus = replace(one.bus, resistance=one.bus.resistance * z, inductance=one.bus.inductance * z * t)
        filters = tuple(replace(f, dm=ladder(f.dm)) for f in one.filters)
        units = tuple(
            replace(
                c,
                lead=Lead(c.lead.R * z, c.lead.L * z * t),
                input=ladder(c.input),
                output=(replace(c.output[0], current=c.output[0].current / z),),
                rated_power=c.rated_power / z,
                control_bandwidth=1e4 / t,
            )
            for c in one.converters
        )
        return replace(one, bus=bus, filters=filters, converters=units)

    reference = stability(one, operating_points(one))
    for p in (scaled(scale, 1.0), scaled(1.0, scale)):
        found = stability(p, operating_points(p))
        np.testing.assert_allclose(found.margin_db, reference.margin_db, rtol=1e-8)
        np.testing.assert_allclose(found.damping, reference.damping, rtol=1e-8)
    slow = scaled(1.0, scale)
    np.testing.assert_allclose(
        stability(slow, operating_points(slow)).frequency * scale, reference.frequency, rtol=1e-8
    )


def test_saturation_does_not_count() -> None:
    one = lab()
    bent = tuple(
        replace(f, dm=tuple(replace(b, saturation=2.0) if b.L > 1e-6 else b for b in f.dm)) for f in one.filters
    )
    two = replace(one, filters=bent)
    a, b = (stability(p, operating_points(p)).margin_db for p in (one, two))
    np.testing.assert_allclose(a, b, rtol=1e-9)


def test_check_rows() -> None:
    project = lab()
    found = stability(project, operating_points(project))
    bus, first, second = stability_checks(project, found)
    assert (bus.check, bus.subject, bus.case, bus.line, bus.status) == ("stability", "bus", "full", "low", "ok")
    assert (bus.limit, bus.wanted, bus.unit, bus.margin_unit) == (0.0, 6.0, "dB", "dB")
    assert bus.value == bus.margin == found.margin_db.min()
    assert (first.check, first.subject, first.limit) == ("impedance", "F", None)
    assert first.value == found.impedance_db[:, :, 0].min()
    assert second.subject == "G"
    assert stability_checks(project, found, (2,))[0].value == found.margin_db[:, 2].min()
    wanting = replace(project, rules=replace(project.rules, stability_margin=bus.value + 1.0))
    assert stability_checks(wanting, found)[0].status == "thin"


def test_rows_without_data() -> None:
    table = Filter("T", attenuation=((1e4, 20.0, 20.0),), resistance=0.1)
    project = net([table, flt(ser(1e-6, 0.1), sh(1e-6))], [unit("A", "T")])
    found = stability(project, operating_points(project))
    assert [r.status for r in stability_checks(project, found)] == ["no data"] * 3
    assert stability_checks(project, found)[1].remarks == ("known by a table only",)
    assert stability_checks(project, found)[2].remarks == ("no converter runs behind it",)
    beyond = net([flt(ser(1e-6, 5.0), sh(1e-6))], [unit("A", watts=1e3)])
    found = stability(beyond, operating_points(beyond))
    assert [r.remarks for r in stability_checks(beyond, found)] == [("no operating point",)] * 2
    row = stability_rows(beyond, found)[0]
    assert row["stable"] is None
    assert row["margin_db"] is None
    empty = Project(Bus(28.0, 28.0, 28.0), cases=(Case("full"),))
    found = stability(empty, operating_points(empty))
    assert [(r.status, r.value) for r in stability_checks(empty, found)] == [("ok", None)]


def test_no_load_no_limit() -> None:
    project = net([flt(ser(1e-6, 0.1), sh(1e-6))], [unit("A", watts=0.0)], 0.1)
    found = stability(project, operating_points(project))
    assert found.stable.all()
    assert np.all(found.margin_db == np.inf)
    assert stability_rows(project, found)[0]["margin_db"] is None


# --- modes and cures ------------------------------------------------------------------------------------------------


def test_modes_name_their_owners() -> None:
    """Two filters with resonances far apart on a stiff bus do not share them."""
    parts = [flt(ser(1e-6, 0.01), sh(1e-6)), flt(ser(1e-4, 0.01), sh(1e-4), name="G")]
    project = net(parts, [unit("A", watts=1.0), unit("B", "G", watts=1.0, control_bandwidth=50.0)])
    modes = mode_table(project, operating_points(project), 0, 0)
    assert {mode.owners[0][0] for mode in modes} == {("filter", "F"), ("filter", "G"), ("converter", "B")}
    for mode in modes:
        assert sum(share for _, share in mode.owners) == pytest.approx(1.0)
        assert mode.owners[0][1] > 0.99
    assert modes[0].damping == min(mode.damping for mode in modes)
    found = stability(project, operating_points(project))
    assert (modes[0].damping, modes[0].frequency) == pytest.approx((found.damping[0, 0], found.frequency[0, 0]))


def test_a_suggested_branch_does_what_it_says() -> None:
    project = net([flt(ser(10e-6, 0.02), sh(10e-6))], [unit("A", watts=100.0, control_bandwidth=20e3)])
    o = operating_points(project)
    before = float(stability(project, o).margin_db.min())
    wanted = before + 8.0
    found = damping_for(project, o, "F", wanted)
    assert found.C is not None
    assert found.R is not None
    for factor, enough in ((1.0, True), (0.95, False)):
        best = max(
            stability(cured, operating_points(cured)).margin_db.min()
            for r in (np.array([1.0]) if enough else np.geomspace(0.3, 3.0, 41)) * found.R
            for cured in [
                net([flt(ser(10e-6, 0.02), sh(10e-6), sh(found.C * factor, float(r)))], list(project.converters))
            ]
        )
        assert bool(best >= wanted) is enough
    assert damping_for(project, o, "F", before - 1.0).reason == "nothing to damp"
    assert damping_for(project, o, "X", 6.0).reason == "no such filter"


def test_no_branch_behind_a_filter_cures_a_resonance_elsewhere() -> None:
    bad = (ser(10e-6, 0.02), sh(10e-6))
    project = net([flt(*bad), flt(*bad, name="G")], [unit("A", watts=200.0), unit("B", "G", watts=1.0)])
    assert damping_for(project, operating_points(project), "G", 40.0).reason == "out of reach"
