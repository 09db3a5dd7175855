"""The kernel's polynomials against numpy's exp and log1p (an independent library)."""

import numba
import numpy as np
import pytest
from sweepset.models import jfet
from sweepset.render import law_kernels


@numba.njit
def _positive(x, w, soft, value, slope):
    for i in range(len(x)):
        value[i], slope[i] = law_kernels.positive(x[i], w, 1.0 / w, soft)


@numba.njit
def _exp(t, out):
    for i in range(len(t)):
        out[i] = law_kernels.falling_exp(t[i])


def test_falling_exponential_matches_numpy():
    t = np.concatenate([[0.0], np.geomspace(1e-12, 699.0, 4001)])
    out = np.empty_like(t)
    _exp(t, out)
    # 4e-11 is the fitted polynomial's error; the argument's rounding adds eps x t.
    assert np.max(np.abs(out / np.exp(-t) - 1.0) - 3e-16 * t) < 5e-11


def test_falling_exponential_far_out_is_tiny_and_finite():
    t = np.array([700.0, 1e4, 1e300])
    out = np.empty_like(t)
    _exp(t, out)
    assert np.all((out >= 0.0) & (out < 1e-300))


@pytest.mark.parametrize("knee", [0.001, 0.0517, 0.5])
def test_soft_positive_matches_the_model_law(knee):
    x = np.linspace(-1.5, 3.0, 20001)
    value, slope = np.empty_like(x), np.empty_like(x)
    _positive(x, knee, True, value, slope)
    # Both fitted errors together; relative, so that the tail below cut-off counts in full.
    expected = jfet.overdrive(x, knee)
    seen = expected > 1e-290
    assert np.max(np.abs(value[seen] / expected[seen] - 1.0)) < 3e-10
    assert np.max(np.abs(slope - jfet.overdrive_slope(x, knee))) < 1e-10


def test_hard_positive_is_exact():
    x = np.array([-1.0, -1e-300, 0.0, 1e-300, 2.5])
    value, slope = np.empty_like(x), np.empty_like(x)
    _positive(x, 1.0, False, value, slope)
    np.testing.assert_array_equal(value, [0, 0, 0, 1e-300, 2.5])
    np.testing.assert_array_equal(slope, [0, 0, 0, 1, 1])


def test_second_derivative_matches_finite_differences_of_the_model():
    # P(x)^2 = 2 x half-second-derivative to second order, by central differences.
    x, h, knee = np.linspace(-0.3, 0.5, 41), 1e-4, 0.0517

    def square(at):
        return jfet.overdrive(at, knee) ** 2

    numeric = (square(x + h) - 2 * square(x) + square(x - h)) / h**2 / 2
    p, s = jfet.overdrive(x, knee), jfet.overdrive_slope(x, knee)
    got = np.array([law_kernels.second(a, b, 1 / knee, True) for a, b in zip(p, s, strict=True)])
    # Truncation of the difference: h^2/12 of the fourth derivative, about 1e-6 here.
    np.testing.assert_allclose(got, numeric, atol=3e-6)
