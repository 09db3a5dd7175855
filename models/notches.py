"""Where the notches lie and how deep they are, for given break frequencies.

Depth is measured against dry and wet arriving in phase at full level, that is
``20 log10 |d + w W| / (d + w)`` with the mix's shares ``d`` and ``w`` and the chain's
response ``W``.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from .chain import Gains, break_hz, circuit_gains, wet_and_loop
from .circuit import Circuit
from .jfet import Jfet

Array = npt.NDArray[np.float64]

# Shallower ones do not count as notches.
LEAST_DEPTH_DB = 3.0
GRID_LOW_HZ, GRID_HIGH_HZ = 5.0, 80_000.0
GRID_PER_OCTAVE = 24
# A notch is looked for no further than this from where the phase passes.
REACH_OCTAVES = 0.6
ZOOM_POINTS = 33
ZOOMS = 5


def notch_count(circuit: Circuit) -> int:
    """Return how many notches the chain can show: one per two stages."""
    return circuit.stage_count // 2


def find_notches(
    circuit: Circuit, break_frequency_hz: npt.ArrayLike, gains: Gains | None = None
) -> tuple[Array, Array]:
    """Return frequency and depth of every notch.

    Parameters
    ----------
    circuit : Circuit
        Gives arms, feedback and mix.
    break_frequency_hz : array_like
        Shape (cases, stages) [Hz].
    gains : Gains, optional
        In place of the circuit's own, of one case or of shape (cases, ...).

    Returns
    -------
    notch_hz : ndarray
        Shape (cases, notches) [Hz]: the minimum of the mixed level next to where wet
        against dry passes an odd multiple of pi; NaN where absent or shallower than 3 dB.
    notch_db : ndarray
        Level there [dB], NaN alike.
    """
    breaks = np.asarray(break_frequency_hz, float)
    own = gains or circuit_gains(circuit)
    octaves = np.arange(np.log2(GRID_LOW_HZ), np.log2(GRID_HIGH_HZ), 1.0 / GRID_PER_OCTAVE)
    phase = _wet_phase(circuit, own, breaks, 2.0**octaves)
    count = notch_count(circuit)
    # With an odd number of stages the chain inverts at DC: the phase starts pi further on.
    first = 1.0 if circuit.stage_count % 2 == 0 else 2.0
    passing = np.full((len(breaks), count), np.nan)
    for k in range(count):
        passing[:, k] = _first_passing(phase, -(first + 2 * k) * np.pi, octaves)
    return _nearest_minimum(circuit, own, breaks, passing)


def _wet_phase(circuit: Circuit, gains: Gains, breaks: Array, freq_hz: Array) -> Array:
    """Return the chain's phase without jumps, 0 at DC (its sign left out), (cases, F) [rad]."""
    spread = ((1.0 + gains.c) / gains.b)[..., None]
    phase = np.zeros((len(breaks), len(freq_hz)))
    for i in range(circuit.stage_count):
        ratio = freq_hz / breaks[:, i, None]
        phase -= np.arctan(ratio) + np.arctan(spread[..., i, :] * ratio)
    if circuit.feedback is not None:
        loop = wet_and_loop(circuit, breaks, 2j * np.pi * freq_hz, gains)[1]
        phase -= np.unwrap(np.angle(1.0 + loop), axis=1)
    return phase


def _first_passing(phase: Array, target: float, octaves: Array) -> Array:
    """Return where the falling phase first passes a target, (cases,) [log2 Hz]; NaN if never."""
    below = phase <= target
    after = np.argmax(below, axis=1)
    found = below.any(axis=1) & (after > 0)
    after = np.maximum(after, 1)
    rows = np.arange(len(phase))
    high, low = phase[rows, after - 1], phase[rows, after]
    share = (high - target) / np.where(high > low, high - low, 1.0)
    place = octaves[after - 1] + share * (octaves[after] - octaves[after - 1])
    return np.where(found, place, np.nan)


