"""The unloaded tap, and waves known in closed form, against textbooks, scipy and brute force."""

from __future__ import annotations

import itertools
import math
import re

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from sweepset.models.circuit import Circuit, load_circuit
from sweepset.models.errors import InputError
from sweepset.models.knob import knob_ohm
from sweepset.models.oscillator import relaxation_tap, tap_wave
from sweepset.models.quantity import parse_rate
from sweepset.models.waveform import Segments, Sine, Wave, joint_exponential, through_rc

Array = npt.NDArray[np.float64]


def alike_rails(**changes: object) -> Circuit:
    """Return the two-stage circuit: its reference is half the supply, so its rails are alike."""
    return load_circuit("wren").with_changes(**changes)


def test_period_of_the_textbook_relaxation_oscillator() -> None:
    # T = 2 R C ln((1 + b)/(1 - b)) with b the divider's share and equal rails (textbook
    # formula, from memory).
    circuit = alike_rails()
    low, high = circuit.rails_v
    assert low == -high
    oscillator = circuit.oscillator
    for share, ends in ((0.4, (10e3, 15e3)), (0.5, (10e3, 10e3)), (0.9, (9e3, 1e3))):
        changed = alike_rails(
            oscillator__threshold_in_ohm=ends[0], oscillator__threshold_out_ohm=ends[1]
        )
        resistance = 33e3
        wave = relaxation_tap(changed.oscillator, circuit.rails_v, resistance)  # type: ignore[arg-type]
        tau = resistance * oscillator.timing_capacitor_f  # type: ignore[union-attr]
        expected = 2.0 * tau * math.log((1.0 + share) / (1.0 - share))
        assert wave.period_s == pytest.approx(expected, rel=1e-14)
        assert (wave.low_v, wave.high_v) == pytest.approx((share * low, share * high), rel=1e-14)
        assert wave.mean_v == pytest.approx(0.0, abs=1e-14)


def test_period_of_the_textbook_triangle() -> None:
    # f = (R2/R1)/(4 R C) for equal rails, R1/R2 the share of the swing (textbook formula,
    # from memory); amplitude = rail R1/R2.
    circuit = load_circuit("plover").with_changes(
        supply__reference={"kind": "divider", "upper": "10k", "lower": "10k"}
    )
    wave, rotation = tap_wave(circuit, parse_rate("noon"))
    part = circuit.oscillator
    ratio = part.threshold_in_ohm / part.threshold_out_ohm  # type: ignore[union-attr]
    timing = knob_ohm(part.knob, 0.5) * part.timing_capacitor_f  # type: ignore[union-attr, arg-type]
    assert rotation == 0.5
    assert 1.0 / wave.period_s == pytest.approx(1.0 / (4.0 * timing * ratio), rel=1e-14)
    assert wave.high_v == pytest.approx(circuit.rails_v[1] * ratio, rel=1e-14)
    assert wave.low_v == pytest.approx(-wave.high_v, rel=1e-14)


def test_sine_and_measured_taps_start_at_their_lowest() -> None:
    sine, _ = tap_wave(load_circuit("stork"), parse_rate("0.5Hz"))
    assert sine.period_s == pytest.approx(2.0)
    # mean 0, peak 3 in the file; at quarter periods a sine is at low, mean, high, mean
    assert sine.at([0.0, 0.5, 1.0, 1.5]) == pytest.approx([-3.0, 0.0, 3.0, 0.0], abs=1e-14)
    measured = {
        "kind": "measured",
        "low": "-1 V",
        "high": "2 V",
        "knob": {"slowest": "0.1 Hz", "fastest": "5 Hz"},
    }
    for shape in ("triangle", "sine"):
        circuit = load_circuit("wren").with_changes(oscillator={**measured, "shape": shape})
        wave, _ = tap_wave(circuit, parse_rate("1Hz"))
        assert wave.at([0.0, 0.25, 0.5, 0.75]) == pytest.approx([-1.0, 0.5, 2.0, 0.5], abs=1e-14)
        assert (wave.low_v, wave.high_v, wave.mean_v) == pytest.approx((-1.0, 2.0, 0.5))
        # an eighth of a period tells the shapes apart: -0.25 on a line, 0.5 - 1.5 cos 45 on a sine
        eighth = -0.25 if shape == "triangle" else 0.5 - 1.5 * math.sqrt(0.5)
        assert float(wave.at(0.125)) == pytest.approx(eighth)


