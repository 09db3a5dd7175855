"""The gate bus against independent integrators: scipy on the node equations, and ngspice.

The independent circuit is written out from its parts: the wiper is a node of its
own between the two halves of the track, and nothing is taken to be periodic; it
starts anywhere and runs until it has forgotten its start.
"""

from __future__ import annotations

import itertools
import math
import re
import subprocess
from collections.abc import Callable
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from sweepset.models.circuit import Circuit, load_circuit
from sweepset.models.errors import InputError
from sweepset.models.gatebus import (
    BusWave,
    rate_range_hz,
    solve_bus,
    trimmer_position,
    wiper_source,
)
from sweepset.models.knob import knob_ohm
from sweepset.models.quantity import Setting, parse_rate, parse_trim

Array = npt.NDArray[np.float64]
MEASURED = {
    "kind": "measured",
    "low": "-1.1 V",
    "high": "0.9 V",
    "knob": {"slowest": "0.1 Hz", "fastest": "5 Hz"},
}


def circuit_of(kind: str) -> Circuit:
    """Return a circuit of each kind of oscillator and bus."""
    if kind == "direct without bus capacitor":
        return load_circuit("egret").with_changes(bus__capacitor_f=None)
    if kind == "direct, heavily loaded, slow bus":
        return load_circuit("egret").with_changes(
            bus__sweep_ohm=330e3,
            bus__capacitor_f=2.2e-6,
            bus__bias_ohm=220e3,
            oscillator__timing_capacitor_f=1e-6,
            oscillator__knob__track_ohm=47e3,  # more would stop it
        )
    if kind.startswith("measured"):
        return load_circuit("heron").with_changes(oscillator={**MEASURED, "shape": kind.split()[1]})
    return load_circuit(kind)


KINDS = [
    "wren",  # relaxation, buffered, no bus capacitor
    "heron",  # relaxation, buffered
    "egret",  # relaxation, direct
    "direct without bus capacitor",
    "direct, heavily loaded, slow bus",
    "plover",  # triangle
    "stork",  # sine, half-drain network
    "measured triangle",
    "measured sine",
]


def bus_current(circuit: Circuit, trimmer: float) -> Callable[[float, float], float]:
    """Return the current into the bus node at a bus and a tap voltage, by node equations [A]."""
    bus, track = circuit.bus, circuit.bus.trimmer
    reference = circuit.reference_above_ground_v
    heights = {"supply": circuit.supply.voltage_v, "reference": reference, "ground": 0.0}
    top_v = heights[str(track.top)] - reference
    bottom_v = heights[str(track.bottom)] - reference
    upper_s = 1.0 / (track.top_ohm + (1.0 - trimmer) * track.track_ohm)
    lower_s = 1.0 / (track.bottom_ohm + trimmer * track.track_ohm)
    bias_s = 1.0 / bus.bias_ohm

    def current(bus_v: float, tap_v: float) -> float:
        wiper_v = (upper_s * top_v + lower_s * bottom_v + bias_s * bus_v) / (
            upper_s + lower_s + bias_s
        )
        total = (wiper_v - bus_v) * bias_s + (tap_v - bus_v) / bus.sweep_ohm
        if bus.half_drain is not None:
            for _ in circuit.stages:
                total -= bus_v / (bus.half_drain.from_bus_ohm + bus.half_drain.from_drain_ohm)
        return total

    return current


def bus_without_capacitor(current: Callable[[float, float], float], tap_v: float) -> float:
    """Return the bus voltage at which no current is left over; the node is linear."""
    at_zero, at_one = current(0.0, tap_v), current(1.0, tap_v)
    return at_zero / (at_zero - at_one)


