"""The matching fixture: what each of its readings says about the part in it.

A fixture is a TOML file with one ``[reading.NAME]`` table per reading; the tray's
columns are named after them. Four kinds of reading are known:

``servo``
    An op amp drives the gate until the source sits at the reference voltage, so
    the source resistor carries a known current. The meter reads the op amp's
    output: reference plus gate voltage.
``source-resistor``
    Gate grounded, drain at the supply, a resistor from source to ground. The
    meter reads the voltage across the resistor, and loads it.
``idss``
    Gate tied to source. The meter reads the drain current, or the voltage across
    a resistor in its path.
``cutoff``
    Gate voltage at a stated small drain current.

Signs: servo and source-resistor readings are above ground, as the meter shows
them; a cut-off reading may be written with or without its minus sign.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
import numpy.typing as npt
from pydantic import BeforeValidator, Field, ValidationError, model_validator

from .errors import InputError
from .jfet import (
    DEFAULT_BETA_EXPONENT,
    DEFAULT_CUTOFF_V_PER_K,
    NOMINAL_CELSIUS,
    Jfet,
    drain_current,
    overdrive_inverse,
    temperature_shift,
)
from .quantity import format_quantity, parse_quantity
from .schema import Part, explain_faults, read_toml, within

Array = npt.NDArray[np.float64]
ArrayLike = npt.ArrayLike

# A rectangular distribution of half-width a has the standard uncertainty a / sqrt 3
# (JCGM 100:2008, 4.3.7).
_SQRT3 = math.sqrt(3.0)
# Columns of a tray that are not readings.
RESERVED_COLUMNS = ("part", "type", "celsius", "supply", "reference", "used", "note")
# Of one reading: where a sitting differed from the others.
SITTING_COLUMNS = ("celsius", "supply", "reference")
MIN_CELSIUS, MAX_CELSIUS = -40.0, 125.0
MIN_SUPPLY_V, MAX_SUPPLY_V = 1.0, 100.0
LONGEST_NAME = 40

Volts = Annotated[float, within("V", MIN_SUPPLY_V, MAX_SUPPLY_V, "9.02")]
RailVolts = Annotated[float, within("V", 0.0, 30.0, "50 mV")]
Ohms = Annotated[float, within("ohm", 1.0, 1e9, "10k")]
Accuracy = Annotated[float, within("%", 0.0, 0.5, "1 %")]
Amperes = Annotated[float, within("A", 1e-12, 1.0, "1 uA")]
Celsius = Annotated[float, within("C", MIN_CELSIUS, MAX_CELSIUS, "21.5")]
Kelvins = Annotated[float, within("C", 0.0, 50.0, "0.5")]


@dataclass(frozen=True)
class Channels:
    """Many parts side by side, at the nominal 27 degrees Celsius.

    Parameters
    ----------
    cutoff_v, beta_a_per_v2, lambda_per_v, knee_v : numpy.ndarray
        Parameters as in :class:`~sweepset.models.jfet.Jfet`, shape (parts,).
    cutoff_v_per_k, beta_exponent : float
        Temperature behaviour, the same for all.
    """

    cutoff_v: Array
    beta_a_per_v2: Array
    lambda_per_v: Array
    knee_v: Array
    cutoff_v_per_k: float = DEFAULT_CUTOFF_V_PER_K
    beta_exponent: float = DEFAULT_BETA_EXPONENT

    @classmethod
    def of(cls, jfet: Jfet) -> Channels:
        """Return one part as arrays of shape (1,)."""
        return cls(
            np.array([jfet.cutoff_v]),
            np.array([jfet.beta_a_per_v2]),
            np.array([jfet.lambda_per_v]),
            np.array([jfet.knee_v]),
            jfet.cutoff_v_per_k,
            jfet.beta_exponent,
        )

    def at_celsius(self, celsius: ArrayLike) -> Channels:
        """Return these parts as they behave at other temperatures, shape (parts,)."""
        added_v, factor, ratio = temperature_shift(celsius, self.cutoff_v_per_k, self.beta_exponent)
        return replace(
            self,
            cutoff_v=self.cutoff_v + added_v,
            beta_a_per_v2=self.beta_a_per_v2 * factor,
            knee_v=self.knee_v * ratio,
        )

    def current(self, gate_v: ArrayLike, drain_v: ArrayLike) -> Array:
        """Return the drain currents [A]; voltages are gate and drain to source [V]."""
        return drain_current(
            gate_v, drain_v, self.cutoff_v, self.beta_a_per_v2, self.lambda_per_v, self.knee_v
        )

    def gate_for(self, current_a: ArrayLike, drain_v: ArrayLike) -> Array:
        """Return the gate voltages at which the drain carries a current, exact to 1e-12 V.

        Parameters
        ----------
        current_a : array_like
            Drain current, more than 0 [A].
        drain_v : array_like
            Drain to source, more than 0 [V].
        """
        wanted, drain = np.asarray(current_a, float), np.asarray(drain_v, float)
        square = wanted / (self.beta_a_per_v2 * (1.0 + self.lambda_per_v * drain))
        # The saturated part carries this current here; any other needs a higher
        # gate. The logarithm of the current is concave in the gate voltage, so
        # Newton's rule climbs to the solution without passing it.
        start = self.cutoff_v + overdrive_inverse(np.sqrt(square), self.knee_v)
        return _newton(lambda gate: np.log(self.current(gate, drain) / wanted), start)


@dataclass(frozen=True)
class Conditions:
    """Under what conditions parts were read; each field a scalar or of shape (parts,).

    Fields a reading's kind has no use for are 0.
    """

    celsius: ArrayLike = NOMINAL_CELSIUS
    supply_v: ArrayLike = 0.0
    reference_v: ArrayLike = 0.0
    resistor_ohm: ArrayLike = 0.0
    current_a: ArrayLike = 0.0


@dataclass(frozen=True)
class OperatingPoint:
    """What a reading says: at this gate and drain voltage the part carried this current."""

    gate_v: Array
    drain_v: Array
    current_a: Array


@dataclass(frozen=True)
class Meter:
    """Accuracy of a meter: a share of the reading, and an amount (counts times their size).

    The maker's limits are taken as the half-width of a rectangular distribution.
    The share is an error of scale, the same in every reading of one meter; the
    amount is rounding and noise, different in each.
    """

    share: float
    amount: float
    unit: str | None = None

    def own_u(self) -> float:
        """Return the standard uncertainty of each reading by itself [V or A]."""
        return self.amount / _SQRT3

    def scale_u(self, value: ArrayLike) -> Array:
        """Return the standard uncertainty that all readings share, at this value [V or A].

        It is what remains of the whole, (share x value + amount) / sqrt 3, so that
        a single reading is as uncertain as its maker's sum of both limits says.
        """
        part = self.share * np.abs(np.asarray(value, float))
        return np.asarray(np.sqrt(part * (part + 2.0 * self.amount)) / _SQRT3)

    def half_width(self, value: float) -> float:
        """Return the maker's limit of error at this value [V or A]."""
        return self.share * abs(value) + self.amount


