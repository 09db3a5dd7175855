"""What the listening page shows: takes, their sweeps and figures, the stretch embedded."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from ...models.cycle import Cycle, analyse_cycle
from ...models.errors import InputError
from ..audio import AudioFacts, check_audio

if TYPE_CHECKING:
    from ..audition import Audition
    from ..setup import Setup
    from ..take import TakeFile

# A page much larger than this opens slowly, or not at all.
PAGE_LIMIT_BYTES = 90_000_000
# FLAC holds no more channels.
MOST_CHANNELS = 8
CYCLE_POINTS = 256
LEAST_EXCERPT_S = 0.1


@dataclass(frozen=True)
class PageTake:
    """One take on the page.

    Parameters
    ----------
    name : str
        What tells it from the others.
    path : Path
        Its WAV.
    facts : tuple of (str, str)
        Figures to stand beside it, name and value.
    cycle : Cycle or None
        What its set does over one cycle; None for a dry take.
    gain_db : float
        Gain on the page over that of the WAV [dB].
    """

    name: str
    path: Path
    facts: tuple[tuple[str, str], ...]
    cycle: Cycle | None
    gain_db: float = 0.0


@dataclass(frozen=True)
class PagePair:
    """What is to be said of two takes.

    Parameters
    ----------
    first, second : int
        Places of the takes.
    sentence : str
        How different they are.
    moments_s : tuple of float
        When to listen, from the riff's start [s].
    """

    first: int
    second: int
    sentence: str
    moments_s: tuple[float, ...]


@dataclass(frozen=True)
class PageData:
    """Everything on the page.

    Parameters
    ----------
    title : str
        The riff's name.
    about : str
        What the takes have in common.
    notice : str
        What the listener should know before, such as that only an excerpt is here; may
        be empty.
    facts : AudioFacts
        Rate and channels of the takes.
    start_frame, stop_frame : int
        The stretch embedded.
    takes : tuple of PageTake
        In the order shown.
    pairs : tuple of PagePair
        May be empty.
    cautions : tuple of str
        Shown before the first sound.
    """

    title: str
    about: str
    notice: str
    facts: AudioFacts
    start_frame: int
    stop_frame: int
    takes: tuple[PageTake, ...]
    pairs: tuple[PagePair, ...]
    cautions: tuple[str, ...]


def page_takes(made: Audition) -> tuple[PageTake, ...]:
    """Return an audition's takes for the page."""
    return tuple(
        _take(name, take, setup)
        for name, take, setup in zip(made.names, made.takes, made.setups, strict=True)
    )


