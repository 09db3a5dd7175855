"""One channel against textbook and application-note figures, ngspice, and properties.

REF is the part of the tables: cut-off -2 V, Idss 4 mA, lambda 0 (and knee 0 unless the
knee is what is tested), so that the law is the textbooks' own.
"""

import math
from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from reference.ngspice_runner import run
from scipy.optimize import brentq
from sweepset.models.jfet import (
    DEFAULT_KNEE_V,
    Jfet,
    drain_current,
    overdrive,
    overdrive_inverse,
    overdrive_slope,
)

REF = Jfet.from_idss(-2.0, 4e-3, knee_v=0.0)
WELL_SATURATED_V = 20.0


def printed(value: str) -> tuple[float, float]:
    """Return a printed figure and half a unit of its last digit."""
    exact = Decimal(value)
    return float(exact), 0.5 * 10.0 ** exact.as_tuple().exponent


def assert_printed(got: float, value: str) -> None:
    want, half = printed(value)
    assert abs(got - want) <= half * (1 + 1e-9), f"{got} is not {value} in all printed digits"


# --- textbook law -----------------------------------------------------------


def test_shockley_saturated_current():
    # a1: Shockley's square law, Proc. IRE 40 (1952) 1365 (from memory; the same law is on the
    # MathWorks "N-Channel JFET" page, read)
    gate = [0.0, -0.5, -1.0, -1.5, -1.8, -1.9]
    want = [4.000e-3, 2.250e-3, 1.000e-3, 0.250e-3, 0.040e-3, 0.010e-3]
    assert_allclose(REF.current(gate, WELL_SATURATED_V), want, rtol=1e-12)


def test_current_factor_and_transconductance():
    # a2, a3: beta = Idss/Vp^2; gm0 = 2 Idss/|Vp| (formula from memory)
    assert REF.beta_a_per_v2 == pytest.approx(1e-3, rel=1e-15)
    assert float(REF.transconductance(0.0, WELL_SATURATED_V)) == pytest.approx(4e-3, rel=1e-15)
    for drain_a, gate in ((1e-3, -1.0), (0.25e-3, -1.5)):
        want = 2.0 * math.sqrt(4e-3 * drain_a) / 2.0
        assert float(REF.transconductance(gate, WELL_SATURATED_V)) == pytest.approx(want)


def test_triode_current():
    # a4: MathWorks "N-Channel JFET", linear row; D. Steck, ch. 5.3, eqs 5.1-5.6 (read)
    assert_allclose(REF.current(-1.0, [0.1, 0.5]), [0.1900e-3, 0.7500e-3], rtol=1e-12)


def test_channel_resistance():
    # a5, a6: Vishay Siliconix AN105 "FETs as Voltage-Controlled Resistors", Fig. 3 (read)
    gate = [0.0, -0.5, -1.0, -1.5, -1.8, -1.9, -1.99]
    want = [250.0, 333.33, 500.0, 1000.0, 2500.0, 5000.0, 50000.0]
    assert_allclose(REF.channel_resistance(gate), want, rtol=2e-5)  # 333.33 has five digits
    assert float(REF.channel_resistance(-2.0)) == math.inf


def test_idss_at_fractions_of_the_cutoff():
    # a31: Neamen, "Microelectronics: Circuit Analysis and Design", JFET example (from memory)
    part = Jfet.from_idss(-3.5, 2e-3, knee_v=0.0)
    assert_allclose(
        part.current([0.0, -3.5 / 4, -3.5 / 2], WELL_SATURATED_V), [2e-3, 1.125e-3, 0.5e-3]
    )
    # saturation begins at 3.5, 2.625 and 1.75 V: from there on the current stays
    for gate, edge in ((0.0, 3.5), (-3.5 / 4, 2.625), (-3.5 / 2, 1.75)):
        assert float(part.output_conductance(gate, edge + 1e-9)) == 0.0
        assert float(part.output_conductance(gate, edge - 1e-3)) > 0.0


def test_self_bias_example():
    # a30: Boylestad & Nashelsky, FET biasing chapter (book figures from memory; exact computed)
    part = Jfet.from_idss(-6.0, 8e-3, knee_v=0.0)

    def excess(drain_a: float) -> float:
        return float(part.current(-1e3 * drain_a, 20.0 - 4.3e3 * drain_a)) - drain_a

    drain_a = brentq(excess, 1e-4, 4e-3, xtol=1e-15)
    assert_printed(drain_a, "2.588e-3")
    assert_printed(20.0 - 4.3e3 * drain_a, "8.87")


