"""Knob laws: what passes through which points, and back again."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sweepset.models.circuit import PlainKnob, RateKnob, Taper
from sweepset.models.errors import InputError
from sweepset.models.knob import (
    knob_ohm,
    knob_rotation,
    plain_rate_hz,
    plain_rotation,
    rotation_at_share,
    setting_rotation,
    track_share,
)
from sweepset.models.quantity import Setting, parse_rate

LAWS = st.sampled_from(["linear", "audio", "reverse-audio"])
MIDDLES = st.floats(0.01, 0.99)


def taper(law: str, middle: float = 0.1) -> Taper:
    return Taper.model_validate({"law": law, "middle": middle})


def knob(law: str = "reverse-audio", clockwise: str = "faster", travel: float = 300.0) -> RateKnob:
    return RateKnob.model_validate(
        {
            "track": "470k",
            "series": "10k",
            "taper": {"law": law, "middle": "10 %"},
            "clockwise": clockwise,
            "travel": travel,
        }
    )


@pytest.mark.parametrize(
    ("law", "middle", "share"),
    [
        # check-values h10: audio 10 % (read) or 15 % (from memory) at half rotation from the
        # counter-clockwise end, reverse 90 / 85 %, linear 50 %.
        ("audio", 0.10, 0.10),
        ("audio", 0.15, 0.15),
        ("reverse-audio", 0.10, 0.90),
        ("reverse-audio", 0.15, 0.85),
        ("linear", 0.10, 0.50),
        # a middle of one half is a straight line
        ("audio", 0.50, 0.50),
    ],
)
def test_share_at_half_rotation(law: str, middle: float, share: float) -> None:
    assert track_share(taper(law, middle), 0.5) == pytest.approx(share, abs=1e-14)


@given(LAWS, MIDDLES)
def test_ends_are_ends(law: str, middle: float) -> None:
    assert track_share(taper(law, middle), 0.0) == pytest.approx(0.0, abs=1e-15)
    assert track_share(taper(law, middle), 1.0) == pytest.approx(1.0, abs=1e-15)


@given(LAWS, MIDDLES, st.floats(0.0, 1.0), st.floats(1e-3, 1.0))
def test_share_rises_with_rotation(law: str, middle: float, place: float, step: float) -> None:
    higher = min(1.0, place + step)
    if higher > place:
        assert track_share(taper(law, middle), higher) > track_share(taper(law, middle), place)


@given(MIDDLES, st.floats(0.0, 1.0))
def test_reverse_is_the_mirror(middle: float, place: float) -> None:
    mirrored = 1.0 - track_share(taper("audio", middle), 1.0 - place)
    assert track_share(taper("reverse-audio", middle), place) == pytest.approx(mirrored, abs=1e-14)


@given(LAWS, MIDDLES, st.floats(0.0, 1.0))
def test_share_and_back(law: str, middle: float, place: float) -> None:
    # The steepest law (middle 1 %) grows by 99^2 over the travel, which is what rounding
    # of the share is multiplied by on the way back.
    back = rotation_at_share(taper(law, middle), track_share(taper(law, middle), place))
    assert back == pytest.approx(place, abs=1e-11)


@given(MIDDLES)
def test_equal_turns_give_equal_ratios_of_slope(middle: float) -> None:
    # What makes the law an exponential: its increments over equal turns are in proportion.
    # Increments of 1e-4 of the track carry 1e-12 of rounding.
    shares = [track_share(taper("audio", middle), k / 4.0) for k in range(5)]
    steps = [b - a for a, b in itertools.pairwise(shares)]
    assert steps[1] / steps[0] == pytest.approx(steps[3] / steps[2], rel=1e-9)


@given(LAWS, st.sampled_from(["faster", "slower"]), st.floats(0.0, 1.0))
def test_resistance_and_back(law: str, clockwise: str, place: float) -> None:
    part = knob(law, clockwise)
    resistance = knob_ohm(part, place)
    assert 10e3 - 1e-6 <= resistance <= 480e3 + 1e-6
    assert knob_rotation(part, resistance) == pytest.approx(place, abs=1e-11)


def test_clockwise_says_which_way_the_resistance_goes() -> None:
    assert knob_ohm(knob(clockwise="faster"), 1.0) == pytest.approx(10e3)
    assert knob_ohm(knob(clockwise="faster"), 0.0) == pytest.approx(480e3)
    assert knob_ohm(knob(clockwise="slower"), 0.0) == pytest.approx(10e3)
    # Reverse audio at 10 %: at noon a tenth of the track is left.
    assert knob_ohm(knob(clockwise="faster"), 0.5) == pytest.approx(57e3)


def test_resistance_beyond_the_track_is_refused() -> None:
    for resistance in (9.9e3, 481e3):
        with pytest.raises(ValueError, match="beyond the knob's track"):
            knob_rotation(knob(), resistance)


def test_plain_knob_gives_equal_ratios_and_back() -> None:
    part = PlainKnob.model_validate({"slowest": "0.1 Hz", "fastest": "10 Hz"})
    assert plain_rate_hz(part, 0.0) == pytest.approx(0.1)
    assert plain_rate_hz(part, 0.5) == pytest.approx(1.0)
    assert plain_rate_hz(part, 1.0) == pytest.approx(10.0)
    assert plain_rotation(part, 1.0) == pytest.approx(0.5)
    alike = PlainKnob.model_validate({"slowest": "1 Hz", "fastest": "1 Hz"})
    assert plain_rotation(alike, 1.0) is None


@pytest.mark.parametrize(
    ("text", "travel", "rotation"),
    [
        # check-values k7 (common practice): 300 degrees from 7 to 5 o'clock
        ("9:00", 300.0, 0.2),
        ("3:00", 300.0, 0.8),
        # 270 degrees about noon reach from 7:30 to 4:30; 9:00 is 90 of 135 degrees left of noon
        ("9:00", 270.0, 0.5 - 90.0 / 270.0),
        ("7:30", 270.0, 0.0),
        ("noon", 270.0, 0.5),
        ("35%", 270.0, 0.35),
    ],
)
def test_clock_position_by_the_knobs_own_travel(text: str, travel: float, rotation: float) -> None:
    assert setting_rotation(parse_rate(text), travel, "rate knob") == pytest.approx(rotation)


def test_clock_position_beyond_the_travel_names_the_ends() -> None:
    with pytest.raises(InputError, match=r"rate knob at 7:00: out of reach.*from 7:30 to 4:30"):
        setting_rotation(parse_rate("7:00"), 270.0, "rate knob")
    with pytest.raises(InputError, match="outside 0 to 1"):
        setting_rotation(Setting("1.2", 1.2, None), 300.0, "rate knob")


def test_a_value_asks_for_no_rotation() -> None:
    assert setting_rotation(parse_rate("0.8Hz"), 300.0, "rate knob") is None
