"""Sweep-resistor advice against brute force over the E24 values."""

import pytest
from sweepset.models.bias import solve_bias
from sweepset.models.circuit import load_circuit
from sweepset.models.eseries import E24
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate
from sweepset.models.sweepadvice import advise_sweep

NOON = parse_rate("noon")
DOUBTFUL = [Jfet(cutoff, 1e-3) for cutoff in (-2.35, -2.32, -2.16, -2.07)]


def test_finds_the_first_e24_value_within_the_limit():
    circuit = load_circuit("heron")
    advice = advise_sweep(circuit, DOUBTFUL, NOON, 0.1)
    assert advice.present.bias.stall > 0.1
    assert advice.found is not None
    assert advice.found.bias.stall <= 0.1
    ohms = sorted(v * 10.0**d for v in E24 for d in (4, 5, 6) if v * 10.0**d > 2.7e6)
    for sweep_ohm in ohms:
        bias = solve_bias(circuit.with_changes(bus__sweep_ohm=sweep_ohm), DOUBTFUL, NOON)
        if bias.stall <= 0.1:
            break
    assert advice.found.sweep_ohm == pytest.approx(sweep_ohm)
    assert advice.travel_lost_octaves == pytest.approx(
        advice.present.bias.travel_octaves - bias.travel_octaves
    )


def test_a_good_set_keeps_its_resistor():
    advice = advise_sweep(load_circuit("heron"), [Jfet(-2.0, 1e-3)] * 4, NOON, 0.05)
    assert advice.found is advice.present
    assert advice.tried == ()
    assert advice.travel_lost_octaves == 0.0


@pytest.mark.parametrize("limit", [-0.1, 1.5])
def test_impossible_limits_are_refused(limit):
    with pytest.raises(ValueError, match="share of time"):
        advise_sweep(load_circuit("heron"), DOUBTFUL, NOON, limit)
