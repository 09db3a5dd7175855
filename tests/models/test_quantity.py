"""Written quantities: the letter code, engineering notation, settings, and what is refused."""

from __future__ import annotations

import math
import re
import time

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sweepset.models.quantity import format_quantity, parse_quantity, parse_rate, parse_trim

# IEC 60062's own marking examples for resistors and capacitors, from memory; values by hand.
IEC_60062_RESISTORS = {
    "R10": 0.1,
    "R332": 0.332,
    "1R0": 1.0,
    "3R32": 3.32,
    "10R": 10.0,
    "33R2": 33.2,
    "100R": 100.0,
    "332R": 332.0,
    "1K0": 1e3,
    "3K32": 3320.0,
    "10K": 10e3,
    "33K2": 33.2e3,
    "100K": 100e3,
    "332K": 332e3,
    "1M0": 1e6,
    "3M32": 3.32e6,
    "10M": 10e6,
    "33M2": 33.2e6,
    "1G0": 1e9,
}
IEC_60062_CAPACITORS = {
    "p10": 0.1e-12,
    "p332": 0.332e-12,
    "1p0": 1e-12,
    "3p32": 3.32e-12,
    "33p2": 33.2e-12,
    "332p": 332e-12,
    "1n0": 1e-9,
    "3n32": 3.32e-9,
    "33n2": 33.2e-9,
    "100n": 100e-9,
    "1µ0": 1e-6,
    "3µ32": 3.32e-6,
    "10µ": 10e-6,
    "10m": 10e-3,
}


@pytest.mark.parametrize(("text", "ohm"), IEC_60062_RESISTORS.items())
def test_letter_code_of_resistors_iec_60062_from_memory(text: str, ohm: float) -> None:
    assert parse_quantity(text, "ohm") == pytest.approx(ohm, rel=1e-15, abs=0.0)


@pytest.mark.parametrize(("text", "farad"), IEC_60062_CAPACITORS.items())
def test_letter_code_of_capacitors_iec_60062_from_memory(text: str, farad: float) -> None:
    assert parse_quantity(text, "F") == pytest.approx(farad, rel=1e-15, abs=0.0)


# As printed on schematics and typed by people (common practice); values by hand.
@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("39n", "F", 39e-9),
        ("4k7", "ohm", 4700.0),
        ("3M9", "ohm", 3.9e6),
        ("4R7", "ohm", 4.7),
        ("R47", "ohm", 0.47),
        ("0R1", "ohm", 0.1),
        ("4Ω7", "ohm", 4.7),
        ("4.7k", "ohm", 4700.0),
        ("4,7k", "ohm", 4700.0),
        ("0,500", "ohm", 0.5),
        ("47 nF", "F", 47e-9),
        ("47nf", "F", 47e-9),
        ("10 kohm", "ohm", 10e3),
        ("10 Kohms", "ohm", 10e3),
        ("1 Mohm", "ohm", 1e6),
        ("1 M\u03a9", "ohm", 1e6),
        ("1 M\u2126", "ohm", 1e6),
        ("4k7 ohm", "ohm", 4700.0),
        ("10\u00b5", "F", 10e-6),
        ("10\u03bcF", "F", 10e-6),
        ("10u", "F", 10e-6),
        ("2u2", "F", 2.2e-6),
        ("47", "ohm", 47.0),
        ("1e3", "ohm", 1000.0),
        ("1E+3", "ohm", 1000.0),
        ("1e-9", "F", 1e-9),
        ("5V1", "V", 5.1),
        ("2V31", "V", 2.31),
        ("-1V2", "V", -1.2),
        ("\u22121.2\u00a0V", "V", -1.2),
        ("9 v", "V", 9.0),
        ("450 uA", "A", 450e-6),
        ("10 %", "%", 0.1),
        ("0.5%", "%", 0.005),
        ("270 deg", "deg", 270.0),
        ("270°", "deg", 270.0),
        ("0.8 Hz", "Hz", 0.8),
        ("800 mHz", "Hz", 0.8),
        ("21.5 C", "C", 21.5),
        ("-5 °C", "C", -5.0),
        ("10 ms", "s", 0.01),
        (" 4k7\n", "ohm", 4700.0),
        (4700, "ohm", 4700.0),
        (1e-9, "F", 1e-9),
        (0.1, "%", 0.1),
    ],
)
def test_reads_what_people_write(text: str | float, unit: str, value: float) -> None:
    assert parse_quantity(text, unit) == pytest.approx(value, rel=1e-15, abs=0.0)


