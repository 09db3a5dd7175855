"""Frozen gate, small signal: the engine as selected against the closed form.

The closed form is models/chain.py, itself held against scipy's state space and the
published all-pass facts in tests/models/test_chain.py. Signal: an impulse of -80 dBFS,
so that the law's curvature (HD2 about A/(4 Vov)) stays below -80 dB.
"""

import numpy as np
import pytest
from sweepset.models.chain import wet_response
from sweepset.models.circuit import load_circuit
from sweepset.models.jfet import Jfet
from sweepset.models.notches import find_notches, set_break_hz
from sweepset.render.engine import Engine
from sweepset.render.plan import plan_engine

RATE = 48_000
AT = 4800


def parts(knee_v):
    return [Jfet(-2.0 + 0.05 * i, 1e-3 * (1 + 0.03 * i), knee_v=knee_v) for i in range(4)]


@pytest.fixture(scope="module", params=[0.0517, 0.0], ids=["default knee", "knee 0"])
def responses(request):
    """Rendered and closed-form chain responses at four gate voltages."""
    circuit, jfets = load_circuit("heron"), parts(request.param)
    plan = plan_engine(circuit, jfets, -2.3, -1.2, RATE)
    found = []
    for gate_v in (-2.2, -1.9, -1.6, -1.2):
        x = np.zeros((2 * RATE, 1))
        x[AT] = 1e-4
        engine = Engine(
            circuit,
            jfets,
            RATE,
            1,
            plan,
            lambda _s, n, _r, g=gate_v: np.full(n, g),
            chain_only=True,
        )
        y = np.concatenate([engine.process(x), engine.finish()])[:, 0]
        freq = np.fft.rfftfreq(len(y), 1.0 / RATE)
        rendered = np.fft.rfft(y) * np.exp(2j * np.pi * freq * AT / RATE) / 1e-4
        breaks = set_break_hz(circuit, jfets, [gate_v])
        found.append((gate_v, freq, rendered, wet_response(circuit, breaks, freq)[0], breaks))
    return circuit, plan, found


@pytest.mark.parametrize("mixed", [False, True], ids=["wet", "wet with dry"])
def test_magnitude_within_the_stated_tenths(responses, mixed):
    """0.02 dB to 10 kHz and 0.2 dB to 16 kHz wherever within 10 dB of the maximum."""
    _, plan, found = responses
    for gate_v, freq, rendered, closed, _ in found:
        got, want = (20 * np.log10(np.abs(mixed + h) + 1e-30) for h in (rendered, closed))
        near = want > want.max() - 10.0
        low = near & (freq >= 20) & (freq <= 10_000)
        high = near & (freq > 10_000) & (freq <= 16_000)
        off_low = np.abs(got - want)[low].max()
        off_high = np.abs(got - want)[high].max(initial=0.0)
        print(f"{plan.factor}x gate {gate_v} V: {off_low:.4f} dB to 10k, {off_high:.4f} dB to 16k")
        assert off_low < 0.02
        assert off_high < 0.2


def test_notches_within_a_thousandth_to_5_khz(responses):
    circuit, _, found = responses
    seen = 0
    for _, freq, rendered, _, breaks in found:
        hz, _ = find_notches(circuit, breaks)
        power = np.abs(1.0 + rendered) ** 2
        for notch in hz[0][np.isfinite(hz[0]) & (hz[0] < 5000.0)]:
            # bins of 0.5 Hz: a parabola through the five lowest about the notch
            near = np.flatnonzero(np.abs(freq / notch - 1.0) < 0.05)
            least = near[power[near].argmin()]
            bend = np.polyfit(np.arange(-2, 3), power[least - 2 : least + 3], 2)
            measured = freq[least] - bend[1] / (2 * bend[0]) * (freq[1] - freq[0])
            assert abs(measured / notch - 1.0) < 1e-3
            seen += 1
    assert seen >= 5
