"""The gate bus over one period: oscillator, sweep resistor, bias trimmer, bus capacitor.

Voltages are from the reference rail unless the name says otherwise.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy.typing as npt

from .chain import net_conductance_s
from .circuit import Circuit, PlainKnob, RelaxationOscillator
from .errors import InputError
from .knob import knob_ohm, knob_rotation, setting_rotation
from .loading import LoadedOscillator
from .oscillator import needs_value, refuse_rate, tap_wave, thresholds_v
from .quantity import Setting
from .waveform import Array, Wave, find_root, through_rc

# A wiper touches its track over an ohm or so (common practice, no published source);
# it also keeps a bus tied straight to a rail from being a short circuit of ideal sources.
LEAST_BIAS_OHM = 1.0
MIDDLE = Setting("noon", 0.5, None, 0.0)


@dataclass(frozen=True)
class WiperSource:
    """What the trimmer's wiper looks like from outside: a source behind a resistance.

    Parameters
    ----------
    open_v : float
        Its voltage without load, from the reference rail [V].
    resistance_ohm : float
        Track and end resistors seen from the wiper [ohm].
    """

    open_v: float
    resistance_ohm: float


def wiper_source(circuit: Circuit, trimmer: float) -> WiperSource:
    """Return the trimmer's wiper at a position of 0 (bottom end) to 1 (top end) as a source."""
    part = circuit.bus.trimmer
    reference = circuit.reference_above_ground_v
    rails = {"supply": circuit.supply.voltage_v, "reference": reference, "ground": 0.0}
    top = (rails[part.top] if isinstance(part.top, str) else part.top) - reference
    bottom = (rails[part.bottom] if isinstance(part.bottom, str) else part.bottom) - reference
    upper = part.top_ohm + (1.0 - trimmer) * part.track_ohm
    lower = part.bottom_ohm + trimmer * part.track_ohm
    whole = upper + lower
    return WiperSource((top * lower + bottom * upper) / whole, upper * lower / whole)


@dataclass(frozen=True)
class BusNode:
    """The gate bus as a node: what the half-drain network's currents meet there.

    Parameters
    ----------
    capacitor_f : float
        Bus capacitor [F].
    conductance_s : float
        All conductance from the bus to quiet nodes, the network's included [S].
    """

    capacitor_f: float
    conductance_s: float


def bus_node(circuit: Circuit, trimmer: float) -> BusNode | None:
    """Return the bus as a node at a trimmer position, or None without a bus capacitor.

    A tap is taken as quiet at audio rates, loaded or not.
    """
    if circuit.bus.capacitor_f is None:
        return None
    return BusNode(circuit.bus.capacitor_f, bus_conductance_s(circuit, trimmer))


def bus_conductance_s(circuit: Circuit, trimmer: float) -> float:
    """Return all conductance from the gate bus to quiet nodes, the tap held among them [S]."""
    sweep_s = 1.0 / circuit.bus.sweep_ohm
    return _bias_conductance_s(circuit, trimmer) + sweep_s + _network_load_s(circuit)


def held_bus_v(circuit: Circuit, trimmer: float) -> float:
    """Return where the gate bus rests with the tap held at the reference rail [V]."""
    bias_s = _bias_conductance_s(circuit, trimmer)
    share = bias_s / bus_conductance_s(circuit, trimmer)
    return share * wiper_source(circuit, trimmer).open_v


def _bias_conductance_s(circuit: Circuit, trimmer: float) -> float:
    """Conductance of the bias path, wiper to bus [S]."""
    resistance_ohm = wiper_source(circuit, trimmer).resistance_ohm
    return 1.0 / max(circuit.bus.bias_ohm + resistance_ohm, LEAST_BIAS_OHM)


def _network_load_s(circuit: Circuit) -> float:
    """Conductance of all stages' half-drain networks on the bus, drains at rest [S]."""
    return circuit.stage_count * net_conductance_s(circuit)


@dataclass(frozen=True)
class InitialState:
    """Voltages at time 0, for a netlist that starts in the periodic state [V]."""

    tap_v: float
    bus_v: float


