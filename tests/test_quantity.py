"""Text to SI numbers and back: what is taken, what is refused and in which words, and whether pint agrees."""

from __future__ import annotations

import contextlib
import json
import math
import pickle
import subprocess
import sys
import threading

import pint
import pytest
from hypothesis import assume, example, given, settings
from hypothesis import strategies as st

from budget import quantity, units
from budget.quantity import KINDS, Kind, QuantityError, parse, show, show_in, show_parts, warm

V, A, W, OHM = KINDS["voltage"], KINDS["current"], KINDS["power"], KINDS["resistance"]
HENRY, FARAD, HZ, S = KINDS["inductance"], KINDS["capacitance"], KINDS["frequency"], KINDS["time"]
TEMP, DEG, DB, RATIO, I2T = KINDS["temperature"], KINDS["angle"], KINDS["level"], KINDS["ratio"], KINDS["i2t"]
DBUA, DBUV = KINDS["level_uA"], KINDS["level_uV"]

finite = st.floats(allow_nan=False, allow_infinity=False)
modest = st.floats(min_value=1e-9, max_value=1e9) | st.floats(min_value=-1e9, max_value=-1e-9)


@pytest.fixture(scope="module", autouse=True)
def warmed() -> None:
    warm()


def forget() -> None:
    """Empty the memos, so that the next text is read afresh."""
    quantity._read.cache_clear()
    units.lookup.cache_clear()


def refusal(text: str, *kinds: Kind) -> str:
    with pytest.raises(QuantityError) as caught:
        parse(text, *kinds)
    return str(caught.value)


# ---------------------------------------------------------------- what is taken


@pytest.mark.parametrize(
    ("text", "kind", "si"),
    [
        ("28 V", V, 28.0),
        ("28", V, 28.0),
        (" 28V ", V, 28.0),
        (".5 V", V, 0.5),
        ("1e-6 V", V, 1e-6),
        ("+5 V", V, 5.0),
        ("−5 V", V, -5.0),
        ("4.7 uF", FARAD, 4.7e-6),
        ("4.7 \u00b5F", FARAD, 4.7e-6),
        ("4.7 \u03bcF", FARAD, 4.7e-6),
        ("4.7\u00a0uF", FARAD, 4.7e-6),
        ("12 pF", FARAD, 12e-12),
        ("3 fF", FARAD, 3e-15),
        ("2.2 uH", HENRY, 2.2e-6),
        ("550 kHz", HZ, 550e3),
        ("1 THz", HZ, 1e12),
        ("8 mohm", OHM, 8e-3),
        ("5 kOhm", OHM, 5e3),
        ("50 Ohm", OHM, 50.0),
        ("1 k\u03a9", OHM, 1e3),
        ("1 M\u2126", OHM, 1e6),
        ("10k", OHM, 10e3),
        ("5 u", FARAD, 5e-6),
        ("1 M", OHM, 1e6),
        ("1 G", OHM, 1e9),
        ("4.7u", FARAD, 4.7e-6),
        ("2*4.7u", FARAD, 9.4e-6),
        ("2 * 1.5 A + 200 mA", A, 3.2),
        ("2 × 1.5 A", A, 3.0),
        ("2 · 1.5 A", A, 3.0),
        ("2 + 200 mA", A, 2.2),
        ("200 mA + 2", A, 2.2),
        ("1 + 2 * 3 A", A, 7.0),
        ("(1 + 2) * 2 A", A, 6.0),
        ("2 A * (1 + 2)", A, 6.0),
        ("2 * (1 A - 200 mA)", A, 1.6),
        ("((2) * ((3 A)))", A, 6.0),
        ("3 A - -1 A", A, 4.0),
        ("2k * 1 mA", A, 2.0),
        ("28 V * 2 A", W, 56.0),
        ("4 A * 5 ohm", V, 20.0),
        ("50 % * 2 A", A, 1.0),
        ("5 V/A", OHM, 5.0),
        ("85 %", RATIO, 0.85),
        ("85%", RATIO, 0.85),
        ("0.85", RATIO, 0.85),
        ("100 % - 15 %", RATIO, 0.85),
        ("100 % - 0.15", RATIO, 0.85),
        ("-40 degC", TEMP, -40.0),
        ("71 °C", TEMP, 71.0),
        ("71", TEMP, 71.0),
        ("70 + 1", TEMP, 71.0),
        ("-(40 degC)", TEMP, -40.0),
        ("300 K", TEMP, 26.85),
        ("160 degF", TEMP, 640 / 9),
        ("6 dB", DB, 6.0),
        ("2 * 3 dB", DB, 6.0),
        ("-3", DB, -3.0),
        ("54 dBuA", DBUA, 54.0),
        ("54 dB\u00b5A", DBUA, 54.0),
        ("54 dB", DBUA, 54.0),
        ("60 dBuV", DBUV, 60.0),
        ("90 deg", DEG, 90.0),
        ("90°", DEG, 90.0),
        ("1 rad", DEG, 180 / math.pi),
        ("2 min", S, 120.0),
        ("1 h", S, 3600.0),
        ("0.5 A^2 s", I2T, 0.5),
        ("0.5 A^2*s", I2T, 0.5),
        ("0.5 A²s", I2T, 0.5),
        ("0.5 A2 s", I2T, 0.5),
        ("3 A * 3 A * 2 s", I2T, 18.0),
        ("1 Wh", KINDS["energy"], 3600.0),
        ("1 mAh", KINDS["charge"], 3.6),
        ("2 A s", KINDS["charge"], 2.0),
    ],
)
def test_takes(text: str, kind: Kind, si: float) -> None:
    value = parse(text, kind)
    assert value.kind is kind
    assert value.si == pytest.approx(si, rel=1e-14)


