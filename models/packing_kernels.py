"""Loop of the packing's local search; see packing.py for what it is used for."""

from __future__ import annotations

import math
from typing import Any

from .jit import kernel


@kernel()
def next_random(state: Any) -> float:
    """Return the next number of a xorshift sequence, 0 to 1 (left out); advances ``state[0]``."""
    x = state[0]
    x ^= (x << 13) & 0x7FFFFFFFFFFFFFFF
    x ^= x >> 7
    x ^= (x << 17) & 0x7FFFFFFFFFFFFFFF
    state[0] = x
    share: float = (x >> 11) / 4503599627370496.0
    return share


@kernel()
def anneal(
    columns: Any,
    start: Any,
    column_of: Any,
    taking: Any,
    owner: Any,
    steps: int,
    hot: float,
    cold: float,
    random: Any,
    best: Any,
    wanted: int,
) -> int:
    """Improve a packing by exchanging sets about parts that are left over.

    Each step takes a left-over part and a column that holds it, and puts that column in
    place of those it collides with: always if at most one, else with the probability
    ``exp(-(collisions - 1)/temperature)``.

    Parameters
    ----------
    columns : (columns, stages)
        Parts of each column.
    start, column_of : (parts + 1,), (columns * stages,)
        Columns that hold part p: ``column_of[start[p]:start[p + 1]]``.
    taking, owner : (parts,)
        ``taking[:left]`` are parts left over that some column holds; ``owner`` is each
        part's column in the packing, -1 if left over.
    steps, hot, cold
        Steps and temperatures, falling evenly in the logarithm.
    random : (1,)
        State of the generator.
    best : (parts,)
        Filled with ``owner`` of the largest packing.
    wanted : int
        Stop at so many sets.

    Returns
    -------
    int
        Sets in the largest packing.
    """
    parts = owner.shape[0]
    stages = columns.shape[1]
    left = 0
    where = taking.copy()
    size = 0
    for p in range(parts):
        where[p] = -1
        best[p] = owner[p]
        if owner[p] >= 0:
            size += 1
        elif start[p + 1] > start[p]:
            taking[left] = p
            where[p] = left
            left += 1
    size //= stages
    most: int = size
    cooling = math.exp(math.log(cold / hot) / steps)
    temperature = hot
    for _ in range(steps):
        if most >= wanted or left == 0:
            break
        temperature *= cooling
        part = taking[int(next_random(random) * left)]
        held = start[part + 1] - start[part]
        column = column_of[start[part] + int(next_random(random) * held)]
        collisions = 0
        for m in range(stages):
            other = owner[columns[column, m]]
            if other < 0:
                continue
            first = True
            for n in range(m):
                if owner[columns[column, n]] == other:
                    first = False
            if first:
                collisions += 1
        if collisions > 1 and next_random(random) >= math.exp((1.0 - collisions) / temperature):
            continue
        for m in range(stages):
            other = owner[columns[column, m]]
            if other >= 0:
                size -= 1
                for n in range(stages):
                    freed = columns[other, n]
                    owner[freed] = -1
                    where[freed] = left
                    taking[left] = freed
                    left += 1
        for m in range(stages):
            used = columns[column, m]
            owner[used] = column
            left -= 1
            last = taking[left]
            taking[where[used]] = last
            where[last] = where[used]
            where[used] = -1
        size += 1
        if size > most:
            most = size
            for p in range(parts):
                best[p] = owner[p]
    return most
