"""The engine against ngspice transients of the exported netlists: the figures to reach.

Eight chains (seven circuits' worth of stages, stiffness, mismatch and feedback, two of
them with the default knee), gate swept beyond cut-off, 72 decaying partials up to 9 kHz
of 0.5 V peak; and three whole units with oscillator, gate bus, coupling and mix. The
figure is rms(y - ref)/rms(ref) below 20 kHz, first 50 ms left out, with factor and rules
as the engine selects them. tests/reference/make_reference.py makes the stored waveforms.
"""

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from reference.make_reference import HERE as WAVEFORMS
from reference.make_reference import KEPT, analysis, simulate
from reference.scenes import (
    CHAIN_SCENES,
    SAMPLE_RATE,
    SCENES,
    UNIT_SCENES,
    Scene,
    error_db,
)
from sweepset.models.gatebus import bus_node
from sweepset.render.engine import Engine
from sweepset.render.plan import EnginePlan, plan_engine, warm_up_steps
from sweepset.render.rules import ADAMS_3, ADAMS_4, TRAPEZOIDAL

# The figures.
CHAIN_DB = -90.0
UNIT_DB = -80.0
# "Halving ngspice's step changes its own result by -105 dB or less." In whole units the
# oscillator switches somewhere within a step, which no rule's order mends: 10 dB below
# the figure is asked there.
CHAIN_OWN_DB = -105.0
UNIT_OWN_DB = -90.0

by_name = pytest.mark.parametrize("scene", SCENES, ids=lambda scene: scene.name)


def wanted_db(scene: Scene) -> float:
    return UNIT_DB if scene.is_unit else CHAIN_DB


def own_db(scene: Scene) -> float:
    return UNIT_OWN_DB if scene.is_unit else CHAIN_OWN_DB


@cache
def stored(name: str) -> np.ndarray:
    with np.load(WAVEFORMS / f"{name}.npz") as data:
        return data["wave"].astype(float)


@cache
def plan_for(scene: Scene) -> EnginePlan:
    return plan_engine(scene.circuit, scene.jfets, *scene.gate_range_v, SAMPLE_RATE)


def rendered(scene: Scene, seconds: float, plan: EnginePlan) -> np.ndarray:
    """Return the engine's output, shape (frames,); the input goes on a little past the end."""
    count = round(seconds * SAMPLE_RATE)
    x = scene.input.samples(count + 2400, SAMPLE_RATE)[:, None]
    engine = Engine(
        scene.circuit,
        scene.jfets,
        SAMPLE_RATE,
        1,
        plan,
        scene.gate,
        bus=bus_node(scene.circuit, scene.trimmer) if scene.is_unit else None,
        chain_only=not scene.is_unit,
    )
    out = np.concatenate([engine.process(x), engine.finish()])[:count, 0]
    report = engine.report()
    assert report.rail_seconds == 0.0
    assert report.unsettled_steps == 0
    return out


def forced(scene: Scene, factor: int, rule) -> EnginePlan:
    rules = (rule,) * scene.circuit.stage_count
    steps = warm_up_steps(scene.circuit, rules, SAMPLE_RATE * factor)
    return replace(plan_for(scene), factor=factor, rules=rules, warm_up_steps=steps)


def told(scene: Scene, figure_db: float, plan: EnginePlan) -> str:
    rules = ",".join(str(rule.order) for rule in plan.rules)
    return f"{scene.name}: {figure_db:.1f} dB at {plan.factor}x, orders {rules}"


# --- the scenes are what they claim -----------------------------------------


def test_scenes_cover_what_the_figure_asks_for():
    hard = [scene for scene in CHAIN_SCENES if scene.jfets[0].knee_v == 0.0]
    assert len({scene.circuit for scene in hard}) >= 5
    assert sum(scene.jfets[0].knee_v > 0.0 for scene in CHAIN_SCENES) >= 2
    counts = {scene.circuit.stage_count for scene in hard}
    assert min(counts) == 2
    assert max(counts) == 8
    assert {scene.jfets[0].lambda_per_v for scene in hard} == {0.0, 0.02}
    into = {s.circuit.feedback.into_stage for s in hard if s.circuit.feedback is not None}
    assert 1 in into
    assert max(into) > 1
    for scene in SCENES:
        lowest = min(part.cutoff_v for part in scene.jfets)
        keep = 1.0 - scene.circuit.half_drain_share
        # the bus passes some cut-off: all of a matched set's, some of a mismatched one's
        assert keep * scene.gate_range_v[0] < max(part.cutoff_v for part in scene.jfets)
        assert keep * scene.gate_range_v[1] > lowest


