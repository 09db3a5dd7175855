"""The engine's cost against ngspice's, at equal or better error.

ngspice runs the exported netlist at ever finer steps until it is itself within -90 dB
of the stored reference (made at 64 steps per frame of 48 kHz); the coarsest step that
is counts. The engine runs the same scene on one core at 4x, and its own error is
printed beside its time.
"""

from __future__ import annotations

import shutil
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from sweepset.render.engine import Engine
from sweepset.render.plan import plan_engine, warm_up_steps
from sweepset.render.rules import ADAMS_4

from .engine_speed import Row, best, row

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))

WANTED_DB = -90.0
NGSPICE_SECONDS = 0.25
ENGINE_SECONDS = 20.0
FACTOR = 4


def against_ngspice() -> list[Row]:
    """Time both on the four-stage scene with feedback, pure law and default knee."""
    if shutil.which("ngspice") is None:
        return []
    from reference.make_reference import HERE, simulate
    from reference.scenes import BY_NAME, SAMPLE_RATE, error_db

    rows = []
    for law, name in (("pure law", "four_close"), ("default knee", "four_close_knee")):
        scene = BY_NAME[name]
        with np.load(HERE / f"{name}.npz") as data:
            reference = data["wave"].astype(float)
        frames = round(NGSPICE_SECONDS * SAMPLE_RATE)
        for steps in (4, 6, 8, 12, 16, 24, 32):
            begin = time.perf_counter()
            made = simulate(scene, steps, NGSPICE_SECONDS)
            spent = (time.perf_counter() - begin) / NGSPICE_SECONDS
            error = error_db(made, reference[:frames])
            if error <= WANTED_DB:
                break
        rows.append(row(f"ngspice, {steps} steps per frame, error", law, error, "dB"))
        rows.append(row("ngspice, time per second of audio", law, spent, "s"))

        rules = (ADAMS_4,) * scene.circuit.stage_count
        chosen = plan_engine(scene.circuit, scene.jfets, *scene.gate_range_v, SAMPLE_RATE)
        rate = SAMPLE_RATE * FACTOR
        warm = warm_up_steps(scene.circuit, rules, rate)
        plan = replace(chosen, factor=FACTOR, rules=rules, warm_up_steps=warm)

        count = round(ENGINE_SECONDS * SAMPLE_RATE)
        riff = scene.input.samples(count, SAMPLE_RATE)[:, None]

        def render(block: np.ndarray, scene=scene, plan=plan) -> np.ndarray:  # type: ignore[no-untyped-def]
            engine = Engine(
                scene.circuit, scene.jfets, SAMPLE_RATE, 1, plan, scene.gate, chain_only=True,
                workers=1,
            )  # fmt: skip
            return np.concatenate([engine.process(block), engine.finish()])[:, 0]

        cost = best(lambda: render(riff), 3) / ENGINE_SECONDS  # noqa: B023
        own = error_db(render(riff[: 2 * frames])[:frames], reference[:frames])
        rows.append(row("engine at 4x, one core, error", law, own, "dB"))
        rows.append(row("engine at 4x, one core", law, 1.0 / cost, "x real time"))
        rows.append(row("engine against ngspice, one core", law, spent / cost, "times faster"))
    return rows
