"""``curve`` through the program: plot, spreadsheet, limits, wrong input."""

import csv
import shutil
from pathlib import Path

import pytest
from sweepset.render.commands import main
from sweepset.render.spreadsheet import csv_text, safe_cell

SAMPLES = Path(__file__).resolve().parents[2] / "samples"


@pytest.fixture
def bench(tmp_path, monkeypatch):
    for name in ("tray_bench.csv", "tray_bench.fixture.toml"):
        shutil.copy(SAMPLES / name, tmp_path)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_plot_and_spreadsheet(bench, capsys):
    asked = ["curve", "--tray", "tray_bench.csv", "--parts", "J01,J02,J03"]
    assert main([*asked, "--plot", "a.svg", "--circuit", "heron", "--csv", "a.csv"]) == 0
    assert "sweep of heron" in Path("a.svg").read_text()
    with Path("a.csv").open() as stream:
        rows = list(csv.DictReader(stream))
    assert [row["part"] for row in rows] == ["J01", "J02", "J03"]
    assert all(float(row["cutoff_v"]) < 0 for row in rows)
    shown = capsys.readouterr().out
    assert "J02" in shown
    assert "J04" not in shown


def test_a_part_that_is_not_its_type_is_named(bench, capsys):
    text = Path("tray_bench.csv").read_text()
    head, rest = text.split("\n", 1)
    lines = [f"{head};type"] + [f"{line};J201" for line in rest.splitlines() if line]
    Path("tray_bench.csv").write_text("\n".join(lines) + "\n")
    assert main(["curve", "--tray", "tray_bench.csv", "--parts", "J01"]) == 0
    # c11: J201 ends at -1.5 V; the sample parts lie about -2 V
    told = capsys.readouterr().err
    assert "J01: " in told
    assert "is outside for a J201" in told


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--plot", "a.pdf"], "give a name ending in .png or .svg"),
        (["--circuit", "heron"], "give --plot too"),
        (["--parts", "J01,J99"], "J99"),
        (["--plot", "tray_bench.csv"], "is one of the files given"),
        (["--csv", "none/a.csv"], "does not exist"),
    ],
)
def test_wrong_input_is_refused(bench, capsys, arguments, said):
    before = {path.name: path.read_bytes() for path in bench.iterdir()}
    assert main(["curve", "--tray", "tray_bench.csv", *arguments]) == 2
    captured = capsys.readouterr()
    assert said in captured.err
    assert "Traceback" not in captured.err
    assert {path.name: path.read_bytes() for path in bench.iterdir()} == before


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@A1", "\tx"])
def test_cells_never_run_as_formulas(text):
    assert safe_cell(text) == "'" + text
    [_, cells] = csv.reader(csv_text([{"a": text}]).splitlines())
    assert cells == ["'" + text]


def test_a_cell_stays_one_line():
    [_, cells] = csv.reader(csv_text([{"a": "one\r\ntwo"}]).splitlines())
    assert cells == ["one  two"]


def test_numbers_stay_numbers():
    assert safe_cell(-2.125) == "-2.125"
    assert safe_cell(None) == ""
