"""The components around the gate bus, how far each may be off, and circuits with one changed."""

from __future__ import annotations

from contextlib import suppress
from dataclasses import dataclass
from typing import Any, Literal

from pydantic import ValidationError

from .circuit import Circuit, DividerReference, RelaxationOscillator, TriangleOscillator
from .errors import InputError

Kind = Literal["resistor", "track", "capacitor", "supply", "zener"]


@dataclass(frozen=True)
class Tolerances:
    """Limits of the values, as shares of them, 0 to 0.5.

    Defaults: metal film resistors, film capacitors (check the parts' own marking),
    tracks of trimmers and knobs, a supply measured with a handheld meter, zener diodes of
    the usual selection. Common practice, no published source.

    Parameters
    ----------
    resistor, track, capacitor, supply, zener : float
        Of fixed resistors, of the tracks of trimmer and rate knob, of capacitors, of the
        supply voltage and of a zener's voltage.
    """

    resistor: float = 0.01
    track: float = 0.2
    capacitor: float = 0.1
    supply: float = 0.02
    zener: float = 0.05

    def of(self, kind: Kind) -> float:
        """Return the limit for a kind of component."""
        return float(getattr(self, kind))


@dataclass(frozen=True)
class Component:
    """One value of the circuit.

    Parameters
    ----------
    field : str
        Where it stands, as :meth:`Circuit.with_changes` takes it.
    kind : str
        Which of the tolerances it has.
    value : float
        As printed, in SI units.
    """

    field: str
    kind: Kind
    value: float


def bus_components(circuit: Circuit) -> list[Component]:
    """Return the components that move the gate bus, those of the stages left out."""
    fields: list[tuple[str, Kind]] = [
        ("supply__voltage_v", "supply"),
        ("bus__bias_ohm", "resistor"),
        ("bus__sweep_ohm", "resistor"),
        ("bus__capacitor_f", "capacitor"),
        ("bus__trimmer__track_ohm", "track"),
        ("bus__trimmer__top_ohm", "resistor"),
        ("bus__trimmer__bottom_ohm", "resistor"),
    ]
    if isinstance(circuit.supply.reference, DividerReference):
        fields += [
            ("supply__reference__upper_ohm", "resistor"),
            ("supply__reference__lower_ohm", "resistor"),
        ]
    else:
        fields.append(("supply__reference__zener_v", "zener"))
    if isinstance(circuit.oscillator, RelaxationOscillator | TriangleOscillator):
        fields += [
            ("oscillator__threshold_in_ohm", "resistor"),
            ("oscillator__threshold_out_ohm", "resistor"),
            ("oscillator__timing_capacitor_f", "capacitor"),
            ("oscillator__knob__track_ohm", "track"),
            ("oscillator__knob__series_ohm", "resistor"),
        ]
    found = [(field, kind, _value(circuit, field)) for field, kind in fields]
    return [Component(field, kind, value) for field, kind, value in found if value]


def nudged(circuit: Circuit, part: Component, share: float) -> tuple[Circuit | None, ...]:
    """Return the circuit with one component lower and higher by a share of its value.

    None stands for a value beyond what a circuit may be.
    """
    ends: list[Circuit | None] = []
    for sign in (-1.0, 1.0):
        changed = None
        with suppress(ValidationError, InputError):
            changed = circuit.with_changes(**{part.field: part.value * (1.0 + sign * share)})
        ends.append(changed)
    return tuple(ends)


def _value(circuit: Circuit, path: str) -> float | None:
    value: Any = circuit
    for name in path.split("__"):
        value = getattr(value, name)
    return None if value is None else float(value)
