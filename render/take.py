"""What one take is: a riff, a circuit, a set and its settings -> samples.

A take is rendered twice over: first through the engine into a nameless temporary
file of float64 samples, then, its peak and loudness known, with the wanted gain
into the WAV. So an hour needs no more memory than a minute, nothing clips
unnoticed, and several takes can be brought to one loudness before any is written.
"""

from __future__ import annotations

import math
import tempfile
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import ExitStack, suppress
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import IO, Any, Literal

import numpy as np
import numpy.typing as npt

from ..models.atomic import atomic_path
from ..models.circuit import Circuit, load_circuit
from ..models.errors import InputError
from ..models.gatebus import bus_node
from ..models.jfet import NOMINAL_CELSIUS, Jfet
from ..models.quantity import Setting, parse_rate, parse_trim
from .audio import (
    BLOCK_FRAMES,
    MAX_CHANNELS,
    MAX_RATE_HZ,
    MIN_RATE_HZ,
    AudioFacts,
    AudioReader,
    AudioWriter,
    Encoding,
    audio_bytes,
    check_audio,
    check_output,
    check_room,
    decibels,
    sidecar_path,
    sidecar_text,
)
from .engine import Engine, RunReport
from .loudness import PEAK_CEILING_DB, Loudness, LoudnessMeter
from .plan import EnginePlan
from .provenance import short_record, take_record
from .setup import DEFAULT_FULL_SCALE_V, Setup, TakeSettings, plan_takes, set_up

Array = npt.NDArray[np.float64]
Progress = Callable[[str, float], None]
"""Called with what is being done and the share done, 0 to 1."""
PeakRule = Literal["refuse", "scale"]

# The greatest sample 24 bits hold.
TOP_SAMPLE = 1.0 - 2.0**-23


@dataclass(frozen=True)
class Take:
    """A take in memory.

    Parameters
    ----------
    samples : ndarray
        Shape (frames, channels), 1 at full scale; may go beyond it.
    sample_rate_hz : int
        Sample rate [Hz].
    report : RunReport or None
        What the engine counted; None for a dry take.
    record : dict
        Provenance: settings, parts, versions, engine plan, report.
    warnings : tuple of str
        What the listener should know.
    """

    samples: Array
    sample_rate_hz: int
    report: RunReport | None
    record: dict[str, Any]
    warnings: tuple[str, ...]


@dataclass(frozen=True)
class TakeFile:
    """A take written to disk.

    Parameters
    ----------
    path : Path
        The WAV; its sidecar has the same name with ``.json``.
    gain_db : float
        Gain applied after the unit [dB].
    lufs, peak_dbfs : float
        Integrated loudness and sample peak as written; minus infinity for silence.
    report : RunReport or None
        What the engine counted; None for a dry take.
    record : dict
        What the sidecar holds.
    warnings : tuple of str
        What the listener should know.
    """

    path: Path
    gain_db: float
    lufs: float
    peak_dbfs: float
    report: RunReport | None
    record: dict[str, Any]
    warnings: tuple[str, ...]


