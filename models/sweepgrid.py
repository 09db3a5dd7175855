"""The circuit's gate sweep at a grid of trimmer positions, and the parts' octaves there.

The search over sets needs every part's break frequency at every trimmer position
that can be a set's own bias. One table holds them. A set's own bias on the grid is
the position with the greatest travel x (1 - stall), both from the table: travel
from the notch condition of equal-armed stages without feedback, which for like
parts is also right with them (all notches then scale with the break frequency).
The finalists of a search are judged from the full response, not from this table.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .chain import capacitors_f, fixed_conductance_s
from .cycle import AUDIBLE_HZ, Bus
from .pairwise import Array, Cloud, Index, Octaves, Parts, cloud, octaves

if TYPE_CHECKING:
    from .circuit import Circuit
    from .quantity import Setting

GRID_POSITIONS = 96
COARSE_POSITIONS = 49
GRID_TIMES = 64
# Sets whose travel is under this share of a uniform set's rank after the others.
TRAVEL_SHARE = 0.9


def even_times(period_s: float, points: int) -> Array:
    """Return `points` instants equally spaced over one period, shape (points,) [s]."""
    return np.asarray((np.arange(points) + 0.5) * (period_s / points), float)


def notch_targets(stages: int) -> Array:
    """Return the sums of the stages' arctangents at which the notches stand [rad].

    The chain of N stages turns the phase by ``N pi - 2 sum atan(f/f_i)``; a notch
    stands where that is an odd multiple of pi.
    """
    first = 0.5 if stages % 2 == 0 else 1.0
    return np.asarray((np.arange(stages // 2) + first) * math.pi, float)


@dataclass(frozen=True)
class SweepGrid:
    """Tables over Q trimmer positions, P parts and T instants.

    Parameters
    ----------
    stages : int
        Stages of the circuit.
    position : ndarray, shape (Q,)
        Trimmer positions, ascending.
    swing_v : ndarray, shape (Q,)
        Highest less lowest gate voltage [V].
    parts : Parts
        The parts.
    level, slope, per_ln_beta : ndarray, shape (Q, P, T)
        Octaves and slopes as in :class:`pairwise.Octaves`.
    low, high : ndarray, shape (Q, P)
        ``level`` at the lowest and highest gate voltage.
    band : tuple of float
        ``level`` that puts a break frequency at 20 Hz and at 20 kHz.
    uniform_travel : ndarray, shape (P,)
        Travel of a uniform set of each part at its own bias [octaves].
    uniform_place : ndarray, shape (P,)
        Index of that position.
    """

    stages: int
    position: Array
    swing_v: Array
    parts: Parts
    level: Array
    slope: Array
    per_ln_beta: Array
    low: Array
    high: Array
    band: tuple[float, float]
    uniform_travel: Array
    uniform_place: Index

    def cloud(self, place: int) -> Cloud:
        """Return the parts as points at one position."""
        swept = Octaves(self.level[place], self.slope[place], self.per_ln_beta[place])
        return cloud(self.parts, swept)

    def own_bias(self, sets: npt.ArrayLike, reach: int | None = None) -> tuple[Index, Array, Array]:
        """Return place, travel [octaves] and stall of sets at own bias, each of shape (S,).

        Parameters
        ----------
        sets : array_like of int, shape (S, N)
            Indices of the parts.
        reach : int, optional
            Look only so many grid positions about the uniform set's bias; everywhere
            when left out.
        """
        from . import closing_kernels

        members = np.ascontiguousarray(sets, dtype=np.int64)
        count, last = members.shape[0], self.position.size
        start, stop = np.zeros(count, np.int64), np.full(count, last)
        if reach is not None:
            middle = np.rint(self.uniform_place[members].mean(axis=1)).astype(np.int64)
            start, stop = np.maximum(middle - reach, 0), np.minimum(middle + reach + 1, last)
        place = np.zeros(count, np.int64)
        travel, stall = np.zeros(count), np.zeros(count)
        closing_kernels.own_positions(
            *self.tables(), members, notch_targets(self.stages), *self.band,
            start, stop, place, travel, stall,
        )  # fmt: skip
        return place, travel, stall

    def tables(self) -> tuple[Array, Array, Array, Array, Array]:
        """Return the arrays the kernels read."""
        return self.level, self.slope, self.low, self.high, self.swing_v


def gate_share(circuit: Circuit) -> float:
    """Share of the gate bus that reaches the gates, 1 without the half-drain network."""
    return 1.0 - circuit.half_drain_share


def build_grid(
    parts: Parts,
    circuit: Circuit,
    rate: Setting,
    *,
    positions: int = GRID_POSITIONS,
    bus_at: Callable[[float], Bus] | None = None,
) -> SweepGrid:
    """Tabulate the parts over the trimmer positions at which they can sweep.

    A first coarse pass over the whole trimmer finds where any part travels at
    least half as far as it can anywhere; the grid then covers that range.

    Parameters
    ----------
    parts : Parts
        P parts.
    circuit : Circuit
        The circuit; unequal shunts and capacitors enter by their geometric mean.
    rate : Setting
        The rate, which sets the gate wave.
    positions : int
        Positions of the grid.
    bus_at : callable, optional
        Trimmer position to gate-bus wave; solved from the circuit when left out.
    """
    if bus_at is None:
        from .gatebus import solve_bus

        def bus_at(position: float) -> Bus:
            return solve_bus(circuit, position, rate)

    share = gate_share(circuit)
    shunt_s = _geometric_mean(fixed_conductance_s(circuit))
    capacitor_f = _geometric_mean(capacitors_f(circuit))
    band = (
        math.log2(2.0 * math.pi * AUDIBLE_HZ[0] * capacitor_f),
        math.log2(2.0 * math.pi * AUDIBLE_HZ[1] * capacitor_f),
    )
    factors = np.log2(np.tan(notch_targets(circuit.stage_count) / circuit.stage_count))

    def extremes(at: Array) -> tuple[list[Bus], Array, Array]:
        buses = [bus_at(float(position)) for position in at]
        ends = share * np.array([[bus.low_v, bus.high_v] for bus in buses])
        flat = octaves(parts, ends.ravel(), shunt_s).level.reshape(len(parts), -1, 2)
        return buses, np.ascontiguousarray(flat[..., 0].T), np.ascontiguousarray(flat[..., 1].T)

    def uniform(low: Array, high: Array) -> Array:
        bottom, top = low[..., None] + factors, high[..., None] + factors
        heard = (top > band[0]) & (bottom < band[1])
        travel = np.minimum(top, band[1]) - np.maximum(bottom, band[0])
        least = np.where(heard, travel, np.inf).min(axis=-1)
        return np.asarray(np.where(heard.any(axis=-1), least, 0.0))

    coarse = np.linspace(0.0, 1.0, COARSE_POSITIONS)
    _, low, high = extremes(coarse)
    travel = uniform(low, high)
    useful = np.flatnonzero((travel >= 0.5 * travel.max(axis=0)).any(axis=1))
    start = coarse[max(useful[0] - 1, 0)]
    stop = coarse[min(useful[-1] + 1, COARSE_POSITIONS - 1)]
    position = np.linspace(start, stop, positions)
    buses, low, high = extremes(position)
    travel = uniform(low, high)
    place = travel.argmax(axis=0)
    swept = [
        octaves(parts, share * bus.gate_v(even_times(bus.period_s, GRID_TIMES)), shunt_s)
        for bus in buses
    ]
    return SweepGrid(
        stages=circuit.stage_count,
        position=position,
        swing_v=share * np.array([bus.high_v - bus.low_v for bus in buses]),
        parts=parts,
        level=np.array([one.level for one in swept]),
        slope=np.array([one.per_gate_v for one in swept]),
        per_ln_beta=np.array([one.per_ln_beta for one in swept]),
        low=low,
        high=high,
        band=band,
        uniform_travel=travel[place, np.arange(len(parts))],
        uniform_place=place,
    )


def _geometric_mean(values: Array) -> float:
    return float(np.exp(np.log(values).mean()))