def test_a_power_of_ten_is_rounded_once() -> None:
    assert [parse(text, FARAD).si for text in ("4.7 uF", "4.7u", "0.3 mF", "68 nF")] == [4.7e-6, 4.7e-6, 0.3e-3, 68e-9]


def test_case_loads_take_a_share_or_a_power() -> None:
    assert parse("0.6", RATIO, W).kind is RATIO
    assert parse("60 %", RATIO, W).si == 0.6
    load = parse("12 W", RATIO, W)
    assert (load.kind, load.si) == (W, 12.0)
    said = refusal("3 V", RATIO, W)
    assert said == "'3 V' is a voltage; a ratio such as 85 % or a power such as 12 W was expected."


# ---------------------------------------------------------------- what is refused, and in which words

# The first block holds what pint, given the raw text, silently misreads, hangs on or dies of.
REFUSED = [
    ("1,5 V", V, "the decimal sign is a point, write 1.5."),
    ("1,000 V", V, "write 1.000 or 1000, whichever is meant"),
    ("5 V ± 0.1 V", V, "a tolerance, which is not taken"),
    ("10 V @ 2 A", V, "'@', which is not taken"),
    ("3 V / 100 m", V, "a division, which is not taken"),
    ("9**9**9", V, "a power, which is not taken"),
    ("9**9**9**9", V, "a power, which is not taken"),
    ("1 m**9**9**9", V, "a power, which is not taken"),
    ("m**9**9**9", V, "'m' has no number"),
    ("(3 V", V, "a bracket that is not closed"),
    ("3e V", V, "no exponent"),
    ("1e400 V", V, "too large"),
    ("nan V", V, "'nan' is not a number"),
    ("inf A", A, "'inf' is not a number"),
    ("3 V;", V, "';', which is not taken"),
    ("kOhm", OHM, "'kOhm' has no number in front of it"),
    ("10meg", OHM, "write M, as in 10M"),
    ("4u7", FARAD, "write 4.7u"),
    ("4\u03bc7", FARAD, "write 4.7u"),
    ("Vrms", V, "'Vrms' is not a quantity"),
    ("5 Vrms", V, "write V alone"),
    ("dBuV", V, "'dBuV' has no number"),
    ("60 dBuV", V, "is a level in dBuV; a voltage was expected, such as 28 V."),
    # wrong dimensions
    ("5 A", V, "'5 A' is a current; a voltage was expected, such as 28 V."),
    ("28 V * 28 V", W, "'28 V * 28 V' is in V^2; a power was expected, such as 12 W."),
    ("3 V + 2 A", V, "'3 V' is a voltage and '2 A' is a current"),
    ("1 V/s", V, "is in V/s"),
    ("(1 + 2 A) * 3 ohm", V, "'1' is a voltage and '2 A' is a current"),
    ("60 dBuV", DBUA, "is a level in dBuV; a level in dBuA was expected"),
    ("2 + 3 W", RATIO, "'2' is a ratio and '3 W' is a power"),
    # units
    ("10K", OHM, "K is kelvin, for a thousand write 10k"),
    ("2 * 10K", OHM, "K is kelvin"),
    ("4R7", OHM, "write 4.7 ohm"),
    ("4k7", OHM, "write 4.7k"),
    ("4u2F", FARAD, "write 4.2u"),
    ("3V3", V, "write 3.3 V"),
    ("4.7 u F", FARAD, "write the prefix 'u' against its unit"),
    ("10 KHz", HZ, "write kHz"),
    ("5 mhz", HZ, "write mHz or MHz"),
    ("5 Vs", V, "write V, or V s"),
    ("5 kdegC", TEMP, "degC takes no prefix"),
    ("5 mmin", S, "min takes no prefix"),
    ("5 kdB", DB, "dB takes no prefix"),
    ("5 m%", RATIO, "takes no prefix"),
    ("5 kg", W, "'kg' is not a unit known here"),
    ("5 V/K", V, "not a unit known here"),
    ("5 " + "V*" * 20 + "V", V, "too long for a unit"),
    ("5 TV^9*TV^9*TV^9*TV^9", V, "not a unit known here"),
    ("2 x 3 A", A, "a product is written with *"),
    ("(1 + 2) A", A, "behind a bracket"),
    # values with a zero of their own
    ("20 degC + 5", TEMP, "cannot be added or multiplied"),
    ("2 * 35 degC", TEMP, "cannot be added or multiplied"),
    ("300 K + 5 K", TEMP, "cannot be added or multiplied"),
    ("60 dBuV + 60 dBuV", DBUV, "cannot be added or multiplied"),
    ("-300 degC", TEMP, "below absolute zero"),
    ("-1 K", TEMP, "below absolute zero"),
    ("10k", TEMP, "a temperature takes no prefix"),
    ("5m", RATIO, "a ratio takes no prefix"),
    # form
    ("", V, "Nothing was entered"),
    ("   ", V, "Nothing was entered"),
    ("off", RATIO, "'off' is not a quantity"),
    ("3 V)", V, "closes a bracket"),
    ("()", V, "where a number was expected"),
    ("2 *", V, "where a number was expected"),
    ("--3 V", V, "where a number was expected"),
    ("1 000 V", V, "no sign between '1' and '000 V'"),
    ("1.2.3 V", V, "no sign between"),
    ("2(3 V)", V, "no sign between"),
    ("1e5.5 V", V, "no sign between"),
    ("2 * A", A, "'A' has no number"),
    ("1_000", V, "'_', which is not taken"),
    ("3^2", V, "a power, which is not taken"),
    ("\u0663 V", V, "which is not taken"),
    ("5\tV", V, "cannot be shown"),
    ("5 V\0", V, "cannot be shown"),
    ("5\x1b[31m V", V, "cannot be shown"),
    ("(" * 11 + "3" + ")" * 11, V, "at most 10"),
    ("(" * 1_000_000, V, "1000000 characters long"),
    ("1e308 + 1e308", V, "too large"),
    ("1e308 V * 10", V, "too large"),
    ("1e-400 V", V, "too small"),
    ("1e-300 * 1e-300 V", V, "too small"),
]