def test_cutoff_at_a_test_current():
    # a27: 1.0 / 3.2 / 31.6 / 100 mV above cut-off for 1 nA / 10 nA / 1 uA / 10 uA at 1 mA/V^2
    for test_a, above_mv in ((1e-9, "1.0"), (1e-8, "3.2"), (1e-6, "31.6"), (1e-5, "100")):
        gate = brentq(lambda g, t=test_a: float(REF.current(g, 15.0)) - t, -2.0, 0.0, xtol=1e-15)
        assert_printed(1e3 * (gate + 2.0), above_mv)


def test_ten_megohm_meter_in_the_source():
    # a28: the meter reads 1.986 V, 14 mV short
    source = brentq(lambda v: float(REF.current(-v, 9.0 - v)) - v / 10e6, 0.0, 2.0, xtol=1e-15)
    assert_printed(source, "1.986")


# --- knee -------------------------------------------------------------------


def test_knee_moves_the_cutoff_test_far_below():
    # Design figure: 1 nA at 1 mA/V^2 lies at +1 mV for the true law, -204 mV with the softplus
    root = math.sqrt(1e-9 / 1e-3)
    assert_printed(1e3 * float(overdrive_inverse(root, 0.0)), "1")
    assert_printed(1e3 * float(overdrive_inverse(root, DEFAULT_KNEE_V)), "-204")


def test_below_cutoff_the_law_is_exponential():
    # a33: Steck eqs 5.7-5.8: gm = Id/(n VT); kT/q at 27 C is 25.865 mV (CODATA)
    part = Jfet(-2.0, 1e-3)
    for under in (0.4, 0.6, 1.0):
        ratio = float(part.current(-2.0 - under, 5.0) / part.transconductance(-2.0 - under, 5.0))
        # the next term of the expansion is exp(-under/w)/2 of it, 2e-4 at 0.4 V
        assert ratio == pytest.approx(25.865e-3, rel=1.1 * math.exp(-under / DEFAULT_KNEE_V) + 2e-5)


def test_softened_overdrive_neither_overflows_nor_loses_its_tail():
    x = np.array([-50.0, -5.0, 0.0, 5.0, 50.0])
    got = overdrive(x, 0.05)
    # exp(-100) = 3.720075976e-44 (table value): the tail is w exp(x/w)
    assert got[1] == pytest.approx(0.05 * 3.720075976e-44, rel=1e-9)
    assert got[2] == pytest.approx(0.05 * math.log(2.0), rel=1e-15)
    assert_allclose(got[3:], [5.0, 50.0], rtol=1e-15)
    assert np.isfinite(overdrive_slope(x, 0.05)).all()


@given(st.floats(1e-12, 20.0), st.floats(1e-4, 0.5))
def test_overdrive_inverse_undoes_it(p_v, knee_v):
    x = float(overdrive_inverse(p_v, knee_v))
    assert float(overdrive(x, knee_v)) == pytest.approx(p_v, rel=1e-9)
    assert float(overdrive_inverse(p_v, 0.0)) == p_v


def test_overdrive_inverse_refuses_what_no_gate_gives():
    for bad in (0.0, -1.0, [0.1, -0.1]):
        with pytest.raises(ValueError, match="must be positive"):
            overdrive_inverse(bad, 0.05)


# --- properties -------------------------------------------------------------

PARTS = st.builds(
    Jfet,
    cutoff_v=st.floats(-8.0, -0.3),
    beta_a_per_v2=st.floats(1e-5, 2e-2),
    lambda_per_v=st.floats(0.0, 0.1),
    knee_v=st.one_of(st.just(0.0), st.floats(1e-3, 0.2)),
)
GATES = st.floats(-10.0, 0.6)
DRAINS = st.floats(-3.0, 3.0)


@given(PARTS, GATES, DRAINS)
def test_drain_and_source_may_be_exchanged(part, gate, drain):
    # b3: Id(Vgs, Vds) = -Id(Vgd, -Vds)
    forward = float(part.current(gate, drain))
    scale = part.beta_a_per_v2 * 200.0
    assert forward == pytest.approx(-float(part.current(gate - drain, -drain)), abs=1e-13 * scale)


@given(PARTS, GATES)
def test_no_voltage_no_current(part, gate):
    assert float(part.current(gate, 0.0)) == 0.0


