"""Which parts go into which stages: the questions asked of a tray, and their answers.

Sets are ranked by expected stagger over the circuit's sweep at the set's own bias;
sets whose travel is under 90 % of a uniform set's rank after the others. The search
(``closing``) is exact on a grid of trimmer positions; the sets it leaves, all within a
few per cent of the best, are then biased and judged by the full response (``bias``).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from .closing import KEPT_MARGIN, Search, search_sets
from .errors import InputError, near_names
from .expected import expected_stagger
from .leftover import Leftover, leftovers
from .ordering import best_order
from .packing import check_limit, pack_sets
from .pairwise import parts_of
from .sweepgrid import TRAVEL_SHARE, SweepGrid, build_grid

if TYPE_CHECKING:
    from .bias import Bias
    from .circuit import Circuit
    from .estimate import TrayEstimate
    from .jfet import Jfet
    from .quantity import Setting
    from .tray import Tray

FINALISTS = 4
MOST_FINALISTS = 12
# How far the grid may be off in a set's travel share. Badly matched sets stall, and their
# bias is a sharp one of several; 0.06 was seen on the shipped bench tray.
SHARE_DOUBT = 0.1
# A search at mean shunt only points the way where shunts differ; look farther around.
UNEQUAL_MARGIN = 1.5
# The poor set takes parts at evenly spaced ranks between these. Wider apart, the only bias
# left is one that hardly sweeps (travel of a quarter on the shipped trays).
POOR_RANKS = (0.2, 0.8)


@dataclass(frozen=True)
class SetFigures:
    """A set in stage order at its own bias.

    Parameters
    ----------
    labels : tuple of str
        Parts, stage 1 first.
    jfets : tuple of Jfet
        Their estimates.
    bias : Bias
        Trimmer position and what the set does there.
    expected_stagger_octaves : float
        Root of the expected squared stagger under the readings' covariance [octaves].
    travel_share : float
        Travel over that of a uniform set of the mean part at its own bias.
    order_matters : bool
        Another order of the same parts would behave differently.
    """

    labels: tuple[str, ...]
    jfets: tuple[Jfet, ...]
    bias: Bias
    expected_stagger_octaves: float
    travel_share: float
    order_matters: bool

    @property
    def full_travel(self) -> bool:
        """Whether travel is 90 % of a uniform set's or more."""
        return self.travel_share >= TRAVEL_SHARE

    @property
    def rank(self) -> tuple[bool, float]:
        """Sort key: full travel first, then expected stagger."""
        return (not self.full_travel, self.expected_stagger_octaves)


@dataclass(frozen=True)
class Choice:
    """The best set and how far that is proven.

    Parameters
    ----------
    best : SetFigures
        The set.
    next_best : tuple of SetFigures
        Other finalists, in rank order; they may share parts with the best.
    search : Search
        The search on the grid.
    proven : bool
        The search closed, its distances are exact on this circuit (equal shunts), and no
        set left out reaches the best one even if the grid is as far off as it ever was
        among the judged sets.
    bound_octaves : float
        Least expected stagger of any set not judged by the full response: the grid's, less
        that error.
    grid_error : float
        Greatest difference between grid and full response among the judged sets'
        expected staggers, as a fraction.
    """

    best: SetFigures
    next_best: tuple[SetFigures, ...]
    search: Search
    proven: bool
    bound_octaves: float
    grid_error: float

    @property
    def gap(self) -> float:
        """How far below the best the bound lies, as a fraction of the best; 0 when closed."""
        best = self.best.expected_stagger_octaves
        return max(0.0, 1.0 - self.bound_octaves / best) if best > 0.0 else 0.0


def order_matters(circuit: Circuit) -> bool:
    """Return whether the order of parts changes what a set does in this circuit."""
    first = circuit.stages[0]
    alike = all(
        math.isclose(stage.capacitor_f, first.capacitor_f)
        and math.isclose(stage.shunt_ohm, first.shunt_ohm)
        and math.isclose(stage.arm_out_ohm, stage.arm_in_ohm)
        for stage in circuit.stages
    )
    return circuit.feedback is not None or not alike


