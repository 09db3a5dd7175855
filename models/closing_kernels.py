"""Loops of the search over sets: own bias on a grid of trimmer positions, and branch and bound.

IEEE arithmetic with contraction (see jit.py); the order of the sums is fixed, so
that a set's figures do not depend on the path that led to it.
"""

from __future__ import annotations

import math
from typing import Any

from .jit import kernel


@kernel()
def notch_octave(level: Any, members: Any, count: int, target: float) -> float:
    """Return log2 of the frequency at which the stages' arctangents sum to `target`."""
    low = level[members[0]]
    high = low
    mean = 0.0
    for m in range(count):
        value = level[members[m]]
        low = min(low, value)
        high = max(high, value)
        mean += value
    shift = math.log2(math.tan(target / count))
    y = mean / count + shift
    for _ in range(6):
        total = -target
        slope = 0.0
        for m in range(count):
            ratio = 2.0 ** (y - level[members[m]])
            total += math.atan(ratio)
            slope += ratio / (1.0 + ratio * ratio)
        step = total / (slope * 0.6931471805599453)
        y = min(max(y - step, low + shift), high + shift)
        if abs(step) < 1e-7:
            break
    return y


@kernel()
def travel_and_stall(
    level: Any,
    slope: Any,
    low: Any,
    high: Any,
    swing: float,
    members: Any,
    count: int,
    targets: Any,
    band_low: float,
    band_high: float,
) -> tuple[float, float]:
    """Return travel [octaves] and stall of a set at one trimmer position."""
    travel = 1e300
    for k in range(targets.shape[0]):
        bottom = notch_octave(low, members, count, targets[k])
        top = notch_octave(high, members, count, targets[k])
        if top > band_low and bottom < band_high:  # else never heard
            travel = min(travel, min(top, band_high) - max(bottom, band_low))
    if travel > 1e299:
        travel = 0.0
    times = level.shape[1]
    least = 1e300
    most = -1e300
    for t in range(times):
        mean = 0.0
        for m in range(count):
            mean += level[members[m], t]
        least = min(least, mean)
        most = max(most, mean)
    matters = 0.25 * (most - least) / count
    stopped = 0
    for t in range(times):
        largest = 0.0
        smallest = 1e300
        for m in range(count):
            value = slope[members[m], t]
            largest = max(largest, value)
            smallest = min(smallest, value)
        if smallest < 0.25 * largest and largest * swing > matters:
            stopped += 1
    return travel, stopped / times


@kernel()
def own_position(
    level: Any,
    slope: Any,
    low: Any,
    high: Any,
    swing: Any,
    members: Any,
    count: int,
    targets: Any,
    band_low: float,
    band_high: float,
    start: int,
    stop: int,
) -> tuple[int, float, float]:
    """Return place, travel and stall of the best grid position from start to stop (left out)."""
    best = -1.0
    place = start
    best_travel = 0.0
    best_stall = 0.0
    for q in range(start, stop):
        travel, stall = travel_and_stall(
            level[q],
            slope[q],
            low[q],
            high[q],
            swing[q],
            members,
            count,
            targets,
            band_low,
            band_high,
        )
        objective = travel * (1.0 - stall)
        if objective > best:
            best = objective
            place = q
            best_travel = travel
            best_stall = stall
    return place, best_travel, best_stall


@kernel()
def own_positions(
    level: Any,
    slope: Any,
    low: Any,
    high: Any,
    swing: Any,
    sets: Any,
    targets: Any,
    band_low: float,
    band_high: float,
    starts: Any,
    stops: Any,
    places: Any,
    travels: Any,
    stalls: Any,
) -> None:
    """Fill place, travel and stall (sets,) of many sets, each looked for from start to stop."""
    for n in range(sets.shape[0]):
        places[n], travels[n], stalls[n] = own_position(
            level,
            slope,
            low,
            high,
            swing,
            sets[n],
            sets.shape[1],
            targets,
            band_low,
            band_high,
            starts[n],
            stops[n],
        )


@kernel()
def after(distance: Any, i: int, j: int, pair_distance: float, pair_key: int) -> bool:
    """Return whether pair (i, j) comes after the given pair, by distance, then by place."""
    value = distance[i, j]
    if value != pair_distance:
        return bool(value > pair_distance)
    return bool(min(i, j) * distance.shape[0] + max(i, j) > pair_key)


