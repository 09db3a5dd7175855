"""What becomes of a set when the values around it are not what is printed on them.

Monte Carlo after JCGM 101:2008: every draw is one unit built from this set, its components
within their tolerances and its parts where their readings leave them (see ``unit``).

First-order shares are the indices of I. M. Sobol' by the estimator of A. Saltelli et al.,
"Variance based sensitivity analysis of model output", Computer Physics Communications 181
(2010) 259-270, as in ``scipy.stats.sobol_indices``. A cause's many values are one factor:
it picks a row of a table of draws.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from .components import Tolerances
from .gatebus import BusWave
from .pairwise import Array, Parts
from .quantity import Setting
from .unit import CAUSES, FIGURES, Unit

if TYPE_CHECKING:
    from .circuit import Circuit

DRAWS = 10_000
LEAST_DRAWS = 100
SHARE_DRAWS = 1024
ALONE_DRAWS = 2048
SEED = 20261201


@dataclass(frozen=True)
class Spread:
    """One figure over all draws.

    Parameters
    ----------
    nominal : float
        With every value as printed and every part as estimated.
    mean, deviation : float
        Mean and standard deviation of the draws.
    low, median, high : float
        The 5th, 50th and 95th percentile.
    """

    nominal: float
    mean: float
    deviation: float
    low: float
    median: float
    high: float


@dataclass(frozen=True)
class Variation:
    """What a set's units would be like.

    Parameters
    ----------
    draws : ndarray
        Figures of all draws by name (`FIGURES`), each of shape (D,): stagger [octaves],
        travel [octaves], stall, depth of the shallowest notch [dB, NaN where one is
        missing], shift of the gate bus by which the trimmer takes the sweep back [V].
    spreads : dict of str to Spread
        The same summed up.
    shares : dict of str to dict of str to float
        First-order index of each cause on each figure, 0 to 1 but for sampling noise; empty
        if not asked for. What they leave to 1 is causes acting together.
    alone_octaves : dict of str to float
        Expected stagger (root of the mean square) with one cause acting on a set of
        identical parts [octaves]; `readings` acts on this set's parts without their
        mismatch.
    as_built_octaves : float
        Expected stagger of this set in a unit [octaves].
    identical_octaves : float
        The same for four identical parts known exactly [octaves].
    measured_capacitors_octaves : float
        The same for this set with every capacitor as printed [octaves].
    beyond_reach : float
        Share of the draws where the trimmer ends before the sweep is back.
    degrees_per_volt, turns : float, int
        The trimmer's travel for a shift of the gate bus, and its turns.
    """

    draws: dict[str, Array]
    spreads: dict[str, Spread]
    shares: dict[str, dict[str, float]]
    alone_octaves: dict[str, float]
    as_built_octaves: float
    identical_octaves: float
    measured_capacitors_octaves: float
    beyond_reach: float
    degrees_per_volt: float
    turns: int

    @property
    def matching_gain(self) -> float:
        """Share of the expected stagger that identical parts would take away, 0 to 1."""
        if self.as_built_octaves == 0.0:
            return 0.0
        return max(0.0, 1.0 - self.identical_octaves / self.as_built_octaves)


def vary_set(
    circuit: Circuit,
    parts: Parts,
    bus: BusWave,
    rate: Setting,
    tolerances: Tolerances | None = None,
    *,
    draws: int = DRAWS,
    reset: bool = True,
    shares: bool = True,
    seed: int = SEED,
    progress: Callable[[float], object] | None = None,
) -> Variation:
    """Return what units built from a set would be like.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    parts : Parts
        The set in stage order, as it is at the channel temperature.
    bus : BusWave
        The gate bus at the trimmer position the set was given.
    rate : Setting
        The rate.
    tolerances : Tolerances, optional
        Limits of the values.
    draws : int
        Units drawn, 100 or more.
    reset : bool
        Whether the trimmer is set again in every unit.
    shares : bool
        Whether to work out first-order shares as well.
    seed : int
        Of the generator; the same draws for the same seed.
    progress : callable, optional
        Told the share done, 0 to 1.

    Raises
    ------
    ValueError
        If there are too few draws.
    """
    if draws < LEAST_DRAWS:
        raise ValueError(f"{draws} draws; expected {LEAST_DRAWS} or more")
    limits = tolerances or Tolerances()
    unit = Unit(circuit, parts, bus, rate, reset=reset)
    span = 0.45 if shares else 0.9
    tell = progress or (lambda share: None)
    drawn = unit.draw(limits, draws, seed)
    figures = unit.figures(drawn, lambda share: tell(span * share))
    nominal = unit.nominal()
    alike = Unit(circuit, _identical(parts), bus, rate, reset=reset)
    some = unit.draw(limits, ALONE_DRAWS, seed + 1)
    exact = replace(some, capacitors=np.ones_like(some.capacitors))
    known = replace(some, parts=np.zeros_like(some.parts))
    result = Variation(
        draws=figures,
        spreads={name: _spread(nominal[name], figures[name]) for name in FIGURES},
        shares=_shares(unit, limits, seed + 2, tell, span) if shares else {},
        alone_octaves={cause: _rms(alike.staggers(some.only(cause))) for cause in CAUSES},
        as_built_octaves=_rms(unit.staggers(some)),
        identical_octaves=_rms(alike.staggers(known)),
        measured_capacitors_octaves=_rms(unit.staggers(exact)),
        beyond_reach=unit.beyond_reach(figures["shift_v"]),
        degrees_per_volt=unit.degrees_per_volt,
        turns=circuit.bus.trimmer.turns,
    )
    tell(1.0)
    return result


def _shares(
    unit: Unit, limits: Tolerances, seed: int, tell: Callable[[float], object], start: float
) -> dict[str, dict[str, float]]:
    """Return the first-order index of each cause on each figure."""
    from scipy.stats import sobol_indices, uniform

    table = unit.draw(limits, 2 * SHARE_DRAWS, seed)
    done = 0.0

    def model(place: Array) -> Array:
        nonlocal done
        rows = np.minimum((place * len(table)).astype(np.int64), len(table) - 1)
        figures = unit.figures(table.rows(*rows))
        done += rows.shape[1] / (SHARE_DRAWS * (len(CAUSES) + 2))
        tell(start + (0.95 - start) * min(1.0, done))
        # A notch missing in some draws would make the whole index NaN.
        return np.stack([np.nan_to_num(figures[name], nan=0.0) for name in FIGURES])

    evenly: Any = [uniform()] * len(CAUSES)
    found = sobol_indices(func=model, n=SHARE_DRAWS, dists=evenly, rng=np.random.default_rng(seed))
    first = np.atleast_2d(found.first_order)
    return {
        cause: {name: float(first[k, n]) for k, name in enumerate(FIGURES)}
        for n, cause in enumerate(CAUSES)
    }


def _identical(parts: Parts) -> Parts:
    """Return as many parts as there are, all the set's mean, with the readings' covariance."""
    count = len(parts)
    return replace(
        parts,
        cutoff_v=np.full(count, parts.cutoff_v.mean()),
        ln_beta=np.full(count, parts.ln_beta.mean()),
        knee_v=np.full(count, parts.knee_v.mean()),
    )


def _rms(values: Array) -> float:
    return float(np.sqrt(np.mean(values**2)))


def _spread(nominal: float, values: Array) -> Spread:
    seen = values[np.isfinite(values)]
    if not seen.size:
        return Spread(nominal, *[math.nan] * 5)
    low, median, high = np.percentile(seen, [5.0, 50.0, 95.0])
    return Spread(
        nominal, float(seen.mean()), float(seen.std()), float(low), float(median), float(high)
    )