def equal_shunts(circuit: Circuit) -> bool:
    """Return whether all stages have the same shunt resistor."""
    first = circuit.stages[0].shunt_ohm
    return all(math.isclose(stage.shunt_ohm, first) for stage in circuit.stages)


def set_figures(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    labels: Sequence[str],
    *,
    ordered: bool = False,
    fixed_stages: Mapping[int, str] | None = None,
) -> SetFigures:
    """Return what a set does at its own bias.

    Parameters
    ----------
    estimate : TrayEstimate
        The tray's parameters.
    circuit : Circuit
        The circuit.
    rate : Setting
        The rate.
    labels : sequence of str
        One part a stage.
    ordered : bool
        Keep the order given; otherwise the best order is found where order matters,
        and elsewhere the parts stand in the tray's order.
    fixed_stages : mapping of int to str, optional
        Stages (from 0) whose part must stay.
    """
    from .bias import solve_bias

    matters = order_matters(circuit)
    names = list(labels)
    if not ordered:
        place = {label: n for n, label in enumerate(estimate.labels)}
        held = dict(fixed_stages or {})
        free = sorted((name for name in names if name not in held.values()), key=place.__getitem__)
        names = [held[n] if n in held else free.pop(0) for n in range(len(names))]
        if matters:
            first = solve_bias(circuit, [estimate.jfet(name) for name in names], rate)
            order = best_order(
                circuit, [estimate.jfet(name) for name in names], first.bus, frozenset(held)
            )
            names = [names[n] for n in order]
    jfets = tuple(estimate.jfet(name) for name in names)
    bias = solve_bias(circuit, list(jfets), rate)
    expected = expected_stagger(parts_of(estimate, names), circuit, bias.bus)
    return SetFigures(
        labels=tuple(names),
        jfets=jfets,
        bias=bias,
        expected_stagger_octaves=expected,
        travel_share=bias.travel_octaves / max(bias.uniform_objective, 1e-9),
        order_matters=matters,
    )


def best_set(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    *,
    labels: Sequence[str] | None = None,
    finalists: int = FINALISTS,
) -> Choice:
    """Return the set of least expected stagger at its own bias.

    Parameters
    ----------
    estimate : TrayEstimate
        The tray's parameters.
    circuit : Circuit
        The circuit.
    rate : Setting
        The rate.
    labels : sequence of str, optional
        Choose from these parts only.
    finalists : int
        Sets to judge by the full response.

    Raises
    ------
    InputError
        If there are fewer parts than stages.
    """
    wanted = tuple(estimate.labels if labels is None else labels)
    _enough(wanted, circuit)
    grid = build_grid(parts_of(estimate, wanted), circuit, rate)
    return _judge(estimate, circuit, rate, grid, {}, finalists)


def complete_set(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    fixed_stages: Mapping[int, str],
    *,
    labels: Sequence[str] | None = None,
    finalists: int = FINALISTS,
) -> Choice:
    """Return the best completion of a partly fixed set.

    Parameters
    ----------
    estimate : TrayEstimate
        Parameters of the fixed and of the free parts; an unknown soldered part stands
        in it with the type assumption's mean and spread.
    circuit, rate
        As for :func:`best_set`.
    fixed_stages : mapping of int to str
        Stage (from 0) to the part that stays there.
    labels : sequence of str, optional
        Free parts to choose from; all others of the estimate when left out.
    finalists : int
        Sets to judge by the full response.

    Raises
    ------
    InputError
        If a stage or a part does not exist, a part stands twice, or parts are missing.
    """
    faults = []
    known = set(estimate.labels)
    for stage, label in fixed_stages.items():
        if not 0 <= stage < circuit.stage_count:
            faults.append(
                f"stage {stage + 1} does not exist; {circuit.name} has stages 1 to "
                f"{circuit.stage_count}"
            )
        if label not in known:
            faults.append(f"no part {label!r} on the tray{near_names(label, known)}")
    held = list(fixed_stages.values())
    faults += [
        f"part {label!r} stands in more than one stage; a part can be soldered in once"
        for label in sorted(set(held))
        if held.count(label) > 1
    ]
    if faults:
        raise InputError(faults)
    pool = estimate.labels if labels is None else labels
    free = [label for label in pool if label not in set(held)]
    _enough((*held, *free), circuit)
    grid = build_grid(parts_of(estimate, (*held, *free)), circuit, rate)
    return _judge(estimate, circuit, rate, grid, dict(fixed_stages), finalists)


