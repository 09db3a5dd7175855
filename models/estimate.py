"""Readings to parameters: one estimate for one, two or many readings per part.

Each part's parameters ``ln |VC|``, ``ln beta`` and ``ln lambda`` start from the
type assumption and are corrected by its readings, weighted by their uncertainty
(generalised least squares with a prior, solved by Gauss-Newton). One reading
leaves the assumption much to say, two settle cut-off and current factor, three or
more are fitted; the equations are the same.

Errors common to many parts - the meter's scale, a resistor, the reference, what
is not known of the whole batch - are carried as common factors: the covariance of
all parts together is the block of each part by itself plus ``F F^T``. Between
parts they mostly cancel, so the parts' differences are known far better than
their values.

References
----------
JCGM 100:2008, "Guide to the expression of uncertainty in measurement", 5.1.2 and
5.2.2: propagation with correlation.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
import numpy.typing as npt

from .errors import InputError, near_names
from .fixture import Channels, Conditions, Reading
from .jfet import DEFAULT_KNEE_V, Jfet
from .parttypes import (
    TypeAssumption,
    find_type,
    generic_assumption,
    type_assumption,
)
from .tray import Tray, TrayPart

Array = npt.NDArray[np.float64]

# Parts with two or more readings needed before the tray itself teaches how the
# current factor goes with the cut-off.
ENOUGH_TO_LEARN = 8
# A chance this small of so bad a fit by honest errors makes readings contradict.
CONTRADICTION_CHANCE = 1e-4
# The standard normal deviation that belongs to a median absolute deviation.
_MAD_TO_SPREAD = 1.4826
# A median of n normal values is this much less certain than their mean.
_MEDIAN_LOSS = 1.2533
# Below this spread of ln |VC| a tray cannot teach the slope.
_LEAST_LEVER = 0.04
# Steps of differences: of the parameters, and the share of a common error.
_STEP = 1e-4
_SMALL = 1e-2
# Where the Gauss-Newton iteration counts as settled, in standard errors of the result.
_SETTLED = 1e-5
# A step that takes less than this share off a part's misfit is not worth another.
_WORTH = 1e-7


@dataclass(frozen=True)
class PartReport:
    """What the readings of one part said, beside its parameters.

    Parameters
    ----------
    label : str
        The part.
    basis : str
        What the estimate rests on, in words.
    residuals : dict of str to float
        By reading: shown less fitted [V or A].
    bounds : tuple of str
        Readings that are bounds only.
    misfit : float
        Weighted sum of squares of residuals and of the departure from what the type
        assumption says of the current factor; about the number of readings if all is well.
    contradiction : str
        Names the readings that do not go together; empty if they do.
    lambda_told : bool
        Whether the readings, not the assumption, tell lambda.
    """

    label: str
    basis: str
    residuals: dict[str, float]
    bounds: tuple[str, ...]
    misfit: float
    contradiction: str
    lambda_told: bool


@dataclass(frozen=True)
class TrayEstimate:
    """All parts' parameters at 27 degrees Celsius, with one joint covariance.

    Parameters
    ----------
    labels : tuple of str
        The parts.
    cutoff_v, ln_beta, lambda_per_v : numpy.ndarray
        Means, shape (parts,): cut-off voltage [V], natural logarithm of the current
        factor in A/V^2, channel-length modulation [1/V].
    own_covariance : numpy.ndarray
        Of (VC, ln beta), from errors of each part alone, shape (parts, 2, 2).
    common_factors : numpy.ndarray
        What one standard uncertainty of each common error does to (VC, ln beta),
        shape (parts, 2, factors).
    common_names : tuple of str
        What the common errors are.
    knee_v : float
        Knee assumed for all [V].
    reports : tuple of PartReport
        One per part.
    assumptions : dict of str to TypeAssumption
        By the tray's type name: what was assumed or learned.
    """

    labels: tuple[str, ...]
    cutoff_v: Array
    ln_beta: Array
    lambda_per_v: Array
    own_covariance: Array
    common_factors: Array
    common_names: tuple[str, ...]
    knee_v: float
    reports: tuple[PartReport, ...]
    assumptions: dict[str, TypeAssumption]

    def index(self, label: str) -> int:
        """Return a part's place in the arrays.

        Raises
        ------
        InputError
            If there is no such part; near ones are named.
        """
        try:
            return self.labels.index(label)
        except ValueError:
            pass
        folded = label.strip().casefold()
        for place, known in enumerate(self.labels):
            if known.casefold() == folded:
                return place
        raise InputError(f"no part {label!r} on this tray{near_names(label, self.labels)}")

    def jfet(self, label: str) -> Jfet:
        """Return a part with its mean parameters."""
        place = self.index(label)
        return Jfet(
            cutoff_v=float(self.cutoff_v[place]),
            beta_a_per_v2=math.exp(float(self.ln_beta[place])),
            lambda_per_v=float(self.lambda_per_v[place]),
            knee_v=self.knee_v,
            label=self.labels[place],
        )

    def jfets(self, labels: Sequence[str]) -> tuple[Jfet, ...]:
        """Return several parts, in the order given."""
        return tuple(self.jfet(label) for label in labels)

    def report(self, label: str) -> PartReport:
        """Return what the readings of a part said."""
        return self.reports[self.index(label)]

    def covariance(self, labels: Sequence[str]) -> Array:
        """Return the covariance of several parts together.

        Returns
        -------
        numpy.ndarray
            Of (VC, ln beta) of the first part, of the second, and so on; shape
            (2 parts, 2 parts), [V^2, V, 1].
        """
        at = [self.index(label) for label in labels]
        factors = self.common_factors[at].reshape(2 * len(at), -1)
        whole = factors @ factors.T
        for n, place in enumerate(at):
            # Named twice, a part is one part: its own errors are the same.
            for m, other in enumerate(at):
                if place == other:
                    whole[2 * n : 2 * n + 2, 2 * m : 2 * m + 2] += self.own_covariance[place]
        return np.asarray(whole)

    def standard_errors(self) -> Array:
        """Return the standard errors of (VC, ln beta), shape (parts, 2)."""
        own = np.einsum("pii->pi", self.own_covariance)
        return np.asarray(np.sqrt(own + np.sum(self.common_factors**2, axis=2)))

    def difference_errors(self, label: str, other: str) -> Array:
        """Return the standard errors of two parts' difference in (VC, ln beta), shape (2,)."""
        joint = self.covariance([label, other])
        turn = np.hstack([np.eye(2), -np.eye(2)])
        return np.asarray(np.sqrt(np.diag(turn @ joint @ turn.T)))

    def draw(self, count: int, rng: np.random.Generator, labels: Sequence[str]) -> Array:
        """Draw parameters that the readings allow.

        Parameters
        ----------
        count : int
            Number of draws.
        rng : numpy.random.Generator
            Source of chance.
        labels : sequence of str
            Parts, each named once.

        Returns
        -------
        numpy.ndarray
            (VC, ln beta), shape (draws, parts, 2).
        """
        at = [self.index(label) for label in labels]
        root = _root(self.own_covariance[at])
        own = np.einsum("pij,dpj->dpi", root, rng.standard_normal((count, len(at), 2)))
        shared = rng.standard_normal((count, self.common_factors.shape[2]))
        common = np.einsum("pif,df->dpi", self.common_factors[at], shared)
        mean = np.stack([self.cutoff_v[at], self.ln_beta[at]], axis=-1)
        return np.asarray(mean + own + common)


