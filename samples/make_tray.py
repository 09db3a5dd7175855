"""Make the shipped trays and fixtures. Run it to write them anew; equal seeds, equal files.

The parts are invented: no such batch was measured. Their parameters are spread
as a believable batch's might be, the meter shows whole millivolts and a little
noise, and it, the resistors and the temperatures are a little off, within what
the fixture file says of them. The true parameters stay with this script, so that
an estimate can be held against them.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from sweepset.models.jfet import Jfet

READINGS_OHM = {"servo_10k": 10e3, "servo_100k": 100e3}
# What is truly wrong with the invented bench: the fixture file does not know it.
METER_SCALE = 1.0015
TRUE_OHM = {"servo_10k": 10_030.0, "servo_100k": 99_650.0}
NOISE_V = 0.3e-3
CELSIUS_SPREAD = 0.2


@dataclass(frozen=True)
class Batch:
    """An invented batch: medians, spreads of the logarithms, and how it was measured.

    `sittings` are (first part, supply, reference, celsius), voltages as the meter showed them.
    """

    seed: int
    count: int
    cutoff_v: float
    cutoff_spread: float
    beta_a_per_v2: float
    beta_spread: float
    sittings: tuple[tuple[int, float, float, float], ...]
    one_reading: tuple[int, ...]
    notes: dict[int, str]


TRAYS = {
    "tray_bench": Batch(
        seed=20_261_201,
        count=60,
        cutoff_v=-2.25,
        cutoff_spread=0.11,
        beta_a_per_v2=1.0e-3,
        beta_spread=0.07,
        sittings=((0, 9.02, 4.51, 21.5),),
        one_reading=(),
        notes={
            1: "bent leg",
            16: "short leg",
            32: "marking hard to read",
            47: "from the odd strip",
        },
    ),
    "tray_workshop": Batch(
        seed=20_261_202,
        count=200,
        cutoff_v=-2.4,
        cutoff_spread=0.13,
        beta_a_per_v2=1.1e-3,
        beta_spread=0.08,
        sittings=((0, 9.02, 4.51, 20.5), (120, 8.86, 4.43, 22.0)),
        one_reading=(17, 44, 81, 82, 113, 139, 158, 171),
        notes={9: "leg re-bent", 63: "scratched case", 120: "new sitting: battery lower"},
    ),
}


def invented_parts(name: str) -> dict[str, Jfet]:
    """Return a tray's parts with their true parameters, by label.

    Parameters
    ----------
    name : str
        ``"tray_bench"`` or ``"tray_workshop"``.
    """
    from sweepset.models.jfet import Jfet

    batch = TRAYS[name]
    draw = np.random.default_rng(batch.seed)
    width = len(str(batch.count))
    parts = {}
    for number in range(1, batch.count + 1):
        away = batch.cutoff_spread * draw.standard_normal()
        # Thicker channels have more cut-off and, per volt, less current: the power -0.5
        # of the type assumption, with a spread of its own.
        ln_beta = -0.5 * away + batch.beta_spread * draw.standard_normal()
        label = f"J{number:0{width}}"
        parts[label] = Jfet(
            cutoff_v=batch.cutoff_v * float(np.exp(away)),
            beta_a_per_v2=batch.beta_a_per_v2 * float(np.exp(ln_beta)),
            lambda_per_v=0.012 * float(np.exp(0.15 * draw.standard_normal())),
            label=label,
        )
    return parts


def make_tray(name: str) -> tuple[str, str]:
    """Return the text of a tray and of its fixture file.

    Parameters
    ----------
    name : str
        ``"tray_bench"`` or ``"tray_workshop"``.
    """
    from sweepset.models.fixture import Conditions, expected_reading, parse_fixture

    batch = TRAYS[name]
    several = len(batch.sittings) > 1
    fixture_text = _fixture_text(batch.sittings[0][1], batch.sittings[0][2])
    fixture = parse_fixture(_as_data(fixture_text), f"{name}.fixture.toml")
    draw = np.random.default_rng(batch.seed + 1)
    header = ["part", *READINGS_OHM, "celsius", *(("supply", "reference") if several else ())]
    lines = [";".join([*header, "note"])]
    for place, (label, jfet) in enumerate(invented_parts(name).items()):
        _, supply, reference, celsius = [s for s in batch.sittings if s[0] <= place][-1]
        true_celsius = celsius + CELSIUS_SPREAD * draw.standard_normal()
        cells = [label]
        for reading in READINGS_OHM:
            true = Conditions(
                celsius=true_celsius,
                supply_v=supply / METER_SCALE,
                reference_v=reference / METER_SCALE,
                resistor_ohm=TRUE_OHM[reading],
            )
            volts = expected_reading(jfet, fixture.readings[reading], true)
            shown = METER_SCALE * volts + NOISE_V * draw.standard_normal()
            skipped = place in batch.one_reading and reading == "servo_100k"
            cells.append("" if skipped else f"{shown:.3f}")
        cells.append(f"{celsius:.1f}")
        if several:
            cells += [f"{supply:.2f}", f"{reference:.2f}"]
        lines.append(";".join([*cells, batch.notes.get(place, "")]))
    return "\n".join(lines) + "\n", fixture_text


def _fixture_text(supply_v: float, reference_v: float) -> str:
    tables = [
        "# The op-amp servo fixture of the invented trays: an op amp holds the source at the",
        "# reference, so the source resistor sets the current; the meter reads its output.",
    ]
    for name, ohm in READINGS_OHM.items():
        tables += [
            "",
            f"[reading.{name}]",
            'kind = "servo"',
            f'supply = "{supply_v:.2f}"',
            f'reference = "{reference_v:.2f}"',
            f'resistor = "{ohm / 1e3:.0f}k"',
            'resistor_accuracy = "1 %"',
            'meter = "0.5 % + 2 counts of 1 mV"',
            'low_rail = "50 mV"',
        ]
    return "\n".join(tables) + "\n"


def _as_data(text: str) -> dict[str, object]:
    import tomllib

    return tomllib.loads(text)


def main(folder: Path) -> None:
    """Write the trays and their fixtures into a folder."""
    from sweepset.models.atomic import write_text_atomically

    for name in TRAYS:
        tray, fixture = make_tray(name)
        write_text_atomically(folder / f"{name}.csv", tray)
        write_text_atomically(folder / f"{name}.fixture.toml", fixture)


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
