"""A relaxation oscillator whose timing capacitor also feeds the gate bus.

With an unbuffered tap the sweep resistor draws its current from the timing
capacitor. Between two switching instants timing capacitor and bus capacitor are
one linear network with two rates; the instants are found as roots, and the state
at the lower one as the fixed point of one whole period.

References
----------
E. J. Putzer, "Avoiding the Jordan canonical form in the discussion of linear
systems with constant coefficients", American Mathematical Monthly 73 (1966) 2-7
(from memory), for the exponential of the two-by-two matrix.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from .errors import InputError
from .quantity import format_quantity
from .waveform import Coefficients, Segments, find_root, joint_exponential, rates_are_near

State = tuple[float, float]


@dataclass(frozen=True)
class LoadedOscillator:
    """The network around a timing capacitor that is loaded by the gate bus.

    Parameters
    ----------
    name : str
        The circuit's name, for messages.
    rails_v, thresholds_v : tuple of float
        Lower and upper output of the op amp and the voltages at which it switches [V].
    timing_f : float
        Timing capacitor [F].
    timing_ohm : float
        From the op amp's output to it [ohm].
    sweep_ohm : float
        From it to the bus [ohm].
    bias_s, load_s : float
        Conductance from the bus to the trimmer's source and to the reference rail [S].
    bias_v : float
        Open voltage of the trimmer's source [V].
    bus_f : float
        Bus capacitor, 0 for none [F].
    """

    name: str
    rails_v: tuple[float, float]
    thresholds_v: tuple[float, float]
    timing_f: float
    timing_ohm: float
    sweep_ohm: float
    bias_s: float
    load_s: float
    bias_v: float
    bus_f: float

    def rest_v(self, output_v: float) -> State:
        """Return where tap and bus would settle with the output held there [V]."""
        timing_s, sweep_s = 1.0 / self.timing_ohm, 1.0 / self.sweep_ohm
        bus_s = self.bias_s + self.load_s
        whole = timing_s * (sweep_s + bus_s) + sweep_s * bus_s
        from_output, from_bias = timing_s * output_v, self.bias_s * self.bias_v
        return (
            ((sweep_s + bus_s) * from_output + sweep_s * from_bias) / whole,
            ((timing_s + sweep_s) * from_bias + sweep_s * from_output) / whole,
        )

    def solve(self) -> tuple[Segments, Segments]:
        """Return the periodic voltages of timing capacitor and gate bus.

        Raises
        ------
        InputError
            If the load keeps the timing capacitor from a threshold.

        Notes
        -----
        The tap's lowest turn is the switching instant itself: the bus cannot drag it on
        downwards. With the output high the tap would settle above its thresholds, so at
        the lower threshold, with the bus where it would settle beside it, its current is
        upwards; and while the tap stays above the lower threshold the bus stays above
        that place.
        """
        self._check()
        network = _two_capacitors(self) if self.bus_f > 0.0 else _one_capacitor(self)
        rests = self.rest_v(self.rails_v[1]), self.rest_v(self.rails_v[0])
        low, high = self.thresholds_v

        def period(bus_v: float) -> tuple[float, float, State, State]:
            """Follow one period from the lower switching instant."""
            rise, top = network.follow((low, bus_v), rests[0], high)
            fall, bottom = network.follow((high, top[1]), rests[1], low)
            return rise, fall, (high, top[1]), (low, bottom[1])

        bus_v = _fixed_point(lambda start: period(start)[3][1], 0.5 * (rests[0][1] + rests[1][1]))
        rise, fall, top, _ = period(bus_v)
        whole = rise + fall
        # The capacitors' mean currents are zero, so the means obey the resistors alone.
        mean = self.rest_v((self.rails_v[1] * rise + self.rails_v[0] * fall) / whole)
        starts, pieces = (0.0, rise), (((low, bus_v), rests[0]), (top, rests[1]))
        rates = network.first_per_s, network.second_per_s
        parts = [network.coefficients(state, rest) for state, rest in pieces]
        return (
            Segments(whole, starts, tuple(part[0] for part in parts), *rates, mean[0]),
            Segments(whole, starts, tuple(part[1] for part in parts), *rates, mean[1]),
        )

    def _check(self) -> None:
        for output_v, threshold_v, reaches in (
            (self.rails_v[1], self.thresholds_v[1], 1.0),
            (self.rails_v[0], self.thresholds_v[0], -1.0),
        ):
            rest_v = self.rest_v(output_v)[0]
            if not (rest_v - threshold_v) * reaches > 0.0:
                raise InputError(
                    f"{self.name}: the oscillator does not oscillate at this setting: loaded by "
                    f"bus.sweep_resistor = {format_quantity(self.sweep_ohm, 'ohm')}, the timing "
                    f"capacitor settles at {rest_v:+.2f} V and never reaches its threshold of "
                    f"{threshold_v:+.2f} V; raise bus.sweep_resistor, lower "
                    "oscillator.threshold_in or oscillator.knob.track, or set "
                    "oscillator.tap = 'buffered'"
                )


@dataclass(frozen=True)
class _Network:
    """``d x/dt = -M (x - rest)`` of timing and bus voltage, with its two rates.

    ``exp(-M t) = exp(-a t) 1 + e(t) N`` with ``N = a 1 - M`` (Putzer), where
    ``e(t) = (exp(-a t) - exp(-b t))/(b - a)``.
    """

    first_per_s: float
    second_per_s: float
    rest_matrix: tuple[tuple[float, float], tuple[float, float]]  # N

    def coefficients(self, state: State, rest: State) -> tuple[Coefficients, Coefficients]:
        """Return both voltages' segment coefficients from this state on."""
        x, y = state[0] - rest[0], state[1] - rest[1]
        a, b = self.first_per_s, self.second_per_s
        near = rates_are_near(a, b)
        out: list[Coefficients] = []
        for own, level, row in zip((x, y), rest, self.rest_matrix, strict=True):
            joint = row[0] * x + row[1] * y
            if near:
                out.append((level, 0.0, own, joint))
            else:
                joint /= b - a
                out.append((level, 0.0, own + joint, -joint))
        return out[0], out[1]

    def advance(self, state: State, rest: State, time_s: float) -> State:
        """Return both voltages `time_s` later."""
        first, joint = math.exp(-self.first_per_s * time_s), self._joint(time_s)
        x, y = state[0] - rest[0], state[1] - rest[1]
        (n11, n12), (n21, n22) = self.rest_matrix
        return (
            rest[0] + first * x + joint * (n11 * x + n12 * y),
            rest[1] + first * y + joint * (n21 * x + n22 * y),
        )

    def follow(self, state: State, rest: State, threshold_v: float) -> tuple[float, State]:
        """Return when the timing capacitor reaches the threshold, and the voltages then.

        It starts on one side of the threshold and would settle on the other; two
        exponentials turn at most once, so it crosses exactly once.
        """
        side = math.copysign(1.0, rest[0] - threshold_v)

        def short_by(time_s: float) -> float:
            return side * (self.advance(state, rest, time_s)[0] - threshold_v)

        end = 1.0 / self.first_per_s
        while short_by(end) < 0.0:
            end *= 2.0
        time_s = find_root(short_by, 0.0, end)
        return time_s, self.advance(state, rest, time_s)

    def _joint(self, time_s: float) -> float:
        a, b = self.first_per_s, self.second_per_s
        if rates_are_near(a, b):
            return float(joint_exponential(a, b, time_s))
        return (math.exp(-a * time_s) - math.exp(-b * time_s)) / (b - a)


