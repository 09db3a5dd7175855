"""What the oscillator's tap does when nothing loads it.

Voltages are from the reference rail. Time 0 is the tap at its lowest turn, about
to rise. The op amp's output is taken to sit at its rails and to switch at once.
"""

from __future__ import annotations

import math

from .circuit import (
    Circuit,
    MeasuredOscillator,
    PlainKnob,
    RelaxationOscillator,
    SineOscillator,
    TriangleOscillator,
)
from .errors import InputError
from .knob import knob_ohm, knob_rotation, plain_rate_hz, plain_rotation, setting_rotation
from .quantity import Setting, format_quantity
from .waveform import Segments, Sine, Wave


def thresholds_v(
    oscillator: RelaxationOscillator, rails_v: tuple[float, float]
) -> tuple[float, float]:
    """Return the lower and upper switching voltage of a relaxation oscillator [V]."""
    share = oscillator.threshold_in_ohm / (
        oscillator.threshold_in_ohm + oscillator.threshold_out_ohm
    )
    return share * rails_v[0], share * rails_v[1]


def relaxation_tap(
    oscillator: RelaxationOscillator, rails_v: tuple[float, float], timing_ohm: float
) -> Segments:
    """Return the unloaded timing capacitor's voltage.

    Parameters
    ----------
    oscillator : RelaxationOscillator
        Its part values.
    rails_v : tuple of float
        Lowest and highest output [V].
    timing_ohm : float
        Resistance from output to timing capacitor [ohm].
    """
    low, high = thresholds_v(oscillator, rails_v)
    tau = timing_ohm * oscillator.timing_capacitor_f
    rise = tau * math.log((rails_v[1] - low) / (rails_v[1] - high))
    fall = tau * math.log((high - rails_v[0]) / (low - rails_v[0]))
    # The capacitor's mean current is zero, so its mean is that of the op amp's output.
    mean = (rails_v[1] * rise + rails_v[0] * fall) / (rise + fall)
    parts = (
        (rails_v[1], 0.0, low - rails_v[1], 0.0),
        (rails_v[0], 0.0, high - rails_v[0], 0.0),
    )
    return Segments(rise + fall, (0.0, rise), parts, 1.0 / tau, 1.0 / tau, mean)


def triangle_tap(
    oscillator: TriangleOscillator, rails_v: tuple[float, float], timing_ohm: float, name: str
) -> Segments:
    """Return the integrator's output; parameters as for :func:`relaxation_tap`.

    Raises
    ------
    InputError
        If the integrator would have to go beyond its rails to trip the comparator.
    """
    ratio = oscillator.threshold_in_ohm / oscillator.threshold_out_ohm
    # The integrator inverts: while the comparator is high it falls.
    low, high = -ratio * rails_v[1], -ratio * rails_v[0]
    if low < rails_v[0] or high > rails_v[1]:
        raise InputError(
            f"{name}: the oscillator does not oscillate: its triangle must reach "
            f"{low:+.2f} V and {high:+.2f} V about the reference rail to trip the comparator, but "
            f"the op amp ends at {rails_v[0]:+.2f} V and {rails_v[1]:+.2f} V; lower "
            "oscillator.threshold_in, raise oscillator.threshold_out, or move supply.reference "
            "towards the middle"
        )
    tau = timing_ohm * oscillator.timing_capacitor_f
    up, down = -rails_v[0] / tau, -rails_v[1] / tau
    return _triangle(low, high, (high - low) / up, (low - high) / down)


def _triangle(low_v: float, high_v: float, rise_s: float, fall_s: float) -> Segments:
    swing = high_v - low_v
    parts = ((low_v, swing / rise_s, 0.0, 0.0), (high_v, -swing / fall_s, 0.0, 0.0))
    # The rates of the absent exponentials do not matter; one per period is harmless.
    rate = 1.0 / (rise_s + fall_s)
    return Segments(rise_s + fall_s, (0.0, rise_s), parts, rate, rate, 0.5 * (low_v + high_v))


