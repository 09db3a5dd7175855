"""The circuit file: what is read, what is refused and how it is said."""

from __future__ import annotations

import copy
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from pydantic import ValidationError
from sweepset.models.circuit import (
    Circuit,
    load_circuit,
    parse_circuit,
    shipped_circuits,
)
from sweepset.models.errors import InputError

TEXT = shipped_circuits()["heron"]()
REMOVED = object()


def data(path: str = "", value: Any = None) -> dict[str, Any]:
    """Return the shipped four-stage file's content with one key set, or removed."""
    content = copy.deepcopy(tomllib.loads(TEXT))
    if path:
        place: Any = content
        *way, last = [int(step) if step.isdigit() else step for step in path.split("/")]
        for step in way:
            place = place[step]
        if value is REMOVED:
            del place[last]
        else:
            place[last] = value
    return content


def faults(content: dict[str, Any]) -> tuple[str, ...]:
    with pytest.raises(InputError) as fault:
        parse_circuit(content, "my.toml")
    return fault.value.messages


MEASURED = {"kind": "measured", "low": "-1 V", "high": "1 V"}
KNOB = {"slowest": "0.1 Hz", "fastest": "5 Hz"}

# One fault each: the place as in the file with stages from 1, what was given, what was
# expected or what to do.
FAULTS: list[tuple[str, Any, str, str]] = [
    # silly and misread values
    ("stage/1/capacitor", "39F", "stage[2].capacitor = '39F'", "39 F is outside 100 pF to 10 uF"),
    ("stage/1/capacitor", 39, "stage[2].capacitor", "39 F is outside 100 pF to 10 uF"),
    ("stage/0/shunt", "39nF", "stage[1].shunt: '39nF'", "expected a resistance in ohms"),
    ("stage/0/shunt", "3m9", "stage[1].shunt: '3m9'", "for mega write M as in 3M9"),
    ("stage/0/shunt", True, "stage[1].shunt", "got True"),
    ("stage/0/shunt", ["24k"], "stage[1].shunt", "got ['24k']"),
    ("stage/3/arm_in", "-10k", "stage[4].arm_in = '-10k'", "outside 1 ohm to 100 Mohm"),
    ("stage/3/arm_in", "0", "stage[4].arm_in = '0'", "outside 1 ohm to 100 Mohm"),
    ("bus/capacitor", "1,500n", "bus.capacitor: '1,500n'", "write it without the comma"),
    ("supply/voltage", "nan", "supply.voltage: 'nan'", "expected a voltage"),
    ("supply/voltage", float("inf"), "supply.voltage: inf", "not a finite number"),
    ("supply/voltage", "900 V", "supply.voltage = '900 V'", "outside 3 V to 60 V"),
    ("supply/voltage", "", "supply.voltage: '' is empty", "for example 5.1 V"),
    ("oscillator/knob/taper/middle", "100 %", "knob.taper.middle = '100 %'", "1 % to 99 %"),
    ("oscillator/knob/travel", "400 deg", "knob.travel = '400 deg'", "30 deg to 360 deg"),
    # keys
    ("stage/1/arm_inn", "10k", "stage[2].arm_inn: unknown key", "did you mean arm_in"),
    ("osc", {}, "osc: unknown key", "known here: name, about, supply"),
    ("oscillator/knob/track_ohms", "1k", "oscillator.knob.track_ohms: unknown key", "track"),
    ("stage/2/shunt", REMOVED, "stage[3].shunt", "missing; this key is needed"),
    ("mix", REMOVED, "mix", "missing; this key is needed"),
    ("bus/half_drain", {"from_bus": "1M"}, "bus.half_drain.from_drain", "missing"),
    # kinds and choices
    ("oscillator/kind", "square", "oscillator kind = 'square'", "'relaxation', 'triangle'"),
    ("oscillator/kind", REMOVED, "oscillator", "needs the key 'kind'"),
    ("supply/reference", {"voltage": "5 V"}, "supply.reference", "needs the key 'kind'"),
    ("supply/reference", {"kind": "zener"}, "supply.reference.voltage", "missing"),
    ("oscillator/tap", "open", "oscillator.tap = 'open'", "expected 'buffered' or 'direct'"),
    ("oscillator/knob/clockwise", "left", "knob.clockwise = 'left'", "'faster' or 'slower'"),
    ("oscillator/knob/taper", {"law": "log"}, "taper.law = 'log'", "'audio' or 'reverse-audio'"),
    # shapes
    ("oscillator", "fast", "oscillator = 'fast'", "expected a table of keys"),
    ("oscillator/knob", "5k", "oscillator.knob = '5k'", "expected a table of keys"),
    ("stage", "x", "stage = 'x'", "expected a list"),
    ("name", 5, "name = 5", "expected text in quotes"),
    ("name", "", "name = ''", "is empty"),
    ("name", "x" * 300, "name = 'xxxx", "at most 200 characters"),
    ("bus/trimmer/turns", "3", "bus.trimmer.turns = '3'", "a whole number without quotes"),
    ("bus/trimmer/turns", 1.5, "bus.trimmer.turns = 1.5", "expected a whole number"),
    ("bus/trimmer/turns", 0, "bus.trimmer.turns = 0", "must be 1 or more"),
    # rails
    ("bus/trimmer/top", "suply", "bus.trimmer.top = 'suply'", "did you mean supply?"),
    ("bus/trimmer/top", "9 k", "bus.trimmer.top: '9 k'", "expected a voltage"),
    ("bus/trimmer/top", True, "bus.trimmer.top", "got True"),
    ("bus/trimmer/top", "70 V", "bus.trimmer.top = '70 V'", "outside 0 V to 60 V"),
    ("bus/trimmer/top", "12 V", "bus.trimmer.top = 12 V", "above the supply of 9 V"),
    ("bus/trimmer/top", "ground", "bus.trimmer.top and bus.trimmer.bottom", "moves nothing"),
    # counts and stages
    ("stage", [], "stage", "there are 0; expected at least 2"),
    ("stage", data()["stage"] * 4, "stage", "there are 16; expected at most 12"),
    ("feedback/from", 9, "feedback joins stages 9 and 1", "the circuit has 4 stages"),
    ("feedback/from", 99, "feedback.from = 99", "must be 12 or less"),
    ("feedback/from", "4", "feedback.from = '4'", "a whole number without quotes"),
    ("feedback", {"from": 1, "into": 3, "resistor": "27k"}, "feedback.from = 1", "swap them"),
    # the whole
    ("supply/reference", {"kind": "zener", "voltage": "8.2 V"}, "outputs reach", "check supply."),
    (
        "oscillator",
        {**MEASURED, "low": "2 V", "knob": KNOB},
        "oscillator: low = 2 V is not below high = 1 V",
        "swap them",
    ),
    (
        "oscillator",
        {**MEASURED, "knob": {"slowest": "5 Hz", "fastest": "1 Hz"}},
        "oscillator.knob: slowest = 5 Hz is faster",
        "swap them",
    ),
    (
        "oscillator",
        {"kind": "sine", "mean": "0 V", "peak": "0 V", "knob": KNOB},
        "oscillator.peak = '0 V'",
        "outside 1 mV to 60 V",
    ),
]


