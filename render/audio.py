"""Audio files: what comes in, what goes out. The only importer of soundfile.

In: anything libsndfile reads, streamed in blocks of float64, and refused with a
plain message where it is not what it claims to be. Out: WAV, 24-bit or 32-bit
float, RF64 where WAV's 32-bit lengths do not suffice; or 24-bit FLAC.

Two habits of the library are worked around here. Its conversion from float to
24 bits truncates, so samples are rounded to integers first. Its float WAV files
carry the time of writing in their PEAK chunk, which would make equal takes
differ; the stamp is set to zero.
"""

from __future__ import annotations

import hashlib
import io
import json
import os
import re
import shutil
import struct
import tempfile
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import soundfile

from ..models.atomic import check_target, explain_write_fault
from ..models.errors import InputError

Samples = npt.NDArray[np.float64]
Encoding = Literal["pcm24", "float32", "flac24"]

MIN_RATE_HZ = 8_000
MAX_RATE_HZ = 192_000
# More than any recording of one instrument has; bounds the memory of a block.
MAX_CHANNELS = 64
# +60 dBFS: no recording reaches it; a float file holding integers does.
MAX_PEAK = 1_000.0
BLOCK_FRAMES = 65_536
# A RIFF chunk's length is an unsigned 32-bit number (check-values j5).
RIFF_LIMIT_BYTES = 2**32 - 1

_FULL_SCALE_24 = 2**23
_BYTES_PER_SAMPLE: dict[Encoding, int] = {"pcm24": 3, "float32": 4, "flac24": 3}
_SUBTYPES: dict[Encoding, str] = {
    "pcm24": "PCM_24",
    "float32": "FLOAT",
    "flac24": "PCM_24",
}
# Where the library's log tells a length in the header that the file cannot hold:
# WAV (data), AIFF (SSND), AU (Data Size), W64 (riff), RF64 (Riff size).
_SHORTFALL = re.compile(
    r"^ *(?:data|SSND|Data Size|riff|Riff size) *: (\d+) \(should be (\d+)\)", re.MULTILINE
)
# A recorder writing into a pipe cannot know the length and puts these instead.
_LENGTH_UNKNOWN = {0xFFFFFFFF, 0x7FFFFFFF}


@dataclass(frozen=True)
class AudioFacts:
    """What a riff's file holds, found by reading it once from end to end.

    Parameters
    ----------
    name : str
        File name without its folder.
    sample_rate_hz : int
        Sample rate [Hz].
    channels : int
        Number of channels.
    frames : int
        Number of frames; one frame is one value per channel.
    encoding : str
        The library's name of container and sample format, for example ``WAV PCM_24``.
    peak : float
        Greatest absolute sample, 1 at full scale.
    sha256 : str
        Hash of the file's bytes, hexadecimal.
    """

    name: str
    sample_rate_hz: int
    channels: int
    frames: int
    encoding: str
    peak: float
    sha256: str

    @property
    def duration_s(self) -> float:
        """Length [s]."""
        return self.frames / self.sample_rate_hz

    def as_record(self) -> dict[str, Any]:
        """Return the facts for a provenance record."""
        return {
            "name": self.name,
            "sample_rate_hz": self.sample_rate_hz,
            "channels": self.channels,
            "frames": self.frames,
            "encoding": self.encoding,
            "peak": self.peak,
            "sha256": self.sha256,
        }