@given(PARTS, GATES, DRAINS, st.floats(1e-6, 1.0))
def test_current_rises_with_drain_and_gate(part, gate, drain, more):
    slack = 1e-13 * part.beta_a_per_v2 * 200.0
    here = float(part.current(gate, drain))
    assert float(part.current(gate, drain + more)) >= here - slack
    further = float(part.current(gate + more, drain)) - here
    assert further * math.copysign(1.0, drain) >= -slack


@given(PARTS, GATES, DRAINS)
def test_slopes_are_derivatives(part, gate, drain):
    step = 1e-5
    # Where the step straddles a bend of the hard law (or v = 0), the difference mixes two
    # slopes; the third derivative of the soft law is at most beta/knee or so.
    near = min(abs(gate - part.cutoff_v), abs(gate - drain - part.cutoff_v), abs(drain))
    bend = 2.0 * step if near < 2 * step else 0.0
    smooth = step**2 * (1.0 / part.knee_v if part.knee_v else 0.0)
    scale = part.beta_a_per_v2 * (1 + part.lambda_per_v * 3.0)
    # rounding: currents up to beta*120, divided by the step
    limit = scale * (2.0 * bend + 25.0 * part.lambda_per_v * bend / step + smooth + 1e-8)
    by_drain = part.current(gate, drain + step) - part.current(gate, drain - step)
    by_gate = part.current(gate + step, drain) - part.current(gate - step, drain)
    got = part.output_conductance(gate, drain), part.transconductance(gate, drain)
    assert_allclose(got, [by_drain / (2 * step), by_gate / (2 * step)], rtol=0.0, atol=limit)


@given(PARTS, GATES, DRAINS)
def test_small_knee_tends_to_the_square_law(part, gate, drain):
    hard = drain_current(
        gate, drain, part.cutoff_v, part.beta_a_per_v2, part.lambda_per_v, knee_v=0.0
    )
    for knee in (1e-3, 1e-6):
        soft = drain_current(
            gate, drain, part.cutoff_v, part.beta_a_per_v2, part.lambda_per_v, knee_v=knee
        )
        # P differs by at most knee ln 2, P^2 by twice that times P (12 V at most), two sides
        bound = part.beta_a_per_v2 * 1.3 * 2.0 * (2.0 * 12.0 * knee * math.log(2.0) + knee**2)
        assert abs(float(soft - hard)) <= bound


@given(PARTS, GATES)
def test_small_signal_conductance_is_the_slope_at_zero(part, gate):
    got = float(part.channel_conductance(gate))
    assert got == float(part.output_conductance(gate, 0.0))
    if got > 0.0:
        assert float(part.channel_resistance(gate)) == pytest.approx(1.0 / got)


@given(st.floats(-8.0, -0.3), st.floats(1e-4, 0.1), st.floats(1.0, 20.0), st.floats(0.0, 0.05))
def test_parameters_from_cutoff_and_idss(cutoff_v, idss_a, drain_v, lambda_per_v):
    others = {"lambda_per_v": lambda_per_v, "knee_v": 0.05}
    tested = Jfet.from_idss(cutoff_v, idss_a, drain_v=drain_v, **others)
    assert float(tested.current(0.0, drain_v)) == pytest.approx(idss_a, rel=1e-12)
    plain = Jfet.from_idss(cutoff_v, idss_a, **others)
    assert plain.idss_a == pytest.approx(idss_a, rel=1e-12)
    assert plain.lambda_per_v == lambda_per_v


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("cutoff_v", 0.5, "cut-off voltage must be negative, got 0.5 V"),
        ("cutoff_v", math.nan, "cut-off voltage must be negative, got nan V"),
        ("beta_a_per_v2", 0.0, "current factor must be positive, got 0.0 A/V^2"),
        ("lambda_per_v", -0.1, "lambda must be 0 or more, got -0.1 1/V"),
        ("knee_v", -0.05, "knee must be 0 or more, got -0.05 V"),
    ],
)
def test_impossible_parameters_are_refused(field, value, says):
    good = {"cutoff_v": -2.0, "beta_a_per_v2": 1e-3}
    with pytest.raises(ValueError, match=says.replace("^", r"\^")):
        Jfet(**{**good, field: value})


# --- half-drain feedback: gate = (1 - k) bus + k v --------------------------


def half_drain_current(part: Jfet, k: float, bus, drain):
    drain = np.asarray(drain)
    return part.current((1.0 - k) * bus + k * drain, drain)


