"""Periodic waves known in closed form, and their passage through one RC.

A wave is one period, held as segments of a constant, a ramp and two exponentials,
or as one sine. Any instant is evaluated from its phase, so nothing accumulates
over a long take.

In a segment that starts at ``s``, with ``t = time - s``::

    v(t) = c0 + c1 t + c2 exp(-a t) + c3 e(t)

``e(t) = exp(-b t)``, unless ``a`` and ``b`` are so near each other that c2 and c3
would cancel; then ``e(t) = (exp(-a t) - exp(-b t))/(b - a)``, which stays exact
through ``a = b``.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]
Coefficients = tuple[float, float, float, float]

# Nearer than this (relative), two rates are handled together: above it the
# cancellation costs at most three of sixteen digits.
NEAR_RATES = 1e-3
# Frames per row where exponentials are built as products of two short tables, and rows
# worked on at a time so that they stay in the cache.
ROW = 256
ROWS_AT_A_TIME = 32


class Wave(Protocol):
    """A periodic voltage."""

    @property
    def period_s(self) -> float:
        """Period [s]."""
        ...

    @property
    def low_v(self) -> float:
        """Least voltage [V]."""
        ...

    @property
    def high_v(self) -> float:
        """Greatest voltage [V]."""
        ...

    @property
    def mean_v(self) -> float:
        """Mean over one period [V]."""
        ...

    def at(self, time_s: npt.ArrayLike) -> Array:
        """Return the voltage at these times, any shape [V]."""
        ...

    def sample(self, start_frame: int, count: int, rate_hz: float) -> Array:
        """Return the voltage at `count` frames from `start_frame`, shape (count,) [V]."""
        ...


def phase_s(time_s: npt.ArrayLike, period_s: float) -> Array:
    """Return time within the period, 0 up to (not including) the period, same shape [s]."""
    # fmod is exact, so a late time loses no more than its own last digit.
    phase = np.fmod(np.asarray(time_s, float), period_s)
    phase = np.where(phase < 0.0, phase + period_s, phase)
    return np.where(phase >= period_s, 0.0, phase)


@dataclass(frozen=True)
class Sine:
    """``mean + cosine cos(w t) + sine sin(w t)``.

    Parameters
    ----------
    period_s : float
        Period [s].
    mean_v, cosine_v, sine_v : float
        Mean and the two amplitudes [V].
    """

    period_s: float
    mean_v: float
    cosine_v: float
    sine_v: float

    @property
    def low_v(self) -> float:
        """Least voltage [V]."""
        return self.mean_v - math.hypot(self.cosine_v, self.sine_v)

    @property
    def high_v(self) -> float:
        """Greatest voltage [V]."""
        return self.mean_v + math.hypot(self.cosine_v, self.sine_v)

    def at(self, time_s: npt.ArrayLike) -> Array:
        """Return the voltage at these times, any shape [V]."""
        angle = phase_s(time_s, self.period_s) * (2.0 * math.pi / self.period_s)
        return self.mean_v + self.cosine_v * np.cos(angle) + self.sine_v * np.sin(angle)

    def sample(self, start_frame: int, count: int, rate_hz: float) -> Array:
        """Return the voltage at `count` frames from `start_frame`, shape (count,) [V]."""
        turn = 2.0 * math.pi / self.period_s
        start = turn * math.fmod(start_frame / rate_hz, self.period_s)
        rows = start + (turn / rate_hz) * ROW * np.arange(-(-count // ROW))
        columns = (turn / rate_hz) * np.arange(ROW)
        # cos(r + c) and sin(r + c) by their addition theorems: two products per frame.
        along = self.cosine_v * np.cos(rows) + self.sine_v * np.sin(rows)
        across = self.sine_v * np.cos(rows) - self.cosine_v * np.sin(rows)
        out = np.empty(len(rows) * ROW)
        products = ((along, np.cos(columns)), (across, np.sin(columns)))
        _add_up(out, products, np.full(len(rows), self.mean_v))
        return out[:count]


@dataclass(frozen=True)
class Segments:
    """A wave made of segments (see the module's text).

    Parameters
    ----------
    period_s : float
        Period [s].
    starts_s : tuple of float
        Start of each segment, the first 0, rising, all below the period [s].
    coefficients : tuple
        ``(c0, c1, c2, c3)`` of each segment [V, V/s, V, V or V/s].
    first_rate_per_s, second_rate_per_s : float
        Rates ``a`` and ``b``, positive [1/s].
    mean_v : float
        Mean over one period; its maker knows it from the direct-current balance [V].
    """

    period_s: float
    starts_s: tuple[float, ...]
    coefficients: tuple[Coefficients, ...]
    first_rate_per_s: float
    second_rate_per_s: float
    mean_v: float

    @cached_property
    def joined(self) -> bool:
        """Whether the two rates are handled together."""
        return rates_are_near(self.first_rate_per_s, self.second_rate_per_s)

    @cached_property
    def _table(self) -> tuple[Array, Array]:
        return np.array(self.starts_s), np.array(self.coefficients)

    @cached_property
    def _range_v(self) -> tuple[float, float]:
        values: list[float] = []
        ends = (*self.starts_s[1:], self.period_s)
        for start, end, part in zip(self.starts_s, ends, self.coefficients, strict=True):
            length = end - start
            values += [self._inside(part, 0.0), self._inside(part, length)]
            turn = self._turn(part, length)
            if turn is not None:
                values.append(self._inside(part, turn))
        return min(values), max(values)

    @property
    def low_v(self) -> float:
        """Least voltage [V]."""
        return self._range_v[0]

    @property
    def high_v(self) -> float:
        """Greatest voltage [V]."""
        return self._range_v[1]

    def at(self, time_s: npt.ArrayLike) -> Array:
        """Return the voltage at these times, any shape [V]."""
        starts, table = self._table
        phase = phase_s(time_s, self.period_s)
        index = np.searchsorted(starts, phase, side="right") - 1
        t = phase - starts[index]
        part = table[index]
        a, b = self.first_rate_per_s, self.second_rate_per_s
        first = np.exp(-a * t)
        second = joint_exponential(a, b, t) if self.joined else np.exp(-b * t)
        return np.asarray(
            part[..., 0] + part[..., 1] * t + part[..., 2] * first + part[..., 3] * second
        )

    def sample(self, start_frame: int, count: int, rate_hz: float) -> Array:
        """Return the voltage at `count` frames from `start_frame`, shape (count,) [V].

        Within a segment an exponential is the product of a coarse and a fine table,
        so it costs one multiplication per frame and no error builds up.
        """
        # One row to spare: a segment's last row runs over, and the next one overwrites it.
        out = np.empty(count + ROW)
        ends = (*self.starts_s[1:], self.period_s)
        columns = np.arange(ROW) / rate_hz
        a, b = self.first_rate_per_s, self.second_rate_per_s
        fine_first = np.exp(-a * columns)
        fine_second = np.exp(-b * columns)
        phase = float(phase_s(start_frame / rate_hz, self.period_s))
        index = int(np.searchsorted(self._table[0], phase, side="right")) - 1
        done = 0
        origin = -phase  # the running period's start, measured from the block's first frame
        while done < count:
            start, end = origin + self.starts_s[index], origin + ends[index]
            # Frames before `end` belong to this segment; one that rounding puts on the wrong
            # side of a joint reads the same there, as the wave is continuous.
            stop = min(count, max(done, math.ceil(end * rate_hz)))
            length = stop - done
            if length > 0:
                t0 = done / rate_hz - start
                c0, c1, c2, c3 = self.coefficients[index]
                rows = np.asarray(t0 + np.arange(-(-length // ROW)) * (ROW / rate_hz), float)
                products = []
                if c2 != 0.0:
                    products.append((c2 * np.exp(-a * rows), fine_first))
                if c3 != 0.0 and not self.joined:
                    products.append((c3 * np.exp(-b * rows), fine_second))
                if c1 != 0.0:
                    products.append((np.full(len(rows), c1), columns))
                block = out[done : done + len(rows) * ROW]
                _add_up(block, products, c0 + c1 * rows)
                if c3 != 0.0 and self.joined:
                    times = np.add.outer(rows, columns).reshape(-1)
                    block += c3 * joint_exponential(a, b, times)
            done = stop
            index += 1
            if index == len(ends):
                index = 0
                origin += self.period_s
        return out[:count]

    def _inside(self, part: Coefficients, t: float) -> float:
        a, b = self.first_rate_per_s, self.second_rate_per_s
        second = float(joint_exponential(a, b, t)) if self.joined else math.exp(-b * t)
        return part[0] + part[1] * t + part[2] * math.exp(-a * t) + part[3] * second

    def _slope(self, part: Coefficients, t: float) -> float:
        a, b = self.first_rate_per_s, self.second_rate_per_s
        if self.joined:
            second = math.exp(-b * t) - a * float(joint_exponential(a, b, t))
        else:
            second = -b * math.exp(-b * t)
        return part[1] - a * part[2] * math.exp(-a * t) + part[3] * second

    def _turn(self, part: Coefficients, length: float) -> float | None:
        """Return where a segment's slope changes sign, if it does.

        A ramp with one exponential, or two exponentials, turn at most once, so the slopes
        at the two ends tell.
        """
        if self._slope(part, 0.0) * self._slope(part, length) >= 0.0:
            return None
        return find_root(lambda t: self._slope(part, t), 0.0, length)


def _add_up(out: Array, products: Sequence[tuple[Array, Array]], level: Array) -> None:
    """Write ``level[r] + sum of p[r] q[c]`` over the pairs to ``out[r ROW + c]``."""
    spare = np.empty((ROWS_AT_A_TIME, ROW))
    table = out.reshape(-1, ROW)
    for first in range(0, len(table), ROWS_AT_A_TIME):
        part = slice(first, first + ROWS_AT_A_TIME)
        rows = table[part]
        rows[:] = level[part, None]
        for along_rows, along_columns in products:
            product = spare[: len(rows)]
            np.multiply(along_rows[part, None], along_columns, out=product)
            rows += product


def rates_are_near(first_per_s: float, second_per_s: float) -> bool:
    """Whether two rates must be handled together (see the module's text)."""
    return abs(first_per_s - second_per_s) < NEAR_RATES * max(first_per_s, second_per_s)


def joint_exponential(first_per_s: float, second_per_s: float, time_s: npt.ArrayLike) -> Array:
    """Return ``(exp(-a t) - exp(-b t))/(b - a)``, also where a and b are equal [s]."""
    from scipy.special import exprel

    t = np.asarray(time_s, float)
    return np.asarray(t * np.exp(-first_per_s * t) * exprel((first_per_s - second_per_s) * t))


def find_root(function: Callable[[float], float], low: float, high: float) -> float:
    """Return the root between two places where `function` differs in sign, to the last digits."""
    from scipy.optimize import brentq

    return float(brentq(function, low, high, xtol=1e-300, rtol=1e-15, maxiter=500))


def scaled(wave: Wave, gain: float, offset_v: float) -> Wave:
    """Return ``gain * wave + offset``."""
    mean = gain * wave.mean_v + offset_v
    if isinstance(wave, Sine):
        return Sine(wave.period_s, mean, gain * wave.cosine_v, gain * wave.sine_v)
    assert isinstance(wave, Segments)
    parts = tuple(
        (gain * c0 + offset_v, gain * c1, gain * c2, gain * c3)
        for c0, c1, c2, c3 in wave.coefficients
    )
    return Segments(
        wave.period_s,
        wave.starts_s,
        parts,
        wave.first_rate_per_s,
        wave.second_rate_per_s,
        mean,
    )


def through_rc(wave: Wave, gain: float, offset_v: float, time_constant_s: float) -> Wave:
    """Return the periodic steady state of ``tau dy/dt = gain * wave + offset - y``.

    Parameters
    ----------
    wave : Wave
        Input; its segments may hold a constant, a ramp and the first exponential.
    gain : float
        Gain at rest.
    offset_v : float
        Added at rest [V].
    time_constant_s : float
        0 or more [s].
    """
    if time_constant_s == 0.0:
        return scaled(wave, gain, offset_v)
    if isinstance(wave, Sine):
        lag = 2.0 * math.pi / wave.period_s * time_constant_s
        share = gain / (1.0 + lag * lag)
        return Sine(
            wave.period_s,
            gain * wave.mean_v + offset_v,
            share * (wave.cosine_v - lag * wave.sine_v),
            share * (wave.sine_v + lag * wave.cosine_v),
        )
    assert isinstance(wave, Segments)
    return _segments_through_rc(wave, gain, offset_v, time_constant_s)


def _segments_through_rc(
    wave: Segments, gain: float, offset_v: float, time_constant_s: float
) -> Segments:
    a, b = wave.first_rate_per_s, 1.0 / time_constant_s
    near = rates_are_near(a, b)
    ends = (*wave.starts_s[1:], wave.period_s)
    lengths = [end - start for start, end in zip(wave.starts_s, ends, strict=True)]
    forced: list[Coefficients] = []
    for c0, c1, c2, c3 in wave.coefficients:
        if c3 != 0.0:
            raise ValueError("the wave already carries a second exponential")
        level = gain * c0 + offset_v - gain * c1 * time_constant_s
        # Near rates: the answer that starts from zero; otherwise the one along exp(-a t).
        drive = (0.0, gain * c2 * b) if near else (gain * c2 * b / (b - a), 0.0)
        forced.append((level, gain * c1, *drive))
    # From the forced answers alone find the value at time 0 that comes back after one period.
    decays = [math.exp(-b * length) for length in lengths]
    begins = [part[0] + part[2] for part in forced]
    finals = []
    for part, length in zip(forced, lengths, strict=True):
        second = part[3] * float(joint_exponential(a, b, length)) if near else 0.0
        finals.append(part[0] + part[1] * length + part[2] * math.exp(-a * length) + second)
    returned = 0.0
    for begin, final, decay in zip(begins, finals, decays, strict=True):
        returned = final + (returned - begin) * decay
    value = returned / -math.expm1(-b * wave.period_s)
    parts: list[Coefficients] = []
    for part, begin, final, decay in zip(forced, begins, finals, decays, strict=True):
        free = value - begin
        if near:
            # exp(-b t) = exp(-a t) - (b - a) e(t)
            parts.append((part[0], part[1], free, part[3] - free * (b - a)))
        else:
            parts.append((part[0], part[1], part[2], free))
        value = final + free * decay
    return Segments(wave.period_s, wave.starts_s, tuple(parts), a, b, gain * wave.mean_v + offset_v)
