"""Part types: published limits, and what is assumed of a part before it is measured.

The limits are data (``library/types.toml``), each with its source. From them comes
a *type assumption*: median and spread of the cut-off voltage, and of the logarithm
of the current factor given the cut-off. It is an assumption of this project, not a
published distribution, and is labelled so wherever it is used.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache
from importlib.resources import files
from typing import Literal

import numpy as np
import numpy.typing as npt
from pydantic import Field, ValidationError, model_validator

from .errors import near_names
from .fixture import Channels
from .jfet import Jfet
from .quantity import format_quantity
from .schema import Part, explain_faults

Array = npt.NDArray[np.float64]
Status = Literal["read", "from memory"]
Verdict = Literal["inside", "doubtful", "outside"]

SHEET_CELSIUS = 25.0
# The square law's on-resistance usually lies above the sheet's limit, which is
# measured with bulk contacts and at its own corner: check-values c17 (computed).
ON_RESISTANCE_ALLOWANCE = 0.35
# Expanded uncertainty, about 95 % (JCGM 100 chapter 6, from memory).
COVERAGE = 2.0
# Limits are taken as two standard deviations to either side of the median.
_LIMITS_IN_SPREADS = 4.0
# Where a sheet gives only a minimum, this many times it is taken as the maximum.
_OPEN_RATIO = 4.0
# Where a sheet gives only a maximum, this share of it is taken as the minimum.
_OPEN_SHARE = 0.125


class Limit(Part):
    """One quantity's published limits; magnitudes, in the quantity's unit."""

    low: float | None = Field(default=None, alias="min", gt=0.0)
    high: float | None = Field(default=None, alias="max", gt=0.0)
    typical: float | None = Field(default=None, gt=0.0)
    drain_v: float | None = Field(default=None, alias="drain", gt=0.0)
    current_a: float | None = Field(default=None, alias="current", gt=0.0)
    source: str | None = None
    status: Status | None = None

    @model_validator(mode="after")
    def _check_order(self) -> Limit:
        if self.low is None and self.high is None:
            raise ValueError("a limit needs min or max")
        if self.low is not None and self.high is not None and self.low >= self.high:
            raise ValueError("min must lie below max")
        return self

    def ends(self) -> tuple[float, float]:
        """Return lowest and highest, the missing one filled by assumption."""
        high = self.high if self.high is not None else _OPEN_RATIO * (self.low or 0.0)
        low = self.low
        if low is None:
            # A typical value is taken as the median in the logarithm.
            low = high * _OPEN_SHARE if self.typical is None else self.typical**2 / high
        return low, high


class PartType(Part):
    """One type's limits and where they were published."""

    names: tuple[str, ...] = Field(min_length=1)
    cutoff_v: Limit = Field(alias="cutoff")
    idss_ma: Limit = Field(alias="idss")
    on_resistance_ohm: Limit | None = Field(default=None, alias="on_resistance")
    gate_at_current_v: Limit | None = Field(default=None, alias="gate_at_current")
    source: str
    status: Status

    @property
    def name(self) -> str:
        """The type's first name."""
        return self.names[0]


class _Assumed(Part):
    """The shipped assumption's figures; see ``library/types.toml``."""

    cutoff: float = Field(gt=0.0)
    cutoff_spread: float = Field(gt=0.0)
    idss: float = Field(gt=0.0)
    beta_slope: float
    beta_spread: float = Field(gt=0.0)
    beta_batch: float = Field(gt=0.0)
    lambda_per_v: float = Field(alias="lambda", gt=0.0)
    lambda_spread: float = Field(ge=0.0)
    lambda_batch: float = Field(ge=0.0)


class _Library(Part):
    assumption: _Assumed
    types: tuple[PartType, ...] = Field(alias="type")


@dataclass(frozen=True)
class TypeAssumption:
    """What is taken for granted of a part before its readings.

    Logarithms are natural. ``ln beta = ln beta_median + slope x ln(VC / VC_median)``,
    with a spread from part to part and an uncertainty of the batch's median, which
    all its parts share.

    Parameters
    ----------
    name : str
        Type, or "generic".
    cutoff_v : float
        Median cut-off voltage, negative [V].
    cutoff_ln_spread : float
        Standard deviation of ``ln |VC|``.
    beta_a_per_v2 : float
        Median current factor at the median cut-off [A/V^2].
    beta_slope : float
        Change of ``ln beta`` with ``ln |VC|``.
    beta_ln_spread, beta_ln_batch : float
        Standard deviations of ``ln beta`` given the cut-off: part to part, and of the median.
    lambda_per_v : float
        Median channel-length modulation, 0 or more [1/V].
    lambda_ln_spread, lambda_ln_batch : float
        Standard deviations of ``ln lambda``; both 0 hold lambda fixed.
    basis : str
        Where it comes from, for the user.
    """

    name: str
    cutoff_v: float
    cutoff_ln_spread: float
    beta_a_per_v2: float
    beta_slope: float
    beta_ln_spread: float
    beta_ln_batch: float
    lambda_per_v: float
    lambda_ln_spread: float
    lambda_ln_batch: float
    basis: str


