"""The engine's own promises: slices, workers, blocks, channels, rails, counts.

What it computes is held against an outside simulator in
test_engine_against_ngspice.py; here the careful loop, which takes every step to
convergence, serves as the yardstick for the fast one.
"""

import numpy as np
import pytest
from scipy.signal import butter, freqs_zpk, sosfilt
from sweepset.models.circuit import load_circuit
from sweepset.models.jfet import Jfet
from sweepset.render.chain_kernels import STATES, STUCK
from sweepset.render.engine import Engine, HighPass
from sweepset.render.lanes import LaneRunner, _Piece
from sweepset.render.plan import plan_engine, ratio_db
from sweepset.render.rules import ADAMS_4

RATE = 48_000


def parts(knee_v=0.0517, count=4, lambda_per_v=0.0):
    return [
        Jfet(-2.0 + 0.05 * i, 1e-3 * (1 + 0.03 * i), knee_v=knee_v, lambda_per_v=lambda_per_v)
        for i in range(count)
    ]


def swing(start, count, rate_hz):
    time = (start + np.arange(count)) / rate_hz
    return -1.7 + 0.6 * np.sin(2 * np.pi * 1.7 * time)


def strum(seconds, channels=1, peak=0.4):
    time = np.arange(int(seconds * RATE)) / RATE
    tones = [np.sin(2 * np.pi * f * time) / f for f in (196.0, 247.0, 294.0, 1570.0, 4410.0)]
    x = np.sum(tones, axis=0)
    x *= peak / np.abs(x).max()
    return np.stack([np.roll(x, 997 * c) for c in range(channels)], axis=1)


def render(x, jfets, *, block=8192, workers=1, circuit=None, gate=swing, plan=None, **options):
    circuit = circuit or load_circuit("heron")
    plan = plan or plan_engine(circuit, jfets, -2.3, -1.1, RATE)
    engine = Engine(circuit, jfets, RATE, x.shape[1], plan, gate, workers=workers, **options)
    out = [engine.process(x[i : i + block]) for i in range(0, len(x), block)]
    out.append(engine.finish())
    return np.concatenate(out), engine.report()


def test_bytes_do_not_depend_on_blocks_or_workers():
    x = strum(1.5, channels=2)
    reference, _ = render(x, parts())
    for block, workers in ((100, 1), (72_000, 1), (8192, 2), (777, 5)):
        again, _ = render(x, parts(), block=block, workers=workers)
        np.testing.assert_array_equal(again, reference)


def held_off(_start, count, _rate_hz):
    return np.full(count, -3.0)


@pytest.mark.parametrize("gate", [swing, held_off], ids=["swinging", "channels off"])
def test_slices_agree_with_the_uncut_chain_to_140_db(gate):
    """With the channels off the chain forgets most slowly: the warm-up's worst case."""
    import soxr

    circuit, jfets = load_circuit("heron"), parts()
    plan = plan_engine(circuit, jfets, -3.0, -1.1, RATE)
    x = strum(1.0)
    cut, _ = render(x, jfets, chain_only=True, plan=plan, gate=gate)
    # One lane from rest over the whole take, upsampled the same way.
    rate = RATE * plan.factor
    steps = soxr.resample(x[:, 0], RATE, rate, quality="VHQ")
    runner = LaneRunner(circuit, [jfets], 1.0 / rate, plan.rules, 1)
    bus = gate(0, len(steps), rate)
    out, _ = runner.run(steps[:, None].copy(), bus[:, None].copy(), 0)
    uncut = soxr.resample(out[:, 0], rate, RATE, quality="VHQ")
    assert ratio_db(cut[:, 0] - uncut[: len(cut)], uncut) < -140.0


@pytest.mark.parametrize(("knee_v", "lambda_per_v"), [(0.0, 0.0), (0.0, 0.02), (0.0517, 0.02)])
def test_fast_loop_agrees_with_the_careful_one(knee_v, lambda_per_v):
    runner, x, gate = lane_case(parts(knee_v, 4, lambda_per_v))
    fast, _ = runner.run(x, gate, 0)
    np.testing.assert_allclose(fast, carefully(runner, x, gate), atol=2e-7)


def lane_case(jfets, peak=0.4, circuit=None):
    circuit = circuit or load_circuit("heron")
    runner = LaneRunner(circuit, [jfets], 1 / 192_000, (ADAMS_4,) * len(jfets), 2)
    time = np.arange(8000) / 192_000
    fade = np.minimum(1.0, time / 0.005)
    x = peak * fade * np.sin(2 * np.pi * 700 * time) * np.sin(2 * np.pi * 45 * time + 1)
    gate = -1.7 + 0.6 * np.sin(2 * np.pi * 30 * time)
    return runner, np.stack([x, -0.5 * x], axis=1), np.stack([gate, gate[::-1]], axis=1)


def carefully(runner, x, gate):
    state = np.zeros((STATES, runner.stages, runner.lanes))
    piece = _Piece(x, gate, state, np.zeros((3, runner.lanes))).copy(np.zeros_like(x))
    runner._carefully(piece, np.arange(runner.lanes))
    assert piece.tally[:, STUCK].sum() == 0
    return piece.out


