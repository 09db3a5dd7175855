"""The promises of README and DEVELOPERS.md, attacked."""

import ast
import errno
import os
import signal
import socket
import subprocess
import sys
import tempfile
import time
from contextlib import suppress
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
import soundfile
from sweepset.models.atomic import clear_leftovers, write_text_atomically
from sweepset.models.circuit import load_circuit
from sweepset.models.cycle import analyse_cycle
from sweepset.models.errors import InputError
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate
from sweepset.models.tray import load_tray
from sweepset.render.audio import AudioWriter
from sweepset.render.batch.index import INDEX_JSON, BatchIndex
from sweepset.render.commands import main
from sweepset.render.figures import cycle_figure, save_figure
from sweepset.render.joined import join_takes

ROOT = Path(__file__).resolve().parents[1]
SAMPLES = files("sweepset.samples")
PAIR = "--set=-2.10V/4.2mA,-2.13V/4.3mA"


@pytest.fixture
def bench(tmp_path):
    for name in ("tray_bench.csv", "tray_bench.fixture.toml"):
        (tmp_path / name).write_bytes((SAMPLES / name).read_bytes())
    soundfile.write(tmp_path / "riff.wav", np.full(4800, 0.1), 48_000, subtype="PCM_24")
    return tmp_path


# --- whole or not at all -------------------------------------------------------------------


def a_tray(folder):
    tray = load_tray(folder / "tray_bench.csv")
    tray.with_cell("J01", "note", "seen").write()


def a_text(folder):
    write_text_atomically(folder / "page.html", "new " * 1000)


def a_picture(folder):
    circuit = load_circuit("wren")
    parts = [Jfet.from_idss(-2.1, 4.2e-3)] * 2
    cycle = analyse_cycle(circuit, parts, solve_bus(circuit, 0.45, parse_rate("noon")), 32)
    save_figure(cycle_figure(cycle, ["a", "b"]), folder / "plot.svg")


def a_wav(folder):
    join_takes(folder / "riff.wav", folder / "riff.wav", folder / "joined.wav", ())


def an_index(folder):
    index = BatchIndex(folder)
    index.add({"key": "new", "file": "n.wav", "file_sha256": "1"})
    index.write(["new"])


WRITERS = {
    "tray_bench.csv": a_tray,
    "page.html": a_text,
    "plot.svg": a_picture,
    "joined.wav": a_wav,
    INDEX_JSON: an_index,
}
OLD_INDEX = '{"format": "sweepset batch index 1", "rows": [], "earlier": []}\n'


def faulty(monkeypatch, place, number, when):
    """Make the `when`-th call of one system call fail."""
    calls = 0

    def wrap(owner, name):
        real = getattr(owner, name)

        def broken(*args, **kwargs):
            nonlocal calls
            calls += 1
            if calls == when:
                raise OSError(number, os.strerror(number), str(args[0]) if args else None)
            return real(*args, **kwargs)

        monkeypatch.setattr(owner, name, broken)

    owners = {
        "mkstemp": (tempfile, "mkstemp"),
        "fsync": (os, "fsync"),
        "rename": (Path, "replace"),
        "chmod": (Path, "chmod"),
        "write": (Path, "write_bytes"),
        "close": (os, "close"),
    }
    wrap(*owners[place])


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EIO, errno.EACCES, errno.EROFS])
@pytest.mark.parametrize("place", ["mkstemp", "fsync", "rename", "chmod", "write", "close"])
@pytest.mark.parametrize("name", WRITERS)
def test_the_old_or_the_new_file_stands_whole_whatever_fails(
    bench, monkeypatch, name, place, number
):
    target = bench / name
    if name == INDEX_JSON:
        target.write_text(OLD_INDEX)
    elif not target.exists():
        WRITERS[name](bench)
    old = target.read_bytes()
    kept = {p: p.read_bytes() for p in bench.iterdir() if p != target and p.is_file()}
    for when in (1, 2):
        with monkeypatch.context() as patch:
            faulty(patch, place, number, when)
            with suppress(InputError, OSError):
                WRITERS[name](bench)
        assert target.exists()
        if target.read_bytes() != old:
            # Only where everything went through: then it is what the writer makes.
            old = target.read_bytes()
        assert not list(bench.glob(".*.part*"))
    for path, content in kept.items():
        if path.name not in ("index.csv", "index.journal"):
            assert path.read_bytes() == content
    WRITERS[name](bench)  # and the next try succeeds
    if name == "joined.wav":
        soundfile.read(target)
    if name == "tray_bench.csv":
        assert len(load_tray(target).labels) == 60
    if name == INDEX_JSON:
        assert BatchIndex(bench).row("new") is not None


def test_a_short_write_is_no_file(bench, monkeypatch):
    # The library writes fewer frames than asked: the WAV must not come to its name.
    real = AudioWriter.write
    monkeypatch.setattr(AudioWriter, "write", lambda self, block: real(self, block[:-1]))
    with pytest.raises(InputError):
        join_takes(bench / "riff.wav", bench / "riff.wav", bench / "joined.wav", ())
    assert not (bench / "joined.wav").exists()
    assert not list(bench.glob(".*.part*"))


KILLED = """
import sys
from sweepset.models.tray import load_tray
tray = load_tray(sys.argv[1])
print("go", flush=True)
n = 0
while True:
    n += 1
    tray = tray.with_cell("J01", "note", "n" * (n % 200)).write()
"""