@pytest.mark.parametrize(("text", "kind", "words"), REFUSED, ids=[repr(row[0][:24]) for row in REFUSED])
def test_refuses_in_one_sentence(text: str, kind: Kind, words: str) -> None:
    said = refusal(text, kind)
    assert words in said
    assert said.endswith(".")


def test_an_error_keeps_its_parts_and_survives_pickling() -> None:
    with pytest.raises(QuantityError) as caught:
        parse("5 A", V)
    error = caught.value
    assert (error.found, error.expected) == ("'5 A' is a current", "a voltage")
    assert str(pickle.loads(pickle.dumps(error))) == str(error)


alphabet = (
    st.sampled_from(list("0123456789..eE+-*/^()%, fpnumkMGTVAWFHzsohmdBCK°²µΩ×·±@\t\0\u0663\u202e")) | st.characters()
)
hostile = st.text(alphabet, max_size=220) | st.lists(
    st.sampled_from(
        ["1", "2.5", "1e9", "(", ")", "+", "-", "*", " ", "V", "A^2", "ohm", "degC", "K", "k", "%", "dB", "/"]
    )
).map("".join)


@given(hostile, st.sampled_from(list(KINDS.values())), st.sampled_from(list(KINDS.values())))
@example("(" * 200, V, W)
@example("9**9**9**9", V, W)
@example("V" * 200, V, W)
@example("1" * 200, V, W)
@example("1" + " V" * 99, V, W)
@example("1 V^9*A^9*V^9*A^9*V^9", V, W)
@example("1e" + "9" * 190, V, W)
@settings(max_examples=400, deadline=None)
def test_any_text_is_a_finite_value_or_a_short_clean_sentence(text: str, kind: Kind, other: Kind) -> None:
    try:
        value = parse(text, kind, other)
    except QuantityError as error:
        said = str(error)
        assert said.isprintable()
        assert len(said) < 240
        assert said.endswith(".")
    else:
        assert math.isfinite(value.si)
        assert value.kind in (kind, other)


