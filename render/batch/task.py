"""One take of a batch, small enough to be sent to a worker anywhere, and its row."""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict, dataclass, replace
from functools import cache, lru_cache
from pathlib import Path
from typing import Any

from ...models import circuit as circuit_module
from ...models.bias import solve_bias
from ...models.circuit import Circuit
from ...models.cycle import analyse_cycle
from ...models.jfet import Jfet
from ...models.quantity import Setting
from ..audio import AudioReader, Encoding, sidecar_path
from ..audition import safe_name
from ..provenance import library_versions
from ..setup import TakeSettings, changed_circuit, circuit_hash, set_up
from ..take import render_file
from .takeplan import PlannedTake

Row = dict[str, Any]

# Folders whose code decides the samples; what only shows them is left out.
_SHOWING = ("commands", "page", "batch", "front")
_SHOWING_FILES = ("figures.py", "pictures.py", "sheet.py", "measures.py", "pairs.py", "joined.py")
KEY_IN_NAME = 10


@dataclass(frozen=True)
class TakeTask:
    """What a worker needs to render one take.

    Parameters
    ----------
    planned : PlannedTake
        The take.
    riff_sha256 : str
        Of the riff's file.
    folder : Path
        Where the take goes.
    encoding : {"pcm24", "float32"}
        Sample format.
    overwrite : bool
        Whether this very take, left by a run that was cut off, may be replaced.
    """

    planned: PlannedTake
    riff_sha256: str
    folder: Path
    encoding: Encoding
    overwrite: bool = False

    @property
    def key(self) -> str:
        """What the samples depend on, as a hash: content, never names or dates."""
        planned, asked = self.planned, self.planned.settings
        trim, rates = planned.trim, (asked.rate, planned.bias_rate)
        told = {
            "code": code_hash(),
            "libraries": library_versions(),
            "riff": self.riff_sha256,
            "circuit": circuit_hash(asked.circuit),
            "parts": [_law(jfet) for jfet in asked.jfets],
            "trim": [trim.setting.rotation, trim.setting.value, trim.offset],
            "rates": [[rate.rotation, rate.value] for rate in rates],
            "sweep_ohm": asked.sweep_ohm,
            "celsius": asked.celsius,
            "supply_v": asked.supply_v,
            "full_scale_v": asked.full_scale_v,
            "encoding": self.encoding,
        }
        return hashlib.sha256(json.dumps(told, sort_keys=True).encode()).hexdigest()

    @property
    def path(self) -> Path:
        """The take's file: readable, and its own by the key's beginning."""
        columns = self.planned.columns
        words = [Path(columns.pop("riff")).stem, *(text for text in columns.values() if text)]
        return self.folder / f"{safe_name(' '.join(words))}_{self.key[:KEY_IN_NAME]}.wav"


def render_task(task: TakeTask) -> Row:
    """Render one take and return its row of the index.

    Parameters
    ----------
    task : TakeTask
        The take.

    Raises
    ------
    InputError
        If it cannot be rendered or written; then nothing is left behind.
    """
    planned = task.planned
    settings, notes = _settled(planned)
    setup = set_up(settings)
    assert setup.bus is not None  # no trace is given
    cycle = analyse_cycle(setup.circuit, setup.jfets, setup.bus)
    made = render_file(
        planned.riff,
        task.path,
        settings,
        encoding=task.encoding,
        peak="scale",
        workers=1,
        overwrite=task.overwrite,
        title=" ".join(text for text in planned.columns.values() if text),
    )
    report = made.report
    return {
        **planned.columns,
        "parts": ",".join(settings.labels),
        "trimmer": setup.bus.trimmer,
        "rate_hz": setup.bus.rate_hz,
        "sweep_ohm": setup.circuit.bus.sweep_ohm,
        "celsius": settings.celsius,
        "supply_v": setup.circuit.supply.voltage_v,
        "full_scale_v": settings.full_scale_v,
        "gate_low_v": setup.bus.low_v,
        "gate_high_v": setup.bus.high_v,
        "travel_octaves": cycle.travel_octaves,
        "stagger_octaves": cycle.stagger_octaves,
        "stall": cycle.stall,
        "lufs": made.lufs,
        "peak_dbfs": made.peak_dbfs,
        "gain_db": made.gain_db,
        "rail_seconds": 0.0 if report is None else report.rail_seconds,
        "seconds": made.record["input"]["frames"] / made.record["input"]["sample_rate_hz"],
        "factor": made.record["engine"]["factor"],
        "warnings": "; ".join([*notes, *made.warnings]),
        "file": task.path.name,
        "file_sha256": file_hash(task.path),
        "riff_sha256": task.riff_sha256,
        "key": task.key,
    }


def left_behind(task: TakeTask) -> bool:
    """Whether what stands in a take's way is that take itself, left by a run that was cut off.

    The name has the take's key in it; the file's own metadata, or the sidecar where there is
    no more than that, must name the same riff.
    """
    try:
        if task.path.exists():
            with AudioReader(task.path) as reader:
                told = json.loads(reader.comment)["input_sha256"]
        else:
            told = json.loads(sidecar_path(task.path).read_text("utf-8"))["input"]["sha256"]
    except (OSError, ValueError, KeyError, TypeError):
        return False
    return bool(told == task.riff_sha256)


def file_hash(path: Path) -> str:
    """Return a file's SHA-256, hexadecimal."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


@cache
def code_hash() -> str:
    """Return a hash over all code that decides the samples."""
    render = Path(__file__).resolve().parent.parent
    models = Path(str(circuit_module.__file__)).resolve().parent
    digest = hashlib.sha256()
    for folder in (models, render):
        for path in sorted(folder.rglob("*.py")):
            inside = path.relative_to(folder)
            if inside.parts[0] not in (*_SHOWING, *_SHOWING_FILES):
                digest.update(inside.as_posix().encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()


def _law(jfet: Jfet) -> dict[str, Any]:
    """Return a part's parameters; its name does not sound."""
    return {name: value for name, value in asdict(jfet).items() if name != "label"}


def _settled(planned: PlannedTake) -> tuple[TakeSettings, list[str]]:
    """Return the settings with ``auto`` solved and its offset added, and what is to be said."""
    asked = planned.settings
    if asked.trimmer.rotation is not None or asked.trimmer.value is not None:
        return asked, []
    jfets = tuple(jfet.at_celsius(asked.celsius) for jfet in asked.jfets)
    solved = _solved(changed_circuit(asked), jfets, planned.bias_rate)
    position = min(max(solved + planned.trim.offset, 0.0), 1.0)
    notes = []
    if position != solved + planned.trim.offset:
        notes.append(f"{planned.trim.text} lies beyond the trimmer's end: taken there")
    trimmer = Setting(planned.trim.text, position, None)
    return replace(asked, trimmer=trimmer), notes


@lru_cache(maxsize=1024)
def _solved(circuit: Circuit, jfets: tuple[Jfet, ...], rate: Setting) -> float:
    """Return a set's own trimmer position; takes at several rates and riffs share it."""
    return solve_bias(circuit, jfets, rate).position
