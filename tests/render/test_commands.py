"""The program: its help, its exit codes, and one clear message for each thing a user may get wrong.

Expected values are the exit codes and promises of the issue ("Bad input"), not sums.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile
from sweepset.render.commands import COMMANDS, main
from sweepset.render.commands._sets import read_set

SAMPLES = Path(__file__).resolve().parents[2] / "samples"
GOOD = "J21,J38,J13,J35"
WRITTEN = "-2.10V/4.2mA,-2.12V/4.3mA,-2.15V/4.3mA,-2.11V/4.2mA"


def listing(folder: Path) -> dict[str, str]:
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        if path.is_file()
        else "folder"
        for path in sorted(folder.rglob("*"))
    }


@pytest.fixture
def bench(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder with a user's own riff, tray, fixture and circuit."""
    rng = np.random.default_rng(3)
    soundfile.write(tmp_path / "riff.wav", 0.2 * rng.uniform(-1, 1, 4800), 48_000, subtype="PCM_24")
    shutil.copy(SAMPLES / "tray_bench.csv", tmp_path / "tray.csv")
    shutil.copy(SAMPLES / "tray_bench.fixture.toml", tmp_path / "tray.fixture.toml")
    circuit = SAMPLES.parent / "models" / "library" / "circuit_heron.toml"
    shutil.copy(circuit, tmp_path / "unit.toml")
    monkeypatch.chdir(tmp_path)
    return tmp_path


def refused(
    bench: Path, capsys: pytest.CaptureFixture[str], argv: list[str], *wanted: str
) -> list[str]:
    """Run a command that must be refused, leaving everything as it was."""
    before = listing(bench)
    assert main(argv) == 2
    said = capsys.readouterr()
    assert listing(bench) == before
    assert said.out == ""
    lines = said.err.splitlines()
    assert lines
    assert all(line.startswith("sweepset: ") for line in lines), said.err
    assert "Traceback" not in said.err
    assert len(set(lines)) == len(lines), "a fault was told twice"
    for text in wanted:
        assert text in said.err
    return lines


def render(*more: str, riff: str = "riff.wav", parts: str = GOOD) -> list[str]:
    argv = ["render", riff, "--tray", "tray.csv", "--set", parts, "-o", "take.wav"]
    return argv + list(more)


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_explains_itself_with_examples(command, capsys):
    assert main([command, "--help"]) == 0
    said = capsys.readouterr()
    assert said.err == ""
    assert f"sweepset {command}" in said.out.split("examples:")[1]


def test_help_lists_every_command_and_version_is_the_packages(capsys):
    assert main(["--help"]) == 0
    out = capsys.readouterr().out
    assert all(f"\n    {command} " in out for command in COMMANDS)
    assert main(["--version"]) == 0
    from importlib.metadata import version

    assert capsys.readouterr().out == f"sweepset {version('sweepset')}\n"


