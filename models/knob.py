"""Knobs: rotation to resistance to rate and back.

The law of a track is stored, never a letter, because taper letters differ by region.
Rotation runs from 0 to 1 clockwise.
"""

from __future__ import annotations

import math

from .circuit import PlainKnob, RateKnob, Taper
from .errors import InputError
from .quantity import Setting


def track_share(taper: Taper, rotation: float) -> float:
    """Return the share of the track between the counter-clockwise end and the wiper.

    Parameters
    ----------
    taper : Taper
        ``linear``; ``audio``, a smooth law through (0, 0), (0.5, middle) and (1, 1); or
        ``reverse-audio``, its mirror through (0.5, 1 - middle).
    rotation : float
        0 to 1.

    Notes
    -----
    The audio law is ``(a^p - 1)/(a - 1)`` with ``a = (1/m - 1)^2``: the one exponential
    through the three points. Real tracks approach it by two or three straight lines
    (common practice, no published source).
    """
    growth = _log_growth(taper)
    if growth == 0.0:
        return rotation
    if taper.law == "reverse-audio":
        return 1.0 - math.expm1((1.0 - rotation) * growth) / math.expm1(growth)
    return math.expm1(rotation * growth) / math.expm1(growth)


def rotation_at_share(taper: Taper, share: float) -> float:
    """Return the rotation, 0 to 1, at which the track's share (0 to 1) is reached."""
    growth = _log_growth(taper)
    if growth == 0.0:
        return share
    if taper.law == "reverse-audio":
        return 1.0 - math.log1p((1.0 - share) * math.expm1(growth)) / growth
    return math.log1p(share * math.expm1(growth)) / growth


def _log_growth(taper: Taper) -> float:
    """Return ln a of the audio law; 0 for a straight line."""
    if taper.law == "linear" or taper.middle_fraction == 0.5:
        return 0.0
    return 2.0 * math.log(1.0 / taper.middle_fraction - 1.0)


def knob_ohm(knob: RateKnob, rotation: float) -> float:
    """Return the knob's resistance with its series resistor at a rotation of 0 to 1 [ohm]."""
    share = track_share(knob.taper, rotation)
    if knob.clockwise == "faster":
        share = 1.0 - share
    return knob.series_ohm + knob.track_ohm * share


def knob_rotation(knob: RateKnob, resistance_ohm: float) -> float:
    """Return the rotation at which knob and series resistor make `resistance_ohm`.

    Raises
    ------
    ValueError
        If the knob cannot reach it; callers that know rates say so in rates.
    """
    share = (resistance_ohm - knob.series_ohm) / knob.track_ohm
    # A rate asked for at the very end of the range may miss it by rounding alone.
    if not -1e-9 <= share <= 1.0 + 1e-9:
        raise ValueError(f"{resistance_ohm} ohm is beyond the knob's track")
    share = min(max(share, 0.0), 1.0)
    if knob.clockwise == "faster":
        share = 1.0 - share
    return rotation_at_share(knob.taper, share)


def plain_rate_hz(knob: PlainKnob, rotation: float) -> float:
    """Return the rate of a knob known by its end rates [Hz].

    Equal turns are taken to give equal ratios of rate (an assumption: the file
    gives no law for such a knob).
    """
    return float(knob.slowest_hz * (knob.fastest_hz / knob.slowest_hz) ** rotation)


def plain_rotation(knob: PlainKnob, rate_hz: float) -> float | None:
    """Return the rotation for a rate within the knob's range; None if the ends are alike."""
    if knob.fastest_hz == knob.slowest_hz:
        return None
    return math.log(rate_hz / knob.slowest_hz) / math.log(knob.fastest_hz / knob.slowest_hz)


def setting_rotation(setting: Setting, travel_degrees: float, what: str) -> float | None:
    """Return the rotation a setting asks of a knob with this travel; None if it asks a value.

    Parameters
    ----------
    setting : Setting
        What was asked for.
    travel_degrees : float
        The knob's travel, symmetric about noon [degrees].
    what : str
        The knob's name in messages, for example "rate knob".

    Raises
    ------
    InputError
        If the knob does not turn that far.
    """
    rotation = setting.rotation
    if setting.clock_degrees is not None:
        rotation = 0.5 + setting.clock_degrees / travel_degrees
        if not -1e-9 <= rotation <= 1.0 + 1e-9:
            half = travel_degrees / 2.0
            raise InputError(
                f"{what} at {setting.text}: out of reach; with {travel_degrees:g} degrees of "
                f"travel it turns from {_clock(-half)} to {_clock(half)}"
            )
    if rotation is None:
        return None
    if not -1e-9 <= rotation <= 1.0 + 1e-9:
        raise InputError(f"{what} at {setting.text}: rotation {rotation:g} is outside 0 to 1")
    return min(max(rotation, 0.0), 1.0)


def _clock(degrees: float) -> str:
    """Return an angle from noon as a clock position, to the minute."""
    minutes = round((degrees % 360.0) * 2.0) % 720
    return f"{minutes // 60 or 12}:{minutes % 60:02d}"
