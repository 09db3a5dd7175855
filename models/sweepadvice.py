"""Another sweep resistor for a doubtful set: less sweep, less stall.

A greater sweep resistor narrows the gate's swing, so that parts which cut off early need
not: the set stalls less and its notches travel less. Each value is judged at the bias
solved anew for it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from .bias import Bias, solve_bias
from .circuit import Circuit
from .eseries import e24_between
from .jfet import Jfet
from .quantity import Setting

# No further than a decade up: beyond it hardly any sweep is left.
REACH = 10.0


@dataclass(frozen=True)
class SweepChoice:
    """One sweep resistor and what the set does with it.

    Parameters
    ----------
    sweep_ohm : float
        The resistor [ohm].
    bias : Bias
        The bias solved with it.
    """

    sweep_ohm: float
    bias: Bias


@dataclass(frozen=True)
class SweepAdvice:
    """The walk from the present resistor to one that brings the set under the limit.

    Parameters
    ----------
    present : SweepChoice
        The circuit as it is.
    tried : tuple of SweepChoice
        E24 values above it, rising, up to the first that serves.
    found : SweepChoice or None
        The nearest that brings stall to the limit or below; None if none within a decade.
    limit : float
        The stall limit, a share of time.
    """

    present: SweepChoice
    tried: tuple[SweepChoice, ...]
    found: SweepChoice | None
    limit: float

    @property
    def travel_lost_octaves(self) -> float:
        """What the found resistor costs in travel [octaves]; 0 without one."""
        if self.found is None:
            return 0.0
        return self.present.bias.travel_octaves - self.found.bias.travel_octaves


def advise_sweep(
    circuit: Circuit,
    jfets: Sequence[Jfet],
    rate: Setting,
    limit: float,
    progress: Callable[[float], object] | None = None,
) -> SweepAdvice:
    """Return the nearest E24 sweep resistor (IEC 60063) that brings stall under a limit.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, at the channel temperature.
    rate : Setting
        The rate.
    limit : float
        Stall allowed, a share of time, 0 to 1.
    progress : callable, optional
        Told the share done.

    Raises
    ------
    ValueError
        If the limit is not from 0 to 1.
    """
    if not 0.0 <= limit <= 1.0:
        raise ValueError(f"a stall limit is a share of time, 0 to 100 %, got {100 * limit:g} %")
    present_ohm = circuit.bus.sweep_ohm
    present = SweepChoice(present_ohm, solve_bias(circuit, jfets, rate))
    if present.bias.stall <= limit:
        return SweepAdvice(present, (), present, limit)
    tried: list[SweepChoice] = []
    values = e24_between(present_ohm * 1.001, min(present_ohm * REACH, 100e6))
    for number, sweep_ohm in enumerate(values):
        if progress is not None:
            progress(number / len(values))
        changed = circuit.with_changes(bus__sweep_ohm=sweep_ohm)
        tried.append(SweepChoice(sweep_ohm, solve_bias(changed, jfets, rate)))
        if tried[-1].bias.stall <= limit:
            return SweepAdvice(present, tuple(tried), tried[-1], limit)
    return SweepAdvice(present, tuple(tried), None, limit)