# ---------------------------------------------------------------- arithmetic


@given(st.lists(modest, min_size=2, max_size=5), st.sampled_from(["", " V"]))
@settings(deadline=None)
def test_sums_are_python_sums(terms: list[float], unit: str) -> None:
    text = " + ".join(f"{term!r}{unit}" for term in terms)
    assert parse(text, V).si == sum(terms[1:], terms[0])


@given(modest, modest, modest)
@settings(deadline=None)
def test_products_and_brackets_are_python_ones(a: float, b: float, c: float) -> None:
    assert parse(f"{a!r} V * {b!r} A", W).si == a * b
    assert parse(f"{a!r} * ({b!r} V - {c!r})", V).si == a * (b - c) + 0.0
    assert parse(f"({b!r} + {c!r}) * {a!r} A", A).si == (b + c) * a + 0.0
    assert parse(f"{a!r} A * {b!r} ohm + {c!r} V", V).si == a * b + c


# ---------------------------------------------------------------- units, against pint


def test_every_row_of_the_table_is_what_pint_answers() -> None:
    assert list(units.table()) == units.everyday()
    for name, unit in units.table().items():
        assert unit == units.ask_pint(name), name
    assert json.loads(units.render_table()).keys() == units.table().keys()


def test_the_table_lists_every_unit_defined() -> None:
    assert {line.split(" ")[0] for line in units.DEFINITIONS} | {"Ohm"} == {*units.PREFIXABLE, *units.PLAIN}