@dataclass(frozen=True)
class ResistanceBand:
    """Channel resistance against gate voltage, with its band; each of the gate's shape [ohm]."""

    gate_v: Array
    resistance_ohm: Array
    low_ohm: Array
    high_ohm: Array


def resistance_band(
    estimate: TrayEstimate,
    label: str,
    gate_v: npt.ArrayLike,
    *,
    coverage: float = 2.0,
    celsius: float | None = None,
) -> ResistanceBand:
    """Return a part's channel resistance with the band its readings leave.

    Parameters
    ----------
    estimate : TrayEstimate
        The tray.
    label : str
        The part.
    gate_v : array_like
        Gate voltages, any shape [V].
    coverage : float
        Half-width of the band in standard uncertainties; 2 is about 95 %.
    celsius : float, optional
        Channel temperature; 27 degrees when left out.

    Notes
    -----
    The logarithm of the resistance is propagated to first order: far below cut-off,
    and for a part without readings, the true band is less even than this one.
    """
    gate = np.asarray(gate_v, float)
    jfet = estimate.jfet(label)
    covariance = estimate.covariance([label])

    def ln_resistance(part: Jfet) -> Array:
        moved = part if celsius is None else part.at_celsius(celsius)
        return np.asarray(np.log(moved.channel_resistance(gate)))

    step = 1e-5
    ends = [ln_resistance(replace(jfet, cutoff_v=jfet.cutoff_v + move)) for move in (-step, step)]
    by_cutoff = (ends[1] - ends[0]) / (2.0 * step)
    # Resistance goes as 1/beta, so its logarithm falls by what ln beta rises.
    variance = (
        by_cutoff**2 * covariance[0, 0] - 2.0 * by_cutoff * covariance[0, 1] + covariance[1, 1]
    )
    middle = ln_resistance(jfet)
    half = coverage * np.sqrt(np.maximum(variance, 0.0))
    return ResistanceBand(gate, np.exp(middle), np.exp(middle - half), np.exp(middle + half))