def integrate(
    circuit: Circuit, trimmer: float, rate: Setting, settle_s: float, period_s: float
) -> tuple[float, Callable[[Array], tuple[Array, Array]]]:
    """Return the time of a lowest tap turn, long after the start, and tap and bus from there on."""
    current = bus_current(circuit, trimmer)
    capacitor = circuit.bus.capacitor_f
    oscillator = circuit.oscillator
    low_rail, high_rail = circuit.rails_v
    pieces: list[tuple[float, float, Callable[[Array], Array]]] = []
    turns: list[float] = []

    def slopes(output: float) -> Callable[[float, Array], list[float]]:
        def slope(time: float, state: Array) -> list[float]:
            tap = state[0]
            bus = state[1] if capacitor else bus_without_capacitor(current, tap)
            if oscillator.kind == "relaxation":
                resistance = knob_ohm(oscillator.knob, rate.rotation or 0.0)
                into = (output - tap) / resistance
                if oscillator.tap == "direct":
                    into -= (tap - bus) / circuit.bus.sweep_ohm
                rise = into / oscillator.timing_capacitor_f
            elif oscillator.kind == "triangle":
                resistance = knob_ohm(oscillator.knob, rate.rotation or 0.0)
                rise = -output / resistance / oscillator.timing_capacitor_f
            else:
                rise = output
            return [rise, current(bus, tap) / capacitor if capacitor else 0.0]

        return slope

    if oscillator.kind == "relaxation":
        share = oscillator.threshold_in_ohm / (
            oscillator.threshold_in_ohm + oscillator.threshold_out_ohm
        )
        # tap against the plus input; high output charges upwards
        trips = {high_rail: share * high_rail, low_rail: share * low_rail}
        other = {high_rail: low_rail, low_rail: high_rail}
        rising = high_rail
    elif oscillator.kind == "triangle":
        # the plus input, (tap r_out + output r_in)/(r_in + r_out), passes the reference rail
        ratio = oscillator.threshold_in_ohm / oscillator.threshold_out_ohm
        trips = {rail: -rail * ratio for rail in (low_rail, high_rail)}
        other = {high_rail: low_rail, low_rail: high_rail}
        rising = low_rail
    else:
        speed = 2.0 * 2.0 / period_s  # the measured triangle's 2 V swing in half a period
        trips = {speed: 0.9, -speed: -1.1}
        other = {speed: -speed, -speed: speed}
        rising = speed

    output, now, state = rising, 0.0, np.array([min(trips.values()), -1.0])
    # With no signal on the tap's starting side the first stretch may be of any length.
    while now < settle_s + 4.0 * period_s:
        level = trips[output]

        def trip(time: float, y: Array, level: float = level) -> float:
            return float(y[0]) - level

        trip.terminal = True  # type: ignore[attr-defined]
        trip.direction = 1.0 if output == rising else -1.0  # type: ignore[attr-defined]
        done = solve_ivp(
            slopes(output),
            (now, now + 100.0 * period_s),
            state,
            method="DOP853",
            events=trip,
            dense_output=True,
            rtol=1e-11,
            atol=1e-12,
            max_step=period_s / 20.0,
        )
        assert done.status == 1, "no switching"
        pieces.append((now, done.t[-1], done.sol))
        if output == rising:
            turns.append(now)
        now, state, output = done.t[-1], done.y[:, -1], other[output]

    def waves(times: Array) -> tuple[Array, Array]:
        tap, bus = np.empty_like(times), np.empty_like(times)
        for start, end, solution in pieces:
            inside = (times >= start) & (times <= end)
            if not np.any(inside):
                continue
            values = solution(times[inside])
            tap[inside] = values[0]
            bus[inside] = (
                values[1]
                if capacitor
                else [bus_without_capacitor(current, value) for value in values[0]]
            )
        return tap, bus

    return next(turn for turn in turns if turn > settle_s), waves