def render_take(
    audio: npt.ArrayLike,
    sample_rate: float,
    circuit: Circuit | str | Path,
    jfets: Sequence[Jfet],
    *,
    trimmer: str | Setting = "auto",
    rate: str | Setting = "noon",
    celsius: float = NOMINAL_CELSIUS,
    full_scale_v: float = DEFAULT_FULL_SCALE_V,
    sweep_ohm: float | None = None,
    supply_v: float | None = None,
    gate_v: npt.ArrayLike | None = None,
    dry: bool = False,
    workers: int | None = None,
) -> Take:
    """Render a riff through a circuit with a set of JFETs.

    Parameters
    ----------
    audio : array_like
        Shape (frames,) or (frames, channels), 1 at full scale. Each channel goes
        through its own copy of the unit, all on one oscillator.
    sample_rate : float
        Frames per second, 8000 to 192000 [Hz].
    circuit : Circuit, str or Path
        A circuit, a shipped circuit's name or a circuit file.
    jfets : sequence of Jfet
        The set in stage order.
    trimmer : str or Setting
        ``"auto"``, ``"45%"`` or ``"2.31V"``.
    rate : str or Setting
        ``"9:00"``, ``"noon"``, ``"35%"`` or ``"0.8Hz"``.
    celsius : float
        Channel temperature [degrees Celsius].
    full_scale_v : float
        Volts at full scale, going in and coming out [V].
    sweep_ohm, supply_v : float, optional
        Take the place of the circuit's own sweep resistor [ohm] and supply [V].
    gate_v : array_like, optional
        Gate voltage relative to the sources' rail, one value per frame, shape
        (frames,) [V]; takes the place of oscillator and trimmer.
    dry : bool
        Return the riff alone, past the unit.
    workers : int, optional
        Threads; the samples do not depend on it.

    Returns
    -------
    Take
        With samples of shape (frames, channels).

    Raises
    ------
    InputError
        If the audio or a setting cannot be used.
    """
    samples = _checked_samples(audio, sample_rate)
    settings = TakeSettings(
        circuit=circuit if isinstance(circuit, Circuit) else load_circuit(circuit),
        jfets=tuple(jfets),
        trimmer=trimmer if isinstance(trimmer, Setting) else _parsed(parse_trim, trimmer),
        rate=rate if isinstance(rate, Setting) else _parsed(parse_rate, rate),
        celsius=celsius,
        full_scale_v=full_scale_v,
        sweep_ohm=sweep_ohm,
        supply_v=supply_v,
        dry=dry,
    )
    trace = None
    if gate_v is not None:
        trace = (_checked_trace(gate_v, len(samples)), float(sample_rate))
    source = {"sample_rate_hz": sample_rate, "frames": len(samples), "channels": samples.shape[1]}
    if dry:
        record = take_record(source, None, None, None)
        return Take(samples.copy(), int(sample_rate), None, record, ())
    setup = set_up(settings, trace)
    [plan] = plan_takes([setup], sample_rate)
    run = _Run(setup, plan, sample_rate, samples.shape[1], workers)
    blocks = (samples[i : i + BLOCK_FRAMES] for i in range(0, len(samples), BLOCK_FRAMES))
    out = np.concatenate(list(run.through(blocks)))
    report = run.report()
    record = take_record(source, setup, plan, report)
    return Take(out, int(sample_rate), report, record, tuple(report.warnings()))


def render_file(
    input_path: str | Path,
    output_path: str | Path,
    settings: TakeSettings,
    *,
    encoding: Encoding = "pcm24",
    gain_db: float = 0.0,
    peak: PeakRule = "refuse",
    overwrite: bool = False,
    title: str = "",
    progress: Progress | None = None,
    workers: int | None = None,
) -> TakeFile:
    """Render a riff's file into a WAV and its sidecar.

    Parameters
    ----------
    input_path : str or Path
        The riff, anything libsndfile reads.
    output_path : str or Path
        The WAV to write.
    settings : TakeSettings
        What is asked of the take.
    encoding : {"pcm24", "float32"}
        Sample format of the WAV.
    gain_db : float
        Gain after the unit [dB].
    peak : {"refuse", "scale"}
        What to do where 24 bits cannot hold the peak: raise, or lower the whole
        take until its peak is at -1 dBFS.
    overwrite : bool
        Whether existing files may be replaced.
    title : str
        Title in the file; its name without the ending if left out.
    progress : callable, optional
        Told what is being done and the share done.
    workers : int, optional
        Threads; the bytes written do not depend on it.

    Returns
    -------
    TakeFile
        What was written.

    Raises
    ------
    InputError
        If anything given cannot be used; then nothing is left behind.
    """
    target = check_output(output_path, inputs=[input_path], overwrite=overwrite)
    facts = check_audio(input_path)
    check_room(
        target.parent, raw_bytes(facts) + audio_bytes(facts.frames, facts.channels, encoding)
    )
    setup = plan = None
    if not settings.dry:
        setup = set_up(settings)
        [plan] = plan_takes([setup], facts.sample_rate_hz)
    with ExitStack() as stack:
        raw = stack.enter_context(
            RawTake(facts, Path(input_path), target.parent, setup, plan, workers)
        )
        raw.render(lambda share: progress and progress("rendering", share))
        gain_db = settle_gain(raw, target, encoding, gain_db, peak)
        made = write_take(stack, raw, target, encoding, gain_db, title=title or target.stem)
    if progress:
        progress("written", 1.0)
    return made


def settle_gain(
    raw: RawTake, target: Path, encoding: Encoding, gain_db: float, peak: PeakRule
) -> float:
    """Return the gain to write a take with, so that 24 bits can hold its peak.

    Raises
    ------
    InputError
        If the peak would go beyond full scale and `peak` is ``"refuse"``.
    """
    top = raw.loudness.peak * 10.0 ** (gain_db / 20.0)
    if encoding == "float32" or top <= TOP_SAMPLE:
        return gain_db
    over_db = decibels(top)
    if peak == "refuse":
        # Rounded down to a tenth, so that the advice works.
        advised = math.floor((gain_db - over_db) * 10.0 - 1e-9) / 10.0
        raise InputError(
            f"{target}: not written: the take's peak is {over_db:+.2f} dBFS, beyond what 24 bits "
            f"hold; give a gain of {advised:.1f} dB or less, let the peak be scaled, or write "
            "32-bit float"
        )
    return gain_db - over_db + PEAK_CEILING_DB