def estimate_tray(
    tray: Tray,
    *,
    knee_v: float = DEFAULT_KNEE_V,
    assumption: TypeAssumption | None = None,
    learn: bool = True,
) -> TrayEstimate:
    """Return all parts' parameters from a tray's readings.

    Parameters
    ----------
    tray : Tray
        The readings.
    knee_v : float
        Knee of the channels at 27 degrees, 0 or more [V]; readings do not tell it.
    assumption : TypeAssumption, optional
        Taken for every part in place of its type's.
    learn : bool
        Whether parts with two readings teach the current factor's median and spread
        for the parts of their type with one. A part without readings (soldered in,
        perhaps of another batch) always has the shipped assumption.

    Raises
    ------
    InputError
        If the tray has no parts.
    """
    if not tray.parts:
        raise InputError(f"{tray.path}: no parts on this tray; log some readings first")
    types = [part.type_name for part in tray.parts]
    shipped = {name: assumption or _shipped(name) for name in dict.fromkeys(types)}
    problem = _Problem(tray, knee_v)
    prior = _Prior.of(types, shipped)
    state = _solve(problem, prior)
    # What is not known of the batch shows in every part alike; where a part's own
    # readings do not tell its lambda, an odd current factor must not be put down to it.
    told = _lambda_told(prior, state)
    prior = _hold_lambda(prior, ~told)
    used = dict(shipped)
    if learn and assumption is None:
        prior, used = _learn(tray, types, shipped, prior, state)
    state = _solve(problem, prior)
    return _result(tray, problem, state, knee_v, used, told)


def _shipped(type_name: str) -> TypeAssumption:
    known = find_type(type_name) if type_name else None
    return generic_assumption() if known is None else type_assumption(known)


@dataclass(frozen=True)
class _Prior:
    """The type assumptions of all parts, in (ln |VC|, ln beta, ln lambda).

    mean (parts, 3); own and whole: roots L with covariance L L^T, lower triangular,
    (parts, 3, 3); common: (parts, 3, factors), the batch's share of it.
    """

    mean: Array
    own: Array
    whole: Array
    common: Array
    names: tuple[str, ...]

    @classmethod
    def of(cls, types: Sequence[str], assumptions: dict[str, TypeAssumption]) -> _Prior:
        count = len(types)
        mean, own, whole = np.zeros((count, 3)), np.zeros((count, 3, 3)), np.zeros((count, 3, 3))
        common = np.zeros((count, 3, 2 * len(assumptions)))
        names: list[str] = []
        for place, (name, told) in enumerate(assumptions.items()):
            at = np.array([n for n, kind in enumerate(types) if kind == name])
            mean[at] = _mean_of(told)
            own[at] = _root_of(told, told.beta_ln_spread, told.lambda_ln_spread)
            whole[at] = _root_of(
                told,
                math.hypot(told.beta_ln_spread, told.beta_ln_batch),
                math.hypot(told.lambda_ln_spread, told.lambda_ln_batch),
            )
            common[at, 1, 2 * place] = told.beta_ln_batch
            # Readings go with lambda itself, which spreads more than its logarithm says.
            square = told.lambda_ln_batch**2
            common[at, 2, 2 * place + 1] = math.sqrt(math.expm1(square) * math.exp(square))
            shown = told.name if name == "" else name
            names += [f"current factor of the batch ({shown})", f"lambda of the batch ({shown})"]
        return cls(mean, own, whole, common, tuple(names))


