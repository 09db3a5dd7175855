"""The plan file: which takes there are to be, in a fixed order.

A plan names riffs, circuits, sets and lists or ranges of settings; every combination is a
take. The order is that of the file: riff, circuit, set, trimmer, rate, sweep resistor,
temperature, supply.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence, Sized
from dataclasses import dataclass, replace
from itertools import product
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import BeforeValidator, Field, ValidationError

from ...models.circuit import Circuit, load_circuit
from ...models.errors import InputError
from ...models.estimate import TrayEstimate, estimate_tray
from ...models.jfet import NOMINAL_CELSIUS, Jfet
from ...models.quantity import Setting, format_quantity, parse_quantity, parse_rate, parse_trim
from ...models.schema import Part, explain_faults, read_toml
from ...models.tray import Tray, load_tray
from ..audio import Encoding
from ..setup import DEFAULT_FULL_SCALE_V, TakeSettings
from ..written_set import parse_set

MOST_TAKES = 20_000
MOST_STEPS = 1000
_OFFSET = re.compile(r"auto\s*([+-]\s*\d+(?:[.,]\d+)?)\s*%")

Written = str | int | float
Count = Annotated[int, Field(ge=2, le=MOST_STEPS, strict=True)]


class Range(Part):
    """Values from one end to the other, both included.

    Rates and resistors are spaced evenly in ratio, all else evenly.
    """

    first: Written = Field(alias="from")
    last: Written = Field(alias="to")
    steps: Count


def _as_list(written: object) -> object:
    """Return one value as a list of one; lists and ranges as they are."""
    if isinstance(written, str | int | float) and not isinstance(written, bool):
        return [written]
    return written


Values = Annotated[
    Annotated[tuple[Written, ...], Field(min_length=1)] | Range, BeforeValidator(_as_list)
]
Texts = Annotated[tuple[str, ...], Field(min_length=1), BeforeValidator(_as_list)]


class PlanFile(Part):
    """The plan as written."""

    riffs: Texts
    circuits: Texts
    sets: dict[str, str] = Field(min_length=1)
    tray: str | None = None
    fixture: str | None = None
    trim: Values = ("auto",)
    rate: Values = ("noon",)
    sweep_resistor: Values | None = None
    temperature: Values = (NOMINAL_CELSIUS,)
    supply: Values | None = None
    full_scale: Written = DEFAULT_FULL_SCALE_V
    samples: Literal["24-bit", "32-bit float"] = "24-bit"


@dataclass(frozen=True)
class TrimAsk:
    """A trimmer position as the plan asks for it.

    Parameters
    ----------
    text : str
        As written.
    setting : Setting
        A fixed position or voltage; neither for ``auto``.
    offset : float
        Added to the solved position, -1 to 1; 0 for a fixed one.
    """

    text: str
    setting: Setting
    offset: float


@dataclass(frozen=True)
class PlannedTake:
    """One take of a plan.

    Parameters
    ----------
    riff : Path
        Its riff.
    circuit_name, set_name : str
        As the plan calls them.
    trim : TrimAsk
        The trimmer as asked.
    bias_rate : Setting
        The rate at which ``auto`` is solved: the middle one of the plan's.
    settings : TakeSettings
        All else; its trimmer holds for fixed positions only.
    """

    riff: Path
    circuit_name: str
    set_name: str
    trim: TrimAsk
    bias_rate: Setting
    settings: TakeSettings

    @property
    def columns(self) -> dict[str, str]:
        """What was asked, in words, by the names that filters use."""
        asked = self.settings
        sweep, supply = asked.sweep_ohm, asked.supply_v
        return {
            "riff": self.riff.name,
            "circuit": self.circuit_name,
            "set": self.set_name,
            "trim": self.trim.text,
            "rate": asked.rate.text,
            "sweep": "" if sweep is None else format_quantity(sweep, "ohm"),
            "temperature": f"{asked.celsius:g}",
            "supply": "" if supply is None else f"{supply:g} V",
        }


@dataclass(frozen=True)
class TakePlan:
    """All takes of a plan.

    Parameters
    ----------
    path : Path
        The plan file.
    takes : tuple of PlannedTake
        In the plan's order.
    encoding : {"pcm24", "float32"}
        Sample format.
    """

    path: Path
    takes: tuple[PlannedTake, ...]
    encoding: Encoding


def load_plan(path: str | Path) -> TakePlan:
    """Return the takes of a plan file.

    Parameters
    ----------
    path : str or Path
        The plan; files it names are looked for beside it.

    Raises
    ------
    InputError
        With every fault found, each with its key's path and the remedy.
    """
    source = Path(path)
    data = read_toml(source, "plan file")
    try:
        written = PlanFile.model_validate(data)
    except ValidationError as fault:
        raise InputError(explain_faults(fault, str(source), PlanFile)) from None
    return _Reader(source, written).plan()


class _Reader:
    """Turns a written plan into takes, gathering faults."""

    def __init__(self, path: Path, written: PlanFile) -> None:
        self._path, self._written = path, written
        self._faults: list[str] = []

    def plan(self) -> TakePlan:
        written = self._written
        riffs = [self._beside(name) for name in written.riffs]
        self._refuse_twins("riffs", [riff.name for riff in riffs])
        for riff in riffs:
            if not riff.is_file():
                self._fault("riffs", f"{riff}: no such file; riffs are looked for beside the plan")
        circuits = [self._circuit(name) for name in written.circuits]
        self._refuse_twins("circuits", written.circuits)
        trims = self._values("trim", written.trim, self._trim, "%")
        rates = self._values("rate", written.rate, self._setting(parse_rate), "Hz")
        sweeps = self._optional("sweep_resistor", written.sweep_resistor, "ohm", 1.0, 100e6)
        celsius = self._values("temperature", written.temperature, self._number("C"), "C")
        supplies = self._optional("supply", written.supply, "V", 3.0, 60.0)
        full_scale_v = self._one("full_scale", written.full_scale, "V")
        self._refuse_twins("sets", list(written.sets))
        estimate, tray = self._tray()
        sets = {
            (name, n): self._set(name, parts, circuit, estimate, tray)
            for name, parts in written.sets.items()
            for n, circuit in enumerate(circuits)
            if circuit is not None
        }
        if self._faults:
            raise InputError(list(dict.fromkeys(self._faults)))
        lists: tuple[Sized, ...] = (
            riffs,
            circuits,
            written.sets,
            trims,
            rates,
            sweeps,
            celsius,
            supplies,
        )
        count = math.prod(len(one) for one in lists)
        if count > MOST_TAKES:
            raise InputError(
                f"{self._path}: {count:,} takes; at most {MOST_TAKES:,} in one plan: shorten a "
                "list, or split the plan"
            )
        middle = rates[len(rates) // 2]
        takes = []
        for riff, (n, circuit), name, trim, rate, sweep, warmth, supply in product(
            riffs, enumerate(circuits), written.sets, trims, rates, sweeps, celsius, supplies
        ):
            assert circuit is not None
            settings = TakeSettings(
                circuit=circuit,
                jfets=sets[name, n],
                trimmer=trim.setting,
                rate=rate,
                celsius=warmth,
                full_scale_v=full_scale_v,
                sweep_ohm=sweep,
                supply_v=supply,
            )
            takes.append(PlannedTake(riff, written.circuits[n], name, trim, middle, settings))
        encoding: Encoding = "pcm24" if written.samples == "24-bit" else "float32"
        return TakePlan(self._path, tuple(takes), encoding)

    def _fault(self, key: str, text: str) -> None:
        self._faults.append(f"{self._path}: {key}: {text}")

    def _beside(self, name: str) -> Path:
        return self._path.parent / name

    def _refuse_twins(self, key: str, names: Sequence[str]) -> None:
        seen: set[str] = set()
        for name in names:
            if name.casefold() in seen:
                self._fault(key, f"{name!r} stands there twice; the takes could not be told apart")
            seen.add(name.casefold())

    def _circuit(self, name: str) -> Circuit | None:
        try:
            beside = self._beside(name)
            return load_circuit(beside if beside.is_file() else name)
        except InputError as fault:
            self._faults += [f"{self._path}: circuits: {text}" for text in fault.messages]
            return None

    def _tray(self) -> tuple[TrayEstimate | None, Tray | None]:
        written = self._written
        if written.tray is None:
            if written.fixture is not None:
                self._fault("fixture", "says how a tray was measured; give tray with it")
            return None, None
        try:
            fixture = None if written.fixture is None else self._beside(written.fixture)
            tray = load_tray(self._beside(written.tray), fixture)
            return estimate_tray(tray), tray
        except InputError as fault:
            self._faults += fault.messages
            return None, None

    def _set(
        self,
        name: str,
        parts: str,
        circuit: Circuit,
        estimate: TrayEstimate | None,
        tray: Tray | None,
    ) -> tuple[Jfet, ...]:
        if self._written.tray is not None and tray is None:
            return ()  # told already
        try:
            return parse_set(parts, circuit, tray, estimate, place=f"sets.{name}")
        except InputError as fault:
            place = f"sets.{name}"
            self._faults += [
                f"{self._path}: {text if text.startswith(place) else f'{place}: {text}'}"
                for text in fault.messages
            ]
            return ()

    def _values(
        self,
        key: str,
        written: tuple[Written, ...] | Range,
        read: Callable[[Written], Any],
        unit: str,
    ) -> list[Any]:
        texts: Sequence[Written]
        if isinstance(written, Range):
            texts = self._steps(key, written, unit)
        else:
            texts = written
            self._refuse_twins(key, [str(text) for text in texts])
        found = []
        for text in texts:
            try:
                found.append(read(text))
            except ValueError as fault:
                self._fault(key, str(fault))
        return found

    def _optional(
        self,
        key: str,
        written: tuple[Written, ...] | Range | None,
        unit: str,
        low: float,
        high: float,
    ) -> list[float | None]:
        if written is None:
            return [None]
        return self._values(key, written, self._number(unit, low, high), unit)

    def _one(self, key: str, written: Written, unit: str) -> float:
        try:
            return parse_quantity(written, unit)
        except ValueError as fault:
            self._fault(key, str(fault))
            return math.nan

    def _steps(self, key: str, written: Range, unit: str) -> list[str]:
        try:
            low, high = (parse_quantity(end, unit) for end in (written.first, written.last))
            if unit in ("Hz", "ohm"):
                if not 0.0 < low < math.inf or not 0.0 < high < math.inf:
                    raise ValueError("a range of rates or resistors goes between positive ends")
                values = np.geomspace(low, high, written.steps)
            else:
                values = np.linspace(low, high, written.steps)
        except ValueError as fault:
            self._fault(key, f"from {written.first} to {written.last}: {fault}")
            return []
        if unit == "%":
            return [f"{100.0 * value:.6g}%" for value in values]
        return [f"{value:.6g} {unit}" if unit != "C" else f"{value:.6g}" for value in values]

    @staticmethod
    def _setting(parse: Callable[[str], Setting]) -> Callable[[Written], Setting]:
        return lambda written: parse(str(written))

    @staticmethod
    def _number(
        unit: str, low: float = -math.inf, high: float = math.inf
    ) -> Callable[[Written], float]:
        def read(written: Written) -> float:
            value = parse_quantity(written, unit)
            if not low <= value <= high:
                raise ValueError(
                    f"{written}: expected {format_quantity(low, unit)} to "
                    f"{format_quantity(high, unit)}"
                )
            return value

        return read

    @staticmethod
    def _trim(written: Written) -> TrimAsk:
        text = str(written).strip()
        offset = _OFFSET.fullmatch(text)
        if offset is None:
            return TrimAsk(text, parse_trim(text), 0.0)
        share = float(offset[1].replace(" ", "").replace(",", ".")) / 100.0
        if not -1.0 <= share <= 1.0:
            raise ValueError(f"{text}: expected an offset of at most 100 %")
        return TrimAsk(text, replace(parse_trim("auto"), text=text), share)
