"""Records as CSV for spreadsheets."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from typing import Any

# What a spreadsheet may take for a formula: such text gets an apostrophe, which it shows
# as text without it.
RISKY = ("=", "+", "-", "@", "\t")


def csv_text(records: Sequence[dict[str, Any]]) -> str:
    """Return flat records as CSV text: one row each, the first record's keys as heading.

    Parameters
    ----------
    records : sequence of dict
        Numbers are written with six digits; text that looks like a formula is made safe.
    """
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    if records:
        writer.writerow(list(records[0]))
    for record in records:
        writer.writerow([safe_cell(value) for value in record.values()])
    return out.getvalue()


def safe_cell(value: Any) -> str:
    """Return a value as a cell that no spreadsheet runs as a formula."""
    if value is None:
        return ""
    if isinstance(value, float):
        return f"{value:.6g}"
    if isinstance(value, list | tuple):
        value = "; ".join(str(one) for one in value)
    text = str(value).replace("\r", " ").replace("\n", " ")
    return f"'{text}" if text.startswith(RISKY) else text
