"""Several takes side by side: one riff, dry and through sets at rates, equally loud.

All takes start at the same oscillator phase and share one oversampling factor, so
that they differ in nothing but what was asked. A set's trimmer is solved once and
stays where it is while the rate knob turns, as on the bench.
"""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Mapping, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from ..models.errors import InputError
from ..models.jfet import Jfet
from ..models.quantity import Setting
from .audio import Encoding, audio_bytes, check_audio, check_output, check_room
from .loudness import match_loudness
from .setup import Setup, TakeSettings, plan_takes, set_up
from .take import Progress, RawTake, TakeFile, raw_bytes, write_take

# Room for a folder's name in the 255 bytes most file systems allow, and for endings.
MAX_NAME = 100
# Device names on one widespread family of systems, with any ending.
_RESERVED = re.compile(r"(?:con|prn|aux|nul|com[0-9]|lpt[0-9])(?:\.|$)", re.IGNORECASE)


@dataclass(frozen=True)
class AuditionTake:
    """One take of an audition.

    Parameters
    ----------
    name : str
        What tells it from the others, for example ``matched 9:00``; the file's name
        is made from it.
    settings : TakeSettings
        What is asked of it.
    """

    name: str
    settings: TakeSettings


@dataclass(frozen=True)
class Audition:
    """What was written.

    Parameters
    ----------
    takes : tuple of TakeFile
        In the order asked.
    names : tuple of str
        The takes' names, in the same order.
    setups : tuple of Setup or None
        How each take was set up; None for a dry one.
    target_lufs : float
        Loudness of all takes; minus infinity if the riff is silent [LUFS].
    common_attenuation_db : float
        What all takes were lowered by so that no peak passes -1 dBFS, 0 or more.
    """

    takes: tuple[TakeFile, ...]
    names: tuple[str, ...]
    setups: tuple[Setup | None, ...]
    target_lufs: float
    common_attenuation_db: float

    def as_record(self) -> dict[str, Any]:
        """Return the audition in plain values: one row per take."""
        return {
            "target_lufs": self.target_lufs if math.isfinite(self.target_lufs) else None,
            "common_attenuation_db": self.common_attenuation_db,
            "takes": [
                {"name": name, "file": made.path.name, "warnings": list(made.warnings)}
                | made.record["output"]
                for name, made in zip(self.names, self.takes, strict=True)
            ],
        }


