"""Make the shipped riffs. Run it to write them anew; equal seeds give equal samples.

The riffs were invented for sweepset: sustained chords, a plucked line and a
noise bed on which notches show plainly. Pitches are equal-tempered from
A4 = 440 Hz (ISO 16).

References
----------
K. Karplus and A. Strong, "Digital synthesis of plucked-string and drum timbres",
Computer Music Journal 7 (2) (1983) 43-55.
D. A. Jaffe and J. O. Smith, "Extensions of the Karplus-Strong plucked-string
algorithm", Computer Music Journal 7 (2) (1983) 56-69.
(Both from memory.)
"""

from __future__ import annotations

import math
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

SAMPLE_RATE_HZ = 48_000
PEAK_DBFS = -6.0
SEED = 20_261_201

# Notes as (beat, MIDI note number, loudness 0 to 1, beats held), at 96 beats a minute,
# after a moment of silence.
BEAT_S = 60.0 / 96.0
PLUCK_BEATS = 16
LEAD_S = 0.02
PLUCKED = (
    (0.0, 45, 1.00, 2.0),
    (0.5, 57, 0.70, 1.0),
    (1.0, 60, 0.80, 1.0),
    (1.5, 64, 0.85, 1.5),
    (2.25, 62, 0.75, 0.75),
    (3.0, 60, 0.70, 1.0),
    (3.5, 57, 0.65, 1.5),
    (4.0, 43, 1.00, 2.0),
    (4.5, 55, 0.70, 1.0),
    (5.0, 59, 0.80, 1.0),
    (5.5, 62, 0.85, 1.5),
    (6.25, 64, 0.75, 0.75),
    (7.0, 67, 0.90, 1.5),
    (8.0, 41, 1.00, 2.0),
    (8.5, 53, 0.70, 1.0),
    (9.0, 57, 0.80, 1.0),
    (9.5, 60, 0.85, 1.5),
    (10.25, 64, 0.80, 0.75),
    (11.0, 67, 0.85, 1.0),
    (11.5, 64, 0.70, 1.0),
    (12.0, 40, 1.00, 3.5),
    (12.5, 52, 0.70, 2.5),
    (13.0, 59, 0.80, 2.0),
    (13.5, 62, 0.80, 2.0),
    (14.25, 64, 0.85, 1.5),
)

# Chords as (start in seconds, MIDI note numbers from the lowest string up).
STRUM_SECONDS = 10.0
STRUMMED = (
    (0.00, (40, 47, 52, 55, 62, 67)),
    (2.50, (43, 50, 55, 59, 62, 69)),
    (5.00, (45, 52, 57, 60, 64, 67)),
    (7.50, (36, 43, 52, 55, 59, 62)),
)
STRUM_STEP_S = 0.019
TOP_PARTIAL_HZ = 10_000.0

NOISE_SECONDS = 8.0
NOISE_BAND_HZ = (50.0, 12_000.0)


def pitch_hz(note: int) -> float:
    """Return the equal-tempered frequency of a MIDI note number (A4 = 69 = 440 Hz)."""
    return 440.0 * float(2.0 ** ((note - 69) / 12.0))


def plucked_string(
    pitch: float, seconds: float, loudness: float, rng: np.random.Generator
) -> Array:
    """Return one plucked note.

    A burst of noise runs round a delay line; each round a two-point average damps
    the high partials (Karplus and Strong). After Jaffe and Smith: an all-pass makes
    the loop's length fractional, so that the note is in tune; a shortened decay
    factor; a comb for the place of the pluck; a one-pole low-pass for its force.

    Parameters
    ----------
    pitch : float
        Fundamental [Hz].
    seconds : float
        Length [s].
    loudness : float
        Force of the pluck, 0 to 1.
    rng : numpy.random.Generator
        Source of the burst.
    """
    from scipy.signal import lfilter

    count = round(seconds * SAMPLE_RATE_HZ)
    omega = 2.0 * math.pi * pitch / SAMPLE_RATE_HZ
    stretch = 0.5
    # -60 dB after 5 s for low notes, sooner for high ones.
    decay_s = 5.0 * (110.0 / pitch) ** 0.4
    factor = 10.0 ** (-3.0 / (decay_s * pitch))
    # Loop length in samples: N + the average's half sample + the all-pass's share.
    rest = SAMPLE_RATE_HZ / pitch - stretch
    whole = math.floor(rest - 0.3)
    share = rest - whole
    c = math.sin((omega - omega * share) / 2.0) / math.sin((omega + omega * share) / 2.0)
    loop = factor * np.convolve([1.0 - stretch, stretch], [c, 1.0])
    denominator = np.zeros(whole + 3)
    denominator[:2] = [1.0, c]
    denominator[whole:] -= loop
    burst = np.zeros(count)
    burst[:whole] = 2.0 * rng.random(whole) - 1.0
    burst[:whole] -= burst[:whole].mean()
    softness = math.exp(-2.0 * math.pi * (900.0 + 5500.0 * loudness) / SAMPLE_RATE_HZ)
    burst = lfilter([1.0 - softness], [1.0, -softness], burst)
    place = round(0.17 * SAMPLE_RATE_HZ / pitch)
    burst[place:] -= 0.9 * burst[:-place]
    note = lfilter([1.0, c], denominator, burst)
    release = round(0.03 * SAMPLE_RATE_HZ)
    note[-release:] *= 0.5 + 0.5 * np.cos(np.pi * np.arange(release) / release)
    attack_rms = float(np.sqrt(np.mean(note[: 2 * whole] ** 2)))
    return np.asarray(note, float) * (loudness / attack_rms)


