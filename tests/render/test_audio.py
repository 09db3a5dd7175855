"""Audio files in and out: exactness, container facts, refusals."""

from __future__ import annotations

import hashlib
import json
import os
import resource
import struct
import subprocess
import sys
import time
import wave
from pathlib import Path

import numpy as np
import pytest
import soundfile
from hypothesis import given
from hypothesis import strategies as st
from sweepset.models.errors import InputError
from sweepset.render import audio
from sweepset.render.audio import AudioReader, AudioWriter, check_audio, check_output, read_audio

RNG = np.random.default_rng(5)
CODES = RNG.integers(-(2**23), 2**23, size=(3000, 2))


def write(path: Path, samples: np.ndarray, rate: int = 48_000, **options: object) -> Path:
    with AudioWriter(path, rate, samples.shape[1], len(samples), **options) as writer:
        for start in range(0, len(samples), 700):
            writer.write(samples[start : start + 700])
    return path


def chunks(path: Path) -> dict[bytes, bytes]:
    """Walk a RIFF or RF64 file's chunks after check-values j1 (RIFF 1991) and j9."""
    raw = path.read_bytes()
    found = {raw[:4]: raw[4:12]}
    place = 12
    data_size = None
    while place < len(raw):
        name, size = struct.unpack_from("<4sI", raw, place)
        if name == b"ds64":
            data_size = struct.unpack_from("<Q", raw, place + 16)[0]
        if name == b"data" and size == 0xFFFFFFFF:
            size = data_size
        found[name] = raw[place + 8 : place + 8 + size]
        assert len(found[name]) == size
        place += 8 + size + size % 2
    assert place == len(raw)
    return found


def info(chunk: bytes) -> dict[bytes, bytes]:
    """Walk a LIST/INFO chunk after check-values j2."""
    assert chunk[:4] == b"INFO"
    items, place = {}, 4
    while place < len(chunk):
        name, size = struct.unpack_from("<4sI", chunk, place)
        item = chunk[place + 8 : place + 8 + size]
        assert item.endswith(b"\0")
        items[name] = item.rstrip(b"\0")
        place += 8 + size + size % 2
    return items


def header_wav(
    path: Path,
    *,
    rate: int = 48_000,
    channels: int = 1,
    bits: int = 16,
    claimed: int | None = None,
    data: bytes = bytes(4000),
) -> Path:
    """Write a PCM WAV header by hand (check-values j1), with any claim about its data."""
    frame = channels * bits // 8
    fmt = struct.pack("<HHIIHH", 1, channels, rate, rate * frame, frame, bits)
    size = len(data) if claimed is None else claimed
    body = b"WAVEfmt " + struct.pack("<I", 16) + fmt + b"data" + struct.pack("<I", size) + data
    path.write_bytes(b"RIFF" + struct.pack("<I", min(4 + 24 + 8 + size, 2**32 - 1)) + body)
    return path


# ---------------------------------------------------------------- writing


def test_24_bit_codes_come_back_exactly(tmp_path: Path) -> None:
    # Against the bytes of the data chunk: 3-byte little-endian two's complement.
    path = write(tmp_path / "a.wav", CODES / 2.0**23)
    raw = chunks(path)[b"data"]
    triples = np.frombuffer(raw, np.uint8).reshape(-1, 3).astype(np.int64)
    found = triples @ [1, 256, 65536]
    found[found >= 2**23] -= 2**24
    assert np.array_equal(found.reshape(-1, 2), CODES)
    samples, rate = read_audio(path)
    assert rate == 48_000
    assert np.array_equal(samples, CODES / 2.0**23)


@given(st.floats(-1.0, 1.0 - 2.0**-23))
def test_rounding_is_to_the_nearest_code(value: float) -> None:
    # The library's own conversion truncates (seen: design, "Audio writing").
    codes, beyond = audio.quantise_24(np.array([value]))
    assert beyond == 0
    assert abs(codes[0] / 2.0**31 - value) <= 2.0**-24
    assert codes[0] % 256 == 0


def test_codes_beyond_full_scale_are_counted() -> None:
    codes, beyond = audio.quantise_24(np.array([1.0, -1.0, -1.5, 0.0, 1.0 - 2.0**-23]))
    assert beyond == 2
    assert codes.tolist() == [2**31 - 256, -(2**31), -(2**31), 0, 2**31 - 256]


