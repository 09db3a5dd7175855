"""DC voltages to expect at named points of a unit, true and as a meter shows them.

A meter leads from the point to ground through its own input resistance. On a low
impedance that changes nothing; behind a megohm it reads several per cent low. The
points come with the lowest impedance first.
"""

from __future__ import annotations

from contextlib import suppress
from dataclasses import dataclass

import numpy as np

from .circuit import (
    Circuit,
    DividerReference,
    RelaxationOscillator,
    TriangleOscillator,
)
from .components import Tolerances, bus_components, nudged
from .errors import InputError
from .gatebus import bus_conductance_s, held_bus_v, solve_bus, wiper_source
from .quantity import Setting

DEFAULT_METER_OHM = 10e6
# A tolerance is a limit; rectangular within, and twice the standard deviation is shown
# (JCGM 100:2008, 4.3.7 and chapter 6; clause numbers from memory).
EXPANDED = 2.0 / np.sqrt(3.0)


@dataclass(frozen=True)
class MeterPoint:
    """One point to measure.

    Parameters
    ----------
    name : str
        What and where.
    true_v : float
        Its voltage above ground with no meter there [V].
    shown_v : float
        What the meter shows [V].
    spread_v : float
        Expanded uncertainty of `true_v` from the tolerances, about 95 per cent [V].
    source_ohm : float
        Resistance behind the point [ohm].
    moves : bool
        Whether it moves with the oscillator.
    """

    name: str
    true_v: float
    shown_v: float
    spread_v: float
    source_ohm: float
    moves: bool


def measure_points(
    circuit: Circuit,
    trimmer: float,
    rate: Setting,
    *,
    meter_ohm: float = DEFAULT_METER_OHM,
    tolerances: Tolerances | None = None,
) -> list[MeterPoint]:
    """Return the points to measure, lowest impedance first.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    trimmer : float
        Position, 0 (bottom end) to 1 (top end).
    rate : Setting
        The rate.
    meter_ohm : float
        The meter's input resistance, positive [ohm].
    tolerances : Tolerances, optional
        Limits of the values.
    """
    limits = tolerances or Tolerances()
    sources = _source_ohms(circuit, trimmer)
    values = _true_values(circuit, trimmer, rate)
    spreads = _spreads(circuit, trimmer, rate, limits)
    points = []
    for name, true_v in values.items():
        source_ohm = sources[name]
        points.append(
            MeterPoint(
                name=name,
                true_v=true_v,
                shown_v=true_v * meter_ohm / (meter_ohm + source_ohm),
                spread_v=spreads[name],
                source_ohm=source_ohm,
                moves=name in MOVING,
            )
        )
    return sorted(points, key=lambda point: point.source_ohm)


SUPPLY, REFERENCE, WIPER = "supply", "reference rail", "trimmer wiper, mean"
TAP_LOW, TAP_HIGH = "oscillator tap, lowest", "oscillator tap, highest"
BUS_LOW, BUS_MEAN, BUS_HIGH = "gate bus, lowest", "gate bus, mean", "gate bus, highest"
BUS_HELD = "gate bus, oscillator held"
MOVING = frozenset({TAP_LOW, TAP_HIGH, BUS_LOW, BUS_MEAN, BUS_HIGH})


def _true_values(circuit: Circuit, trimmer: float, rate: Setting) -> dict[str, float]:
    """Return every point's unloaded voltage above ground [V]."""
    bus = solve_bus(circuit, trimmer, rate)
    rail = circuit.reference_above_ground_v
    return {
        SUPPLY: circuit.supply.voltage_v,
        REFERENCE: rail,
        WIPER: bus.wiper_mean_above_ground_v,
        TAP_LOW: rail + bus.tap.low_v,
        TAP_HIGH: rail + bus.tap.high_v,
        BUS_LOW: rail + bus.low_v,
        BUS_MEAN: rail + bus.mean_v,
        BUS_HIGH: rail + bus.high_v,
        BUS_HELD: rail + held_bus_v(circuit, trimmer),
    }


def _source_ohms(circuit: Circuit, trimmer: float) -> dict[str, float]:
    """Return the resistance behind every point [ohm]."""
    wiper_ohm = wiper_source(circuit, trimmer).resistance_ohm
    bus_ohm = 1.0 / bus_conductance_s(circuit, trimmer)
    # From the wiper the bus hangs on the bias resistor: all else there leads on from it.
    beyond_s = 1.0 / bus_ohm - 1.0 / (circuit.bus.bias_ohm + wiper_ohm)
    beyond_ohm = circuit.bus.bias_ohm + (1.0 / beyond_s if beyond_s > 0.0 else np.inf)
    loaded_tap = isinstance(circuit.oscillator, RelaxationOscillator) and (
        circuit.oscillator.tap == "direct"
    )
    knob = circuit.oscillator.knob
    tap_ohm = getattr(knob, "series_ohm", 0.0) if loaded_tap else 0.0
    reference = circuit.supply.reference
    rail_ohm = 0.0
    if isinstance(reference, DividerReference):
        rail_ohm = 1.0 / (1.0 / reference.upper_ohm + 1.0 / reference.lower_ohm)
    found = {SUPPLY: 0.0, REFERENCE: rail_ohm, TAP_LOW: tap_ohm, TAP_HIGH: tap_ohm}
    found[WIPER] = 1.0 / (1.0 / wiper_ohm + 1.0 / beyond_ohm) if wiper_ohm else 0.0
    return found | dict.fromkeys((BUS_LOW, BUS_MEAN, BUS_HIGH, BUS_HELD), bus_ohm)


def _spreads(
    circuit: Circuit, trimmer: float, rate: Setting, limits: Tolerances
) -> dict[str, float]:
    """Return each point's expanded uncertainty by linear propagation [V]."""
    centre = _true_values(circuit, trimmer, rate)
    sums = dict.fromkeys(centre, 0.0)
    for part in bus_components(circuit):
        share = limits.of(part.kind)
        ends = []
        for changed in nudged(circuit, part, share):
            # Beyond what a circuit may be, or where it stops oscillating, there are no
            # voltages: the slope towards the other side then serves for both.
            with suppress(InputError):
                if changed is not None:
                    ends.append(_true_values(changed, trimmer, rate))
        for name, true_v in centre.items():
            if len(ends) == 2:
                sums[name] += (0.5 * (ends[1][name] - ends[0][name])) ** 2
            elif ends:
                sums[name] += (ends[0][name] - true_v) ** 2
    return {name: float(EXPANDED * np.sqrt(total)) for name, total in sums.items()}


def how_to_hold(circuit: Circuit) -> list[str]:
    """Return sentences on how to hold or slow the oscillator while measuring."""
    said = ["Turn the rate to its slowest: the meter then follows the lowest and highest values."]
    rest = "the gate bus then rests at the value for the oscillator held."
    if isinstance(circuit.oscillator, RelaxationOscillator):
        how = "bridge the timing capacitor to the reference rail with a clip lead"
    elif isinstance(circuit.oscillator, TriangleOscillator):
        how = "bridge the integrator's capacitor with a clip lead"
    else:
        how = "lift the tap's end of the sweep resistor and clip it to the reference rail"
    return [*said, f"To hold the oscillator, {how}: {rest}"]
