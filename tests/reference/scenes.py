"""The circuits, parts and signals on which the engine is held against ngspice.

Everything is our own invention. A scene says all there is to know: its circuit, its
set, its input in closed form, and how the gate moves. Scenes of the chain drive the
bus from outside by a sine; scenes of the whole unit run their own oscillator.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from sweepset.models.circuit import Circuit, load_circuit, parse_circuit
from sweepset.models.gatebus import BusWave, solve_bus
from sweepset.models.jfet import DEFAULT_KNEE_V, Jfet
from sweepset.models.netlist import write_netlist
from sweepset.models.quantity import parse_rate

Array = npt.NDArray[np.float64]

SAMPLE_RATE = 48_000
LEFT_OUT_S = 0.05
HEARD_HZ = 20_000.0


@dataclass(frozen=True)
class Pluck:
    """A wideband input: decaying partials up to 9 kHz, all starting at time 0 from zero volts.

    Geometric spacing with a little irregularity, levels falling as 1/f, decay rising with
    frequency, signs by the golden section so that the peaks do not pile up.
    """

    partials: int = 72
    lowest_hz: float = 82.0
    highest_hz: float = 9000.0
    peak_v: float = 0.5

    @cached_property
    def table(self) -> Array:
        """Peak [V], frequency [Hz] and decay [1/s] of each partial, shape (partials, 3)."""
        number = np.arange(self.partials)
        golden = np.mod(number * 0.6180339887, 1.0)
        step = np.log(self.highest_hz / self.lowest_hz) / (self.partials - 1)
        place = number + np.where((number == 0) | (number == number[-1]), 0.0, 0.4 * (golden - 0.5))
        hz = self.lowest_hz * np.exp(step * place)
        level = np.where(golden < 0.5, 1.0, -1.0) / hz
        table = np.stack([level, hz, 1.0 + hz / 900.0], axis=1)
        table[:, 0] *= self.peak_v / np.abs(_sum(table, np.arange(240_000) / 480_000)).max()
        # Written with few digits, so that netlist and samples carry the very same numbers.
        return np.array([[float(f"{x:.9g}") for x in row] for row in table])

    def samples(self, count: int, rate_hz: float) -> Array:
        """Return the input at frames n/rate, shape (count,) [V]."""
        return _sum(self.table, np.arange(count) / rate_hz)

    def lines(self, node: str, other: str) -> list[str]:
        """Return SPICE lines driving `node` against `other` with the same signal.

        Current sources into one ohm, copied by a source of no resistance: seventy-two voltage
        sources in series would be as many more unknowns.
        """
        lines = [f"RSUM drive {other} 1", f"ESUM {node} {other} drive {other} 1"]
        for number, (level, hz, decay) in enumerate(self.table):
            lines.append(f"I{number} {other} drive SIN(0 {level:.9g} {hz:.9g} 0 {decay:.9g})")
        return lines


def _sum(table: Array, time_s: Array) -> Array:
    total = np.zeros_like(time_s)
    for level, hz, decay in table:
        total += level * np.exp(-decay * time_s) * np.sin(2.0 * np.pi * hz * time_s)
    return total


@dataclass(frozen=True)
class Scene:
    """One comparison.

    Parameters
    ----------
    name, about : str
        File name of the stored reference, and what the scene is there for.
    circuit : Circuit
    jfets : tuple of Jfet
    seconds : float
        Length of the stored reference [s].
    gate_mean_v, gate_peak_v, gate_hz : float
        The sine on the bus, chain scenes; falling through its mean at time 0.
    trimmer, rate : float, str or None
        Settings, unit scenes.
    starts_off_balance : bool
        The unit carries a standing voltage that the output coupling takes half a second to
        settle to: the netlist starts before that, the engine after it. What is left of it
        (a cubic) is then no error.
    """

    name: str
    about: str
    circuit: Circuit
    jfets: tuple[Jfet, ...]
    seconds: float = 0.3
    gate_mean_v: float = 0.0
    gate_peak_v: float = 0.0
    gate_hz: float = 7.3
    trimmer: float = 0.5
    rate: str | None = None
    starts_off_balance: bool = False
    input: Pluck = Pluck()

    @property
    def is_unit(self) -> bool:
        return self.rate is not None

    @cached_property
    def bus(self) -> BusWave:
        assert self.rate is not None
        return solve_bus(self.circuit, self.trimmer, parse_rate(self.rate))

    @property
    def gate_range_v(self) -> tuple[float, float]:
        if self.is_unit:
            return self.bus.low_v, self.bus.high_v
        return self.gate_mean_v - self.gate_peak_v, self.gate_mean_v + self.gate_peak_v

    def gate(self, start: int, count: int, rate_hz: float) -> Array:
        """Return the bus at `count` steps of 1/rate from step `start`, shape (count,) [V]."""
        time = (start + np.arange(count)) / rate_hz
        if self.is_unit:
            return self.bus.gate_v(time)
        return self.gate_mean_v - self.gate_peak_v * np.sin(2.0 * np.pi * self.gate_hz * time)

    @property
    def output(self) -> str:
        """The output node's name."""
        return "out" if self.is_unit else f"y{self.circuit.stage_count}"

    def netlist(self, analysis: list[str]) -> str:
        """Return the scene as a netlist."""
        if self.is_unit:
            return write_netlist(
                self.circuit,
                self.jfets,
                bus=self.bus,
                source=self.input.lines("in", "vminus"),
                analysis=analysis,
            )
        return write_netlist(
            self.circuit,
            self.jfets,
            part="chain",
            source=self.input.lines("x1", "0"),
            gate_source=[
                f"VBUS bus 0 SIN({self.gate_mean_v!r} {-self.gate_peak_v!r} {self.gate_hz!r})"
            ],
            analysis=analysis,
        )


