"""Bands as the ear has them: equivalent rectangular bandwidths.

References
----------
B. R. Glasberg and B. C. J. Moore, "Derivation of auditory filter shapes from notched-noise
data", Hearing Research 47 (1990) 103-138: bandwidth, number and rounded-exponential shape.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

LOWEST_HZ, HIGHEST_HZ = 50.0, 16_000.0


def erb_hz(freq_hz: npt.ArrayLike) -> Array:
    """Return the equivalent rectangular bandwidth at frequencies [Hz]."""
    return np.asarray(24.7 * (4.37e-3 * np.asarray(freq_hz, float) + 1.0))


def erb_number(freq_hz: npt.ArrayLike) -> Array:
    """Return the number of bandwidths below frequencies [Cam]."""
    return np.asarray(21.4 * np.log10(4.37e-3 * np.asarray(freq_hz, float) + 1.0))


def hz_of_number(number: npt.ArrayLike) -> Array:
    """Return frequencies by their ERB number, the inverse of :func:`erb_number` [Hz]."""
    return np.asarray((10.0 ** (np.asarray(number, float) / 21.4) - 1.0) / 4.37e-3)


def band_centres_hz(sample_rate_hz: float) -> Array:
    """Return band centres one bandwidth apart, 50 Hz to 16 kHz or what the rate holds [Hz]."""
    top = min(HIGHEST_HZ, 0.45 * sample_rate_hz)
    return hz_of_number(np.arange(float(erb_number(LOWEST_HZ)), float(erb_number(top)), 1.0))


def band_weights(centres_hz: Array, freq_hz: Array) -> Array:
    """Return how much each frequency's power counts in each band, shape (F, bands).

    The rounded exponential ``(1 + p g) exp(-p g)``, ``g`` the distance from the centre as
    a share of it and ``p`` four centres over the bandwidth: its own equivalent
    rectangular bandwidth is that of the band.
    """
    p = 4.0 * centres_hz / erb_hz(centres_hz)
    g = np.abs(freq_hz[:, None] - centres_hz) / centres_hz
    return np.asarray((1.0 + p * g) * np.exp(-p * g))
