"""What each integration rule gets for its time, at each oversampling factor."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import soxr
from sweepset.render.lanes import LaneRunner
from sweepset.render.rules import ADAMS_3, ADAMS_4, TRAPEZOIDAL, Rule

from . import scene
from .engine_speed import best, row

Array = npt.NDArray[np.float64]
SECONDS = 0.4
REFERENCE_FACTOR = 32


def error_against_cost() -> list[dict[str, Any]]:
    """Return error [dB] and speed of three rules at four factors, one lane, one core."""
    rows = []
    for law, knee_v in scene.KNEES_V.items():
        right = _run(knee_v, ADAMS_4, REFERENCE_FACTOR)
        for rule in (TRAPEZOIDAL, ADAMS_3, ADAMS_4):
            for factor in (1, 2, 4, 8):
                made = _run(knee_v, rule, factor)
                spent = best(lambda r=rule, f=factor, k=knee_v: _run(k, r, f), 2)  # type: ignore[misc]
                # The first 50 ms are the start from rest, in every one of them; at the end
                # the resampler meets the signal cut off, at each factor elsewhere.
                inside = slice(scene.SAMPLE_RATE // 20, -scene.SAMPLE_RATE // 50)
                miss = made[inside] - right[inside]
                error = 10.0 * np.log10((miss**2).mean() / (right[inside] ** 2).mean())
                name = f"{rule.name}, {factor}x"
                rows.append(row(f"{name}: error", law, error, "dB"))
                rows.append(row(f"{name}: speed", law, SECONDS / spent, "x real time"))
    return rows


def cost_against_size() -> list[dict[str, Any]]:
    """Return the chain's time per stage, at 2 to 12 stages, over that at 4; 32 lanes."""
    rows = []
    for law, knee_v in scene.KNEES_V.items():
        times = {}
        for stages in (2, 4, 6, 8, 12):
            runner = scene.runner(knee_v, 32, stages)
            x, gate = scene.lane_input(32, 24_000)
            spent = best(lambda r=runner, a=x, b=gate: r.run(a, b, 0), 3)  # type: ignore[misc]
            times[stages] = spent / stages
        for stages, spent in times.items():
            rows.append(
                row(f"time per stage, {stages} stages re 4", law, spent / times[4], "ratio")
            )
    return rows


def _run(knee_v: float, rule: Rule, factor: int) -> Array:
    rate = scene.SAMPLE_RATE * factor
    x = scene.riff(SECONDS)
    steps = soxr.resample(x, scene.SAMPLE_RATE, rate, quality="VHQ") if factor > 1 else x
    circuit, parts = scene.circuit(), [scene.parts(knee_v)]
    runner = LaneRunner(circuit, parts, 1.0 / rate, (rule,) * circuit.stage_count, 1)
    gate = scene.gate(0, len(steps), rate)
    out, _ = runner.run(steps[:, None].copy(), gate[:, None].copy(), 0)
    made = out[:, 0]
    if factor > 1:
        made = soxr.resample(made, rate, scene.SAMPLE_RATE, quality="VHQ")
    return np.asarray(made[: len(x)])
