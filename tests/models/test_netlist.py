"""The netlist, run in ngspice and held against the models it was written from."""

import re

import numpy as np
import pytest
from numpy.testing import assert_allclose
from reference.ngspice_runner import run
from scipy.optimize import brentq
from sweepset.models.chain import break_hz, unit_response, wet_response
from sweepset.models.circuit import load_circuit, shipped_circuits
from sweepset.models.gatebus import rate_range_hz, solve_bus
from sweepset.models.jfet import DEFAULT_KNEE_V, Jfet, drain_current
from sweepset.models.netlist import write_netlist
from sweepset.models.quantity import parse_rate

SHIPPED = sorted(shipped_circuits())
EXACT = ".options reltol=1e-6 vntol=1e-9 abstol=1e-12 gmin=1e-16 tnom=27"


def parts(count: int, knee_v: float = DEFAULT_KNEE_V) -> list[Jfet]:
    return [
        Jfet(-1.8 - 0.07 * n, 1e-3 * (1 + 0.05 * n), 0.01, knee_v, label=f"J{n + 1:02d}")
        for n in range(count)
    ]


def held_bus_v(circuit, gate_v: float) -> float:
    """Return the bus voltage that puts the gates at `gate_v` with the drains at rest."""
    return gate_v / (1.0 - circuit.half_drain_share)


def slope_at_rest(circuit, index: int, part: Jfet, bus_v: float) -> float:
    """Return the conductance of channel and gate network at the plus input's direct voltage.

    The half-drain network pulls the plus input some millivolts towards the bus.
    """
    network, k = circuit.bus.half_drain, circuit.half_drain_share
    pull_s = 0.0 if network is None else 1.0 / (network.from_bus_ohm + network.from_drain_ohm)
    shunt_s = 1.0 / circuit.stages[index].shunt_ohm

    def drawn(v: float) -> float:
        current = float(part.current((1 - k) * bus_v + k * v, v))
        return current + v * shunt_s + (v - bus_v) * pull_s

    v = brentq(drawn, -1.0, 1.0, xtol=1e-15)
    gate = (1 - k) * bus_v + k * v
    return float(part.output_conductance(gate, v) + k * part.transconductance(gate, v))


def lines_of(text: str) -> list[str]:
    return [line for line in text.splitlines() if line and not line.startswith("*")]


# --- runs as exported -------------------------------------------------------


@pytest.mark.ngspice
@pytest.mark.parametrize("knee_v", [0.0, DEFAULT_KNEE_V])
@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_circuit_runs_as_exported(name, knee_v):
    """The whole unit with its own analysis, cut to 25 ms; tap and bus start where they should."""
    circuit = load_circuit(name)
    bus = solve_bus(circuit, 0.5, parse_rate("noon"))
    text = write_netlist(circuit, parts(circuit.stage_count, knee_v), bus=bus)
    text, cuts = re.subn(r"(?m)^\.tran 10u \S+", ".tran 10u 0.025", text)
    assert cuts == 1
    found = run(text.replace(".save ", ".save v(tap) v(in) v(vminus) "))
    time = found["time"]
    assert time[-1] == pytest.approx(0.025)
    assert_allclose(found["v(vminus)"], -circuit.reference_above_ground_v, rtol=1e-12)
    assert_allclose(found["v(tap)"], bus.tap_v(time), atol=2e-5)
    if circuit.bus.half_drain is None:
        assert_allclose(found["v(bus)"], bus.gate_v(time), atol=2e-5)
    else:
        # audio comes to the bus through 4.7 M and 4.7 M, the bus itself lies at some megohm
        assert_allclose(found["v(bus)"], bus.gate_v(time), atol=0.2)
    # the example signal, a sine of 0.2 V, reaches the output about the supply's minus end
    out = found["v(out)"] - found["v(vminus)"]
    assert 0.01 < np.ptp(out[time > 0.01]) < 2.0