def _nearest_minimum(
    circuit: Circuit, gains: Gains, breaks: Array, passing: Array
) -> tuple[Array, Array]:
    """Zoom in on the mixed level's minimum about each passing, (cases, notches)."""
    d = gains.dry[..., None]
    w = gains.wet[..., None]
    reach = np.full(passing.shape, REACH_OCTAVES)
    gaps = np.diff(passing, axis=1) / 2.0
    if gaps.size:
        gaps = np.where(np.isfinite(gaps), np.maximum(gaps, 0.02), REACH_OCTAVES)
        reach[:, :-1] = np.minimum(reach[:, :-1], gaps)
        reach[:, 1:] = np.minimum(reach[:, 1:], gaps)
    centre = np.where(np.isfinite(passing), passing, 0.0)
    present = np.isfinite(passing)
    span = np.linspace(-1.0, 1.0, ZOOM_POINTS)
    shape = passing.shape
    for zoom in range(ZOOMS):
        place = centre[..., None] + reach[..., None] * span
        flat = place.reshape(len(breaks), -1)
        wet = wet_and_loop(circuit, breaks, 2j * np.pi * 2.0**flat, gains)[0]
        power = (np.abs(d + w * wet) ** 2).reshape(place.shape)
        least = power.argmin(axis=-1)
        if zoom == 0:
            # A minimum at the window's edge belongs to another notch, or is none.
            present &= (least > 0) & (least < ZOOM_POINTS - 1)
        least = np.clip(least, 1, ZOOM_POINTS - 2)
        rows, columns = np.indices(shape)
        left, mid, right = (power[rows, columns, least + k] for k in (-1, 0, 1))
        step = reach * (span[1] - span[0])
        bend = left - 2.0 * mid + right
        shift = np.where(bend > 0.0, 0.5 * (left - right) / np.where(bend > 0.0, bend, 1.0), 0.0)
        centre = place[rows, columns, least] + step * np.clip(shift, -1.0, 1.0)
        reach = 2.0 * step
    hz = 2.0**centre
    wet = wet_and_loop(circuit, breaks, 2j * np.pi * hz, gains)[0]
    with np.errstate(divide="ignore"):
        level = 20.0 * np.log10(np.abs(d + w * wet) / (d + w))
    present &= level <= -LEAST_DEPTH_DB
    return np.where(present, hz, np.nan), np.where(present, level, np.nan)


def set_conductance_s(circuit: Circuit, jfets: Sequence[Jfet], gate_v: npt.ArrayLike) -> Array:
    """Return each stage's channel conductance at bus voltages, shape (..., stages) [S].

    With the half-drain network the drain rests at 0 V, so the gate sits at the bus's
    share ``1 - k``.
    """
    gate = (1.0 - circuit.half_drain_share) * np.asarray(gate_v, float)
    return np.stack([part.channel_conductance(gate) for part in jfets], axis=-1)


def set_break_hz(circuit: Circuit, jfets: Sequence[Jfet], gate_v: npt.ArrayLike) -> Array:
    """Return each stage's break frequency at bus voltages, shape (..., stages) [Hz]."""
    return break_hz(circuit, set_conductance_s(circuit, jfets, gate_v))


class NotchTable:
    """Notch frequencies of one set against the gate bus, tabulated for many look-ups.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, at the channel temperature.
    low_v, high_v : float
        Range of the gate bus [V].
    """

    FINE_V, COARSE_V, ABOUT_V = 0.002, 0.01, 0.4

    def __init__(
        self, circuit: Circuit, jfets: Sequence[Jfet], low_v: float, high_v: float
    ) -> None:
        keep = 1.0 - circuit.half_drain_share
        cutoffs = [part.cutoff_v / keep for part in jfets]
        # Fine where the curves bend, about cut-off; coarse elsewhere. Straight lines between
        # are then within 1e-4 octave (tests/models/test_notches.py).
        fine_low, fine_high = min(cutoffs) - self.ABOUT_V, max(cutoffs) + self.ABOUT_V
        coarse = np.arange(low_v, high_v + self.COARSE_V, self.COARSE_V)
        fine = np.arange(max(low_v, fine_low), min(high_v, fine_high), self.FINE_V)
        self.gate_v = np.unique(np.concatenate([coarse, fine]))
        notch_hz, _ = find_notches(circuit, set_break_hz(circuit, jfets, self.gate_v))
        self.octaves = np.log2(notch_hz)

    def at(self, gate_v: npt.ArrayLike) -> Array:
        """Return the notches, shape (..., notches) [log2 Hz]; NaN where absent."""
        gate = np.asarray(gate_v, float)
        return np.stack([np.interp(gate, self.gate_v, row) for row in self.octaves.T], axis=-1)

    def sweep(self, low_v: float, high_v: float) -> Array:
        """Return log2 of the notch frequencies over a stretch of the bus, (points, notches)."""
        inside = self.gate_v[(self.gate_v > low_v) & (self.gate_v < high_v)]
        return self.at(np.concatenate([[low_v], inside, [high_v]]))
