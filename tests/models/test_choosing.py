"""Choosing on shipped data: answers in stage order at their own bias, and refusals."""

from __future__ import annotations

import math
from itertools import combinations, permutations
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sweepset.models.bias import solve_bias
from sweepset.models.choosing import (
    best_set,
    complete_set,
    disjoint_sets,
    order_matters,
    poor_set,
    set_figures,
)
from sweepset.models.circuit import Circuit, load_circuit
from sweepset.models.comparing import compare_sets
from sweepset.models.cycle import analyse_cycle
from sweepset.models.errors import InputError
from sweepset.models.estimate import TrayEstimate, estimate_tray
from sweepset.models.expected import expected_stagger
from sweepset.models.jfet import Jfet
from sweepset.models.ordering import best_order, straying
from sweepset.models.pairwise import Parts, parts_of
from sweepset.models.quantity import parse_rate
from sweepset.models.tray import load_tray
from sweepset.models.usual import usual_choice, usual_fraction, why_they_disagree

SAMPLES = Path(__file__).resolve().parents[2] / "samples"
NOON = parse_rate("noon")


@pytest.fixture(scope="module")
def bench() -> TrayEstimate:
    return estimate_tray(load_tray(SAMPLES / "tray_bench.csv"))


@pytest.fixture(scope="module")
def plain() -> Circuit:
    """Four equal stages without feedback."""
    return load_circuit("heron").model_copy(update={"feedback": None})


def test_best_set_beats_every_other_by_the_full_response(bench, plain) -> None:
    # Exhaustive, each set at the exact bias of solve_bias, over a few parts.
    labels = bench.labels[:6]
    choice = best_set(bench, plain, NOON, labels=labels)
    every = [
        set_figures(bench, plain, NOON, names, ordered=True) for names in combinations(labels, 4)
    ]
    best = min(every, key=lambda one: one.rank)
    assert set(choice.best.labels) == set(best.labels)
    assert choice.best.expected_stagger_octaves == pytest.approx(
        best.expected_stagger_octaves, rel=1e-9
    )
    assert choice.proven
    assert choice.search.combinations == math.comb(6, 4)


def test_best_set_of_the_bench_tray_is_proven_and_good(bench) -> None:
    heron = load_circuit("heron")
    choice = best_set(bench, heron, NOON)
    assert choice.proven
    assert choice.gap == 0.0
    assert choice.best.full_travel
    poor = poor_set(bench, heron, NOON, avoid=choice.best.labels)
    assert set(poor.labels).isdisjoint(choice.best.labels)
    assert poor.expected_stagger_octaves > 5.0 * choice.best.expected_stagger_octaves
    # it still sweeps: it is to be compared by ear
    assert poor.bias.travel_octaves > 1.0


def test_completion_keeps_the_soldered_parts_where_they_are(bench, plain) -> None:
    held = {0: bench.labels[3], 2: bench.labels[10]}
    pool = bench.labels[20:25]
    choice = complete_set(bench, plain, NOON, held, labels=pool)
    assert choice.best.labels[0] == held[0]
    assert choice.best.labels[2] == held[2]
    every = [
        set_figures(bench, plain, NOON, (held[0], a, held[2], b), ordered=True)
        for a, b in combinations(pool, 2)
    ]
    best = min(every, key=lambda one: one.rank)
    assert set(choice.best.labels) == set(best.labels)


def test_completion_refuses_all_faults_at_once(bench, plain) -> None:
    first = bench.labels[0]
    with pytest.raises(InputError) as caught:
        complete_set(bench, plain, NOON, {0: first, 1: first, 7: "Jx"})
    text = str(caught.value)
    assert len(caught.value.messages) == 3
    assert "stages 1 to 4" in text
    assert "no part 'Jx'" in text
    assert "more than one stage" in text


def test_too_few_parts_and_impossible_limits_are_refused(bench, plain) -> None:
    with pytest.raises(InputError, match="4 stages but only 3 parts"):
        best_set(bench, plain, NOON, labels=bench.labels[:3])
    for limit in (0.0, -1.0, math.nan, math.inf):
        with pytest.raises(InputError, match="cannot be met"):
            disjoint_sets(bench, plain, NOON, limit)
    uneven = plain.with_changes(stages__1__shunt_ohm=47e3)
    with pytest.raises(InputError, match="different shunts"):
        disjoint_sets(bench, uneven, NOON, 0.1)


