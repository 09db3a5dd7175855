"""The JFET law's soft positive part, in a form the compiler can run on several lanes at once.

``P(x) = w ln(1 + exp(x/w))`` is computed as ``max(x, 0) + w log1p(z)`` with
``z = exp(-|x|/w)``. The library's exp and log1p would break the vectoriser, so both
are minimax polynomials (in pairs, for a short chain of dependent steps), fitted by
iteratively reweighted least squares:

* ``exp`` by ``2^k 2^f`` with a polynomial of degree 7 in ``f`` (relative error 4e-11),
* ``log1p(z) = r q(r^2)`` with ``r = z/(2 + z)`` and ``q`` of degree 5 (1e-10).

tests/render/test_law_kernels.py holds the result against numpy.
"""

from __future__ import annotations

from typing import Any

from llvmlite import ir
from numba import types
from numba.extending import intrinsic

from ..models.jit import kernel

LOG2_E = 1.4426950408889634
# Adding 1.5 x 2^52 rounds a double to an integer held in its low mantissa bits.
ROUNDER = 6755399441055744.0
# exp(-700) is still a normal double; beyond it P is its asymptote to the last bit.
MOST = 700.0


@intrinsic
def _bits(typingctx: Any, x: Any) -> Any:
    """Return the bit pattern of a double as a 64-bit integer."""

    def emit(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.bitcast(arguments[0], ir.IntType(64))

    return types.int64(types.float64), emit


@intrinsic
def _double(typingctx: Any, x: Any) -> Any:
    """Return the double with this 64-bit pattern."""

    def emit(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.bitcast(arguments[0], ir.DoubleType())

    return types.float64(types.int64), emit


@kernel(inline="always")
def falling_exp(t):
    """Return ``exp(-t)`` for ``t`` from 0 up."""
    y = -min(t, MOST) * LOG2_E
    shifted = y + ROUNDER
    f = y - (shifted - ROUNDER)
    ff = f * f
    low = (0.9999999999616821 + f * 0.6931471807284479) + ff * (
        0.2402265119815727 + f * 0.05550410353445137
    )
    high = (0.009618027253699243 + f * 0.001333392256591591) + ff * (
        0.0001546929113225414 + f * 1.5201921024283159e-05
    )
    p = low + (ff * ff) * high
    return _double(_bits(p) + (_bits(shifted) << 52))


@kernel(inline="always")
def soft_positive(x, w, per_w):
    """Return ``P(x)`` and ``P'(x)`` for knee ``w`` with ``per_w = 1/w``."""
    z = falling_exp(abs(x) * per_w)
    one, two = 1.0 + z, 2.0 + z
    both = 1.0 / (one * two)
    r = z * one * both
    rr = r * r
    r4 = rr * rr
    q = (1.9999999998028117 + rr * 0.6666667930743927) + r4 * (
        (0.3999869090287265 + rr * 0.2862072210959956)
        + r4 * (0.21393250634891134 + rr * 0.24413068113489214)
    )
    upper = 1.0 if x >= 0.0 else z
    return max(x, 0.0) + w * r * q, upper * two * both


@kernel(inline="always")
def hard_positive(x, w, per_w):
    """Return ``max(x, 0)`` and its slope: the law at knee 0, same form as `soft_positive`."""
    slope = 1.0 if x > 0.0 else 0.0
    return max(x, 0.0), slope


@kernel(inline="always")
def positive(x, w, per_w, soft):
    """Return ``P(x)`` and ``P'(x)``; ``soft`` false gives the law at knee 0."""
    if soft:
        return soft_positive(x, w, per_w)
    return hard_positive(x, w, per_w)


@kernel(inline="always")
def second(p, slope, per_w, soft):
    """Return half the second derivative of ``P(x)^2`` from ``P`` and ``P'``."""
    if soft:
        return slope * slope + p * slope * (1.0 - slope) * per_w
    return slope
