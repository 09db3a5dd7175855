"""Written quantities: 39n, 4k7, 3M9, 0.8 Hz, 9:00, 35 %."""

from __future__ import annotations


def parse_quantity(written: str | int | float, unit: str) -> float:
    """PROVISIONAL: replaced by the full parser."""
    from quantiphy import Quantity
    from rkm_codes import from_rkm

    if isinstance(written, int | float):
        return float(written)
    text = written.strip()
    found = from_rkm(text)
    value = float(found) if found is not None else float(Quantity(text))
    if unit == "%":
        value /= 100.0
    return value


def format_quantity(value: float, unit: str) -> str:
    """PROVISIONAL."""
    from quantiphy import Quantity

    return str(Quantity(value, unit))