def _plain_tap(oscillator: SineOscillator | MeasuredOscillator, period_s: float) -> Wave:
    """Return the tap of an oscillator known by its levels and its rate."""
    if isinstance(oscillator, SineOscillator):
        return Sine(period_s, oscillator.mean_v, -oscillator.peak_v, 0.0)
    low, high = oscillator.low_v, oscillator.high_v
    if oscillator.shape == "triangle":
        return _triangle(low, high, 0.5 * period_s, 0.5 * period_s)
    return Sine(period_s, 0.5 * (low + high), -0.5 * (high - low), 0.0)


def refuse_rate(
    circuit: Circuit, rate: Setting, slowest_hz: float, fastest_hz: float
) -> InputError:
    """Return the fault of a rate the knob cannot reach."""
    return InputError(
        f"rate {rate.text}: out of reach of the rate knob of {circuit.name}, which goes from "
        f"{format_quantity(slowest_hz, 'Hz')} to {format_quantity(fastest_hz, 'Hz')}; "
        "give a rate within, or a knob position"
    )


def needs_value(rate: Setting) -> float:
    """Return the rate asked for in hertz, where no rotation was given [Hz].

    Raises
    ------
    InputError
        If it is not a positive rate.
    """
    if rate.value is None or not (math.isfinite(rate.value) and rate.value > 0.0):
        raise InputError(
            f"rate {rate.text}: expected a knob position (9:00, 35%) or a rate above 0 Hz (0.8Hz)"
        )
    return rate.value


def tap_wave(circuit: Circuit, rate: Setting) -> tuple[Wave, float | None]:
    """Return the tap of an oscillator that nothing loads, and the knob's rotation.

    Parameters
    ----------
    circuit : Circuit
        Its oscillator must have a low-impedance tap (any kind but ``tap = "direct"``).
    rate : Setting
        Knob position or rate.

    Returns
    -------
    Wave
        Tap voltage from the reference rail.
    float or None
        Rotation, 0 to 1; None if the knob's ends are alike.

    Raises
    ------
    InputError
        If the rate is out of reach or the circuit does not oscillate.
    """
    oscillator = circuit.oscillator
    knob = oscillator.knob
    rotation = setting_rotation(rate, knob.travel_degrees, "rate knob")
    if isinstance(knob, PlainKnob):
        assert isinstance(oscillator, SineOscillator | MeasuredOscillator)
        if rotation is None:
            wanted = needs_value(rate)
            slack = 1e-9 * wanted
            if not knob.slowest_hz - slack <= wanted <= knob.fastest_hz + slack:
                raise refuse_rate(circuit, rate, knob.slowest_hz, knob.fastest_hz)
            return _plain_tap(oscillator, 1.0 / wanted), plain_rotation(knob, wanted)
        return _plain_tap(oscillator, 1.0 / plain_rate_hz(knob, rotation)), rotation

    def tap(timing_ohm: float) -> Segments:
        if isinstance(oscillator, RelaxationOscillator):
            return relaxation_tap(oscillator, circuit.rails_v, timing_ohm)
        assert isinstance(oscillator, TriangleOscillator)
        return triangle_tap(oscillator, circuit.rails_v, timing_ohm, circuit.name)

    if rotation is None:
        # The period is in proportion to the resistance.
        wanted = needs_value(rate)
        unit_s = tap(1.0).period_s
        try:
            rotation = knob_rotation(knob, 1.0 / (wanted * unit_s))
        except ValueError:
            ends = knob_ohm(knob, 0.0), knob_ohm(knob, 1.0)
            raise refuse_rate(
                circuit, rate, 1.0 / (max(ends) * unit_s), 1.0 / (min(ends) * unit_s)
            ) from None
        return tap(1.0 / (wanted * unit_s)), rotation
    return tap(knob_ohm(knob, rotation)), rotation
