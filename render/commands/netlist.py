"""``sweepset netlist``: a circuit with a set as a SPICE netlist."""

from __future__ import annotations

import argparse

from . import _settings

HELP = "write a circuit with a set as a SPICE netlist"
EPILOG = """\
examples:
  sweepset netlist --tray tray.csv --set J07,J12,J31,J40 -o unit.cir
  sweepset netlist --circuit wren --set=-2.1V/4.2mA,-2.1V/4.3mA > wren.cir
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    parser.add_argument("-o", "--out", metavar="FILE", help="the netlist (default: on the screen)")
    parser.add_argument("--overwrite", action="store_true", help="replace an existing netlist")
    parser.add_argument(
        "--gate-conduction",
        action="store_true",
        help="model the gate junctions' conduction, which sweepset only counts",
    )
    _settings.add_set_arguments(parser)
    _settings.add_rate_argument(parser)
    _settings.add_trim_argument(parser)
    _settings.add_celsius_argument(parser)


def run(args: argparse.Namespace) -> int:
    """Write the netlist."""
    from ...models.circuit import load_circuit
    from ...models.netlist import write_netlist
    from ...models.quantity import parse_rate, parse_trim
    from ..setup import TakeSettings, set_up
    from ._files import new_file, write_new
    from ._screen import say
    from ._sets import read_set

    circuit = load_circuit(args.circuit)
    if args.out is not None:
        new_file(args.out, (args.circuit, args.tray, args.fixture), overwrite=args.overwrite)
    setup = set_up(
        TakeSettings(
            circuit=circuit,
            jfets=read_set(_settings.only_set(args), args, circuit),
            trimmer=_settings.setting(parse_trim, args.trim, "--trim"),
            rate=_settings.setting(parse_rate, args.rate, "--rate"),
            celsius=_settings.quantity(args.celsius, "C", "--celsius"),
        )
    )
    text = write_netlist(
        setup.circuit, setup.jfets, bus=setup.bus, gate_conduction=args.gate_conduction
    )
    if args.out is None:
        print(text, end="" if text.endswith("\n") else "\n")
    else:
        write_new(args.out, text)
        say(args.out)
    return 0
