"""``sweepset vary``: what tolerances, temperature and supply do to a set."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from . import _settings

if TYPE_CHECKING:
    from collections.abc import Callable

    from ...models.components import Tolerances
    from ...models.drift import DriftPoint
    from ..setup import Setup

HELP = "see what tolerances, readings, temperature and supply do to a set, and which matters"
EPILOG = """\
examples:
  sweepset vary --tray tray.csv --set J07,J12,J31,J40
  sweepset vary --tray tray.csv --set J07,J12,J31,J40 --capacitors 2% --plot vary.png
  sweepset vary --circuit wren --set=-2.10V/4.2mA,-2.12V/4.3mA --supplies 7V:9.6V --json

Every draw is one unit built from this set: values evenly within their tolerance, parts as
their readings leave them. Unless --keep-trimmer is given the trimmer is set again in each
unit until the sweep's middle lies where it was meant to. Shares are first-order (Sobol')
indices: the part of a figure's variance that one cause makes on its own.
"""
LEAST_POINTS, MOST_DRAWS = 7, 1_000_000


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    _settings.add_set_arguments(parser)
    _settings.add_rate_argument(parser)
    _settings.add_trim_argument(parser)
    _settings.add_celsius_argument(parser)
    for option, what, default in (
        ("--capacitors", "capacitors", "10%"),
        ("--resistors", "fixed resistors", "1%"),
        ("--tracks", "tracks of trimmer and rate knob", "20%"),
    ):
        parser.add_argument(
            option,
            metavar="PERCENT",
            default=default,
            help=f"tolerance of {what} (default: {default})".replace("%", "%%"),
        )
    parser.add_argument("--draws", type=int, default=10_000, help="units drawn (default: 10000)")
    parser.add_argument(
        "--keep-trimmer", action="store_true", help="leave the trimmer where it was solved"
    )
    parser.add_argument(
        "--temperatures",
        metavar="LOW:HIGH",
        default="10:40",
        help="channel temperatures in degrees Celsius (default: 10:40)",
    )
    parser.add_argument(
        "--supplies",
        metavar="LOW:HIGH",
        help="supply voltages (default: 80 to 105 per cent of the circuit's)",
    )
    _settings.add_json_argument(parser)
    parser.add_argument("--csv", metavar="FILE", help="also write all draws as a spreadsheet")
    parser.add_argument("--plot", metavar="FILE", help="also draw the figures (.png or .svg)")
    parser.add_argument("--overwrite", action="store_true", help="replace existing files")


def run(args: argparse.Namespace) -> int:
    """Draw the units and print what they are like."""
    from ...models.circuit import load_circuit
    from ...models.quantity import parse_rate, parse_trim
    from ...models.variation import vary_set
    from ..figures import figure_format, save_figure, variation_figure
    from ..setup import TakeSettings, set_up
    from ..spreadsheet import csv_text
    from . import _variation
    from ._files import new_file, write_new
    from ._screen import print_json, print_table, progress, say, warn
    from ._sets import read_set_with_errors

    for made in (args.plot, args.csv):
        if made is not None:
            new_file(made, [args.tray, args.fixture, args.circuit], overwrite=args.overwrite)
    if args.plot is not None:
        figure_format(args.plot)
    tolerances = _tolerances(args)
    circuit = load_circuit(args.circuit)
    jfets, parts = read_set_with_errors(_settings.only_set(args), args, circuit)
    settings = TakeSettings(
        circuit=circuit,
        jfets=jfets,
        trimmer=_settings.setting(parse_trim, args.trim, "--trim"),
        rate=_settings.setting(parse_rate, args.rate, "--rate"),
        celsius=_settings.quantity(args.celsius, "C", "--celsius"),
    )
    spans = _spans(args, circuit.supply.voltage_v)
    setup = set_up(settings)
    assert setup.bus is not None  # no trace was given
    if setup.bias is not None:
        warn(setup.bias.warnings)
    with progress() as tell:
        variation = vary_set(
            circuit,
            parts.like(setup.jfets),
            setup.bus,
            settings.rate,
            tolerances,
            draws=args.draws,
            reset=not args.keep_trimmer,
            progress=tell and (lambda share: tell("drawing units", share)),
        )
        by_celsius, by_supply = _sweeps(setup, spans, tell)
    if args.plot is not None:
        save_figure(variation_figure(variation, by_celsius, by_supply), args.plot)
    if args.csv is not None:
        write_new(args.csv, csv_text(_variation.draw_records(variation)))
    if args.json:
        print_json(_variation.variation_record(variation, tolerances, by_celsius, by_supply))
        return 0
    print_table("", _variation.SPREAD_COLUMNS, _variation.spread_rows(variation))
    print_table("", _variation.cause_columns(), _variation.cause_rows(variation))
    for sentence in _variation.sentences(variation, tolerances, jfets, reset=not args.keep_trimmer):
        say(sentence)
    print_table("", _variation.drift_columns("channel"), _variation.drift_rows(by_celsius, "C"))
    print_table("", _variation.drift_columns("supply"), _variation.drift_rows(by_supply, "V"))
    for made in (args.plot, args.csv):
        if made is not None:
            say(made)
    return 0


def _tolerances(args: argparse.Namespace) -> Tolerances:
    from ...models.components import Tolerances
    from ...models.errors import InputError
    from ...models.variation import LEAST_DRAWS

    if not LEAST_DRAWS <= args.draws <= MOST_DRAWS:
        raise InputError(f"--draws {args.draws}: expected {LEAST_DRAWS} to {MOST_DRAWS}")
    return Tolerances(
        resistor=_settings.quantity(args.resistors, "%", "--resistors", most=0.5),
        track=_settings.quantity(args.tracks, "%", "--tracks", most=0.5),
        capacitor=_settings.quantity(args.capacitors, "%", "--capacitors", most=0.5),
    )


def _spans(args: argparse.Namespace, supply_v: float) -> tuple[list[float], list[float]]:
    """Return the temperatures and the supplies to look at."""
    import numpy as np

    from ..setup import CELSIUS_RANGE

    celsius = _settings.span(args.temperatures, "C", "--temperatures", CELSIUS_RANGE)
    supply = (0.8 * supply_v, 1.05 * supply_v)
    if args.supplies is not None:
        supply = _settings.span(args.supplies, "V", "--supplies", (3.0, 60.0))
    return tuple(
        [round(float(value), 6) for value in np.linspace(*ends, LEAST_POINTS)]
        for ends in (celsius, supply)
    )  # type: ignore[return-value]


def _sweeps(
    setup: Setup,
    spans: tuple[list[float], list[float]],
    tell: Callable[[str, float], None] | None,
) -> tuple[list[DriftPoint], list[DriftPoint]]:
    from ...models.drift import sweep_supply, sweep_temperature

    assert setup.bus is not None
    asked = setup.settings
    if tell:
        tell("temperature and supply", 1.0)
    position = setup.bus.trimmer
    by_celsius = sweep_temperature(
        setup.circuit, asked.jfets, position, asked.rate, spans[0], asked.celsius
    )
    by_supply = sweep_supply(setup.circuit, setup.jfets, position, asked.rate, spans[1])
    return by_celsius, by_supply
