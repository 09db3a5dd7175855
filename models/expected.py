"""Expected stagger of one set in stage order, from the definition itself.

Unlike ``pairwise`` this needs neither equal shunts nor equal capacitors: deviations
from the reference part are formed stage by stage and the joint covariance is carried
through their full Jacobian. With equal shunts the two agree.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from .chain import fixed_conductance_s
from .cycle import Bus
from .pairwise import Array, Parts, octaves
from .sweepgrid import even_times, gate_share

if TYPE_CHECKING:
    from .circuit import Circuit

POINTS = 512


def reference_part(parts: Parts) -> Parts:
    """Return the set's reference: mean cut-off voltage and mean ln beta in every stage."""
    count = len(parts)
    return Parts(
        labels=parts.labels,
        cutoff_v=np.full(count, parts.cutoff_v.mean()),
        ln_beta=np.full(count, parts.ln_beta.mean()),
        knee_v=np.full(count, parts.knee_v.mean()),
        own=np.zeros((count, 2, 2)),
        common=np.zeros((count, 2, 0)),
    )


def deviations(parts: Parts, gate_v: Array, shunt_s: Array) -> tuple[Array, Array]:
    """Return the stages' deviations and their Jacobian.

    Parameters
    ----------
    parts : Parts
        N parts in stage order.
    gate_v : ndarray, shape (T,)
        Gate voltages [V].
    shunt_s : ndarray, shape (N, 1)
        Shunt conductances [S].

    Returns
    -------
    (ndarray, ndarray)
        ``e_i(t)`` less its mean over the stages, shape (N, T) [octaves], and its
        derivatives by (VC, ln beta) of every part, shape (N, T, N, 2).
    """
    count = len(parts)
    own = octaves(parts, gate_v, shunt_s)
    reference = octaves(reference_part(parts), gate_v, shunt_s)
    deviation = own.level - reference.level
    deviation = deviation - deviation.mean(axis=0)
    by_own = np.stack([-own.per_gate_v, own.per_ln_beta], axis=-1)
    by_mean = np.stack([-reference.per_gate_v, reference.per_ln_beta], axis=-1) / count
    slope = np.repeat(-by_mean[:, :, None, :], count, axis=2)
    stage = np.arange(count)
    slope[stage, :, stage, :] += by_own
    return deviation, slope - slope.mean(axis=0)


def expected_stagger(parts: Parts, circuit: Circuit, bus: Bus, points: int = POINTS) -> float:
    """Return the root of the expected squared stagger [octaves].

    Parameters
    ----------
    parts : Parts
        One part a stage, in stage order, with their covariance.
    circuit : Circuit
        The circuit.
    bus : Bus
        The gate bus wave at the set's bias.
    points : int
        Instants over the cycle.
    """
    gate_v = gate_share(circuit) * bus.gate_v(even_times(bus.period_s, points))
    shunt_s = fixed_conductance_s(circuit)[:, None]
    deviation, slope = deviations(parts, gate_v, shunt_s)
    count = len(parts)
    rows = slope.reshape(count * points, 2 * count)
    variance = float(((rows @ parts.covariance()) * rows).sum()) / (count * points)
    return math.sqrt(float((deviation**2).mean()) + max(variance, 0.0))
