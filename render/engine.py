"""Blocks of audio through the whole unit, at an oversampled rate.

Input volts are clamped by the input buffer, brought to the oversampled rate, sent
through the input coupling, the nonlinear chain and the mix, and brought back. The
chain forgets within milliseconds and the oscillator is known at any time, so a
stretch of audio is cut into slices that run side by side, each warmed up over the
audio before it; where the cuts lie depends on the take's length alone. The slow
linear parts (couplings) are run uncut, before and after.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import soxr

from ..models.circuit import Circuit
from ..models.gatebus import BusNode
from ..models.jfet import Jfet
from .filter_kernels import recursive
from .lanes import LaneRunner, Tally
from .plan import EnginePlan
from .rules import ADAMS_4

Array = npt.NDArray[np.float64]
Gate = Callable[[int, int, float], Array]

LANES = 32
BUNDLES = 2  # slices of a stretch = LANES x BUNDLES, whatever the machine's cores
SLICE_STEPS = 32768
MOST_STEPS = 4_000_000  # in one stretch, all channels together: 32 MB for each array of it
BUS_FORGOTTEN = 1e-5
RESAMPLER = "VHQ"


@dataclass(frozen=True)
class RunReport:
    """What happened while rendering.

    Parameters
    ----------
    frames : int
        Frames rendered, at the file's rate.
    seconds : float
        Their length [s].
    nonfinite_frames : int
        Output frames holding a NaN or an infinity.
    input_rail_frames : int
        Input frames clamped at the input buffer's rails.
    rail_seconds : float
        Time with a stage's output at a rail, summed over channels [s].
    gate_source_seconds, gate_drain_seconds : float
        Time with a gate junction forward (beyond 0.5 V) to the source or to the
        drain, summed over stages and channels [s].
    common_mode_seconds : float
        Time with a plus input outside the op amps' range, summed likewise [s].
    unsettled_steps : int
        Steps whose equations did not settle.
    careful_share : float
        Share of steps done by the careful loop.
    """

    frames: int
    seconds: float
    nonfinite_frames: int
    input_rail_frames: int
    rail_seconds: float
    gate_source_seconds: float
    gate_drain_seconds: float
    common_mode_seconds: float
    unsettled_steps: int
    careful_share: float

    def as_record(self) -> dict[str, Any]:
        """Return plain values for a JSON record."""
        return asdict(self)

    def warnings(self) -> list[str]:
        """Return a sentence for each thing the user should know."""
        said = []
        if self.nonfinite_frames:
            said.append(f"{self.nonfinite_frames} output frames are not finite numbers")
        if self.input_rail_frames:
            said.append(
                f"the input buffer clipped in {self.input_rail_frames} frames: "
                "lower the full-scale voltage"
            )
        if self.rail_seconds:
            said.append(
                f"op-amp outputs were at their rails for {self.rail_seconds:.3g} s: "
                "lower the full-scale voltage or the feedback"
            )
        if self.gate_source_seconds:
            said.append(
                f"gates conducted to their sources for {self.gate_source_seconds:.3g} s "
                "(summed over stages); the model does not load the bus by it: move the "
                "bias trimmer down"
            )
        if self.gate_drain_seconds:
            said.append(
                f"gates conducted to their drains for {self.gate_drain_seconds:.3g} s "
                "(summed over stages); a real unit distorts there: lower the full-scale "
                "voltage or the bias"
            )
        if self.common_mode_seconds:
            said.append(
                f"plus inputs left the op amps' common-mode range for "
                f"{self.common_mode_seconds:.3g} s (summed over stages); some op amps "
                "invert there"
            )
        if self.unsettled_steps:
            said.append(f"{self.unsettled_steps} steps did not settle; distrust this take")
        return said


class Engine:
    """One take's signal path, fed block by block.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, as it is at the channel temperature.
    sample_rate : float
        The audio's rate [Hz].
    channels : int
        Number of channels; each has its own copy of the unit, on one oscillator.
    plan : EnginePlan
        Oversampling and rules.
    gate : callable
        ``gate(start, count, rate_hz)`` gives the gate bus at `count` steps of
        ``1/rate_hz`` from step `start`, which may be negative, shape (count,) [V].
    bus : BusNode, optional
        The gate bus as a node, into which a half-drain network leads audio. Left out, the
        bus is driven: `gate` is all of it.
    chain_only : bool
        Leave couplings and mix out: the block is the first stage's input and the
        result the last stage's output.
    workers : int, optional
        Threads; the result does not depend on it. Default: the machine's cores.
    """

    def __init__(
        self,
        circuit: Circuit,
        jfets: Sequence[Jfet],
        sample_rate: float,
        channels: int,
        plan: EnginePlan,
        gate: Gate,
        *,
        bus: BusNode | None = None,
        chain_only: bool = False,
        workers: int | None = None,
    ) -> None:
        self.plan = plan
        self.rate_hz = sample_rate * plan.factor
        self._sample_rate = sample_rate
        self._channels = channels
        self._gate = gate
        self._chain_only = chain_only
        self._rails = circuit.rails_v
        # Each slice is at least twice its warm-up, which bounds what the warm-ups cost, and
        # all slices of all channels together fit the memory set aside.
        self._warm = plan.warm_up_steps
        if bus is not None and circuit.bus.half_drain is not None:
            # The bus must forget too; what the drains add to it is small from the start.
            time_constant_s = bus.capacitor_f / bus.conductance_s
            self._warm += int(-np.log(BUS_FORGOTTEN) * time_constant_s * self.rate_hz)
        steps = max(SLICE_STEPS, 2 * self._warm)
        lanes = LANES
        while lanes > 1 and lanes * BUNDLES * steps * channels > MOST_STEPS:
            lanes //= 4
        self._slice_steps = steps
        self._runner = LaneRunner(
            circuit, [list(jfets)], 1.0 / self.rate_hz, plan.rules, max(lanes, 1), bus
        )
        self._workers = workers or os.cpu_count() or 1
        self._up = self._resampler(sample_rate, self.rate_hz)
        self._down = self._resampler(self.rate_hz, sample_rate)
        # Linear, and far too slow to know one rate from the other: run at the file's rate.
        self._couple_in = HighPass(
            circuit.input.resistor_ohm * circuit.input.capacitor_f, sample_rate, channels
        )
        mix = circuit.mix
        both = mix.dry_ohm + mix.wet_ohm
        source = mix.dry_ohm * mix.wet_ohm / both
        self._dry_gain, self._wet_gain = mix.wet_ohm / both, mix.dry_ohm / both
        self._load_gain = mix.load_ohm / (mix.load_ohm + source)
        self._couple_out = HighPass(
            (mix.load_ohm + source) * mix.capacitor_f, sample_rate, channels
        )
        self._waiting: list[Array] = []
        self._waiting_steps = 0
        self._tail = np.zeros((self._warm, channels))
        self._done_steps = 0
        self._frames_in = self._frames_out = 0
        self._tally = Tally()
        self._nonfinite = self._input_rail = 0

    def process(self, block: Array) -> Array:
        """Take a block of input and return what output is ready.

        Parameters
        ----------
        block : ndarray
            Shape (frames, channels) [V].

        Returns
        -------
        ndarray
            Shape (any number of frames, channels) [V]. Output is aligned with the
            input; it comes later, in stretches.
        """
        low, high = self._rails
        self._frames_in += len(block)
        if not self._chain_only:
            clamped = np.clip(block, low, high)
            self._input_rail += int((clamped != block).any(axis=1).sum())
            block = self._couple_in(clamped)
        return self._through(self._resample(self._up, block, last=False), last=False)

    def finish(self) -> Array:
        """Return the rest of the output; in all there are as many frames out as in."""
        empty = np.zeros((0, self._channels))
        return self._through(self._resample(self._up, empty, last=True), last=True)

    def report(self) -> RunReport:
        """Return what was counted so far."""
        step = 1.0 / self.rate_hz
        tally = self._tally
        return RunReport(
            frames=self._frames_out,
            seconds=self._frames_out / self._sample_rate,
            nonfinite_frames=self._nonfinite,
            input_rail_frames=self._input_rail,
            rail_seconds=tally.rail * step,
            gate_source_seconds=tally.gate_source * step,
            gate_drain_seconds=tally.gate_drain * step,
            common_mode_seconds=(tally.low_input + tally.high_input) * step,
            unsettled_steps=int(tally.stuck),
            careful_share=tally.careful_steps / max(1, self._done_steps * self._channels),
        )

    def _resampler(self, rate_in: float, rate_out: float) -> Any:
        if rate_in == rate_out:
            return None
        return soxr.ResampleStream(
            rate_in, rate_out, self._channels, dtype="float64", quality=RESAMPLER
        )

    def _resample(self, stream: Any, block: Array, *, last: bool) -> Array:
        if stream is None:
            return block
        if not last and not len(block):
            return block
        made: Array = stream.resample_chunk(np.ascontiguousarray(block), last=last)
        return made.reshape(-1, self._channels)

    def _through(self, steps: Array, *, last: bool) -> Array:
        """Collect steps into stretches, run them, and return finished frames."""
        self._waiting.append(steps)
        self._waiting_steps += len(steps)
        whole = self._runner.lanes * BUNDLES * self._slice_steps
        done = []
        while self._waiting_steps >= whole or (last and self._waiting_steps > 0):
            joined = np.concatenate(self._waiting)
            stretch, rest = joined[:whole], joined[whole:]
            self._waiting, self._waiting_steps = [rest], len(rest)
            done.append(self._resample(self._down, self._stretch(stretch), last=False))
        if last:
            empty = np.zeros((0, self._channels))
            done.append(self._resample(self._down, empty, last=True))
        out = np.concatenate(done) if done else np.zeros((0, self._channels))
        if not self._chain_only:
            out = self._couple_out(out)
        if last:
            out = self._fit(out)
        self._frames_out += len(out)
        self._nonfinite += int((~np.isfinite(out)).any(axis=1).sum())
        return out

    def _fit(self, out: Array) -> Array:
        """Cut or pad the last frames so that as many come out as went in."""
        wanted = self._frames_in - self._frames_out
        if len(out) < wanted:
            out = np.concatenate([out, np.zeros((wanted - len(out), self._channels))])
        return out[:wanted]

    def _stretch(self, volts: Array) -> Array:
        """Run one stretch at the oversampled rate, shape (steps, channels)."""
        wet = self._chain(volts)
        self._done_steps += len(volts)
        if self._chain_only:
            return wet
        wet *= self._load_gain * self._wet_gain
        volts *= self._load_gain * self._dry_gain
        wet += volts
        return wet

    def _chain(self, x: Array) -> Array:
        """Cut a stretch into slices, run them side by side and join them."""
        warm = self._warm
        bundle = self._runner.lanes * -(-len(x) // (self._runner.lanes * BUNDLES))
        padding = np.zeros((BUNDLES * bundle - len(x), self._channels))
        history = np.concatenate([self._tail, x, padding])
        self._tail = history[len(x) : len(x) + warm].copy()
        gate = self._gate(self._done_steps - warm, len(history), self.rate_hz)
        wet = np.empty((BUNDLES * bundle, self._channels))

        def run(job: tuple[int, int]) -> Tally:
            channel, number = job
            part = slice(number * bundle, (number + 1) * bundle + warm)
            track = np.ascontiguousarray(history[part, channel])
            out, tally = self._runner.run_slices(track, gate[part], warm)
            wet[number * bundle : (number + 1) * bundle, channel] = out
            return tally

        jobs = [(channel, number) for channel in range(self._channels) for number in range(BUNDLES)]
        if self._workers > 1:
            with ThreadPoolExecutor(min(self._workers, len(jobs))) as pool:
                tallies = list(pool.map(run, jobs))
        else:
            tallies = [run(job) for job in jobs]
        self._tally = sum(tallies, self._tally)
        return wet[: len(x)]


class HighPass:
    """A first-order high-pass, run uncut with the engine's fourth-order rule.

    Parameters
    ----------
    time_constant_s : float
        RC of the coupling [s].
    rate_hz : float
        Rate at which it runs [Hz].
    channels : int
        Number of channels.
    """

    def __init__(self, time_constant_s: float, rate_hz: float, channels: int) -> None:
        weights = np.array(ADAMS_4.weights) / (time_constant_s * rate_hz)
        a = np.array([1.0, -1.0, 0.0, 0.0]) + weights
        self._a, self._b = a / a[0], np.array([1.0, -1.0, 0.0, 0.0]) / a[0]
        self._state = np.zeros((3, channels))

    def __call__(self, x: Array) -> Array:
        """Return the next stretch, shape (frames, channels)."""
        y = np.empty_like(x)
        recursive(self._b, self._a, x, self._state, y)
        return y
