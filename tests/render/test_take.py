"""One take: settings, files, provenance, refusals. The engine's exactness is tested with it."""

from __future__ import annotations

import json
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import soundfile
from sweepset.models.circuit import Circuit, load_circuit
from sweepset.models.errors import InputError
from sweepset.models.gatebus import solve_bus, trimmer_position
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate, parse_trim
from sweepset.render.audio import quantise_24
from sweepset.render.setup import TakeSettings, circuit_hash
from sweepset.render.take import Take, TakeFile, render_file, render_take

RATE = 48_000
CIRCUIT = load_circuit("heron")
CUTOFFS = (-1.80, -1.86, -1.78, -1.90)
PARTS = tuple(
    Jfet(cutoff_v=v, beta_a_per_v2=1.1e-3, label=f"J{n:02d}") for n, v in enumerate(CUTOFFS, 1)
)
# A trimmer position of its own, so that the tests do not wait for the bias solver.
FIXED = "60%"


def riff(
    seconds: float = 0.2, channels: int = 1, rate: int = RATE, peak: float = 0.3
) -> np.ndarray:
    noise = np.random.default_rng(1).uniform(-1.0, 1.0, (round(seconds * rate), channels))
    smooth = noise + np.roll(noise, 1, axis=0) + np.roll(noise, 2, axis=0)
    return peak * smooth / np.max(np.abs(smooth))


def take(audio: np.ndarray, hz: float = RATE, **options: object) -> Take:
    return render_take(audio, hz, CIRCUIT, PARTS, **{"trimmer": FIXED, **options})


def settings(**options: object) -> TakeSettings:
    return TakeSettings(
        **{
            "circuit": CIRCUIT,
            "jfets": PARTS,
            "trimmer": parse_trim(FIXED),
            "rate": parse_rate("noon"),
            **options,
        }
    )


@pytest.fixture
def source(tmp_path: Path) -> Path:
    path = tmp_path / "riff.wav"
    soundfile.write(path, riff(channels=2), RATE, subtype="PCM_24")
    return path


def render(source: Path, name: str = "out/take.wav", **options: object) -> TakeFile:
    target = source.parent / name
    target.parent.mkdir(exist_ok=True)
    asked = options.pop("settings", settings())
    return render_file(source, target, asked, **options)


# ---------------------------------------------------------------- in memory


@pytest.mark.parametrize("rate", [8_000, 22_050, 44_100, 96_000, 192_000])
def test_as_many_frames_out_as_in_at_any_rate(rate: int) -> None:
    made = take(riff(0.1, 2, rate), rate)
    assert made.samples.shape == (round(0.1 * rate), 2)
    assert made.report is not None
    assert made.report.nonfinite_frames == 0
    assert np.isfinite(made.samples).all()


@pytest.mark.parametrize("frames", [1, 2, 7])
def test_very_short_riffs(frames: int) -> None:
    assert take(np.full(frames, 0.1)).samples.shape == (frames, 1)


def test_channels_do_not_mix() -> None:
    audio = riff(0.1, 2)
    both = take(audio).samples
    for channel in (0, 1):
        assert np.array_equal(both[:, channel], take(audio[:, channel]).samples[:, 0])


def test_workers_do_not_matter() -> None:
    audio = riff(0.5, 2)
    assert np.array_equal(take(audio, workers=1).samples, take(audio, workers=3).samples)


def test_full_scale_voltage_is_a_unit() -> None:
    # Half the samples at twice the volts is the same voltage: the same take, halved. Powers of
    # two are exact in binary.
    audio = riff()
    one = take(audio, full_scale_v=1.0).samples
    assert np.array_equal(take(audio / 2.0, full_scale_v=2.0).samples * 2.0, one)
    # And the circuit is not linear: the same samples at more volts are another take.
    loud = take(audio, full_scale_v=2.0).samples
    assert np.max(np.abs(loud - one)) > 1e-3


