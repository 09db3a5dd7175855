"""Differences of takes whose difference is known beforehand."""

import math

import numpy as np
import pytest
import soundfile
from scipy import signal
from sweepset.models.circuit import load_circuit
from sweepset.models.cycle import analyse_cycle
from sweepset.models.errors import InputError
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import Setting
from sweepset.render.measures import (
    band_levels,
    compare_takes,
    difference_sentence,
    null_residual_db,
)

RATE = 48_000


@pytest.fixture
def noise():
    return np.random.default_rng(3).normal(0.0, 0.05, 6 * RATE)


@pytest.fixture
def write(tmp_path):
    def go(name, samples, rate=RATE):
        soundfile.write(tmp_path / name, samples, rate, subtype="PCM_24")
        return tmp_path / name

    return go


def a_cycle(rate_hz=1.0, spread_v=0.0):
    circuit = load_circuit("wren")
    parts = [Jfet.from_idss(-2.1 - spread_v * n, 4.2e-3) for n in range(2)]
    return analyse_cycle(circuit, parts, solve_bus(circuit, 0.45, Setting("", None, rate_hz)))


def test_a_gain_is_a_level_difference_in_every_band(write, noise):
    one, other = write("a.wav", noise), write("b.wav", noise * 10 ** (-2 / 20))
    found = compare_takes(one, other)
    assert found.rms_db == pytest.approx(2.0, abs=0.01)
    assert found.high_db == pytest.approx(2.0, abs=0.05)
    # A residual of (1 - g): closed form.
    expected = 20 * math.log10(1 - 10 ** (-2 / 20))
    assert found.residual_db == pytest.approx(expected, abs=0.01)
    assert "faint, if heard at all" in difference_sentence(found)


def test_equal_takes_differ_in_nothing(write, noise):
    one, other = write("a.wav", noise), write("b.wav", noise)
    found = compare_takes(one, other, a_cycle(), a_cycle())
    assert (found.rms_db, found.residual_db) == (0.0, -math.inf)
    assert found.notch_most_octaves == 0.0
    assert found.moments_s == ()
    assert "expect no difference" in difference_sentence(found)


def test_one_octave_filtered_shows_in_its_bands_alone(write, noise):
    sos = signal.butter(4, (900, 1100), "bandstop", fs=RATE, output="sos")
    found = compare_takes(write("a.wav", noise), write("b.wav", signal.sosfilt(sos, noise)))
    by_band = np.nanmean(found.level_db, axis=0)
    assert 700 < found.centre_hz[by_band.argmax()] < 1300
    far = (found.centre_hz < 400) | (found.centre_hz > 3000)
    assert np.abs(by_band[far]).max() < 0.3


def test_levels_add_up_to_the_power_of_a_tone(write):
    # A 1 kHz sine of amplitude 0.5: mean square 0.125 = -9.03 dB, all in the band about it
    # (weight 1 at its centre; the nearest band's centre is within half a bandwidth).
    tone = 0.5 * np.sin(2 * np.pi * 1000 * np.arange(RATE) / RATE)
    levels = band_levels(write("t.wav", tone))
    middle = levels.level_db[5:-5].mean(axis=0)
    assert middle.max() == pytest.approx(-9.03, abs=1.2)
    assert abs(levels.centre_hz[middle.argmax()] - 1000) < 80


def test_the_moment_of_difference_is_found_in_the_cycle(write, noise):
    # Every 1 s, for 100 ms at 0.3 s into the cycle, one take is 6 dB down.
    time_s = np.arange(len(noise)) / RATE
    dipped = np.where(np.abs(time_s % 1.0 - 0.35) < 0.05, 0.5, 1.0)
    found = compare_takes(
        write("a.wav", noise), write("b.wav", noise * dipped), a_cycle(), a_cycle()
    )
    assert found.phase_s[found.phase_db.argmax()] == pytest.approx(0.35, abs=0.05)
    assert len(found.moments_s) == 3
    for moment in found.moments_s:
        assert moment % 1.0 == pytest.approx(0.35, abs=0.05)


def test_notches_of_unlike_sets_lie_apart_by_what_the_cycles_say(write, noise):
    one, other = a_cycle(), a_cycle(spread_v=0.2)
    path = write("a.wav", noise)
    found = compare_takes(path, path, one, other)
    apart = np.abs(np.log2(one.notch_hz[:, 0] / other.notch_hz[:, 0]))
    assert found.notch_most_octaves == pytest.approx(np.nanmax(apart), rel=1e-3)
    # check-values g4 with Q of a two-stage notch, f / (f_high - f_low) = 0.5 (N atan x =
    # pi/4 and 3 pi/4 at 0.4142 and 2.4142): 0.079/sqrt(0.5) = 11.2 %.
    assert found.notch_least_octaves == pytest.approx(math.log2(1 + 0.079 / math.sqrt(0.5)))
    unlike = compare_takes(path, path, one, a_cycle(rate_hz=0.5))
    assert math.isnan(unlike.notch_most_octaves)


def test_silence_and_a_very_short_riff(write):
    silent = write("a.wav", np.zeros(RATE))
    found = compare_takes(silent, silent)
    assert found.rms_db == 0.0
    short = write("s.wav", np.full(30, 0.1))
    assert compare_takes(short, short).rms_db == 0.0
    assert null_residual_db(silent, silent) == -math.inf


def test_unlike_takes_are_refused(write, noise):
    with pytest.raises(InputError, match="differ in length"):
        compare_takes(write("a.wav", noise), write("b.wav", noise[:-5000]))
