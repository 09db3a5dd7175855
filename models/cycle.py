"""What a set does over one cycle of the oscillator, in small signal.

All of it is quasi-static: each instant is taken as if the gate stood still there. At
1 Hz a low notch already lags its quasi-static track by several per cent.

``x_i(t) = log2`` of stage i's break frequency. The *reference* is the same circuit on
the same gate voltage with one part in every stage, the set's mean cut-off and mean log
current factor.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

from .chain import fixed_conductance_s, loop_gain, loop_poles_rad
from .circuit import Circuit
from .jfet import Jfet
from .notches import find_notches, set_break_hz, set_conductance_s

Array = npt.NDArray[np.float64]

POINTS = 512
AUDIBLE_HZ = (20.0, 20_000.0)
STOPPED_SHARE = 0.25
MARGIN_HZ = np.geomspace(5.0, 80_000.0, 160)
POLE_INSTANTS = 33


class Bus(Protocol):
    """What is asked of a gate bus."""

    @property
    def period_s(self) -> float:
        """Period [s]."""

    @property
    def low_v(self) -> float:
        """Lowest voltage [V]."""

    @property
    def high_v(self) -> float:
        """Highest voltage [V]."""

    def gate_v(self, time_s: npt.ArrayLike) -> Array:
        """Return the voltage at these times [V]."""


@dataclass(frozen=True)
class Cycle:
    """One cycle of a set in a circuit.

    Parameters
    ----------
    time_s : ndarray
        Instants, equally spaced over the period, shape (times,) [s].
    gate_v : ndarray
        Gate bus, shape (times,) [V].
    break_hz : ndarray
        Break frequencies, shape (times, stages) [Hz].
    reference_hz : ndarray
        The reference's break frequencies, shape (times, stages) [Hz].
    notch_hz, notch_db : ndarray
        Notch frequencies [Hz] and depths [dB], shape (times, notches); NaN where absent.
    notch_travel_octaves : ndarray
        Travel of each notch within 20 Hz to 20 kHz, shape (notches,) [octaves]; NaN for a
        notch never present there.
    travel_octaves : float
        The least of these; 0 if there is no notch.
    stagger_octaves : float
        Root mean square, over time and stages, of how far the stages stray from the
        reference once their common shift is taken off [octaves].
    stopped : ndarray of bool
        Whether a stage has stopped while another still moves, shape (times, stages).
    stall : float
        Share of time with any stage stopped.
    stage_stall : ndarray
        The same for each stage, shape (stages,).
    turnaround_s : ndarray
        Instants at which the reference reverses [s].
    margin : float
        Least ``|1 + loop gain|`` over frequency and time; infinite without feedback.
    stable : bool
        Whether the closed loop's poles lie in the left half plane throughout.
    """

    time_s: Array
    gate_v: Array
    break_hz: Array
    reference_hz: Array
    notch_hz: Array
    notch_db: Array
    notch_travel_octaves: Array
    travel_octaves: float
    stagger_octaves: float
    stopped: npt.NDArray[np.bool_]
    stall: float
    stage_stall: Array
    turnaround_s: Array
    margin: float
    stable: bool

    @property
    def period_s(self) -> float:
        """The oscillator's period [s]."""
        return float(self.time_s[1]) * len(self.time_s)


def analyse_cycle(circuit: Circuit, jfets: Sequence[Jfet], bus: Bus, points: int = POINTS) -> Cycle:
    """Return what a set does over one cycle.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, as it is at the channel temperature.
    bus : BusWave
        The gate bus.
    points : int
        Instants in the cycle, 16 or more.

    Raises
    ------
    ValueError
        If the set does not fit the circuit's stages.
    """
    if len(jfets) != circuit.stage_count:
        raise ValueError(f"{len(jfets)} parts for {circuit.stage_count} stages")
    time_s = np.arange(points, dtype=float) * (bus.period_s / points)
    gate_v = bus.gate_v(time_s)
    breaks = set_break_hz(circuit, jfets, gate_v)
    reference = set_break_hz(circuit, [mean_part(jfets)] * len(jfets), gate_v)
    notch_hz, notch_db = find_notches(circuit, breaks)
    travels = notch_travels(np.log2(notch_hz))
    stopped = stopped_stages(
        octave_slopes(circuit, jfets, gate_v), np.log2(breaks).mean(axis=1), bus.high_v - bus.low_v
    )
    margin, stable = _loop_state(circuit, breaks)
    return Cycle(
        time_s=time_s,
        gate_v=gate_v,
        break_hz=breaks,
        reference_hz=reference,
        notch_hz=notch_hz,
        notch_db=notch_db,
        notch_travel_octaves=travels,
        travel_octaves=least_travel(travels),
        stagger_octaves=stagger_of(np.log2(breaks), np.log2(reference)),
        stopped=stopped,
        stall=float(stopped.any(axis=1).mean()),
        stage_stall=stopped.mean(axis=0),
        turnaround_s=_turnarounds(time_s, np.log2(reference).mean(axis=1)),
        margin=margin,
        stable=stable,
    )


