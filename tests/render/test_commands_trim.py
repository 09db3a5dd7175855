"""``trim``'s test points and sweep-resistor advice through the program."""

import json

import pytest
from sweepset.render.commands import main

PARTS = "--set=-2.35V/5.5mA,-2.32V/5.4mA,-2.16V/4.7mA,-2.07V/4.3mA"


def test_table_shows_points_and_how_to_hold(capsys):
    assert main(["trim", PARTS, "--meter", "1 Mohm"]) == 0
    shown = capsys.readouterr().out
    assert "gate bus, oscillator held" in shown
    assert "trimmer wiper, mean" in shown
    assert "bridge the timing capacitor" in shown


def test_json_holds_points_and_advice(capsys):
    assert main(["trim", PARTS, "--stall-limit", "10%", "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["test_points"][0]["source_ohm"] == 0.0
    assert record["hold"]
    advice = record["sweep_advice"]
    assert advice["found_ohm"] > 2.7e6
    assert advice["tried"][-1]["stall"] <= 0.1
    assert record["stall"] > 0.1


def test_advice_is_a_sentence(capsys):
    assert main(["trim", PARTS, "--stall-limit", "10%"]) == 0
    assert "nearest E24 value" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("option", "value", "said"),
    [
        ("--meter", "0 ohm", "--meter 0 ohm: expected more than"),
        ("--meter", "10 nF", "--meter: "),
        ("--tolerance", "90%", "--tolerance 90%: expected"),
        ("--stall-limit", "150%", "--stall-limit 150%: expected"),
        ("--stall-limit", "some", "--stall-limit: "),
    ],
)
def test_wrong_values_are_refused(capsys, option, value, said):
    assert main(["trim", PARTS, f"{option}={value}"]) == 2
    captured = capsys.readouterr()
    assert said in captured.err
    assert "Traceback" not in captured.err
    assert captured.out == ""


def test_spreadsheet_and_picture(tmp_path, capsys):
    table, plot = tmp_path / "points.csv", tmp_path / "cycle.png"
    asked = ["trim", PARTS, "--csv", str(table), "--plot", str(plot)]
    assert main(asked) == 0
    assert "cycle.png" in capsys.readouterr().out
    head, first = table.read_text().splitlines()[:2]
    assert head.startswith("name,true_v")
    assert first.startswith("supply,9,")
    assert plot.read_bytes().startswith(b"\x89PNG")
    assert main(asked) == 2
    assert "exists already" in capsys.readouterr().err