def audition_takes(
    base: TakeSettings,
    sets: Mapping[str, Sequence[Jfet]],
    rates: Sequence[Setting],
    trimmers: Sequence[Setting] = (),
) -> list[AuditionTake]:
    """Return the riff dry, then each set at each trimmer position and rate.

    Parameters
    ----------
    base : TakeSettings
        Circuit, temperature and whatever else all takes share.
    sets : mapping of str to sequence of Jfet
        Sets by name, each in stage order.
    rates : sequence of Setting
        Positions of the rate knob.
    trimmers : sequence of Setting
        Positions of the bias trimmer; that of `base` if left out. With ``auto`` each
        set's own position is solved at the middle one of `rates` and kept for the others.

    Raises
    ------
    InputError
        If a setting cannot be used.
    """
    if not sets or not rates:
        raise InputError("an audition needs at least one set and one rate; give them")
    takes = [AuditionTake("dry", replace(base, dry=True))]
    middle = rates[len(rates) // 2]
    asked = tuple(trimmers) or (base.trimmer,)
    for name, jfets in sets.items():
        for trimmer in asked:
            own = replace(base, jfets=tuple(jfets), rate=middle, trimmer=trimmer, dry=False)
            bias = set_up(own).bias
            if bias is not None:
                text = f"{trimmer.text}, solved at {middle.text}"
                own = replace(own, trimmer=Setting(text, bias.position, None))
            mark = f" trim {trimmer.text}" if len(asked) > 1 else ""
            takes += [
                AuditionTake(f"{name} {rate.text}{mark}", replace(own, rate=rate)) for rate in rates
            ]
    return takes


def render_audition(
    input_path: str | Path,
    folder: str | Path,
    takes: Sequence[AuditionTake],
    *,
    encoding: Encoding = "pcm24",
    overwrite: bool = False,
    progress: Progress | None = None,
    workers: int | None = None,
) -> Audition:
    """Render several takes of one riff and write them at one loudness.

    Parameters
    ----------
    input_path : str or Path
        The riff.
    folder : str or Path
        Where the takes go; made if only its last part is missing.
    takes : sequence of AuditionTake
        What to render, see :func:`audition_takes`.
    encoding : {"pcm24", "float32"}
        Sample format.
    overwrite : bool
        Whether existing files may be replaced.
    progress : callable, optional
        Told the take's name and the share of the whole audition done.
    workers : int, optional
        Threads; the bytes written do not depend on it.

    Returns
    -------
    Audition
        One result per take.

    Raises
    ------
    InputError
        If anything given cannot be used. Then, as on an interruption, no file is
        left behind.
    """
    if not takes:
        raise InputError("an audition needs at least one take; give a set and a rate")
    place = Path(folder)
    facts = check_audio(input_path)
    with ExitStack() as undo:
        if not place.exists():
            _make_folder(place)
            undo.callback(place.rmdir)  # only reached while it is still empty
        stem = Path(input_path).stem
        targets = [
            place / f"{name}.wav" for name in file_names([f"{stem} {take.name}" for take in takes])
        ]
        _check_targets(targets, Path(input_path), overwrite)
        size = raw_bytes(facts) + audio_bytes(facts.frames, facts.channels, encoding)
        check_room(place, size * len(takes))
        setups = [None if take.settings.dry else set_up(take.settings) for take in takes]
        wet = [setup for setup in setups if setup is not None]
        plans = iter(plan_takes(wet, facts.sample_rate_hz))
        with ExitStack() as raws:
            rendered = []
            for number, (take, setup) in enumerate(zip(takes, setups, strict=True)):
                plan = None if setup is None else next(plans)
                raw = raws.enter_context(
                    RawTake(facts, Path(input_path), place, setup, plan, workers)
                )
                raw.render(_share_of(progress, take.name, number, len(takes)))
                rendered.append(raw)
            match = match_loudness([raw.loudness for raw in rendered])
            made = []
            with ExitStack() as files:
                for take, raw, target, gain_db in zip(
                    takes, rendered, targets, match.gains_db, strict=True
                ):
                    title = f"{stem}, {take.name}"
                    made.append(write_take(files, raw, target, encoding, gain_db, title=title))
        undo.pop_all()
    return Audition(
        tuple(made),
        tuple(take.name for take in takes),
        tuple(setups),
        match.target_lufs,
        match.common_attenuation_db,
    )


def file_names(names: Sequence[str]) -> list[str]:
    """Return file names, without ending, that tell the takes apart on every system.

    Letters, digits, dot, dash and underscore only; numbered in order; no name a
    system keeps for its devices; at most 100 characters; no two alike even where
    capitals do not count.

    Parameters
    ----------
    names : sequence of str
        What to name.
    """
    width = len(str(len(names)))
    return [f"{number:0{width}d}_{safe_name(name)}" for number, name in enumerate(names, start=1)]


def safe_name(text: str) -> str:
    """Return a file name, without ending, that every system takes.

    Parameters
    ----------
    text : str
        Any text.
    """
    plain = unicodedata.normalize("NFKD", text).encode("ascii", "ignore").decode()
    plain = plain.replace("%", "pct").replace("+", "plus")
    plain = re.sub(r"[^A-Za-z0-9._-]+", "-", re.sub(r"\s+", "_", plain.strip()))
    plain = plain[:MAX_NAME].strip("-. ") or "take"
    return f"_{plain}" if _RESERVED.match(plain) else plain


def _share_of(progress: Progress | None, name: str, number: int, count: int) -> Any:
    if progress is None:
        return None
    return lambda share: progress(name, (number + share) / count)


def _make_folder(place: Path) -> None:
    try:
        place.mkdir()
    except FileNotFoundError:
        raise InputError(
            f"{place}: the folder {place.parent} does not exist; make it or give another"
        ) from None
    except (OSError, ValueError) as fault:
        reason = getattr(fault, "strerror", None) or fault
        raise InputError(f"{place}: cannot be made ({reason}); give another folder") from None


def _check_targets(targets: Sequence[Path], source: Path, overwrite: bool) -> None:
    faults: list[str] = []
    for target in targets:
        try:
            check_output(target, inputs=[source], overwrite=overwrite)
        except InputError as fault:
            faults += [text for text in fault.messages if text not in faults]
    if faults:
        raise InputError(faults)
