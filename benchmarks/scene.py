"""The scene all rows share: four stages with feedback, 47 nF, 24k, gate beyond cut-off."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from sweepset.models.circuit import Circuit, load_circuit
from sweepset.models.jfet import DEFAULT_KNEE_V, Jfet
from sweepset.render.engine import Engine
from sweepset.render.lanes import LaneRunner
from sweepset.render.plan import EnginePlan, warm_up_steps
from sweepset.render.rules import ADAMS_4

Array = npt.NDArray[np.float64]

SAMPLE_RATE = 48_000
FACTOR = 4
RATE = SAMPLE_RATE * FACTOR
KNEES_V = {"pure law": 0.0, "default knee": DEFAULT_KNEE_V}


def circuit(stages: int = 4) -> Circuit:
    """Return heron with this many equal stages, the last feeding back into the first."""
    base = load_circuit("heron")
    changes = {
        "stages": (base.stages[0],) * stages,
        "feedback": base.feedback.model_copy(update={"from_stage": stages}),
    }
    return base.with_changes(**changes)


def parts(knee_v: float, stages: int = 4) -> list[Jfet]:
    """Return a slightly unequal set."""
    return [Jfet(-2.0 + 0.02 * i, 1e-3 * (1.0 + 0.02 * i), knee_v=knee_v) for i in range(stages)]


def gate(start: int, count: int, rate_hz: float) -> Array:
    """Return a triangle from -2.3 to -1.3 V at 0.8 Hz, by whole steps."""
    phase = 0.8 * (start + np.arange(count)) / rate_hz % 1.0
    return np.asarray(-2.3 + 2.0 * np.minimum(phase, 1.0 - phase))


def riff(seconds: float) -> Array:
    """Return plucked-string-like audio: 72 decaying partials up to 9 kHz, a pluck each second."""
    time = np.arange(int(seconds * SAMPLE_RATE)) / SAMPLE_RATE
    since = time % 1.0
    rise = np.minimum(1.0, since / 0.004) ** 2
    x = np.zeros_like(time)
    for k in range(1, 73):
        x += np.sin(2 * np.pi * 125.0 * k * since) * np.exp(-since * (2 + 0.2 * k)) / k
    x *= rise
    return 0.5 * x / np.abs(x).max()


def plan(stages: int = 4) -> EnginePlan:
    """Return the engine's plan at 4x with the fourth-order rule, whatever the trial would say."""
    rules = (ADAMS_4,) * stages
    warm = warm_up_steps(circuit(stages), rules, RATE)
    return EnginePlan(FACTOR, rules, warm, float("nan"), float("nan"), float("nan"))


def engine(knee_v: float, workers: int, stages: int = 4) -> Engine:
    """Return a fresh engine for one mono take of the scene, couplings and mix included."""
    return Engine(
        circuit(stages), parts(knee_v, stages), SAMPLE_RATE, 1, plan(stages), gate, workers=workers
    )


def runner(knee_v: float, lanes: int, stages: int = 4) -> LaneRunner:
    """Return the bare chain at 4x in this many lanes."""
    return LaneRunner(
        circuit(stages), [parts(knee_v, stages)], 1.0 / RATE, (ADAMS_4,) * stages, lanes
    )


def lane_input(lanes: int, steps: int) -> tuple[Array, Array]:
    """Return input and gate for the bare chain, shape (steps, lanes)."""
    import soxr

    x = soxr.resample(riff(steps / RATE + 0.1), SAMPLE_RATE, RATE, quality="VHQ")[:steps]
    block = np.repeat(x[:, None], lanes, axis=1)
    return block, np.repeat(gate(0, steps, RATE)[:, None], lanes, axis=1)
