"""The bias trimmer's best position for a set.

The objective is travel times (1 - stall), over the trimmer's real range. It has several
local maxima and flat stretches, so the whole range is walked on a grid, and the best
places are then walked again more finely.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .circuit import Circuit
from .cycle import (
    POINTS,
    Cycle,
    analyse_cycle,
    least_travel,
    mean_part,
    notch_travels,
    octave_slopes,
    stopped_stages,
)
from .gatebus import BusWave, solve_bus
from .jfet import Jfet
from .notches import NotchTable, set_break_hz
from .quantity import Setting

Array = npt.NDArray[np.float64]

GRID = 161
PLACES = 6
FINER = 17
REFINEMENTS = 2
SENSITIVITY_STEP = 1e-3


@dataclass(frozen=True)
class Bias:
    """Where the trimmer goes for a set, and what that gives.

    Parameters
    ----------
    position : float
        Trimmer position, 0 (bottom end) to 1 (top end).
    objective : float
        Travel times (1 - stall) there [octaves].
    travel_octaves, stall, stagger_octaves : float
        As in :class:`Cycle`, there.
    octaves_per_degree, octaves_per_turn : float
        How far the cycle's mean break frequency moves per degree and per full turn of
        the trimmer.
    bus : BusWave
        The gate bus there.
    cycle : Cycle
        The whole cycle there.
    uniform_position, uniform_objective, uniform_travel_octaves : float
        The same for a uniform set (the set's mean part in every stage) at its own bias.
    loss : float
        Share of the uniform set's objective that this set falls short of, 0 to 1.
    warnings : tuple of str
        What the user should know.
    """

    position: float
    objective: float
    travel_octaves: float
    stall: float
    stagger_octaves: float
    octaves_per_degree: float
    octaves_per_turn: float
    bus: BusWave
    cycle: Cycle
    uniform_position: float
    uniform_objective: float
    uniform_travel_octaves: float
    loss: float
    warnings: tuple[str, ...]

    @property
    def uniform_travel_share(self) -> float:
        """The set's travel as a share of the uniform set's; 1 where even that has none."""
        if self.uniform_travel_octaves == 0.0:
            return 1.0
        return self.travel_octaves / self.uniform_travel_octaves


def solve_bias(circuit: Circuit, jfets: Sequence[Jfet], rate: Setting) -> Bias:
    """Return the best trimmer position for a set at a rate.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, as it is at the channel temperature.
    rate : Setting
        The rate; the bus capacitor makes the sweep narrower at fast ones.

    Raises
    ------
    InputError
        If the rate is out of the circuit's reach.
    """
    search = BiasSearch(circuit, jfets, rate)
    position, objective = search.best()
    reference = [mean_part(jfets)] * len(jfets)
    if all(_same(part, reference[0]) for part in jfets):
        uniform, uniform_position, uniform_objective = search, position, objective
    else:
        uniform = BiasSearch(circuit, reference, rate)
        uniform_position, uniform_objective = uniform.best()
    bus = solve_bus(circuit, position, rate)
    cycle = analyse_cycle(circuit, jfets, bus)
    per_turn = _octaves_per_travel(circuit, jfets, rate, position) / circuit.bus.trimmer.turns
    loss = 1.0 - objective / uniform_objective if uniform_objective > 0.0 else 0.0
    return Bias(
        position=position,
        objective=objective,
        travel_octaves=cycle.travel_octaves,
        stall=cycle.stall,
        stagger_octaves=cycle.stagger_octaves,
        octaves_per_degree=per_turn / circuit.bus.trimmer.travel_degrees,
        octaves_per_turn=per_turn * 360.0 / circuit.bus.trimmer.travel_degrees,
        bus=bus,
        cycle=cycle,
        uniform_position=uniform_position,
        uniform_objective=uniform_objective,
        uniform_travel_octaves=uniform.travel_octaves(uniform_position),
        loss=max(0.0, loss),
        warnings=_warnings(circuit, position, objective, cycle),
    )


class BiasSearch:
    """The objective over the trimmer's range, for one set at one rate.

    Parameters are those of :func:`solve_bias`.
    """

    def __init__(self, circuit: Circuit, jfets: Sequence[Jfet], rate: Setting) -> None:
        self._circuit, self._jfets, self._rate = circuit, jfets, rate
        ends = [solve_bus(circuit, end, rate) for end in (0.0, 1.0)]
        low = min(bus.low_v for bus in ends)
        high = max(bus.high_v for bus in ends)
        self._table = NotchTable(circuit, jfets, low, high)
        # Slopes and mean track bend no more than the notches do: the same grid serves.
        grid = self._table.gate_v
        self._slopes = octave_slopes(circuit, jfets, grid)
        self._mean_track = np.log2(set_break_hz(circuit, jfets, grid)).mean(axis=1)

    def travel_octaves(self, position: float) -> float:
        """Return the travel at a trimmer position of 0 to 1 [octaves]."""
        return self._travel(solve_bus(self._circuit, position, self._rate))

    def _travel(self, bus: BusWave) -> float:
        return least_travel(notch_travels(self._table.sweep(bus.low_v, bus.high_v)))

    def objective(self, position: float) -> float:
        """Return travel times (1 - stall) at a trimmer position of 0 to 1 [octaves]."""
        bus = solve_bus(self._circuit, position, self._rate)
        travel = self._travel(bus)
        if travel == 0.0:
            return 0.0
        gate_v = bus.gate_v(np.arange(POINTS) * (bus.period_s / POINTS))
        grid = self._table.gate_v
        slopes = np.stack([np.interp(gate_v, grid, row) for row in self._slopes.T], axis=-1)
        mean_track = np.interp(gate_v, grid, self._mean_track)
        stopped = stopped_stages(slopes, mean_track, bus.high_v - bus.low_v)
        return travel * (1.0 - float(stopped.any(axis=1).mean()))

    def best(self) -> tuple[float, float]:
        """Return the best position and its objective."""
        grid = np.linspace(0.0, 1.0, GRID)
        values = np.array([self.objective(place) for place in grid])
        padded = np.concatenate([[-np.inf], values, [-np.inf]])
        peaks = np.flatnonzero((values >= padded[:-2]) & (values >= padded[2:]))
        peaks = peaks[np.argsort(-values[peaks], kind="stable")][:PLACES]
        best_place, best_value = float(grid[peaks[0]]), float(values[peaks[0]])
        step = grid[1] - grid[0]
        # Only peaks that a finer walk could lift past the best are walked again.
        for peak in peaks[values[peaks] > 0.95 * values[peaks[0]]]:
            centre, reach = float(grid[peak]), step
            for _ in range(REFINEMENTS):
                fine = np.clip(np.linspace(centre - reach, centre + reach, FINER), 0.0, 1.0)
                found = np.array([self.objective(place) for place in fine])
                centre, reach = float(fine[found.argmax()]), 2.0 * reach / (FINER - 1)
                if found.max() > best_value:
                    best_place, best_value = centre, float(found.max())
        return best_place, best_value


def _same(part: Jfet, other: Jfet) -> bool:
    """Whether two parts have the same law, to rounding."""
    pairs = ((part.cutoff_v, other.cutoff_v), (part.beta_a_per_v2, other.beta_a_per_v2))
    return all(abs(a - b) <= 1e-12 * abs(b) for a, b in pairs)


def _octaves_per_travel(
    circuit: Circuit, jfets: Sequence[Jfet], rate: Setting, position: float
) -> float:
    """Return the slope of the mean break frequency with trimmer position [octaves]."""
    ends = np.clip([position - SENSITIVITY_STEP, position + SENSITIVITY_STEP], 0.0, 1.0)
    means = []
    for place in ends:
        bus = solve_bus(circuit, float(place), rate)
        gate_v = bus.gate_v(np.arange(POINTS) * (bus.period_s / POINTS))
        means.append(np.log2(set_break_hz(circuit, jfets, gate_v)).mean())
    return float((means[1] - means[0]) / (ends[1] - ends[0]))


def _warnings(circuit: Circuit, position: float, objective: float, cycle: Cycle) -> tuple[str, ...]:
    said = []
    if objective == 0.0:
        said.append(
            "no trimmer position makes a notch travel with this set in this circuit: "
            "check the parts' cut-off voltages against the trimmer's reach"
        )
    elif position in (0.0, 1.0):
        end = "bottom" if position == 0.0 else "top"
        said.append(
            f"the best bias lies at the trimmer's {end} end: change its end resistors "
            "or choose parts with another cut-off voltage"
        )
    if not cycle.stable:
        said.append(f"the feedback loop of {circuit.name!r} is unstable at some gate voltages")
    return tuple(said)