class AudioReader:
    """An audio file open for reading in blocks; use it in a ``with`` statement.

    Parameters
    ----------
    path : str or Path
        The file.

    Raises
    ------
    InputError
        If the file is missing, empty, not audio, cut short, without frames, or
        outside the sample rates and channel counts that can be rendered.
    """

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path)
        _check_readable(self.path)
        self._file = _open(self.path)
        try:
            self._check_header()
        except InputError:
            self._file.close()
            raise

    @property
    def sample_rate_hz(self) -> int:
        """Sample rate [Hz]."""
        return int(self._file.samplerate)

    @property
    def channels(self) -> int:
        """Number of channels."""
        return int(self._file.channels)

    @property
    def frames(self) -> int:
        """Number of frames in the file."""
        return int(self._file.frames)

    @property
    def comment(self) -> str:
        """The comment in the file's own metadata; empty if there is none."""
        return str(self._file.comment)

    @property
    def encoding(self) -> str:
        """Container and sample format, as the library names them."""
        return f"{self._file.format} {self._file.subtype}"

    def __enter__(self) -> AudioReader:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._file.close()

    def blocks(self, frames: int = BLOCK_FRAMES) -> Iterator[Samples]:
        """Yield the samples in order.

        Parameters
        ----------
        frames : int
            Greatest number of frames in a block. Memory is taken for this many
            and no more, whatever the header claims.

        Yields
        ------
        ndarray
            Shape (n, channels), 1 at full scale.

        Raises
        ------
        InputError
            If the file ends early or is damaged part of the way.
        """
        done = 0
        while done < self.frames:
            try:
                block = self._file.read(min(frames, self.frames - done), "float64", always_2d=True)
            except (soundfile.LibsndfileError, OSError) as fault:
                raise InputError(
                    f"{self.path}: damaged or cut short after frame {done} of {self.frames} "
                    f"({_reason(fault)}); export or copy the file again"
                ) from None
            if not len(block):
                raise InputError(
                    f"{self.path}: cut short: its header claims {self.frames} frames, the file "
                    f"holds {done}; export or copy the file again"
                )
            done += len(block)
            yield block

    def _check_header(self) -> None:
        faults = []
        claims = [(int(a), int(b)) for a, b in _SHORTFALL.findall(self._file.extra_info)]
        for claimed, held in claims:
            if claimed > held and claimed not in _LENGTH_UNKNOWN:
                faults.append(
                    f"{self.path}: cut short: its header claims {claimed} bytes of audio, the "
                    f"file holds {held} ({self.frames} frames); export or copy the file again"
                )
                break
        if self._file.format == "OGG" and not _ogg_is_whole(self.path):
            faults.append(
                f"{self.path}: cut short: its last page is missing ({self.frames} frames are "
                "left); export or copy the file again"
            )
        if self.frames <= 0 and not faults:
            faults.append(
                f"{self.path}: holds no audio (0 frames); if a recorder wrote it, the recording "
                "was probably not closed; export it again"
            )
        rate = self.sample_rate_hz
        if not MIN_RATE_HZ <= rate <= MAX_RATE_HZ:
            faults.append(
                f"{self.path}: sample rate {rate} Hz; expected {MIN_RATE_HZ} to {MAX_RATE_HZ} Hz; "
                "export the file at 44100 or 48000 Hz"
            )
        if self.channels > MAX_CHANNELS:
            faults.append(
                f"{self.path}: {self.channels} channels; expected 1 to {MAX_CHANNELS}; "
                "export the channels that are wanted"
            )
        if faults:
            raise InputError(faults)


def check_audio(path: str | Path) -> AudioFacts:
    """Read an audio file once from end to end and return what it holds.

    Done before anything long begins, so that a fault in the last second of an
    hour is told at once.

    Parameters
    ----------
    path : str or Path
        The file.

    Raises
    ------
    InputError
        For everything :class:`AudioReader` refuses, for samples that are not
        finite numbers, and for samples far beyond full scale.
    """
    peak = 0.0
    bad_samples = 0
    first_bad: tuple[int, int, float] | None = None
    with AudioReader(path) as reader:
        start = 0
        for block in reader.blocks():
            finite = np.isfinite(block)
            if not finite.all():
                bad = np.argwhere(~finite)
                if first_bad is None:
                    frame, channel = (int(i) for i in bad[0])
                    first_bad = (start + frame, channel, float(block[frame, channel]))
                bad_samples += len(bad)
                block = np.where(finite, block, 0.0)
            peak = max(peak, float(np.max(np.abs(block))))
            start += len(block)
        if first_bad is not None:
            frame, channel, value = first_bad
            raise InputError(
                f"{reader.path}: {bad_samples} samples are not finite numbers; the first is "
                f"{value} at frame {frame} ({frame / reader.sample_rate_hz:.3f} s), channel "
                f"{channel + 1}; render the file again where it came from, or cut that place out"
            )
        if peak > MAX_PEAK:
            raise InputError(
                f"{reader.path}: peak {peak:.6g} times full scale; expected about 1 or less; "
                "this float file seems to hold integers: divide it by its full scale"
            )
        with reader.path.open("rb") as stream:
            digest = hashlib.file_digest(stream, "sha256").hexdigest()
        return AudioFacts(
            name=reader.path.name,
            sample_rate_hz=reader.sample_rate_hz,
            channels=reader.channels,
            frames=reader.frames,
            encoding=reader.encoding,
            peak=peak,
            sha256=digest,
        )