def _two_capacitors(osc: LoadedOscillator) -> _Network:
    timing_s, sweep_s = 1.0 / osc.timing_ohm, 1.0 / osc.sweep_ohm
    bus_s = osc.bias_s + osc.load_s
    m11, m12 = (timing_s + sweep_s) / osc.timing_f, -sweep_s / osc.timing_f
    m21, m22 = -sweep_s / osc.bus_f, (sweep_s + bus_s) / osc.bus_f
    # The slow rate as determinant over fast rate, the determinant as a sum of positive
    # terms: nothing cancels however far apart the two lie.
    determinant = timing_s * (sweep_s + bus_s) + sweep_s * bus_s
    determinant /= osc.timing_f * osc.bus_f
    fast = 0.5 * (m11 + m22 + math.sqrt((m11 - m22) ** 2 + 4.0 * m12 * m21))
    slow = determinant / fast
    return _Network(slow, fast, ((slow - m11, -m12), (-m21, slow - m22)))


def _one_capacitor(osc: LoadedOscillator) -> _Network:
    """Without a bus capacitor the bus follows the tap: one rate, and no joint term."""
    timing_s, sweep_s = 1.0 / osc.timing_ohm, 1.0 / osc.sweep_ohm
    bus_s = osc.bias_s + osc.load_s
    rate = (timing_s + sweep_s * bus_s / (sweep_s + bus_s)) / osc.timing_f
    return _FollowingNetwork(rate, rate, ((0.0, 0.0), (0.0, 0.0)), sweep_s / (sweep_s + bus_s))


@dataclass(frozen=True)
class _FollowingNetwork(_Network):
    """A bus without capacitor: at `share` of the tap's distance from rest, at once."""

    share: float

    def coefficients(self, state: State, rest: State) -> tuple[Coefficients, Coefficients]:
        x = state[0] - rest[0]
        return (rest[0], 0.0, x, 0.0), (rest[1], 0.0, self.share * x, 0.0)

    def advance(self, state: State, rest: State, time_s: float) -> State:
        x = (state[0] - rest[0]) * math.exp(-self.first_per_s * time_s)
        return rest[0] + x, rest[1] + self.share * x


def _fixed_point(advance: Callable[[float], float], start: float) -> float:
    """Return the value that `advance` leaves as it is, by the secant rule.

    One period forgets its start nearly as a linear network does, so the secant rule
    needs only a few periods.
    """
    x, y = start, advance(start)
    previous: tuple[float, float] | None = None
    for _ in range(60):
        miss = y - x
        if abs(miss) <= 4e-16 * max(1.0, abs(x)):
            return x
        step = miss
        if previous is not None and miss != previous[1]:
            step = -miss * (x - previous[0]) / (miss - previous[1])
        previous = (x, miss)
        x += step
        if abs(step) <= 1e-14 * max(1.0, abs(x)):
            return x
        y = advance(x)
    raise ArithmeticError("the loaded oscillator's periodic state was not found")
