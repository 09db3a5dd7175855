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

from .pairwise import Array

if TYPE_CHECKING:
    from collections.abc import Sequence

    from .circuit import Circuit
    from .cycle import Cycle
    from .gatebus import BusWave
    from .jfet import Jfet

DEPTH_DB_PER_OCTAVE = 24.0
LOST_NOTCH_OCTAVES = 1.0
# 5! = 120 permutations are all tried; beyond, exchanges of two.
EXHAUSTIVE_STAGES = 5
CYCLE_POINTS = 48


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
    bus: BusWave,
    held: frozenset[int] = frozenset(),
) -> tuple[int, ...]:
    """Return which part stands in each stage in the best order.

    Parameters
    ----------
    circuit : Circuit
        The circuit.
    jfets : sequence of Jfet
        One a stage, in a first order.
    bus : BusWave
        The gate bus at the set's bias, which hardly depends on the order.
    held : frozenset of int
        Stages (from 0) whose part must stay.

    Notes
    -----
    With up to five free stages every permutation is tried. With more, each pair of
    free stages is exchanged as long as that helps, which finds a good order, not
    provably the best.
    """
    from .cycle import analyse_cycle, mean_part

    def cycle_of(order: Sequence[int]) -> Cycle:
        return analyse_cycle(circuit, [jfets[n] for n in order], bus, points=CYCLE_POINTS)

    uniform = analyse_cycle(circuit, [mean_part(jfets)] * len(jfets), bus, points=CYCLE_POINTS)

    def cost(order: Sequence[int]) -> float:
        cycle = cycle_of(order)
        return straying(cycle.notch_hz, cycle.notch_db, uniform.notch_hz, uniform.notch_db)

    start = list(range(len(jfets)))
    free = [n for n in start if n not in held]
    if len(free) <= EXHAUSTIVE_STAGES:
        best = (cost(start), tuple(start))
        for arrangement in permutations(free):
            if list(arrangement) == free:
                continue
            order = list(start)
            for stage, part in zip(free, arrangement, strict=True):
                order[stage] = part
            best = min(best, (cost(order), tuple(order)))
        return best[1]
    value, order = cost(start), start
    improved = True
    while improved:
        improved = False
        for n, first in enumerate(free):
            for second in free[n + 1 :]:
                trial = list(order)
                trial[first], trial[second] = trial[second], trial[first]
                there = cost(trial)
                if there < value - 1e-9:
                    value, order, improved = there, trial, True
    return tuple(order)
