"""The shipped riffs are what their script makes, and what they are said to be."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from sweepset.render.audio import read_audio
from sweepset.samples import make_riffs

FOLDER = Path(make_riffs.__file__).parent
NAMES = sorted(make_riffs.RIFFS)


@pytest.fixture(scope="module")
def stored() -> dict[str, np.ndarray]:
    return {name: read_audio(FOLDER / f"{name}.flac")[0] for name in NAMES}


@pytest.fixture(scope="module")
def fresh() -> dict[str, np.ndarray]:
    return {name: make_riffs.make_riff(name) for name in NAMES}


@pytest.mark.parametrize("name", NAMES)
def test_stored_samples_are_the_scripts(
    name: str, stored: dict[str, np.ndarray], fresh: dict[str, np.ndarray]
) -> None:
    # One 24-bit step is allowed: the last digit of sin and exp differs between numpy builds.
    made = fresh[name]
    assert made.shape == stored[name].shape
    assert np.max(np.abs(made - stored[name])) <= 1.5 * 2.0**-23


@pytest.mark.parametrize("name", NAMES)
def test_a_second_run_makes_the_same_samples(name: str, fresh: dict[str, np.ndarray]) -> None:
    assert np.array_equal(make_riffs.make_riff(name), fresh[name])


@pytest.mark.parametrize("name", NAMES)
def test_peak_length_and_edges(name: str, stored: dict[str, np.ndarray]) -> None:
    samples = stored[name]
    assert 20.0 * np.log10(np.max(np.abs(samples))) == pytest.approx(-6.0, abs=1e-5)
    assert 8.0 <= len(samples) / make_riffs.SAMPLE_RATE_HZ <= 12.0
    # No click at either end: below -60 dBFS.
    assert np.max(np.abs(samples[[0, -1]])) < 1e-3
    assert abs(samples.mean()) < 1e-6


def test_files_together_stay_small() -> None:
    assert sum((FOLDER / f"{name}.flac").stat().st_size for name in NAMES) < 4_000_000


def test_standard_pitch() -> None:
    # ISO 16: A4 = 440 Hz. C4 = 261.6256 Hz and E2 = 82.4069 Hz: tables of equal temperament,
    # from memory.
    assert make_riffs.pitch_hz(69) == 440.0
    assert make_riffs.pitch_hz(60) == pytest.approx(261.6256, abs=5e-5)
    assert make_riffs.pitch_hz(40) == pytest.approx(82.4069, abs=5e-5)


@pytest.mark.parametrize("note", [40, 45, 57, 64, 67])
def test_plucked_string_is_in_tune(note: int) -> None:
    # Spectrum peak of the fundamental, parabola through the log magnitudes. 2 cents: less
    # than the 5 cents often given as the smallest audible difference (from memory), and
    # more than the peak's shift by the decay.
    tone = make_riffs.plucked_string(make_riffs.pitch_hz(note), 4.0, 0.8, np.random.default_rng(7))
    size = 2**20
    level = np.log(np.abs(np.fft.rfft(tone * np.hanning(len(tone)), size)) + 1e-30)
    wanted = 440.0 * 2.0 ** ((note - 69) / 12.0)
    bin_hz = make_riffs.SAMPLE_RATE_HZ / size
    near = slice(int(0.97 * wanted / bin_hz), int(1.03 * wanted / bin_hz))
    top = near.start + int(np.argmax(level[near]))
    a, b, c = level[top - 1 : top + 2]
    found = (top + 0.5 * (a - c) / (a - 2.0 * b + c)) * bin_hz
    assert abs(1200.0 * np.log2(found / wanted)) < 2.0


def test_plucked_string_decays_and_dulls() -> None:
    # Karplus and Strong 1983: the high partials die away first.
    tone = make_riffs.plucked_string(110.0, 4.0, 0.9, np.random.default_rng(3))
    freq = np.fft.rfftfreq(16384, 1.0 / make_riffs.SAMPLE_RATE_HZ)
    early = np.abs(np.fft.rfft(tone[2000 : 2000 + 16384])) ** 2
    late = np.abs(np.fft.rfft(tone[100_000 : 100_000 + 16384])) ** 2
    share = [p[freq > 2000.0].sum() / p.sum() for p in (early, late)]
    assert late.sum() < 0.1 * early.sum()
    assert share[1] < 0.1 * share[0]


def test_noise_has_equal_power_in_every_octave(stored: dict[str, np.ndarray]) -> None:
    # Pink noise: equal power per octave by definition. 8 s of noise in the octave from
    # 62.5 Hz has 2 * 62.5 * 8 = 1000 degrees of freedom, sigma 0.19 dB; 4 sigma and the
    # band edge's 0.05 dB are allowed.
    samples = stored["riff_noise"][:, 0]
    power = np.abs(np.fft.rfft(samples)) ** 2
    freq = np.fft.rfftfreq(len(samples), 1.0 / make_riffs.SAMPLE_RATE_HZ)
    levels = [
        10.0 * np.log10(power[(freq >= f) & (freq < 2.0 * f)].sum())
        for f in 100.0 * 2.0 ** np.arange(6)
    ]
    assert np.ptp(levels) < 1.0
    outside = power[(freq < 15.0) | (freq > 20_000.0)].sum()
    assert outside < 0.01 * power.sum()
