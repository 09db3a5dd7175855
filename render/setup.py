"""What is asked of a take, and what comes of it: circuit, parts, bias, bus and plan."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt
from pydantic import ValidationError

from ..models.bias import Bias, solve_bias
from ..models.circuit import Circuit
from ..models.errors import InputError
from ..models.gatebus import BusWave, solve_bus, trimmer_position
from ..models.jfet import NOMINAL_CELSIUS, Jfet
from ..models.quantity import Setting
from .engine import Gate
from .plan import EnginePlan, plan_engine

Array = npt.NDArray[np.float64]

DEFAULT_FULL_SCALE_V = 1.0
PLAN_STEP_V = 0.05
# Silicon parts are specified over this range of channel temperature at most.
CELSIUS_RANGE = (-55.0, 150.0)


@dataclass(frozen=True)
class TakeSettings:
    """Everything asked of a take, the riff apart.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : tuple of Jfet
        The set in stage order, parameters at the nominal 27 degrees.
    trimmer, rate : Setting
        Bias trimmer and rate as asked for, see :func:`parse_trim`, :func:`parse_rate`.
    celsius : float
        Channel temperature [degrees Celsius].
    full_scale_v : float
        Volts at 0 dBFS, going in and coming out [V].
    sweep_ohm, supply_v : float, optional
        Take the place of the circuit's own sweep resistor and supply voltage.
    dry : bool
        The riff alone, past the unit.
    """

    circuit: Circuit
    jfets: tuple[Jfet, ...]
    trimmer: Setting
    rate: Setting
    celsius: float = NOMINAL_CELSIUS
    full_scale_v: float = DEFAULT_FULL_SCALE_V
    sweep_ohm: float | None = None
    supply_v: float | None = None
    dry: bool = False

    @property
    def labels(self) -> tuple[str, ...]:
        """The parts' names in stage order; ``part 1`` and so on where they have none."""
        return tuple(jfet.label or f"part {i}" for i, jfet in enumerate(self.jfets, start=1))


@dataclass(frozen=True)
class Setup:
    """A take's settings worked out.

    Parameters
    ----------
    settings : TakeSettings
        What was asked.
    circuit : Circuit
        With the asked sweep resistor and supply.
    jfets : tuple of Jfet
        As they are at the channel temperature.
    gate : callable
        The gate bus for the engine.
    gate_low_v, gate_high_v : float
        Its range [V].
    bus : BusWave or None
        Oscillator and trimmer; None where a trace of the gate voltage was given.
    bias : Bias or None
        The bias solver's result where it was asked.
    """

    settings: TakeSettings
    circuit: Circuit
    jfets: tuple[Jfet, ...]
    gate: Gate
    gate_low_v: float
    gate_high_v: float
    bus: BusWave | None
    bias: Bias | None

    def as_record(self) -> dict[str, Any]:
        """Return the settings and what came of them for a provenance record."""
        asked = self.settings
        record: dict[str, Any] = {
            "circuit": self.circuit.model_dump(mode="json"),
            "circuit_sha256": circuit_hash(self.circuit),
            "parts": [
                {
                    "stage": stage,
                    "label": label,
                    "cutoff_v": jfet.cutoff_v,
                    "beta_a_per_v2": jfet.beta_a_per_v2,
                    "lambda_per_v": jfet.lambda_per_v,
                    "knee_v": jfet.knee_v,
                    "cutoff_v_per_k": jfet.cutoff_v_per_k,
                    "beta_exponent": jfet.beta_exponent,
                }
                for stage, (label, jfet) in enumerate(
                    zip(asked.labels, asked.jfets, strict=True), start=1
                )
            ],
            "celsius": asked.celsius,
            "full_scale_v": asked.full_scale_v,
            "sweep_ohm": self.circuit.bus.sweep_ohm,
            "supply_v": self.circuit.supply.voltage_v,
            "gate_low_v": self.gate_low_v,
            "gate_high_v": self.gate_high_v,
        }
        if self.bus is None:
            record["gate"] = "a trace of the gate voltage, given"
        else:
            record |= {
                "trimmer": {"asked": asked.trimmer.text, "position": self.bus.trimmer},
                "rate": {
                    "asked": asked.rate.text,
                    "rate_hz": self.bus.rate_hz,
                    "rotation": self.bus.rotation,
                },
                "gate_mean_v": self.bus.mean_v,
                "oscillator_start": "the tap at its lowest turn, about to rise",
            }
        return record