_COUNTS = re.compile(r"([0-9]+(?:[.,][0-9]+)?)\s*counts?\s+of\s+(.+)", re.IGNORECASE)
_METER_EXAMPLE = "0.5 % + 2 counts of 1 mV"


def parse_meter(written: object) -> Meter:
    """Return the accuracy written as ``"0.5 % + 2 counts of 1 mV"``.

    Either half may be missing; ``"0.5 % + 2 mV"`` says the same.

    Raises
    ------
    ValueError
        If it cannot be read.
    """
    if isinstance(written, Meter):
        return written
    if not isinstance(written, str):
        raise ValueError(f"expected a meter's accuracy such as {_METER_EXAMPLE!r}")
    share, amount, unit = 0.0, 0.0, None
    pieces = [piece.strip() for piece in written.split("+")]
    if not 1 <= len(pieces) <= 2 or not all(pieces):
        raise ValueError(f"expected a meter's accuracy such as {_METER_EXAMPLE!r}")
    for place, piece in enumerate(pieces):
        if piece.endswith("%") and place == 0:
            share = parse_quantity(piece, "%")
            continue
        counts = _COUNTS.fullmatch(piece)
        times, size = (counts[1], counts[2]) if counts else ("1", piece)
        unit = "A" if size.rstrip().endswith("A") else "V"
        try:
            amount += float(times.replace(",", ".")) * parse_quantity(size, unit)
        except ValueError as fault:
            raise ValueError(
                f"{fault}; expected a meter's accuracy such as {_METER_EXAMPLE!r}"
            ) from None
    if not (0.0 <= share <= 0.2 and amount >= 0.0) or share == amount == 0.0:
        raise ValueError(
            "a meter's accuracy lies above 0 and within 20 %, for example " + repr(_METER_EXAMPLE)
        )
    return Meter(share, amount, unit)


