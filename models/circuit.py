"""The schematic: a TOML file with printed values, checked and turned into SI units.

A :class:`Circuit` is frozen. Field names carry their unit; the file's keys
(the ``alias`` of each field) carry none because the values there are written as
on a schematic: ``"39n"``, ``"4k7"``, ``"3M9"``.

Signs: voltages named ``..._above_ground_v`` are measured from the supply's
negative end; all others from the reference rail, on which the sources sit.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable, Iterator
from functools import partial
from importlib.resources import files
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, ValidationError, model_validator

from .errors import InputError, near_names
from .schema import Part, explain_faults, read_toml, within

MIN_STAGES = 2
MAX_STAGES = 12

Ohms = Annotated[float, within("ohm", 1.0, 100e6, "4k7")]
EndOhms = Annotated[float, within("ohm", 0.0, 100e6, "4k7")]
Farads = Annotated[float, within("F", 10e-12, 10e-3, "39n")]
StageFarads = Annotated[float, within("F", 100e-12, 10e-6, "39n")]
SupplyVolts = Annotated[float, within("V", 3.0, 60.0, "9 V")]
RailVolts = Annotated[float, within("V", 0.0, 60.0, "5.1 V")]
PeakVolts = Annotated[float, within("V", 1e-3, 60.0, "1.2 V")]
SignedVolts = Annotated[float, within("V", -60.0, 60.0, "-1.2 V")]
HeadroomVolts = Annotated[float, within("V", 0.0, 10.0, "1.5 V")]
Hertz = Annotated[float, within("Hz", 0.001, 100.0, "0.8 Hz")]
Fraction = Annotated[float, within("%", 0.01, 0.99, "10 %")]
Degrees = Annotated[float, within("deg", 30.0, 360.0, "270 deg")]
RAILS = ("supply", "reference", "ground")


def _read_rail(written: object) -> str | float:
    """Return a rail's name, or its voltage above ground."""
    if isinstance(written, str):
        if written in RAILS:
            return written
        if not any(sign.isdigit() for sign in written):
            raise ValueError(
                f"expected supply, reference, ground or a voltage above ground such as '2.5 V'"
                f"{near_names(written, RAILS)}"
            )
    return float(within("V", 0.0, 60.0, "2.5 V").func(written))  # type: ignore[call-arg]


Rail = Annotated[Literal["supply", "reference", "ground"] | float, BeforeValidator(_read_rail)]


class DividerReference(Part):
    """Reference rail from a divider between supply and ground."""

    kind: Literal["divider"]
    upper_ohm: Ohms = Field(alias="upper")
    lower_ohm: Ohms = Field(alias="lower")

    def above_ground_v(self, supply_v: float) -> float:
        """Return the rail's height above ground at this supply [V]."""
        return supply_v * self.lower_ohm / (self.upper_ohm + self.lower_ohm)


class ZenerReference(Part):
    """Reference rail held by a zener."""

    kind: Literal["zener"]
    zener_v: RailVolts = Field(alias="voltage")

    def above_ground_v(self, supply_v: float) -> float:
        """Return the rail's height above ground, the zener's or the supply if lower [V]."""
        return min(self.zener_v, supply_v)


class Supply(Part):
    """Supply voltage and how the reference rail is made from it."""

    voltage_v: SupplyVolts = Field(alias="voltage")
    reference: DividerReference | ZenerReference = Field(discriminator="kind")

    @property
    def reference_above_ground_v(self) -> float:
        """Height of the reference rail above ground [V]."""
        return self.reference.above_ground_v(self.voltage_v)


class OpAmp(Part):
    """How near to its supply pins the op amps can drive and be driven."""

    headroom_high_v: HeadroomVolts = Field(default=1.5, alias="headroom_high")
    headroom_low_v: HeadroomVolts = Field(default=1.5, alias="headroom_low")
    common_mode_high_v: HeadroomVolts = Field(default=0.0, alias="common_mode_high")
    common_mode_low_v: HeadroomVolts = Field(default=3.0, alias="common_mode_low")


class InputCoupling(Part):
    """Input coupling capacitor into a resistor to the reference rail, then a buffer."""

    capacitor_f: Farads = Field(alias="capacitor")
    resistor_ohm: Ohms = Field(alias="resistor")