def test_24_bit_header(tmp_path: Path) -> None:
    # check-values j1, j3 (WAVEFORMATEXTENSIBLE, mmreg.h), j4 (from memory).
    path = write(tmp_path / "a.wav", CODES / 2.0**23, rate=44_100)
    found = chunks(path)
    assert struct.unpack("<I", found[b"RIFF"][:4])[0] == path.stat().st_size - 8
    assert found[b"RIFF"][4:] == b"WAVE"
    fmt = found[b"fmt "]
    assert len(fmt) == 40
    tag, channels, rate, per_second, frame, bits, extra, valid = struct.unpack_from(
        "<HHIIHHHH", fmt
    )
    assert (tag, channels, rate, bits) == (0xFFFE, 2, 44_100, 24)
    assert (frame, per_second) == (6, 6 * 44_100)
    assert extra >= 22
    assert valid <= bits
    assert bits % 8 == 0
    assert fmt[24:40].hex() == "0100000000001000800000aa00389b71"
    assert len(found[b"data"]) == CODES.size * 3


def test_float_header_and_values_beyond_full_scale(tmp_path: Path) -> None:
    # check-values j3, j4: float GUID, and a fact chunk holding the frames.
    samples = np.array([[1.5], [-3.25], [0.1]])
    path = write(tmp_path / "a.wav", samples, encoding="float32")
    found = chunks(path)
    assert found[b"fmt "][24:40].hex() == "0300000000001000800000aa00389b71"
    assert struct.unpack("<I", found[b"fact"])[0] == 3
    assert np.array_equal(np.frombuffer(found[b"data"], "<f4"), samples[:, 0].astype("<f4"))
    assert np.array_equal(read_audio(path)[0], samples.astype(np.float32))


def test_odd_length_is_padded(tmp_path: Path) -> None:
    # check-values j1: a pad byte follows a chunk of odd length.
    path = write(tmp_path / "a.wav", np.zeros((3, 1)))
    assert len(chunks(path)[b"data"]) == 9
    assert path.stat().st_size % 2 == 0


def test_texts_stand_in_the_info_list(tmp_path: Path) -> None:
    # check-values j2: null-terminated items of a LIST chunk; a comment has no newlines.
    path = write(
        tmp_path / "a.wav",
        np.zeros((10, 1)),
        title="Take é",
        software="sweepset 0.1.0",
        comment='{"a":1}',
    )
    found = info(chunks(path)[b"LIST"])
    assert found[b"INAM"] == "Take é".encode()
    assert found[b"ISFT"].startswith(b"sweepset 0.1.0")
    assert json.loads(found[b"ICMT"]) == {"a": 1}


@pytest.mark.parametrize("encoding", ["pcm24", "float32", "flac24"])
def test_bytes_do_not_depend_on_the_time(tmp_path: Path, encoding: str) -> None:
    samples = CODES / 2.0**24
    first = write(tmp_path / "a.wav", samples, encoding=encoding, title="x").read_bytes()
    time.sleep(1.1)
    assert write(tmp_path / "b.wav", samples, encoding=encoding, title="x").read_bytes() == first


@pytest.mark.parametrize("encoding", ["pcm24", "float32"])
def test_rf64_where_32_bit_lengths_do_not_suffice(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, encoding: str
) -> None:
    # check-values j9, j10 (EBU Tech 3306, ITU-R BS.2088). The limit is lowered, since the
    # true one (j5) needs 4 GB.
    assert audio.RIFF_LIMIT_BYTES == 4_294_967_295
    monkeypatch.setattr(audio, "RIFF_LIMIT_BYTES", 10_000)
    samples = CODES / 2.0**23
    path = write(tmp_path / "a.wav", samples, encoding=encoding, title="x")
    raw = path.read_bytes()
    assert raw[:4] == b"RF64"
    assert raw[4:8] == b"\xff" * 4
    assert raw[12:16] == b"ds64"
    length, riff_size, data_size, frames = struct.unpack_from("<IQQQ", raw, 16)
    assert length >= 28
    assert riff_size == len(raw) - 8
    assert data_size == samples.size * (3 if encoding == "pcm24" else 4)
    assert frames == len(samples)
    found = chunks(path)
    if b"PEAK" in found:
        assert found[b"PEAK"][4:8] == bytes(4)
    assert np.array_equal(read_audio(path)[0], samples.astype(np.float32))


