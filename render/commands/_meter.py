"""Tables of test points and sweep resistors, for ``trim``."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ...models.sweepadvice import SweepAdvice
    from ...models.testpoints import MeterPoint

POINT_COLUMNS = ("measure to ground, in this order", "true", "tolerances", "meter shows", "behind")
SWEEP_COLUMNS = ("sweep resistor", "trimmer", "travel", "stall", "stagger")


def point_rows(points: list[MeterPoint]) -> list[tuple[str, ...]]:
    """Return the rows of a table of test points."""
    from ...models.quantity import format_quantity

    return [
        (
            point.name + (" (moves)" if point.moves else ""),
            f"{point.true_v:.3f} V",
            f"+/- {point.spread_v:.2f} V",
            f"{point.shown_v:.3f} V",
            format_quantity(point.source_ohm, "ohm") if point.source_ohm else "0 ohm",
        )
        for point in points
    ]


def point_records(points: list[MeterPoint]) -> list[dict[str, Any]]:
    """Return test points as plain values."""
    from dataclasses import asdict

    return [asdict(point) for point in points]


def sweep_rows(advice: SweepAdvice) -> list[tuple[str, ...]]:
    """Return the rows of a table of sweep resistors, the present one first."""
    from ...models.quantity import format_quantity

    rows: list[tuple[str, ...]] = []
    for choice in (advice.present, *advice.tried):
        note = " (as it is)" if choice is advice.present else ""
        rows.append(
            (
                format_quantity(choice.sweep_ohm, "ohm") + note,
                f"{100.0 * choice.bias.position:.1f} %",
                f"{choice.bias.travel_octaves:.2f} octaves",
                f"{100.0 * choice.bias.stall:.0f} %",
                f"{choice.bias.stagger_octaves:.3f} octave",
            )
        )
    return rows


def sweep_sentence(advice: SweepAdvice) -> str:
    """Return what the walk over sweep resistors found."""
    from ...models.quantity import format_quantity

    limit = f"{100.0 * advice.limit:g} %"
    if advice.found is advice.present:
        return f"stall is within {limit} with the sweep resistor as it is"
    if advice.found is None:
        return f"no sweep resistor up to ten times the present one brings stall within {limit}"
    lost = advice.travel_lost_octaves
    change = f"costs {lost:.2f} octaves" if lost >= 0.0 else f"gains {-lost:.2f} octaves"
    return (
        f"{format_quantity(advice.found.sweep_ohm, 'ohm')} is the nearest E24 value that brings "
        f"stall within {limit}, at a trimmer of its own; it {change} of travel"
    )


def sweep_record(advice: SweepAdvice) -> dict[str, Any]:
    """Return the walk as plain values."""
    return {
        "limit": advice.limit,
        "found_ohm": None if advice.found is None else advice.found.sweep_ohm,
        "travel_lost_octaves": advice.travel_lost_octaves,
        "tried": [
            {
                "sweep_ohm": choice.sweep_ohm,
                "trimmer": choice.bias.position,
                "travel_octaves": choice.bias.travel_octaves,
                "stall": choice.bias.stall,
                "stagger_octaves": choice.bias.stagger_octaves,
            }
            for choice in (advice.present, *advice.tried)
        ],
    }
