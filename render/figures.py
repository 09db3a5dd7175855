"""Plots, readable in grey and by colour-blind eyes: lines differ in dash and weight too.

Same input, same bytes: no dates, no random identifiers.
"""

from __future__ import annotations

import io
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..models.atomic import atomic_path
from ..models.cycle import Cycle
from ..models.drift import DriftPoint
from ..models.errors import InputError
from ..models.estimate import ResistanceBand
from ..models.variation import Variation

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FORMATS = ("png", "svg")
# Dark enough in grey, apart for the colour-blind (hues about blue and orange), and never
# told apart by hue alone.
INKS = ("#1b3a57", "#b4530a", "#4a4a4a", "#2a7f9e", "#8a6d1a", "#7a2f5e")
DASHES: tuple[Any, ...] = ("-", (0, (6, 2)), (0, (2, 2)), (0, (8, 2, 2, 2)))
NAMED_PARTS = 8
MANY_STAGES = 6
PNG_DPI = 160


def figure_format(path: str | Path) -> str:
    """Return the format that a file's ending asks for.

    Raises
    ------
    InputError
        If it is neither ``.png`` nor ``.svg``.
    """
    ending = Path(path).suffix.lower().removeprefix(".")
    if ending not in FORMATS:
        raise InputError(
            f"{path}: plots are written as PNG or SVG; give a name ending in .png or .svg"
        )
    return ending


def new_figure(width: float, height: float) -> tuple[Figure, Any]:
    """Return a figure of so many inches and its axes."""
    from matplotlib import rcParams
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    # Text stays text in SVG, and identifiers are made from this salt, not drawn at random.
    rcParams["svg.fonttype"] = "none"
    rcParams["svg.hashsalt"] = "sweepset"
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure, figure.add_subplot()


def figure_bytes(figure: Figure, form: str) -> bytes:
    """Return a figure as the bytes of a PNG or SVG file."""
    stream = io.BytesIO()
    metadata = {"Date": None} if form == "svg" else {"Software": None}
    figure.savefig(stream, format=form, dpi=PNG_DPI, metadata=metadata)
    return stream.getvalue()


def save_figure(figure: Figure, path: str | Path) -> None:
    """Write a figure whole or not at all; the ending gives the format."""
    data = figure_bytes(figure, figure_format(path))
    with atomic_path(Path(path)) as temporary:
        temporary.write_bytes(data)


def resistance_figure(
    bands: Sequence[tuple[str, ResistanceBand]],
    window_v: tuple[float, float] | None = None,
    window_name: str = "",
) -> Figure:
    """Return channel resistance against gate voltage, all parts together.

    Parameters
    ----------
    bands : sequence of (str, ResistanceBand)
        Label and curve of each part.
    window_v : (float, float), optional
        The gate's sweep in a circuit, shaded [V].
    window_name : str
        What the window belongs to.
    """
    figure, axes = new_figure(8.0, 5.2)
    named = len(bands) <= NAMED_PARTS
    for number, (label, band) in enumerate(bands):
        ink = INKS[number % len(INKS)] if named else "#333333"
        dash = DASHES[number % len(DASHES)] if named else "-"
        axes.fill_between(
            band.gate_v, band.low_ohm, band.high_ohm, color=ink, alpha=0.15 if named else 0.05, lw=0
        )
        axes.plot(
            band.gate_v, band.resistance_ohm, color=ink, ls=dash, lw=1.4 if named else 0.6,
            label=label if named else None,
        )  # fmt: skip
    if window_v is not None:
        axes.axvspan(
            *window_v, facecolor="#d9d9d9", edgecolor="#555555", hatch="//", alpha=0.35, lw=0.5
        )
        axes.text(
            float(np.mean(window_v)), 0.98, f"sweep of {window_name}", ha="center", va="top",
            transform=axes.get_xaxis_transform(), fontsize=9,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 2.0},
        )  # fmt: skip
    axes.set_yscale("log")
    axes.set_ylim(100.0, 1e6)
    axes.set_xlabel("gate voltage, from the source [V]")
    axes.set_ylabel("channel resistance at small signal [ohm]")
    axes.set_title(
        f"Channel resistance of {len(bands)} part{'s' * (len(bands) != 1)}, with 95 % bands"
    )
    axes.grid(True, which="major", color="#cccccc", lw=0.6)
    if named and bands:
        axes.legend(frameon=False, ncols=2)
    return figure


def cycle_figure(cycle: Cycle, labels: Sequence[str]) -> Figure:
    """Return a cycle's notch tracks and the stages' break frequencies, stalls marked.

    Parameters
    ----------
    cycle : Cycle
        What the set does.
    labels : sequence of str
        The parts in stage order.
    """
    # Many stages leave a low strip of a page: a wide picture fills it.
    figure, axes = new_figure(8.0 if len(labels) <= MANY_STAGES else 12.0, 4.2)
    draw_breaks(axes, cycle, labels)
    draw_notches(axes, cycle)
    axes.set_yscale("log")
    axes.set_xlim(0.0, float(cycle.time_s[-1]))
    axes.set_xlabel("time in the cycle [s]")
    axes.set_ylabel("frequency [Hz]")
    axes.grid(True, which="major", color="#dddddd", lw=0.6)
    figure.legend(frameon=False, fontsize=8, loc="outside right upper")
    return figure