def test_disjoint_sets_stay_under_the_limit_by_the_full_response(bench, plain) -> None:
    found = disjoint_sets(bench, plain, NOON, 0.15)
    assert 3 <= len(found.sets) <= found.bound <= found.by_count == 15
    used = [label for one in found.sets for label in one.labels]
    assert len(used) == len(set(used))
    assert {one.label for one in found.leftovers} == set(bench.labels) - set(used)
    for one in found.sets[:2] + found.sets[-1:]:
        exact = set_figures(bench, plain, NOON, one.labels, ordered=True)
        # the grid's 64 instants and stepped trimmer against 512 and the refined bias
        assert exact.expected_stagger_octaves == pytest.approx(
            one.expected_stagger_octaves, rel=0.03
        )
        assert exact.bias.position == pytest.approx(one.position, abs=2.0 * found.position_step)


def test_unequal_shunts_are_judged_by_the_definition(bench, plain) -> None:
    uneven = plain.with_changes(stages__1__shunt_ohm=30e3)
    choice = best_set(bench, uneven, NOON, labels=bench.labels[:12])
    assert not choice.proven
    assert choice.best.order_matters
    exact = choice.best.jfets
    bus = choice.best.bias.bus
    # design.md's stagger by cycle.py, with the readings taken as certain
    cycle = analyse_cycle(uneven, exact, bus)
    assert expected_stagger(Parts.from_jfets(exact), uneven, bus) == pytest.approx(
        cycle.stagger_octaves,
        rel=1e-3,  # instants half a step apart
    )


def test_where_order_matters() -> None:
    heron = load_circuit("heron")
    plain = heron.model_copy(update={"feedback": None})
    assert order_matters(heron)
    assert not order_matters(plain)
    assert order_matters(plain.with_changes(stages__0__capacitor_f=10e-9))
    assert order_matters(plain.with_changes(stages__0__arm_in_ohm=11e3))
    assert order_matters(plain.with_changes(stages__3__shunt_ohm=30e3))


def test_order_invariance_without_feedback(bench, plain) -> None:
    # design.md: without feedback, with equal arms, capacitors and shunts, order does not matter.
    names = bench.labels[5:9]
    figures = [
        set_figures(bench, plain, NOON, order, ordered=True)
        for order in (names, names[::-1], (names[2], names[0], names[3], names[1]))
    ]
    for one in figures[1:]:
        assert one.bias.position == pytest.approx(figures[0].bias.position, abs=1e-9)
        assert one.expected_stagger_octaves == pytest.approx(
            figures[0].expected_stagger_octaves, rel=1e-9
        )
        assert one.bias.travel_octaves == pytest.approx(figures[0].bias.travel_octaves, rel=1e-6)


def test_best_order_is_the_best_of_all_by_analyse_cycle(bench) -> None:
    heron = load_circuit("heron")
    jfets = [bench.jfet(label) for label in bench.labels[8:12]]
    bus = solve_bias(heron, jfets, NOON).bus
    order = best_order(heron, jfets, bus)
    mean = Jfet(
        cutoff_v=float(np.mean([one.cutoff_v for one in jfets])),
        beta_a_per_v2=float(np.exp(np.mean([math.log(one.beta_a_per_v2) for one in jfets]))),
        knee_v=jfets[0].knee_v,
    )
    uniform = analyse_cycle(heron, [mean] * 4, bus, points=64)
    cost = {}
    for trial in permutations(range(4)):
        cycle = analyse_cycle(heron, [jfets[n] for n in trial], bus, points=64)
        cost[trial] = straying(cycle.notch_hz, cycle.notch_db, uniform.notch_hz, uniform.notch_db)
    values = sorted(cost.values())
    assert values[-1] > 1.1 * values[0]  # order does matter here
    # 16 instants against 64: as good as the best to a few per cent
    assert cost[order] <= values[0] * 1.05
    held = best_order(heron, jfets, bus, frozenset({0, 3}))
    assert (held[0], held[3]) == (0, 3)


