"""The bias solver against a fine grid and scipy's global optimiser."""

import numpy as np
import pytest
from scipy.optimize import differential_evolution
from sweepset.models.bias import BiasSearch, solve_bias
from sweepset.models.circuit import load_circuit, shipped_circuits
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate

NOON = parse_rate("noon")


def random_set(seed, count, spread):
    rng = np.random.default_rng(seed)
    centre = rng.uniform(-2.4, -1.4)
    return [
        Jfet(centre + spread * rng.standard_normal(), 1e-3 * np.exp(spread * rng.standard_normal()))
        for _ in range(count)
    ]


@pytest.mark.parametrize("name", list(shipped_circuits()))
@pytest.mark.parametrize(("seed", "spread"), [(1, 0.02), (2, 0.1), (3, 0.3)])
def test_a_fine_grid_does_not_beat_it_by_half_a_percent(name, seed, spread):
    circuit = load_circuit(name)
    jfets = random_set(seed, circuit.stage_count, spread)
    bias = solve_bias(circuit, jfets, NOON)
    search = BiasSearch(circuit, jfets, NOON)
    grid = max(search.objective(place) for place in np.linspace(0.0, 1.0, 2000))
    assert bias.objective >= grid / 1.005


def test_scipys_global_search_does_not_beat_it():
    circuit = load_circuit("heron")
    jfets = random_set(7, 4, 0.15)
    search = BiasSearch(circuit, jfets, NOON)
    found = differential_evolution(
        lambda place: -search.objective(float(place[0])), [(0.0, 1.0)], seed=1, maxiter=40, tol=1e-8
    )
    assert solve_bias(circuit, jfets, NOON).objective >= -found.fun / 1.005


def test_objective_agrees_with_the_whole_cycle():
    circuit = load_circuit("heron")
    bias = solve_bias(circuit, random_set(4, 4, 0.1), NOON)
    # the table's interpolation and one instant of 512 in the stall
    assert bias.objective == pytest.approx(
        bias.travel_octaves * (1.0 - bias.stall), abs=bias.travel_octaves * 2.5 / 512
    )


def test_uniform_set_loses_nothing():
    bias = solve_bias(load_circuit("heron"), [Jfet(-2.0, 1e-3)] * 4, NOON)
    assert bias.loss == 0.0
    assert bias.position == bias.uniform_position


def test_a_poor_set_loses_much():
    jfets = [Jfet(cutoff, 1e-3) for cutoff in (-1.4, -1.8, -2.2, -2.6)]
    assert solve_bias(load_circuit("heron"), jfets, NOON).loss > 0.3


def test_sensitivity_matches_two_neighbouring_positions():
    circuit, jfets = load_circuit("heron"), [Jfet(-2.0, 1e-3)] * 4
    bias = solve_bias(circuit, jfets, NOON)
    degrees = circuit.bus.trimmer.travel_degrees * circuit.bus.trimmer.turns
    means = []
    for turn in (-1.0, 1.0):
        bus = solve_bus(circuit, bias.position + turn / degrees, NOON)
        time = np.linspace(0.0, bus.period_s, 4001)[:-1]
        from sweepset.models.notches import set_break_hz

        means.append(np.log2(set_break_hz(circuit, jfets, bus.gate_v(time))).mean())
    # a chord of two degrees against the tangent
    assert bias.octaves_per_degree == pytest.approx((means[1] - means[0]) / 2.0, rel=0.02)
    assert bias.octaves_per_turn == pytest.approx(360.0 * bias.octaves_per_degree)


def test_a_set_out_of_reach_is_told():
    bias = solve_bias(load_circuit("heron"), [Jfet(-30.0, 1e-3)] * 4, NOON)
    assert bias.warnings
