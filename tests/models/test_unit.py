"""Units as built against the circuit really changed, component by component."""

import numpy as np
import pytest
from sweepset.models.bias import solve_bias
from sweepset.models.circuit import load_circuit, shipped_circuits
from sweepset.models.comparing import staggers
from sweepset.models.components import Tolerances, bus_components, nudged
from sweepset.models.cycle import analyse_cycle
from sweepset.models.errors import InputError
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.pairwise import Parts
from sweepset.models.quantity import Setting, parse_rate
from sweepset.models.unit import POINTS, Draws, Unit

NOON = parse_rate("noon")


def an_uneven_set(circuit):
    """Parts a hundredth of a volt and a hundredth of Idss apart."""
    return [
        Jfet.from_idss(-2.1 - 0.01 * n, 4.2e-3 * (1.0 + 0.01 * n))
        for n in range(circuit.stage_count)
    ]


def a_unit(name, **changes):
    circuit = load_circuit(name)
    jfets = an_uneven_set(circuit)
    bias = solve_bias(circuit, jfets, NOON)
    return Unit(circuit, Parts.from_jfets(jfets), bias.bus, NOON, **changes), jfets, bias


def drawn(unit, count=12, seed=3, *, bus=True, reading=0.0):
    draws = unit.draw(Tolerances(resistor=0.05, capacitor=0.1), count, seed)
    if not bus:
        draws = Draws(draws.capacitors, draws.resistors, 0.0 * draws.bus, draws.parts)
    shift = np.random.default_rng(seed).normal(0.0, 1.0, draws.parts.shape) * [0.02, 0.03]
    return Draws(draws.capacitors, draws.resistors, draws.bus, reading * shift)


def rebuilt(circuit, jfets, draws, n):
    """The circuit and set of one draw, stage components and parts."""
    stages = circuit.stage_count
    factors = draws.resistors[n]
    changes = {}
    for i, stage in enumerate(circuit.stages):
        changes[f"stages__{i}__capacitor_f"] = stage.capacitor_f * draws.capacitors[n, i]
        for row, name in enumerate(("shunt_ohm", "arm_in_ohm", "arm_out_ohm")):
            value = getattr(stage, name) * factors[row * stages + i]
            changes[f"stages__{i}__{name}"] = value
    if circuit.feedback is not None:
        changes["feedback__resistor_ohm"] = circuit.feedback.resistor_ohm * factors[3 * stages]
    changes["mix__dry_ohm"] = circuit.mix.dry_ohm * factors[3 * stages + 1]
    changes["mix__wet_ohm"] = circuit.mix.wet_ohm * factors[3 * stages + 2]
    parts = [
        Jfet(part.cutoff_v + dv, part.beta_a_per_v2 * np.exp(db), knee_v=part.knee_v)
        for part, (dv, db) in zip(jfets, draws.parts[n], strict=True)
    ]
    return circuit.with_changes(**changes), parts


@pytest.mark.parametrize("name", shipped_circuits())
def test_nothing_off_is_the_cycle_itself(name):
    # The unit looks at 64 instants, the cycle at 512: stall is told to 1/64, travel by the
    # notches at the exact ends of the gate's swing.
    unit, _, bias = a_unit(name)
    figures = unit.nominal()
    assert figures["stagger_octaves"] == pytest.approx(bias.stagger_octaves, rel=1e-3)
    assert figures["travel_octaves"] == pytest.approx(bias.travel_octaves, rel=1e-3)
    assert figures["stall"] == pytest.approx(bias.stall, abs=2 / 64)
    assert figures["shift_v"] == 0.0


@pytest.mark.parametrize("name", shipped_circuits())
def test_stage_components_enter_exactly(name):
    unit, jfets, bias = a_unit(name, reset=False)
    draws = drawn(unit, bus=False, reading=1.0)
    figures = unit.figures(draws)
    for n in range(4):
        circuit, parts = rebuilt(unit.circuit, jfets, draws, n)
        cycle = analyse_cycle(circuit, parts, bias.bus)
        assert figures["travel_octaves"][n] == pytest.approx(cycle.travel_octaves, rel=1e-3)
        # Stagger against one mean part in every stage of the circuit as printed.
        mean = Jfet(
            float(np.mean([part.cutoff_v for part in parts])),
            float(np.exp(np.mean([np.log(part.beta_a_per_v2) for part in parts]))),
            knee_v=parts[0].knee_v,
        )
        ideal = analyse_cycle(unit.circuit, [mean] * len(parts), bias.bus)
        apart = np.log2(cycle.break_hz) - np.log2(ideal.break_hz)
        apart -= apart.mean(axis=1, keepdims=True)
        assert figures["stagger_octaves"][n] == pytest.approx(
            float(np.sqrt(np.mean(apart**2))), rel=2e-3
        )


