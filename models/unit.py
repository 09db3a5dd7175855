"""Units built from one set: what deviations of their components and parts do to them.

Stage components enter the equations exactly. What moves the gate bus enters by its slope
and bend about the printed values, one component apart from another (how right that is
stands in tests/models/test_unit.py); the supply and a zener are conditions, not tolerances,
and stay as printed.

A builder sets the trimmer again in every unit, so unless told otherwise the bus is moved,
within the trimmer's reach, until the sweep's middle lies where it was meant to. How that
changes the wiper's resistance is left out.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import suppress
from dataclasses import dataclass, fields, replace
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from .chain import Gains, capacitors_f, net_conductance_s
from .components import Component, Tolerances, bus_components, nudged
from .cycle import AUDIBLE_HZ, least_travel, stopped_stages
from .errors import InputError
from .gatebus import BusWave, solve_bus
from .jfet import overdrive, overdrive_slope
from .notches import find_notches
from .pairwise import Array, Index, Parts
from .quantity import Setting
from .sweepgrid import even_times, gate_share

if TYPE_CHECKING:
    from .circuit import Circuit

Result = TypeVar("Result")

POINTS = 64
# Gate voltages at which a unit's notches are looked for; their tracks are monotone.
LEVELS = 3
CHUNK = 500
# A component's value is moved by this share to learn what it does to the bus.
STEP = 0.1
NEWTON_STEPS = 3

CAUSES = ("stage capacitors", "stage resistors", "bias and oscillator", "readings")
FIGURES = ("stagger_octaves", "travel_octaves", "stall", "shallowest_db", "shift_v")


@dataclass(frozen=True)
class Draws:
    """Deviations of D units, one field a cause.

    Parameters
    ----------
    capacitors : ndarray
        Factors of the stage capacitors, shape (D, stages).
    resistors : ndarray
        Factors of the stages' shunts, arms in and arms out, then of the feedback, dry and
        wet mix resistors, shape (D, 3 * stages + 3).
    bus : ndarray
        Deviations of the bus's components as shares of their values, shape (D, K).
    parts : ndarray
        Deviations of (VC, ln beta), shape (D, stages, 2) [V], [-].
    """

    capacitors: Array
    resistors: Array
    bus: Array
    parts: Array

    def __len__(self) -> int:
        return len(self.capacitors)

    def rows(self, *places: Index | slice) -> Draws:
        """Return rows of the fields, one index for all or one for each field in turn."""
        at = places if len(places) > 1 else places * 4
        return Draws(*(getattr(self, f.name)[i] for f, i in zip(fields(self), at, strict=True)))

    def only(self, cause: str) -> Draws:
        """Return the draws with all other causes at rest."""
        keep = fields(self)[CAUSES.index(cause)].name
        still = {
            f.name: np.full_like(value, 1.0 if f.name in ("capacitors", "resistors") else 0.0)
            for f in fields(self)
            if f.name != keep
            for value in [getattr(self, f.name)]
        }
        return replace(self, **still)


@dataclass(frozen=True)
class _Channels:
    """Values of D units' stages: shape (D, stages), the knee (stages,)."""

    cutoff_v: Array
    beta: Array
    knee_v: Array
    fixed_s: Array
    capacitor_f: Array
    share: float

    def _over(self, gate_v: Array) -> Array:
        return self.share * gate_v[:, :, None] - self.cutoff_v[:, None, :]

    def _total_s(self, over: Array) -> Array:
        channel = overdrive(over, self.knee_v) * overdrive_slope(over, self.knee_v)
        return np.asarray(2.0 * self.beta[:, None, :] * channel + self.fixed_s[:, None, :])

    def level(self, gate_v: Array) -> Array:
        """Return log2 of the break frequencies at (D, T) gate voltages, (D, T, stages)."""
        total = self._total_s(self._over(gate_v))
        return np.asarray(np.log2(total / (2.0 * np.pi * self.capacitor_f[:, None, :])))

    def slope(self, gate_v: Array) -> Array:
        """Return d level / d gate, shape (D, T, stages) [octaves/V]."""
        over = self._over(gate_v)
        slope = overdrive_slope(over, self.knee_v)
        safe = np.where(self.knee_v > 0.0, self.knee_v, 1.0)
        bend = np.where(self.knee_v > 0.0, slope * (1.0 - slope) / safe, 0.0)
        rise = slope**2 + overdrive(over, self.knee_v) * bend
        channel = 2.0 * self.share * self.beta[:, None, :] * rise
        return np.asarray(channel / (self._total_s(over) * math.log(2.0)))