@pytest.mark.parametrize(
    ("text", "unit", "why"),
    [
        ("1,500", "ohm", "may mean 1500 or 1.500"),
        ("1.5meg", "ohm", "for mega write M"),
        ("1.5Meg", "ohm", "for mega write M"),
        ("3m9", "ohm", "m means milli; for mega write M"),
        ("10M", "F", "M means mega; for micro write u"),
        ("4E7", "ohm", "may mean 4R7 or a power of ten; write 4R7 or 4e7"),
        ("39nF", "ohm", "is a capacitance in farads; expected a resistance in ohms"),
        ("5 V", "F", "is a voltage; expected a capacitance in farads"),
        ("4k7", "F", "'k' does not fit here"),
        ("4n7", "ohm", "'n' does not fit here"),
        ("4k7J", "ohm", "'J' does not fit here"),
        ("10", "%", "lacks its % sign"),
        ("nan", "ohm", "cannot be read"),
        ("inf", "V", "cannot be read"),
        ("1e999", "V", "not a finite number"),
        ("", "F", "is empty"),
        ("  ", "F", "is empty"),
        ("1 2", "F", "cannot be read"),
        ("1.2.3", "V", "cannot be read"),
        ("1_000", "ohm", "cannot be read"),
        ("1'000", "ohm", "cannot be read"),
        ("0x10", "ohm", "does not fit"),
        ("١٠", "ohm", "cannot be read"),
        ("k", "ohm", "cannot be read"),
        ("1e3k", "ohm", "both an exponent and the multiplier"),
        (math.nan, "ohm", "not a finite number"),
        (math.inf, "ohm", "not a finite number"),
        (10**400, "ohm", "far too large"),
        (True, "ohm", "True is not a resistance"),
        ("9" * 41, "ohm", "too long (41 characters)"),
    ],
)
def test_refuses_what_it_would_have_to_guess(text: str | float, unit: str, why: str) -> None:
    with pytest.raises(ValueError, match=re.escape(why)) as fault:
        parse_quantity(text, unit)
    message = str(fault.value)
    assert len(message) < 250
    if "may mean 4R7" not in message:
        # What was expected, with an example.
        assert "for example" in message
    if isinstance(text, str) and len(text) <= 40:
        assert repr(text) in message


def test_long_text_is_refused_at_once() -> None:
    # A second would already be far beyond the microseconds of one length check.
    start = time.perf_counter()
    for text in ("9" * 10_000_000, "1" + " " * 10_000_000 + "k", "1," * 5_000_000):
        with pytest.raises(ValueError, match="too long"):
            parse_quantity(text, "ohm")
    assert time.perf_counter() - start < 1.0


ALPHABET = "0123456789.,eE+-kKMGmunpµRVAFHz%Ω oh"


@given(
    st.text(max_size=60) | st.text(ALPHABET, max_size=8),
    st.sampled_from(["ohm", "F", "V", "A", "Hz", "%", "deg", "s", "C"]),
)
def test_any_text_is_a_finite_number_or_a_plain_refusal(text: str, unit: str) -> None:
    # Whatever the libraries below might raise, a ValueError with a sentence is what comes out.
    try:
        value = parse_quantity(text, unit)
    except ValueError as fault:
        message = str(fault)
    else:
        message = f"accepted, as a finite number: {math.isfinite(value)}"
    assert "expected" in message or "write" in message or message.endswith("True")


# What a schematic carries of each unit: the powers of ten its multipliers reach.
POWERS = {"ohm": (0, 9), "F": (-12, -2), "V": (-6, 0), "A": (-12, -2), "Hz": (-3, 6)}