@dataclass(frozen=True)
class Reference:
    """A servo's reference: a voltage above ground, or a share of the supply."""

    voltage_v: float | None = None
    share: float | None = None

    def at(self, supply_v: float) -> float:
        """Return the reference above ground at this supply [V]."""
        return self.voltage_v if self.share is None else self.share * supply_v  # type: ignore[return-value]


def _read_reference(written: object) -> Reference:
    if isinstance(written, Reference):
        return written
    if isinstance(written, str) and written.strip().endswith("%"):
        share = parse_quantity(written, "%")
        if not 0.05 <= share <= 0.95:
            raise ValueError("a share of the supply lies within 5 % to 95 %, for example '50 %'")
        return Reference(share=share)
    if isinstance(written, bool) or not isinstance(written, str | int | float):
        raise ValueError(
            "expected a voltage such as '4.51' or a share of the supply such as '50 %'"
        )
    return Reference(voltage_v=parse_quantity(written, "V"))


@dataclass(frozen=True)
class ErrorSource:
    """One cause that shifts many readings together, by one standard uncertainty.

    Parameters
    ----------
    name : str
        Sources of one name (and one group) are the same error.
    shown : array_like
        By how much the meter shows too much [V or A].
    conditions : Conditions
        What the conditions then truly are.
    group : numpy.ndarray or None
        Where given, shape (parts, columns): parts with equal rows share the error.
    """

    name: str
    shown: ArrayLike
    conditions: Conditions
    group: Array | None = None


# No meter reading of a small-signal JFET is beyond these [V], [A].
MOST_READING = {"V": 100.0, "A": 1.0}


class _Reading(Part):
    """What all kinds of reading have."""

    meter: Annotated[Meter, BeforeValidator(parse_meter)]
    meter_name: str = Field(default="meter", min_length=1, max_length=LONGEST_NAME)

    @property
    def quantity(self) -> Literal["V", "A"]:
        """What the meter shows: volts or amperes."""
        return "V"

    @property
    def has_supply(self) -> bool:
        """Whether a sitting may have a supply voltage of its own."""
        return False

    @property
    def has_reference(self) -> bool:
        """Whether a sitting may have a reference voltage of its own."""
        return False

    @model_validator(mode="after")
    def _check_meter(self) -> _Reading:
        if self.meter.unit not in (None, self.quantity):
            raise ValueError(
                f"meter counts are in {self.meter.unit}, but this reading is in {self.quantity}"
            )
        unit = getattr(self, "unit", self.quantity)
        if not unit.endswith(self.quantity):
            raise ValueError(
                f"unit = {unit!r}: this reading is in {self.quantity}; expected a unit of it"
            )
        return self

    def parse(self, written: str) -> float:
        """Return a cell's value in volts or amperes.

        A plain number is in the reading's ``unit``; a number with a unit or
        multiplier stands for itself.

        Raises
        ------
        ValueError
            If it cannot be read, or is no reading of a small-signal JFET.
        """
        value = self._written(written)
        most = MOST_READING[self.quantity]
        if not abs(value) <= most:
            raise ValueError(
                f"{written.strip()[:40]} is far beyond any reading of such a part; expected at "
                f"most {most:g} {self.quantity}"
            )
        return value

    def _written(self, written: str) -> float:
        text = written.strip()
        if re.fullmatch(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]{1,2})?", text):
            unit = getattr(self, "unit", self.quantity)
            scale = {"m": 1e-3, "u": 1e-6, "n": 1e-9}.get(unit[:-1], 1.0)
            return float(text) * scale
        return parse_quantity(text, self.quantity)

    def _meter_source(self, reading: ArrayLike, conditions: Conditions) -> ErrorSource:
        """Return the meter's error of scale: it shows too much, whatever the sign."""
        return ErrorSource(
            f"scale of {self.meter_name} ({self.quantity})",
            np.copysign(self.meter.scale_u(reading), reading),
            conditions,
        )


