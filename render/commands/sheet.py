"""``sweepset sheet``: the build sheet of a set."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from . import _settings

if TYPE_CHECKING:
    from ...models.jfet import Jfet
    from ...models.tray import Tray
    from ..sheet import SocketLine

HELP = "write a set's build sheet: sockets, trimmer, test points, predicted sweep, cautions"
EPILOG = """\
examples:
  sweepset sheet --tray tray.csv --set J07,J12,J31,J40 -o sheet.html
  sweepset sheet --circuit my_unit.toml --tray tray.csv --set J07,J12,J31,J40 \\
    --spares J13,J35 -o sheet.html

One page, for A4 or Letter: open it in a browser and print it.
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
        "--spares", metavar="PART,...", default="", help="parts to keep with the unit"
    )
    parser.add_argument("-o", "--out", metavar="HTML", required=True, help="the sheet to write")
    parser.add_argument("--overwrite", action="store_true", help="replace an existing sheet")


def run(args: argparse.Namespace) -> int:
    """Work the set out and write its sheet."""
    from ...models.circuit import load_circuit
    from ...models.cycle import analyse_cycle
    from ...models.errors import InputError
    from ...models.quantity import parse_rate, parse_trim
    from ...models.testpoints import how_to_hold, measure_points
    from ..figures import cycle_figure, figure_bytes
    from ..setup import TakeSettings, set_up
    from ..sheet import BuildSheet, sheet_html
    from ._cautions import CAUTIONS
    from ._figures import percent, trimmer_text
    from ._files import new_file, write_new
    from ._screen import say, warn
    from ._sets import read_set, read_tray

    if not args.out.lower().endswith((".html", ".htm")):
        raise InputError(f"{args.out}: the sheet is an HTML page; give a name ending in .html")
    new_file(args.out, [args.tray, args.fixture, args.circuit], overwrite=args.overwrite)
    circuit = load_circuit(args.circuit)
    settings = TakeSettings(
        circuit=circuit,
        jfets=read_set(_settings.only_set(args), args, circuit),
        trimmer=_settings.setting(parse_trim, args.trim, "--trim"),
        rate=_settings.setting(parse_rate, args.rate, "--rate"),
        celsius=_settings.quantity(args.celsius, "C", "--celsius"),
    )
    tray = read_tray(args) if args.tray is not None else None
    spares = [word.strip() for word in args.spares.split(",") if word.strip()]
    if spares and tray is None:
        raise InputError("--spares: needs the --tray that the spares lie on")
    if tray is not None and spares:
        tray.chosen(spares, allow_used=False)
    meter_ohm = _settings.meter_ohm(args)
    setup = set_up(settings)
    assert setup.bus is not None  # no trace was given
    bias = setup.bias
    cycle = bias.cycle if bias else analyse_cycle(circuit, setup.jfets, setup.bus)
    figures = [
        ("travel", f"{cycle.travel_octaves:.2f} octaves"),
        ("stagger", f"{cycle.stagger_octaves:.3f} octave"),
        ("stall", percent(cycle.stall)),
        ("rate", f"{setup.bus.rate_hz:.3g} Hz"),
    ]
    if bias is not None:
        figures.append(("short of a uniform set by", percent(bias.loss)))
        warn(bias.warnings)
    labels = settings.labels
    sheet = BuildSheet(
        circuit=circuit.name,
        sockets=tuple(
            _socket(label, jfet, float(stall), tray)
            for label, jfet, stall in zip(labels, setup.jfets, cycle.stage_stall, strict=True)
        ),
        trimmer=trimmer_text(setup.bus.trimmer),
        figures=tuple(figures),
        points=tuple(
            measure_points(circuit, setup.bus.trimmer, settings.rate, meter_ohm=meter_ohm)
        ),
        meter=args.meter,
        hold=tuple(how_to_hold(circuit)),
        spares=tuple(spares),
        plot_svg=figure_bytes(cycle_figure(cycle, labels), "svg"),
        cautions=CAUTIONS,
    )
    write_new(args.out, sheet_html(sheet))
    say(args.out)
    return 0


def _socket(label: str, jfet: Jfet, stall: float, tray: Tray | None) -> SocketLine:
    from ..sheet import SocketLine

    readings = "given as parameters"
    if tray is not None:
        measured = tray.part(label).readings
        shown = [f"{name} {tray.cell(label, name)}" for name in measured]
        readings = ", ".join(shown) or "none: from its type's usual values"
    return SocketLine(label, readings, jfet.cutoff_v, jfet.idss_a, stall)
