"""E24 against published transcriptions of IEC 60063 (check-values h1-h6)."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sweepset.models.eseries import E24, e24_between, nearest_e24

# check-values h1, h2: IEC 60063:2015 as transcribed (read second-hand).
E12 = {10, 12, 15, 18, 22, 27, 33, 39, 47, 56, 68, 82}
ONLY_IN_E24 = {11, 13, 16, 20, 24, 30, 36, 43, 51, 62, 75, 91}


def test_table_is_the_published_one() -> None:
    assert set(E24) == E12 | ONLY_IN_E24
    assert list(E24) == sorted(E24)
    assert len(E24) == 24


def test_eight_values_differ_from_the_rounded_series() -> None:
    # check-values h3: the eight exceptions, and what the rule would give in their place.
    rule = [round(10 * 10 ** (n / 24)) for n in range(24)]
    differ = {kept: ruled for kept, ruled in zip(E24, rule, strict=True) if kept != ruled}
    assert differ == {27: 26, 30: 29, 33: 32, 36: 35, 39: 38, 43: 42, 47: 46, 82: 83}


@pytest.mark.parametrize(
    ("value", "nearest"),
    [
        (319.0, 330.0),  # check-values h6, a published example
        (2.7e6, 2.7e6),
        (47e-9, 47e-9),
        (9.53, 9.1),  # the decade's seam: sqrt(9.1 x 10) = 9.539
        (9.55, 10.0),
    ],
)
def test_nearest(value: float, nearest: float) -> None:
    assert nearest_e24(value) == nearest


def test_halves_at_the_geometric_middle() -> None:
    # The stated rule. The arithmetic one would put the border at 10.5, not 10.488.
    middle = math.sqrt(10.0 * 11.0)
    assert nearest_e24(middle * (1.0 + 1e-9)) == 11.0
    assert nearest_e24(middle * (1.0 - 1e-9)) == 10.0


@given(st.floats(1e-12, 1e9))
def test_nearest_is_nearest_by_brute_force(value: float) -> None:
    every = [float(f"{digits}e{power}") for power in range(-15, 12) for digits in E24]
    best = min(abs(math.log(choice / value)) for choice in every)
    found = nearest_e24(value)
    assert found in every
    assert abs(math.log(found / value)) == best


@given(st.sampled_from(E24), st.integers(-12, 7))
def test_a_preferred_value_is_its_own_nearest(digits: int, power: int) -> None:
    value = float(f"{digits}e{power}")
    assert nearest_e24(value) == value
    assert e24_between(value, value) == [value]


def test_between_spans_decades() -> None:
    assert e24_between(8.2, 12.0) == [8.2, 9.1, 10.0, 11.0, 12.0]
    assert len(e24_between(1e3, 0.99e6)) == 72


@pytest.mark.parametrize("value", [0.0, -1.0, math.nan, math.inf])
def test_refuses_what_has_no_neighbour(value: float) -> None:
    with pytest.raises(ValueError, match="positive and finite"):
        nearest_e24(value)
