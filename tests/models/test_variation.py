"""Monte Carlo of a set against closed forms, and shares against nested averaging."""

import numpy as np
import pytest
from scipy.integrate import quad
from sweepset.models.bias import solve_bias
from sweepset.models.circuit import load_circuit
from sweepset.models.components import Tolerances
from sweepset.models.jfet import Jfet
from sweepset.models.pairwise import Parts
from sweepset.models.quantity import parse_rate
from sweepset.models.unit import CAUSES, Unit
from sweepset.models.variation import ALONE_DRAWS, vary_set

NOON = parse_rate("noon")


def parts_of(jfets, *, cutoff_u=0.0, ln_beta_u=0.0):
    exact = Parts.from_jfets(jfets)
    own = np.tile(np.diag([cutoff_u**2, ln_beta_u**2]), (len(jfets), 1, 1))
    return Parts(exact.labels, exact.cutoff_v, exact.ln_beta, exact.knee_v, own, exact.common)


def a_case(name="heron", apart=0.01, **errors):
    circuit = load_circuit(name)
    jfets = [Jfet.from_idss(-2.1 - apart * n, 4.2e-3) for n in range(circuit.stage_count)]
    return circuit, parts_of(jfets, **errors), solve_bias(circuit, jfets, NOON).bus


def rectangular_octaves(tolerance):
    """Standard deviation of log2(1 + d), d even within the tolerance, by quadrature."""
    mean = quad(lambda d: np.log2(1 + d), -tolerance, tolerance)[0] / (2 * tolerance)
    square = quad(lambda d: np.log2(1 + d) ** 2, -tolerance, tolerance)[0] / (2 * tolerance)
    return np.sqrt(square - mean**2)


def test_capacitors_alone_spread_the_stages_as_a_rectangular_distribution_does():
    # JCGM 100:2008, 4.3.7 (clause from memory): with independent equal spreads the mean
    # over N stages takes 1/N of the variance away. A sample of 2048 tells the root mean
    # square of a stagger of 3 degrees of freedom to 0.9 %: four of those allowed.
    circuit, parts, bus = a_case(apart=0.0)
    found = vary_set(circuit, parts, bus, NOON, Tolerances(capacitor=0.1), draws=100, shares=False)
    expected = rectangular_octaves(0.1) * np.sqrt(3.0 / 4.0)
    noise = 1.0 / np.sqrt(2.0 * 3.0 * ALONE_DRAWS)
    assert found.alone_octaves["stage capacitors"] == pytest.approx(expected, rel=4 * noise)
    assert found.alone_octaves["readings"] == 0.0


def test_ten_per_cent_capacitors_outweigh_a_careful_match_and_not_a_poor_one():
    # design.md, fact 6: capacitors at 5 or 10 % can outweigh a careful match.
    close = vary_set(*a_case(apart=0.002), NOON, draws=200, shares=False)
    assert close.matching_gain < 0.05
    assert close.measured_capacitors_octaves < 0.3 * close.as_built_octaves
    wide = vary_set(*a_case(apart=0.1), NOON, draws=200, shares=False)
    assert wide.matching_gain > 0.8
    exact = vary_set(*a_case(apart=0.1), NOON, Tolerances(capacitor=0.0), draws=200, shares=False)
    assert exact.as_built_octaves == pytest.approx(exact.measured_capacitors_octaves)


def test_independent_causes_add_up_in_squares():
    # To first order, for identical parts: JCGM 100:2008, 5.1.2, eq. (10).
    found = vary_set(
        *a_case(apart=0.0, cutoff_u=0.01, ln_beta_u=0.02), NOON, draws=100, shares=False
    )
    total = np.sqrt(sum(value**2 for value in found.alone_octaves.values()))
    assert found.as_built_octaves == pytest.approx(total, rel=0.03)


def test_shares_match_nested_averaging():
    # First-order index = Var(E[figure | cause]) / Var(figure): the definition, by brute force
    # over 80 values of the cause with 250 of everything else each; both are samples.
    circuit, parts, bus = a_case("wren", cutoff_u=0.01, ln_beta_u=0.05)
    found = vary_set(circuit, parts, bus, NOON, draws=100)
    unit = Unit(circuit, parts, bus, NOON)
    outer, inner = 80, 250
    for cause in ("stage capacitors", "bias and oscillator"):
        table, rest = (unit.draw(Tolerances(), n, seed) for n, seed in ((outer, 1), (inner, 2)))
        kept, free = np.repeat(np.arange(outer), inner), np.tile(np.arange(inner), outer)
        mixed = [
            getattr(table if name == cause else rest, field)[kept if name == cause else free]
            for name, field in zip(CAUSES, ("capacitors", "resistors", "bus", "parts"), strict=True)
        ]
        travel = unit.figures(type(table)(*mixed))["travel_octaves"].reshape(outer, inner)
        noise = travel.var(axis=1).mean() / inner
        share = (travel.mean(axis=1).var() - noise) / travel.var()
        assert found.shares[cause]["travel_octaves"] == pytest.approx(share, abs=0.15)


def test_shares_leave_nothing_for_a_figure_whose_causes_add():
    found = vary_set(*a_case(cutoff_u=0.01, ln_beta_u=0.02), NOON, draws=100)
    # The trimmer's shift is all but linear in everything: the indices sum to one, within
    # the estimator's noise for 1024 draws.
    assert sum(s["shift_v"] for s in found.shares.values()) == pytest.approx(1.0, abs=0.08)


def test_spreads_are_percentiles_of_the_draws():
    found = vary_set(*a_case(), NOON, draws=500, shares=False)
    stagger = found.draws["stagger_octaves"]
    assert len(stagger) == 500
    spread = found.spreads["stagger_octaves"]
    assert (stagger <= spread.low).mean() == pytest.approx(0.05, abs=0.01)
    assert (stagger <= spread.high).mean() == pytest.approx(0.95, abs=0.01)
    again = vary_set(*a_case(), NOON, draws=500, shares=False)
    np.testing.assert_array_equal(again.draws["stall"], found.draws["stall"])


def test_the_trimmer_turns_towards_what_the_shift_says():
    found = vary_set(*a_case(), NOON, draws=100, shares=False)
    assert found.beyond_reach == 0.0
    trimmer = load_circuit("heron").bus.trimmer
    low, high = (found.spreads["shift_v"].low, found.spreads["shift_v"].high)
    assert low < 0.0 < high
    assert abs(found.degrees_per_volt * (high - low)) < trimmer.travel_degrees


def test_too_few_draws_are_refused():
    with pytest.raises(ValueError, match="expected 100 or more"):
        vary_set(*a_case(), NOON, draws=10)
