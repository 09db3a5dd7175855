"""A listening page from rows of an index."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from ...models.circuit import Circuit
from ...models.cycle import Cycle, analyse_cycle
from ...models.errors import InputError
from ...models.gatebus import solve_bus
from ...models.jfet import Jfet
from ...models.quantity import Setting
from ..audio import AudioReader, sidecar_path
from ..loudness import Loudness, LoudnessMeter, match_loudness
from ..page.data import CYCLE_POINTS, PageData, PageTake, page_data
from .task import Row

COLUMNS = ("riff", "circuit", "set", "trim", "rate", "sweep", "temperature", "supply")


def page_of_rows(rows: Sequence[Row], folder: Path, cautions: Sequence[str]) -> PageData:
    """Return a page of takes of one riff, brought to one loudness.

    Parameters
    ----------
    rows : sequence of dict
        Rows of an index.
    folder : Path
        Where their files are.
    cautions : sequence of str
        Shown before the first sound.

    Raises
    ------
    InputError
        If there is no row, the takes are of several riffs, or a file is missing or damaged.
    """
    if not rows:
        raise InputError("no takes for a page; render some first")
    riffs = list(dict.fromkeys(str(row["riff"]) for row in rows))
    if len(riffs) > 1:
        raise InputError(
            f"a listening page holds takes of one riff, these are of {len(riffs)} "
            f"({', '.join(riffs)}): choose one with --only riff=..."
        )
    paths = [folder / str(row["file"]) for row in rows]
    match = match_loudness([_loudness(path) for path in paths])
    varying = [
        column for column in COLUMNS[1:] if len({str(row.get(column, "")) for row in rows}) > 1
    ] or ["set"]
    takes = [
        PageTake(
            name=" ".join(str(row[column]) for column in varying if row[column]),
            path=path,
            facts=_facts(row),
            cycle=_cycle(path),
            gain_db=gain_db,
        )
        for row, path, gain_db in zip(rows, paths, match.gains_db, strict=True)
    ]
    return page_data(riffs[0], takes, cautions)


def _loudness(path: Path) -> Loudness:
    with AudioReader(path) as reader:
        meter = LoudnessMeter(reader.sample_rate_hz, reader.channels)
        for block in reader.blocks():
            meter.add(block)
    return meter.result()


def _facts(row: Row) -> tuple[tuple[str, str], ...]:
    return (
        ("circuit", str(row["circuit"])),
        ("parts in stage order", str(row["parts"]).replace(",", ", ")),
        ("rate", f"{row['rate_hz']:.3g} Hz"),
        ("bias trimmer", f"{100.0 * row['trimmer']:.1f} % from the bottom end"),
        ("travel", f"{row['travel_octaves']:.2f} octaves"),
        ("stagger", f"{row['stagger_octaves']:.3f} octave"),
        ("stall", f"{100.0 * row['stall']:.0f} % of the time"),
        ("file", str(row["file"])),
    )


def _cycle(path: Path) -> Cycle:
    """Return what the take's set does, from its sidecar."""
    sidecar = sidecar_path(path)
    try:
        take = json.loads(sidecar.read_text(encoding="utf-8"))["take"]
        circuit = Circuit.model_validate(take["circuit"])
        jfets = [_jfet(part).at_celsius(float(take["celsius"])) for part in take["parts"]]
        rate = take["rate"]
        if rate["rotation"] is None:
            setting = Setting(str(rate["asked"]), None, float(rate["rate_hz"]))
        else:
            setting = Setting(str(rate["asked"]), float(rate["rotation"]), None)
        bus = solve_bus(circuit, float(take["trimmer"]["position"]), setting)
        return analyse_cycle(circuit, jfets, bus, CYCLE_POINTS)
    except (OSError, ValueError, KeyError, TypeError) as fault:
        raise InputError(
            f"{sidecar}: cannot be used ({fault}); delete the take and run the batch again"
        ) from None


def _jfet(part: dict[str, Any]) -> Jfet:
    return Jfet(**{name: value for name, value in part.items() if name != "stage"})