class Stage(Part):
    """One phase-shifting stage.

    The capacitor leads from the stage's input to the op amp's plus input, where
    the shunt resistor and the JFET's channel lead to the reference rail.
    ``arm_in`` leads from the stage's input to the minus input, ``arm_out`` from
    the output back to it.
    """

    capacitor_f: StageFarads = Field(alias="capacitor")
    shunt_ohm: Ohms = Field(alias="shunt")
    arm_in_ohm: Ohms = Field(alias="arm_in")
    arm_out_ohm: Ohms = Field(alias="arm_out")


class Feedback(Part):
    """Resistor from one stage's output into another's minus input; stages count from 1."""

    from_stage: int = Field(alias="from", ge=1, le=MAX_STAGES, strict=True)
    into_stage: int = Field(alias="into", ge=1, le=MAX_STAGES, strict=True)
    resistor_ohm: Ohms = Field(alias="resistor")


class Taper(Part):
    """Resistance law of a knob: the share of the track, counter-clockwise end to wiper."""

    law: Literal["linear", "audio", "reverse-audio"] = "linear"
    middle_fraction: Fraction = Field(default=0.1, alias="middle")


class RateKnob(Part):
    """The rate knob, wired as a variable resistor in series with a fixed one."""

    track_ohm: Ohms = Field(alias="track")
    series_ohm: Ohms = Field(alias="series")
    taper: Taper = Taper()
    clockwise: Literal["faster", "slower"] = "faster"
    travel_degrees: Degrees = Field(default=300.0, alias="travel")


class RelaxationOscillator(Part):
    """Relaxation oscillator around one op amp.

    The rate knob leads from the output to the timing capacitor at the minus
    input; the plus input sits on a divider, ``threshold_out`` from the output and
    ``threshold_in`` from the reference rail. The tap is the timing capacitor.
    """

    kind: Literal["relaxation"]
    timing_capacitor_f: Farads = Field(alias="timing_capacitor")
    knob: RateKnob
    threshold_in_ohm: Ohms = Field(alias="threshold_in")
    threshold_out_ohm: Ohms = Field(alias="threshold_out")
    tap: Literal["buffered", "direct"]


class TriangleOscillator(Part):
    """Integrator and comparator; the tap is the integrator's (low-impedance) output.

    The knob leads from the comparator's output into the integrator. The
    comparator's plus input joins ``threshold_in`` from the triangle and
    ``threshold_out`` from the comparator's own output.
    """

    kind: Literal["triangle"]
    timing_capacitor_f: Farads = Field(alias="timing_capacitor")
    knob: RateKnob
    threshold_in_ohm: Ohms = Field(alias="threshold_in")
    threshold_out_ohm: Ohms = Field(alias="threshold_out")


class PlainKnob(Part):
    """A rate knob known only by the rates at its ends."""

    slowest_hz: Hertz = Field(alias="slowest")
    fastest_hz: Hertz = Field(alias="fastest")
    travel_degrees: Degrees = Field(default=300.0, alias="travel")

    @model_validator(mode="after")
    def _check_ends(self) -> PlainKnob:
        if self.slowest_hz > self.fastest_hz:
            raise ValueError(
                f"slowest = {self.slowest_hz:g} Hz is faster than "
                f"fastest = {self.fastest_hz:g} Hz; swap them"
            )
        return self


class SineOscillator(Part):
    """A sine at the tap, about a mean level, from a low impedance."""

    kind: Literal["sine"]
    mean_v: SignedVolts = Field(alias="mean")
    peak_v: PeakVolts = Field(alias="peak")
    knob: PlainKnob


class MeasuredOscillator(Part):
    """A tap known by its measured lowest and highest voltage, its shape and its rates."""

    kind: Literal["measured"]
    low_v: SignedVolts = Field(alias="low")
    high_v: SignedVolts = Field(alias="high")
    shape: Literal["triangle", "sine"] = "triangle"
    knob: PlainKnob

    @model_validator(mode="after")
    def _check_ends(self) -> MeasuredOscillator:
        if self.low_v >= self.high_v:
            raise ValueError(
                f"low = {self.low_v:g} V is not below high = {self.high_v:g} V, both from the "
                "reference rail; swap them or measure again"
            )
        return self


Oscillator = Annotated[
    RelaxationOscillator | TriangleOscillator | SineOscillator | MeasuredOscillator,
    Field(discriminator="kind"),
]


class Trimmer(Part):
    """The bias trimmer between two rails, each over an end resistor (0 for none).

    A rail is ``"supply"``, ``"reference"``, ``"ground"`` or a voltage above ground.
    Position 0 is the bottom end, 1 the top end.
    """

    track_ohm: Ohms = Field(alias="track")
    top: Rail
    top_ohm: EndOhms = Field(default=0.0, alias="top_resistor")
    bottom: Rail
    bottom_ohm: EndOhms = Field(default=0.0, alias="bottom_resistor")
    travel_degrees: Degrees = Field(default=270.0, alias="travel")
    turns: int = Field(default=1, ge=1, le=50, strict=True)