@pytest.mark.parametrize("kind", [kind for kind in KINDS if kind not in ("stork", "measured sine")])
def test_against_scipy_on_the_node_equations(kind: str) -> None:
    circuit, trimmer, rate = circuit_of(kind), 0.41, parse_rate("3:00")
    if kind.startswith("measured"):
        rate = Setting("1Hz", None, 1.0)
    found = solve_bus(circuit, trimmer, rate)
    # exp(-20) of the start is left: 2e-9.
    bus_s = 1.0 / circuit.bus.bias_ohm + 1.0 / circuit.bus.sweep_ohm
    settle_s = 20.0 * (circuit.bus.capacitor_f or 0.0) / bus_s + 2.0 * found.period_s
    start, waves = integrate(circuit, trimmer, rate, settle_s, found.period_s)
    times = np.linspace(0.0, 2.0, 401) * found.period_s
    tap, bus = waves(start + times)
    # The integrator holds 1e-11 relative per step; some hundred steps per period and the
    # settling time make 1e-8 V of it.
    assert np.max(np.abs(found.tap_v(times) - tap)) < 1e-7
    assert np.max(np.abs(found.gate_v(times) - bus)) < 1e-7


@pytest.mark.parametrize("kind", ["stork", "measured sine"])
def test_sines_against_scipy_on_the_node_equations(kind: str) -> None:
    circuit, trimmer = circuit_of(kind), 0.41
    rate = Setting("2Hz", None, 2.0)
    found = solve_bus(circuit, trimmer, rate)
    mean, peak = (0.0, 3.0) if kind == "stork" else (-0.1, 1.0)
    current, capacitor = bus_current(circuit, trimmer), circuit.bus.capacitor_f
    assert capacitor is not None

    def tap(time: float) -> float:
        return mean - peak * math.cos(2.0 * math.pi * 2.0 * time)

    done = solve_ivp(
        lambda t, y: [current(y[0], tap(t)) / capacitor],
        (0.0, 2.0),
        [0.0],
        method="Radau",
        dense_output=True,
        rtol=1e-9,
        atol=1e-11,
        max_step=0.01,
    )
    # The bus forgets its start within 22 nF x 160 kohm = 4 ms or faster.
    times = np.linspace(1.0, 2.0, 401)
    assert np.max(np.abs(found.tap_v(times) - [tap(t) for t in times])) < 1e-12
    assert np.max(np.abs(found.gate_v(times) - done.sol(times)[0])) < 1e-6


NETLIST = """relaxation oscillator and gate bus, voltages from the reference rail
VT top 0 {top}
VB bottom 0 {bottom}
RU top wiper {upper}
RL wiper bottom {lower}
RB wiper bus {bias}
RS tap bus {sweep}
{bus_capacitor}
CT timing 0 {timing_f} IC={timing_v}
RT square timing {timing_ohm}
RI trip 0 {threshold_in}
RO square trip {threshold_out}
BQ driven 0 V={{{middle}+{half}*tanh(1e6*(V(trip)-V(timing)))}}
RQ driven square 1m
CQ square 0 100u IC={high}
{tap}
.options reltol=1e-7 vntol=1e-9 abstol=1e-14 chgtol=1e-20 gmin=1e-16 method=trap itl4=200
.control
set wr_singlescale
set numdgt=14
tran {step} {stop} 0 {step} uic
wrdata out.txt v(timing) v(bus)
quit
.endc
.end
"""


