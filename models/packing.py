"""As many disjoint sets as a tray yields under a stagger limit, and how many there can be at most.

A packing problem: each set of parts within the limit is a column, each part may be
used once. Its linear relaxation bounds the count from above and says more than parts
divided by stages, because it knows which parts have too few partners. Columns enter
by their price against the relaxation's dual values; HiGHS (through scipy.optimize)
solves the relaxation and then the whole-number problem over the columns that the
duals leave in the running (a set in a packing of K sets has a reduced cost of at most
the relaxation's optimum less K).

Which sets are within the limit depends on each set's own bias. For the bound a set
counts as soon as its distances, each at its least over a few grid positions about the
uniform set's bias, are within the limit. That takes in every set whose own bias lies
that near; where nothing stalls the two coincide, and sets within a usable limit do not
stall. Sets that are really packed are checked at their own bias.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .closing import Walk
from .pairwise import Array, Index
from .sweepgrid import TRAVEL_SHARE, SweepGrid

# Grid positions to either side of the uniform set's bias in which a set's own bias is
# looked for: on invented trays, 3,000 sets within the limit at a time, it lay within 2.
WINDOW = 2
LISTED_SETS = 400_000
VISITED_SETS = 40_000_000
COLUMNS_PER_ROUND = 1500
ROUNDS = 60
WHOLE_COLUMNS = 2500
BRANCH_NODES = 200
SECONDS = 20.0
# Repair: so many neighbouring sets are taken apart and packed anew, so many times at most.
TAKEN_APART = 9
REPAIRS = 80
REPAIR_COLUMNS = 1500
SEED = 20261201


@dataclass(frozen=True)
class Packing:
    """Disjoint sets within a limit.

    Parameters
    ----------
    sets : ndarray, shape (K, N)
        Indices of the parts, the set of least expected stagger first.
    stagger_octaves, travel_octaves, stall : ndarray, shape (K,)
        At each set's own bias on the grid; stagger is the expected one.
    place : ndarray, shape (K,)
        Grid index of that bias.
    bound : int
        No packing has more sets.
    reason : str
        What the bound rests on.
    within_limit : int or None
        Sets within the limit, overlapping ones counted; None if not all were listed.
    lonely : ndarray
        Indices of parts that stand in no set within the limit.
    """

    sets: Index
    stagger_octaves: Array
    travel_octaves: Array
    stall: Array
    place: Index
    bound: int
    reason: str
    within_limit: int | None
    lonely: Index


def pack_sets(
    grid: SweepGrid, limit_octaves: float, *, listed: int = LISTED_SETS, rounds: int = ROUNDS
) -> Packing:
    """Return as many disjoint sets as can be found, with an upper bound of their number.

    Parameters
    ----------
    grid : SweepGrid
        Parts over the trimmer's positions.
    limit_octaves : float
        Greatest expected stagger of a set, more than 0 [octaves].
    listed : int
        Sets within the limit to hold in memory; the bound rests on all of them.
    rounds : int
        Rounds of pricing.
    """
    parts, count = len(grid.parts), grid.stages
    pool = np.empty((0, count), np.int64)
    batches: list[Index] = []
    total = visited = 0
    stands = np.zeros(parts, np.bool_)
    complete = True
    for batch, seen in sets_within(grid, limit_octaves):
        total += batch.shape[0]
        visited += seen
        stands[batch] = True
        if total <= listed:
            batches.append(batch)
        elif visited > VISITED_SETS:
            complete = False
            break
        else:
            # more than memory is meant for: keep a thinning sample
            batches.append(batch[:: max(1, total // listed)])
    if batches:
        pool = np.concatenate(batches)
    all_listed = total <= listed
    if not complete:
        stands[:] = True
    simple = int(stands.sum()) // count
    if pool.shape[0] == 0:
        return _packed(grid, pool, 0 if complete else simple, _REASON[0], 0, ~stands)
    _, dual, optimum = _relax(pool, parts, rounds)
    bound, reason = simple, _REASON[1] if complete else _REASON[3]
    if all_listed:
        relaxed = math.floor(optimum + 1e-6)
        if relaxed < bound:
            bound, reason = relaxed, _REASON[2]
    reduced = dual[pool].sum(axis=1) - 1.0
    fits = _Fits(grid, pool, limit_octaves)
    chosen = _repair(fits, _greedy(fits, reduced), bound)
    if chosen.size < bound:
        # a larger packing consists of these columns alone
        near = np.flatnonzero(reduced <= optimum - (chosen.size + 1) + 1e-7)
        if all_listed and near.size <= WHOLE_COLUMNS:
            found, most = _whole(fits, near)
            if found.size > chosen.size:
                chosen = found
            proven = max(chosen.size, min(bound, math.floor(most + 1e-6)))
            if proven < bound:
                bound, reason = proven, _REASON[4]
    chosen = pool[chosen]
    return _packed(grid, chosen, bound, reason, total if complete else None, ~stands)


_REASON = (
    "no set at all is within the limit",
    "parts that stand in some set within the limit, divided by stages",
    "linear relaxation over all sets within the limit",
    "parts divided by stages: too many sets are within the limit to visit them all",
    "branch and bound over the sets the relaxation leaves in the running",
)


def sets_within(grid: SweepGrid, limit_octaves: float) -> Iterator[tuple[Index, int]]:
    """Yield all sets that may be within the limit at their own bias, each once, in batches.

    Parameters
    ----------
    grid : SweepGrid
        Parts over the trimmer's positions.
    limit_octaves : float
        Greatest expected stagger [octaves].

    Yields
    ------
    (ndarray, int)
        Sets, shape (S, N), and how many were looked at to find them.
    """
    count, last = grid.stages, grid.position.size - 1
    limit = (count * limit_octaves) ** 2
    near: dict[int, tuple[Array, Array]] = {}
    place = grid.uniform_place
    for q in range(int(place.min()), int(place.max()) + 1):
        window = range(max(q - WINDOW, 0), min(q + WINDOW, last) + 1)
        for w in window:
            if w not in near:
                points = grid.cloud(w)
                near[w] = points.distances(), points.own
        for w in [w for w in near if w < window[0]]:
            del near[w]
        distance = np.minimum.reduce([near[w][0] for w in window])
        own = np.minimum.reduce([near[w][1] for w in window])
        usable = _about(place, q, distance, 2.0 * limit / count)
        if usable.size < count:
            continue
        walk = Walk(distance, own, usable, count, limit)
        while (batch := walk.next_sets(limit, np.iinfo(np.int64).max)) is not None:
            sets = batch[0]
            # halves go to the lower place, so that each set belongs to one
            twice = 2 * place[sets].sum(axis=1) - 2 * count * q
            yield sets[(twice > -count) & (twice <= count)], sets.shape[0]


def _about(place: Index, q: int, distance: Array, reach: float) -> Index:
    """Return the parts that can stand in a set whose mean uniform place is q.

    Such a set has a member on either side of q or at it, within reach of every other.
    """
    together = distance <= reach
    low, high = place <= q, place >= q
    beside = np.where(high, (together & low[None, :]).any(axis=1), False)
    beside |= np.where(low, (together & high[None, :]).any(axis=1), False)
    return np.flatnonzero(beside)


def _relax(pool: Index, parts: int, rounds: int) -> tuple[Index, Array, float]:
    """Return used columns, dual values (P,) and a bound from the linear relaxation of the pool.

    If the rounds run out before no column improves, the dual values are scaled up
    until none does (Farley's bound), which keeps the bound valid.
    """
    from scipy.optimize import linprog

    chosen = np.unique(np.linspace(0, pool.shape[0] - 1, COLUMNS_PER_ROUND).astype(np.int64))
    dual = np.full(parts, 1.0 / pool.shape[1])
    for _ in range(rounds):
        result = linprog(
            -np.ones(chosen.size),
            A_ub=_incidence(pool[chosen], parts),
            b_ub=np.ones(parts),
            bounds=(0.0, None),
            method="highs",
        )
        dual = np.maximum(-np.asarray(result.ineqlin.marginals), 0.0)
        price = dual[pool].sum(axis=1)
        worst = np.argsort(price, kind="stable")[:COLUMNS_PER_ROUND]
        worst = worst[price[worst] < 1.0 - 1e-9]
        if worst.size == 0:
            break
        chosen = np.union1d(chosen, worst)
    least = float(dual[pool].sum(axis=1).min())
    if 0.0 < least < 1.0:
        dual = dual / least
    elif least <= 0.0:
        dual = np.full(parts, 1.0 / pool.shape[1])
    return chosen, dual, float(dual.sum())


def _incidence(sets: Index, parts: int):  # type: ignore[no-untyped-def]
    from scipy.sparse import csc_matrix

    count = sets.shape[1]
    return csc_matrix(
        (np.ones(sets.size), sets.ravel(), np.arange(0, sets.size + 1, count)),
        shape=(parts, sets.shape[0]),
    )


def _figures(grid: SweepGrid, sets: Index) -> tuple[Array, Array, Array, Index]:
    """Return stagger, travel, stall and place of sets at own bias; stagger inf if short."""
    places, travel, stall, _ = grid.own_bias(sets)
    stagger = np.zeros(sets.shape[0])
    for q in np.unique(places):
        at = places == q
        stagger[at] = np.sqrt(grid.cloud(int(q)).expected_square(sets[at]))
    short = travel < TRAVEL_SHARE * grid.uniform_travel[sets].mean(axis=1)
    return np.where(short, np.inf, stagger), travel, stall, places


class _Fits:
    """Which of the pool's sets are within the limit at their own bias, found out as needed."""

    def __init__(self, grid: SweepGrid, pool: Index, limit_octaves: float) -> None:
        self.grid = grid
        self.pool = pool
        self.limit_octaves = limit_octaves
        self._stagger = np.full(pool.shape[0], np.nan)

    def stagger(self, columns: Index) -> Array:
        """Return the expected stagger of these columns, inf for short travel [octaves]."""
        unknown = columns[np.isnan(self._stagger[columns])]
        if unknown.size:
            self._stagger[unknown] = _figures(self.grid, self.pool[unknown])[0]
        return self._stagger[columns]

    def those(self, columns: Index) -> Index:
        """Return the columns that are within the limit."""
        return columns[self.stagger(columns) <= self.limit_octaves]


def _greedy(fits: _Fits, reduced: Array) -> Index:
    """Return disjoint columns, taken by reduced cost: scarce parts first, none wasted."""
    used = np.zeros(len(fits.grid.parts), np.bool_)
    chosen: list[int] = []
    for n in np.argsort(reduced, kind="stable"):
        members = fits.pool[n]
        if not used[members].any() and fits.those(np.array([n])).size:
            chosen.append(int(n))
            used[members] = True
    return np.array(chosen, dtype=np.int64)


def _repair(fits: _Fits, chosen: Index, bound: int) -> Index:
    """Return a packing at least as large: neighbouring sets are taken apart and packed anew.

    Each time about a part left over. Packings of the same size are accepted too,
    so that the parts left over wander until enough of them meet.
    """
    pool, grid = fits.pool, fits.grid
    count = pool.shape[1]
    generator = np.random.default_rng(SEED)
    middle = int(np.median(grid.uniform_place))
    points = grid.cloud(middle).points
    stands = np.zeros(len(grid.parts), np.bool_)
    stands[pool] = True
    for _ in range(REPAIRS):
        if chosen.size >= bound:
            break
        used = np.zeros(len(grid.parts), np.bool_)
        used[pool[chosen]] = True
        spare = np.flatnonzero(stands & ~used)
        if spare.size < count:
            break
        about = points[generator.choice(spare)]
        centres = points[pool[chosen]].mean(axis=1)
        apart = np.argsort(((centres - about) ** 2).sum(axis=1), kind="stable")[:TAKEN_APART]
        nearest = spare[np.argsort(((points[spare] - about) ** 2).sum(axis=1), kind="stable")]
        free = np.zeros(len(grid.parts), np.bool_)
        free[pool[chosen[apart]]] = True
        free[nearest[: 2 * count + 2]] = True
        columns = np.flatnonzero(free[pool].all(axis=1))
        if columns.size > REPAIR_COLUMNS:
            old = chosen[apart]
            columns = np.union1d(generator.choice(columns, REPAIR_COLUMNS, replace=False), old)
        columns = fits.those(columns)
        found, _ = _solve(pool[columns], 1.0 + 1e-3 * generator.random(columns.size))
        if found.size >= apart.size:
            chosen = np.concatenate([np.delete(chosen, apart), columns[found]])
    return chosen


def _solve(sets: Index, gain: Array) -> tuple[Index, float]:
    """Return disjoint sets of the greatest total gain, as places, and a bound of the total."""
    from scipy.optimize import Bounds, LinearConstraint, milp

    result = milp(
        -gain,
        constraints=LinearConstraint(_incidence(sets, int(sets.max()) + 1), -np.inf, 1.0),
        integrality=np.ones(gain.size, dtype=np.int64),
        bounds=Bounds(0.0, 1.0),
        options={"node_limit": BRANCH_NODES, "time_limit": SECONDS},
    )
    bound = getattr(result, "mip_dual_bound", None)
    most = math.inf if bound is None else -float(bound)
    return np.flatnonzero(result.x > 0.5) if result.x is not None else np.arange(0), most


def _whole(fits: _Fits, near: Index) -> tuple[Index, float]:
    """Return a packing by columns within the limit among these, and a bound for all of these."""
    if near.size == 0:
        return near, 0.0
    _, most = _solve(fits.pool[near], np.ones(near.size))
    fit = fits.those(near)
    if fit.size == 0:
        return fit, most
    found, _ = _solve(fits.pool[fit], np.ones(fit.size))
    return fit[found], most


def _packed(
    grid: SweepGrid,
    sets: Index,
    bound: int,
    reason: str,
    within: int | None,
    lonely: npt.NDArray[np.bool_],
) -> Packing:
    none = np.zeros(0)
    stagger, travel, stall, place = (
        _figures(grid, sets) if sets.shape[0] else (none, none, none, none.astype(np.int64))
    )
    order = np.argsort(stagger, kind="stable")
    return Packing(
        sets=np.sort(sets, axis=1)[order],
        stagger_octaves=np.asarray(stagger, float)[order],
        travel_octaves=np.asarray(travel, float)[order],
        stall=np.asarray(stall, float)[order],
        place=np.asarray(place, np.int64)[order],
        bound=max(bound, sets.shape[0]),
        reason=reason,
        within_limit=within,
        lonely=np.flatnonzero(lonely),
    )
