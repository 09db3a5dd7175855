"""Invented gate waves and trays for the tests of choosing: no oscillator, no fixture.

Fixtures hand out plain functions and are shared, so that property tests may use them.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pytest
from sweepset.models.circuit import Circuit, load_circuit
from sweepset.models.pairwise import Array, Parts
from sweepset.models.sweepgrid import SweepGrid, build_grid


@dataclass(frozen=True)
class TriangleBus:
    """A gate bus that goes evenly up and down between two voltages."""

    low_v: float
    high_v: float
    period_s: float = 1.0

    def gate_v(self, time_s: npt.ArrayLike) -> Array:
        phase = np.mod(np.asarray(time_s, float) / self.period_s, 1.0)
        return np.asarray(self.low_v + (self.high_v - self.low_v) * (1.0 - abs(2.0 * phase - 1.0)))


def _triangle_at(position: float) -> TriangleBus:
    """Return a swing of 0.62 V, moved from well below to well above the tray's cut-offs."""
    low = -3.2 + 2.6 * position
    return TriangleBus(low, low + 0.62)


def _invented_tray(
    count: int, seed: int, *, cutoff_u: float = 0.002, ln_beta_u: float = 0.01
) -> Parts:
    """Return parts whose current factor falls with cut-off, as real trays show."""
    draw = np.random.default_rng(seed)
    cutoff = -2.0 + 0.3 * draw.standard_normal(count)
    ln_beta = np.log(0.8e-3) - 0.35 * (cutoff + 2.0) + 0.1 * draw.standard_normal(count)
    own = np.zeros((count, 2, 2))
    own[:, 0, 0] = cutoff_u**2 * draw.uniform(0.5, 2.0, count)
    own[:, 1, 1] = ln_beta_u**2 * draw.uniform(0.5, 2.0, count)
    own[:, 0, 1] = own[:, 1, 0] = 0.6 * np.sqrt(own[:, 0, 0] * own[:, 1, 1])
    common = np.zeros((count, 2, 2))
    common[:, 0, 0] = 0.02
    common[:, 1, 1] = 0.03
    labels = tuple(f"J{n + 1:03}" for n in range(count))
    return Parts(labels, cutoff, ln_beta, np.full(count, 0.0517), own, common)


def _stages(count: int) -> Circuit:
    """Return a circuit of this many equal stages without feedback."""
    circuit = load_circuit("heron")
    stages = tuple(circuit.stages[0] for _ in range(count))
    return circuit.model_copy(update={"stages": stages, "feedback": None})


def _grid_of(parts: Parts, stages: int, positions: int = 40) -> SweepGrid:
    """Return the parts over the invented swings; the rate does not enter there."""
    return build_grid(parts, _stages(stages), None, positions=positions, bus_at=_triangle_at)


@pytest.fixture(scope="session")
def triangle_at() -> Callable[[float], TriangleBus]:
    return _triangle_at


@pytest.fixture(scope="session")
def invented_tray() -> Callable[..., Parts]:
    return _invented_tray


@pytest.fixture(scope="session")
def equal_stages() -> Callable[[int], Circuit]:
    return _stages


@pytest.fixture(scope="session")
def grid_of() -> Callable[..., SweepGrid]:
    return _grid_of