def set_up(settings: TakeSettings, gate_trace: tuple[Array, float] | None = None) -> Setup:
    """Work a take's settings out: change the circuit, warm the parts, solve bias and bus.

    Parameters
    ----------
    settings : TakeSettings
        What is asked.
    gate_trace : (ndarray, float), optional
        Gate voltage, shape (frames,) [V], and its rate [Hz], in place of oscillator
        and trimmer.

    Raises
    ------
    InputError
        If a setting cannot be used; all faults found are listed.
    """
    _check_settings(settings)
    circuit = changed_circuit(settings)
    jfets = tuple(jfet.at_celsius(settings.celsius) for jfet in settings.jfets)
    if gate_trace is not None:
        trace, rate_hz = gate_trace
        gate = _trace_gate(trace, rate_hz)
        low, high = float(trace.min()), float(trace.max())
        return Setup(settings, circuit, jfets, gate, low, high, None, None)
    bias = None
    if settings.trimmer.rotation is None and settings.trimmer.value is None:
        bias = solve_bias(circuit, jfets, settings.rate)
        bus = bias.bus
    else:
        position = trimmer_position(circuit, settings.trimmer, settings.rate)
        bus = solve_bus(circuit, position, settings.rate)
    return Setup(settings, circuit, jfets, bus.sample_gate, bus.low_v, bus.high_v, bus, bias)


def changed_circuit(settings: TakeSettings) -> Circuit:
    """Return the circuit with the asked sweep resistor and supply voltage.

    Raises
    ------
    InputError
        If the circuit cannot be so.
    """
    circuit = settings.circuit
    faults = []
    for name, field, value in (
        ("sweep_ohm", "bus__sweep_ohm", settings.sweep_ohm),
        ("supply_v", "supply__voltage_v", settings.supply_v),
    ):
        if value is None:
            continue
        try:
            circuit = circuit.with_changes(**{field: value})
        except ValidationError as fault:
            reasons = [error["msg"].removeprefix("Value error, ") for error in fault.errors()]
            faults.append(f"{name} = {value:g} for {circuit.name!r}: {'; '.join(reasons)}")
    if faults:
        raise InputError(faults)
    return circuit


def plan_takes(setups: Sequence[Setup], sample_rate: float) -> list[EnginePlan]:
    """Return one plan per take, all with the same oversampling factor.

    Takes to be compared must differ only in what was asked, so the most demanding
    one decides the factor for all.

    Parameters
    ----------
    setups : sequence of Setup
        The takes.
    sample_rate : float
        The riff's rate [Hz].
    """
    ranges: dict[tuple[Circuit, tuple[Jfet, ...]], tuple[float, float]] = {}
    for setup in setups:
        key = (setup.circuit, setup.jfets)
        low, high = ranges.get(key, (math.inf, -math.inf))
        ranges[key] = (min(low, setup.gate_low_v), max(high, setup.gate_high_v))
    ranges = {key: _rounded_out(*span) for key, span in ranges.items()}
    plans = {key: _plan(*key, *span, sample_rate) for key, span in ranges.items()}
    factor = max((plan.factor for plan in plans.values()), default=1)
    for key, plan in plans.items():
        if plan.factor < factor:
            plans[key] = _plan(*key, *ranges[key], sample_rate, least_factor=factor)
    return [plans[setup.circuit, setup.jfets] for setup in setups]


def _rounded_out(low_v: float, high_v: float) -> tuple[float, float]:
    """Return a range a little wider, so that takes at like trimmer positions share a plan."""
    return (
        math.floor(low_v / PLAN_STEP_V) * PLAN_STEP_V,
        math.ceil(high_v / PLAN_STEP_V) * PLAN_STEP_V,
    )


# A plan costs trial runs; takes of one set at several rates or riffs share it.
_plan = lru_cache(maxsize=64)(plan_engine)


def circuit_hash(circuit: Circuit) -> str:
    """Return a hash of a circuit's values, hexadecimal; its name and description do not count."""
    values = circuit.model_dump(mode="json", exclude={"name", "about"})
    return hashlib.sha256(json.dumps(values, sort_keys=True).encode()).hexdigest()


def _trace_gate(trace: Array, trace_rate_hz: float) -> Gate:
    """Return the trace, straight lines between its frames, held before and after."""

    def gate(start: int, count: int, rate_hz: float) -> Array:
        place = (start + np.arange(count)) * (trace_rate_hz / rate_hz)
        first = min(max(math.floor(place[0]), 0), len(trace) - 1)
        last = min(max(math.ceil(place[-1]), 0), len(trace) - 1) + 1
        return np.asarray(np.interp(place, np.arange(first, last), trace[first:last]), float)

    return gate


def _check_settings(settings: TakeSettings) -> None:
    faults = []
    wanted, given = settings.circuit.stage_count, len(settings.jfets)
    if wanted != given:
        faults.append(
            f"circuit {settings.circuit.name!r} has {wanted} stages, the set has {given} parts "
            f"({', '.join(settings.labels)}); give one part per stage, in stage order"
        )
    low, high = CELSIUS_RANGE
    if not low <= settings.celsius <= high:
        faults.append(f"channel temperature {settings.celsius:g} C; expected {low:g} to {high:g} C")
    if not 1e-3 <= settings.full_scale_v <= 100.0:
        faults.append(
            f"full-scale voltage {settings.full_scale_v:g} V; expected 1 mV to 100 V "
            "(1 V if in doubt)"
        )
    if faults:
        raise InputError(faults)
