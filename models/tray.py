"""The tray: measured parts, one a row, in a CSV file that a spreadsheet may have touched.

The first column is ``part``; the others are the fixture's readings by name, and
``type``, ``celsius``, ``supply``, ``reference``, ``used`` and ``note``. A reading
taken in a sitting of its own may have ``READING.celsius``, ``READING.supply`` and
``READING.reference``, which go before the row's. Unknown columns are kept and not
looked at.

The file's text is kept cell by cell, so that writing it back changes nothing but
the cells that were set: no reading is lost, no number reformatted.
"""

from __future__ import annotations

import csv
import hashlib
import io
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from difflib import get_close_matches
from pathlib import Path
from typing import Literal, TypeVar

from .atomic import write_text_atomically
from .errors import InputError, near_names
from .fixture import (
    MAX_CELSIUS,
    MAX_SUPPLY_V,
    MIN_CELSIUS,
    MIN_SUPPLY_V,
    RESERVED_COLUMNS,
    SITTING_COLUMNS,
    Conditions,
    Fixture,
    Reading,
    load_fixture,
)
from .parttypes import find_type, near_types
from .quantity import parse_quantity

MAX_TRAY_BYTES = 10_000_000
LONGEST_LABEL = 40
LONGEST_CELL = 2_000
DELIMITERS = (";", "\t", ",")
# What people write for "no" where a part is free; anything else tells where it is used.
FREE_WORDS = ("", "no", "n", "0", "false", "free", "-")
_PLAIN_YES = ("x", "yes", "y", "1", "true", "used", "soldered")

_BOM = "\ufeff"
_SEPARATOR_LINE = re.compile(r"sep=(.)\s*", re.IGNORECASE)
_THOUSANDS = re.compile(r"[+-]?[0-9]{1,3}([.,][0-9]{3})+[.,][0-9]+|[+-]?[0-9]{1,3}(,[0-9]{3}){2,}")
_NUMBER = re.compile(r"\s*[+-]?[0-9]*[.,]?[0-9]+\s*")
# How near an unknown column's name must be to a known one to be taken for a slip.
_SLIP = 0.75

_T = TypeVar("_T")


@dataclass(frozen=True)
class Measured:
    """One reading of one part.

    Parameters
    ----------
    value : float
        As the meter showed it, volts or amperes.
    conditions : Conditions
        Of its sitting.
    bound : bool
        The op amp stood at its low rail: the true value is this or lower.
    """

    value: float
    conditions: Conditions
    bound: bool = False


@dataclass(frozen=True)
class TrayPart:
    """One row of the tray.

    Parameters
    ----------
    label : str
        The part's name.
    row : int
        Its row in the file, as a spreadsheet counts.
    readings : dict of str to Measured
        By reading; may be empty (an unknown part).
    celsius : float or None
        Temperature of the row; None where the file gives none [degrees Celsius].
    type_name : str
        What the part is said to be; may be empty.
    used : str
        Empty for a free part, else where it is used ("used" if not said).
    note : str
        What was noted.
    """

    label: str
    row: int
    readings: dict[str, Measured]
    celsius: float | None = None
    type_name: str = ""
    used: str = ""
    note: str = ""

    @property
    def free(self) -> bool:
        """Whether the part may go into a set."""
        return not self.used


@dataclass(frozen=True)
class _Text:
    """The file's text, cell by cell.

    `rows` holds every record including the header and blank ones.
    """

    rows: tuple[tuple[str, ...], ...]
    delimiter: str = ";"
    decimal: Literal[".", ","] = "."
    line_end: str = "\n"
    bom: bool = False
    separator_line: str = ""

    def written(self) -> str:
        """Return the file's content."""
        lines = [self.delimiter.join(self._quoted(cell) for cell in row) for row in self.rows]
        head = [self.separator_line] if self.separator_line else []
        return (_BOM if self.bom else "") + "".join(
            line + self.line_end for line in (*head, *lines)
        )

    def _quoted(self, cell: str) -> str:
        # The csv module leaves a lone carriage return unquoted in some versions, and
        # then reads it back as the end of the row.
        if any(mark in cell for mark in (self.delimiter, '"', "\r", "\n")):
            return '"' + cell.replace('"', '""') + '"'
        return cell


