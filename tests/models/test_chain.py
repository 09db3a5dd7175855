"""The small-signal chain against published all-pass facts and an independent state space.

Rows d1..d21 of the all-pass table: J. O. Smith, "Physical Audio Signal Processing",
appendix "Classic Analog Phase Shifters" (read) for the stage, notch count and peaks; the
rest is exact algebra on it.
"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.signal import StateSpace, freqresp
from sweepset.models.chain import (
    break_hz,
    circuit_gains,
    loop_gain,
    loop_poles_rad,
    unit_response,
    wet_response,
)
from sweepset.models.circuit import Circuit, Feedback, load_circuit


def plain(stages: int) -> Circuit:
    """Equal stages, equal arms, no feedback, equal mix."""
    heron = load_circuit("heron")
    return heron.with_changes(stages=(heron.stages[0],) * stages, feedback=None)


def looped(stages: int, into: int, frm: int, c: float) -> Circuit:
    base = plain(stages)
    arm = base.stages[0].arm_out_ohm
    return base.with_changes(feedback=Feedback(**{"from": frm, "into": into, "resistor": arm / c}))


@pytest.mark.parametrize("stages", [2, 4, 6, 12])
def test_equal_arms_pass_all_frequencies_alike(stages):
    # d1: 0 dB at all frequencies
    freq = np.geomspace(1.0, 1e5, 500)
    breaks = np.geomspace(100.0, 3000.0, stages)
    level = np.abs(wet_response(plain(stages), breaks, freq))
    np.testing.assert_allclose(level, 1.0, atol=1e-12)


def test_phase_of_one_pair_of_stages():
    # d2: one stage turns -11.421, -90.000, -168.579 degrees at fc/10, fc, 10 fc; a pair twice that
    wet = wet_response(plain(2), [1000.0, 1000.0], [100.0, 1000.0, 10_000.0])
    degrees = np.degrees(np.unwrap(np.angle(wet)))
    np.testing.assert_allclose(degrees, [2 * -11.421, -180.0, 2 * -168.579], atol=2e-3)


@pytest.mark.parametrize(
    ("stages", "notches"),
    [
        # d5..d10: f_k = fc tan((2k - 1) pi/(2N))
        (2, [1.0]),
        (4, [0.414214, 2.414214]),
        (6, [0.267949, 1.0, 3.732051]),
        (8, [0.198912, 0.668179, 1.496606, 5.027339]),
        (10, [0.158384, 0.509525, 1.0, 1.962611, 6.313752]),
        (12, [0.131652, 0.414214, 0.767327, 1.303225, 2.414214, 7.595754]),
    ],
)
def test_sum_with_dry_vanishes_at_the_published_notches(stages, notches):
    wet = wet_response(plain(stages), [1.0e3] * stages, 1e3 * np.array(notches))
    # six printed decimals: |1 + W| there is up to N x 5e-7 in phase, doubled
    assert np.abs(1.0 + wet).max() < 2e-5


def test_peaks_of_four_stages_reach_six_decibels():
    # d11: fc tan(m pi/N): 0, fc, infinity; +6.0206 dB over dry alone
    wet = wet_response(plain(4), [1000.0] * 4, [1e-3, 1000.0, 1e9])
    np.testing.assert_allclose(20 * np.log10(np.abs(1 + wet)), 6.0206, atol=1e-4)


def test_half_power_edges_of_four_stages():
    # d12: 0.198912, 0.668179, 1.496606, 5.027339 fc
    wet = wet_response(plain(4), [1e3] * 4, [198.912, 668.179, 1496.606, 5027.339])
    np.testing.assert_allclose(np.abs(1 + wet) ** 2, 2.0, atol=2e-5)


@pytest.mark.parametrize(
    ("percent", "floor_db"), [(1, -46.06), (2, -40.09), (5, -32.26), (10, -26.44), (20, -20.83)]
)
def test_unequal_mix_fills_the_notch(percent, floor_db):
    # d14: 20 log10 |d - w|/(d + w), with w = (1 + p) d; exact algebra
    share = 1 + percent / 100
    circuit = plain(4).with_changes(mix__dry_ohm=10e3 * share, mix__wet_ohm=10e3)
    gains = circuit_gains(circuit)
    dry, wet = gains.dry, gains.wet
    at = 1000.0 * np.tan(np.pi / 8)
    response = wet_response(circuit, [1e3] * 4, [at])
    level = 20 * np.log10(np.abs(dry + wet * response[0]) / (dry + wet))
    assert level == pytest.approx(floor_db, abs=0.005)


def test_unequal_arms_lift_low_frequencies():
    # d15: Rf/Rin = 1 + e gives LF gain -(1 + e), HF gain +1; 1 % is 0.0864 dB
    circuit = plain(2).with_changes(stages__0__arm_out_ohm=10.1e3)
    low, high = np.abs(wet_response(circuit, [1e3, 1e3], [1e-3, 1e9]))
    assert 20 * np.log10(low) == pytest.approx(0.0864, abs=1e-4)
    assert high == pytest.approx(1.0, abs=1e-9)


def test_rc_example():
    # d21: 10k with 47 nF is 338.628 Hz
    circuit = plain(2).with_changes(stages__0__shunt_ohm=20e3, stages__1__shunt_ohm=20e3)
    np.testing.assert_allclose(break_hz(circuit, [1 / 20e3] * 2), 338.628, atol=1e-3)


@pytest.mark.parametrize(("g", "peak_db"), [(0.5, 6.02), (0.7, 10.46), (0.9, 20.00)])
def test_feedback_into_the_first_of_two_has_the_loop_gain_of_a_stage(g, peak_db):
    # d18 holds for a loop closed as an ideal sum, 1/(1 - g A): the algebra below is ours
    # (feedback resistor into the minus input), its loop gain c A where A is one all-pass.
    circuit = looped(2, 1, 2, g)
    freq = np.geomspace(0.01, 1e5, 2001)  # to where the stage has all but turned
    loop = loop_gain(circuit, [1e3, 1e3], freq)
    np.testing.assert_allclose(np.abs(loop), g, rtol=1e-12)
    assert 20 * np.log10(1 / np.abs(1 + loop).min()) == pytest.approx(peak_db, abs=0.01)


def stage_by_stage(circuit, breaks):
    """The same network from its differential equations, as a scipy state space."""
    count = circuit.stage_count
    w = 2 * np.pi * np.asarray(breaks)
    # unknown x_1..x_(N+1) from q and the input: x_(s+1) = a (x_s - q_s) - b x_s - c x_fb
    left, right, enter = np.eye(count + 1), np.zeros((count + 1, count)), np.zeros(count + 1)
    enter[0] = 1.0
    for s in range(count):
        a, b, c = circuit.arm_gains(s)
        left[s + 1, s] -= a - b
        right[s + 1, s] = -a
        if c:
            left[s + 1, circuit.feedback.from_stage] += c
    x_of_q, x_of_in = np.linalg.solve(left, right), np.linalg.solve(left, enter)
    # dq/dt = w v, v = x - q
    A = w[:, None] * (x_of_q[:count] - np.eye(count))
    B = (w * x_of_in[:count])[:, None]
    return StateSpace(A, B, x_of_q[count][None], [[x_of_in[count]]])


@given(
    stages=st.integers(2, 8),
    data=st.data(),
    c=st.floats(0.05, 0.6),
    arms=st.floats(0.8, 1.25),
)
def test_response_matches_scipys_state_space(stages, data, c, arms):
    into = data.draw(st.integers(1, stages))
    frm = data.draw(st.integers(into, stages))
    breaks = data.draw(st.lists(st.floats(30.0, 8000.0), min_size=stages, max_size=stages))
    circuit = looped(stages, into, frm, c).with_changes(stages__0__arm_out_ohm=10e3 * arms)
    freq = np.geomspace(20.0, 20e3, 40)
    _, want = freqresp(stage_by_stage(circuit, breaks), 2 * np.pi * freq)
    np.testing.assert_allclose(wet_response(circuit, breaks, freq), want, rtol=1e-7, atol=1e-9)


@given(breaks=st.lists(st.floats(50.0, 5000.0), min_size=4, max_size=4), c=st.floats(0.1, 0.9))
def test_loop_poles_are_eigenvalues_of_the_state_space(breaks, c):
    circuit = looped(4, 1, 4, c)
    poles = loop_poles_rad(circuit, breaks)
    eigen = np.linalg.eigvals(stage_by_stage(circuit, breaks).A)
    # the loop has the stages after `into`; near double poles both sides lose digits
    for pole in poles:
        assert np.abs(eigen - pole).min() < 1e-4 * np.abs(eigen).max()


def test_order_matters_only_with_feedback():
    breaks = np.array([500.0, 600.0, 800.0, 980.0])
    freq = np.geomspace(20, 20e3, 200)
    forward, reverse = (wet_response(plain(4), b, freq) for b in (breaks, breaks[::-1]))
    np.testing.assert_allclose(forward, reverse, atol=1e-12)
    circuit = looped(4, 1, 4, 0.4)
    forward, reverse = (wet_response(circuit, b, freq) for b in (breaks, breaks[::-1]))
    assert np.abs(forward - reverse).max() > 0.1


def test_unit_response_blocks_dc_and_loses_the_loaded_mix():
    circuit = load_circuit("heron")
    low, mid = np.abs(unit_response(circuit, [1e3] * 4, [1e-3, 60e3]))
    assert low < 1e-6
    mix = circuit.mix
    source = mix.dry_ohm * mix.wet_ohm / (mix.dry_ohm + mix.wet_ohm)
    # far above all breaks the wet path is nearly in phase with dry: plain divider
    assert mid == pytest.approx(mix.load_ohm / (mix.load_ohm + source), rel=0.02)
