"""Temperature and supply against the published zero-tempco point and the supply's own effect."""

import numpy as np
import pytest
from sweepset.models.bias import solve_bias
from sweepset.models.circuit import load_circuit
from sweepset.models.drift import sweep_supply, sweep_temperature
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate

NOON = parse_rate("noon")


def a_set(circuit, cutoff_v=-2.1):
    return [Jfet.from_idss(cutoff_v, 4.2e-3)] * circuit.stage_count


def test_nothing_moves_where_the_trimmer_was_set():
    circuit = load_circuit("heron")
    bias = solve_bias(circuit, a_set(circuit), NOON)
    [point] = sweep_temperature(circuit, a_set(circuit), bias.position, NOON, [35.0], 35.0)
    assert point.moved_octaves == 0.0
    [point] = sweep_supply(circuit, a_set(circuit), bias.position, NOON, [circuit.supply.voltage_v])
    assert point.moved_octaves == pytest.approx(0.0, abs=1e-12)
    assert point.travel_octaves == pytest.approx(bias.travel_octaves, rel=1e-3)


def test_a_sweep_below_the_ohmic_zero_tempco_point_rises_with_warmth():
    # check-values a23: channel resistance stands still 0.31 V above cut-off; below that
    # the cut-off's own drift wins and a warm part conducts more, above it less.
    circuit = load_circuit("heron")
    bus = solve_bus(circuit, 0.5, NOON)
    swing = bus.high_v - bus.low_v
    for middle_over_v, sign in ((0.1, 1.0), (1.2, -1.0)):
        parts = a_set(circuit, cutoff_v=bus.mean_v - middle_over_v)
        warm = sweep_temperature(circuit, parts, 0.5, NOON, [7.0, 47.0], 27.0)
        moved = [point.moved_octaves for point in warm]
        assert np.sign(moved[1] - moved[0]) == sign, swing


def test_a_supply_that_is_too_low_is_told_and_not_raised():
    circuit = load_circuit("plover")
    parts = a_set(circuit)
    found = sweep_supply(circuit, parts, 0.5, NOON, [3.0, circuit.supply.voltage_v])
    assert found[0].fault
    assert np.isnan(found[0].travel_octaves)
    assert not found[1].fault


def test_a_lower_supply_moves_the_sweep_as_the_bus_moves():
    circuit = load_circuit("wren")
    parts = a_set(circuit)
    position = solve_bias(circuit, parts, NOON).position
    low, high = sweep_supply(circuit, parts, position, NOON, [8.0, 9.5])
    means = [
        solve_bus(circuit.with_changes(supply__voltage_v=v), position, NOON).mean_v
        for v in (8.0, 9.5)
    ]
    assert np.sign(high.moved_octaves - low.moved_octaves) == np.sign(means[1] - means[0])