def mean_part(jfets: Sequence[Jfet]) -> Jfet:
    """Return the reference's part: mean cut-off, mean log current factor, means of the rest."""
    return Jfet(
        cutoff_v=float(np.mean([part.cutoff_v for part in jfets])),
        beta_a_per_v2=float(np.exp(np.mean([np.log(part.beta_a_per_v2) for part in jfets]))),
        lambda_per_v=float(np.mean([part.lambda_per_v for part in jfets])),
        knee_v=float(np.mean([part.knee_v for part in jfets])),
        cutoff_v_per_k=float(np.mean([part.cutoff_v_per_k for part in jfets])),
        beta_exponent=float(np.mean([part.beta_exponent for part in jfets])),
        label="reference",
    )


def stagger_of(octaves: Array, reference_octaves: Array) -> float:
    """Return the stagger of tracks against their reference.

    Parameters
    ----------
    octaves, reference_octaves : ndarray
        log2 of break frequencies, shape (times, stages).
    """
    apart = octaves - reference_octaves
    apart = apart - apart.mean(axis=1, keepdims=True)
    return float(np.sqrt(np.mean(apart**2)))


def octave_slopes(circuit: Circuit, jfets: Sequence[Jfet], gate_v: npt.ArrayLike) -> Array:
    """Return ``d log2 f_i / d VG``, shape (..., stages) [octaves/V]."""
    keep = 1.0 - circuit.half_drain_share
    gate = keep * np.asarray(gate_v, float)
    slopes = np.stack([part.channel_conductance_slope(gate) for part in jfets], axis=-1)
    total = set_conductance_s(circuit, jfets, gate_v) + fixed_conductance_s(circuit)
    return np.asarray(keep * slopes / total / np.log(2.0))


def stopped_stages(
    slopes: Array, mean_track: Array, swing_v: npt.ArrayLike
) -> npt.NDArray[np.bool_]:
    """Return which stages have stopped while another still moves, shape (..., times, stages).

    A stage is stopped where its slope is below a quarter of the largest while that one
    still matters: times the gate's swing it is above a quarter of the mean track's range.

    Parameters
    ----------
    slopes : ndarray
        ``d log2 f_i / d VG``, shape (..., times, stages) [octaves/V].
    mean_track : ndarray
        Mean over the stages of ``log2 f_i``, shape (..., times) [octaves].
    swing_v : array_like
        The gate's swing over the cycle, shape (...) [V].
    """
    largest = slopes.max(axis=-1, keepdims=True)
    swing = np.asarray(swing_v, float)[..., None, None]
    matters = largest * swing > STOPPED_SHARE * np.ptp(mean_track, axis=-1)[..., None, None]
    return np.asarray((slopes < STOPPED_SHARE * largest) & matters)


def notch_travels(notch_octaves: Array) -> Array:
    """Return each notch's travel within the audible band, shape (notches,) [octaves].

    Parameters
    ----------
    notch_octaves : ndarray
        log2 of notch frequencies, shape (times, notches); NaN where absent.
    """
    low, high = np.log2(AUDIBLE_HZ)
    heard = (notch_octaves >= low) & (notch_octaves <= high)
    top = np.where(heard, notch_octaves, -np.inf).max(axis=0)
    bottom = np.where(heard, notch_octaves, np.inf).min(axis=0)
    return np.where(heard.any(axis=0), top - np.where(heard.any(axis=0), bottom, 0.0), np.nan)


def least_travel(travels: Array) -> float:
    """Return the set's travel: the least of its audible notches', 0 if there is none."""
    return 0.0 if np.isnan(travels).all() else float(np.nanmin(travels))


def _turnarounds(time_s: Array, track: Array) -> Array:
    """Return where a periodic track reverses [s]."""
    rising = np.sign(np.diff(track, append=track[:1]))
    # A level stretch counts as the direction before it.
    for _ in range(2):
        for i in np.flatnonzero(rising == 0.0):
            rising[i] = rising[i - 1]
    return np.asarray(time_s[rising != np.roll(rising, 1)])


def _loop_state(circuit: Circuit, breaks: Array) -> tuple[float, bool]:
    """Return the loop's margin and whether it is stable at every instant looked at."""
    if circuit.feedback is None:
        return np.inf, True
    order = np.argsort(breaks.mean(axis=1))
    chosen = breaks[order[np.linspace(0, len(order) - 1, POLE_INSTANTS).astype(int)]]
    margin = float(np.abs(1.0 + loop_gain(circuit, chosen, MARGIN_HZ)).min())
    poles = np.concatenate([loop_poles_rad(circuit, instant) for instant in chosen])
    return margin, bool((poles.real < 0.0).all()) if len(poles) else True