def test_our_definitions_agree_with_the_ones_pint_ships() -> None:
    """Outside check: pint's own default_en.txt (SI Brochure and CODATA values)."""
    shipped: pint.UnitRegistry[float] = pint.UnitRegistry()
    own = {0: "V", 1: "A", 2: "s", 3: "K", 4: "deg"}
    for name, unit in units.table().items():
        if any(unit.dimension[5:]):
            continue  # pint's dB is a logarithmic unit, ours a plain number
        base = " * ".join(f"{own[i]}**{n}" for i, n in enumerate(unit.dimension[:5]) if n) or "dimensionless"
        theirs = shipped.Quantity(10.0, name.replace("Ohm", "ohm")).to(base).magnitude
        assert 10.0 * unit.factor + unit.offset == pytest.approx(theirs, rel=1e-12), name


@given(finite, st.sampled_from((*units.PREFIXABLE, "min", "h", "deg")), st.sampled_from(["", *units.PREFIXES]))
@settings(deadline=None)
def test_a_number_with_a_unit_is_the_product(x: float, name: str, prefix: str) -> None:
    unit = units.table().get(prefix + name)
    assume(unit is not None)
    assert unit is not None
    kind = next(k for k in KINDS.values() if k.unit and units.table()[units.tidy(k.unit)].dimension == unit.dimension)
    si = x * unit.factor
    assume(math.isfinite(si) and (x == 0 or min(abs(x), abs(si)) > 1e-300))  # subnormals have fewer digits
    assert parse(f"{x!r} {prefix}{name}", kind).si == pytest.approx(si, rel=1e-15, abs=0)


@given(
    st.lists(
        st.tuples(st.sampled_from(["V", "mA", "ohm", "kHz", "uF", "s", "h"]), st.integers(1, 3)), min_size=2, max_size=3
    )
)
@settings(deadline=None)
def test_compounds_are_the_products_of_their_parts(parts: list[tuple[str, int]]) -> None:
    text = " ".join(name if power == 1 else f"{name}^{power}" for name, power in parts)
    unit = units.lookup(units.tidy(text))
    assert unit is not None
    factor, dimension = 1.0, units.NUMBER
    for name, power in parts:
        one = units.table()[name]
        factor *= one.factor**power
        dimension = tuple(a + b * power for a, b in zip(dimension, one.dimension, strict=True))
    assert unit.factor == pytest.approx(factor, rel=1e-12)
    assert (unit.offset, unit.dimension) == (0.0, dimension)


@given(st.text(st.sampled_from("AVWsHzFmkuohdeBC^*/ 0123456789.()_,"), max_size=30))
@settings(deadline=None)
def test_pint_sees_nothing_but_whitelisted_names(text: str) -> None:
    seen: list[str] = []

    def spy(tidied: str) -> units.Unit:
        seen.append(tidied)
        return units.Unit(1.0, 0.0, units.NUMBER)

    forget()
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(units, "ask_pint", spy)
        units.lookup(text)
        with contextlib.suppress(QuantityError):
            parse("2 " + text, V)
    forget()
    for tidied in seen:
        assert len(tidied) <= 24
        assert "**" not in tidied
        assert all(name in units.table() for name in units.names_in(tidied))


def fresh(code: str) -> str:
    script = f"import sys\n{code}\nprint(sorted({{'pint', 'numpy', 'textual'}} & set(sys.modules)))"
    return subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True).stdout.strip()


def test_everyday_text_is_read_without_pint_or_numpy() -> None:
    code = """
from budget import units
from budget.quantity import KINDS, QuantityError, parse, show
for name in units.everyday():
    for kind in KINDS.values():
        try:
            show(parse("2 * 3 " + name, kind).si, kind)
        except QuantityError:
            pass
try:
    parse("5 furlong", KINDS["voltage"])
except QuantityError:
    pass
parse("28 V * 2 A", KINDS["power"])
parse("0.5 A^2 s", KINDS["i2t"])
"""
    assert fresh(code) == "[]"


def test_a_compound_brings_pint_in() -> None:
    assert "pint" in fresh("from budget.quantity import KINDS, parse\nparse('5 V*A', KINDS['power'])")


