"""A small plan: a short riff through the two-stage circuit, so that a take costs little."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import soundfile

RATE = 48_000
PLAN = """
riffs = ["riff.wav"]
circuits = ["wren"]
rate = ["9:00", "noon"]
trim = ["auto", "45%"]
[sets]
close = "-2.10V/4.2mA,-2.11V/4.2mA"
"""


@pytest.fixture
def write_riff() -> Callable[..., Path]:
    def go(path: Path, seed: int = 1, seconds: float = 0.5) -> Path:
        samples = np.random.default_rng(seed).normal(0.0, 0.05, round(seconds * RATE))
        soundfile.write(path, samples, RATE, subtype="PCM_24")
        return path

    return go


@pytest.fixture
def bench(tmp_path, write_riff) -> Path:
    """A folder with a plan and its riff."""
    write_riff(tmp_path / "riff.wav")
    (tmp_path / "plan.toml").write_text(PLAN, encoding="utf-8")
    return tmp_path