@pytest.mark.parametrize(
    ("channels", "rate", "encoding", "seconds"),
    [(2, 48_000, "pcm24", 14913), (2, 48_000, "float32", 11184), (2, 96_000, "float32", 5592)],
)
def test_size_limit_in_seconds(channels: int, rate: int, encoding: str, seconds: int) -> None:
    # check-values j5.
    assert audio.audio_bytes(seconds * rate, channels, encoding) <= audio.RIFF_LIMIT_BYTES
    assert audio.audio_bytes((seconds + 1) * rate, channels, encoding) > audio.RIFF_LIMIT_BYTES


def test_clipping_is_never_silent(tmp_path: Path) -> None:
    samples = np.array([[0.5], [1.25], [-1.5], [0.0]])
    with pytest.raises(InputError, match=r"2 samples are beyond full scale.*\+3\.52 dBFS.*gain"):
        write(tmp_path / "a.wav", samples)


@pytest.mark.parametrize("encoding", ["pcm24", "float32"])
@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_samples_that_are_not_finite_are_not_written(
    tmp_path: Path, encoding: str, bad: float
) -> None:
    samples = np.zeros((1500, 2))
    samples[1234, 1] = bad
    with pytest.raises(InputError, match=r"1 samples are not finite numbers, .* at frame 1234"):
        write(tmp_path / "a.wav", samples, encoding=encoding)


def test_length_must_be_the_announced_one(tmp_path: Path) -> None:
    with (
        pytest.raises(InputError, match="5 frames came where 6 were announced"),
        AudioWriter(tmp_path / "a.wav", 48_000, 1, 6) as writer,
    ):
        writer.write(np.zeros((5, 1)))