@dataclass(frozen=True)
class Finding:
    """One published limit held against one part.

    Parameters
    ----------
    quantity : str
        What was compared, in words.
    value, expanded : float
        The part's value and its expanded uncertainty (k = 2), magnitudes, SI units.
    low, high : float or None
        The limits, inclusive, SI units.
    unit : str
        Unit of these.
    verdict : {"inside", "doubtful", "outside"}
        Doubtful: outside, but not by more than the uncertainty.
    source, status : str
        Of the limit.
    """

    quantity: str
    value: float
    expanded: float
    low: float | None
    high: float | None
    unit: str
    verdict: Verdict
    source: str
    status: Status

    def sentence(self, label: str, type_name: str) -> str:
        """Return the finding for the user."""
        ends = []
        if self.low is not None:
            ends.append(f"at least {format_quantity(self.low, self.unit)}")
        if self.high is not None:
            ends.append(f"at most {format_quantity(self.high, self.unit)}")
        return (
            f"{label}: {self.quantity} {format_quantity(self.value, self.unit)} "
            f"+/- {format_quantity(self.expanded, self.unit, 2)} is {self.verdict} for a "
            f"{type_name} ({' and '.join(ends)}; {self.source}, {self.status})"
        )


@cache
def _library() -> _Library:
    text = files("sweepset.models.library").joinpath("types.toml").read_text(encoding="utf-8")
    try:
        return _Library.model_validate(tomllib.loads(text))
    except ValidationError as fault:  # a defect of the shipped file, not of the user's
        raise RuntimeError("\n".join(explain_faults(fault, "types.toml", _Library))) from None


def part_types() -> tuple[PartType, ...]:
    """Return the types whose limits are shipped."""
    return _library().types


def find_type(name: str) -> PartType | None:
    """Return the type of this name, capitals and blanks aside, or None."""
    wanted = "".join(name.split()).casefold()
    for part_type in part_types():
        if wanted in (known.casefold() for known in part_type.names):
            return part_type
    return None


def near_types(name: str) -> str:
    """Return a "; did you mean ...?" tail naming the nearest types, or nothing."""
    return near_names(name, [known for t in part_types() for known in t.names])


def generic_assumption() -> TypeAssumption:
    """Return what is assumed of a small-signal n-channel part of unknown type."""
    figures = _library().assumption
    jfet = Jfet.from_idss(-figures.cutoff, figures.idss * 1e-3)
    return TypeAssumption(
        name="generic",
        cutoff_v=-figures.cutoff,
        cutoff_ln_spread=figures.cutoff_spread,
        beta_a_per_v2=jfet.beta_a_per_v2,
        beta_slope=figures.beta_slope,
        beta_ln_spread=figures.beta_spread,
        beta_ln_batch=figures.beta_batch,
        lambda_per_v=figures.lambda_per_v,
        lambda_ln_spread=figures.lambda_spread,
        lambda_ln_batch=figures.lambda_batch,
        basis="assumed: any small-signal n-channel part",
    )


def type_assumption(part_type: PartType) -> TypeAssumption:
    """Return the assumption made from a type's limits.

    Medians are geometric means of the limits; a spread is a quarter of the
    logarithm of their ratio. What the limits of Idss leave beside the spread of
    the cut-off is shared by the batch; from part to part a batch is taken to be
    as alike as any.
    """
    generic = generic_assumption()
    low_v, high_v = part_type.cutoff_v.ends()
    low_ma, high_ma = part_type.idss_ma.ends()
    cutoff = -math.sqrt(low_v * high_v)
    spread = math.log(high_v / low_v) / _LIMITS_IN_SPREADS
    idss = math.sqrt(low_ma * high_ma) * 1e-3
    by_cutoff = (2.0 + generic.beta_slope) * spread
    whole = math.log(high_ma / low_ma) / _LIMITS_IN_SPREADS
    rest = math.sqrt(max(whole**2 - by_cutoff**2, 0.0))
    return replace(
        generic,
        name=part_type.name,
        cutoff_v=cutoff,
        cutoff_ln_spread=spread,
        beta_a_per_v2=Jfet.from_idss(cutoff, idss).beta_a_per_v2,
        # Selection by Idss may hide the batch's spread, never undo it; where the sheet
        # leaves one end open, the guess at it is worth less.
        beta_ln_batch=max(rest, 0.2 if part_type.idss_ma.high is not None else 0.5),
        basis=f"assumed: from the published limits of {part_type.name}",
    )


