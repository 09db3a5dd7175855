"""Which takes of an audition are set against each other, and what is said of them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING, Any

from .measures import BandLevels, TakeDifference, band_levels, compare_takes, difference_sentence
from .page.data import PagePair, PageTake

if TYPE_CHECKING:
    from .audition import Audition

# More than this nobody reads.
MOST_PAIRS = 40


@dataclass(frozen=True)
class ComparedPair:
    """Two takes and how far they are apart.

    Parameters
    ----------
    first, second : int
        Places of the takes.
    names : (str, str)
        Their names.
    difference : TakeDifference
        What was measured.
    """

    first: int
    second: int
    names: tuple[str, str]
    difference: TakeDifference

    @property
    def sentence(self) -> str:
        """What is to be said of them."""
        return difference_sentence(self.difference)

    def as_page_pair(self) -> PagePair:
        """Return what the listening page shows."""
        return PagePair(self.first, self.second, self.sentence, self.difference.moments_s)

    def as_record(self) -> dict[str, Any]:
        """Return the figures in plain values."""
        difference = self.difference
        return {
            "first": self.names[0],
            "second": self.names[1],
            "level_rms_db": difference.rms_db,
            "level_95_db": difference.high_db,
            "null_residual_db": difference.residual_db,
            "notch_rms_octaves": difference.notch_rms_octaves,
            "notch_most_octaves": difference.notch_most_octaves,
            "listen_at_s": list(difference.moments_s),
            "sentence": self.sentence,
        }


def pairs_to_compare(made: Audition) -> list[tuple[int, int]]:
    """Return the pairs worth a word: different sets at one rate, else dry and wet.

    Parameters
    ----------
    made : Audition
        The takes.
    """
    wet = [n for n, setup in enumerate(made.setups) if setup is not None]
    rates = {n: setup.bus.rate_hz for n in wet if (setup := made.setups[n]) and setup.bus}
    pairs = [
        (a, b)
        for a, b in combinations(wet, 2)
        if abs(rates.get(a, -1.0) - rates.get(b, -2.0)) < 1e-6 * rates.get(a, 1.0)
    ]
    if not pairs and wet and len(wet) < len(made.setups):
        dry = next(n for n, setup in enumerate(made.setups) if setup is None)
        pairs = [(dry, n) for n in wet]
    return pairs[:MOST_PAIRS]


def compare_pairs(
    made: Audition,
    takes: Sequence[PageTake],
    progress: Callable[[float], object] | None = None,
) -> list[ComparedPair]:
    """Return what there is to say of the takes of an audition, pair by pair.

    Parameters
    ----------
    made : Audition
        The takes.
    takes : sequence of PageTake
        The same for the page, with their cycles.
    progress : callable, optional
        Told the share done, 0 to 1.
    """
    levels: dict[int, BandLevels] = {}
    found = []
    pairs = pairs_to_compare(made)
    for number, (a, b) in enumerate(pairs):
        for n in (a, b):
            if n not in levels:
                levels[n] = band_levels(takes[n].path)
        difference = compare_takes(
            takes[a].path, takes[b].path, takes[a].cycle, takes[b].cycle,
            levels=(levels[a], levels[b]),
        )  # fmt: skip
        found.append(ComparedPair(a, b, (takes[a].name, takes[b].name), difference))
        if progress:
            progress((number + 1) / len(pairs))
    return found
