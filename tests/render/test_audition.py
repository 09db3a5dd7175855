"""Takes side by side: one loudness, one oscillator phase, names for every system."""

from __future__ import annotations

import json
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pyloudnorm
import pytest
import soundfile
from hypothesis import example, given
from hypothesis import strategies as st
from sweepset.models.circuit import load_circuit
from sweepset.models.errors import InputError
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate, parse_trim
from sweepset.render.audition import (
    MAX_NAME,
    Audition,
    AuditionTake,
    audition_takes,
    file_names,
    render_audition,
    safe_name,
)
from sweepset.render.setup import TakeSettings
from sweepset.render.take import render_file

RATE = 48_000
CIRCUIT = load_circuit("heron")


def parts(*cutoffs: float) -> tuple[Jfet, ...]:
    return tuple(Jfet(v, 1.1e-3, label=f"J{abs(v) * 100:.0f}") for v in cutoffs)


SETS = {"matched": parts(-1.8, -1.81, -1.82, -1.83), "mismatched": parts(-1.2, -1.9, -2.3, -1.5)}
BASE = TakeSettings(CIRCUIT, (), parse_trim("60%"), parse_rate("noon"))
RATES = [parse_rate("9:00"), parse_rate("noon"), parse_rate("3:00")]


@pytest.fixture(scope="module")
def source(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("riff") / "riff one.wav"
    rng = np.random.default_rng(6)
    time_s = np.arange(RATE) / RATE
    envelope = np.exp(-3.0 * (time_s % 0.25))[:, None]
    soundfile.write(path, 0.4 * envelope * rng.uniform(-1, 1, (RATE, 2)), RATE, subtype="PCM_24")
    return path


@pytest.fixture(scope="module")
def made(source: Path) -> Audition:
    return render_audition(source, source.parent / "out", audition_takes(BASE, SETS, RATES))


def everything(folder: Path) -> dict[str, bytes]:
    return {str(p): p.read_bytes() if p.is_file() else b"" for p in sorted(folder.rglob("*"))}


def test_names_tell_the_takes_apart(made: Audition) -> None:
    assert [take.path.name for take in made.takes] == [
        "1_riff_one_dry.wav",
        "2_riff_one_matched_9-00.wav",
        "3_riff_one_matched_noon.wav",
        "4_riff_one_matched_3-00.wav",
        "5_riff_one_mismatched_9-00.wav",
        "6_riff_one_mismatched_noon.wav",
        "7_riff_one_mismatched_3-00.wav",
    ]
    folder = made.takes[0].path.parent
    assert len(list(folder.iterdir())) == 14  # each with its sidecar, and nothing else


def test_loudness_agrees_by_a_second_meter(made: Audition) -> None:
    # check-values f21: within 0.05 LU. The second meter is pyloudnorm with the class that
    # holds the standard's tables at 48 kHz (f20).
    meter = pyloudnorm.Meter(RATE, filter_class="DeMan")
    found = [meter.integrated_loudness(soundfile.read(take.path)[0]) for take in made.takes]
    assert np.ptp(found) <= 0.05
    assert np.allclose(found, made.target_lufs, atol=0.05)
    assert np.allclose([take.lufs for take in made.takes], found, atol=0.01)
    assert max(take.peak_dbfs for take in made.takes) <= -1.0 + 1e-6


def test_takes_are_the_same_as_rendered_alone(source: Path, tmp_path: Path) -> None:
    # Same oscillator phase, nothing carried from one take to the next, in whatever order.
    takes = audition_takes(BASE, {"matched": SETS["matched"]}, RATES[1:2])
    forth = render_audition(source, tmp_path / "forth", takes)
    back = render_audition(source, tmp_path / "back", takes[::-1])
    for number, (take, one, other) in enumerate(
        zip(takes, forth.takes, back.takes[::-1], strict=True)
    ):
        alone = render_file(source, tmp_path / f"{number}.wav", take.settings, gain_db=one.gain_db)
        samples = [soundfile.read(made.path, dtype="int32")[0] for made in (alone, one, other)]
        assert np.array_equal(samples[0], samples[1])
        assert np.array_equal(samples[1], samples[2])


def test_all_takes_start_at_the_same_phase(made: Audition) -> None:
    # The gate at the first frame, from the bus itself: its lowest turn, at every rate the
    # same for one set and trimmer to within what the bus capacitor lags.
    starts = {take.record["take"]["oscillator_start"] for take in made.takes[1:]}
    assert starts == {"the tap at its lowest turn, about to rise"}
    for setup in made.setups[1:]:
        assert setup is not None
        assert setup.bus is not None
        tap = setup.bus.tap_v(np.linspace(0.0, setup.bus.period_s, 200))
        assert tap[0] == pytest.approx(tap.min(), abs=1e-9)
        assert tap[1] > tap[0]


def test_takes_differ_in_nothing_but_what_was_asked(made: Audition) -> None:
    engines = [take.record["engine"]["factor"] for take in made.takes[1:]]
    assert len(set(engines)) == 1
    records = [take.record["take"] for take in made.takes[1:]]
    for key in ("circuit", "celsius", "full_scale_v", "sweep_ohm", "supply_v"):
        assert len({json.dumps(record[key]) for record in records}) == 1
    assert [record["rate"]["asked"] for record in records] == ["9:00", "noon", "3:00"] * 2


def test_each_set_keeps_its_own_trimmer_position_over_the_rates() -> None:
    takes = audition_takes(replace(BASE, trimmer=parse_trim("auto")), SETS, RATES)[1:]
    positions = [take.settings.trimmer.rotation for take in takes]
    assert positions[0] is not None
    assert positions[:3] == [positions[0]] * 3
    assert positions[3:] == [positions[3]] * 3
    assert positions[0] != positions[3]
    assert takes[0].settings.trimmer.text == "auto, solved at noon"


def test_record_is_json(made: Audition) -> None:
    record = json.loads(json.dumps(made.as_record()))
    assert [row["name"] for row in record["takes"]][:2] == ["dry", "matched 9:00"]
    assert record["takes"][0]["file"] == "1_riff_one_dry.wav"


def test_progress_covers_the_whole(source: Path, tmp_path: Path) -> None:
    seen: list[tuple[str, float]] = []
    takes = audition_takes(BASE, {"matched": SETS["matched"]}, RATES[:1])
    render_audition(source, tmp_path / "out", takes, progress=lambda *step: seen.append(step))
    shares = [share for _, share in seen]
    assert shares == sorted(shares)
    assert shares[-1] == 1.0
    assert {name for name, _ in seen} == {"dry", "matched 9:00"}


@pytest.mark.parametrize("stop", [KeyboardInterrupt, RuntimeError, MemoryError])
def test_an_interruption_leaves_nothing(
    source: Path, tmp_path: Path, stop: type[BaseException]
) -> None:
    (tmp_path / "here").mkdir()
    (tmp_path / "here" / "1_riff_one_dry.wav").write_text("mine")
    before = everything(tmp_path)

    def halt(name: str, share: float) -> None:
        if name != "dry":
            raise stop

    takes = audition_takes(BASE, {"matched": SETS["matched"]}, RATES[:1])
    for folder in ("new", "here"):
        with pytest.raises(stop):
            render_audition(source, tmp_path / folder, takes, overwrite=True, progress=halt)
        assert everything(tmp_path) == before


def test_a_failure_while_writing_leaves_nothing(
    source: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from sweepset.render import take as module

    written = []

    def fail_at_the_third(record: dict[str, object]) -> str:
        written.append(record)
        if len(written) == 3:
            raise OSError(28, "No space left on device")
        return "{}"

    monkeypatch.setattr(module, "sidecar_text", fail_at_the_third)
    takes = [AuditionTake(name, replace(BASE, dry=True)) for name in "abcd"]
    with pytest.raises(InputError, match=r"3_riff_one_c\.json: the disk is full"):
        render_audition(source, tmp_path / "out", takes)
    assert everything(tmp_path) == {}


def test_refusals(source: Path, tmp_path: Path) -> None:
    dry = [AuditionTake("dry", replace(BASE, dry=True))] * 2
    with pytest.raises(InputError, match="at least one take"):
        render_audition(source, tmp_path / "out", [])
    with pytest.raises(InputError, match="at least one set and one rate"):
        audition_takes(BASE, SETS, [])
    with pytest.raises(InputError, match="no such audio file"):
        render_audition(tmp_path / "none.wav", tmp_path / "out", dry)
    with pytest.raises(InputError, match="does not exist; make it"):
        render_audition(source, tmp_path / "no" / "out", dry)
    (tmp_path / "file").write_text("x")
    with pytest.raises(InputError, match="is not a folder"):
        render_audition(source, tmp_path / "file", dry)
    with pytest.raises(InputError, match="4 stages, the set has 0 parts"):
        render_audition(source, tmp_path / "out", [AuditionTake("a", BASE)])
    assert sorted(p.name for p in tmp_path.iterdir()) == ["file"]
    (tmp_path / "1_riff_one_dry.wav").write_text("x")
    (tmp_path / "2_riff_one_dry.json").write_text("x")
    with pytest.raises(InputError) as caught:
        render_audition(source, tmp_path, dry)
    assert len(caught.value.messages) == 2
    assert all("exists already" in text for text in caught.value.messages)


def test_silence_needs_no_gain(tmp_path: Path) -> None:
    path = tmp_path / "silent.wav"
    soundfile.write(path, np.zeros((RATE, 1)), RATE)
    dry = [AuditionTake("dry", replace(BASE, dry=True))]
    made = render_audition(path, tmp_path / "out", dry)
    assert made.takes[0].gain_db == 0.0
    assert json.loads(json.dumps(made.as_record()))["target_lufs"] is None


# ---------------------------------------------------------------- names

RESERVED = {"con", "prn", "aux", "nul", *(f"{d}{n}" for d in ("com", "lpt") for n in range(10))}


@given(st.text(max_size=300))
@example("CON")
@example("nul.txt")
@example("../../etc/passwd")
@example("a" * 400)
@example("...")
@example("9:00 / 35% \\ ä")
def test_names_are_safe_everywhere(text: str) -> None:
    # Common practice, no published source: the characters, endings and device names that the
    # usual systems refuse, and their limit of 255 bytes.
    name = safe_name(text)
    assert re.fullmatch(r"[A-Za-z0-9._-]+", name)
    assert not name.endswith(".")
    assert not name.startswith((".", "-"))
    assert name.split(".")[0].lower() not in RESERVED
    assert len(name) <= MAX_NAME + 1


def test_names_stay_telling() -> None:
    assert safe_name("matched 9:00") == "matched_9-00"
    assert safe_name("poor 35%") == "poor_35pct"
    assert safe_name("Ständchen 0.8Hz") == "Standchen_0.8Hz"


def test_no_two_names_are_alike() -> None:
    names = file_names(["Set", "set", "set", *["x" * 300] * 9])
    assert len({name.lower() for name in names}) == 12
    assert names[0] == "01_Set"
