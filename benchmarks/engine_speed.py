"""The engine against the clock, against its own recurrence in C, and against two biquads."""

from __future__ import annotations

import ctypes
import os
import subprocess
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
from scipy.signal import sosfilt

from . import scene

Row = dict[str, Any]
REPEATS = 5


def best(task: Callable[[], object], repeats: int = REPEATS) -> float:
    """Return the least wall time of several runs, after one that warms up [s]."""
    task()
    times = []
    for _ in range(repeats):
        begin = time.perf_counter()
        task()
        times.append(time.perf_counter() - begin)
    return min(times)


def row(what: str, law: str, value: float, unit: str) -> Row:
    """Return one row of the table."""
    return {"what": what, "law": law, "value": round(float(value), 3), "unit": unit}


def one_take(seconds: float = 30.0) -> list[Row]:
    """Time the whole engine on one mono take: all cores, one worker."""
    x = scene.riff(seconds)[:, None]
    rows = []
    for law, knee_v in scene.KNEES_V.items():
        for workers in (1, os.cpu_count() or 1):

            def take(knee_v: float = knee_v, workers: int = workers) -> None:
                engine = scene.engine(knee_v, workers)
                for i in range(0, len(x), 65536):
                    engine.process(x[i : i + 65536])
                engine.finish()

            name = f"one take of {seconds:g} s, engine, {workers} worker(s)"
            rows.append(row(name, law, seconds / best(take, 3), "x real time"))
    return rows


def many_takes(takes: int = 16, seconds: float = 10.0) -> list[Row]:
    """Time the engine on takes side by side, as a batch runs them: one worker, all cores."""
    x = scene.riff(seconds)[:, None]
    rows = []
    for law, knee_v in scene.KNEES_V.items():
        spent = {}
        for workers in (1, os.cpu_count() or 1):

            def one(_number: int, knee_v: float = knee_v) -> None:
                engine = scene.engine(knee_v, 1)
                for i in range(0, len(x), 65536):
                    engine.process(x[i : i + 65536])
                engine.finish()

            def batch(workers: int = workers, one: Callable[[int], None] = one) -> None:
                with ThreadPoolExecutor(workers) as pool:
                    list(pool.map(one, range(takes)))

            spent[workers] = best(batch, 1)
            name = f"{takes} takes of {seconds:g} s, {workers} worker(s)"
            rows.append(row(name, law, takes * seconds / spent[workers], "x real time"))
        rows.append(row("all workers re one", law, spent[1] / min(spent.values()), "ratio"))
    return rows


def bare_chain(steps: int = 48_000) -> list[Row]:
    """Time the chain's loop alone, one core: a single lane and 32 lanes; C; two biquads."""
    rows = []
    for law, knee_v in scene.KNEES_V.items():
        for lanes in (1, 32):
            runner = scene.runner(knee_v, lanes)
            x, gate = scene.lane_input(lanes, steps)
            seconds = lanes * steps / scene.RATE
            spent = best(lambda r=runner, a=x, b=gate: r.run(a, b, 0))  # type: ignore[misc]
            rows.append(
                row(f"chain alone, {lanes} lane(s), one core", law, seconds / spent, "x real time")
            )
        spent_c = _c_yardstick(runner, x, gate, knee_v)
        if spent_c is not None:
            rows.append(
                row("same recurrence in C, 32 lanes", law, seconds / spent_c, "x real time")
            )
            rows.append(row("chain alone re C", law, spent_c / spent, "ratio"))
        sections = np.array([[0.9, -0.2, 0.1, 1.0, -0.3, 0.1]] * 2)
        floor = best(lambda s=sections, a=x: sosfilt(s, a, axis=0))  # type: ignore[misc]
        rows.append(
            row("cost re two fixed biquads (scipy sosfilt), 32 lanes", law, spent / floor, "ratio")
        )
    return rows


def _c_yardstick(runner: Any, x: Any, gate: Any, knee_v: float) -> float | None:
    """Return the C loop's time on the same arrays, or None where there is no gcc [s]."""
    source = Path(__file__).with_name("chain_yardstick.c")
    with tempfile.TemporaryDirectory() as folder:
        library = Path(folder) / "yardstick.so"
        flags = [
            "-O3",
            "-march=native",
            "-ffp-contract=fast",
            "-fno-math-errno",
            "-fno-trapping-math",
        ]
        sizes = [f"-DS={runner.stages}", f"-DL={runner.lanes}", f"-DSOFT={int(knee_v > 0)}"]
        command = [
            "gcc",
            *flags,
            *sizes,
            "-shared",
            "-fPIC",
            "-o",
            str(library),
            str(source),
            "-lm",
        ]
        try:
            subprocess.run(command, check=True, capture_output=True)
        except (OSError, subprocess.CalledProcessError):
            return None
        loop = ctypes.CDLL(str(library)).run
        out = np.zeros_like(x)
        tables = [np.ascontiguousarray(table) for table in (runner.lane_table, runner.stage_table)]

        def pointer(array: Any) -> ctypes.c_void_p:
            return array.ctypes.data_as(ctypes.c_void_p)  # type: ignore[no-any-return]

        def task() -> None:
            loop(ctypes.c_long(len(x)), *map(pointer, (x, gate, out, *tables)))

        spent = best(task)
        expected, _ = runner.run(x, gate, 0)
        # The yardstick must do the same work: compare before believing its time.
        assert np.abs(out - expected).max() < 1e-8
        return spent