@pytest.mark.ngspice
@pytest.mark.parametrize("name", ["heron", "egret"])
def test_against_ngspice(name: str, tmp_path: Path) -> None:
    # Started from sweepset's initial state: had it not been the periodic one, the second
    # period would differ from the first.
    circuit, trimmer, rotation = load_circuit(name), 0.41, 0.9
    found = solve_bus(circuit, trimmer, Setting("90%", rotation, None))
    part, bus, track = circuit.oscillator, circuit.bus, circuit.bus.trimmer
    assert part.kind == "relaxation"
    reference = circuit.reference_above_ground_v
    low, high = circuit.rails_v
    start = found.initial_state()
    netlist = NETLIST.format(
        top=0.0,
        bottom=-reference,
        upper=max(track.top_ohm + (1.0 - trimmer) * track.track_ohm, 1e-3),
        lower=track.bottom_ohm + trimmer * track.track_ohm,
        bias=bus.bias_ohm,
        sweep=bus.sweep_ohm,
        bus_capacitor=f"CB bus 0 {bus.capacitor_f} IC={start.bus_v!r}",
        timing_f=part.timing_capacitor_f,
        timing_v=repr(start.tap_v),
        timing_ohm=knob_ohm(part.knob, rotation),
        threshold_in=part.threshold_in_ohm,
        threshold_out=part.threshold_out_ohm,
        middle=0.5 * (low + high),
        half=0.5 * (high - low),
        high=high,
        tap="ETAP tap 0 timing 0 1" if part.tap == "buffered" else "RTAP timing tap 1m",
        step=found.period_s / 20000.0,
        stop=2.0 * found.period_s,
    )
    (tmp_path / "bus.cir").write_text(netlist, encoding="ascii")
    done = subprocess.run(
        ["ngspice", "-n", "-b", "bus.cir"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert (tmp_path / "out.txt").exists(), done.stdout + done.stderr
    time, tap, gate = np.loadtxt(tmp_path / "out.txt").T
    assert time[-1] == pytest.approx(2.0 * found.period_s, rel=1e-6)
    # ngspice's op amp needs a step or two of 11 us to switch, four times in two periods, while
    # the capacitor moves at up to 30 V/s; at gains of 1e5 and 1e6 it comes to 4e-4 and 3e-4 V.
    assert np.max(np.abs(found.tap_v(time) - tap)) < 1e-3
    assert np.max(np.abs(found.gate_v(time) - gate)) < 1e-3
    # And the direct tap is not the buffered one.
    if part.tap == "direct":
        buffered = circuit.with_changes(oscillator__tap="buffered")
        other = solve_bus(buffered, trimmer, Setting("90%", rotation, None))
        assert np.max(np.abs(other.tap_v(time) - tap)) > 5e-3


@pytest.mark.parametrize("kind", KINDS)
def test_an_hour_at_768_khz_does_not_drift(kind: str) -> None:
    found = solve_bus(circuit_of(kind), 0.41, parse_rate("3:00"))
    rate_hz, count = 768_000.0, 50_000
    start = int(3600 * rate_hz)
    late = found.sample_gate(start, count, rate_hz)
    # The same phase, reached without a long time: exact rational arithmetic on the frames.
    from fractions import Fraction

    period = Fraction(found.period_s)
    phase = Fraction(start, int(rate_hz)) % period
    early = found.gate_v(float(phase) + np.arange(count) / rate_hz)
    # The hour as a number of seconds is good to 2.3e-13 s; the bus moves at under 100 V/s.
    assert np.max(np.abs(late - early)) < 1e-10
    assert np.max(np.abs(found.gate_v((start + np.arange(count)) / rate_hz) - early)) < 1e-9


@pytest.mark.parametrize("kind", KINDS)
def test_blocks_join(kind: str) -> None:
    found = solve_bus(circuit_of(kind), 0.3, parse_rate("5:00"))
    whole = found.sample_gate(1000, 200_000, 192_000.0)
    cuts = [1000, 17_384, 17_385, 83_001, 201_000]
    parts = [found.sample_gate(a, b - a, 192_000.0) for a, b in itertools.pairwise(cuts)]
    assert np.max(np.abs(np.concatenate(parts) - whole)) < 1e-12


@settings(max_examples=40)
@given(st.sampled_from(KINDS), st.floats(0.0, 1.0), st.floats(0.0, 1.0))
def test_period_ends_and_mean(kind: str, trimmer: float, rotation: float) -> None:
    found = solve_bus(circuit_of(kind), trimmer, Setting("x", rotation, None))
    times = np.linspace(0.0, found.period_s, 4001)
    for values, wave in ((found.gate_v(times), found.gate), (found.tap_v(times), found.tap)):
        swing = wave.high_v - wave.low_v
        assert wave.low_v - 1e-12 <= values.min()
        assert values.max() <= wave.high_v + 1e-12
        assert values.min() - wave.low_v < 2e-3 * swing
        assert wave.high_v - values.max() < 2e-3 * swing
        assert abs(values[0] - values[-1]) < 1e-9
        # Trapezoidal sum; a corner within a step costs its square.
        assert float(np.mean(values[:-1])) == pytest.approx(wave.mean_v, abs=1e-5)
    # Time 0 is the tap at its lowest.
    assert found.tap_v(0.0) == pytest.approx(found.tap.low_v, abs=1e-9)
    state = found.initial_state()
    assert (state.tap_v, state.bus_v) == (float(found.tap_v(0.0)), float(found.gate_v(0.0)))
    assert found.rate_hz == pytest.approx(1.0 / found.period_s)
    assert found.rotation == pytest.approx(rotation)


@pytest.mark.parametrize("kind", KINDS)
def test_gate_rises_with_the_trimmer(kind: str) -> None:
    # Every circuit here has the reference rail at the top and ground at the bottom.
    means = [
        solve_bus(circuit_of(kind), place, parse_rate("3:00")).mean_v
        for place in np.linspace(0.0, 1.0, 11)
    ]
    assert np.all(np.diff(means) > 0.0)


def test_direct_with_a_vast_sweep_resistor_is_the_unloaded_oscillator() -> None:
    # Limiting case: 100 Mohm draws 1e-3 of the timing current or less.
    light = load_circuit("egret").with_changes(bus__sweep_ohm=100e6)
    free = light.with_changes(oscillator__tap="buffered")
    rate = parse_rate("3:00")
    loaded, unloaded = solve_bus(light, 0.5, rate), solve_bus(free, 0.5, rate)
    assert loaded.period_s == pytest.approx(unloaded.period_s, rel=1e-3)
    assert loaded.period_s != unloaded.period_s
    assert loaded.mean_v == pytest.approx(unloaded.mean_v, abs=1e-3)


def test_no_bus_capacitor_is_the_limit_of_a_small_one() -> None:
    times = np.linspace(0.0, 0.2, 301)
    for name in ("egret", "heron"):
        circuit = load_circuit(name)
        none = solve_bus(circuit.with_changes(bus__capacitor_f=None), 0.5, parse_rate("5:00"))
        small = solve_bus(circuit.with_changes(bus__capacitor_f=10e-12), 0.5, parse_rate("5:00"))
        # A time constant of 10 pF x 700 kohm = 7 us at up to 10 V/s, and at a corner.
        assert np.max(np.abs(none.gate_v(times) - small.gate_v(times))) < 1e-4


def test_wiper_end_of_track_without_bias_resistor_is_a_held_bus() -> None:
    # Bias resistor 0 and the wiper at an end without end resistor: the rail itself, but for
    # the ohm of the wiper's contact against megohms.
    circuit = load_circuit("heron").with_changes(bus__bias_ohm=0.0)
    held = solve_bus(circuit, 1.0, parse_rate("noon"))
    assert (held.low_v, held.high_v) == pytest.approx((0.0, 0.0), abs=2e-6)
    for tap in ("direct", "buffered"):
        stiff = solve_bus(circuit.with_changes(oscillator__tap=tap), 1.0, parse_rate("noon"))
        frames = np.arange(300_000)
        # A rate of 1e8 per second beside one of 1 per second, by both ways of evaluating.
        found = stiff.sample_gate(0, len(frames), 96_000.0)
        assert np.max(np.abs(found - stiff.gate_v(frames / 96_000.0))) < 1e-12
        assert np.max(np.abs(found)) < 1e-5


@settings(max_examples=200)
@given(
    st.floats(4.0, 6.0),
    st.floats(4.0, 6.0),
    st.floats(-9.0, -4.5),
    st.floats(-7.0, -5.0),
    st.floats(2.5, 4.5),
    st.floats(0.0, 1.0),
)
def test_loaded_tap_turns_where_it_switches(
    sweep: float, bias: float, bus: float, timing: float, divider: float, trimmer: float
) -> None:
    # The claim in LoadedOscillator.solve, over circuits far beyond sensible ones: from the lower
    # threshold the tap rises at once, to the upper one, and its current is the parts' own.
    circuit = load_circuit("egret").with_changes(
        bus__sweep_ohm=10.0**sweep,
        bus__bias_ohm=10.0**bias,
        bus__capacitor_f=10.0**bus,
        oscillator__timing_capacitor_f=10.0**timing,
        oscillator__threshold_in_ohm=10.0**divider,
    )
    part = circuit.oscillator
    assert part.kind == "relaxation"
    share = part.threshold_in_ohm / (part.threshold_in_ohm + part.threshold_out_ohm)
    try:
        found = solve_bus(circuit, trimmer, parse_rate("3:00"))
    except InputError:
        return
    low, high = circuit.rails_v
    assert found.tap.low_v == pytest.approx(share * low, abs=1e-9)
    assert found.tap.high_v == pytest.approx(share * high, abs=1e-9)
    state = found.initial_state()
    into = (high - state.tap_v) / knob_ohm(part.knob, 0.8)
    into += (state.bus_v - state.tap_v) / circuit.bus.sweep_ohm
    assert into > 0.0
    # Both ends of the period are the same state.
    end = found.period_s * (1.0 - 1e-14)
    assert float(found.gate_v(end)) == pytest.approx(state.bus_v, abs=1e-9)


def test_a_loaded_oscillator_may_stop_and_says_what_to_change() -> None:
    circuit = load_circuit("egret").with_changes(bus__sweep_ohm=100e3, bus__bias_ohm=10e3)
    with pytest.raises(InputError) as fault:
        solve_bus(circuit, 0.0, parse_rate("7:00"))
    message = str(fault.value)
    assert re.search(
        r"egret: the oscillator does not oscillate.*bus.sweep_resistor = 100 kohm", message
    )
    for key in ("bus.sweep_resistor", "oscillator.threshold_in", "oscillator.tap = 'buffered'"):
        assert key in message
    # With less resistance in the knob the load matters less, and it starts.
    assert solve_bus(circuit, 0.0, parse_rate("5:00")).rate_hz > 1.0


def test_rate_by_value_on_a_loaded_oscillator() -> None:
    circuit = load_circuit("egret")
    for wanted in (0.1, 0.8, 5.0):
        found = solve_bus(circuit, 0.3, Setting(f"{wanted}Hz", None, wanted))
        assert found.rate_hz == pytest.approx(wanted, rel=1e-12)
        assert found.rotation is not None
        again = solve_bus(circuit, 0.3, Setting("x", found.rotation, None))
        assert again.rate_hz == pytest.approx(wanted, rel=1e-9)
    with pytest.raises(InputError, match=r"rate 20Hz: out of reach.*give a rate within"):
        solve_bus(circuit, 0.3, parse_rate("20Hz"))


@pytest.mark.parametrize("kind", KINDS)
def test_rate_range_is_what_the_ends_give(kind: str) -> None:
    circuit = circuit_of(kind)
    slowest, fastest = rate_range_hz(circuit)
    for text, rate in (("7:00", slowest), ("5:00", fastest)):
        assert solve_bus(circuit, 0.5, parse_rate(text)).rate_hz == pytest.approx(rate, rel=1e-12)
        assert solve_bus(circuit, 0.5, Setting("end", None, rate)).rate_hz == pytest.approx(rate)


@pytest.mark.parametrize("kind", KINDS)
def test_wiper_mean_by_node_equations(kind: str) -> None:
    circuit, trimmer = circuit_of(kind), 0.41
    found = solve_bus(circuit, trimmer, parse_rate("3:00"))
    track, reference = circuit.bus.trimmer, circuit.reference_above_ground_v
    wiper = found.wiper_mean_above_ground_v - reference
    # Kirchhoff's current law at the wiper, on means.
    into = (0.0 - wiper) / (track.top_ohm + (1.0 - trimmer) * track.track_ohm)
    into += (-reference - wiper) / (track.bottom_ohm + trimmer * track.track_ohm)
    into += (found.mean_v - wiper) / circuit.bus.bias_ohm
    assert abs(into) < 1e-15 * 1e6  # nanoamperes, of tens of microamperes


@pytest.mark.parametrize("kind", KINDS)
def test_trimmer_by_wiper_voltage(kind: str) -> None:
    circuit = circuit_of(kind)
    position = trimmer_position(circuit, parse_trim("2.31V"))
    found = solve_bus(circuit, position, parse_rate("noon"))
    assert found.wiper_mean_above_ground_v == pytest.approx(2.31, abs=1e-9)
    # The unloaded wiper would be elsewhere: a meter reads the loaded one.
    open_v = wiper_source(circuit, position).open_v + circuit.reference_above_ground_v
    assert open_v != pytest.approx(2.31, abs=1e-4)


def test_trimmer_settings() -> None:
    circuit = load_circuit("heron")
    assert trimmer_position(circuit, parse_trim("45%")) == pytest.approx(0.45)
    # 270 degrees about noon: 10:30 is 45 degrees left of it.
    assert trimmer_position(circuit, parse_trim("10:30")) == pytest.approx(0.5 - 45.0 / 270.0)
    with pytest.raises(InputError, match=r"trimmer at 7:00: out of reach.*7:30 to 4:30"):
        trimmer_position(circuit, parse_trim("7:00"))
    with pytest.raises(InputError, match=r"out of reach; the wiper goes from 0\.\d+ V to 5\.\d+ V"):
        trimmer_position(circuit, parse_trim("7V"))
    with pytest.raises(InputError, match="10 turns has no clock position"):
        trimmer_position(load_circuit("stork"), parse_trim("noon"))
    with pytest.raises(ValueError, match="found for a set by the bias solver"):
        trimmer_position(circuit, parse_trim("auto"))
    # The printed ends are reached.
    for place in (0.0, 1.0):
        end = solve_bus(circuit, place, parse_rate("noon")).wiper_mean_above_ground_v
        assert trimmer_position(circuit, Setting("end", None, end)) == pytest.approx(
            place, abs=1e-9
        )


@pytest.mark.parametrize("trimmer", [-0.01, 1.01, math.nan])
def test_trimmer_position_out_of_range(trimmer: float) -> None:
    with pytest.raises(ValueError, match="must be 0 to 1"):
        solve_bus(load_circuit("heron"), trimmer, parse_rate("noon"))


def test_trimmer_between_a_voltage_and_the_supply() -> None:
    # A rail given as a voltage above ground; at the middle of an equal track the open wiper is
    # half way between 2 V and 9 V.
    trimmer = {"track": "100k", "top": "supply", "bottom": "2 V"}
    circuit = load_circuit("heron").with_changes(bus__trimmer=trimmer)
    assert wiper_source(circuit, 0.5).open_v + 5.1 == pytest.approx(5.5)
    assert wiper_source(circuit, 0.5).resistance_ohm == pytest.approx(25e3)


def test_half_drain_network_loads_the_bus() -> None:
    # Eight stages of 4M7 + 4M7 are 1.175 Mohm to the reference rail. By Millman's rule on means.
    circuit = load_circuit("stork")
    found = solve_bus(circuit, 0.5, parse_rate("noon"))
    source = wiper_source(circuit, 0.5)
    bias_s, sweep_s = 1.0 / (220e3 + source.resistance_ohm), 1.0 / 1e6
    mean = bias_s * source.open_v / (bias_s + sweep_s + 1.0 / 1.175e6)
    assert found.mean_v == pytest.approx(mean, rel=1e-12)


def test_solving_is_quick_enough_for_the_bias_search() -> None:
    # The search asks for thousands of positions. Measured 0.03 ms (buffered) and 0.4 ms
    # (direct); ten times that still passes on a busy machine.
    import timeit

    for name, most in (("heron", 1e-3), ("egret", 5e-3)):
        circuit, rate = load_circuit(name), parse_rate("noon")

        def solve(circuit: Circuit = circuit, rate: Setting = rate) -> BusWave:
            return solve_bus(circuit, 0.4, rate)

        assert min(timeit.repeat(solve, number=20, repeat=5)) / 20 < most
