"""How many more parts to buy for so many more sets.

New parts are taken to come from the lot that the tray is a sample of: cut-off voltage and
ln beta, as measured on this fixture, are jointly normal. What so small a sample leaves open
is drawn too: covariance from the inverse Wishart, mean from the normal distribution about
the tray's own (A. Gelman et al., "Bayesian Data Analysis", 3rd ed., section 3.6, without
prior knowledge; section from memory). Each simulated delivery is packed into disjoint sets
together with the tray's spares, part after part, until there are enough.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import lru_cache
from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np

from .errors import InputError
from .packing import REACH, check_limit, figures_at_own_bias, pack_sets, quick_packing
from .pairwise import Array, Index, Parts, parts_of
from .sweepgrid import SweepGrid, build_grid

if TYPE_CHECKING:
    from .circuit import Circuit
    from .estimate import TrayEstimate
    from .gatebus import BusWave
    from .quantity import Setting

DELIVERIES = 80
SEED = 20261201
LEAST_PARTS = 6
# Bought parts looked at, per set and stage, before a delivery is given up.
MOST_PER_PART = 12
# Partners of a part that its sets are formed of.
NEIGHBOURS = 9
MOST_COMBINATIONS = 84
MOST_SETS = 200
COARSE_GRID = 48
# Sets whose stagger at their parts' mean bias is beyond this many limits are not looked into.
ROUGH = 1.5


@dataclass(frozen=True)
class Purchase:
    """Parts to buy.

    Parameters
    ----------
    more_sets : int
        Sets wanted.
    limit_octaves : float
        Greatest expected stagger of a set [octaves].
    needed : tuple of int or None
        Parts each simulated delivery took, ascending; None, last, where the most looked at
        were not enough.
    most : int
        The most parts looked at.
    spares : int
        The tray's spares, which join in.
    tray_sets : int
        Sets the tray itself yields, not counted.
    """

    more_sets: int
    limit_octaves: float
    needed: tuple[int | None, ...]
    most: int
    spares: int
    tray_sets: int

    def parts_for(self, confidence: float) -> int | None:
        """Return how many parts suffice in this share of the deliveries; None if none do."""
        rank = math.ceil(confidence * len(self.needed) - 1e-9)
        return self.needed[max(rank, 1) - 1]


def plan_purchase(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    more_sets: int,
    limit_octaves: float,
    *,
    lot: Sequence[str] | None = None,
    labels: Sequence[str] | None = None,
    deliveries: int = DELIVERIES,
    seed: int = SEED,
    progress: Callable[[float], object] | None = None,
) -> Purchase:
    """Return how many parts it takes to make so many more sets.

    Parameters
    ----------
    estimate : TrayEstimate
        The tray.
    circuit : Circuit
        The circuit.
    rate : Setting
        The rate.
    more_sets : int
        Sets wanted beyond those the tray yields, 1 to `MOST_SETS`.
    limit_octaves : float
        Greatest expected stagger of a set, more than 0 [octaves].
    lot : sequence of str, optional
        Parts that tell of the lot; all of the estimate's when left out.
    labels : sequence of str, optional
        Parts still to be had; those of the lot when left out.
    deliveries : int
        Deliveries simulated.
    seed : int
        Of the generator.
    progress : callable, optional
        Told the share done, 0 to 1.

    Raises
    ------
    InputError
        If `more_sets` is out of range, the tray too small to tell a lot by, or the
        readings alone leave more stagger than the limit.
    """
    if not 1 <= more_sets <= MOST_SETS:
        raise InputError(f"{more_sets} more sets; expected 1 to {MOST_SETS}")
    check_limit(limit_octaves)
    sample = tuple(estimate.labels if lot is None else lot)
    wanted = sample if labels is None else tuple(labels)
    whole = parts_of(estimate, sample)
    if len(whole) < LEAST_PARTS:
        raise InputError(
            f"{len(whole)} parts say too little about a lot; measure {LEAST_PARTS} or more"
        )
    grid_of = _GridMaker(circuit, rate)
    own = parts_of(estimate, wanted)
    spares, tray_sets = own.take(np.arange(0)), 0
    if len(own) >= circuit.stage_count:
        packing = pack_sets(build_grid(own, circuit, rate), limit_octaves)
        tray_sets = len(packing.sets)
        taken = set(packing.sets.ravel().tolist())
        spares = own.take([n for n in range(len(own)) if n not in taken])
    elif len(own):
        spares = own
    floor = least_stagger(whole, grid_of(whole))
    if floor > limit_octaves:
        raise InputError(
            f"the readings of this tray alone leave a stagger of {floor:.3f} octave in any set, "
            f"more than the limit of {limit_octaves:g}: take second readings at another current, "
            "or a better meter, or raise the limit"
        )
    most = MOST_PER_PART * more_sets * circuit.stage_count
    source = _Lot(whole)

    def one(number: int) -> int | None:
        generator = np.random.default_rng([seed, number])
        stream = _joined(source.parts(most, generator), spares)
        return _parts_needed(grid_of(stream), len(spares), more_sets, limit_octaves)

    needed: list[int | None] = []
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        for count in pool.map(one, range(deliveries)):
            needed.append(count)
            if progress:
                progress(len(needed) / deliveries)
    ordered = sorted(needed, key=lambda count: math.inf if count is None else count)
    return Purchase(more_sets, limit_octaves, tuple(ordered), most, len(spares), tray_sets)


def least_stagger(parts: Parts, grid: SweepGrid) -> float:
    """Return the expected stagger of a set of identical parts, from the readings alone [octaves].

    Parameters
    ----------
    parts : Parts
        The tray; the middle one of its parts' own variances is taken.
    grid : SweepGrid
        The same parts over the trimmer's positions.
    """
    own = [float(grid.cloud(int(q)).own[n]) for n, q in enumerate(grid.uniform_place)]
    count = grid.stages
    return math.sqrt((count - 1) / count * float(np.median(own)))


class _GridMaker:
    """Makes the grids of many deliveries, the gate bus of each trimmer position solved once."""

    def __init__(self, circuit: Circuit, rate: Setting) -> None:
        from .gatebus import solve_bus

        self._circuit, self._rate = circuit, rate

        @lru_cache(maxsize=4096)
        def bus_at(thousandth: int) -> BusWave:
            return solve_bus(circuit, thousandth / 1000.0, rate)

        self._bus_at = bus_at

    def __call__(self, parts: Parts) -> SweepGrid:
        return build_grid(
            parts,
            self._circuit,
            self._rate,
            positions=COARSE_GRID,
            # To a thousandth of the trimmer's travel: finer than anybody sets it.
            bus_at=lambda position: self._bus_at(round(1000.0 * position)),
        )


class _Lot:
    """The lot a tray is a sample of."""

    def __init__(self, tray: Parts) -> None:
        self._tray = tray
        self._values = np.column_stack([tray.cutoff_v, tray.ln_beta])

    def parts(self, count: int, generator: np.random.Generator) -> Parts:
        """Return as many new parts as one simulated delivery has."""
        from scipy.stats import invwishart

        tray, values = self._tray, self._values
        size = len(values)
        scatter = np.cov(values.T) * (size - 1)
        # A tray of one reading a part lies on a line: keep the scatter regular.
        scatter = scatter + 1e-9 * np.trace(scatter) * np.eye(2)
        spread = invwishart(df=size - 1, scale=scatter).rvs(random_state=generator)
        middle = generator.multivariate_normal(values.mean(axis=0), spread / size)
        drawn = generator.multivariate_normal(middle, spread, size=count)
        return Parts(
            labels=tuple(f"new {n}" for n in range(count)),
            cutoff_v=np.minimum(drawn[:, 0], -0.05),
            ln_beta=drawn[:, 1],
            knee_v=np.full(count, float(np.median(tray.knee_v))),
            own=np.repeat(np.median(tray.own, axis=0)[None], count, axis=0),
            common=np.repeat(tray.common.mean(axis=0)[None], count, axis=0),
        )


def _joined(new: Parts, spares: Parts) -> Parts:
    """Return the spares followed by new parts."""
    if not len(spares):
        return new
    return Parts(
        labels=(*spares.labels, *new.labels),
        cutoff_v=np.concatenate([spares.cutoff_v, new.cutoff_v]),
        ln_beta=np.concatenate([spares.ln_beta, new.ln_beta]),
        knee_v=np.concatenate([spares.knee_v, new.knee_v]),
        own=np.concatenate([spares.own, new.own]),
        common=np.concatenate([spares.common, new.common]),
    )


def _parts_needed(grid: SweepGrid, spares: int, more_sets: int, limit_octaves: float) -> int | None:
    """Return how many of the parts after the spares it takes, by bisection; None if too few."""
    low, high = 0, 0
    step = more_sets * grid.stages
    most = len(grid.parts) - spares
    while True:
        high = min(high + step, most)
        if count_sets(_first(grid, spares + high), limit_octaves) >= more_sets:
            break
        if high == most:
            return None
        low, step = high, 2 * step
    while high - low > 1:
        middle = (low + high) // 2
        if count_sets(_first(grid, spares + middle), limit_octaves) >= more_sets:
            high = middle
        else:
            low = middle
    return high


def count_sets(grid: SweepGrid, limit_octaves: float) -> int:
    """Return how many disjoint sets within the limit a quick packing finds.

    It looks at sets of near neighbours only, so it can miss a set now and then and never
    counts one too many.
    """
    if len(grid.parts) < grid.stages:
        return 0
    candidates = _neighbour_sets(grid)
    candidates = candidates[_rough_stagger(grid, candidates) <= ROUGH * limit_octaves]
    stagger = figures_at_own_bias(grid, candidates, REACH)[0]
    return len(quick_packing(candidates[stagger <= limit_octaves], len(grid.parts)))


def _rough_stagger(grid: SweepGrid, sets: Index) -> Array:
    """Return the expected stagger at the members' mean bias rather than the set's own, (S,)."""
    place = np.rint(grid.uniform_place[sets].mean(axis=1)).astype(np.int64)
    stagger = np.zeros(len(sets))
    for q in np.unique(place):
        at = place == q
        stagger[at] = np.sqrt(grid.cloud(int(q)).expected_square(sets[at]))
    return stagger


def _neighbour_sets(grid: SweepGrid) -> Index:
    """Return every part's sets with its nearest neighbours, each once, shape (S, N)."""
    count, parts = grid.stages, len(grid.parts)
    reach = min(NEIGHBOURS, parts - 1)
    while math.comb(reach, count - 1) > MOST_COMBINATIONS and reach > count - 1:
        reach -= 1
    chosen = np.array(list(combinations(range(reach), count - 1)))
    found = []
    for q in np.unique(grid.uniform_place):
        points = grid.cloud(int(q)).points
        centred = points - points.mean(axis=0)
        norm = np.einsum("ij,ij->i", centred, centred)
        for part in np.flatnonzero(grid.uniform_place == q):
            square = norm - 2.0 * (centred @ centred[part])
            square[part] = np.inf
            near = np.argpartition(square, reach - 1)[:reach]
            near = near[np.argsort(square[near])]
            first = np.full((len(chosen), 1), part)
            found.append(np.concatenate([first, near[chosen]], axis=1))
    return np.unique(np.sort(np.concatenate(found), axis=1), axis=0)


def _first(grid: SweepGrid, count: int) -> SweepGrid:
    """Return the grid of its first parts."""
    return replace(
        grid,
        parts=grid.parts.take(np.arange(count)),
        level=np.ascontiguousarray(grid.level[:, :count]),
        slope=np.ascontiguousarray(grid.slope[:, :count]),
        per_ln_beta=np.ascontiguousarray(grid.per_ln_beta[:, :count]),
        low=np.ascontiguousarray(grid.low[:, :count]),
        high=np.ascontiguousarray(grid.high[:, :count]),
        uniform_travel=grid.uniform_travel[:count],
        uniform_place=grid.uniform_place[:count],
    )
