"""The shipped trays are what their script makes, and what they are said to be."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from sweepset.models.tray import load_tray
from sweepset.samples import make_tray

FOLDER = Path(make_tray.__file__).parent
NAMES = sorted(make_tray.TRAYS)


@pytest.mark.parametrize("name", NAMES)
def test_stored_files_are_the_script_s(name: str) -> None:
    tray, fixture = make_tray.make_tray(name)
    assert (FOLDER / f"{name}.fixture.toml").read_text() == fixture
    made, stored = (
        [line.split(";") for line in text.splitlines()]
        for text in (tray, (FOLDER / f"{name}.csv").read_text())
    )
    assert [row[:1] + row[3:] for row in made] == [row[:1] + row[3:] for row in stored]
    # The last digit of exp differs between numpy builds, so one count may round otherwise.
    for ours, theirs in zip(made[1:], stored[1:], strict=True):
        for a, b in zip(ours[1:3], theirs[1:3], strict=True):
            assert (a == b == "") or abs(float(a) - float(b)) <= 1.001e-3


@pytest.mark.parametrize(("name", "count"), [("tray_bench", 60), ("tray_workshop", 200)])
def test_labels_and_readings(name: str, count: int) -> None:
    tray = load_tray(FOLDER / f"{name}.csv")
    assert len(tray.labels) == count
    assert tray.cautions == ()
    assert tray.free_labels == tray.labels
    assert tray.labels[0] == ("J01" if count == 60 else "J001")
    # No real type is named: the parts are invented.
    assert {part.type_name for part in tray.parts} == {""}
    assert all("servo_10k" in part.readings for part in tray.parts)
    assert not any(m.bound for part in tray.parts for m in part.readings.values())


@pytest.mark.parametrize("name", NAMES)
def test_good_and_poor_sets_can_be_found(name: str) -> None:
    # k2, common practice, no published source: a set's readings within 5 % of their mean.
    tray = load_tray(FOLDER / f"{name}.csv")
    shown = np.sort([part.readings["servo_10k"].value for part in tray.parts])
    fours = np.lib.stride_tricks.sliding_window_view(shown, 4)
    share = np.ptp(fours, axis=1) / np.mean(fours, axis=1)
    assert np.sum(share < 0.01) >= 5
    assert (shown[-1] - shown[0]) / np.mean(shown) > 0.25