def read_audio(path: str | Path) -> tuple[Samples, int]:
    """Return a whole audio file's samples and its sample rate.

    Parameters
    ----------
    path : str or Path
        The file; it must fit in memory.

    Returns
    -------
    samples : ndarray
        Shape (frames, channels), 1 at full scale.
    sample_rate_hz : int
        Sample rate [Hz].

    Raises
    ------
    InputError
        See :func:`check_audio`.
    """
    check_audio(path)
    with AudioReader(path) as reader:
        return np.concatenate(list(reader.blocks())), reader.sample_rate_hz


@dataclass(frozen=True)
class WriteReport:
    """What was written: frames, and the greatest absolute sample (1 at full scale)."""

    frames: int
    peak: float


class AudioWriter:
    """An audio file being written in blocks; use it in a ``with`` statement.

    It writes to the very path it is given; publish under the final name, when
    all went well, with an atomic rename.

    Parameters
    ----------
    path : str or Path
        The file to write, normally a temporary name in the final folder.
    sample_rate_hz : int
        Sample rate [Hz].
    channels : int
        Number of channels.
    frames : int
        Number of frames that will come; it decides between WAV and RF64.
    encoding : {"pcm24", "float32", "flac24"}
        24-bit WAV, 32-bit float WAV, or 24-bit FLAC (up to 8 channels).
    title, software, comment : str
        Texts for the file's INFO list.
    shown_as : str, optional
        The file's name in messages, where `path` is a temporary one.

    Raises
    ------
    InputError
        If the file cannot be written; from the methods also if a sample is not
        finite, if samples are beyond what 24 bits hold, or if the number of
        frames is not the one announced.
    """

    def __init__(
        self,
        path: str | Path,
        sample_rate_hz: int,
        channels: int,
        frames: int,
        *,
        encoding: Encoding = "pcm24",
        title: str = "",
        software: str = "",
        comment: str = "",
        shown_as: str | None = None,
    ) -> None:
        self.path = Path(path)
        self.name = shown_as or str(path)
        self.channels = channels
        self.frames = frames
        self.encoding: Encoding = encoding
        self._written = 0
        self._peak = 0.0
        self._beyond = 0
        texts = {"title": title, "software": software, "comment": comment}
        size = audio_bytes(frames, channels, encoding)
        room = 4096 + sum(len(text.encode()) for text in texts.values())
        if encoding == "flac24":
            container = "FLAC"
        else:
            container = "WAVEX" if size + room <= RIFF_LIMIT_BYTES else "RF64"
        try:
            self._file = soundfile.SoundFile(
                str(self.path),
                "w",
                sample_rate_hz,
                channels,
                subtype=_SUBTYPES[encoding],
                format=container,
            )
            for field, text in texts.items():
                if text:
                    setattr(self._file, field, text)
        except (soundfile.LibsndfileError, OSError) as fault:
            raise self._unwritable(fault) from None

    def __enter__(self) -> AudioWriter:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        try:
            self._file.close()
            if self.encoding == "float32":
                _clear_peak_stamp(self.path)
        except (soundfile.LibsndfileError, OSError) as fault:
            if error is None:
                raise self._unwritable(fault) from None
            return
        if error is None:
            self._check_whole()

    @property
    def report(self) -> WriteReport:
        """Frames and peak so far."""
        return WriteReport(self._written, self._peak)

    def write(self, block: Samples) -> None:
        """Append a block.

        Parameters
        ----------
        block : ndarray
            Shape (n, channels), 1 at full scale.

        Raises
        ------
        InputError
            If a sample is not finite or the disk takes no more.
        """
        finite = np.isfinite(block)
        if not finite.all():
            frame = int(np.argmin(finite.all(axis=1)))
            raise InputError(
                f"{self.name}: not written: {int(np.sum(~finite))} samples are not finite "
                f"numbers, the first at frame {self._written + frame}"
            )
        if len(block):
            self._peak = max(self._peak, float(np.max(np.abs(block))))
        try:
            if self.encoding != "float32":
                codes, beyond = quantise_24(block)
                self._beyond += beyond
                self._file.write(codes)
            else:
                self._file.write(block.astype(np.float32))
        except (soundfile.LibsndfileError, OSError, AssertionError) as fault:
            # AssertionError: soundfile's own check that all frames were taken.
            raise self._unwritable(fault) from None
        self._written += len(block)

    def _check_whole(self) -> None:
        if self._beyond:
            raise InputError(
                f"{self.name}: not written: {self._beyond} samples are beyond full scale, the "
                f"peak is {decibels(self._peak):+.2f} dBFS; lower the gain by that much and a "
                "little more, let the peak be scaled, or write 32-bit float"
            )
        if self._written != self.frames:
            raise InputError(
                f"{self.name}: not written: {self._written} frames came where {self.frames} "
                "were announced"
            )

    def _unwritable(self, fault: Exception) -> InputError:
        size = audio_bytes(self.frames, self.channels, self.encoding)
        return InputError(
            f"{self.name}: cannot be written ({_reason(fault)}); it needs {size / 1e6:.1f} MB: "
            "see whether the disk is full and the folder may be written to"
        )