def test_input_is_the_wideband_one():
    table = CHAIN_SCENES[0].input.table
    assert len(table) == 72
    assert table[-1, 1] == 9000.0
    x = CHAIN_SCENES[0].input.samples(SAMPLE_RATE // 2, SAMPLE_RATE)
    assert np.abs(x).max() == pytest.approx(0.5, rel=0.02)


@by_name
def test_stored_reference_is_of_this_scene(scene):
    """The netlist beside the waveform is the one written today, comments aside."""
    then = (WAVEFORMS / f"{scene.name}.cir").read_text(encoding="ascii")
    now = scene.netlist(analysis(scene, KEPT, scene.seconds))
    assert elements(now) == elements(then)
    assert len(stored(scene.name)) == round(scene.seconds * SAMPLE_RATE)


def elements(netlist: str) -> list[str]:
    return [line for line in netlist.splitlines() if line and not line.startswith("*")]


@by_name
def test_stored_reference_stands_by_itself(scene):
    """Halving its step moved it by less than the figure asks."""
    with np.load(WAVEFORMS / f"{scene.name}.npz") as data:
        coarser, finest = data["halving_db"]
    assert finest <= own_db(scene)
    if not scene.is_unit:
        # Its rule is of second order: the figure is trusted because it falls as one.
        assert coarser - finest == pytest.approx(12.04, abs=0.5)


def test_stored_data_stays_small():
    assert sum(path.stat().st_size for path in Path(WAVEFORMS).iterdir()) < 3_000_000


# --- the figures ------------------------------------------------------------


@pytest.mark.parametrize("scene", CHAIN_SCENES, ids=lambda scene: scene.name)
def test_chain_meets_its_figure(scene):
    plan = plan_for(scene)
    figure = error_db(
        rendered(scene, scene.seconds, plan),
        stored(scene.name),
        settling=scene.starts_off_balance,
    )
    print(told(scene, figure, plan))
    assert figure <= CHAIN_DB, told(scene, figure, plan)


@pytest.mark.parametrize("scene", UNIT_SCENES, ids=lambda scene: scene.name)
def test_whole_unit_meets_its_figure(scene):
    plan = plan_for(scene)
    figure = error_db(
        rendered(scene, scene.seconds, plan),
        stored(scene.name),
        settling=scene.starts_off_balance,
    )
    print(told(scene, figure, plan))
    assert figure <= UNIT_DB, told(scene, figure, plan)


@pytest.mark.parametrize(
    ("rule", "factors"),
    # factors where the rule's own error stands well above the reference's -118 dB
    [(TRAPEZOIDAL, (2, 4, 8)), (ADAMS_3, (1, 2, 4)), (ADAMS_4, (1, 2))],
    ids=lambda value: getattr(value, "name", None),
)
@pytest.mark.parametrize("name", ["four_close", "six_slow_apart_knee"])
def test_order_of_convergence(name, rule, factors):
    """Doubling the rate gains 6.02 dB per order, up to the reference's own error."""
    scene = next(scene for scene in CHAIN_SCENES if scene.name == name)
    figures = [
        error_db(rendered(scene, scene.seconds, forced(scene, f, rule)), stored(name))
        for f in factors
    ]
    print(name, rule.name, dict(zip(factors, np.round(figures, 1), strict=True)))
    gained = -np.diff(figures)
    # Partials near 9 kHz are not yet in the limit of small steps at 48 and 96 kHz.
    np.testing.assert_allclose(gained, 6.02 * rule.order, atol=0.5 if rule.order == 2 else 2.0)


def test_selection_matters():
    """A figure that any setting would meet shows nothing: the least factor misses it."""
    scene = CHAIN_SCENES[0]
    figure = error_db(
        rendered(scene, scene.seconds, forced(scene, 1, TRAPEZOIDAL)), stored(scene.name)
    )
    assert figure > -70.0


# --- live -------------------------------------------------------------------


@pytest.mark.ngspice
@pytest.mark.slow
@by_name
def test_live_transient_agrees(scene):
    """ngspice run now on the netlist written now, at 40 steps per frame (stored: 64)."""
    seconds = 0.1
    live = simulate(scene, 40, seconds)
    plan = plan_for(scene)
    figure = error_db(rendered(scene, seconds, plan), live, settling=scene.starts_off_balance)
    own = error_db(live, stored(scene.name)[: len(live)])
    print(told(scene, figure, plan), f"; live against stored {own:.1f} dB")
    assert figure <= wanted_db(scene)
    assert own <= own_db(scene)