@dataclass(frozen=True)
class Tray:
    """Measured parts and the fixture they were measured in.

    Parameters
    ----------
    path : Path
        The file.
    fixture : Fixture
        The fixture its columns are named after.
    parts : tuple of TrayPart
        In the file's order.
    cautions : tuple of str
        What the user should know but need not mend.
    """

    path: Path
    fixture: Fixture
    parts: tuple[TrayPart, ...]
    cautions: tuple[str, ...] = ()
    _text: _Text = field(default_factory=lambda: _Text(()), repr=False)
    _digest: str = field(default="", repr=False)

    @property
    def labels(self) -> tuple[str, ...]:
        """All labels, in the file's order."""
        return tuple(part.label for part in self.parts)

    @property
    def free_labels(self) -> tuple[str, ...]:
        """Labels of the parts not marked as used."""
        return tuple(part.label for part in self.parts if part.free)

    def part(self, label: str) -> TrayPart:
        """Return the part of this label; capitals do not matter.

        Raises
        ------
        InputError
            If there is none; near ones are named.
        """
        for part in self.parts:
            if part.label == label:
                return part
        folded = label.strip().casefold()
        for part in self.parts:
            if part.label.casefold() == folded:
                return part
        raise InputError(
            f"{self.path}: no part {label!r} on this tray{near_names(label, self.labels)}"
        )

    def chosen(self, labels: Sequence[str], *, allow_used: bool = False) -> tuple[TrayPart, ...]:
        """Return the parts of these labels; all faults are reported at once.

        Raises
        ------
        InputError
            If a label is unknown, given twice, or marked as used (unless allowed).
        """
        found: list[TrayPart] = []
        faults: list[str] = []
        for label in labels:
            try:
                part = self.part(label)
            except InputError as fault:
                faults += fault.messages
                continue
            if part in found:
                faults.append(
                    f"{self.path}: part {part.label!r} is named twice; a part sits in one stage"
                )
            elif part.used and not allow_used:
                faults.append(
                    f"{self.path}: row {part.row}: part {part.label!r} is marked as used "
                    f"({part.used}); choose another or clear its 'used' cell"
                )
            found.append(part)
        if faults:
            raise InputError(faults)
        return tuple(found)

    def cell(self, label: str, column: str) -> str:
        """Return a cell's text as it stands in the file; empty where there is no such column."""
        index = _column_index(self._text, column)
        row = self._text.rows[self.part(label).row - 1]
        return row[index] if index is not None and index < len(row) else ""

    def with_cell(self, label: str, column: str, text: str) -> Tray:
        """Return the tray with one cell set; a new label adds a row, a new column a column.

        Parameters
        ----------
        label : str
            The part.
        column : str
            The column's name.
        text : str
            The new content. A number with a decimal point gets the file's decimal mark.

        Raises
        ------
        InputError
            If the tray would then have faults; the tray itself is not changed.
        """
        content = self._text
        rows = [list(row) for row in content.rows]
        index = _column_index(content, column)
        if index is None:
            header = rows[_header_place(rows)]
            while header and not header[-1].strip():
                header.pop()
            index = len(header)
            header.append(column)
        try:
            place = self.part(label).row - 1
        except InputError:
            # New rows go after the last part, before blank rows at the end.
            place = max((part.row for part in self.parts), default=_header_place(rows) + 1)
            rows.insert(place, [label])
        if content.decimal == "," and _NUMBER.fullmatch(text):
            text = text.replace(".", ",")
        cells = rows[place]
        cells += [""] * (index + 1 - len(cells))
        cells[index] = text
        changed = replace(content, rows=tuple(tuple(row) for row in rows))
        return _understood(self.path, self.fixture, changed, self._digest)

    def put_back(self, earlier: Tray) -> Tray:
        """Return an earlier state of this tray, to be written over the present one."""
        return replace(earlier, path=self.path, _digest=self._digest)

    def write(self, path: str | Path | None = None) -> Tray:
        """Write the tray, whole or not at all, and return it as it now is on the disk.

        Parameters
        ----------
        path : str or Path, optional
            Where to; the file it was read from when left out.

        Raises
        ------
        InputError
            If it cannot be written, or if the file has been changed by another
            program since it was read: its readings would be lost.
        """
        target = self.path if path is None else Path(path)
        if target.exists() and target.is_file():
            if target.resolve() != self.path.resolve() or not self._digest:
                raise InputError(f"{target}: exists already; choose another name")
            if hashlib.sha256(target.read_bytes()).hexdigest() != self._digest:
                raise InputError(
                    f"{target}: was changed by another program since it was read; close it there "
                    "and start again, so that no reading is lost"
                )
        text = self._text.written()
        write_text_atomically(target, text)
        digest = hashlib.sha256(text.encode("utf-8")).hexdigest()
        return replace(self, path=target, _digest=digest)


