"""``sweepset curve``: what each part's readings say of it."""

from __future__ import annotations

import argparse

from . import _settings
from ._sets import add_tray_arguments, read_tray

HELP = "turn a tray's readings into each part's parameters with error bars"
EPILOG = """\
examples:
  sweepset curve --tray tray.csv
  sweepset curve --tray tray.csv --fixture bench.toml --json

Cut-off voltage, current factor and Idss at 27 degrees Celsius. The error bars are
standard errors; most of them is common to all parts and cancels between them.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    add_tray_arguments(parser, required=True)
    _settings.add_json_argument(parser)


def run(args: argparse.Namespace) -> int:
    """Estimate the parts and print them."""
    import math

    from ...models.estimate import estimate_tray
    from ._screen import print_json, print_table, warn

    tray = read_tray(args)
    estimate = estimate_tray(tray)
    contradictions = [one.contradiction for one in estimate.reports if one.contradiction]
    warn([*tray.cautions, *contradictions])
    records, rows = [], []
    for jfet, (cutoff_error_v, ln_beta_error), report in zip(
        estimate.jfets(estimate.labels), estimate.standard_errors(), estimate.reports, strict=True
    ):
        beta_error = jfet.beta_a_per_v2 * math.expm1(float(ln_beta_error))
        records.append(
            {
                "part": jfet.label,
                "cutoff_v": jfet.cutoff_v,
                "cutoff_error_v": float(cutoff_error_v),
                "beta_a_per_v2": jfet.beta_a_per_v2,
                "beta_error_a_per_v2": beta_error,
                "lambda_per_v": jfet.lambda_per_v,
                "idss_a": jfet.idss_a,
                "basis": report.basis,
                "contradiction": report.contradiction,
            }
        )
        rows.append(
            (
                jfet.label,
                f"{jfet.cutoff_v:.3f} +/- {cutoff_error_v:.3f}",
                f"{1e3 * jfet.beta_a_per_v2:.3f} +/- {1e3 * beta_error:.3f}",
                f"{1e3 * jfet.idss_a:.2f}",
                report.basis,
            )
        )
    if args.json:
        print_json({"common_errors": estimate.common_names, "parts": records})
    else:
        print_table("", ("part", "cut-off V", "current factor mA/V^2", "Idss mA", "from"), rows)
    return 0