def draw_notches(axes: Axes, cycle: Cycle) -> None:
    """Draw the notch tracks, heavy."""
    for number, track in enumerate(cycle.notch_hz.T):
        axes.plot(
            cycle.time_s, track, color="black", lw=2.4, label="notches" if number == 0 else None
        )


def draw_breaks(axes: Axes, cycle: Cycle, labels: Sequence[str]) -> None:
    """Draw the stages' break frequencies, thin, with crosses where a stage has stopped."""
    for number, (label, track) in enumerate(zip(labels, cycle.break_hz.T, strict=True)):
        ink, dash = INKS[number % len(INKS)], DASHES[number % len(DASHES)]
        axes.plot(
            cycle.time_s, track, color=ink, ls=dash, lw=1.1, label=f"stage {number + 1}: {label}"
        )
        stopped = np.flatnonzero(cycle.stopped[:, number])[::6]
        axes.plot(cycle.time_s[stopped], track[stopped], ls="", marker="x", ms=4, color=ink)
    if cycle.stopped.any():
        axes.plot([], [], ls="", marker="x", ms=4, color="#333333", label="stopped")


def variation_figure(
    variation: Variation, by_celsius: Sequence[DriftPoint], by_supply: Sequence[DriftPoint]
) -> Figure:
    """Return how units built from a set stray, and what temperature and supply do.

    Parameters
    ----------
    variation : Variation
        The units.
    by_celsius, by_supply : sequence of DriftPoint
        The set over channel temperature and over supply voltage.
    """
    figure, first = new_figure(9.0, 6.4)
    first.remove()
    (stagger, alone), (warm, weak) = figure.subplots(2, 2)
    _draw_stagger(stagger, variation)
    _draw_alone(alone, variation)
    _draw_drift(warm, by_celsius, "channel temperature [C]")
    _draw_drift(weak, by_supply, "supply [V]")
    return figure


def _draw_stagger(axes: Axes, variation: Variation) -> None:
    axes.hist(
        variation.draws["stagger_octaves"], bins=40, color="#c8d3dc", edgecolor=INKS[0], lw=0.6
    )
    for value, dash, name in (
        (variation.spreads["stagger_octaves"].nominal, "-", "as printed"),
        (variation.as_built_octaves, "--", "expected, as built"),
        (variation.identical_octaves, ":", "expected, identical parts"),
    ):
        axes.axvline(value, color="black", ls=dash, lw=1.6, label=name)
    axes.set_xlim(left=0.0)
    axes.margins(y=0.25)
    axes.set_xlabel("stagger [octave]")
    axes.set_ylabel("units")
    axes.set_title("Units built from this set", fontsize=10)
    axes.legend(frameon=False, fontsize=8)


def _draw_alone(axes: Axes, variation: Variation) -> None:
    names = [*variation.alone_octaves, "mismatch of this set"]
    values = [*variation.alone_octaves.values(), variation.spreads["stagger_octaves"].nominal]
    places = np.arange(len(names))[::-1]
    bars = axes.barh(places, values, color="#c8d3dc", edgecolor=INKS[0], lw=0.8, height=0.6)
    axes.bar_label(bars, fmt="%.3f", padding=3, fontsize=8)
    axes.set_yticks(places, names, fontsize=8)
    axes.set_xlim(0.0, 1.25 * max([*values, 1e-3]))
    axes.set_xlabel("expected stagger from this alone [octave]")
    axes.set_title("What moves the stages apart", fontsize=10)


def _draw_drift(axes: Axes, points: Sequence[DriftPoint], label: str) -> None:
    values = [point.value for point in points]
    axes.plot(
        values, [point.moved_octaves for point in points], color=INKS[0], marker="o", ms=3,
        label="sweep moved by [octaves]",
    )  # fmt: skip
    axes.plot(
        values, [point.travel_octaves for point in points], color=INKS[1], ls=DASHES[1], marker="s",
        ms=3, label="travel [octaves]",
    )  # fmt: skip
    axes.plot(
        values, [10.0 * point.stall for point in points], color=INKS[2], ls=DASHES[2], marker="x",
        ms=4, label="stall [tenths of the time]",
    )  # fmt: skip
    axes.axhline(0.0, color="#999999", lw=0.8)
    axes.margins(y=0.3)  # room for the legend above the lines
    axes.set_ylim(bottom=min(-0.5, axes.get_ylim()[0] * 0.4))
    axes.set_xlabel(label)
    axes.grid(True, color="#dddddd", lw=0.6)
    axes.legend(frameon=False, fontsize=8, loc="upper center", ncols=2)