def flac_bytes(path: str | Path, start_frame: int, stop_frame: int, gain_db: float = 0.0) -> bytes:
    """Return a stretch of an audio file as 24-bit FLAC.

    Parameters
    ----------
    path : str or Path
        The file.
    start_frame, stop_frame : int
        The stretch, within the file.
    gain_db : float
        Gain [dB]; what passes full scale is held there.

    Raises
    ------
    InputError
        If the file cannot be read.
    """
    stream = io.BytesIO()
    gain = 10.0 ** (gain_db / 20.0)
    with AudioReader(path) as reader:
        channels, rate = reader.channels, reader.sample_rate_hz
        with soundfile.SoundFile(
            stream, "w", rate, channels, subtype="PCM_24", format="FLAC"
        ) as packed:
            done = 0
            for block in reader.blocks():
                part = block[max(start_frame - done, 0) : max(stop_frame - done, 0)]
                if len(part):
                    packed.write(quantise_24(part * gain)[0])
                done += len(block)
                if done >= stop_frame:
                    break
    return stream.getvalue()


def quantise_24(block: Samples) -> tuple[npt.NDArray[np.int32], int]:
    """Round samples to 24 bits.

    Parameters
    ----------
    block : ndarray
        Any shape, 1 at full scale, finite.

    Returns
    -------
    codes : ndarray of int32
        The 24-bit codes in the upper bits, as the library wants them.
    beyond : int
        How many samples lay outside -1 to 1 - 2^-23; they are held at the limits.
    """
    codes = np.rint(block * _FULL_SCALE_24)
    beyond = int(np.sum((codes < -_FULL_SCALE_24) | (codes > _FULL_SCALE_24 - 1)))
    np.clip(codes, -_FULL_SCALE_24, _FULL_SCALE_24 - 1, out=codes)
    return codes.astype(np.int32) * np.int32(256), beyond


def decibels(ratio: float) -> float:
    """Return an amplitude ratio in dB; minus infinity for 0."""
    return 20.0 * float(np.log10(ratio)) if ratio > 0.0 else float("-inf")


def audio_bytes(frames: int, channels: int, encoding: Encoding) -> int:
    """Return the size of the samples in a file, for FLAC before packing [bytes]."""
    return frames * channels * _BYTES_PER_SAMPLE[encoding]


def check_output(
    path: str | Path, *, inputs: Iterable[str | Path] = (), overwrite: bool = False
) -> Path:
    """Return the path of a WAV to be, after checking that it may be written.

    Parameters
    ----------
    path : str or Path
        The WAV; its sidecar (see :func:`sidecar_path`) is checked with it.
    inputs : iterable of path
        Files that must stay untouched.
    overwrite : bool
        Whether existing files may be replaced.

    Raises
    ------
    InputError
        With every fault found.
    """
    target = Path(path)
    if "\0" in str(target):
        raise InputError(f"{str(target)!r}: not a possible file name; give another")
    faults: list[str] = []
    if target.suffix.lower() != ".wav":
        faults.append(f"{target}: takes are written as WAV; give a name ending in .wav")
    try:
        found = _file_faults(target, inputs, overwrite)
        faults += found or _file_faults(sidecar_path(target), inputs, overwrite)
        if not faults:
            # Asking for permission bits is not enough: read-only disks, quotas, root.
            with tempfile.TemporaryFile(dir=target.parent):
                pass
    except OSError as fault:
        faults += explain_write_fault(fault, target).messages
    if faults:
        raise InputError(faults)
    return target


