"""Which parts a command is about: labels from a tray, or parameters where there is none."""

from __future__ import annotations

import argparse
from collections.abc import Sequence
from typing import TYPE_CHECKING

from ...models.errors import InputError

if TYPE_CHECKING:
    from ...models.circuit import Circuit
    from ...models.estimate import TrayEstimate
    from ...models.jfet import Jfet
    from ...models.pairwise import Parts
    from ...models.tray import Tray

SYNTAX = (
    "part labels in stage order (J07,J12,J31,J40) with --tray, or without a tray each part's "
    "cut-off voltage and Idss (-2.10V/4.2mA,-2.13V/4.3mA)"
)


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
            found.append(_read_set(text, circuit, tray, estimate))
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
    jfets = _read_set(text, circuit, tray, estimate)
    return jfets, parts_of(estimate, [jfet.label for jfet in jfets])


def _read_set(
    text: str, circuit: Circuit, tray: Tray | None, estimate: TrayEstimate | None
) -> tuple[Jfet, ...]:
    words = [word.strip() for word in text.split(",")]
    faults: list[str] = []
    if not any(words):
        raise InputError(f"--set {text!r}: no parts; give {SYNTAX}")
    if "" in words:
        faults.append(f"--set {text!r}: nothing between two commas; give {SYNTAX}")
    words = [word for word in words if word]
    jfets: list[Jfet] = []
    try:
        if tray is not None and estimate is not None:
            # A part marked as used may well sit in the very unit that is to be heard.
            parts = tray.chosen(words, allow_used=True)
            jfets = [estimate.jfet(part.label) for part in parts]
        else:
            jfets = _written_parts(text, words)
    except InputError as fault:
        faults += fault.messages
    if len(words) != circuit.stage_count:
        faults.append(
            f"--set {text!r}: circuit {circuit.name!r} has {circuit.stage_count} stages, the set "
            f"has {len(words)} parts; give one part per stage, in stage order"
        )
    if faults:
        raise InputError(faults)
    return tuple(jfets)


def _written_parts(text: str, words: Sequence[str]) -> list[Jfet]:
    """Return parts written as cut-off voltage and Idss."""
    from ...models.jfet import Jfet
    from ...models.quantity import parse_quantity

    jfets = []
    faults = []
    for word in words:
        if "/" not in word:
            faults.append(
                f"--set {text!r}: {word!r} is a label, but no tray is given; give --tray, or "
                "write cut-off voltage and Idss, for example -2.10V/4.2mA"
            )
            continue
        cutoff, _, idss = word.partition("/")
        try:
            # Datasheets and meters leave the minus sign out as often as not.
            cutoff_v, idss_a = -abs(parse_quantity(cutoff, "V")), parse_quantity(idss, "A")
            if not -20.0 <= cutoff_v <= -0.05:
                raise ValueError(f"cut-off voltage {cutoff_v:g} V; expected -0.05 V to -20 V")
            if not 1e-6 <= idss_a <= 1.0:
                raise ValueError(f"Idss {idss_a:g} A; expected 1 uA to 1 A; mind the unit (4.2mA)")
            jfets.append(Jfet.from_idss(cutoff_v, idss_a))
        except ValueError as fault:
            faults.append(f"--set {text!r}: {word!r}: {fault}")
    if faults:
        raise InputError(faults)
    return jfets


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
