"""Oversampling factor and integration rules, chosen per circuit and set by trial.

No one factor fits all circuits, so the circuit at hand is run for a few
milliseconds at each candidate factor:

* *step halving*: a wideband signal at full level while the gate moves through its
  whole swing, compared with the same at twice the factor;
* *aliases*: a loud sine with the gate held at each of a row of voltages, what lands
  below 20 kHz at frequencies that are not its harmonics, against the fundamental.

The rules go stage by stage, as far up in order as each stage's fastest rate
allows, and the whole recursion's spectral radius, loop closed, must be below 1 at
every gate voltage; otherwise the order falls, at last to the trapezoidal rule.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from ..models.chain import capacitors_f, fixed_conductance_s
from ..models.circuit import Circuit
from ..models.jfet import Jfet
from .lanes import LaneRunner
from .rules import (
    ADAMS_3,
    ADAMS_4,
    TRAPEZOIDAL,
    Rule,
    rules_by_rate,
    spectral_radius,
    step_matrices,
    steps_to_forget,
)

Array = npt.NDArray[np.float64]
Spectrum = npt.NDArray[np.complex128]

# The trial's spectrum falls as 1/n; plucked and strummed sounds fall faster and come out
# some 20 dB better.
ERROR_TARGET_DB = -90.0
ALIAS_TARGET_DB = -93.0
LOWEST_RATE_HZ = 88_000.0
HIGHEST_RATE_HZ = 800_000.0
# Aliases alone never drive the rate beyond this: at knee 0 they fall so slowly
# with the factor that the cost would buy nothing audible.
HIGHEST_RATE_FOR_ALIASES_HZ = 400_000.0
TRIAL_LANES = 32
TRIAL_PEAK_V = 0.5
TRIAL_TONE_HZ = 125.0  # its harmonics to 9 kHz fall as 1/n, as a plucked string's do
TRIAL_CREST = 2.6  # peak of that sum at these phases, for 0.5 V
ALIAS_TONE_HZ = 5000.0
ALIAS_TONE_V = 0.3
AUDIBLE_HZ = 20_000.0
# Audio pulls the drain below the source by up to this much: the channel conducts more.
DRAIN_PULL_V = 0.3
# What the warm-up before each slice leaves of an earlier state, in the worst case of
# channels that stay off: -155 dB of the signal, against -140 promised.
FORGOTTEN = 5e-7
STABILITY_STEPS = 25


@dataclass(frozen=True)
class EnginePlan:
    """How one take is computed.

    Parameters
    ----------
    factor : int
        Oversampling factor.
    rules : tuple of Rule
        Integration rule per stage.
    warm_up_steps : int
        Steps run before each slice.
    error_db : float
        Change on doubling the factor, rms re rms, in the trial [dB].
    alias_db : float
        Sum of aliases below 20 kHz re the fundamental at the worst gate voltage tried [dB].
    spectral_radius : float
        Greatest over the gate voltages; below 1.
    """

    factor: int
    rules: tuple[Rule, ...]
    warm_up_steps: int
    error_db: float
    alias_db: float
    spectral_radius: float

    def as_record(self) -> dict[str, Any]:
        """Return plain values for a JSON record."""
        record = asdict(self)
        record["rules"] = [rule.name for rule in self.rules]
        for key in ("error_db", "alias_db"):
            record[key] = round(record[key], 1)
        return record


def plan_engine(
    circuit: Circuit,
    jfets: Sequence[Jfet],
    gate_low_v: float,
    gate_high_v: float,
    sample_rate: float,
    *,
    least_factor: int = 1,
) -> EnginePlan:
    """Choose factor and rules for one take.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, at the channel temperature.
    gate_low_v, gate_high_v : float
        Range of the gate bus over the take [V].
    sample_rate : float
        The audio's rate [Hz].
    least_factor : int
        No smaller factor is chosen (so that takes to be compared share one).

    Returns
    -------
    EnginePlan
        The cheapest that meets the targets, or the best tried.
    """
    factor = 1
    while factor < least_factor or sample_rate * factor < LOWEST_RATE_HZ:
        factor *= 2
    trial = _Trial(circuit, tuple(jfets), gate_low_v, gate_high_v, sample_rate)
    while True:
        rules, radius = choose_rules(circuit, jfets, gate_high_v, sample_rate * factor)
        error_db = trial.error_db(factor, rules)
        rate = sample_rate * factor
        error_met = error_db <= ERROR_TARGET_DB or 2 * rate > HIGHEST_RATE_HZ
        if error_met:
            alias_db = trial.alias_db(factor, rules)
            if alias_db <= ALIAS_TARGET_DB or 2 * rate > HIGHEST_RATE_FOR_ALIASES_HZ:
                break
        factor *= 2
    return EnginePlan(
        factor, rules, warm_up_steps(circuit, rules, rate), error_db, alias_db, radius
    )


def choose_rules(
    circuit: Circuit, jfets: Sequence[Jfet], gate_high_v: float, rate_hz: float
) -> tuple[tuple[Rule, ...], float]:
    """Return the rules allowed at this rate, and the spectral radius they leave.

    Parameters
    ----------
    circuit, jfets
        As for :func:`plan_engine`.
    gate_high_v : float
        Highest gate bus voltage [V].
    rate_hz : float
        The engine's rate [Hz].
    """
    conductances = _conductance_ladder(circuit, jfets, gate_high_v)
    step_rates = conductances / capacitors_f(circuit) / rate_hz
    for best in (ADAMS_4, ADAMS_3, TRAPEZOIDAL):
        rules = rules_by_rate(step_rates[-1], best)
        radius = spectral_radius(step_matrices(circuit, rules, step_rates))
        if radius < 1.0:
            break
    return rules, radius


def _conductance_ladder(circuit: Circuit, jfets: Sequence[Jfet], gate_high_v: float) -> Array:
    """Return plus-input conductances from all channels off to fully on, (cases, stages) [S]."""
    keep = 1.0 - circuit.half_drain_share
    most = np.array(
        [float(part.output_conductance(keep * gate_high_v, -DRAIN_PULL_V)) for part in jfets]
    )
    share = np.concatenate([[0.0], np.geomspace(1e-4, 1.0, STABILITY_STEPS - 1)])
    return np.asarray(fixed_conductance_s(circuit) + share[:, None] * most)


def warm_up_steps(circuit: Circuit, rules: tuple[Rule, ...], rate_hz: float) -> int:
    """Return the steps after which the chain, channels off (slowest), has forgotten its state."""
    ladder = fixed_conductance_s(circuit) / capacitors_f(circuit) / rate_hz
    matrix = step_matrices(circuit, rules, ladder[None])[0]
    steps = steps_to_forget(matrix, FORGOTTEN)
    return int(rate_hz) if steps is None else steps


class _Trial:
    """Short runs of the circuit at candidate factors; runs are kept for reuse."""

    def __init__(
        self,
        circuit: Circuit,
        jfets: tuple[Jfet, ...],
        low_v: float,
        high_v: float,
        sample_rate: float,
    ) -> None:
        self.circuit, self.jfets = circuit, jfets
        self.low_v, self.high_v = low_v, high_v
        self.sample_rate = sample_rate
        self._wideband: dict[tuple[int, tuple[Rule, ...]], Spectrum] = {}

    def _runner(self, factor: int, rules: tuple[Rule, ...]) -> LaneRunner:
        step = 1.0 / (self.sample_rate * factor)
        return LaneRunner(self.circuit, [self.jfets], step, rules, TRIAL_LANES)

    def error_db(self, factor: int, rules: tuple[Rule, ...]) -> float:
        """Return the change on doubling the factor, below 20 kHz [dB]."""
        coarse = self._run_wideband(factor, rules)
        finer_rules, _ = choose_rules(
            self.circuit, self.jfets, self.high_v, self.sample_rate * factor * 2
        )
        fine = self._run_wideband(2 * factor, finer_rules)
        return ratio_db(coarse - fine, fine)

    def _run_wideband(self, factor: int, rules: tuple[Rule, ...]) -> Spectrum:
        key = (factor, rules)
        if key not in self._wideband:
            self._wideband[key] = self._wideband_run(factor, rules)
        return self._wideband[key]

    def _wideband_run(self, factor: int, rules: tuple[Rule, ...]) -> Spectrum:
        # Each lane sweeps its own part of the gate's swing in 20 ms, after 10 ms there.
        rate = self.sample_rate * factor
        first = int(0.010 * self.sample_rate) * factor
        count = first + int(0.020 * self.sample_rate) * factor
        time = np.arange(count) / rate
        number = np.arange(1, 1 + int(min(9000.0, 0.4 * self.sample_rate) / TRIAL_TONE_HZ))
        phases = 2.399963 * number**2  # golden angle: a low crest
        tones = 2 * np.pi * TRIAL_TONE_HZ * time[:, None] * number + phases
        x = (np.sin(tones) / number).sum(axis=1) * TRIAL_PEAK_V / TRIAL_CREST
        # A jump at the start would leave a charge that has nothing to do with the step.
        x *= 0.5 - 0.5 * np.cos(np.pi * np.clip(np.arange(count) / first, 0.0, 1.0))
        edges = np.linspace(self.low_v, self.high_v, TRIAL_LANES + 1)
        share = np.clip((np.arange(count) - first) / (count - first), 0.0, 1.0)[:, None]
        gate = edges[:-1] + share * np.diff(edges)
        block = np.repeat(x[:, None], TRIAL_LANES, axis=1)
        out, _ = self._runner(factor, rules).run(block, np.ascontiguousarray(gate), first)
        spectrum = np.fft.rfft(out * _window(len(out)), axis=0)
        heard = np.fft.rfftfreq(len(out), 1.0 / rate) <= min(AUDIBLE_HZ, self.sample_rate / 2)
        return np.asarray(spectrum[heard] / len(out))

    def alias_db(self, factor: int, rules: tuple[Rule, ...]) -> float:
        """Return the worst sum of aliases below 20 kHz re the fundamental [dB]."""
        rate = self.sample_rate * factor
        size = 2048 * max(1, factor)
        tone = min(ALIAS_TONE_HZ, 0.2 * self.sample_rate)
        cycles = round(tone * size / rate) | 1
        while np.gcd(cycles, size) != 1:
            cycles += 2
        # The sine must have settled: what is left of its start would pass for aliases.
        warm = warm_up_steps(self.circuit, rules, rate)
        x = ALIAS_TONE_V * np.sin(2 * np.pi * cycles * np.arange(warm + size) / size)
        gates = np.linspace(self.low_v, self.high_v, TRIAL_LANES)
        block = np.repeat(x[:, None], TRIAL_LANES, axis=1)
        gate = np.repeat(gates[None], warm + size, axis=0)
        out, _ = self._runner(factor, rules).run(block, gate, warm)
        return float(aliases_db(out, cycles, rate, min(AUDIBLE_HZ, self.sample_rate / 2)).max())


def aliases_db(out: Array, cycles: int, rate_hz: float, heard_hz: float) -> Array:
    """Return the summed aliases of a periodic sine response, re its fundamental.

    Parameters
    ----------
    out : ndarray
        One period of the steady state, shape (frames, lanes).
    cycles : int
        Cycles of the sine in `frames`, coprime with it, so that a folded harmonic
        never falls on a true one.
    rate_hz : float
        Rate of the frames [Hz].
    heard_hz : float
        Aliases above this frequency do not count [Hz].

    Returns
    -------
    ndarray
        Shape (lanes,) [dB].
    """
    size = len(out)
    power = np.abs(np.fft.rfft(out, axis=0)) ** 2
    frequency = np.arange(len(power)) * rate_hz / size
    true = np.zeros(len(power), bool)
    true[np.arange(0, size // 2 + 1, cycles)] = True
    counted = ~true & (frequency <= heard_hz)
    return np.asarray(
        10.0 * np.log10(power[counted].sum(axis=0) / power[cycles] + 1e-30), dtype=float
    )


def ratio_db(error: Array | Spectrum, reference: Array | Spectrum) -> float:
    """Return rms(error)/rms(reference) in decibels; -400 where there is no error."""
    top = float(np.sqrt(np.mean(np.abs(error) ** 2)))
    bottom = float(np.sqrt(np.mean(np.abs(reference) ** 2)))
    return float(20.0 * np.log10(top / bottom + 1e-20)) if bottom > 0.0 else 0.0


def _window(count: int) -> Array:
    """Return a periodic Hann window as a column."""
    return np.asarray(0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(count) / count))[:, None]