@pytest.mark.parametrize("name", ["wren", "heron", "plover", "stork"])
def test_rate_asked_for_is_the_rate_and_the_rotation_leads_back(name: str) -> None:
    circuit = load_circuit(name)
    wave, rotation = tap_wave(circuit, parse_rate("0.8Hz"))
    assert 1.0 / wave.period_s == pytest.approx(0.8, rel=1e-13)
    assert rotation is not None
    again, _ = tap_wave(circuit, parse_rate(f"{100.0 * rotation:.15g}%"))
    assert again.period_s == pytest.approx(wave.period_s, rel=1e-9)


@pytest.mark.parametrize("name", ["wren", "heron", "plover", "stork"])
def test_clockwise_is_faster(name: str) -> None:
    circuit = load_circuit(name)
    rates = [
        1.0 / tap_wave(circuit, parse_rate(text))[0].period_s
        for text in ("7:00", "9:00", "noon", "3:00", "5:00")
    ]
    assert rates == sorted(rates)
    assert rates[-1] > 20.0 * rates[0]


@pytest.mark.parametrize("name", ["wren", "plover", "stork"])
def test_rate_out_of_reach_names_the_range(name: str) -> None:
    circuit = load_circuit(name)
    with pytest.raises(InputError, match="out of reach") as fault:
        tap_wave(circuit, parse_rate("100Hz"))
    found = re.search(r"goes from (\S+) Hz to (\S+) Hz; give a rate within", str(fault.value))
    assert found is not None
    ends = [1.0 / tap_wave(circuit, parse_rate(text))[0].period_s for text in ("0%", "100%")]
    # three digits are printed
    assert [float(found[1]), float(found[2])] == pytest.approx(ends, rel=0.005)


@pytest.mark.parametrize("text", ["0Hz", "-1Hz"])
def test_rate_must_be_positive(text: str) -> None:
    for name in ("heron", "stork"):
        with pytest.raises(InputError, match="above 0 Hz"):
            tap_wave(load_circuit(name), parse_rate(text))


def test_triangle_beyond_the_rails_does_not_oscillate() -> None:
    circuit = load_circuit("plover").with_changes(oscillator__threshold_in_ohm=47e3)
    with pytest.raises(InputError, match=r"does not oscillate.*lower oscillator\.threshold_in"):
        tap_wave(circuit, parse_rate("noon"))


# --- waves -----------------------------------------------------------------------------------


def sample_waves() -> dict[str, Wave]:
    exponential, _ = tap_wave(load_circuit("heron"), parse_rate("2Hz"))
    triangle, _ = tap_wave(load_circuit("plover"), parse_rate("2Hz"))
    return {"exponential": exponential, "triangle": triangle, "sine": Sine(0.5, 0.3, -1.0, 0.2)}


@pytest.mark.parametrize("kind", ["exponential", "triangle", "sine"])
@pytest.mark.parametrize("tau", [1e-4, 7e-3, 0.11, 5.0])
def test_rc_against_scipy(kind: str, tau: float) -> None:
    # An independent integrator from the wave's own start value over one period. Its tolerance
    # is 1e-11 relative, so 1e-8 V leaves room for its accumulation over stiff stretches.
    wave = sample_waves()[kind]
    gain, offset = 0.31, -1.7
    found = through_rc(wave, gain, offset, tau)
    joints = [0.0, *(wave.starts_s[1:] if isinstance(wave, Segments) else ()), wave.period_s]
    value = float(found.at(0.0))
    for start, end in itertools.pairwise(joints):
        # A hair inside, so that no step straddles the corner.
        times = np.linspace(start, end, 50) * (1.0 - 1e-15)
        done = solve_ivp(
            lambda t, y: (gain * float(wave.at(t)) + offset - y) / tau,
            (times[0], times[-1]),
            [value],
            method="LSODA",
            t_eval=times,
            rtol=1e-11,
            atol=1e-13,
        )
        assert np.max(np.abs(done.y[0] - found.at(times))) < 1e-8
        value = float(done.y[0, -1])
    assert value == pytest.approx(float(found.at(0.0)), abs=1e-8)


