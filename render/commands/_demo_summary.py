"""The text that goes with the demo's takes."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable
from typing import TYPE_CHECKING

from ._cautions import CAUTIONS
from ._figures import percent, trimmer_text

WIDTH = 96

if TYPE_CHECKING:
    from ...models.choosing import SetFigures
    from ...models.circuit import Circuit
    from ...models.cycle import Cycle
    from ...models.gatebus import BusWave
    from ...models.tray import Tray
    from ..audition import Audition


def summary_text(
    tray: Tray,
    circuit: Circuit,
    sets: dict[str, SetFigures],
    cycles: dict[str, list[tuple[str, BusWave, Cycle]]],
    made: Audition,
    seconds: float,
) -> str:
    """Return the summary.

    Parameters
    ----------
    tray : Tray
        The shipped tray.
    circuit : Circuit
        The shipped circuit.
    sets : dict of str to SetFigures
        The sets by name.
    cycles : dict of str to list
        By set: each rate's text, gate bus and cycle.
    made : Audition
        The takes.
    seconds : float
        Length of the takes [s].
    """
    lines = [
        "sweepset demo",
        "",
        f"Tray {tray.path.name}: {len(tray.parts)} invented parts, measured in an op-amp servo "
        "fixture.",
        f"Circuit {circuit.name}: {circuit.stage_count} stages. Every take runs at 27 C with the "
        "bias trimmer as below;",
        "each set's trimmer is solved with the rate knob at noon and stays there.",
        "",
        f"All takes have the same loudness, {made.target_lufs:.1f} LUFS, and start at the same "
        "oscillator phase.",
        "",
    ]
    lines += [f"  {take.path.name}" for take in made.takes]
    for name, figures in sets.items():
        lines += ["", f"The {name} set", *_set_lines(tray, circuit, figures)]
    lines += ["", "Where to listen first", *_listening_lines(cycles, seconds)]
    lines += ["", "How to read the figures", *_FIGURES, "", "Cautions"]
    for caution in CAUTIONS:
        lines += textwrap.wrap(
            caution, WIDTH, initial_indent="  - ", subsequent_indent="    ", break_on_hyphens=False
        )
    return "\n".join(lines) + "\n"


_FIGURES = (
    "  travel   how far the notch that moves least moves over one cycle, in octaves",
    "  stagger  how far the stages stray from moving together, in octaves; 0 for identical parts",
    "  stall    share of the cycle in which a stage has stopped while another still moves",
)


def _set_lines(tray: Tray, circuit: Circuit, figures: SetFigures) -> list[str]:
    bus, bias = figures.bias.bus, figures.bias
    rail = circuit.supply.reference_above_ground_v
    lines = []
    for stage, (label, jfet) in enumerate(zip(figures.labels, figures.jfets, strict=True), start=1):
        readings = ", ".join(
            f"{name} {measured.value:.3f} V" for name, measured in tray.part(label).readings.items()
        )
        lines.append(
            f"  stage {stage}: {label}  ({readings}; cut-off {jfet.cutoff_v:.3f} V, "
            f"Idss {1e3 * jfet.idss_a:.2f} mA)"
        )
    return [
        *lines,
        f"  bias trimmer         {trimmer_text(bias.position)}",
        f"  wiper above ground   {bus.wiper_mean_above_ground_v:.3f} V (mean)",
        f"  gate bus             {bus.low_v:.3f} V to {bus.high_v:.3f} V, mean {bus.mean_v:.3f} V, "
        "from the reference rail",
        f"                       {rail + bus.low_v:.3f} V to {rail + bus.high_v:.3f} V, mean "
        f"{rail + bus.mean_v:.3f} V, above ground",
        "                       (true voltages: a meter on the gate bus loads it and shows less)",
        f"  travel               {bias.travel_octaves:.2f} octaves",
        f"  stagger              {bias.stagger_octaves:.3f} octave",
        f"  stall                {percent(bias.stall)}",
    ]


def _listening_lines(
    cycles: dict[str, list[tuple[str, BusWave, Cycle]]], seconds: float
) -> list[str]:
    travels = " and ".join(
        f"{at_rates[len(at_rates) // 2][2].travel_octaves:.2f} octaves ({name})"
        for name, at_rates in cycles.items()
    )
    lines = [
        "  At the turnarounds, where the sweep reverses: stages that match turn as one, others",
        "  stop or lag while the rest still move. Then over a whole cycle: the notches travel",
        f"  {travels}. Seconds from the start of the take, with the notches",
        "  lowest (L) or highest (H):",
    ]
    for name, at_rates in cycles.items():
        for rate, bus, cycle in at_rates:
            turns = [
                f"{time:.2f} {'H' if bus.gate_v([time])[0] > bus.mean_v else 'L'}"
                for time in turnarounds(cycle.turnaround_s, bus.period_s, seconds)
            ]
            lines.append(f"  {name} {rate} ({bus.rate_hz:.2f} Hz): {', '.join(turns)}")
    return lines


def turnarounds(first_s: Iterable[float], period_s: float, seconds: float) -> list[float]:
    """Return the first six turnarounds of a take, those at its very start left out [s].

    Parameters
    ----------
    first_s : iterable of float
        Turnarounds of the first cycle [s].
    period_s : float
        The oscillator's period [s].
    seconds : float
        Length of the take [s].
    """
    # The sound must have begun for a turn to be heard.
    each = (
        float(turn) + cycle * period_s
        for cycle in range(math.ceil(seconds / period_s))
        for turn in sorted(first_s)
    )
    return [time for time in each if 0.1 < time < seconds][:6]