def test_readings_alone_give_the_stagger_of_comparing():
    unit, _, bias = a_unit("heron", reset=False)
    draws = drawn(unit, count=50, bus=False, reading=1.0).only("readings")
    parts = unit.parts
    expected = staggers(
        parts.cutoff_v + draws.parts[..., 0],
        parts.ln_beta + draws.parts[..., 1],
        parts.knee_v,
        unit.circuit,
        bias.bus,
        points=POINTS,
    )
    np.testing.assert_allclose(unit.staggers(draws), expected, rtol=1e-9)


@pytest.mark.parametrize("name", shipped_circuits())
def test_the_bus_is_right_to_a_few_per_cent_of_what_tolerances_do_to_it(name):
    # Two components off at once are taken as the sum of each alone: what is left out is
    # their product. 20 % tracks, 10 % capacitors, 1 % resistors.
    unit, _, bias = a_unit(name)
    draws = unit.draw(Tolerances(), 30, 5)
    guessed = unit._bus_of(draws)
    kept = Setting("kept", bias.bus.rotation, None) if bias.bus.rotation is not None else NOON
    missed, moved = [], []
    for n in range(30):
        changes = {
            part.field: part.value * (1.0 + draws.bus[n, k])
            for k, part in enumerate(unit.components)
        }
        bus = solve_bus(unit.circuit.with_changes(**changes), bias.bus.trimmer, kept)
        ends = np.array([bus.low_v, bus.high_v])
        missed.append(guessed[n, POINTS:] - ends)
        moved.append(ends - [bias.bus.low_v, bias.bus.high_v])
    assert np.std(moved) > 0.01
    assert np.sqrt(np.mean(np.square(missed))) < 0.04 * np.sqrt(np.mean(np.square(moved)))


def test_setting_the_trimmer_again_takes_the_sweep_back():
    unit, _, bias = a_unit("heron")
    still, _, _ = a_unit("heron", reset=False)
    draws = drawn(unit, count=40)
    middle = np.log2(bias.cycle.break_hz).mean()

    def middles(of):
        channels = of._channels(draws)
        gate = of._reset_gate(draws, channels)[0][:, :POINTS]
        return channels.level(gate).mean(axis=(1, 2)) - middle

    assert np.abs(middles(still)).max() > 0.05
    assert np.abs(middles(unit)).max() < 1e-3


def test_a_trimmer_ends_where_it_ends():
    unit, _, _ = a_unit("heron")
    low, high = unit._reach
    assert unit.beyond_reach(np.array([low, 0.0, high, 0.1])) == 0.5
    still, _, _ = a_unit("heron", reset=False)
    assert still.beyond_reach(np.array([low, high])) == 0.0


def test_a_component_that_stops_the_oscillator_one_way_still_has_a_slope():
    # A triangle whose thresholds lie just inside the comparator's swing stops at a lower
    # feedback resistor.
    circuit = load_circuit("plover")
    oscillator = circuit.oscillator
    close = circuit.with_changes(
        oscillator__threshold_in_ohm=0.65 * oscillator.threshold_out_ohm,
    )
    part = next(p for p in bus_components(close) if p.field.endswith("threshold_in_ohm"))
    sides = []
    for changed in nudged(close, part, 0.1):
        try:
            solve_bus(changed, 0.5, NOON)
            sides.append(True)
        except InputError:
            sides.append(False)
    assert sorted(sides) == [False, True]
    jfets = an_uneven_set(close)
    unit = Unit(close, Parts.from_jfets(jfets), solve_bus(close, 0.5, NOON), NOON)
    place = [p.field for p in unit.components].index(part.field)
    assert np.abs(unit._slopes[place]).max() > 0.01


def test_same_seed_same_draws():
    unit, _, _ = a_unit("wren")
    one, other = (unit.draw(Tolerances(), 20, 8) for _ in range(2))
    np.testing.assert_array_equal(one.bus, other.bus)
    assert np.abs(unit.draw(Tolerances(), 20, 9).bus - one.bus).max() > 0.0
