"""Which parts a command is about: labels from a tray, or parameters where there is none."""

from __future__ import annotations

import argparse
from collections.abc import Sequence
from typing import TYPE_CHECKING

from ...models.errors import InputError
from ..written_set import parse_set

if TYPE_CHECKING:
    from ...models.circuit import Circuit
    from ...models.jfet import Jfet
    from ...models.pairwise import Parts
    from ...models.tray import Tray


def add_tray_arguments(parser: argparse.ArgumentParser, *, required: bool = False) -> None:
    """Add ``--tray`` and ``--fixture``."""
    parser.add_argument(
        "--tray",
        metavar="CSV",
        required=required,
        help="the tray: a CSV with one part a row and its readings",
    )
    parser.add_argument(
        "--fixture",
        metavar="TOML",
        help="the matching fixture (default: TRAY.fixture.toml or fixture.toml beside the tray)",
    )


def read_tray(args: argparse.Namespace) -> Tray:
    """Return the tray of ``--tray`` and ``--fixture``."""
    from ...models.tray import load_tray

    return load_tray(args.tray, args.fixture)


def read_sets(
    written: Sequence[str], args: argparse.Namespace, circuit: Circuit
) -> list[tuple[Jfet, ...]]:
    """Return the sets written, each in stage order; every fault of all sets is reported.

    Parameters
    ----------
    written : sequence of str
        As after ``--set``.
    args : argparse.Namespace
        With ``tray`` and ``fixture``.
    circuit : Circuit
        Tells how many parts a set has.

    Raises
    ------
    InputError
        If a label is unknown or named twice, a parameter cannot be read, or the number
        of parts is not the circuit's.
    """
    tray = estimate = None
    if args.tray is not None:
        from ...models.estimate import estimate_tray

        tray = read_tray(args)
        estimate = estimate_tray(tray)
    elif args.fixture is not None:
        raise InputError("--fixture says how a tray was measured; give --tray with it")
    faults: list[str] = []
    found: list[tuple[Jfet, ...]] = []
    for text in written:
        try:
            found.append(parse_set(text, circuit, tray, estimate))
        except InputError as fault:
            faults += [message for message in fault.messages if message not in faults]
    if faults:
        raise InputError(faults)
    return found


def read_set(text: str, args: argparse.Namespace, circuit: Circuit) -> tuple[Jfet, ...]:
    """Return one set; see :func:`read_sets`."""
    [jfets] = read_sets([text], args, circuit)
    return jfets


def read_set_with_errors(
    text: str, args: argparse.Namespace, circuit: Circuit
) -> tuple[tuple[Jfet, ...], Parts]:
    """Return one set and what its readings leave uncertain; see :func:`read_sets`.

    Parts written as parameters are taken as known exactly.
    """
    from ...models.pairwise import Parts, parts_of

    if args.tray is None:
        jfets = read_set(text, args, circuit)
        return jfets, Parts.from_jfets(jfets)
    from ...models.estimate import estimate_tray

    tray = read_tray(args)
    estimate = estimate_tray(tray)
    jfets = parse_set(text, circuit, tray, estimate)
    return jfets, parts_of(estimate, [jfet.label for jfet in jfets])


def named_sets(written: Sequence[str]) -> tuple[list[str], list[str]]:
    """Split ``NAME=PARTS`` of several sets; one without a name is called ``set 1`` and so on.

    Raises
    ------
    InputError
        If two sets have the same name, or a name is empty.
    """
    names: list[str] = []
    parts: list[str] = []
    faults: list[str] = []
    for number, text in enumerate(written, start=1):
        name, equals, labels = text.partition("=")
        name, labels = (name.strip(), labels) if equals else (f"set {number}", text)
        if not name:
            faults.append(f"--set {text!r}: no name before '='; write NAME=J07,J12,J31,J40")
        elif name.casefold() in (known.casefold() for known in names) or name.casefold() == "dry":
            faults.append(
                f"--set {text!r}: the name {name!r} is taken; give each set a name of its own"
            )
        names.append(name)
        parts.append(labels)
    if faults:
        raise InputError(faults)
    return names, parts