class ServoReading(_Reading):
    """An op amp holds the source at the reference; the meter reads its output."""

    kind: Literal["servo"]
    supply_v: Volts = Field(alias="supply")
    reference: Annotated[Reference, BeforeValidator(_read_reference)]
    resistor_ohm: Ohms = Field(alias="resistor")
    resistor_accuracy: Accuracy = 0.01
    # Left out, a reference in volts was measured by the meter; a share is set by resistors.
    reference_accuracy: Accuracy | None = None
    low_rail_v: RailVolts = Field(default=0.05, alias="low_rail")
    unit: Literal["V", "mV"] = "V"

    @model_validator(mode="after")
    def _check_voltages(self) -> ServoReading:
        self._check_reference(self.supply_v, self.reference.at(self.supply_v))
        return self

    def _check_reference(self, supply_v: float, reference_v: float) -> None:
        if not self.low_rail_v < reference_v < supply_v:
            raise ValueError(
                f"the reference of {format_quantity(reference_v, 'V', 4)} must lie between the op "
                f"amp's low rail ({format_quantity(self.low_rail_v, 'V')}) and the supply "
                f"({format_quantity(supply_v, 'V', 4)})"
            )

    @property
    def has_supply(self) -> bool:
        """True."""
        return True

    @property
    def has_reference(self) -> bool:
        """True."""
        return True

    def conditions(
        self,
        celsius: float = NOMINAL_CELSIUS,
        supply_v: float | None = None,
        reference_v: float | None = None,
    ) -> Conditions:
        """Return the conditions of a sitting; what is left out is as in the fixture file.

        Raises
        ------
        ValueError
            If the reference does not lie between the rails, or a new supply comes
            without a new reference where that is known in volts only.
        """
        if supply_v is not None and reference_v is None and self.reference.share is None:
            raise ValueError(
                f"a supply of its own ({format_quantity(supply_v, 'V', 4)}) needs a reference of "
                "its own too; measure it, or write the fixture's reference as a share of the "
                "supply such as '50 %'"
            )
        supply = self.supply_v if supply_v is None else supply_v
        reference = self.reference.at(supply) if reference_v is None else reference_v
        self._check_reference(supply, reference)
        return Conditions(celsius, supply, reference, self.resistor_ohm)

    def check(self, reading: float, conditions: Conditions) -> bool:
        """Return whether a reading is only a bound; refuse one the fixture cannot show.

        Raises
        ------
        ValueError
            If it is below ground or above the reference.
        """
        reference = float(np.asarray(conditions.reference_v))
        slack = self.meter.half_width(reading)
        if reading < -slack:
            raise ValueError(
                "expected 0 V or more: the op amp's output is measured from ground; swap the "
                "meter's leads"
            )
        if reading > reference + slack:
            if reading > float(np.asarray(conditions.supply_v)) + slack:
                raise ValueError(
                    "expected a voltage below the supply of "
                    f"{format_quantity(float(np.asarray(conditions.supply_v)), 'V', 4)}; look for "
                    "a slipped decimal point"
                )
            test = reference / self.resistor_ohm
            raise ValueError(
                f"above the reference of {format_quantity(reference, 'V', 4)}: this part's Idss is "
                f"below the test current of {format_quantity(test, 'A')}; measure it with a larger "
                "resistor, described in the fixture file, and leave this cell empty"
            )
        return reading <= self.low_rail_v + self.meter.amount

    def predict(self, channels: Channels, conditions: Conditions) -> Array:
        """Return the readings, as if the op amp could reach any voltage [V]."""
        current = np.asarray(conditions.reference_v) / np.asarray(conditions.resistor_ohm)
        drain = np.asarray(conditions.supply_v) - np.asarray(conditions.reference_v)
        gate = channels.at_celsius(conditions.celsius).gate_for(current, drain)
        return np.asarray(gate + np.asarray(conditions.reference_v, float))

    def show(self, predicted: Array) -> Array:
        """Return what the meter would show: the op amp stops at its low rail [V]."""
        return np.maximum(predicted, self.low_rail_v)

    def implies(self, reading: ArrayLike, conditions: Conditions) -> OperatingPoint:
        """Return the part's operating point at this reading."""
        reference = np.asarray(conditions.reference_v, float)
        return OperatingPoint(
            np.asarray(reading, float) - reference,
            np.asarray(conditions.supply_v - reference),
            np.asarray(reference / conditions.resistor_ohm),
        )

    def error_sources(self, reading: ArrayLike, conditions: Conditions) -> list[ErrorSource]:
        """Return the errors these readings share with others."""
        supply = np.asarray(conditions.supply_v, float)
        reference = np.asarray(conditions.reference_v, float)
        group = np.column_stack(np.broadcast_arrays(np.atleast_1d(supply), reference))
        scale = self._meter_source(reading, conditions)
        if self.reference_accuracy is None and self.reference.share is None:
            # One meter measured reading, reference and supply: it shows all too large.
            scale = replace(
                scale,
                conditions=replace(
                    conditions,
                    supply_v=supply - self.meter.scale_u(supply),
                    reference_v=reference - self.meter.scale_u(reference),
                ),
            )
            reference_u: ArrayLike = self.meter.own_u()
        else:
            share = 0.01 if self.reference_accuracy is None else self.reference_accuracy
            if self.reference_accuracy is None:
                # The supply was measured, the share of it follows.
                scale = replace(
                    scale,
                    conditions=replace(
                        conditions,
                        supply_v=supply - self.meter.scale_u(supply),
                        reference_v=reference * (1.0 - self.meter.scale_u(supply) / supply),
                    ),
                )
            reference_u = share * reference / _SQRT3
        return [
            scale,
            ErrorSource(
                "reference", 0.0, replace(conditions, reference_v=reference + reference_u), group
            ),
            _resistor_source(self.resistor_ohm, self.resistor_accuracy, conditions),
        ]