@dataclass(frozen=True)
class BusWave:
    """Tap and gate bus in their periodic steady state.

    Time 0 is the tap at its lowest turn, about to rise. Exact at any time.

    Parameters
    ----------
    tap, gate : Wave
        Tap and gate bus.
    rotation : float or None
        The rate knob's rotation, 0 to 1; None if the knob does not tell rates apart.
    trimmer : float
        The trimmer's position, 0 (bottom end) to 1 (top end).
    wiper_mean_above_ground_v : float
        The wiper's mean over a period, loaded as it is [V].
    """

    tap: Wave
    gate: Wave
    rotation: float | None
    trimmer: float
    wiper_mean_above_ground_v: float

    @property
    def period_s(self) -> float:
        """Period [s]."""
        return self.gate.period_s

    @property
    def rate_hz(self) -> float:
        """Rate [Hz]."""
        return 1.0 / self.gate.period_s

    @property
    def low_v(self) -> float:
        """Lowest gate-bus voltage [V]."""
        return self.gate.low_v

    @property
    def high_v(self) -> float:
        """Highest gate-bus voltage [V]."""
        return self.gate.high_v

    @property
    def mean_v(self) -> float:
        """Mean gate-bus voltage over a period [V]."""
        return self.gate.mean_v

    def gate_v(self, time_s: npt.ArrayLike) -> Array:
        """Return the gate-bus voltage at these times, any shape [V]."""
        return self.gate.at(time_s)

    def tap_v(self, time_s: npt.ArrayLike) -> Array:
        """Return the tap's voltage at these times, any shape [V]."""
        return self.tap.at(time_s)

    def sample_gate(self, start_frame: int, count: int, rate_hz: float) -> Array:
        """Return the gate-bus voltage frame by frame, fast.

        Parameters
        ----------
        start_frame : int
            First frame; frame n is at time ``n / rate_hz``.
        count : int
            Number of frames.
        rate_hz : float
            Frames per second.

        Returns
        -------
        array, shape (count,)
            [V]; as :meth:`gate_v` at the same times but for rounding.
        """
        return self.gate.sample(start_frame, count, rate_hz)

    def initial_state(self) -> InitialState:
        """Return the voltages of tap (timing capacitor) and bus at time 0."""
        return InitialState(float(self.tap_v(0.0)), float(self.gate_v(0.0)))


def solve_bus(circuit: Circuit, trimmer: float, rate: Setting) -> BusWave:
    """Return tap and gate bus in their periodic steady state.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    trimmer : float
        Position, 0 (bottom end) to 1 (top end).
    rate : Setting
        Knob position or rate, see :func:`~sweepset.models.quantity.parse_rate`.

    Raises
    ------
    InputError
        If the rate is out of reach or the oscillator does not oscillate.
    ValueError
        If `trimmer` is outside 0 to 1.

    Notes
    -----
    With the half-drain network each gate draws no current, so its two resistors in
    series load the bus; the drains' audio averages to the reference rail.
    """
    if not 0.0 <= trimmer <= 1.0:
        raise ValueError(f"trimmer position must be 0 to 1, got {trimmer}")
    source = wiper_source(circuit, trimmer)
    bias_s = _bias_conductance_s(circuit, trimmer)
    load_s = _network_load_s(circuit)
    capacitor_f = circuit.bus.capacitor_f or 0.0
    oscillator = circuit.oscillator
    tap: Wave
    gate: Wave
    if isinstance(oscillator, RelaxationOscillator) and oscillator.tap == "direct":
        tap, gate, rotation = _solve_loaded(
            circuit, oscillator, rate, source.open_v, bias_s, load_s
        )
    else:
        tap, rotation = tap_wave(circuit, rate)
        sweep_s = 1.0 / circuit.bus.sweep_ohm
        whole = sweep_s + bias_s + load_s
        gate = through_rc(tap, sweep_s / whole, bias_s * source.open_v / whole, capacitor_f / whole)
    drop = (source.open_v - gate.mean_v) * source.resistance_ohm * bias_s
    wiper = source.open_v - drop + circuit.reference_above_ground_v
    return BusWave(tap, gate, rotation, trimmer, wiper)


