"""``audition`` through the program: what it writes beside the takes."""

import json

import numpy as np
import pytest
import soundfile
from sweepset.render.commands import main

RATE = 48_000
SETS = ["--set", "close=-2.10V/4.2mA,-2.11V/4.2mA", "--set", "wide=-2.10V/4.2mA,-2.70V/6.2mA"]
ASK = ["--circuit", "wren", *SETS, "--rate", "9:00"]


@pytest.fixture
def riff(tmp_path):
    samples = np.random.default_rng(2).normal(0.0, 0.05, round(1.2 * RATE))
    soundfile.write(tmp_path / "riff.wav", samples, RATE, subtype="PCM_24")
    return str(tmp_path / "riff.wav")


def test_page_pictures_and_joined_wav_stand_beside_the_takes(riff, tmp_path, capsys):
    out = tmp_path / "listen"
    asked = ["audition", riff, *ASK, "-o", str(out)]
    assert main([*asked, "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    names = {path.name for path in out.iterdir()}
    assert {"listen.html", "joined.wav", "notch_tracks.png"} <= names
    assert {"2_riff_close_9-00_spectrogram.png", "3_riff_wide_9-00_channels.png"} <= names
    assert "difference_2_3.png" in names
    assert (out / "joined.txt").read_text() == "0.00 s: close 9:00\n"
    [pair] = record["pairs"]
    assert (pair["first"], pair["second"]) == ("close 9:00", "wide 9:00")
    assert pair["level_rms_db"] > 0.1
    assert pair["notch_most_octaves"] > 0.1
    before = {path: path.read_bytes() for path in out.iterdir()}
    assert main(asked) == 2
    said = capsys.readouterr().err
    for name in ("listen.html", "joined.wav", "notch_tracks.png"):
        assert f"{name}: exists already" in said
    assert {path: path.read_bytes() for path in out.iterdir()} == before


def test_the_page_has_the_name_asked_for_and_stays_unless_asked(riff, tmp_path, capsys):
    out = tmp_path / "named"
    options = ["--no-joined", "--pictures", "none", "--page", "mine.html"]
    assert main(["audition", riff, *ASK, "-o", str(out), *options]) == 0
    page = out / "mine.html"
    assert not (out / "listen.html").exists()
    said = capsys.readouterr().out
    assert f"open {page} in a browser ({page.stat().st_size / 1e6:.1f} MB)" in said
    for take in out.glob("*.wav"):
        take.unlink()
        take.with_suffix(".json").unlink()
    page.write_text("mine")
    # The page alone is in the way: nothing is rendered.
    assert main(["audition", riff, *ASK, "-o", str(out), *options]) == 2
    assert "mine.html: exists already" in capsys.readouterr().err
    assert [path.name for path in out.iterdir()] == ["mine.html"]
    assert page.read_text() == "mine"


@pytest.mark.parametrize("name", ["../out.html", "page.txt", "a/b.html", "a\\b.html", ""])
def test_a_page_that_would_not_lie_beside_its_takes_is_refused(riff, tmp_path, capsys, name):
    out = tmp_path / "x"
    assert main(["audition", riff, *ASK, "-o", str(out), "--page", name]) == 2
    assert "--page" in capsys.readouterr().err
    assert not out.exists()


def test_nothing_but_takes_where_nothing_else_is_wanted(riff, tmp_path):
    out = tmp_path / "plain"
    options = ["--no-page", "--no-joined", "--pictures", "none"]
    assert main(["audition", riff, *ASK, "-o", str(out), *options]) == 0
    assert {path.suffix for path in out.iterdir()} == {".wav", ".json"}


def test_each_set_at_each_trimmer_position_asked_for(riff, tmp_path, capsys):
    out = tmp_path / "many"
    options = ["--no-page", "--no-joined", "--pictures", "none", "--json"]
    asked = ["audition", riff, *ASK, "--trim", "auto", "--trim", "45%", "-o", str(out), *options]
    assert main(asked) == 0
    record = json.loads(capsys.readouterr().out)
    names = [take["name"] for take in record["takes"]]
    assert names == [
        "dry",
        *(f"{name} 9:00 trim {trim}" for name in ("close", "wide") for trim in ("auto", "45%")),
    ]
    positions = {
        name: json.loads((out / take["file"]).with_suffix(".json").read_text())["take"]["trimmer"]
        for name, take in zip(names[1:], record["takes"][1:], strict=True)
    }
    assert positions["wide 9:00 trim 45%"]["position"] == 0.45
    assert positions["wide 9:00 trim auto"]["position"] != 0.45


def test_a_very_short_or_silent_riff_works(tmp_path, capsys):
    for name, samples in (("short", np.full(round(0.2 * RATE), 0.1)), ("silent", np.zeros(RATE))):
        soundfile.write(tmp_path / f"{name}.wav", samples, RATE, subtype="PCM_24")
        out = tmp_path / name
        asked = ["audition", str(tmp_path / f"{name}.wav"), *ASK, "-o", str(out)]
        assert main([*asked, "--pictures", "svg"]) == 0
        assert (out / "listen.html").stat().st_size > 20_000
        assert "no change: the riff is short" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--excerpt", "1:2", "--no-page"], "leave it or --no-page out"),
        (["--excerpt", "later"], "expected two ends"),
        (["--excerpt", "5:9"], "within the riff's 1.20 s"),
    ],
)
def test_an_excerpt_that_cannot_be_is_named(riff, tmp_path, capsys, options, said):
    assert main(["audition", riff, *ASK, "-o", str(tmp_path / "x"), *options]) == 2
    assert said in capsys.readouterr().err
    assert not (tmp_path / "x").exists()
