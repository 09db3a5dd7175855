"""Integration rules for the capacitors, and the proof that a circuit may use them.

A stage's capacitor voltage ``q`` obeys ``dq/dt = (i(v) + v/Rp)/C``; a linear
multistep rule replaces it by ``q_n = q_(n-1) + w0 G_n + w1 G_(n-1) + w2 G_(n-2) + w3 G_(n-3)``
with ``G = h dq/dt``. The Adams-Moulton rules of third and fourth order are far more
exact than the trapezoidal rule at the same cost, but bounded: on the real axis step
times rate must stay below 6 and 3. With a feedback loop the poles are complex, so
the whole recursion's spectral radius is computed for the circuit at hand.

References
----------
E. Hairer, S. P. Norsett and G. Wanner, "Solving Ordinary Differential Equations I",
2nd ed., Springer 1993, section III.1 (implicit Adams methods); citation from memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..models.circuit import Circuit

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Rule:
    """One integration rule.

    Parameters
    ----------
    name : str
        Name for records.
    order : int
        Order of convergence.
    weights : tuple of float
        ``w0..w3``, newest first.
    real_limit : float
        Bound of step times rate on the real axis.
    """

    name: str
    order: int
    weights: tuple[float, float, float, float]
    real_limit: float


TRAPEZOIDAL = Rule("trapezoidal", 2, (1 / 2, 1 / 2, 0.0, 0.0), np.inf)
ADAMS_3 = Rule("Adams-Moulton 3", 3, (5 / 12, 8 / 12, -1 / 12, 0.0), 6.0)
ADAMS_4 = Rule("Adams-Moulton 4", 4, (9 / 24, 19 / 24, -5 / 24, 1 / 24), 3.0)
RULES = (ADAMS_4, ADAMS_3, TRAPEZOIDAL)

# Distance kept from a rule's own bound; the feedback and the moving gate need room.
REAL_MARGIN = 0.8


def weight_table(rules: tuple[Rule, ...]) -> Array:
    """Return the weights as (4, stages)."""
    return np.array([rule.weights for rule in rules]).T.copy()


def rules_by_rate(step_rates: Array, best: Rule = ADAMS_4) -> tuple[Rule, ...]:
    """Return, stage by stage, the highest order that a stage alone may use.

    Parameters
    ----------
    step_rates : ndarray
        Step times the stage's greatest rate ``h g/C``, shape (stages,).
    best : Rule
        No higher order than this one's is used.
    """
    allowed = [rule for rule in RULES if rule.order <= best.order]
    return tuple(
        next(rule for rule in allowed if rate < REAL_MARGIN * rule.real_limit)
        for rate in step_rates
    )


def stage_maps(circuit: Circuit) -> Array:
    """Return ``T`` with ``v = T q`` for zero input: plus-input from capacitor voltages.

    Shape (stages, stages). From ``v = x - q``, ``x_1 = 0`` and
    ``x_(s+1) = a v_s - b x_s - c y_feedback``.

    Raises
    ------
    numpy.linalg.LinAlgError
        If the loop of ideal op amps has no solution.
    """
    count = circuit.stage_count
    # Unknown x (count + 1 entries, the last is the output): M x = N q
    M = np.eye(count + 1)
    N = np.zeros((count + 1, count))
    for s in range(count):
        a, b, c = circuit.arm_gains(s)
        M[s + 1, s] -= a - b
        N[s + 1, s] = -a
        if c and circuit.feedback is not None:
            M[s + 1, circuit.feedback.from_stage] += c
    x = np.linalg.solve(M, N)
    return x[:count] - np.eye(count)


def step_matrices(circuit: Circuit, rules: tuple[Rule, ...], step_rates: Array) -> Array:
    """Return the recursion's matrix for channels held still, over ``q1, G1, G2, G3``.

    Parameters
    ----------
    circuit : Circuit
        Gives arms and feedback.
    rules : tuple of Rule
        One per stage.
    step_rates : ndarray
        ``h g/C`` with all conductance at each plus input, shape (cases, stages).

    Returns
    -------
    ndarray
        Shape (cases, 4 stages, 4 stages).
    """
    count = circuit.stage_count
    T = stage_maps(circuit)
    w0, w1, w2, w3 = weight_table(rules)
    matrices = np.zeros((len(step_rates), 4 * count, 4 * count))
    eye = np.eye(count)
    for case, rates in enumerate(step_rates):
        KT = rates[:, None] * T
        front = np.linalg.inv(eye - w0[:, None] * KT)
        q_row = np.hstack([front, front * w1, front * w2, front * w3])
        matrices[case, :count] = q_row
        matrices[case, count : 2 * count] = KT @ q_row
        matrices[case, 2 * count : 3 * count, count : 2 * count] = eye
        matrices[case, 3 * count :, 2 * count : 3 * count] = eye
    return matrices


def spectral_radius(matrices: Array) -> float:
    """Return the greatest spectral radius of step matrices; below 1 the recursion forgets."""
    return float(np.abs(np.linalg.eigvals(matrices)).max())


def steps_to_forget(matrix: Array, share: float) -> int | None:
    """Return after how many steps any state has fallen to `share`, in the 2-norm.

    None if it does not within 2^24 steps. Found by squaring the matrix and then
    bisecting over binary digits, so nearly equal poles and loops are counted in full.
    """
    powers = [matrix]
    while np.linalg.norm(powers[-1], 2) > share:
        if len(powers) > 24:
            return None
        powers.append(powers[-1] @ powers[-1])
    steps, done = 0, np.eye(len(matrix))
    for exponent in range(len(powers) - 2, -1, -1):
        longer = done @ powers[exponent]
        if np.linalg.norm(longer, 2) > share:
            done, steps = longer, steps + 2**exponent
    return steps + 1