def page_data(
    title: str,
    takes: Sequence[PageTake],
    cautions: Sequence[str],
    *,
    excerpt_s: tuple[float, float] | None = None,
    pairs: Sequence[PagePair] = (),
    limit_bytes: int = PAGE_LIMIT_BYTES,
) -> PageData:
    """Return what a page shows.

    Parameters
    ----------
    title : str
        The riff's name.
    takes : sequence of PageTake
        One or more.
    cautions : sequence of str
        Shown before the first sound.
    excerpt_s : (float, float), optional
        Stretch to embed [s]; the whole takes where they fit, else a stretch about the first
        moment that a pair names, or from the start.
    pairs : sequence of PagePair
        What is to be said of two takes.
    limit_bytes : int
        Size that the embedded takes should keep within.

    Raises
    ------
    InputError
        If the takes differ in length, rate or channels, have too many channels, or the
        excerpt does not lie within them.
    """
    if not takes:
        raise InputError("a listening page needs at least one take")
    facts = [check_audio(take.path) for take in takes]
    _check_alike(takes, facts)
    rate, frames = facts[0].sample_rate_hz, facts[0].frames
    # 24-bit FLAC takes about three quarters of the plain samples, base64 four thirds.
    fitting = max(int(limit_bytes / (3 * facts[0].channels * len(takes))), 1)
    start, stop, notice = 0, frames, ""
    if excerpt_s is not None:
        start, stop = excerpt_frames(excerpt_s, facts[0])
    elif frames > fitting:
        moments = [moment for pair in pairs for moment in pair.moments_s]
        middle = round(moments[0] * rate) if moments else fitting // 2
        start = min(max(middle - fitting // 2, 0), frames - fitting)
        stop = start + fitting
    frame_bytes = 3 * facts[0].channels * len(takes)
    if (start, stop) != (0, frames):
        notice = (
            f"This page holds {start / rate:.1f} s to {stop / rate:.1f} s of the riff's "
            f"{frames / rate:.1f} s; the WAV files beside it are whole. "
            "Choose another stretch with --excerpt."
        )
    if frames > fitting and excerpt_s is None:
        notice += f" A page of all of it would have about {frame_bytes * frames / 1e6:.0f} MB."
    if (stop - start) > fitting:
        size = frame_bytes * (stop - start) / 1e6
        notice += f" It is a large page (about {size:.0f} MB) and opens slowly."
    channels = {1: "mono", 2: "stereo"}.get(facts[0].channels, f"{facts[0].channels} channels")
    return PageData(
        title=title,
        about=(
            f"{len(takes)} takes, {frames / rate:.1f} s, {rate} Hz, {channels}; all at one "
            "loudness, all from the same point of the sweep."
        ),
        notice=notice.strip(),
        facts=facts[0],
        start_frame=start,
        stop_frame=stop,
        takes=tuple(takes),
        pairs=tuple(pairs),
        cautions=tuple(cautions),
    )


def _check_alike(takes: Sequence[PageTake], facts: Sequence[AudioFacts]) -> None:
    first = facts[0]
    faults = []
    for take, own in zip(takes, facts, strict=True):
        if (own.frames, own.sample_rate_hz, own.channels) != (
            first.frames, first.sample_rate_hz, first.channels,
        ):  # fmt: skip
            faults.append(
                f"{take.path}: {own.frames} frames, {own.sample_rate_hz} Hz, {own.channels} "
                f"channel(s), but {takes[0].path} has {first.frames}, {first.sample_rate_hz} Hz, "
                f"{first.channels}; takes on one page must be alike: render them from one riff"
            )
    if first.channels > MOST_CHANNELS:
        faults.append(
            f"{takes[0].path}: {first.channels} channels; a listening page holds "
            f"{MOST_CHANNELS} at most: leave it out with --no-page"
        )
    if faults:
        raise InputError(faults)


def excerpt_frames(excerpt_s: tuple[float, float], facts: AudioFacts) -> tuple[int, int]:
    """Return the frames of an asked stretch.

    Raises
    ------
    InputError
        If it does not lie within the riff.
    """
    low, high = excerpt_s
    rate = facts.sample_rate_hz
    if not 0.0 <= low < facts.duration_s or high - low < min(LEAST_EXCERPT_S, facts.duration_s):
        raise InputError(
            f"excerpt {low:g} to {high:g} s: expected {LEAST_EXCERPT_S:g} s or more within the "
            f"riff's {facts.duration_s:.2f} s"
        )
    return round(low * rate), min(round(high * rate), facts.frames)


def _take(name: str, take: TakeFile, setup: Setup | None) -> PageTake:
    loudness = f"{take.lufs:.2f} LUFS" if math.isfinite(take.lufs) else "silent"
    facts = [
        ("file", take.path.name),
        ("loudness", loudness),
        ("peak", f"{take.peak_dbfs:.1f} dBFS"),
    ]
    if setup is None or setup.bus is None:
        return PageTake(name, take.path, tuple(facts), None)
    cycle = analyse_cycle(setup.circuit, setup.jfets, setup.bus, CYCLE_POINTS)
    stages = ", ".join(f"{n}: {label}" for n, label in enumerate(setup.settings.labels, start=1))
    facts = [
        ("circuit", setup.circuit.name),
        ("stage: part", stages),
        ("rate", f"{setup.bus.rate_hz:.3g} Hz"),
        ("bias trimmer", f"{100.0 * setup.bus.trimmer:.1f} % from the bottom end"),
        ("travel", f"{cycle.travel_octaves:.2f} octaves"),
        ("stagger", f"{cycle.stagger_octaves:.3f} octave"),
        ("stall", f"{100.0 * cycle.stall:.0f} % of the time"),
        *facts,
    ]
    return PageTake(name, take.path, tuple(facts), cycle)