def _lambda_told(prior: _Prior, state: _State) -> npt.NDArray[np.bool_]:
    """Tell which parts' readings, not the assumption, settle lambda; shape (parts,)."""
    assumed = prior.whole[:, 2, 2]
    left = np.sqrt(state.own[:, 2, 2] + np.sum(state.common[:, 2] ** 2, axis=1))
    return np.asarray((assumed > 0.0) & (left < 0.5 * assumed))


def _hold_lambda(prior: _Prior, held: npt.NDArray[np.bool_]) -> _Prior:
    """Return the assumption with these parts' lambda free only as far as parts differ."""
    whole = prior.whole.copy()
    whole[held, 2, 2] = prior.own[held, 2, 2]
    return replace(prior, whole=whole)


def _mean_of(told: TypeAssumption) -> Array:
    lam = math.log(told.lambda_per_v) if told.lambda_per_v > 0.0 else -math.inf
    return np.array([math.log(-told.cutoff_v), math.log(told.beta_a_per_v2), lam])


def _root_of(told: TypeAssumption, beta: float, lam: float) -> Array:
    root = np.diag([told.cutoff_ln_spread, beta, lam if told.lambda_per_v > 0.0 else 0.0])
    root[1, 0] = told.beta_slope * told.cutoff_ln_spread
    return np.asarray(root)


class _Problem:
    """The readings of a tray as arrays: columns are the fixture's readings that occur.

    shown, present, bound: (parts, readings). own: covariance of each part's readings from
    errors of its own, (parts, readings, readings). common: (parts, readings, factors).
    """

    def __init__(self, tray: Tray, knee_v: float) -> None:
        self.tray = tray
        self.knee_v = knee_v
        self.names = [
            name for name in tray.fixture.readings if any(name in p.readings for p in tray.parts)
        ]
        self.kinds: list[Reading] = [tray.fixture.readings[name] for name in self.names]
        count, width = len(tray.parts), len(self.names)
        self.shown = np.zeros((count, width))
        self.present = np.zeros((count, width), bool)
        self.bound = np.zeros((count, width), bool)
        self.conditions: list[Conditions] = []
        for column, name in enumerate(self.names):
            usual = self.kinds[column].conditions(tray.fixture.celsius)
            sittings: list[Conditions] = []
            for row, part in enumerate(tray.parts):
                found = part.readings.get(name)
                sittings.append(usual if found is None else found.conditions)
                if found is not None:
                    self.present[row, column] = True
                    self.bound[row, column] = found.bound
                    self.shown[row, column] = found.value
            self.conditions.append(_stacked(sittings))

    def channels(self, theta: Array) -> Channels:
        return Channels(
            -np.exp(theta[:, 0]),
            np.exp(theta[:, 1]),
            np.exp(theta[:, 2]),
            np.full(len(theta), self.knee_v),
        )

    def predict(self, theta: Array) -> Array:
        """Return the readings expected of these parameters; 0 where none was taken."""
        channels = self.channels(theta)
        columns = [
            kind.predict(channels, at) for kind, at in zip(self.kinds, self.conditions, strict=True)
        ]
        whole = np.stack(columns, axis=1) if columns else np.zeros((len(theta), 0))
        return np.asarray(np.where(self.present, whole, 0.0))

    def slopes(self, theta: Array) -> Array:
        """Return the readings' slopes with the parameters, (parts, readings, 3)."""
        found = np.zeros((*self.present.shape, 3))
        for place in range(3):
            move = np.zeros(3)
            move[place] = _STEP
            found[:, :, place] = (self.predict(theta + move) - self.predict(theta - move)) / (
                2.0 * _STEP
            )
        return found

    def errors(self, theta: Array) -> tuple[Array, Array, tuple[str, ...]]:
        """Return own covariance, common factors and their names, for readings about `theta`."""
        count, width = self.present.shape
        channels = self.channels(theta)
        own = np.zeros((count, width, width))
        by_factor: dict[str, Array] = {}
        heat = np.zeros((count, width))
        celsius_u = self.tray.fixture.celsius_accuracy_k / math.sqrt(3.0)
        for column, (kind, at) in enumerate(zip(self.kinds, self.conditions, strict=True)):
            own[:, column, column] = kind.meter.own_u() ** 2
            usual = kind.predict(channels, at)
            warmer = replace(at, celsius=np.asarray(at.celsius) + 1.0)
            cooler = replace(at, celsius=np.asarray(at.celsius) - 1.0)
            heat[:, column] = (
                (kind.predict(channels, warmer) - kind.predict(channels, cooler)) * celsius_u / 2.0
            )
            for source in kind.error_sources(self.shown[:, column], at):
                # A small part of the error, so that the law's curve does not count.
                slightly = _toward(at, source.conditions, _SMALL)
                moved = np.asarray(source.shown, float)
                moved = moved + (kind.predict(channels, slightly) - usual) / _SMALL
                for name, shares in _groups(source.name, source.group, self.present[:, column]):
                    table = by_factor.setdefault(name, np.zeros((count, width)))
                    table[:, column] += np.where(shares, moved, 0.0)
        # One part's readings are taken at one temperature, known as well for all of them.
        own += heat[:, :, None] * heat[:, None, :]
        both = self.present[:, :, None] & self.present[:, None, :]
        own = np.where(both, own, 0.0)
        tables = {name: np.where(self.present, table, 0.0) for name, table in by_factor.items()}
        tables = {name: table for name, table in tables.items() if np.any(table)}
        common = np.stack(list(tables.values()), axis=2) if tables else np.zeros((count, width, 0))
        return own, common, tuple(tables)