@given(st.sampled_from(sorted(POWERS)), st.integers(1, 999), st.booleans(), st.data())
def test_what_is_written_reads_back(
    unit: str, digits: int, negative: bool, data: st.DataObject
) -> None:
    power = data.draw(st.integers(*POWERS[unit]))
    value = float(f"{'-' if negative else ''}{digits}e{power}")
    assert parse_quantity(format_quantity(value, unit), unit) == pytest.approx(value, rel=1e-12)


@given(st.integers(10, 999), st.sampled_from("RkMG"), st.integers(1, 2))
def test_letter_code_equals_the_decimal_point(digits: int, letter: str, places: int) -> None:
    # Property of the code itself: the letter stands where the point would.
    text = f"{digits:03d}"
    whole, part = text[:-places], text[-places:]
    plain = f"{whole}.{part}{'' if letter == 'R' else letter}"
    assert parse_quantity(f"{whole}{letter}{part}", "ohm") == parse_quantity(plain, "ohm")


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (4700.0, "ohm", "4.7 kohm"),
        (39e-9, "F", "39 nF"),
        (0.1, "%", "10 %"),
        (0.0, "V", "0 V"),
        (-0.0, "V", "0 V"),
        (-1.2, "V", "-1.2 V"),
        (0.8, "Hz", "0.8 Hz"),
        (270.0, "deg", "270 deg"),
        (1234.5, "deg", "1234.5 deg"),
        (21.5, "C", "21.5 C"),
        (999.9999, "ohm", "1 kohm"),
    ],
)
def test_writes_as_on_a_schematic(value: float, unit: str, text: str) -> None:
    assert format_quantity(value, unit) == text


@pytest.mark.parametrize(
    ("text", "rotation"),
    [
        # check-values k7, common practice without a published source
        ("9:00", 0.2),
        ("noon", 0.5),
        ("12:00", 0.5),
        ("3:00", 0.8),
        ("3 o'clock", 0.8),
        # by the same rule: the ends, and half past
        ("7:00", 0.0),
        ("5:00", 1.0),
        ("1:30", 0.65),
        ("35%", 0.35),
        ("0 %", 0.0),
        ("100%", 1.0),
    ],
)
def test_rate_by_knob_position(text: str, rotation: float) -> None:
    setting = parse_rate(text)
    assert setting.rotation == pytest.approx(rotation, abs=1e-12)
    assert setting.value is None
    trim = parse_trim(text)
    assert (trim.rotation, trim.value) == (setting.rotation, None)


def test_rate_and_trim_by_value() -> None:
    assert parse_rate("0.8Hz").value == 0.8
    assert parse_rate("0,8 Hz").value == 0.8
    assert parse_rate("0.8Hz").rotation is None
    assert parse_trim("2.31V").value == 2.31
    assert parse_trim("2V31").value == 2.31
    auto = parse_trim("auto")
    assert (auto.rotation, auto.value) == (None, None)


@pytest.mark.parametrize(
    ("text", "why"),
    [
        ("6:00", "between 5:00 and 7:00"),
        ("15:00", "not a clock position"),
        ("0:30", "not a clock position"),
        ("9:75", "not a clock position"),
        ("0.8", "the unit is missing"),
        ("9", "the unit is missing"),
        ("120%", "outside 0% to 100%"),
        ("-5%", "outside 0% to 100%"),
        ("2V", "is a voltage; expected a frequency"),
        ("auto", "is not a rate"),
        ("fast", "is not a rate"),
        ("", "is not a rate"),
        ("9:00" * 100, "is not a rate"),
    ],
)
def test_rate_refused(text: str, why: str) -> None:
    with pytest.raises(ValueError, match=re.escape(why)):
        parse_rate(text)


@pytest.mark.parametrize(
    ("text", "why"),
    [("2.31", "the unit is missing"), ("0.8Hz", "is a frequency"), ("", "not a trimmer position")],
)
def test_trim_refused(text: str, why: str) -> None:
    with pytest.raises(ValueError, match=re.escape(why)):
        parse_trim(text)
