"""What temperature and supply do to a set whose trimmer stays where it is.

Exact at every point, unlike the tolerances of ``variation``: parts at their own
temperature, the bus solved anew for each supply.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from pydantic import ValidationError

from .circuit import Circuit
from .cycle import analyse_cycle
from .errors import InputError
from .gatebus import solve_bus
from .jfet import Jfet
from .quantity import Setting


@dataclass(frozen=True)
class DriftPoint:
    """A set at one temperature or supply.

    Parameters
    ----------
    value : float
        Channel temperature [degrees Celsius] or supply [V].
    moved_octaves : float
        By how much the cycle's mean break frequency moved from the one at the conditions
        the trimmer was set for [octaves].
    travel_octaves, stagger_octaves, stall : float
        As in :class:`Cycle`; NaN where the circuit does not work.
    rate_hz : float
        The oscillator's rate [Hz].
    fault : str
        Why the circuit does not work there; empty where it does.
    """

    value: float
    moved_octaves: float
    travel_octaves: float
    stagger_octaves: float
    stall: float
    rate_hz: float
    fault: str = ""


def sweep_temperature(
    circuit: Circuit,
    jfets: Sequence[Jfet],
    trimmer: float,
    rate: Setting,
    celsius: Sequence[float],
    set_at_celsius: float,
) -> list[DriftPoint]:
    """Return a set at several channel temperatures.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, parameters at the nominal temperature.
    trimmer : float
        Position, 0 to 1.
    rate : Setting
        The rate.
    celsius : sequence of float
        Channel temperatures [degrees Celsius].
    set_at_celsius : float
        The temperature the trimmer was set at [degrees Celsius].
    """
    base = _middle(circuit, [part.at_celsius(set_at_celsius) for part in jfets], trimmer, rate)
    return [
        _point(value, circuit, [part.at_celsius(value) for part in jfets], trimmer, rate, base)
        for value in celsius
    ]


def sweep_supply(
    circuit: Circuit,
    jfets: Sequence[Jfet],
    trimmer: float,
    rate: Setting,
    supply_v: Sequence[float],
) -> list[DriftPoint]:
    """Return a set at several supply voltages.

    Parameters
    ----------
    circuit : Circuit
        The schematic, with the supply the trimmer was set at.
    jfets : sequence of Jfet
        The set in stage order, at its channel temperature.
    trimmer : float
        Position, 0 to 1.
    rate : Setting
        The rate; a knob's position is kept.
    supply_v : sequence of float
        Supply voltages [V].
    """
    bus = solve_bus(circuit, trimmer, rate)
    kept = rate if bus.rotation is None else Setting(rate.text, bus.rotation, None)
    base = _middle(circuit, jfets, trimmer, kept)
    points = []
    for value in supply_v:
        try:
            changed = circuit.with_changes(supply__voltage_v=value)
            points.append(_point(value, changed, jfets, trimmer, kept, base))
        except (ValidationError, InputError) as fault:
            none = math.nan
            points.append(DriftPoint(value, none, none, none, none, none, _reason(fault)))
    return points


def _middle(circuit: Circuit, jfets: Sequence[Jfet], trimmer: float, rate: Setting) -> float:
    cycle = analyse_cycle(circuit, jfets, solve_bus(circuit, trimmer, rate))
    return float(np.log2(cycle.break_hz).mean())


def _point(
    value: float,
    circuit: Circuit,
    jfets: Sequence[Jfet],
    trimmer: float,
    rate: Setting,
    base: float,
) -> DriftPoint:
    bus = solve_bus(circuit, trimmer, rate)
    cycle = analyse_cycle(circuit, jfets, bus)
    return DriftPoint(
        value=value,
        moved_octaves=float(np.log2(cycle.break_hz).mean()) - base,
        travel_octaves=cycle.travel_octaves,
        stagger_octaves=cycle.stagger_octaves,
        stall=cycle.stall,
        rate_hz=bus.rate_hz,
    )


def _reason(fault: ValidationError | InputError) -> str:
    if isinstance(fault, InputError):
        return "; ".join(fault.messages)
    return "; ".join(str(error["msg"]).removeprefix("Value error, ") for error in fault.errors())
