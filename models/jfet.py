"""One channel: the symmetric square law with a soft knee, and its temperature.

Signs and words: ``VC`` (``cutoff_v``) is this model's cut-off voltage and is
negative; ``VG`` is gate to source, ``v`` drain to source; drain current is
positive into the drain. The source sits on the reference rail.

The law, for both signs of ``v``::

    i(v) = beta (1 + lambda |v|) [P(u)^2 - P(u - v)^2],   u = VG - VC

With ``P(x) = max(0, x)`` this is the Shichman-Hodges model including reverse
operation. With ``P(x) = w ln(1 + exp(x/w))`` cut-off becomes gradual: the
*knee*, ``w = 2 n kT/q``, an assumption of this model with the exponential
tail that real channels show.

References
----------
H. Shichman and D. A. Hodges, "Modeling and simulation of insulated-gate
field-effect transistor switching circuits", IEEE Journal of Solid-State
Circuits SC-3 (1968) 285-289 (citation from memory).
D. A. Steck, "Analog and Digital Electronics", section 5.3, eqs 5.7-5.8 for the
exponential law below threshold.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]
ArrayLike = npt.ArrayLike

NOMINAL_CELSIUS = 27.0
ZERO_CELSIUS_K = 273.15
# CODATA 2018: k/q in volts per kelvin.
BOLTZMANN_OVER_CHARGE_V_PER_K = 1.380649e-23 / 1.602176634e-19
# Ideality 1 at 27 degrees Celsius: 2 kT/q = 51.7 mV.
DEFAULT_KNEE_V = 2.0 * BOLTZMANN_OVER_CHARGE_V_PER_K * (NOMINAL_CELSIUS + ZERO_CELSIUS_K)
# Usual values for n-channel silicon JFETs (common data-book figures, from memory):
# cut-off grows more negative by 2.2 mV/K, the current factor falls as T^-2.1.
DEFAULT_CUTOFF_V_PER_K = -2.2e-3
DEFAULT_BETA_EXPONENT = -2.1


def overdrive(x_v: ArrayLike, knee_v: ArrayLike) -> Array:
    """Return the positive part ``P(x)``, softened by the knee.

    Parameters
    ----------
    x_v : array_like
        Overdrive, gate voltage above cut-off, any shape [V].
    knee_v : array_like
        Knee width ``w``, broadcast against `x_v`, 0 or more [V]; 0 gives ``max(0, x)``.
    """
    x, w = np.broadcast_arrays(np.asarray(x_v, float), np.asarray(knee_v, float))
    safe = np.where(w > 0.0, w, 1.0)
    soft = np.maximum(x, 0.0) + safe * np.log1p(np.exp(-np.abs(x) / safe))
    return np.asarray(np.where(w > 0.0, soft, np.maximum(x, 0.0)))


def overdrive_slope(x_v: ArrayLike, knee_v: ArrayLike) -> Array:
    """Return ``P'(x)``, between 0 and 1; at knee 0 and ``x = 0`` it is 0.

    Parameters are those of :func:`overdrive`.
    """
    x, w = np.broadcast_arrays(np.asarray(x_v, float), np.asarray(knee_v, float))
    safe = np.where(w > 0.0, w, 1.0)
    z = np.exp(-np.abs(x) / safe)
    soft = np.where(x >= 0.0, 1.0, z) / (1.0 + z)
    return np.where(w > 0.0, soft, (x > 0.0).astype(float))


def overdrive_inverse(p_v: ArrayLike, knee_v: ArrayLike) -> Array:
    """Return ``x`` with ``P(x) = p``.

    Parameters
    ----------
    p_v : array_like
        Softened overdrive, more than 0, any shape [V].
    knee_v : array_like
        Knee width, broadcast against `p_v`, 0 or more [V].

    Raises
    ------
    ValueError
        If any of `p_v` is not positive.
    """
    p, w = np.broadcast_arrays(np.asarray(p_v, float), np.asarray(knee_v, float))
    if not np.all(p > 0.0):
        raise ValueError(f"softened overdrive must be positive, got {p}")
    safe = np.where(w > 0.0, w, 1.0)
    # x = w ln(exp(p/w) - 1), arranged so that neither end overflows.
    return np.asarray(np.where(w > 0.0, p + safe * np.log(-np.expm1(-p / safe)), p))


def drain_current(
    gate_v: ArrayLike,
    drain_v: ArrayLike,
    cutoff_v: ArrayLike,
    beta_a_per_v2: ArrayLike,
    lambda_per_v: ArrayLike,
    knee_v: ArrayLike,
) -> Array:
    """Return the drain current of many parts at once, the law of this module [A].

    Parameters
    ----------
    gate_v, drain_v : array_like
        Gate to source and drain to source [V].
    cutoff_v, beta_a_per_v2, lambda_per_v, knee_v : array_like
        Parameters as in :class:`Jfet`. All arguments broadcast together.
    """
    u = np.asarray(gate_v, float) - np.asarray(cutoff_v, float)
    v = np.asarray(drain_v, float)
    square = overdrive(u, knee_v) ** 2 - overdrive(u - v, knee_v) ** 2
    length = 1.0 + np.asarray(lambda_per_v, float) * np.abs(v)
    return np.asarray(np.asarray(beta_a_per_v2, float) * length * square)


def temperature_shift(
    celsius: ArrayLike,
    cutoff_v_per_k: float = DEFAULT_CUTOFF_V_PER_K,
    beta_exponent: float = DEFAULT_BETA_EXPONENT,
) -> tuple[Array, Array, Array]:
    """Return what a temperature adds to cut-off [V], and times current factor and knee.

    Parameters
    ----------
    celsius : array_like
        Channel temperature, above -273.15 [degrees Celsius].
    cutoff_v_per_k : float
        Drift of the cut-off voltage [V/K].
    beta_exponent : float
        The current factor goes as absolute temperature to this power.
    """
    kelvin = np.asarray(celsius, float) + ZERO_CELSIUS_K
    nominal = NOMINAL_CELSIUS + ZERO_CELSIUS_K
    ratio = kelvin / nominal
    return cutoff_v_per_k * (kelvin - nominal), ratio**beta_exponent, ratio


@dataclass(frozen=True)
class Jfet:
    """One n-channel part, described at the nominal 27 degrees Celsius.

    Parameters
    ----------
    cutoff_v : float
        Cut-off voltage ``VC``, negative [V].
    beta_a_per_v2 : float
        Current factor, positive [A/V^2]; ``Idss = beta VC^2`` at knee 0.
    lambda_per_v : float
        Channel-length modulation, 0 or more [1/V].
    knee_v : float
        Knee width ``w`` at 27 degrees, 0 or more [V].
    cutoff_v_per_k : float
        Drift of the cut-off voltage [V/K].
    beta_exponent : float
        The current factor goes as absolute temperature to this power.
    label : str
        The part's name on the tray.

    Raises
    ------
    ValueError
        If a parameter is outside its range.
    """

    cutoff_v: float
    beta_a_per_v2: float
    lambda_per_v: float = 0.0
    knee_v: float = DEFAULT_KNEE_V
    cutoff_v_per_k: float = DEFAULT_CUTOFF_V_PER_K
    beta_exponent: float = DEFAULT_BETA_EXPONENT
    label: str = ""

    def __post_init__(self) -> None:
        if not (math.isfinite(self.cutoff_v) and self.cutoff_v < 0.0):
            raise ValueError(f"cut-off voltage must be negative, got {self.cutoff_v} V")
        if not (math.isfinite(self.beta_a_per_v2) and self.beta_a_per_v2 > 0.0):
            raise ValueError(f"current factor must be positive, got {self.beta_a_per_v2} A/V^2")
        if not (math.isfinite(self.lambda_per_v) and self.lambda_per_v >= 0.0):
            raise ValueError(f"lambda must be 0 or more, got {self.lambda_per_v} 1/V")
        if not (math.isfinite(self.knee_v) and self.knee_v >= 0.0):
            raise ValueError(f"knee must be 0 or more, got {self.knee_v} V")

    @classmethod
    def from_idss(
        cls, cutoff_v: float, idss_a: float, *, drain_v: float | None = None, **others: float
    ) -> Jfet:
        """Return the part with this cut-off voltage and this Idss.

        Parameters
        ----------
        cutoff_v : float
            Cut-off voltage, negative [V].
        idss_a : float
            Drain current with the gate at the source, positive [A].
        drain_v : float, optional
            Drain voltage of the Idss test [V]. Left out, the test is taken as
            well into saturation with lambda not counted.
        **others
            Further parameters of :class:`Jfet`.
        """
        unit = cls(cutoff_v=cutoff_v, beta_a_per_v2=1.0, **others)  # type: ignore[arg-type]
        if drain_v is None:
            per_beta = float(overdrive(-cutoff_v, unit.knee_v)) ** 2
        else:
            per_beta = float(unit.current(0.0, drain_v))
        return replace(unit, beta_a_per_v2=idss_a / per_beta)

    @property
    def idss_a(self) -> float:
        """Saturated current at zero gate voltage, lambda not counted [A]."""
        return self.beta_a_per_v2 * float(overdrive(-self.cutoff_v, self.knee_v)) ** 2

    def at_celsius(self, celsius: float) -> Jfet:
        """Return this part as it behaves at another temperature.

        The result's own nominal point is moved with it: use it only at `celsius`.

        Parameters
        ----------
        celsius : float
            Channel temperature, above -273.15 [degrees Celsius].
        """
        added_v, factor, ratio = temperature_shift(celsius, self.cutoff_v_per_k, self.beta_exponent)
        return replace(
            self,
            cutoff_v=self.cutoff_v + float(added_v),
            beta_a_per_v2=self.beta_a_per_v2 * float(factor),
            knee_v=self.knee_v * float(ratio),
        )

    def current(self, gate_v: ArrayLike, drain_v: ArrayLike) -> Array:
        """Return the drain current [A].

        Parameters
        ----------
        gate_v, drain_v : array_like
            Gate to source and drain to source, broadcast together [V].
        """
        return drain_current(
            gate_v, drain_v, self.cutoff_v, self.beta_a_per_v2, self.lambda_per_v, self.knee_v
        )

    def transconductance(self, gate_v: ArrayLike, drain_v: ArrayLike) -> Array:
        """Return gm, the slope of current with gate voltage at fixed drain voltage [S]."""
        u = np.asarray(gate_v, float) - self.cutoff_v
        v = np.asarray(drain_v, float)
        slope = overdrive(u, self.knee_v) * overdrive_slope(u, self.knee_v)
        slope = slope - overdrive(u - v, self.knee_v) * overdrive_slope(u - v, self.knee_v)
        length = 1.0 + self.lambda_per_v * np.abs(v)
        return np.asarray(2.0 * self.beta_a_per_v2 * length * slope)

    def output_conductance(self, gate_v: ArrayLike, drain_v: ArrayLike) -> Array:
        """Return gds, the slope of current with drain voltage at fixed gate voltage [S]."""
        u = np.asarray(gate_v, float) - self.cutoff_v
        v = np.asarray(drain_v, float)
        drain_side = overdrive(u - v, self.knee_v)
        square = overdrive(u, self.knee_v) ** 2 - drain_side**2
        slope = 2.0 * drain_side * overdrive_slope(u - v, self.knee_v)
        lam = self.lambda_per_v
        whole = (1.0 + lam * np.abs(v)) * slope + lam * np.sign(v) * square
        return np.asarray(self.beta_a_per_v2 * whole)

    def channel_conductance(self, gate_v: ArrayLike) -> Array:
        """Return the small-signal channel conductance at zero drain voltage [S]."""
        return self.output_conductance(gate_v, 0.0)

    def channel_conductance_slope(self, gate_v: ArrayLike) -> Array:
        """Return the slope of the channel conductance with gate voltage at zero drain [S/V]."""
        u = np.asarray(gate_v, float) - self.cutoff_v
        p, slope = overdrive(u, self.knee_v), overdrive_slope(u, self.knee_v)
        bend = slope * (1.0 - slope) / self.knee_v if self.knee_v > 0.0 else 0.0
        return np.asarray(2.0 * self.beta_a_per_v2 * (slope**2 + p * bend))

    def channel_resistance(self, gate_v: ArrayLike) -> Array:
        """Return the small-signal channel resistance at zero drain voltage [ohm].

        Infinite where the channel is wholly off (knee 0, gate at or beyond cut-off) or so far
        off that the resistance exceeds what a double holds.
        """
        conductance = self.channel_conductance(gate_v)
        with np.errstate(divide="ignore", over="ignore"):
            return 1.0 / conductance
