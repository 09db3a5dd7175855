"""As many disjoint sets as a tray yields under a stagger limit, and how many there can be at most.

A packing problem: each set within the limit may be packed, each part used once. A
local search finds packings (``packing_kernels``); the relaxed problem bounds their
count from above (``relaxation``) and says more than parts divided by stages, because
it knows which parts have too few partners. Where the two differ, HiGHS (through
scipy.optimize) branches over the sets that a larger packing would have to consist of.

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
from typing import Any

import numpy as np
import numpy.typing as npt

from .closing import Walk
from .errors import InputError
from .pairwise import Array, Index
from .relaxation import count_bound
from .sweepgrid import TRAVEL_SHARE, SweepGrid

# Grid positions to either side of the uniform set's bias in which a set's own bias is
# looked for: on invented trays, 3,000 sets within the limit at a time, it lay within 2.
WINDOW = 2
LISTED_SETS = 400_000
VISITED_SETS = 40_000_000
WHOLE_COLUMNS = 1500
BRANCH_NODES = 200
SECONDS = 4.0
# Local search: sets to exchange among, positions about the uniform set's bias in which their
# own bias is looked for at first.
EXCHANGED_SETS = 40_000
EVERYWHERE_SETS = 10_000
REACH = 8
SEED = 20261201


@dataclass(frozen=True)
class _Search:
    """Effort of one local search: steps, and temperatures in sets."""

    steps: int
    hot: float
    cold: float


SEARCHES = (
    _Search(4_000_000, 0.6, 0.12),
    _Search(20_000_000, 0.25, 0.15),
    _Search(40_000_000, 0.5, 0.12),
)
QUICK = _Search(200_000, 0.6, 0.12)


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


def check_limit(limit_octaves: float) -> None:
    """Refuse a stagger limit that no set can meet.

    Raises
    ------
    InputError
        If it is not above 0, or not finite.
    """
    if not 0.0 < limit_octaves < math.inf:
        raise InputError(
            f"a stagger limit of {limit_octaves:g} octaves cannot be met: give one above 0, "
            "such as 0.05 (and see the best set's stagger first)"
        )


def pack_sets(grid: SweepGrid, limit_octaves: float, *, listed: int = LISTED_SETS) -> Packing:
    """Return as many disjoint sets as can be found, with an upper bound of their number.

    Parameters
    ----------
    grid : SweepGrid
        Parts over the trimmer's positions.
    limit_octaves : float
        Greatest expected stagger of a set, more than 0 [octaves].
    listed : int
        Sets within the limit to hold in memory; the bound rests on all of them.
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
    bound, reason = simple, _REASON[1] if complete else _REASON[3]
    fitting = pool[_fitting(grid, pool, limit_octaves)]
    if all_listed and pool.shape[0] <= EXCHANGED_SETS:
        pool = fitting  # all were looked at: the bound need not count the others
    chosen = _exchange(fitting, parts, bound, SEARCHES[0], pool[:0])
    if all_listed and pool.shape[0] and chosen.shape[0] < bound:
        relaxed = count_bound(pool, parts, chosen.shape[0])
        if relaxed.count < bound:
            bound, reason = relaxed.count, _REASON[2]
        # a larger packing consists of these sets alone
        near = relaxed.price <= 1.0 + relaxed.relaxed - (chosen.shape[0] + 1) + 1e-6
        if chosen.shape[0] < bound and near.sum() <= WHOLE_COLUMNS:
            larger, most = _branch(pool[near], parts)
            if pool is fitting and larger.shape[0] > chosen.shape[0]:
                chosen = larger
            most = max(chosen.shape[0], most)
            if most < bound:
                bound, reason = most, _REASON[4]
    for search in SEARCHES[1:]:
        if chosen.shape[0] < bound - 1:
            chosen = _exchange(fitting, parts, bound, search, chosen)
    chosen = chosen[figures_at_own_bias(grid, chosen)[0] <= limit_octaves]
    return _packed(grid, chosen, bound, reason, total if complete else None, ~stands)


