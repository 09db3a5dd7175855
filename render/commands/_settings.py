"""Arguments that every command about a circuit shares, and what they mean."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from typing import TYPE_CHECKING

from ...models.errors import InputError
from ..written_set import SYNTAX
from ._sets import add_tray_arguments

if TYPE_CHECKING:
    from ...models.quantity import Setting

DEFAULT_CIRCUIT = "heron"


def add_circuit_argument(parser: argparse.ArgumentParser) -> None:
    """Add ``--circuit``."""
    parser.add_argument(
        "--circuit",
        metavar="NAME",
        default=DEFAULT_CIRCUIT,
        help=f"a shipped circuit's name or a circuit file (default: {DEFAULT_CIRCUIT})",
    )


def add_set_arguments(parser: argparse.ArgumentParser) -> None:
    """Add ``--circuit``, ``--set``, ``--tray`` and ``--fixture`` for one set."""
    add_circuit_argument(parser)
    # "append" only to notice a second one: it would silently replace the first.
    parser.add_argument(
        "--set", metavar="PARTS", required=True, dest="parts", action="append", help=SYNTAX
    )
    add_tray_arguments(parser)


def add_rate_argument(parser: argparse.ArgumentParser) -> None:
    """Add ``--rate`` for one rate."""
    parser.add_argument(
        "--rate", default="noon", help="rate: 9:00, noon, 35%% or 0.8Hz (default: noon)"
    )


def add_trim_argument(parser: argparse.ArgumentParser) -> None:
    """Add ``--trim``."""
    parser.add_argument(
        "--trim",
        default="auto",
        help="bias trimmer: auto (solved for the set), 45%%, or the wiper above ground, 2.31V "
        "(default: auto)",
    )


def add_celsius_argument(parser: argparse.ArgumentParser) -> None:
    """Add ``--celsius``."""
    parser.add_argument(
        "--celsius", default="27", help="channel temperature in degrees Celsius (default: 27)"
    )


def add_meter_argument(parser: argparse.ArgumentParser) -> None:
    """Add ``--meter``."""
    parser.add_argument(
        "--meter",
        metavar="OHMS",
        default="10 Mohm",
        help="the meter's input resistance (default: 10 Mohm)",
    )


def meter_ohm(args: argparse.Namespace) -> float:
    """Return the resistance of ``--meter`` [ohm]."""
    return quantity(args.meter, "ohm", "--meter", above=0.0)


def add_json_argument(parser: argparse.ArgumentParser) -> None:
    """Add ``--json``."""
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")


def add_take_arguments(parser: argparse.ArgumentParser) -> None:
    """Add what is common to commands that write takes."""
    parser.add_argument(
        "--full-scale",
        default="1 V",
        metavar="VOLTS",
        help="peak volts at digital full scale, in and out (default: 1 V)",
    )
    parser.add_argument("--overwrite", action="store_true", help="replace existing takes")
    parser.add_argument("--float", action="store_true", help="write 32-bit float, not 24-bit")


def only_set(args: argparse.Namespace) -> str:
    """Return the one ``--set``.

    Raises
    ------
    InputError
        If there are several.
    """
    if len(args.parts) > 1:
        raise InputError(
            f"--set is given {len(args.parts)} times; this command takes one set: join its parts "
            "with commas, or use sweepset audition for several sets"
        )
    return str(args.parts[0])


def quantity(
    text: str, unit: str, option: str, *, above: float | None = None, most: float | None = None
) -> float:
    """Return a written quantity in SI units; a share for "%".

    Parameters
    ----------
    text, unit, option : str
        What was written, the unit it should have, and the option's name for messages.
    above : float, optional
        The quantity must be greater than this.
    most : float, optional
        The quantity must be from 0 to this.

    Raises
    ------
    InputError
        If it cannot be read or is out of range; names the option.
    """
    from ...models.quantity import format_quantity, parse_quantity

    try:
        value = parse_quantity(text, unit)
    except ValueError as fault:
        raise InputError(f"{option}: {fault}") from None
    if above is not None and not value > above:
        raise InputError(f"{option} {text}: expected more than {format_quantity(above, unit)}")
    if most is not None and not 0.0 <= value <= most:
        raise InputError(
            f"{option} {text}: expected {format_quantity(0.0, unit)} to "
            f"{format_quantity(most, unit)}"
        )
    return value


def octaves(written: str, option: str) -> float:
    """Return a stagger limit [octaves]; the models say what limits can be met.

    Raises
    ------
    InputError
        If it is no number; names the option.
    """
    try:
        return float(written)
    except ValueError:
        raise InputError(
            f"{option} {written!r}: not a number; give octaves of stagger, for example 0.1"
        ) from None


def span(text: str, unit: str, option: str, within: tuple[float, float]) -> tuple[float, float]:
    """Return the two ends of a written range such as ``10:40``, in SI units.

    Raises
    ------
    InputError
        If it is none, runs backwards or leaves the bounds; names the option.
    """
    from ...models.quantity import format_quantity

    low, colon, high = text.partition(":")
    if not colon:
        raise InputError(f"{option} {text!r}: expected two ends with a colon between, LOW:HIGH")
    ends = quantity(low, unit, option), quantity(high, unit, option)
    if not within[0] <= ends[0] < ends[1] <= within[1]:
        raise InputError(
            f"{option} {text!r}: expected the lower end first, both from "
            f"{format_quantity(within[0], unit)} to {format_quantity(within[1], unit)}"
        )
    return ends


def setting(parse: Callable[[str], Setting], text: str, option: str) -> Setting:
    """Return a knob's or trimmer's setting.

    Raises
    ------
    InputError
        If it cannot be read; names the option.
    """
    try:
        return parse(text)
    except InputError:
        raise
    except ValueError as fault:
        raise InputError(f"{option}: {fault}") from None


def decibels(text: str, option: str) -> float:
    """Return a gain, -100 to 100 dB.

    Raises
    ------
    InputError
        If it is none; names the option.
    """
    try:
        gain_db = float(text.strip().removesuffix("dB").strip())
    except ValueError:
        gain_db = float("nan")
    if not -100.0 <= gain_db <= 100.0:
        raise InputError(f"{option}: {text!r}; expected a gain in dB, -100 to 100")
    return gain_db