class SourceResistorReading(_Reading):
    """Gate grounded, drain at the supply; the meter reads across the source resistor.

    Without a resistor the meter's input alone carries the current.
    """

    kind: Literal["source-resistor"]
    supply_v: Volts = Field(alias="supply")
    resistor_ohm: Ohms | None = Field(default=None, alias="resistor")
    meter_input_ohm: Ohms = Field(default=10e6, alias="meter_input")
    resistor_accuracy: Accuracy = 0.01
    unit: Literal["V", "mV"] = "V"

    @property
    def has_supply(self) -> bool:
        """True."""
        return True

    @property
    def load_ohm(self) -> float:
        """Resistance from source to ground while the meter is connected [ohm]."""
        if self.resistor_ohm is None:
            return self.meter_input_ohm
        return 1.0 / (1.0 / self.resistor_ohm + 1.0 / self.meter_input_ohm)

    def conditions(
        self,
        celsius: float = NOMINAL_CELSIUS,
        supply_v: float | None = None,
        reference_v: float | None = None,
    ) -> Conditions:
        """Return the conditions of a sitting; what is left out is as in the fixture file."""
        return Conditions(
            celsius, self.supply_v if supply_v is None else supply_v, 0.0, self.load_ohm
        )

    def check(self, reading: float, conditions: Conditions) -> bool:
        """Refuse a reading the fixture cannot show; it is never a bound.

        Raises
        ------
        ValueError
            If it is not between 0 and the supply.
        """
        supply = float(np.asarray(conditions.supply_v))
        if not 0.0 < reading < supply:
            raise ValueError(
                "expected a voltage above 0 and below the supply of "
                f"{format_quantity(supply, 'V', 4)}"
            )
        return False

    def predict(self, channels: Channels, conditions: Conditions) -> Array:
        """Return the readings [V]."""
        moved = channels.at_celsius(conditions.celsius)
        supply = np.asarray(conditions.supply_v, float)
        load = np.asarray(conditions.resistor_ohm, float)

        # Excess of the channel's current: convex and falling, so Newton's rule
        # climbs from 0 without passing the solution.
        def excess(source: Array) -> Array:
            return np.asarray(moved.current(-source, supply - source) - source / load)

        start = np.zeros(np.broadcast_shapes(moved.cutoff_v.shape, supply.shape, load.shape))
        return _newton(excess, start)

    def show(self, predicted: Array) -> Array:
        """Return what the meter would show [V]."""
        return predicted

    def implies(self, reading: ArrayLike, conditions: Conditions) -> OperatingPoint:
        """Return the part's operating point at this reading."""
        source = np.asarray(reading, float)
        return OperatingPoint(
            -source,
            np.asarray(conditions.supply_v - source),
            np.asarray(source / conditions.resistor_ohm),
        )

    def error_sources(self, reading: ArrayLike, conditions: Conditions) -> list[ErrorSource]:
        """Return the errors these readings share with others."""
        ohm = self.meter_input_ohm if self.resistor_ohm is None else self.resistor_ohm
        return [
            self._meter_source(reading, conditions),
            _resistor_source(ohm, self.resistor_accuracy, conditions),
        ]