def _solve_loaded(
    circuit: Circuit,
    oscillator: RelaxationOscillator,
    rate: Setting,
    bias_v: float,
    bias_s: float,
    load_s: float,
) -> tuple[Wave, Wave, float | None]:
    knob = oscillator.knob

    def at(timing_ohm: float) -> tuple[Wave, Wave]:
        return LoadedOscillator(
            name=circuit.name,
            rails_v=circuit.rails_v,
            thresholds_v=thresholds_v(oscillator, circuit.rails_v),
            timing_f=oscillator.timing_capacitor_f,
            timing_ohm=timing_ohm,
            sweep_ohm=circuit.bus.sweep_ohm,
            bias_s=bias_s,
            load_s=load_s,
            bias_v=bias_v,
            bus_f=circuit.bus.capacitor_f or 0.0,
        ).solve()

    rotation = setting_rotation(rate, knob.travel_degrees, "rate knob")
    if rotation is not None:
        return (*at(knob_ohm(knob, rotation)), rotation)
    # The load bends the law, so the resistance for a rate is a root. The rate falls with
    # the resistance, down to none at all where the load wins.
    wanted = needs_value(rate)

    def excess_hz(timing_ohm: float) -> float:
        try:
            return 1.0 / at(timing_ohm)[0].period_s - wanted
        except InputError:
            return -wanted

    least, most = sorted((knob_ohm(knob, 0.0), knob_ohm(knob, 1.0)))
    fast, slow = excess_hz(least), excess_hz(most)
    slack = 1e-9 * wanted
    if fast < -slack or slow > slack:
        raise refuse_rate(circuit, rate, slow + wanted, fast + wanted)
    if fast <= 0.0 or slow >= 0.0:
        timing_ohm = least if fast <= 0.0 else most
    else:
        timing_ohm = find_root(excess_hz, least, most)
    return (*at(timing_ohm), knob_rotation(knob, timing_ohm))


def rate_range_hz(circuit: Circuit, trimmer: float = 0.5) -> tuple[float, float]:
    """Return the slowest and the fastest rate of the knob [Hz].

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    trimmer : float
        Position of the bias trimmer; it moves the rate only where the bus loads the oscillator.

    Raises
    ------
    InputError
        If the circuit does not oscillate at an end of the knob.
    """
    knob = circuit.oscillator.knob
    if isinstance(knob, PlainKnob):
        return knob.slowest_hz, knob.fastest_hz
    ends = [
        solve_bus(circuit, trimmer, Setting(f"{rotation:.0%}", rotation, None)).rate_hz
        for rotation in (0.0, 1.0)
    ]
    return min(ends), max(ends)


def trimmer_position(circuit: Circuit, setting: Setting, rate: Setting = MIDDLE) -> float:
    """Return the trimmer's position, 0 to 1, for what was asked of it.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    setting : Setting
        A share of the travel, a clock position, or the wiper's mean voltage above
        ground as it is in the working circuit, see
        :func:`~sweepset.models.quantity.parse_trim`.
    rate : Setting
        The rate at which the wiper is measured; it matters, slightly, only where the bus
        loads the oscillator.

    Raises
    ------
    InputError
        If it is out of reach, or if a clock position is asked of a multi-turn trimmer.
    ValueError
        If the setting asks for nothing ("auto"): that is found by the bias solver.
    """
    part = circuit.bus.trimmer
    if setting.clock_degrees is not None and part.turns > 1:
        raise InputError(
            f"trimmer at {setting.text}: a trimmer of {part.turns} turns has no clock position; "
            "give a share of its travel (45%) or the wiper's voltage (2.31V)"
        )
    position = setting_rotation(setting, part.travel_degrees, "trimmer")
    if position is not None:
        return position
    if setting.value is None:
        raise ValueError("trimmer 'auto' is found for a set by the bias solver")
    wanted = setting.value

    def excess_v(place: float) -> float:
        return solve_bus(circuit, place, rate).wiper_mean_above_ground_v - wanted

    ends = excess_v(0.0), excess_v(1.0)
    if abs(ends[0]) <= 1e-9:
        return 0.0
    if abs(ends[1]) <= 1e-9:
        return 1.0
    if ends[0] * ends[1] > 0.0:
        low, high = sorted(end + wanted for end in ends)
        raise InputError(
            f"trimmer at {setting.text}: out of reach; the wiper goes from {low:.2f} V to "
            f"{high:.2f} V above ground; give a voltage within, or a share of the travel (45%)"
        )
    return find_root(excess_v, 0.0, 1.0)
