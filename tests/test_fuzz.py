"""Damaged and hostile files: a clear refusal or a use, never a traceback, never a hang.

Every case starts from a good file and damages it: bytes flipped, cut, doubled or replaced
by what is known to hurt. ``SWEEPSET_FUZZ=20000`` asks for so many cases of each kind.
"""

import json
import os
import struct
import time
from contextlib import suppress
from importlib.resources import files

import numpy as np
import pytest
import soundfile
from hypothesis import given, settings
from hypothesis import strategies as st
from sweepset.models.circuit import load_circuit
from sweepset.models.errors import InputError
from sweepset.models.estimate import estimate_tray
from sweepset.models.quantity import parse_quantity, parse_rate, parse_trim
from sweepset.models.tray import load_tray
from sweepset.render.audio import check_audio
from sweepset.render.batch.index import BatchIndex
from sweepset.render.batch.takeplan import load_plan

CASES = int(os.environ.get("SWEEPSET_FUZZ", "150"))
many = settings(max_examples=CASES, deadline=None)
SAMPLES = files("sweepset.samples")
LIBRARY = files("sweepset.models.library")
HURTFUL = [
    b"\x00", b"\xff\xfe", b"\xef\xbb\xbf", b"1e999", b"-1e999", b"nan", b"inf", b"9" * 400,
    b"[" * 300, b"{" * 300, b'"', b"'''", b"\r", b"\n\n", b";;;;", b"=1+1", b"\xc3\x28",
    "\u202e".encode(), b"1_000", b"0x10", b"1e-400", b"../../x", b"<script>", b" " * 500,
]  # fmt: skip


@st.composite
def damage(draw):
    """A list of changes: where (share of the length), what is cut, what is put in."""
    return draw(
        st.lists(
            st.tuples(
                st.floats(0.0, 1.0),
                st.integers(0, 12),
                st.one_of(st.binary(max_size=6), st.sampled_from(HURTFUL)),
            ),
            min_size=1,
            max_size=4,
        )
    )


def damaged(good, changes):
    for share, cut, put in changes:
        place = int(share * len(good))
        good = good[:place] + put + good[place + cut :]
    return good


def refused_or_used(use):
    """Run and return; anything but a refusal passes through. No case may take long."""
    start = time.perf_counter()
    said = ("nothing",)
    try:
        use()
    except InputError as fault:
        said = fault.messages
    assert all(message.strip() for message in said)
    assert time.perf_counter() - start < 5.0  # two seconds, on a machine doing other things


@pytest.fixture(scope="module")
def bench(tmp_path_factory):
    folder = tmp_path_factory.mktemp("fuzz")
    for name in ("tray_bench.csv", "tray_bench.fixture.toml"):
        (folder / name).write_bytes((SAMPLES / name).read_bytes())
    soundfile.write(folder / "riff.wav", np.zeros(400), 48_000, subtype="PCM_16")
    return folder


@many
@given(text=st.text(max_size=40) | st.from_regex(r"-?[0-9.,kMRmunpe+ ]{1,12}[a-zA-Z%]{0,4}"))
def test_written_quantities(text):
    for unit in ("ohm", "F", "V", "A", "Hz", "%", "deg", "s", "C"):
        with suppress(ValueError):
            assert isinstance(parse_quantity(text, unit), float)
    for parse in (parse_rate, parse_trim):
        with suppress(ValueError):
            parse(text)


@many
@given(changes=damage())
def test_damaged_trays(bench, changes):
    (bench / "t.csv").write_bytes(damaged((SAMPLES / "tray_bench.csv").read_bytes(), changes))
    refused_or_used(lambda: load_tray(bench / "t.csv", bench / "tray_bench.fixture.toml"))


@settings(max_examples=max(CASES // 10, 10), deadline=None)
@given(changes=damage())
def test_damaged_trays_that_load_can_be_estimated(bench, changes):
    raw = (SAMPLES / "tray_bench.csv").read_bytes()
    (bench / "e.csv").write_bytes(damaged(raw[: len(raw) // 4], changes))

    def use():
        tray = load_tray(bench / "e.csv", bench / "tray_bench.fixture.toml")
        estimate = estimate_tray(tray)
        assert np.isfinite(estimate.cutoff_v).all()

    refused_or_used(use)


@many
@given(changes=damage())
def test_damaged_fixtures(bench, changes):
    good = (SAMPLES / "tray_bench.fixture.toml").read_bytes()
    (bench / "f.toml").write_bytes(damaged(good, changes))
    refused_or_used(lambda: load_tray(bench / "tray_bench.csv", bench / "f.toml"))


@many
@given(changes=damage(), name=st.sampled_from(["heron", "plover", "stork", "egret", "wren"]))
def test_damaged_circuits(bench, changes, name):
    good = (LIBRARY / f"circuit_{name}.toml").read_bytes()
    (bench / "c.toml").write_bytes(damaged(good, changes))
    refused_or_used(lambda: load_circuit(bench / "c.toml"))


AUDIO = ["WAV PCM_16", "WAV FLOAT", "FLAC PCM_24", "AIFF PCM_16"]
PLAN = b"""riffs = ["riff.wav"]
circuits = ["wren"]
trim = ["auto-2%", "45%"]
rate = { from = "0.2 Hz", to = "3 Hz", steps = 4 }
temperature = [15, 27]
supply = "8.4 V"
[sets]
one = "-2.1V/4.2mA,-2.2V/4.2mA"
"""


@many
@given(changes=damage())
def test_damaged_plans(bench, changes):
    (bench / "p.toml").write_bytes(damaged(PLAN, changes))
    refused_or_used(lambda: load_plan(bench / "p.toml"))


@many
@given(changes=damage())
def test_damaged_indexes(bench, changes):
    folder = bench / "index"
    folder.mkdir(exist_ok=True)
    row = {"key": "k", "file": "a.wav", "file_sha256": "0", "lufs": -20.0}
    good = json.dumps({"format": "sweepset batch index 1", "rows": [row, row], "earlier": []})
    (folder / "index.json").write_bytes(damaged(good.encode(), changes))
    (folder / "index.journal").write_bytes(damaged(json.dumps(row).encode() + b"\n", changes))
    refused_or_used(lambda: BatchIndex(folder))


@many
@given(changes=damage(), kind=st.sampled_from(AUDIO))
def test_damaged_audio(bench, changes, kind):
    form, subtype = kind.split()
    path = bench / f"good.{form}"
    if not path.exists():
        soundfile.write(path, np.linspace(-0.5, 0.5, 600), 48_000, subtype=subtype, format=form)
    (bench / f"bad.{form}").write_bytes(damaged(path.read_bytes(), changes))
    refused_or_used(lambda: check_audio(bench / f"bad.{form}"))


@pytest.mark.parametrize("claim", [0x7FFFFFFF, 0xFFFFFFF0, 0x10000000])
def test_a_header_that_claims_gigabytes_costs_none(bench, claim):
    import tracemalloc

    raw = bytearray((bench / "riff.wav").read_bytes())
    place = raw.find(b"data")
    raw[place + 4 : place + 8] = struct.pack("<I", claim & 0xFFFFFFFF)
    (bench / "huge.wav").write_bytes(raw)
    tracemalloc.start()
    refused_or_used(lambda: check_audio(bench / "huge.wav"))
    assert tracemalloc.get_traced_memory()[1] < 50e6
    tracemalloc.stop()
