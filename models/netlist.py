"""The circuit with a set's parameters as a SPICE netlist.

Node 0 is the reference rail, on which the sources sit: signals of a tenth of a volt
riding on half the supply would cost the simulator digits that the op amps' gain
multiplies. Node ``vminus`` is the supply's negative end, ``vplus`` its positive one; the
others keep the schematic's meaning (``in``, ``x1`` the first stage's input, ``p1`` and
``m1`` its op amp's inputs, ``y1`` its output, ``bus``, ``tap``, ``wiper``, ``out``). A unit
starts in its oscillator's periodic state, the tap at its lowest turn, with no charge
on the stages' capacitors.

Parts with knee 0 become the simulator's own level-1 JFETs, others behavioural
current sources carrying the law of :mod:`sweepset.models.jfet`. Parameters are
written as they are at the channel temperature and the simulator is told to move
nothing (nominal temperature = temperature).
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Sequence
from typing import Literal

from .circuit import (
    Circuit,
    MeasuredOscillator,
    SineOscillator,
    TriangleOscillator,
)
from .gatebus import LEAST_BIAS_OHM, BusWave
from .jfet import NOMINAL_CELSIUS, Jfet
from .knob import knob_ohm

# Open-loop gain of the op amps: high enough that it costs -130 dB, low enough that the
# simulator's own rounding, times it, stays below that.
OPAMP_GAIN = 1e7
# The oscillator's op amp switches through this time constant; a comparator without any
# would have to jump within one step. It delays each turn by about as much, which at 1e-6 s
# would already show in the comparison with the engine (-87 dB).
SWITCH_S = 1e-7
SWITCH_GAIN = 1e6
# A wiper at the end of its track: simulators refuse resistors of exactly 0.
LEAST_OHM = 1e-3
# Saturation current of the gate junctions: usual for small-signal types (the customary
# default of SPICE), and so small that nothing flows at any voltage in these circuits.
CONDUCTING_A = 1e-14
BLOCKING_A = 1e-40

EXAMPLE_SOURCE = ("* Your signal goes here.", "VIN {} AC 1 SIN(0 0.2 440)")


def write_netlist(
    circuit: Circuit,
    jfets: Sequence[Jfet],
    *,
    bus: BusWave | None = None,
    part: Literal["unit", "chain"] = "unit",
    gate_v: float | None = None,
    source: Sequence[str] | None = None,
    gate_source: Sequence[str] | None = None,
    gate_conduction: bool = False,
    analysis: Sequence[str] | None = None,
) -> str:
    """Return the netlist's text.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, as it is at the channel temperature
        (:meth:`~sweepset.models.jfet.Jfet.at_celsius`).
    bus : BusWave, optional
        Settings of rate knob and trimmer, and the voltages to start from. Needed
        unless the bus is driven by `gate_v` or `gate_source`.
    part : {"unit", "chain"}
        The whole unit, or the stages alone: their input is then the node ``x1`` and
        their output the last stage's.
    gate_v : float, optional
        Hold the bus at this voltage from the reference rail in place of oscillator
        and trimmer [V].
    source : sequence of str, optional
        Lines of SPICE that drive node ``in`` against ``vminus`` (unit) or ``x1``
        against 0 (chain). Default: a sine to be replaced by the user's own.
    gate_source : sequence of str, optional
        Lines of SPICE that drive node ``bus`` against 0 in place of oscillator and
        trimmer.
    gate_conduction : bool
        Model the gate junctions' conduction, which sweepset itself only counts.
        By default no gate current flows.
    analysis : sequence of str, optional
        Lines of analysis and options. Default: two cycles, or 0.1 s with a held bus.

    Raises
    ------
    ValueError
        If the number of parts does not fit, or if the bus is driven in no way or in
        several.

    Notes
    -----
    With the half-drain network the netlist's bus is a real node: audio from the
    drains reaches it through the network and what feeds it. sweepset takes the bus
    as known, which is the limit of a low-impedance bus.

    `source`, `gate_source` and `analysis` are written as they are; names and labels
    are data, and only letters, digits and a few signs of them are kept.
    """
    if len(jfets) != circuit.stage_count:
        raise ValueError(f"{circuit.stage_count} stages need as many parts, got {len(jfets)}")
    if sum(given is not None for given in (bus, gate_v, gate_source)) != 1:
        raise ValueError("give exactly one of bus, gate_v and gate_source")
    lines = [f"* sweepset: {_plain(circuit.name)}, {_plain_part(part)}"]
    lines += _title(circuit, jfets, gate_conduction)
    lines += _supply(circuit)
    if part == "unit":
        lines += ["", "* Input coupling and buffer"]
        lines += source or [line.format("in vminus") for line in EXAMPLE_SOURCE]
        lines += _input(circuit)
    else:
        lines += ["", "* Input"]
        lines += source or [line.format("x1 0") for line in EXAMPLE_SOURCE]
    for index in range(circuit.stage_count):
        lines += _stage(circuit, index, jfets[index], gate_conduction)
    lines += _feedback(circuit)
    if bus is not None:
        lines += _bus(circuit, bus)
        lines += _oscillator(circuit, bus)
    else:
        held = None if gate_v is None else [f"VBUS bus 0 {_number(gate_v)}"]
        lines += ["", "* Gate bus, held from outside", *(gate_source or held or ())]
    if part == "unit":
        lines += _mix(circuit)
    lines += ["", "* Models", *_models(jfets, gate_conduction), *_opamp(circuit)]
    if bus is not None:
        lines += _switch(circuit)
    if analysis is None:
        stop_s = 0.1 if bus is None else 2.0 * bus.period_s
        output = "v(out)" if part == "unit" else f"v(y{circuit.stage_count})"
        analysis = (
            f".options reltol=1e-5 vntol=1e-7 gmin=1e-15 method=trap tnom={NOMINAL_CELSIUS:g}",
            f".temp {NOMINAL_CELSIUS:g}",
            f".save v(x1) v(bus) {output}",
            f".tran 10u {_number(stop_s)} 0 10u uic",
        )
    return "\n".join([*lines, "", "* Analysis", *analysis, ".end", ""])


def _plain(text: str, most: int = 80) -> str:
    """Return a name from a file with nothing in it that a simulator could read as more."""
    kept = unicodedata.normalize("NFKD", text)
    kept = re.sub(r"[^A-Za-z0-9 ._+-]", " ", kept)
    return re.sub(r" +", " ", kept).strip()[:most] or "unnamed"


def _plain_part(part: str) -> str:
    return "stages alone" if part == "chain" else "the whole unit"


def _number(value: float) -> str:
    """Return a value with all its digits."""
    return repr(float(value))


def _title(circuit: Circuit, jfets: Sequence[Jfet], gate_conduction: bool) -> list[str]:
    lines = [
        "* Node 0 is the reference rail, where the sources sit; node vminus is the supply's minus.",
        "* Parts by stage:",
    ]
    for index, jfet in enumerate(jfets):
        lines.append(
            f"*   {index + 1}: {_plain(jfet.label)}: cut-off {jfet.cutoff_v:.6g} V, current factor "
            f"{jfet.beta_a_per_v2:.6g} A/V^2, lambda {jfet.lambda_per_v:.6g} 1/V, "
            f"knee {jfet.knee_v:.6g} V"
        )
    lines.append(
        "* Gate junctions conduct."
        if gate_conduction
        else "* Gate junctions are left out: no gate current at any voltage."
    )
    return lines


def _supply(circuit: Circuit) -> list[str]:
    return [
        "",
        "* Supply and reference rail, both taken as stiff",
        f"VREF 0 vminus {_number(circuit.reference_above_ground_v)}",
        f"VPLUS vplus vminus {_number(circuit.supply.voltage_v)}",
    ]


def _input(circuit: Circuit) -> list[str]:
    part = circuit.input
    return [
        f"CIN in coupled {_number(part.capacitor_f)} "
        f"IC={_number(-circuit.reference_above_ground_v)}",
        f"RIN coupled 0 {_number(part.resistor_ohm)}",
        "XUIN coupled x1 x1 opamp",
    ]


def _stage(circuit: Circuit, index: int, jfet: Jfet, gate_conduction: bool) -> list[str]:
    stage, number = circuit.stages[index], index + 1
    x = "x1" if index == 0 else f"y{index}"
    p, m, y = f"p{number}", f"m{number}", f"y{number}"
    lines = [
        "",
        f"* Stage {number}",
        f"C{number} {x} {p} {_number(stage.capacitor_f)} IC=0",
        f"RS{number} {p} 0 {_number(stage.shunt_ohm)}",
        f"RA{number} {x} {m} {_number(stage.arm_in_ohm)}",
        f"RB{number} {m} {y} {_number(stage.arm_out_ohm)}",
        f"XU{number} {p} {m} {y} opamp",
    ]
    gate = "bus"
    network = circuit.bus.half_drain
    if network is not None:
        gate = f"g{number}"
        lines += [
            f"RG{number} bus {gate} {_number(network.from_bus_ohm)}",
            f"RD{number} {p} {gate} {_number(network.from_drain_ohm)}",
        ]
    if jfet.knee_v == 0.0:
        return [*lines, f"J{number} {p} {gate} 0 JMOD{number}"]
    over, drain = f"V({gate})-({_number(jfet.cutoff_v)})", f"V({p})"
    lines.append(
        f"BJ{number} {p} 0 I={{channel({over},{drain},{_number(jfet.beta_a_per_v2)},"
        f"{_number(jfet.lambda_per_v)},{_number(jfet.knee_v)})}}"
    )
    if gate_conduction:
        lines += [f"DS{number} {gate} 0 JUNCTION", f"DD{number} {gate} {p} JUNCTION"]
    return lines


def _feedback(circuit: Circuit) -> list[str]:
    loop = circuit.feedback
    if loop is None:
        return []
    return [
        "",
        "* Feedback",
        f"RFB y{loop.from_stage} m{loop.into_stage} {_number(loop.resistor_ohm)}",
    ]


def _bus(circuit: Circuit, bus: BusWave) -> list[str]:
    part, trimmer = circuit.bus, circuit.bus.trimmer
    rails = {"supply": "vplus", "reference": "0", "ground": "vminus"}
    lines = ["", f"* Gate bus; trimmer at {bus.trimmer:.4%} of its travel"]
    ends = []
    for name, end in (("VTOP", trimmer.top), ("VBOTTOM", trimmer.bottom)):
        if isinstance(end, str):
            ends.append(rails[end])
        else:
            ends.append(name.lower())
            lines.append(f"{name} {name.lower()} vminus {_number(end)}")
    upper = trimmer.top_ohm + (1.0 - bus.trimmer) * trimmer.track_ohm
    lower = trimmer.bottom_ohm + bus.trimmer * trimmer.track_ohm
    lines += [
        f"* track above the wiper and its end resistor of {trimmer.top_ohm:g} ohm",
        f"RTOP {ends[0]} wiper {_number(max(upper, LEAST_OHM))}",
        f"* track below the wiper and its end resistor of {trimmer.bottom_ohm:g} ohm",
        f"RBOTTOM wiper {ends[1]} {_number(max(lower, LEAST_OHM))}",
        f"RBIAS wiper bus {_number(max(part.bias_ohm, LEAST_BIAS_OHM))}",
        f"RSWEEP tap bus {_number(part.sweep_ohm)}",
    ]
    if part.capacitor_f is not None:
        start_v = bus.initial_state().bus_v
        lines.append(f"CBUS bus 0 {_number(part.capacitor_f)} IC={_number(start_v)}")
    return lines


def _oscillator(circuit: Circuit, bus: BusWave) -> list[str]:
    oscillator = circuit.oscillator
    lines = ["", f"* Oscillator at {bus.rate_hz:.6g} Hz; time 0 is the tap's lowest turn"]
    if isinstance(oscillator, SineOscillator | MeasuredOscillator):
        return lines + _plain_tap(oscillator, bus.period_s)
    assert bus.rotation is not None  # a knob with a track always tells rates apart
    rate_ohm = knob_ohm(oscillator.knob, bus.rotation)
    lines.append(
        f"* rate knob at {bus.rotation:.4%} of its rotation, with its series resistor of "
        f"{oscillator.knob.series_ohm:g} ohm"
    )
    start_v = bus.initial_state().tap_v
    timing = _number(oscillator.timing_capacitor_f)
    if isinstance(oscillator, TriangleOscillator):
        # The integrator inverts: it rises while the comparator is low.
        return [
            *lines,
            f"RRATE square sum {_number(rate_ohm)}",
            f"CTIME sum tap {timing} IC={_number(-start_v)}",
            "XUTAP 0 sum tap opamp",
            f"RTHI tap trip {_number(oscillator.threshold_in_ohm)}",
            f"RTHO square trip {_number(oscillator.threshold_out_ohm)}",
            "XUSQ trip 0 square switchlow",
        ]
    buffered = oscillator.tap == "buffered"
    timer = "timing" if buffered else "tap"
    lines += [
        f"RRATE square {timer} {_number(rate_ohm)}",
        f"CTIME {timer} 0 {timing} IC={_number(start_v)}",
        f"RTHI trip 0 {_number(oscillator.threshold_in_ohm)}",
        f"RTHO square trip {_number(oscillator.threshold_out_ohm)}",
        f"XUSQ trip {timer} square switchhigh",
    ]
    if buffered:
        lines.append("XUTAP timing tap tap opamp")
    return lines


def _plain_tap(oscillator: SineOscillator | MeasuredOscillator, period_s: float) -> list[str]:
    if isinstance(oscillator, SineOscillator):
        mean, peak = oscillator.mean_v, oscillator.peak_v
    else:
        mean = 0.5 * (oscillator.low_v + oscillator.high_v)
        peak = 0.5 * (oscillator.high_v - oscillator.low_v)
        if oscillator.shape == "triangle":
            # PULSE needs some width at the top; a millionth of the period is lost to it.
            half, top = 0.5 * period_s * (1.0 - 1e-6), 1e-6 * period_s
            return [
                f"VTAP tap 0 PULSE({_number(oscillator.low_v)} {_number(oscillator.high_v)} 0 "
                f"{_number(half)} {_number(half)} {_number(top)} {_number(period_s)})"
            ]
    # A sine 90 degrees behind starts at its lowest point.
    return [f"VTAP tap 0 SIN({_number(mean)} {_number(peak)} {_number(1.0 / period_s)} 0 0 -90)"]


def _mix(circuit: Circuit) -> list[str]:
    mix = circuit.mix
    return [
        "",
        "* Mix and output coupling",
        f"RDRY x1 mixed {_number(mix.dry_ohm)}",
        f"RWET y{circuit.stage_count} mixed {_number(mix.wet_ohm)}",
        f"COUT mixed out {_number(mix.capacitor_f)} IC={_number(circuit.reference_above_ground_v)}",
        f"RLOAD out vminus {_number(mix.load_ohm)}",
    ]


def _models(jfets: Sequence[Jfet], gate_conduction: bool) -> list[str]:
    leak = _number(CONDUCTING_A if gate_conduction else BLOCKING_A)
    lines = []
    for index, jfet in enumerate(jfets):
        if jfet.knee_v == 0.0:
            # XTI and EG are written out: one simulator's default differs from its manual.
            lines.append(
                f".model JMOD{index + 1} NJF(VTO={_number(jfet.cutoff_v)} "
                f"BETA={_number(jfet.beta_a_per_v2)} LAMBDA={_number(jfet.lambda_per_v)} "
                f"IS={leak} CGS=0 CGD=0 RD=0 RS=0 XTI=3 EG=1.11)"
            )
    if any(jfet.knee_v > 0.0 for jfet in jfets):
        lines += [
            "* Softened overdrive, w ln(1 + exp(x/w)) arranged so that exp cannot overflow",
            ".func soft(x,w) {max(x,0)+w*ln(1+exp(-abs(x)/w))}",
            "* Drain current: overdrive u, drain voltage v, current factor b, lambda l, knee w",
            ".func channel(u,v,b,l,w) {b*(1+l*abs(v))*(pow(soft(u,w),2)-pow(soft((u)-(v),w),2))}",
        ]
        if gate_conduction:
            lines.append(f".model JUNCTION D(IS={leak} N=1 CJO=0 RS=0 XTI=3 EG=1.11)")
    return lines


def _opamp(circuit: Circuit) -> list[str]:
    low, high = circuit.rails_v
    return [
        "* Op amp: ideal but for the ends of its output's reach",
        ".subckt opamp plus minus out",
        f"B1 out 0 V={{min(max({OPAMP_GAIN:.0e}*V(plus,minus),{_number(low)}),{_number(high)})}}",
        ".ends",
    ]


def _switch(circuit: Circuit) -> list[str]:
    oscillator = circuit.oscillator
    if isinstance(oscillator, SineOscillator | MeasuredOscillator):
        return []
    low, high = circuit.rails_v
    name, start_v = (
        ("switchlow", low) if isinstance(oscillator, TriangleOscillator) else ("switchhigh", high)
    )
    return [
        "* The oscillator's op amp: from end to end within a fraction of a microsecond",
        f".subckt {name} plus minus out",
        f"B1 fast 0 V={{min(max({SWITCH_GAIN:.0e}*V(plus,minus),{_number(low)}),{_number(high)})}}",
        "R1 fast slow 1k",
        f"C1 slow 0 {_number(SWITCH_S / 1e3)} IC={_number(start_v)}",
        "E1 out 0 slow 0 1",
        ".ends",
    ]
