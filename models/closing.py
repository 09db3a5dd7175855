"""The search for the best set, closed by a lower bound: branch and bound over trimmer positions.

For each trimmer position of the grid, every set whose expected stagger there could
be as good as the best one found is visited; it counts if that position is its own
bias. A set has one own bias, so the union over positions misses none, and the
search is closed when no position has sets left to visit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from . import closing_kernels
from .pairwise import Array, Cloud, Index
from .sweepgrid import TRAVEL_SHARE, SweepGrid, notch_targets

KEPT_SETS = 24
NODE_LIMIT = 20_000_000
# All sets within 5 % of the best stagger on the grid are kept, so that what the
# grid leaves out (fewer instants, stepped positions) cannot hide a better one.
KEPT_MARGIN = 1.05
_FOREVER = 1e300
FIRST_BATCH = 64
LAST_BATCH = 1 << 16
UNCLOSED = 2


class Walk:
    """All sets whose sum of distances is within a limit, a batch at a time.

    Parameters
    ----------
    distance : ndarray, shape (P, P)
        Distances between all parts [octaves^2].
    own_variance : ndarray, shape (P,)
        Their share from each part's own uncertainty [octaves^2].
    usable : ndarray of int
        Parts that may stand in a set, ascending.
    count : int
        Parts in a set.
    limit : float
        Greatest sum of distances; later batches may ask for less [octaves^2].
    fixed : int
        The first so many of `usable` stand in every set.
    price : ndarray, shape (P,), optional
        Prices; sets that cost more than `price_limit` are left out.
    price_limit : float
        Greatest price of a set.

    Attributes
    ----------
    nodes : int
        Partial sets looked at so far.
    unclosed : float
        Least sum of a set left out at the node limit, infinite while none is.
    """

    def __init__(
        self,
        distance: Array,
        own_variance: Array,
        usable: Index,
        count: int,
        limit: float,
        *,
        fixed: int = 0,
        price: Array | None = None,
        price_limit: float = 0.0,
    ) -> None:
        self._usable = usable
        self._distance = np.ascontiguousarray(distance[np.ix_(usable, usable)])
        self._own = np.ascontiguousarray(own_variance[usable])
        self._price = np.zeros(usable.size) if price is None else price[usable]
        self._price_limit = price_limit
        self._fixed = fixed
        self._count = count
        self._first, self._second = _pairs(self._distance, limit, count)
        self._cursor = np.zeros(2 * count + 8, np.int64)
        wide = (count + 1, usable.size)
        self._state = (
            np.zeros(wide, np.int64),
            np.zeros(wide),
            np.zeros(count + 1),
            np.zeros(count + 1),
            np.zeros(count + 1),
            np.zeros(count, np.int64),
        )
        self._batch = FIRST_BATCH
        self.unclosed = math.inf

    @property
    def nodes(self) -> int:
        """Partial sets looked at so far."""
        return int(self._cursor[2])

    def next_sets(self, limit: float, node_limit: int) -> tuple[Index, Array] | None:
        """Return the next sets (S, N) and their sums of distances (S,), or None at the end."""
        if self._cursor[3]:
            return None
        sets = np.empty((self._batch, self._count), np.int64)
        sums = np.empty(self._batch)
        found = closing_kernels.visit_sets(
            self._distance, self._own, self._first, self._second, self._fixed, self._count,
            float(limit), self._price, self._price_limit, max(node_limit, 0), self._cursor,
            *self._state, sets, sums,
        )  # fmt: skip
        self._batch = min(4 * self._batch, LAST_BATCH)
        if self._cursor[3] == UNCLOSED:
            self.unclosed = float(self._state[2][0])
        return self._usable[sets[:found]], sums[:found].copy()


def _pairs(distance: Array, limit: float, count: int) -> tuple[Index, Index]:
    """Return the pairs that can be a set's closest, ascending by distance, then place."""
    first, second = np.triu_indices(distance.shape[0], 1)
    values = distance[first, second]
    may = values * (count * (count - 1) // 2) <= limit
    first, second, values = first[may], second[may], values[may]
    order = np.argsort(values, kind="stable")
    return first[order].astype(np.int64), second[order].astype(np.int64)


@dataclass(frozen=True)
class Search:
    """What a search found, and how far it is proven.

    Parameters
    ----------
    sets : ndarray, shape (S, N)
        Indices of the best sets, best first.
    stagger_octaves : ndarray, shape (S,)
        Their expected stagger at their own bias on the grid.
    place : ndarray, shape (S,)
        Grid index of that bias.
    nodes : int
        Partial sets looked at.
    leaves : int
        Whole sets looked at.
    combinations : int
        Sets there are.
    closed : bool
        No set was left out.
    bound_octaves : float
        No set outside `sets` has a smaller expected stagger on the grid.
    full_travel : bool
        The sets' travel is the share asked for or more; if not, no set reaches that.
    """

    sets: Index
    stagger_octaves: Array
    place: Index
    nodes: int
    leaves: int
    combinations: int
    closed: bool
    bound_octaves: float
    full_travel: bool


def search_sets(
    grid: SweepGrid,
    *,
    fixed: int = 0,
    keep: int = KEPT_SETS,
    margin: float = KEPT_MARGIN,
    node_limit: int = NODE_LIMIT,
    travel_share: float = TRAVEL_SHARE,
) -> Search:
    """Return the sets of least expected stagger at their own bias.

    Parameters
    ----------
    grid : SweepGrid
        Parts over the trimmer's positions.
    fixed : int
        The first so many parts of the grid are in every set.
    keep : int
        At most so many sets are returned.
    margin : float
        Sets within this factor of the best stagger are returned too, 1 or more.
    node_limit : int
        Partial sets to look at before giving up the proof.
    travel_share : float
        Sets whose travel is a smaller share of a uniform set's are left out, unless there
        are no others.
    """
    for share in (travel_share, 0.0):
        found = _search(grid, fixed, keep, margin, node_limit, share)
        if found.sets.shape[0]:
            return found
    return found


def _search(
    grid: SweepGrid, fixed: int, keep: int, margin: float, node_limit: int, share: float
) -> Search:
    count, parts = grid.stages, len(grid.parts)
    squares = count * count
    limit = _seed(grid, fixed, share)
    limit = _FOREVER if limit is None else limit * margin**2 * (1.0 + 1e-9)
    value = np.empty(0)
    sets = np.empty((0, count), np.int64)
    place = np.empty(0, np.int64)
    nodes = leaves = 0
    unclosed = np.inf
    for q in _promising_order(grid):
        points = grid.cloud(q)
        distance = points.distances()
        usable = _usable(grid, q, distance, limit, fixed, share)
        if usable.size < count:
            continue
        walk = Walk(distance, points.own, usable, count, limit, fixed=fixed)
        while (batch := walk.next_sets(limit, node_limit - nodes)) is not None:
            found, sums = batch
            leaves += sums.size
            yes = np.zeros(sums.size, np.bool_)
            closing_kernels.at_own_bias(
                q, found, *grid.tables(), notch_targets(count), *grid.band,
                grid.uniform_travel, grid.uniform_place.astype(float), share, yes,
            )  # fmt: skip
            value = np.concatenate([value, sums[yes]])
            sets = np.concatenate([sets, found[yes]])
            place = np.concatenate([place, np.full(int(yes.sum()), q)])
            order = np.argsort(value, kind="stable")[:keep]
            value, sets, place = value[order], sets[order], place[order]
            if value.size:
                limit = min(limit, float(value[0]) * margin**2 * (1.0 + 1e-9))
            if value.size == keep:  # only what betters the last one kept is of interest
                limit = min(limit, float(value[-1]))
        nodes += walk.nodes
        unclosed = min(unclosed, walk.unclosed)
    kept = value.size
    if kept:
        within = value[:kept] <= value[0] * margin**2
        bound = value[kept - 1] if kept == keep else value[0] * margin**2
        kept = int(within.sum())
    else:
        bound = limit
    free = math.comb(parts - fixed, count - fixed)
    return Search(
        sets=np.sort(sets[:kept], axis=1),
        stagger_octaves=np.sqrt(value[:kept] / squares),
        place=place[:kept],
        nodes=int(nodes),
        leaves=int(leaves),
        combinations=free,
        closed=not np.isfinite(unclosed),
        bound_octaves=math.sqrt(min(float(bound), float(unclosed)) / squares),
        full_travel=share > 0.0,
    )


def _promising_order(grid: SweepGrid) -> list[int]:
    """Return positions, those that suit most parts first: early good sets prune the rest."""
    votes = np.bincount(grid.uniform_place, minlength=grid.position.size)
    return [int(q) for q in np.argsort(-votes, kind="stable")]


def _usable(
    grid: SweepGrid, q: int, distance: Array, limit: float, fixed: int, share: float
) -> Index:
    """Return the parts that can stand in a set with this bias.

    No notch of a set travels farther than its farthest-travelling break frequency,
    so a set of full travel needs a member that does; its other members lie within
    the limit of that one.
    """
    parts = len(grid.parts)
    if share == 0.0 or limit >= _FOREVER:
        return np.arange(parts)
    travel = grid.high[q] - grid.low[q]
    far = travel >= share * grid.uniform_travel.min()
    # For a pair (i, j) within a set of N: sum of all distances >= N/2 x theirs.
    near = (distance <= 2.0 * limit / grid.stages) & far[None, :]
    usable = far | near.any(axis=1)
    if fixed:
        if not far.any():
            return np.arange(0)
        usable[:fixed] = True
    return np.flatnonzero(usable)


def _seed(grid: SweepGrid, fixed: int, share: float) -> float | None:
    """Return the value of a good set found by gathering neighbours, or None.

    Around each part, the parts nearest to a centre that moves to their mean.
    """
    count, parts = grid.stages, len(grid.parts)
    seeds: set[tuple[int, ...]] = set()
    for q in np.unique(grid.uniform_place):
        points = grid.cloud(int(q))
        for i in np.flatnonzero(grid.uniform_place == q):
            members = _gather(points, int(i), count, fixed)
            seeds.add(tuple(sorted(members)))
    if not seeds:
        return None
    sets = np.array(sorted(seeds), dtype=np.int64)
    places, travel, _ = grid.own_bias(sets)
    full = travel >= share * grid.uniform_travel[sets].mean(axis=1)
    values = np.full(sets.shape[0], np.inf)
    for q in np.unique(places):
        at = places == q
        values[at] = grid.cloud(int(q)).expected_square(sets[at]) * count**2
    values = values[full]
    if parts < count or values.size == 0:
        return None
    return float(values.min())


def _gather(points: Cloud, start: int, count: int, fixed: int) -> list[int]:
    centre = points.points[start]
    members: list[int] = []
    weight = (count - 1) / count * points.own
    for _ in range(4):
        cost = ((points.points - centre) ** 2).sum(axis=1) + weight
        cost[:fixed] = -1.0
        found = np.argsort(cost, kind="stable")[:count].tolist()
        if found == members:
            break
        members = found
        centre = points.points[members].mean(axis=0)
    return members
