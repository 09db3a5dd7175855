"""Plans: every combination once, in a fixed order; every fault named at once."""

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sweepset.models.errors import InputError
from sweepset.render.batch.takeplan import Range, _Reader, load_plan


def plan_of(bench, text):
    path = bench / "other.toml"
    path.write_text(text, encoding="utf-8")
    return load_plan(path)


HEAD = 'riffs = ["riff.wav"]\ncircuits = ["wren"]\n'
SETS = '[sets]\none = "-2.1V/4.2mA,-2.1V/4.2mA"\ntwo = "-2.2V/4.2mA,-2.1V/4.2mA"\n'


def test_every_combination_once_in_the_plans_order(bench):
    text = (
        HEAD + 'trim = ["auto", "40%"]\nrate = ["9:00", "0.8Hz"]\ntemperature = [15, 27]\n' + SETS
    )
    takes = plan_of(bench, text).takes
    told = [
        tuple(take.columns[c] for c in ("set", "trim", "rate", "temperature")) for take in takes
    ]
    wanted = itertools.product(("one", "two"), ("auto", "40%"), ("9:00", "0.8Hz"), ("15", "27"))
    assert told == list(wanted)
    assert all(take.bias_rate.text == "0.8Hz" for take in takes)


def test_one_value_needs_no_list_and_ranges_include_their_ends(bench):
    text = HEAD + 'rate = { from = "0.2 Hz", to = "3.2 Hz", steps = 5 }\nsupply = "8.4 V"\n'
    text += 'sweep_resistor = { from = "1M", to = "4M", steps = 3 }\n' + SETS
    takes = plan_of(bench, text).takes
    rates = list(dict.fromkeys(take.settings.rate.value for take in takes))
    np.testing.assert_allclose(rates, [0.2, 0.4, 0.8, 1.6, 3.2], rtol=1e-5)
    sweeps = list(dict.fromkeys(take.settings.sweep_ohm for take in takes))
    np.testing.assert_allclose(sweeps, [1e6, 2e6, 4e6], rtol=1e-5)
    assert {take.settings.supply_v for take in takes} == {8.4}


@given(low=st.floats(0.0, 99.0), span=st.floats(0.5, 50.0), steps=st.integers(2, 40))
def test_ranges_are_even_from_end_to_end(low, span, steps):
    reader = _Reader.__new__(_Reader)
    reader._faults = []
    written = Range(first=f"{low} %", last=f"{low + span} %", steps=steps)
    shares = [float(text[:-1]) for text in reader._steps("trim", written, "%")]
    assert len(shares) == steps
    np.testing.assert_allclose(shares[0], low, rtol=1e-5, atol=1e-9)
    np.testing.assert_allclose(shares[-1], low + span, rtol=1e-5)
    np.testing.assert_allclose(np.diff(shares), span / (steps - 1), rtol=1e-2, atol=1e-3)


def test_auto_takes_offsets(bench):
    takes = plan_of(bench, HEAD + 'trim = ["auto-2%", "auto + 5,5 %", "auto"]\n' + SETS).takes
    offsets = list(dict.fromkeys(take.trim.offset for take in takes))
    assert offsets == pytest.approx([-0.02, 0.055, 0.0])


def test_sets_from_a_tray_beside_the_plan(bench):
    from importlib.resources import files

    for name in ("tray_bench.csv", "tray_bench.fixture.toml"):
        (bench / name).write_bytes((files("sweepset.samples") / name).read_bytes())
    text = HEAD + 'tray = "tray_bench.csv"\n[sets]\na = "J21,J38"\n'
    [take] = plan_of(bench, text).takes
    assert take.settings.labels == ("J21", "J38")
    with pytest.raises(InputError, match=r"sets\.a: .*no part 'J99'"):
        plan_of(bench, text.replace("J38", "J99"))


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (HEAD + 'ratte = "noon"\n' + SETS, "unknown key; did you mean rate"),
        (HEAD + "rate = []\n" + SETS, "rate"),
        ('circuits = ["wren"]\n' + SETS, "riffs: missing"),
        (HEAD + "[sets]\n", "sets"),
        (HEAD + 'trim = ["auto", "AUTO"]\n' + SETS, "'AUTO' stands there twice"),
        (HEAD + 'trim = "auto+300%"\n' + SETS, "at most 100 %"),
        (HEAD + 'rate = "fast"\n' + SETS, "rate: "),
        (HEAD + 'supply = "90 V"\n' + SETS, "supply: 90 V: expected"),
        (HEAD.replace("riff.wav", "gone.wav") + SETS, "gone.wav: no such file"),
        (HEAD.replace("wren", "wrem") + SETS, "did you mean wren"),
        (HEAD + '[sets]\none = "-2.1V/4.2mA"\n', "has 2 stages, the set has 1 parts"),
        (HEAD + 'rate = { from = "0.1 Hz", to = "9 Hz", steps = 100000 }\n' + SETS, "steps"),
        (HEAD + 'rate = { from = "-1 Hz", to = "9 Hz", steps = 3 }\n' + SETS, "positive ends"),
        (
            HEAD
            + "temperature = { from = 1, to = 60, steps = 1000 }\n"
            + 'trim = { from = "1%", to = "99%", steps = 1000 }\n'
            + SETS,
            "2,000,000 takes; at most 20,000",
        ),
    ],
)  # fmt: skip
def test_what_cannot_be_is_named(bench, text, said):
    with pytest.raises(InputError) as caught:
        plan_of(bench, text)
    assert said in str(caught.value)
    assert "other.toml" in str(caught.value)


def test_all_faults_at_once(bench):
    text = HEAD + 'rate = "fast"\ntrim = "far"\n' + SETS
    with pytest.raises(InputError) as caught:
        plan_of(bench, text)
    assert len(caught.value.messages) == 2
