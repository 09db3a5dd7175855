"""Fixture readings against published figures and scipy's root finder on the JFET law."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq
from sweepset.models.errors import InputError
from sweepset.models.fixture import (
    Conditions,
    Fixture,
    Meter,
    drift_per_kelvin,
    expected_reading,
    load_fixture,
    parse_fixture,
    parse_meter,
)
from sweepset.models.jfet import Jfet

# The reference part of check-values: Vp -2 V, Idss 4 mA.
REF = Jfet(-2.0, 1e-3, knee_v=0.0)
METER = "0.5 % + 2 counts of 1 mV"


def fixture(**readings: dict[str, Any]) -> Fixture:
    return parse_fixture({"reading": readings}, "f.toml")


def servo(**changes: Any) -> Any:
    keys = {"kind": "servo", "supply": "9", "reference": "4.5", "resistor": "10k", "meter": METER}
    return fixture(r={**keys, **changes}).readings["r"]


def source(**changes: Any) -> Any:
    keys = {"kind": "source-resistor", "supply": "20", "meter": METER}
    return fixture(r={**keys, **changes}).readings["r"]


def idss(**changes: Any) -> Any:
    return fixture(r={"kind": "idss", "meter": "1 %", **changes}).readings["r"]


def cutoff(current: str, **changes: Any) -> Any:
    keys = {"kind": "cutoff", "drain": "10", "test_current": current, "meter": METER}
    return fixture(r={**keys, **changes}).readings["r"]


def test_usual_servo_fixture_holds_450_microamperes_at_half_the_supply() -> None:
    # k1, common practice, no published source: 0.450 mA, 4.5 V; the meter reads 4.5 V + Vgs.
    point = servo().implies(1.262, servo().conditions())
    assert point.current_a == pytest.approx(0.450e-3, rel=1e-12)
    assert point.drain_v == pytest.approx(4.5, rel=1e-12)
    assert point.gate_v == pytest.approx(1.262 - 4.5, rel=1e-12)


def test_mean_gate_voltage_of_a_usual_matched_set() -> None:
    # k3, common practice, no published source: mean |Vgs| 3.238 V, range 1.82 % of it.
    gate = servo().implies([1.241, 1.255, 1.300, 1.252], servo().conditions()).gate_v
    assert -np.mean(gate) == pytest.approx(3.238, abs=5e-4)
    assert np.ptp(gate) / -np.mean(gate) == pytest.approx(0.0182, abs=5e-5)


@pytest.mark.parametrize(
    ("current", "short_mv"), [("1n", 1.0), ("10n", 3.2), ("1u", 31.6), ("10u", 100.0)]
)
def test_cutoff_at_a_test_current(current: str, short_mv: float) -> None:
    # a27, computed there; to the digits printed.
    reading = expected_reading(REF, cutoff(current))
    assert (reading + 2.0) * 1e3 == pytest.approx(short_mv, abs=0.05)


def test_ten_megohm_voltmeter_from_source_to_ground() -> None:
    # a28, computed there: 1.986 V.
    assert expected_reading(REF, source(supply="9")) == pytest.approx(1.986, abs=5e-4)


def test_textbook_self_bias() -> None:
    # a30: Boylestad & Nashelsky's example (figures from memory), exact value 2.588 mA;
    # the 3.3k in the drain leaves 8.87 V, so the part is saturated and 20 V serve as well.
    part = Jfet.from_idss(-6.0, 8e-3, knee_v=0.0)
    volts = expected_reading(part, source(resistor="1k", meter_input="1000M"))
    assert volts == pytest.approx(2.588, abs=5e-4)


def test_idss_reading() -> None:
    # a31: Neamen's example (from memory): 2 mA at Vgs = 0.
    part = Jfet.from_idss(-3.5, 2e-3, knee_v=0.0)
    assert expected_reading(part, idss(drain="9")) == pytest.approx(2e-3, rel=1e-12)


def test_plain_idss_numbers_are_milliamperes() -> None:
    assert idss(drain="9").parse("3.85") == pytest.approx(3.85e-3)
    assert idss(drain="9").parse("3850 uA") == pytest.approx(3.85e-3)
    assert idss(drain="9", unit="uA").parse("3850") == pytest.approx(3.85e-3)


parts = st.builds(
    Jfet,
    cutoff_v=st.floats(-8.0, -0.3),
    beta_a_per_v2=st.floats(1e-4, 2e-2),
    lambda_per_v=st.sampled_from([0.0, 0.02]),
    knee_v=st.sampled_from([0.0, 0.0517]),
)


@settings(max_examples=60, deadline=None)
@given(parts, st.floats(5.0, 45.0))
def test_predictions_solve_the_law(part: Jfet, celsius: float) -> None:
    # An independent method: scipy's bracketing root finder on the scalar law.
    warm = part.at_celsius(celsius)

    def root(function: Any, low: float, high: float) -> float:
        return float(brentq(function, low, high, xtol=1e-14, rtol=1e-14))

    held = servo(supply="9.02", reference="4.51")
    gate = root(lambda g: float(warm.current(g, 4.51)) - 0.451e-3, -12.0, 30.0)
    found = held.predict(_channels(part), held.conditions(celsius))[0]
    assert found == pytest.approx(4.51 + gate, abs=1e-9)

    across = source(supply="9", resistor="2k2")
    load = 1.0 / (1.0 / 2200.0 + 1e-7)
    volts = root(lambda v: float(warm.current(-v, 9.0 - v)) - v / load, 0.0, 9.0)
    found = across.predict(_channels(part), across.conditions(celsius))[0]
    assert found == pytest.approx(volts, abs=1e-9)

    path = idss(supply="9", resistor="470", reads="voltage")
    drain = root(lambda v: float(warm.current(0.0, v)) - (9.0 - v) / 470.0, 0.0, 9.0)
    found = path.predict(_channels(part), path.conditions(celsius))[0]
    assert found == pytest.approx(9.0 - drain, abs=1e-9)

    off = cutoff("1u")
    gate = root(lambda g: float(warm.current(g, 10.0)) / 1e-6 - 1.0, part.cutoff_v - 1.0, 5.0)
    assert off.predict(_channels(part), off.conditions(celsius))[0] == pytest.approx(gate, abs=1e-9)


def _channels(part: Jfet) -> Any:
    from sweepset.models.fixture import Channels

    return Channels.of(part)


@settings(max_examples=40, deadline=None)
@given(parts)
def test_a_reading_s_operating_point_is_the_part_s(part: Jfet) -> None:
    kinds = [servo(low_rail="0"), source(resistor="1k"), idss(supply="9", resistor="100")]
    for kind in [*kinds, cutoff("1u")]:
        at = kind.conditions()
        point = kind.implies(kind.predict(_channels(part), at), at)
        current = part.current(point.gate_v, point.drain_v)
        assert np.allclose(current, point.current_a, rtol=1e-7, atol=0.0)


def test_a_tired_battery_moves_every_reading_by_half_its_sag() -> None:
    # Where the reference is half the supply, 0.1 V of sag moves readings about 50 mV.
    kind = servo(supply="9", reference="50 %")
    fresh, tired = (
        kind.predict(_channels(REF), kind.conditions(supply_v=volts))[0] for volts in (9.0, 8.9)
    )
    assert fresh - tired == pytest.approx(0.05, abs=0.005)


def test_drift_vanishes_at_the_zero_tempco_overdrive_of_the_saturated_current() -> None:
    # a21: 0.629 V for 2.2 mV/K and exponent 2.1 (rule from memory: L. Evans, 1964). At a
    # held current of beta x 0.629^2 the reading stands still while the cut-off moves.
    held_a = 1e-3 * 0.629**2
    kind = servo(resistor=4.5 / held_a)
    drift = drift_per_kelvin(REF, kind, kind.conditions(26.85))
    assert abs(drift.reading_per_k) < 2e-6
    assert drift.cutoff_v_per_k == pytest.approx(-2.2e-3)


def test_side_of_the_zero_tempco_point() -> None:
    # a22: above that point the current falls with temperature, so the servo must raise
    # the gate to hold it; below, the reading falls.
    assert drift_per_kelvin(REF, servo(resistor="2k")).reading_per_k > 1e-4
    assert drift_per_kelvin(REF, servo(resistor="100k")).reading_per_k < -1e-4


def test_idss_tempco() -> None:
    # a25: -0.48 % per kelvin at -2 V.
    drift = drift_per_kelvin(REF, idss(drain="9")).reading_per_k
    assert drift / 4e-3 == pytest.approx(-0.0048, abs=5e-5)


def test_uncertainty_of_one_meter_reading() -> None:
    # i7: 1.234 V, 0.5 % + 2 counts of 1 mV: half-width 8.17 mV, u 4.72 mV.
    meter = parse_meter(METER)
    assert meter.half_width(1.234) == pytest.approx(8.17e-3, abs=1e-15)
    whole = math.hypot(meter.own_u(), float(meter.scale_u(1.234)))
    assert whole == pytest.approx(4.72e-3, abs=5e-6)


def test_published_example_of_a_meter_s_limits() -> None:
    # i6: 1 % + 2 counts at 100.0 V is 98.8 to 101.2 V.
    assert parse_meter("1 % + 2 counts of 0.1 V").half_width(100.0) == pytest.approx(1.2)


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        ("0.5 % + 2 counts of 1 mV", Meter(0.005, 2e-3, "V")),
        ("0.5%+2 mV", Meter(0.005, 2e-3, "V")),
        ("1 count of 10 uA", Meter(0.0, 10e-6, "A")),
        ("1 %", Meter(0.01, 0.0, None)),
    ],
)
def test_ways_of_writing_a_meter_s_accuracy(written: str, expected: Meter) -> None:
    meter = parse_meter(written)
    assert meter.share == pytest.approx(expected.share)
    assert meter.amount == pytest.approx(expected.amount)
    assert meter.unit == expected.unit


@pytest.mark.parametrize("written", ["", "good", "50 %", "0 %", "1 % + ", "1 % + 2 % + 3 mV", 3])
def test_other_accuracies_are_refused(written: object) -> None:
    with pytest.raises(ValueError, match="meter's accuracy"):
        parse_meter(written)


def test_low_rail_is_a_bound_and_shown_as_such() -> None:
    kind = servo()
    assert kind.check(0.051, kind.conditions())
    assert not kind.check(0.2, kind.conditions())
    assert expected_reading(Jfet(-9.0, 1e-3), kind) == pytest.approx(0.05)


@pytest.mark.parametrize(
    ("reading", "words"),
    [
        (
            4.60,
            "above the reference of 4.5 V: this part's Idss is below the test current of 450 uA",
        ),
        (13.0, "below the supply of 9 V; look for a slipped decimal point"),
        (-0.3, "swap the meter's leads"),
    ],
)
def test_impossible_servo_readings(reading: float, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        servo().check(reading, servo().conditions())


def test_a_new_supply_needs_a_new_reference() -> None:
    with pytest.raises(ValueError, match="needs a reference of its own too"):
        servo().conditions(supply_v=8.8)
    assert servo().conditions(supply_v=8.8, reference_v=4.4).reference_v == 4.4
    assert servo(reference="50 %").conditions(supply_v=8.8).reference_v == pytest.approx(4.4)


def test_all_faults_of_a_file_are_reported_with_their_place() -> None:
    data = {
        "reading": {
            "servo_10k": {
                "kind": "servo",
                "supply": "9",
                "reference": "9.5",
                "resistor": "10k",
                "meter": METER,
            },
            "servo": {"kind": "servo", "supply": "9", "reference": "4.5", "resistr": "10k"},
            "x": {"kind": "magic"},
            "y": {"kind": "idss", "meter": "1 %"},
            "z": {"kind": "idss", "meter": "1 % + 1 mV", "drain": "9"},
        },
        "celsius": "hot",
    }
    with pytest.raises(InputError) as caught:
        parse_fixture(data, "f.toml")
    text = str(caught.value)
    assert "f.toml: reading.servo_10k: the reference of 9.5 V must lie between" in text
    assert "f.toml: reading.servo.resistor: missing" in text
    assert "f.toml: reading.servo.resistr: unknown key; did you mean resistor" in text
    assert "f.toml: reading.servo.meter: missing" in text
    assert "f.toml: reading.x kind = 'magic' is not known" in text
    assert "f.toml: reading.y: give either drain, or supply with resistor" in text
    assert "f.toml: reading.z: meter counts are in V, but this reading is in A" in text
    assert "f.toml: celsius: 'hot'" in text


@pytest.mark.parametrize("name", ["note", "Part", "a b", "servo.10k", "1k"])
def test_names_that_cannot_be_columns(name: str) -> None:
    reading = {"kind": "idss", "drain": "9", "meter": "1 %"}
    with pytest.raises(InputError, match=r"f\.toml: reading\."):
        parse_fixture({"reading": {name: reading}}, "f.toml")


def test_missing_file(tmp_path: Any) -> None:
    with pytest.raises(InputError, match="no such fixture file"):
        load_fixture(tmp_path / "f.toml")


def test_conditions_default_to_the_file() -> None:
    assert servo().conditions() == Conditions(27.0, 9.0, 4.5, 10e3, 0.0)
