"""The figures of one set at one bias, as a record and as rows of a table."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ...models.circuit import Circuit
    from ...models.cycle import Cycle
    from ...models.gatebus import BusWave
    from ...models.jfet import Jfet


def bias_record(
    circuit: Circuit, jfets: Sequence[Jfet], bus: BusWave, cycle: Cycle
) -> dict[str, Any]:
    """Return what a set does at a bias and where its voltages lie, in plain values.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order.
    bus : BusWave
        Trimmer and rate.
    cycle : Cycle
        What the set does on it.
    """
    rail = circuit.supply.reference_above_ground_v
    return {
        "circuit": circuit.name,
        "parts": [
            {
                "stage": stage,
                "label": jfet.label or f"part {stage}",
                "cutoff_v": jfet.cutoff_v,
                "beta_a_per_v2": jfet.beta_a_per_v2,
                "lambda_per_v": jfet.lambda_per_v,
                "knee_v": jfet.knee_v,
                "stall": float(cycle.stage_stall[stage - 1]),
            }
            for stage, jfet in enumerate(jfets, start=1)
        ],
        "trimmer": bus.trimmer,
        "rate_hz": bus.rate_hz,
        "rate_rotation": bus.rotation,
        "reference_above_ground_v": rail,
        "wiper_above_ground_v": bus.wiper_mean_above_ground_v,
        "gate_low_v": bus.low_v,
        "gate_mean_v": bus.mean_v,
        "gate_high_v": bus.high_v,
        "gate_mean_above_ground_v": rail + bus.mean_v,
        "travel_octaves": cycle.travel_octaves,
        "stagger_octaves": cycle.stagger_octaves,
        "stall": cycle.stall,
        "turnaround_s": [float(time) for time in cycle.turnaround_s],
        "margin": cycle.margin,
        "stable": cycle.stable,
    }


def bias_rows(record: dict[str, Any]) -> list[tuple[str, str]]:
    """Return the rows of a table of a :func:`bias_record`."""
    stages = ", ".join(f"{part['stage']}: {part['label']}" for part in record["parts"])
    rail = record["reference_above_ground_v"]
    gates = [record[f"gate_{turn}_v"] for turn in ("low", "mean", "high")]
    about_rail = " / ".join(f"{volts:.3f} V" for volts in gates)
    about_ground = " / ".join(f"{rail + volts:.3f} V" for volts in gates)
    return [
        ("circuit", record["circuit"]),
        ("stage: part", stages),
        ("rate", f"{record['rate_hz']:.3g} Hz"),
        ("bias trimmer", trimmer_text(record["trimmer"])),
        ("reference rail above ground", f"{rail:.2f} V"),
        ("trimmer wiper above ground, mean", f"{record['wiper_above_ground_v']:.3f} V"),
        ("gate bus re reference, low / mean / high", about_rail),
        ("gate bus above ground, low / mean / high", about_ground),
        ("travel", f"{record['travel_octaves']:.2f} octaves"),
        ("stagger", f"{record['stagger_octaves']:.3f} octave"),
        ("stall", percent(record["stall"])),
        ("stall, stage by stage", ", ".join(percent(part["stall"]) for part in record["parts"])),
    ]


def trimmer_text(position: float) -> str:
    """Return a trimmer position for people."""
    return f"{100.0 * position:.1f} % of its travel from the bottom end"


def percent(share: float) -> str:
    """Return a share of time for people."""
    return f"{100.0 * share:.0f} %"