def test_a_trace_takes_the_oscillators_place() -> None:
    # The bus sampled once per frame and joined by straight lines, against the bus itself. The
    # chord's error over 1/48000 s is h^2/8 of the curvature, under 1e-7 V here.
    audio = riff(0.5)
    bus = solve_bus(CIRCUIT, trimmer_position(CIRCUIT, parse_trim(FIXED)), parse_rate("noon"))
    trace = bus.gate_v(np.arange(len(audio)) / RATE)
    by_trace = take(audio, gate_v=trace)
    by_bus = take(audio)
    error = by_trace.samples - by_bus.samples
    assert np.sqrt(np.mean(error**2) / np.mean(by_bus.samples**2)) < 1e-5
    assert "trimmer" not in by_trace.record["take"]


def test_a_held_trace_differs_from_a_moving_one() -> None:
    audio = riff(0.5)
    held = take(audio, gate_v=np.full(len(audio), -1.5)).samples
    other = take(audio, gate_v=np.full(len(audio), -1.2)).samples
    assert np.sqrt(np.mean((held - other) ** 2) / np.mean(held**2)) > 0.01


def test_dry_is_the_riff() -> None:
    audio = riff(channels=2)
    made = take(audio, dry=True)
    assert np.array_equal(made.samples, audio)
    assert made.record["dry"] is True
    assert made.report is None


@pytest.mark.parametrize(
    "change",
    [
        {"celsius": 40.0},
        {"rate": "9:00"},
        {"trimmer": "50%"},
        {"sweep_ohm": 4.7e6},
        {"supply_v": 8.4},
    ],
    ids=lambda change: next(iter(change)),
)
def test_every_setting_is_heard(change: dict[str, object]) -> None:
    audio = riff(0.5)
    base, changed = take(audio).samples, take(audio, **change).samples
    assert np.sqrt(np.mean((base - changed) ** 2) / np.mean(base**2)) > 1e-3


def test_overrides_are_the_circuit_changed() -> None:
    audio = riff()
    changed = CIRCUIT.with_changes(bus__sweep_ohm=4.7e6, supply__voltage_v=8.4)
    by_hand = render_take(audio, RATE, changed, PARTS, trimmer=FIXED)
    by_option = take(audio, sweep_ohm=4.7e6, supply_v=8.4)
    assert np.array_equal(by_hand.samples, by_option.samples)
    assert by_option.record["take"]["circuit_sha256"] == circuit_hash(changed)


def test_a_shipped_circuits_name_will_do() -> None:
    audio = riff(0.05)
    by_name = render_take(audio, RATE, "heron", PARTS, trimmer=FIXED)
    assert np.array_equal(by_name.samples, take(audio).samples)


def test_refusals_in_memory() -> None:
    audio = riff(0.01)
    bad = audio.copy()
    bad[7] = np.nan
    cases: list[tuple[dict[str, object], str]] = [
        ({"audio": bad}, "1 samples are not finite numbers, the first at frame 7"),
        ({"audio": np.zeros((2, 3, 4))}, r"audio of shape \(2, 3, 4\)"),
        ({"audio": np.zeros((0, 1))}, "at least 1 frame"),
        ({"audio": np.zeros((2, 4800))}, "transpose it"),
        ({"sample_rate": 4000.0}, "sample rate 4000 Hz; expected 8000"),
        ({"jfets": PARTS[:3]}, r"4 stages, the set has 3 parts \(J01, J02, J03\)"),
        ({"celsius": 400.0}, "channel temperature 400 C"),
        ({"full_scale_v": 0.0}, "full-scale voltage 0 V"),
        ({"full_scale_v": float("nan")}, "full-scale voltage nan V"),
        ({"gate_v": np.zeros(3)}, r"gate_v of shape \(3,\)"),
        ({"gate_v": np.full(len(audio), np.inf)}, "frame 0 is not a finite number"),
        ({"supply_v": 900.0}, "supply"),
        ({"rate": "twelve"}, "twelve"),
        ({"trimmer": "much"}, "much"),
        ({"circuit": "hero"}, "did you mean heron"),
    ]
    base = {"audio": audio, "sample_rate": RATE, "circuit": CIRCUIT, "jfets": PARTS}
    for change, message in cases:
        with pytest.raises(InputError, match=message):
            render_take(**{"trimmer": FIXED, **base, **change})


# ---------------------------------------------------------------- files


