"""Written quantities: 39n, 4k7, 3M9, 0.8 Hz, 9:00, 35 %.

Two libraries turn digits and multipliers into numbers: quantiphy for engineering
notation and rkm_codes for the letter-for-point code of IEC 60062. Alone they
guess where a schematic must not be guessed at ("1,5k" as 15000, "1.5meg" as 1.5 m,
"1e3" as 1.3 e), so a strict grammar here decides first what the text is; what
fits no rule is refused with the remedy.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

LONGEST = 40
# A knob with 300 degrees of travel turns from 7 o'clock to 5 o'clock (check-values k7,
# common practice, no published source).
CLOCK_TRAVEL_DEGREES = 300.0
DEGREES_PER_HOUR = 30.0


@dataclass(frozen=True)
class _Unit:
    """How quantities of one unit are written."""

    expected: str
    example: str
    aliases: tuple[str, ...]
    multipliers: str
    letters: str  # letters that may stand in place of the decimal point
    shown: str
    remedies: tuple[tuple[str, str], ...] = ()


_UNITS = {
    "ohm": _Unit(
        "a resistance in ohms",
        "4k7",
        ("ohms", "ohm", "Ω", "R"),
        "kKMG",
        "RrΩkKMG",
        "ohm",
        (("m", "m means milli; for mega write M as in 3M9"),),
    ),
    "F": _Unit(
        "a capacitance in farads",
        "39n",
        ("F",),
        "pnuµm",
        "Fpnuµm",
        "F",
        (("M", "M means mega; for micro write u as in 10u"),),
    ),
    "V": _Unit("a voltage", "5.1 V", ("volts", "volt", "V"), "umµ", "Vv", "V"),
    "A": _Unit("a current", "0.45 mA", ("A",), "pnuµm", "Aanuµm", "A"),
    "Hz": _Unit("a frequency", "0.8 Hz", ("Hz",), "mkKM", "", "Hz"),
    "%": _Unit("a percentage with its sign", "10 %", ("%",), "", "", "%"),
    "deg": _Unit(
        "an angle in degrees", "270 deg", ("degrees", "degree", "deg", "°"), "", "", "deg"
    ),
    "s": _Unit("a time in seconds", "10 ms", ("s",), "nuµm", "", "s"),
    "C": _Unit(
        "a temperature in degrees Celsius", "21.5 C", ("degC", "°C", "celsius", "C"), "", "", "C"
    ),
}

# The signs of different origin that look alike: ohm sign, micro sign, minus sign.
_LOOKALIKES = str.maketrans(
    {"\u2126": "Ω", "\u03bc": "µ", "\u2212": "-", "\u00a0": " ", "\u202f": " ", "\u2009": " "}
)
_PLAIN = re.compile(
    r"([+-]?)([0-9]+(?:[.,][0-9]+)?|[.,][0-9]+)(?:([eE])([+-]?)([0-9]{1,3}))? ?([^0-9 .,+-]*)"
)
_CODE = re.compile(r"([+-]?)([0-9]*)([A-Za-zµΩ])([0-9]+) ?([A-Za-zΩ]*)")
_THOUSANDS = re.compile(r"[1-9][0-9]{0,2},[0-9]{3}")
_CLOCK = re.compile(r"([0-9]{1,2})(?::([0-9]{2})| ?o'clock)")


def parse_quantity(written: str | int | float, unit: str) -> float:
    """Return a written quantity in SI units.

    Parameters
    ----------
    written : str, int or float
        ``"39n"``, ``"4k7"``, ``"R47"``, ``"47 nF"``, ``"10 kohm"``, ``"4,7k"``, ``"1e-9"``,
        ``"10 %"``; a number stands for itself in SI units (for ``"%"``: the fraction).
    unit : str
        ``"ohm"``, ``"F"``, ``"V"``, ``"A"``, ``"Hz"``, ``"%"`` (gives a fraction), ``"deg"``,
        ``"s"`` or ``"C"`` (degrees Celsius).

    Returns
    -------
    float
        A finite number.

    Raises
    ------
    ValueError
        If it cannot be read without guessing; says what was expected.

    Notes
    -----
    A comma followed by three digits after a leading one to three digits
    (``"1,500"``) may be a decimal or a thousands comma and is refused. A reader
    that knows its file's decimal sign replaces it before calling.

    References
    ----------
    IEC 60062, Marking codes for resistors and capacitors (the letter code; from memory).
    """
    rule = _UNITS[unit]
    if isinstance(written, bool) or not isinstance(written, str | int | float):
        raise ValueError(f"{_shown(written)} is not {_wanted(rule)}")
    if not isinstance(written, str):
        try:
            number = float(written)
        except OverflowError:
            raise ValueError(f"the number is far too large; expected {_wanted(rule)}") from None
        return _finite(number, written, rule)
    if len(written) > LONGEST:
        raise ValueError(
            f"{_shown(written)} is too long ({len(written)} characters); expected {_wanted(rule)}"
        )
    text = written.translate(_LOOKALIKES).strip()
    if not text:
        raise ValueError(f"{_shown(written)} is empty; expected {_wanted(rule)}")
    plain = _PLAIN.fullmatch(text)
    if plain is not None:
        return _finite(_read_plain(plain, written, unit), written, rule)
    code = _CODE.fullmatch(text)
    if code is not None:
        return _finite(_read_code(code, written, unit), written, rule)
    raise ValueError(f"{_shown(written)} cannot be read; expected {_wanted(rule)}")


def format_quantity(value: float, unit: str, digits: int = 3) -> str:
    """Return a value as written on a schematic: ``4.7 kohm``, ``39 nF``, ``10 %``.

    Parameters
    ----------
    value : float
        In SI units; a fraction for ``"%"``.
    unit : str
        As for :func:`parse_quantity`.
    digits : int
        Significant digits, 1 or more; trailing zeros are dropped.
    """
    rule = _UNITS[unit]
    # Percent, angles and temperatures take no multiplier; slow rates read better without.
    if unit in ("%", "deg", "C") or (unit == "Hz" and 1e-3 <= abs(value) < 1.0):
        number = value * 100.0 if unit == "%" else value
        # The g form would turn to an exponent where the digits asked for do not reach the point.
        places = max(digits, 6) if abs(number) >= 10**digits else digits
        return f"{number + 0.0:.{places}g} {rule.shown}"  # adding 0 turns -0 into 0
    from quantiphy import Quantity

    quantity = Quantity(value + 0.0, rule.shown)
    with quantity.prefs(output_sf="GMkmunp", map_sf={}, strip_zeros=True, spacer=" "):  # type: ignore[no-untyped-call]
        return str(quantity.render(form="si", prec=digits - 1))


def _read_plain(found: re.Match[str], written: str, unit: str) -> float:
    """Return the value of a decimal number with exponent or multiplier and unit."""
    from quantiphy import Quantity

    rule = _UNITS[unit]
    sign, digits, letter, power_sign, power, tail = found.groups()
    if _THOUSANDS.fullmatch(digits):
        whole, part = digits.split(",")
        raise ValueError(
            f"{_shown(written)} may mean {whole}{part} or {whole}.{part}; write it without the "
            f"comma, or with a decimal point; expected {_wanted(rule)}"
        )
    if unit == "ohm" and letter == "E" and not power_sign:
        raise ValueError(
            f"{_shown(written)} may mean {digits}R{power} or a power of ten; write "
            f"{digits}R{power} or {digits}e{power}"
        )
    multiplier = _multiplier(tail, written, unit)
    if letter and multiplier:
        raise ValueError(
            f"{_shown(written)} has both an exponent and the multiplier {multiplier!r}; "
            f"expected {_wanted(rule)}"
        )
    exponent = f"e{power_sign}{power}" if letter else ""
    value = float(Quantity(f"{sign}{digits.replace(',', '.')}{exponent}{multiplier}"))
    return value / 100.0 if unit == "%" else value


def _read_code(found: re.Match[str], written: str, unit: str) -> float:
    """Return the value of a letter code such as 4k7, R47 or 5V1."""
    from rkm_codes import from_rkm

    rule = _UNITS[unit]
    sign, whole, letter, part, tail = found.groups()
    if letter not in rule.letters:
        raise ValueError(_misfit(letter, written, unit))
    if tail and tail.casefold() not in [alias.casefold() for alias in rule.aliases]:
        raise ValueError(_misfit(tail, written, unit))
    # The base letter is put in the case the library maps.
    base = {"v": "v", "V": "v", "A": "i", "a": "i", "F": "c"}.get(letter, letter)
    value = float(from_rkm(f"{whole}{base}{part}"))
    return -value if sign == "-" else value


def _multiplier(tail: str, written: str, unit: str) -> str:
    """Return the multiplier in what follows the digits, after taking the unit off."""
    rule = _UNITS[unit]
    for alias in rule.aliases:
        if tail.casefold().endswith(alias.casefold()):
            left = tail[: len(tail) - len(alias)]
            if left == "" or (left in rule.multipliers and alias != "R"):
                return left
            raise ValueError(_misfit(tail, written, unit))
    if unit == "%":
        raise ValueError(f"{_shown(written)} lacks its % sign; expected {_wanted(rule)}")
    if tail in rule.multipliers:
        return tail
    raise ValueError(_misfit(tail, written, unit))


def _misfit(tail: str, written: str, unit: str) -> str:
    """Return the message for letters that do not belong to this unit."""
    rule = _UNITS[unit]
    for letter, remedy in rule.remedies:
        if tail[:1] == letter and tail[:3].casefold() != "meg":
            return f"{_shown(written)}: {remedy}; expected {_wanted(rule)}"
    if tail.casefold().startswith("meg"):
        return f"{_shown(written)}: for mega write M as in 3M9; expected {_wanted(rule)}"
    for other in _UNITS.values():
        for alias in other.aliases:
            head = tail[: len(tail) - len(alias)]
            fits = tail.casefold().endswith(alias.casefold()) and (
                head == "" or head in other.multipliers
            )
            if other is not rule and fits:
                return f"{_shown(written)} is {other.expected}; expected {_wanted(rule)}"
    return f"{_shown(written)}: {tail!r} does not fit here; expected {_wanted(rule)}"


def _finite(value: float, written: object, rule: _Unit) -> float:
    if not math.isfinite(value):
        raise ValueError(f"{_shown(written)} is not a finite number; expected {_wanted(rule)}")
    return value


def _wanted(rule: _Unit) -> str:
    return f"{rule.expected}, for example {rule.example}"


def _shown(written: object) -> str:
    text = repr(written)
    return text if len(text) <= LONGEST + 10 else text[:LONGEST] + "..."


@dataclass(frozen=True)
class Setting:
    """What was asked of a knob or trimmer.

    Parameters
    ----------
    text : str
        As written, for messages.
    rotation : float, optional
        Rotation 0 to 1, clockwise; clock positions by a travel of 300 degrees.
    value : float, optional
        The quantity itself: the rate [Hz], or the wiper above ground [V].
        Both left out: to be found ("auto").
    clock_degrees : float, optional
        A clock position's angle from noon, clockwise positive, so that a knob
        of another travel can place it [degrees].
    """

    text: str
    rotation: float | None
    value: float | None
    clock_degrees: float | None = None


def parse_rate(text: str) -> Setting:
    """Return the rate asked for: ``"9:00"``, ``"noon"``, ``"35%"`` or ``"0.8Hz"``.

    Parameters
    ----------
    text : str
        A clock position of the knob (7:00 to 5:00 over 300 degrees), a share of its
        rotation, or the rate.

    Raises
    ------
    ValueError
        If it is none of these.
    """
    expected = "a rate: a clock position (9:00, noon), a share of the knob (35%) or 0.8Hz"
    return _parse_setting(text, "Hz", expected)


def parse_trim(text: str) -> Setting:
    """Return the trimmer position asked for: ``"auto"``, ``"45%"``, ``"2.31V"`` or ``"noon"``.

    Parameters
    ----------
    text : str
        ``auto`` (found for the set), a share of the rotation, the wiper's voltage above
        ground, or a clock position.

    Raises
    ------
    ValueError
        If it is none of these.
    """
    if isinstance(text, str) and text.strip().casefold() == "auto":
        return Setting(text.strip(), None, None)
    expected = "a trimmer position: auto, a share of its travel (45%), the wiper (2.31V) or noon"
    return _parse_setting(text, "V", expected)


def _parse_setting(text: str, unit: str, expected: str) -> Setting:
    if not isinstance(text, str) or not text.strip() or len(text) > LONGEST:
        raise ValueError(f"{_shown(text)} is not {expected}")
    plain = text.translate(_LOOKALIKES).strip()
    if plain.casefold() == "noon":
        return Setting(plain, 0.5, None, 0.0)
    clock = _CLOCK.fullmatch(plain.casefold())
    if clock is not None:
        return _at_clock(plain, int(clock[1]), int(clock[2] or 0))
    try:
        if plain.endswith("%"):
            rotation = parse_quantity(plain, "%")
            if not 0.0 <= rotation <= 1.0:
                raise ValueError(f"{_shown(text)} is outside 0% to 100%; give {expected}")
            return Setting(plain, rotation, None)
        if not plain[-1].isalpha() and _CODE.fullmatch(plain) is None:
            raise ValueError("the unit is missing")
        return Setting(plain, None, parse_quantity(plain, unit))
    except ValueError as fault:
        if "outside" in str(fault):
            raise
        raise ValueError(f"{_shown(text)} is not {expected} ({fault})") from None


def _at_clock(text: str, hour: int, minute: int) -> Setting:
    """Return the setting of a clock position, 7:00 through noon to 5:00."""
    if not 1 <= hour <= 12 or minute > 59:
        raise ValueError(f"{text!r} is not a clock position; write 7:00 through noon to 5:00")
    degrees = (hour + minute / 60.0) * DEGREES_PER_HOUR
    degrees = (degrees + 180.0) % 360.0 - 180.0
    rotation = 0.5 + degrees / CLOCK_TRAVEL_DEGREES
    if not -1e-9 <= rotation <= 1.0 + 1e-9:
        raise ValueError(
            f"{text!r} lies between 5:00 and 7:00, where a knob does not turn; "
            "write 7:00 (fully counter-clockwise) through noon to 5:00"
        )
    return Setting(text, min(max(rotation, 0.0), 1.0), None, degrees)