def check_room(folder: Path, size_bytes: int) -> None:
    """Refuse to begin where the disk cannot hold what will come.

    Parameters
    ----------
    folder : Path
        Where the files will go.
    size_bytes : int
        What they need together.

    Raises
    ------
    InputError
        If there is less room.
    """
    free = shutil.disk_usage(folder).free
    if free < size_bytes:
        raise InputError(
            f"{folder}: {size_bytes / 1e6:.1f} MB needed, {free / 1e6:.1f} MB free; "
            "make room or give another folder"
        )


def sidecar_path(path: Path) -> Path:
    """Return the name of the JSON file that goes with a WAV: same name, ``.json``."""
    return path.with_suffix(".json")


def sidecar_text(record: Mapping[str, Any]) -> str:
    """Return a provenance record as the text of its JSON file."""
    return json.dumps(record, indent=2, sort_keys=True, allow_nan=False, ensure_ascii=False) + "\n"


def _check_readable(path: Path) -> None:
    try:
        if not path.exists():
            raise InputError(f"{path}: no such audio file; check the name")
        if path.is_dir():
            raise InputError(f"{path}: is a folder; give an audio file")
        if not path.is_file():
            raise InputError(f"{path}: not an ordinary file; give an audio file")
        with path.open("rb") as stream:
            empty = not stream.read(1)
    except (OSError, ValueError) as fault:
        if isinstance(fault, InputError):
            raise
        raise InputError(f"{path}: cannot be read ({_reason(fault)})") from None
    if empty:
        raise InputError(f"{path}: the file is empty; expected an audio file")


def _open(path: Path) -> Any:
    try:
        return soundfile.SoundFile(str(path))
    except soundfile.LibsndfileError as fault:
        raise InputError(
            f"{path}: not audio that can be read, or damaged in its header ({_reason(fault)}); "
            "expected WAV, FLAC, AIFF or another format libsndfile reads; export it as WAV"
        ) from None
    except TypeError:
        # soundfile asks for rate and channels where the name ends in .raw.
        raise InputError(
            f"{path}: headerless audio tells neither its rate nor its channels; export it as WAV"
        ) from None


def _reason(fault: Exception) -> str:
    if isinstance(fault, soundfile.LibsndfileError):
        return str(fault.error_string).strip().rstrip(".")
    if isinstance(fault, OSError) and fault.strerror:
        return fault.strerror
    return str(fault) or "not all frames were taken"


def _ogg_is_whole(path: Path) -> bool:
    """Return whether the last page carries the end-of-stream flag (RFC 3533, section 6)."""
    with path.open("rb") as stream:
        stream.seek(max(0, path.stat().st_size - 66_000))  # a page has at most 65,307 bytes
        tail = stream.read()
    page = tail[tail.rfind(b"OggS") :]
    if len(page) < 27 or not page[5] & 4:
        return False
    segments = page[26]
    return len(page) >= 27 + segments + sum(page[27 : 27 + segments])


def _file_faults(file: Path, inputs: Iterable[str | Path], overwrite: bool) -> Sequence[str]:
    for source in inputs:
        if _same_file(file, Path(source)):
            return [f"{file}: is the input {source} itself; give the output another name"]
    try:
        check_target(file)
    except InputError as fault:
        return fault.messages
    if os.path.lexists(file) and not overwrite:
        return [f"{file}: exists already; give another name, or allow overwriting it"]
    return []


def _same_file(one: Path, other: Path) -> bool:
    try:
        return one.samefile(other)
    except OSError:
        return os.path.realpath(one) == os.path.realpath(other)


def _clear_peak_stamp(path: Path) -> None:
    """Set the time stamp in a PEAK chunk to zero; files without that chunk stay as they are."""
    with path.open("r+b") as stream:
        place = 12
        while True:
            stream.seek(place)
            head = stream.read(8)
            if len(head) < 8:
                return
            name, size = struct.unpack("<4sI", head)
            if name == b"data":
                return
            if name == b"PEAK":
                stream.seek(place + 12)
                stream.write(bytes(4))
                return
            place += 8 + size + (size & 1)