class HalfDrain(Part):
    """Network feeding part of each drain's voltage to its gate.

    Per stage, ``from_bus`` leads from the gate bus to the gate and
    ``from_drain`` from the drain to the gate.
    """

    from_bus_ohm: Ohms = Field(alias="from_bus")
    from_drain_ohm: Ohms = Field(alias="from_drain")

    @property
    def share(self) -> float:
        """Share ``k`` of the drain voltage that reaches the gate, 0.5 for equal resistors."""
        return self.from_bus_ohm / (self.from_bus_ohm + self.from_drain_ohm)


class GateBus(Part):
    """The node on which all gates hang, and what feeds it."""

    bias_ohm: EndOhms = Field(alias="bias_resistor")
    sweep_ohm: Ohms = Field(alias="sweep_resistor")
    capacitor_f: Farads | None = Field(default=None, alias="capacitor")
    trimmer: Trimmer
    half_drain: HalfDrain | None = None


class Mix(Part):
    """Dry and wet mix resistors into one node, then the output coupling into its load."""

    dry_ohm: Ohms = Field(alias="dry")
    wet_ohm: Ohms = Field(alias="wet")
    capacitor_f: Farads = Field(alias="capacitor")
    load_ohm: Ohms = Field(alias="load")


class Circuit(Part):
    """One phase shifter, as printed on its schematic."""

    name: str = Field(min_length=1, max_length=200)
    about: str = Field(default="", max_length=2000)
    supply: Supply
    opamp: OpAmp = OpAmp()
    input: InputCoupling
    stages: tuple[Stage, ...] = Field(alias="stage", min_length=MIN_STAGES, max_length=MAX_STAGES)
    feedback: Feedback | None = None
    bus: GateBus
    oscillator: Oscillator
    mix: Mix

    @model_validator(mode="after")
    def _check_whole(self) -> Circuit:
        faults = [*self._feedback_faults(), *self._rail_faults()]
        if faults:
            raise ValueError("\n".join(faults))
        return self

    def _feedback_faults(self) -> Iterator[str]:
        loop = self.feedback
        if loop is None:
            return
        if max(loop.from_stage, loop.into_stage) > len(self.stages):
            yield (
                f"feedback joins stages {loop.from_stage} and {loop.into_stage}, but the "
                f"circuit has {len(self.stages)} stages; stages count from 1"
            )
        if loop.into_stage > loop.from_stage:
            yield (
                f"feedback.from = {loop.from_stage} lies before feedback.into = "
                f"{loop.into_stage}; feedback leads back from a later stage, swap them"
            )

    def _rail_faults(self) -> Iterator[str]:
        low, high = self.rails_v
        if not low < 0.0 < high:
            yield (
                f"the op amps' outputs reach from {low:+.2f} V to {high:+.2f} V about the "
                "reference rail, which must lie between; check supply.reference and opamp.headroom"
            )
        trimmer, supply_v = self.bus.trimmer, self.supply.voltage_v
        for end, rail in (("top", trimmer.top), ("bottom", trimmer.bottom)):
            if not isinstance(rail, str) and rail > supply_v:
                yield (
                    f"bus.trimmer.{end} = {rail:g} V is above the supply of {supply_v:g} V; give a "
                    "rail's name or a voltage within the supply"
                )
        if trimmer.top == trimmer.bottom:
            yield (
                f"bus.trimmer.top and bus.trimmer.bottom are both {trimmer.top!r}, so the trimmer "
                "moves nothing; give its two different ends"
            )

    @property
    def stage_count(self) -> int:
        """Number of stages."""
        return len(self.stages)

    @property
    def reference_above_ground_v(self) -> float:
        """Height of the reference rail above ground [V]."""
        return self.supply.reference_above_ground_v

    @property
    def rails_v(self) -> tuple[float, float]:
        """Lowest and highest output of the op amps, from the reference rail [V]."""
        reference = self.supply.reference_above_ground_v
        return (
            self.opamp.headroom_low_v - reference,
            self.supply.voltage_v - self.opamp.headroom_high_v - reference,
        )

    @property
    def common_mode_v(self) -> tuple[float, float]:
        """Lowest and highest proper voltage at the plus inputs, from the reference rail [V]."""
        reference = self.supply.reference_above_ground_v
        return (
            self.opamp.common_mode_low_v - reference,
            self.supply.voltage_v - self.opamp.common_mode_high_v - reference,
        )

    @property
    def half_drain_share(self) -> float:
        """Share ``k`` of the drain voltage fed to the gate; 0 without the network."""
        network = self.bus.half_drain
        return 0.0 if network is None else network.share

    def arm_gains(self, index: int) -> tuple[float, float, float]:
        """Return ``(a, b, c)`` of stage `index` (from 0): ``y = a v - b x - c y_feedback``."""
        stage = self.stages[index]
        b = stage.arm_out_ohm / stage.arm_in_ohm
        c = 0.0
        if self.feedback is not None and self.feedback.into_stage == index + 1:
            c = stage.arm_out_ohm / self.feedback.resistor_ohm
        return 1.0 + b + c, b, c

    def with_changes(self, **changes: Any) -> Circuit:
        """Return a checked copy with values replaced by dotted field name.

        Parameters
        ----------
        **changes
            Field path with ``__`` between levels, for example
            ``bus__sweep_ohm=2.2e6`` or ``supply__voltage_v=8.4``; stages by index,
            ``stages__0__capacitor_f``.
        """
        changed: Circuit = replace_fields(self, changes)
        return changed


