"""``sweepset batch``: many takes from one plan."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..batch.run import Outlook

HELP = "render many takes from a plan; started again, it renders only what is missing"
EPILOG = """\
examples:
  sweepset batch plan.toml -o takes --count
  sweepset batch plan.toml -o takes
  sweepset batch plan.toml -o takes --only set=close --only rate=noon --page

A plan (TOML) names riffs, circuits and sets, and lists or ranges of settings:

  riffs = ["riff.wav"]                     files are looked for beside the plan
  circuits = ["heron"]
  tray = "tray.csv"
  trim = ["auto", "auto-3%", "auto+3%"]    or { from = "40%", to = "60%", steps = 9 }
  rate = ["9:00", "noon", "3:00"]
  sweep_resistor = ["3M9", "2M7"]
  temperature = [15, 27]
  supply = ["9 V", "8.4 V"]
  [sets]
  close = "J21,J38,J13,J35"

Every combination is a take. auto is solved once for each set, at the middle one of the
rates. Stop it when you like: finished takes stay, and are in index.csv and index.json.
"""
ASK_TAKES, ASK_BYTES = 50, 1_000_000_000
MOST_ON_PAGE = 40


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    parser.add_argument("plan", help="the plan file")
    parser.add_argument(
        "-o", "--out", metavar="FOLDER", required=True, help="the folder for takes and index"
    )
    parser.add_argument("--count", action="store_true", help="say what there is to do, and stop")
    parser.add_argument(
        "--only",
        metavar="COLUMN=VALUE",
        action="append",
        default=[],
        help="only these takes: riff, circuit, set, trim, rate, sweep, temperature or supply, as "
        "--count shows them; may be given several times",
    )
    parser.add_argument(
        "--yes",
        action="store_true",
        help=f"do not ask before more than {ASK_TAKES} takes or {ASK_BYTES / 1e9:g} GB",
    )
    parser.add_argument(
        "--workers", metavar="N", type=int, help="takes at a time (default: one per processor)"
    )
    parser.add_argument(
        "--page", action="store_true", help=f"also write a listening page (up to {MOST_ON_PAGE})"
    )
    parser.add_argument("--json", action="store_true", help="print the rows as JSON")


def run(args: argparse.Namespace) -> int:
    """Say what there is to do, ask, render, tell."""
    from pathlib import Path

    from ...models.errors import InputError
    from ..batch.run import Batch, chosen_takes
    from ..batch.takeplan import load_plan
    from ._screen import print_json, print_table, progress, say, warn

    if args.workers is not None and not 1 <= args.workers <= 256:
        raise InputError(f"--workers {args.workers}: expected 1 to 256")
    plan = load_plan(args.plan)
    takes = chosen_takes(plan, [_condition(text) for text in args.only])
    if args.page and len(takes) > MOST_ON_PAGE:
        raise InputError(
            f"--page: {len(takes)} takes; a page holds {MOST_ON_PAGE} at most: choose with --only"
        )
    batch = Batch(plan, args.out, takes)
    missing = batch.missing()
    outlook = batch.outlook(missing)
    if args.count:
        rows = [tuple(take.columns.values()) for take in takes]
        if args.json:
            print_json({"takes": [take.columns for take in takes], **vars(outlook)})
            return 0
        print_table("", tuple(takes[0].columns), rows)
        say(_outlook_text(outlook))
        return 0
    if not args.json:
        say(_outlook_text(outlook))
    if not _agreed(outlook, yes=args.yes):
        say("nothing rendered")
        return 0
    with progress() as tell:
        made = batch.run(workers=args.workers, progress=tell and _told(tell))
    warn([f"{row['file']}: {row['warnings']}" for row in made.rows if row["warnings"]])
    page = None
    if args.page:
        page = Path(args.out) / "listen.html"
        _write_page(made.rows, Path(args.out), page)
    if args.json:
        print_json({"rendered": made.rendered, "kept": made.kept, "takes": made.rows})
        return 0
    say(f"{made.rendered} takes rendered, {made.kept} were there already; see {args.out}/index.csv")
    if page is not None:
        say(f"open {page} in a browser")
    return 0


def _condition(text: str) -> tuple[str, str]:
    from ...models.errors import InputError

    column, equals, value = text.partition("=")
    if not equals:
        raise InputError(f"--only {text!r}: expected COLUMN=VALUE, for example set=close")
    return column.strip().casefold(), value.strip()


def _outlook_text(outlook: Outlook) -> str:
    seconds = outlook.seconds
    length = f"{seconds / 3600:.1f} h" if seconds >= 5400 else f"{seconds / 60:.1f} min"
    return (
        f"{outlook.takes} takes, {outlook.missing} of them to render: {length} of audio, "
        f"{outlook.size_bytes / 1e6:.0f} MB"
    )


def _agreed(outlook: Outlook, *, yes: bool) -> bool:
    """Ask before much is written."""
    from ...models.errors import InputError

    if yes or (outlook.missing <= ASK_TAKES and outlook.size_bytes <= ASK_BYTES):
        return True
    if not sys.stdin.isatty():
        raise InputError(f"{outlook.missing} takes to render: give --yes to do so unasked")
    return input("go on? [y/N] ").strip().casefold() in ("y", "yes")


def _told(tell: Callable[[str, float], None]) -> Callable[[int, int, float], None]:
    return lambda done, of, pace: tell(f"{done} of {of} takes, {pace:.2f} a second", done / of)


def _write_page(rows: Sequence[dict[str, Any]], folder: Any, page: Any) -> None:
    from ...models.atomic import write_text_atomically
    from ..batch.rowpage import page_of_rows
    from ..page.write import listening_page
    from ._cautions import CAUTIONS

    write_text_atomically(page, listening_page(page_of_rows(rows, folder, CAUTIONS[:1])))
