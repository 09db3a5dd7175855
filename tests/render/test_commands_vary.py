"""``vary`` and ``stock`` through the program."""

import csv
import json
from importlib.resources import files

import pytest
from sweepset.render.commands import main

PARTS = "--set=-2.35V/5.5mA,-2.32V/5.4mA"
WREN = ["--circuit", "wren", PARTS, "--draws", "200"]


@pytest.fixture(scope="module")
def bench_tray():
    return str(files("sweepset.samples") / "tray_bench.csv")


def test_tables_and_the_honest_answer(capsys):
    assert main(["vary", *WREN]) == 0
    shown = capsys.readouterr().out
    for words in ("stage capacitors", "share: travel", "Does matching better help here?", "9.45 V"):
        assert words in shown


def test_files_and_json(tmp_path, capsys, bench_tray):
    plot, table = tmp_path / "v.svg", tmp_path / "v.csv"
    asked = ["vary", "--circuit", "wren", "--tray", bench_tray, "--set", "J01,J02", "--json"]
    asked += ["--draws", "150", "--plot", str(plot), "--csv", str(table)]
    assert main(asked) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["draws"] == 150
    assert record["stagger_alone_octaves"]["readings"] > 0.0
    assert len(record["temperature"]) == 7
    assert plot.read_bytes().startswith(b"<?xml")
    rows = list(csv.reader(table.read_text().splitlines()))
    assert len(rows) == 151
    assert rows[0][:2] == ["unit", "stagger_octaves"]
    assert main(asked) == 2
    assert "exists already" in capsys.readouterr().err


def test_a_kept_trimmer_is_not_turned(capsys):
    assert main(["vary", *WREN, "--keep-trimmer", "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["figures"]["shift_v"]["deviation"] == 0.0


@pytest.mark.parametrize(
    ("option", "value", "said"),
    [
        ("--draws", "3", "--draws 3: expected 100"),
        ("--capacitors", "80%", "--capacitors 80%: expected"),
        ("--temperatures", "40:10", "--temperatures '40:10': expected the lower end first"),
        ("--temperatures", "warm", "LOW:HIGH"),
        ("--supplies", "1V:9V", "--supplies '1V:9V': expected"),
        ("--plot", "v.bmp", "PNG or SVG"),
    ],
)
def test_what_cannot_be_used_is_named(capsys, option, value, said):
    assert main(["vary", *WREN, option, value]) == 2
    assert said in capsys.readouterr().err


def test_stock_says_how_many(capsys, bench_tray):
    asked = ["stock", "--tray", bench_tray, "--circuit", "wren", "--sets", "2"]
    asked += ["--deliveries", "20", "--limit", "0.2"]
    assert main(asked) == 0
    shown = capsys.readouterr().out
    assert "For 2 more sets buy" in shown
    assert main([*asked, "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["by_confidence"]["0.5"] <= record["parts"]
    assert len(record["needed_by_delivery"]) == 20


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--sets", "0"], "--sets 0: expected 1"),
        (["--sets", "2", "--confidence", "99.9%"], "--confidence 99.9%: 60 simulated"),
        (["--sets", "2", "--deliveries", "2"], "--deliveries 2: expected 20"),
        (["--sets", "2", "--limit", "tight"], "--limit 'tight': not a number"),
    ],
)
def test_stock_names_what_it_cannot_use(capsys, bench_tray, options, said):
    assert main(["stock", "--tray", bench_tray, "--circuit", "wren", *options]) == 2
    assert said in capsys.readouterr().err