def replace_fields(part: Any, changes: dict[str, Any]) -> Any:
    """Return a checked copy of a frozen model with nested fields replaced (see `with_changes`)."""
    if isinstance(part, tuple):
        items = list(part)
        for index in {int(path.split("__", 1)[0]) for path in changes}:
            items[index] = replace_fields(items[index], _below(changes, str(index)))
        return tuple(items)
    data = {name: getattr(part, name) for name in type(part).model_fields}
    for name in {path.split("__", 1)[0] for path in changes}:
        if name not in data:
            raise KeyError(f"{type(part).__name__} has no field {name!r}")
        data[name] = (
            changes[name] if name in changes else replace_fields(data[name], _below(changes, name))
        )
    return type(part)(**data)


def _below(changes: dict[str, Any], name: str) -> dict[str, Any]:
    head = name + "__"
    return {path[len(head) :]: value for path, value in changes.items() if path.startswith(head)}


def parse_circuit(data: dict[str, Any], source: str) -> Circuit:
    """Check the content of a circuit file.

    Parameters
    ----------
    data : dict
        What the TOML file holds.
    source : str
        The file's name, for messages.

    Raises
    ------
    InputError
        With every fault found, each with its key's path and the remedy.
    """
    try:
        return Circuit.model_validate(data)
    except ValidationError as fault:
        raise InputError(explain_faults(fault, source, Circuit)) from None


def shipped_circuits() -> dict[str, Callable[[], str]]:
    """Return the shipped circuits' names, each with a function reading its text."""
    folder = files("sweepset.models.library")
    found: dict[str, Callable[[], str]] = {}
    for entry in sorted(folder.iterdir(), key=lambda item: item.name):
        if entry.name.startswith("circuit_") and entry.name.endswith(".toml"):
            name = entry.name.removeprefix("circuit_").removesuffix(".toml")
            found[name] = partial(entry.read_text, encoding="utf-8")
    return found


def load_circuit(name_or_path: str | Path) -> Circuit:
    """Return a shipped circuit by name, or the circuit in a file.

    Parameters
    ----------
    name_or_path : str or Path
        A shipped name (see :func:`shipped_circuits`) or the path of a TOML file.

    Raises
    ------
    InputError
        If there is no such circuit, or if the file has faults; all are listed.
    """
    shipped = shipped_circuits()
    text = str(name_or_path)
    path = Path(name_or_path)
    if text in shipped and not path.is_file():
        return parse_circuit(tomllib.loads(shipped[text]()), text)
    looks_like_file = path.suffix.lower() == ".toml" or "/" in text or "\\" in text
    if not looks_like_file and not (text and _exists(path)):
        wanted = text if len(text) <= 60 else text[:50] + "..."
        raise InputError(
            f"no circuit named {wanted!r}{near_names(wanted, shipped)}; shipped circuits: "
            f"{', '.join(shipped)}; or give a circuit file (.toml)"
        )
    return parse_circuit(read_toml(path, "circuit file"), str(path))


def _exists(path: Path) -> bool:
    """Whether there is such a file; a name the system refuses is none."""
    try:
        return path.exists()
    except (OSError, ValueError):
        return False
