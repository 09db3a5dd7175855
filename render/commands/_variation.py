"""The figures of ``vary`` as rows, sentences and records."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ...models.components import Tolerances
    from ...models.drift import DriftPoint
    from ...models.jfet import Jfet
    from ...models.variation import Variation

SPREAD_COLUMNS = ("units built from this set", "as printed", "5 %", "half", "95 %")
NAMES = {
    "stagger_octaves": ("stagger, octave", "{:.3f}"),
    "travel_octaves": ("travel, octaves", "{:.2f}"),
    "stall": ("stall, share of the time", "{:.2f}"),
    "shallowest_db": ("shallowest notch, dB", "{:.1f}"),
    "shift_v": ("gate bus moved by the trimmer, V", "{:+.3f}"),
}
# A perfect match that takes less than this off the expected stagger helps little; more than
# the other much. The project's own lines.
LITTLE, MUCH = 0.1, 0.3
# Deeper than a real mix can null; noise of the arithmetic below.
BOTTOM_DB = -60.0


def spread_rows(variation: Variation) -> list[tuple[str, ...]]:
    """Return rows of what the units are like."""
    rows = []
    for figure, (name, form) in NAMES.items():
        spread = variation.spreads[figure]
        values = (spread.nominal, spread.low, spread.median, spread.high)
        if figure == "shallowest_db":
            cells = [_decibels(value) for value in values]
        else:
            cells = [form.format(value) for value in values]
        rows.append((name, *cells))
    return rows


def cause_columns() -> tuple[str, ...]:
    """Return the headings of :func:`cause_rows`."""
    return ("cause", "stagger alone", *(f"share: {name.split(',')[0]}" for name, _ in _shared()))


def cause_rows(variation: Variation) -> list[tuple[str, ...]]:
    """Return rows of what each cause does alone, and its first-order share of each figure."""
    rows = []
    for cause, alone in variation.alone_octaves.items():
        shares = [
            _share(variation.shares[cause][figure], variation.spreads[figure].deviation)
            for _, figure in _shared()
        ]
        rows.append((cause, f"{alone:.3f}", *shares))
    together = [
        _share(
            1.0 - sum(shares[figure] for shares in variation.shares.values()),
            variation.spreads[figure].deviation,
        )
        for _, figure in _shared()
    ]
    return [*rows, ("together only", "", *together)]


def _shared() -> list[tuple[str, str]]:
    return [(name, figure) for figure, (name, _) in NAMES.items() if figure != "shift_v"]


def sentences(
    variation: Variation, tolerances: Tolerances, jfets: Sequence[Jfet], *, reset: bool
) -> list[str]:
    """Return what follows from the figures."""
    built, alike = variation.as_built_octaves, variation.identical_octaves
    gain = variation.matching_gain
    capacitors = f"{100.0 * tolerances.capacitor:g} %"
    said = [
        f"Expected stagger as built {built:.3f} octave; with {len(jfets)} identical parts, known "
        f"exactly, it would be {alike:.3f}; with this set and every stage capacitor as printed "
        f"{variation.measured_capacitors_octaves:.3f}."
    ]
    how = f"takes {100.0 * gain:.0f} % off the expected stagger"
    if gain < LITTLE:
        said.append(
            f"Does matching better help here? Hardly: with capacitors of {capacitors} even a "
            f"perfect match {how}. Measure the capacitors and pick equal ones first."
        )
    elif gain < MUCH:
        said.append(
            f"Does matching better help here? Somewhat: a perfect match {how}; capacitors of "
            f"{capacitors} do the rest."
        )
    else:
        said.append(
            f"Does matching better help here? Yes: a perfect match {how}, capacitors of "
            f"{capacitors} and all."
        )
    if reset:
        low, high = (
            variation.spreads["shift_v"].low * variation.degrees_per_volt,
            variation.spreads["shift_v"].high * variation.degrees_per_volt,
        )
        low, high = min(low, high), max(low, high)
        said.append(
            f"Setting the trimmer again takes {low:+.0f} to {high:+.0f} degrees in nine units of "
            "ten."
        )
        if variation.beyond_reach > 0.0:
            said.append(
                f"In {100.0 * variation.beyond_reach:.1f} % of the units the trimmer ends before "
                "the sweep is back."
            )
    said.append(
        "Not drawn: supply and zener (swept below), op amps, the half-drain network. A prediction "
        "is not a measurement."
    )
    return said


def drift_columns(what: str) -> tuple[str, ...]:
    """Return the headings of :func:`drift_rows`."""
    return (what, "sweep moved, octaves", "travel, octaves", "stagger, octave", "stall", "rate, Hz")


def drift_rows(points: Sequence[DriftPoint], unit: str) -> list[tuple[str, ...]]:
    """Return rows of a set over temperature or supply, its trimmer left alone."""
    rows: list[tuple[str, ...]] = []
    for point in points:
        if point.fault:
            rows.append((f"{point.value:.3g} {unit}", point.fault, "", "", "", ""))
            continue
        rows.append(
            (
                f"{point.value:.3g} {unit}",
                f"{point.moved_octaves:+.2f}",
                f"{point.travel_octaves:.2f}",
                f"{point.stagger_octaves:.3f}",
                f"{100.0 * point.stall:.0f} %",
                f"{point.rate_hz:.3g}",
            )
        )
    return rows


def variation_record(
    variation: Variation,
    tolerances: Tolerances,
    by_celsius: Sequence[DriftPoint],
    by_supply: Sequence[DriftPoint],
) -> dict[str, Any]:
    """Return all figures in plain values, the single draws left out."""
    return {
        "tolerances": {
            "capacitor": tolerances.capacitor,
            "resistor": tolerances.resistor,
            "track": tolerances.track,
        },
        "draws": len(variation.draws["stagger_octaves"]),
        "figures": {name: vars(spread) for name, spread in variation.spreads.items()},
        "first_order_shares": variation.shares,
        "stagger_alone_octaves": variation.alone_octaves,
        "expected_stagger_octaves": {
            "as_built": variation.as_built_octaves,
            "identical_parts": variation.identical_octaves,
            "capacitors_as_printed": variation.measured_capacitors_octaves,
        },
        "matching_gain": variation.matching_gain,
        "beyond_trimmer_reach": variation.beyond_reach,
        "temperature": [vars(point) for point in by_celsius],
        "supply": [vars(point) for point in by_supply],
    }


def draw_records(variation: Variation) -> list[dict[str, Any]]:
    """Return one flat record a draw."""
    names = list(variation.draws)
    columns = [variation.draws[name].tolist() for name in names]
    return [
        {"unit": number, **dict(zip(names, row, strict=True))}
        for number, row in enumerate(zip(*columns, strict=True), start=1)
    ]


def _decibels(value: float) -> str:
    if math.isnan(value):
        return "none"
    return f"below {BOTTOM_DB:.0f}" if value < BOTTOM_DB else f"{value:.1f}"


def _share(share: float, deviation: float) -> str:
    """Return a share for people; nothing where the figure does not vary."""
    if deviation == 0.0:
        return "-"
    return f"{100.0 * min(max(share, 0.0), 1.0):.0f} %"
