"""Make the stored reference waveforms: ``python tests/reference/make_reference.py [scene ...]``.

Each scene is run in ngspice at three steps. The result kept is the finest; how far
halving the step moves it is measured and stored with it, beside the netlist that made
it. Takes some minutes a scene; needs the ngspice program.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import numpy.typing as npt

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from reference.ngspice_runner import on_grid, run, transient_lines
from reference.scenes import BY_NAME, SAMPLE_RATE, Scene, error_db, low_pass

HERE = Path(__file__).resolve().parent / "waveforms"
# On this grid the spline's result is filtered and thinned to 48 kHz.
GRID = 8
# Steps per frame of 48 kHz.
KEPT = 64
AFTER_S = 0.01


def analysis(scene: Scene, steps: int, seconds: float) -> list[str]:
    """Return the analysis lines for so many steps per frame of 48 kHz."""
    return transient_lines(
        seconds + AFTER_S, 1.0 / (steps * SAMPLE_RATE), ["v(bus)", f"v({scene.output})"]
    )


def simulate(scene: Scene, steps: int, seconds: float | None = None) -> npt.NDArray[np.float64]:
    """Return ngspice's output at 48 kHz, flat to 22 kHz, shape (frames,) [V]."""
    from scipy.signal import oaconvolve

    length = scene.seconds if seconds is None else seconds
    found = run(scene.netlist(analysis(scene, steps, length)), timeout_s=3600.0)
    # A unit's output stands at its coupling's start voltage, referred to the negative end.
    values = found[f"v({scene.output})"]
    if scene.is_unit:
        values = values + scene.circuit.reference_above_ground_v
    rate = GRID * SAMPLE_RATE
    fine = on_grid(found["time"], values, rate, int((length + 0.8 * AFTER_S) * rate))
    flat = oaconvolve(fine, low_pass(22_000.0, 26_000.0, rate), mode="same")
    return np.asarray(flat[::GRID][: round(length * SAMPLE_RATE)])


def main(names: list[str]) -> None:
    """Make the named scenes' references, or all."""
    HERE.mkdir(exist_ok=True)
    for name in names or list(BY_NAME):
        scene = BY_NAME[name]
        coarse, middle, fine = (simulate(scene, steps) for steps in (KEPT // 4, KEPT // 2, KEPT))
        halvings = error_db(coarse, middle), error_db(middle, fine)
        print(f"{name:22s} halving moves it by {halvings[0]:.1f}, {halvings[1]:.1f} dB", flush=True)
        (HERE / f"{name}.cir").write_text(
            scene.netlist(analysis(scene, KEPT, scene.seconds)), encoding="ascii"
        )
        np.savez_compressed(
            HERE / f"{name}.npz", wave=fine.astype(np.float32), halving_db=np.array(halvings)
        )


if __name__ == "__main__":
    main(sys.argv[1:])