def test_help_of_every_command_loads_nothing_heavy():
    code = (
        "import sys\nfrom sweepset.render.commands import COMMANDS, main\n"
        "for name in COMMANDS: main([name, '--help'])\n"
        "print('LOADED', *sorted({m.split('.')[0] for m in sys.modules}))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    loaded = set(done.stdout.split("LOADED")[1].split())
    heavy = {"numpy", "numba", "scipy", "matplotlib", "pydantic", "rich", "soundfile", "soxr"}
    assert not loaded & heavy


@pytest.mark.parametrize(
    ("argv", "wanted"),
    [
        ([], ["COMMAND"]),
        (["rendre"], ["no command 'rendre'", "did you mean render"]),
        (["render"], ["riff", "--out", "--set"]),
        (["trim", "--set", GOOD, "--sett", "x"], ["--sett"]),
        (["demo", "--riff", "nois"], ["no riff 'nois'", "did you mean noise"]),
    ],
)
def test_wrong_arguments_are_told_in_one_line(bench, capsys, argv, wanted):
    assert len(refused(bench, capsys, argv, *wanted)) == 1


def test_several_faults_are_told_at_once(bench, capsys):
    lines = refused(bench, capsys, render(parts="J21,J99,J21,J3x,J05"), "J99", "named twice")
    assert any("4 stages" in line and "5 parts" in line for line in lines)
    assert any("'J3x'" in line and "did you mean" in line for line in lines)
    assert len(lines) == 4


@pytest.mark.parametrize(
    ("more", "wanted"),
    [
        (["--circuit", "hern"], ["'hern'", "did you mean heron", "wren"]),
        (["--circuit", "nowhere.toml"], ["nowhere.toml"]),
        (["--circuit", "wren"], ["2 stages", "4 parts"]),
        (["--rate", "6:00"], ["--rate", "6:00", "7:00"]),
        (["--rate", "900Hz"], ["900Hz"]),
        (["--trim", "half"], ["--trim", "half", "45%"]),
        (["--trim", "8.7V"], ["8.7V", "out of reach"]),
        (["--celsius", "hot"], ["--celsius", "hot"]),
        (["--celsius", "900"], ["900", "150"]),
        (["--full-scale", "0"], ["full-scale", "1 mV"]),
        (["--full-scale", "1k5"], ["--full-scale", "1k5"]),
        (["--gain", "loud"], ["--gain", "loud", "dB"]),
        (["--gain", "nan"], ["--gain"]),
        (["--set", GOOD], ["--set is given 2 times", "audition"]),
        (["--fixture", "nowhere.toml"], ["nowhere.toml"]),
        (["--tray", "nowhere.csv"], ["nowhere.csv"]),
    ],
)
def test_wrong_settings_are_refused_with_the_remedy(bench, capsys, more, wanted):
    assert len(refused(bench, capsys, render(*more), *wanted)) == 1


def test_labels_without_a_tray_say_what_to_write(bench, capsys):
    argv = ["trim", "--set", "J01,J02,J03,J04"]
    refused(bench, capsys, argv, "no tray is given", "--tray", "-2.10V/4.2mA")


@pytest.mark.parametrize(
    ("parts", "wanted"),
    [
        ("-2.1V/4.2mA,-2.1V/4.2,-2.1V/4.2mA,-2.1V/4.2mA", "mind the unit"),
        ("0V/4.2mA,-2.1V/4.2mA,-2.1V/4.2mA,-2.1V/4.2mA", "cut-off voltage"),
        ("-2.1V/4uF,-2.1V/4.2mA,-2.1V/4.2mA,-2.1V/4.2mA", "capacitance"),
        ("-2.1V/4mA,,-2.1V/4.2mA,-2.1V/4.2mA,-2.1V/4.2mA", "between two commas"),
        (",", "no parts"),
    ],
)
def test_wrong_written_parts_are_refused(bench, capsys, parts, wanted):
    refused(bench, capsys, ["trim", "--set", parts], wanted)


def test_written_parts_give_the_datasheets_idss():
    """Idss is the saturated current at zero gate voltage: asked of the part's own law at knee 0."""
    from argparse import Namespace

    from sweepset.models.circuit import load_circuit

    args = Namespace(tray=None, fixture=None)
    jfets = read_set("-2.10V/4.2mA,2.5V/6mA", args, load_circuit("wren"))
    assert [jfet.cutoff_v for jfet in jfets] == [-2.1, -2.5]
    for jfet, idss_a in zip(jfets, (4.2e-3, 6e-3), strict=True):
        # The knee leaves Idss within its own square, (52 mV/2.1 V)^2 < 0.1 %.
        assert jfet.idss_a == pytest.approx(idss_a, rel=1e-3)


RIFFS = {
    "missing.wav": None,
    "empty.wav": b"",
    "text.wav": b"not a sound at all\n" * 50,
    "binary.wav": bytes(range(256)) * 40,
}


@pytest.mark.parametrize("name", RIFFS)
def test_a_riff_that_is_none_is_refused(bench, capsys, name):
    if (content := RIFFS[name]) is not None:
        (bench / name).write_bytes(content)
    assert len(refused(bench, capsys, render(riff=name), name)) == 1


def test_a_truncated_riff_is_refused(bench, capsys):
    whole = (bench / "riff.wav").read_bytes()
    (bench / "cut.wav").write_bytes(whole[: len(whole) // 2])
    refused(bench, capsys, render(riff="cut.wav"), "cut.wav")


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_a_riff_with_samples_that_are_no_numbers_is_refused(bench, capsys, value):
    samples = np.zeros(1000)
    samples[77] = value
    soundfile.write(bench / "bad.wav", samples, 48_000, subtype="FLOAT")
    refused(bench, capsys, render(riff="bad.wav"), "bad.wav", "77")


@pytest.mark.parametrize("content", [b"", b"\x00\xff" * 300, b"part;servo_10k\nJ01"])
def test_a_tray_that_is_none_or_too_small_is_refused(bench, capsys, content):
    (bench / "tray.csv").write_bytes(content)
    refused(bench, capsys, render(), "tray.csv")


@pytest.mark.parametrize("reading", ["4.9", "-0.3", "1,2,3", "nan", "x"])
def test_a_reading_the_fixture_cannot_show_is_refused_with_its_place(bench, capsys, reading):
    text = (bench / "tray.csv").read_text().replace("J21;3.010", f"J21;{reading}")
    assert reading in text
    (bench / "tray.csv").write_text(text)
    lines = refused(bench, capsys, render(), "tray.csv", "servo_10k", reading)
    assert len(lines) == 1


def test_all_bad_cells_are_told_at_once(bench, capsys):
    text = (bench / "tray.csv").read_text()
    text = text.replace("J21;3.010", "J21;30.10").replace("J38;3.016", "J38;3..016")
    (bench / "tray.csv").write_text(text)
    assert len(refused(bench, capsys, render(), "30.10", "3..016")) == 2


@pytest.mark.parametrize(
    ("old", "new", "wanted"),
    [
        ('capacitor = "47n"\nshunt', 'capacitor = "47 F"\nshunt', "stage"),
        ("[feedback]", "[feedbak]", "feedbak"),
        ('voltage = "9 V"', 'voltage = "9 kohm"', "supply.voltage"),
        ('voltage = "9 V"', 'voltage = "9 V', "unit.toml"),
    ],
)
def test_a_faulty_circuit_is_refused_with_the_keys_path(bench, capsys, old, new, wanted):
    text = (bench / "unit.toml").read_text()
    assert old in text
    (bench / "unit.toml").write_text(text.replace(old, new, 1))
    refused(bench, capsys, render("--circuit", "unit.toml"), "unit.toml", wanted)


@pytest.mark.parametrize(
    ("out", "wanted"),
    [
        ("nowhere/take.wav", "nowhere"),
        ("riff.wav", "riff.wav"),
        ("take.mp3", ".wav"),
        ("tray.csv/take.wav", "tray.csv"),
        (".", "."),
    ],
)
def test_an_output_that_cannot_be_is_refused(bench, capsys, out, wanted):
    refused(bench, capsys, [*render()[:-1], out], wanted)


def test_existing_takes_are_kept_unless_told_otherwise(bench, capsys):
    (bench / "take.wav").write_bytes(b"precious")
    refused(bench, capsys, render(), "take.wav", "exists")
    assert main(render("--overwrite", "--trim", "45%")) == 0
    assert soundfile.info(bench / "take.wav").frames == 4800


def test_a_full_disk_is_told_and_leaves_nothing(bench, capsys, monkeypatch):
    """Free space is faked: a test cannot fill the disk it runs on."""
    usage = shutil.disk_usage(bench)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: usage._replace(free=10))
    refused(bench, capsys, render(), "MB needed", "make room")


def test_audition_refuses_names_taken_twice_and_unknown_parts(bench, capsys):
    argv = ["audition", "riff.wav", "--tray", "tray.csv", "-o", "listen"]
    refused(bench, capsys, [*argv, "--set", f"a={GOOD}", "--set", f"A={GOOD}"], "'A' is taken")
    refused(bench, capsys, [*argv, "--set", f"={GOOD}"], "no name")
    refused(bench, capsys, [*argv, "--set", f"dry={GOOD}"], "'dry' is taken")
    refused(bench, capsys, [*argv, "--set", "a=J21,J38", "--set", "b=J99"], "J99", "2 parts")


def test_netlist_never_replaces_what_was_given(bench, capsys):
    argv = ["netlist", "--circuit", "unit.toml", "--tray", "tray.csv", "--set", GOOD, "-o"]
    for name in ("unit.toml", "tray.csv"):
        refused(bench, capsys, [*argv, name, "--overwrite"], name, "one of the files given")
    (bench / "old.cir").write_text("old\n")
    refused(bench, capsys, [*argv, "old.cir"], "old.cir", "--overwrite")


def test_netlist_holds_every_part_and_goes_to_screen_or_file(bench, capsys):
    argv = ["netlist", "--circuit", "unit.toml", "--tray", "tray.csv", "--set", GOOD]
    assert main(argv) == 0
    text = capsys.readouterr().out
    assert main([*argv, "-o", "unit.cir"]) == 0
    assert (bench / "unit.cir").read_text() == text
    assert text.rstrip().endswith(".end")
    assert all(label in text for label in GOOD.split(","))


def test_trim_as_json_agrees_with_its_table_and_with_the_wiper_asked_for(bench, capsys):
    argv = ["trim", "--tray", "tray.csv", "--set", GOOD]
    assert main([*argv, "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert main(argv) == 0
    table = capsys.readouterr().out
    assert f"{record['travel_octaves']:.2f} octaves" in table
    assert f"{record['wiper_above_ground_v']:.3f} V" in table
    # The voltage printed, asked for again, leads back to the same position: 1 mV of wiper.
    assert main([*argv, "--json", "--trim", f"{record['wiper_above_ground_v']:.3f}V"]) == 0
    again = json.loads(capsys.readouterr().out)
    assert again["trimmer"] == pytest.approx(record["trimmer"], abs=1e-3)


def test_a_part_without_readings_may_stand_in_a_set(bench, capsys):
    with (bench / "tray.csv").open("a") as stream:
        stream.write("S1;;;;soldered in\n")
    assert main(["trim", "--tray", "tray.csv", "--set", "J21,J38,J13,S1", "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["parts"][3]["label"] == "S1"
    assert main(["curve", "--tray", "tray.csv", "--json"]) == 0
    parts = {part["part"]: part for part in json.loads(capsys.readouterr().out)["parts"]}
    # Nothing is known of it but its type: far wider bars than a measured part's.
    assert parts["S1"]["cutoff_error_v"] > 10.0 * parts["J21"]["cutoff_error_v"]
    assert "type assumption" in parts["S1"]["basis"]


def test_render_tells_its_full_scale_and_writes_what_was_asked(bench, capsys):
    assert main(render("--rate", "0.8Hz", "--float", "--full-scale", "0.5 V")) == 0
    said = capsys.readouterr()
    assert "full scale is 0.5 V" in said.out
    info = soundfile.info(bench / "take.wav")
    assert (info.subtype, info.frames) == ("FLOAT", 4800)
    record = json.loads((bench / "take.json").read_text())
    assert record["take"]["rate"]["rate_hz"] == pytest.approx(0.8)
    assert [part["label"] for part in record["take"]["parts"]] == GOOD.split(",")


def test_an_interruption_ends_with_130_and_nothing_left(bench, capsys, monkeypatch):
    from sweepset.render import take

    def interrupt(*args, **kwargs):
        raise KeyboardInterrupt

    before = listing(bench)
    monkeypatch.setattr(take, "write_take", interrupt)
    assert main(render("--trim", "45%")) == 130
    said = capsys.readouterr()
    assert said.err == "sweepset: interrupted; nothing half-written is left behind\n"
    assert listing(bench) == before


def test_a_fault_of_ours_is_short_unless_asked_for(bench, capsys, monkeypatch):
    from sweepset.models import estimate

    def fail(*args, **kwargs):
        raise ZeroDivisionError("made up")

    monkeypatch.setattr(estimate, "estimate_tray", fail)
    assert main(["curve", "--tray", "tray.csv"]) == 1
    said = capsys.readouterr()
    assert "fault of sweepset" in said.err
    assert "Traceback" not in said.err
    monkeypatch.setenv("SWEEPSET_TRACEBACK", "1")
    with pytest.raises(ZeroDivisionError):
        main(["curve", "--tray", "tray.csv"])


def test_a_reader_that_goes_away_is_no_fault(bench):
    command = f'"{sys.executable}" -m sweepset netlist --set {WRITTEN}'
    done = subprocess.run(
        ["bash", "-o", "pipefail", "-c", f"{command} | head -c 1"],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.stderr == ""
    assert done.returncode in (0, 141)


def test_a_console_without_the_characters_gets_question_marks(bench):
    text = (bench / "tray.csv").read_text().replace("J21;", "J\u00e421\u03a9;")
    (bench / "tray.csv").write_text(text, encoding="utf-8")
    done = subprocess.run(
        [sys.executable, "-m", "sweepset", "curve", "--tray", "tray.csv"],
        capture_output=True,
        env={**os.environ, "PYTHONIOENCODING": "ascii:strict"},
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert b"J?21?" in done.stdout
