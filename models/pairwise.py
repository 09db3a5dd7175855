"""Distances between parts over a sweep, with what the readings leave uncertain.

Let ``x_p(t)`` be part p's break frequency in octaves while the gate bus moves.
In a set of N, stage i deviates from the reference part by ``x_i - x_ref``; with
equal shunts the reference is the same in every stage, and so is each capacitor's
share ``-log2 C`` (it stands in the part's and in the reference's term), hence
both leave with the mean over the stages and::

    stagger^2 = mean_t (1/N) sum_i (x_i - mean_j x_j)^2 = (1/N^2) sum_{i<j} D_ij,
    D_ij = mean_t (x_i - x_j)^2

The parameters of part i are known with an own covariance ``B_i`` and through
common influences ``F_i`` (fixture and meter), so that the joint covariance is
``blockdiag(B) + F F^T``. To first order, with ``J_i(t) = d x_i / d(VC, ln beta)``::

    E[D_ij] = b_i + b_j + mean_t |z_i - z_j|^2,
    b_i = mean_t J_i B_i J_i^T,   z_i(t) = (x_i, J_i F_i)

A common influence enters as one more coordinate, in which like parts lie close
together: that is how common errors cancel. The form is that of JCGM 100:2008,
5.2.2, eq. (13), rearranged into distances.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from .jfet import Jfet, overdrive, overdrive_slope

Array = npt.NDArray[np.float64]
Index = npt.NDArray[np.int64]
LN2 = math.log(2.0)


@dataclass(frozen=True)
class Parts:
    """Parameters of the parts at hand and their joint covariance.

    Parameters
    ----------
    labels : tuple of str
        Names on the tray, P of them.
    cutoff_v : ndarray, shape (P,)
        Cut-off voltages, negative [V].
    ln_beta : ndarray, shape (P,)
        Natural logarithm of the current factor in A/V^2.
    knee_v : ndarray, shape (P,)
        Knee widths [V].
    own : ndarray, shape (P, 2, 2)
        Covariance of (VC, ln beta) from each part's own causes.
    common : ndarray, shape (P, 2, K)
        Effect on (VC, ln beta) of one standard deviation of each common influence.
    """

    labels: tuple[str, ...]
    cutoff_v: Array
    ln_beta: Array
    knee_v: Array
    own: Array
    common: Array

    @classmethod
    def from_jfets(cls, jfets: list[Jfet] | tuple[Jfet, ...]) -> Parts:
        """Return parts known exactly."""
        count = len(jfets)
        return cls(
            labels=tuple(jfet.label for jfet in jfets),
            cutoff_v=np.array([jfet.cutoff_v for jfet in jfets]),
            ln_beta=np.log([jfet.beta_a_per_v2 for jfet in jfets]),
            knee_v=np.array([jfet.knee_v for jfet in jfets]),
            own=np.zeros((count, 2, 2)),
            common=np.zeros((count, 2, 0)),
        )

    def __len__(self) -> int:
        return len(self.labels)

    def take(self, index: npt.ArrayLike) -> Parts:
        """Return the parts at these places, in this order."""
        at = np.asarray(index, dtype=np.int64)
        return Parts(
            labels=tuple(self.labels[i] for i in at),
            cutoff_v=self.cutoff_v[at],
            ln_beta=self.ln_beta[at],
            knee_v=self.knee_v[at],
            own=self.own[at],
            common=self.common[at],
        )

    def like(self, jfets: Sequence[Jfet]) -> Parts:
        """Return the parts as these JFETs are, at another temperature say, equally uncertain."""
        there = Parts.from_jfets(tuple(jfets))
        return replace(self, cutoff_v=there.cutoff_v, ln_beta=there.ln_beta, knee_v=there.knee_v)

    def covariance(self) -> Array:
        """Return the whole joint covariance, shape (2 P, 2 P), parameters of a part adjacent."""
        count = len(self)
        factors = self.common.reshape(2 * count, -1)
        whole = factors @ factors.T
        for i in range(count):
            whole[2 * i : 2 * i + 2, 2 * i : 2 * i + 2] += self.own[i]
        return whole


@dataclass(frozen=True)
class Octaves:
    """Break frequencies over gate voltages and their slopes, each of shape (P, T).

    ``level`` is log2 of the conductance from drain node to reference rail [log2 S]:
    break frequency in octaves but for the capacitor's constant share.
    """

    level: Array
    per_gate_v: Array
    per_ln_beta: Array


def octaves(parts: Parts, gate_v: npt.ArrayLike, shunt_s: npt.ArrayLike) -> Octaves:
    """Return each part's break-frequency octaves at these gate voltages.

    Parameters
    ----------
    parts : Parts
        P parts.
    gate_v : array_like, shape (T,)
        Gate voltages from the reference rail [V].
    shunt_s : array_like
        Conductance of the shunt resistor, a scalar or shape (P, 1) [S].
    """
    u = np.asarray(gate_v, float)[None, :] - parts.cutoff_v[:, None]
    knee = parts.knee_v[:, None]
    p, slope = overdrive(u, knee), overdrive_slope(u, knee)
    safe = np.where(knee > 0.0, knee, 1.0)
    curvature = np.where(knee > 0.0, slope * (1.0 - slope) / safe, 0.0)
    twice_beta = 2.0 * np.exp(parts.ln_beta)[:, None]
    channel = twice_beta * p * slope  # Jfet.channel_conductance, for many parts at once
    whole = channel + np.asarray(shunt_s, float)
    return Octaves(
        level=np.log2(whole),
        per_gate_v=twice_beta * (slope**2 + p * curvature) / (whole * LN2),
        per_ln_beta=channel / (whole * LN2),
    )


@dataclass(frozen=True)
class Cloud:
    """Parts as points whose squared distances are expected squared differences.

    Parameters
    ----------
    points : ndarray, shape (P, R)
        Scaled so that ``|z_i - z_j|^2`` is a mean over time [octaves].
    own : ndarray, shape (P,)
        ``b_i``, each part's own variance, mean over time [octaves^2].
    """

    points: Array
    own: Array

    def distances(self) -> Array:
        """Return expected squared differences, shape (P, P), zero on the diagonal [octaves^2]."""
        centred = self.points - self.points.mean(axis=0)
        norm = np.einsum("ij,ij->i", centred, centred)
        square = norm[:, None] + norm[None, :] - 2.0 * (centred @ centred.T)
        whole = np.maximum(square, 0.0) + self.own[:, None] + self.own[None, :]
        whole = np.asarray(0.5 * (whole + whole.T))
        np.fill_diagonal(whole, 0.0)
        return whole

    def expected_square(self, members: npt.ArrayLike) -> Array:
        """Return E[stagger^2] of sets given as indices, shape (..., N) -> (...) [octaves^2]."""
        at = np.asarray(members, dtype=np.int64)
        count = at.shape[-1]
        points = self.points[at]
        spread = points - points.mean(axis=-2, keepdims=True)
        square = np.einsum("...ij,...ij->...", spread, spread) / count
        return np.asarray(square + (count - 1) / count**2 * self.own[at].sum(axis=-1))


def cloud(parts: Parts, swept: Octaves) -> Cloud:
    """Return the parts as points for one sweep.

    Parameters
    ----------
    parts : Parts
        P parts.
    swept : Octaves
        Their octaves over T gate voltages equally spaced in time.
    """
    count, times = swept.level.shape
    jacobian = np.stack([-swept.per_gate_v, swept.per_ln_beta], axis=-1)  # (P, T, 2)
    own = ((jacobian @ parts.own) * jacobian).sum(axis=(1, 2)) / times
    common = (jacobian @ parts.common).reshape(count, -1)
    points = np.concatenate([swept.level - swept.level.mean(axis=0), common], axis=1)
    points /= math.sqrt(times)
    return Cloud(points=points, own=own)


def parts_of(estimate: Any, labels: list[str] | tuple[str, ...] | None = None) -> Parts:
    """Return the parts of a tray's estimate, all or those named.

    Parameters
    ----------
    estimate : TrayEstimate
        Parameters and joint covariance of a tray.
    labels : sequence of str, optional
        Wanted parts, in order; all of the estimate's when left out.
    """
    place = {label: i for i, label in enumerate(estimate.labels)}
    wanted = tuple(estimate.labels) if labels is None else tuple(labels)
    at = [place[label] for label in wanted]
    return Parts(
        labels=wanted,
        cutoff_v=np.asarray(estimate.cutoff_v, float)[at],
        ln_beta=np.asarray(estimate.ln_beta, float)[at],
        knee_v=np.array([estimate.jfet(label).knee_v for label in wanted]),
        own=np.asarray(estimate.own_covariance, float)[at],
        common=np.asarray(estimate.common_factors, float)[at],
    )
