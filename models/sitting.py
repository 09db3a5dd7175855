"""A sitting at the bench: readings typed one by one, each saved before the next question.

The sitting knows neither screen nor keyboard: it gives a prompt, takes a line and
answers with sentences. Whatever a line changes in the tray is on the disk, whole, before
the answer is given.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from .errors import InputError
from .estimate import estimate_tray
from .fixture import drift_per_kelvin
from .tray import Tray, load_tray

# A reading this many robust standard deviations from the rest is questioned (median and
# median absolute deviation, which a few strays do not move), once there are enough.
FAR = 6.0
ENOUGH = 8
# Spread of the rest taken as at least this share of their middle.
LEAST_SPREAD = 0.01
# A re-measure may differ by this many half-widths of the meter's accuracy.
AGREEING = 2.0
# Supply, reference and temperature are asked for again after so many parts.
ASK_AGAIN = 20
# A reading that drifts less than this share of the cut-off's drift does not show warmth.
STEADY_SHARE = 0.25

HELP = (
    "a part's label begins a part; an empty line takes the label offered",
    "undo    take the last saved line back",
    "skip    leave this reading out",
    "note    followed by words: note them with the last part",
    "bench   ask temperature, supply and reference again",
    "best    the best set so far",
    "end     stop; everything is saved already",
)


@dataclass
class Sitting:
    """One sitting.

    Parameters
    ----------
    tray : Tray
        The tray, new or read; `tray` is always as it is on the disk.
    reload : callable
        Reads the tray again; by default :func:`~sweepset.models.tray.load_tray`.
    ended : bool
        Whether the sitting is over.
    wants_best : bool
        Whether the last line asked for the best set so far.
    parts_done : int
        Parts gone through in this sitting.
    """

    tray: Tray
    reload: Callable[[Path], Tray] = load_tray
    ended: bool = False
    wants_best: bool = False
    _earlier: list[Tray] = field(default_factory=list)
    _asking: list[str] = field(default_factory=list)
    _bench: dict[str, str] = field(default_factory=dict)
    _label: str = ""
    _left: list[str] = field(default_factory=list)
    _doubted: str = ""
    _parts_since: int = 0
    _steady_told: set[str] = field(default_factory=set)
    parts_done: int = 0

    def __post_init__(self) -> None:
        self._ask_bench()

    @property
    def prompt(self) -> str:
        """The question to put."""
        if self._asking:
            column = self._asking[0]
            asked = {
                "celsius": "room temperature in C",
                "supply": "supply in V, measured now",
                "reference": "reference in V, measured now",
            }[column]
            known = self._bench.get(column)
            return f"{asked}{f' [{known}]' if known else ''}: "
        if self._left:
            return f"{self._label} {self._left[0]}: "
        return f"part [{self._offered()}]: "

    def take(self, line: str) -> list[str]:
        """Take one typed line and return what to answer.

        Parameters
        ----------
        line : str
            Without its line end.
        """
        text = line.strip()
        self.wants_best = False
        word, _, rest = text.partition(" ")
        commands: dict[str, Callable[[], list[str]]] = {
            "undo": self._undo,
            "bench": self._again,
            "best": self._best,
            "end": self._end,
            "help": self._help,
            "?": self._help,
        }
        command = commands.get(text.casefold())
        if command is not None:
            return command()
        if word.casefold() == "note" and not self._asking:
            return self._note(rest.strip())
        if self._asking:
            return self._take_bench(text)
        if self._left:
            return self._take_reading(text)
        return self._take_label(text)

    def _ask_bench(self) -> None:
        readings = self.tray.fixture.readings.values()
        columns = ["celsius"]
        if any(hasattr(reading, "supply_v") for reading in readings):
            columns.append("supply")
        if any(hasattr(reading, "reference") for reading in readings):
            columns.append("reference")
        self._asking = columns
        self._parts_since = 0

    def _take_bench(self, text: str) -> list[str]:
        column = self._asking[0]
        written = text or self._bench.get(column, "")
        if written:
            try:
                value = float(written.replace(",", "."))
            except ValueError:
                return [
                    f"{written!r} is not a number; type it as the meter or thermometer shows it"
                ]
            low, high = {"celsius": (-20.0, 60.0)}.get(column, (0.5, 60.0))
            if not low <= value <= high:
                return [f"{value:g} is not from {low:g} to {high:g}: a slipped decimal point?"]
            self._bench[column] = f"{value:g}"
        self._asking.pop(0)
        if written:
            return []
        return ["taken as in the fixture file" if column != "celsius" else "not noted"]

    def _offered(self) -> str:
        """Return the label to offer: the last one counted on, skipping what is there."""
        labels = self.tray.labels
        found = re.fullmatch(r"(.*?)(\d+)", labels[-1] if labels else "J00")
        if found is None:
            return labels[-1]
        stem, digits = found.groups()
        number = int(digits)
        taken = {label.casefold() for label in labels}
        while True:
            number += 1
            label = f"{stem}{number:0{len(digits)}d}"
            if label.casefold() not in taken:
                return label

    def _take_label(self, text: str) -> list[str]:
        label = text or self._offered()
        try:
            part = self.tray.part(label)
        except InputError:
            said = []
            self._label = label
        else:
            self._label = part.label
            shown = [f"{name} {self.tray.cell(part.label, name)}" for name in part.readings]
            said = [f"{part.label} is on the tray ({', '.join(shown) or 'no reading yet'}): again"]
            if part.used:
                said.append(f"{part.label} is marked as used ({part.used})")
        self._left = list(self.tray.fixture.readings)
        return said

    def _take_reading(self, text: str) -> list[str]:
        name = self._left[0]
        if text.casefold() == "skip" or not text:
            self._left.pop(0)
            return [f"{name} left out", *self._after_part()]
        reading = self.tray.fixture.readings[name]
        try:
            value = reading.parse(text.replace(",", "."))
        except ValueError as fault:
            return [f"{fault}"]
        question = self._doubt(name, value)
        if question and self._doubted != text:
            self._doubted = text
            return [f"{question}. Type it once more to keep it, or the right one"]
        self._doubted = ""
        cells = {**self._bench, name: text.replace(",", ".")}
        try:
            said = self._save(self._label, cells)
        except InputError as fault:
            return list(fault.messages)
        self._left.pop(0)
        return [*said, *self._after_part()]

    def _doubt(self, name: str, value: float) -> str:
        """Return why a reading is likely a slip, or nothing."""
        labels = [label for label in self.tray.labels if label != self._label]
        rest = np.array(
            [
                measured.value
                for label in labels
                if (measured := self.tray.part(label).readings.get(name))
            ]
        )
        try:
            before = self.tray.part(self._label).readings.get(name)
        except InputError:
            before = None
        if before is not None:
            allowed = AGREEING * self.tray.fixture.readings[name].meter.half_width(value)
            if abs(value - before.value) > allowed:
                return (
                    f"{self._label} read {before.value:g} before, {abs(value - before.value):.3g} "
                    f"away, more than the meter's accuracy; a warm part, or another one?"
                )
        if len(rest) < ENOUGH:
            return ""
        middle = float(np.median(rest))
        spread = 1.4826 * float(np.median(np.abs(rest - middle)))
        spread = max(spread, LEAST_SPREAD * abs(middle))
        if abs(value - middle) <= FAR * spread:
            return ""
        for slipped in (value * 10.0, value / 10.0, value * 1000.0, value / 1000.0):
            if abs(slipped - middle) <= FAR * spread:
                return (
                    f"{value:g} is far from the others (about {middle:.3g}); {slipped:g} would "
                    "not be: a slipped decimal point?"
                )
        return f"{value:g} is far from the others (about {middle:.3g} +/- {spread:.2g})"

    def _save(self, label: str, cells: dict[str, str]) -> list[str]:
        """Set cells of one part and write the tray; join in what another program wrote."""
        said = []
        before = self.tray
        try:
            written = _with_cells(self.tray, label, cells).write()
        except InputError as fault:
            if "changed by another program" not in str(fault):
                raise
            self.tray = before = self.reload(self.tray.path)
            written = _with_cells(self.tray, label, cells).write()
            said.append("another program had changed the tray: read again, and this line added")
        self._earlier.append(before)
        self.tray = written
        return said

    def _after_part(self) -> list[str]:
        """Return what is to say once a part's readings are done."""
        if self._left:
            return []
        self._parts_since += 1
        self.parts_done += 1
        said = self._about(self._label)
        if self._parts_since >= ASK_AGAIN:
            self._ask_bench()
            said.append(f"{ASK_AGAIN} parts on: measure temperature, supply and reference again")
        return said

    def _about(self, label: str) -> list[str]:
        """Return a part's parameters and its drift, where the readings tell them."""
        if label not in self.tray.labels or not self.tray.part(label).readings:
            return []
        jfet = estimate_tray(self.tray).jfet(label)
        said = [f"{label}: cut-off {jfet.cutoff_v:.3f} V, Idss {1e3 * jfet.idss_a:.2f} mA"]
        for name, measured in self.tray.part(label).readings.items():
            reading = self.tray.fixture.readings[name]
            drift = drift_per_kelvin(jfet, reading, measured.conditions)
            steady = abs(drift.reading_per_k) < STEADY_SHARE * abs(drift.cutoff_v_per_k)
            if reading.quantity == "V" and steady and name not in self._steady_told:
                self._steady_told.add(name)
                said.append(
                    f"with parts like this {name} moves only {1e3 * drift.reading_per_k:+.1f} mV "
                    f"per kelvin, while the cut-off moves {1e3 * drift.cutoff_v_per_k:+.1f}: a "
                    "steady reading does not prove that a part is cool"
                )
        return said

    def _note(self, words: str) -> list[str]:
        if not self._label or self._label not in self.tray.labels:
            return ["no part to note that with yet"]
        if not words:
            return ["note what? Type note and the words"]
        try:
            return [*self._save(self._label, {"note": words}), f"noted with {self._label}"]
        except InputError as fault:
            return list(fault.messages)

    def _undo(self) -> list[str]:
        if not self._earlier:
            return ["nothing to take back in this sitting"]
        earlier = self._earlier.pop()
        try:
            self.tray = self.tray.put_back(earlier).write()
        except InputError as fault:
            self._earlier.clear()
            return list(fault.messages)
        self._left = []
        self._doubted = ""
        return ["taken back; name the part again to measure it"]

    def _again(self) -> list[str]:
        self._ask_bench()
        return []

    def _help(self) -> list[str]:
        return list(HELP)

    def _best(self) -> list[str]:
        self.wants_best = True
        return []

    def _end(self) -> list[str]:
        self.ended = True
        return [f"{len(self.tray.labels)} parts on {self.tray.path}"]


def _with_cells(tray: Tray, label: str, cells: dict[str, str]) -> Tray:
    """Return the tray with several cells of one part set."""
    for column, text in cells.items():
        tray = tray.with_cell(label, column, text)
    return tray