def _stacked(sittings: Sequence[Conditions]) -> Conditions:
    def column(name: str) -> Array:
        return np.array([float(np.asarray(getattr(at, name))) for at in sittings])

    return Conditions(
        column("celsius"),
        column("supply_v"),
        column("reference_v"),
        column("resistor_ohm"),
        column("current_a"),
    )


def _toward(start: Conditions, end: Conditions, share: float) -> Conditions:
    """Return conditions a share of the way from one to another."""

    def part(name: str) -> Array:
        low, high = np.asarray(getattr(start, name)), np.asarray(getattr(end, name))
        return np.asarray(low + share * (high - low))

    return Conditions(*(part(name.name) for name in fields(Conditions)))


def _groups(
    name: str, group: Array | None, present: npt.NDArray[np.bool_]
) -> list[tuple[str, npt.NDArray[np.bool_]]]:
    """Return the factors one source splits into, with the parts that share each."""
    if group is None:
        return [(name, present)]
    return [
        (f"{name} {', '.join(f'{v:.6g}' for v in values)}", np.all(group == values, axis=1))
        for values in np.unique(group[present], axis=0)
    ]


@dataclass(frozen=True)
class _State:
    """Where the estimate settled.

    theta (parts, 3), its own covariance (parts, 3, 3) and common factors (parts, 3, factors);
    residual (parts, readings) and weight, the readings' inverse covariance (parts, readings,
    readings); pull (parts, 3), the departure from the assumption in its standard deviations.
    """

    theta: Array
    own: Array
    common: Array
    common_names: tuple[str, ...]
    residual: Array
    weight: Array
    pull: Array


def _solve(problem: _Problem, prior: _Prior) -> _State:
    """Return the estimate: Gauss-Newton in deviations of the assumption, all parts at once."""
    count = len(prior.mean)
    # Deviations z from the assumption, theta = mean + L z, keep every case well
    # conditioned: no reading, one, many, and lambda held fixed.
    z = np.zeros((count, 3))
    own, common, names = problem.errors(prior.mean)
    shown, extra = problem.shown, np.zeros_like(problem.shown)
    weight = _weights(own, common, extra, problem.present)
    for round_ in range(4):
        z = _descend(problem, prior, z, shown, weight)
        theta = _theta(prior, z)
        own, common, names = problem.errors(theta)
        if np.any(problem.bound):
            shown, extra = _match_bounds(problem, prior, z, own, common, shown, extra)
        fresh = _weights(own, common, extra, problem.present)
        settled = round_ > 0 and np.allclose(fresh, weight, rtol=1e-6)
        weight = fresh
        if settled:
            break
    z = _descend(problem, prior, z, shown, weight)
    theta = _theta(prior, z)
    slopes = problem.slopes(theta) @ prior.whole
    inner = np.linalg.inv(np.eye(3) + np.einsum("pri,prs,psj->pij", slopes, weight, slopes))
    gain = prior.whole @ inner @ np.swapaxes(slopes, 1, 2) @ weight
    # What an error of the assumption leaves: L inner L^-1 times it, without dividing by
    # a spread that may be 0.
    turned = np.eye(3) - gain @ problem.slopes(theta)
    # A bound is no reading: what it adds to the errors is how loosely it binds.
    loose = np.zeros_like(own)
    np.einsum("prr->pr", loose)[:] = extra
    own_theta = gain @ (own + loose) @ np.swapaxes(gain, 1, 2)
    kept = turned @ prior.own
    own_theta = own_theta + kept @ np.swapaxes(kept, 1, 2)
    common_theta = np.concatenate([gain @ common, turned @ prior.common], axis=2)
    return _State(
        theta,
        own_theta,
        common_theta,
        names + prior.names,
        np.where(problem.present, shown - problem.predict(theta), 0.0),
        weight,
        z,
    )


