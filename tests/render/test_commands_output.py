"""What is printed, where it cannot all be printed."""

import subprocess
import sys
from pathlib import Path

import pytest

SAMPLES = Path(__file__).resolve().parents[2] / "samples"


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs /dev/full, a disk always full")
def test_a_full_disk_behind_the_output_is_told_in_one_line():
    command = [sys.executable, "-m", "sweepset", "curve", "--tray", str(SAMPLES / "tray_bench.csv")]
    with Path("/dev/full").open("w") as full:
        done = subprocess.run(command, stdout=full, stderr=subprocess.PIPE, text=True, check=False)
    assert done.returncode == 2
    [line] = done.stderr.splitlines()
    assert line.startswith("sweepset: ")
    assert "disk is full" in line
