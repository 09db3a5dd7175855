"""Preferred numbers: the E24 values in which resistors are sold.

A table, because no formula gives it: eight values differ from the rounded
geometric series for historical reasons. The one general library for it has not been
maintained for years.

References
----------
IEC 60063:2015, Preferred number series for resistors and capacitors (the values by
way of published transcriptions).
"""

from __future__ import annotations

import math

# Two digits, one decade.
E24 = (
    10,
    11,
    12,
    13,
    15,
    16,
    18,
    20,
    22,
    24,
    27,
    30,
    33,
    36,
    39,
    43,
    47,
    51,
    56,
    62,
    68,
    75,
    82,
    91,
)


def e24_between(low: float, high: float) -> list[float]:
    """Return the E24 values from `low` to `high`, both allowed, rising.

    Parameters
    ----------
    low, high : float
        Limits, positive, in any unit; a limit that is an E24 value counts as reached
        in spite of rounding.

    Raises
    ------
    ValueError
        If a limit is not positive and finite.
    """
    if not (0.0 < low < math.inf and 0.0 < high < math.inf):
        raise ValueError(f"limits must be positive and finite, got {low} and {high}")
    first, last = math.floor(math.log10(low)) - 2, math.ceil(math.log10(high))
    # Through the decimal text, so that 47e-9 is the float that is written so.
    values = [float(f"{digits}e{power}") for power in range(first, last + 1) for digits in E24]
    slack = 1e-12
    return [value for value in values if low * (1.0 - slack) <= value <= high * (1.0 + slack)]


def nearest_e24(value: float) -> float:
    """Return the E24 value nearest to `value`.

    Parameters
    ----------
    value : float
        Positive, in any unit.

    Returns
    -------
    float
        The nearest by ratio: 319 gives 330, as 314.6 divides 300 from 330.
        Exactly between two, the higher.

    Raises
    ------
    ValueError
        If `value` is not positive and finite.

    Notes
    -----
    Tables differ here: some divide at the arithmetic midpoint, some at the edges of the
    tolerance bands (18 in E6 is 22 or 15). The ratio is what an ear and a rate knob
    respond to, so this one divides at the geometric midpoint.
    """
    near = e24_between(value / 1.2, value * 1.2)
    return min(near, key=lambda choice: (abs(math.log(choice / value)), -choice))
