"""What commands put on the screen: tables, figures as JSON, progress."""

from __future__ import annotations

import json
import math
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any

# A bar for less than this would only flicker.
QUIET_S = 2.0


def print_table(title: str, columns: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """Print a table; the first column is text, the others stand to the right.

    Parameters
    ----------
    title : str
        Above it; may be empty.
    columns : sequence of str
        Headings.
    rows : sequence of sequence of str
        Cells.
    """
    from rich import box
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(title=title or None, box=box.ASCII2, title_justify="left", title_style="bold")
    for place, column in enumerate(columns):
        table.add_column(column, justify="left" if place == 0 else "right", overflow="fold")
    for row in rows:
        table.add_row(*(Text(cell) for cell in row))
    # Into a pipe or file the table gets the width it needs, not that of a terminal.
    width = None if sys.stdout.isatty() else 200
    Console(file=sys.stdout, width=width, highlight=False).print(table)


def print_json(record: Any) -> None:
    """Print a record as JSON; what is not a finite number becomes null."""
    print(json.dumps(_finite(record), indent=2, allow_nan=False))


def say(text: str = "") -> None:
    """Print a line for people; never wrapped or coloured, so that it can be copied."""
    print(text)


def warn(messages: Sequence[str]) -> None:
    """Print warnings to the standard error, each once."""
    for message in dict.fromkeys(messages):
        print(f"sweepset: warning: {message}", file=sys.stderr)


@contextmanager
def progress() -> Iterator[Callable[[str, float], None] | None]:
    """Give a function to be told what is being done and the share done; None off a terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    start = time.monotonic()
    bar = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
    )
    task = bar.add_task("", total=1.0)

    def tell(what: str, share: float) -> None:
        bar.update(task, description=what, completed=share)
        if not bar.live.is_started and time.monotonic() - start > QUIET_S:
            bar.start()

    try:
        yield tell
    finally:
        if bar.live.is_started:
            bar.stop()


def _finite(record: Any) -> Any:
    if isinstance(record, float):
        return record if math.isfinite(record) else None
    if isinstance(record, dict):
        return {key: _finite(value) for key, value in record.items()}
    if isinstance(record, list | tuple):
        return [_finite(value) for value in record]
    return record