class IdssReading(_Reading):
    """Gate tied to source: the drain current, or the voltage across a resistor in its path.

    The drain voltage is either known (``drain``), or what the resistor leaves of
    the supply (``supply`` with ``resistor``).
    """

    kind: Literal["idss"]
    drain_v: Volts | None = Field(default=None, alias="drain")
    supply_v: Volts | None = Field(default=None, alias="supply")
    resistor_ohm: Ohms | None = Field(default=None, alias="resistor")
    resistor_accuracy: Accuracy = 0.01
    reads: Literal["current", "voltage"] = "current"
    # Left out: mA for a current, V for a voltage.
    unit: Literal["A", "mA", "uA", "V", "mV"] = "mA"

    @model_validator(mode="before")
    @classmethod
    def _usual_unit(cls, data: Any) -> Any:
        if isinstance(data, dict) and data.get("reads") == "voltage" and "unit" not in data:
            return {**data, "unit": "V"}
        return data

    @model_validator(mode="after")
    def _check_drain(self) -> IdssReading:
        if (self.drain_v is None) == (self.supply_v is None):
            raise ValueError("give either drain, or supply with resistor")
        if (self.supply_v is None) != (self.resistor_ohm is None):
            raise ValueError("supply and resistor belong together; without them give drain")
        if self.reads == "voltage" and self.resistor_ohm is None:
            raise ValueError("reads = 'voltage' needs supply and resistor")
        return self

    @property
    def quantity(self) -> Literal["V", "A"]:
        """What the meter shows: volts or amperes."""
        return "A" if self.reads == "current" else "V"

    @property
    def has_supply(self) -> bool:
        """Whether the drain hangs on the supply."""
        return self.supply_v is not None

    def conditions(
        self,
        celsius: float = NOMINAL_CELSIUS,
        supply_v: float | None = None,
        reference_v: float | None = None,
    ) -> Conditions:
        """Return the conditions of a sitting; what is left out is as in the fixture file."""
        if self.drain_v is not None:
            return Conditions(celsius, self.drain_v)
        supply = self.supply_v if supply_v is None else supply_v
        return Conditions(celsius, supply or 0.0, 0.0, self.resistor_ohm or 0.0)

    def check(self, reading: float, conditions: Conditions) -> bool:
        """Refuse a reading the fixture cannot show; it is never a bound.

        Raises
        ------
        ValueError
            If it is not above 0 and within what supply and resistor allow.
        """
        most, supply = 1.0, float(np.asarray(conditions.supply_v))
        if self.resistor_ohm is not None:
            most = supply if self.reads == "voltage" else supply / self.resistor_ohm
        if not 0.0 < reading < most:
            raise ValueError(
                f"expected more than 0 and less than {format_quantity(most, self.quantity, 4)}"
                + ("" if self.resistor_ohm is None else ", what supply and resistor allow")
                + f"; a plain number is in {self.unit}"
            )
        return False

    def predict(self, channels: Channels, conditions: Conditions) -> Array:
        """Return the readings [A or V]."""
        moved = channels.at_celsius(conditions.celsius)
        supply = np.asarray(conditions.supply_v, float)
        if self.resistor_ohm is None:
            return moved.current(0.0, supply)
        path = np.asarray(conditions.resistor_ohm, float)

        # Excess of the channel's current: it rises ever less steeply with the drain
        # voltage, so Newton's rule climbs from 0 without passing the solution.
        def excess(drain: Array) -> Array:
            return np.asarray(moved.current(0.0, drain) - (supply - drain) / path)

        start = np.zeros(np.broadcast_shapes(moved.cutoff_v.shape, supply.shape, path.shape))
        across = supply - _newton(excess, start)
        return np.asarray(across if self.reads == "voltage" else across / path)

    def show(self, predicted: Array) -> Array:
        """Return what the meter would show [A or V]."""
        return predicted

    def implies(self, reading: ArrayLike, conditions: Conditions) -> OperatingPoint:
        """Return the part's operating point at this reading."""
        value = np.asarray(reading, float)
        path = np.asarray(conditions.resistor_ohm, float)
        current = value if self.reads == "current" else value / path
        return OperatingPoint(
            np.zeros_like(value), np.asarray(conditions.supply_v - current * path), current
        )

    def error_sources(self, reading: ArrayLike, conditions: Conditions) -> list[ErrorSource]:
        """Return the errors these readings share with others."""
        sources = [self._meter_source(reading, conditions)]
        if self.resistor_ohm is not None:
            sources.append(_resistor_source(self.resistor_ohm, self.resistor_accuracy, conditions))
        return sources


