"""``sweepset demo``: the whole job on shipped data, into a folder."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from ._settings import DEFAULT_CIRCUIT

if TYPE_CHECKING:
    from ...models.choosing import SetFigures
    from ...models.circuit import Circuit
    from ...models.quantity import Setting
    from ..setup import TakeSettings

HELP = "do the whole job on shipped data and write what comes of it into a folder"
EPILOG = """\
examples:
  sweepset demo
  sweepset demo --riff strum --out demo-strum

From the shipped tray of 60 invented parts it picks a well-matched and a poorly matched
set, solves each set's bias, and renders a riff dry and through both sets at three positions
of the rate knob. The folder also gets the tray, the circuit file and the riff, to go on with.
"""

TRAY = "tray_bench.csv"
RATES = ("9:00", "noon", "3:00")
RIFFS = ("noise", "pluck", "strum")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    parser.add_argument(
        "-o",
        "--out",
        metavar="FOLDER",
        default="sweepset-demo",
        help="where to (default: sweepset-demo); files of an earlier demo there are replaced, "
        "no others",
    )
    parser.add_argument(
        "--riff",
        choices=RIFFS,
        default=RIFFS[0],
        help="shipped riff (default: noise, in which the notches are plainest)",
    )


def run(args: argparse.Namespace) -> int:
    """Choose, bias, render, tell."""
    from contextlib import ExitStack
    from importlib.resources import as_file, files
    from pathlib import Path

    from ...models.choosing import best_set, poor_set
    from ...models.circuit import load_circuit, shipped_circuits
    from ...models.cycle import Cycle, analyse_cycle
    from ...models.estimate import estimate_tray
    from ...models.gatebus import BusWave
    from ...models.quantity import parse_rate
    from ...models.tray import find_fixture, load_tray
    from ..audio import check_audio
    from ..audition import AuditionTake, file_names, render_audition
    from ..page.data import page_takes
    from ..page.write import listening_page
    from ..pairs import compare_pairs
    from ._demo_folder import DemoFolder
    from ._demo_summary import summary_text
    from ._page import PAGE_NAME, page_of
    from ._screen import progress, say, warn

    folder = DemoFolder(Path(args.out))
    with ExitStack() as stack:
        samples = stack.enter_context(as_file(files("sweepset.samples")))
        riff = samples / f"riff_{args.riff}.flac"
        tray = load_tray(samples / TRAY)
        circuit = load_circuit(DEFAULT_CIRCUIT)
        rates = [parse_rate(text) for text in RATES]
        middle = rates[len(rates) // 2]
        names = ["dry", *(f"{name} {text}" for name in ("matched", "mismatched") for text in RATES)]
        takes_to_be = [f"{name}.wav" for name in file_names([f"{riff.stem} {n}" for n in names])]
        folder.check(takes_to_be)
        tell = stack.enter_context(progress())
        if tell:
            tell("choosing sets", 0.0)
        estimate = estimate_tray(tray)
        matched = best_set(estimate, circuit, middle, labels=tray.free_labels).best
        mismatched = poor_set(
            estimate, circuit, middle, avoid=matched.labels, labels=tray.free_labels
        )
        sets = {"matched": matched, "mismatched": mismatched}
        takes = [AuditionTake("dry", _settings_of(circuit, matched, middle, dry=True))]
        takes += [
            AuditionTake(f"{name} {rate.text}", _settings_of(circuit, one, rate))
            for name, one in sets.items()
            for rate in rates
        ]
        made = render_audition(riff, folder.path, takes, overwrite=True, progress=tell)
        cycles: dict[str, list[tuple[str, BusWave, Cycle]]] = {name: [] for name in sets}
        for name, setup in zip(made.names, made.setups, strict=True):
            if setup is not None and setup.bus is not None:
                cycle = analyse_cycle(setup.circuit, setup.jfets, setup.bus)
                cycles[name.split()[0]].append((setup.settings.rate.text, setup.bus, cycle))
        seconds = check_audio(riff).duration_s
        if tell:
            tell("listening page", 1.0)
        pairs = compare_pairs(made, page_takes(made))
        page = listening_page(page_of(made, riff.name, [pair.as_page_pair() for pair in pairs]))
        folder.finish(
            made,
            texts={
                "summary.txt": summary_text(tray, circuit, sets, cycles, made, seconds),
                PAGE_NAME: page,
                f"circuit_{DEFAULT_CIRCUIT}.toml": shipped_circuits()[DEFAULT_CIRCUIT](),
            },
            copies=[tray.path, find_fixture(tray.path), riff],
        )
    warn([text for take in made.takes for text in take.warnings])
    for name, one in sets.items():
        say(
            f"{name}: {', '.join(one.labels)}; travel {one.bias.travel_octaves:.2f} octaves, "
            f"stagger {one.bias.stagger_octaves:.3f} octave, stall {100 * one.bias.stall:.0f} %"
        )
    say(f"{len(made.takes)} takes and a summary are in {folder.path.resolve()}")
    for take in made.takes:
        say(f"  {take.path.name}")
    say("  summary.txt (read this first)")
    say(f"  {PAGE_NAME} (open it in a browser: all takes in step, and a blind trial)")
    return 0


def _settings_of(
    circuit: Circuit, one: SetFigures, rate: Setting, *, dry: bool = False
) -> TakeSettings:
    """Return a take's settings, the trimmer where choosing the set has found it."""
    from ...models.quantity import Setting
    from ..setup import TakeSettings

    trimmer = Setting("auto, solved at noon", one.bias.position, None)
    return TakeSettings(circuit, one.jfets, trimmer, rate, dry=dry)
