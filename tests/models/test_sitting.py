"""A sitting: what is asked, what is doubted, what is on the disk."""

import pytest
from sweepset.models.fixture import load_fixture
from sweepset.models.sitting import ASK_AGAIN, Sitting
from sweepset.models.tray import load_tray, new_tray

FIXTURE = """
[reading.servo_10k]
kind = "servo"
supply = "9.02"
reference = "4.51"
resistor = "10k"
meter = "0.5 % + 2 counts of 1 mV"

[reading.servo_100k]
kind = "servo"
supply = "9.02"
reference = "4.51"
resistor = "100k"
meter = "0.5 % + 2 counts of 1 mV"
"""


@pytest.fixture
def sitting(tmp_path):
    (tmp_path / "t.fixture.toml").write_text(FIXTURE)
    tray = new_tray(tmp_path / "t.csv", load_fixture(tmp_path / "t.fixture.toml")).write()
    return Sitting(tray)


def begin(sitting):
    for line in ("21.5", "9.02", "4.51"):
        assert sitting.take(line) == []
    return sitting


def type_in(sitting, *lines):
    return [sentence for line in lines for sentence in sitting.take(line)]


def on_disk(sitting):
    return load_tray(sitting.tray.path)


def test_asks_the_bench_first_then_parts_then_readings(sitting):
    prompts = []
    for line in ("21.5", "9.02", "4.51", "J01", "3.01", "2.57"):
        prompts.append(sitting.prompt)
        sitting.take(line)
    assert "temperature" in prompts[0]
    assert "supply" in prompts[1]
    assert "reference" in prompts[2]
    assert prompts[3:] == ["part [J01]: ", "J01 servo_10k: ", "J01 servo_100k: "]
    assert sitting.prompt == "part [J02]: "


def test_every_reading_is_on_the_disk_before_the_next_question(sitting):
    begin(sitting)
    type_in(sitting, "J01", "3.01")
    assert on_disk(sitting).part("J01").readings["servo_10k"].value == 3.01
    type_in(sitting, "2.57")
    part = on_disk(sitting).part("J01")
    assert part.readings["servo_100k"].value == 2.57
    assert part.celsius == 21.5
    assert on_disk(sitting).cell("J01", "supply") == "9.02"


def test_decimal_comma_is_understood(sitting):
    begin(sitting)
    type_in(sitting, "J01", "3,01", "2,57")
    assert on_disk(sitting).part("J01").readings["servo_10k"].value == 3.01


def test_empty_lines_take_what_is_offered(sitting):
    begin(sitting)
    type_in(sitting, "A9", "3.01", "2.57", "", "3.02", "2.58")
    assert on_disk(sitting).labels == ("A9", "A10")


def test_what_the_fixture_cannot_show_is_refused_and_asked_again(sitting):
    begin(sitting)
    said = type_in(sitting, "J01", "30.1")
    assert "slipped decimal point" in said[0]
    assert sitting.prompt == "J01 servo_10k: "
    assert on_disk(sitting).labels == ()


def test_words_are_refused(sitting):
    begin(sitting)
    assert type_in(sitting, "J01", "abc")
    assert sitting.prompt == "J01 servo_10k: "


def fill(sitting, count=10):
    begin(sitting)
    for number in range(count):
        type_in(sitting, "", f"{3.0 + 0.01 * (number % 5):.3f}", f"{2.5 + 0.01 * (number % 5):.3f}")


def test_a_slipped_decimal_point_is_questioned_and_not_saved(sitting):
    fill(sitting)
    said = type_in(sitting, "J50", "0.301")
    assert "3.01 would not be" in said[0]
    assert "J50" not in on_disk(sitting).labels
    type_in(sitting, "3.01")
    assert on_disk(sitting).part("J50").readings["servo_10k"].value == 3.01


def test_a_stray_part_is_kept_when_typed_twice(sitting):
    fill(sitting)
    assert "far from the others" in type_in(sitting, "J50", "1.5")[0]
    type_in(sitting, "1.5")
    assert on_disk(sitting).part("J50").readings["servo_10k"].value == 1.5


def test_a_remeasure_that_disagrees_is_questioned(sitting):
    begin(sitting)
    type_in(sitting, "J01", "3.010", "2.570")
    said = type_in(sitting, "J01", "3.100")
    assert any("more than the meter's accuracy" in sentence for sentence in said)
    assert on_disk(sitting).part("J01").readings["servo_10k"].value == 3.01
    said = type_in(sitting, "3.012")
    assert on_disk(sitting).part("J01").readings["servo_10k"].value == 3.012


def test_undo_takes_back_line_by_line(sitting):
    begin(sitting)
    before = sitting.tray.path.read_bytes()
    type_in(sitting, "J01", "3.01", "2.57")
    type_in(sitting, "undo")
    assert set(on_disk(sitting).part("J01").readings) == {"servo_10k"}
    type_in(sitting, "undo")
    assert sitting.tray.path.read_bytes() == before
    assert "nothing to take back" in type_in(sitting, "undo")[0]


def test_skip_note_and_help(sitting):
    begin(sitting)
    said = type_in(sitting, "J01", "3.01", "skip", "note bent leg", "?")
    assert on_disk(sitting).part("J01").note == "bent leg"
    assert "servo_100k" not in on_disk(sitting).part("J01").readings
    assert any(sentence.startswith("undo") for sentence in said)


def test_bench_is_asked_again_after_many_parts_and_on_request(sitting):
    begin(sitting)
    for _ in range(ASK_AGAIN):
        said = type_in(sitting, "", "3.01", "2.57")
    assert "measure temperature, supply and reference again" in said[-1]
    assert sitting.prompt.startswith("room temperature in C [21.5]")
    type_in(sitting, "", "8.9", "4.45", "", "2.95", "2.5", "bench")
    assert on_disk(sitting).cell("J21", "supply") == "8.9"
    assert sitting.prompt.startswith("room temperature")


@pytest.mark.parametrize("wrong", ["warm", "215", "-80"])
def test_impossible_temperatures_are_asked_again(sitting, wrong):
    assert sitting.take(wrong)
    assert sitting.prompt.startswith("room temperature")


def test_drift_is_said_where_a_steady_reading_proves_nothing(sitting):
    # a21: near 0.63 V of overdrive the drain current's drift vanishes: 0.45 mA at 1 mA/V^2
    begin(sitting)
    said = type_in(sitting, "J01", "3.01", "2.57")
    assert any("does not prove" in sentence and "servo_10k" in sentence for sentence in said)
    said = type_in(sitting, "J02", "3.02", "2.58")
    assert not any("servo_10k" in sentence for sentence in said)


def test_readings_of_two_programs_are_joined(sitting):
    begin(sitting)
    type_in(sitting, "J01", "3.01", "2.57")
    other = load_tray(sitting.tray.path)
    other.with_cell("K01", "servo_10k", "2.9").write()
    said = type_in(sitting, "J02", "3.02")
    assert "another program" in said[0]
    assert on_disk(sitting).labels == ("J01", "K01", "J02")