@pytest.mark.ngspice
@pytest.mark.parametrize("name", SHIPPED)
def test_oscillator_keeps_time_over_its_turns(name):
    """One cycle and a half at the fastest rate: both turns where the closed form has them."""
    circuit = load_circuit(name)
    if circuit.bus.half_drain is not None:
        circuit = circuit.with_changes(bus__half_drain=None)
    fastest = rate_range_hz(circuit)[1]
    bus = solve_bus(circuit, 0.5, parse_rate(f"{min(fastest, 8.0) * (1 - 1e-9)!r}Hz"))
    stop = 1.5 * bus.period_s
    step = bus.period_s / 8000
    text = write_netlist(
        circuit,
        parts(circuit.stage_count),
        bus=bus,
        source=["VIN in vminus 0"],
        analysis=[EXACT, ".save v(tap) v(bus)", f".tran {step!r} {stop!r} 0 {step!r} uic"],
    )
    found = run(text)
    # The op amp takes a microsecond or two, or a step, for each of two or three turns, while
    # the tap moves at this speed:
    speed = np.abs(np.diff(bus.tap_v(np.linspace(0, stop, 20_000)))).max() / (stop / 20_000)
    late = 3 * (2e-6 + step)
    assert_allclose(found["v(tap)"], bus.tap_v(found["time"]), atol=1e-4 + 2 * speed * late)
    assert_allclose(found["v(bus)"], bus.gate_v(found["time"]), atol=1e-4 + 2 * speed * late)
    assert np.ptp(found["v(tap)"]) == pytest.approx(bus.tap.high_v - bus.tap.low_v, rel=2e-3)


# --- small signal -----------------------------------------------------------


@pytest.mark.ngspice
@pytest.mark.parametrize("knee_v", [0.0, DEFAULT_KNEE_V])
@pytest.mark.parametrize("name", SHIPPED)
def test_small_signal_response_is_the_models(name, knee_v):
    """`.ac` of stages and unit against the closed forms; the op amps' gain of 1e7 costs 1e-6."""
    circuit = load_circuit(name)
    jfets = parts(circuit.stage_count, knee_v)
    for gate in (-1.9, -1.3, -0.5):
        bus_v = held_bus_v(circuit, gate)
        channel = [slope_at_rest(circuit, n, part, bus_v) for n, part in enumerate(jfets)]
        breaks = break_hz(circuit, channel)
        for part, output in (("chain", f"y{circuit.stage_count}"), ("unit", "out")):
            text = write_netlist(
                circuit,
                jfets,
                part=part,
                gate_v=bus_v,
                analysis=[EXACT, f".save v({output})", ".ac dec 10 20 20k"],
            )
            found = run(text)
            hz = found["frequency"].real
            want = (wet_response if part == "chain" else unit_response)(circuit, breaks, hz)
            assert len(hz) == 31
            assert_allclose(found[f"v({output})"], want, rtol=0.0, atol=2e-5)


@pytest.mark.ngspice
@pytest.mark.parametrize("name", SHIPPED)
def test_at_rest_every_stage_sits_on_the_reference(name):
    circuit = load_circuit(name)
    text = write_netlist(
        circuit, parts(circuit.stage_count), gate_v=-1.2, analysis=[EXACT, ".save all", ".op"]
    )
    found = run(text)
    network = circuit.bus.half_drain
    # the half-drain network pulls each plus input towards the bus over some megohm
    slack = 1e-6 if network is None else 1.2 * 25e3 / network.from_bus_ohm
    for number in range(1, circuit.stage_count + 1):
        assert abs(found[f"v(p{number})"][0]) < slack
        assert abs(found[f"v(y{number})"][0]) < 1e-6 + 2 * circuit.stage_count * (slack - 1e-6)
    assert found["v(vplus)"][0] - found["v(vminus)"][0] == pytest.approx(circuit.supply.voltage_v)
    assert found["v(out)"][0] == pytest.approx(-circuit.reference_above_ground_v, abs=1e-9)


@pytest.mark.ngspice
def test_outputs_end_at_the_rails():
    # Direct voltage passes the arms only: -5 V asked of the first stage, +5 V of the second.
    circuit = load_circuit("wren")
    low, high = circuit.rails_v
    for volts in (-5.0, 5.0):
        text = write_netlist(
            circuit,
            parts(2),
            part="chain",
            gate_v=-1.5,
            source=[f"VIN x1 0 {volts}"],
            analysis=[EXACT, ".op"],
        )
        found = run(text)
        assert found["v(y1)"][0] == pytest.approx(low if volts > 0 else high, rel=1e-9)


# --- the channel's law ------------------------------------------------------


