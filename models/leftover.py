"""Why a part is left over when the disjoint sets of a tray have been chosen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .packing import Packing
from .pairwise import Array
from .sweepgrid import SweepGrid


@dataclass(frozen=True)
class Leftover:
    """A part in no chosen set.

    Parameters
    ----------
    label : str
        The part.
    partners : tuple of str
        Its nearest neighbours at the bias that suits it, enough for a set.
    stagger_octaves : float
        Expected stagger of the set they would make, at that set's own bias [octaves].
    lonely : bool
        No set within the limit holds it at all; otherwise its partners are used.
    reason : str
        The same in a sentence.
    """

    label: str
    partners: tuple[str, ...]
    stagger_octaves: float
    lonely: bool
    reason: str


def leftovers(grid: SweepGrid, packing: Packing, limit_octaves: float) -> tuple[Leftover, ...]:
    """Return every part in no packed set, with the reason.

    Parameters
    ----------
    grid : SweepGrid
        What was packed.
    packing : Packing
        The disjoint sets.
    limit_octaves : float
        The limit they were packed under [octaves].
    """
    labels = grid.parts.labels
    chosen = {int(i): n + 1 for n, members in enumerate(packing.sets) for i in members}
    lonely = {int(i) for i in packing.lonely}
    nearest: dict[int, Array] = {}
    spare = np.array([i for i in range(len(labels)) if i not in chosen], dtype=np.int64)
    for q in np.unique(grid.uniform_place[spare]):
        between = grid.cloud(int(q)).distances()
        nearest |= {int(i): between[i] for i in spare[grid.uniform_place[spare] == q]}
    found = []
    for i in (int(one) for one in spare):
        distance = nearest[i]
        distance[i] = -1.0
        members = np.argsort(distance, kind="stable")[: grid.stages]
        place, _, _ = grid.own_bias(members[None, :])
        square = grid.cloud(int(place[0])).expected_square(members[None, :])
        stagger = float(np.sqrt(square[0]))
        partners = tuple(labels[n] for n in members if n != i)
        beside = f"with its nearest, {', '.join(partners)}, the stagger is {stagger:.3f} octave"
        if i in lonely:
            reason = f"stands in no set within {limit_octaves:g} octave: {beside}"
        else:
            users = sorted({chosen[int(n)] for n in members if int(n) in chosen})
            where = f"; of these, set {', '.join(map(str, users))} has some" if users else ""
            reason = f"its partners are used or left over without enough others: {beside}{where}"
        found.append(Leftover(labels[i], partners, stagger, i in lonely, reason))
    return tuple(found)