_REASON = (
    "no set at all is within the limit",
    "parts that stand in some set within the limit, divided by stages",
    "relaxed packing problem over all sets within the limit",
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


def _incidence(sets: Index, parts: int) -> Any:
    from scipy.sparse import csc_matrix

    count = sets.shape[1]
    return csc_matrix(
        (np.ones(sets.size), sets.ravel(), np.arange(0, sets.size + 1, count)),
        shape=(parts, sets.shape[0]),
    )


def figures_at_own_bias(
    grid: SweepGrid, sets: Index, reach: int | None = None
) -> tuple[Array, Array, Array, Index]:
    """Return expected stagger, travel, stall and place of sets at their own bias, each (S,).

    A set whose travel is short of a uniform set's has infinite stagger. `reach` is that of
    :meth:`SweepGrid.own_bias`.
    """
    places, travel, stall = grid.own_bias(sets, reach)
    stagger = np.zeros(sets.shape[0])
    for q in np.unique(places):
        at = places == q
        stagger[at] = np.sqrt(grid.cloud(int(q)).expected_square(sets[at]))
    short = travel < TRAVEL_SHARE * grid.uniform_travel[sets].mean(axis=1)
    return np.where(short, np.inf, stagger), travel, stall, places


def _fitting(grid: SweepGrid, pool: Index, limit_octaves: float) -> Index:
    """Return columns within the limit at own bias, of a large pool an even choice by part."""
    some = np.arange(pool.shape[0])
    if some.size > EXCHANGED_SETS:
        share = max(EXCHANGED_SETS // len(grid.parts), 1)
        generator = np.random.default_rng(SEED)
        mixed = generator.permutation(some)
        kept = np.zeros(some.size, np.bool_)
        for stage in range(pool.shape[1]):
            # the first few of each part's columns, part by part
            part = pool[mixed, stage]
            order = np.argsort(part, kind="stable")
            first = np.searchsorted(part[order], part[order], side="left")
            kept[mixed[order[np.arange(some.size) - first < share]]] = True
        some = np.flatnonzero(kept)
    reach = None if some.size <= EVERYWHERE_SETS else REACH
    return some[figures_at_own_bias(grid, pool[some], reach)[0] <= limit_octaves]


def _exchange(sets: Index, parts: int, wanted: int, search: _Search, so_far: Index) -> Index:
    """Return the larger of the packing so far and one that a local search finds."""
    from .packing_kernels import anneal

    if sets.shape[0] == 0 or so_far.shape[0] >= wanted:
        return so_far
    flat = sets.ravel()
    order = np.argsort(flat, kind="stable")
    start = np.searchsorted(flat[order], np.arange(parts + 1)).astype(np.int64)
    owner, best = np.full(parts, -1, np.int64), np.full(parts, -1, np.int64)
    size = anneal(
        np.ascontiguousarray(sets), start, order // sets.shape[1], np.zeros(parts, np.int64),
        owner, search.steps, search.hot, search.cold, np.array([SEED]), best, wanted,
    )  # fmt: skip
    return sets[np.unique(best[best >= 0])] if size > so_far.shape[0] else so_far


def quick_packing(sets: Index, parts: int) -> Index:
    """Return disjoint ones of these sets, many if not the most, by a short local search."""
    return _exchange(sets, parts, parts // sets.shape[1], QUICK, sets[:0])


def _branch(sets: Index, parts: int) -> tuple[Index, int]:
    """Return a large packing of these sets and an upper bound of the number of disjoint ones."""
    from scipy.optimize import Bounds, LinearConstraint, milp

    if sets.shape[0] == 0:
        return sets, 0
    result = milp(
        -np.ones(sets.shape[0]),
        constraints=LinearConstraint(_incidence(sets, parts), -np.inf, 1.0),
        integrality=np.ones(sets.shape[0], np.int64),
        bounds=Bounds(0.0, 1.0),
        options={"node_limit": BRANCH_NODES, "time_limit": SECONDS},
    )
    found = sets[:0] if result.x is None else sets[result.x > 0.5]
    bound = getattr(result, "mip_dual_bound", None)
    return found, sets.shape[0] if bound is None else math.floor(1e-6 - float(bound))


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
        figures_at_own_bias(grid, sets)
        if sets.shape[0]
        else (none, none, none, none.astype(np.int64))
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
