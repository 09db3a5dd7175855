"""Shipped limits against the datasheet rows of check-values section c."""

from __future__ import annotations

import math

import numpy as np
import pytest
from sweepset.models.jfet import Jfet
from sweepset.models.parttypes import (
    check_limits,
    find_type,
    generic_assumption,
    near_types,
    part_types,
    type_assumption,
)

# Rows c1-c16 as the sheets have them: |Vgs(off)| min, max [V], test current [A], Idss min,
# max [mA], rDS(on) max [ohm]; sources stand in types.toml beside each.
SHEETS = {
    "2N5484": (0.3, 3, 1e-9, 1, 5, None),
    "2N5485": (0.5, 4, 1e-9, 4, 10, None),
    "2N5486": (2, 6, 10e-9, 8, 20, None),
    "2N3819": (None, 8, 2e-9, 2, 20, None),
    "MPF102": (None, 8, 2e-9, 2, 20, None),
    "BF245A": (0.25, 8, 10e-9, 2, 6.5, None),
    "BF245B": (0.25, 8, 10e-9, 6, 15, None),
    "BF245C": (0.25, 8, 10e-9, 12, 25, None),
    "2N4391": (4, 10, 1e-9, 50, 150, 30),
    "2N4392": (2, 5, 1e-9, 25, 75, 60),
    "2N4393": (0.5, 3, 1e-9, 5, 30, 100),
    "J111": (3, 10, 1e-6, 20, None, 30),
    "J112": (1, 5, 1e-6, 5, None, 50),
    "J113": (0.5, 3, 1e-6, 2, None, 100),
    "J201": (0.3, 1.5, 10e-9, 0.2, 1.0, None),
    "J202": (0.8, 4, 10e-9, 0.9, 4.5, None),
    "J204": (0.3, 2, 10e-9, 0.2, None, None),
    "J309": (1, 4, 1e-9, 12, 30, None),
    "J310": (2, 6.5, 1e-9, 24, 60, None),
    "2N4117": (0.6, 1.8, 1e-9, 0.03, 0.09, None),
    "2N4118": (1, 3, 1e-9, 0.08, 0.24, None),
    "2N4119": (2, 6, 1e-9, 0.20, 0.60, None),
    "2N5950": (2.5, 6, 100e-9, 10, 15, None),
    "2N5951": (2, 5, 100e-9, 7, 13, None),
    "2N5952": (1.3, 3.5, 100e-9, 4, 8, None),
    "2N5953": (0.8, 3, 100e-9, 2.5, 5, None),
    "2N4338": (0.3, 1, 100e-9, 0.2, 0.6, 2500),
    "2N4339": (0.6, 1.8, 100e-9, 0.5, 1.5, 1700),
}
FROM_MEMORY = {"2N5950", "2N5951", "2N5952", "2N5953", "2N4338", "2N4339"}
SURE = np.diag([1e-6, 1e-6])


def test_every_row_is_shipped_and_no_other() -> None:
    assert {t.name for t in part_types()} == set(SHEETS)


@pytest.mark.parametrize("name", SHEETS)
def test_limits_are_the_sheet_s(name: str) -> None:
    low, high, current, idss_low, idss_high, ohm = SHEETS[name]
    found = find_type(name)
    assert found is not None
    assert (found.cutoff_v.low, found.cutoff_v.high, found.cutoff_v.current_a) == (
        low,
        high,
        current,
    )
    assert (found.idss_ma.low, found.idss_ma.high) == (idss_low, idss_high)
    limit = found.on_resistance_ohm
    assert (None if limit is None else limit.high) == ohm
    assert found.status == ("from memory" if name in FROM_MEMORY else "read")
    assert found.source


def test_names_are_found_however_written() -> None:
    assert find_type(" mmbfj 113 ") is find_type("J113")
    assert find_type("2N9999") is None
    assert "2N5486" in near_types("2N5468")


def test_on_resistance_corners_within_the_allowance_are_not_called_outside() -> None:
    # c17, computed there: 4 V / 50 mA is 40 ohm, 10 V / 150 mA 33 ohm, limit 30 ohm.
    sheet = find_type("2N4391")
    assert sheet is not None
    for cutoff, idss, ohm in ((-4.0, 50e-3, 40.0), (-10.0, 150e-3, 33.3)):
        part = Jfet.from_idss(cutoff, idss, knee_v=0.0)
        found = {f.quantity: f for f in check_limits(sheet, part, SURE)}["on-resistance"]
        assert found.value == pytest.approx(ohm, rel=0.02)  # 25 degrees against 27
        assert found.verdict == "doubtful"
    part = Jfet.from_idss(-4.0, 30e-3, knee_v=0.0)  # 67 ohm: beyond 35 %
    assert {f.quantity: f.verdict for f in check_limits(sheet, part, SURE)}[
        "on-resistance"
    ] == "outside"


def test_a_limit_itself_is_inside_and_uncertainty_decides_what_is_doubtful() -> None:
    # c19: inclusive limits, measured value with its expanded uncertainty. a27 puts the
    # reading at 10 nA sqrt(10 nA / beta) short of the cut-off; 25 degrees move it 4.4 mV.
    sheet = find_type("2N5486")
    assert sheet is not None

    def verdict(gate_off: float, u: float) -> str:
        beta = 2.5e-3
        part = Jfet(gate_off - math.sqrt(10e-9 / beta) - 4.4e-3, beta, knee_v=0.0)
        findings = check_limits(sheet, part, np.diag([u**2, 0.0]))
        return {f.quantity: f.verdict for f in findings}["cut-off"]

    # The law at 298.15 K differs from nominal in beta by 1.4 %, which is 0.02 mV here.
    assert verdict(-2.0 - 5e-5, 1e-6) == "inside"
    assert verdict(-1.99, 0.006) == "doubtful"
    assert verdict(-1.99, 0.004) == "outside"


def test_a_part_that_is_not_what_it_claims_to_be() -> None:
    sheet = find_type("2N5486")
    assert sheet is not None
    findings = check_limits(sheet, Jfet.from_idss(-1.0, 3e-3), SURE)
    assert [f.verdict for f in findings] == ["outside", "outside"]
    words = findings[1].sentence("J07", "2N5486")
    assert words.startswith("J07: Idss 3.0")
    assert "is outside for a 2N5486 (at least 8 mA and at most 20 mA; Philips" in words


@pytest.mark.parametrize("name", SHEETS)
def test_an_assumed_batch_mostly_passes_its_own_sheet(name: str) -> None:
    # The assumption is derived from the limits, so parts drawn from it must mostly lie
    # inside: two spreads to either side hold 95 % of one quantity.
    sheet = find_type(name)
    assert sheet is not None
    told = type_assumption(sheet)
    draw = np.random.default_rng(5)
    low, high = sheet.cutoff_v.ends()
    away = draw.standard_normal(4000) * told.cutoff_ln_spread
    cutoff = -told.cutoff_v * np.exp(away)
    assert np.mean((cutoff >= low) & (cutoff <= high)) == pytest.approx(0.954, abs=0.02)
    middle = Jfet(told.cutoff_v, told.beta_a_per_v2)
    assert {f.quantity: f.verdict for f in check_limits(sheet, middle, SURE)}["Idss"] == "inside"


def test_shipped_assumption_is_labelled_as_one() -> None:
    assert generic_assumption().basis.startswith("assumed")
    sheet = find_type("J201")
    assert sheet is not None
    assert type_assumption(sheet).basis == "assumed: from the published limits of J201"
