"""``sweepset trim``: where the bias trimmer goes for a set."""

from __future__ import annotations

import argparse

from . import _meter, _settings

HELP = "find a set's bias: trimmer position, test-point voltages, travel, stagger and stall"
EPILOG = """\
examples:
  sweepset trim --tray tray.csv --set J07,J12,J31,J40
  sweepset trim --circuit my_unit.toml --tray tray.csv --set J07,J12,J31,J40 --rate 9:00
  sweepset trim --tray tray.csv --set J07,J12,J31,J40 --meter "1 Mohm" --stall-limit 5%
  sweepset trim --set=-2.10V/4.2mA,-2.12V/4.3mA,-2.15V/4.3mA,-2.11V/4.2mA --trim 2.31V
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    _settings.add_set_arguments(parser)
    _settings.add_rate_argument(parser)
    _settings.add_trim_argument(parser)
    _settings.add_celsius_argument(parser)
    _settings.add_meter_argument(parser)
    parser.add_argument(
        "--tolerance",
        metavar="PERCENT",
        default="1%",
        help="tolerance of the fixed resistors (default: 1%%)",
    )
    parser.add_argument(
        "--stall-limit",
        metavar="PERCENT",
        help="also find the nearest E24 sweep resistor that brings stall within this",
    )
    _settings.add_json_argument(parser)
    parser.add_argument("--csv", metavar="FILE", help="also write the test points as a spreadsheet")
    parser.add_argument(
        "--plot",
        metavar="FILE",
        help="also draw notches and break frequencies (.png or .svg)",
    )
    parser.add_argument("--overwrite", action="store_true", help="replace existing files")


def run(args: argparse.Namespace) -> int:
    """Solve the bias and print it."""
    from ...models.circuit import load_circuit
    from ...models.components import Tolerances
    from ...models.cycle import analyse_cycle
    from ...models.quantity import parse_rate, parse_trim
    from ...models.sweepadvice import advise_sweep
    from ...models.testpoints import how_to_hold, measure_points
    from ..figures import cycle_figure, figure_format, save_figure
    from ..setup import TakeSettings, set_up
    from ..spreadsheet import csv_text
    from ._figures import bias_record, bias_rows
    from ._files import new_file, write_new
    from ._screen import print_json, print_table, progress, say, warn
    from ._sets import read_set

    for made in (args.plot, args.csv):
        if made is not None:
            new_file(made, [args.tray, args.fixture, args.circuit], overwrite=args.overwrite)
    if args.plot is not None:
        figure_format(args.plot)
    circuit = load_circuit(args.circuit)
    settings = TakeSettings(
        circuit=circuit,
        jfets=read_set(_settings.only_set(args), args, circuit),
        trimmer=_settings.setting(parse_trim, args.trim, "--trim"),
        rate=_settings.setting(parse_rate, args.rate, "--rate"),
        celsius=_settings.quantity(args.celsius, "C", "--celsius"),
    )
    setup = set_up(settings)
    assert setup.bus is not None  # no trace was given
    bias = setup.bias
    cycle = bias.cycle if bias else analyse_cycle(setup.circuit, setup.jfets, setup.bus)
    record = bias_record(setup.circuit, setup.jfets, setup.bus, cycle)
    rows = bias_rows(record)
    if bias is not None:
        record |= {
            "octaves_per_degree": bias.octaves_per_degree,
            "octaves_per_turn": bias.octaves_per_turn,
            "loss": bias.loss,
            "warnings": list(bias.warnings),
        }
        if setup.circuit.bus.trimmer.turns > 1:
            moved = f"{bias.octaves_per_turn:+.3f} octave per turn"
        else:
            moved = f"{bias.octaves_per_degree:+.3f} octave per degree"
        rows += [
            ("trimmer moves the sweep by", moved),
            ("short of a uniform set by", f"{100.0 * bias.loss:.0f} %"),
        ]
        warn(bias.warnings)
    points = measure_points(
        setup.circuit,
        setup.bus.trimmer,
        settings.rate,
        meter_ohm=_settings.meter_ohm(args),
        tolerances=Tolerances(
            resistor=_settings.quantity(args.tolerance, "%", "--tolerance", most=0.5)
        ),
    )
    hold = how_to_hold(setup.circuit)
    advice = None
    if args.stall_limit is not None:
        limit = _settings.quantity(args.stall_limit, "%", "--stall-limit", most=1.0)
        with progress() as tell:
            advice = advise_sweep(
                setup.circuit,
                setup.jfets,
                settings.rate,
                limit,
                tell and (lambda share: tell("trying sweep resistors", share)),
            )
    if args.plot is not None:
        save_figure(cycle_figure(cycle, settings.labels), args.plot)
    if args.csv is not None:
        write_new(args.csv, csv_text(_meter.point_records(points)))
    if args.json:
        record |= {"test_points": _meter.point_records(points), "hold": hold}
        if advice is not None:
            record["sweep_advice"] = _meter.sweep_record(advice)
        print_json(record)
        return 0
    print_table("", ("figure", "value"), rows)
    print_table("", _meter.POINT_COLUMNS, _meter.point_rows(points))
    for sentence in hold:
        say(sentence)
    if advice is not None:
        print_table("", _meter.SWEEP_COLUMNS, _meter.sweep_rows(advice))
        say(_meter.sweep_sentence(advice))
    for made in (args.plot, args.csv):
        if made is not None:
            say(made)
    return 0
