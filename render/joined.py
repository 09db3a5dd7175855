"""One WAV that goes back and forth between two takes, for those who only have a player.

The music runs on; only the take changes. It changes where the riff is quietest within
reach, as between two notes, over a few milliseconds.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from ..models.atomic import atomic_path
from ..models.errors import InputError
from .audio import AudioReader, AudioWriter, check_audio

Array = npt.NDArray[np.float64]

# A take is heard for so long before the next join is looked for, and at most so long.
LEAST_S, MOST_S = 2.5, 4.5
ENVELOPE_S = 0.01
# Silence of this length is a join's best place.
GAP_S = 0.05
FADE_S = 0.008


@dataclass(frozen=True)
class Joined:
    """What was joined.

    Parameters
    ----------
    path : Path
        The WAV.
    joins_s : tuple of float
        Where the take changes; the first take begins [s].
    """

    path: Path
    joins_s: tuple[float, ...]


def musical_joins(path: str | Path) -> tuple[float, ...]:
    """Return where a riff can change takes, 2.5 to 4.5 s apart, at its quietest moments [s].

    Parameters
    ----------
    path : str or Path
        The riff, or any of its takes.
    """
    envelope = []
    with AudioReader(path) as reader:
        rate = reader.sample_rate_hz
        size = max(round(ENVELOPE_S * rate), 1)
        kept = np.zeros(0)
        for block in reader.blocks():
            power = np.concatenate([kept, (block**2).sum(axis=1)])
            count = len(power) // size
            envelope.append(power[: count * size].reshape(count, size).mean(axis=1))
            kept = power[count * size :]
        length_s = reader.frames / rate
    steps = np.concatenate(envelope)
    step_s = size / rate
    wide = max(round(GAP_S / step_s), 1)
    gentle = np.convolve(steps, np.ones(wide) / wide, mode="same")
    joins: list[float] = []
    start = 0.0
    while start + LEAST_S + 1.0 < length_s:
        low = round((start + LEAST_S) / step_s)
        high = min(round((start + MOST_S) / step_s), len(gentle))
        if high <= low:
            break
        start = (low + int(gentle[low:high].argmin()) + 0.5) * step_s
        joins.append(start)
    return tuple(joins)


def join_takes(
    first: str | Path, second: str | Path, path: str | Path, joins_s: tuple[float, ...]
) -> Joined:
    """Write the WAV, whole or not at all.

    Parameters
    ----------
    first, second : str or Path
        The takes, alike in length, rate and channels.
    path : str or Path
        The WAV to be.
    joins_s : tuple of float
        Where to change, see :func:`musical_joins`.

    Raises
    ------
    InputError
        If a take cannot be read, or the two are not alike.
    """
    one, other = check_audio(first), check_audio(second)
    if (one.frames, one.channels, one.sample_rate_hz) != (
        other.frames, other.channels, other.sample_rate_hz,
    ):  # fmt: skip
        raise InputError(f"{first} and {second} differ in length, rate or channels")
    target = Path(path)
    title = f"{Path(first).stem} and {Path(second).stem} by turns"
    with ExitStack() as stack:
        place = stack.enter_context(atomic_path(target))
        writer = stack.enter_context(
            AudioWriter(
                place, one.sample_rate_hz, one.channels, one.frames, title=title,
                shown_as=str(target),
            )
        )  # fmt: skip
        for block in _blended(first, second, joins_s):
            writer.write(block)
    return Joined(target, joins_s)


def _blended(first: str | Path, second: str | Path, joins_s: tuple[float, ...]) -> Iterator[Array]:
    with AudioReader(first) as one, AudioReader(second) as other:
        rate, done = one.sample_rate_hz, 0
        for a, b in zip(one.blocks(), other.blocks(), strict=True):
            share = _share_of_second((done + np.arange(len(a))) / rate, joins_s)[:, None]
            yield (1.0 - share) * a + share * b
            done += len(a)


def _share_of_second(time_s: Array, joins_s: tuple[float, ...]) -> Array:
    """Return how much of the second take sounds at each time, 0 to 1."""
    share = np.zeros(len(time_s))
    for number, join in enumerate(joins_s):
        rise = np.clip((time_s - join) / FADE_S + 0.5, 0.0, 1.0)
        share += rise if number % 2 == 0 else -rise
    return share
