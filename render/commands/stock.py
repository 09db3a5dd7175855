"""``sweepset stock``: how many more parts for so many more sets."""

from __future__ import annotations

import argparse

from . import _settings
from ._sets import add_tray_arguments, read_tray

HELP = "plan a purchase: how many more parts for so many more sets"
EPILOG = """\
examples:
  sweepset stock --tray tray.csv --sets 10
  sweepset stock --tray tray.csv --sets 4 --limit 0.05 --confidence 95% --circuit egret

New parts are taken to come from the same lot as the tray. Deliveries are simulated, what
so small a sample leaves open included, and packed into sets together with the tray's
spares. Parts marked as used tell of the lot but are in no set.
"""
CONFIDENCES = (0.5, 0.8, 0.9, 0.95)


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    add_tray_arguments(parser, required=True)
    _settings.add_circuit_argument(parser)
    _settings.add_rate_argument(parser)
    parser.add_argument(
        "--sets", type=int, required=True, help="sets wanted beyond those the tray yields"
    )
    parser.add_argument(
        "--limit",
        metavar="OCTAVES",
        default="0.1",
        help="greatest expected stagger of a set (default: 0.1)",
    )
    parser.add_argument(
        "--confidence",
        metavar="PERCENT",
        default="90%",
        help="how sure to be that the parts suffice (default: 90%%)",
    )
    parser.add_argument(
        "--deliveries", type=int, default=60, help="deliveries simulated (default: 60)"
    )
    _settings.add_json_argument(parser)


def run(args: argparse.Namespace) -> int:
    """Simulate deliveries and say how many parts to buy."""
    from ...models.circuit import load_circuit
    from ...models.errors import InputError
    from ...models.estimate import estimate_tray
    from ...models.quantity import parse_rate
    from ...models.stock import MOST_SETS, plan_purchase
    from ._screen import print_json, print_table, progress, say, warn

    faults = []
    if not 1 <= args.sets <= MOST_SETS:
        faults.append(f"--sets {args.sets}: expected 1 to {MOST_SETS}")
    if not 20 <= args.deliveries <= 10_000:
        faults.append(f"--deliveries {args.deliveries}: expected 20 to 10000")
    if faults:
        raise InputError(faults)
    limit = _settings.octaves(args.limit, "--limit")
    confidence = _settings.quantity(args.confidence, "%", "--confidence", most=1.0)
    highest = 1.0 - 1.0 / args.deliveries
    if not 0.05 <= confidence <= highest:
        raise InputError(
            f"--confidence {args.confidence}: {args.deliveries} simulated deliveries tell of 5 % "
            f"to {100.0 * highest:.3g} %; give one within, or more --deliveries"
        )
    circuit = load_circuit(args.circuit)
    rate = _settings.setting(parse_rate, args.rate, "--rate")
    tray = read_tray(args)
    silent = [part.label for part in tray.parts if not part.readings]
    cautions = list(tray.cautions)
    if silent:
        cautions.append(f"left out, for want of a reading: {', '.join(silent)}")
    warn(cautions)
    with progress() as tell:
        purchase = plan_purchase(
            estimate_tray(tray),
            circuit,
            rate,
            args.sets,
            limit,
            lot=[label for label in tray.labels if label not in silent],
            labels=[label for label in tray.free_labels if label not in silent],
            deliveries=args.deliveries,
            progress=tell and (lambda share: tell("simulating deliveries", share)),
        )
    levels = sorted({level for level in (*CONFIDENCES, confidence) if level <= highest})
    if args.json:
        print_json(
            {
                "circuit": circuit.name,
                "more_sets": purchase.more_sets,
                "limit_octaves": limit,
                "confidence": confidence,
                "parts": purchase.parts_for(confidence),
                "by_confidence": {f"{level:g}": purchase.parts_for(level) for level in levels},
                "most_looked_at": purchase.most,
                "tray_sets": purchase.tray_sets,
                "spares": purchase.spares,
                "needed_by_delivery": list(purchase.needed),
            }
        )
        return 0
    rows = []
    for level in levels:
        parts = purchase.parts_for(level)
        text = f"more than {purchase.most}" if parts is None else str(parts)
        rows.append((f"{100.0 * level:g} %", text))
    print_table("", ("to be this sure", "parts to buy"), rows)
    say(
        f"This tray yields {purchase.tray_sets} set{'s' * (purchase.tray_sets != 1)} within "
        f"{limit:g} octave in {circuit.name}; "
        f"its {purchase.spares} spares join in."
    )
    parts = purchase.parts_for(confidence)
    if parts is None:
        say(
            f"Even {purchase.most} parts do not give {args.sets} more sets in "
            f"{args.confidence} of the deliveries: raise --limit, or buy from a closer lot."
        )
    else:
        say(f"For {args.sets} more sets buy {parts} parts ({args.confidence} sure).")
    say("Another lot or another maker's part is another lot: measure some of it first.")
    return 0