def test_half_drain_makes_the_channel_a_resistor_in_both_quadrants():
    # a10, a11: k = 0.5: Id = 2 beta (Vc - Vp) Vds for |Vds| <= 2 (Vc - Vp); EDN, "A guide to using
    # FETs for voltage controlled circuits", Part 2 (2017), Fig. 8 (read); algebra computed.
    # a12: with equal resistors the bus must be at twice the plain gate voltage (US 11177786, read)
    control = -1.4
    edge = 2.0 * (control + 2.0)
    drain = np.linspace(-edge, edge, 101)
    got = half_drain_current(REF, 0.5, 2.0 * control, drain)
    assert_allclose(got, 2.0 * 1e-3 * 0.6 * drain, atol=1e-18)
    beyond = half_drain_current(REF, 0.5, 2.0 * control, [-edge - 0.2, edge + 0.2])
    # past it one side is off: what is left is the other side's square, 1e-5 A above the line
    assert_allclose(np.abs(beyond) - 1.2e-3 * (edge + 0.2), 1e-3 * 0.1**2, rtol=1e-12)
    # without the network the limit is Vgs - Vp and the law is curved all the way
    assert float(REF.current(control, 0.6)) == pytest.approx(1e-3 * 0.36)


def harmonics(current) -> np.ndarray:
    """Return the levels of a periodic record's harmonics re the first, from the first on."""
    spectrum = np.abs(np.fft.rfft(current))
    return spectrum[1:] / spectrum[1]


PHASE = 2.0 * np.pi * np.arange(4096) / 4096


@pytest.mark.parametrize(
    ("k", "percent"),
    # a17 (ngspice: 2.49999 %) and a18: |1 - 2k| A/(4 Vov), A = 0.1 V, Vov = 1 V
    [(0.0, "2.500"), (0.25, "1.25"), (0.4, "0.5"), (0.45, "0.25"), (0.5, "0")],
)
def test_second_harmonic_of_a_driven_channel(k, percent):
    control = -1.0 / (1.0 - k)
    second = harmonics(half_drain_current(REF, k, control, 0.1 * np.sin(PHASE)))[1]
    assert_printed(100.0 * second, percent)
    assert second == pytest.approx(abs(1 - 2 * k) * 0.1 / 4, abs=1e-12)


def test_what_lambda_leaves_of_the_harmonics():
    # a20: HD2 = 0, HD3 = 8 lambda A/(15 pi), HD5 = 8 lambda A/(105 pi); ngspice 3.3895e-4, 4.842e-5
    part = Jfet(-2.0, 1e-3, lambda_per_v=0.02, knee_v=0.0)
    level = harmonics(half_drain_current(part, 0.5, -2.0, 0.1 * np.sin(PHASE)))
    assert level[1] < 1e-12
    # ngspice's figures are re a fundamental that lambda enlarges by 8 lambda A/(3 pi), 0.17 %
    assert level[2] == pytest.approx(3.3895e-4, rel=2e-3)
    assert level[4] == pytest.approx(4.842e-5, rel=2e-3)


def test_harmonics_of_a_divider():
    # a19: series 1k, 0.3 V peak, REF at -1 V: HD2 1.673 %, HD3 0.056 % (ngspice full solution)
    drive = 0.3 * np.sin(PHASE)
    output = [
        brentq(lambda v, x=x: float(REF.current(-1.0, v)) - (x - v) / 1e3, -1.0, 1.0, xtol=1e-15)
        for x in drive[::8]
    ]
    level = harmonics(np.array(output))
    assert_printed(100.0 * level[1], "1.673")
    assert_printed(100.0 * level[2], "0.056")


# --- temperature ------------------------------------------------------------


def slope_per_kelvin(part: Jfet, quantity) -> float:
    """Return d ln(quantity)/dT at 27 C by a central difference."""
    warm, cool = (quantity(part.at_celsius(27.0 + d)) for d in (0.01, -0.01))
    return float(np.log(warm / cool) / 0.02)


def zero_drift_overdrive(exponent: float, quantity) -> float:
    part = Jfet(-2.0, 1e-3, knee_v=0.0, cutoff_v_per_k=-2.2e-3, beta_exponent=-exponent)

    def slope(over: float) -> float:
        return slope_per_kelvin(part, lambda moved: quantity(moved, -2.0 + over))

    return brentq(slope, 0.1, 1.5)