def stage(capacitor: str, shunt: str = "24k", arm_in: str = "10k", arm_out: str = "10k") -> dict:
    return {"capacitor": capacitor, "shunt": shunt, "arm_in": arm_in, "arm_out": arm_out}


RELAXATION = {
    "kind": "relaxation",
    "timing_capacitor": "2u2",
    "threshold_in": "10k",
    "threshold_out": "15k",
    "tap": "buffered",
    "knob": {"track": "470k", "series": "10k"},
}


def circuit(stages: list[dict], feedback: tuple[int, int, str] | None = None, **more) -> Circuit:
    data = {
        "name": "scene",
        "supply": {"voltage": "9 V", "reference": {"kind": "zener", "voltage": "5.1 V"}},
        "input": {"capacitor": "47n", "resistor": "470k"},
        "stage": stages,
        "bus": {
            "bias_resistor": "820k",
            "sweep_resistor": "2M7",
            "capacitor": "10n",
            "trimmer": {
                "track": "220k",
                "top": "reference",
                "bottom": "ground",
                "bottom_resistor": "47k",
            },
        },
        "oscillator": RELAXATION,
        "mix": {"dry": "12k", "wet": "12k", "capacitor": "1u", "load": "100k"},
        **more,
    }
    if feedback is not None:
        data["feedback"] = {"from": feedback[0], "into": feedback[1], "resistor": feedback[2]}
    return parse_circuit(data, "scene")


def parts(rows: list[tuple[float, float]], knee_v: float = 0.0, lambda_per_v: float = 0.0):
    """Return parts from (cut-off [V], current factor [mA/V^2])."""
    return tuple(
        Jfet(cutoff, beta * 1e-3, lambda_per_v, knee_v, label=f"J{number + 1:02d}")
        for number, (cutoff, beta) in enumerate(rows)
    )


CLOSE = [(-2.0, 1.0), (-2.03, 1.04), (-1.96, 0.97), (-1.99, 1.02)]
APART = [(-1.6, 1.5), (-2.3, 0.7), (-1.9, 1.1), (-2.6, 0.6), (-1.4, 1.9), (-2.0, 1.0)]
ALIKE = [(-2.0, 1.0)] * 8
HARD = [(-3.0, 5.0), (-2.6, 6.0)]

FOUR = circuit([stage("47n")] * 4, (4, 1, "24k"))
TWO_STIFF = circuit([stage("4n7"), stage("4n7", shunt="150k")])
SIX_SLOW = circuit(
    [
        stage(c, shunt=r)
        for c, r in zip(
            ("100n", "68n", "150n", "100n", "47n", "220n"),
            ("100k", "47k", "100k", "68k", "100k", "47k"),
            strict=True,
        )
    ],
    (5, 3, "33k"),
)
EIGHT = circuit([stage("15n", shunt="33k")] * 8)
FOUR_HOT = circuit(
    [stage("33n"), stage("22n", arm_out="11k"), stage("33n", arm_in="11k"), stage("10n")],
    (4, 2, "15k"),
)
HALF_DRAIN = {
    "bias_resistor": "820k",
    "sweep_resistor": "2M7",
    "trimmer": {"track": "220k", "top": "reference", "bottom": "ground"},
    "half_drain": {"from_bus": "1M", "from_drain": "1M"},
}
FOUR_HALF = circuit([stage("47n")] * 4, (4, 1, "33k"), bus=HALF_DRAIN)
FOUR_DIRECT = circuit(
    [stage("47n"), stage("33n"), stage("47n"), stage("33n")],
    (4, 1, "27k"),
    oscillator={**RELAXATION, "tap": "direct", "timing_capacitor": "1u"},
)
THREE_TRIANGLE = circuit(
    [stage("47n"), stage("22n"), stage("33n")],
    oscillator={
        "kind": "triangle",
        "timing_capacitor": "1u",
        "threshold_in": "10k",
        "threshold_out": "18k",
        "knob": {"track": "470k", "series": "22k"},
    },
)

