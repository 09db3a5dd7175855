"""Every command, file, output and figure of the README, tried in an empty folder.

The install commands themselves are run word for word by .ci/run.
"""

import contextlib
import io
import re
import shlex
from importlib.resources import as_file, files
from pathlib import Path

import pytest
import soundfile
from sweepset.render.commands import main

README = (Path(__file__).resolve().parents[1] / "README.md").read_text(encoding="utf-8")
PROSE = re.sub(r"\s+", " ", re.sub(r"```.*?```", "", README, flags=re.DOTALL))
BLOCKS = [
    (name or "", kind, body)
    for name, kind, body in re.findall(
        r"(?:<!-- ([^>]*) -->\n)?```(\w+)\n(.*?)```", README, flags=re.DOTALL
    )
]


@pytest.fixture(scope="module")
def bench(tmp_path_factory):
    """A folder with the README's own files and a riff."""
    folder = tmp_path_factory.mktemp("bench")
    for name, _kind, body in BLOCKS:
        if name.startswith("file: "):
            (folder / name.removeprefix("file: ")).write_text(body, encoding="utf-8")
    with as_file(files("sweepset.samples") / "riff_strum.flac") as riff:
        samples, rate = soundfile.read(riff)
        soundfile.write(folder / "riff.wav", samples, rate, subtype="PCM_24")
    return folder


def run(line: str, folder: Path) -> str:
    """Run one line of the README and return what it printed."""
    words = shlex.split(line)
    assert words[0] == "sweepset", f"a command the README test cannot run: {line}"
    out, err = io.StringIO(), io.StringIO()
    with (
        contextlib.chdir(folder),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        code = main(words[1:])
    assert code == 0, f"{line}\n{out.getvalue()}{err.getvalue()}"
    return out.getvalue()


def plain(text: str) -> str:
    """Return a line without the table's padding."""
    return re.sub(r"\s+", " ", text).strip()


COMMANDS = [
    (body, BLOCKS[place + 1][2] if BLOCKS[place + 1][1] == "text" else "")
    for place, (name, kind, body) in enumerate(BLOCKS)
    if kind == "sh" and "command" not in name
]


@pytest.mark.parametrize(
    ("commands", "shown"), COMMANDS, ids=[c.split("\n")[0] for c, _ in COMMANDS]
)
def test_command_runs_and_prints_what_the_readme_shows(bench, commands, shown):
    printed = "".join(run(line, bench) for line in commands.replace("\\\n", " ").splitlines())
    lines = {plain(line) for line in printed.splitlines()}
    for line in shown.splitlines():
        assert plain(line) in lines, f"not printed: {plain(line)}\n{printed}"
    wanted = re.findall(r"-o (\S+)", commands)
    assert all((bench / name).exists() for name in wanted)


def test_every_kind_of_block_is_looked_at():
    kinds = [kind for _, kind, _ in BLOCKS]
    assert kinds.count("text") == sum(bool(shown) for _, shown in COMMANDS) >= 3
    assert set(kinds) == {"sh", "text", "toml", "csv", "python"}
    assert all(name.startswith("file: ") for name, kind, _ in BLOCKS if kind in ("toml", "csv"))


def test_two_commands_stand_at_the_top():
    [demo] = [body for name, _, body in BLOCKS if name == "demo command"]
    [tests] = [body for name, _, body in BLOCKS if name == "test command"]
    assert demo.strip().endswith("pip install -q . && .venv/bin/sweepset demo")
    assert tests.strip().endswith("python -m pytest")
    assert [name for name, _, _ in BLOCKS[:2]] == ["demo command", "test command"]


def test_demo_writes_what_the_readme_says(tmp_path):
    run("sweepset demo", tmp_path)
    folder = tmp_path / "sweepset-demo"
    assert "writes seven takes into `sweepset-demo`" in PROSE
    assert len([path for path in folder.glob("*.wav") if "riff_" in path.name]) == 7
    assert "Open `listen.html` there in a browser" in PROSE
    assert (folder / "listen.html").stat().st_size > 1e6
    assert (folder / "summary.txt").is_file()


def test_python_block_runs(capsys):
    [block] = [body for _, kind, body in BLOCKS if kind == "python"]
    assert len(block.splitlines()) <= 10
    exec(compile(block, "README.md", "exec"), {})
    shape, position = re.fullmatch(r"(\(.*\)) (\S+)\n", capsys.readouterr().out).groups()
    assert shape == "(48000, 1)"
    assert 0.0 <= float(position) <= 1.0


def test_figures_in_the_text(bench):
    from sweepset.models.estimate import estimate_tray
    from sweepset.models.fixture import expected_reading, load_fixture
    from sweepset.models.jfet import (
        DEFAULT_BETA_EXPONENT,
        DEFAULT_CUTOFF_V_PER_K,
        DEFAULT_KNEE_V,
        NOMINAL_CELSIUS,
    )
    from sweepset.models.tray import load_tray
    from sweepset.render.setup import DEFAULT_FULL_SCALE_V

    servo = load_fixture(bench / "tray.fixture.toml").readings["servo_10k"]
    tray = load_tray(bench / "tray.csv")
    reading = tray.part("J35").readings["servo_10k"]
    point = servo.implies(reading.value, reading.conditions)
    assert f"a reading of {reading.value:.3f} V with a reference of 4.51 V" in PROSE
    assert f"passes {1e3 * float(point.current_a):.3f} mA with its gate" in PROSE
    assert f"{-float(point.gate_v):.3f} V below its source" in PROSE
    # Kirchhoff alone: half of 9 V over 10k.
    assert "The 10k then carries 0.45 mA" in PROSE
    half_supply_v, source_ohm = 9.0 / 2.0, 10e3
    assert half_supply_v / source_ohm == pytest.approx(0.45e-3)

    jfet = estimate_tray(tray).jfet("J35")
    fresh = expected_reading(jfet, servo, servo.conditions(supply_v=9.02, reference_v=4.51))
    tired = expected_reading(jfet, servo, servo.conditions(supply_v=8.92, reference_v=4.46))
    assert "0.1 V of battery sag moves every reading by about 50 mV" in PROSE
    assert fresh - tired == pytest.approx(0.050, abs=0.005)

    with as_file(files("sweepset.samples") / "tray_bench.csv") as path:
        assert f"a tray of {len(load_tray(path).labels)} invented parts" in PROSE
    assert f"about {1e3 * DEFAULT_KNEE_V:.0f} mV at {NOMINAL_CELSIUS:.0f} C" in PROSE
    assert f"cut-off by {1e3 * DEFAULT_CUTOFF_V_PER_K:.1f} mV per kelvin" in PROSE
    assert f"to the power {DEFAULT_BETA_EXPONENT:.1f}" in PROSE
    assert f"{DEFAULT_FULL_SCALE_V:g} V peak unless `--full-scale`" in PROSE
    [loss] = re.findall(r"short of a uniform set by \| (\d+) %", README)
    assert f"The {loss} % above" in PROSE