def new_tray(
    path: str | Path, fixture: Fixture, *, delimiter: str = ";", decimal: Literal[".", ","] = "."
) -> Tray:
    """Return an empty tray for a fixture, not yet written.

    Parameters
    ----------
    path : str or Path
        Where it will be written.
    fixture : Fixture
        Gives the columns.
    delimiter, decimal : str
        How it will be written.
    """
    header = ("part", *fixture.readings, "celsius", "used", "note")
    return Tray(Path(path), fixture, (), (), _Text((header,), delimiter, decimal))


def find_fixture(path: str | Path) -> Path:
    """Return the fixture file beside a tray: ``TRAY.fixture.toml``, else ``fixture.toml``.

    Raises
    ------
    InputError
        If there is neither.
    """
    path = Path(path)
    own = path.with_name(path.stem + ".fixture.toml")
    common = path.with_name("fixture.toml")
    for candidate in (own, common):
        if candidate.is_file():
            return candidate
    raise InputError(
        f"{path}: no fixture file beside it; expected {own.name} or {common.name}, or give one. It "
        'describes each reading: [reading.servo_10k] with kind = "servo", supply = "9.02", '
        'reference = "4.51", resistor = "10k", meter = "0.5 % + 2 counts of 1 mV"'
    )


def load_tray(path: str | Path, fixture_path: str | Path | None = None) -> Tray:
    """Return the tray in a CSV file.

    Parameters
    ----------
    path : str or Path
        The tray.
    fixture_path : str or Path, optional
        The fixture; looked for beside the tray when left out (:func:`find_fixture`).

    Raises
    ------
    InputError
        If either cannot be read, with every fault found: file, row, column, value,
        what was expected.
    """
    path = Path(path)
    raw = _read_bytes(path)
    content = _split(path, raw)
    fixture = load_fixture(find_fixture(path) if fixture_path is None else fixture_path)
    return _understood(path, fixture, content, hashlib.sha256(raw).hexdigest())


def _read_bytes(path: Path) -> bytes:
    try:
        with path.open("rb") as stream:
            raw = stream.read(MAX_TRAY_BYTES + 1)
    except FileNotFoundError:
        raise InputError(f"{path}: no such tray; check the name") from None
    except IsADirectoryError:
        raise InputError(f"{path}: is a folder; give a tray file (CSV)") from None
    except OSError as fault:
        raise InputError(f"{path}: cannot read this tray: {fault.strerror}") from None
    if len(raw) > MAX_TRAY_BYTES:
        raise InputError(f"{path}: larger than 10 MB, so not a tray; give the right file")
    return raw


