"""An upper bound of how many disjoint sets a list of sets holds: the relaxed packing problem.

Variables are the sets, each part's row sums to at most one. To these rows come subset
rows: of the sets that hold two or more of some three parts, only one can be packed.
Columns enter by price, rows where the relaxation breaks them; HiGHS (through
scipy.optimize) solves. Any non-negative dual values bound the count once they price every
set at one or more, so the bound stays valid if the work is stopped early: the values
are then scaled up (Farley's bound).

References
----------
M. Jepsen, B. Petersen, S. Spoorendonk, D. Pisinger, "Subset-row inequalities applied to the
vehicle-routing problem with time windows", Operations Research 56 (2008) 497-511 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from .pairwise import Array, Index

COLUMNS_PER_ROUND = 1000
PRICING_ROUNDS = 40
CUT_ROUNDS = 25
CUTS_PER_ROUND = 40
# Cuts are looked for among all triples of parts, which a large tray has too many of.
MOST_PARTS_FOR_CUTS = 400
# A round of cuts that gains less than this is idle; so many in a row end the work.
LEAST_GAIN = 0.02
IDLE_ROUNDS = 4
# Rounding in the solver's values: far below the steps of whole numbers that count here.
SLACK = 1e-6


@dataclass(frozen=True)
class Bound:
    """An upper bound of the number of disjoint sets.

    Parameters
    ----------
    count : int
        No packing has more sets.
    relaxed : float
        The relaxation's optimum, `count` before rounding down.
    price : ndarray, shape (S,)
        Each set's price, 1 or more. A packing of K sets holds only sets whose price
        exceeds 1 by no more than ``relaxed - K``.
    """

    count: int
    relaxed: float
    price: Array


def count_bound(sets: Index, parts: int, wanted: int) -> Bound:
    """Return an upper bound of the number of disjoint sets among these.

    Parameters
    ----------
    sets : ndarray of int, shape (S, N)
        The sets, indices of parts; at least one.
    parts : int
        Number of parts.
    wanted : int
        Stop when the bound is down to this many.
    """
    stands = np.unique(sets)
    small = np.searchsorted(stands, sets)  # parts that stand in no set have no row
    rows = stands.size
    cuts = np.empty((0, 3), np.int64)
    chosen = np.unique(np.linspace(0, sets.shape[0] - 1, COLUMNS_PER_ROUND).astype(np.int64))
    relaxed = rows / sets.shape[1]
    price = np.ones(sets.shape[0])
    idle = 0
    for _ in range(CUT_ROUNDS):
        chosen, share, dual, least = _solve(small, rows, cuts, chosen)
        bound = float(dual.sum()) / least
        idle = idle + 1 if bound > relaxed - LEAST_GAIN else 0
        if bound < relaxed:
            relaxed, price = bound, _price(small, dual, rows, cuts) / least
        if math.floor(relaxed + SLACK) <= wanted or idle == IDLE_ROUNDS:
            break
        if rows > MOST_PARTS_FOR_CUTS:
            break
        added = _broken(small[chosen], share, rows)
        if added.shape[0] == 0:
            break
        cuts = np.concatenate([cuts, added])
    return Bound(math.floor(relaxed + SLACK), relaxed, price)


def _solve(sets: Index, rows: int, cuts: Index, chosen: Index) -> tuple[Index, Array, Array, float]:
    """Return columns used, their shares, dual values and the least price of any column."""
    from scipy.optimize import linprog

    share = np.zeros(chosen.size)
    dual = np.full(rows + cuts.shape[0], 1.0)
    for _ in range(PRICING_ROUNDS):
        result = linprog(
            -np.ones(chosen.size),
            A_ub=_matrix(sets[chosen], rows, cuts),
            b_ub=np.ones(rows + cuts.shape[0]),
            bounds=(0.0, None),
            method="highs",
        )
        share = np.asarray(result.x)
        dual = np.maximum(-np.asarray(result.ineqlin.marginals), 0.0)
        price = _price(sets, dual, rows, cuts)
        worst = np.argsort(price, kind="stable")[:COLUMNS_PER_ROUND]
        worst = worst[price[worst] < 1.0 - 1e-9]
        if worst.size == 0:
            break
        grown = np.union1d(chosen, worst)
        if grown.size == chosen.size:
            break
        chosen = grown
        share = np.zeros(0)
    least = min(float(_price(sets, dual, rows, cuts).min()), 1.0)
    if least <= 0.0:  # as good as nothing: every part at an equal price
        dual, least = np.where(np.arange(dual.size) < rows, 1.0 / sets.shape[1], 0.0), 1.0
    if share.size != chosen.size:  # stopped early: the last columns were never solved for
        share = np.zeros(chosen.size)
    return chosen, share, dual, least


def _price(sets: Index, dual: Array, rows: int, cuts: Index) -> Array:
    """Return each set's price: its parts' dual values and those of its cuts, shape (S,)."""
    price = dual[sets].sum(axis=1)
    for n, triple in enumerate(cuts):
        value = dual[rows + n]
        if value > 0.0:
            marked = np.zeros(rows, np.int64)
            marked[triple] = 1
            price += value * (marked[sets].sum(axis=1) >= 2)
    return np.asarray(price)


def _matrix(sets: Index, rows: int, cuts: Index) -> Any:
    """Return the rows of parts, then those of the cuts, against sets; sparse."""
    from scipy.sparse import csr_matrix, vstack

    count = sets.shape[1]
    column = np.repeat(np.arange(sets.shape[0]), count)
    plain = csr_matrix((np.ones(sets.size), (sets.ravel(), column)), (rows, sets.shape[0]))
    if cuts.shape[0] == 0:
        return plain.tocsc()
    held = plain[cuts[:, 0]] + plain[cuts[:, 1]] + plain[cuts[:, 2]]
    held.data = (held.data >= 2).astype(float)
    return vstack([plain, held]).tocsc()


def _broken(sets: Index, share: Array, rows: int) -> Index:
    """Return the triples of parts whose subset row is broken most, shape (cuts, 3)."""
    used = share > 1e-9
    sets, share = sets[used], share[used]
    pair = np.zeros((rows, rows))
    for k in range(sets.shape[1]):
        for m in range(sets.shape[1]):
            if k != m:
                np.add.at(pair, (sets[:, k], sets[:, m]), share)
    found: list[tuple[float, int, int, int]] = []
    for a in range(rows - 2):
        holding = (sets == a).any(axis=1)
        if not holding.any():
            continue
        three = np.zeros((rows, rows))
        for members, weight in zip(sets[holding], share[holding], strict=True):
            three[np.ix_(members, members)] += weight
        total = pair[a][:, None] + pair[a][None, :] + pair - 2.0 * three
        inner = np.triu(total[a + 1 :, a + 1 :], 1)
        for b, c in zip(*np.nonzero(inner > 1.0 + 1e-4), strict=True):
            found.append((float(inner[b, c]), a, a + 1 + int(b), a + 1 + int(c)))
    found.sort(key=lambda one: (-one[0], one[1:]))
    kept: list[tuple[int, int, int]] = []
    load = np.zeros(rows, np.int64)
    for _, a, b, c in found:
        # spread the cuts: many about the same parts say the same
        if max(load[a], load[b], load[c]) < 4:
            kept.append((a, b, c))
            load[[a, b, c]] += 1
        if len(kept) == CUTS_PER_ROUND:
            break
    return np.array(kept, dtype=np.int64).reshape(-1, 3)
