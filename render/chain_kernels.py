"""The sample loops of the nonlinear chain.

``lane_kernel`` builds the fast loop: stages and lanes are compile-time constants,
lanes (takes, channels or time slices) lie innermost so that the compiler runs
several in one instruction. Each sample takes one or two Newton passes over all
stages at once, from a start extrapolated through the last four samples: every
stage's slope first, which makes each stage an affine map of its input; the maps
are composed, the feedback loop is closed with one division, and the voltages are
substituted back. ``careful_kernel`` is the scalar loop for what that
cannot hold: op-amp outputs at their rails and steps that need more passes.

All working memory of the fast loop is one flat array with compile-time offsets:
with several arrays the compiler would have to test them for overlap at each loop.

Per stage the companion equation is ``v + w0 G(v) + history = x`` with
``G(v) = (h/C)(i(v) + v/Rp + ...)`` and ``history = q1 + w1 G1 + w2 G2 + w3 G3``,
where ``q = x - v`` is the capacitor's voltage and ``w0..w3`` are the weights of the
integration rule, stage by stage.

Arguments common to both (S stages, L lanes):

x : (frames, L) stage-1 input [V]
gate : (frames, L) gate bus [V]
out : (frames, L) last stage's output [V]
lane : (5, S, L) per part: VC, h beta/C, lambda, w, 1/w
stage : (9, S) per stage: h/(C Rp) with other loads, a, b, c, w0, w1, w2, w3, h/(C Rnet)
state : (8, S, L) q1, G1, G2, G3, v1..v4; carried on from call to call
drift : (3, L) with the half-drain network: what the drains add to the gate bus [V] and its
    last two increments; carried on likewise
into, leak : h Gnet/Cbus and h G/Cbus of that; 0 where the bus is driven
tally : (L, TALLIES) counts and extremes, added to; see the constants below
"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np

from ..models.jit import kernel
from .law_kernels import positive, second

# Rows of `lane`
VC, HBETA, LAMBDA, KNEE, PER_KNEE = range(5)
# Rows of `stage`
HSHUNT, A, B, C, W0, W1, W2, W3, HNET = range(9)
# Rows of `state`
Q1, G1, G2, G3, V1, V2, V3, V4 = range(8)
STATES = 8
# Columns of `tally`, one row per lane
GATE_SOURCE, GATE_DRAIN, LOW_INPUT, HIGH_INPUT, TOP, CHANGE, BUS, RAIL, STUCK = range(9)
TALLIES = 9
# Steps between evaluations of the law's gate side in the fast loop with one pass.
CARRY = 4
# Junctions and plus inputs are looked at on every so many steps, and counted as often.
COUNT_EVERY = 4


@kernel(inline="always")
def stage_map(
    v, pd, sd, source, ps, ss, past, bus, hb, lam, pw, keep, hs, hn, w0, soft, bent, half_drain
):
    """Return one stage linearised about ``v``: ``v_new = d x + alpha``, and the charge's bend.

    ``pd, sd`` are ``P`` and ``P'`` on the drain side, ``source`` is ``P^2`` on the source
    side; ``ps, ss``, its ``P`` and ``P'``, count only with the half-drain network, where
    both sides move with the drain.
    """
    bend = -second(pd, sd, pw, soft)
    square = source - pd * pd
    if half_drain:
        share = 1.0 - keep
        slope = 2.0 * (share * ps * ss + keep * pd * sd)
        bend = keep * keep * bend + share * share * second(ps, ss, pw, soft)
    else:
        slope = 2.0 * pd * sd
    if bent:
        lin = 1.0 + lam * abs(v)
        slope = lin * slope + (lam if v >= 0.0 else -lam) * square
        square = lin * square
    g = hb * square + hs * v
    dg = hb * slope + hs
    if half_drain:
        g += hn * (v - bus)
        dg += hn
    d = 1.0 / (1.0 + w0 * dg)
    return d, v - d * (v + w0 * g + past), hb * bend


@cache
def lane_kernel(
    stages: int, lanes: int, soft: bool, bent: bool, half_drain: bool, frm: int, passes: int
) -> tuple[Any, int]:
    """Return the compiled fast loop and the length of its ``work``.

    Parameters
    ----------
    stages, lanes : int
        Compile-time sizes.
    soft, bent, half_drain : bool
        Whether the law has a knee, has lambda, and whether the half-drain network is there.
    frm : int
        The stage that feeds back, from 0; -1 for none.
    passes : int
        Newton passes per sample, 1 or 2.

    Notes
    -----
    ``tally[:, TOP]`` receives the highest output magnitude, ``tally[:, CHANGE]`` the
    largest correction of the last pass and ``tally[:, BUS]`` the furthest the gate went
    between evaluations of its side of the law. What a pass leaves behind goes as the square of
    its correction, so the caller can judge by them whether a lane must be done again.
    """
    S, L = stages, lanes
    SL = S * L
    # Offsets into the flat working memory: the state's rows come first, in their order.
    OQ, OG1, OG2, OG3, OV1, OV2, OV3, OV4 = (i * SL for i in range(STATES))
    OHIST, OU, OSRC, OV, OD, OALPHA, OP, OQQ, OBEND, OPD, OSD, OPS, OSS, OU0 = (
        i * SL for i in range(STATES, STATES + 14)
    )
    OVC, OHB, OLAM, OW, OPW = (i * SL for i in range(STATES + 14, STATES + 19))
    OX = (STATES + 19) * SL  # per lane: composed constant
    OY = OX + L  # per lane: composed factor of the fed-back output
    OF = OY + L  # per lane: fed-back output
    OCH = OF + L
    OTOP = OCH + L
    OGS, OGD, OLO, OHI = (OTOP + (i + 1) * L for i in range(4))
    OBUS = OHI + L
    OGATE = OBUS + L
    ODRIFT, OI1, OI2 = (OGATE + (i + 1) * L for i in range(3))
    SIZE = OI2 + L
    feedback = frm >= 0
    # The gate moves slowly: its side of the law is evaluated now and then, and carried on
    # by its second-order expansion in between. The caller's BUS_STEP_V bounds the step.
    carried = soft and passes == 1 and not half_drain

    @kernel(boundscheck=False)
    def run(
        x, gate, out, lane, stage, state, drift, into, leak, conduct, low, high, keep, work, tally
    ):
        for s in range(S):
            for j in range(L):
                i = s * L + j
                for k in range(STATES):
                    work[k * SL + i] = state[k, s, j]
                for k in range(5):
                    work[OVC + k * SL + i] = lane[k, s, j]
        for i in range(OCH, SIZE):
            work[i] = 0.0
        if half_drain:
            for j in range(L):
                for k in range(3):
                    work[ODRIFT + k * L + j] = drift[k, j]
        for n in range(x.shape[0]):
            for j in range(L):
                work[OGATE + j] = gate[n, j]
                if half_drain:
                    work[OGATE + j] += work[ODRIFT + j]
            # Start voltages, extrapolated; the law's two sides in loops of their own, short
            # enough for several lanes' chains of dependent steps to overlap.
            anchor = n % CARRY == 0
            for s in range(S):
                for j in range(L):
                    i = s * L + j
                    work[OU + i] = keep * work[OGATE + j] - work[OVC + i]
                    work[OV + i] = (
                        4.0 * (work[OV1 + i] + work[OV3 + i]) - 6.0 * work[OV2 + i] - work[OV4 + i]
                    )
            if carried:
                if anchor:
                    for i in range(SL):
                        u = work[OU + i]
                        p, q = positive(u, work[OW + i], work[OPW + i], soft)
                        work[OU0 + i] = u
                        work[OPS + i] = p
                        work[OSS + i] = q
                else:
                    for j in range(L):
                        work[OBUS + j] = max(work[OBUS + j], abs(work[OU + j] - work[OU0 + j]))
                for i in range(SL):
                    step = work[OU + i] - work[OU0 + i]
                    p, q = work[OPS + i], work[OSS + i]
                    curve = second(p, q, work[OPW + i], soft)
                    work[OSRC + i] = p * p + step * (2.0 * p * q + step * curve)
            elif not half_drain:
                for i in range(SL):
                    p, q = positive(work[OU + i], work[OW + i], work[OPW + i], soft)
                    work[OSRC + i] = p * p
            for turn in range(passes):
                if half_drain:
                    for i in range(SL):
                        u = work[OU + i] + (1.0 - keep) * work[OV + i]
                        p, q = positive(u, work[OW + i], work[OPW + i], soft)
                        work[OSRC + i] = p * p
                        work[OPS + i] = p
                        work[OSS + i] = q
                for i in range(SL):
                    u = work[OU + i] - keep * work[OV + i]
                    p, q = positive(u, work[OW + i], work[OPW + i], soft)
                    work[OPD + i] = p
                    work[OSD + i] = q
                for j in range(L):
                    work[OX + j] = x[n, j]
                    work[OY + j] = 0.0
                # Every stage as an affine map of its input, composed along the chain.
                for s in range(S):
                    hs, hn = stage[HSHUNT, s], stage[HNET, s]
                    a, b, c, w0 = stage[A, s], stage[B, s], stage[C, s], stage[W0, s]
                    w1, w2, w3 = stage[W1, s], stage[W2, s], stage[W3, s]
                    for j in range(L):
                        i = s * L + j
                        past = w1 * work[OG1 + i] + w2 * work[OG2 + i] + w3 * work[OG3 + i]
                        past += work[OQ + i]
                        d, alpha, bend = stage_map(
                            work[OV + i], work[OPD + i], work[OSD + i], work[OSRC + i],
                            work[OPS + i], work[OSS + i], past, work[OGATE + j], work[OHB + i],
                            work[OLAM + i], work[OPW + i], keep, hs, hn, w0, soft, bent, half_drain,
                        )  # fmt: skip
                        work[OHIST + i] = past
                        work[OD + i] = d
                        work[OALPHA + i] = alpha
                        work[OBEND + i] = bend
                        px = work[OX + j]
                        work[OP + i] = px
                        gain = a * d - b
                        work[OX + j] = gain * px + a * alpha
                        if feedback:
                            qx = work[OY + j]
                            work[OQQ + i] = qx
                            work[OY + j] = gain * qx - c
                    if s == frm:
                        for j in range(L):
                            work[OF + j] = work[OX + j] / (1.0 - work[OY + j])
                if turn < passes - 1:
                    for s in range(S):
                        for j in range(L):
                            i = s * L + j
                            xs = work[OP + i]
                            if feedback:
                                xs += work[OQQ + i] * work[OF + j]
                            work[OV + i] = work[OD + i] * xs + work[OALPHA + i]
            if feedback:
                for j in range(L):
                    work[OX + j] += work[OY + j] * work[OF + j]
            # Back into the stages, and the state moves on.
            for s in range(S):
                w0 = stage[W0, s]
                per_w0 = 1.0 / w0
                for j in range(L):
                    i = s * L + j
                    xs = work[OP + i]
                    if feedback:
                        xs += work[OQQ + i] * work[OF + j]
                    v = work[OD + i] * xs + work[OALPHA + i]
                    move = v - work[OV + i]
                    work[OCH + j] = max(work[OCH + j], abs(move))
                    if s > 0:
                        work[OTOP + j] = max(work[OTOP + j], abs(xs))
                    # The charge follows the law to second order about the start; what the
                    # pass left out there always has one sign and would add up.
                    past = work[OHIST + i]
                    g = (xs - v - past) * per_w0 + work[OBEND + i] * move * move
                    work[OG3 + i] = work[OG2 + i]
                    work[OG2 + i] = work[OG1 + i]
                    work[OG1 + i] = g
                    work[OQ + i] = past + w0 * g
                    work[OV4 + i] = work[OV3 + i]
                    work[OV3 + i] = work[OV2 + i]
                    work[OV2 + i] = work[OV1 + i]
                    work[OV1 + i] = v
            for j in range(L):
                work[OTOP + j] = max(work[OTOP + j], abs(work[OX + j]))
                out[n, j] = work[OX + j]
            if half_drain:
                # The bus is slow: the explicit third-order rule follows it.
                for j in range(L):
                    total = 0.0
                    for s in range(S):
                        total += work[OV1 + s * L + j]
                    step = into * total - leak * work[ODRIFT + j]
                    work[ODRIFT + j] += (
                        23.0 * step - 16.0 * work[OI1 + j] + 5.0 * work[OI2 + j]
                    ) / 12.0
                    work[OI2 + j] = work[OI1 + j]
                    work[OI1 + j] = step
            if n % COUNT_EVERY == 0:
                for s in range(S):
                    for j in range(L):
                        v = work[OV1 + s * L + j]
                        own = keep * work[OGATE + j] + (1.0 - keep) * v
                        work[OGS + j] += 1.0 if own > conduct else 0.0
                        work[OGD + j] += 1.0 if own - v > conduct else 0.0
                        work[OLO + j] += 1.0 if v < low else 0.0
                        work[OHI + j] += 1.0 if v > high else 0.0
        for s in range(S):
            for j in range(L):
                i = s * L + j
                for k in range(STATES):
                    state[k, s, j] = work[k * SL + i]
        if half_drain:
            for j in range(L):
                for k in range(3):
                    drift[k, j] = work[ODRIFT + k * L + j]
        for j in range(L):
            tally[j, GATE_SOURCE] += COUNT_EVERY * work[OGS + j]
            tally[j, GATE_DRAIN] += COUNT_EVERY * work[OGD + j]
            tally[j, LOW_INPUT] += COUNT_EVERY * work[OLO + j]
            tally[j, HIGH_INPUT] += COUNT_EVERY * work[OHI + j]
            tally[j, TOP] = max(tally[j, TOP], work[OTOP + j])
            tally[j, CHANGE] = max(tally[j, CHANGE], work[OCH + j])
            tally[j, BUS] = max(tally[j, BUS], work[OBUS + j])

    return run, SIZE


@kernel(boundscheck=False)
def chain(start, fed, d, alpha, stage, S, frm, rail_low, rail_high, v, xs, ys):
    """Walk the linearised chain with clamped outputs; return the feeding stage's output."""
    x = start
    back = 0.0
    for s in range(S):
        xs[s] = x
        v[s] = d[s] * x + alpha[s]
        y = stage[A, s] * v[s] - stage[B, s] * x - stage[C, s] * fed
        y = min(max(y, rail_low), rail_high)
        ys[s] = y
        if s == frm:
            back = y
        x = y
    return back


