"""The chain in small signal: break frequencies, response, loop gain, poles.

One stage, its plus input at ``v``: ``C d(x - v)/dt = v G`` with ``G`` all conductance
there, so ``v = x s/(s + w)`` with ``w = G/C`` and, from ``y = a v - b x - c y_feedback``
with ``a = 1 + b + c``,

    ``y = H x - c y_feedback``,   ``H = ((1 + c) s - b w)/(s + w)``.

With equal arms and no feedback this is the first-order all-pass
``H = -(1 - s/w)/(1 + s/w)`` (J. O. Smith, "Physical Audio Signal Processing", appendix
"Classic Analog Phase Shifters").
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from .circuit import Circuit

Array = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]


def net_conductance_s(circuit: Circuit) -> float:
    """Conductance from each drain to the gate bus through the half-drain network [S]."""
    network = circuit.bus.half_drain
    return 0.0 if network is None else 1.0 / (network.from_bus_ohm + network.from_drain_ohm)


def fixed_conductance_s(circuit: Circuit) -> Array:
    """Conductance at each plus input besides the channel, shape (stages,) [S]."""
    shunts = np.array([1.0 / stage.shunt_ohm for stage in circuit.stages])
    return np.asarray(shunts + net_conductance_s(circuit))


def capacitors_f(circuit: Circuit) -> Array:
    """Stage capacitors, shape (stages,) [F]."""
    return np.array([stage.capacitor_f for stage in circuit.stages])


def break_hz(circuit: Circuit, channel_conductance_s: npt.ArrayLike) -> Array:
    """Return the stages' break frequencies.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    channel_conductance_s : array_like
        Channel conductances, shape (..., stages) [S].

    Returns
    -------
    ndarray
        Shape (..., stages) [Hz].
    """
    total = np.asarray(channel_conductance_s, float) + fixed_conductance_s(circuit)
    return np.asarray(total / (2.0 * np.pi * capacitors_f(circuit)))


@dataclass(frozen=True)
class Gains:
    """What resistors besides the shunts do to the signal.

    Parameters
    ----------
    b, c : ndarray
        The stages' gains from their input and from the feedback, shape (..., stages).
    dry, wet : ndarray
        Shares at the mix node, their sum 1, shape (...).
    """

    b: Array
    c: Array
    dry: Array
    wet: Array


def circuit_gains(circuit: Circuit) -> Gains:
    """Return the gains of a circuit as printed; ``b`` and ``c`` have shape (stages,)."""
    gains = np.array([circuit.arm_gains(i) for i in range(circuit.stage_count)])
    both = circuit.mix.dry_ohm + circuit.mix.wet_ohm
    dry, wet = circuit.mix.wet_ohm / both, circuit.mix.dry_ohm / both
    return Gains(gains[:, 1], gains[:, 2], np.asarray(dry), np.asarray(wet))


def _stage_response(b: Any, c: Any, break_rad: Any, s: Any) -> Any:
    return ((1.0 + c) * s - b * break_rad) / (s + break_rad)


def wet_and_loop(
    circuit: Circuit,
    break_frequency_hz: npt.ArrayLike,
    s_rad: npt.ArrayLike,
    gains: Gains | None = None,
) -> tuple[ComplexArray, ComplexArray]:
    """Return the chain's response and its loop gain at complex frequencies.

    Parameters
    ----------
    circuit : Circuit
        Gives arms and feedback.
    break_frequency_hz : array_like
        Shape (..., stages) [Hz].
    s_rad : array_like
        Complex frequencies, shape (F,), or any shape broadcasting against
        ``(..., F)`` [rad/s].
    gains : Gains, optional
        In place of the circuit's own.

    Returns
    -------
    wet : ndarray
        First stage's input to last stage's output, loop closed, shape (..., F).
    loop : ndarray
        Loop gain ``L``: the loop's poles are where ``1 + L = 0``; zero without feedback.
    """
    w = 2.0 * np.pi * np.asarray(break_frequency_hz, float)[..., None, :]
    s = np.asarray(s_rad, complex)
    own = gains or circuit_gains(circuit)
    b, c = own.b[..., None, :], own.c[..., None, :]
    shape = np.broadcast_shapes(w.shape[:-1], s.shape)
    wet = np.ones(shape, complex)
    loop = np.zeros(shape, complex)
    feedback = circuit.feedback
    around = None
    for i in range(circuit.stage_count):
        response = _stage_response(b[..., i], c[..., i], w[..., i], s)
        wet = wet * response
        if feedback is not None:
            if i == feedback.into_stage - 1:
                around = np.ones(shape, complex) * c[..., i]
            elif around is not None:
                around = around * response
            if i == feedback.from_stage - 1 and around is not None:
                loop = around
                wet = wet / (1.0 + loop)
                around = None
    return wet, loop


def wet_response(
    circuit: Circuit, break_frequency_hz: npt.ArrayLike, freq_hz: npt.ArrayLike
) -> ComplexArray:
    """Return the chain's response at real frequencies, shape (..., F); see `wet_and_loop`."""
    return wet_and_loop(circuit, break_frequency_hz, 2j * np.pi * np.asarray(freq_hz, float))[0]


