"""The maximum a posteriori of a person, found by Levenberg-Marquardt, and how well it is known."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_factor, cho_solve

from condyle.solver.person_problem import PersonProblem, PersonState

FloatArray = NDArray[np.float64]

TOLERANCE, TOLERANCE_MOVING = 1e-7, 0.001
"""Finished when sqrt(2 predicted gain) is below: what is left to move, in standard deviations. With movement the
approach is slow at the end (coordinates come to their limits and leave them), and a thousandth is enough."""
MOST_ROUNDS = 100
FIRST_DAMPING, LEAST_DAMPING, MOST_DAMPING = 1e-4, 1e-12, 1e10
ROUNDING = 1e-12
"""Relative rounding of the cost."""


@dataclass(frozen=True, slots=True)
class PersonEstimate:
    """A minimum.

    Attributes
    ----------
    problem : PersonProblem
    state : PersonState
    covariance : (common, common)
        Of person and skin together.
    cost : float
    rounds : int
    converged : bool
    """

    problem: PersonProblem
    state: PersonState
    covariance: FloatArray
    cost: float
    rounds: int
    converged: bool


def estimate_person(problem: PersonProblem, state: PersonState) -> PersonEstimate:
    """The minimum from a start, with its covariance (Laplace: the inverse of the information there)."""
    moving = bool((~problem.standing).any())
    state, rounds, converged = minimise_person(
        problem, state, tolerance=TOLERANCE_MOVING if moving else TOLERANCE
    )
    information = problem.eliminated(state).information
    size = len(information)
    scale = 1 / np.sqrt(np.diag(information))
    factor = cho_factor(information * scale * scale[:, None])
    covariance = cho_solve(factor, np.eye(size)) * scale * scale[:, None]
    return PersonEstimate(problem, state, covariance, problem.cost(state), rounds, converged)


def minimise_person(
    problem: PersonProblem, state: PersonState, *, tolerance: float
) -> tuple[PersonState, int, bool]:
    """The minimum from a start; rounds taken; whether it is one."""
    damping, cost = FIRST_DAMPING, problem.cost(state)
    count = problem.functions.layout.size
    for rounds in range(1, MOST_ROUNDS + 1):
        while True:
            equations = problem.eliminated(state, damping)
            scale = 1 / np.sqrt(np.diag(equations.information))
            factor = cho_factor(equations.information * scale * scale[:, None])
            common = scale * cho_solve(factor, scale * equations.gradient)
            steps = equations.steps(common, problem.skin, count)
            gain = equations.gain(common, steps)
            if gain <= tolerance**2 / 2:
                return state, rounds, True
            found = state.after(common, steps)
            found = replace(found, posture=problem.bounds.inside(found.posture))
            found = problem.settled(found)
            reached = problem.cost(found)
            if reached <= cost * (1 + ROUNDING):
                break
            damping *= 10
            if damping > MOST_DAMPING:
                return state, rounds, False
        state, cost = found, reached
        damping = max(damping / 10, LEAST_DAMPING)
    return state, MOST_ROUNDS, False