def test_the_file_holds_the_take_rounded(source: Path) -> None:
    made = render(source)
    expected = take(soundfile.read(source, always_2d=True)[0])
    codes, _ = quantise_24(expected.samples)
    assert np.array_equal(soundfile.read(made.path, dtype="int32")[0], codes)
    assert made.peak_dbfs == pytest.approx(20.0 * np.log10(np.abs(expected.samples).max()))
    assert made.gain_db == 0.0


def test_gain(source: Path) -> None:
    plain = soundfile.read(render(source, "a.wav").path)[0]
    lower = soundfile.read(render(source, "b.wav", gain_db=-20.0).path)[0]
    assert np.max(np.abs(lower - 0.1 * plain)) <= 2.0**-23


def test_dry_file_is_the_riff(source: Path) -> None:
    made = render(source, settings=settings(dry=True))
    assert np.array_equal(*(soundfile.read(p, dtype="int32")[0] for p in (made.path, source)))


def test_provenance(source: Path) -> None:
    made = render(source)
    sidecar = json.loads(made.path.with_suffix(".json").read_text(encoding="utf-8"))
    assert sidecar == json.loads(json.dumps(made.record))
    assert [part["label"] for part in sidecar["take"]["parts"]] == ["J01", "J02", "J03", "J04"]
    assert [part["cutoff_v"] for part in sidecar["take"]["parts"]] == list(CUTOFFS)
    assert sidecar["take"]["full_scale_v"] == 1.0
    assert sidecar["take"]["trimmer"] == {"asked": FIXED, "position": 0.6}
    assert sidecar["input"]["name"] == "riff.wav"
    assert sidecar["engine"]["factor"] >= 1
    assert set(sidecar["libraries"]) >= {"numpy", "numba", "soxr", "soundfile"}
    # The circuit in the sidecar is enough to make the circuit again.
    again = Circuit.model_validate(sidecar["take"]["circuit"])
    assert circuit_hash(again) == sidecar["take"]["circuit_sha256"]
    with soundfile.SoundFile(made.path) as file:
        comment = json.loads(file.comment)
        assert file.software.startswith(f"sweepset {sidecar['sweepset']}")
        assert file.title == "take"
    assert comment["parts"] == ["J01", "J02", "J03", "J04"]
    assert comment["input_sha256"] == sidecar["input"]["sha256"]
    assert comment["rate_hz"] == sidecar["take"]["rate"]["rate_hz"]


@pytest.mark.parametrize("encoding", ["pcm24", "float32"])
def test_equal_takes_are_equal_bytes(source: Path, encoding: str) -> None:
    # In another folder, a second later, with another number of workers.
    first = render(source, "one/take.wav", encoding=encoding, workers=1).path
    time.sleep(1.1)
    second = render(source, "two/take.wav", encoding=encoding, workers=2).path
    for ending in (".wav", ".json"):
        content = first.with_suffix(ending).read_bytes()
        assert content == second.with_suffix(ending).read_bytes()
        assert str(source.parent).encode() not in content


def test_peak_beyond_full_scale(source: Path) -> None:
    quiet = render(source)
    gain_db = 6.0 - quiet.peak_dbfs  # a peak of +6 dBFS
    with pytest.raises(InputError, match=r"peak is \+6\.00 dBFS.*give a gain of (.*) dB") as caught:
        render(source, "loud.wav", gain_db=gain_db)
    advised = float(str(caught.value).split("give a gain of ")[1].split(" dB")[0])
    assert render(source, "advised.wav", gain_db=advised).peak_dbfs <= 0.0
    scaled = render(source, "scaled.wav", gain_db=gain_db, peak="scale")
    assert scaled.peak_dbfs == pytest.approx(-1.0)
    assert np.abs(soundfile.read(scaled.path)[0]).max() == pytest.approx(10 ** (-1 / 20), abs=1e-6)
    kept = render(source, "kept.wav", gain_db=gain_db, encoding="float32")
    assert np.abs(soundfile.read(kept.path)[0]).max() == pytest.approx(10 ** (6 / 20), rel=1e-6)
    assert any("+6.00 dBFS" in text for text in kept.warnings)
    assert not (source.parent / "loud.wav").exists()