@pytest.mark.slow
def test_a_tray_survives_kills_at_random_moments(bench):
    path = bench / "tray_bench.csv"
    generator = np.random.default_rng(5)
    for _ in range(12):
        process = subprocess.Popen(
            [sys.executable, "-c", KILLED, str(path)], stdout=subprocess.PIPE
        )
        assert process.stdout.readline() == b"go\n"
        time.sleep(float(generator.uniform(0.0, 0.15)))
        process.send_signal(signal.SIGKILL)
        process.communicate()
        tray = load_tray(path)
        assert len(tray.labels) == 60
        assert tray.cell("J02", "servo_10k") == "3.397"
    clear_leftovers(bench)
    assert {p.name for p in bench.iterdir()} == {
        "tray_bench.csv", "tray_bench.fixture.toml", "riff.wav",
    }  # fmt: skip


# --- nothing overwritten unasked -----------------------------------------------------------

WRITING = [
    (["trim", "--circuit", "wren", PAIR, "--csv", "OUT.csv"], "OUT.csv"),
    (["trim", "--circuit", "wren", PAIR, "--plot", "OUT.png"], "OUT.png"),
    (["vary", "--circuit", "wren", PAIR, "--draws", "100", "--csv", "OUT.csv"], "OUT.csv"),
    (["curve", "--tray", "tray_bench.csv", "--csv", "OUT.csv"], "OUT.csv"),
    (["sort", "--tray", "tray_bench.csv", "--circuit", "wren", "--csv", "OUT.csv"], "OUT.csv"),
    (["sheet", "--circuit", "wren", PAIR, "-o", "OUT.html"], "OUT.html"),
    (["netlist", "--circuit", "wren", PAIR, "-o", "OUT.cir"], "OUT.cir"),
    (["render", "riff.wav", "--circuit", "wren", PAIR, "-o", "OUT.wav"], "OUT.wav"),
]


@pytest.mark.parametrize(("asked", "name"), WRITING, ids=[" ".join([a[0], n]) for a, n in WRITING])
def test_no_command_overwrites_unasked_or_through_a_link(bench, monkeypatch, capsys, asked, name):
    monkeypatch.chdir(bench)
    (bench / name).write_bytes(b"mine")
    assert main(asked) == 2
    assert "exists already" in capsys.readouterr().err
    assert (bench / name).read_bytes() == b"mine"
    (bench / name).unlink()
    (bench / "precious").write_bytes(b"mine")
    (bench / name).symlink_to(bench / "precious")
    assert main([*asked, "--overwrite"] if "netlist" not in asked else asked) == 2
    assert (bench / "precious").read_bytes() == b"mine"


# --- nothing fetched, nothing executed -----------------------------------------------------


def test_the_whole_job_needs_no_network(bench, monkeypatch):
    def refuse(*args, **kwargs):
        raise AssertionError("a socket was opened")

    monkeypatch.setattr(socket, "socket", refuse)
    monkeypatch.setattr(socket, "create_connection", refuse)
    monkeypatch.setattr(socket, "getaddrinfo", refuse)
    monkeypatch.chdir(bench)
    two = ["--tray", "tray_bench.csv", "--circuit", "wren"]
    assert main(["curve", "--tray", "tray_bench.csv"]) == 0
    assert main(["sort", *two]) == 0
    assert main(["trim", *two, "--set", "J21,J38"]) == 0
    assert main(["audition", "riff.wav", *two, "--set", "J21,J38", "-o", "out"]) == 0


SOURCES = [path for folder in ("models", "render") for path in (ROOT / folder).rglob("*.py")]


@pytest.mark.parametrize("path", SOURCES, ids=[str(p.relative_to(ROOT)) for p in SOURCES])
def test_no_source_evaluates_unpickles_or_runs_a_shell(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    banned_modules = {"pickle", "marshal", "shelve", "subprocess", "ctypes", "urllib", "http"}
    banned_modules |= {"requests", "socket", "ssl", "ftplib", "smtplib"}
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            assert not {alias.name.split(".")[0] for alias in node.names} & banned_modules
        if isinstance(node, ast.ImportFrom) and not node.level:
            assert (node.module or "").split(".")[0] not in banned_modules
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            assert node.func.id not in {"eval", "exec", "compile", "__import__"}
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute):
            assert node.func.attr not in {"system", "popen"}


# --- the same bytes ------------------------------------------------------------------------


def test_same_inputs_same_bytes(bench, monkeypatch):
    monkeypatch.chdir(bench)
    for out in ("a.wav", "b.wav"):
        assert main(["render", "riff.wav", "--circuit", "wren", PAIR, "-o", out]) == 0
    assert (bench / "a.wav").read_bytes()[200:] == (bench / "b.wav").read_bytes()[200:]
    for out in ("a", "b"):
        asked = ["audition", "riff.wav", "--circuit", "wren", PAIR, "-o", out]
        assert main(asked) == 0
    for path in sorted((bench / "a").iterdir()):
        assert path.read_bytes() == (bench / "b" / path.name).read_bytes(), path.name


def test_no_home_and_no_cache_folder(bench, monkeypatch):
    environment = {k: v for k, v in os.environ.items() if k not in ("HOME", "XDG_CACHE_HOME")}
    environment |= {"SWEEPSET_CACHE_DIR": "/proc/no/such", "HOME": "/nowhere"}
    done = subprocess.run(
        [sys.executable, "-m", "sweepset", "trim", "--circuit", "wren", PAIR],
        env=environment, cwd=bench, capture_output=True, text=True, check=False, timeout=120,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "travel" in done.stdout