class Unit:
    """A circuit with a set, able to say what deviations do to it.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    parts : Parts
        The set in stage order, as it is at the channel temperature.
    bus : BusWave
        The gate bus at the trimmer position the set was given.
    rate : Setting
        The rate; a knob's position is kept while components change.
    reset : bool
        Whether the trimmer is set again in every unit.
    """

    def __init__(
        self, circuit: Circuit, parts: Parts, bus: BusWave, rate: Setting, *, reset: bool = True
    ) -> None:
        self.circuit, self.parts, self.reset = circuit, parts, reset
        self._rate = rate if bus.rotation is None else Setting(rate.text, bus.rotation, None)
        self._gate = _sampled(bus)
        self.components = [
            part for part in bus_components(circuit) if part.kind not in ("supply", "zener")
        ]
        curves = np.array([self._bus_curve(bus, part) for part in self.components])
        self._slopes, self._bends = curves[:, 0], curves[:, 1]
        ends = [solve_bus(circuit, place, self._rate).mean_v for place in (0.0, 1.0)]
        self._reach = (min(ends) - bus.mean_v, max(ends) - bus.mean_v)
        trimmer = circuit.bus.trimmer
        # Over a pot of several turns the angle is all of them together.
        self.degrees_per_volt = trimmer.travel_degrees * trimmer.turns / (ends[1] - ends[0])
        self._middle = float(self._channels(self._still(1)).level(self._gate[None, :POINTS]).mean())

    def _bus_curve(self, bus: BusWave, part: Component) -> Array:
        """Return the gate bus's change with one component, shape (2, POINTS + 2) [V].

        First row by its deviation (a share of its value), second by the deviation's square.
        """
        waves = {}
        for sign, changed in zip((-1.0, 1.0), nudged(self.circuit, part, STEP), strict=True):
            if changed is None:
                continue
            with suppress(InputError):  # the oscillator stops on this side
                waves[sign] = _sampled(solve_bus(changed, bus.trimmer, self._rate)) - self._gate
        if not waves:
            raise InputError(
                f"{self.circuit.name!r}: the oscillator stops whichever way {part.field} moves by "
                f"{100.0 * STEP:g} %; nothing can be said of its tolerance"
            )
        if len(waves) == 1:
            [(sign, change)] = waves.items()
            return np.stack([sign * change / STEP, np.zeros_like(change)])
        low, high = waves[-1.0], waves[1.0]
        return np.stack([(high - low) / (2.0 * STEP), (high + low) / (2.0 * STEP**2)])

    def draw(self, tolerances: Tolerances, count: int, seed: int) -> Draws:
        """Return random deviations of `count` units.

        Values lie evenly within their tolerance (rectangular: JCGM 100:2008, 4.3.7; clause
        number from memory), parameters follow the readings' joint covariance.
        """
        generator = np.random.default_rng(seed)
        stages = len(self.parts)

        def within(limit: Array | float, columns: int) -> Array:
            return np.asarray(limit * generator.uniform(-1.0, 1.0, (count, columns)))

        limits = np.array([tolerances.of(part.kind) for part in self.components])
        root = _root(self.parts.covariance())
        normal = generator.standard_normal((count, root.shape[1]))
        return Draws(
            capacitors=1.0 + within(tolerances.capacitor, stages),
            resistors=1.0 + within(tolerances.resistor, 3 * stages + 3),
            bus=within(limits, len(self.components)),
            parts=(normal @ root.T).reshape(count, stages, 2),
        )

    def _still(self, count: int) -> Draws:
        stages = len(self.parts)
        return Draws(
            capacitors=np.ones((count, stages)),
            resistors=np.ones((count, 3 * stages + 3)),
            bus=np.zeros((count, len(self.components))),
            parts=np.zeros((count, stages, 2)),
        )

    def nominal(self) -> dict[str, float]:
        """Return the figures with nothing off."""
        return {name: float(value[0]) for name, value in self.figures(self._still(1)).items()}

    def figures(
        self, draws: Draws, progress: Callable[[float], object] | None = None
    ) -> dict[str, Array]:
        """Return what the units do over a cycle, by name (`FIGURES`), each of shape (D,).

        Parameters
        ----------
        draws : Draws
            D units.
        progress : callable, optional
            Told the share done, 0 to 1.

        Returns
        -------
        dict of str to ndarray
            Stagger and travel [octaves], stall [share of time], level of the shallowest
            notch [dB; NaN where there is none], and the shift of the gate bus by which the
            trimmer takes the sweep's middle back [V].
        """
        found = _in_chunks(self._figures, draws, progress)
        return {name: np.concatenate([one[name] for one in found]) for name in FIGURES}

    def staggers(self, draws: Draws) -> Array:
        """Return the units' staggers alone, shape (D,) [octaves]."""

        def stagger(some: Draws) -> Array:
            channels = self._channels(some)
            gate = self._reset_gate(some, channels)[0][:, :POINTS]
            return self._stagger(some, channels.level(gate), gate)

        return np.concatenate(_in_chunks(stagger, draws))

    def beyond_reach(self, shift_v: Array) -> float:
        """Return the share of shifts that end where the trimmer does."""
        low, high = self._reach
        return float(((shift_v <= low) | (shift_v >= high)).mean()) if self.reset else 0.0

    def _figures(self, draws: Draws) -> dict[str, Array]:
        channels = self._channels(draws)
        whole, shift = self._reset_gate(draws, channels)
        gate, ends = whole[:, :POINTS], whole[:, POINTS:]
        level = channels.level(gate)
        swing = ends[:, 1] - ends[:, 0]
        stopped = stopped_stages(channels.slope(gate), level.mean(axis=2), swing)
        travel, depth = self._notches(draws, channels, ends)
        return {
            "stagger_octaves": self._stagger(draws, level, gate),
            "travel_octaves": travel,
            "stall": stopped.any(axis=2).mean(axis=1),
            "shallowest_db": depth,
            "shift_v": shift,
        }

    def _bus_of(self, draws: Draws) -> Array:
        """Return the gate bus before the trimmer is set again, shape (D, POINTS + 2) [V]."""
        return np.asarray(self._gate + draws.bus @ self._slopes + draws.bus**2 @ self._bends)

    def _channels(self, draws: Draws) -> _Channels:
        parts, shunts = self.parts, self._factors(draws, 0)
        return _Channels(
            cutoff_v=parts.cutoff_v + draws.parts[..., 0],
            beta=np.exp(parts.ln_beta + draws.parts[..., 1]),
            knee_v=parts.knee_v,
            fixed_s=1.0 / (self._values("shunt_ohm") * shunts) + net_conductance_s(self.circuit),
            capacitor_f=capacitors_f(self.circuit) * draws.capacitors,
            share=gate_share(self.circuit),
        )

    def _reference(self, draws: Draws) -> _Channels:
        """Return each draw's mean part in every stage of the circuit as printed."""
        channels = self._channels(self._still(len(draws)))
        cutoff = (self.parts.cutoff_v + draws.parts[..., 0]).mean(axis=1, keepdims=True)
        log_factor = (self.parts.ln_beta + draws.parts[..., 1]).mean(axis=1, keepdims=True)
        shape = channels.cutoff_v.shape
        return replace(
            channels,
            cutoff_v=np.broadcast_to(cutoff, shape),
            beta=np.broadcast_to(np.exp(log_factor), shape),
            knee_v=np.full(shape[1], self.parts.knee_v.mean()),
        )

    def _values(self, name: str) -> Array:
        return np.array([getattr(stage, name) for stage in self.circuit.stages])

    def _factors(self, draws: Draws, row: int) -> Array:
        """Return factors of the stages' shunts (row 0), arms in (1) or out (2), (D, stages)."""
        stages = len(self.parts)
        return draws.resistors[:, row * stages : (row + 1) * stages]

    def _reset_gate(self, draws: Draws, channels: _Channels) -> tuple[Array, Array]:
        """Return the gate bus, (D, POINTS + 2), and its shift by the trimmer, (D,) [V]."""
        gate = self._bus_of(draws)
        shift = np.zeros(len(draws))
        if self.reset:
            for _ in range(NEWTON_STEPS):
                moved = gate[:, :POINTS] + shift[:, None]
                excess = channels.level(moved).mean(axis=(1, 2)) - self._middle
                slope = channels.slope(moved).mean(axis=(1, 2))
                step = np.clip(excess / np.maximum(slope, 1e-3), -0.2, 0.2)
                shift = np.clip(shift - step, *self._reach)
        return np.asarray(gate + shift[:, None]), shift

    def _stagger(self, draws: Draws, level: Array, gate: Array) -> Array:
        apart = level - self._reference(draws).level(gate)
        apart -= apart.mean(axis=2, keepdims=True)
        return np.asarray(np.sqrt((apart**2).mean(axis=(1, 2))))

    def _gains(self, draws: Draws) -> Gains:
        circuit, stages = self.circuit, len(self.parts)
        arm_in = self._values("arm_in_ohm") * self._factors(draws, 1)
        arm_out = self._values("arm_out_ohm") * self._factors(draws, 2)
        feedback, dry, wet = draws.resistors[:, 3 * stages :].T
        c = np.zeros_like(arm_in)
        if circuit.feedback is not None:
            into = circuit.feedback.into_stage - 1
            c[:, into] = arm_out[:, into] / (circuit.feedback.resistor_ohm * feedback)
        dry_ohm, wet_ohm = circuit.mix.dry_ohm * dry, circuit.mix.wet_ohm * wet
        both = dry_ohm + wet_ohm
        return Gains(arm_out / arm_in, c, wet_ohm / both, dry_ohm / both)

    def _notches(self, draws: Draws, channels: _Channels, ends: Array) -> tuple[Array, Array]:
        """Return travel [octaves] and the shallowest notch [dB], each of shape (D,)."""
        low, high = ends[:, :1], ends[:, 1:]
        level = channels.level(low + (high - low) * np.linspace(0.0, 1.0, LEVELS))
        gains = self._gains(draws)
        each = Gains(
            np.repeat(gains.b, LEVELS, axis=0),
            np.repeat(gains.c, LEVELS, axis=0),
            np.repeat(gains.dry, LEVELS),
            np.repeat(gains.wet, LEVELS),
        )
        hz, db = find_notches(self.circuit, 2.0 ** level.reshape(len(draws) * LEVELS, -1), each)
        # A monotone track cut off at the audible band travels as far as its part inside.
        octaves = np.clip(np.log2(hz), *np.log2(AUDIBLE_HZ)).reshape(len(draws), LEVELS, -1)
        missing = np.isnan(octaves)
        top = np.where(missing, -np.inf, octaves).max(axis=1)
        bottom = np.where(missing, np.inf, octaves).min(axis=1)
        seen = top >= bottom
        travels = np.where(seen, top - np.where(seen, bottom, 0.0), np.nan)
        travel = np.array([least_travel(row) for row in travels])
        shallowest = np.where(missing, -np.inf, db.reshape(missing.shape)).max(axis=(1, 2))
        return travel, np.where(np.isfinite(shallowest), shallowest, np.nan)


def _in_chunks(
    task: Callable[[Draws], Result],
    draws: Draws,
    progress: Callable[[float], object] | None = None,
) -> list[Result]:
    """Return a task's results over chunks of the draws, in order, worked out on all cores.

    The arrays' loops let go of the interpreter, so threads serve.
    """
    chunks = [draws.rows(slice(at, at + CHUNK)) for at in range(0, len(draws), CHUNK)]
    found = []
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        for number, result in enumerate(pool.map(task, chunks), start=1):
            found.append(result)
            if progress:
                progress(number / len(chunks))
    return found


def _sampled(bus: BusWave) -> Array:
    """Return the gate bus at instants of its cycle, then its lowest and highest, (POINTS + 2,)."""
    inside = bus.gate_v(even_times(bus.period_s, POINTS))
    return np.concatenate([inside, [bus.low_v, bus.high_v]])


def _root(covariance: Array) -> Array:
    """Return R with ``R R^T`` the covariance, which may be singular."""
    power, axes = np.linalg.eigh(covariance)
    return np.asarray(axes * np.sqrt(np.maximum(power, 0.0)))