def everything(folder: Path) -> dict[str, bytes]:
    return {str(p): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def test_nothing_is_left_behind_or_touched(source: Path) -> None:
    render(source)
    before = everything(source.parent)

    def interrupt(what: str, share: float) -> None:
        raise KeyboardInterrupt

    def fail(what: str, share: float) -> None:
        raise RuntimeError

    for stop in (interrupt, fail):
        for options in ({"name": "new.wav"}, {"name": "out/take.wav", "overwrite": True}):
            with pytest.raises((KeyboardInterrupt, RuntimeError)):
                render(source, progress=stop, **options)
            assert everything(source.parent) == before
    with pytest.raises(InputError):
        render(source, "new.wav", gain_db=80.0)
    with pytest.raises(InputError, match="exists already"):
        render(source)
    with pytest.raises(InputError, match="is the input"):
        render(source, "riff.wav", overwrite=True)
    assert everything(source.parent) == before
    assert render(source, overwrite=True).path.exists()


def test_progress_reaches_one_and_never_falls(source: Path) -> None:
    seen: list[float] = []
    render(source, progress=lambda what, share: seen.append(share))
    assert seen == sorted(seen)
    assert seen[-1] == 1.0


def test_full_disk(source: Path) -> None:
    # A limit on file size stands for a full disk.
    script = (
        "import resource, sys\n"
        "from sweepset.models.errors import InputError\n"
        "from sweepset.render.setup import TakeSettings\n"
        "from sweepset.render.take import render_file\n"
        "from sweepset.models.circuit import load_circuit\n"
        "from sweepset.models.quantity import parse_rate, parse_trim\n"
        "asked = TakeSettings(load_circuit('heron'), (), parse_trim('auto'),"
        " parse_rate('noon'), dry=True)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (40_000, 40_000))\n"
        "try: render_file(sys.argv[1], sys.argv[2], asked)\n"
        "except InputError as fault: print(fault)\n"
    )
    target = source.parent / "take.wav"
    done = subprocess.run(
        [sys.executable, "-c", script, str(source), str(target)],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    assert "see whether the disk is full" in done.stdout
    assert done.stderr == ""
    assert [p.name for p in source.parent.iterdir()] == ["riff.wav"]


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="needs Linux's /proc")
def test_an_hour_needs_no_more_memory_than_a_minute(tmp_path: Path) -> None:
    # Peak memory of a process of its own for 1 minute and for 6, above the stretch of some
    # 30 s that the engine holds. 40 MB: the allocator's play; the 5 minutes' samples alone are
    # 115 MB, and the oversampled ones eight times that. VmHWM, not ru_maxrss: the latter
    # carries the parent's peak over a fork.
    script = (
        "import pathlib, sys\n"
        "from sweepset.models.circuit import load_circuit\n"
        "from sweepset.models.jfet import Jfet\n"
        "from sweepset.models.quantity import parse_rate, parse_trim\n"
        "from sweepset.render.setup import TakeSettings\n"
        "from sweepset.render.take import render_file\n"
        "parts = tuple(Jfet(-1.8, 1.1e-3) for _ in range(4))\n"
        "asked = TakeSettings(load_circuit('heron'), parts, parse_trim('60%'),"
        " parse_rate('noon'))\n"
        "render_file(sys.argv[1], sys.argv[2], asked)\n"
        "status = pathlib.Path('/proc/self/status').read_text()\n"
        "print(status.split('VmHWM:')[1].split()[0])\n"
    )
    peaks = []
    for seconds in (60, 360):
        source = tmp_path / f"{seconds}.wav"
        soundfile.write(source, riff(seconds), RATE, subtype="PCM_16")
        done = subprocess.run(
            [sys.executable, "-c", script, str(source), str(tmp_path / f"{seconds}_take.wav")],
            capture_output=True, text=True, check=True,
        )  # fmt: skip
        peaks.append(int(done.stdout) / 1000.0)
    print(f"peak memory: {peaks[0]:.0f} MB for 60 s, {peaks[1]:.0f} MB for 360 s")
    assert peaks[1] - peaks[0] < 40.0
