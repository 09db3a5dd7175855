"""How different two takes are, in what the ear may go by.

Level per ERB band over time, notch tracks in octaves, plain null residual; and one plain
sentence against published thresholds. The sentence says what to expect, not what is so:
the blind trial decides.

Thresholds, none of them found with phase shifters and music:

- level of a band: 0.5 to 1 dB for tones and noise (general psychoacoustics texts; from
  memory), and about 0.8 dB for one component among others (D. M. Green, "Profile Analysis",
  1988; from memory);
- place of a resonance: 0.079 F/sqrt(Q) ("Resonance-frequency discrimination", JASA 83,
  1988). A dip is heard less well than a peak as wide (R. Buecklein, JAES 29, 1981, 126-131;
  from memory), so this is the least it could be.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from ..models.cycle import Cycle
from ..models.errors import InputError
from .audio import AudioReader
from .erb import band_centres_hz, band_weights

Array = npt.NDArray[np.float64]

WINDOW_S = 0.04
# Bands this far below a take's loudest are not counted.
FLOOR_DB = 50.0
# A level difference this small is hardly heard, this large mostly is, and this one plainly.
FAINT_DB, HEARD_DB, PLAIN_DB = 0.5, 1.0, 3.0
# A cell counts as heard at this share of cells.
HIGH_SHARE = 0.95
RESONANCE = 0.079
PHASES = 48
MOMENTS = 3
TRACK_POINTS = 512


@dataclass(frozen=True)
class BandLevels:
    """One take as the ear's bands have it.

    Parameters
    ----------
    time_s : ndarray
        Middles of the windows, shape (T,) [s].
    centre_hz : ndarray
        Bands, shape (B,) [Hz].
    level_db : ndarray
        Shape (T, B), channels added up; minus infinity where silent [dB re full scale].
    """

    time_s: Array
    centre_hz: Array
    level_db: Array


@dataclass(frozen=True)
class TakeDifference:
    """How far two takes are apart.

    Parameters
    ----------
    level_db : ndarray
        Level of the first less the second, shape (T, B) [dB]; NaN where neither counts.
    time_s, centre_hz : ndarray
        The cells' times [s] and bands [Hz].
    rms_db, high_db : float
        Root mean square of the level differences, and what 95 % of them stay within [dB].
    residual_db : float
        Root mean square of first less second over that of the first [dB]; minus infinity
        for equal takes.
    notch_rms_octaves, notch_most_octaves : float
        Difference of the predicted notch tracks over the cycle; NaN where the takes have
        no common cycle.
    notch_least_octaves : float
        The least shift that could be heard by the threshold for resonances, the notches'
        own breadth taken [octaves]; NaN likewise.
    phase_s, phase_db : ndarray
        Root mean square level difference over the cycle, shape (48,) [s], [dB]; empty
        without a cycle.
    moments_s : tuple of float
        When the takes differ most [s].
    """

    level_db: Array
    time_s: Array
    centre_hz: Array
    rms_db: float
    high_db: float
    residual_db: float
    notch_rms_octaves: float
    notch_most_octaves: float
    notch_least_octaves: float
    phase_s: Array
    phase_db: Array
    moments_s: tuple[float, ...]


def band_levels(path: str | Path) -> BandLevels:
    """Return a take's levels per ERB band over time.

    Parameters
    ----------
    path : str or Path
        The take; one shorter than a window is measured whole.

    Raises
    ------
    InputError
        If it cannot be read.
    """
    with AudioReader(path) as reader:
        rate = reader.sample_rate_hz
        size = 2 * max(round(WINDOW_S * rate / 2), 8)
        hop = size // 2
        centres = band_centres_hz(rate)
        window = np.hanning(size + 1)[:size]
        weights = band_weights(centres, np.asarray(np.fft.rfftfreq(size, 1.0 / rate), float))
        scale = 2.0 / (window**2).sum() / size
        found = [
            scale * (np.abs(np.fft.rfft(frames * window[:, None], axis=1)) ** 2).sum(axis=2)
            for frames in _windows(reader.blocks(), size, hop)
        ]
    power = np.concatenate(found) @ weights
    with np.errstate(divide="ignore"):
        level_db = 10.0 * np.log10(power)
    time_s = (np.arange(len(power)) * hop + size / 2) / rate
    return BandLevels(time_s, centres, level_db)


def compare_takes(
    first: str | Path,
    second: str | Path,
    first_cycle: Cycle | None = None,
    second_cycle: Cycle | None = None,
    *,
    levels: tuple[BandLevels, BandLevels] | None = None,
) -> TakeDifference:
    """Return how far two takes of one riff are apart.

    Parameters
    ----------
    first, second : str or Path
        The takes, alike in length, rate and channels, brought to one loudness.
    first_cycle, second_cycle : Cycle, optional
        What their sets do; None for a dry take.
    levels : (BandLevels, BandLevels), optional
        Their levels, if known already.

    Raises
    ------
    InputError
        If a take cannot be read, or the two are not alike.
    """
    one, other = levels or (band_levels(first), band_levels(second))
    if one.level_db.shape != other.level_db.shape:
        raise InputError(
            f"{first} and {second} differ in length or sample rate; compare takes of one riff"
        )
    apart = _level_difference(one.level_db, other.level_db)
    cells = np.abs(apart[np.isfinite(apart)])
    by_time = np.sqrt(np.nan_to_num(_mean(apart**2, axis=1)))
    cycle = first_cycle or second_cycle
    together = _common(first_cycle, second_cycle)
    phase_s, phase_db = np.zeros(0), np.zeros(0)
    if cycle is not None and (together or not (first_cycle and second_cycle)):
        phase_s, phase_db = _folded(one.time_s, by_time, cycle.period_s)
    rms, most, least = math.nan, math.nan, math.nan
    if first_cycle is not None and second_cycle is not None and together:
        rms, most, least = _notch_difference(first_cycle, second_cycle)
    return TakeDifference(
        level_db=apart,
        time_s=one.time_s,
        centre_hz=one.centre_hz,
        rms_db=float(np.sqrt(np.mean(cells**2))) if cells.size else 0.0,
        high_db=float(np.quantile(cells, HIGH_SHARE)) if cells.size else 0.0,
        residual_db=null_residual_db(first, second),
        notch_rms_octaves=rms,
        notch_most_octaves=most,
        notch_least_octaves=least,
        phase_s=phase_s,
        phase_db=phase_db,
        moments_s=_moments(one.time_s, by_time, phase_s, phase_db, cycle),
    )


def difference_sentence(difference: TakeDifference) -> str:
    """Return one plain sentence on two takes: how large, against what, how sure."""
    high, rms = difference.high_db, difference.rms_db
    where = f"level per ear band differs by {rms:.1f} dB rms, {high:.1f} dB in the farthest 5 %"
    if high < FAINT_DB:
        told = "less than the 0.5 to 1 dB that listeners tell apart at best: expect no difference"
    elif high < HEARD_DB:
        told = "about the 0.5 to 1 dB that listeners tell apart at best: a difference is doubtful"
    elif high < PLAIN_DB:
        told = "above the 0.5 to 1 dB that listeners tell apart at best: faint, if heard at all"
    else:
        told = "well above the 0.5 to 1 dB that listeners tell apart: a difference is likely"
    said = f"{where[0].upper()}{where[1:]}, {told}"
    if math.isfinite(difference.notch_most_octaves):
        most, least = difference.notch_most_octaves, difference.notch_least_octaves
        side = "more" if most > least else "less"
        said += (
            f"; notches lie up to {most:.2f} octave apart, {side} than the {least:.2f} by which a "
            "resonance as broad must move to be heard (a dip: rather more)"
        )
    if math.isfinite(difference.residual_db):
        said += f"; null residual {difference.residual_db:.0f} dB"
    return f"{said}. Thresholds from tones and noise; your riff may hide or show more."


def null_residual_db(first: str | Path, second: str | Path) -> float:
    """Return rms of first less second over rms of first [dB]; minus infinity for equal takes."""
    residual = whole = 0.0
    with AudioReader(first) as one, AudioReader(second) as other:
        if (one.frames, one.channels) != (other.frames, other.channels):
            raise InputError(f"{first} and {second} differ in length or channels")
        for a, b in zip(one.blocks(), other.blocks(), strict=True):
            residual += float(((a - b) ** 2).sum())
            whole += float((a**2).sum())
    if residual == 0.0:
        return -math.inf
    return math.inf if whole == 0.0 else 10.0 * math.log10(residual / whole)


def _windows(blocks: Iterable[Array], size: int, hop: int) -> Iterable[Array]:
    """Yield overlapping windows, shape (n, size, channels), the last padded with silence."""
    kept: Array | None = None
    for block in blocks:
        kept = block if kept is None else np.concatenate([kept, block])
        count = (len(kept) - size) // hop + 1
        if count > 0:
            places = np.arange(count)[:, None] * hop + np.arange(size)
            yield kept[places]
            kept = kept[count * hop :]
    if kept is not None and len(kept):
        padded = np.zeros((size, kept.shape[1]))
        padded[: min(len(kept), size)] = kept[:size]
        yield padded[None]


def _level_difference(one: Array, other: Array) -> Array:
    """Return first less second [dB], NaN where both are far below the loudest cell."""
    top = max(one.max(), other.max())
    if not math.isfinite(top):
        return np.full(one.shape, np.nan)
    floor = top - FLOOR_DB
    apart = np.maximum(one, floor) - np.maximum(other, floor)
    return np.where((one > floor) | (other > floor), apart, np.nan)


def _mean(values: Array, axis: int) -> Array:
    """Return the mean over cells that count; NaN where none does."""
    seen = np.isfinite(values)
    count = seen.sum(axis=axis)
    total = np.where(seen, values, 0.0).sum(axis=axis)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _common(first: Cycle | None, second: Cycle | None) -> bool:
    """Whether two takes run through their cycles together."""
    if first is None or second is None:
        return False
    return abs(first.period_s - second.period_s) <= 1e-6 * first.period_s


def _folded(time_s: Array, by_time: Array, period_s: float) -> tuple[Array, Array]:
    """Return the rms difference over the cycle, from as many cycles as the riff has."""
    place = np.floor((time_s % period_s) / period_s * PHASES).astype(int) % PHASES
    count = np.bincount(place, minlength=PHASES)
    power = np.bincount(place, by_time**2, minlength=PHASES)
    middle = (np.arange(PHASES) + 0.5) * period_s / PHASES
    return middle, np.sqrt(power / np.maximum(count, 1))


def _moments(
    time_s: Array, by_time: Array, phase_s: Array, phase_db: Array, cycle: Cycle | None
) -> tuple[float, ...]:
    """Return when to listen: the cycle's most different instant, each time it comes round."""
    if not by_time.size or by_time.max() <= 0.0:
        return ()
    end = float(time_s[-1])
    if cycle is None or not phase_db.size or end < 1.5 * cycle.period_s:
        return (float(time_s[by_time.argmax()]),)
    at = float(phase_s[phase_db.argmax()])
    times = np.arange(at, end, cycle.period_s)
    # Where the riff sounds and the takes do differ, not in its rests.
    near = [float(by_time[np.abs(time_s - t).argmin()]) for t in times]
    chosen = sorted(sorted(range(len(times)), key=lambda n: -near[n])[:MOMENTS])
    return tuple(float(times[n]) for n in chosen)


def _notch_difference(first: Cycle, second: Cycle) -> tuple[float, float, float]:
    """Return rms and greatest distance of the notch tracks, and the least shift heard [octaves]."""
    tracks = []
    for cycle in (first, second):
        grid = np.linspace(0.0, cycle.period_s, TRACK_POINTS, endpoint=False)
        columns = [
            np.interp(grid, cycle.time_s, track, period=cycle.period_s)
            for track in np.log2(cycle.notch_hz).T
        ]
        tracks.append(np.stack(columns, axis=-1))
    count = min(track.shape[1] for track in tracks)
    apart = np.abs(tracks[0][:, :count] - tracks[1][:, :count])
    apart = apart[np.isfinite(apart)]
    if not apart.size:
        return math.nan, math.nan, math.nan
    # Half-power edges of the lowest notch of N stages alike: tan((pi/2 -/+ pi/4) / N)
    # (check: N atan x = odd pi/4).
    stages = first.break_hz.shape[1]
    low, middle, high = (math.tan(angle / stages) for angle in np.pi * np.array([0.25, 0.5, 0.75]))
    least = math.log2(1.0 + RESONANCE / math.sqrt(middle / (high - low)))
    return float(np.sqrt(np.mean(apart**2))), float(apart.max()), least