class CutoffReading(_Reading):
    """Gate voltage at a stated test current; written with or without its minus sign."""

    kind: Literal["cutoff"]
    drain_v: Volts = Field(alias="drain")
    current_a: Amperes = Field(alias="test_current")
    current_accuracy: Accuracy = Field(default=0.02, alias="test_current_accuracy")
    unit: Literal["V", "mV"] = "V"

    def parse(self, written: str) -> float:
        """Return a cell's gate voltage, made negative [V]."""
        return -abs(super().parse(written))

    def conditions(
        self,
        celsius: float = NOMINAL_CELSIUS,
        supply_v: float | None = None,
        reference_v: float | None = None,
    ) -> Conditions:
        """Return the conditions of a sitting: only its temperature may differ."""
        return Conditions(celsius, self.drain_v, 0.0, 0.0, self.current_a)

    def check(self, reading: float, conditions: Conditions) -> bool:
        """Refuse a reading no part gives; it is never a bound.

        Raises
        ------
        ValueError
            If it is 0 or beyond 60 V.
        """
        if not 0.0 < abs(reading) < 60.0:
            raise ValueError("expected a cut-off voltage above 0 and below 60 V")
        return False

    def predict(self, channels: Channels, conditions: Conditions) -> Array:
        """Return the gate voltages, negative [V]."""
        moved = channels.at_celsius(conditions.celsius)
        return moved.gate_for(conditions.current_a, conditions.supply_v)

    def show(self, predicted: Array) -> Array:
        """Return the gate voltages, negative [V]."""
        return predicted

    def implies(self, reading: ArrayLike, conditions: Conditions) -> OperatingPoint:
        """Return the part's operating point at this reading."""
        gate = np.asarray(reading, float)
        return OperatingPoint(
            gate,
            np.broadcast_to(np.asarray(conditions.supply_v, float), gate.shape),
            np.broadcast_to(np.asarray(conditions.current_a, float), gate.shape),
        )

    def error_sources(self, reading: ArrayLike, conditions: Conditions) -> list[ErrorSource]:
        """Return the errors these readings share with others."""
        current = np.asarray(conditions.current_a, float) * (1.0 + self.current_accuracy / _SQRT3)
        return [
            self._meter_source(reading, conditions),
            ErrorSource(
                f"test current {format_quantity(self.current_a, 'A', 6)}",
                0.0,
                replace(conditions, current_a=current),
            ),
        ]


Reading = Annotated[
    ServoReading | SourceResistorReading | IdssReading | CutoffReading,
    Field(discriminator="kind"),
]