def _theta(prior: _Prior, z: Array) -> Array:
    return np.asarray(prior.mean + np.einsum("pij,pj->pi", prior.whole, z))


def _weights(own: Array, common: Array, extra: Array, present: npt.NDArray[np.bool_]) -> Array:
    """Return each part's inverse covariance of readings; 0 where there is none."""
    whole = own + common @ np.swapaxes(common, 1, 2)
    diagonal = np.einsum("prr->pr", whole)
    diagonal += extra
    diagonal[~present] = 1.0
    weight = np.linalg.inv(whole) if whole.size else whole
    both = present[:, :, None] & present[:, None, :]
    return np.asarray(np.where(both, weight, 0.0))


def _objective(problem: _Problem, prior: _Prior, z: Array, shown: Array, weight: Array) -> Array:
    residual = np.where(problem.present, shown - problem.predict(_theta(prior, z)), 0.0)
    return np.asarray(np.einsum("pr,prs,ps->p", residual, weight, residual) + np.sum(z**2, axis=1))


def _descend(problem: _Problem, prior: _Prior, z: Array, shown: Array, weight: Array) -> Array:
    """Return the deviations of least objective."""
    value = _objective(problem, prior, z, shown, weight)
    for _ in range(60):
        theta = _theta(prior, z)
        residual = np.where(problem.present, shown - problem.predict(theta), 0.0)
        slopes = problem.slopes(theta) @ prior.whole
        curvature = np.eye(3) + np.einsum("pri,prs,psj->pij", slopes, weight, slopes)
        downhill = np.einsum("pri,prs,ps->pi", slopes, weight, residual) - z
        step = np.linalg.solve(curvature, downhill[:, :, None])[:, :, 0]
        # A far start must not throw the logarithms out of all reason.
        reach = np.max(np.abs(np.einsum("pij,pj->pi", prior.whole, step)), axis=1)
        step = step * np.minimum(1.0, 1.0 / np.maximum(reach, 1e-300))[:, None]
        left = np.sqrt(np.einsum("pi,pij,pj->p", step, curvature, step))
        if np.max(left, initial=0.0) < _SETTLED:
            return z
        share = np.ones(len(z))
        for _ in range(12):
            tried = z + share[:, None] * step
            new = _objective(problem, prior, tried, shown, weight)
            worse = ~(new <= value * (1.0 + 1e-9) + 1e-9)
            if not np.any(worse):
                break
            share = np.where(worse, share / 2.0, share)
        better = new <= value * (1.0 + 1e-9) + 1e-9
        # Readings that contradict one another leave a long, bent, all but level valley.
        gained = value - new > _WORTH * (1.0 + value)
        z = np.where(better[:, None], tried, z)
        value = np.where(better, new, value)
        if not np.any(better & gained & (left * share >= _SETTLED)):
            return z
    return z


