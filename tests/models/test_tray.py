"""Trays as spreadsheets leave them; the csv module and plain text are the outside view."""

from __future__ import annotations

import csv
import io
import os
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from sweepset.models.errors import InputError
from sweepset.models.fixture import load_fixture
from sweepset.models.tray import Tray, find_fixture, load_tray, new_tray

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
reference = "50 %"
resistor = "100k"
meter = "0.5 % + 2 counts of 1 mV"

[reading.idss]
kind = "idss"
drain = "9"
meter = "1 % + 2 counts of 10 uA"

[reading.off]
kind = "cutoff"
drain = "9"
test_current = "1u"
meter = "0.5 %"
"""
TABLE = [
    ["part", "servo_10k", "servo_100k", "idss", "celsius", "note"],
    ["J01", "1.318", "0.964", "3.85", "21.5", "bent leg; re-bent, twice"],
    ["J02", "1.334", "", "", "", ""],
    ["J03", "", "", "", "", "soldered in"],
]


@pytest.fixture
def bench(tmp_path: Path) -> Path:
    (tmp_path / "fixture.toml").write_text(FIXTURE)
    return tmp_path


def put(bench: Path, text: str | bytes, name: str = "t.csv") -> Path:
    path = bench / name
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def faults(bench: Path, text: str | bytes) -> list[str]:
    path = put(bench, text)
    with pytest.raises(InputError) as caught:
        load_tray(path)
    return [m.removeprefix(f"{path}: ") for m in caught.value.messages]


def as_csv(delimiter: str, decimal: str, end: str, quoting: int) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, delimiter=delimiter, lineterminator=end, quoting=quoting)
    for row in TABLE:
        writer.writerow([c.replace(".", decimal) if c[:1].isdigit() else c for c in row])
    return stream.getvalue()


@pytest.mark.parametrize("bom", ["", "\ufeff"])
@pytest.mark.parametrize("delimiter", [";", ",", "\t"])
@pytest.mark.parametrize("decimal", [".", ","])
@pytest.mark.parametrize("end", ["\n", "\r\n"])
@pytest.mark.parametrize("quoting", [csv.QUOTE_MINIMAL, csv.QUOTE_ALL])
def test_every_way_of_writing_gives_the_same_tray(
    bench: Path, bom: str, delimiter: str, decimal: str, end: str, quoting: int
) -> None:
    text = bom + as_csv(delimiter, decimal, end, quoting)
    tray = load_tray(put(bench, text))
    assert tray.labels == ("J01", "J02", "J03")
    first = tray.part("J01")
    values = {name: m.value for name, m in first.readings.items()}
    assert values == pytest.approx({"servo_10k": 1.318, "servo_100k": 0.964, "idss": 3.85e-3})
    assert first.celsius == 21.5
    assert first.note == "bent leg; re-bent, twice"
    assert tray.part("J03").readings == {}
    # Written back it has the same cells, marks and line ends.
    before = list(csv.reader(io.StringIO(text.removeprefix(bom)), delimiter=delimiter))
    tray.write()
    raw = (bench / "t.csv").read_bytes().decode()
    assert raw.startswith("\ufeff") == bool(bom)
    after = io.StringIO(raw.removeprefix(bom), newline="")
    assert list(csv.reader(after, delimiter=delimiter)) == before
    assert raw.count("\r\n") == text.count("\r\n")


def test_blank_rows_empty_columns_and_a_separator_line(bench: Path) -> None:
    text = "sep=;\r\npart;servo_10k;;\r\n\r\n;;;\r\nJ01;1,3;;\r\n\r\n"
    tray = load_tray(put(bench, text))
    assert tray.part("J01").readings["servo_10k"].value == pytest.approx(1.3)
    tray.write()
    assert (bench / "t.csv").read_bytes() == text.encode()


cells = st.text(
    alphabet=st.characters(exclude_categories=["Cs"], exclude_characters="\0\ufeff"), max_size=12
)
# Numbers as a meter shows them; a row of the tray with unknown columns to either side.
volts = st.integers(60, 4500).map(lambda mv: f"{mv / 1000:.3f}")


@settings(
    max_examples=100, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    st.lists(st.tuples(volts, cells, cells), min_size=1, max_size=6),
    st.sampled_from([";", ",", "\t"]),
    st.sampled_from([".", ","]),
    st.sampled_from(["\n", "\r\n"]),
    st.sampled_from(["", "\ufeff"]),
)
def test_writing_loses_nothing(
    bench: Path,
    rows: list[tuple[str, str, str]],
    delimiter: str,
    decimal: str,
    end: str,
    bom: str,
) -> None:
    table = [["part", "servo_10k", "shelf", "note"]]
    table += [[f"J{n}", v.replace(".", decimal), a, b] for n, (v, a, b) in enumerate(rows)]
    stream = io.StringIO()
    writer = csv.writer(stream, delimiter=delimiter, lineterminator=end, quoting=csv.QUOTE_ALL)
    writer.writerows(table)
    path = put(bench, bom + stream.getvalue())
    # Every reading is understood, and one more is set on the first row.
    tray = load_tray(path)
    assert [p.readings["servo_10k"].value for p in tray.parts] == pytest.approx(
        [float(v) for v, _, _ in rows]
    )
    tray.with_cell("J0", "servo_100k", "0.961").write()
    raw = path.read_bytes().decode().removeprefix("\ufeff")
    found = list(csv.reader(io.StringIO(raw, newline=""), delimiter=delimiter))
    assert found[0] == [*table[0], "servo_100k"]
    assert [row[:4] for row in found[1:]] == table[1:]
    again = load_tray(path)
    assert again.part("J0").readings["servo_100k"].value == pytest.approx(0.961)
    assert [p.note for p in again.parts] == [b.strip() for _, _, b in rows]


def test_every_fault_is_reported_at_once_with_its_place(bench: Path) -> None:
    text = (
        "part;servo_10k;servo_100k;idss;celsius;supply\n"
        "J01;abc;0,9;3.8;21;\n"
        "J02;5.1;;;400;\n"
        "\n"
        "j01;1.2;-0.4;;;\n"
        ";1.3;;;;\n"
        "J05;1.318.2;;0;;\n"
        "J06;1.3;;;;8.8\n"
        "J07;nan;inf;;;\n"
        "J08;1.3;;;;;;x\n"
    )
    found = faults(bench, text)
    wanted = [
        "row 2, column servo_10k: 'abc'",
        "row 3, column celsius: '400': expected -40 to 125",
        "row 3, column servo_10k: '5.1': above the reference of 4.51 V: this part's Idss is below",
        "row 5, column servo_100k: '-0.4': expected 0 V or more",
        "row 5, column part: 'j01': row 2 has this label too",
        "row 6, column part: '': expected a label",
        "row 7, column servo_10k: '1.318.2': ",
        "row 7, column idss: '0': expected more than 0 and less than 1 A; a plain number is in mA",
        "row 8, column servo_10k: '1.3': a supply of its own (8.8 V) needs a reference",
        "row 9, column servo_10k: 'nan'",
        "row 9, column servo_100k: 'inf'",
        "row 10: 'x': 8 cells, but the header has 6; look for a stray separator",
    ]
    assert len(found) == len(wanted)
    for message, start in zip(found, wanted, strict=True):
        assert message.startswith(start)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (b"", "the file is empty"),
        (b"\n \n", "the file is empty"),
        (b"part;servo_10k\nJ\0;1\n", "not a text file"),
        (b"PK\x03\x04rest", "spreadsheet's own file; save the sheet as 'CSV UTF-8'"),
        ("part;servo_10k\n".encode("utf-16"), "UTF-16; save it as 'CSV UTF-8'"),
        (b"part;servo_10k;note\nJ1;1.2;\xb5A\n", "line 2: not UTF-8 (byte 0xb5)"),
        (b'part;servo_10k;note\nJ1;1.2;"bent\nJ2;1.3;\n', "look for a stray quote"),
        (b"name;servo_10k\nJ1;1.2\n", "first column is named 'part'"),
        (b"part;shelf\nJ1;A\n", "no column is named after a reading of the fixture"),
        (b"part;servo_10k;servo_10k\nJ1;1;1\n", "this name stands on two columns"),
        (b"part;servo_10k;\nJ1;1;1\n", "column 3: a column with content needs a name"),
        (b"part;servo_10k;servo_22k\nJ1;1;1.1\n", "servo_22k: the fixture does not describe it"),
        (b"part;servo_10k;idss.supply\nJ1;1;9\n", "idss.supply: the fixture does not describe"),
        (b"sep=|\npart|servo_10k\nJ1|1\n", "separator '|' is not known"),
        (b"part,servo_10k\nJ1,1,318\n", "a decimal comma needs quotes, or ; between the cells"),
        (b"part;servo_10k\nJ" + b"1" * 50 + b";1\n", "expected at most 40 characters"),
        (b'part;servo_10k\n"J1,J2";1\n', "expected a label without comma"),
        (b"part;servo_10k;note\nJ1;1;" + b"x" * 3000 + b"\n", "at most 2000 characters in a cell"),
        (b"part;servo_10k\nJ1;13.18\n", "below the supply of 9.02 V; look for a slipped decimal"),
    ],
)
def test_what_is_no_tray_is_refused(bench: Path, text: bytes, words: str) -> None:
    assert any(words in message for message in faults(bench, text))


def test_size_limit(bench: Path) -> None:
    assert "larger than 10 MB" in faults(bench, b"part;servo_10k\n" + b";\n" * 5_000_001)[0]


def test_missing_tray_and_folder(bench: Path) -> None:
    with pytest.raises(InputError, match="no such tray; check the name"):
        load_tray(bench / "none.csv")
    with pytest.raises(InputError, match="is a folder"):
        load_tray(bench)


def test_fixture_is_found_beside_the_tray(bench: Path) -> None:
    path = put(bench, "part;servo_10k\nJ1;1.2\n")
    assert find_fixture(path) == bench / "fixture.toml"
    own = bench / "t.fixture.toml"
    own.write_text(FIXTURE.replace("servo_10k", "other"))
    assert find_fixture(path) == own
    with pytest.raises(InputError, match=r"the fixture does not describe it"):
        load_tray(path)
    assert load_tray(path, bench / "fixture.toml").labels == ("J1",)


def test_no_fixture(tmp_path: Path) -> None:
    path = put(tmp_path, "part;servo_10k\nJ1;1.2\n")
    with pytest.raises(InputError, match=r"expected t\.fixture\.toml or fixture\.toml.*\[reading"):
        load_tray(path)


def test_unknown_label_names_near_ones(bench: Path) -> None:
    tray = load_tray(put(bench, as_csv(";", ".", "\n", csv.QUOTE_MINIMAL)))
    with pytest.raises(InputError, match=r"no part 'J91' on this tray; did you mean J01"):
        tray.part("J91")
    assert tray.part("j01").label == "J01"


def test_chosen_parts_with_all_faults(bench: Path) -> None:
    text = "part;servo_10k;used\nJ1;1.2;\nJ2;1.3;unit 7\nJ3;1.4;no\n"
    tray = load_tray(put(bench, text))
    assert tray.free_labels == ("J1", "J3")
    assert [p.label for p in tray.chosen(["J3", "J1"])] == ["J3", "J1"]
    with pytest.raises(InputError) as caught:
        tray.chosen(["J1", "J1", "J2", "K9"])
    text = str(caught.value)
    assert "part 'J1' is named twice" in text
    assert "row 3: part 'J2' is marked as used (unit 7)" in text
    assert "no part 'K9'" in text
    assert len(tray.chosen(["J2"], allow_used=True)) == 1


def test_sittings(bench: Path) -> None:
    text = (
        "part;servo_10k;servo_100k;celsius;supply;reference;servo_100k.celsius;servo_100k.supply\n"
        "J1;1.2;0.9;21;8.8;4.4;25;8.6\n"
        "J2;1.2;0.9;;;;;\n"
    )
    tray = load_tray(put(bench, text))
    ten, hundred = (tray.part("J1").readings[n].conditions for n in ("servo_10k", "servo_100k"))
    assert (ten.celsius, ten.supply_v, ten.reference_v) == (21.0, 8.8, 4.4)
    # A supply of the reading's own makes the row's reference stale: half of it again.
    assert (hundred.celsius, hundred.supply_v) == (25.0, 8.6)
    assert hundred.reference_v == pytest.approx(4.3)
    usual = tray.part("J2").readings["servo_10k"].conditions
    assert (usual.celsius, usual.supply_v, usual.reference_v) == (27.0, 9.02, 4.51)


def test_low_rail_is_kept_as_a_bound(bench: Path) -> None:
    tray = load_tray(put(bench, "part;servo_10k\nJ1;0.05\nJ2;1.0\n"))
    assert tray.part("J1").readings["servo_10k"].bound
    assert not tray.part("J2").readings["servo_10k"].bound


def test_cutoff_may_be_written_without_its_sign(bench: Path) -> None:
    tray = load_tray(put(bench, "part;off\nJ1;-2.1\nJ2;2.1\nJ3;2100 mV\n"))
    assert [p.readings["off"].value for p in tray.parts] == pytest.approx([-2.1, -2.1, -2.1])


def test_unknown_type_and_column_are_cautions(bench: Path) -> None:
    tray = load_tray(put(bench, "part;servo_10k;type;bin\nJ1;1.2;2N5468;3\n"))
    assert any("type '2N5468' has no shipped limits" in c and "2N5486" in c for c in tray.cautions)
    assert any("column bin is not described by the fixture; it is kept" in c for c in tray.cautions)


def test_a_refused_cell_changes_nothing(bench: Path) -> None:
    path = put(bench, "part;servo_10k\nJ1;1.2\n")
    tray = load_tray(path)
    with pytest.raises(InputError, match="row 2, column servo_10k: 'bad'"):
        tray.with_cell("J1", "servo_10k", "bad")
    assert tray.cell("J1", "servo_10k") == "1.2"
    assert path.read_text() == "part;servo_10k\nJ1;1.2\n"


def test_new_tray_grows_and_is_saved(bench: Path) -> None:
    path = bench / "new.csv"
    tray = new_tray(path, load_fixture(bench / "fixture.toml"), decimal=",")
    tray = tray.with_cell("J1", "servo_10k", "1.318").write()
    tray = tray.with_cell("J2", "servo_10k", "1.300").with_cell("J1", "note", "re-measured").write()
    assert path.read_text() == (
        "part;servo_10k;servo_100k;idss;off;celsius;used;note\n"
        "J1;1,318;;;;;;re-measured\n"
        "J2;1,300\n"
    )
    with pytest.raises(InputError, match="exists already"):
        new_tray(path, tray.fixture).write()


def test_readings_another_program_added_are_not_overwritten(bench: Path) -> None:
    path = put(bench, "part;servo_10k\nJ1;1.2\n")
    tray = load_tray(path).with_cell("J1", "servo_10k", "1.3")
    path.write_text("part;servo_10k\nJ1;1.2\nJ2;1.4\n")
    with pytest.raises(InputError, match=r"was changed by another program.*no reading is lost"):
        tray.write()
    assert "J2;1.4" in path.read_text()


def test_a_failed_write_leaves_the_tray(bench: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = put(bench, "part;servo_10k\nJ1;1.2\n")
    tray = load_tray(path).with_cell("J1", "servo_10k", "1.3")

    def full(handle: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(InputError, match="the disk is full"):
        tray.write()
    assert path.read_text() == "part;servo_10k\nJ1;1.2\n"
    assert sorted(p.name for p in bench.iterdir()) == ["fixture.toml", "t.csv"]


def test_trays_are_values(bench: Path) -> None:
    first = load_tray(put(bench, "part;servo_10k\nJ1;1.2\n"))
    second = first.with_cell("J9", "servo_10k", "1.5")
    assert isinstance(second, Tray)
    assert (first.labels, second.labels) == (("J1",), ("J1", "J9"))
