"""Integrated loudness by ITU-R BS.1770, and the gains that make takes equally loud.

Why a meter of our own beside the library's: the library's wants the whole
recording in memory and copies it, and an hour must not need more memory than a
minute; its filters hold the standard's 48 kHz response only at 48 kHz (its
default class not even there: 0.041 dB low, check-values f20), because they keep
the numerator 1, -2, 1 at every rate, 0.2 dB too much at 8 kHz. This one streams.
The library's meter stands against it in the tests.

Gating follows the standard: blocks of 400 ms, 75 % overlap, an absolute gate at
-70 LKFS, then a relative gate 10 LU below the mean of the survivors; a block
that the end cuts short is left out. A recording shorter than 400 ms has no block
at all: it is measured whole and ungated, and the result says so.

References
----------
ITU-R BS.1770, "Algorithms to measure audio programme loudness and true-peak
audio level", Tables 1 and 2; the analog prototypes behind the tables after
"ITU-R BS.1770-1 filter specifications (unofficial)", 2011.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from ..models.errors import InputError
from .filter_kernels import recursive

Array = npt.NDArray[np.float64]

SHELF_HZ = 1681.974450955533
SHELF_Q = 0.7071752369554196
SHELF_DB = 3.999843853973347
SHELF_MIDDLE_EXPONENT = 0.4996667741545416
HIGH_PASS_HZ = 38.13547087602444
HIGH_PASS_Q = 0.5003270373238773
TABLE_RATE_HZ = 48_000.0

OFFSET_DB = -0.691
ABSOLUTE_GATE_LUFS = -70.0
RELATIVE_GATE_LU = -10.0
# A block is four steps of 100 ms.
STEPS_PER_SECOND = 10
STEPS_PER_BLOCK = 4
# Channel weights: front channels 1, surrounds 1.41, low-frequency channel left out.
# Other counts are no loudspeaker layout, so every channel counts alike.
_WEIGHTS = {
    5: (1.0, 1.0, 1.0, 1.41, 1.41),
    6: (1.0, 1.0, 1.0, 0.0, 1.41, 1.41),
}

MATCH_TOLERANCE_LU = 0.05
PEAK_CEILING_DB = -1.0


def weighting_sections(sample_rate_hz: float) -> Array:
    """Return the two K-weighting filters as second-order sections.

    The analog prototypes under the bilinear transform, which gives the standard's
    tables at 48 kHz. The high-pass keeps the gain it has there, so that every
    rate weighs alike.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate, more than 3.4 kHz [Hz].

    Returns
    -------
    ndarray
        Shape (2, 6), each row ``b0 b1 b2 a0 a1 a2`` with ``a0`` 1.
    """
    k = math.tan(math.pi * SHELF_HZ / sample_rate_hz)
    high = 10.0 ** (SHELF_DB / 20.0)
    middle = high**SHELF_MIDDLE_EXPONENT
    norm = 1.0 + k / SHELF_Q + k * k
    shelf = [
        (high + middle * k / SHELF_Q + k * k) / norm,
        2.0 * (k * k - high) / norm,
        (high - middle * k / SHELF_Q + k * k) / norm,
        1.0,
        2.0 * (k * k - 1.0) / norm,
        (1.0 - k / SHELF_Q + k * k) / norm,
    ]
    k_table = math.tan(math.pi * HIGH_PASS_HZ / TABLE_RATE_HZ)
    k = math.tan(math.pi * HIGH_PASS_HZ / sample_rate_hz)
    norm = 1.0 + k / HIGH_PASS_Q + k * k
    gain = (1.0 + k_table / HIGH_PASS_Q + k_table * k_table) / norm
    high_pass = [
        gain,
        -2.0 * gain,
        gain,
        1.0,
        2.0 * (k * k - 1.0) / norm,
        (1.0 - k / HIGH_PASS_Q + k * k) / norm,
    ]
    return np.array([shelf, high_pass])


@dataclass(frozen=True)
class Loudness:
    """What the meter found.

    Parameters
    ----------
    lufs : float
        Integrated loudness; minus infinity for silence [LUFS].
    gated : bool
        False where the recording is shorter than 400 ms and was measured whole.
    peak : float
        Greatest absolute sample, 1 at full scale.
    block_powers : ndarray
        Weighted mean square of every block, shape (blocks,).
    """

    lufs: float
    gated: bool
    peak: float
    block_powers: Array = field(repr=False, compare=False)

    def after_gain(self, gain_db: float) -> float:
        """Return the loudness the same recording has after a gain [LUFS].

        It moves by the gain unless a block crosses the absolute gate; that is
        why it is worked out again.
        """
        powers = self.block_powers * 10.0 ** (gain_db / 10.0)
        return _gated_lufs(powers) if self.gated else _lufs(float(powers.mean()))

    def as_record(self) -> dict[str, Any]:
        """Return the figures for a provenance record; None stands for minus infinity."""
        return {
            "integrated_lufs": self.lufs if math.isfinite(self.lufs) else None,
            "gated": self.gated,
            "peak_dbfs": 20.0 * math.log10(self.peak) if self.peak > 0.0 else None,
        }


class LoudnessMeter:
    """The meter; feed it blocks, then ask.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate [Hz].
    channels : int
        Number of channels. Five and six are taken as the standard's surround
        layouts (L R C Ls Rs, and L R C LFE Ls Rs); any other number weighs alike.
    """

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        self._rate = sample_rate_hz
        self._sections = weighting_sections(sample_rate_hz)
        self._state = np.zeros((2, 2, channels))
        self._weights = np.array(_WEIGHTS.get(channels, (1.0,) * channels))
        self._steps: list[float] = []
        self._step_lengths: list[int] = []
        self._open_sum = 0.0
        self._open_length = 0
        self._frames = 0
        self._peak = 0.0

    def add(self, block: Array) -> None:
        """Take in a block, shape (n, channels), 1 at full scale."""
        if not len(block):
            return
        self._peak = max(self._peak, float(np.max(np.abs(block))))
        weighted = np.ascontiguousarray(block, float)
        for section, state in zip(self._sections, self._state, strict=True):
            made = np.empty_like(weighted)
            recursive(section[:3], section[3:], weighted, state, made)
            weighted = made
        powers = np.square(weighted) @ self._weights
        start = 0
        while start < len(powers):
            # Steps end at whole multiples of 100 ms, rounded to the frame, so that
            # no rate drifts (11025 Hz has 1102.5 frames in a step).
            step_end = round((len(self._steps) + 1) * self._rate / STEPS_PER_SECOND)
            taken = min(step_end - self._frames, len(powers) - start)
            self._open_sum += float(np.sum(powers[start : start + taken]))
            self._open_length += taken
            self._frames += taken
            start += taken
            if self._frames == step_end:
                self._steps.append(self._open_sum)
                self._step_lengths.append(self._open_length)
                self._open_sum = 0.0
                self._open_length = 0

    def result(self) -> Loudness:
        """Return the loudness of everything taken in so far."""
        if len(self._steps) >= STEPS_PER_BLOCK:
            ones = np.ones(STEPS_PER_BLOCK)
            sums = np.convolve(self._steps, ones, "valid")
            powers = sums / np.convolve(self._step_lengths, ones, "valid")
            return Loudness(_gated_lufs(powers), True, self._peak, powers)
        total = sum(self._steps) + self._open_sum
        power = total / self._frames if self._frames else 0.0
        return Loudness(_lufs(power), False, self._peak, np.array([power]))


def measure_loudness(audio: Array, sample_rate_hz: float) -> Loudness:
    """Return the loudness of a recording in memory.

    Parameters
    ----------
    audio : ndarray
        Shape (frames, channels) or (frames,), 1 at full scale.
    sample_rate_hz : float
        Sample rate [Hz].
    """
    columns = audio[:, None] if audio.ndim == 1 else audio
    meter = LoudnessMeter(sample_rate_hz, columns.shape[1])
    meter.add(columns)
    return meter.result()


@dataclass(frozen=True)
class Match:
    """Gains that make takes equally loud.

    Parameters
    ----------
    gains_db : tuple of float
        One for each take, the common attenuation included.
    target_lufs : float
        Loudness all takes have afterwards; minus infinity if all are silent.
    common_attenuation_db : float
        What every take was lowered by so that none passes the peak ceiling, 0 or more.
    """

    gains_db: tuple[float, ...]
    target_lufs: float
    common_attenuation_db: float


def match_loudness(
    takes: Sequence[Loudness],
    *,
    target_lufs: float | None = None,
    ceiling_db: float = PEAK_CEILING_DB,
) -> Match:
    """Return the gains that make takes equally loud within 0.05 LU.

    Parameters
    ----------
    takes : sequence of Loudness
        The takes as measured. Silent ones keep gain 0.
    target_lufs : float, optional
        Wanted loudness; left out, that of the quietest take, so that no take is
        raised.
    ceiling_db : float
        Highest sample peak allowed [dBFS]. If any take would pass it, all are
        lowered by the same amount.

    Raises
    ------
    InputError
        If a take cannot be brought to the target, because it is nearly silent.
    """
    heard = [take for take in takes if math.isfinite(take.lufs)]
    if not heard:
        return Match((0.0,) * len(takes), -math.inf, 0.0)
    wanted = min(take.lufs for take in heard) if target_lufs is None else target_lufs
    level = wanted
    # Lowering all takes may push a block under the absolute gate, so gains are
    # worked out again for the lowered target.
    gains = _gains_for(takes, level)
    excess = max(
        20.0 * math.log10(take.peak) + gain - ceiling_db
        for take, gain in zip(takes, gains, strict=True)
        if take.peak > 0.0
    )
    if excess > 0.0:
        level = wanted - excess
        gains = _gains_for(takes, level)
    for number, (take, gain) in enumerate(zip(takes, gains, strict=True), start=1):
        reached = take.after_gain(gain)
        if math.isfinite(take.lufs) and not abs(reached - level) <= MATCH_TOLERANCE_LU:
            raise InputError(
                f"take {number} of {len(takes)} is too quiet to be matched: {take.lufs:.1f} LUFS "
                f"where {level:.1f} is wanted; use a louder riff"
            )
    return Match(tuple(gains), level, wanted - level)


def _gains_for(takes: Sequence[Loudness], level: float) -> list[float]:
    gains = []
    for take in takes:
        gain = 0.0
        if math.isfinite(take.lufs):
            gain = level - take.lufs
            # Exact at once unless a block crosses the absolute gate.
            for _ in range(8):
                reached = take.after_gain(gain)
                if not math.isfinite(reached) or abs(reached - level) < 1e-9:
                    break
                gain += level - reached
        gains.append(gain)
    return gains


def _lufs(power: float) -> float:
    return OFFSET_DB + 10.0 * math.log10(power) if power > 0.0 else -math.inf


def _gated_lufs(powers: Array) -> float:
    above = powers[powers > _power(ABSOLUTE_GATE_LUFS)]
    if not len(above):
        return -math.inf
    gate = _power(_lufs(float(above.mean())) + RELATIVE_GATE_LU)
    return _lufs(float(above[above > gate].mean()))


def _power(lufs: float) -> float:
    return float(10.0 ** ((lufs - OFFSET_DB) / 10.0))