@cache
def careful_kernel(soft: bool, half_drain: bool) -> Any:
    """Return the compiled scalar loop: rails obeyed, every step taken to convergence.

    It works on one lane of the same arrays. Each Newton pass linearises the
    stages, then finds the fed-back output with the rails in force: the chain's
    output is a bounded, piecewise linear function of it, so a fixed point lies
    between the rails and bisection finds it. ``tally[RAIL]`` counts samples with an
    output at a rail, ``tally[STUCK]`` samples whose passes did not settle.
    """
    most_passes = 40
    settled_v = 1e-11

    @kernel(boundscheck=False)
    def run(
        x,
        gate,
        out,
        lane,
        stage,
        state,
        drift,
        into,
        leak,
        conduct,
        low,
        high,
        keep,
        j,
        frm,
        rail_low,
        rail_high,
        tally,
    ):
        S = stage.shape[1]
        hist, v, d, alpha, new, xs, ys = (
            np.zeros(S),
            np.zeros(S),
            np.zeros(S),
            np.zeros(S),
            np.zeros(S),
            np.zeros(S),
            np.zeros(S),
        )
        fed = 0.0
        for n in range(x.shape[0]):
            bus = gate[n, j]
            if half_drain:
                bus += drift[0, j]
            for s in range(S):
                hist[s] = (
                    state[Q1, s, j]
                    + stage[W1, s] * state[G1, s, j]
                    + stage[W2, s] * state[G2, s, j]
                    + stage[W3, s] * state[G3, s, j]
                )
                v[s] = (
                    4.0 * (state[V1, s, j] + state[V3, s, j])
                    - 6.0 * state[V2, s, j]
                    - state[V4, s, j]
                )
            done = False
            for turn in range(most_passes):
                for s in range(S):
                    u = keep * bus - lane[VC, s, j]
                    w, pw = lane[KNEE, s, j], lane[PER_KNEE, s, j]
                    ps, ss = positive(u + (1.0 - keep) * v[s], w, pw, soft)
                    pd, sd = positive(u - keep * v[s], w, pw, soft)
                    d[s], alpha[s], _ = stage_map(
                        v[s], pd, sd, ps * ps, ps, ss, hist[s], bus, lane[HBETA, s, j],
                        lane[LAMBDA, s, j], pw, keep, stage[HSHUNT, s], stage[HNET, s],
                        stage[W0, s], soft, True, half_drain,
                    )  # fmt: skip
                if frm >= 0:
                    a0, b0 = rail_low, rail_high
                    miss = (
                        chain(
                            x[n, j], fed, d, alpha, stage, S, frm, rail_low, rail_high, new, xs, ys
                        )
                        - fed
                    )
                    # The chain is affine where nothing clips: one secant step then lands on it.
                    probe = fed + 1e-3
                    step = (
                        chain(
                            x[n, j],
                            probe,
                            d,
                            alpha,
                            stage,
                            S,
                            frm,
                            rail_low,
                            rail_high,
                            new,
                            xs,
                            ys,
                        )
                        - probe
                    )
                    if step != miss:
                        fed = fed - miss * 1e-3 / (step - miss)
                    fed = min(max(fed, rail_low), rail_high)
                    miss = (
                        chain(
                            x[n, j], fed, d, alpha, stage, S, frm, rail_low, rail_high, new, xs, ys
                        )
                        - fed
                    )
                    if abs(miss) > 1e-13:
                        for _ in range(80):
                            fed = 0.5 * (a0 + b0)
                            miss = (
                                chain(
                                    x[n, j],
                                    fed,
                                    d,
                                    alpha,
                                    stage,
                                    S,
                                    frm,
                                    rail_low,
                                    rail_high,
                                    new,
                                    xs,
                                    ys,
                                )
                                - fed
                            )
                            if miss > 0.0:
                                a0 = fed
                            else:
                                b0 = fed
                            if abs(miss) < 1e-15 or b0 - a0 < 1e-15:
                                break
                else:
                    chain(x[n, j], 0.0, d, alpha, stage, S, frm, rail_low, rail_high, new, xs, ys)
                change = 0.0
                for s in range(S):
                    move = new[s] - v[s]
                    change = max(change, abs(move))
                    # After many passes a cycle between two kinks is likely: take half steps.
                    v[s] += move if turn < 12 else 0.5 * move
                if change < settled_v:
                    done = True
                    break
            clipped = False
            total = 0.0
            for s in range(S):
                if ys[s] <= rail_low or ys[s] >= rail_high:
                    clipped = True
                q = xs[s] - v[s]
                state[G3, s, j] = state[G2, s, j]
                state[G2, s, j] = state[G1, s, j]
                state[G1, s, j] = (q - hist[s]) / stage[W0, s]
                state[Q1, s, j] = q
                state[V4, s, j] = state[V3, s, j]
                state[V3, s, j] = state[V2, s, j]
                state[V2, s, j] = state[V1, s, j]
                state[V1, s, j] = v[s]
                total += v[s]
                if n % COUNT_EVERY == 0:
                    own = keep * bus + (1.0 - keep) * v[s]
                    tally[j, GATE_SOURCE] += COUNT_EVERY if own > conduct else 0.0
                    tally[j, GATE_DRAIN] += COUNT_EVERY if own - v[s] > conduct else 0.0
                    tally[j, LOW_INPUT] += COUNT_EVERY if v[s] < low else 0.0
                    tally[j, HIGH_INPUT] += COUNT_EVERY if v[s] > high else 0.0
            if half_drain:
                step = into * total - leak * drift[0, j]
                drift[0, j] += (23.0 * step - 16.0 * drift[1, j] + 5.0 * drift[2, j]) / 12.0
                drift[2, j] = drift[1, j]
                drift[1, j] = step
            tally[j, RAIL] += 1.0 if clipped else 0.0
            tally[j, STUCK] += 0.0 if done else 1.0
            out[n, j] = ys[S - 1]

    return run
