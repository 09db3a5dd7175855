"""Filling the sample loops' tables and running them over lanes.

One call runs a bundle of lanes through the nonlinear chain, piece by piece: first the
fast loop, then, for lanes whose steps needed more passes or whose outputs came to a rail,
a slower loop over the same piece.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from ..models.chain import net_conductance_s
from ..models.circuit import Circuit
from ..models.gatebus import BusNode
from ..models.jfet import Jfet
from .chain_kernels import (
    BUS,
    CHANGE,
    GATE_DRAIN,
    GATE_SOURCE,
    HBETA,
    HIGH_INPUT,
    KNEE,
    LAMBDA,
    LOW_INPUT,
    PER_KNEE,
    RAIL,
    STATES,
    STUCK,
    TALLIES,
    TOP,
    VC,
    careful_kernel,
    lane_kernel,
)
from .rules import Rule, weight_table

Array = npt.NDArray[np.float64]

# A junction is taken to conduct audibly above this forward voltage; silicon passes
# about a microampere there (design rule of the trade, no published source).
CONDUCTING_V = 0.5
# The voltage error that the Newton passes may leave behind in the worst step, -94 dB re
# 0.5 V; the charge is kept to the next order, so it does not add up.
LEFT_OVER_V = 1e-5
# The furthest the gate may go while its side of the law is carried on by expansion: the
# third-order rest, (2 mV/knee)^3/6 of it, is worth less than a microvolt at the drain.
BUS_STEP_V = 2e-3
# Steps of all lanes together that are fed to a loop at a time: few enough for the cache
# and for a repair to cost little, many enough for what surrounds the loop to cost little.
PIECE_STEPS = 32_768
# Pieces for which a lane that needed two passes gets them unasked.
STICKY = 1


@dataclass(frozen=True)
class Tally:
    """What the loops counted, summed over lanes; counts are of stages times steps.

    Parameters
    ----------
    gate_source, gate_drain : float
        Steps with a gate junction forward to the source, to the drain.
    low_input, high_input : float
        Steps with a plus input outside the op amps' common-mode range.
    rail : float
        Steps with any stage's output at a rail.
    stuck : float
        Steps whose Newton passes did not settle.
    careful_steps : float
        Steps done by the careful loop.
    """

    gate_source: float = 0.0
    gate_drain: float = 0.0
    low_input: float = 0.0
    high_input: float = 0.0
    rail: float = 0.0
    stuck: float = 0.0
    careful_steps: float = 0.0

    def __add__(self, other: Tally) -> Tally:
        """Return the sum of two tallies."""
        return Tally(*(a + b for a, b in zip(self._row(), other._row(), strict=True)))

    def _row(self) -> tuple[float, ...]:
        return (
            self.gate_source,
            self.gate_drain,
            self.low_input,
            self.high_input,
            self.rail,
            self.stuck,
            self.careful_steps,
        )


@dataclass
class _Piece:
    """Some frames of all lanes, and the state they start from; after a run, that they end in."""

    x: Array
    gate: Array
    state: Array
    drift: Array
    out: Array = field(default_factory=lambda: np.empty(0))
    tally: Array = field(default_factory=lambda: np.empty(0))

    def copy(self, room: Array) -> _Piece:
        """Return the piece about to be run, its output going into `room`."""
        return _Piece(
            self.x, self.gate, self.state.copy(), self.drift.copy(), room[: len(self.x)],
            np.zeros((self.state.shape[2], TALLIES)),
        )  # fmt: skip

    def take(self, other: _Piece, lanes: npt.NDArray[np.bool_ | np.intp]) -> None:
        """Take some lanes' results from another run of the same piece."""
        self.state[..., lanes] = other.state[..., lanes]
        self.drift[..., lanes] = other.drift[..., lanes]
        self.out[:, lanes] = other.out[:, lanes]
        self.tally[lanes] = other.tally[lanes]


