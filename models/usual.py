"""The usual percentage: the range of a set's readings over their mean.

Common practice, no published source. It depends on where the fixture puts its zero,
and one reading is one point of a curve; it stands beside the stagger so that people
can see where the two disagree.
"""

from __future__ import annotations

from collections.abc import Sequence

USUAL_LIMIT = 0.05


def usual_fraction(readings_v: Sequence[float]) -> float:
    """Return range over mean of the readings, as a fraction.

    Parameters
    ----------
    readings_v : sequence of float
        One reading a part, all of one kind [V].

    Raises
    ------
    ValueError
        If there is no reading or their mean is not positive: the rule then says nothing.
    """
    if not readings_v:
        raise ValueError("the usual percentage needs readings")
    mean = sum(readings_v) / len(readings_v)
    if not mean > 0.0:
        raise ValueError(
            f"the readings' mean is {mean:.3f} V; the usual percentage needs it positive"
        )
    return (max(readings_v) - min(readings_v)) / mean


def why_they_disagree(
    percent: float, stagger_octaves: float, other_percent: float, other_stagger_octaves: float
) -> str | None:
    """Return a sentence if percentage and stagger rank two sets differently, else None.

    Parameters
    ----------
    percent, other_percent : float
        Usual percentages as fractions.
    stagger_octaves, other_stagger_octaves : float
        Expected staggers [octaves].
    """
    if (percent - other_percent) * (stagger_octaves - other_stagger_octaves) >= 0.0:
        return None
    tighter, looser = "the other set", "this set"
    if percent < other_percent:
        tighter, looser = looser, tighter
    return (
        f"{tighter} has the closer readings ({100 * min(percent, other_percent):.1f} % against "
        f"{100 * max(percent, other_percent):.1f} %) but {looser} keeps together over the sweep "
        f"({min(stagger_octaves, other_stagger_octaves):.3f} against "
        f"{max(stagger_octaves, other_stagger_octaves):.3f} octave): a reading is one point of the "
        "curve, and parts with the same reading and different current factors part company "
        "elsewhere on it"
    )