@pytest.mark.parametrize(("path", "value", "place", "said"), FAULTS)
def test_one_fault_one_message(path: str, value: Any, place: str, said: str) -> None:
    messages = faults(data(path, value))
    assert len(messages) == 1, messages
    assert messages[0].startswith("my.toml: ")
    assert place in messages[0]
    assert said in messages[0]
    # Nothing of the checking library shows through.
    for word in ("Input should", "validation", "Value error", "dictionary", "instance", "pydantic"):
        assert word not in messages[0]


def test_all_faults_at_once_in_the_files_order() -> None:
    content = data("stage/1/capacitor", "39F")
    content["stage"][2]["shunt"] = "24 V"
    del content["bus"]["trimmer"]["track"]
    content["mix"]["dryy"] = "1k"
    messages = faults(content)
    assert len(messages) == 4
    for message, place in zip(
        messages,
        ("stage[2].capacitor", "stage[3].shunt", "bus.trimmer.track", "mix.dryy"),
        strict=True,
    ):
        assert place in message


def test_faults_of_the_whole_come_together() -> None:
    content = data("bus/trimmer/top", "ground")
    content["feedback"]["from"] = 9
    assert len(faults(content)) == 2


def test_a_faulty_stage_does_not_also_make_too_few_stages() -> None:
    content = data("stage", [{"capacitor": "39F"}, {"shunt": "24k"}])
    assert not [message for message in faults(content) if "at least 2" in message]


def test_an_empty_table_names_every_needed_key() -> None:
    missing = {message.split(": ")[1] for message in faults({})}
    assert missing == {"name", "supply", "input", "stage", "bus", "oscillator", "mix"}


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (bytes(range(256)) * 20, "not a text file in UTF-8 (byte 129)"),
        ("a=1".encode("utf-16"), "not a text file in UTF-8"),
        (b"", "the file is empty"),
        (b" \r\n\n", "the file is empty"),
        (b"#" * 1_000_001, "larger than 1 MB"),
        (TEXT[: len(TEXT) // 2].encode() + b"\ncut = ", "not a valid circuit file (TOML)"),
        (b"a = 1\na = 2", "not a valid circuit file (TOML)"),
        (b"a = " + b"[" * 100_000, "not a valid circuit file (TOML)"),
        (b"\x00\x00\x00\x00", "not a valid circuit file (TOML)"),
    ],
)
def test_files_that_are_no_circuit(tmp_path: Path, content: bytes, said: str) -> None:
    path = tmp_path / "my.toml"
    path.write_bytes(content)
    with pytest.raises(InputError) as fault:
        load_circuit(path)
    assert fault.value.messages[0].startswith(str(path))
    assert said in fault.value.messages[0]
    assert path.read_bytes() == content


