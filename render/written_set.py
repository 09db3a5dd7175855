"""A set as people write it: labels from a tray, or each part's parameters."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from ..models.errors import InputError

if TYPE_CHECKING:
    from ..models.circuit import Circuit
    from ..models.estimate import TrayEstimate
    from ..models.jfet import Jfet
    from ..models.tray import Tray

SYNTAX = (
    "part labels in stage order (J07,J12,J31,J40) with --tray, or without a tray each part's "
    "cut-off voltage and Idss (-2.10V/4.2mA,-2.13V/4.3mA)"
)


def parse_set(
    text: str,
    circuit: Circuit,
    tray: Tray | None,
    estimate: TrayEstimate | None,
    *,
    place: str = "--set",
) -> tuple[Jfet, ...]:
    """Return a set as written, in stage order.

    Parameters
    ----------
    text : str
        Labels, or parameters where there is no tray: see `SYNTAX`.
    circuit : Circuit
        Tells how many parts a set has.
    tray, estimate : Tray, TrayEstimate or None
        Where labels are looked up.
    place : str
        Where the text stood, for messages.

    Raises
    ------
    InputError
        If a label is unknown or named twice, a parameter cannot be read, or the number
        of parts is not the circuit's.
    """
    words = [word.strip() for word in text.split(",")]
    faults: list[str] = []
    if not any(words):
        raise InputError(f"{place} {text!r}: no parts; give {SYNTAX}")
    if "" in words:
        faults.append(f"{place} {text!r}: nothing between two commas; give {SYNTAX}")
    words = [word for word in words if word]
    jfets: list[Jfet] = []
    try:
        if tray is not None and estimate is not None:
            # A part marked as used may well sit in the very unit that is to be heard.
            parts = tray.chosen(words, allow_used=True)
            jfets = [estimate.jfet(part.label) for part in parts]
        else:
            jfets = _written_parts(text, words, place)
    except InputError as fault:
        faults += fault.messages
    if len(words) != circuit.stage_count:
        faults.append(
            f"{place} {text!r}: circuit {circuit.name!r} has {circuit.stage_count} stages, the set "
            f"has {len(words)} parts; give one part per stage, in stage order"
        )
    if faults:
        raise InputError(faults)
    return tuple(jfets)


def _written_parts(text: str, words: Sequence[str], place: str) -> list[Jfet]:
    """Return parts written as cut-off voltage and Idss."""
    # Not needed for a command's --help, which must be instant.
    from ..models.jfet import Jfet
    from ..models.quantity import parse_quantity

    jfets = []
    faults = []
    for word in words:
        if "/" not in word:
            faults.append(
                f"{place} {text!r}: {word!r} is a label, but no tray is given; give --tray, or "
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
            faults.append(f"{place} {text!r}: {word!r}: {fault}")
    if faults:
        raise InputError(faults)
    return jfets