def _split(path: Path, raw: bytes) -> _Text:
    """Return a file's cells, with how it was written."""
    if raw[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise InputError(f"{path}: written as UTF-16; save it as 'CSV UTF-8'")
    if raw[:4] == b"PK\x03\x04" or raw[:4] == b"\xd0\xcf\x11\xe0":
        raise InputError(f"{path}: is a spreadsheet's own file; save the sheet as 'CSV UTF-8'")
    if b"\0" in raw:
        raise InputError(f"{path}: not a text file; expected a tray (CSV)")
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as fault:
        row = raw[: fault.start].count(b"\n") + 1
        raise InputError(
            f"{path}: line {row}: not UTF-8 (byte {raw[fault.start]:#04x}); save it as 'CSV UTF-8'"
        ) from None
    bom = text.startswith(_BOM)
    text = text.removeprefix(_BOM)
    if not text.strip():
        raise InputError(f"{path}: the file is empty; expected a tray with a header row")
    first, end, rest = _first_line(text)
    separator_line, delimiter = "", None
    told = _SEPARATOR_LINE.fullmatch(first)
    if told is not None:
        separator_line, delimiter, text = first, told[1], rest
        if delimiter not in DELIMITERS:
            raise InputError(
                f"{path}: row 1: separator {delimiter!r} is not known; expected ; or , or tab"
            )
    if delimiter is None:
        delimiter = _delimiter_of(text)
    # Strict: a stray quote must not swallow the rows after it in silence.
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    try:
        rows = tuple(tuple(row) for row in reader)
    except csv.Error as fault:
        raise InputError(
            f"{path}: line {reader.line_num}: cannot be read as CSV: {fault}; look for a stray "
            'quote; one inside a cell is written "" within quotes'
        ) from None
    return _Text(rows, delimiter, _decimal_of(rows, delimiter), end or "\n", bom, separator_line)


def _first_line(text: str) -> tuple[str, str, str]:
    found = re.search(r"\r\n|\n|\r", text)
    if found is None:
        return text, "", ""
    return text[: found.start()], found[0], text[found.end() :]


def _delimiter_of(text: str) -> str:
    """Return the delimiter the header row uses most; the first row that is not blank."""
    header = next((line for line in text.splitlines() if line.strip(" \t;,")), "")
    unquoted = re.sub(r'"[^"]*"', "", header)
    counts = {mark: unquoted.count(mark) for mark in DELIMITERS}
    best = max(DELIMITERS, key=lambda mark: counts[mark])
    return best if counts[best] else ";"


def _decimal_of(rows: Sequence[Sequence[str]], delimiter: str) -> Literal[".", ","]:
    """Return the decimal mark most numbers of the file have; a point where none tells."""
    commas = points = 0
    for row in rows:
        for cell in row[1:]:
            if _NUMBER.fullmatch(cell):
                commas += "," in cell
                points += "." in cell
    if commas == points == 0:
        return "."
    return "," if commas > points else "."


def _header_place(rows: Sequence[Sequence[str]]) -> int:
    return next(n for n, row in enumerate(rows) if any(cell.strip() for cell in row))


def _column_index(content: _Text, column: str) -> int | None:
    header = content.rows[_header_place(content.rows)]
    for index, name in enumerate(header):
        if name.strip().casefold() == column.casefold():
            return index
    return None


class _Faults:
    """Collects messages, each with its place."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.messages: list[str] = []

    def add(self, row: int, column: str | None, value: str | None, expected: str) -> None:
        place = f"row {row}" + ("" if column is None else f", column {column}")
        shown = "" if value is None else f" {_short(value)}:"
        self.messages.append(f"{self.path}: {place}:{shown} {expected}")


def _short(value: str) -> str:
    return repr(value if len(value) <= 60 else value[:57] + "...")


def _understood(path: Path, fixture: Fixture, content: _Text, digest: str) -> Tray:
    """Return the tray that a file's cells describe, or all their faults."""
    faults = _Faults(path)
    cautions: list[str] = []
    # A separator line is a row of its own in the file, but not in a spreadsheet.
    header_place = _header_place(content.rows)
    columns = _columns(
        content.rows[header_place], header_place + 1, fixture, content, faults, cautions
    )
    parts: list[TrayPart] = []
    seen: dict[str, TrayPart] = {}
    if columns is not None:
        for place in range(header_place + 1, len(content.rows)):
            row = content.rows[place]
            if not any(cell.strip() for cell in row):
                continue
            part = _part(row, place + 1, columns, fixture, content, faults)
            if part is None:
                continue
            earlier = seen.get(part.label.casefold())
            if earlier is not None:
                faults.add(
                    part.row,
                    "part",
                    part.label,
                    f"row {earlier.row} has this label too; each part needs a label of its own",
                )
                continue
            seen[part.label.casefold()] = part
            parts.append(part)
    if faults.messages:
        raise InputError(faults.messages)
    types = dict.fromkeys(part.type_name for part in parts if part.type_name)
    cautions += [
        f"{path}: type {name!r} has no shipped limits; the general assumption is used"
        + near_types(name)
        for name in types
        if find_type(name) is None
    ]
    return Tray(path, fixture, tuple(parts), tuple(cautions), content, digest)


def _columns(
    header: Sequence[str],
    row: int,
    fixture: Fixture,
    content: _Text,
    faults: _Faults,
    cautions: list[str],
) -> dict[str, int] | None:
    """Return where each known column stands, or None if the header cannot be used."""
    known = {name.casefold(): name for name in (*RESERVED_COLUMNS, *fixture.readings)}
    for name, reading in fixture.readings.items():
        for tail in _sitting_columns(reading):
            known[f"{name}.{tail}".casefold()] = f"{name}.{tail}"
    before = len(faults.messages)
    places: dict[str, int] = {}
    if header[0].strip().casefold() != "part":
        faults.add(
            row,
            None,
            header[0],
            "expected a header row whose first column is named 'part'; the others are named after "
            f"the fixture's readings ({', '.join(fixture.readings)})",
        )
        return None
    names: dict[str, int] = {}
    for index, cell in enumerate(header):
        name = cell.strip()
        if not name:
            if any(index < len(r) and r[index].strip() for r in content.rows):
                faults.add(row, f"{index + 1}", None, "a column with content needs a name")
            continue
        if len(name) > LONGEST_CELL:
            faults.add(row, f"{index + 1}", name, "the column's name is too long")
            continue
        if name.casefold() in names:
            faults.add(row, name, None, "this name stands on two columns; rename one")
            continue
        names[name.casefold()] = index
        if name.casefold() in known:
            places[known[name.casefold()]] = index
        else:
            _question_column(name, index, row, list(known.values()), content, faults, cautions)
    if not set(places) & set(fixture.readings) and len(faults.messages) == before:
        others = [name for name in header[1:] if name.strip()]
        faults.add(
            row,
            None,
            None,
            "no column is named after a reading of the fixture "
            f"({', '.join(fixture.readings)}); found {', '.join(others) or 'none but part'}",
        )
    return places


def _question_column(
    name: str,
    index: int,
    row: int,
    known: list[str],
    content: _Text,
    faults: _Faults,
    cautions: list[str],
) -> None:
    """Report an unknown column of numbers: a slip if its name is nearly a known one."""
    below = content.rows[_header_place(content.rows) + 1 :]
    cells = [r[index].strip() for r in below if index < len(r) and r[index].strip()]
    if not cells or not all(_NUMBER.fullmatch(cell) for cell in cells):
        return
    near = get_close_matches(name.casefold(), [k.casefold() for k in known], n=1, cutoff=_SLIP)
    head, _, tail = name.casefold().rpartition(".")
    if near or (tail in SITTING_COLUMNS and head):
        faults.add(
            row,
            name,
            None,
            f"the fixture does not describe it{near_names(name, known) or ';'} rename the column, "
            "or describe it in the fixture file",
        )
    else:
        cautions.append(
            f"{faults.path}: column {name} is not described by the fixture; it is kept, not used"
        )


def _sitting_columns(reading: Reading) -> Iterator[str]:
    yield "celsius"
    if reading.has_supply:
        yield "supply"
    if reading.has_reference:
        yield "reference"


def _part(
    row: Sequence[str],
    number: int,
    columns: dict[str, int],
    fixture: Fixture,
    content: _Text,
    faults: _Faults,
) -> TrayPart | None:
    """Return one row's part, or None after reporting what is wrong with it."""
    before = len(faults.messages)
    header_width = len(content.rows[_header_place(content.rows)])
    extra = [cell for cell in row[header_width:] if cell.strip()]
    if extra:
        faults.add(
            number,
            None,
            extra[0],
            f"{len(row)} cells, but the header has {header_width}; "
            + (
                "a decimal comma needs quotes, or ; between the cells"
                if content.delimiter == ","
                else "look for a stray separator"
            ),
        )
        return None
    for index, cell in enumerate(row):
        if len(cell) > LONGEST_CELL:
            faults.add(
                number,
                f"{index + 1}",
                cell,
                f"expected at most {LONGEST_CELL} characters in a cell",
            )

    def text(column: str) -> str:
        index = columns.get(column)
        return row[index].strip() if index is not None and index < len(row) else ""

    label = text("part")
    _check_label(label, number, faults)

    def quantity(column: str, unit: str, low: float, high: float, example: str) -> float | None:
        cell = text(column)
        if not cell:
            return None
        try:
            value = parse_quantity(_pointed(cell), unit)
        except ValueError as fault:
            faults.add(number, column, cell, str(fault))
            return None
        if not low <= value <= high:
            faults.add(
                number, column, cell, f"expected {low:g} to {high:g}, for example {example!r}"
            )
            return None
        return value

    def sitting(prefix: str) -> dict[str, float | None]:
        return {
            "celsius": quantity(f"{prefix}celsius", "C", MIN_CELSIUS, MAX_CELSIUS, "21.5"),
            "supply_v": quantity(f"{prefix}supply", "V", MIN_SUPPLY_V, MAX_SUPPLY_V, "9.02"),
            "reference_v": quantity(f"{prefix}reference", "V", 0.1, MAX_SUPPLY_V, "4.51"),
        }

    of_row = sitting("")
    readings: dict[str, Measured] = {}
    for name, reading in fixture.readings.items():
        cell = text(name)
        own = sitting(f"{name}.")
        if not cell:
            continue
        merged = {key: of_row[key] if value is None else value for key, value in own.items()}
        if not reading.has_supply:
            merged["supply_v"] = None
        if not reading.has_reference:
            merged["reference_v"] = None
        # A supply of the reading's own makes the row's reference stale.
        if own["supply_v"] is not None and own["reference_v"] is None:
            merged["reference_v"] = None
        celsius = fixture.celsius if merged["celsius"] is None else merged["celsius"]
        try:
            conditions = reading.conditions(celsius, merged["supply_v"], merged["reference_v"])
        except ValueError as fault:
            faults.add(number, name, cell, str(fault))
            continue
        try:
            value = reading.parse(_pointed(cell))
            bound = reading.check(value, conditions)
        except ValueError as fault:
            faults.add(number, name, cell, str(fault))
            continue
        readings[name] = Measured(value, conditions, bound)
    used = text("used")
    if used.casefold() in FREE_WORDS:
        used = ""
    elif used.casefold() in _PLAIN_YES:
        used = "used"
    if len(faults.messages) > before:
        # Its label still counts, so that duplicates are found in the same run.
        return TrayPart(label, number, {}) if label else None
    return TrayPart(label, number, readings, of_row["celsius"], text("type"), used, text("note"))


def _check_label(label: str, number: int, faults: _Faults) -> None:
    if not label:
        faults.add(number, "part", "", "expected a label; each part needs one")
    elif len(label) > LONGEST_LABEL:
        faults.add(number, "part", label, f"expected at most {LONGEST_LABEL} characters")
    elif re.search(r"[,;\x00-\x1f\x7f]", label):
        faults.add(
            number,
            "part",
            label,
            "expected a label without comma, semicolon or line break",
        )


def _pointed(cell: str) -> str:
    """Return a cell's number with a decimal point.

    Raises
    ------
    ValueError
        If it has both marks, or several, as with thousands.
    """
    if _THOUSANDS.fullmatch(cell.strip()) or ("," in cell and "." in cell) or cell.count(",") > 1:
        raise ValueError("expected one decimal mark and none for thousands")
    return cell.replace(",", ".")