def loop_gain(
    circuit: Circuit, break_frequency_hz: npt.ArrayLike, freq_hz: npt.ArrayLike
) -> ComplexArray:
    """Return the loop gain at real frequencies, shape (..., F); see `wet_and_loop`."""
    return wet_and_loop(circuit, break_frequency_hz, 2j * np.pi * np.asarray(freq_hz, float))[1]


def unit_response(
    circuit: Circuit, break_frequency_hz: npt.ArrayLike, freq_hz: npt.ArrayLike
) -> ComplexArray:
    """Return the whole unit's response: input coupling, chain, mix, output coupling.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    break_frequency_hz : array_like
        Shape (..., stages) [Hz].
    freq_hz : array_like
        Shape (F,), positive [Hz].

    Returns
    -------
    ndarray
        Input to output, shape (..., F).
    """
    s = 2j * np.pi * np.asarray(freq_hz, float)
    coupling = s * circuit.input.capacitor_f * circuit.input.resistor_ohm
    gains = circuit_gains(circuit)
    mix = circuit.mix
    source_ohm = mix.dry_ohm * mix.wet_ohm / (mix.dry_ohm + mix.wet_ohm)
    rc = (source_ohm + mix.load_ohm) * mix.capacitor_f
    output = mix.load_ohm / (mix.load_ohm + source_ohm) * s * rc / (1.0 + s * rc)
    mixed = gains.dry + gains.wet * wet_and_loop(circuit, break_frequency_hz, s)[0]
    return np.asarray(coupling / (1.0 + coupling) * output * mixed)


def loop_poles_rad(circuit: Circuit, break_frequency_hz: npt.ArrayLike) -> ComplexArray:
    """Return the closed loop's poles, shape (poles,) [rad/s]; empty without a loop of stages.

    Parameters
    ----------
    circuit : Circuit
        Gives arms and feedback.
    break_frequency_hz : array_like
        One instant's break frequencies, shape (stages,) [Hz].
    """
    feedback = circuit.feedback
    if feedback is None or feedback.from_stage == feedback.into_stage:
        return np.zeros(0, complex)
    w = 2.0 * np.pi * np.asarray(break_frequency_hz, float)
    scale = float(np.exp(np.mean(np.log(w))))
    gains = circuit_gains(circuit)
    b, c = gains.b, gains.c
    below, above = np.array([1.0]), np.array([c[feedback.into_stage - 1]])
    for i in range(feedback.into_stage, feedback.from_stage):
        below = np.convolve(below, [1.0, w[i] / scale])
        above = np.convolve(above, [1.0 + c[i], -b[i] * w[i] / scale])
    return np.asarray(scale * np.roots(below + above), complex)
