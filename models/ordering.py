"""The order of parts in the stages, where it matters: permutations judged by their notches.

Two things are heard of an order: how far its notch tracks stray from those of the
uniform set, and how shallow its notches become. The measure adds them::

    rms over time and notches of log2(notch / uniform notch)  [octaves]
    + mean shortfall of depth against the uniform set [dB] / 24 dB per octave

so that 6 dB of lost depth weigh as much as a quarter octave of displacement. That
exchange rate is a choice of this module, not a published figure. A notch that the set
lacks and the uniform set has counts as one octave astray.
"""

from __future__ import annotations

import math
from itertools import permutations
from typing import TYPE_CHECKING

import numpy as np

from .chain import break_hz
from .cycle import Bus, mean_part
from .notches import find_notches, set_conductance_s
from .pairwise import Array
from .sweepgrid import even_times

if TYPE_CHECKING:
    from collections.abc import Sequence

    from .circuit import Circuit
    from .jfet import Jfet

DEPTH_DB_PER_OCTAVE = 24.0
LOST_NOTCH_OCTAVES = 1.0
# 5! = 120 permutations are all tried; beyond, exchanges of two.
EXHAUSTIVE_STAGES = 5
CYCLE_POINTS = 16


def straying(tracks_hz: Array, depth_db: Array, uniform_hz: Array, uniform_db: Array) -> float:
    """Return the measure of this module; all arrays (times, notches), nan where absent.

    Depths are levels at the notch, more negative for deeper ones.
    """
    wanted = np.isfinite(uniform_hz)
    if not wanted.any():
        return 0.0
    notches = min(tracks_hz.shape[1], uniform_hz.shape[1])
    astray = np.full(uniform_hz.shape, LOST_NOTCH_OCTAVES)
    short = np.zeros(uniform_hz.shape)
    both = wanted[:, :notches] & np.isfinite(tracks_hz[:, :notches])
    astray[:, :notches][both] = np.log2(
        tracks_hz[:, :notches][both] / uniform_hz[:, :notches][both]
    )
    # Beyond 60 dB a notch is as good as silence.
    here = np.maximum(depth_db[:, :notches][both], -60.0)
    there = np.maximum(uniform_db[:, :notches][both], -60.0)
    short[:, :notches][both] = np.maximum(here - there, 0.0)
    square = float((astray[wanted] ** 2).mean())
    return math.sqrt(square) + float(short[wanted].mean()) / DEPTH_DB_PER_OCTAVE


def best_order(
    circuit: Circuit,
    jfets: Sequence[Jfet],
    bus: Bus,
    held: frozenset[int] = frozenset(),
) -> tuple[int, ...]:
    """Return which part stands in each stage in the best order.

    Parameters
    ----------
    circuit : Circuit
        The circuit.
    jfets : sequence of Jfet
        One a stage, in a first order.
    bus : Bus
        The gate bus at the set's bias, which hardly depends on the order.
    held : frozenset of int
        Stages (from 0) whose part must stay.

    Notes
    -----
    With up to five free stages every permutation is tried. With more, the best
    exchange of two free stages is made as long as one helps, which finds a good order,
    not provably the best.
    """
    stages = len(jfets)
    gate_v = bus.gate_v(even_times(bus.period_s, CYCLE_POINTS))
    conductance_s = set_conductance_s(circuit, jfets, gate_v)
    mean = set_conductance_s(circuit, [mean_part(jfets)] * stages, gate_v)
    uniform_hz, uniform_db = find_notches(circuit, break_hz(circuit, mean))

    def costs(orders: list[tuple[int, ...]]) -> list[float]:
        breaks = np.concatenate([break_hz(circuit, conductance_s[:, list(o)]) for o in orders])
        shape = (len(orders), CYCLE_POINTS, -1)
        tracks, depths = (part.reshape(shape) for part in find_notches(circuit, breaks))
        return [
            straying(*both, uniform_hz, uniform_db) for both in zip(tracks, depths, strict=True)
        ]

    start = tuple(range(stages))
    free = [n for n in start if n not in held]
    if len(free) <= EXHAUSTIVE_STAGES:
        orders = []
        for arrangement in permutations(free):
            places = list(start)
            for stage, part in zip(free, arrangement, strict=True):
                places[stage] = part
            orders.append(tuple(places))
        return min(zip(costs(orders), orders, strict=True))[1]
    order, value = start, costs([start])[0]
    while True:
        trials = [_exchanged(order, a, b) for n, a in enumerate(free) for b in free[n + 1 :]]
        there, trial = min(zip(costs(trials), trials, strict=True))
        if there > value - 1e-9:
            return order
        value, order = there, trial


def _exchanged(order: tuple[int, ...], first: int, second: int) -> tuple[int, ...]:
    parts = list(order)
    parts[first], parts[second] = parts[second], parts[first]
    return tuple(parts)