def test_a_soldered_unknown_brings_the_type_assumption(bench, plain, tmp_path) -> None:
    # A part without readings: its wide covariance raises the expected stagger of any set.
    text = (SAMPLES / "tray_bench.csv").read_text(encoding="utf-8")
    header = text.splitlines()[0]
    separator = ";" if ";" in header else ","
    lines = [*text.rstrip().splitlines(), "X1" + separator * header.count(separator)]
    (tmp_path / "tray.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    fixture = SAMPLES / "tray_bench.fixture.toml"
    estimate = estimate_tray(load_tray(tmp_path / "tray.csv", fixture))
    known = bench.labels[0]
    free = bench.labels[20:28]
    unknown = complete_set(estimate, plain, NOON, {1: "X1"}, labels=free, finalists=1)
    certain = complete_set(estimate, plain, NOON, {1: known}, labels=free, finalists=1)
    assert unknown.best.labels[1] == "X1"
    assert unknown.best.expected_stagger_octaves > certain.best.expected_stagger_octaves


def test_probability_between_sets(bench, plain) -> None:
    good = best_set(bench, plain, NOON, finalists=1).best
    poor = poor_set(bench, plain, NOON, avoid=good.labels)
    parts = parts_of(bench)

    def compare(first, second):
        return compare_sets(
            parts, first.labels, first.bias.bus, second.labels, second.bias.bus, plain
        )

    sure = compare(good, poor)
    assert sure.probability > 0.999
    assert compare(poor, good).probability == pytest.approx(1.0 - sure.probability)
    itself = compare(good, good)
    assert itself.probability == 0.5
    assert itself.settling_part is None


def test_the_settling_reading_is_of_the_part_known_worst(plain, triangle_at) -> None:
    # Eight like parts, all but one known exactly.
    jfets = [Jfet(cutoff_v=-2.0 - 0.004 * n, beta_a_per_v2=0.8e-3, label=f"J{n}") for n in range(8)]
    parts = Parts.from_jfets(jfets)
    own = parts.own.copy()
    own[5] = np.diag([0.01**2, 0.05**2])
    parts = Parts(
        parts.labels, parts.cutoff_v, parts.ln_beta, parts.knee_v, own, np.zeros((8, 2, 0))
    )
    bus = triangle_at(0.5)
    first, second = parts.labels[:4], parts.labels[4:]
    found = compare_sets(parts, first, bus, second, bus, plain)
    assert found.settling_part == "J5"
    assert found.settling_share == pytest.approx(1.0)
    assert 0.5 < found.probability < 1.0  # on paper the sets are equal; doubt makes it worse


def test_usual_percentage() -> None:
    # check-values k3, k4 (common practice, no published source): 4.68 % passes, 65.8 % fails.
    assert 100 * usual_fraction([1.241, 1.255, 1.300, 1.252]) == pytest.approx(4.68, abs=0.005)
    assert 100 * usual_fraction([0.610, 0.390, 0.780, 0.591]) == pytest.approx(65.8, abs=0.05)
    with pytest.raises(ValueError, match="needs readings"):
        usual_fraction([])
    with pytest.raises(ValueError, match="positive"):
        usual_fraction([-0.1, 0.05])


def test_disagreement_is_explained_only_where_there_is_one() -> None:
    assert why_they_disagree(0.02, 0.03, 0.05, 0.08) is None
    text = why_they_disagree(0.05, 0.03, 0.02, 0.08)
    assert text is not None
    assert "the other set has the closer readings (2.0 % against 5.0 %)" in text
    assert "this set keeps together over the sweep (0.030 against 0.080 octave)" in text


@given(st.lists(st.floats(0.1, 5.0), min_size=2, max_size=9), st.integers(2, 4))
def test_the_usual_rules_choice_is_the_best_of_all_combinations(
    values: list[float], stages: int
) -> None:
    readings = {f"J{n}": value for n, value in enumerate(values)}
    chosen = usual_choice(readings, stages)
    every = list(combinations(readings, stages))
    if not every:
        assert chosen is None
        return
    assert chosen is not None
    assert usual_fraction([readings[one] for one in chosen]) == pytest.approx(
        min(usual_fraction([readings[one] for one in names]) for names in every)
    )


@pytest.mark.slow
@pytest.mark.parametrize("limit", [0.05, 0.07, 0.1, 0.15])
def test_gap_of_at_most_one_set_on_the_shipped_workshop_tray(limit: float, capsys) -> None:
    import time

    estimate = estimate_tray(load_tray(SAMPLES / "tray_workshop.csv"))
    start = time.perf_counter()
    found = disjoint_sets(estimate, load_circuit("heron"), NOON, limit)
    with capsys.disabled():
        print(
            f"\nworkshop tray, limit {limit}: {len(found.sets)} sets of at most {found.bound} "
            f"(parts divided by stages: {found.by_count}), {time.perf_counter() - start:.1f} s"
        )
    assert found.bound < found.by_count
    assert found.bound - len(found.sets) <= 1