def riff_pluck() -> Array:
    """Return the plucked line, shape (frames,)."""
    rng = np.random.default_rng([SEED, 1])
    out = np.zeros(round(PLUCK_BEATS * BEAT_S * SAMPLE_RATE_HZ))
    for beat, note, loudness, held in PLUCKED:
        tone = plucked_string(pitch_hz(note), held * BEAT_S, loudness, rng)
        start = round((LEAD_S + beat * BEAT_S) * SAMPLE_RATE_HZ)
        out[start : start + len(tone)] += tone[: len(out) - start]
    return out


def riff_strum() -> Array:
    """Return the sustained chords, shape (frames,): partials that decay the sooner the higher."""
    rng = np.random.default_rng([SEED, 2])
    out = np.zeros(round(STRUM_SECONDS * SAMPLE_RATE_HZ))
    ends = [start for start, _ in STRUMMED[1:]] + [STRUM_SECONDS]
    for (start, notes), end in zip(STRUMMED, ends, strict=True):
        for string, note in enumerate(notes):
            first = round((start + string * STRUM_STEP_S) * SAMPLE_RATE_HZ)
            count = round(end * SAMPLE_RATE_HZ) - first
            time_s = np.arange(count) / SAMPLE_RATE_HZ
            tone = np.zeros(count)
            pitch = pitch_hz(note)
            for partial in range(1, int(TOP_PARTIAL_HZ / pitch) + 1):
                fade = np.exp(-time_s * (0.22 + 0.045 * partial))
                phase = 2.0 * math.pi * rng.random()
                wave = np.sin(2.0 * np.pi * partial * pitch * time_s + phase)
                tone += fade * wave * partial**-0.9
            tone *= _edges(count, 0.012)
            out[first : first + count] += tone
    ending = round(0.3 * SAMPLE_RATE_HZ)
    out[-ending:] *= 0.5 + 0.5 * np.cos(np.pi * np.arange(ending) / ending)
    return out


def riff_noise() -> Array:
    """Return the noise bed, shape (frames,): equal power in every octave of its band."""
    rng = np.random.default_rng([SEED, 3])
    count = round(NOISE_SECONDS * SAMPLE_RATE_HZ)
    spectrum = np.fft.rfft(2.0 * rng.random(count) - 1.0)
    freq_hz = np.fft.rfftfreq(count, 1.0 / SAMPLE_RATE_HZ)
    low, high = NOISE_BAND_HZ
    shape = 1.0 / np.sqrt(np.maximum(freq_hz, low))
    # Fourth-order Butterworth edges, magnitude only.
    shape *= (freq_hz / low) ** 4 / np.sqrt(1.0 + (freq_hz / low) ** 8)
    shape /= np.sqrt(1.0 + (freq_hz / high) ** 8)
    out: Array = np.fft.irfft(spectrum * shape, count)
    return out * _edges(count, 0.05)


def _edges(count: int, seconds: float) -> Array:
    """Return a gain of 1 with a raised-cosine rise and fall at its ends, shape (count,)."""
    edge = round(seconds * SAMPLE_RATE_HZ)
    gain = np.ones(count)
    gain[:edge] = 0.5 - 0.5 * np.cos(np.pi * np.arange(edge) / edge)
    gain[-edge:] = gain[:edge][::-1]
    return gain


RIFFS: dict[str, tuple[Callable[[], Array], str]] = {
    "riff_strum": (riff_strum, "Sustained chords"),
    "riff_pluck": (riff_pluck, "Plucked line"),
    "riff_noise": (riff_noise, "Noise bed"),
}


def make_riff(name: str) -> Array:
    """Return a shipped riff's samples, shape (frames, 1), its peak at -6 dBFS.

    Parameters
    ----------
    name : str
        ``"riff_strum"``, ``"riff_pluck"`` or ``"riff_noise"``.
    """
    samples = RIFFS[name][0]()
    samples -= samples.mean()
    gain = 10.0 ** (PEAK_DBFS / 20.0) / float(np.max(np.abs(samples)))
    return np.asarray(samples[:, None] * gain)


def main(folder: Path) -> None:
    """Write the riffs as 24-bit FLAC files into a folder."""
    from sweepset.render.audio import AudioWriter

    for name, (_, title) in RIFFS.items():
        samples = make_riff(name)
        with AudioWriter(
            folder / f"{name}.flac",
            SAMPLE_RATE_HZ,
            1,
            len(samples),
            encoding="flac24",
            title=title,
        ) as writer:
            writer.write(samples)


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