def test_text_as_editors_save_it(tmp_path: Path) -> None:
    # Byte-order mark and CRLF, as editors on some systems write them.
    path = tmp_path / "my.toml"
    path.write_bytes(b"\xef\xbb\xbf" + TEXT.replace("\n", "\r\n").encode())
    assert load_circuit(path) == load_circuit("heron")


@pytest.mark.parametrize(
    ("name", "said"),
    [
        ("hern", "no circuit named 'hern'; did you mean heron"),
        ("HERON", "did you mean heron?"),
        ("xyz", "shipped circuits: egret, heron, plover, stork, wren"),
        ("", "no circuit named ''"),
        ("x" * 5000, "no circuit named"),
        ("nofile.toml", "no such circuit file"),
        ("no/such/heron", "no such circuit file"),
        ("x" * 5000 + ".toml", "cannot read this circuit file"),
        ("nul\0byte", "no circuit named"),
    ],
)
def test_names_that_are_no_circuit(name: str, said: str) -> None:
    with pytest.raises(InputError) as fault:
        load_circuit(name)
    assert said in str(fault.value)


def test_a_folder_is_no_circuit(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="cannot read this circuit file"):
        load_circuit(tmp_path)


def test_values_are_those_of_the_schematic() -> None:
    # By hand from the file.
    circuit = load_circuit("heron")
    assert circuit.stage_count == 4
    assert circuit.stages[0].capacitor_f == 47e-9
    assert circuit.bus.sweep_ohm == 2.7e6
    assert circuit.reference_above_ground_v == 5.1
    # Headroom 1.5 V each way on 9 V about 5.1 V; common mode from 3 V above ground to the supply.
    assert circuit.rails_v == pytest.approx((-3.6, 2.4))
    assert circuit.common_mode_v == pytest.approx((-2.1, 3.9))
    # b = 10/10, c = 10/27 in the first stage only, a = 1 + b + c.
    assert circuit.arm_gains(0) == pytest.approx((2.0 + 10 / 27, 1.0, 10 / 27))
    assert circuit.arm_gains(1) == pytest.approx((2.0, 1.0, 0.0))
    assert circuit.half_drain_share == 0.0
    assert load_circuit("stork").half_drain_share == pytest.approx(0.5)


def test_divider_reference_follows_the_supply_and_a_zener_does_not() -> None:
    wren = load_circuit("wren")
    assert wren.with_changes(supply__voltage_v=8.4).reference_above_ground_v == pytest.approx(4.2)
    heron = load_circuit("heron")
    assert heron.with_changes(supply__voltage_v=8.4).reference_above_ground_v == 5.1


def test_changes_are_checked_copies() -> None:
    circuit = load_circuit("heron")
    changed = circuit.with_changes(stages__2__capacitor_f=33e-9, bus__sweep_ohm=3.3e6)
    assert changed.stages[2].capacitor_f == 33e-9
    assert changed.stages[1].capacitor_f == circuit.stages[1].capacitor_f
    assert changed.bus.sweep_ohm == 3.3e6
    assert circuit.bus.sweep_ohm == 2.7e6
    # A fraction stays the fraction it is.
    knob = circuit.with_changes(oscillator__knob__taper__law="audio").oscillator.knob
    assert knob.taper.middle_fraction == pytest.approx(0.1)  # type: ignore[union-attr]
    with pytest.raises(ValidationError):
        circuit.with_changes(bus__sweep_ohm=0.1)
    with pytest.raises(KeyError, match="no field 'sweep'"):
        circuit.with_changes(bus__sweep=1e6)
    with pytest.raises(ValidationError):
        circuit.name = "other"  # type: ignore[misc]


@given(
    st.recursive(
        st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
        lambda inner: (
            st.lists(inner, max_size=3)
            | st.dictionaries(
                st.sampled_from(["name", "kind", "stage", "bus", "supply", "knob", "voltage"]),
                inner,
            )
        ),
        max_leaves=12,
    ),
    st.sampled_from(sorted(Circuit.model_fields)),
)
def test_any_content_is_refused_in_plain_words(content: Any, field: str) -> None:
    key = Circuit.model_fields[field].alias or field
    # What may stand there is not refused.
    assume(not (key in ("name", "about") and isinstance(content, str)))
    assume(not (key in ("feedback", "opamp") and content in (None, {})))
    changed = {**data(), key: content}
    for message in faults(changed):
        assert message.startswith("my.toml: ")
        assert len(message) < 600
        assert "pydantic" not in message
