"""The WAV of two takes by turns."""

import numpy as np
import pytest
import soundfile
from sweepset.models.errors import InputError
from sweepset.render.joined import FADE_S, LEAST_S, MOST_S, join_takes, musical_joins

RATE = 48_000


@pytest.fixture
def write(tmp_path):
    def go(name, samples):
        soundfile.write(tmp_path / name, samples, RATE, subtype="PCM_24")
        return tmp_path / name

    return go


def test_joins_fall_into_the_gaps_between_notes(write):
    # Notes of 0.7 s with gaps of 0.1 s: every join must lie in a gap.
    time_s = np.arange(12 * RATE) / RATE
    sounding = time_s % 0.8 < 0.7
    riff = np.where(sounding, 0.2 * np.sin(2 * np.pi * 220 * time_s), 0.0)
    joins = musical_joins(write("r.wav", riff))
    assert len(joins) >= 2
    assert all(0.69 < join % 0.8 < 0.81 for join in joins)
    gaps = np.diff([0.0, *joins])
    assert gaps.min() >= LEAST_S
    assert gaps.max() <= MOST_S + 0.1


def test_takes_alternate_sample_for_sample(write, tmp_path):
    one = write("a.wav", np.full((5 * RATE, 2), 0.25))
    other = write("b.wav", np.full((5 * RATE, 2), -0.5))
    made = join_takes(one, other, tmp_path / "j.wav", (1.0, 3.0))
    samples, rate = soundfile.read(made.path)
    assert rate == RATE
    assert samples.shape == (5 * RATE, 2)
    time_s = np.arange(5 * RATE) / RATE
    second = (time_s > 1.0) & (time_s < 3.0)
    far = (np.abs(time_s - 1.0) > FADE_S) & (np.abs(time_s - 3.0) > FADE_S)
    assert (samples[far & second] == -0.5).all()
    assert (samples[far & ~second] == 0.25).all()
    # Straight from one to the other: no step larger than the fade's own.
    assert np.abs(np.diff(samples[:, 0])).max() < 1.05 * 0.75 / (FADE_S * RATE)


def test_a_short_riff_has_no_join_and_unlike_takes_are_refused(write, tmp_path):
    short = write("s.wav", np.full(RATE, 0.1))
    assert musical_joins(short) == ()
    with pytest.raises(InputError, match="differ in length"):
        join_takes(short, write("l.wav", np.full(2 * RATE, 0.1)), tmp_path / "j.wav", ())
    assert not (tmp_path / "j.wav").exists()
