"""Integration rules against exact solutions and an independent matrix construction."""

import numpy as np
import pytest
from scipy.linalg import expm
from sweepset.models.circuit import load_circuit
from sweepset.render.rules import (
    ADAMS_3,
    ADAMS_4,
    RULES,
    TRAPEZOIDAL,
    rules_by_rate,
    spectral_radius,
    stage_maps,
    step_matrices,
    steps_to_forget,
)


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.name)
def test_rule_integrates_polynomials_of_its_order_exactly(rule):
    # A linear multistep rule of order p is exact for q = t^k, k <= p (definition of order).
    w = rule.weights
    for k in range(1, rule.order + 1):
        times = np.array([0.0, -1.0, -2.0, -3.0])
        slope = k * times ** (k - 1)
        assert np.dot(w, slope) == pytest.approx(0.0 - (-1.0) ** k, abs=1e-14)
    k = rule.order + 1
    assert abs(np.dot(w, k * times ** (k - 1)) + (-1.0) ** k) > 1e-3


@pytest.mark.parametrize("rule", [ADAMS_3, ADAMS_4], ids=lambda rule: rule.name)
def test_real_axis_limit_is_where_the_root_leaves_the_circle(rule):
    # dq/dt = -r q: roots of (1 + r w0) z^3 - (1 - r w1) z^2 + r w2 z + r w3.
    def radius(r):
        w = rule.weights
        return np.abs(np.roots([1 + r * w[0], -(1 - r * w[1]), r * w[2], r * w[3]])).max()

    assert radius(rule.real_limit * 0.999) < 1.0 < radius(rule.real_limit * 1.001)


def test_stage_maps_agree_with_the_published_stage_equation_by_simulation():
    # v = T q must satisfy x_1 = 0, v = x - q, y = a v - b x - c y_fb for every stage.
    circuit = load_circuit("heron")
    q = np.random.default_rng(1).standard_normal(circuit.stage_count)
    v = stage_maps(circuit) @ q
    x = v + q
    a, b, c = np.array([circuit.arm_gains(s) for s in range(circuit.stage_count)]).T
    assert circuit.feedback is not None
    last = a[-1] * v[-1] - b[-1] * x[-1]
    y = a * v - b * x - c * last
    assert x[0] == pytest.approx(0.0, abs=1e-12)
    np.testing.assert_allclose(x[1:], y[:-1], atol=1e-12)
    assert y[circuit.feedback.from_stage - 1] == pytest.approx(last, abs=1e-12)


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.name)
def test_recursion_follows_the_matrix_exponential(rule):
    """Error against scipy's matrix exponential falls with the rule's order."""
    circuit = load_circuit("heron")
    rates = np.array([900.0, 2000.0, 5000.0, 1200.0])
    A = np.diag(rates) @ stage_maps(circuit)
    start = np.array([0.3, -0.2, 0.1, 0.4])
    errors = []
    for steps in (400, 800):
        h = 2e-3 / steps
        past = [expm(-A * h * k) @ start for k in range(3)]
        state = np.concatenate([past[0], *(h * A @ q for q in past)])
        matrix = step_matrices(circuit, (rule,) * 4, rates[None] * h)[0]
        for _ in range(steps):
            state = matrix @ state
        errors.append(np.abs(state[:4] - expm(A * 2e-3) @ start).max())
    assert np.log2(errors[0] / errors[1]) == pytest.approx(rule.order, abs=0.15)


def test_forgetting_time_is_the_first_step_below_the_share():
    matrix = np.array([[0.5, 10.0], [0.0, 0.49]])
    steps = steps_to_forget(matrix, 1e-6)
    assert steps is not None
    assert np.linalg.norm(np.linalg.matrix_power(matrix, steps), 2) <= 1e-6
    assert np.linalg.norm(np.linalg.matrix_power(matrix, steps - 1), 2) > 1e-6


def test_a_recursion_that_does_not_forget_is_told():
    assert steps_to_forget(np.eye(2), 1e-6) is None


def test_fast_stage_falls_back_to_lower_orders():
    assert rules_by_rate(np.array([0.1, 2.5, 10.0])) == (ADAMS_4, ADAMS_3, TRAPEZOIDAL)


def test_spectral_radius_of_one_trapezoidal_stage_has_its_closed_form():
    # check-values e11: J'/J = (1 - p)/(1 + p), p = T/(2RC), for one trapezoidal RC.
    circuit = load_circuit("heron").with_changes(feedback=None)
    rates = np.full(4, 0.3)
    radius = spectral_radius(step_matrices(circuit, (TRAPEZOIDAL,) * 4, rates[None]))
    # four equal poles: a defective matrix, whose eigenvalues numpy gives to eps^(1/4)
    assert radius == pytest.approx((1 - 0.15) / (1 + 0.15), abs=3e-4)