class Fixture(Part):
    """A matching fixture: its readings, and the temperature where a tray gives none."""

    readings: dict[str, Reading] = Field(alias="reading", min_length=1, max_length=50)
    celsius: Celsius = NOMINAL_CELSIUS
    celsius_accuracy_k: Kelvins = Field(default=0.5, alias="celsius_accuracy")

    @model_validator(mode="after")
    def _check_names(self) -> Fixture:
        for name in self.readings:
            if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_-]*", name) or len(name) > LONGEST_NAME:
                raise ValueError(
                    f"reading.{name}: a reading's name is its column in the tray; expected a "
                    f"letter, then letters, digits, _ or -, at most {LONGEST_NAME} characters"
                )
            if name.casefold() in RESERVED_COLUMNS:
                raise ValueError(
                    f"reading.{name}: this name belongs to another column of the tray "
                    f"({', '.join(RESERVED_COLUMNS)}); choose one such as servo_10k"
                )
        folded = [name.casefold() for name in self.readings]
        if len(set(folded)) < len(folded):
            raise ValueError("two readings differ only in capital letters; rename one")
        return self


@dataclass(frozen=True)
class Drift:
    """How a part moves with temperature at its fixture's operating point.

    A reading that stays put does not prove a cool part: near one overdrive the
    drifts of cut-off and current factor cancel in it, but not in the sweep.
    """

    reading_per_k: float
    cutoff_v_per_k: float


def drift_per_kelvin(jfet: Jfet, reading: Any, conditions: Conditions | None = None) -> Drift:
    """Return how much a part's reading and its cut-off drift per kelvin.

    Parameters
    ----------
    jfet : Jfet
        The part.
    reading : Reading
        The fixture's reading.
    conditions : Conditions, optional
        The sitting; as in the fixture file at 27 degrees when left out.

    Returns
    -------
    Drift
        In volts (or amperes) and volts per kelvin.

    References
    ----------
    L. Evans, "Biasing FETs for Zero DC Drift", Electro-Technology, 1964 (from
    memory): the drain current's drift vanishes at one overdrive.
    """
    at = reading.conditions() if conditions is None else conditions
    step = 0.5
    ends = [
        float(
            reading.predict(
                Channels.of(jfet), replace(at, celsius=np.asarray(at.celsius, float) + move)
            )[0]
        )
        for move in (-step, step)
    ]
    return Drift((ends[1] - ends[0]) / (2.0 * step), jfet.cutoff_v_per_k)


def expected_reading(jfet: Jfet, reading: Any, conditions: Conditions | None = None) -> float:
    """Return what the meter would show with this part in the fixture [V or A].

    Parameters are those of :func:`drift_per_kelvin`.
    """
    at = reading.conditions() if conditions is None else conditions
    return float(reading.show(reading.predict(Channels.of(jfet), at))[0])


def parse_fixture(data: dict[str, Any], source: str) -> Fixture:
    """Check the content of a fixture file.

    Parameters
    ----------
    data : dict
        What the TOML file holds.
    source : str
        The file's name, for messages.

    Raises
    ------
    InputError
        With every fault found, each with its key's path and the remedy.
    """
    try:
        return Fixture.model_validate(data)
    except ValidationError as fault:
        raise InputError(explain_faults(fault, source, Fixture)) from None


def load_fixture(path: str | Path) -> Fixture:
    """Return the fixture in a TOML file.

    Raises
    ------
    InputError
        If there is no such file, or if it has faults; all are listed.
    """
    path = Path(path)
    return parse_fixture(read_toml(path, "fixture file"), str(path))


def _resistor_source(ohm: float, accuracy: float, conditions: Conditions) -> ErrorSource:
    """Return a resistor's error. Readings naming the same value use the same resistor."""
    true = np.asarray(conditions.resistor_ohm, float) * (1.0 + accuracy / _SQRT3)
    return ErrorSource(
        f"resistor {format_quantity(ohm, 'ohm', 6)}", 0.0, replace(conditions, resistor_ohm=true)
    )


def _newton(function: Callable[[Array], Array], start: Array) -> Array:
    """Return the zeros of a function of each element, from a start below each.

    The slope is taken by differences, so the function stands once; the functions
    given here are convex or concave, so the steps do not overshoot.

    Raises
    ------
    ArithmeticError
        If it does not settle, which no valid part and fixture bring about.
    """
    x = np.asarray(start, float)
    for _ in range(100):
        step = 1e-6 * (1.0 + np.abs(x))
        value = function(x)
        slope = (function(x + step) - value) / step
        move = -value / slope
        x = np.asarray(x + move)
        if np.all(np.abs(move) <= 1e-12 * (1.0 + np.abs(x))):
            return x
    raise ArithmeticError("a fixture reading did not converge")