@pytest.mark.parametrize(
    ("exponent", "saturated", "ohmic"),
    # a21: L. Evans, Electro-Technology 1964; L. Sevin 1965 (rule from memory, value computed);
    # a23: half of it for the channel resistance (computed)
    [(2.1, "0.629", "0.314"), (2.0, "0.660", "0.330")],
)
def test_zero_drift_points(exponent, saturated, ohmic):
    found = zero_drift_overdrive(exponent, lambda part, gate: part.current(gate, 10.0))
    assert_printed(found, saturated)
    found = zero_drift_overdrive(exponent, lambda part, gate: part.channel_conductance(gate))
    assert_printed(found, ohmic)


def test_which_side_of_the_point_falls():
    # a22: above the point the current falls with temperature, below it rises (the square law's
    # sign; one stored page, Harrison 2005 p. 156, says the opposite)
    part = Jfet(-2.0, 1e-3, knee_v=0.0)
    assert slope_per_kelvin(part, lambda moved: moved.current(-2.0 + 1.0, 10.0)) < 0.0
    assert slope_per_kelvin(part, lambda moved: moved.current(-2.0 + 0.3, 10.0)) > 0.0


@pytest.mark.parametrize(
    ("over", "want_ms"),
    # a24 (computed): channel conductance of REF at 7 / 27 / 47 C
    [
        (0.3144, ("0.6251", "0.6288", "0.6260")),
        (1.0, ("2.2099", "2.0000", "1.8235")),
        (2.0, ("4.5216", "4.0000", "3.5701")),
    ],
)
def test_conductance_at_three_temperatures(over, want_ms):
    part = Jfet(-2.0, 1e-3, knee_v=0.0, cutoff_v_per_k=-2.2e-3, beta_exponent=-2.1)
    for celsius, want in zip((7.0, 27.0, 47.0), want_ms, strict=True):
        got = float(part.at_celsius(celsius).channel_conductance(-2.0 + over))
        assert_printed(1e3 * got, want)


def test_drift_of_idss():
    # a25 (computed): -0.26 / -0.48 / -0.59 %/K for -1 / -2 / -4 V, 0 at -0.63 V
    for cutoff, percent in ((-1.0, "-0.26"), (-2.0, "-0.48"), (-4.0, "-0.59")):
        part = Jfet(cutoff, 1e-3, knee_v=0.0)
        assert_printed(100.0 * slope_per_kelvin(part, lambda moved: moved.idss_a), percent)
    part = Jfet(-0.63, 1e-3, knee_v=0.0)
    # one unit of 0.63 V's last digit is worth 0.01 %/K
    assert abs(100.0 * slope_per_kelvin(part, lambda moved: moved.idss_a)) < 0.005


def test_default_drifts_are_usual_ones():
    # a26 (from memory): -2.0 to -2.5 mV/K; mobility goes as T^-1.5 to T^-2.4
    part = Jfet(-2.0, 1e-3)
    assert -2.5e-3 <= part.cutoff_v_per_k <= -2.0e-3
    assert -2.4 <= part.beta_exponent <= -1.5
    # the knee is a multiple of kT/q
    assert part.at_celsius(87.03).knee_v / part.knee_v == pytest.approx(360.18 / 300.15)


# b9, b10: ngspice 39.3 (ran): Idss [A] at these temperatures
CELSIUS = (-13.0, 7.0, 27.0, 47.0, 67.0)
B9 = ("4.530515e-3", "4.242866e-3", "4.000000e-3", "3.792618e-3", "3.613789e-3")
B10 = ("4.460702e-3", "4.226214e-3", "4.000000e-3", "3.782231e-3", "3.573004e-3")


def b9_idss(celsius: float) -> float:
    part = Jfet(-2.0, 1e-3, knee_v=0.0, cutoff_v_per_k=-2.2e-3, beta_exponent=-1.5)
    return part.at_celsius(celsius).idss_a


def b10_idss(celsius: float) -> float:
    # BETATCE: beta goes as 1.01^(-0.5 dT), in place of the power of T
    factor = 1.01 ** (-0.5 * (celsius - 27.0))
    part = Jfet(-2.0, 1e-3 * factor, knee_v=0.0, cutoff_v_per_k=-2.2e-3, beta_exponent=0.0)
    return part.at_celsius(celsius).idss_a


@pytest.mark.parametrize(("table", "idss"), [(B9, b9_idss), (B10, b10_idss)])
def test_idss_over_temperature_as_ngspice_printed_it(table, idss):
    for celsius, want in zip(CELSIUS, table, strict=True):
        assert_printed(idss(celsius), want)


