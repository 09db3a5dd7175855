"""``sweepset log``: readings typed at the bench, each saved at once."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from ._sets import add_tray_arguments

if TYPE_CHECKING:
    from ...models.circuit import Circuit
    from ...models.sitting import Sitting
    from ...models.tray import Tray

SHOWN_EVERY = 4
QUICK_S = 2.0
HELP = "type readings at the bench, each saved before the next question"
EPILOG = """\
examples:
  sweepset log --tray tray.csv
  sweepset log --tray new.csv --fixture bench.fixture.toml --circuit my_unit.toml
  sweepset log --tray tray.csv < readings.txt

Type ? at any question for what can be typed. A tray that does not exist is begun. Each
line is on the disk before the next question: nothing but the line being typed can be lost.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    from . import _settings

    parser.epilog = EPILOG
    add_tray_arguments(parser, required=True)
    _settings.add_circuit_argument(parser)


def run(args: argparse.Namespace) -> int:
    """Ask, take and answer until the end."""
    import sys
    import time

    from ...models.circuit import load_circuit
    from ...models.sitting import Sitting
    from ...models.tray import load_tray
    from ._screen import say

    circuit = load_circuit(args.circuit)
    tray = _open(args)
    sitting = Sitting(tray, reload=lambda path: load_tray(path, args.fixture))
    for caution in tray.cautions:
        say(caution)
    say("type ? for what can be typed, end to stop")
    shown = sitting.parts_done
    quick = sys.stdin.isatty()
    while not sitting.ended:
        print(sitting.prompt, end="", flush=True)
        line = sys.stdin.readline()
        if not sys.stdin.isatty():
            say()
        for answer in sitting.take(line if line else "end"):
            say(answer)
        due = quick and sitting.parts_done - shown >= SHOWN_EVERY
        if sitting.wants_best or due:
            shown, begin = sitting.parts_done, time.monotonic()
            say(_best(sitting, circuit))
            # On a slow machine or a full tray only on request: nobody should wait for it.
            quick = quick and time.monotonic() - begin < QUICK_S
    return 0


def _open(args: argparse.Namespace) -> Tray:
    """Return the tray, begun if it is not there."""
    from pathlib import Path

    from ...models.atomic import check_target
    from ...models.fixture import load_fixture
    from ...models.tray import find_fixture, load_tray, new_tray

    path = Path(args.tray)
    if path.exists():
        return load_tray(path, args.fixture)
    check_target(path)
    fixture = load_fixture(args.fixture or find_fixture(path))
    return new_tray(path, fixture).write()


def _best(sitting: Sitting, circuit: Circuit) -> str:
    """Return the best set so far in a line."""
    from ...models.choosing import best_set
    from ...models.errors import InputError
    from ...models.estimate import estimate_tray
    from ...models.quantity import parse_rate

    tray = sitting.tray
    measured = [label for label in tray.free_labels if tray.part(label).readings]
    if len(measured) < circuit.stage_count:
        return f"{len(measured)} parts measured; {circuit.name} takes {circuit.stage_count}"
    try:
        best = best_set(estimate_tray(tray), circuit, parse_rate("noon"), labels=measured).best
    except InputError as fault:
        return "; ".join(fault.messages)
    return (
        f"best of {len(measured)} for {circuit.name}: {', '.join(best.labels)}; expected stagger "
        f"{best.expected_stagger_octaves:.3f} octave, travel {best.bias.travel_octaves:.2f} octaves"
    )
