"""``log`` through the program: pipe, terminal of 60 columns, Ctrl-C, kill -9."""

import io
import os
import pty
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from sweepset.models.tray import load_tray
from sweepset.render.commands import main

FIXTURE = """
[reading.servo_10k]
kind = "servo"
supply = "9.02"
reference = "4.51"
resistor = "10k"
meter = "0.5 % + 2 counts of 1 mV"
"""
COMMAND = [sys.executable, "-m", "sweepset", "log", "--tray", "t.csv"]


@pytest.fixture
def bench(tmp_path, monkeypatch):
    (tmp_path / "t.fixture.toml").write_text(FIXTURE)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def feed(monkeypatch, text):
    monkeypatch.setattr("sys.stdin", io.StringIO(text))


def test_a_script_through_a_pipe(bench, monkeypatch, capsys):
    feed(monkeypatch, "21\n9.02\n4.51\nJ01\n3.01\n\n3.02\n\n3.03\n\n3.04\nbest\n")
    assert main(["log", "--tray", "t.csv"]) == 0
    shown = capsys.readouterr().out
    assert load_tray("t.csv").labels == ("J01", "J02", "J03", "J04")
    assert "best of 4 for heron" in shown
    assert "4 parts on t.csv" in shown


def test_a_used_part_is_told(bench, monkeypatch, capsys):
    feed(monkeypatch, "21\n9.02\n4.51\nJ01\n3.01\nend\n")
    assert main(["log", "--tray", "t.csv"]) == 0
    load_tray("t.csv").with_cell("J01", "used", "unit 3").write()
    feed(monkeypatch, "21\n9.02\n4.51\nJ01\n")
    assert main(["log", "--tray", "t.csv"]) == 0
    assert "marked as used (unit 3)" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--tray", "no/t.csv"], "does not exist"),
        (["--tray", "t.csv", "--fixture", "none.toml"], "none.toml"),
        (["--tray", "t.csv", "--circuit", "hern"], "did you mean heron"),
    ],
)
def test_wrong_input_is_refused(bench, monkeypatch, capsys, arguments, said):
    feed(monkeypatch, "")
    assert main(["log", *arguments]) == 2
    assert said in capsys.readouterr().err
    assert not (bench / "t.csv").exists()


def until(master, wanted, seconds=60.0):
    """Read a terminal until some text has come."""
    seen = ""
    end = time.monotonic() + seconds
    while wanted not in seen:
        assert time.monotonic() < end, seen
        seen += os.read(master, 4096).decode()
    return seen


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
def test_a_terminal_of_sixty_columns_and_ctrl_c(bench):
    master, slave = pty.openpty()
    environment = {**os.environ, "COLUMNS": "60", "TERM": "dumb"}
    child = subprocess.Popen(
        COMMAND, stdin=slave, stdout=slave, stderr=slave, env=environment, start_new_session=True
    )
    os.close(slave)
    until(master, "temperature")
    for line, answer in (("21.5", "supply"), ("", "reference"), ("", "part [J01]")):
        os.write(master, f"{line}\n".encode())
        until(master, answer)
    os.write(master, b"J01\n")
    until(master, "J01 servo_10k")
    os.write(master, b"3.01\n")
    until(master, "part [J02]")
    child.send_signal(signal.SIGINT)
    assert child.wait(30) == 130
    os.close(master)
    assert load_tray("t.csv").part("J01").readings["servo_10k"].value == 3.01


def test_kill_at_any_moment_loses_at_most_the_line_being_typed(bench):
    """Killed at random moments; every reading asked beyond must be in a whole file."""
    rng = random.Random(4)
    total = 0
    for _ in range(6):
        before = len(load_tray("t.csv").labels) if Path("t.csv").exists() else 0
        child = subprocess.Popen(
            COMMAND, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL
        )
        lines = ["21", "9.02", "4.51"]
        lines += [line for n in range(18) for line in ("", f"{3.0 + 0.001 * n:.3f}")]
        child.stdin.write("".join(f"{line}\n" for line in lines).encode())
        child.stdin.flush()
        acknowledged, stop_after = 0, rng.randrange(1, 16)
        for raw in child.stdout:
            # A part's label is offered only once the reading before it is on the disk.
            acknowledged += raw.startswith(b"part [")
            if acknowledged > stop_after:
                break
        child.kill()
        child.wait()
        child.stdout.close()
        child.stdin.close()
        labels = load_tray("t.csv").labels
        assert len(labels) >= before + acknowledged - 1
        total = len(labels)
    assert total > 6