@kernel()
def sort_by(keys: Any, items: Any, start: int, stop: int) -> None:
    """Sort keys[start:stop] ascending, carrying items along (Shell's method, gaps 3 n + 1)."""
    gap = 1
    while gap < (stop - start) // 3:
        gap = 3 * gap + 1
    while gap >= 1:
        for n in range(start + gap, stop):
            key = keys[n]
            item = items[n]
            m = n - gap
            while m >= start and keys[m] > key:
                keys[m + gap] = keys[m]
                items[m + gap] = items[m]
                m -= gap
            keys[m + gap] = key
            items[m + gap] = item
        gap //= 3


@kernel()
def least_whole(pair_sum: float, own_sum: float, size: int, count: int, least_own: float) -> float:
    """Return the least sum of distances over a whole set that holds these `size` members.

    A sum over pairs is ``size`` times the squares about the members' own centre
    plus ``size - 1`` times their own variances; about the whole set's centre the
    squares cannot be less.
    """
    square = (pair_sum - (size - 1) * own_sum) / size
    return count * square + (count - 1) * (own_sum + (count - size) * least_own)


@kernel()
def visit_sets(
    distance: Any,
    own_variance: Any,
    pair_first: Any,
    pair_second: Any,
    fixed_count: int,
    count: int,
    limit: float,
    price: Any,
    price_limit: float,
    node_limit: int,
    cursor: Any,
    items: Any,
    keys: Any,
    sums: Any,
    owns: Any,
    prices: Any,
    members: Any,
    found_sets: Any,
    found_sums: Any,
) -> int:
    """Fill `found_sets` with the next sets whose sum of distances is at most `limit`.

    Sets grow from their closest pair, taken in ascending distance; all other pairs
    of the set then come after it, which gives each set one path and bounds what
    is still to be added. With `fixed_count` parts fixed (the first of the list),
    sets grow from those. Sets whose prices add up to more than `price_limit` are
    left out. The walk stops when `found_sets` is full and goes on at the next call,
    whose limits may be lower; its state is in ``cursor`` (root, depth, nodes, end)
    and the arrays after it. ``cursor[3]`` becomes 1 at the end of the walk, 2 at the
    node limit; ``sums[0]`` then holds the least sum an unvisited set can have.

    Returns
    -------
    int
        Sets found, up to ``found_sets.shape[0]``.
    """
    parts = distance.shape[0]
    pairs_in_set = count * (count - 1) // 2
    sizes = cursor[4 : 4 + count + 1]
    at = cursor[5 + count : 5 + count + count + 1]
    least_own = own_variance.min()
    least_price = price.min()
    root = fixed_count if fixed_count > 0 else 2
    roots = 1 if fixed_count > 0 else pair_first.shape[0]
    found = 0
    key = -1
    closest = 0.0
    if fixed_count > 0:
        closest = 1e300
        for m in range(parts):
            for n in range(m):
                closest = min(closest, distance[m, n])
    while True:
        depth = cursor[1]
        if depth < root:
            # ---- the next root
            pair = cursor[0]
            if pair >= roots:
                cursor[3] = 1
                return found
            cursor[0] = pair + 1
            if fixed_count == 0:
                members[0] = pair_first[pair]
                members[1] = pair_second[pair]
                closest = distance[members[0], members[1]]
                key = min(members[0], members[1]) * parts + max(members[0], members[1])
                if closest * pairs_in_set > limit:
                    cursor[3] = 1
                    return found
            else:
                for m in range(fixed_count):
                    members[m] = m
            root_sum = 0.0
            root_own = 0.0
            root_price = 0.0
            for m in range(root):
                root_own += own_variance[members[m]]
                root_price += price[members[m]]
                for n in range(m):
                    root_sum += distance[members[m], members[n]]
            least = least_whole(root_sum, root_own, root, count, least_own)
            if least > limit:
                continue
            if cursor[2] > node_limit:
                cursor[3] = 2
                sums[0] = max(least, closest * pairs_in_set)
                return found
            left = count - root
            if root_price + left * least_price > price_limit:
                continue
            if left == 0:
                for m in range(count):
                    found_sets[found, m] = members[m]
                found_sums[found] = root_sum
                found += 1
                if found == found_sets.shape[0]:
                    return found
                continue
            size = 0
            rest = (left - 1) * root * closest + (left * (left - 1) // 2) * closest
            rest_price = root_price + (left - 1) * least_price
            for k in range(parts):
                if rest_price + price[k] > price_limit:
                    continue
                grown = 0.0
                usable = True
                for m in range(root):
                    if members[m] == k or not after(distance, members[m], k, closest, key):
                        usable = False
                        break
                    grown += distance[members[m], k]
                if not usable or root_sum + grown + rest > limit:
                    continue
                items[root, size] = k
                keys[root, size] = grown
                size += 1
            if size < left:
                continue
            sort_by(keys[root], items[root], 0, size)
            sizes[root] = size
            at[root] = 0
            sums[root] = root_sum
            owns[root] = root_own
            prices[root] = root_price
            cursor[1] = root
            continue
        if fixed_count == 0:
            closest = distance[members[0], members[1]]
            key = min(members[0], members[1]) * parts + max(members[0], members[1])
        # ---- one step deeper, sideways or back
        remaining = count - depth
        n = at[depth]
        if n + remaining > sizes[depth]:
            cursor[1] = depth - 1
            continue
        add = keys[depth, n]
        bound = sums[depth] + remaining * add + (remaining * (remaining - 1) // 2) * closest
        if bound > limit:
            cursor[1] = depth - 1
            continue
        at[depth] = n + 1
        cursor[2] += 1
        if fixed_count > 0 and cursor[2] > node_limit:
            cursor[3] = 2
            sums[0] = least_whole(sums[root], owns[root], root, count, least_own)
            return found
        k = items[depth, n]
        members[depth] = k
        total = sums[depth] + add
        total_price = prices[depth] + price[k]
        if remaining == 1:
            if total_price <= price_limit:
                for m in range(count):
                    found_sets[found, m] = members[m]
                found_sums[found] = total
                found += 1
                if found == found_sets.shape[0]:
                    return found
            continue
        own_total = owns[depth] + own_variance[k]
        if least_whole(total, own_total, depth + 1, count, least_own) > limit:
            continue
        left = remaining - 1
        if total_price + left * least_price > price_limit:
            continue
        # the others of the set bring at least as many distances, each at least the closest
        rest = (left - 1) * (depth + 1) * closest + (left * (left - 1) // 2) * closest
        rest_price = total_price + (left - 1) * least_price
        size = 0
        for m in range(n + 1, sizes[depth]):
            other = items[depth, m]
            grown = keys[depth, m] + distance[k, other]
            if total + grown + rest > limit or rest_price + price[other] > price_limit:
                continue
            own_there = own_total + own_variance[other]
            if least_whole(total + grown, own_there, depth + 2, count, least_own) > limit:
                continue
            if after(distance, k, other, closest, key):
                items[depth + 1, size] = other
                keys[depth + 1, size] = grown
                size += 1
        if size >= left:
            sort_by(keys[depth + 1], items[depth + 1], 0, size)
            sizes[depth + 1] = size
            at[depth + 1] = 0
            sums[depth + 1] = total
            owns[depth + 1] = own_total
            prices[depth + 1] = total_price
            cursor[1] = depth + 1


@kernel()
def at_own_bias(
    place: int,
    sets: Any,
    level: Any,
    slope: Any,
    low: Any,
    high: Any,
    swing: Any,
    targets: Any,
    band_low: float,
    band_high: float,
    uniform_travel: Any,
    uniform_place: Any,
    travel_share: float,
    yes: Any,
) -> None:
    """Fill `yes` (sets,): full travel at this grid position, and it is the set's own bias."""
    count = sets.shape[1]
    for s in range(sets.shape[0]):
        members = sets[s]
        yes[s] = False
        ideal = 0.0
        middle = 0.0
        for m in range(count):
            ideal += uniform_travel[members[m]]
            middle += uniform_place[members[m]]
        travel, stall = travel_and_stall(
            level[place],
            slope[place],
            low[place],
            high[place],
            swing[place],
            members,
            count,
            targets,
            band_low,
            band_high,
        )
        if travel * count < travel_share * ideal:
            continue
        # a quick refusal: the bias of the mean part's uniform set is better
        probe = int(middle / count + 0.5)
        there, lost = travel_and_stall(
            level[probe],
            slope[probe],
            low[probe],
            high[probe],
            swing[probe],
            members,
            count,
            targets,
            band_low,
            band_high,
        )
        if there * (1.0 - lost) > travel * (1.0 - stall):
            continue
        own, _, _ = own_position(
            level,
            slope,
            low,
            high,
            swing,
            members,
            count,
            targets,
            band_low,
            band_high,
            0,
            level.shape[0],
        )
        yes[s] = own == place