@dataclass(frozen=True)
class PackedSet:
    """One of several disjoint sets, as the search's grid sees it.

    Parameters
    ----------
    labels : tuple of str
        Parts in stage order.
    position : float
        Trimmer position, to the grid's step.
    expected_stagger_octaves, travel_octaves, stall : float
        At that position; travel by the notch condition without feedback.
    """

    labels: tuple[str, ...]
    position: float
    expected_stagger_octaves: float
    travel_octaves: float
    stall: float


@dataclass(frozen=True)
class DisjointSets:
    """As many disjoint sets as were found under a limit.

    Parameters
    ----------
    sets : tuple of PackedSet
        The set of least expected stagger first.
    bound : int
        No choice has more sets under the limit.
    reason : str
        What the bound rests on.
    by_count : int
        Parts divided by stages, the bound that says nothing about the parts.
    within_limit : int or None
        Sets within the limit, overlapping ones counted; None if not all were visited.
    leftovers : tuple of Leftover
        Parts in no set, each with the reason.
    position_step : float
        Step of the grid of trimmer positions.
    order_matters : bool
        Another order of the same parts would behave differently.
    """

    sets: tuple[PackedSet, ...]
    bound: int
    reason: str
    by_count: int
    within_limit: int | None
    leftovers: tuple[Leftover, ...]
    position_step: float
    order_matters: bool


def disjoint_sets(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    limit_octaves: float,
    *,
    labels: Sequence[str] | None = None,
) -> DisjointSets:
    """Return as many disjoint sets within a stagger limit as can be found, and their bound.

    Parameters
    ----------
    estimate, circuit, rate, labels
        As for :func:`best_set`.
    limit_octaves : float
        Greatest expected stagger of a set, more than 0 [octaves].

    Raises
    ------
    InputError
        If the limit is not positive, there are fewer parts than stages, or the
        circuit's shunts differ, for which the search's distances are not exact.
    """
    from .gatebus import solve_bus

    check_limit(limit_octaves)
    if not equal_shunts(circuit):
        raise InputError(
            f"{circuit.name} has stages with different shunts; disjoint sets are chosen for equal "
            "shunts only. Choose sets one at a time, leaving out the parts already taken"
        )
    wanted = tuple(estimate.labels if labels is None else labels)
    _enough(wanted, circuit)
    grid = build_grid(parts_of(estimate, wanted), circuit, rate)
    packing = pack_sets(grid, limit_octaves)
    matters = order_matters(circuit)
    sets = []
    for n, members in enumerate(packing.sets):
        position = float(grid.position[packing.place[n]])
        names = [wanted[i] for i in members]
        if matters:
            jfets = [estimate.jfet(name) for name in names]
            names = [
                names[i] for i in best_order(circuit, jfets, solve_bus(circuit, position, rate))
            ]
        sets.append(
            PackedSet(
                labels=tuple(names),
                position=position,
                expected_stagger_octaves=float(packing.stagger_octaves[n]),
                travel_octaves=float(packing.travel_octaves[n]),
                stall=float(packing.stall[n]),
            )
        )
    return DisjointSets(
        sets=tuple(sets),
        bound=packing.bound,
        reason=packing.reason,
        by_count=len(wanted) // circuit.stage_count,
        within_limit=packing.within_limit,
        leftovers=leftovers(grid, packing, limit_octaves),
        position_step=float(grid.position[1] - grid.position[0]),
        order_matters=matters,
    )


