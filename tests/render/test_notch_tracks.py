"""Notch tracks measured in rendered audio against the models' own predictions.

Noise goes through the whole unit; short-time cross-spectra of riff and take, averaged over
cycles at one phase, give the response at that phase as anyone could measure it on the
hardware (method: R. Kiiski et al., DAFx-16, for short test signals; abstract read). The
window is part of the measurement, so what is compared with it is the predicted response
averaged over the same window.
"""

import numpy as np
import pytest
from sweepset.models.bias import solve_bias
from sweepset.models.chain import circuit_gains
from sweepset.models.circuit import load_circuit
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.notches import find_notches, set_break_hz
from sweepset.models.quantity import Setting, parse_rate
from sweepset.render.take import render_take

pytestmark = pytest.mark.slow
RATE = 48_000
DEPTH_DB = -12.0


def a_case(name, rate_hz):
    circuit = load_circuit(name)
    parts = [Jfet.from_idss(-2.1 - 0.03 * n, 4.2e-3) for n in range(circuit.stage_count)]
    trimmer = solve_bias(circuit, parts, parse_rate("noon")).position
    setting = Setting(f"{rate_hz} Hz", None, rate_hz)
    return circuit, parts, trimmer, solve_bus(circuit, trimmer, setting), setting


def measured(case, window_s, cycles, phases):
    """Return frequencies and the windowed response at each phase, shape (phases, F)."""
    circuit, parts, trimmer, bus, setting = case
    size = 2 * round(window_s * RATE / 2)
    frames = round((cycles + 1) * bus.period_s * RATE) + size
    # Quiet enough to be linear: 20 mV rms at 1 V full scale.
    riff = np.random.default_rng(7).normal(0.0, 0.02, frames)
    take = render_take(
        riff, RATE, circuit, parts, trimmer=Setting("", trimmer, None), rate=setting
    ).samples[:, 0]
    window = np.hanning(size)
    freq = np.fft.rfftfreq(size, 1 / RATE)
    response = []
    for phase in phases:
        # The first cycle is left out: coupling capacitors are still settling.
        middles = (np.arange(1, cycles + 1) + phase) * bus.period_s * RATE
        across = np.zeros(len(freq), complex)
        power = np.zeros(len(freq))
        for middle in middles:
            start = round(middle) - size // 2
            x = np.fft.rfft(window * riff[start : start + size])
            y = np.fft.rfft(window * take[start : start + size])
            across += y * x.conj()
            power += np.abs(x) ** 2
        response.append(across / power)
    return freq, np.array(response)


def moving_response(case, freq_hz, points=4096):
    """Return the linear response while the gate moves, shape (points, F), by the trapezoidal rule.

    Written down afresh from the stage equation: C d(x - v)/dt = v G(t), y = a v - b x, with
    x and v as envelopes about exp(j w t).
    """
    circuit, parts, _, bus, _ = case
    assert circuit.feedback is None
    steps = 2 * points  # two cycles: the first forgets its start
    time_s = np.arange(steps + 1) * bus.period_s / points
    rates = 2 * np.pi * set_break_hz(circuit, parts, bus.gate_v(time_s))
    omega = 2j * np.pi * freq_hz
    step = time_s[1]
    gains = circuit_gains(circuit)
    stages = len(parts)
    held = np.zeros((stages, len(freq_hz)), complex)
    for i in range(stages):  # a fair start: each stage at rest at the first gate voltage
        held[i] = rates[0, i] / (omega + rates[0, i])
    inputs = [np.ones(len(freq_hz), complex)] * stages
    out = np.zeros((points, len(freq_hz)), complex)
    slopes = [None] * stages
    for n in range(steps + 1):
        x = np.ones(len(freq_hz), complex)
        for i in range(stages):
            w = rates[n, i]
            if n:
                known = held[i] + step / 2 * (slopes[i] + x * w)
                held[i] = known / (1 + step / 2 * (w + omega))
            slopes[i] = (x - held[i]) * w - omega * held[i]
            v = x - held[i]
            inputs[i] = x
            x = (1 + gains.b[i]) * v - gains.b[i] * x
        if n >= points and n - points < points:
            out[n - points] = gains.dry + gains.wet * x
    return out