class RawTake:
    """A take's samples before their final gain, in a nameless temporary file.

    Use it in a ``with`` statement; the file is gone afterwards, come what may.

    Parameters
    ----------
    facts : AudioFacts
        The riff.
    source : Path
        Its file.
    folder : Path
        Where the temporary file goes.
    setup : Setup or None
        The take; None for a dry one.
    plan : EnginePlan or None
        How it is computed; None for a dry one.
    workers : int, optional
        Threads.
    """

    def __init__(
        self,
        facts: AudioFacts,
        source: Path,
        folder: Path,
        setup: Setup | None,
        plan: EnginePlan | None,
        workers: int | None = None,
    ) -> None:
        self.facts = facts
        self.setup = setup
        self.plan = plan
        self.report: RunReport | None = None
        self._source = source
        self._folder = folder
        self._workers = workers
        self._stream: IO[bytes] | None = None
        self._loudness: Loudness | None = None

    def __enter__(self) -> RawTake:
        try:
            self._stream = tempfile.TemporaryFile(dir=self._folder)
        except OSError as fault:
            raise self._unwritable(fault) from None
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        assert self._stream is not None
        with suppress(OSError):  # a full disk was told already
            self._stream.close()

    @property
    def loudness(self) -> Loudness:
        """Loudness and peak, before any gain."""
        assert self._loudness is not None
        return self._loudness

    def render(self, progress: Callable[[float], object] | None = None) -> None:
        """Run the riff through the engine.

        Parameters
        ----------
        progress : callable, optional
            Told the share done, 0 to 1.

        Raises
        ------
        InputError
            If the engine gave samples that are not finite, or the disk is full.
        """
        assert self._stream is not None
        facts = self.facts
        meter = LoudnessMeter(facts.sample_rate_hz, facts.channels)
        with AudioReader(self._source) as reader:
            if (reader.frames, reader.channels) != (facts.frames, facts.channels):
                raise InputError(f"{self._source}: the file changed while it was being read")
            blocks: Iterable[Array] = reader.blocks()
            run = None
            if self.setup is not None and self.plan is not None:
                run = _Run(
                    self.setup, self.plan, facts.sample_rate_hz, facts.channels, self._workers
                )
                blocks = run.through(blocks)
            done = 0
            try:
                for block in blocks:
                    if np.isfinite(block).all():
                        meter.add(block)
                    self._stream.write(np.ascontiguousarray(block).data)
                    done += len(block)
                    if progress:
                        progress(done / facts.frames)
                self._stream.flush()
            except OSError as fault:
                raise self._unwritable(fault) from None
        if run is not None:
            self.report = run.report()
            if self.report.nonfinite_frames:
                raise InputError(
                    f"{self._source}: not written: {self.report.nonfinite_frames} frames of the "
                    "take are not finite numbers; lower the full-scale voltage, or see whether "
                    "the circuit's loop can be stable"
                )
        self._loudness = meter.result()

    def blocks(self) -> Iterator[Array]:
        """Yield the samples in order, shape (n, channels), 1 at full scale."""
        assert self._stream is not None
        self._stream.seek(0)
        frame_bytes = 8 * self.facts.channels
        while data := self._stream.read(BLOCK_FRAMES * frame_bytes):
            yield np.frombuffer(data, np.float64).reshape(-1, self.facts.channels)

    def _unwritable(self, fault: OSError) -> InputError:
        return InputError(
            f"{self._folder}: the take's temporary file of {raw_bytes(self.facts) / 1e6:.1f} MB "
            f"cannot be written ({fault.strerror}): see whether the disk is full"
        )