def test_warming_from_many_threads_builds_one_registry() -> None:
    code = """
import threading
from budget import units
from budget.quantity import KINDS, parse, warm
threads = [threading.Thread(target=warm) for _ in range(4)]
[t.start() for t in threads]
parse("5 V*A", KINDS["power"])
[t.join() for t in threads]
assert units._build_registry.cache_info().currsize == 1
"""
    assert "pint" in fresh(code)


def test_reading_from_many_threads_agrees() -> None:
    texts = [f"{n} {unit}" for n in range(1, 20) for unit in ("V*A", "kV*mA", "J/s", "uW", "V^2/ohm")]
    want = [parse(text, W).si for text in texts]
    forget()
    got: list[list[float]] = []
    threads = [threading.Thread(target=lambda: got.append([parse(text, W).si for text in texts])) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert got == [want] * 4


# ---------------------------------------------------------------- showing


@pytest.mark.parametrize(
    ("si", "kind", "text"),
    [
        (None, V, ""),
        (0.0, V, "0 V"),
        (-0.0, RATIO, "0 %"),
        (28.0, V, "28 V"),
        (-28.0, V, "-28 V"),
        (4.7e-6, FARAD, "4.7 uF"),
        (999.96, HZ, "1 kHz"),
        (999.94, HZ, "999.9 Hz"),
        (999.96e-6, V, "1 mV"),
        (550e3, HZ, "550 kHz"),
        (0.008, OHM, "8 mohm"),
        (1e-18, FARAD, "1e-18 F"),
        (1e15, HZ, "1e15 Hz"),
        (1500.0, S, "1500 s"),
        (0.8512, RATIO, "85.12 %"),
        (0.85, RATIO, "85 %"),
        (1.0, RATIO, "100 %"),
        (71.0, TEMP, "71 degC"),
        (-40.004, TEMP, "-40 degC"),
        (6.0, DB, "6 dB"),
        (54.25, DBUA, "54.25 dBuA"),
        (90.0, DEG, "90 deg"),
        (0.5, I2T, "0.5 A^2 s"),
        (2.5e-7, I2T, "2.5e-7 A^2 s"),
        (123456.0, W, "123.5 kW"),
    ],
)
def test_shows(si: float | None, kind: Kind, text: str) -> None:
    assert show(si, kind) == text
    number, unit = show_parts(si, kind)
    assert f"{number} {unit}".strip() == text


def test_fewer_digits_and_a_unit_in_the_heading() -> None:
    assert show(4.7432e-6, FARAD, 2) == "4.7 uF"
    assert show(476.0, V, 1) == "500 V"
    assert show_in(4.7e-6, FARAD, "u") == "4.7"
    assert show_in(0.85, RATIO) == "85"
    assert show_in(None, V, "m") == ""


@pytest.mark.parametrize("si", [math.nan, math.inf, -math.inf])
def test_what_is_not_finite_is_not_shown(si: float) -> None:
    with pytest.raises(ValueError, match="cannot be shown"):
        show(si, V)


@given(finite, st.sampled_from(list(KINDS.values())), st.integers(1, 9))
@settings(deadline=None)
def test_what_is_shown_reads_back(si: float, kind: Kind, digits: int) -> None:
    assume(si == 0 or 1e-300 < abs(si) < 1e300)
    assume(kind is not TEMP or si > -273)
    text = show(si, kind, digits)
    assert text.isascii()
    value = parse(text, kind)
    assert value.kind is kind
    assert value.si == pytest.approx(si, rel=0.501 * 10.0 ** (1 - digits), abs=0)
    assert show(value.si, kind, digits) == text


@given(st.floats(min_value=1e-15, max_value=9.9994e14), st.sampled_from([V, A, W, OHM, HENRY, FARAD, HZ]))
@settings(deadline=None)
def test_a_prefix_leaves_one_to_three_digits_before_the_point(si: float, kind: Kind) -> None:
    number, _ = show_parts(si, kind)
    assert 1 <= float(number) < 1000
    assert len(number.replace(".", "")) <= 4
