"""Notches and the cycle: each property the definitions state, and figures from outside."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sweepset.models.circuit import Feedback, load_circuit
from sweepset.models.cycle import analyse_cycle, mean_part, notch_travels, stagger_of
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.notches import NotchTable, find_notches, set_break_hz
from sweepset.models.quantity import parse_rate

NOON = parse_rate("noon")


def plain(stages):
    heron = load_circuit("heron")
    return heron.with_changes(stages=(heron.stages[0],) * stages, feedback=None)


def parts(spread=0.05, count=4):
    return [
        Jfet(-2.0 + spread * (i - (count - 1) / 2), 1e-3 * (1 + spread * (i % 3)), label=f"P{i}")
        for i in range(count)
    ]


@pytest.mark.parametrize(
    ("stages", "notches"),
    [
        # d5..d10 (J. O. Smith, appendix "Classic Analog Phase Shifters"; exact algebra)
        (2, [1.0]),
        (4, [0.4142136, 2.4142136]),
        (6, [0.2679492, 1.0, 3.7320508]),
        (8, [0.1989124, 0.6681786, 1.4966058, 5.0273395]),
        (12, [0.1316525, 0.4142136, 0.7673270, 1.3032254, 2.4142136, 7.5957541]),
    ],
)
def test_notches_of_equal_stages(stages, notches):
    hz, db = find_notches(plain(stages), [[700.0] * stages])
    np.testing.assert_allclose(hz[0] / 700.0, notches, rtol=2e-6)
    assert (db < -80.0).all()


def test_two_unequal_stages_meet_at_the_geometric_mean():
    # d17: two stages 1 : r -> notch at sqrt(r) exactly
    hz, _ = find_notches(plain(2), [[300.0, 1200.0]])
    assert hz[0, 0] == pytest.approx(600.0, rel=1e-6)


def test_four_slightly_unequal_stages():
    # d17: ln errors +5, -2, +1, -3 % -> 0.415108, 2.421086 fc
    breaks = 1000.0 * np.exp([0.05, -0.02, 0.01, -0.03])
    hz, db = find_notches(plain(4), [breaks])
    np.testing.assert_allclose(hz[0], [415.108, 2421.086], rtol=2e-6)
    assert (db < -80).all()  # d16: they stay deep


@pytest.mark.parametrize(
    ("breaks", "notch_hz", "depth_db"),
    [
        # figures given with this tool's design (c = 0.4): our own, not a published source
        ([500, 600, 800, 980], [232, 1661], [-31, -5]),
        ([980, 800, 600, 500], [246, 1531], [-20, -9]),
    ],
)
def test_feedback_makes_depth_and_place_depend_on_the_order(breaks, notch_hz, depth_db):
    circuit = plain(4).with_changes(
        feedback=Feedback(**{"from": 4, "into": 1, "resistor": 10e3 / 0.4})
    )
    hz, db = find_notches(circuit, [breaks])
    np.testing.assert_allclose(hz[0], notch_hz, atol=1.0)
    np.testing.assert_allclose(db[0], depth_db, atol=0.6)


def test_shallow_notches_are_absent():
    circuit = plain(4).with_changes(mix__dry_ohm=10e3, mix__wet_ohm=100e3)
    hz, db = find_notches(circuit, [[1e3] * 4])
    assert np.isnan(hz).all()
    assert np.isnan(db).all()


def test_notch_is_the_lowest_point_of_a_dense_response():
    """Against a brute-force scan of the mixed level."""
    from sweepset.models.chain import wet_response

    circuit = load_circuit("heron")
    breaks = [400.0, 700.0, 500.0, 900.0]
    freq = np.geomspace(40.0, 8000.0, 400_001)
    level = np.abs(1 + wet_response(circuit, breaks, freq))
    minima = freq[1:-1][(level[1:-1] < level[:-2]) & (level[1:-1] < level[2:])]
    hz, _ = find_notches(circuit, [breaks])
    found = hz[0][np.isfinite(hz[0])]
    for notch in found:
        assert np.abs(minima / notch - 1).min() < 3e-5
    assert len(found) >= 1


def test_table_is_within_a_ten_thousandth_of_an_octave():
    circuit, jfets = load_circuit("heron"), parts(0.1)
    table = NotchTable(circuit, jfets, -3.0, -0.5)
    gate = np.random.default_rng(2).uniform(-3.0, -0.5, 400)
    direct, _ = find_notches(circuit, set_break_hz(circuit, jfets, gate))
    apart = np.abs(table.at(gate) - np.log2(direct))
    assert np.nanmax(apart) < 1e-4


def test_identical_parts_have_no_stagger_and_no_stall():
    circuit = load_circuit("heron")
    cycle = analyse_cycle(circuit, [Jfet(-2.0, 1e-3)] * 4, solve_bus(circuit, 0.45, NOON))
    assert cycle.stagger_octaves == 0.0
    assert cycle.stall == 0.0
    assert not cycle.stage_stall.any()
    assert cycle.travel_octaves > 0.5


@given(order=st.permutations(range(4)))
def test_order_does_not_matter_without_feedback(order):
    circuit = plain(4)
    jfets = parts(0.1)
    bus = solve_bus(circuit, 0.45, NOON)
    first = analyse_cycle(circuit, jfets, bus, points=64)
    again = analyse_cycle(circuit, [jfets[i] for i in order], bus, points=64)
    assert again.stagger_octaves == pytest.approx(first.stagger_octaves, rel=1e-12)
    assert again.travel_octaves == pytest.approx(first.travel_octaves, abs=1e-6)
    assert again.stall == first.stall


def test_order_matters_with_feedback():
    circuit = load_circuit("heron")
    bus = solve_bus(circuit, 0.45, NOON)
    jfets = parts(0.15)
    forward = analyse_cycle(circuit, jfets, bus, points=64)
    reverse = analyse_cycle(circuit, jfets[::-1], bus, points=64)
    assert abs(forward.travel_octaves - reverse.travel_octaves) > 1e-3


def test_a_part_cut_off_early_is_the_one_that_stalls():
    circuit = plain(4)
    jfets = [Jfet(-2.0, 1e-3), Jfet(-2.0, 1e-3), Jfet(-1.2, 1e-3), Jfet(-2.0, 1e-3)]
    cycle = analyse_cycle(circuit, jfets, solve_bus(circuit, 0.45, NOON))
    assert cycle.stage_stall[2] == cycle.stall > 0.3
    assert cycle.stage_stall[[0, 1, 3]].max() == 0.0


def test_stagger_is_the_stated_root_mean_square():
    # two stages at +-d about the reference: sqrt(mean d^2) = d, a common shift taken off
    reference = np.zeros((8, 2))
    assert stagger_of(reference + [0.3, -0.3] + 1.7, reference) == pytest.approx(0.3, rel=1e-12)


def test_stagger_squared_is_a_sum_of_pairwise_distances():
    """Exact identity for equal capacitors and shunts, at a fixed bias."""
    circuit, jfets = plain(4), parts(0.1)
    cycle = analyse_cycle(circuit, jfets, solve_bus(circuit, 0.5, NOON))
    x = np.log2(cycle.break_hz)
    pairs = sum(np.mean((x[:, i] - x[:, j]) ** 2) for i in range(4) for j in range(i))
    assert cycle.stagger_octaves**2 == pytest.approx(pairs / 16, rel=1e-9)


def test_turnarounds_are_at_the_extremes_of_the_gate():
    circuit = load_circuit("heron")
    bus = solve_bus(circuit, 0.45, NOON)
    cycle = analyse_cycle(circuit, parts(), bus)
    assert len(cycle.turnaround_s) == 2
    extremes = cycle.time_s[[cycle.gate_v.argmin(), cycle.gate_v.argmax()]]
    np.testing.assert_allclose(
        np.sort(cycle.turnaround_s), np.sort(extremes), atol=1.5 * bus.period_s / 512
    )


def test_travel_counts_only_what_can_be_heard():
    octaves = np.log2([[10.0, 100.0], [40.0, 400.0], [30_000.0, 25_000.0]])
    travels = notch_travels(octaves)
    np.testing.assert_allclose(travels, [0.0, 2.0])
    assert np.isnan(notch_travels(np.log2([[5.0], [6.0]]))).all()


def test_mean_part_is_the_mean_cutoff_and_the_geometric_mean_factor():
    mean = mean_part([Jfet(-2.0, 1e-3), Jfet(-3.0, 4e-3)])
    assert mean.cutoff_v == -2.5
    assert mean.beta_a_per_v2 == pytest.approx(2e-3, rel=1e-12)


def test_margin_and_stability_of_strong_feedback():
    circuit = load_circuit("heron")
    bus = solve_bus(circuit, 0.45, NOON)
    mild = analyse_cycle(circuit, parts(), bus, points=64)
    assert mild.stable
    assert 0.0 < mild.margin < 1.0
    wild = analyse_cycle(circuit.with_changes(feedback__resistor_ohm=5e3), parts(), bus, points=64)
    assert not wild.stable  # c = 2: the loop of three all-pass stages has gain 2 throughout
    assert analyse_cycle(plain(4), parts(), bus, points=64).margin == np.inf
