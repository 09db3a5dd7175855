"""Chosen sets as records, rows of a table and rows of a spreadsheet."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from ..spreadsheet import safe_cell

if TYPE_CHECKING:
    from ...models.choosing import DisjointSets, SetFigures
    from ...models.tray import Tray

COLUMNS = ("", "parts in stage order", "expected stagger oct", "stall %", "travel oct",
           "of uniform %", "trimmer %", "usual %")  # fmt: skip


def usual_readings(tray: Tray, labels: Sequence[str]) -> tuple[str, dict[str, float]]:
    """Return the reading that most of these parts have, and its values [V or A].

    Bounds are not readings.
    """
    values = {
        name: {
            label: measured.value
            for label in labels
            if (measured := tray.part(label).readings.get(name)) and not measured.bound
        }
        for name in tray.fixture.readings
    }
    name = max(values, key=lambda one: len(values[one]))
    return name, values[name]


def usual_of(labels: Sequence[str], readings: dict[str, float]) -> float | None:
    """Return a set's usual percentage as a fraction; None where a reading is missing."""
    from ...models.usual import usual_fraction

    if any(label not in readings for label in labels):
        return None
    try:
        return usual_fraction([readings[label] for label in labels])
    except ValueError:
        return None


def set_record(name: str, one: SetFigures, usual: float | None) -> dict[str, Any]:
    """Return a set judged by the full response, in plain values."""
    return {
        "set": name,
        "parts": list(one.labels),
        "expected_stagger_octaves": one.expected_stagger_octaves,
        "stagger_octaves": one.bias.stagger_octaves,
        "stall": one.bias.stall,
        "travel_octaves": one.bias.travel_octaves,
        "travel_share": one.travel_share,
        "trimmer": one.bias.position,
        "usual": usual,
    }


def packed_records(found: DisjointSets, readings: dict[str, float]) -> list[dict[str, Any]]:
    """Return disjoint sets in plain values."""
    return [
        {
            "set": str(n),
            "parts": list(one.labels),
            "expected_stagger_octaves": one.expected_stagger_octaves,
            "stall": one.stall,
            "travel_octaves": one.travel_octaves,
            "trimmer": one.position,
            "usual": usual_of(one.labels, readings),
        }
        for n, one in enumerate(found.sets, start=1)
    ]


def set_row(record: dict[str, Any]) -> tuple[str, ...]:
    """Return a record as a row under `COLUMNS`."""

    def percent(key: str, digits: int = 0) -> str:
        value = record.get(key)
        return "-" if value is None else f"{100.0 * value:.{digits}f}"

    return (
        record["set"],
        " ".join(record["parts"]),
        f"{record['expected_stagger_octaves']:.4f}",
        percent("stall"),
        f"{record['travel_octaves']:.2f}",
        percent("travel_share"),
        percent("trimmer", 1),
        percent("usual", 2),
    )


def spreadsheet(records: Sequence[dict[str, Any]], left: Sequence[dict[str, Any]]) -> str:
    """Return sets, one a row, then left-over parts with their reasons, as CSV text."""
    import csv
    import io

    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    stages = max((len(one["parts"]) for one in records), default=0)
    figures = (
        "expected_stagger_octaves", "stall", "travel_octaves", "travel_share", "trimmer", "usual",
    )  # fmt: skip
    writer.writerow(["set", *(f"stage_{n + 1}" for n in range(stages)), *figures, "note"])
    for one in records:
        cells = [one.get(key) for key in figures]
        numbers = ["" if cell is None else f"{cell:.6g}" for cell in cells]
        writer.writerow([safe_cell(one["set"]), *map(safe_cell, one["parts"]), *numbers, ""])
    for one in left:
        blanks = [""] * (stages - 1 + len(figures))
        writer.writerow(["spare", safe_cell(one["part"]), *blanks, safe_cell(one["reason"])])
    return out.getvalue()
