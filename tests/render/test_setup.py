"""What is asked of a take, worked out."""

from __future__ import annotations

import numpy as np
import pytest
from sweepset.models.circuit import load_circuit
from sweepset.models.errors import InputError
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate, parse_trim
from sweepset.render.setup import TakeSettings, changed_circuit, circuit_hash, plan_takes, set_up

RATE = 48_000
CIRCUIT = load_circuit("heron")
PARTS = tuple(Jfet(v, 1.1e-3, label=f"J{n:02d}") for n, v in enumerate((-1.8, -1.86, -1.78, -1.9)))


def settings(**options: object) -> TakeSettings:
    return TakeSettings(
        **{
            "circuit": CIRCUIT,
            "jfets": PARTS,
            "trimmer": parse_trim("60%"),
            "rate": parse_rate("noon"),
            **options,
        }
    )


def test_auto_takes_the_bias_solvers_position() -> None:
    setup = set_up(settings(trimmer=parse_trim("auto")))
    assert setup.bias is not None
    assert setup.bus is not None
    assert setup.bus.trimmer == setup.bias.position
    assert 0.0 <= setup.bias.position <= 1.0
    assert setup.as_record()["trimmer"] == {"asked": "auto", "position": setup.bias.position}


def test_circuit_hash_is_of_the_values() -> None:
    renamed = CIRCUIT.model_copy(update={"name": "other", "about": "x"})
    assert circuit_hash(renamed) == circuit_hash(CIRCUIT)
    assert circuit_hash(CIRCUIT.with_changes(stages__1__capacitor_f=48e-9)) != circuit_hash(CIRCUIT)


def test_takes_to_be_compared_share_one_factor() -> None:
    # A gate far below cut-off leaves the chain linear and slow, which asks for less.
    setups = [
        set_up(settings(trimmer=parse_trim("0%"))),
        set_up(settings(jfets=PARTS[::-1])),
    ]
    alone = [plan_takes([setup], RATE)[0].factor for setup in setups]
    assert alone[0] < alone[1]
    assert [plan.factor for plan in plan_takes(setups, RATE)] == [alone[1]] * 2


def test_all_faults_of_a_setting_at_once() -> None:
    with pytest.raises(InputError) as caught:
        set_up(settings(jfets=PARTS[:2], celsius=-300.0, full_scale_v=-1.0))
    assert len(caught.value.messages) == 3


def test_overrides_out_of_range_are_all_named() -> None:
    with pytest.raises(InputError) as caught:
        changed_circuit(settings(sweep_ohm=0.1, supply_v=900.0))
    first, second = caught.value.messages
    assert first.startswith("sweep_ohm = 0.1 for 'heron'")
    assert second.startswith("supply_v = 900 for 'heron'")


def test_parts_are_warmed() -> None:
    # The set as it is at the channel temperature, from the part's own law.
    warm = set_up(settings(celsius=40.0))
    assert warm.jfets == tuple(part.at_celsius(40.0) for part in PARTS)
    assert warm.settings.jfets == PARTS


def test_the_gate_before_the_first_frame_is_the_bus_before_time_zero() -> None:
    # The engine warms its slices up over frames before the first; the bus is periodic there too.
    setup = set_up(settings())
    assert setup.bus is not None
    steps = np.arange(-5000, 5000)
    found = setup.gate(-5000, 10_000, 192_000.0)
    assert np.allclose(found, setup.bus.gate_v(steps / 192_000.0), atol=1e-9)
    assert setup.gate_low_v - 1e-9 <= found.min() <= found.max() <= setup.gate_high_v + 1e-9


def test_labels_of_nameless_parts() -> None:
    nameless = tuple(Jfet(-1.8, 1e-3) for _ in range(4))
    assert settings(jfets=nameless).labels == ("part 1", "part 2", "part 3", "part 4")