def windowed(response, bus, window_s, phases):
    """Return the response averaged over the measurement's window at each phase."""
    points = len(response)
    size = 2 * round(window_s * RATE / 2)
    weight = np.hanning(size) ** 2
    offsets = (np.arange(size) - size // 2) / RATE
    found = []
    for phase in phases:
        place = np.round((phase * bus.period_s + offsets) / bus.period_s * points).astype(int)
        found.append(weight @ response[place % points] / weight.sum())
    return np.array(found)


def deepest(freq, response, near):
    """Return frequency and level of the minimum within half an octave of `near`."""
    level = 20 * np.log10(np.abs(response) / np.median(np.abs(response)))
    fine = np.linspace(near / 2**0.5, near * 2**0.5, 2001)
    curve = np.interp(fine, freq, level)
    at = curve.argmin()
    if at in (0, len(fine) - 1):
        return np.nan, np.nan
    # A parabola in dB through the neighbouring bins would miss a cusp; use the power.
    k = int(np.argmin(np.abs(freq - fine[at])))
    power = np.abs(response[k - 1 : k + 2]) ** 2
    bend = power[0] - 2 * power[1] + power[2]
    shift = 0.5 * (power[0] - power[2]) / bend if bend > 0 else 0.0
    return freq[k] + shift * (freq[1] - freq[0]), level[k]


@pytest.mark.parametrize("name", ["wren", "egret", "stork"])
def test_slow_tracks_lie_where_the_gate_standing_still_puts_them(name):
    # 0.3 Hz: within 2 %, where the notch is deeper than 12 dB.
    case = a_case(name, 0.3)
    circuit, parts, _, bus, _ = case
    phases = np.arange(0.0, 1.0, 1 / 24)
    freq, response = measured(case, 0.024, 40, phases)
    hz, _ = find_notches(circuit, set_break_hz(circuit, parts, bus.gate_v(phases * bus.period_s)))
    ratios = []
    for n in range(len(phases)):
        for near in hz[n]:
            # A notch must be some bins of 42 Hz wide to be placed to 2 %.
            if not 500.0 < near < 8_000.0:
                continue
            found, level = deepest(freq, response[n], near)
            if level < DEPTH_DB:
                ratios.append(found / near)
    print(
        f"\n{name}: {len(ratios)} places, off by at most {np.abs(np.array(ratios) - 1).max():.2%}"
    )
    assert len(ratios) >= 15
    assert np.abs(np.array(ratios) - 1.0).max() < 0.02


@pytest.mark.parametrize(("name", "rate_hz"), [("wren", 1.5), ("egret", 2.0), ("stork", 3.0)])
def test_fast_tracks_lie_where_the_moving_response_puts_them(name, rate_hz):
    # Within 3 %, where deeper than 12 dB.
    case = a_case(name, rate_hz)
    circuit, parts, _, bus, _ = case
    phases = np.arange(0.0, 1.0, 1 / 24)
    window_s = 0.016
    freq, response = measured(case, window_s, 160, phases)
    expected = windowed(moving_response(case, freq), bus, window_s, phases)
    hz, _ = find_notches(circuit, set_break_hz(circuit, parts, bus.gate_v(phases * bus.period_s)))
    ratios = []
    for n in range(len(phases)):
        for near in hz[n]:
            if not 800.0 < near < 10_000.0:
                continue
            right, depth = deepest(freq, expected[n], near)
            found, level = deepest(freq, response[n], near)
            if level < DEPTH_DB and depth < DEPTH_DB:
                ratios.append(found / right)
    print(
        f"\n{name}: {len(ratios)} places, off by at most {np.abs(np.array(ratios) - 1).max():.2%}"
    )
    assert len(ratios) >= 8
    assert np.abs(np.array(ratios) - 1.0).max() < 0.03