def test_full_disk_is_one_clear_message(tmp_path: Path) -> None:
    # A limit on file size stands for a full disk: the write fails in the same call.
    script = (
        "import resource, sys, numpy as np\n"
        "from sweepset.render.audio import AudioWriter\n"
        "from sweepset.models.errors import InputError\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))\n"
        "try:\n"
        "    with AudioWriter(sys.argv[1], 48000, 1, 200_000, shown_as='take.wav') as writer:\n"
        "        for _ in range(20): writer.write(np.zeros((10_000, 1)))\n"
        "except InputError as fault:\n"
        "    print(fault)\n"
    )
    assert resource.RLIMIT_FSIZE is not None
    done = subprocess.run(
        [sys.executable, "-c", script, str(tmp_path / "a.wav")],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    assert done.stdout.startswith("take.wav: cannot be written")
    assert "disk is full" in done.stdout
    assert done.stderr == ""


def test_too_little_room_is_said_before_anything_is_written(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"MB needed, .* MB free; make room"):
        audio.check_room(tmp_path, 10**18)
    audio.check_room(tmp_path, 1000)


# ---------------------------------------------------------------- output names


def test_output_may_be_new(tmp_path: Path) -> None:
    assert check_output(tmp_path / "new.wav") == tmp_path / "new.wav"


def test_output_refusals(tmp_path: Path) -> None:
    there = write(tmp_path / "there.wav", np.zeros((9, 1)))
    before = there.read_bytes()
    (tmp_path / "folder.wav").mkdir()
    (tmp_path / "side.json").write_text("mine")
    (tmp_path / "soft.wav").symlink_to(there)
    os.link(there, tmp_path / "hard.wav")
    (tmp_path / "sub").mkdir()
    cases = {
        tmp_path / "there.wav": "exists already",
        tmp_path / "side.wav": r"side\.json: exists already",
        tmp_path / "folder.wav": "is a folder",
        tmp_path / "no" / "a.wav": "does not exist; make it",
        there / "a.wav": "is not a folder",
        tmp_path / "a\0.wav": "not a possible file name",
        tmp_path / "a.flac": r"ending in \.wav",
        tmp_path / ("x" * 300 + ".wav"): "name is too long",
    }
    for path, message in cases.items():
        with pytest.raises(InputError, match=message):
            check_output(path)
    for name in ("there.wav", "soft.wav", "hard.wav", "sub/../there.wav"):
        with pytest.raises(InputError, match="is the input"):
            check_output(tmp_path / name, inputs=[there], overwrite=True)
    assert check_output(there, overwrite=True) == there
    assert there.read_bytes() == before


@pytest.mark.skipif(not Path("/proc/self").exists(), reason="needs a folder nobody can write to")
def test_unwritable_folder() -> None:
    with pytest.raises(InputError, match=r"cannot write: .*choose another place"):
        check_output("/proc/a.wav")


def test_all_faults_at_once(tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        check_output(tmp_path / "no" / "a.mp3")
    assert len(caught.value.messages) == 2


# ---------------------------------------------------------------- reading


@pytest.mark.parametrize("rate", [8_000, 11_025, 44_100, 192_000])
@pytest.mark.parametrize("channels", [1, 2, 5])
def test_blocks_carry_every_frame_once(tmp_path: Path, rate: int, channels: int) -> None:
    samples = RNG.integers(-(2**15), 2**15, size=(1001, channels)) / 2.0**15
    path = tmp_path / "a.wav"
    soundfile.write(path, samples, rate, subtype="PCM_16")
    with AudioReader(path) as reader:
        assert (reader.sample_rate_hz, reader.channels, reader.frames) == (rate, channels, 1001)
        blocks = list(reader.blocks(100))
    assert [len(block) for block in blocks] == [100] * 10 + [1]
    assert np.array_equal(np.concatenate(blocks), samples)


def test_facts(tmp_path: Path) -> None:
    samples = np.zeros((480, 1))
    samples[7] = -0.75
    path = write(tmp_path / "a.wav", samples)
    facts = check_audio(path)
    assert (facts.name, facts.frames, facts.peak, facts.duration_s) == ("a.wav", 480, 0.75, 0.01)
    assert facts.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert json.loads(json.dumps(facts.as_record()))["channels"] == 1


def test_a_wav_from_another_writer(tmp_path: Path) -> None:
    # Python's own wave module as the other writer.
    path = tmp_path / "a.wav"
    with wave.open(str(path), "wb") as other:
        other.setnchannels(1)
        other.setsampwidth(2)
        other.setframerate(22_050)
        other.writeframes(struct.pack("<4h", 0, 16384, -32768, 1))
    samples, rate = read_audio(path)
    assert rate == 22_050
    assert samples[:, 0].tolist() == [0.0, 0.5, -1.0, 2.0**-15]


def test_unreadable_inputs(tmp_path: Path) -> None:
    (tmp_path / "empty.wav").write_bytes(b"")
    (tmp_path / "binary.wav").write_bytes(bytes(RNG.integers(0, 256, 5000, dtype=np.uint8)))
    (tmp_path / "text.wav").write_text("part;servo_10k\nJ01;1.318\n")
    (tmp_path / "stub.wav").write_bytes(b"RIFF\x24\x00\x00\x00WAVEfmt ")
    (tmp_path / "bare.raw").write_bytes(bytes(1000))
    header_wav(tmp_path / "none.wav", data=b"")
    header_wav(tmp_path / "open.wav", claimed=0)
    cases = {
        "missing.wav": "no such audio file; check the name",
        ".": "is a folder",
        "empty.wav": "the file is empty",
        "binary.wav": "not audio that can be read",
        "text.wav": "not audio that can be read",
        "stub.wav": "not audio that can be read",
        "bare.raw": "headerless audio",
        "none.wav": "holds no audio",
        "open.wav": "holds no audio",
    }
    for name, message in cases.items():
        with pytest.raises(InputError, match=message) as caught:
            check_audio(tmp_path / name)
        assert len(caught.value.messages) == 1
        assert str(tmp_path / name) in str(caught.value)


@pytest.mark.skipif(not Path("/dev/zero").exists(), reason="needs a device file")
def test_a_device_is_no_audio_file() -> None:
    with pytest.raises(InputError, match="not an ordinary file"):
        check_audio("/dev/zero")


@pytest.mark.parametrize(
    ("container", "subtype"),
    [
        ("WAV", "PCM_16"),
        ("WAV", "FLOAT"),
        ("WAVEX", "PCM_24"),
        ("RF64", "PCM_24"),
        ("W64", "PCM_24"),
        ("AIFF", "PCM_24"),
        ("AU", "PCM_16"),
        ("CAF", "PCM_16"),
        ("FLAC", "PCM_24"),
        ("MP3", "MPEG_LAYER_III"),
        ("OGG", "VORBIS"),
    ],
)
@pytest.mark.parametrize("kept", [0.05, 0.6, 0.99])
def test_truncated_files_are_refused(
    tmp_path: Path, container: str, subtype: str, kept: float
) -> None:
    path = tmp_path / "whole"
    soundfile.write(path, RNG.uniform(-0.5, 0.5, (40_000, 2)), 48_000, subtype, format=container)
    assert check_audio(path).frames == 40_000
    raw = path.read_bytes()
    cut = tmp_path / "cut"
    cut.write_bytes(raw[: int(kept * len(raw))])
    with pytest.raises(
        InputError, match=r"cut short|damaged|holds no audio|not audio that can be read"
    ):
        check_audio(cut)


def test_a_pipes_unknown_length_is_accepted(tmp_path: Path) -> None:
    # Writers into a pipe put FFFFFFFFh for a length they cannot know (common practice).
    assert check_audio(header_wav(tmp_path / "a.wav", claimed=0xFFFFFFFF)).frames == 2000


def test_absurd_claims_take_no_memory(tmp_path: Path) -> None:
    # A 64-channel header claiming 2 GB over 4 kB of data; and a FLAC whose header claims
    # 2^36 - 1 frames (36-bit field of STREAMINFO, FLAC format specification, RFC 9639).
    big = header_wav(tmp_path / "big.wav", channels=64, claimed=0x7FFFFF00, data=bytes(4096))
    flac = tmp_path / "big.flac"
    soundfile.write(flac, np.zeros((5000, 1)), 48_000, subtype="PCM_16")
    raw = bytearray(flac.read_bytes())
    raw[21] |= 0x0F
    raw[22:26] = b"\xff" * 4
    flac.write_bytes(bytes(raw))
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    for path in (big, flac):
        with pytest.raises(InputError, match="cut short"):
            check_audio(path)
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before < 100_000  # kB


@pytest.mark.parametrize("rate", [0, 4_000, 7_999, 192_001, 2_000_000_000])
def test_rates_outside_the_range(tmp_path: Path, rate: int) -> None:
    with pytest.raises(InputError, match=r"8000 to 192000 Hz|not audio that can be read"):
        check_audio(header_wav(tmp_path / "a.wav", rate=rate))


def test_too_many_channels(tmp_path: Path) -> None:
    path = header_wav(tmp_path / "a.wav", channels=65, data=bytes(1300))
    with pytest.raises(InputError, match="65 channels; expected 1 to 64"):
        check_audio(path)


def test_samples_that_are_not_finite(tmp_path: Path) -> None:
    samples = np.zeros((100_000, 2), np.float32)
    samples[70_000, 1] = np.nan
    samples[70_001:70_005, 0] = np.inf
    path = tmp_path / "a.wav"
    soundfile.write(path, samples, 48_000, subtype="FLOAT")
    with pytest.raises(
        InputError,
        match=r"5 samples are not finite numbers; the first is nan at frame 70000 \(1\.458 s\), "
        r"channel 2; render the file again",
    ):
        check_audio(path)


def test_float_file_holding_integers(tmp_path: Path) -> None:
    path = tmp_path / "a.wav"
    soundfile.write(path, np.full((10, 1), 32767.0), 48_000, subtype="FLOAT")
    with pytest.raises(InputError, match="peak 32767 times full scale"):
        check_audio(path)


def test_no_reader_stays_open_after_a_refusal(tmp_path: Path) -> None:
    path = header_wav(tmp_path / "a.wav", rate=4_000)
    with pytest.raises(InputError):
        check_audio(path)
    descriptors = Path("/proc/self/fd")
    if descriptors.exists():
        assert path not in [entry.readlink() for entry in descriptors.iterdir() if entry.exists()]


# ---------------------------------------------------------------- sidecar


def test_sidecar_text_is_json_without_not_a_number() -> None:
    assert json.loads(audio.sidecar_text({"b": 1, "a": "é"})) == {"a": "é", "b": 1}
    with pytest.raises(ValueError, match="JSON compliant"):
        audio.sidecar_text({"a": float("nan")})
    assert audio.sidecar_path(Path("x/take.wav")) == Path("x/take.json")
