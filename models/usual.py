"""The usual percentage: the range of a set's readings over their mean.

Common practice, no published source. It depends on where the fixture puts its zero,
and one reading is one point of a curve; it stands beside the stagger so that people
can see where the two disagree.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

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
    fraction: float, stagger_octaves: float, other_fraction: float, other_stagger_octaves: float
) -> str | None:
    """Return a sentence if percentage and stagger rank two sets differently, else None.

    Parameters
    ----------
    fraction, other_fraction : float
        Usual percentages of this and the other set, as fractions.
    stagger_octaves, other_stagger_octaves : float
        Expected staggers [octaves].
    """
    if (fraction - other_fraction) * (stagger_octaves - other_stagger_octaves) >= 0.0:
        return None
    closer, better = "the other set", "this set"
    if fraction < other_fraction:
        closer, better = better, closer
    near, far = sorted((fraction, other_fraction))
    low, high = sorted((stagger_octaves, other_stagger_octaves))
    return (
        f"{closer} has the closer readings ({100 * near:.1f} % against {100 * far:.1f} %) but "
        f"{better} keeps together over the sweep ({low:.3f} against {high:.3f} octave): a reading "
        "is one point of the curve, and parts with the same reading and different current factors "
        "part company elsewhere on it"
    )


def usual_choice(readings_v: Mapping[str, float], stages: int) -> tuple[str, ...] | None:
    """Return the set that the usual rule alone would take: the least range over mean.

    Parameters
    ----------
    readings_v : mapping of str to float
        Part to reading, all of one kind [V].
    stages : int
        Parts in a set.

    Returns
    -------
    tuple of str or None
        None if there are too few positive readings. Such a set is always a run of the
        sorted readings: at a given least reading, the next ones have the least range.
    """
    ranked = sorted((value, label) for label, value in readings_v.items() if value > 0.0)
    runs = [ranked[n : n + stages] for n in range(len(ranked) - stages + 1)]
    if not runs:
        return None
    best = min(runs, key=lambda run: usual_fraction([value for value, _ in run]))
    return tuple(label for _, label in best)