def _match_bounds(
    problem: _Problem,
    prior: _Prior,
    z: Array,
    own: Array,
    common: Array,
    shown: Array,
    extra: Array,
) -> tuple[Array, Array]:
    """Turn each bound into a reading and a looseness that leave the same mean and spread.

    What the part's other readings and the assumption say of the bounded reading is
    taken as a normal distribution and cut off at the bound; a reading with this
    value and variance takes the one into the other's mean and variance.
    """
    from scipy.special import log_ndtr

    shown, extra = shown.copy(), extra.copy()
    theta = _theta(prior, z)
    predicted, slopes = problem.predict(theta), problem.slopes(theta)
    whole = own + common @ np.swapaxes(common, 1, 2)
    for row, column in zip(*np.nonzero(problem.bound), strict=True):
        others = problem.present[row] & (np.arange(len(problem.names)) != column)
        spread = slopes[row] @ prior.whole[row]
        # Mean and covariance of (z) from the others alone, about the present point.
        weight = np.linalg.inv((whole[row] + np.diag(extra[row]))[np.ix_(others, others)])
        side = spread[others]
        covariance = np.linalg.inv(np.eye(3) + side.T @ weight @ side)
        residual = (shown - predicted)[row, others]
        mean = covariance @ (side.T @ weight @ (residual + side @ z[row]))
        middle = predicted[row, column] + spread[column] @ (mean - z[row])
        variance = spread[column] @ covariance @ spread[column]
        noise = whole[row, column, column]
        limit = problem.shown[row, column]
        sd = math.sqrt(variance + noise)
        depth = (limit - middle) / sd
        ratio = math.exp(-0.5 * depth * depth - 0.5 * math.log(2.0 * math.pi) - log_ndtr(depth))
        shrink = min(max(ratio * (ratio + depth), 1e-6), 1.0 - 1e-9)
        # Conditioning on "shown <= limit" moves the mean by -variance/sd x ratio and
        # takes the share `shrink` of variance^2/sd^2 off the variance.
        pseudo = (variance + noise) / shrink
        shown[row, column] = middle - sd * ratio / shrink
        extra[row, column] = max(pseudo - variance - noise, 0.0)
    return shown, extra


def _learn(
    tray: Tray,
    types: Sequence[str],
    shipped: dict[str, TypeAssumption],
    prior: _Prior,
    state: _State,
) -> tuple[_Prior, dict[str, TypeAssumption]]:
    """Return the assumption with what parts of two readings teach of the current factor.

    Medians and median deviations are used, so that a part that is not what it claims
    to be teaches nothing.
    """
    from scipy.stats import theilslopes

    taught = dict(shipped)
    mean, own, whole, common = (
        a.copy() for a in (prior.mean, prior.own, prior.whole, prior.common)
    )
    extra: list[tuple[str, Array]] = []
    told_sd = np.sqrt(state.own[:, 1, 1])
    for place, (name, told) in enumerate(shipped.items()):
        of_type = np.array([kind == name for kind in types])
        own_readings = np.array(
            [sum(not m.bound for m in part.readings.values()) for part in tray.parts]
        )
        # Telling: the readings, not the assumption, determine the current factor.
        telling = of_type & (own_readings >= 2) & (told_sd < 0.5 * told.beta_ln_spread)
        count = int(np.sum(telling))
        if count < ENOUGH_TO_LEARN:
            continue
        ln_cutoff, ln_beta = state.theta[telling, 0], state.theta[telling, 1]
        centre = float(np.median(ln_cutoff))
        slope = told.beta_slope
        lever = _MAD_TO_SPREAD * float(np.median(np.abs(ln_cutoff - centre)))
        if lever >= _LEAST_LEVER:
            slope = float(theilslopes(ln_beta, ln_cutoff).slope)
        level = ln_beta - slope * (ln_cutoff - centre)
        middle = float(np.median(level))
        noise = float(np.median(told_sd[telling]))
        spread = _MAD_TO_SPREAD * float(np.median(np.abs(level - middle)))
        spread = math.sqrt(max(spread**2 - noise**2, 0.02**2))
        batch = _MEDIAN_LOSS * math.hypot(spread, noise) / math.sqrt(count)
        learned = replace(
            told,
            cutoff_v=-math.exp(centre),
            beta_a_per_v2=math.exp(middle),
            beta_slope=slope,
            beta_ln_spread=spread,
            beta_ln_batch=batch,
            basis=f"learned from {count} parts of this tray with two readings or more",
        )
        taught[name] = learned
        # The teachers' common errors are in what they taught.
        lesson = np.median(
            state.common[telling, 1, :] - slope * state.common[telling, 0, :], axis=0
        )
        at = np.nonzero(of_type & (own_readings >= 1))[0]
        mean[at, 0] = centre
        mean[at, 1] = middle
        mean[at, 2] = _mean_of(told)[2]
        shared = math.hypot(batch, float(np.linalg.norm(lesson)))
        own[at] = _root_of(learned, spread, told.lambda_ln_spread)
        held = whole[at, 2, 2]
        whole[at] = _root_of(learned, math.hypot(spread, shared), 0.0)
        whole[at, 2, 2] = held
        common[at, 1, 2 * place] = batch
        direct = np.zeros((len(types), len(lesson)))
        direct[at] = lesson
        extra += [
            (factor, direct[:, n]) for n, factor in enumerate(state.common_names) if lesson[n]
        ]
    names = list(prior.names)
    for factor, column in extra:
        if factor in names:
            common[:, 1, names.index(factor)] += column
        else:
            names.append(factor)
            added = np.zeros((len(types), 3, 1))
            added[:, 1, 0] = column
            common = np.concatenate([common, added], axis=2)
    return _Prior(mean, own, whole, common, tuple(names)), taught


