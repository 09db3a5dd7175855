"""Pictures of takes: drawn, the same every time, and with the tracks where they belong."""

import numpy as np
import pytest
import soundfile
from sweepset.models.circuit import load_circuit
from sweepset.models.cycle import analyse_cycle
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate
from sweepset.render.figures import figure_bytes
from sweepset.render.pictures import (
    _log_levels,
    channels_figure,
    spectrogram_figure,
    tracks_figure,
)

RATE = 48_000


@pytest.fixture(scope="module")
def case():
    circuit = load_circuit("heron")
    parts = [Jfet.from_idss(-2.1 - 0.05 * n, 4.2e-3, label=f"J{n}") for n in range(4)]
    bus = solve_bus(circuit, 0.45, parse_rate("noon"))
    return circuit, parts, analyse_cycle(circuit, parts, bus, 128)


@pytest.fixture
def take(tmp_path):
    samples = np.random.default_rng(1).normal(0.0, 0.05, 2 * RATE)
    soundfile.write(tmp_path / "t.wav", samples, RATE, subtype="PCM_24")
    return tmp_path / "t.wav"


def test_all_three_are_drawn_alike_each_time(case, take):
    circuit, parts, cycle = case
    for draw in (
        lambda: spectrogram_figure(take, take, cycle),
        lambda: tracks_figure([("one", cycle), ("other", cycle)]),
        lambda: channels_figure(circuit, parts, cycle),
    ):
        first, second = (figure_bytes(draw(), "svg") for _ in range(2))
        assert first == second
        assert first.startswith(b"<?xml")


def test_a_tone_stands_at_its_frequency(tmp_path):
    tone = 0.3 * np.sin(2 * np.pi * 997 * np.arange(RATE) / RATE)
    soundfile.write(tmp_path / "t.wav", tone, RATE, subtype="PCM_24")
    _, freq_hz, level = _log_levels(tmp_path / "t.wav")
    assert freq_hz[level.mean(axis=0).argmax()] == pytest.approx(997, rel=0.03)


def test_a_take_shorter_than_a_window_is_drawn(case, tmp_path):
    soundfile.write(tmp_path / "s.wav", np.full(50, 0.1), RATE, subtype="PCM_24")
    figure = spectrogram_figure(tmp_path / "s.wav", None, case[2])
    assert figure_bytes(figure, "png").startswith(b"\x89PNG")