@pytest.mark.ngspice
def test_behavioural_channel_carries_the_law():
    """The written functions over the whole plane, also where a bare exp would overflow."""
    text = write_netlist(load_circuit("wren"), parts(2), gate_v=-1.5)
    functions = [line for line in text.splitlines() if line.startswith(".func")]
    assert len(functions) == 2
    lines, cases = ["* law", *functions], []
    for cutoff, beta, lam, knee in ((-2.0, 1e-3, 0.0, 0.0517), (-3.3, 4e-3, 0.02, 0.001)):
        for gate in (-60.0, -3.4, -2.5, -2.0, -1.2, 0.0, 5.0):
            for drain in (-40.0, -1.0, -0.05, 0.0, 0.05, 1.0, 40.0):
                number = len(cases)
                lines += [
                    f"VG{number} g{number} 0 {gate}",
                    f"VD{number} d{number} 0 {drain}",
                    f"VM{number} d{number} c{number} 0",
                    f"B{number} c{number} 0 I={{channel(V(g{number})-({cutoff}),V(c{number}),"
                    f"{beta},{lam},{knee})}}",
                ]
                cases.append((gate, drain, cutoff, beta, lam, knee))
    found = run("\n".join([*lines, EXACT, ".op", ".end", ""]))
    got = [found[f"i(vm{number})"][0] for number in range(len(cases))]
    # differences of squares cancel to rounding: 1e-16 of beta times the greater square
    want = drain_current(*np.array(cases).T)
    assert_allclose(got, want, rtol=1e-12, atol=1e-14)


@pytest.mark.ngspice
def test_gate_junctions_conduct_only_if_asked():
    """0.4 V forward: two junctions of 1e-14 A each (Shockley's diode law; kT/q from CODATA).

    The tolerance is check-values b15's: simulators' constants differ by 5e-4.
    """
    circuit = load_circuit("wren")
    want = 2 * 2 * 1e-14 * np.expm1(0.4 / (1.380649e-23 * 300.15 / 1.602176634e-19))
    for knee_v in (0.0, DEFAULT_KNEE_V):
        for asked in (False, True):
            text = write_netlist(
                circuit,
                parts(2, knee_v),
                part="chain",
                gate_v=0.4,
                source=["VIN x1 0 0"],
                gate_conduction=asked,
                analysis=[EXACT.replace("gmin=1e-16", "gmin=1e-18"), ".op"],
            )
            drawn = -run(text)["i(vbus)"][0]
            if asked:
                # the plus inputs lift a little under the junctions' current, knee or none
                assert drawn == pytest.approx(want, rel=2e-3)
            else:
                assert abs(drawn) < 1e-16


# --- text -------------------------------------------------------------------


def test_names_are_data():
    """Line breaks, directives and odd letters in names never become netlist lines."""
    evil = "J1\n.control\nshell echo pwned\n.endc\r\n+ V=1 * ; $ {x} \x0bJ9 µΩ \u2028.end"
    circuit = load_circuit("wren")
    named = circuit.with_changes(name=evil)
    plain = write_netlist(circuit, parts(2), gate_v=-1.0)
    hostile = write_netlist(
        named, [Jfet(p.cutoff_v, p.beta_a_per_v2, 0.01, label=evil) for p in parts(2)], gate_v=-1.0
    )
    assert hostile.isascii()
    assert re.search(r"[^\n -~]", hostile) is None
    assert lines_of(hostile) == lines_of(plain)
    assert len(hostile.splitlines()) == len(plain.splitlines())
    assert max(map(len, hostile.splitlines())) < 250


def test_values_are_written_with_all_their_digits():
    circuit = load_circuit("wren").with_changes(stages__1__shunt_ohm=23_456.789012345)
    text = write_netlist(circuit, parts(2, 0.0), gate_v=-1.0)
    assert "RS2 p2 0 23456.789012345" in text
    assert f"VTO={parts(2)[1].cutoff_v!r}" in text


def test_settings_are_said_in_the_netlist():
    circuit = load_circuit("heron")
    bus = solve_bus(circuit, 0.25, parse_rate("35%"))
    text = write_netlist(circuit, parts(4), bus=bus)
    assert "trimmer at 25.0000% of its travel" in text
    assert "rate knob at 35.0000% of its rotation" in text
    trimmer = circuit.bus.trimmer
    upper = float(re.search(r"^RTOP \S+ \S+ (\S+)$", text, re.MULTILINE)[1])
    assert upper == pytest.approx(0.75 * trimmer.track_ohm + trimmer.top_ohm)


def test_wrong_use_is_refused():
    circuit = load_circuit("heron")
    with pytest.raises(ValueError, match="4 stages need as many parts, got 3"):
        write_netlist(circuit, parts(3), gate_v=-1.0)
    with pytest.raises(ValueError, match="exactly one of"):
        write_netlist(circuit, parts(4))
    with pytest.raises(ValueError, match="exactly one of"):
        write_netlist(circuit, parts(4), gate_v=-1.0, gate_source=["VBUS bus 0 -1"])
