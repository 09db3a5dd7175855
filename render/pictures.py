"""Pictures of takes: what was heard with the predicted tracks over it, and what the parts do.

The spectrogram shows a take against the dry riff, so that the notches stand out of the
music.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..models.circuit import Circuit
from ..models.cycle import AUDIBLE_HZ, Cycle
from ..models.jfet import Jfet
from ..models.notches import set_conductance_s
from .audio import AudioReader
from .figures import DASHES, INKS, draw_notches, new_figure
from .measures import TakeDifference

if TYPE_CHECKING:
    from matplotlib.figure import Figure

Array = npt.NDArray[np.float64]

WINDOW_S = 0.06
MOST_S = 20.0
LEVELS_DB = (-24.0, 12.0)
PER_OCTAVE = 24
TICKS_HZ = (50, 100, 200, 500, 1000, 2000, 5000, 10_000)


def spectrogram_figure(take: str | Path, dry: str | Path | None, cycle: Cycle) -> Figure:
    """Return a take's level over time and frequency with its predicted notch tracks.

    Parameters
    ----------
    take : str or Path
        The take; its first 20 s are shown.
    dry : str or Path, optional
        The riff dry, taken off; else the take's own mean level at each frequency is.
    cycle : Cycle
        What its set does.
    """
    time_s, freq_hz, level = _log_levels(take)
    base = _log_levels(dry)[2] if dry is not None else level.mean(axis=0, keepdims=True)
    apart = level - base
    apart -= np.median(apart)
    figure, axes = new_figure(9.0, 4.6)
    # Even in octaves: an image on a log2 axis draws ten times faster than a mesh.
    reach = 0.5 / PER_OCTAVE
    octaves = np.log2(freq_hz)
    shade = axes.imshow(
        apart.T, cmap="gray", vmin=LEVELS_DB[0], vmax=LEVELS_DB[1], aspect="auto", origin="lower",
        interpolation="nearest",
        extent=(0.0, time_s[-1] + time_s[0], octaves[0] - reach, octaves[-1] + reach),
    )  # fmt: skip
    for number, track in enumerate(cycle.notch_hz.T):
        heard = np.interp(time_s, cycle.time_s, np.log2(track), period=cycle.period_s)
        for ink, width, dash in (("white", 3.2, "-"), (INKS[1], 1.6, DASHES[1])):
            label = "notches, predicted standing still" if number == 0 and width < 2 else None
            axes.plot(time_s, heard, color=ink, lw=width, ls=dash, label=label)
    shown = [hz for hz in TICKS_HZ if hz <= freq_hz[-1]]
    axes.set_yticks(np.log2(shown), [f"{hz:g}" for hz in shown])
    axes.set_ylim(octaves[0] - reach, octaves[-1] + reach)
    axes.set_xlim(0.0, time_s[-1] + time_s[0])
    axes.set_xlabel("time [s]")
    axes.set_ylabel("frequency [Hz]")
    axes.set_title(f"{Path(take).stem}: level against {'dry' if dry else 'its mean'}", fontsize=10)
    figure.colorbar(shade, label="dB", pad=0.02)
    axes.legend(loc="lower right", fontsize=8)
    return figure


def tracks_figure(cycles: Sequence[tuple[str, Cycle]]) -> Figure:
    """Return the notch tracks of several takes over one cycle each.

    Parameters
    ----------
    cycles : sequence of (str, Cycle)
        Name and cycle of each take.
    """
    figure, axes = new_figure(8.0, 4.6)
    for number, (name, cycle) in enumerate(cycles):
        for place, track in enumerate(cycle.notch_hz.T):
            axes.plot(
                cycle.time_s / cycle.period_s, track, color=INKS[number % len(INKS)],
                ls=DASHES[number % len(DASHES)], lw=2.0, label=name if place == 0 else None,
            )  # fmt: skip
    axes.set_yscale("log")
    axes.set_xlim(0.0, 1.0)
    axes.set_xlabel("share of the cycle")
    axes.set_ylabel("notches [Hz]")
    axes.grid(True, which="major", color="#dddddd", lw=0.6)
    axes.legend(frameon=False, fontsize=8)
    return figure


def channels_figure(circuit: Circuit, jfets: Sequence[Jfet], cycle: Cycle) -> Figure:
    """Return the parts' channel resistances over one cycle, notches above them.

    Parameters
    ----------
    circuit : Circuit
        The schematic.
    jfets : sequence of Jfet
        The set in stage order, at its channel temperature.
    cycle : Cycle
        What the set does.
    """
    figure, first = new_figure(8.0, 6.0)
    first.remove()
    top, bottom = figure.subplots(2, 1, sharex=True)
    draw_notches(top, cycle)
    with np.errstate(divide="ignore"):
        ohms = 1.0 / set_conductance_s(circuit, jfets, cycle.gate_v)
    for number, track in enumerate(ohms.T):
        label = f"stage {number + 1}: {jfets[number].label or 'part'}"
        bottom.plot(
            cycle.time_s, np.minimum(track, 1e8), color=INKS[number % len(INKS)],
            ls=DASHES[number % len(DASHES)], lw=1.4, label=label,
        )  # fmt: skip
        bottom.axhline(
            circuit.stages[number].shunt_ohm, color="#999999", lw=0.8,
            label="shunt" if number == 0 else None,
        )  # fmt: skip
    for axes, name in ((top, "notches [Hz]"), (bottom, "channel resistance [ohm]")):
        axes.set_yscale("log")
        axes.set_ylabel(name)
        axes.grid(True, which="major", color="#dddddd", lw=0.6)
    bottom.set_ylim(100.0, 1e7)
    bottom.set_xlim(0.0, cycle.period_s)
    bottom.set_xlabel("time in the cycle [s]")
    figure.legend(frameon=False, fontsize=8, loc="outside right upper")
    return figure


def difference_figure(difference: TakeDifference, names: tuple[str, str]) -> Figure:
    """Return the level difference of two takes per ERB band over time.

    Parameters
    ----------
    difference : TakeDifference
        What was measured.
    names : (str, str)
        The takes' names.
    """
    figure, axes = new_figure(9.0, 4.6)
    bands = np.arange(len(difference.centre_hz))
    reach = max(3.0, float(np.nan_to_num(np.abs(difference.level_db)).max()))
    shade = axes.imshow(
        difference.level_db.T, cmap="PuOr", vmin=-reach, vmax=reach, aspect="auto",
        origin="lower", interpolation="nearest",
        extent=(0.0, float(difference.time_s[-1] + difference.time_s[0]), -0.5, len(bands) - 0.5),
    )  # fmt: skip
    shown = [hz for hz in TICKS_HZ if difference.centre_hz[0] <= hz <= difference.centre_hz[-1]]
    axes.set_yticks(np.interp(shown, difference.centre_hz, bands), [f"{hz:g}" for hz in shown])
    for moment in difference.moments_s:
        axes.axvline(moment, color="black", lw=0.8, ls=DASHES[2])
    axes.set_xlabel("time [s]; dotted: where to listen")
    axes.set_ylabel("ERB band, centre [Hz]")
    axes.set_title(f"Level of {names[0]} less {names[1]}", fontsize=10)
    figure.colorbar(shade, label="dB", pad=0.02)
    return figure


def _log_levels(path: str | Path) -> tuple[Array, Array, Array]:
    """Return times [s], frequencies evenly in octaves [Hz] and levels, (T,), (F,), (T, F) [dB]."""
    with AudioReader(path) as reader:
        rate = reader.sample_rate_hz
        samples = _beginning(reader.blocks(), round(MOST_S * rate)).mean(axis=1)
    size = max(round(WINDOW_S * rate), 16)
    hop = max(size // 4, 1)
    samples = np.pad(samples, (0, max(size - len(samples), 0)))
    frames = np.lib.stride_tricks.sliding_window_view(samples, size)[::hop]
    power = np.abs(np.fft.rfft(frames * np.hanning(size), axis=1)) ** 2
    linear = np.fft.rfftfreq(size, 1.0 / rate)
    low, high = AUDIBLE_HZ
    edges = 2.0 ** np.arange(np.log2(low), np.log2(min(high, rate / 2.0)), 1.0 / PER_OCTAVE)
    freq_hz = np.sqrt(edges[1:] * edges[:-1])
    total = np.concatenate([np.zeros((len(power), 1)), np.cumsum(power, axis=1)], axis=1)
    # The power between two edges, bins counted by how much of them lies inside.
    place = edges / linear[1] + 0.5
    whole = np.floor(place).astype(int)
    at = np.take(total, whole, axis=1) + (place - whole) * np.take(
        power, np.minimum(whole, power.shape[1] - 1), axis=1
    )
    level = 10.0 * np.log10(np.diff(at, axis=1) + 1e-14 * max(float(power.max()), 1e-30))
    return (np.arange(len(frames)) * hop + size / 2) / rate, freq_hz, level


def _beginning(blocks: Iterator[Array], frames: int) -> Array:
    found, count = [], 0
    for block in blocks:
        found.append(block[: frames - count])
        count += len(found[-1])
        if count >= frames:
            break
    return np.concatenate(found)