class LaneRunner:
    """The chain of one circuit, ready to run lanes at one step.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    sets : sequence of sequence of Jfet
        One set per lane, or a single set for all lanes; parts as they are at the
        channel temperature. All knees are zero or none is.
    step_s : float
        Step of the integration [s].
    rules : tuple of Rule
        One per stage.
    lanes : int
        Number of lanes.
    bus : BusNode, optional
        The gate bus as a node, into which a half-drain network leads audio. Left out, the
        bus is driven: it is what is given, whatever the drains do.
    """

    def __init__(
        self,
        circuit: Circuit,
        sets: Sequence[Sequence[Jfet]],
        step_s: float,
        rules: tuple[Rule, ...],
        lanes: int,
        bus: BusNode | None = None,
    ) -> None:
        count = circuit.stage_count
        self.lanes = lanes
        self.stages = count
        knees = [part.knee_v for parts in sets for part in parts]
        self.soft = max(knees) > 0.0
        capacitors = np.array([stage.capacitor_f for stage in circuit.stages])
        self.lane_table = np.zeros((5, count, lanes))
        for lane in range(lanes):
            parts = sets[lane % len(sets)]
            for s, part in enumerate(parts):
                # A knee of zero among soft ones becomes 1 nV: the same law to the last bit heard.
                knee = max(part.knee_v, 1e-9) if self.soft else 1.0
                self.lane_table[VC, s, lane] = part.cutoff_v
                self.lane_table[HBETA, s, lane] = step_s * part.beta_a_per_v2 / capacitors[s]
                self.lane_table[LAMBDA, s, lane] = part.lambda_per_v
                self.lane_table[KNEE, s, lane] = knee
                self.lane_table[PER_KNEE, s, lane] = 1.0 / knee
        net = net_conductance_s(circuit)
        shunts = np.array([1.0 / stage.shunt_ohm for stage in circuit.stages])
        gains = np.array([circuit.arm_gains(s) for s in range(count)]).T
        self.stage_table = np.vstack(
            [
                step_s * shunts[None] / capacitors,
                gains,
                weight_table(rules),
                np.full((1, count), step_s * net) / capacitors,
            ]
        )
        self.keep = 1.0 - circuit.half_drain_share
        self.half_drain = circuit.bus.half_drain is not None
        self.into_bus = self.bus_leak = 0.0
        if bus is not None and self.half_drain:
            self.into_bus = step_s * net / bus.capacitor_f
            self.bus_leak = step_s * bus.conductance_s / bus.capacitor_f
        loop = circuit.feedback
        self.frm = -1 if loop is None else loop.from_stage - 1
        self.rails = circuit.rails_v
        self.common_mode = circuit.common_mode_v
        curvature = (weight_table(rules)[0] * self.lane_table[HBETA].max(axis=1)).max()
        self.change_limit_v = float(np.sqrt(LEFT_OVER_V / curvature))
        bent = bool(self.lane_table[LAMBDA].any())
        self._fast = [
            lane_kernel(count, lanes, self.soft, bent, self.half_drain, self.frm, passes)
            for passes in (1, 2)
        ]

    def run(self, x: Array, gate: Array, first: int) -> tuple[Array, Tally]:
        """Run all lanes from rest.

        Parameters
        ----------
        x : ndarray
            First stage's input, shape (frames, lanes) [V].
        gate : ndarray
            Gate bus, shape (frames, lanes) [V].
        first : int
            Frames before this one warm the chain up and are not returned.

        Returns
        -------
        out : ndarray
            Last stage's output, shape (frames - first, lanes) [V].
        tally : Tally
            What was counted from frame `first` on.
        """
        out = np.empty((len(x) - first, self.lanes))
        return out, self._run_into(out, x, gate, first)

    def run_slices(self, track: Array, gate: Array, warm: int) -> tuple[Array, Tally]:
        """Cut a track into as many slices as there are lanes, run them and join them.

        Parameters
        ----------
        track : ndarray
            First stage's input, shape (warm + lanes x length,) [V].
        gate : ndarray
            Gate bus, shape alike [V].
        warm : int
            Frames each slice is warmed up over: those before it on the track.

        Returns
        -------
        out : ndarray
            Last stage's output past the first `warm` frames, shape (lanes x length,) [V].
        tally : Tally
            What was counted.
        """
        length = (len(track) - warm) // self.lanes
        out = np.empty(self.lanes * length)
        tally = self._run_into(
            out.reshape(self.lanes, length).T,
            _columns(track, self.lanes, length, warm),
            _columns(gate, self.lanes, length, warm),
            warm,
        )
        return out, tally

    def _run_into(self, out: Array, x: Array, gate: Array, first: int) -> Tally:
        """Run all lanes piece by piece and write what follows the warm-up into `out`.

        Each piece is tried with the loop of one pass. Lanes for which that is not enough
        are taken from the loop of two passes, and those for which even that is not, or
        which come to a rail, from the careful loop, all from the same state. What a lane
        gets depends on that lane alone, wherever it lies and whatever runs beside it.
        """
        state = np.zeros((STATES, self.stages, self.lanes))
        drift = np.zeros((3, self.lanes))
        total = np.zeros((self.lanes, TALLIES))
        waiting = np.zeros(self.lanes, int)
        careful_steps = 0
        length = max(PIECE_STEPS // self.lanes, 1)
        made = np.empty((length, self.lanes))
        work = np.zeros(max(size for _, size in self._fast))
        edges = [*range(0, first, length), *range(first, len(x), length), len(x)]
        for begin, end in pairwise(edges):
            block, bus = (np.ascontiguousarray(a[begin:end]) for a in (x, gate))
            start = _Piece(block, bus, state, drift)
            warming = begin < first
            chosen = waiting > 0
            waiting[chosen] -= 1
            result = start.copy(made)
            if not chosen.all():
                self._fast_pass(result, work, passes=1)
                failed = self._unfit(result, warming) & ~chosen
                waiting[failed] = STICKY
                chosen |= failed
            if chosen.any():
                better = start.copy(np.empty_like(made))
                self._fast_pass(better, work, passes=2)
                result.take(better, chosen)
                hard = np.flatnonzero(chosen & self._unfit(result, warming))
                if len(hard):
                    best = start.copy(np.empty_like(made))
                    self._carefully(best, hard)
                    result.take(best, hard)
                    careful_steps += 0 if warming else len(hard) * (end - begin)
            state, drift = result.state, result.drift
            if not warming:
                out[begin - first : end - first] = result.out[: end - begin]
                total += result.tally
        counts = [float(count) for count in total.sum(axis=0)]
        return Tally(
            gate_source=counts[GATE_SOURCE],
            gate_drain=counts[GATE_DRAIN],
            low_input=counts[LOW_INPUT],
            high_input=counts[HIGH_INPUT],
            rail=counts[RAIL],
            stuck=counts[STUCK],
            careful_steps=float(careful_steps),
        )

    def _fast_pass(self, piece: _Piece, work: Array, *, passes: int) -> None:
        """Run the fast loop over all lanes of a piece."""
        run, _ = self._fast[passes - 1]
        run(
            piece.x, piece.gate, piece.out, self.lane_table, self.stage_table, piece.state,
            piece.drift, self.into_bus, self.bus_leak, CONDUCTING_V, *self.common_mode,
            self.keep, work, piece.tally,
        )  # fmt: skip

    def _carefully(self, piece: _Piece, lanes: npt.NDArray[np.intp]) -> None:
        """Run the careful loop over some lanes of a piece."""
        careful = careful_kernel(self.soft, self.half_drain)
        for lane in lanes:
            careful(
                piece.x, piece.gate, piece.out, self.lane_table, self.stage_table, piece.state,
                piece.drift, self.into_bus, self.bus_leak, CONDUCTING_V, *self.common_mode,
                self.keep, lane, self.frm, *self.rails, piece.tally,
            )  # fmt: skip

    def _unfit(self, piece: _Piece, warming: bool) -> npt.NDArray[np.bool_]:
        """Return which lanes came to a rail, corrected too much or had the gate run away.

        While warming up, from rest into the middle of a riff, all of that is to be
        expected and soon forgotten. A lane that ran away ends in NaN, which the loop's
        comparisons pass over.
        """
        lost = ~np.isfinite(piece.state).all(axis=(0, 1))
        if warming:
            return np.asarray(lost)
        limit = min(abs(rail) for rail in self.rails)
        tally = piece.tally
        fit = (tally[:, TOP] < limit) & (tally[:, CHANGE] < self.change_limit_v)
        fit &= tally[:, BUS] < BUS_STEP_V
        return np.asarray(lost | ~fit)


def _columns(track: Array, lanes: int, length: int, warm: int) -> Array:
    """Return overlapping slices of a track as columns, a view of (warm + length, lanes)."""
    stride = track.strides[0]
    return np.lib.stride_tricks.as_strided(
        track, (warm + length, lanes), (stride, stride * length), writeable=False
    )
