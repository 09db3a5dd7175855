"""Run ngspice in batch, at a step that does not vary, and read what it found."""

from __future__ import annotations

import re
import shutil
import subprocess
import tempfile
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

PROGRAM = shutil.which("ngspice")

# The step is ngspice's greatest allowed step: a trtol this large switches its own step
# control off, so that the trapezoidal rule runs at one step between break points. Newton
# passes are held to a part in 1e9; they converge quadratically, so what is left is less.
FIXED_STEP = (
    ".options method=trap maxord=2 trtol=1e12 reltol=1e-6 vntol=1e-7 abstol=1e-9 "
    "chgtol=1e-24 gmin=1e-16 tnom=27 itl4=200",
    ".temp 27",
)


def transient_lines(stop_s: float, step_s: float, saved: Sequence[str]) -> list[str]:
    """Return the analysis of a transient at the fixed step, keeping the `saved` voltages."""
    return [
        *FIXED_STEP,
        ".save " + " ".join(saved),
        f".tran {step_s!r} {stop_s!r} 0 {step_s!r} uic",
    ]


def run(netlist: str, timeout_s: float = 600.0) -> dict[str, Array]:
    """Return the saved vectors of the netlist's (last) analysis by name in lower case.

    Raises
    ------
    RuntimeError
        If ngspice fails, warns of trouble or leaves no result; with what it said.
    """
    if PROGRAM is None:
        raise RuntimeError("ngspice is not installed (Debian package ngspice)")
    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        (place / "circuit.cir").write_text(netlist, encoding="ascii")
        done = subprocess.run(
            [PROGRAM, "-n", "-b", "-r", "out.raw", "circuit.cir"],
            cwd=place,
            capture_output=True,
            text=True,
            timeout=timeout_s,
            check=False,
        )
        said = done.stdout + done.stderr
        raw = place / "out.raw"
        if done.returncode or not raw.exists() or re.search(r"(?i)\berror\b|singular", said):
            raise RuntimeError(f"ngspice failed ({done.returncode}):\n{said[-4000:]}")
        return read_raw(raw.read_bytes())


def read_raw(data: bytes) -> dict[str, Array]:
    """Return the vectors of the last plot in a binary raw file; complex ones by real part first."""
    found: dict[str, Array] = {}
    while data:
        head, data = data.split(b"Binary:\n", 1)
        text = head.decode("latin-1")
        count = int(re.search(r"No\. Variables:\s*(\d+)", text)[1])  # type: ignore[index]
        points = int(re.search(r"No\. Points:\s*(\d+)", text)[1])  # type: ignore[index]
        kind = np.dtype(complex) if "complex" in text.split("Flags:")[1].split("\n")[0] else float
        names = re.findall(r"^\s*\d+\t(\S+)", text.split("Variables:", 2)[-1], re.MULTILINE)
        size = count * points * np.dtype(kind).itemsize
        table = np.frombuffer(data[:size], kind).reshape(points, count)
        data = data[size:]
        # "i(@j1[id])" is a device's current under another name.
        names = [re.sub(r"^i\((@.*)\)$", r"\1", name.lower()) for name in names]
        found = {name: table[:, i].copy() for i, name in enumerate(names)}
    return found


def on_grid(time_s: Array, values: Array, rate_hz: float, count: int) -> Array:
    """Return the values at frames ``n / rate_hz``, by a quintic spline.

    Where ngspice crept (after a switching), points nearer than half its usual step to
    the one before are passed over: splines ring on very uneven knots.
    """
    from scipy.interpolate import make_interp_spline

    least = 0.5 * float(np.median(np.diff(time_s)))
    kept = [0]
    for index in range(1, len(time_s)):
        if time_s[index] - time_s[kept[-1]] >= least:
            kept.append(index)
    spline = make_interp_spline(time_s[kept], values[kept], k=5)
    return np.asarray(spline(np.arange(count) / rate_hz))
