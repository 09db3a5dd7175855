"""The search against exhaustive search, and its promises."""

from __future__ import annotations

import math
import time
from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sweepset.models.closing import KEPT_MARGIN, KEPT_SETS, search_sets
from sweepset.models.sweepgrid import TRAVEL_SHARE, SweepGrid


def exhaustive(grid: SweepGrid, fixed: int) -> tuple[np.ndarray, np.ndarray]:
    """Return all sets and their staggers at own bias; inf for the second class if any is first."""
    sets = np.array(list(combinations(range(len(grid.parts)), grid.stages)))
    sets = sets[(sets[:, :fixed] == np.arange(fixed)).all(axis=1)]
    place, travel, _ = grid.own_bias(sets)
    stagger = np.zeros(len(sets))
    for q in np.unique(place):
        at = place == q
        # straight from the definition: mean over time of the variance over the stages,
        # plus the trace of the covariance seen through the Jacobian
        points = grid.cloud(int(q))
        for n in np.flatnonzero(at):
            members = sets[n]
            level = grid.level[q][members]
            square = ((level - level.mean(axis=0)) ** 2).mean()
            part = grid.parts.take(members)
            slope = np.stack([-grid.slope[q][members], grid.per_ln_beta[q][members]], axis=-1)
            count, times = level.shape
            rows = np.zeros((count, times, count, 2))
            rows[np.arange(count), :, np.arange(count), :] = slope
            rows = (rows - rows.mean(axis=0)).reshape(count * times, 2 * count)
            variance = ((rows @ part.covariance()) * rows).sum() / (count * times)
            stagger[n] = math.sqrt(square + variance)
        assert np.allclose(np.sqrt(points.expected_square(sets[at])), stagger[at], atol=1e-9)
    full = travel >= TRAVEL_SHARE * grid.uniform_travel[sets].mean(axis=1)
    return sets, np.where(full | ~full.any(), stagger, np.inf)


@settings(max_examples=40)
@given(
    seed=st.integers(0, 10**6),
    stages=st.sampled_from([2, 3, 4, 4, 5, 6]),
    spare=st.integers(0, 10),
    doubt=st.sampled_from([(0.0, 0.0), (0.002, 0.01), (0.03, 0.15)]),
    fixed=st.integers(0, 3),
)
def test_selection_equals_exhaustive_search(
    seed: int,
    stages: int,
    spare: int,
    doubt: tuple[float, float],
    fixed: int,
    invented_tray,
    grid_of,
) -> None:
    # every tray up to 16 parts; above four stages fewer spares, to keep the run short
    count = stages + min(spare, 16 - stages, 10 if stages <= 4 else 5)
    parts = invented_tray(count, seed, cutoff_u=doubt[0], ln_beta_u=doubt[1])
    grid = grid_of(parts, stages, positions=24)
    fixed = min(fixed, stages - 1)
    sets, stagger = exhaustive(grid, fixed)
    found = search_sets(grid, fixed=fixed)
    assert found.closed
    assert found.combinations == len(sets)
    assert found.stagger_octaves[0] == pytest.approx(stagger.min(), rel=1e-9)
    # and every set within the margin is kept, until the list is full
    within = np.sort(stagger[stagger <= KEPT_MARGIN * stagger.min() * (1 - 1e-9)])[:KEPT_SETS]
    assert found.stagger_octaves[: within.size] == pytest.approx(within, rel=1e-9)
    assert found.bound_octaves >= found.stagger_octaves[0] * (1 - 1e-9)


def test_equal_parts_are_counted_once_each(invented_tray, grid_of) -> None:
    # Ties in every distance: each combination has one path all the same.
    parts = invented_tray(1, 1).take([0] * 7)
    found = search_sets(grid_of(parts, 4), keep=64)
    assert found.closed
    assert len({tuple(members) for members in found.sets}) == math.comb(7, 4) == len(found.sets)


def test_node_limit_leaves_an_honest_bound(invented_tray, grid_of) -> None:
    parts = invented_tray(40, 4, cutoff_u=0.03, ln_beta_u=0.15)
    grid = grid_of(parts, 4)
    whole = search_sets(grid)
    cut = search_sets(grid, node_limit=20)
    assert whole.closed
    assert not cut.closed
    assert cut.bound_octaves <= whole.stagger_octaves[0] * (1 + 1e-9)


def test_order_of_the_tray_does_not_matter(invented_tray, grid_of) -> None:
    parts = invented_tray(30, 6)
    shuffled = np.random.default_rng(1).permutation(30)
    first = search_sets(grid_of(parts, 4))
    second = search_sets(grid_of(parts.take(shuffled), 4))
    names = {parts.labels[i] for i in first.sets[0]}
    assert names == {parts.take(shuffled).labels[i] for i in second.sets[0]}


@pytest.mark.slow
@pytest.mark.parametrize(("count", "combinations"), [(200, 64_684_950), (1000, 41_417_124_750)])
def test_time_for_a_workshop_tray(
    count: int, combinations: int, invented_tray, grid_of, capsys
) -> None:
    search_sets(grid_of(invented_tray(8, 1), 4))  # compile
    start = time.perf_counter()
    found = search_sets(grid_of(invented_tray(count, 1), 4, positions=96))
    taken = time.perf_counter() - start
    with capsys.disabled():
        print(f"\n{count} parts in fours, closed: {taken:.1f} s, {found.nodes} nodes")
    assert found.combinations == combinations
    assert found.closed
