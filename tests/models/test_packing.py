"""Packing against exhaustive packing; its bound against whole-number programming."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import Bounds, LinearConstraint, milp
from sweepset.models.leftover import leftovers
from sweepset.models.packing import pack_sets, sets_within
from sweepset.models.relaxation import count_bound
from sweepset.models.sweepgrid import TRAVEL_SHARE, SweepGrid


def allowed_sets(grid: SweepGrid, limit: float) -> list[tuple[int, ...]]:
    """Return all sets within the limit at own bias, by trying every one."""
    sets = np.array(list(combinations(range(len(grid.parts)), grid.stages)))
    place, travel, _ = grid.own_bias(sets)
    full = travel >= TRAVEL_SHARE * grid.uniform_travel[sets].mean(axis=1)
    square = np.array(
        [
            float(grid.cloud(int(q)).expected_square(members))
            for q, members in zip(place, sets, strict=True)
        ]
    )
    return [tuple(int(i) for i in m) for m in sets[full & (np.sqrt(square) <= limit)]]


def most_disjoint(sets: list[tuple[int, ...]]) -> int:
    """Return the greatest number of disjoint sets: the first is taken or not, and so on."""
    if not sets:
        return 0
    first, rest = sets[0], sets[1:]
    apart = [one for one in rest if not set(one) & set(first)]
    with_it = 1 + most_disjoint(apart)
    if len(apart) == len(rest):
        return with_it
    return max(with_it, most_disjoint(rest))


@settings(max_examples=30)
@given(
    seed=st.integers(0, 10**6),
    stages=st.sampled_from([2, 3, 4]),
    count=st.integers(5, 11),
    share=st.floats(0.02, 0.3),
)
def test_packing_equals_exhaustive_packing(
    seed: int, stages: int, count: int, share: float, invented_tray, grid_of
) -> None:
    grid = grid_of(invented_tray(count, seed), stages, positions=24)
    sets = np.array(list(combinations(range(count), stages)))
    middle = int(np.median(grid.uniform_place))
    # a limit that a share of all sets meets, so that packings differ
    limit = float(np.quantile(np.sqrt(grid.cloud(middle).expected_square(sets)), share))
    allowed = allowed_sets(grid, limit)
    optimum = most_disjoint(allowed)
    found = pack_sets(grid, limit)
    assert len(found.sets) == optimum
    assert found.bound >= optimum
    assert all(tuple(members) in set(allowed) for members in found.sets.tolist())
    assert np.unique(found.sets).size == found.sets.size
    standing = {i for members in allowed for i in members}
    assert set(found.lonely.tolist()).isdisjoint(standing)
    left = leftovers(grid, found, limit)
    assert {one.label for one in left} == {
        grid.parts.labels[i] for i in range(count) if i not in found.sets
    }


@settings(max_examples=20)
@given(seed=st.integers(0, 10**6), limit=st.floats(0.03, 0.3))
def test_every_set_within_the_limit_is_listed_once(
    seed: int, limit: float, invented_tray, grid_of
) -> None:
    grid = grid_of(invented_tray(13, seed), 4)
    batches = [batch for batch, _ in sets_within(grid, limit)]
    listed = [tuple(sorted(m)) for batch in batches for m in batch.tolist()]
    assert len(listed) == len(set(listed))
    assert set(allowed_sets(grid, limit)) <= set(listed)


@settings(max_examples=25)
@given(seed=st.integers(0, 10**6), parts=st.integers(8, 24), count=st.integers(5, 120))
def test_bound_holds_and_is_near_the_whole_number_optimum(
    seed: int, parts: int, count: int
) -> None:
    # Outside optimum: HiGHS branch and bound over all sets, without our rows and prices.
    draw = np.random.default_rng(seed)
    sets = np.unique(
        [np.sort(draw.choice(parts, 4, replace=False)) for _ in range(count)], axis=0
    ).astype(np.int64)
    holds = np.zeros((parts, len(sets)))
    holds[sets.T, np.arange(len(sets))] = 1.0
    best = milp(
        -np.ones(len(sets)),
        constraints=LinearConstraint(holds, -np.inf, 1.0),
        integrality=np.ones(len(sets)),
        bounds=Bounds(0.0, 1.0),
    )
    optimum = round(-best.fun)
    found = count_bound(sets, parts, wanted=0)
    assert found.count >= optimum
    assert found.price.min() >= 1.0 - 1e-6
    # what the prices say of a packing of the optimum's size, on the one HiGHS found
    packed = np.round(best.x).astype(bool)
    assert (found.price[packed] <= 1.0 + found.relaxed - optimum + 1e-6).all()


def test_bound_sees_what_counting_does_not() -> None:
    # Three sets that overlap two by two: 9 parts, floor(9/4) = 2, but only one fits.
    sets = np.array([[0, 1, 2, 3], [2, 3, 4, 5], [4, 5, 0, 1]])
    assert count_bound(sets, 9, wanted=0).count == 1


def test_nothing_within_the_limit(invented_tray, grid_of) -> None:
    found = pack_sets(grid_of(invented_tray(12, 2), 4), 1e-4)
    assert (found.sets.shape, found.bound, found.within_limit) == ((0, 4), 0, 0)
    assert found.lonely.size == 12


@pytest.mark.slow
@pytest.mark.parametrize("limit", [0.05, 0.07, 0.1])
def test_gap_on_an_invented_workshop_tray(limit: float, invented_tray, grid_of, capsys) -> None:
    import time

    grid = grid_of(invented_tray(200, 1), 4, positions=96)
    start = time.perf_counter()
    found = pack_sets(grid, limit)
    with capsys.disabled():
        print(
            f"\n200 parts, limit {limit}: {len(found.sets)} sets of at most {found.bound}, "
            f"{time.perf_counter() - start:.1f} s ({found.reason})"
        )
    assert found.bound < 50
    assert found.bound - len(found.sets) <= 1
