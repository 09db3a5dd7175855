"""The index of a batch: one row a take, kept so that a crash loses none.

Every finished take is first added as a line to a journal beside the index; the index
itself, as JSON and as CSV for spreadsheets, is written whole now and then and at the end.
Reading takes both together.
"""

from __future__ import annotations

import json
import math
import os
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from ...models.atomic import explain_write_fault, write_text_atomically
from ...models.errors import InputError
from ..spreadsheet import csv_text
from .task import Row

INDEX_JSON, INDEX_CSV, JOURNAL = "index.json", "index.csv", "index.journal"
FORMAT = "sweepset batch index 1"
MOST_BYTES = 200_000_000
NEEDED = ("key", "file", "file_sha256")


class BatchIndex:
    """The index in a folder.

    Parameters
    ----------
    folder : Path
        The batch's folder; need not exist.

    Raises
    ------
    InputError
        If what stands there under the index's name is no index, or damaged.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._rows: dict[str, Row] = {}
        path = folder / INDEX_JSON
        if path.exists():
            for row in _read_index(path):
                self._rows[row["key"]] = row
        for row in _read_journal(folder / JOURNAL):
            self._rows[row["key"]] = row

    def row(self, key: str) -> Row | None:
        """Return the row of a take, or None."""
        return self._rows.get(key)

    def rows(self) -> list[Row]:
        """Return all rows, those of earlier plans included."""
        return list(self._rows.values())

    def add(self, row: Row) -> None:
        """Add a finished take; on return its row is on the disk.

        Raises
        ------
        InputError
            If it cannot be written.
        """
        self._rows[row["key"]] = row
        path = self.folder / JOURNAL
        try:
            with path.open("ab") as stream:
                stream.write(_plain(row).encode() + b"\n")
                stream.flush()
                os.fsync(stream.fileno())
        except OSError as fault:
            raise explain_write_fault(fault, path) from None

    def write(self, keys: Sequence[str]) -> None:
        """Write the index whole: the plan's takes in its order, then those of earlier plans.

        Parameters
        ----------
        keys : sequence of str
            The plan's takes; those not rendered yet are left out.
        """
        current = [self._rows[key] for key in keys if key in self._rows]
        wanted = set(keys)
        earlier = [row for key, row in self._rows.items() if key not in wanted]
        text = json.dumps({"format": FORMAT, "rows": _finite(current), "earlier": _finite(earlier)},
                          indent=1, allow_nan=False)  # fmt: skip
        write_text_atomically(self.folder / INDEX_JSON, text + "\n")
        write_text_atomically(self.folder / INDEX_CSV, csv_text(current))
        # All of the journal is in the index now.
        (self.folder / JOURNAL).unlink(missing_ok=True)


def _read_index(path: Path) -> list[Row]:
    remedy = "move it away, or choose another folder; the takes themselves are not touched"
    try:
        if path.stat().st_size > MOST_BYTES:
            raise ValueError("too large")
        record = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError) as fault:
        raise InputError(f"{path}: cannot be read as an index ({fault}); {remedy}") from None
    if not isinstance(record, dict) or record.get("format") != FORMAT:
        raise InputError(f"{path}: not an index of a sweepset batch; {remedy}")
    rows = [*_list(record, "rows"), *_list(record, "earlier")]
    for number, row in enumerate(rows, start=1):
        if not _is_row(row):
            raise InputError(
                f"{path}: row {number} is damaged: it lacks one of {', '.join(NEEDED)}, or names "
                f"a file outside this folder; {remedy}"
            )
    return rows


def _read_journal(path: Path) -> Iterable[Row]:
    """Yield the journal's rows; a last line cut short by a crash is no row."""
    try:
        lines = path.read_bytes().splitlines()
    except FileNotFoundError:
        return
    except OSError as fault:
        raise InputError(f"{path}: cannot be read ({fault.strerror}); move it away") from None
    for line in lines:
        try:
            row = json.loads(line)
        except (ValueError, RecursionError):
            continue
        if _is_row(row):
            yield row


def _is_row(row: object) -> bool:
    if not isinstance(row, dict) or not all(isinstance(row.get(name), str) for name in NEEDED):
        return False
    # A name with a path in it would lead out of the folder.
    return Path(row["file"]).name == row["file"] and row["file"] not in ("", ".", "..")


def _list(record: dict[str, Any], name: str) -> list[Any]:
    found = record.get(name, [])
    return found if isinstance(found, list) else [None]


def _plain(row: Row) -> str:
    return json.dumps(_finite(row), allow_nan=False, separators=(",", ":"))


def _finite(value: Any) -> Any:
    """Return plain values; minus infinity (silence) and the like become null."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, dict):
        return {key: _finite(one) for key, one in value.items()}
    if isinstance(value, list):
        return [_finite(one) for one in value]
    return value
