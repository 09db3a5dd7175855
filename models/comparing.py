"""How probable it is that one set is better than another, and which reading would tell.

Monte Carlo after JCGM 101:2008: parameters of all parts of both sets are drawn from
their joint normal covariance, so that what fixture and meter do to all parts alike
happens to both sets alike; each draw's staggers are computed without linearising. The
trimmers stay where the estimates put them, as they will on the bench.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from .chain import fixed_conductance_s
from .cycle import Bus
from .pairwise import Array, Parts, octaves
from .sweepgrid import even_times, gate_share

if TYPE_CHECKING:
    from collections.abc import Sequence

    from .circuit import Circuit

DRAWS = 4000
SEED = 20261201
POINTS = 32


@dataclass(frozen=True)
class Comparison:
    """Two sets under the readings' uncertainty.

    Parameters
    ----------
    probability : float
        That the first set's stagger is less than the second's, 0 to 1.
    settling_part : str or None
        The part whose own uncertainty moves the difference most; None if nothing does.
    settling_share : float
        By how much the variance of the difference of squared staggers falls when
        that part is known exactly, 0 to 1.
    draws : int
        Draws made; the probability's standard error is at most 0.5/sqrt(draws).
    """

    probability: float
    settling_part: str | None
    settling_share: float
    draws: int


def draw_parameters(parts: Parts, normal_own: Array, normal_common: Array) -> tuple[Array, Array]:
    """Return draws of (VC, ln beta), each of shape (D, P), from standard normal deviates.

    Parameters
    ----------
    parts : Parts
        P parts with K common influences.
    normal_own : ndarray, shape (D, P, 2)
        Deviates for the parts' own causes.
    normal_common : ndarray, shape (D, K)
        Deviates for the common influences.
    """
    power, axes = np.linalg.eigh(parts.own)
    root = axes * np.sqrt(np.maximum(power, 0.0))[:, None, :]
    shift = np.einsum("pab,dpb->dpa", root, normal_own)
    shift = shift + np.einsum("pak,dk->dpa", parts.common, normal_common)
    return parts.cutoff_v + shift[..., 0], parts.ln_beta + shift[..., 1]


def staggers(
    cutoff_v: Array, ln_beta: Array, knee_v: Array, circuit: Circuit, bus: Bus, points: int = POINTS
) -> Array:
    """Return the stagger of many sets in stage order at one bias, shape (D,) [octaves].

    Parameters
    ----------
    cutoff_v, ln_beta : ndarray, shape (D, N)
        Parameters [V], [-].
    knee_v : ndarray, shape (N,)
        Knee widths [V].
    circuit : Circuit
        The circuit of N stages.
    bus : Bus
        The gate bus wave.
    points : int
        Instants over the cycle.
    """
    draws, stages = cutoff_v.shape
    gate_v = gate_share(circuit) * bus.gate_v(even_times(bus.period_s, points))
    shunt_s = np.tile(fixed_conductance_s(circuit), draws)[:, None]

    def level(cutoff: Array, log_factor: Array, knee: Array) -> Array:
        flat = Parts(
            labels=(),
            cutoff_v=cutoff.ravel(),
            ln_beta=log_factor.ravel(),
            knee_v=np.tile(knee, draws),
            own=np.zeros((0, 2, 2)),
            common=np.zeros((0, 2, 0)),
        )
        return octaves(flat, gate_v, shunt_s).level.reshape(draws, stages, points)

    deviation = level(cutoff_v, ln_beta, knee_v)
    if np.ptp(shunt_s) > 1e-12 * shunt_s[0, 0]:  # with equal shunts the reference cancels
        mean_cutoff = np.repeat(cutoff_v.mean(axis=1, keepdims=True), stages, axis=1)
        mean_ln_beta = np.repeat(ln_beta.mean(axis=1, keepdims=True), stages, axis=1)
        deviation = deviation - level(mean_cutoff, mean_ln_beta, np.full(stages, knee_v.mean()))
    deviation -= deviation.mean(axis=1, keepdims=True)
    return np.asarray(np.sqrt((deviation**2).mean(axis=(1, 2))))


def compare_sets(
    parts: Parts,
    first: Sequence[str],
    first_bus: Bus,
    second: Sequence[str],
    second_bus: Bus,
    circuit: Circuit,
    *,
    draws: int = DRAWS,
    seed: int = SEED,
) -> Comparison:
    """Return how probable it is that the first set has less stagger than the second.

    Parameters
    ----------
    parts : Parts
        Parts that include both sets.
    first, second : sequence of str
        Labels in stage order.
    first_bus, second_bus : Bus
        Gate bus wave at each set's bias.
    circuit : Circuit
        The circuit.
    draws, seed : int
        Monte Carlo draws and the generator's seed.
    """
    names = list(dict.fromkeys([*first, *second]))
    place = {label: n for n, label in enumerate(parts.labels)}
    joint = parts.take([place[name] for name in names])
    at_first = [names.index(name) for name in first]
    at_second = [names.index(name) for name in second]
    generator = np.random.default_rng(seed)
    own = generator.standard_normal((draws, len(names), 2))
    common = generator.standard_normal((draws, joint.common.shape[2]))

    def drawn(of: Parts, members: list[int], bus: Bus) -> Array:
        cutoff_v, ln_beta = draw_parameters(of, own, common)
        return staggers(cutoff_v[:, members], ln_beta[:, members], of.knee_v[members], circuit, bus)

    one, other = drawn(joint, at_first, first_bus), drawn(joint, at_second, second_bus)
    # A tie, as between a set and itself, counts half for either.
    probability = float((one < other).mean() + 0.5 * (one == other).mean())
    whole = float(np.var(one**2 - other**2))
    best, share = None, 0.0
    if whole > 0.0:
        for n, name in enumerate(names):
            known = joint.own.copy()
            known[n] = 0.0
            surer = replace(joint, own=known)
            a = drawn(surer, at_first, first_bus) if n in at_first else one
            b = drawn(surer, at_second, second_bus) if n in at_second else other
            fall = 1.0 - float(np.var(a**2 - b**2)) / whole
            if fall > share:
                best, share = name, fall
    return Comparison(probability, best, share, draws)