@pytest.mark.ngspice
def test_idss_over_temperature_against_ngspice():
    """Both ways of writing the drift, run now; gmin and IS kept out of the way."""
    model = "NJF(VTO=-2 BETA=1m LAMBDA=0 IS=1e-30 XTI=3 EG=1.11"
    for celsius in CELSIUS:
        found = run(
            f"""* Idss over temperature
VD d 0 5
VM d d1 0
VN d d2 0
J1 d1 0 0 POWER
J2 d2 0 0 RATE
.model POWER {model} TCV=2.2m BEX=-1.5)
.model RATE {model} VTOTC=-2.2m BETATCE=-0.5)
.options tnom=27 gmin=1e-15
.temp {celsius}
.op
.end
"""
        )
        assert found["i(vm)"][0] == pytest.approx(b9_idss(celsius), rel=1e-8)
        assert found["i(vn)"][0] == pytest.approx(b10_idss(celsius), rel=1e-8)


# --- SPICE operating points -------------------------------------------------

# b17-b28: ngspice 39.3, VTO -2, BETA 1m, LAMBDA 0.02 (ran; equal to Shichman-Hodges b1-b3)
POINTS = (
    (0.0, 0.1, "3.9078e-4", "2.004e-4", "3.8154e-3"),
    (0.0, 1.0, "3.0600e-3", "2.040e-3", "2.1000e-3"),
    (0.0, 5.0, "4.4000e-3", "4.400e-3", "8.00e-5"),
    (-1.0, 0.1, "1.9038e-4", "2.004e-4", "1.8074e-3"),
    (-1.0, 0.5, "7.5750e-4", "1.010e-3", "1.0250e-3"),
    (-1.0, 5.0, "1.1000e-3", "2.200e-3", "2.00e-5"),
    (-1.9, 0.05, "7.5075e-6", "1.001e-4", "1.0025e-4"),
    (-1.0, -0.1, "-2.1042e-4", "-2.004e-4", "2.2086e-3"),
    (-1.0, -0.5, "-1.2625e-3", "-1.010e-3", "3.0550e-3"),
    (-1.0, -1.0, "-3.0600e-3", "-2.040e-3", "4.1400e-3"),
    (-1.5, -0.3, "-3.9234e-4", "-6.036e-4", "1.6174e-3"),
    (-2.2, -0.5, "-9.0900e-5", "-6.060e-4", "6.078e-4"),
)
SPICE = Jfet(-2.0, 1e-3, lambda_per_v=0.02, knee_v=0.0)


@pytest.mark.parametrize(("gate", "drain", "current", "gm", "gds"), POINTS)
def test_operating_points_as_ngspice_printed_them(gate, drain, current, gm, gds):
    assert_printed(float(SPICE.current(gate, drain)), current)
    assert_printed(float(SPICE.transconductance(gate, drain)), gm)
    assert_printed(float(SPICE.output_conductance(gate, drain)), gds)


@pytest.mark.ngspice
def test_operating_points_against_ngspice():
    """The printed points and a grid between them, run now."""
    grid = [(g, d) for g in np.linspace(-2.6, 0.3, 12) for d in np.linspace(-1.3, 1.3, 10)]
    points = [(g, d) for g, d, *_ in POINTS] + [(float(g), float(d)) for g, d in grid]
    lines = ["* operating points"]
    saved = []
    for number, (gate, drain) in enumerate(points):
        lines += [
            f"VG{number} g{number} 0 {gate!r}",
            f"VD{number} d{number} 0 {drain!r}",
            f"J{number} d{number} g{number} 0 PART",
        ]
        saved += [f"@j{number}[id]", f"@j{number}[gm]", f"@j{number}[gds]"]
    lines += [
        ".model PART NJF(VTO=-2 BETA=1m LAMBDA=0.02 IS=1e-40 CGS=0 CGD=0 XTI=3 EG=1.11)",
        ".options tnom=27 gmin=1e-18",
        ".temp 27",
        *(f".save {name}" for name in saved),
        ".op",
        ".end",
        "",
    ]
    found = run("\n".join(lines))
    values = np.array([found[name][0] for name in saved]).reshape(-1, 3)
    gate, drain = np.array(points).T
    got = np.stack(
        [
            SPICE.current(gate, drain),
            SPICE.transconductance(gate, drain),
            SPICE.output_conductance(gate, drain),
        ],
        axis=1,
    )
    # what gmin and IS leave is below 1e-16 A; ngspice's solution stands to a part in 1e9
    assert_allclose(got, values, rtol=1e-9, atol=1e-15)