CHAIN_SCENES = (
    Scene(
        "four_close", "the usual four, closely matched, feedback into the first",
        FOUR, parts(CLOSE), gate_mean_v=-1.75, gate_peak_v=0.55,
    ),
    Scene(
        "two_stiff", "two stages whose time constants fall to 0.2 us, lambda 0.02",
        TWO_STIFF, parts(HARD, lambda_per_v=0.02), gate_mean_v=-2.1, gate_peak_v=1.4,
    ),
    Scene(
        "six_slow_apart", "six unequal slow stages, badly mismatched, lambda 0.02, feedback "
        "into the middle",
        SIX_SLOW, parts(APART, lambda_per_v=0.02), gate_mean_v=-1.7, gate_peak_v=0.9,
    ),
    Scene(
        "eight_alike", "eight equal stages with one part in all, no feedback",
        EIGHT, parts(ALIKE), gate_mean_v=-1.6, gate_peak_v=0.6,
    ),
    Scene(
        "four_hot_apart", "unequal arms, strong feedback into the second stage, badly "
        "mismatched, lambda 0.02",
        FOUR_HOT, parts(APART[:4], lambda_per_v=0.02), gate_mean_v=-1.6, gate_peak_v=0.8,
    ),
    Scene(
        "four_half_drain", "half-drain network",
        FOUR_HALF, parts(CLOSE), gate_mean_v=-3.4, gate_peak_v=0.9,
    ),
    Scene(
        "four_close_knee", "the usual four with the default knee",
        FOUR, parts(CLOSE, DEFAULT_KNEE_V), gate_mean_v=-1.75, gate_peak_v=0.55,
    ),
    Scene(
        "six_slow_apart_knee", "six unequal slow stages with the default knee",
        SIX_SLOW, parts(APART, DEFAULT_KNEE_V, 0.02), gate_mean_v=-1.7, gate_peak_v=0.9,
    ),
)  # fmt: skip

UNIT_SCENES = (
    Scene(
        "unit_buffered", "the whole unit, buffered relaxation oscillator",
        FOUR, parts(CLOSE, DEFAULT_KNEE_V), seconds=0.4, trimmer=0.4, rate="4Hz",
    ),
    Scene(
        "unit_direct", "the whole unit, the bus loading the timing capacitor, knee 0",
        FOUR_DIRECT, parts(CLOSE), seconds=0.4, trimmer=0.42, rate="5Hz",
    ),
    Scene(
        "unit_triangle", "the whole unit, triangle oscillator, three stages, knee 0",
        THREE_TRIANGLE, parts(APART[:3], lambda_per_v=0.02), seconds=0.4, trimmer=0.4, rate="4Hz",
    ),
    Scene(
        "unit_half_drain", "the shipped eight stages, audio crossing into the bus through the "
        "half-drain network",
        load_circuit("stork"), parts(CLOSE + CLOSE, DEFAULT_KNEE_V), seconds=0.3, trimmer=0.43,
        rate="4Hz", starts_off_balance=True,
    ),
)  # fmt: skip

SCENES = CHAIN_SCENES + UNIT_SCENES
BY_NAME = {scene.name: scene for scene in SCENES}


def low_pass(passed_hz: float, stopped_hz: float, rate_hz: float) -> Array:
    """Return a linear-phase filter: flat to a part in 1e7, stopped to -140 dB."""
    from scipy.signal import firwin, kaiserord

    taps, beta = kaiserord(140.0, (stopped_hz - passed_hz) / (rate_hz / 2.0))
    return np.asarray(
        firwin(taps | 1, 0.5 * (passed_hz + stopped_hz), window=("kaiser", beta), fs=rate_hz)
    )


def heard(y: Array) -> Array:
    """Return what lies below 20 kHz, at 48 kHz, same length."""
    from scipy.signal import oaconvolve

    return np.asarray(oaconvolve(y, low_pass(HEARD_HZ, 22_000.0, SAMPLE_RATE), mode="same"))


def error_db(y: Array, reference: Array, *, settling: bool = False) -> float:
    """Return rms(y - reference)/rms(reference) below 20 kHz, first 50 ms left out [dB].

    The last 5 ms go too: there the filters see past the end. With `settling`, a cubic is
    taken off the difference: see `Scene.starts_off_balance`.
    """
    count = min(len(y), len(reference))
    kept = slice(int(LEFT_OUT_S * SAMPLE_RATE), count - int(0.005 * SAMPLE_RATE))
    error = heard(y[:count] - reference[:count])[kept]
    if settling:
        place = np.linspace(-1.0, 1.0, len(error))
        error = error - np.polynomial.Polynomial.fit(place, error, 3)(place)
    whole = heard(reference[:count])[kept]
    return float(10.0 * np.log10(np.mean(error**2) / np.mean(whole**2)))
