"""``sweepset curve``: what each part's readings say of it."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING, Any

from . import _settings
from ._sets import add_tray_arguments, read_tray

if TYPE_CHECKING:
    from ...models.estimate import TrayEstimate
    from ...models.tray import Tray

HELP = "turn a tray's readings into each part's parameters with error bars, and a plot"
EPILOG = """\
examples:
  sweepset curve --tray tray.csv
  sweepset curve --tray tray.csv --plot curves.png --circuit my_unit.toml
  sweepset curve --tray tray.csv --parts J01,J07,J12 --plot three.svg
  sweepset curve --tray tray.csv --fixture bench.toml --json

Cut-off voltage, current factor and Idss at 27 degrees Celsius. The error bars are
standard errors; most of them is common to all parts and cancels between them. Parts whose
readings contradict one another, or which are not what the column "type" says, are named.
"""
COLUMNS = ("part", "cut-off V", "current factor mA/V^2", "Idss mA", "from")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    add_tray_arguments(parser, required=True)
    parser.add_argument("--parts", metavar="PART,...", help="only these parts (default: all)")
    parser.add_argument(
        "--plot", metavar="FILE", help="also draw resistance against gate voltage (.png or .svg)"
    )
    parser.add_argument(
        "--circuit",
        metavar="NAME",
        help="shade this circuit's sweep in the plot: a shipped name or a circuit file",
    )
    _settings.add_json_argument(parser)
    parser.add_argument("--csv", metavar="FILE", help="also write the parameters as a spreadsheet")
    parser.add_argument("--overwrite", action="store_true", help="replace existing files")


def run(args: argparse.Namespace) -> int:
    """Estimate the parts and print them."""
    from ...models.errors import InputError
    from ...models.estimate import estimate_tray
    from ..figures import figure_format
    from ..spreadsheet import csv_text
    from ._files import new_file, write_new
    from ._screen import print_json, print_table, say, warn

    for made in (args.plot, args.csv):
        if made is not None:
            new_file(made, [args.tray, args.fixture, args.circuit], overwrite=args.overwrite)
    if args.plot is not None:
        figure_format(args.plot)
    elif args.circuit is not None:
        raise InputError("--circuit: shades the sweep in a plot; give --plot too, or leave it out")
    tray = read_tray(args)
    estimate = estimate_tray(tray)
    chosen = _chosen(args.parts, tray)
    records = [_record(label, tray, estimate) for label in chosen]
    told = [record["contradiction"] for record in records if record["contradiction"]]
    told += [sentence for record in records for sentence in record["limits"]]
    warn([*tray.cautions, *told])
    if args.plot is not None:
        # A part without readings has a band over everything: drawn only if asked for by name.
        drawn = [label for label in chosen if args.parts or tray.part(label).readings]
        if not drawn:
            raise InputError(f"{args.tray}: no part with a reading, so nothing to draw")
        _plot(args.plot, drawn, estimate, args.circuit)
    if args.csv is not None:
        write_new(args.csv, csv_text(records))
    if args.json:
        print_json({"common_errors": estimate.common_names, "parts": records})
        return 0
    print_table("", COLUMNS, [_row(record) for record in records])
    for made in (args.plot, args.csv):
        if made is not None:
            say(made)
    return 0


def _chosen(written: str | None, tray: Tray) -> list[str]:
    if written is None:
        return list(tray.labels)
    words = [word.strip() for word in written.split(",") if word.strip()]
    return [part.label for part in tray.chosen(words, allow_used=True)]


def _record(label: str, tray: Tray, estimate: TrayEstimate) -> dict[str, Any]:
    """Return one part's figures in plain values, with what is wrong with it."""
    import math

    from ...models.parttypes import check_limits, find_type

    jfet, report = estimate.jfet(label), estimate.report(label)
    covariance = estimate.covariance([label])
    type_name = tray.part(label).type_name
    part_type = find_type(type_name) if type_name else None
    limits = []
    if part_type is not None and tray.part(label).readings:
        limits = [
            finding.sentence(label, type_name)
            for finding in check_limits(part_type, jfet, covariance)
            if finding.verdict != "inside"
        ]
    return {
        "part": label,
        "cutoff_v": jfet.cutoff_v,
        "cutoff_error_v": math.sqrt(covariance[0, 0]),
        "beta_a_per_v2": jfet.beta_a_per_v2,
        "beta_error_a_per_v2": jfet.beta_a_per_v2 * math.expm1(math.sqrt(covariance[1, 1])),
        "lambda_per_v": jfet.lambda_per_v,
        "idss_a": jfet.idss_a,
        "basis": report.basis,
        "contradiction": report.contradiction,
        "limits": limits,
    }


def _row(record: dict[str, Any]) -> tuple[str, ...]:
    beta, error = 1e3 * record["beta_a_per_v2"], 1e3 * record["beta_error_a_per_v2"]
    return (
        record["part"],
        f"{record['cutoff_v']:.3f} +/- {record['cutoff_error_v']:.3f}",
        f"{beta:.3f} +/- {error:.3f}",
        f"{1e3 * record['idss_a']:.2f}",
        record["basis"],
    )


def _plot(path: str, labels: list[str], estimate: TrayEstimate, circuit_name: str | None) -> None:
    import numpy as np

    from ...models.bias import solve_bias
    from ...models.circuit import load_circuit
    from ...models.cycle import mean_part
    from ...models.estimate import resistance_band
    from ...models.quantity import parse_rate
    from ..figures import resistance_figure, save_figure

    jfets = estimate.jfets(labels)
    window, name = None, ""
    if circuit_name is not None:
        # Where the gate goes with parts like these: a uniform set of their mean, at its bias.
        circuit = load_circuit(circuit_name)
        uniform = [mean_part(jfets)] * circuit.stage_count
        bus = solve_bias(circuit, uniform, parse_rate("noon")).bus
        keep = 1.0 - circuit.half_drain_share
        window, name = (keep * bus.low_v, keep * bus.high_v), circuit.name
    low = min(jfet.cutoff_v for jfet in jfets) - 0.3
    gate_v = np.linspace(min(low, window[0] if window else low), 0.0, 400)
    bands = [(label, resistance_band(estimate, label, gate_v)) for label in labels]
    save_figure(resistance_figure(bands, window, name), path)
