"""Plots: what is drawn, told apart without colour, same bytes each time."""

import re

import numpy as np
import pytest
from sweepset.models.circuit import load_circuit
from sweepset.models.cycle import analyse_cycle
from sweepset.models.errors import InputError
from sweepset.models.estimate import ResistanceBand
from sweepset.models.gatebus import solve_bus
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate
from sweepset.render.figures import (
    cycle_figure,
    figure_bytes,
    figure_format,
    resistance_figure,
    save_figure,
)


def bands(count):
    gate = np.linspace(-2.5, 0.0, 50)
    made = []
    for number in range(count):
        ohm = Jfet(-2.0 - 0.05 * number, 1e-3).channel_resistance(gate)
        made.append((f"J{number}", ResistanceBand(gate, ohm, ohm / 1.1, ohm * 1.1)))
    return made


def stalling():
    circuit = load_circuit("heron")
    parts = [Jfet(cutoff, 1e-3) for cutoff in (-2.4, -2.3, -2.1, -1.7)]
    cycle = analyse_cycle(circuit, parts, solve_bus(circuit, 0.4, parse_rate("noon")))
    return cycle, ["J1", "J2", "J3", "J4"]


def test_curves_are_the_given_ones_and_named():
    given = bands(3)
    [axes] = resistance_figure(given, (-2.2, -1.5), "heron").axes
    for line, (label, band) in zip(axes.lines, given, strict=True):
        np.testing.assert_array_equal(line.get_ydata(), band.resistance_ohm)
        assert line.get_label() == label
    assert axes.get_yscale() == "log"
    assert "ohm" in axes.get_ylabel()
    assert "V" in axes.get_xlabel()
    assert any("sweep of heron" in text.get_text() for text in axes.texts)


def test_neighbouring_curves_differ_in_dash_not_only_in_colour():
    [axes] = resistance_figure(bands(4)).axes
    assert len({str(line.get_linestyle()) + str(line._dash_pattern) for line in axes.lines}) == 4


def test_whole_tray_is_drawn_without_a_legend():
    [axes] = resistance_figure(bands(60)).axes
    assert len(axes.lines) == 60
    assert axes.get_legend() is None


def test_cycle_shows_notches_breaks_and_stalls():
    cycle, labels = stalling()
    figure = cycle_figure(cycle, labels)
    [axes] = figure.axes
    drawn = [line.get_ydata() for line in axes.lines]
    for track in cycle.break_hz.T:
        assert any(np.array_equal(track, y) for y in drawn)
    assert any(np.array_equal(cycle.notch_hz[:, 0], y, equal_nan=True) for y in drawn)
    crosses = [line for line in axes.lines if line.get_marker() == "x" and len(line.get_xdata())]
    assert crosses
    assert "stopped" in [text.get_text() for text in figure.legends[0].get_texts()]


@pytest.mark.parametrize("form", ["png", "svg"])
def test_same_figure_same_bytes(form):
    first = figure_bytes(resistance_figure(bands(3), (-2.0, -1.0), "heron"), form)
    again = figure_bytes(resistance_figure(bands(3), (-2.0, -1.0), "heron"), form)
    assert first == again
    assert not re.search(rb"20\d\d-\d\d-\d\d", first)


def test_saved_whole_in_the_format_of_the_ending(tmp_path):
    save_figure(resistance_figure(bands(2)), tmp_path / "a.png")
    save_figure(resistance_figure(bands(2)), tmp_path / "a.svg")
    assert (tmp_path / "a.png").read_bytes().startswith(b"\x89PNG")
    assert b"<svg" in (tmp_path / "a.svg").read_bytes()
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.png", "a.svg"]


@pytest.mark.parametrize("name", ["a.pdf", "a", "a.jpeg", "png"])
def test_other_endings_are_refused(name):
    with pytest.raises(InputError, match=r"give a name ending in \.png or \.svg"):
        figure_format(name)