def test_second_pass_steps_in_where_one_is_not_enough(monkeypatch):
    runner, x, gate = lane_case(parts(0.0))
    calls = []
    once = LaneRunner._fast_pass

    def watch(self, *args, passes):
        calls.append(passes)
        return once(self, *args, passes=passes)

    monkeypatch.setattr(LaneRunner, "_fast_pass", watch)
    runner.change_limit_v = 1e-9
    out, _ = runner.run(x, gate, 0)
    assert set(calls) == {1, 2}
    np.testing.assert_allclose(out, carefully(runner, x, gate), atol=1e-9)


def test_a_lane_does_not_know_what_runs_beside_it():
    # One lane of a tone, one of noise (two passes), one that clips (the careful loop): each
    # the same to the last bit wherever it lies and among whatever others.
    circuit = load_circuit("heron")
    generator = np.random.default_rng(3)
    time = np.arange(6000) / 192_000
    gate = -1.7 + 0.5 * np.sin(2 * np.pi * 3 * time)
    signals = [
        0.3 * np.sin(2 * np.pi * 440 * time),
        sosfilt(butter(6, 15_000, fs=192_000, output="sos"), generator.normal(0.0, 0.5, len(time))),
        4.0 * np.sin(2 * np.pi * 200 * time),
        np.zeros(len(time)),
    ]

    def run(order):
        runner = LaneRunner(circuit, [parts()], 1 / 192_000, (ADAMS_4,) * 4, 4)
        x = np.stack([signals[n] for n in order], axis=1)
        out, tally = runner.run(x, np.repeat(gate[:, None], 4, axis=1), 500)
        return {n: out[:, lane] for lane, n in enumerate(order)}, tally

    first, tally = run([0, 1, 2, 3])
    assert 0 < tally.careful_steps <= 5500
    for order in ([3, 2, 1, 0], [2, 2, 0, 1], [0, 3, 3, 3]):
        for n, out in run(order)[0].items():
            np.testing.assert_array_equal(out, first[n])


def test_rails_are_obeyed_and_counted():
    circuit = load_circuit("heron")
    low, high = circuit.rails_v
    x = strum(0.5, peak=3.0)
    out, report = render(x, parts(), chain_only=True)
    # the decimation filter may overshoot a clipped wave by its Gibbs ripple
    assert out.min() > 1.2 * low
    assert out.max() < 1.2 * high
    assert report.rail_seconds > 0.0
    assert report.careful_share > 0.0
    assert any("rails" in sentence for sentence in report.warnings())


def test_clipping_inside_the_loop_solves_the_loop_equation():
    """Residual of the stage equations with clamped outputs, checked from outside the solver."""
    circuit = load_circuit("heron")
    low, high = circuit.rails_v
    runner, x, gate = lane_case(parts(), peak=4.0)
    out, tally = runner.run(x, gate, 0)
    assert tally.rail > 0
    assert tally.stuck == 0
    # outputs past the rails never appear; the worst excursions sit exactly on one
    assert out.min() >= low
    assert out.max() == high


def test_silence_gives_silence():
    out, report = render(np.zeros((RATE, 1)), parts())
    # what the source side's expansion between evaluations leaves: far below 24 bits' 6e-8
    assert np.abs(out).max() < 1e-9
    assert report.warnings() == []


def test_gate_conduction_is_counted_both_ways():
    x = strum(0.3, peak=1.2)
    _, forward = render(x, parts(), gate=lambda start, count, rate: np.full(count, 0.6))
    assert forward.gate_source_seconds == pytest.approx(4 * 0.3, rel=0.02)
    x = 2.0 * np.sin(2 * np.pi * 6000 * np.arange(RATE // 4) / RATE)[:, None]
    _, pulled = render(x, parts(), gate=lambda start, count, rate: np.full(count, 0.3))
    assert pulled.gate_source_seconds == 0.0
    assert pulled.gate_drain_seconds > 0.0
    sentences = " ".join(forward.warnings() + pulled.warnings())
    assert "sources" in sentences
    assert "drains" in sentences


def test_nonfinite_input_is_counted_not_hidden():
    x = strum(0.1)
    x[1000] = np.nan
    _, report = render(x, parts())
    assert report.nonfinite_frames > 0


@pytest.mark.parametrize("rate", [8000, 11025, 44100, 96000, 192000])
def test_any_rate_gives_as_many_frames_as_it_got(rate):
    circuit, jfets = load_circuit("heron"), parts()
    plan = plan_engine(circuit, jfets, -2.3, -1.1, rate)
    for frames in (1, 7, rate // 3):
        engine = Engine(circuit, jfets, rate, 1, plan, swing)
        x = 0.1 * np.sin(2 * np.pi * 440 * np.arange(frames) / rate)[:, None]
        out = np.concatenate([engine.process(x), engine.finish()])
        assert out.shape == (frames, 1)
        assert np.isfinite(out).all()


def test_coupling_matches_scipys_analog_response():
    """A sine through the coupling, against the closed form of an RC high-pass (scipy.signal)."""
    tau, rate = 47e-9 * 470e3, 192_000
    for hz in (20.0, 1000.0, 10_000.0):
        time = np.arange(rate) / rate
        y = HighPass(tau, rate, 1)(np.sin(2 * np.pi * hz * time)[:, None])[rate // 2 :, 0]
        lock = np.exp(-2j * np.pi * hz * time[rate // 2 :])
        got = 2j * np.mean(y * lock)
        _, want = freqs_zpk([0.0], [-1.0 / tau], 1.0, worN=[2 * np.pi * hz])
        assert abs(got - want[0]) < 3e-6