def poor_set(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    *,
    avoid: Sequence[str] = (),
    labels: Sequence[str] | None = None,
) -> SetFigures:
    """Return a deliberately poor set for comparison: one part from each region of the tray.

    The rule: order the parts by their mean break frequency over the sweep, at the
    trimmer position that suits most of them, and take those at evenly spaced ranks
    from 20 % to 80 %. It is what a careless hand takes from the tray; the freaks at
    its ends stay out.

    Parameters
    ----------
    estimate, circuit, rate, labels
        As for :func:`best_set`.
    avoid : sequence of str
        Parts not to use, such as those of the set to compare with.

    Raises
    ------
    InputError
        If too few parts are left.
    """
    pool = estimate.labels if labels is None else labels
    wanted = tuple(label for label in pool if label not in set(avoid))
    _enough(wanted, circuit)
    grid = build_grid(parts_of(estimate, wanted), circuit, rate)
    place = int(np.bincount(grid.uniform_place).argmax())
    order = np.argsort(grid.level[place].mean(axis=1), kind="stable")
    low, high = (share * (len(wanted) - 1) for share in POOR_RANKS)
    ranks = np.rint(np.linspace(low, high, circuit.stage_count)).astype(int)
    if np.unique(ranks).size < ranks.size:  # hardly more parts than stages
        ranks = np.rint(np.linspace(0, len(wanted) - 1, circuit.stage_count)).astype(int)
    return set_figures(estimate, circuit, rate, [wanted[order[rank]] for rank in ranks])


def with_unknowns(tray: Tray, stages: Sequence[int], type_name: str = "") -> Tray:
    """Return the tray with unknown soldered parts added, named ``?1`` for stage 1 and so on.

    Parameters
    ----------
    tray : Tray
        The measured parts.
    stages : sequence of int
        Stages (from 0) that hold an unknown part.
    type_name : str
        What they are said to be; the type assumption gives their mean and spread.
    """
    from .tray import TrayPart

    added = tuple(
        TrayPart(label=f"?{stage + 1}", row=0, readings={}, type_name=type_name, used="soldered")
        for stage in stages
    )
    return replace(tray, parts=tray.parts + added)


def _judge(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    grid: SweepGrid,
    fixed_stages: dict[int, str],
    finalists: int,
) -> Choice:
    """Search the grid, bias the finalists exactly, and put them in rank order."""
    equal = equal_shunts(circuit)
    margin = KEPT_MARGIN if equal else UNEQUAL_MARGIN
    names = grid.parts.labels
    judged: dict[tuple[int, ...], SetFigures] = {}
    off = 0.0

    def judge(search: Search) -> float:
        """Bias the search's best sets; return the grid's stagger of the first not judged."""
        nonlocal off
        for members, stagger in zip(search.sets, search.stagger_octaves, strict=True):
            full = [one.expected_stagger_octaves for one in judged.values() if one.full_travel]
            enough = len(judged) >= finalists and full and stagger * (1.0 - off) > min(full)
            if enough or len(judged) >= MOST_FINALISTS:
                return float(stagger)
            key = tuple(int(i) for i in members)
            if key not in judged:
                judged[key] = set_figures(
                    estimate, circuit, rate, [names[i] for i in key], fixed_stages=fixed_stages
                )
            off = max(off, abs(judged[key].expected_stagger_octaves / float(stagger) - 1.0))
        return search.bound_octaves

    fixed = len(fixed_stages)
    # First wide, so that no set is lost for what the grid makes of its travel.
    search = search_sets(grid, fixed=fixed, margin=margin, travel_share=TRAVEL_SHARE - SHARE_DOUBT)
    bound = judge(search)
    if search.full_travel and not any(one.full_travel for one in judged.values()):
        search = search_sets(grid, fixed=fixed, margin=margin)
        bound = judge(search)
    ranked = sorted(judged.values(), key=lambda one: one.rank)
    safe = bound * (1.0 - off)
    return Choice(
        best=ranked[0],
        next_best=tuple(ranked[1:]),
        search=search,
        proven=search.closed and equal and safe >= ranked[0].expected_stagger_octaves,
        bound_octaves=safe,
        grid_error=off,
    )


def _enough(labels: Sequence[str], circuit: Circuit) -> None:
    if len(labels) < circuit.stage_count:
        raise InputError(
            f"{circuit.name} has {circuit.stage_count} stages but only {len(labels)} parts are at "
            "hand; measure more parts, or give a circuit with fewer stages"
        )