def _result(
    tray: Tray,
    problem: _Problem,
    state: _State,
    knee_v: float,
    assumptions: dict[str, TypeAssumption],
    told: npt.NDArray[np.bool_],
) -> TrayEstimate:
    cutoff = -np.exp(state.theta[:, 0])
    # From ln |VC| to VC: a small change of the first is VC times it.
    turn = np.zeros((len(cutoff), 2, 3))
    turn[:, 0, 0] = cutoff
    turn[:, 1, 1] = 1.0
    own = turn @ state.own @ np.swapaxes(turn, 1, 2)
    common = turn @ state.common
    names = list(dict.fromkeys(state.common_names))
    merged = np.zeros((len(cutoff), 2, len(names)))
    for place, name in enumerate(state.common_names):
        merged[:, :, names.index(name)] += common[:, :, place]
    kept = [n for n in range(len(names)) if np.any(np.abs(merged[:, :, n]) > 1e-15)]
    reports = tuple(
        _report(part, row, problem, state, assumptions, bool(told[row]))
        for row, part in enumerate(tray.parts)
    )
    return TrayEstimate(
        labels=tray.labels,
        cutoff_v=cutoff,
        ln_beta=state.theta[:, 1].copy(),
        lambda_per_v=np.exp(state.theta[:, 2]),
        own_covariance=own,
        common_factors=merged[:, :, kept],
        common_names=tuple(names[n] for n in kept),
        knee_v=knee_v,
        reports=reports,
        assumptions=assumptions,
    )


def _report(
    part: TrayPart,
    row: int,
    problem: _Problem,
    state: _State,
    assumptions: dict[str, TypeAssumption],
    lambda_told: bool,
) -> PartReport:
    from scipy.stats import chi2

    names = [name for name in problem.names if name in part.readings]
    bounds = tuple(name for name in names if part.readings[name].bound)
    values = len(names) - len(bounds)
    residuals = {
        name: float(state.residual[row, problem.names.index(name)])
        for name in names
        if name not in bounds
    }
    r = state.residual[row]
    # The departure of the current factor (given the cut-off) and of lambda counts: two
    # readings always fit some part, but not always a part there is.
    misfit = float(r @ state.weight[row] @ r + np.sum(state.pull[row, 1:] ** 2))
    contradiction = ""
    if values >= 2 and chi2.sf(misfit, values) < CONTRADICTION_CHANCE:
        told = [name for name in names if name not in bounds]
        if values > 2:
            # Name first what is worst off against its own uncertainty.
            scale = np.sqrt(np.diag(state.weight[row]))
            told.sort(key=lambda n: -abs(residuals[n]) * scale[problem.names.index(n)])
        contradiction = (
            f"{part.label}: the readings {' and '.join(told)} contradict each other: no believable "
            "part gives them all; measure it again"
        )
    basis = {0: "type assumption alone", 1: "one reading and type assumption"}.get(
        values, f"{values} readings"
    )
    if bounds:
        basis += f", {len(bounds)} bound" + ("s" if len(bounds) > 1 else "")
    if values < 2:
        basis += f" ({assumptions[part.type_name].basis})" if values or bounds else ""
    return PartReport(
        part.label,
        basis,
        residuals,
        bounds,
        misfit,
        contradiction,
        lambda_told,
    )


def _root(covariance: Array) -> Array:
    """Return roots of many 2 x 2 covariances, good also where one has no spread."""
    values, vectors = np.linalg.eigh(covariance)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :])