def write_take(
    stack: ExitStack,
    raw: RawTake,
    target: Path,
    encoding: Encoding,
    gain_db: float,
    *,
    title: str,
) -> TakeFile:
    """Write a rendered take and its sidecar under temporary names.

    They come to their own names when `stack` closes without an error, and go
    away when it closes with one.

    Parameters
    ----------
    stack : ExitStack
        Holds the files until all that belong together are written.
    raw : RawTake
        The samples.
    target : Path
        The WAV.
    encoding : {"pcm24", "float32"}
        Sample format.
    gain_db : float
        Gain [dB].
    title : str
        Title in the file.
    """
    facts = raw.facts
    gain = 10.0 ** (gain_db / 20.0)
    lufs = raw.loudness.after_gain(gain_db)
    peak_dbfs = decibels(raw.loudness.peak * gain)
    warnings = raw.report.warnings() if raw.report is not None else []
    if peak_dbfs > 0.0:
        warnings.append(
            f"the peak is {peak_dbfs:+.2f} dBFS: players will clip this float file; lower its gain"
        )
    record = take_record(facts.as_record(), raw.setup, raw.plan, raw.report)
    record["warnings"] = warnings
    record["output"] = {
        "encoding": encoding,
        "gain_db": gain_db,
        "integrated_lufs": lufs if math.isfinite(lufs) else None,
        "loudness_gated": raw.loudness.gated,
        "peak_dbfs": peak_dbfs if math.isfinite(peak_dbfs) else None,
    }
    wav = stack.enter_context(atomic_path(target))
    sidecar = stack.enter_context(atomic_path(sidecar_path(target)))
    with AudioWriter(
        wav,
        facts.sample_rate_hz,
        facts.channels,
        facts.frames,
        encoding=encoding,
        title=title,
        software=f"sweepset {record['sweepset']}",
        comment=short_record(record),
        shown_as=str(target),
    ) as writer:
        for block in raw.blocks():
            writer.write(block * gain)
    sidecar.write_bytes(sidecar_text(record).encode())
    return TakeFile(target, gain_db, lufs, peak_dbfs, raw.report, record, tuple(warnings))


def raw_bytes(facts: AudioFacts) -> int:
    """Return the size of a take's temporary file [bytes]."""
    return facts.frames * facts.channels * 8


class _Run:
    """One engine, fed full-scale samples and giving full-scale samples."""

    def __init__(
        self,
        setup: Setup,
        plan: EnginePlan,
        sample_rate: float,
        channels: int,
        workers: int | None,
    ) -> None:
        self._full_scale_v = setup.settings.full_scale_v
        self._engine = Engine(
            setup.circuit,
            setup.jfets,
            sample_rate,
            channels,
            plan,
            setup.gate,
            bus=None if setup.bus is None else bus_node(setup.circuit, setup.bus.trimmer),
            workers=workers,
        )

    def through(self, blocks: Iterable[Array]) -> Iterator[Array]:
        for block in blocks:
            out = self._engine.process(block * self._full_scale_v)
            if len(out):
                yield out / self._full_scale_v
        yield self._engine.finish() / self._full_scale_v

    def report(self) -> RunReport:
        return self._engine.report()


def _checked_samples(audio: npt.ArrayLike, sample_rate: float) -> Array:
    samples = np.asarray(audio, float)
    faults = []
    if samples.ndim == 1:
        samples = samples[:, None]
    if samples.ndim != 2:
        faults.append(f"audio of shape {samples.shape}; expected (frames,) or (frames, channels)")
    elif not samples.shape[0] or not 1 <= samples.shape[1] <= MAX_CHANNELS:
        faults.append(
            f"audio of shape {samples.shape}; expected at least 1 frame and 1 to {MAX_CHANNELS} "
            "channels, as (frames, channels): transpose it if channels come first"
        )
    elif not np.isfinite(samples).all():
        bad = ~np.isfinite(samples)
        frame = int(np.argmax(bad.any(axis=1)))
        faults.append(
            f"audio: {int(bad.sum())} samples are not finite numbers, the first at frame {frame}"
        )
    if not MIN_RATE_HZ <= sample_rate <= MAX_RATE_HZ:
        faults.append(f"sample rate {sample_rate:g} Hz; expected {MIN_RATE_HZ} to {MAX_RATE_HZ} Hz")
    if faults:
        raise InputError(faults)
    return samples


def _checked_trace(gate_v: npt.ArrayLike, frames: int) -> Array:
    trace = np.asarray(gate_v, float)
    if trace.shape != (frames,):
        raise InputError(
            f"gate_v of shape {trace.shape}; expected one value per frame of audio: ({frames},)"
        )
    if not np.isfinite(trace).all():
        raise InputError(
            f"gate_v: the value at frame {int(np.argmin(np.isfinite(trace)))} is not a finite "
            "number"
        )
    return trace


def _parsed(parse: Callable[[str], Setting], text: str) -> Setting:
    try:
        return parse(text)
    except InputError:
        raise
    except ValueError as fault:
        raise InputError(str(fault)) from None
