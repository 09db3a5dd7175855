"""The shipped circuits do what circuits of their kind do."""

from __future__ import annotations

import tomllib

import numpy as np
import numpy.typing as npt
import pytest
from scipy.optimize import minimize_scalar
from sweepset.models.circuit import Circuit, load_circuit, shipped_circuits
from sweepset.models.eseries import E24
from sweepset.models.gatebus import rate_range_hz, solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_quantity, parse_rate

Array = npt.NDArray[np.float64]
NAMES = sorted(shipped_circuits())


def octaves(circuit: Circuit, cutoff_v: float, trimmer: float) -> Array:
    """Return log2 of the break frequencies over one cycle, shape (512, stages).

    Written out here from the square law at knee 0, ``g = 2 beta (u)+`` (check-values a5, a6),
    and ``f = (g + 1/R)/(2 pi C)``, not taken from the package.
    """
    bus = solve_bus(circuit, trimmer, parse_rate("noon"))
    gate = (1.0 - circuit.half_drain_share) * bus.gate_v(np.arange(512) * bus.period_s / 512)
    channel = 2.0 * 1e-3 * np.maximum(gate - cutoff_v, 0.0)
    found = [
        np.log2((channel + 1.0 / stage.shunt_ohm) / (2.0 * np.pi * stage.capacitor_f))
        for stage in circuit.stages
    ]
    return np.array(found).T


def moving(circuit: Circuit, cutoff_v: float, trimmer: float) -> tuple[float, float, float]:
    """Return the mean octave's travel, and the share of time it moves by, and its middle."""
    mean = octaves(circuit, cutoff_v, trimmer).mean(axis=1)
    still = float(np.mean(mean < mean.min() + 0.02))
    return float(np.ptp(mean)), still, float(2.0 ** (0.5 * (mean.min() + mean.max())))


def test_shipped_kinds() -> None:
    circuits = [load_circuit(name) for name in NAMES]
    assert [circuit.name for circuit in circuits] == NAMES
    assert {2, 4, 6, 8} <= {circuit.stage_count for circuit in circuits}
    kinds = {(c.oscillator.kind, getattr(c.oscillator, "tap", None)) for c in circuits}
    assert {
        ("relaxation", "buffered"),
        ("relaxation", "direct"),
        ("triangle", None),
        ("sine", None),
    } <= kinds
    loops = [c.feedback for c in circuits if c.feedback is not None]
    assert {loop.into_stage == 1 for loop in loops} == {True, False}
    assert any(c.bus.half_drain is not None for c in circuits)
    assert any(len({stage.capacitor_f for stage in c.stages}) > 2 for c in circuits)
    assert any(c.bus.capacitor_f is None for c in circuits)


@pytest.mark.parametrize("name", NAMES)
def test_rates_over_the_knob(name: str) -> None:
    slowest, fastest = rate_range_hz(load_circuit(name))
    # Common practice for such units, no published source.
    assert 0.05 <= slowest <= 0.13
    assert 4.0 <= fastest <= 8.0


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("cutoff_v", [-1.0, -2.0, -3.0])
def test_trimmer_reaches_a_sweep_for_usual_cutoffs(name: str, cutoff_v: float) -> None:
    circuit = load_circuit(name)
    # The position of greatest travel lies inside the trimmer's range, not at an end ...
    places = np.linspace(0.0, 1.0, 41)
    travels = [moving(circuit, cutoff_v, float(place))[0] for place in places]
    peak = int(np.argmax(travels))
    assert 0 < peak < 40
    best = minimize_scalar(
        lambda place: -moving(circuit, cutoff_v, place)[0],
        bounds=(places[peak - 1], places[peak + 1]),
        method="bounded",
    )
    # ... and from there down to where the sweep is two octaves there is a stretch of the
    # trimmer wide enough to set by hand (four degrees of 270).
    wide = [
        place
        for place in np.linspace(0.0, 1.0, 201)
        if 2.0 <= moving(circuit, cutoff_v, float(place))[0] <= 5.0
    ]
    assert len(wide) * 0.005 * circuit.bus.trimmer.travel_degrees * circuit.bus.trimmer.turns > 4.0
    # The whole sweep, in every stage, is where a phase shifter works (common practice).
    found = 2.0 ** octaves(circuit, cutoff_v, float(best.x))
    assert found.min() > 80.0
    assert found.max() < 5000.0
    assert 2.0 <= -best.fun <= 5.0


@pytest.mark.parametrize("name", NAMES)
def test_sweep_of_the_reference_part_where_no_stage_stands_still(name: str) -> None:
    # VC = -2 V, 1 mA/V^2: somewhere the sweep covers 2 to 4 octaves between about 100 Hz and
    # 3 kHz, and the channels are never off for longer than a turn takes.
    circuit = load_circuit(name)
    fit = []
    for place in np.linspace(0.0, 1.0, 401):
        bus = solve_bus(circuit, float(place), parse_rate("noon"))
        gate = (1.0 - circuit.half_drain_share) * bus.low_v
        travel, still, middle = moving(circuit, -2.0, float(place))
        if gate > -2.0 and still < 0.15 and 2.0 <= travel <= 4.2 and 300.0 < middle < 1500.0:
            fit.append(place)
    assert fit


@pytest.mark.parametrize("name", NAMES)
def test_gates_stay_below_conduction(name: str) -> None:
    # Gate junctions conduct from about 0.5 V (design page); with the trimmer where cut-offs
    # from -1 to -3 V need it, the bus stays negative.
    circuit = load_circuit(name)
    for cutoff_v in (-1.0, -2.0, -3.0):
        places = np.linspace(0.0, 1.0, 41)
        best = max(places, key=lambda p: moving(circuit, cutoff_v, float(p))[0])
        assert solve_bus(circuit, float(best), parse_rate("noon")).high_v < 0.0


@pytest.mark.parametrize("name", NAMES)
def test_written_values_are_preferred_ones(name: str) -> None:
    # Resistors and capacitors are sold in E24 (check-values h2).
    def walk(part: object, key: str) -> list[tuple[str, str]]:
        if isinstance(part, dict):
            return [pair for k, v in part.items() for pair in walk(v, k)]
        if isinstance(part, list):
            return [pair for v in part for pair in walk(v, key)]
        return [(key, part)] if isinstance(part, str) else []

    checked = 0
    for key, text in walk(tomllib.loads(shipped_circuits()[name]()), ""):
        unit = "F" if "capacitor" in key else "ohm"
        if key in {"name", "about", "kind", "tap", "law", "top", "bottom", "clockwise"}:
            continue
        try:
            value = parse_quantity(text, unit)
        except ValueError:
            continue  # a voltage, a rate, an angle
        if value == 0.0:
            continue
        digits = f"{value:.1e}".split("e")[0].replace(".", "")
        assert int(digits) in E24, f"{key} = {text}"
        assert value == pytest.approx(float(f"{value:.1e}"), rel=1e-12)
        checked += 1
    assert checked >= 4 * load_circuit(name).stage_count


def test_reference_part_is_the_one_of_the_check_values() -> None:
    # REF of check-values: VC -2 V, Idss 4 mA, 250 ohm when fully on (a5).
    part = Jfet(-2.0, 1e-3, knee_v=0.0)
    assert part.idss_a == pytest.approx(4e-3)
    assert float(part.channel_resistance(0.0)) == pytest.approx(250.0)