@pytest.mark.parametrize("apart", [0.0, 1e-15, -1e-12, 1e-9, -1e-6, 9.9e-4, -1.01e-3, 1e-2])
def test_equal_time_constants(apart: float) -> None:
    # The bus as slow as the timing capacitor, or nearly: the answer must not depend on which
    # form is chosen. Reference: the periodic solution by convolution over many periods, with
    # 40-point Gauss-Legendre sums per segment.
    wave = sample_waves()["exponential"]
    assert isinstance(wave, Segments)
    tau = (1.0 + apart) / wave.first_rate_per_s
    found = through_rc(wave, 1.0, 0.0, tau)
    nodes, weights = np.polynomial.legendre.leggauss(40)
    joints = [*wave.starts_s, wave.period_s]
    for instant in (0.0, joints[1], 0.37 * wave.period_s):
        total = 0.0
        for back in range(-1, math.ceil(40.0 * tau / wave.period_s)):
            for start, end in itertools.pairwise(joints):
                begin, stop = start - back * wave.period_s, end - back * wave.period_s
                stop = min(stop, instant)
                if stop <= begin:
                    continue
                times = 0.5 * (begin + stop) + 0.5 * (stop - begin) * nodes
                kernel = np.exp((times - instant) / tau) / tau
                total += 0.5 * (stop - begin) * float(np.sum(weights * kernel * wave.at(times)))
        # exp(-40) of the past is left out: 4e-18.
        assert float(found.at(instant)) == pytest.approx(total, abs=1e-12)
    assert found.mean_v == pytest.approx(wave.mean_v)


def test_joint_exponential_at_known_places() -> None:
    # At a = b the limit is t exp(-a t), and at b = 2 a it is
    # (x - x^2)/a with x = exp(-a t).
    t = np.linspace(0.0, 5.0, 21)
    assert joint_exponential(1.3, 1.3, t) == pytest.approx(t * np.exp(-1.3 * t), abs=1e-16)
    x = np.exp(-1.3 * t)
    assert joint_exponential(1.3, 2.6, t) == pytest.approx((x - x * x) / 1.3, abs=1e-15)


@given(
    st.floats(0.05, 8.0),
    st.floats(1e-5, 2.0),
    st.sampled_from(["exponential", "triangle", "sine"]),
)
def test_wave_stays_between_its_ends_and_about_its_mean(rate: float, tau: float, kind: str) -> None:
    name = {"exponential": "wren", "triangle": "plover", "sine": "stork"}[kind]
    source, _ = tap_wave(load_circuit(name), parse_rate("noon"))
    if isinstance(source, Sine):
        source = Sine(1.0 / rate, source.mean_v, source.cosine_v, source.sine_v)
    wave = through_rc(source, 0.2, -1.0, tau)
    times = np.linspace(0.0, wave.period_s, 4001)
    values = wave.at(times)
    assert wave.low_v - 1e-12 <= values.min()
    assert values.max() <= wave.high_v + 1e-12
    # The stated ends are reached, to what a grid of 4000 points can miss of a corner.
    assert values.min() - wave.low_v < 1e-3 * (wave.high_v - wave.low_v) + 1e-12
    assert wave.high_v - values.max() < 1e-3 * (wave.high_v - wave.low_v) + 1e-12
    # The trapezoidal sum of a continuous periodic wave, its corners costing h^2.
    assert float(np.mean(values[:-1])) == pytest.approx(wave.mean_v, abs=1e-5)
    assert float(wave.at(0.0)) == pytest.approx(
        float(wave.at(wave.period_s * (1 - 1e-15))), abs=1e-9
    )


@pytest.mark.parametrize("kind", ["exponential", "triangle", "sine"])
@pytest.mark.parametrize("tau", [0.0, 7e-3, "equal"])
@pytest.mark.parametrize("rate_hz", [48_000.0, 768_000.0])
def test_block_sampling_is_the_wave_itself(kind: str, tau: float | str, rate_hz: float) -> None:
    wave = sample_waves()[kind]
    if isinstance(tau, str):
        tau = 1.0 / wave.first_rate_per_s if isinstance(wave, Segments) else 0.05
    wave = through_rc(wave, 0.3, -1.2, tau)
    # At an hour the frame time itself is good to 5e-13 s; at under 20 V/s that is 1e-11 V.
    for start in (0, 1, 4711, int(3600 * rate_hz) + 12345):
        for count in (0, 1, 255, 256, 257, 60_000):
            found = wave.sample(start, count, rate_hz)
            assert found.shape == (count,)
            expected = wave.at((start + np.arange(count)) / rate_hz)
            assert np.max(np.abs(found - expected), initial=0.0) < 1e-10


def test_block_spans_many_periods() -> None:
    # A block much longer than the period, its frame rate no multiple of the wave's.
    wave = sample_waves()["exponential"]
    found = wave.sample(17, 20_000, 1000.7)
    assert np.max(np.abs(found - wave.at((17 + np.arange(20_000)) / 1000.7))) < 1e-12


def test_negative_time_is_the_same_wave() -> None:
    for wave in sample_waves().values():
        times = np.linspace(0.0, wave.period_s, 100, endpoint=False) + 1e-3
        shifted = wave.at(times - 3.0 * wave.period_s)
        assert np.max(np.abs(shifted - wave.at(times))) < 1e-12