def check_limits(part_type: PartType, jfet: Jfet, covariance: Array) -> tuple[Finding, ...]:
    """Hold a measured part against its type's published limits.

    Parameters
    ----------
    part_type : PartType
        What the part claims to be.
    jfet : Jfet
        What its readings say.
    covariance : numpy.ndarray
        Of (VC, ln beta), shape (2, 2).

    Notes
    -----
    The comparison is made at the sheet's temperature, drain voltage and test
    current (check-values c18), limits inclusive, with the expanded uncertainty
    (c19). Near cut-off the law itself is uncertain: the difference between the
    part with its knee and without counts as uncertainty.
    """
    findings = []

    def hold(
        quantity: str, limit: Limit | None, scale: float, unit: str, law: Callable[[Jfet], float]
    ) -> None:
        if limit is None:
            return
        value = law(jfet)
        expanded = COVERAGE * _propagate(law, jfet, covariance)
        if unit == "V":
            expanded = math.hypot(expanded, value - law(replace(jfet, knee_v=0.0)))
        if unit == "ohm":
            expanded = math.hypot(expanded, ON_RESISTANCE_ALLOWANCE * value)
        low = None if limit.low is None else limit.low * scale
        high = None if limit.high is None else limit.high * scale
        findings.append(
            Finding(
                quantity,
                value,
                expanded,
                low,
                high,
                unit,
                _verdict(value, expanded, low, high),
                limit.source or part_type.source,
                limit.status or part_type.status,
            )
        )

    def gate(limit: Limit | None) -> Callable[[Jfet], float]:
        def law(part: Jfet) -> float:
            assert limit is not None
            assert limit.current_a is not None
            assert limit.drain_v is not None
            channel = Channels.of(part).at_celsius(SHEET_CELSIUS)
            return -float(channel.gate_for(limit.current_a, limit.drain_v)[0])

        return law

    def idss(part: Jfet) -> float:
        drain = part_type.idss_ma.drain_v
        return float(part.at_celsius(SHEET_CELSIUS).current(0.0, 10.0 if drain is None else drain))

    def on_resistance(part: Jfet) -> float:
        return float(part.at_celsius(SHEET_CELSIUS).channel_resistance(0.0))

    hold("cut-off", part_type.cutoff_v, 1.0, "V", gate(part_type.cutoff_v))
    hold("Idss", part_type.idss_ma, 1e-3, "A", idss)
    hold("on-resistance", part_type.on_resistance_ohm, 1.0, "ohm", on_resistance)
    at_current = part_type.gate_at_current_v
    if at_current is not None and at_current.current_a is not None:
        # Without that much Idss there is no such gate voltage below 0.
        name = f"gate voltage at {format_quantity(at_current.current_a, 'A')}"
        hold(name, at_current, 1.0, "V", gate(at_current))
    return tuple(findings)


def _verdict(value: float, expanded: float, low: float | None, high: float | None) -> Verdict:
    below = 0.0 if low is None else low - value
    above = 0.0 if high is None else value - high
    beyond = max(below, above)
    if beyond <= 0.0:
        return "inside"
    return "doubtful" if beyond <= expanded else "outside"


def _propagate(law: Callable[[Jfet], float], jfet: Jfet, covariance: Array) -> float:
    """Return the standard uncertainty of a law's value (JCGM 100:2008, eq. 13)."""
    step = 1e-5

    def moved(volts: float, ln_beta: float) -> float:
        return law(
            replace(
                jfet,
                cutoff_v=jfet.cutoff_v + volts,
                beta_a_per_v2=jfet.beta_a_per_v2 * math.exp(ln_beta),
            )
        )

    slope = np.array(
        [
            (moved(step, 0.0) - moved(-step, 0.0)) / (2.0 * step),
            (moved(0.0, step) - moved(0.0, -step)) / (2.0 * step),
        ]
    )
    return math.sqrt(max(float(slope @ covariance @ slope), 0.0))
